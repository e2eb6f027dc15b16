"""The supply's driver: protection before output, one switch-on only, and off is off or said not to be."""

from __future__ import annotations

import dataclasses

import pytest

from drivers.dialect import SupplyDialect, load_dialect
from drivers.errors import (
    DriverError,
    InstrumentError,
    LinkError,
    LinkTimeout,
    Overload,
    ProtectionTripped,
    ReadbackMismatch,
)
from drivers.link import LinkSettings, open_link
from drivers.scpi import ScpiExchange
from drivers.supply import SupplyDriver

QUICK = LinkSettings(timeout_s=0.15, quiet_s=0.02)


class Between:
    """Stands between driver and supply; `meddle` may replace what the driver says (None swallows it)."""

    def __init__(self, device, meddle):
        self.device = device
        self.meddle = meddle
        self.heard = []

    def __getattr__(self, name):
        return getattr(self.device, name)

    def receive(self, data):
        self.heard.append(data.decode().strip())
        changed = self.meddle(data)
        if changed is not None:
            self.device.receive(changed)


@pytest.fixture
def drive(bench, in_process):
    """Return a function that opens a driver on the supply, through a meddler, in a changed dialect."""

    def open_driver(meddle=lambda data: data, *, amps_up_to=1.1, **commands):
        dialect = load_dialect("scpi_supply", SupplyDialect)
        dialect = dataclasses.replace(
            dialect,
            commands=dataclasses.replace(dialect.commands, **commands),
            read_amps=(dataclasses.replace(dialect.read_amps[0], up_to=amps_up_to),),
        )
        between = Between(bench.supply, meddle)
        driver = SupplyDriver(ScpiExchange(open_link(in_process(between), QUICK)), dialect, bench.world)
        return driver, between

    return open_driver


def power_up(driver):
    driver.set_protection(over_volts=12.0, limit_amps=0.1)
    driver.set_volts(9.0)
    driver.output_on()


def test_protection_and_limit_are_set_before_the_output_goes_on(bench, drive):
    driver, _ = drive()
    power_up(driver)
    told = [entry.text for entry in bench.supply.journal]
    on = told.index("OUTP ON")
    for before in ("VOLT:PROT 12.000", "VOLT:PROT?", "CURR 0.10000", "CURR?", "VOLT 9.0000", "VOLT?"):
        assert told.index(before) < on
    assert told.count("OUTP ON") == 1


def test_the_output_stays_off_without_protection(bench, drive):
    driver, _ = drive()
    with pytest.raises(DriverError, match="no protection"):
        driver.output_on()
    assert "OUTP ON" not in [entry.text for entry in bench.supply.journal]


def test_the_output_stays_off_when_the_protection_could_not_be_verified(bench, drive):
    driver, between = drive(lambda data: data.replace(b"CURR 0.10000", b"CURR 0.5"))
    with pytest.raises(ReadbackMismatch, match=r"CURR 0\.10000.*reads back 0\.5 A"):
        driver.set_protection(over_volts=12.0, limit_amps=0.1)
    with pytest.raises(DriverError, match="no protection"):
        driver.output_on()
    assert "OUTP ON" not in between.heard


def test_a_voltage_left_over_from_before_is_taken_down_first(bench, drive):
    bench.supply.receive(b"VOLT 18\n")
    driver, _ = drive()
    driver.set_protection(over_volts=12.0, limit_amps=0.1)
    assert bench.supply.volts == 0.0


@pytest.mark.parametrize(
    ("over_volts", "limit_amps"), [(12.0, 2.0), (99.0, 0.1), (-1.0, 0.1), (12.0, float("nan"))]
)
def test_protection_that_the_supply_cannot_have_is_refused(drive, over_volts, limit_amps):
    driver, between = drive()
    with pytest.raises(DriverError, match="allowed is 0 to"):
        driver.set_protection(over_volts=over_volts, limit_amps=limit_amps)
    assert not any(text.startswith("VOLT:PROT ") for text in between.heard)


def test_no_voltage_above_the_protection_is_ever_sent(drive):
    driver, between = drive()
    driver.set_protection(over_volts=10.0, limit_amps=0.1)
    with pytest.raises(DriverError, match="10"):
        driver.set_volts(12.0)
    assert "VOLT 12.0000" not in between.heard


def test_an_output_that_stays_off_is_a_mismatch(drive):
    driver, _ = drive(lambda data: None if data.startswith(b"OUTP ON") else data)
    with pytest.raises(ReadbackMismatch, match="reads back as off"):
        power_up(driver)


