"""The elements of a circuit with their values resolved: what the solvers see.

A `Circuit` is made from a netlist by `drivers.circuit.netlist` for one set of parameters and one temperature:
expressions are evaluated, model parameters are already scaled to the temperature. Node "0" is ground.
SI units throughout; signs as in SPICE.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Resistor:
    """R between `a` and `b`."""

    name: str
    a: str
    b: str
    ohms: float


@dataclass(frozen=True)
class Capacitor:
    """C between `a` and `b`."""

    name: str
    a: str
    b: str
    farads: float


@dataclass(frozen=True)
class Inductor:
    """L between `a` and `b`."""

    name: str
    a: str
    b: str
    henries: float


@dataclass(frozen=True)
class VoltageSource:
    """V: v(a) - v(b) = dc (+ ac in small-signal analysis). Its current flows from `a` through it to `b`."""

    name: str
    a: str
    b: str
    dc_volts: float
    ac_volts: float = 0.0
    ac_phase_deg: float = 0.0


@dataclass(frozen=True)
class CurrentSource:
    """I: pushes `dc_amps` from `a` through itself to `b`."""

    name: str
    a: str
    b: str
    dc_amps: float
    ac_amps: float = 0.0
    ac_phase_deg: float = 0.0


@dataclass(frozen=True)
class Vcvs:
    """E: v(a) - v(b) = gain * (v(c) - v(d))."""

    name: str
    a: str
    b: str
    c: str
    d: str
    gain: float


@dataclass(frozen=True)
class Vccs:
    """G: pushes siemens * (v(c) - v(d)) from `a` through itself to `b`."""

    name: str
    a: str
    b: str
    c: str
    d: str
    siemens: float


@dataclass(frozen=True)
class JunctionCharge:
    """Depletion plus diffusion charge of a junction (SPICE): CJ, VJ, M, FC and transit time TT."""

    cj_farads: float = 0.0
    vj_volts: float = 1.0
    m: float = 0.5
    fc: float = 0.5
    tt_s: float = 0.0


@dataclass(frozen=True)
class DiodeLaw:
    """Diode parameters at the circuit's temperature."""

    is_amps: float
    n: float
    vt_volts: float
    rs_ohms: float
    charge: JunctionCharge


@dataclass(frozen=True)
class BjtLaw:
    """Gummel-Poon parameters at the circuit's temperature; infinite means "without this effect"."""

    polarity: int  # +1 NPN, -1 PNP
    is_amps: float
    bf: float
    br: float
    nf: float
    nr: float
    vaf_volts: float
    var_volts: float
    ikf_amps: float
    ikr_amps: float
    ise_amps: float
    ne: float
    isc_amps: float
    nc: float
    rb_ohms: float
    re_ohms: float
    rc_ohms: float
    vt_volts: float
    be: JunctionCharge
    bc: JunctionCharge


@dataclass(frozen=True)
class Diode:
    """D from anode to cathode (already multiplied by its area; RS is made a Resistor when not zero)."""

    name: str
    anode: str
    cathode: str
    law: DiodeLaw


@dataclass(frozen=True)
class Bjt:
    """Q with collector, base, emitter (RB, RE, RC are made Resistors on inner nodes when not zero)."""

    name: str
    collector: str
    base: str
    emitter: str
    law: BjtLaw


Element = Resistor | Capacitor | Inductor | VoltageSource | CurrentSource | Vcvs | Vccs | Diode | Bjt


@dataclass(frozen=True)
class Circuit:
    """A flat circuit: elements in netlist order, gmin from every junction as in SPICE (1e-12 S)."""

    title: str
    elements: tuple[Element, ...]
    celsius: float
    gmin_siemens: float = 1e-12

    @property
    def nodes(self) -> tuple[str, ...]:
        """All nodes but ground, in order of appearance."""
        seen: dict[str, None] = {}
        for element in self.elements:
            for node in terminals(element):
                if node != "0":
                    seen.setdefault(node, None)
        return tuple(seen)


def terminals(element: Element) -> tuple[str, ...]:
    """Return the nodes that an element touches."""
    if isinstance(element, Diode):
        return (element.anode, element.cathode)
    if isinstance(element, Bjt):
        return (element.collector, element.base, element.emitter)
    if isinstance(element, Vcvs | Vccs):
        return (element.a, element.b, element.c, element.d)
    return (element.a, element.b)
