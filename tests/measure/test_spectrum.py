"""SOURCE: tests/reference/windows.csv: figures published for cosine-sum windows (Max Planck report, 2002)."""

from __future__ import annotations

import numpy as np
import pytest

from fixture.measure.spectrum import (
    COSINE_SUMS,
    amplitude_spectrum,
    cosine_window,
    noise_bandwidth_bins,
    scalloping_db,
)


def test_noise_bandwidths_are_the_published_ones_to_the_printed_digit(read_reference) -> None:
    rows = [row for row in read_reference("windows.csv") if row["pub_nenbw"]]
    assert len(rows) >= 7
    for row in rows:
        window = cosine_window(tuple(map(float, row["coeffs"].split())), 4096)
        digits = len(row["pub_nenbw"].partition(".")[2])
        assert noise_bandwidth_bins(window) == pytest.approx(float(row["pub_nenbw"]), abs=0.51 * 10**-digits)


def test_scalloping_is_that_of_the_table(read_reference) -> None:
    for row in read_reference("windows.csv"):
        window = cosine_window(tuple(map(float, row["coeffs"].split())), 4096)
        assert scalloping_db(window) == pytest.approx(float(row["calc_scallop_half_bin_db"]), abs=6e-6)


@pytest.mark.parametrize(
    ("ours", "theirs"),
    [("rect", "rect"), ("hann", "hann"), ("blackman_harris", "BH92"), ("flat_top", "HFT90D")],
)
def test_our_windows_have_the_coefficients_of_the_table(read_reference, ours: str, theirs: str) -> None:
    (row,) = [row for row in read_reference("windows.csv") if row["name"] == theirs]
    assert COSINE_SUMS[ours] == tuple(map(float, row["coeffs"].split()))


@pytest.mark.parametrize("offset_bins", [0.0, 0.25, 0.5])
def test_flat_top_lines_are_right_wherever_the_tone_falls(offset_bins: float) -> None:
    hz = 1000.0 + offset_bins * 10.0
    volts = 0.7 * np.cos(2 * np.pi * hz * np.arange(4800) / 48000) + 0.2
    spectrum = amplitude_spectrum(volts, 48000)
    assert spectrum.line_hz == 10.0
    # flatness published for this window: 0.0039 dB
    assert 20 * np.log10(np.max(spectrum.peak_volts[50:]) / 0.7) == pytest.approx(0.0, abs=0.0040)
    assert spectrum.peak_volts[0] == pytest.approx(0.2, rel=1e-3)


def test_a_tone_at_half_the_rate_has_its_own_size() -> None:
    volts = 0.5 * np.cos(np.pi * np.arange(480))
    assert amplitude_spectrum(volts, 48000, "rect").peak_volts[-1] == pytest.approx(0.5)
