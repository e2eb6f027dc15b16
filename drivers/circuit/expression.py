"""Numbers with SPICE suffixes, and expressions over parameters, as ngspice reads them.

Grammar, loosest first: ``c ? a : b``, ``||``, ``&&``, comparisons, ``+ -``, ``* / %``, unary sign and ``!``,
``** ^`` (from left to right, of the magnitude of the base).
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import lru_cache

from drivers.circuit.errors import BadExpression, nearest_names

_NUMBER = re.compile(r"(?P<digits>(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)(?P<letters>[A-Za-zµμΩ]*)")
_SIGNED = re.compile(r"[+-]?" + _NUMBER.pattern)
_TOKEN = re.compile(
    r"\s*(?:(?P<number>" + _NUMBER.pattern.replace("?P<digits>", "").replace("?P<letters>", "") + r")"
    r"|(?P<name>[A-Za-z_][A-Za-z0-9_.]*)"
    r"|(?P<sign>\*\*|<=|>=|==|!=|<>|&&|\|\||[-+*/%^()<>?:,!]))"
)
_SUFFIXES = (
    ("meg", "e6"),
    ("t", "e12"),
    ("g", "e9"),
    ("k", "e3"),
    ("m", "e-3"),
    ("u", "e-6"),
    ("µ", "e-6"),
    ("μ", "e-6"),
    ("n", "e-9"),
    ("p", "e-12"),
    ("f", "e-15"),
)


def read_number(text: str) -> float:
    """Return the value of a number with an optional SPICE suffix and unit letters: ``4.7k``, ``5V``.

    ``m`` and ``M`` are both milli, as in SPICE.

    Raises
    ------
    BadExpression
        When the text is not such a number.
    """
    match = _SIGNED.fullmatch(text.strip())
    if match is None:
        raise BadExpression(
            f"'{text}' is not a number (accepted: 4.7k, 10Meg, 1e-6, 33u; suffixes T G Meg k m mil u n p f)"
        )
    letters = match.group("letters").lower()
    digits = match.group(0)[: len(match.group(0)) - len(letters)]
    if letters.startswith("mil"):
        return float(digits) * 25.4e-6
    suffix = next((exponent for name, exponent in _SUFFIXES if letters.startswith(name)), "")
    if "e" in digits.lower():
        return float(digits) * float(f"1{suffix}")
    return float(f"{digits}{suffix}")  # 60n is read as 60e-9, the double nearest to what was written


def _sign(x: float) -> float:
    return math.copysign(1.0, x) if x else 0.0


_FUNCTIONS: dict[str, tuple[int, Callable[..., float]]] = {
    "sqrt": (1, math.sqrt),
    "sqr": (1, lambda x: x * x),
    "exp": (1, math.exp),
    "ln": (1, math.log),
    "log": (1, math.log),
    "log10": (1, math.log10),
    "abs": (1, abs),
    "sgn": (1, _sign),
    "sin": (1, math.sin),
    "cos": (1, math.cos),
    "tan": (1, math.tan),
    "asin": (1, math.asin),
    "acos": (1, math.acos),
    "atan": (1, math.atan),
    "arctan": (1, math.atan),
    "sinh": (1, math.sinh),
    "cosh": (1, math.cosh),
    "tanh": (1, math.tanh),
    "int": (1, lambda x: float(math.trunc(x))),
    "nint": (1, lambda x: float(round(x))),
    "floor": (1, lambda x: float(math.floor(x))),
    "ceil": (1, lambda x: float(math.ceil(x))),
    "min": (2, min),
    "max": (2, max),
    "pow": (2, math.pow),
    "pwr": (2, lambda x, y: math.pow(abs(x), y)),
    "ternary_fcn": (3, lambda c, a, b: a if c else b),
}


@dataclass(frozen=True)
class _Token:
    kind: str
    text: str


def _tokens(text: str) -> list[_Token]:
    found: list[_Token] = []
    at = 0
    stripped = text.rstrip()
    while at < len(stripped):
        match = _TOKEN.match(stripped, at)
        if match is None or match.end() == at:
            raise BadExpression(f"'{text}': cannot read '{stripped[at:].strip()[:12]}'")
        kind = str(match.lastgroup)
        found.append(_Token(kind, match.group(kind)))
        at = match.end()
    return found


@lru_cache(maxsize=4096)
def names_in(text: str) -> frozenset[str]:
    """Return the lower-case names of the parameters that an expression uses.

    Raises
    ------
    BadExpression
        When the text cannot be read.
    """
    tokens = _tokens(text)
    found = set()
    for i, token in enumerate(tokens):
        calls = i + 1 < len(tokens) and tokens[i + 1].text == "("
        name = token.text.lower()
        if token.kind == "name" and not calls:
            found.add(name)
    return frozenset(found)


def evaluate(text: str, values: Mapping[str, float]) -> float:
    """Return the value of an expression.

    Parameters
    ----------
    text : str
        The expression without its braces or quotes.
    values : mapping
        Parameters by lower-case name.

    Raises
    ------
    BadExpression
        When it cannot be read, names something unknown, or has no finite value.
    """
    # the same cards are evaluated again for every position of a knob or relay
    needed = names_in(text)
    if needed <= values.keys():
        return _evaluate(text, tuple((name, values[name]) for name in sorted(needed)))
    return _evaluate(text, tuple(values.items()))  # says what is unknown, and what is known


@lru_cache(maxsize=4096)
def _evaluate(text: str, named: tuple[tuple[str, float], ...]) -> float:
    if _SIGNED.fullmatch(text.strip()):
        return read_number(text)
    values = dict(named)
    reader = _Reader(text, values)
    try:
        result = float(reader.whole())
    except (ZeroDivisionError, ValueError, OverflowError) as error:
        raise BadExpression(f"'{text}' has no value ({error})") from error
    if not math.isfinite(result):
        raise BadExpression(f"'{text}' has no finite value")
    return result


class _Reader:
    """Recursive descent over the tokens of one expression; evaluates while it reads."""

    def __init__(self, text: str, values: Mapping[str, float]) -> None:
        self._text = text
        self._values = values
        self._tokens = _tokens(text)
        self._at = 0

    def whole(self) -> float:
        if not self._tokens:
            raise BadExpression("an empty expression has no value")
        value = self._choice()
        if self._at < len(self._tokens):
            raise BadExpression(f"'{self._text}': '{self._tokens[self._at].text}' was not expected there")
        return value

    def _peek(self) -> str:
        return self._tokens[self._at].text if self._at < len(self._tokens) else ""

    def _take(self, *wanted: str) -> str:
        found = self._peek()
        if found and found in wanted:
            self._at += 1
            return found
        return ""

    def _need(self, wanted: str) -> None:
        if not self._take(wanted):
            raise BadExpression(f"'{self._text}': '{wanted}' is missing before '{self._peek() or 'its end'}'")

    def _choice(self) -> float:
        condition = self._either()
        if not self._take("?"):
            return condition
        yes = self._choice()
        self._need(":")
        no = self._choice()
        return yes if condition else no

    def _either(self) -> float:
        value = self._both()
        while self._take("||"):
            other = self._both()
            value = float(bool(value) or bool(other))
        return value

    def _both(self) -> float:
        value = self._comparison()
        while self._take("&&"):
            other = self._comparison()
            value = float(bool(value) and bool(other))
        return value

    def _comparison(self) -> float:
        value = self._sum()
        while sign := self._take("<", ">", "<=", ">=", "==", "!=", "<>"):
            other = self._sum()
            value = float(_compare(sign, value, other))
        return value

    def _sum(self) -> float:
        value = self._product()
        while sign := self._take("+", "-"):
            other = self._product()
            value = value + other if sign == "+" else value - other
        return value

    def _product(self) -> float:
        value = self._signed()
        while sign := self._take("*", "/", "%"):
            other = self._signed()
            if sign == "*":
                value *= other
            elif sign == "/":
                value /= other
            else:
                value = math.fmod(value, other)
        return value

    def _signed(self) -> float:
        if sign := self._take("-", "+", "!"):
            value = self._signed()
            return -value if sign == "-" else value if sign == "+" else float(not value)
        return self._power()

    def _power(self) -> float:
        value = self._atom()
        while self._take("**", "^"):
            exponent = self._signed_atom()
            value = math.pow(abs(value), exponent)  # ngspice drops the sign of the base
        return value

    def _signed_atom(self) -> float:
        if sign := self._take("-", "+"):
            value = self._signed_atom()
            return -value if sign == "-" else value
        return self._atom()

    def _atom(self) -> float:
        if self._take("("):
            value = self._choice()
            self._need(")")
            return value
        if self._at >= len(self._tokens):
            raise BadExpression(f"'{self._text}' ends too early")
        token = self._tokens[self._at]
        self._at += 1
        if token.kind == "number":
            return read_number(token.text)
        if token.kind == "name":
            return self._call(token.text) if self._peek() == "(" else self._lookup(token.text)
        raise BadExpression(f"'{self._text}': '{token.text}' was not expected there")

    def _call(self, name: str) -> float:
        if name.lower() not in _FUNCTIONS:
            raise BadExpression(f"'{self._text}': no function '{name}' {nearest_names(name, _FUNCTIONS)}")
        count, function = _FUNCTIONS[name.lower()]
        self._need("(")
        given = [self._choice()]
        while self._take(","):
            given.append(self._choice())
        self._need(")")
        if len(given) != count:
            raise BadExpression(f"'{self._text}': {name} takes {count} values, {len(given)} given")
        return float(function(*given))

    def _lookup(self, name: str) -> float:
        lowered = name.lower()
        if lowered in self._values:
            return self._values[lowered]
        raise BadExpression(f"'{self._text}': no parameter '{name}' {nearest_names(name, self._values)}")


def _compare(sign: str, left: float, right: float) -> bool:
    if sign == "<":
        return left < right
    if sign == ">":
        return left > right
    if sign == "<=":
        return left <= right
    if sign == ">=":
        return left >= right
    return (left == right) == (sign == "==")
