"""Quantities as people write them."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fixture.domain.quantity import exact_quantity, format_quantity, parse_quantity
from fixture.errors import BadInput

# SI prefixes: BIPM, The International System of Units, 9th edition (2019), table 7. The expected values are
# decimal literals, so they are the floats nearest to what is written: equality is exact.
WRITTEN = [
    ("0.83 mA", "A", 0.00083),
    ("830 µA", "A", 0.00083),
    ("830 uA", "A", 0.00083),
    ("830 \u03bcA", "A", 0.00083),
    ("-4.9 V", "V", -4.9),
    ("\u22124.9 V", "V", -4.9),
    ("+9V", "V", 9.0),
    ("1e-3 V", "V", 0.001),
    ("1.5e1 mV", "V", 0.015),
    ("47 kΩ", "Ω", 47000.0),
    ("47 k\u2126", "Ω", 47000.0),
    ("47 kohm", "Ω", 47000.0),
    ("1 MΩ", "Ω", 1e6),
    ("1 mΩ", "Ω", 1e-3),
    ("22 nF", "F", 22e-9),
    ("560 pF", "F", 560e-12),
    ("2.4 H", "H", 2.4),
    ("50 Hz", "Hz", 50.0),
    ("48 kHz", "Hz", 48000.0),
    ("250 ms", "s", 0.25),
    ("23 °C", "°C", 23.0),
    ("-3.2 dB", "dB", -3.2),
    ("0.1 %", "ratio", 0.001),
    ("20 ppm", "ratio", 20e-6),
    ("3 mV/s", "V/s", 0.003),
    (9, "V", 9.0),
    (0.0004, "A", 0.0004),
    ("0.5", "ratio", 0.5),
    (0.25, "", 0.25),
]

# IEC 60062:2016, clause 6 (letter and digit code for resistance and capacitance values).
LETTERED = [
    ("4k7", "Ω", 4700.0),
    ("4K7", "Ω", 4700.0),
    ("47k", "Ω", 47000.0),
    ("2R2", "Ω", 2.2),
    ("1M5", "Ω", 1.5e6),
    ("4n7", "F", 4.7e-9),
    ("1µ5", "F", 1.5e-6),
]


@pytest.mark.parametrize(("written", "unit", "value"), WRITTEN + LETTERED)
def test_a_written_quantity_is_the_nearest_float_in_the_si_unit(
    written: object, unit: str, value: float
) -> None:
    assert parse_quantity(written, unit) == value


@pytest.mark.parametrize(
    ("written", "unit"),
    [
        ("0.83 mV", "A"),
        ("0.83 MA", "A"),
        ("4.9 X", "V"),
        ("0,83 mA", "A"),
        ("", "V"),
        ("  ", "V"),
        ("4k7", "V"),
        ("4 k 7", "Ω"),
        ("1 2 V", "V"),
        ("nan", "V"),
        ("inf V", "V"),
        ("1e999 V", "V"),
        ("50 hz", "Hz"),
        ("5 %", "V"),
        ("3 dB", "ratio"),
        (True, "V"),
        (None, "V"),
        ([1.0], "V"),
        ({"value": 1}, "V"),
        (math.nan, "V"),
        (math.inf, "A"),
    ],
)
def test_what_is_no_such_quantity_is_refused_in_one_line_with_what_is_accepted(
    written: object, unit: str
) -> None:
    with pytest.raises(BadInput) as caught:
        parse_quantity(written, unit)
    assert "\n" not in str(caught.value)
    assert " is not a " in str(caught.value)
    assert unit.replace("ratio", "%") in str(caught.value).partition(":")[2]


def test_a_decimal_comma_is_explained() -> None:
    with pytest.raises(BadInput, match=r'^"0,83 mA" is not a current: write a point, not a comma'):
        parse_quantity("0,83 mA", "A")


@pytest.mark.parametrize(
    ("value", "unit", "text"),
    [
        (0.0007021, "A", "702.1 µA"),
        (-4.9123, "V", "-4.912 V"),
        (-4.9, "V", "-4.900 V"),
        (51.2, "dB", "51.20 dB"),
        (-0.001, "dB", "0.00 dB"),
        (0.0, "dB", "0.00 dB"),
        (-123.456, "dB", "-123.5 dB"),
        (47000, "Ω", "47 kΩ"),
        (4700, "Ω", "4.7 kΩ"),
        (0.99996, "V", "1.000 V"),
        (0.00099996, "A", "1.000 mA"),
        (50.0, "Hz", "50 Hz"),
        (1200.0, "s", "1200 s"),
        (0.025, "s", "25 ms"),
        (23.0, "°C", "23 °C"),
        (0.001, "ratio", "0.1 %"),
        (0.0, "V", "0 V"),
        (0.003, "V/s", "3.000 mV/s"),
        (math.inf, "V", "inf V"),
    ],
)
def test_a_quantity_is_shown_with_prefix_and_significant_digits(value: float, unit: str, text: str) -> None:
    assert format_quantity(value, unit) == text


UNITS = st.sampled_from(["V", "A", "Ω", "F", "H", "Hz", "s", "W", "°C", "dB", "ratio", "V/s", ""])


@given(st.floats(allow_nan=False, allow_infinity=False), UNITS)
def test_what_is_written_exactly_is_read_back_as_the_same_float(value: float, unit: str) -> None:
    assert parse_quantity(exact_quantity(value, unit), unit) == value


@given(st.floats(min_value=-1e9, max_value=1e9), UNITS.filter(lambda unit: unit != "dB"), st.integers(2, 10))
def test_what_is_shown_is_off_by_half_a_last_digit_at_most(value: float, unit: str, digits: int) -> None:
    shown = parse_quantity(format_quantity(value, unit, digits=digits), unit)
    # Half a unit in the last of `digits` significant digits: relative 0.5 * 10^(1 - digits).
    assert math.isclose(shown, value, rel_tol=0.5001 * 10.0 ** (1 - digits), abs_tol=5e-324)
