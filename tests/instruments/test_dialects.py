"""Dialect files: what comes with toeline is usable, and every fault of a file is told with its line."""

from __future__ import annotations

import math
from importlib import resources

import pytest

from drivers.dialect import (
    AccuracyRow,
    MultimeterDialect,
    SupplyDialect,
    SwitchboxDialect,
    load_dialect,
    parse_dialect,
)
from drivers.errors import BadDialect

KINDS = {"supply": SupplyDialect, "multimeter": MultimeterDialect, "switchbox": SwitchboxDialect}


def shipped(name):
    return (resources.files("drivers") / "dialects" / f"{name}.toml").read_text(encoding="utf-8")


@pytest.mark.parametrize(
    ("name", "role"),
    [
        ("scpi_supply", "supply"),
        ("scpi_multimeter", "multimeter"),
        ("scpi_switchbox", "switchbox"),
        ("serial_relays", "switchbox"),
    ],
)
def test_every_dialect_that_comes_with_toeline_can_be_used(name, role):
    dialect = load_dialect(name, KINDS[role])
    assert dialect.name == name and dialect.title
    assert dialect.link.confirm == dialect.scpi.identify


def test_a_dialect_can_be_a_file_of_ones_own(tmp_path):
    path = tmp_path / "mine.toml"
    path.write_text(shipped("scpi_supply").replace("VOLT {volts:.4f}", "VSET {volts:.2f}"), encoding="utf-8")
    assert load_dialect(path, SupplyDialect).commands.set_volts == "VSET {volts:.2f}"
    assert load_dialect(str(path), SupplyDialect).name == "mine"


def test_an_unknown_name_offers_the_known_ones():
    with pytest.raises(BadDialect, match="scpi_multimeter, scpi_supply, scpi_switchbox, serial_relays"):
        load_dialect("scpi_suply", SupplyDialect)


def test_a_file_that_is_not_there_is_named(tmp_path):
    with pytest.raises(BadDialect, match=r"nowhere\.toml"):
        load_dialect(tmp_path / "nowhere.toml", SupplyDialect)


def line_with(text, part):
    return next(number for number, line in enumerate(text.splitlines(), 1) if part in line)


@pytest.mark.parametrize(
    ("old", "new", "told"),
    [
        ("format = 1", "format = 2", "reads format = 1"),
        ('role = "supply"', 'role = "multimeter"', 'role = "supply"'),
        ('output_on = "OUTP ON"', 'output_on = "OUTP {state}"', "no placeholder"),
        ("VOLT {volts:.4f}", "VOLT", "no place for its value"),
        ("VOLT {volts:.4f}", "VOLT {volt}", "accepted: {volts}"),
        ("VOLT {volts:.4f}", "VOLT {volts", "no usable template"),
        ("VOLT {volts:.4f}", "VOLT {volts:d}", "no usable template"),
        ('ask_volts = "VOLT?"', "ask_volts = 5", "text in ASCII"),
        ("max_volts = 20.0", 'max_volts = "20 V"', "a number of at least 0"),
        ("max_volts = 20.0", "max_volts = -1", "a number of at least 0"),
        ("max_volts = 20.0", "max_volts = nan", "a number of at least 0"),
        ("current_limit_bit = 0 ", "current_limit_bit = 0.5 ", "a whole number"),
        ("on_s = 0.05", "on_s = true", "a number of at least 0"),
        (
            'clear_protection = "OUTP:PROT:CLE"',
            'clear_output = "OUTP:PROT:CLE"',
            'unknown key "clear_output"',
        ),
        ("timeout_s = 2.0", "timeout = 2.0", 'unknown key "timeout"'),
    ],
)
def test_each_fault_is_told_with_its_line_and_what_is_accepted(old, new, told):
    text = shipped("scpi_supply").replace(old, new, 1)
    with pytest.raises(BadDialect) as caught:
        parse_dialect(text, "mine.toml", SupplyDialect)
    assert f"mine.toml:{line_with(text, new)}: " in str(caught.value)
    assert told in str(caught.value)


def test_all_faults_are_told_together_in_the_order_of_their_lines():
    text = (
        shipped("scpi_supply")
        .replace("format = 1", "format = 3")
        .replace('measure_volts = "MEAS:VOLT?"\n', "")
        .replace("max_amps = 1.0", "max_amps = false")
        .replace("up_to = 1.1", "up_to = 0")
    )
    with pytest.raises(BadDialect) as caught:
        parse_dialect(text, "mine.toml", SupplyDialect)
    lines = [int(line.split(":")[1]) for line in str(caught.value).splitlines()]
    assert len(lines) == 4 and lines == sorted(lines)
    assert '"measure_volts" is missing in [commands]' in str(caught.value)


def test_a_file_that_is_no_toml_is_told_with_its_line():
    text = shipped("scpi_supply").replace("max_amps = 1.0", "max_amps = 1.0.0")
    with pytest.raises(BadDialect, match=rf"mine\.toml:{line_with(text, '1.0.0')}: "):
        parse_dialect(text, "mine.toml", SupplyDialect)


def test_ranges_must_rise_and_the_fault_points_at_the_row():
    text = shipped("scpi_multimeter").replace("up_to = 10.0", "up_to = 0.5", 1)
    with pytest.raises(BadDialect, match=rf"mine\.toml:{line_with(text, 'up_to = 0.5')}: .*rising"):
        parse_dialect(text, "mine.toml", MultimeterDialect)


def test_a_function_without_accuracy_is_refused():
    text = shipped("scpi_multimeter").split("[[ohms]]")[0]
    with pytest.raises(BadDialect, match=r"ohms_auto needs the accuracy of its ranges: \[\[ohms\]\]"):
        parse_dialect(text, "mine.toml", MultimeterDialect)


def test_relays_that_cannot_be_opened_all_at_once_must_be_listed():
    text = shipped("scpi_switchbox").replace('open_all = "ROUT:OPEN:ALL"\n', "")
    with pytest.raises(BadDialect, match="must be listed"):
        parse_dialect(text, "mine.toml", SwitchboxDialect)


def test_frames_must_be_bytes():
    text = shipped("serial_relays").replace("A0 {channel:02X} 01", "XX {channel:02X} 01")
    with pytest.raises(BadDialect, match="no row of bytes"):
        parse_dialect(text, "mine.toml", SwitchboxDialect)


def test_the_uncertainty_adds_accuracy_step_and_scatter_as_the_gum_has_it():
    # JCGM 100:2008, 4.3.7 and F.2.2.1, by hand: a = 0.01·2 + 0.01 = 0.03; u² = 0.03²/3 + 0.012²/12 + 0.004²/4
    row = AccuracyRow(up_to=10.0, ratio=0.01, offset=0.01, resolution=0.012, repeatability=0.004)
    by_hand = math.sqrt(0.0009 / 3 + 0.000144 / 12 + 0.000016 / 4)
    assert row.standard_uncertainty(-2.0, averaged=4.0) == pytest.approx(by_hand, rel=1e-12)
