"""Shapes and outliers of samples whose population is known."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fixture.quality.distribution import LEAST_VALUES, Scale, describe, find_outliers


def shapes(draw: object, repeats: int = 200) -> dict[str, float]:
    rng = np.random.default_rng(11)
    found = [describe(draw(rng)).shape for _ in range(repeats)]  # type: ignore[operator]
    return {shape: found.count(shape) / repeats for shape in set(found)}


def test_shapes_are_told_for_samples_of_two_hundred() -> None:
    # the test for normality has a level of 5 %
    assert shapes(lambda rng: rng.normal(3.0, 0.1, 200))["normal"] > 0.9
    assert shapes(lambda rng: rng.lognormal(0.0, 0.5, 200))["skewed"] > 0.9
    assert shapes(lambda rng: -4.9 - rng.lognormal(0.0, 0.5, 200))["skewed"] > 0.9
    assert shapes(lambda rng: rng.uniform(1.0, 2.0, 200))["light-tailed"] > 0.9
    two_lots = shapes(lambda rng: np.concatenate([rng.normal(0, 0.2, 100), rng.normal(1, 0.2, 100)]))
    assert two_lots.get("normal", 0.0) < 0.05


@pytest.mark.parametrize("size", [10, 20, 50, 200, 1000])
def test_a_clean_sample_seldom_has_a_value_named(size: int) -> None:
    rng = np.random.default_rng(size)
    named = sum(bool(find_outliers(rng.normal(size=size))) for _ in range(1000))
    assert named <= 25  # aimed at 1 %; never more than 2.5 %


def test_five_in_a_hundred_do_not_hide_one_another() -> None:
    rng = np.random.default_rng(3)
    for _ in range(100):
        sample = rng.normal(size=100)
        wrong = rng.choice(100, 5, replace=False)
        sample[wrong] += 15.0
        assert set(wrong) <= set(find_outliers(sample))


def test_a_long_tail_is_no_outlier() -> None:
    rng = np.random.default_rng(4)
    named = sum(len(find_outliers(rng.lognormal(0.0, 0.35, 200))) for _ in range(200))
    assert named / (200 * 200) < 0.005


def test_ties_and_constants_are_no_riddle() -> None:
    constant = describe([1.25] * 20)
    assert (constant.shape, constant.outliers) == ("constant", ())
    coarse = describe(np.round(np.random.default_rng(5).normal(0.0, 1.0, 100), 0))  # a meter with few digits
    assert coarse.outliers == ()


@pytest.mark.parametrize("values", [[1.0] * (LEAST_VALUES - 1), [float("nan")] * 20])
def test_too_few_values_or_none_are_refused(values: list[float]) -> None:
    with pytest.raises(ValueError, match=r"too few|finite"):
        describe(values)


@settings(max_examples=60, deadline=None)
@given(sign=st.sampled_from([0, 1, -1]), origin=st.floats(-10, 10), away=st.floats(1e-3, 1e3))
def test_a_scale_is_monotone_and_goes_back(sign: int, origin: float, away: float) -> None:
    scale = Scale(sign, origin)
    x = np.array([origin + (sign or 1) * away, origin + (sign or 1) * away * 1.5])
    y = scale.to(x)
    assert (y[1] > y[0]) == (x[1] > x[0])
    assert scale.back(float(y[0])) == pytest.approx(x[0], abs=1e-9 * (1 + abs(origin) + away))


@settings(max_examples=30, deadline=None)
@given(seed=st.integers(0, 10**6), factor=st.floats(1e-6, 1e3), shift=st.floats(-10, 10))
def test_units_of_measurement_do_not_change_what_is_told(seed: int, factor: float, shift: float) -> None:
    sample = np.random.default_rng(seed).lognormal(0.0, 0.4, 60)
    one, other = describe(sample), describe((sample + shift) * factor)
    assert one.outliers == other.outliers and one.shape == other.shape
