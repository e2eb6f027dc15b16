"""What can go wrong with a circuit on paper.

::

    CircuitError
    ├── BadNetlist         a netlist cannot be used; carries every fault found, each with file and line
    ├── BadExpression      an expression cannot be read or has no value
    ├── BadPartFault       the words of a part fault are not understood or name no part of the netlist
    ├── BadSpread          a tolerance that cannot be drawn
    ├── BadSurvey          a question that cannot be put to a circuit
    ├── UnknownName        a node, source, part or parameter that the circuit does not have
    ├── NoConvergence      the operating point was not found
    └── NumericBreakdown   a solution is not finite
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

_MOST_SHOWN = 40
_LONGEST_LINE = 300


def _printable(text: str) -> str:
    """Return a line that a terminal can bear: a file that is no netlist is quoted in it."""
    clean = "".join(c if c.isprintable() else "\ufffd" for c in text)
    return clean if len(clean) <= _LONGEST_LINE else f"{clean[:_LONGEST_LINE]}..."


class CircuitError(Exception):
    """Root of all errors of `drivers.circuit`."""


@dataclass(frozen=True)
class NetlistFault:
    """One fault of a netlist; `line` is 1-based, 0 when no line of the file is to blame."""

    path: str
    line: int
    text: str

    def __str__(self) -> str:
        return f"{self.path}:{self.line}: {self.text}" if self.line else f"{self.path}: {self.text}"


class BadNetlist(CircuitError):
    """A netlist that cannot be used.

    Attributes
    ----------
    faults : tuple of NetlistFault
        Everything that was found, in the order of the lines.
    """

    def __init__(self, faults: Sequence[NetlistFault]) -> None:
        self.faults = tuple(sorted(faults, key=lambda fault: fault.line))
        lines = [_printable(str(fault)) for fault in self.faults[:_MOST_SHOWN]]
        if len(self.faults) > _MOST_SHOWN:
            lines.append(f"and {len(self.faults) - _MOST_SHOWN} more: is this a netlist?")
        super().__init__("\n".join(lines))


class BadExpression(CircuitError):
    """An expression that cannot be read, or that has no finite value."""


class BadPartFault(CircuitError):
    """Words that name no fault, or a fault that this netlist cannot have."""


class BadSpread(CircuitError):
    """A tolerance that cannot be drawn."""


class BadSurvey(CircuitError):
    """A question that cannot be put to a circuit: no driving source, a senseless frequency or amplitude."""


class UnknownName(CircuitError):
    """A node, source, part or parameter that the circuit does not have."""


class NoConvergence(CircuitError):
    """The operating point was not found."""


class NumericBreakdown(CircuitError):
    """A solution is not finite; the circuit has no unique answer there."""


def nearest_names(wanted: str, known: Iterable[str]) -> str:
    """Return a phrase that offers the nearest known names, e.g. ``(nearest: R3, R5)``."""
    by_folded: dict[str, str] = {}
    for name in known:
        by_folded.setdefault(name.lower(), name)
    if not by_folded:
        return "(there are none)"
    close = difflib.get_close_matches(wanted.lower(), list(by_folded), n=3, cutoff=0.5)
    if close:
        return f"(nearest: {', '.join(by_folded[name] for name in close)})"
    some = list(by_folded.values())
    return f"(known: {', '.join(some[:12])}{', ...' if len(some) > 12 else ''})"
