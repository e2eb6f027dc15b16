"""Good units that pass and planted faults that are found: a table, with the misses named.

Run from the repository's root: ``python tests/speed/bench_detection.py [--output docs/detection.md]``.
"""

from __future__ import annotations

import argparse
import sys
from collections import Counter
from collections.abc import Sequence
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
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
    parser.add_argument("--jobs", type=int, default=2)
    parser.add_argument("--output", type=Path)
    arguments = parser.parse_args(argv)
    model = find_model(ROOT, "peat")

    good = [Trial(f"PT-2650-{number:04d}") for number in range(1, arguments.good + 1)]
    faulty = {
        Trial(f"PT-2651-{n:04d}", words): fault for n, (fault, words) in enumerate(PEAT_FAULTS, start=1)
    }
    results: dict[Trial, RunResult] = dict(try_units(ROOT, "peat", [*good, *faulty], jobs=arguments.jobs))

    passed = Counter(results[trial].verdict.value for trial in good)
    lines = [
        "# Detection: Peat on the simulated bench",
        "",
        f"Limits revision {model.revision.number} ({model.revision.basis}), digest {model.digest[:16]}. "
        f"Made by `tests/speed/bench_detection.py`; serials PT-2650-nnnn (good) and PT-2651-nnnn (one fault each).",
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
        f"Faults: {len(faulty)}; "
        + ", ".join(f"{count} {verdict}" for verdict, count in sorted(found.items()))
        + ".",
        "A PASS here is a miss: supply current, node voltages, gain and response on a stiff supply cannot see everything.",
        "",
        "| fault | planted as | verdict | readings that failed |",
        "|---|---|---|---|",
    ]
    for trial, fault in faulty.items():
        result = results[trial]
        failed = [f"{j.step}: {j.reading.name}" for j in result.readings if j.verdict is Verdict.FAIL]
        lines.append(f"| {fault} | {', '.join(trial.plant)} | {result.verdict.value} | {'; '.join(failed)} |")
    text = "\n".join(lines) + "\n"
    print(text)
    if arguments.output:
        arguments.output.write_text(text, encoding="utf-8")
    return 0


if __name__ == "__main__":
    sys.exit(main())
