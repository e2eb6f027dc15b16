"""One contract, every transport: the drivers do the same in process, over TCP and over a serial line."""

from __future__ import annotations

import pytest

from drivers.errors import InstrumentError, Overload, ReadbackMismatch
from drivers.link import open_link
from drivers.multimeter import open_multimeter
from drivers.roles import Multimeter, Supply, Switchbox
from drivers.scpi import ScpiExchange
from drivers.simulated.switchbox import SimulatedSwitchbox
from drivers.supply import open_supply
from drivers.switchbox import open_switchbox


@pytest.fixture
def supply(bench, connect):
    driver = open_supply(connect(bench.supply), dialect="scpi_supply", clock=bench.world)
    yield driver
    driver.close()


@pytest.fixture
def multimeter(bench, connect):
    driver = open_multimeter(connect(bench.multimeter), dialect="scpi_multimeter", clock=bench.world)
    yield driver
    driver.close()


@pytest.fixture
def switchbox(bench, connect):
    driver = open_switchbox(connect(bench.switchbox), dialect="scpi_switchbox", clock=bench.world)
    yield driver
    driver.close()


def test_the_drivers_play_their_roles(supply, multimeter, switchbox):
    assert isinstance(supply, Supply)
    assert isinstance(multimeter, Multimeter)
    assert isinstance(switchbox, Switchbox)


def test_every_instrument_says_who_it_is(supply, multimeter, switchbox):
    assert [str(driver.identify()) for driver in (supply, multimeter, switchbox)] == [
        "toeline,simulated supply,S-0001,1.0",
        "toeline,simulated multimeter,M-0001,1.0",
        "toeline,simulated switchbox,X-0001,1.0",
    ]


def test_a_supply_powers_a_resistor_and_goes_off_again(bench, supply):
    supply.set_protection(over_volts=12.0, limit_amps=0.2)
    supply.set_volts(9.0)
    supply.output_on()
    volts, amps = supply.read_volts(), supply.read_amps()
    # Ohm's law: 9 V over 100 Ω; within what setting (0.0095 V) and reading may be off
    assert (volts.value, volts.unit) == (pytest.approx(9.0, abs=0.02), "V")
    assert (amps.value, amps.unit) == (pytest.approx(0.09, abs=0.001), "A")
    assert supply.output_is_on() and not supply.in_current_limit()
    supply.output_off()
    supply.output_off()
    assert not supply.output_is_on() and not bench.world.on


def test_a_supply_says_when_its_current_limit_is_at_work(bench, supply):
    bench.world.ohms = 10.0
    supply.set_protection(over_volts=12.0, limit_amps=0.1)
    supply.set_volts(9.0)
    supply.output_on()
    assert supply.in_current_limit()
    assert supply.read_volts().value == pytest.approx(1.0, abs=0.03)


def test_a_multimeter_reads_volts_and_ohms(bench, multimeter):
    bench.world.volts, bench.world.limit_amps, bench.world.on = -4.9, 1.0, True
    assert multimeter.read_dc_volts(expect_volts=-5.0).value == pytest.approx(-4.9, abs=0.001)
    assert multimeter.read_dc_volts().value == pytest.approx(-4.9, abs=0.001)
    assert multimeter.read_ac_volts(expect_volts=0.5).value == pytest.approx(0.5, abs=0.001)
    assert multimeter.read_ohms().value == pytest.approx(100.0, abs=0.1)
    assert multimeter.input_ohms == 10e6


def test_a_reading_beyond_the_range_is_an_overload_and_no_value(bench, multimeter):
    bench.world.volts, bench.world.limit_amps, bench.world.on = 15.0, 1.0, True
    with pytest.raises(Overload, match="overload"):
        multimeter.read_dc_volts(expect_volts=5.0)
    assert multimeter.read_dc_volts(expect_volts=15.0).value == pytest.approx(15.0, abs=0.01)


def test_the_configuration_is_sent_only_when_it_changes(bench, multimeter):
    for _ in range(3):
        multimeter.read_dc_volts(expect_volts=1.0)
    texts = [entry.text for entry in bench.multimeter.journal]
    # 1 V expected: the range of 1 V has no 5 % to spare
    assert texts.count("CONF:VOLT:DC 10") == 1
    assert texts.count("READ?") == 3


def test_relays_switch_and_read_back(bench, switchbox):
    switchbox.set_channels(close=[101, 105], open=[102])
    assert switchbox.closed_channels([101, 102, 105]) == {101, 105} == bench.switchbox.closed
    switchbox.open_all()
    switchbox.open_all()
    assert bench.switchbox.closed == frozenset()


def test_a_relay_that_does_not_follow_is_named(bench, connect, world):
    box = SimulatedSwitchbox(world, (101, 102, 103), stuck={102: False})
    driver = open_switchbox(connect(box), dialect="scpi_switchbox", clock=world)
    with pytest.raises(ReadbackMismatch, match="102 should be closed"):
        driver.set_channels(close=[101, 102], open=[])
    driver.close()


def test_a_command_that_the_instrument_refuses_carries_its_own_words(bench, connect):
    exchange = ScpiExchange(open_link(connect(bench.supply)))
    with pytest.raises(InstrumentError, match='-222,"Data out of range"') as caught:
        exchange.command("VOLT 99")
    assert (caught.value.code, caught.value.text) == (-222, "Data out of range")
    exchange.command("VOLT 9")  # the queue was emptied: nothing old is blamed on the next command
    exchange.close()


def test_every_error_of_a_burst_is_reported_and_the_queue_left_empty(bench, connect):
    exchange = ScpiExchange(open_link(connect(bench.supply)))
    with pytest.raises(InstrumentError, match=r"-222.*-113"):
        exchange.command("VOLT 99", "NONSENSE")
    assert exchange.read_errors() == ()
    exchange.close()


def test_completion_can_be_waited_for(bench, connect):
    exchange = ScpiExchange(open_link(connect(bench.supply)))
    exchange.wait_complete()
    exchange.clear_status()
    assert exchange.identify() is not None
    exchange.close()
