"""One card of a netlist at a time: words, parts, models, assignments."""

from __future__ import annotations

import re
from collections.abc import Callable

from drivers.circuit.cards import Model, Part
from drivers.circuit.errors import BadExpression
from drivers.circuit.expression import read_number
from drivers.circuit.model_parameters import canonical_name

_WORD = re.compile(r"\{[^{}]*\}|'[^']*'|=|[()]|[^\s,(){}'=]+")
_NODES_OF = {"r": 2, "c": 2, "l": 2, "v": 2, "i": 2, "e": 4, "g": 4, "d": 2, "q": 3}
_VALUE_OF = {"r": "ohms", "c": "farads", "l": "henries", "e": "a gain", "g": "siemens"}
_WAVES = ("sin", "pulse", "pwl", "exp", "sffm", "am", "trnoise", "trrandom", "external")
_KINDS = ("d", "npn", "pnp")


class CardFault(Exception):
    """One card that cannot be used; the reader adds file and line."""


def split_card(card: str) -> list[str]:
    """Return the words of a card; braces and quotes stay whole, ``=``, ``(`` and ``)`` stand alone."""
    words = _WORD.findall(card)
    left_over = _WORD.sub("", card).strip(" \t,")
    if left_over or not words:
        raise CardFault(f"cannot read '{left_over or card}' (an unmatched brace or quote?)")
    return words


def read_part(words: list[str], line: int, note: Callable[[str], None]) -> Part:
    """Return the part that a card describes; `note` takes what was passed over.

    Raises
    ------
    CardFault
        When the card cannot be used.
    """
    name = words[0]
    kind = name[0].lower()
    if kind not in _NODES_OF:
        raise CardFault(f"unknown element '{name}' (accepted: R C L V I E G D Q)")
    count = _NODES_OF[kind]
    nodes = tuple(_node(word) for word in words[1 : 1 + count])
    if len(nodes) < count or any(word in "=()" for word in nodes):
        raise CardFault(f"'{name}' needs {count} nodes")
    rest = words[1 + count :]
    if kind in "vi":
        value, ac, phase = _source(name, rest, note)
        return Part(name, nodes, value, line, ac=ac, ac_phase=phase)
    if kind in "cldq":
        rest = _without_initial_values(name, rest, note)
    if kind in "dq":
        model, area = _model_and_area(name, rest)
        return Part(name, nodes, area, line, model=model)
    if len(rest) >= 3 and rest[1] == "=" and rest[0].lower() == kind and kind in "rcl":
        rest = rest[2:]
    if not rest:
        raise CardFault(f"'{name}' needs a value in {_VALUE_OF[kind]}")
    if len(rest) > 1:
        raise CardFault(f"'{name}': '{' '.join(rest[1:])}' is not accepted (nodes and a value only)")
    return Part(name, nodes, read_value(rest[0], name), line)


def _node(word: str) -> str:
    lowered = word.lower()
    return "0" if lowered == "gnd" else lowered


def read_value(word: str, whose: str) -> str:
    """Return the expression of a value: what stands in braces or quotes, or a checked number."""
    if word[0] in "{'":
        return word[1:-1].strip()
    try:
        read_number(word)
    except BadExpression as error:
        hint = f"; a parameter is written {{{word}}}" if re.fullmatch(r"[A-Za-z_]\w*", word) else ""
        raise CardFault(f"'{whose}': {error}{hint}") from error
    return word


def _source(name: str, rest: list[str], note: Callable[[str], None]) -> tuple[str, str, str]:
    """Return (dc, ac amplitude, ac phase); a waveform gives its value at time zero when DC is not written."""
    dc = ac = phase = wave = ""
    i = 0
    while i < len(rest):
        word = rest[i].lower()
        if word == "dc":
            dc = read_value(_at(rest, i + 1, f"'{name}': DC needs a value"), name)
            i += 2
        elif word == "ac":
            ac, phase = "1", "0"
            i += 1
            if i < len(rest) and _is_value(rest[i]):
                ac = read_value(rest[i], name)
                i += 1
                if i < len(rest) and _is_value(rest[i]):
                    phase = read_value(rest[i], name)
                    i += 1
        elif word in _WAVES:
            wave, i = _wave_at_zero(name, rest, i)
            note(f"'{name}': {word.upper()} waveform passed over; its DC and AC are kept")
        elif i == 0 and _is_value(rest[i]):
            dc = read_value(rest[i], name)
            i += 1
        else:
            raise CardFault(
                f"'{name}': '{rest[i]}' is not accepted (accepted: DC value, AC amplitude phase, SIN(...))"
            )
    return dc or wave or "0", ac or "0", phase or "0"


