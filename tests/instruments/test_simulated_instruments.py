"""The simulated supply, multimeter and switchbox at a resistor: Ohm's law says what they must read."""

from __future__ import annotations

import math

import numpy as np
import pytest

from drivers.simulated.multimeter import MultimeterSpec
from drivers.simulated.supply import SimulatedSupply, SupplySpec
from drivers.simulated.switchbox import SimulatedRelayBoard, SimulatedSwitchbox

SEEDS = range(200)


# -- supply ----------------------------------------------------------------------------------------


def test_a_supply_wakes_up_off_with_its_widest_limits(bench, ask):
    assert ask(bench.supply, "OUTP?;:VOLT?;CURR?;VOLT:PROT?").split(";") == [
        "0",
        "+0.00000000E+00",
        "+1.00000000E+00",
        "+2.20000000E+01",
    ]
    assert not bench.world.on


def test_volts_and_amps_read_back_within_the_specification_for_every_instrument_built(make_benches, ask):
    spec = SupplySpec()
    for seed in SEEDS:
        bench = make_benches(seed)
        ask(bench.supply, "VOLT 9;:CURR 0.5;:OUTP ON")
        state = bench.world.supply_terminals()
        volts, amps = (float(text) for text in ask(bench.supply, "MEAS:VOLT?;:MEAS:CURR?").split(";"))
        # the noise may add five standard deviations to what the accuracy allows, the step half a digit
        assert abs(state.volts - 9.0) <= spec.set_volts_ratio * 9.0 + spec.set_volts_offset
        assert abs(volts - state.volts) <= (
            spec.read_volts_ratio * 9.0
            + spec.read_volts_offset
            + 5 * spec.noise_volts
            + spec.read_volts_resolution
        )
        assert abs(amps - state.amps) <= (
            spec.read_amps_ratio * 0.09
            + spec.read_amps_offset
            + 5 * spec.noise_amps
            + spec.read_amps_resolution
        )


def test_two_supplies_of_one_seed_are_the_same_instrument_and_of_two_seeds_are_not(make_benches, ask):
    answers = [ask(make_benches(seed).supply, "VOLT 9;:OUTP ON;:MEAS:VOLT?") for seed in (1, 1, 2)]
    assert answers[0] == answers[1] != answers[2]


def test_read_back_comes_in_steps_of_the_resolution(bench, ask):
    ask(bench.supply, "VOLT 9;:OUTP ON")
    millivolts = float(ask(bench.supply, "MEAS:VOLT?")) * 1000
    assert millivolts == pytest.approx(round(millivolts), abs=1e-6)


def test_a_supply_in_current_limit_sags_and_says_so(bench, ask):
    bench.world.ohms = 10.0
    ask(bench.supply, "VOLT 9;:CURR 0.1;:OUTP ON")
    # closed form: 0.1 A through 10 Ω, within the supply's accuracy of 2.2 mA
    assert bench.world.supply_terminals().volts == pytest.approx(1.0, abs=0.03)
    assert ask(bench.supply, "STAT:QUES:COND?") == "1"
    bench.world.ohms = 1000.0
    assert ask(bench.supply, "STAT:QUES:COND?;EVEN?") == "0;1"


def test_over_voltage_trips_the_output_off_until_it_is_cleared(bench, ask, errors_of):
    ask(bench.supply, "VOLT:PROT 10;:VOLT 9;:OUTP ON")
    bench.world.extra_volts = 3.0
    assert ask(bench.supply, "VOLT:PROT:TRIP?;:OUTP?;:STAT:QUES:COND?") == "1;0;512"
    assert not bench.world.on
    bench.world.extra_volts = 0.0
    ask(bench.supply, "OUTP ON")
    assert errors_of(bench.supply)[-1] == -221
    ask(bench.supply, "OUTP:PROT:CLE;:OUTP ON")
    assert ask(bench.supply, "VOLT:PROT:TRIP?;:OUTP?") == "0;1"


def test_setting_a_voltage_above_the_protection_trips_at_once(bench, ask):
    ask(bench.supply, "VOLT:PROT 5;:OUTP ON;:VOLT 9")
    assert ask(bench.supply, "OUTP?;:VOLT:PROT:TRIP?") == "0;1"


