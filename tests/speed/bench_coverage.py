"""Whether tolerance intervals keep their promise: the share of repeats that hold the stated coverage.

Run from the repository's root: ``python tests/speed/bench_coverage.py [--quick] [--output docs/coverage.md]``. Samples are
drawn from known populations; each goes the whole way, outliers and shape included, and the interval's true coverage of
the good population is computed, not sampled.
"""

from __future__ import annotations

import argparse
import sys
from collections import Counter
from collections.abc import Callable, Sequence
from pathlib import Path

import numpy as np

ROOT = Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT))

SIZES = (10, 20, 50, 200)
CONFIDENCE = 0.95


def main(argv: Sequence[str] | None = None) -> int:
    """Draw, fit, and print a table."""
    from scipy.stats import lognorm, norm, uniform

    from fixture.quality.distribution import describe
    from fixture.quality.tuning import interval_of

    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--repeats", type=int, default=1000)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--quick", action="store_true", help="a hundred repeats")
    parser.add_argument("--output", type=Path)
    arguments = parser.parse_args(argv)
    repeats = 100 if arguments.quick else arguments.repeats
    skewed = lognorm(0.35)
    populations: dict[
        str, tuple[Callable[[np.random.Generator, int], np.ndarray], Callable[[float, float], float]]
    ] = {
        "normal": (lambda rng, n: rng.normal(size=n), lambda a, b: norm.cdf(b) - norm.cdf(a)),
        "lognormal, sigma 0.35": (
            lambda rng, n: skewed.rvs(n, random_state=rng),
            lambda a, b: skewed.cdf(b) - skewed.cdf(a),
        ),
        "the same, negative": (
            lambda rng, n: -skewed.rvs(n, random_state=rng),
            lambda a, b: skewed.cdf(-a) - skewed.cdf(-b),
        ),
        "uniform": (lambda rng, n: rng.uniform(size=n), lambda a, b: uniform.cdf(b) - uniform.cdf(a)),
        "normal, 5 % at 8 sigma": (
            lambda rng, n: _with_outliers(rng, n),
            lambda a, b: norm.cdf(b) - norm.cdf(a),
        ),
    }
    lines = [
        "# Coverage of tolerance intervals",
        "",
        f"Made by `tests/speed/bench_coverage.py`, seed {arguments.seed}: {repeats} samples a cell. Each is searched for "
        "outliers, its shape is told, and an interval is made that is to hold the asked share of the good population "
        f"with {CONFIDENCE:.0%} confidence. *Kept* is the share of intervals that hold what they state. Where the shape is "
        "not known, the interval runs from smallest to largest value and states the coverage that those have.",
        "",
        "| population | n | asked | kept | median true coverage | shapes told |",
        "|---|---|---|---|---|---|",
    ]
    for name, (draw, share) in populations.items():
        for size in SIZES:
            for asked in (0.95, 0.9998):
                rng = np.random.default_rng([arguments.seed, size, int(asked * 1e4)])
                kept, true, shapes = 0, [], Counter()
                for _ in range(repeats):
                    try:
                        found = describe(draw(rng, size))
                    except ValueError:  # too few values are left without outliers
                        shapes["refused"] += 1
                        continue
                    shapes[found.shape] += 1
                    low, high, stated, _ = interval_of(found, asked, CONFIDENCE)
                    true.append(share(low, high))
                    kept += true[-1] >= stated
                told = ", ".join(f"{shape} {count / repeats:.0%}" for shape, count in shapes.most_common())
                lines.append(
                    f"| {name} | {size} | {asked:.2%} | {kept / len(true):.1%} | {np.median(true):.4%} | {told} |"
                )
    text = "\n".join(lines) + "\n"
    print(text)
    if arguments.output:
        arguments.output.write_text(text, encoding="utf-8")
    return 0


def _with_outliers(rng: np.random.Generator, size: int) -> np.ndarray:
    sample = rng.normal(size=size)
    wrong = rng.uniform(size=size) < 0.05
    return np.where(wrong, sample + rng.choice([-8.0, 8.0], size=size), sample)


if __name__ == "__main__":
    sys.exit(main())
