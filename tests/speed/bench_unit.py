"""One unit through the whole chain: how long it takes here against the bench time it covers.

Run from the repository's root: ``python tests/speed/bench_unit.py [--output docs/unit.md]``. The first unit of the process
loads the compiled kernels from the cache and is counted apart; ``--cold`` also times a process with an empty cache.
"""

from __future__ import annotations

import argparse
import os
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Sequence
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT))


def main(argv: Sequence[str] | None = None) -> int:
    """Time units one by one and print a small table."""
    from fixture.domain.run import RunResult
    from fixture.lots.trial import Trial, try_unit

    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--units", type=int, default=9)
    parser.add_argument("--cold", action="store_true", help="also time a process with an empty kernel cache")
    parser.add_argument("--output", type=Path)
    arguments = parser.parse_args(argv)

    def timed(serial: str) -> tuple[float, RunResult]:
        start = time.perf_counter()
        result = try_unit(ROOT, "peat", Trial(serial))
        return time.perf_counter() - start, result

    first_s, _ = timed("PT-2652-0000")
    runs = [timed(f"PT-2652-{number:04d}") for number in range(1, arguments.units + 1)]
    wall_s = statistics.median(wall for wall, _ in runs)
    bench_s = statistics.median(result.elapsed_s for _, result in runs)
    lines = [
        "# One unit of Peat through the whole chain",
        "",
        "| | |",
        "|---|---|",
        f"| first unit of a process, kernels from the cache, with imports | {first_s:.2f} s |",
        f"| one unit, warm, without imports (median of {len(runs)}) | {wall_s:.3f} s |",
        f"| bench time that it covers | {bench_s:.1f} s |",
        f"| ratio, times real time | {bench_s / wall_s:.0f} |",
    ]
    if arguments.cold:
        with tempfile.TemporaryDirectory() as cache:
            start = time.perf_counter()
            subprocess.run(
                [sys.executable, __file__, "--units", "1"],
                env={**os.environ, "TOELINE_CACHE": cache},
                check=True,
                capture_output=True,
            )
            lines.append(
                f"| two units in a new process with an empty kernel cache | {time.perf_counter() - start:.1f} s |"
            )
    text = "\n".join(lines) + "\n"
    print(text)
    if arguments.output:
        arguments.output.write_text(text, encoding="utf-8")
    return 0


if __name__ == "__main__":
    sys.exit(main())
