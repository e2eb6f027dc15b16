"""SPICE netlists: the subset that makes up a pedal, readable by any SPICE unchanged.

Accepted: a title line; parts R C L V I E G D Q; ``.model`` of kind D, NPN, PNP; ``.param``; ``{expressions}``
and ``'expressions'``; ``.temp`` and ``.options temp= tnom= gmin=``; comments ``*``, ``;``, ``$``, ``//``;
continuation ``+``; suffixes T G Meg K mil m u n p f. Case does not matter. Cards that ask for analyses or
output are passed over and noted. Anything else is a fault, reported with file and line, all faults together.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path

from drivers.circuit.cards import Model, Netlist, Param, Part
from drivers.circuit.elaboration import elaborate, value_faults
from drivers.circuit.errors import BadNetlist, NetlistFault
from drivers.circuit.part_cards import CardFault, read_assignments, read_model, read_part, split_card

__all__ = ["Model", "Netlist", "Param", "Part", "elaborate", "parse_netlist", "read_netlist"]

_PASSED_OVER = frozenset(
    [
        ".ac",
        ".tran",
        ".dc",
        ".op",
        ".tf",
        ".pz",
        ".sens",
        ".noise",
        ".disto",
        ".save",
        ".print",
        ".plot",
        ".probe",
        ".four",
        ".meas",
        ".measure",
        ".width",
        ".nodeset",
        ".global",
    ]
)
_NOT_YET = {
    ".subckt": "subcircuits are not read; write the parts out",
    ".ends": "subcircuits are not read; write the parts out",
    ".include": "other files are not read; copy the cards into this file",
    ".inc": "other files are not read; copy the cards into this file",
    ".lib": "other files are not read; copy the cards into this file",
    ".func": "functions of one's own are not read; use .param",
    ".ic": "initial conditions would change the answers and are not modelled; remove the card",
    ".if": "conditional cards are not read; use c ? a : b in an expression",
}
_ACCEPTED_CARDS = (
    "accepted: .model .param .temp .options .end, and analysis or output cards, which are passed over"
)


@dataclass
class _Draft:
    """What has been read so far."""

    path: str
    title: str = ""
    parts: list[Part] = field(default_factory=list)
    models: list[Model] = field(default_factory=list)
    params: list[Param] = field(default_factory=list)
    options: dict[str, str] = field(default_factory=dict)
    notes: list[tuple[int, str]] = field(default_factory=list)
    faults: list[NetlistFault] = field(default_factory=list)

    def fault(self, line: int, text: str) -> None:
        self.faults.append(NetlistFault(self.path, line, text))

    def note(self, line: int, text: str) -> None:
        self.notes.append((line, f"{self.path}:{line}: {text}"))


def read_netlist(path: Path) -> Netlist:
    """Read a netlist file.

    Raises
    ------
    BadNetlist
        When the file cannot be read or has faults; all of them are reported.
    """
    try:
        text = path.read_text(encoding="utf-8")
    except UnicodeDecodeError:
        text = path.read_text(encoding="latin-1")
    except OSError as error:
        fault = NetlistFault(str(path), 0, f"cannot be read ({error.strerror or error})")
        raise BadNetlist([fault]) from error
    return parse_netlist(text, str(path))


def parse_netlist(text: str, path: str = "netlist") -> Netlist:
    """Return what the text of a netlist says; `path` is its name in messages.

    Raises
    ------
    BadNetlist
        With every fault found. Values and wiring are checked by `elaborate`, because they hang on parameters;
        when the reading fails, faults of values and models are reported in the same go.
    """
    draft = _Draft(path)
    for line, card in _cards(text, draft):
        try:
            _read_card(draft, line, card)
        except CardFault as fault:
            draft.fault(line, str(fault))
    netlist = Netlist(
        title=draft.title,
        parts=tuple(draft.parts),
        models=tuple(draft.models),
        params=tuple(draft.params),
        celsius=draft.options.get("temp", "27"),
        tnom_celsius=draft.options.get("tnom", "27"),
        gmin_siemens=draft.options.get("gmin", "1e-12"),
        path=path,
        notes=tuple(text for _, text in sorted(draft.notes)),
    )
    if not draft.parts and not draft.faults:
        draft.fault(0, "has no parts (a netlist starts with a title line, then one part a line)")
    if draft.faults:
        raise BadNetlist([*draft.faults, *value_faults(netlist)])
    return netlist


def _cards(text: str, draft: _Draft) -> list[tuple[int, str]]:
    """Return (line, card) with comments gone, continuations joined and control blocks passed over."""
    cards: list[tuple[int, str]] = []
    control_from = 0
    for number, raw in enumerate(text.lstrip("\ufeff").splitlines(), start=1):
        if number == 1:
            draft.title = raw.strip().lstrip("*").strip()
            continue
        line = _without_comment(raw)
        word = line.split()[0].lower() if line.split() else ""
        if control_from:
            control_from = 0 if word == ".endc" else control_from
            continue
        if word == ".control":
            control_from = number
            draft.note(number, ".control block passed over")
        elif word == ".end":
            break
        elif line.startswith("+"):
            if cards:
                cards[-1] = (cards[-1][0], f"{cards[-1][1]} {line[1:]}")
            else:
                draft.fault(number, "continuation '+' without a card before it")
        elif line:
            cards.append((number, line))
    if control_from:
        draft.fault(control_from, ".control without .endc")
    return cards


def _without_comment(raw: str) -> str:
    line = raw.strip()
    if line.startswith("*"):
        return ""
    for mark in (";", "//"):
        line = line.split(mark, 1)[0]
    for i, letter in enumerate(line):
        if letter == "$" and (i == 0 or line[i - 1] in " \t,"):
            line = line[:i]
            break
    return line.strip()


def _read_card(draft: _Draft, line: int, card: str) -> None:
    words = split_card(card)
    first = words[0].lower()
    if not first.startswith("."):
        draft.parts.append(read_part(words, line, lambda text: draft.note(line, text)))
    elif first == ".model":
        draft.models.append(read_model(words, line))
    elif first in (".param", ".params", ".parameter"):
        assignments = read_assignments(words[1:], words[0])
        draft.params.extend(Param(name, expression, line) for name, expression in assignments)
    elif first == ".temp":
        if len(words) != 2:
            raise CardFault("'.temp' takes one temperature in °C")
        draft.options["temp"] = words[1].strip("{}'")
    elif first in (".options", ".option", ".opt"):
        _read_options(draft, line, words)
    elif first == ".title":
        draft.title = card.split(None, 1)[1] if len(words) > 1 else draft.title
    elif first in _NOT_YET:
        raise CardFault(f"'{words[0]}': {_NOT_YET[first]}")
    elif first in _PASSED_OVER:
        draft.note(line, f"'{words[0]}' passed over: it does not change the circuit")
    else:
        raise CardFault(f"unknown card '{words[0]}' ({_ACCEPTED_CARDS})")


def _read_options(draft: _Draft, line: int, words: list[str]) -> None:
    """Keep temp, tnom and gmin, which change the answers; pass over the rest."""
    passed_over = []
    i = 1
    while i < len(words):
        valued = i + 2 < len(words) and words[i + 1] == "="
        if valued and words[i].lower() in ("temp", "tnom", "gmin"):
            draft.options[words[i].lower()] = words[i + 2].strip("{}'")
        else:
            passed_over.append(words[i])
        i += 3 if valued else 1
    if passed_over:
        draft.note(line, f"'{words[0]} {' '.join(passed_over)}' passed over: it does not change the circuit")
