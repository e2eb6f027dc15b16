"""Small-signal response of a circuit about its operating point: what SPICE calls .ac."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import ArrayLike, NDArray

from drivers.circuit.devices import (
    bjt_charge_values,
    bjt_charges,
    bjt_currents,
    bjt_values,
    diode_charge,
    diode_charge_values,
    diode_values,
    junction_current,
)
from drivers.circuit.elements import Bjt, Circuit, Diode
from drivers.circuit.errors import NumericBreakdown, UnknownName
from drivers.circuit.linear import LinearCircuit, Stamps

Node = str | tuple[str, str]
"""A node against ground, or a pair of nodes."""


def linearise(circuit: Circuit, node_volts: Mapping[str, float]) -> LinearCircuit:
    """Return the circuit with each device replaced by its slopes at an operating point.

    Parameters
    ----------
    circuit : Circuit
    node_volts : mapping
        Voltage of every node, those inside devices (``q1#base``) too.

    Raises
    ------
    UnknownName
        When the voltage of a device's node is not given.
    """
    stamps = Stamps(circuit)

    def volts(node: str) -> float:
        if node == "0":
            return 0.0
        if node not in node_volts:
            raise UnknownName(f"the operating point has no node '{node}'")
        return float(node_volts[node])

    for element in circuit.elements:
        if isinstance(element, Diode):
            _stamp_diode(stamps, element, volts(element.anode) - volts(element.cathode), circuit.gmin_siemens)
        elif isinstance(element, Bjt):
            base = volts(element.base)
            vbe, vbc = base - volts(element.emitter), base - volts(element.collector)
            _stamp_bjt(stamps, element, vbe, vbc, circuit.gmin_siemens)
    return stamps.finished()


def _stamp_diode(stamps: Stamps, diode: Diode, volts: float, gmin_siemens: float) -> None:
    _, siemens = junction_current(volts, *diode_values(diode.law))
    _, farads = diode_charge(volts, *diode_charge_values(diode.law))
    stamps.conduct(diode.anode, diode.cathode, siemens + gmin_siemens)
    stamps.store(diode.anode, diode.cathode, farads)


def _stamp_bjt(stamps: Stamps, bjt: Bjt, vbe: float, vbc: float, gmin_siemens: float) -> None:
    c, b, e = bjt.collector, bjt.base, bjt.emitter
    sign = float(bjt.law.polarity)
    _, _, ic_vbe, ic_vbc, ib_vbe, ib_vbc = bjt_currents(sign * vbe, sign * vbc, *bjt_values(bjt.law))
    stamps.steer(c, e, b, e, ic_vbe)
    stamps.steer(c, e, b, c, ic_vbc)
    stamps.steer(b, e, b, e, ib_vbe)
    stamps.steer(b, e, b, c, ib_vbc)
    stamps.conduct(b, e, gmin_siemens)
    stamps.conduct(b, c, gmin_siemens)
    _, _, qbe_vbe, qbe_vbc, qbc_vbc = bjt_charges(sign * vbe, sign * vbc, *bjt_charge_values(bjt.law))
    stamps.store(b, e, qbe_vbe)
    stamps.steer_charge(b, e, b, c, qbe_vbc)
    stamps.store(b, c, qbc_vbc)


def response(
    linear: LinearCircuit, node: Node, hz: ArrayLike, *, source: str | None = None
) -> NDArray[np.complex128]:
    """Return the phasor of a node's voltage over frequency.

    Parameters
    ----------
    linear : LinearCircuit
    node : str or pair of str
        Node, or (a, b) for v(a) - v(b).
    hz : array_like, shape (n,)
    source : str, optional
        Drive this source alone with 1 V or 1 A; without it the circuit's AC amplitudes drive.

    Returns
    -------
    ndarray of complex, shape (n,)

    Raises
    ------
    UnknownName
        When node or source is not there.
    NumericBreakdown
        When the circuit has no unique answer at a frequency.
    """
    if source is None:
        excitation = linear.columns @ linear.ac
    else:
        excitation = linear.columns[:, linear.source_index(source)].astype(np.complex128)
    return _voltage(linear, node, _solve(linear, excitation, hz))


def impedance(linear: LinearCircuit, node: Node, hz: ArrayLike) -> NDArray[np.complex128]:
    """Return the impedance seen between a node and ground, or between two nodes, in ohms.

    All independent sources are at rest. Parameters, shapes and errors as in `response`.
    """
    excitation = np.zeros(len(linear.conductance), dtype=np.complex128)
    for row, sign in zip(_rows(linear, node), (1.0, -1.0), strict=True):
        if row is not None:
            excitation[row] += sign
    return _voltage(linear, node, _solve(linear, excitation, hz))


def _rows(linear: LinearCircuit, node: Node) -> Sequence[int | None]:
    plus, minus = (node, "0") if isinstance(node, str) else node
    return linear.row(plus), linear.row(minus)


def _voltage(linear: LinearCircuit, node: Node, x: NDArray[np.complex128]) -> NDArray[np.complex128]:
    plus, minus = _rows(linear, node)
    nothing = np.zeros(len(x), dtype=np.complex128)
    return (nothing if plus is None else x[:, plus]) - (nothing if minus is None else x[:, minus])


def _solve(
    linear: LinearCircuit, excitation: NDArray[np.complex128], hz: ArrayLike
) -> NDArray[np.complex128]:
    """Return the unknowns, shape (frequencies, unknowns)."""
    omega = 2.0 * np.pi * np.atleast_1d(np.asarray(hz, dtype=np.float64))
    matrices = linear.conductance + 1j * omega[:, None, None] * linear.susceptance
    right = np.broadcast_to(excitation[:, None], (len(omega), len(excitation), 1))
    try:
        x = np.asarray(np.linalg.solve(matrices, right)[..., 0], dtype=np.complex128)
    except np.linalg.LinAlgError as error:
        raise NumericBreakdown("the circuit has no unique small-signal answer (singular matrix)") from error
    if not np.all(np.isfinite(x)):
        raise NumericBreakdown("the small-signal answer is not finite")
    return x
