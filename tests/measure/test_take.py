"""Delay and wholeness of a take against constructed ones."""

from __future__ import annotations

import numpy as np
import pytest

from fixture.measure.take import compare_take, find_delay_frames

RNG_SEED = 3


def noise(frames: int = 4800) -> np.ndarray:
    return np.random.default_rng(RNG_SEED).standard_normal(frames)


@pytest.mark.parametrize("delay", [0, 1, 731, 2000])
def test_the_delay_is_found_to_the_frame(delay: int) -> None:
    sent = noise()
    monitor = np.concatenate([np.zeros(delay), 0.7 * sent, np.zeros(2400 - delay)])
    monitor += 1e-3 * np.random.default_rng(4).standard_normal(monitor.size)
    assert find_delay_frames(sent, monitor, 2400) == delay


def test_size_and_rest_are_parted() -> None:
    """Closed form: the part along what was sent, and an orthogonal tone of a tenth of its rms."""
    t = np.arange(4800) / 48_000
    sent, other = np.sin(2 * np.pi * 1000 * t), np.sin(2 * np.pi * 2000 * t)
    found = compare_take(sent, 0.8 * sent + 0.08 * other)
    assert found.sent_ratio == pytest.approx(0.8, rel=1e-9)
    assert found.residual_ratio == pytest.approx(0.1, rel=1e-9)


def test_64_lost_samples_of_a_tone_leave_a_rest_far_above_one_per_cent() -> None:
    t = np.arange(48_000) / 48_000
    sent = np.sin(2 * np.pi * 997 * t)
    short = np.concatenate([sent[:24_000], sent[24_064:], np.zeros(64)])
    assert compare_take(sent, short).residual_ratio > 0.3


def test_a_monitor_without_the_signal_has_no_size_and_silence_is_whole() -> None:
    assert abs(compare_take(noise(), np.random.default_rng(9).standard_normal(4800)).sent_ratio) < 0.05
    assert compare_take(np.zeros(10), np.ones(10)).residual_ratio == 0.0
