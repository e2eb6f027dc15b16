"""Against the closed form of the filter on the fake bench."""

from __future__ import annotations

import numpy as np
import pytest

from fixture.bench.facade import FixtureState
from fixture.errors import CannotMeasure


@pytest.mark.parametrize("cubic", [0.0, 2e6])
def test_response_is_the_closed_form_within_two_hundredths_of_a_decibel(
    run_step, make_bench, closed_form_db, cubic: float
) -> None:
    # The cubic makes 0.5 % third harmonic: gated away; it raises every fundamental alike, which the reference takes out.
    (reading,) = run_step(make_bench(cubic=cubic, noise_volts=3e-6), "frequency_response")
    curve = reading.curve
    expected_db = closed_form_db(curve.hz) - closed_form_db(997.0)
    assert np.max(np.abs(curve.db - expected_db)) < 0.02
    assert curve.hz[0] == pytest.approx(20.0) and curve.hz[-1] == pytest.approx(16e3)
    assert np.all(np.diff(np.log2(curve.hz)) < 1 / 11)


def test_harmonics_of_twenty_percent_do_not_show_in_the_response(
    run_step, make_bench, closed_form_db
) -> None:
    # c A^2 = 2: the third harmonic is 0.5 / 2.5 of the fundamental, which is 1 + 3/4 c A^2 at every frequency.
    (reading,) = run_step(make_bench(cubic=2e8), "frequency_response")
    inside = reading.curve.hz < 10e3
    expected_db = closed_form_db(reading.curve.hz) - closed_form_db(997.0)
    assert np.max(np.abs(reading.curve.db - expected_db)[inside]) < 0.02


def test_response_of_a_linear_unit_does_not_depend_on_the_level(run_step, make_bench) -> None:
    low, high = (
        run_step(make_bench(), "frequency_response", level=level)[0].curve.db for level in (1e-5, 1.5e-4)
    )
    assert np.max(np.abs(low - high)) < 1e-6


def test_a_weak_output_is_still_right_within_its_uncertainty(run_step, make_bench, closed_form_db) -> None:
    # 1 mV of output against 3 µV of noise: a fuzz turned down.
    strong = make_bench()
    weak = make_bench(transfer=lambda hz: strong.transfer(hz) / 10.0, noise_volts=3e-6)
    (reading,) = run_step(weak, "frequency_response")
    expected_db = closed_form_db(reading.curve.hz) - closed_form_db(997.0)
    assert np.max(np.abs(reading.curve.db - expected_db)) < max(0.02, 4 * reading.u)
    assert 0.0 < reading.u < 0.02


@pytest.mark.parametrize("noise_volts", [0.0, 3e-6])
def test_an_output_lost_in_noise_gives_no_curve(run_step, make_bench, noise_volts: float) -> None:
    dead = make_bench(transfer=lambda hz: 0.0 * hz, noise_volts=noise_volts)
    (reading,) = run_step(dead, "frequency_response")
    assert reading.value is None and reading.curve is None
    assert reading.why_not == "too little output to judge the response"


def test_a_clipped_take_gives_no_curve(run_step, make_bench) -> None:
    (reading,) = run_step(make_bench(clipped=True), "frequency_response")
    assert reading.value is None and "full scale" in reading.why_not


def test_a_band_that_the_bench_cannot_sample_is_refused(run_step, make_bench) -> None:
    with pytest.raises(CannotMeasure, match=r"30000 Hz is beyond 0\.45 times the sample rate of 48000 Hz"):
        run_step(make_bench(), "frequency_response", high=30e3)


def test_a_reference_outside_the_band_is_refused(run_step, make_bench) -> None:
    with pytest.raises(CannotMeasure, match="reference of 50 Hz is outside 100 Hz to 10000 Hz"):
        run_step(make_bench(), "frequency_response", low=100.0, high=10e3, reference=50.0)


def test_the_fine_pad_is_taken(run_step, make_bench) -> None:
    bench = make_bench()
    run_step(bench, "frequency_response", load="100k")
    assert bench.calls[0] == ("controls", {"fuzz": 1.0})
    assert bench.calls[1] == ("state", FixtureState(pad="fine", source="line", load="100k", engaged=True))
