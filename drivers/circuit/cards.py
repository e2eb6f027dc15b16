"""A netlist as it is written: parts, models, parameters with their expressions, and pure edits of it."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace

from drivers.circuit.errors import UnknownName, nearest_names


@dataclass(frozen=True)
class Part:
    """One part.

    Attributes
    ----------
    name : str
        As written; the first letter says the kind: R C L V I E G D Q. Compared without regard to case.
    nodes : tuple of str
        Lower case, ``gnd`` written as ``0``; Q: collector, base, emitter; E and G: out+, out-, in+, in-.
    value : str
        Expression without braces: ohms, farads, henries, DC volts or amps, gain, or siemens; D and Q: area.
    line : int
        Line of the file, 0 when the part was added afterwards.
    model : str
        Lower-case model name of D and Q.
    ac, ac_phase : str
        Small-signal amplitude and phase in degrees of V and I, expressions.
    """

    name: str
    nodes: tuple[str, ...]
    value: str
    line: int = 0
    model: str = ""
    ac: str = "0"
    ac_phase: str = "0"

    @property
    def kind(self) -> str:
        """Return the lower-case letter of the kind."""
        return self.name[0].lower()


@dataclass(frozen=True)
class Model:
    """A .model card: `name` and `kind` ("d", "npn", "pnp") in lower case, parameters (name, expression).

    Parameters carry their canonical lower-case names (CJO for CJ0).
    """

    name: str
    kind: str
    parameters: tuple[tuple[str, str], ...]
    line: int = 0

    def parameter(self, name: str, default: str) -> str:
        """Return the expression of a parameter."""
        return dict(self.parameters).get(name, default)

    def with_parameter(self, name: str, expression: str) -> Model:
        """Return the model with one parameter set."""
        kept = {**dict(self.parameters), name: expression}
        return replace(self, parameters=tuple(kept.items()))


@dataclass(frozen=True)
class Param:
    """One name of a .param card: lower-case `name` and expression."""

    name: str
    expression: str
    line: int = 0


@dataclass(frozen=True)
class Netlist:
    """What a netlist file says; immutable, edits return new netlists.

    Attributes
    ----------
    title : str
    parts : tuple of Part
    models : tuple of Model
    params : tuple of Param
    celsius, tnom_celsius, gmin_siemens : str
        Expressions of .temp (or .options temp), .options tnom and .options gmin.
    path : str
        Name of the file in messages.
    notes : tuple of str
        Cards that were passed over, each with file and line.
    """

    title: str
    parts: tuple[Part, ...]
    models: tuple[Model, ...] = ()
    params: tuple[Param, ...] = ()
    celsius: str = "27"
    tnom_celsius: str = "27"
    gmin_siemens: str = "1e-12"
    path: str = "netlist"
    notes: tuple[str, ...] = ()

    @property
    def nodes(self) -> tuple[str, ...]:
        """All nodes but ground in order of appearance."""
        seen = dict.fromkeys(node for part in self.parts for node in part.nodes)
        seen.pop("0", None)
        return tuple(seen)

    def part(self, name: str) -> Part:
        """Return the part of that name, case-insensitively.

        Raises
        ------
        UnknownName
            When there is none.
        """
        for part in self.parts:
            if part.name.lower() == name.lower():
                return part
        names = [part.name for part in self.parts]
        alike = [one for one in names if one[:1].lower() == name[:1].lower()]
        known = nearest_names(name, alike or names)
        raise UnknownName(f"{self.path}: no part '{name}' {known}")

    def model(self, name: str) -> Model:
        """Return the model of that name, case-insensitively.

        Raises
        ------
        UnknownName
            When there is none.
        """
        for model in self.models:
            if model.name == name.lower():
                return model
        known = nearest_names(name, (model.name for model in self.models))
        raise UnknownName(f"{self.path}: no .model '{name}' {known}")

    def with_part(self, changed: Part) -> Netlist:
        """Return the netlist with the part of the same name exchanged in its place, or added at the end."""
        wanted = changed.name.lower()
        if any(part.name.lower() == wanted for part in self.parts):
            parts = tuple(changed if part.name.lower() == wanted else part for part in self.parts)
        else:
            parts = (*self.parts, changed)
        return replace(self, parts=parts)

    def without_parts(self, names: Iterable[str]) -> Netlist:
        """Return the netlist without those parts.

        Raises
        ------
        UnknownName
            When one of them is not there.
        """
        gone = {self.part(name).name for name in names}
        return replace(self, parts=tuple(part for part in self.parts if part.name not in gone))

    def with_model(self, changed: Model) -> Netlist:
        """Return the netlist with the model of the same name exchanged, or added at the end."""
        kept = tuple(model for model in self.models if model.name != changed.name)
        return replace(self, models=(*kept, changed))

    def with_own_model(self, part_name: str, parameter: str, expression: str) -> Netlist:
        """Return the netlist where one parameter of one part's model is changed for this part alone.

        The part gets a copy of its model named ``<model>@<part>``.

        Raises
        ------
        UnknownName
            When part or model is not there.
        """
        part = self.part(part_name)
        own = f"{part.model.split('@')[0]}@{part.name.lower()}"
        copied = replace(self.model(part.model), name=own).with_parameter(parameter, expression)
        return self.with_model(copied).with_part(replace(part, model=own))

    def with_param(self, name: str, expression: str) -> Netlist:
        """Return the netlist with a parameter set, or added."""
        lowered = name.lower()
        line = next((param.line for param in self.params if param.name == lowered), 0)
        kept = [param for param in self.params if param.name != lowered]
        return replace(self, params=(*kept, Param(lowered, expression, line)))

    def joined_with(self, other: Netlist) -> Netlist:
        """Return both netlists as one circuit: nodes of equal name are one; title and temperature are kept.

        A name that stands in both stays twice and is reported by `elaborate`.
        """
        return replace(
            self,
            parts=self.parts + other.parts,
            models=self.models + other.models,
            params=self.params + other.params,
            notes=self.notes + other.notes,
        )
