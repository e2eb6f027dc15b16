"""Tolerance factors and order statistics against published tables and independent computations."""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
import pytest
from scipy import stats

from fixture.quality.tolerance_interval import (
    OrderInterval,
    one_sided_factor,
    order_interval,
    order_size,
    two_sided_factor,
)

TABLE = Path(__file__).parents[1] / "reference" / "tolerance_k.csv"


def rows() -> list[dict[str, str]]:
    with TABLE.open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(line for line in file if not line.startswith("#")))


@pytest.mark.parametrize("row", rows(), ids=lambda row: f"n{row['n']}-{row['coverage']}-{row['confidence']}")
def test_factors_are_those_of_the_table(row: dict[str, str]) -> None:
    given = int(row["n"]), float(row["coverage"]), float(row["confidence"])
    assert two_sided_factor(*given) == pytest.approx(float(row["k2_exact"]), abs=6e-6)  # its last digit
    assert one_sided_factor(*given) == pytest.approx(float(row["k1_nct"]), abs=6e-6)


def test_the_worked_example_of_the_handbook() -> None:
    # NIST/SEMATECH e-Handbook 7.2.6.3: n = 43, p = 0.90, 99 %: Howe's approximation 2.217; one-sided, non-central t 1.8740
    assert two_sided_factor(43, 0.90, 0.99) == pytest.approx(2.217, rel=0.003)
    assert one_sided_factor(43, 0.90, 0.99) == pytest.approx(1.8740, abs=5e-5)
    # National Research Council table, one-sided 95/95 with n = 50
    assert one_sided_factor(50, 0.95, 0.95) == pytest.approx(2.065, abs=5e-4)


def test_a_factor_holds_what_it_states() -> None:
    # Monte Carlo: the true coverage of mean +- k s, 20 000 samples; 4 standard errors of the share
    rng = np.random.default_rng(5)
    samples = rng.normal(size=(20_000, 12))
    k = two_sided_factor(12, 0.9, 0.95)
    mean, sigma = samples.mean(axis=1), samples.std(axis=1, ddof=1)
    held = stats.norm.cdf(mean + k * sigma) - stats.norm.cdf(mean - k * sigma)
    assert np.mean(held >= 0.9) == pytest.approx(0.95, abs=4 * np.sqrt(0.95 * 0.05 / 20_000))


def test_far_coverages_and_large_samples_stay_exact() -> None:
    # as n grows k tends to the normal quantile; at p = 0.99999 that is 4.4172
    assert two_sided_factor(10**7, 0.99999, 0.95) == pytest.approx(float(stats.norm.ppf(0.999995)), rel=1e-3)
    assert (
        two_sided_factor(30, 0.9999, 0.95)
        > two_sided_factor(30, 0.999, 0.95)
        > two_sided_factor(300, 0.999, 0.95)
    )


@pytest.mark.parametrize(
    # Wilks 1941 as printed in the NIST/SEMATECH e-Handbook 7.2.6.4 (46 and 473) and common tables
    ("coverage", "confidence", "size"),
    [(0.90, 0.95, 46), (0.95, 0.95, 93), (0.99, 0.95, 473)],
)
def test_so_many_values_it_takes_from_smallest_to_largest(
    coverage: float, confidence: float, size: int
) -> None:
    assert order_size(coverage, confidence) == size
    assert order_interval(size, coverage, confidence) == OrderInterval(1, coverage)
    assert order_interval(size - 1, coverage, confidence).coverage < coverage


@pytest.mark.parametrize(
    # NIST/SEMATECH e-Handbook 7.2.6.4: confidence of the range of 25 values
    ("coverage", "confidence"),
    [(0.75, 0.993), (0.90, 0.729), (0.95, 0.358), (0.975, 0.129), (0.99, 0.026), (0.995, 0.007)],
)
def test_the_range_of_25_values(coverage: float, confidence: float) -> None:
    assert order_interval(25, 0.5, confidence).rank >= 1
    low, high = confidence - 5e-4, confidence + 5e-4
    assert order_interval(25, 0.99999, low).coverage > coverage - 2e-3
    assert order_interval(25, 0.99999, high).coverage < coverage + 2e-3


def test_inner_order_statistics_are_taken_where_they_will_do() -> None:
    # 1.7.5 of the tables: 95/95 with one value left out on each side needs 181 values (binomial by hand)
    assert order_interval(200, 0.95, 0.95).rank == 2
    below = stats.binom.cdf(200 - 2 * 2, 200, 0.95)  # the same by the binomial distribution
    assert below >= 0.95


@pytest.mark.parametrize(("size", "coverage", "confidence"), [(1, 0.9, 0.9), (10, 1.0, 0.9), (10, 0.9, 0.0)])
def test_what_is_no_question_is_refused(size: int, coverage: float, confidence: float) -> None:
    for function in (two_sided_factor, one_sided_factor, order_interval):
        with pytest.raises(ValueError, match=r"too few|between 0 and 1"):
            function(size, coverage, confidence)
