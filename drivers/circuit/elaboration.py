"""From a netlist as written to a circuit of numbers: parameters, temperature, checks."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace

from drivers.circuit.cards import Model, Netlist, Part
from drivers.circuit.elements import (
    Bjt,
    Capacitor,
    Circuit,
    CurrentSource,
    Diode,
    Element,
    Inductor,
    Resistor,
    Vccs,
    Vcvs,
    VoltageSource,
)
from drivers.circuit.errors import BadExpression, BadNetlist, NetlistFault, UnknownName, nearest_names
from drivers.circuit.expression import evaluate, names_in
from drivers.circuit.model_parameters import parameter_fault
from drivers.circuit.temperature import bjt_law, diode_law
from drivers.circuit.wiring import wiring_faults

_Report = Callable[[int, str], None]
_ABSOLUTE_ZERO_CELSIUS = -273.15


def elaborate(
    netlist: Netlist, *, params: Mapping[str, float] | None = None, celsius: float | None = None
) -> Circuit:
    """Return the circuit of a netlist with all values resolved.

    Parameters
    ----------
    netlist : Netlist
    params : mapping, optional
        Values that take the place of .param expressions, by name.
    celsius : float, optional
        Temperature of the circuit; the netlist's own when left out.

    Raises
    ------
    BadNetlist
        With every fault of values, models and wiring.
    UnknownName
        When `params` names a parameter that the netlist does not have.
    """
    faults: list[NetlistFault] = []

    def report(line: int, text: str) -> None:
        faults.append(NetlistFault(netlist.path, line, text))

    builder = _Builder(netlist, report, dict(params or {}), celsius)
    circuit = builder.build()
    if not faults:
        lines = {part.name.lower(): part.line for part in netlist.parts}
        for name, text in wiring_faults(circuit):
            report(lines.get(name.split("#")[0].lower(), 0), text)
    if faults:
        raise BadNetlist(faults)
    return circuit


def value_faults(netlist: Netlist) -> tuple[NetlistFault, ...]:
    """Return the faults of values and models, without a look at the wiring."""
    faults: list[NetlistFault] = []
    _Builder(
        netlist, lambda line, text: faults.append(NetlistFault(netlist.path, line, text)), {}, None
    ).build()
    return tuple(faults)


def resolve_params(netlist: Netlist, params: Mapping[str, float] | None = None) -> dict[str, float]:
    """Return all parameters of a netlist by lower-case name.

    Raises
    ------
    BadNetlist
        When one has no value.
    UnknownName
        When `params` names a parameter that the netlist does not have.
    """
    faults: list[NetlistFault] = []
    values = _param_values(
        netlist, dict(params or {}), lambda line, text: faults.append(NetlistFault(netlist.path, line, text))
    )
    if faults:
        raise BadNetlist(faults)
    return values


def _param_values(netlist: Netlist, given: Mapping[str, float], report: _Report) -> dict[str, float]:
    """Return parameter values; the order of the cards does not matter, as in ngspice."""
    expressions: dict[str, str] = {}
    lines: dict[str, int] = {}
    for param in netlist.params:
        if param.name in expressions:
            report(param.line, f"parameter '{param.name}' is given twice (first in line {lines[param.name]})")
        expressions[param.name] = param.expression
        lines[param.name] = param.line
    values: dict[str, float] = {}
    for name, value in given.items():
        if name.lower() not in expressions:
            raise UnknownName(f"{netlist.path}: no parameter '{name}' {nearest_names(name, expressions)}")
        values[name.lower()] = float(value)
    waiting = [name for name in expressions if name not in values]
    while waiting:
        ready = []
        for name in waiting:
            try:
                needed = names_in(expressions[name])
                if needed & set(waiting):
                    continue
                values[name] = evaluate(expressions[name], values)
            except BadExpression as error:
                report(lines[name], f"parameter '{name}': {error}")
                values[name] = 1.0  # so that what hangs on it is still checked
            ready.append(name)
        if not ready:
            report(lines[waiting[0]], f"parameters hang on one another in a circle: {', '.join(waiting)}")
            values.update(dict.fromkeys(waiting, 1.0))
            break
        waiting = [name for name in waiting if name not in ready]
    return values


@dataclass
class _Builder:
    netlist: Netlist
    report: _Report
    given: Mapping[str, float]
    override_celsius: float | None
    values: dict[str, float] = field(default_factory=dict)
    models: dict[str, tuple[Model, dict[str, float]]] = field(default_factory=dict)
    celsius: float = 27.0
    tnom_celsius: float = 27.0

    def build(self) -> Circuit:
        netlist = self.netlist
        self.values = _param_values(netlist, self.given, self.report)
        self.celsius = self._temperature(netlist.celsius, ".temp")
        if self.override_celsius is not None:
            self.celsius = self.override_celsius
        self.tnom_celsius = self._temperature(netlist.tnom_celsius, "TNOM")
        self._read_models()
        elements: list[Element] = []
        first_lines: dict[str, int] = {}
        for part in netlist.parts:
            lowered = part.name.lower()
            if lowered in first_lines:
                self.report(part.line, f"'{part.name}' stands twice (first in line {first_lines[lowered]})")
                continue
            first_lines[lowered] = part.line
            elements.extend(self._elements(part))
        gmin = self._value(netlist.gmin_siemens, 0, "gmin")
        return Circuit(netlist.title, tuple(elements), self.celsius, gmin)

    def _temperature(self, expression: str, whose: str) -> float:
        celsius = self._value(expression, 0, whose)
        if celsius <= _ABSOLUTE_ZERO_CELSIUS:
            self.report(0, f"{whose} {celsius:g} °C lies below absolute zero")
            return 27.0
        return celsius

    def _value(self, expression: str, line: int, whose: str) -> float:
        try:
            return evaluate(expression, self.values)
        except BadExpression as error:
            self.report(line, f"'{whose}': {error}")
            return 1.0

    def _read_models(self) -> None:
        for model in self.netlist.models:
            if model.name in self.models:
                self.report(model.line, f".model '{model.name}' stands twice")
                continue
            given: dict[str, float] = {}
            for name, expression in model.parameters:
                given[name] = self._value(expression, model.line, f".model {model.name} {name.upper()}")
            for name, value in given.items():
                wrong = parameter_fault(model.kind, name, value, given)
                if wrong:
                    self.report(model.line, f".model '{model.name}': {wrong}")
            usable = {
                name: value
                for name, value in given.items()
                if not parameter_fault(model.kind, name, value, given)
            }
            self.models[model.name] = (model, usable)

    def _elements(self, part: Part) -> list[Element]:
        kind = part.kind
        value = self._value(part.value, part.line, part.name)
        if kind in "rcl":
            return self._two_terminal(part, value)
        a, b = part.nodes[0], part.nodes[1]
        if kind in "vi":
            ac = self._value(part.ac, part.line, part.name)
            phase = self._value(part.ac_phase, part.line, part.name)
            source = VoltageSource if kind == "v" else CurrentSource
            return [source(part.name, a, b, value, ac, phase)]
        if kind in "eg":
            controlled = Vcvs if kind == "e" else Vccs
            return [controlled(part.name, *part.nodes, value)]  # type: ignore[call-arg, arg-type] # four nodes
        if value <= 0.0:
            self.report(part.line, f"'{part.name}': area {value:g} must be greater than zero")
            return []
        return self._diode(part, value) if kind == "d" else self._bjt(part, value)

    def _two_terminal(self, part: Part, value: float) -> list[Element]:
        a, b = part.nodes
        if part.kind == "r":
            if value <= 0.0:
                said = "zero" if value == 0.0 else "negative"
                self.report(
                    part.line, f"'{part.name}': a {said} resistor ({value:g} Ω); accepted: above 0 Ω, e.g. 1m"
                )
            return [Resistor(part.name, a, b, value)]
        if value < 0.0:
            self.report(part.line, f"'{part.name}': a negative value ({value:g}); accepted: 0 or more")
        if part.kind == "c":
            return [Capacitor(part.name, a, b, value)]
        if value == 0.0:
            self.report(part.line, f"'{part.name}': a zero inductor; accepted: above 0 H")
        return [Inductor(part.name, a, b, value)]

    def _model_of(self, part: Part, kinds: tuple[str, ...]) -> tuple[Model, dict[str, float]] | None:
        found = self.models.get(part.model)
        if found is None:
            self.report(
                part.line,
                f"'{part.name}': missing .model '{part.model}' {nearest_names(part.model, self.models)}",
            )
            return None
        if found[0].kind not in kinds:
            accepted = " or ".join(kinds).upper()
            self.report(
                part.line,
                f"'{part.name}': .model '{part.model}' is a {found[0].kind.upper()}, accepted: {accepted}",
            )
            return None
        return found

    def _diode(self, part: Part, area: float) -> list[Element]:
        found = self._model_of(part, ("d",))
        if found is None:
            return []
        try:
            law = diode_law(found[1], area=area, celsius=self.celsius, tnom_celsius=self.tnom_celsius)
        except (ArithmeticError, ValueError):
            return self._lawless(part)
        anode, cathode = part.nodes
        series: list[Element] = []
        inner = _inner(part, "anode", anode, law.rs_ohms, "rs", series)
        return [*series, Diode(part.name, inner, cathode, replace(law, rs_ohms=0.0))]

    def _lawless(self, part: Part) -> list[Element]:
        """Each parameter is possible, but together they run out of the numbers at this temperature."""
        self.report(
            part.line, f"'{part.name}': .model '{part.model}' has no finite values at {self.celsius:g} °C"
        )
        return []

    def _bjt(self, part: Part, area: float) -> list[Element]:
        found = self._model_of(part, ("npn", "pnp"))
        if found is None:
            return []
        polarity = 1 if found[0].kind == "npn" else -1
        try:
            law = bjt_law(
                found[1], polarity=polarity, area=area, celsius=self.celsius, tnom_celsius=self.tnom_celsius
            )
        except (ArithmeticError, ValueError):
            return self._lawless(part)
        collector, base, emitter = part.nodes
        series: list[Element] = []
        collector = _inner(part, "collector", collector, law.rc_ohms, "rc", series)
        base = _inner(part, "base", base, law.rb_ohms, "rb", series)
        emitter = _inner(part, "emitter", emitter, law.re_ohms, "re", series)
        bare = replace(law, rb_ohms=0.0, re_ohms=0.0, rc_ohms=0.0)
        return [*series, Bjt(part.name, collector, base, emitter, bare)]


def _inner(part: Part, terminal: str, outer: str, ohms: float, suffix: str, series: list[Element]) -> str:
    """Return the node inside a series resistance (named like ``q1#base``) and add the resistor ``Q1#rb``."""
    if ohms == 0.0:
        return outer
    inner = f"{part.name.lower()}#{terminal}"
    series.append(Resistor(f"{part.name}#{suffix}", outer, inner, ohms))
    return inner
