"""Predicted limits against normal theory and against what they must never do."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import lognorm, norm

from fixture.domain.reading import Curve
from fixture.lots.prediction import K_SIGMA, LEAST_UNITS, predict_limits, predict_mask
from fixture.quality.limit_fit import half_spreads


def test_both_half_spreads_of_a_normal_sample_are_its_sigma() -> None:
    """Closed form: E[x²; x<0] / P(x<0) = sigma²; tolerance three standard errors of 1e5 draws."""
    sample = np.random.default_rng(7).normal(3.0, 0.25, 100_000)
    median, below, above = half_spreads(sample)
    assert float(median) == pytest.approx(3.0, abs=0.004)
    assert float(below) == pytest.approx(0.25, rel=0.012)
    assert float(above) == pytest.approx(0.25, rel=0.012)


def test_limits_of_a_normal_reading_stand_at_k_sigma_and_are_rounded_outward() -> None:
    sample = norm.ppf((np.arange(2000) + 0.5) / 2000, loc=5.12, scale=0.08)
    limits = predict_limits(sample.tolist(), "V")
    assert limits.low is not None and limits.high is not None
    assert 5.12 - (K_SIGMA + 0.3) * 0.08 <= limits.low <= 5.12 - (K_SIGMA - 0.1) * 0.08
    assert 5.12 + (K_SIGMA - 0.1) * 0.08 <= limits.high <= 5.12 + (K_SIGMA + 0.3) * 0.08


def test_limits_of_a_skewed_reading_are_wider_on_the_long_side_and_refuse_few() -> None:
    law = lognorm(s=0.35, scale=1e-4)
    sample = law.rvs(size=LEAST_UNITS, random_state=np.random.default_rng(3))
    limits = predict_limits(sample.tolist(), "A")
    assert limits.low is not None and limits.high is not None
    median = float(np.median(sample))
    assert limits.high - median > 1.3 * (median - limits.low)
    assert law.sf(limits.high) + law.cdf(limits.low) < 1e-3


def test_too_few_units_predict_nothing() -> None:
    with pytest.raises(ValueError, match="at least 200"):
        predict_limits([1.0] * (LEAST_UNITS - 1), "V")


def test_a_mask_lets_every_draw_through_and_catches_a_missing_capacitor() -> None:
    """Closed form: one-pole high-pass curves with 10 % spread of the corner; a tenth of the capacitor is ten corners."""
    rng = np.random.default_rng(11)
    hz = 20.0 * 2.0 ** (np.arange(120) / 12)

    def curve(corner_hz: float) -> Curve:
        return Curve("response", hz, -10 * np.log10(1 + (corner_hz / hz) ** 2))

    draws = [curve(30.0 * (1 + 0.1 * rng.standard_normal())) for _ in range(LEAST_UNITS)]
    mask = predict_mask(draws)
    x = np.log(hz)
    at = np.log([row[0] for row in mask.points])
    low = np.interp(x, at, [row[1] for row in mask.points])  # type: ignore[misc]
    high = np.interp(x, at, [row[2] for row in mask.points])  # type: ignore[misc]
    for good in draws:
        assert np.all(good.db >= low) and np.all(good.db <= high)
    assert np.any(curve(300.0).db < low)
