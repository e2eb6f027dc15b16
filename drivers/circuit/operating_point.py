"""The DC operating point: capacitors open, inductors shorted, every junction on its law.

Newton's method on the whole set of nodal equations, junction steps limited as in SPICE; where that fails, junction
conductances are taken away step by step, then the sources are raised step by step.

References
----------
L. W. Nagel, "SPICE2: A Computer Program to Simulate Semiconductor Circuits", UCB/ERL M520, 1975, chapter 4.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from drivers.circuit.assembly import (
    BJT_PARAMETERS,
    DIODE_PARAMETERS,
    FloatArray,
    Network,
    build_network,
)
from drivers.circuit.devices import bjt_currents, junction_current
from drivers.circuit.elements import Circuit
from drivers.circuit.errors import CircuitError, NoConvergence
from drivers.circuit.reduction import solve_named

_CONVERGED_VOLTS = 1e-10
_CONVERGED_RATIO = 1e-11
_ROUNDS = 100
_GMIN_START_SIEMENS = 1e-2
_LARGEST_VOLTS = 1e8
_SMALLEST_RAISE = 1e-4


@dataclass(frozen=True)
class OperatingPoint:
    """A solution of the DC equations.

    Attributes
    ----------
    node_volts : mapping of str to float
        Every node but ground.
    source_amps : mapping of str to float
        Currents of V and E elements, from the first terminal through the element to the second (SPICE's sign).
    port_volts : mapping of str to tuple of float
        Junction voltages by device in the device's own polarity: (vbe, vbc) or (vd,).
    capacitor_volts, inductor_amps : mapping of str to float
        What the reactive elements hold, first terminal to second.
    rounds : int
        Newton iterations used, all attempts together.
    """

    node_volts: Mapping[str, float]
    source_amps: Mapping[str, float]
    port_volts: Mapping[str, tuple[float, ...]]
    capacitor_volts: Mapping[str, float]
    inductor_amps: Mapping[str, float]
    rounds: int


def solve_operating_point(circuit: Circuit, *, guess: OperatingPoint | None = None) -> OperatingPoint:
    """Solve for the DC operating point.

    Parameters
    ----------
    circuit : Circuit
    guess : OperatingPoint, optional
        Of a similar circuit: Newton starts from its junction voltages.

    Raises
    ------
    NoConvergence
        No solution was found by any of the ways.
    CircuitError
        A node without a DC path to ground, or a loop of voltage sources and inductors.
    """
    network = build_network(circuit)
    solver = _Solver(network)
    unknowns, port_volts = solver.solve(_guessed_ports(network, guess))
    return _describe(network, unknowns, port_volts, solver.rounds)


def _guessed_ports(network: Network, guess: OperatingPoint | None) -> FloatArray | None:
    if guess is None:
        return None
    layout = network.layout
    values: list[float] = []
    for name in (*layout.bjts, *layout.diodes):
        if name not in guess.port_volts:
            return None
        values.extend(guess.port_volts[name])
    return np.array(values) if len(values) == layout.ports else None


def _describe(network: Network, unknowns: FloatArray, port_volts: FloatArray, rounds: int) -> OperatingPoint:
    layout = network.layout
    across = network.reactive.T @ unknowns[: layout.size]
    inductors = [name for name, c in zip(layout.reactive, network.is_capacitor, strict=True) if not c]
    ports = port_volts.tolist()
    named_ports = {name: tuple(ports[2 * i : 2 * i + 2]) for i, name in enumerate(layout.bjts)}
    first_diode = 2 * len(layout.bjts)
    named_ports |= {name: (ports[first_diode + i],) for i, name in enumerate(layout.diodes)}
    return OperatingPoint(
        node_volts={node: float(unknowns[row]) for node, row in layout.rows.items()},
        source_amps={name: float(unknowns[row]) for name, row in layout.branches.items()},
        port_volts=named_ports,
        capacitor_volts={
            name: float(volts)
            for name, volts, c in zip(layout.reactive, across, network.is_capacitor, strict=True)
            if c
        },
        inductor_amps=dict(zip(inductors, unknowns[layout.size :].tolist(), strict=True)),
        rounds=rounds,
    )


class _Solver:
    """Newton's method on one network; `rounds` counts what it took."""

    def __init__(self, network: Network) -> None:
        self._network = network
        layout = network.layout
        coils = network.reactive[:, ~network.is_capacitor]
        count = coils.shape[1]
        size = layout.size + count
        self._matrix = np.zeros((size, size))
        self._matrix[: layout.size, : layout.size] = network.linear
        self._matrix[: layout.size, layout.size :] = coils
        self._matrix[layout.size :, : layout.size] = coils.T
        self._sources = np.zeros(size)
        self._sources[: layout.size] = network.constant + network.drive @ network.initial_inputs
        self._junctions = np.zeros((size, layout.ports))
        self._junctions[: layout.size] = network.junctions
        self._devices = _Devices(network)
        self.rounds = 0

    def solve(self, start: FloatArray | None) -> tuple[FloatArray, FloatArray]:
        """Return unknowns and port voltages.

        Raises
        ------
        NoConvergence
            Neither way led to a solution.
        """
        gmin = self._network.gmin_siemens
        if not self._network.layout.ports:
            unknowns = self._linear(np.zeros(0), np.zeros((0, 0)), 1.0)
            self._check_scale(unknowns)
            return unknowns, np.zeros(0)
        found = self._newton(self._devices.critical if start is None else start, gmin, 1.0)
        found = found or self._by_gmin(gmin) or self._by_sources(gmin)
        if found is None:
            raise NoConvergence(
                f"no DC operating point was found in {self.rounds} iterations, by gmin stepping and source stepping "
                "neither; look for an unbiased stage or a value that is far off"
            )
        self._check_scale(found[0])
        return found

    def _check_scale(self, unknowns: FloatArray) -> None:
        """A node that floats shows as an absurd voltage when rounding hides that the matrix is singular."""
        layout = self._network.layout
        nodes = np.abs(unknowns[: len(layout.rows)])
        if nodes.size and nodes.max() > _LARGEST_VOLTS:
            node = list(layout.rows)[int(np.argmax(nodes))]
            raise CircuitError(f"the voltage of node {node!r} is not determined: it has no DC path to ground")

    def _by_gmin(self, gmin: float) -> tuple[FloatArray, FloatArray] | None:
        """Start with large conductances across the junctions and take them away."""
        port_volts = np.zeros(self._network.layout.ports)
        extra = _GMIN_START_SIEMENS
        found = None
        while extra > gmin:
            found = self._newton(port_volts, gmin + extra, 1.0)
            if found is None:
                return None
            port_volts = found[1]
            extra /= 10.0
        return self._newton(port_volts, gmin, 1.0)

    def _by_sources(self, gmin: float) -> tuple[FloatArray, FloatArray] | None:
        """Raise all sources from zero, by smaller steps where it is hard."""
        found = self._newton(np.zeros(self._network.layout.ports), gmin, 0.0)
        level, step = 0.0, 0.1
        while found is not None and level < 1.0:
            wanted = min(1.0, level + step)
            higher = self._newton(found[1], gmin, wanted)
            if higher is not None:
                found, level, step = higher, wanted, 2.0 * step
            elif step < _SMALLEST_RAISE:
                return None
            else:
                step /= 4.0
        return found

    def _linear(self, amps: FloatArray, slopes: FloatArray, level: float) -> FloatArray:
        """Solve with every junction replaced by its tangent: current amps + slopes (v - v0), v0 inside `amps`."""
        matrix = self._matrix + self._junctions @ slopes @ self._junctions.T
        return solve_named(matrix, level * self._sources - self._junctions @ amps, self._network.layout)

    def _newton(self, start: FloatArray, gmin: float, level: float) -> tuple[FloatArray, FloatArray] | None:
        port_volts = np.array(start, dtype=np.float64)
        for _ in range(_ROUNDS):
            self.rounds += 1
            amps, slopes = self._devices.evaluate(port_volts)
            slopes[range(port_volts.size), range(port_volts.size)] += gmin
            amps += gmin * port_volts
            unknowns = self._linear(amps - slopes @ port_volts, slopes, level)
            wanted = self._junctions.T @ unknowns
            limited = self._devices.limit(wanted, port_volts)
            change = float(np.max(np.abs(wanted - port_volts)))
            scale = float(np.max(np.abs(wanted)))
            if change <= _CONVERGED_VOLTS + _CONVERGED_RATIO * scale:
                return unknowns, wanted
            port_volts = limited
        return None


class _Devices:
    """The laws of all devices of a network, port by port."""

    def __init__(self, network: Network) -> None:
        layout = network.layout
        values = network.parameters.tolist()
        split = BJT_PARAMETERS * len(layout.bjts)
        self._bjts = [values[at : at + BJT_PARAMETERS] for at in range(0, split, BJT_PARAMETERS)]
        self._diodes = [
            values[at : at + DIODE_PARAMETERS] for at in range(split, len(values), DIODE_PARAMETERS)
        ]
        self.critical = np.array(
            [v for bjt in self._bjts for v in bjt[:2]] + [diode[0] for diode in self._diodes]
        )
        self._nvt = [v for bjt in self._bjts for v in bjt[3:5]] + [diode[2] for diode in self._diodes]

    def evaluate(self, port_volts: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return port currents, shape (q,), and their slopes, shape (q, q)."""
        volts = port_volts.tolist()
        amps = np.zeros(len(volts))
        slopes = np.zeros((len(volts), len(volts)))
        port = 0
        for bjt in self._bjts:
            ic, ib, ic_be, ic_bc, ib_be, ib_bc = bjt_currents(volts[port], volts[port + 1], *bjt[2:15])
            amps[port : port + 2] = ic + ib, -ic
            slopes[port, port : port + 2] = ic_be + ib_be, ic_bc + ib_bc
            slopes[port + 1, port : port + 2] = -ic_be, -ic_bc
            port += 2
        for diode in self._diodes:
            amps[port], slopes[port, port] = junction_current(volts[port], *diode[1:3])
            port += 1
        return amps, slopes

    def limit(self, wanted: FloatArray, before: FloatArray) -> FloatArray:
        """Return the junction voltages to try next."""
        rows = zip(wanted.tolist(), before.tolist(), self._nvt, self.critical.tolist(), strict=True)
        return np.array([_limit_junction(new, old, nvt, critical) for new, old, nvt, critical in rows])


def _limit_junction(new: float, old: float, nvt: float, critical: float) -> float:
    """SPICE's limit on the step of a junction voltage: by the logarithm where the exponential is steep."""
    if new <= critical or abs(new - old) <= 2.0 * nvt:
        return new
    if old <= 0.0:
        return nvt * math.log(new / nvt)
    step = 1.0 + (new - old) / nvt
    return old + nvt * math.log(step) if step > 0.0 else critical
