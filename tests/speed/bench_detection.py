"""Good units that pass and planted faults that are found: a table, with the misses named.

Run from the repository's root: ``python tests/speed/bench_detection.py [--draws 5] [--output docs/detection.md]``. A unit
takes about half a second on two cores.
"""

from __future__ import annotations

import argparse
import sys
from collections import Counter
from collections.abc import Sequence
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
_FIRST_WEEK = 2651
sys.path.insert(0, str(ROOT))


def main(argv: Sequence[str] | None = None) -> int:
    """Test good units and one unit a fault; print the table."""
    from fixture.domain.run import RunResult
    from fixture.domain.verdict import Verdict
    from fixture.lots.pool import try_units
    from fixture.lots.trial import Trial
    from fixture.modelfile import find_model
    from tests.endtoend.peat_faults import PEAT_FAULTS

    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--good", type=int, default=50, help="good serials that were not used for the limits")
    parser.add_argument("--draws", type=int, default=1, help="units a fault")
    parser.add_argument("--jobs", type=int, default=2)
    parser.add_argument("--output", type=Path)
    arguments = parser.parse_args(argv)
    model = find_model(ROOT, "peat")

    good = [Trial(f"PT-2650-{number:04d}") for number in range(1, arguments.good + 1)]
    faulty = {
        Trial(f"PT-{_FIRST_WEEK + draw}-{n:04d}", words): fault
        for draw in range(arguments.draws)
        for n, (fault, words) in enumerate(PEAT_FAULTS, start=1)
    }
    results: dict[Trial, RunResult] = dict(try_units(ROOT, "peat", [*good, *faulty], jobs=arguments.jobs))

    passed = Counter(results[trial].verdict.value for trial in good)
    lines = [
        "# Detection: Peat on the simulated bench",
        "",
        f"Limits revision {model.revision.number} ({model.revision.basis}), digest {model.digest[:16]}. "
        f"Made by `tests/speed/bench_detection.py`; serials PT-2650-nnnn (good) and from PT-{_FIRST_WEEK}-0001 (one fault "
        f"each, {arguments.draws} units a fault).",
        "",
        f"Good units outside the draws of the limits: {arguments.good}; "
        + ", ".join(f"{count} {verdict}" for verdict, count in sorted(passed.items()))
        + ".",
        "",
    ]
    for trial in good:
        for judged in results[trial].readings:
            if judged.verdict is not Verdict.PASS:
                lines.append(f"- {trial.serial}: {judged.step}: {judged.said}")
    found = Counter(results[trial].verdict.value for trial in faulty)
    lines += [
        "",
        f"Faulty units: {len(faulty)}; "
        + ", ".join(f"{count} {verdict}" for verdict, count in sorted(found.items()))
        + ".",
        "A PASS here is a miss: supply current, node voltages, gain and response on a stiff supply cannot see everything.",
        "",
        "| fault | planted as | found | missed | not measured | readings that failed (share of the units) |",
        "|---|---|---|---|---|---|",
    ]
    for fault, words in PEAT_FAULTS:
        mine = [results[trial] for trial in faulty if trial.plant == words]
        verdicts = Counter(result.verdict for result in mine)
        failed = Counter(
            f"{judged.step}: {judged.reading.name}"
            for result in mine
            for judged in result.readings
            if judged.verdict is Verdict.FAIL
        )
        seen = "; ".join(
            name if count == len(mine) else f"{name} ({count / len(mine):.0%})"
            for name, count in failed.most_common()
        )
        lines.append(
            f"| {fault} | {', '.join(words)} | {verdicts[Verdict.FAIL]} | {verdicts[Verdict.PASS]} | "
            f"{verdicts[Verdict.NOT_MEASURED]} | {seen} |"
        )
    text = "\n".join(lines) + "\n"
    print(text)
    if arguments.output:
        arguments.output.write_text(text, encoding="utf-8")
    return 0


if __name__ == "__main__":
    sys.exit(main())
