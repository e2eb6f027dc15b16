"""Rate conversion around the circuit: flat, in time, and quiet beyond half the rate."""

from __future__ import annotations

import numpy as np
import pytest

from drivers.circuit.resample import decimate, half_length, interpolate, low_pass

FRAMES = 400


def sine(ratio: float, frames: int, factor: int = 1, start: int = 0) -> np.ndarray:
    """A sine of `ratio` times the slow sample rate, sampled `factor` times as fast from fine sample `start` on."""
    return np.sin(2 * np.pi * ratio * (np.arange(frames) + start) / factor + 0.3)


@pytest.mark.parametrize("factor", [2, 4, 8])
@pytest.mark.parametrize("ratio", [0.01, 0.1, 0.3, 0.4])
def test_interpolation_goes_through_a_sine_between_its_samples(factor: int, ratio: float) -> None:
    # the specification: flat within 0.01 dB, 0.00115 in amplitude, up to 0.4 of the rate; delay taken out
    fine = interpolate(sine(ratio, FRAMES)[:, None], factor)[:, 0]
    inner = slice(100 * factor, 300 * factor)
    assert np.max(np.abs(fine - sine(ratio, FRAMES * factor, factor))[inner]) < 0.00115


@pytest.mark.parametrize("factor", [2, 4, 8])
@pytest.mark.parametrize("ratio", [0.01, 0.1, 0.3, 0.4])
def test_decimation_keeps_a_sine_and_its_phase(factor: int, ratio: float) -> None:
    reach = half_length(factor)
    fine = sine(ratio, FRAMES * factor + 2 * reach, factor, -reach)
    slow = decimate(fine[:, None], factor)[:, 0]
    assert slow.shape == (FRAMES,)
    assert np.max(np.abs(slow - sine(ratio, FRAMES))) < 0.00115


@pytest.mark.parametrize("factor", [2, 4, 8])
def test_what_lies_above_six_tenths_of_the_rate_does_not_fold_down(factor: int) -> None:
    # SOURCE: Kaiser's design formula for 90 dB
    reach = half_length(factor)
    for ratio in (0.61, 0.8, 0.95):
        if ratio < factor / 2:
            slow = decimate(sine(ratio, FRAMES * factor + 2 * reach, factor, -reach)[:, None], factor)
            assert np.max(np.abs(slow)) < 10 ** (-85 / 20)


@pytest.mark.parametrize("factor", [1, 2, 4, 8])
def test_a_constant_stays_exactly_that_constant_to_both_edges(factor: int) -> None:
    reach = half_length(factor)
    assert interpolate(np.full((50, 2), 0.7), factor) == pytest.approx(
        np.full((50 * factor, 2), 0.7), abs=0.0
    )
    assert decimate(np.full((50 * factor + 2 * reach, 2), 0.7), factor) == pytest.approx(
        np.full((50, 2), 0.7), rel=1e-13
    )


def test_a_step_is_held_at_its_ends() -> None:
    frames = np.concatenate([np.zeros(60), np.ones(60)])[:, None]
    fine = interpolate(frames, 4)[:, 0]
    assert fine[:80] == pytest.approx(np.zeros(80), abs=2e-4)
    assert fine[-80:] == pytest.approx(np.ones(80), abs=2e-4)


@pytest.mark.parametrize("factor", [2, 4, 8])
def test_the_filter_is_symmetric_and_no_longer_than_a_millisecond_at_48_khz(factor: int) -> None:
    taps = low_pass(factor)
    assert taps == pytest.approx(taps[::-1], abs=1e-16)
    assert taps.size / (48_000 * factor) < 1e-3
