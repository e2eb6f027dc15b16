from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fixture.measure.tones import coherent_hz, detect_tone, mains_clearance_hz, make_tone


def slow_clearance_hz(hz: float, rate_hz: float) -> float:
    """The same by counting through every multiple."""
    return min(
        abs(order * hz - multiple * mains)
        for mains in (50, 60)
        for order in range(1, 11)
        if order * hz < rate_hz / 2
        for multiple in range(int(rate_hz / mains))
    )


@pytest.mark.parametrize("hz", [397.0, 997.0])
def test_the_usual_test_tones_are_left_where_they_are(hz: float) -> None:
    # 997 Hz is the tone of AES17; both stay 3 Hz away from any multiple, by counting.
    assert coherent_hz(hz, 48000, 48000) == hz
    assert mains_clearance_hz(hz, 48000) == pytest.approx(slow_clearance_hz(hz, 48000))


@pytest.mark.parametrize("hz", [400.0, 440.0, 443.0, 1000.0])
def test_tones_whose_harmonics_meet_the_mains_are_moved(hz: float) -> None:
    # seven times 443 Hz is 3101 Hz
    assert slow_clearance_hz(hz, 48000) <= 1
    assert coherent_hz(hz, 48000, 48000) != hz


@given(st.floats(20, 20e3), st.sampled_from([44100, 48000, 96000]), st.sampled_from([0.5, 1.0, 2.0, 3.7]))
def test_a_tone_fits_the_record_and_misses_the_mains(wanted: float, rate: int, seconds: float) -> None:
    frames = round(seconds * rate)
    hz = coherent_hz(wanted, rate, frames)
    periods = hz * frames / rate
    assert abs(periods - round(periods)) < 1e-6
    assert abs(hz - wanted) <= max(0.03 * wanted, 3 * rate / frames) + 0.51 * rate / frames
    if seconds >= 1.0 and wanted >= 300:
        assert slow_clearance_hz(hz, rate) >= max(2.0, 2 * rate / frames) * (1 - 1e-6)


def test_a_record_that_cannot_hold_the_tone_is_refused() -> None:
    with pytest.raises(ValueError, match="no tone near 30000 Hz"):
        coherent_hz(30e3, 48000, 48000)


def test_size_and_phase_are_those_of_the_tone() -> None:
    time_s = np.arange(48000) / 48000
    tone = detect_tone(0.3 * np.cos(2 * np.pi * 997 * time_s - 1.2) + 0.5, 997.0, 48000)
    assert tone.peak_volts == pytest.approx(0.3, rel=1e-9)
    assert tone.phase_rad == pytest.approx(-1.2, abs=1e-9)
    assert tone.u_volts < 1e-12


def test_mains_and_harmonics_leave_a_coherent_tone_alone() -> None:
    time_s = np.arange(48000) / 48000
    hum = sum(0.1 / n * np.sin(2 * np.pi * 50 * n * time_s) for n in range(1, 40))
    tone = detect_tone(1e-3 * np.cos(2 * np.pi * 997 * time_s) + hum, 997.0, 48000)
    assert tone.peak_volts == pytest.approx(1e-3, rel=1e-9)
    assert tone.u_volts < 1e-9


def test_the_stated_uncertainty_is_that_of_white_noise() -> None:
    # Closed form: a bin of N samples of white noise sigma has the quadrature deviation sigma sqrt(2 / N).
    rng = np.random.default_rng(5)
    time_s = np.arange(4800) / 48000
    clean = np.cos(2 * np.pi * 990 * time_s)
    tones = [detect_tone(clean + 0.1 * rng.standard_normal(4800), 990.0, 48000) for _ in range(400)]
    expected = 0.1 * math.sqrt(2 / 4800)
    assert np.sqrt(np.mean([tone.u_volts**2 for tone in tones])) == pytest.approx(expected, rel=0.03)
    # scatter of 400 draws: 3.5 % standard deviation, three of them allowed
    assert np.std([tone.peak_volts for tone in tones]) == pytest.approx(expected, rel=0.11)


def test_a_tone_that_is_made_is_the_tone_that_is_found() -> None:
    made = make_tone(0.25, 997.0, 48000, 72000)
    assert detect_tone(made[24000:], 997.0, 48000).peak_volts == pytest.approx(0.25, rel=1e-9)
    assert made[0] == 0.0 and np.max(np.abs(np.diff(made[:100]))) < 0.001
