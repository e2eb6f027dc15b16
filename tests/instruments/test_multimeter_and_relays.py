"""The drivers of multimeter and switchbox: ranges, uncertainty, break before make, boxes without answers."""

from __future__ import annotations

import dataclasses
import time

import pytest

from drivers.dialect import MultimeterDialect, load_dialect
from drivers.errors import BackendUnavailable, DriverError, ReadbackMismatch, ReplyGarbled
from drivers.link import open_link
from drivers.multimeter import MultimeterDriver, open_multimeter
from drivers.scpi import ScpiExchange
from drivers.simulated.switchbox import SimulatedRelayBoard, SimulatedSwitchbox
from drivers.switchbox import open_switchbox


def at(bench, volts):
    bench.world.volts, bench.world.limit_amps, bench.world.on = volts, 1e9, True


# -- multimeter --------------------------------------------------------------------------------------


@pytest.fixture
def meter(bench, in_process):
    return open_multimeter(in_process(bench.multimeter), dialect="scpi_multimeter", clock=bench.world)


@pytest.mark.parametrize(
    ("expected", "full_scale"),
    [(0.0, 0.1), (0.09, 0.1), (0.1, 1.0), (-4.9, 10.0), (9.6, 100.0), (5e3, 1000.0)],
)
def test_the_expectation_picks_the_smallest_range_with_room(bench, meter, expected, full_scale):
    meter.read_dc_volts(expect_volts=expected)
    assert f"CONF:VOLT:DC {full_scale:g}" in [entry.text for entry in bench.multimeter.journal]


@pytest.mark.parametrize(("asked", "taken"), [(0.01, 0.02), (1.0, 1.0), (2.0, 10.0), (500.0, 100.0)])
def test_the_integration_is_the_next_longer_one_that_the_meter_has(bench, meter, asked, taken):
    meter.read_dc_volts(expect_volts=1.0, power_line_cycles=asked)
    assert bench.world.apertures_s[-1] == pytest.approx(taken / 50.0)


def test_the_uncertainty_is_that_of_the_range_in_use(bench, meter):
    # by hand, range of 10 V: a = 0.00005·5 + 0.0004 = 0.65 mV; u² = (0.65/√3)² + (0.01/√12)² + 0.02² mV²
    at(bench, 5.0)
    assert meter.read_dc_volts(expect_volts=5.0).u == pytest.approx(0.37584e-3, rel=1e-3)


def test_a_range_chosen_by_the_meter_counts_with_the_worst_it_may_have_been(bench, meter):
    # 1.1 V: within 120 % of the 1 V range and above 10 % of the 10 V range; by hand, range of 10 V:
    # a = 0.00005·1.1 + 0.0004 = 0.455 mV; u² = (0.455/√3)² + (0.01/√12)² + 0.02² = 0.26348² mV²
    at(bench, 1.1)
    assert meter.read_dc_volts().u == pytest.approx(0.26348e-3, rel=1e-3)
    at(bench, 0.5)
    assert meter.read_dc_volts().u == pytest.approx(meter.read_dc_volts(expect_volts=0.5).u, rel=1e-4)


def test_readings_agree_with_the_world_within_their_uncertainty_for_every_instrument(
    make_benches, in_process
):
    inside = 0
    for seed in range(100):
        bench = make_benches(seed)
        at(bench, 4.9)
        driver = open_multimeter(in_process(bench.multimeter), dialect="scpi_multimeter", clock=bench.world)
        measured = driver.read_dc_volts(expect_volts=4.9)
        inside += abs(measured.value - 4.9) <= 2.0 * measured.u
    # rectangular errors within ±√3·u: 2u holds them all
    assert inside == 100


def test_the_configuration_is_sent_again_after_the_link_was_recovered(bench, meter):
    meter.read_dc_volts(expect_volts=5.0)
    bench.multimeter.reset()  # as after a power cut
    meter._exchange.link.mark_dirty()
    meter.read_dc_volts(expect_volts=5.0)
    meter.read_dc_volts(expect_volts=5.0)
    told = [entry.text for entry in bench.multimeter.journal]
    assert told.count("CONF:VOLT:DC 10") == 2
    assert [text for text in told if text[:4] in ("CONF", "READ")] == ["CONF:VOLT:DC 10", "READ?"] * 2 + [
        "READ?"
    ]


