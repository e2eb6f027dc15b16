"""A lot in parallel: wall time, units per core second and memory, against one by one, and with a worker killed.

Run from the repository's root: ``python tests/speed/bench_lot.py [--units 200] [--quick] [--output docs/lot.md]``.
"""

from __future__ import annotations

import argparse
import multiprocessing
import os
import resource
import signal
import sys
import time
from collections.abc import Sequence
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT))


def main(argv: Sequence[str] | None = None) -> int:
    """Test the same units three ways and print a small table."""
    from fixture.lots.pool import try_units
    from fixture.lots.trial import Trial, try_unit

    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--units", type=int, default=200)
    parser.add_argument("--jobs", type=int, default=os.cpu_count() or 1)
    parser.add_argument("--quick", action="store_true", help="twenty units")
    parser.add_argument("--output", type=Path)
    arguments = parser.parse_args(argv)
    count, jobs = (20 if arguments.quick else arguments.units), arguments.jobs
    trials = [Trial(f"PT-9900-{number:04d}") for number in range(1, count + 1)]

    def values(result: object) -> tuple[float | None, ...]:
        return tuple(judged.reading.value for judged in result.readings)  # type: ignore[attr-defined]

    def in_parallel(kill_after: int | None = None) -> tuple[float, dict[Trial, tuple[float | None, ...]]]:
        found: dict[Trial, tuple[float | None, ...]] = {}
        begun_s = time.perf_counter()
        for trial, result in try_units(ROOT, "peat", trials, jobs=jobs):
            assert trial not in found
            found[trial] = values(result)
            if len(found) == kill_after:
                os.kill(multiprocessing.active_children()[0].pid or 0, signal.SIGKILL)
        return time.perf_counter() - begun_s, found

    parallel_s, parallel = in_parallel()
    killed_s, killed = in_parallel(kill_after=count // 2)
    try_unit(ROOT, "peat", Trial("PT-9901-0001"))
    begun_s = time.perf_counter()
    alone = {trial: values(try_unit(ROOT, "peat", trial)) for trial in trials}
    alone_s = time.perf_counter() - begun_s
    kib = [resource.getrusage(who).ru_maxrss for who in (resource.RUSAGE_SELF, resource.RUSAGE_CHILDREN)]
    lines = [
        "# A lot of Peat in parallel",
        "",
        f"Made by `tests/speed/bench_lot.py`: {count} units, {jobs} processes.",
        "",
        "| | |",
        "|---|---|",
        f"| one by one, in one warm process | {alone_s:.1f} s, {count / alone_s:.2f} units a core second |",
        f"| in parallel, start of the processes included | {parallel_s:.1f} s, "
        f"{count / parallel_s / jobs:.2f} units a core second |",
        f"| times as fast as one by one | {alone_s / parallel_s:.2f} |",
        f"| with a process killed half-way | {killed_s:.1f} s |",
        f"| largest process: parent, worker | {kib[0] / 1024:.0f} MB, {kib[1] / 1024:.0f} MB |",
        f"| readings that differ between the three ways | {sum(parallel[t] != alone[t] for t in trials)}, "
        f"{sum(killed[t] != alone[t] for t in trials)} |",
    ]
    text = "\n".join(lines) + "\n"
    print(text)
    if arguments.output:
        arguments.output.write_text(text, encoding="utf-8")
    return 0


if __name__ == "__main__":
    sys.exit(main())
