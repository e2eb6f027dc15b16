"""A pedal in the fixture: both netlists as one circuit, with relays and knobs as parameters."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from functools import cache
from importlib.resources import files

from drivers.circuit.cards import Netlist, Part
from drivers.circuit.elements import Circuit
from drivers.circuit.netlist import elaborate, parse_netlist

_CONTACT = "0.05 + (1 - {0})*1e12"
FIXTURE_PART = "{}__fx"
"""How a part of the fixture is named in the joined circuit, so that it never meets a part of the pedal."""


@dataclass(frozen=True)
class Knob:
    """A control of the pedal: the circuit's parameter and its values at no and at full travel."""

    param: str
    low: float
    high: float

    def value(self, travel: float) -> float:
        """Return the parameter's value at a fraction of travel."""
        return self.low + (self.high - self.low) * travel


@dataclass(frozen=True)
class UnitSpec:
    """Which pedal stands in the fixture.

    `netlist` is the unit's own circuit (parts drawn, faults planted); the fixture takes the place of its parts
    `replaced`. `probes` maps probe points of the fixture to nets. `footswitch_param` is 1 engaged, 0 bypassed.
    """

    netlist: Netlist
    replaced: tuple[str, ...]
    input_net: str
    output_net: str
    supply_net: str
    footswitch_param: str | None
    knobs: Mapping[str, Knob]
    probes: Mapping[str, str]


@cache
def read_fixture() -> Netlist:
    """Return the fixture's own netlist."""
    text = (files("drivers.simulated") / "fixture.cir").read_text(encoding="utf-8")
    return parse_netlist(text, "fixture.cir")


def join(unit: UnitSpec) -> Netlist:
    """Return pedal and fixture as one netlist.

    Nets of the pedal are named ``pedal.<net>`` but for the three that the fixture's leads go to. Each probe point becomes
    a contact to the meter, set by a parameter with the probe's lower-case name.

    Raises
    ------
    UnknownName
        When one of the replaced parts is not in the unit's netlist.
    """
    leads = {
        unit.input_net.lower(): "jack_in",
        unit.output_net.lower(): "jack_out",
        unit.supply_net.lower(): "supply",
        "0": "0",
    }
    pedal = unit.netlist.without_parts(unit.replaced)
    renamed = tuple(
        replace(part, nodes=tuple(leads.get(node, f"pedal.{node}") for node in part.nodes))
        for part in pedal.parts
    )
    fixture = read_fixture()
    marked = tuple(replace(part, name=FIXTURE_PART.format(part.name)) for part in fixture.parts)
    contacts = tuple(
        Part(
            name=FIXTURE_PART.format(f"Rprobe_{probe.lower()}"),
            nodes=("meter_hi", leads.get(net.lower(), f"pedal.{net.lower()}")),
            value=_CONTACT.format(probe.lower()),
        )
        for probe, net in unit.probes.items()
    )
    joined = replace(pedal, parts=renamed).joined_with(replace(fixture, parts=marked + contacts))
    for probe in unit.probes:
        joined = joined.with_param(probe, "0")
    return joined


class UnitInFixture:
    """The joined circuit with the present positions of relays and knobs.

    Parameters
    ----------
    unit : UnitSpec
        The pedal.
    celsius : float
        Ambient temperature.
    """

    def __init__(self, unit: UnitSpec, celsius: float) -> None:
        self._unit = unit
        self._celsius = celsius
        self._netlist = join(unit)
        self._params: dict[str, float] = {
            name.lower(): 0.0 for name in [*(param.name for param in read_fixture().params), *unit.probes]
        }
        if unit.footswitch_param is not None:
            self._params[unit.footswitch_param.lower()] = 0.0
        for knob in unit.knobs.values():
            self._params[knob.param.lower()] = knob.value(0.5)

    def set_param(self, name: str, value: float) -> bool:
        """Set a relay (or another parameter); tells whether anything changed. Unknown relays change nothing."""
        key = name.lower()
        if key == "footswitch":
            key = (self._unit.footswitch_param or "").lower()
        if key not in self._params or self._params[key] == value:
            return False
        self._params[key] = value
        return True

    def turn_control(self, name: str, travel: float) -> bool:
        """Turn a knob to a fraction of its travel; tells whether anything changed."""
        knob = self._unit.knobs[name]
        return self.set_param(knob.param, knob.value(travel))

    def circuit(self) -> Circuit:
        """Return the circuit as it is now. Raises CircuitError."""
        return elaborate(self._netlist, params=self._params, celsius=self._celsius)