def test_reset_switches_a_supply_off(bench, ask):
    ask(bench.supply, "VOLT 9;:OUTP ON")
    ask(bench.supply, "*RST")
    assert not bench.world.on


# -- multimeter ------------------------------------------------------------------------------------


def set_terminals(bench, volts):
    bench.world.volts, bench.world.limit_amps, bench.world.on = volts, math.inf, True


@pytest.mark.parametrize("volts", [0.0, 0.05, 0.83, -4.9, 9.0, 60.0])
def test_dc_readings_lie_within_the_specification_for_every_instrument_built(make_benches, ask, volts):
    spec = MultimeterSpec()
    row = next(row for row in spec.dc if abs(volts) <= row.full_scale)
    allowed = row.ratio * abs(volts) + row.offset + 5 * row.noise + row.resolution
    for seed in SEEDS:
        bench = make_benches(seed)
        set_terminals(bench, volts)
        assert abs(float(ask(bench.multimeter, f"MEAS:VOLT:DC? {row.full_scale:g}")) - volts) <= allowed


@pytest.mark.parametrize("sign", [1, -1])
def test_a_reading_beyond_120_percent_of_the_range_is_the_infinity_of_scpi(bench, ask, sign):
    # SOURCE: SCPI-1999 volume 1, 7.2.1.4, as public instrument manuals quote it: ±9.9E37
    set_terminals(bench, sign * 1.25)
    assert float(ask(bench.multimeter, "MEAS:VOLT:DC? 1")) == sign * 9.9e37
    set_terminals(bench, sign * 1.19)
    assert float(ask(bench.multimeter, "MEAS:VOLT:DC? 1")) == pytest.approx(sign * 1.19, abs=0.001)


def test_an_open_circuit_reads_infinite_ohms(bench, ask):
    bench.world.ohms = math.inf
    assert float(ask(bench.multimeter, "MEAS:RES?")) == 9.9e37


@pytest.mark.parametrize(
    ("volts", "full_scale"), [(0.05, 0.1), (0.5, 1.0), (5.0, 10.0), (50.0, 100.0), (11.9, 10.0)]
)
def test_autorange_finds_a_range_that_holds_the_value(bench, ask, volts, full_scale):
    set_terminals(bench, volts)
    ask(bench.multimeter, "CONF:VOLT:DC;:VOLT:DC:RANG 0.1;RANG:AUTO ON")
    ask(bench.multimeter, "READ?")
    assert float(ask(bench.multimeter, "VOLT:DC:RANG?")) == full_scale


@pytest.mark.parametrize("cycles", [0.2, 1.0, 10.0, 100.0])
def test_integration_takes_its_mains_cycles_of_bench_time(bench, ask, cycles):
    set_terminals(bench, 1.0)
    ask(bench.multimeter, f"CONF:VOLT:DC 10;:VOLT:DC:NPLC {cycles}")
    before_s = bench.world.time_s
    ask(bench.multimeter, "READ?")
    assert bench.world.time_s - before_s == pytest.approx(cycles / 50.0, rel=1e-12)
    assert bench.world.apertures_s[-1] == cycles / 50.0


def test_noise_falls_with_the_square_root_of_the_integration_time(bench, ask):
    set_terminals(bench, 5.0)
    scatter = {}
    for cycles in (1, 100):
        ask(bench.multimeter, f"CONF:VOLT:DC 10;:VOLT:DC:NPLC {cycles};:SAMP:COUN 2000")
        scatter[cycles] = np.std([float(text) for text in ask(bench.multimeter, "READ?").split(",")])
    step = 1e-5 / math.sqrt(12)  # quantisation adds that of a rectangular distribution
    # 2000 samples: the standard deviation is known to 1.6 %; five times that
    assert math.sqrt(scatter[1] ** 2 - step**2) == pytest.approx(2e-5, rel=0.08)
    assert scatter[100] < 0.25 * scatter[1]


