"""One time step of a circuit as matrices: everything but the junctions is solved once and for all (K-method).

References
----------
D. T. Yeh, J. S. Abel, J. O. Smith, "Automated physical modeling of nonlinear audio circuits for real-time
audio effects, part I", IEEE Trans. Audio Speech Lang. Process. 18, 2010.
M. Holters, U. Zölzer, "A generalized method for the derivation of non-linear state-space models from circuit
schematics", EUSIPCO 2015.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from drivers.circuit.assembly import FloatArray, Layout, Network
from drivers.circuit.errors import CircuitError, NumericBreakdown

SHUNT_SIEMENS = 1e-12
"""From every node to ground in transients: a node between capacitors alone has no other path."""

SHIFT_SIEMENS = 1e-6
"""Put across every junction and taken off its law again: nodes that only junctions touch stay well conditioned."""

_LANES = 4
"""Rows are padded to whole vectors of doubles."""


@dataclass(frozen=True)
class Reduced:
    """One time step as matrices: columns in, rows out, stored transposed so that rows are contiguous.

    With s = [states; inputs; 1] and i the port currents, ``[v; y; s'] = s @ map + i @ feedback``; v are the port
    voltages, y the outputs.

    Attributes
    ----------
    map : array, shape (m + k + 1, r)
    feedback : array, shape (q, r)
    per_second : float
        1 / half_step_s, which junction charges are multiplied by.
    remember : float
        1 for the trapezoidal rule, 0 for backward Euler.
    """

    map: FloatArray
    feedback: FloatArray
    per_second: float
    remember: float


def reduce_network(network: Network, half_step_s: float, *, trapezoidal: bool) -> Reduced:
    """Reduce a network to one step of 2 half_step_s (trapezoidal) or of half_step_s (backward Euler).

    Both rules share their companions at these lengths, which is why two backward Euler half steps can open a
    trapezoidal run.

    Raises
    ------
    CircuitError
        The matrix is singular; the message names the node or source that is not determined.
    """
    layout = network.layout
    capacitor = network.is_capacitor
    companion = network.reactances / half_step_s
    companion[~capacitor] = half_step_s / network.reactances[~capacitor]  # an open capacitor has 0 F
    matrix = network.linear + (network.reactive * companion) @ network.reactive.T
    matrix += (network.junctions * SHIFT_SIEMENS) @ network.junctions.T
    nodes = len(layout.rows)
    matrix[range(nodes), range(nodes)] += SHUNT_SIEMENS
    columns = np.hstack(
        [
            network.reactive * np.where(capacitor, companion, -1.0),
            network.drive,
            network.constant[:, None],
            -network.junctions,
        ]
    )
    solved = solve_named(matrix, columns, layout)
    rows = np.vstack([network.junctions.T, network.read, network.reactive.T]) @ solved
    states = capacitor.size
    remember = 1.0 if trapezoidal else 0.0
    if states:
        rows[-states:] *= ((1.0 + remember) * np.where(capacitor, 1.0, companion))[:, None]
        first = rows.shape[0] - states
        rows[range(first, rows.shape[0]), range(states)] += np.where(capacitor, -remember, 1.0)
    padded = -(-rows.shape[0] // _LANES) * _LANES
    table = np.zeros((rows.shape[1], padded))
    table[:, : rows.shape[0]] = rows.T
    split = rows.shape[1] - layout.ports
    return Reduced(
        map=np.ascontiguousarray(table[:split]),
        feedback=np.ascontiguousarray(table[split:]),
        per_second=1.0 / half_step_s,
        remember=remember,
    )


def solve_named(matrix: FloatArray, columns: FloatArray, layout: Layout) -> FloatArray:
    """Solve, and say in words what is not determined when that cannot be.

    Raises
    ------
    CircuitError
        The matrix is singular.
    NumericBreakdown
        A value in it is not finite.
    """
    if not np.isfinite(matrix).all():
        raise NumericBreakdown("a value of the circuit is not finite")
    try:
        solved = np.linalg.solve(matrix, columns)
    except np.linalg.LinAlgError as error:
        raise CircuitError(_undetermined(matrix, layout)) from error
    if not np.isfinite(solved).all():
        raise CircuitError(_undetermined(matrix, layout))
    return np.asarray(solved)


def _undetermined(matrix: FloatArray, layout: Layout) -> str:
    """Name the unknown that a singular matrix leaves open: the largest part of its null vector."""
    null = np.abs(np.linalg.svd(matrix)[2][-1])
    names = [*layout.rows, *layout.branches]
    worst = int(np.argmax(null))
    if worst < len(layout.rows):
        return f"the voltage of node {names[worst]!r} is not determined: it has no path to ground"
    return (
        f"the current through {names[worst]} is not determined: "
        "voltage sources and inductors must not form a loop"
    )
