"""SOURCE: A. Farina, AES 108th Convention, 2000: L = T / ln(f2 / f1), harmonic n comes L ln n early (closed form)."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest

from fixture.measure.sweep import (
    Sweep,
    impulse_responses,
    log_grid_hz,
    make_sweep,
    measure_response,
    plan_sweep,
)

RATE_HZ = 48000
FIVE_SECONDS = Sweep(20.0, 20e3, 5.0 / math.log(1000.0))


def test_rise_and_leads_are_those_of_the_closed_form() -> None:
    # 20 Hz to 20 kHz in 5 s, computed independently to ten digits
    assert FIVE_SECONDS.rise_s == pytest.approx(0.7238241365, abs=1e-10)
    assert FIVE_SECONDS.duration_s == pytest.approx(5.0, abs=1e-12)
    leads = [FIVE_SECONDS.lead_s(order) for order in (2, 3, 4, 5)]
    assert leads == pytest.approx([0.5017166594, 0.7952020912, 1.0034333189, 1.1649500072], abs=1e-10)


def test_the_sweep_passes_the_geometric_mean_half_way() -> None:
    # f(T/2) = sqrt(f1 f2) = 632.4555 Hz: counted from the zero crossings around it
    wave = make_sweep(FIVE_SECONDS, 1.0, RATE_HZ)
    middle = round((FIVE_SECONDS.pre_roll_s + 2.5) * RATE_HZ)
    part = wave[middle - 2400 : middle + 2400]
    crossings = np.flatnonzero(np.diff(np.signbit(part)))
    assert crossings.size / 2 / 0.1 == pytest.approx(632.4555, rel=0.01)


@pytest.mark.parametrize("order", [2, 3])
def test_a_harmonic_stands_where_the_closed_form_says(order: int) -> None:
    wave = make_sweep(FIVE_SECONDS, 1.0, RATE_HZ)
    bent = wave**order  # nothing linear in the square; the cube has 3/4 of a fundamental too
    _, heard = impulse_responses(FIVE_SECONDS, wave, bent, RATE_HZ, (40.0, 9e3))
    expected = heard.size - round(FIVE_SECONDS.lead_s(order) * RATE_HZ)
    around = np.abs(heard[expected - 2000 : expected + 2000])
    assert abs(int(np.argmax(around)) - 2000) <= 1


def test_a_planned_sweep_is_wider_than_the_band_and_as_long_as_asked() -> None:
    sweep = plan_sweep(20.0, 16e3, RATE_HZ, 4.0)
    assert sweep.start_hz < 20.0 and sweep.stop_hz > 16e3
    assert sweep.duration_s == pytest.approx(4.0)


def test_a_sweep_begins_and_ends_in_silence_and_keeps_its_size() -> None:
    wave = make_sweep(FIVE_SECONDS, 1e-4, RATE_HZ)
    assert not np.any(wave[: round(0.3 * RATE_HZ)]) and not np.any(wave[-round(0.15 * RATE_HZ) :])
    assert np.max(np.abs(wave)) == pytest.approx(1e-4, rel=1e-6)


@pytest.mark.parametrize("delay_frames", [0, 1, 333])
def test_gain_polarity_and_delay_do_not_bend_the_response(delay_frames: int) -> None:
    sweep = plan_sweep(20.0, 16e3, RATE_HZ, 4.0)
    wave = make_sweep(sweep, 1e-4, RATE_HZ)
    heard = np.roll(-31.6 * wave, delay_frames)
    response = measure_response(sweep, wave, heard, RATE_HZ, log_grid_hz(20.0, 16e3), 997.0)
    assert np.max(np.abs(response.db)) < 2e-3
    assert response.reference_db == pytest.approx(20 * math.log10(31.6), abs=1e-3)
    assert not response.is_lost


def test_the_grid_has_both_ends_and_twelve_points_to_the_octave() -> None:
    grid = log_grid_hz(20.0, 640.0)
    assert grid.size == 5 * 12 + 1
    assert (grid[0], grid[-1], grid[12]) == pytest.approx((20.0, 640.0, 40.0))


def test_a_band_beyond_the_sample_rate_is_refused() -> None:
    with pytest.raises(ValueError, match="sample rate"):
        plan_sweep(20.0, 23e3, RATE_HZ, 4.0)


def test_a_sweep_without_time_is_refused() -> None:
    with pytest.raises(ValueError, match="too short"):
        plan_sweep(20.0, 16e3, RATE_HZ, 0.1)


def _through(wave: np.ndarray, response_at: Callable[[np.ndarray], np.ndarray]) -> np.ndarray:
    size = 1 << (2 * wave.size).bit_length()
    hz = np.fft.rfftfreq(size, 1 / RATE_HZ)
    return np.fft.irfft(np.fft.rfft(wave, size) * response_at(hz), size)[: wave.size]


def _high_pass(order: int) -> Callable[[np.ndarray], np.ndarray]:
    return lambda hz: 40.0 * (1j * hz / 20.0 / (1 + 1j * hz / 20.0)) ** order / (1 + 1j * hz / 7e3)


def _resonance(hz_peak: float, q: float) -> Callable[[np.ndarray], np.ndarray]:
    return lambda hz: 40.0 / (1 - (hz / hz_peak) ** 2 + 1j * hz / hz_peak / q)


@pytest.mark.parametrize("duration_s", [2.0, 4.0])
@pytest.mark.parametrize(
    "response_at",
    [_high_pass(1), _high_pass(3), _resonance(3e3, 5.0), _resonance(1e3, 2.0), _resonance(100.0, 10.0)],
    ids=["one corner", "three corners", "q of 5", "q of 2", "q of 10"],
)
def test_the_stated_uncertainty_covers_what_the_method_does_to_a_bent_curve(
    duration_s: float, response_at: Callable[[np.ndarray], np.ndarray]
) -> None:
    """Closed forms of filters without any noise: what is wrong is the method's own, and within its U."""
    sweep = plan_sweep(20.0, 16e3, RATE_HZ, duration_s)
    wave = make_sweep(sweep, 1e-4, RATE_HZ)
    hz = log_grid_hz(20.0, 16e3)
    response = measure_response(sweep, wave, _through(wave, response_at), RATE_HZ, hz, 997.0)
    true_db = 20 * np.log10(np.abs(response_at(hz)) / np.abs(response_at(np.array([997.0]))))
    assert np.all(np.abs(response.db - true_db) <= 2.0 * response.u_db)