def test_fetch_without_a_reading_is_stale_data_and_with_one_gives_it_again(bench, ask, errors_of):
    ask(bench.multimeter, "*CLS;FETC?")
    assert errors_of(bench.multimeter) == [-230]
    set_terminals(bench, 5.0)
    ask(bench.multimeter, "INIT")
    assert ask(bench.multimeter, "FETC?") == ask(bench.multimeter, "FETC?")


def test_the_function_can_be_chosen_by_name(bench, ask, errors_of):
    ask(bench.multimeter, '*CLS;FUNC "VOLT:AC"')
    assert ask(bench.multimeter, "FUNC?") == '"VOLT:AC"'
    assert float(ask(bench.multimeter, "READ?")) == pytest.approx(0.5, abs=0.001)
    ask(bench.multimeter, '*CLS;:FUNC "HUMIDITY"')
    assert errors_of(bench.multimeter) == [-224]


def test_resistance_is_read_on_every_range(bench, ask):
    for ohms in (10.0, 470.0, 4.7e3, 47e3, 470e3, 4.7e6):
        bench.world.ohms = ohms
        # specification: 0.01 % of reading + 0.004 % of a range at most ten times (here 21 times) the value
        assert float(ask(bench.multimeter, "MEAS:RES?")) == pytest.approx(ohms, rel=0.0015)


# -- relays ----------------------------------------------------------------------------------------


def test_relays_close_open_and_read_back(bench, ask):
    ask(bench.switchbox, "ROUT:CLOS (@101,103:105)")
    assert ask(bench.switchbox, "ROUT:CLOS? (@101:106)") == "1,0,1,1,1,0"
    assert ask(bench.switchbox, "ROUT:OPEN? (@101,102)") == "0,1"
    ask(bench.switchbox, "ROUT:OPEN (@103)")
    assert ask(bench.switchbox, "ROUT:CLOS:STAT?") == "(@101,104,105)"
    ask(bench.switchbox, "ROUT:OPEN:ALL")
    assert bench.switchbox.closed == frozenset()
    assert not any(bench.world.relays.values())


def test_relays_count_their_operations_and_only_real_ones(bench, ask):
    for message in ("ROUT:CLOS (@101)", "ROUT:CLOS (@101)", "ROUT:OPEN (@101)", "ROUT:CLOS (@101,102)"):
        ask(bench.switchbox, message)
    assert ask(bench.switchbox, "DIAG:REL:CYCL? (@101:103)") == "2,1,0"


def test_a_stuck_relay_reads_back_as_it_is_not_as_it_was_told(world, ask):
    box = SimulatedSwitchbox(world, (101, 102), stuck={101: True, 102: False})
    ask(box, "ROUT:OPEN:ALL;:ROUT:CLOS (@102)")
    assert ask(box, "ROUT:CLOS? (@101,102)") == "1,0"
    assert world.relays == {101: True, 102: False}


def test_a_cheap_board_obeys_whole_frames_with_the_right_sum_only(world):
    board = SimulatedRelayBoard(world, range(1, 9))
    board.receive(bytes.fromhex("FF A0 02 01 A3 A0 03"))
    assert board.closed == {2}
    board.receive(bytes.fromhex("01 A4 A0 04 01 00"))  # the second sum is wrong
    assert board.closed == {2, 3}
    assert board.transmit(100) == b""


def test_an_instrument_keeps_a_journal_of_what_it_was_told_and_when(bench, ask):
    bench.world.time_s = 1.5
    ask(bench.supply, "VOLT 9;CURR 0.1")
    assert [(entry.time_s, entry.text) for entry in bench.supply.journal] == [
        (1.5, "VOLT 9"),
        (1.5, "CURR 0.1"),
    ]


def test_a_supply_of_another_specification_keeps_its_own_bounds(world, ask, errors_of):
    supply = SimulatedSupply(
        world,
        errors=np.random.default_rng(1),
        noise=np.random.default_rng(2),
        spec=SupplySpec(max_volts=12.0, max_amps=0.5),
    )
    ask(supply, "*CLS;:VOLT 15")
    assert errors_of(supply) == [-222]
