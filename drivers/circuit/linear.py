"""Modified nodal analysis: G x + C dx/dt = b, with node voltages and branch currents in x."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from drivers.circuit.elements import (
    Capacitor,
    Circuit,
    CurrentSource,
    Element,
    Inductor,
    Resistor,
    Vccs,
    Vcvs,
    VoltageSource,
)
from drivers.circuit.errors import UnknownName, nearest_names

Reals = NDArray[np.float64]


@dataclass(frozen=True)
class LinearCircuit:
    """Matrices of a linear (or linearised) circuit.

    Attributes
    ----------
    nodes : tuple of str
        Node voltages, the first unknowns; ground is left out.
    branches : tuple of str
        Elements whose current is an unknown, after the nodes: V, E and L in netlist order.
    conductance, susceptance : ndarray, shape (unknowns, unknowns)
        G in siemens and C in farads (henries in rows of inductors).
    sources : tuple of str
        Names of the independent sources.
    columns : ndarray, shape (unknowns, sources)
        Right-hand side for one volt or ampere of each source.
    ac : ndarray of complex, shape (sources,)
        Small-signal amplitudes of the sources.
    """

    nodes: tuple[str, ...]
    branches: tuple[str, ...]
    conductance: Reals
    susceptance: Reals
    sources: tuple[str, ...]
    columns: Reals
    ac: NDArray[np.complex128]

    def row(self, node: str) -> int | None:
        """Return the row of a node, None for ground.

        Raises
        ------
        UnknownName
            When there is no such node.
        """
        lowered = node.lower()
        if lowered in ("0", "gnd"):
            return None
        if lowered not in self.nodes:
            raise UnknownName(f"no node '{node}' {nearest_names(node, visible_nodes(self.nodes))}")
        return self.nodes.index(lowered)

    def source_index(self, name: str) -> int:
        """Return the column of a source.

        Raises
        ------
        UnknownName
            When there is no such source.
        """
        for i, known in enumerate(self.sources):
            if known.lower() == name.lower():
                return i
        raise UnknownName(f"no source '{name}' {nearest_names(name, self.sources)}")


def visible_nodes(nodes: tuple[str, ...]) -> tuple[str, ...]:
    """Return the nodes without those inside devices."""
    return tuple(node for node in nodes if "#" not in node)


class Stamps:
    """Matrices under construction.

    Parameters
    ----------
    circuit : Circuit
        Its linear elements are stamped; devices are left to the caller.
    """

    def __init__(self, circuit: Circuit) -> None:
        self._nodes = circuit.nodes
        self._rows = {node: i for i, node in enumerate(self._nodes)}
        branched = [e for e in circuit.elements if isinstance(e, VoltageSource | Vcvs | Inductor)]
        sources = [e for e in circuit.elements if isinstance(e, VoltageSource | CurrentSource)]
        self._branches = {e.name: len(self._nodes) + i for i, e in enumerate(branched)}
        self._sources = {e.name: i for i, e in enumerate(sources)}
        size = len(self._nodes) + len(branched)
        self._conductance = np.zeros((size, size))
        self._susceptance = np.zeros((size, size))
        self._columns = np.zeros((size, len(sources)))
        self._ac = np.zeros(len(sources), dtype=np.complex128)
        for element in circuit.elements:
            self._stamp(element)

    def finished(self) -> LinearCircuit:
        """Return the circuit."""
        return LinearCircuit(
            self._nodes,
            tuple(self._branches),
            self._conductance,
            self._susceptance,
            tuple(self._sources),
            self._columns,
            self._ac,
        )

    def conduct(self, a: str, b: str, siemens: float) -> None:
        """Add a conductance between two nodes."""
        self._across(self._conductance, a, b, a, b, siemens)

    def store(self, a: str, b: str, farads: float) -> None:
        """Add a capacitance between two nodes."""
        self._across(self._susceptance, a, b, a, b, farads)

    def steer(self, a: str, b: str, c: str, d: str, siemens: float) -> None:
        """Add a current from `a` to `b` of `siemens` times v(c) - v(d)."""
        self._across(self._conductance, a, b, c, d, siemens)

    def steer_charge(self, a: str, b: str, c: str, d: str, farads: float) -> None:
        """Add a charge between `a` and `b` of `farads` times v(c) - v(d)."""
        self._across(self._susceptance, a, b, c, d, farads)

    def _across(self, matrix: Reals, a: str, b: str, c: str, d: str, value: float) -> None:
        for out, sign in ((a, 1.0), (b, -1.0)):
            for control, other in ((c, 1.0), (d, -1.0)):
                if out != "0" and control != "0":
                    matrix[self._rows[out], self._rows[control]] += sign * other * value

    def _join(self, element: VoltageSource | Vcvs | Inductor) -> int:
        """Let the branch current leave `a` and enter `b`, and set v(a) - v(b) in the branch's row."""
        branch = self._branches[element.name]
        for node, sign in ((element.a, 1.0), (element.b, -1.0)):
            if node != "0":
                self._conductance[self._rows[node], branch] += sign
                self._conductance[branch, self._rows[node]] += sign
        return branch

    def _stamp(self, element: Element) -> None:
        match element:
            case Resistor():
                self.conduct(element.a, element.b, 1.0 / element.ohms)
            case Capacitor():
                self.store(element.a, element.b, element.farads)
            case Inductor():
                branch = self._join(element)
                self._susceptance[branch, branch] -= element.henries
            case VoltageSource():
                source = self._sources[element.name]
                self._columns[self._join(element), source] = 1.0
                self._ac[source] = _phasor(element.ac_volts, element.ac_phase_deg)
            case CurrentSource():
                source = self._sources[element.name]
                for node, sign in ((element.a, -1.0), (element.b, 1.0)):
                    if node != "0":
                        self._columns[self._rows[node], source] += sign
                self._ac[source] = _phasor(element.ac_amps, element.ac_phase_deg)
            case Vccs():
                self.steer(element.a, element.b, element.c, element.d, element.siemens)
            case Vcvs():
                branch = self._join(element)
                for node, sign in ((element.c, -1.0), (element.d, 1.0)):
                    if node != "0":
                        self._conductance[branch, self._rows[node]] += sign * element.gain
            case _:
                pass  # devices are linearised by the caller


def _phasor(amplitude: float, phase_deg: float) -> complex:
    return complex(amplitude * np.exp(1j * np.deg2rad(phase_deg)))
