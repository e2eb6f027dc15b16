"""SOURCE: tests/reference/sine_fit.csv, a 16-bit record made for IEEE 1057 fits; its least-squares solution was computed
by two independent programs (figures in the file's head and below, tolerance from the last digit)."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fixture.measure.sine_fit import fit_sine, fit_sine_and_frequency


@pytest.fixture
def record(read_reference) -> np.ndarray:
    return np.array([float(row["value"]) for row in read_reference("sine_fit.csv")])


def test_the_fit_with_known_frequency_gives_the_least_squares_solution(record) -> None:
    sine = fit_sine(record, 48e3, 997.0)
    assert sine.peak == pytest.approx(0.750000673, abs=1e-9)
    assert sine.phase_rad == pytest.approx(0.400000208, abs=1e-9)
    assert sine.offset == pytest.approx(0.01999949, abs=1e-8)
    assert sine.residual_rms == pytest.approx(8.6452e-6, abs=1e-10)


@pytest.mark.parametrize("near_hz", [997.0, 960.0, 1030.0])
def test_the_fit_of_the_frequency_gives_the_least_squares_solution(record, near_hz: float) -> None:
    sine = fit_sine_and_frequency(record, 48e3, near_hz)
    assert sine.hz == pytest.approx(997.000054935, abs=1e-9)
    assert sine.peak == pytest.approx(0.750000654, abs=1e-9)
    assert sine.phase_rad == pytest.approx(0.399998499, abs=1e-9)
    assert sine.offset == pytest.approx(0.019999450, abs=1e-9)


@settings(max_examples=50, deadline=None)
@given(st.floats(0.01, 10), st.floats(-3, 3), st.floats(-1, 1), st.floats(200, 20e3))
def test_a_clean_sine_is_found_exactly(peak: float, phase_rad: float, offset: float, hz: float) -> None:
    time_s = np.arange(2000) / 48e3
    samples = peak * np.cos(2 * np.pi * hz * time_s + phase_rad) + offset
    sine = fit_sine_and_frequency(samples, 48e3, hz + 5.0)
    assert sine.hz == pytest.approx(hz, rel=1e-9)
    assert sine.peak == pytest.approx(peak, rel=1e-8)
    assert sine.phase_rad == pytest.approx(phase_rad, abs=1e-7)


def test_a_sine_more_than_a_bin_away_is_refused(record) -> None:
    with pytest.raises(ValueError, match="runs away"):
        fit_sine_and_frequency(record, 48e3, 1102.0)


def test_too_few_samples_are_refused() -> None:
    with pytest.raises(ValueError, match="three samples"):
        fit_sine(np.zeros(2), 48e3, 997.0)
    with pytest.raises(ValueError, match="four samples"):
        fit_sine_and_frequency(np.zeros(3), 48e3, 997.0)
