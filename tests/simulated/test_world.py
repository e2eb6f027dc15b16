"""The simulated world against closed forms: resistors, dividers and one capacitor in the fixture."""

from __future__ import annotations

import math

import numpy as np
import pytest

from drivers.circuit.netlist import parse_netlist
from drivers.simulated.pedal import Knob, UnitSpec
from drivers.simulated.world import UnitInFixture, Wiring, World, WorldClock

RELAYS = [
    "pad_coarse",
    "source_line",
    "source_coil",
    "source_short",
    "load_100k",
    "load_10k",
    "footswitch",
    "supply_negative_ground",
    "supply_positive_ground",
    "bleeder",
    "meter_rail",
    "meter_shunt",
    "meter_output",
    "tp1",
]
CHANNEL = {name: 101 + i for i, name in enumerate(RELAYS)}

PASSIVE = """a divider for a pedal: 10 kOhm in, a divider of 1 MOhm halves on the rail, a dropper and 100 uF
.param top=1
Vsup supply 0 9
Vin in 0 0
Rin in 0 10k
Rth in out 1k
Rtop supply mid 1Meg
Rbottom mid 0 {1Meg*top}
Rdrop supply res 1k
Cres res 0 100u
Rpull out 0 1Meg
"""


def make_world(netlist: str = PASSIVE) -> World:
    unit = UnitSpec(
        netlist=parse_netlist(netlist),
        replaced=("Vsup", "Vin"),
        input_net="in",
        output_net="out",
        supply_net="supply",
        footswitch_param=None,
        knobs={"top": Knob("top", 1.0, 0.5)},
        probes={"TP1": "mid"},
    )
    world = World(UnitInFixture(unit, 25.0), Wiring({number: name for name, number in CHANNEL.items()}))
    world.turn_control("top", 0.0)
    return world


def close(world: World, *names: str) -> None:
    for name in names:
        world.set_relay(CHANNEL[name], True)


def power_up(world: World, *, limit_amps: float = 0.05) -> None:
    close(world, "supply_negative_ground")
    world.drive_supply(volts=9.0, limit_amps=limit_amps, on=True)


def test_a_reservoir_behind_a_resistor_charges_exponentially() -> None:
    """Closed form: v = V (1 - exp(-t/RC)), R = 1 kΩ + 10 Ω shunt, C = 100 µF, while the supply holds its voltage."""
    world = make_world()
    power_up(world)
    close(world, "meter_shunt")
    world.advance(0.05)
    start_s = world.now_s()
    first = world.meter_dc_volts(1e-6) / 10.0
    world.advance(0.1)
    second = world.meter_dc_volts(1e-6) / 10.0
    idle = 9.0 / 2e6
    tau_s = 1010.0 * 100e-6
    expected = (first - idle) * math.exp(-(world.now_s() - start_s) / tau_s) + idle
    assert second == pytest.approx(expected, rel=2e-3)


def test_a_divider_of_megohms_reads_low_by_the_meter_s_own_resistance() -> None:
    """Closed form: 9 V through 500 kΩ into 10 MΩ; the reading is 4.5 V * 10/10.5."""
    world = make_world()
    power_up(world)
    close(world, "tp1")
    world.advance(2.0)
    assert world.meter_dc_volts(0.02) == pytest.approx(4.5 * 10 / 10.5, rel=2e-5)


def test_a_knob_moves_the_divider() -> None:
    world = make_world()
    power_up(world)
    close(world, "tp1")
    world.turn_control("top", 1.0)
    world.advance(2.0)
    assert world.meter_dc_volts(0.02) == pytest.approx(9.0 / (1.0 + 2.0 + 0.1) * 1.0, rel=2e-5)


def test_positive_ground_turns_the_signs_round() -> None:
    world = make_world()
    close(world, "supply_positive_ground", "meter_rail")
    world.drive_supply(volts=9.0, limit_amps=0.05, on=True)
    world.advance(2.0)
    assert world.meter_dc_volts(0.02) == pytest.approx(-9.0, rel=2e-5)
    assert world.supply_terminals().volts == pytest.approx(9.0, rel=1e-5)


