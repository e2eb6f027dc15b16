"""Numbers and expressions of netlists."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from drivers.circuit.errors import BadExpression
from drivers.circuit.expression import evaluate, names_in, read_number


@pytest.mark.parametrize(
    ("text", "value"),
    [
        # SOURCE: SPICE3 user's manual (UCB, 1993), section 2.1, scale factors
        ("1T", 1e12),
        ("1G", 1e9),
        ("1Meg", 1e6),
        ("1MEG", 1e6),
        ("1K", 1e3),
        ("1mil", 25.4e-6),
        ("1m", 1e-3),
        ("1M", 1e-3),
        ("1u", 1e-6),
        ("1n", 1e-9),
        ("1p", 1e-12),
        ("1f", 1e-15),
        # same section: letters after the number that are not scale factors are ignored
        ("10V", 10.0),
        ("10Volts", 10.0),
        ("1000Hz", 1000.0),
        ("1.0KHz", 1000.0),
        ("1e3", 1000.0),
        ("1.5e-3k", 1.5),
        ("-4.7k", -4700.0),
        (".5", 0.5),
    ],
)
def test_numbers_carry_spice_scale_factors_and_unit_letters(text: str, value: float) -> None:
    assert read_number(text) == pytest.approx(value, rel=1e-15)


@pytest.mark.parametrize("text", ["", "k", "4k7", "1..2", "0x10", "--3", "1,5"])
def test_what_is_not_a_number_is_refused_with_what_is_accepted(text: str) -> None:
    with pytest.raises(BadExpression, match="accepted"):
        read_number(text)


# SOURCE: ngspice 39 (Debian), the same text as .param, read back with "print" (2026); seven digits shown
# there.
_NGSPICE = [
    ("2^3^2", 64.0),
    ("-2**2", -4.0),
    ("log(10)", 2.302585),
    ("log10(100)", 2.0),
    ("(-2)^2", 4.0),
    ("(-2)**3", 8.0),
    ("nint(2.5)", 2.0),
    ("nint(-2.5)", -2.0),
    ("7%4", 3.0),
    ("3.5%2", 1.5),
    ("int(-2.5)", -2.0),
    ("2**-1", 0.5),
    ("2^-1^2", 0.25),
    ("5/2*2", 5.0),
    ("2>1?3:4", 3.0),
    ("1?2:0?5:6", 2.0),
    ("1<>2", 1.0),
    ("!0", 1.0),
    ("1&&0 || 1", 1.0),
    ("min(1,2)+max(1,2)", 3.0),
    ("pwr(-2,2)", 4.0),
    ("pwr(-2,3)", 8.0),
    ("pow(-2,3)", -8.0),
    ("sgn(-3)", -1.0),
    ("1k+1Meg+1mil", 1001000.0),
    ("2*-3", -6.0),
    ("atan(1)", 0.7853982),
    ("ceil(1.2)+floor(-1.2)", 0.0),
]


@pytest.mark.parametrize(("text", "value"), _NGSPICE)
def test_expressions_have_the_value_that_ngspice_gives_them(text: str, value: float) -> None:
    assert evaluate(text, {}) == pytest.approx(value, rel=5e-7, abs=1e-12)


@given(
    st.floats(-1e6, 1e6),
    st.floats(-1e6, 1e6),
    st.floats(0.5, 9.0),
)
def test_arithmetic_is_that_of_the_language(a: float, b: float, c: float) -> None:
    values = {"a": a, "b": b, "c": c}
    assert evaluate("a + b*c - (a - b)/c", values) == pytest.approx(a + b * c - (a - b) / c, rel=1e-12)


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_every_double_is_read_back_as_it_was_printed(number: float) -> None:
    assert evaluate(repr(number), {}) == number


def test_names_of_parameters_are_found_without_functions() -> None:
    assert names_in("Fuzz_Ohms*(1 - fuzz) + max(a1, 2k)") == {"fuzz_ohms", "fuzz", "a1"}


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("a + zz", "no parameter 'zz'"),
        ("sqroot(4)", "no function 'sqroot'.*nearest: sqrt"),
        ("pow(2)", "pow takes 2 values, 1 given"),
        ("(1 + 2", r"'\)' is missing"),
        ("1 +", "ends too early"),
        ("1 2", "'2' was not expected"),
        ("", "empty"),
        ("1/0", "no value"),
        ("sqrt(-1)", "no value"),
        ("exp(1e4)", "no value"),
        ("1 # 2", "cannot read '#"),
    ],
)
def test_a_bad_expression_says_what_is_wrong(text: str, words: str) -> None:
    with pytest.raises(BadExpression, match=words):
        evaluate(text, {"a": 1.0})


def test_the_logarithm_is_natural() -> None:
    assert evaluate("log(x)", {"x": math.e}) == pytest.approx(1.0)
