"""SOURCE: tests/reference/thd_closed_forms.csv: Fourier series in closed form."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fixture.measure.distortion import thd_over_fundamental, thd_over_whole

ORDERS = np.arange(1, 2_000_001)


@pytest.mark.parametrize(
    ("wave", "peaks"),
    [
        ("square", np.where(ORDERS % 2 == 1, 1.0 / ORDERS, 0.0)),
        ("triangle", np.where(ORDERS % 2 == 1, 1.0 / ORDERS**2, 0.0)),
        ("sawtooth", 1.0 / ORDERS),
        ("fullwave_rectified_sine_fund_2f", 1.0 / (4.0 * ORDERS.astype(float) ** 2 - 1.0)),
    ],
)
def test_both_definitions_give_the_closed_forms(read_reference, wave: str, peaks: np.ndarray) -> None:
    (row,) = [row for row in read_reference("thd_closed_forms.csv") if row["wave"] == wave]
    # The series is cut after two million harmonics, which leaves 3e-7 for those that fall as 1/n.
    assert thd_over_fundamental(peaks.tolist()) == pytest.approx(float(row["thd_f"]), abs=6e-7)
    assert thd_over_whole(peaks.tolist()) == pytest.approx(float(row["thd_r"]), abs=6e-7)


def test_a_clipped_sine_has_the_distortion_of_its_closed_form(read_reference) -> None:
    rows = [row for row in read_reference("thd_closed_forms.csv") if row["wave"] == "sine_clipped_symmetric"]
    assert len(rows) >= 7
    # From 2^20 points of one period; bins up to a quarter of them: what clipping folds back is below 1e-7.
    wave = np.sin(2 * np.pi * (np.arange(1 << 20) + 0.5) / (1 << 20))
    for row in rows:
        clip = float(row["param"])
        peaks = np.abs(np.fft.rfft(np.clip(wave, -clip, clip)))[1 : 1 << 18]
        assert thd_over_fundamental(peaks.tolist()) == pytest.approx(float(row["thd_f"]), abs=2e-6)
        assert thd_over_whole(peaks.tolist()) == pytest.approx(float(row["thd_r"]), abs=2e-6)


def test_the_two_definitions_differ() -> None:
    assert thd_over_fundamental([1.0, 1.0]) == 1.0
    assert thd_over_whole([1.0, 1.0]) == pytest.approx(1 / math.sqrt(2))


@pytest.mark.parametrize("peaks", [[], [0.0, 1.0], [math.nan]])
def test_without_a_fundamental_there_is_no_distortion_figure(peaks: list[float]) -> None:
    with pytest.raises(ValueError, match="fundamental"):
        thd_over_fundamental(peaks)
