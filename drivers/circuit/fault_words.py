"""The words of part faults: what can be said, and what is meant."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from difflib import get_close_matches

from drivers.circuit.errors import BadExpression, BadPartFault
from drivers.circuit.expression import read_number

PIN_OF_WORD: Mapping[str, str] = {
    "c": "c",
    "b": "b",
    "e": "e",
    "collector": "c",
    "base": "b",
    "emitter": "e",
}


@dataclass(frozen=True)
class Amount:
    """A value (`relative` false) or a factor on the present one; `text` is an expression."""

    text: str
    relative: bool

    def applied_to(self, expression: str) -> str:
        """Return the expression of the changed value."""
        return f"({expression})*({self.text})" if self.relative else self.text


@dataclass(frozen=True)
class PartFault:
    """One fault: its `words`, its `kind`, what it names, and how much."""

    words: str
    kind: str
    targets: tuple[str, ...]
    amount: Amount | None = None


@dataclass(frozen=True)
class _Form:
    kind: str
    example: str
    least: int
    most: int
    with_amount: bool = False


_FORMS = (
    _Form("swap pins", "swap pins Q1 b c", 3, 3),
    _Form("wrong part", "wrong part Q1 silicon npn", 2, 4),
    _Form("open", "open R3", 1, 1),
    _Form("short", "short C2", 1, 1),
    _Form("value", "value R3 4k7 (or x10, /100)", 1, 1, with_amount=True),
    _Form("swap", "swap R3 R5", 2, 2),
    _Form("leaky", "leaky C3 100k (transistor: leaky Q1 x5)", 1, 1, with_amount=True),
    _Form("gain", "gain Q1 30", 1, 1, with_amount=True),
    _Form("backwards", "backwards volume", 1, 1),
    _Form("bridge", "bridge q2c supply", 2, 2),
    _Form("lift", "lift Q1 e", 1, 2),
    _Form("reversed", "reversed D1", 1, 1),
)
_SYNONYMS = {
    "missing": "open",
    "break": "open",
    "broken": "open",
    "cut": "open",
    "no": "open",
    "shorted": "short",
    "reverse": "reversed",
    "flipped": "reversed",
    "leak": "leaky",
    "leaks": "leaky",
}
_ACCEPTED = "; ".join(form.example for form in _FORMS)
_CODE = re.compile(r"(\d+)([RrkKMmuµnpGg])(\d+)")
_CODE_FACTORS = {
    "r": "",
    "k": "e3",
    "M": "e6",
    "g": "e9",
    "m": "e-3",
    "u": "e-6",
    "µ": "e-6",
    "n": "e-9",
    "p": "e-12",
}


def parse_fault(words: str) -> PartFault:
    """Return the fault that plain words describe; whether the netlist can have it is seen in `apply_faults`.

    Accepted: ``open R3``, ``short C2``, ``value R3 4k7``, ``value C1 x10``, ``value volume /10``,
    ``swap pins Q1 b c``, ``swap R3 R5``, ``wrong part Q1 silicon npn``, ``leaky C3 100k``, ``leaky Q1 x5``,
    ``gain Q1 30``, ``backwards volume``, ``bridge q2c supply``, ``lift Q1 e``, ``reversed D1``.

    Raises
    ------
    BadPartFault
        When the words are not understood; the message lists what is accepted.
    """
    said = words.split()
    lowered = " ".join(said).lower()
    for form in _FORMS:
        if lowered == form.kind or lowered.startswith(form.kind + " "):
            break
    else:
        raise BadPartFault(f"'{words}': not a fault{_nearest_form(said)} (accepted: {_ACCEPTED})")
    targets = said[len(form.kind.split()) :]
    amount = None
    if form.with_amount and len(targets) > 1:
        amount = _read_amount(words, targets.pop(), form)
    if not form.least <= len(targets) <= form.most:
        wrong = "too short" if len(targets) < form.least else "too long"
        raise BadPartFault(f"'{words}': {wrong}: write it like '{form.example}'")
    if form.with_amount and amount is None:
        raise BadPartFault(f"'{words}': the amount is missing: write it like '{form.example}'")
    return PartFault(" ".join(said), form.kind, tuple(targets), amount)


def _nearest_form(said: list[str]) -> str:
    """Offer the form that was meant: a word of it in another place, or another word for it."""
    for word in (said[0], *said[-1:]) if said else ():
        meant = _SYNONYMS.get(word.lower()) or next(
            iter(get_close_matches(word.lower(), [form.kind for form in _FORMS], n=1, cutoff=0.7)), None
        )
        if meant:
            others = " ".join(other for other in said if other != word)
            return f", did you mean '{meant} {others}'?"
    return ""


def _read_amount(words: str, text: str, form: _Form) -> Amount:
    relative = text[0] in "x×*/" and len(text) > 1
    number = text[1:] if relative else text
    try:
        value = _number(number)
    except BadExpression as error:
        raise BadPartFault(f"'{words}': '{text}' is not an amount (accepted: {form.example})") from error
    if value <= 0.0:
        raise BadPartFault(f"'{words}': the amount must be greater than zero (accepted: {form.example})")
    return Amount(f"1/{value!r}" if text[0] == "/" and relative else repr(value), relative)


def _number(text: str) -> float:
    """Read 4k7, 2n2, 4R7 and 1M (mega), as on parts (IEC 60062), besides what netlists accept."""
    code = _CODE.fullmatch(text)
    if code:
        whole, letter, part = code.groups()
        return float(f"{whole}.{part}{_CODE_FACTORS[letter if letter == 'M' else letter.lower()]}")
    if re.fullmatch(r"[\d.]+M(Ω|ohms?)?", text):
        return float(text.rstrip("ohmsΩ").removesuffix("M")) * 1e6
    return read_number(text)
