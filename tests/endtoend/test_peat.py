"""What Peat's limits file and the fixture promise of a measurement, on the simulated bench through all drivers."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from drivers.roles import Prompt
from fixture.bench.facade import FixtureState
from fixture.bench.opening import open_bench
from fixture.bench.placing import Placement
from fixture.bench.station import Station
from fixture.domain.model import StepSpec
from fixture.measure.tones import mains_clearance_hz
from fixture.modelfile import find_model
from fixture.steps.registry import get_kind

ROOT = Path(__file__).resolve().parents[2]


class Nobody:
    """An operator who lets the simulated knobs turn by themselves."""

    def ask(self, prompt: Prompt) -> None: ...

    def ask_value(self, prompt: Prompt, *, unit: str, low: float, high: float) -> float:
        raise AssertionError("nothing is typed here")

    def tell(self, text: str) -> None: ...


def powered_bench(serial: str = "PT-2612-0001") -> Station:
    model = find_model(ROOT, "peat")
    bench = open_bench(ROOT, place=Placement(model, serial), operator=Nobody(), controls=model.controls)
    bench.set_controls({"fuzz": 1.0, "volume": 1.0})
    bench.set_state(FixtureState())
    bench.power_on(model.supply)
    return bench


def step(name: str) -> StepSpec:
    model = find_model(ROOT, "peat")
    (found,) = [s for s in model.procedures["line"].steps if s.name == name]
    return found


def gain_at(bench: Station, level_volts: float) -> Any:
    wanted = step("Gain, Fuzz up")
    wanted = replace(wanted, options=replace(wanted.options, level=level_volts))
    (reading,) = get_kind("gain").run(wanted, find_model(ROOT, "peat"), bench)
    return reading


def test_the_stimulus_at_full_fuzz_is_small_enough_that_halving_it_moves_the_gain_by_less_than_0_02_db() -> (
    None
):
    bench = powered_bench()
    level = step("Gain, Fuzz up").options.level
    assert level <= 0.15e-3
    whole, half = gain_at(bench, level), gain_at(bench, level / 2)
    assert abs(whole.value - half.value) < 0.02
    assert (
        abs(gain_at(bench, 20 * level).value - half.value) > 1.0
    )  # 2 mV is far from linear: the check can fail
    assert bench.safe_state() == ()


def test_every_tone_of_the_line_procedure_misses_the_mains() -> None:
    bench = powered_bench()
    reading = gain_at(bench, 0.1e-3)
    used_hz = next(value for name, value in reading.raw.items() if name.endswith("_hz"))
    assert used_hz == pytest.approx(997.0, abs=1.0)
    assert mains_clearance_hz(used_hz, rate_hz=bench.rate_hz) >= 2.0
    bench.safe_state()


def test_a_node_reads_unsettled_20_ms_after_power_on_and_settled_after_two_seconds() -> None:
    model = find_model(ROOT, "peat")
    bench = open_bench(
        ROOT, place=Placement(model, "PT-2612-0001"), operator=Nobody(), controls=model.controls
    )
    bench.set_controls({"fuzz": 1.0, "volume": 1.0})
    bench.set_state(FixtureState())
    start_s = bench.clock.monotonic_s()
    bench.power_on(model.supply)
    early = bench.read_node(model.nodes["q2_collector"]).value
    assert bench.clock.monotonic_s() - start_s < 0.4
    bench.clock.sleep(2.0)
    late = bench.read_node(model.nodes["q2_collector"])
    bench.clock.sleep(1.0)
    later = bench.read_node(model.nodes["q2_collector"])
    assert abs(early - late.value) > 0.02
    assert abs(later.value - late.value) < 4 * late.u
    bench.safe_state()


def test_the_bench_is_as_it_was_found_after_the_safe_state() -> None:
    bench = powered_bench()
    assert abs(bench.read_rail().value) > 8.9
    assert bench.safe_state() == ()
    bench.set_state(FixtureState())
    assert abs(bench.read_rail().value) < 0.5
    assert bench.safe_state() == ()
