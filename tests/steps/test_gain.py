"""Against closed forms: the filter's own formula, and 1 + 3/4 c A^2 for the fundamental of a cubic."""

from __future__ import annotations

import math

import numpy as np
import pytest

from drivers.errors import AudioNoSignal
from fixture.bench.facade import FixtureState
from fixture.domain.limits import Limits

CUBIC = 2e6  # at 0.1 mV peak: 1.5 % more fundamental, third harmonic 0.5 %
AT_ONE_TENTH_MILLIVOLT = 1.0 + 0.75 * CUBIC * 1e-4**2


def test_gain_is_the_closed_form_within_a_hundredth_of_a_decibel(
    run_step, make_bench, closed_form_db
) -> None:
    (reading,) = run_step(make_bench(cubic=CUBIC, noise_volts=3e-6), "gain", level=1e-4)
    expected_db = closed_form_db(reading.raw["frequency_hz"]) + 20 * math.log10(AT_ONE_TENTH_MILLIVOLT)
    assert reading.value == pytest.approx(expected_db, abs=0.01)
    assert (reading.name, reading.unit, reading.note, reading.why_not) == ("gain", "dB", None, None)


@pytest.mark.parametrize("hz", [20.0, 82.4, 440.0, 1000.0, 5000.0, 10e3])
def test_gain_is_right_at_any_frequency(run_step, make_bench, closed_form_db, hz: float) -> None:
    (reading,) = run_step(make_bench(noise_volts=3e-6), "gain", frequency=hz)
    assert reading.raw["frequency_hz"] == pytest.approx(hz, rel=0.15)
    assert reading.value == pytest.approx(closed_form_db(reading.raw["frequency_hz"]), abs=0.01)


def test_gain_of_a_linear_unit_does_not_depend_on_the_level(run_step, make_bench) -> None:
    values = [run_step(make_bench(), "gain", level=level)[0].value for level in (1e-5, 1e-4, 1.5e-4, 0.05)]
    assert np.ptp(values) < 1e-6


def test_distortion_up_to_the_fifth_harmonic_is_that_of_the_cubic(
    run_step, make_bench, closed_form_db
) -> None:
    # H3 = c A^3 / 4 of y = x + c x^3 (Fourier series), then the filter at 3 f.
    (reading,) = run_step(make_bench(cubic=CUBIC), "gain", level=1e-4)
    hz = reading.raw["frequency_hz"]
    filtered = 10 ** ((closed_form_db(3 * hz) - closed_form_db(hz)) / 20)
    expected = 0.25 * CUBIC * 1e-8 / AT_ONE_TENTH_MILLIVOLT * filtered
    assert reading.raw["thd_ratio"] == pytest.approx(expected, rel=1e-3)


def test_the_uncertainty_covers_the_scatter_of_repeated_takes(run_step, make_bench) -> None:
    # 30 takes in noise as large as the signal: u is the standard deviation, within what 30 draws tell (chi square
    # with 29 degrees of freedom: 0.68 to 1.36 at 99 %) and the estimate itself (about 20 %).
    noisy = [
        run_step(make_bench(noise_volts=1e-2, u_gain_ratio=0.0, seed=seed), "gain")[0] for seed in range(30)
    ]
    spread, stated = np.std([reading.value for reading in noisy], ddof=1), np.mean([r.u for r in noisy])
    assert 0.6 < spread / stated < 1.5


def test_the_calibration_counts_in_the_uncertainty(run_step, make_bench) -> None:
    (reading,) = run_step(make_bench(u_gain_ratio=0.01), "gain")
    assert reading.u == pytest.approx(20 / math.log(10) * 0.01, rel=1e-3)  # derivative of 20 log10


@pytest.mark.parametrize("noise_volts", [0.0, 3e-6])
def test_a_dead_unit_has_a_value_low_enough_to_fail(run_step, make_bench, noise_volts: float) -> None:
    dead = make_bench(transfer=lambda hz: 0.0 * hz, noise_volts=noise_volts)
    (reading,) = run_step(dead, "gain")
    assert reading.value is not None and math.isfinite(reading.value) and reading.value < -40.0
    assert reading.note == f"no signal: below {reading.value:.1f} dB"


def test_a_clipped_take_gives_no_value(run_step, make_bench) -> None:
    (reading,) = run_step(make_bench(clipped=True), "gain")
    assert reading.value is None and "full scale" in reading.why_not


def test_controls_are_set_before_the_fixture_and_the_pad_is_as_asked(run_step, make_bench) -> None:
    bench = make_bench()
    run_step(bench, "gain", pad="coarse", load="10k", source="coil")
    assert bench.calls == [
        ("controls", {"fuzz": 1.0}),
        ("state", FixtureState(pad="coarse", source="coil", load="10k", engaged=True)),
    ]


def test_trouble_of_the_bench_is_no_reading(run_step, make_bench) -> None:
    with pytest.raises(AudioNoSignal):
        run_step(make_bench(failure=AudioNoSignal("audio: nothing arrives")), "gain")


@pytest.mark.parametrize(("low_db", "has_value"), [(20.0, False), (60.0, True), (None, True)])
def test_noise_above_the_low_limit_hides_a_dead_unit_and_never_passes_it(
    run_step, make_bench, low_db: float | None, has_value: bool
) -> None:
    # 0.1 V of noise: nothing below about 35 dB can be seen at 0.1 mV; white noise of rms s over n frames is
    # s sqrt(2 / n) in each quadrature of a bin, and the bound is at least three of that.
    dead = make_bench(transfer=lambda hz: 0.0 * hz, noise_volts=0.1)
    (reading,) = run_step(dead, "gain", limits={"gain": Limits(low_db, None, "dB")})
    bound_db = 20 * math.log10(3 * 0.1 * math.sqrt(2 / 48000) / 1e-4)
    assert bound_db > 20.0
    if has_value:
        assert 20.0 < reading.value < 60.0 and "no signal" in reading.note
    else:
        assert (
            reading.value is None and "too high to hold that against the limit of 20.0 dB" in reading.why_not
        )