def test_switching_on_is_not_repeated_when_the_link_fails_right_after_it(drive):
    told = []

    def dumb_after_on(data):
        told.append(data)
        return None if b"OUTP ON\n" in told and b"IDN" not in data else data

    driver, between = drive(dumb_after_on)
    with pytest.raises(LinkError):
        power_up(driver)
    assert between.heard.count("OUTP ON") == 1


def test_a_trip_is_reported_by_the_next_reading(bench, drive):
    driver, _ = drive()
    power_up(driver)
    bench.world.extra_volts = 5.0
    with pytest.raises(ProtectionTripped, match=r"12\.0 V"):
        driver.read_volts()
    assert not bench.world.on
    assert ProtectionTripped.mend == "unit"


def test_a_tripped_supply_is_not_switched_on_before_it_was_set_up_again(bench, drive):
    driver, between = drive()
    power_up(driver)
    bench.world.extra_volts = 5.0
    with pytest.raises(ProtectionTripped):
        driver.read_amps()
    with pytest.raises(ProtectionTripped):
        driver.output_on()
    assert between.heard.count("OUTP ON") == 1
    bench.world.extra_volts = 0.0
    power_up(driver)
    assert driver.output_is_on()


def test_a_supply_without_over_voltage_protection_is_watched_by_the_driver(bench, drive):
    driver, between = drive(set_over_volts="", ask_over_volts="", ask_tripped="", clear_protection="")
    power_up(driver)
    bench.world.extra_volts = 5.0
    with pytest.raises(ProtectionTripped, match="off now"):
        driver.read_volts()
    assert not bench.world.on
    assert not any("PROT" in text for text in between.heard)


def test_a_supply_that_cannot_tell_its_output_state_is_judged_by_its_voltage(bench, drive):
    driver, _ = drive(ask_output="")
    power_up(driver)
    assert driver.output_is_on()
    driver.output_off()
    assert not driver.output_is_on()


def test_a_supply_without_a_condition_register_is_in_limit_when_its_current_says_so(bench, drive):
    driver, _ = drive(ask_condition="")
    power_up(driver)
    assert not driver.in_current_limit()
    bench.world.ohms = 10.0
    assert driver.in_current_limit()


def test_switching_off_goes_on_after_a_failure(bench, drive):
    failures = [b"OUTP OFF\n"]
    driver, between = drive(lambda data: failures.clear() if data in failures else data)
    power_up(driver)
    driver.output_off()
    assert between.heard.count("OUTP OFF") == 2
    assert not bench.world.on


def test_an_old_error_in_the_queue_does_not_keep_the_output_on(bench, drive):
    driver, _ = drive()
    power_up(driver)
    bench.supply.status.add_error(-310, "System error")
    driver.output_off()
    assert not bench.world.on and not bench.supply.status.errors


def test_an_output_that_does_not_go_off_is_said_so_plainly(bench, drive):
    driver, _ = drive(lambda data: None if data.startswith(b"OUTP OFF") else data)
    power_up(driver)
    with pytest.raises(ReadbackMismatch, match="MAY STILL BE ON"):
        driver.output_off()


def test_a_silent_supply_may_still_be_on_and_the_operator_hears_of_it(drive):
    driver, _ = drive(lambda data: None)
    with pytest.raises(LinkTimeout, match="MAY STILL BE ON"):
        driver.output_off()


def test_waiting_goes_through_the_clock(bench, drive):
    driver, _ = drive()
    power_up(driver)
    assert bench.world.events == ["wait 0.05", "wait 0.05"]


def test_a_current_beyond_the_stated_accuracy_is_no_value(bench, drive):
    driver, _ = drive(amps_up_to=0.01)
    power_up(driver)
    with pytest.raises(Overload, match=r"0\.01 A"):
        driver.read_amps()


def test_a_refused_voltage_is_the_instruments_own_error(bench, drive):
    driver, _ = drive(lambda data: data.replace(b"VOLT 9.0000", b"VOLT 99"))
    driver.set_protection(over_volts=12.0, limit_amps=0.1)
    with pytest.raises(InstrumentError, match="-222"):
        driver.set_volts(9.0)


def test_the_uncertainty_of_a_reading_follows_from_the_dialect(bench, drive):
    # JCGM 100:2008, 4.3.7: limits ±a count as a/√3; F.2.2.1: a step δ as δ/√12. By hand for 9.002 V:
    # a = 0.0005 * 9.002 + 0.005 = 9.501 mV; u² = (9.501/√3)² + (1/√12)² + 0.2² (mV²) = 5.4966² mV²
    driver, _ = drive()
    power_up(driver)
    measured = driver.read_volts()
    assert measured.value == pytest.approx(9.002, abs=0.001)
    assert measured.u == pytest.approx(5.4966e-3, rel=1e-3)