def test_a_short_on_the_rail_is_held_at_the_current_limit_and_the_voltage_sags() -> None:
    """Closed form: 20 mA through the 10 Ω shunt and a 1 Ω short is 0.22 V at the supply's terminals."""
    world = make_world(PASSIVE + "Rshort supply 0 1\n")
    power_up(world, limit_amps=0.020)
    world.advance(0.5)
    state = world.supply_terminals()
    assert state.limited
    assert state.amps == pytest.approx(0.020, rel=1e-3)
    assert state.volts == pytest.approx(0.020 * 11.1, rel=2e-3)


def test_the_limit_lets_go_when_the_capacitor_is_charged() -> None:
    world = make_world(PASSIVE.replace("Rdrop supply res 1k", "Rdrop supply res 1"))
    power_up(world, limit_amps=0.020)
    world.advance(0.02)
    assert world.supply_terminals().limited
    assert 0.1 < world.supply_terminals().volts < 6.0
    world.advance(0.5)
    state = world.supply_terminals()
    assert not state.limited
    assert state.volts == pytest.approx(9.0, rel=1e-3)


def test_stored_charge_outlives_the_output_until_the_bleeder_takes_it() -> None:
    world = make_world(PASSIVE.replace("Rdrop supply res 1k", "Rdrop supply res 1"))
    power_up(world)
    world.advance(1.0)
    world.drive_supply(volts=9.0, limit_amps=0.05, on=False)
    close(world, "meter_rail")
    world.advance(0.1)
    assert world.meter_dc_volts(0.02) > 8.5
    close(world, "bleeder")
    world.advance(2.0)
    assert abs(world.meter_dc_volts(0.02)) < 0.1
    assert world.supply_terminals().amps == 0.0


def test_the_pad_is_60_and_20_db_and_600_ohms() -> None:
    """Closed form: line volts * pad * 10k/(10k + Rs), then 1 kΩ into 1 MΩ of pull-down and 1 MΩ of load."""
    world = make_world()
    close(world, "source_line")
    rate_hz = 48_000
    t = np.arange(4800) / rate_hz
    line = 0.5 * np.sin(2 * math.pi * 1000 * t)
    for coarse, ratio, source_ohms in ((False, 1e-3, 600.0), (True, 0.1, 595.05)):
        world.set_relay(CHANNEL["pad_coarse"], coarse)
        captured = world.play_record(line, rate_hz)
        jack = 1 / (1 / 10e3 + 1 / 501e3)
        expected = ratio * jack / (jack + source_ohms) * 500e3 / 501e3
        gain = float(captured[480:, 0] @ line[480:] / (line[480:] @ line[480:]))
        assert gain == pytest.approx(expected, rel=5e-4)
        assert np.allclose(captured[480:-480, 1], line[480:-480], atol=1e-4)


def test_an_ohms_reading_is_volts_over_the_test_current() -> None:
    """Closed form: from the output jack 1 kΩ + 10 kΩ to ground, beside 1 MΩ pull-down, 1 MΩ load and the 10 MΩ meter."""
    world = make_world()
    close(world, "meter_output")
    expected = 1 / (1 / 11e3 + 1 / 1e6 + 1 / 1e6 + 1 / 10e6)
    assert world.meter_ohms(1e-5, 0.02) == pytest.approx(expected, rel=1e-4)


def test_a_held_tone_reads_its_rms_on_the_meter() -> None:
    world = make_world()
    close(world, "source_line", "pad_coarse", "meter_output")
    world.hold_tone(397.0, 1.0)
    jack = 1 / (1 / 10e3 + 1 / (1e3 + 1 / (1e-6 + 1e-6 + 1e-7)))
    expected = 0.1 * jack / (jack + 595.05) / math.sqrt(2) * (1 / 2.1e-6) / (1e3 + 1 / 2.1e-6)
    assert world.meter_ac_volts(0.2) == pytest.approx(expected, rel=2e-3)
    world.hold_tone(0.0, 0.0)
    assert world.meter_ac_volts(0.02) == 0.0


def test_waiting_takes_world_time_only_and_a_pacer_hears_of_it() -> None:
    passed: list[float] = []
    unit = make_world()
    world = World(unit._unit, unit._wiring, pacer=passed.append)
    WorldClock(world).sleep(3.0)
    assert world.now_s() == pytest.approx(3.0)
    assert sum(passed) == pytest.approx(3.0)