def test_a_meter_without_ohms_says_so(bench, in_process):
    dialect = load_dialect("scpi_multimeter", MultimeterDialect)
    dialect = dataclasses.replace(dialect, commands=dataclasses.replace(dialect.commands, ohms_auto=""))
    driver = MultimeterDriver(ScpiExchange(open_link(in_process(bench.multimeter))), dialect, bench.world)
    with pytest.raises(BackendUnavailable, match="does not measure ohms"):
        driver.read_ohms()


def test_a_meter_that_cannot_be_told_its_range_still_reads(bench, in_process):
    dialect = load_dialect("scpi_multimeter", MultimeterDialect)
    commands = dataclasses.replace(dialect.commands, dc_range="", dc_cycles="")
    driver = MultimeterDriver(
        ScpiExchange(open_link(in_process(bench.multimeter))),
        dataclasses.replace(dialect, commands=commands),
        bench.world,
    )
    at(bench, 5.0)
    assert driver.read_dc_volts(expect_volts=5.0).value == pytest.approx(5.0, abs=0.001)


# -- relays ------------------------------------------------------------------------------------------


@pytest.fixture
def box(bench, in_process):
    return open_switchbox(in_process(bench.switchbox), dialect="scpi_switchbox", clock=bench.world)


def test_contacts_break_before_others_make_with_a_wait_between(bench, box):
    box.set_channels(close=[101], open=[])
    bench.world.events.clear()
    box.set_channels(close=[102], open=[101])
    assert bench.world.events == ["open 101", "wait 0.01", "close 102", "wait 0.01"]


def test_nothing_is_closed_when_a_relay_does_not_open(world, in_process):
    stuck = SimulatedSwitchbox(world, (101, 102), stuck={101: True})
    driver = open_switchbox(in_process(stuck), dialect="scpi_switchbox", clock=world)
    with pytest.raises(ReadbackMismatch, match="101 should be open"):
        driver.set_channels(close=[102], open=[101])
    assert stuck.closed == {101}


def test_opening_all_is_verified_too(world, in_process):
    class Welding(SimulatedSwitchbox):
        def reset(self):
            """The coils let go and the contacts stay."""

    welded = Welding(world, (101, 102))
    driver = open_switchbox(in_process(welded), dialect="scpi_switchbox", clock=world)
    driver.set_channels(close=[101], open=[])
    with pytest.raises(ReadbackMismatch, match="101 should be open"):
        driver.open_all()


def test_a_channel_cannot_be_open_and_closed_at_once(box):
    with pytest.raises(DriverError, match=r"\[101\]"):
        box.set_channels(close=[101], open=[101, 102])


def test_states_that_do_not_fit_the_question_are_garbled(world, in_process):
    class Shy(SimulatedSwitchbox):
        def _states(self, channels, closed):
            return "1"

    driver = open_switchbox(in_process(Shy(world, (101, 102))), dialect="scpi_switchbox", clock=world)
    with pytest.raises(ReplyGarbled, match="2 states"):
        driver.closed_channels([101, 102])


def test_a_board_that_never_answers_is_taken_at_its_word(world, over_pty):
    board = SimulatedRelayBoard(world, range(1, 17))
    driver = open_switchbox(over_pty(board), dialect="serial_relays", clock=world)
    driver.set_channels(close=[1, 16], open=[2])
    assert driver.closed_channels([1, 2, 16]) == {1, 16}
    assert not driver.reads_back
    assert driver.identify().model == "serial relay board, frames A0 relay state sum"
    wait_until(lambda: board.closed == {1, 16})
    driver.open_all()
    wait_until(lambda: board.closed == frozenset())
    driver.close()
    # frames by hand: A0+10+01 = B1
    assert "a0 10 01 b1" in [entry.text for entry in board.journal]


def wait_until(condition):
    end_s = time.monotonic() + 2.0
    while not condition() and time.monotonic() < end_s:
        time.sleep(0.005)
    assert condition()