def _at(words: list[str], i: int, complaint: str) -> str:
    if i >= len(words):
        raise CardFault(complaint)
    return words[i]


def _is_value(word: str) -> bool:
    return word[0] in "{'+-." or word[0].isdigit()


def _wave_at_zero(name: str, rest: list[str], i: int) -> tuple[str, int]:
    """Return (value at time zero, index after the waveform)."""
    word = rest[i].lower()
    i += 1
    in_brackets = i < len(rest) and rest[i] == "("
    i += in_brackets
    numbers = []
    while i < len(rest) and _is_value(rest[i]):
        numbers.append(read_value(rest[i], name))
        i += 1
    if in_brackets:
        if i >= len(rest) or rest[i] != ")":
            raise CardFault(f"'{name}': ')' of {word.upper()} is missing")
        i += 1
    first = 1 if word == "pwl" else 0
    return (numbers[first] if len(numbers) > first else "0"), i


def _without_initial_values(name: str, rest: list[str], note: Callable[[str], None]) -> list[str]:
    """Leave ``IC=...`` out: it counts only for a transient that begins with UIC."""
    lowered = [word.lower() for word in rest]
    for at in range(len(rest) - 1):
        if lowered[at] == "ic" and rest[at + 1] == "=":
            end = at + 2
            while end < len(rest) and _is_value(rest[end]):
                end += 1
            note(f"'{name}': IC passed over: it counts only for a transient with UIC")
            return rest[:at] + rest[end:]
    return rest


def _model_and_area(name: str, rest: list[str]) -> tuple[str, str]:
    """Return (model, area) of a diode or transistor."""
    words = [word for word in rest if word.lower() != "off"]
    if not words:
        raise CardFault(f"'{name}' needs the name of a .model")
    model, others = words[0].lower(), words[1:]
    if not others:
        return model, "1"
    if len(others) == 1 and _is_value(others[0]):
        return model, read_value(others[0], name)
    if len(others) == 3 and others[0].lower() == "area" and others[1] == "=":
        return model, read_value(others[2], name)
    hint = " (a substrate node is not modelled)" if name[0] in "qQ" and len(others) == 1 else ""
    raise CardFault(f"'{name}': '{' '.join(others)}' is not accepted after the model; only an area is{hint}")


def read_model(words: list[str], line: int) -> Model:
    """Return the model of a .model card.

    Raises
    ------
    CardFault
        When the card cannot be used.
    """
    if len(words) < 3:
        raise CardFault("'.model' needs a name, a kind (D, NPN, PNP) and parameters")
    kind = words[2].lower()
    if kind not in _KINDS:
        raise CardFault(f"'.model {words[1]}': unknown kind '{words[2]}' (accepted: D, NPN, PNP)")
    inside = [word for word in words[3:] if word not in "()"]
    parameters = read_assignments(inside, f".model {words[1]}", formulas=False) if inside else ()
    named = {canonical_name(kind, name): expression for name, expression in parameters}
    return Model(words[1].lower(), kind, tuple(named.items()), line)


def read_assignments(words: list[str], whose: str, *, formulas: bool = True) -> tuple[tuple[str, str], ...]:
    """Return (lower-case name, expression) of ``a=1 b={a*2} c=a+1``; `formulas` allows the last of these.

    Raises
    ------
    CardFault
        When the words are not assignments, or a name comes twice.
    """
    starts = [i for i in range(len(words) - 1) if words[i + 1] == "="]
    if not starts or starts[0] != 0 or words[-1] == "=":
        raise CardFault(f"'{whose}' is made of name=value, found '{' '.join(words) or 'nothing'}'")
    found: dict[str, str] = {}
    for start, end in zip(starts, [*starts[1:], len(words)], strict=True):
        name, said = words[start].lower(), words[start + 2 : end]
        if not said:
            raise CardFault(f"'{whose}': '{words[start]}' has no value")
        if not formulas and len(said) == 1:
            expression = read_value(said[0], whose)
        elif formulas:
            expression = " ".join(word.strip("{}'") for word in said).strip()
        else:
            raise CardFault(f"'{whose}': '{' '.join(said[1:])}' was not expected after {words[start]}")
        if not re.fullmatch(r"[a-z_]\w*", name):
            raise CardFault(f"'{whose}': '{words[start]}' is not a name")
        if name in found:
            raise CardFault(f"'{whose}': '{name}' is given twice")
        found[name] = expression
    return tuple(found.items())
