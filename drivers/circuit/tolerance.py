"""Part tolerances: the draw that makes one unit differ from the next, for ever the same for the same key.

Every draw hangs on nothing but a hash of key, part and parameter. A tolerance that is added, removed or
widened later leaves the other draws of the same unit where they were.
"""

from __future__ import annotations

import hashlib
import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from fnmatch import fnmatchcase
from statistics import NormalDist
from typing import Literal

from drivers.circuit.cards import Netlist, Part
from drivers.circuit.errors import BadSpread, UnknownName, nearest_names
from drivers.circuit.model_parameters import canonical_name, default_value, known_parameters

_PARAM = "param:"
_CUT_SIGMA = 3.5


@dataclass(frozen=True)
class Spread:
    """How a parameter of parts scatters from unit to unit.

    When several spreads hit the same part and parameter, the last one counts, so that exceptions follow the
    rule.

    Attributes
    ----------
    part_pattern : str
        Part name or shell pattern, without regard to case: ``R1``, ``R*``. ``param:volume_ohms`` scatters a
        .param instead: both halves of a pot hang on its .param and move together (give the halves themselves
        the spread 0, or their mismatch, after a rule such as ``R*``).
    parameter : str
        ``value``: the part's value (area of D and Q); else a model parameter: the part gets its own copy of
        its model.
    law : str
        ``uniform``: spread is the ± limit as a ratio; ``normal``: spread is two sigma as a ratio, cut at 3.5
        sigma; ``lognormal``: spread is the sigma of the natural logarithm.
    spread : float
    """

    part_pattern: str
    parameter: str
    law: Literal["uniform", "normal", "lognormal"]
    spread: float

    def __post_init__(self) -> None:
        limits = {"uniform": 1.0, "normal": 0.5, "lognormal": 3.0}
        if self.law not in limits:
            accepted = ", ".join(limits)
            raise BadSpread(f"'{self.part_pattern}': unknown law '{self.law}' (accepted: {accepted})")
        if not 0.0 <= self.spread < limits[self.law]:
            accepted = f"accepted: 0 to below {limits[self.law]:g}"
            raise BadSpread(f"'{self.part_pattern}': {self.law} spread {self.spread:g} ({accepted})")

    def factor(self, probability: float) -> float:
        """Return the factor on the nominal value at a point (0 to 1) of the distribution."""
        if self.law == "uniform":
            return 1.0 + self.spread * (2.0 * probability - 1.0)
        z = NormalDist().inv_cdf(probability)
        z = min(max(z, -_CUT_SIGMA), _CUT_SIGMA)
        if self.law == "normal":
            return 1.0 + 0.5 * self.spread * z
        return math.exp(self.spread * z)


def draw_probability(key: str, part: str, parameter: str) -> float:
    """Return the number between 0 and 1 that belongs to a unit's part and parameter."""
    text = "\x1f".join((key, part.lower(), parameter.lower()))
    number = int.from_bytes(hashlib.sha256(text.encode("utf-8")).digest()[:6], "big")
    return (number + 0.5) / 2.0**48


def draw_unit(netlist: Netlist, spreads: Sequence[Spread], key: str) -> Netlist:
    """Return the netlist of one unit with its parts drawn.

    Parameters
    ----------
    netlist : Netlist
        Nominal values.
    spreads : sequence of Spread
    key : str
        What names the unit, e.g. model and serial.

    Raises
    ------
    UnknownName
        When a spread matches no part, no .param, or no part whose model has the parameter.
    """
    drawn = netlist
    for (target, parameter), factor in draw_factors(netlist, spreads, key).items():
        drawn = _scaled(drawn, target, parameter, factor)
    return drawn


def draw_factors(netlist: Netlist, spreads: Sequence[Spread], key: str) -> dict[tuple[str, str], float]:
    """Return what `draw_unit` multiplies nominal values with, by (part or ``param:<name>``, parameter).

    Raises
    ------
    UnknownName
        As `draw_unit`.
    """
    chosen: dict[tuple[str, str], Spread] = {}
    for spread in spreads:
        parameter = spread.parameter.lower()
        for target in _targets(netlist, spread, parameter):
            chosen.pop((target, parameter), None)
            chosen[target, parameter] = spread
    return {
        (target, parameter): spread.factor(draw_probability(key, target, parameter))
        for (target, parameter), spread in chosen.items()
    }


def _targets(netlist: Netlist, spread: Spread, parameter: str) -> list[str]:
    """Return lower-case part names, or ``param:<name>``, that a spread hits."""
    pattern = spread.part_pattern.lower()
    if pattern.startswith(_PARAM):
        names = [_PARAM + param.name for param in netlist.params]
        hit = [name for name in names if fnmatchcase(name, pattern)]
        if not hit:
            known = nearest_names(pattern, names)
            raise UnknownName(f"{netlist.path}: spread '{spread.part_pattern}' matches no .param {known}")
        return hit
    parts = [part for part in netlist.parts if fnmatchcase(part.name.lower(), pattern)]
    if not parts:
        known = nearest_names(pattern, (part.name for part in netlist.parts))
        raise UnknownName(f"{netlist.path}: spread '{spread.part_pattern}' matches no part {known}")
    if parameter == "value":
        return [part.name.lower() for part in parts]
    having = [part.name.lower() for part in parts if _nominal(netlist, part, parameter) is not None]
    if not having:
        raise UnknownName(
            f"{netlist.path}: spread '{spread.part_pattern}': no part of that name has a model with "
            f"{spread.parameter.upper()} to scatter"
        )
    return having


def _nominal(netlist: Netlist, part: Part, parameter: str) -> str | None:
    """Return the expression of a model parameter, None when the part has none that could scatter."""
    if not part.model:
        return None
    model = netlist.model(part.model)
    name = canonical_name(model.kind, parameter)
    written = model.parameter(name, "")
    if written:
        return written
    if name == "tnom" or name not in known_parameters(model.kind):
        return None
    default = default_value(model.kind, name)
    return repr(default) if default else None  # a zero stays zero: nothing to scatter


def _scaled(netlist: Netlist, target: str, parameter: str, factor: float) -> Netlist:
    if target.startswith(_PARAM):
        name = target.removeprefix(_PARAM)
        expression = next(param.expression for param in netlist.params if param.name == name)
        return netlist.with_param(name, f"({expression})*{factor!r}")
    part = netlist.part(target)
    if parameter == "value":
        return netlist.with_part(replace(part, value=f"({part.value})*{factor!r}"))
    nominal = _nominal(netlist, part, parameter)
    name = canonical_name(netlist.model(part.model).kind, parameter)
    return netlist.with_own_model(part.name, name, f"({nominal})*{factor!r}")
