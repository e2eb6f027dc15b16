"""The dense matrices of a circuit: what its elements stamp, and which unknown, state and port is which.

Unknowns are the node voltages followed by the currents of the V and E elements. Reactive elements are ports
of the linear part, with capacitor voltages and inductor currents as states, so that a state outlives a
change of any value and of the time step. Junctions are ports too: one per diode (anode, cathode), two per
transistor, (base, emitter) and (base, collector), turned round for PNP so that the device equations see
their own polarity.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from drivers.circuit.devices import (
    bjt_charge_values,
    bjt_charges,
    bjt_values,
    diode_charge,
    diode_charge_values,
    diode_values,
)
from drivers.circuit.elements import (
    Bjt,
    Capacitor,
    Circuit,
    CurrentSource,
    Diode,
    Element,
    Inductor,
    JunctionCharge,
    Resistor,
    Vccs,
    Vcvs,
    VoltageSource,
    terminals,
)
from drivers.circuit.errors import CircuitError, UnknownName, nearest_names

FloatArray = NDArray[np.float64]
Output = str | tuple[str, str]

BJT_PARAMETERS = 31
DIODE_PARAMETERS = 10
"""Length of a device's parameters: see `device_parameters`."""


@dataclass(frozen=True)
class Layout:
    """Which unknown, state and port is which; the same for all values of a circuit.

    Attributes
    ----------
    signature : tuple
        Kind, name and terminals of every element: circuits with equal signatures can follow one another.
    rows : dict
        Node name -> unknown; ground is not among them.
    branches : dict
        Name of a V or E element -> the unknown that is its current.
    reactive : tuple of str
        Capacitors and inductors, in the order of the states.
    bjts, diodes : tuple of str
        Devices in the order of their ports: two for each transistor, then one for each diode.
    """

    signature: tuple[tuple[str, ...], ...]
    rows: dict[str, int]
    branches: dict[str, int]
    reactive: tuple[str, ...]
    bjts: tuple[str, ...]
    diodes: tuple[str, ...]

    @property
    def size(self) -> int:
        """Number of unknowns."""
        return len(self.rows) + len(self.branches)

    @property
    def ports(self) -> int:
        """Number of junctions."""
        return 2 * len(self.bjts) + len(self.diodes)


def lay_out(circuit: Circuit) -> Layout:
    """Number the unknowns, states and ports of a circuit."""
    rows = {node: row for row, node in enumerate(circuit.nodes)}
    with_current = [e.name for e in circuit.elements if isinstance(e, VoltageSource | Vcvs)]
    return Layout(
        signature=signature_of(circuit),
        rows=rows,
        branches={name: len(rows) + i for i, name in enumerate(with_current)},
        reactive=tuple(e.name for e in circuit.elements if isinstance(e, Capacitor | Inductor)),
        bjts=tuple(e.name for e in circuit.elements if isinstance(e, Bjt)),
        diodes=tuple(e.name for e in circuit.elements if isinstance(e, Diode)),
    )


def signature_of(circuit: Circuit) -> tuple[tuple[str, ...], ...]:
    """Return kind, name and terminals of every element, and the polarity of transistors."""
    return tuple(
        (type(e).__name__, e.name, *terminals(e), *((str(e.law.polarity),) if isinstance(e, Bjt) else ()))
        for e in circuit.elements
    )


@dataclass(frozen=True)
class Network:
    """The matrices of a circuit with its values in; n unknowns, m states, q ports, k inputs, o outputs.

    Attributes
    ----------
    linear : array, shape (n, n)
        Resistors and sources of every kind; no reactive element, no junction.
    reactive : array, shape (n, m)
        +1 at the first terminal, -1 at the second.
    is_capacitor : array of bool, shape (m,)
    reactances : array, shape (m,)
        Farads or henries.
    junctions : array, shape (n, q)
        +1 where a port's current enters it, -1 where it leaves.
    drive : array, shape (n, k)
    constant : array, shape (n,)
        The sources that are not inputs, at their DC values.
    initial_inputs : array, shape (k,)
        DC values of the inputs.
    read : array, shape (o, n)
    parameters : array
        For the kernels: see `device_parameters`.
    charged : bool
        Whether any junction stores charge.
    """

    layout: Layout
    gmin_siemens: float
    linear: FloatArray
    reactive: FloatArray
    is_capacitor: NDArray[np.bool_]
    reactances: FloatArray
    junctions: FloatArray
    drive: FloatArray
    constant: FloatArray
    initial_inputs: FloatArray
    read: FloatArray
    parameters: FloatArray
    charged: bool


def build_network(
    circuit: Circuit,
    *,
    inputs: Sequence[str] = (),
    outputs: Sequence[Output] = (),
    layout: Layout | None = None,
) -> Network:
    """Stamp a circuit.

    Parameters
    ----------
    circuit : Circuit
    inputs : sequence of str
        Names of V or I elements that are driven.
    outputs : sequence of str or pair of str
        Node, pair of nodes (difference), or ``i(Vname)`` for the current through a V or E element.
    layout : Layout, optional
        From an earlier circuit with the same signature.

    Raises
    ------
    UnknownName
        An input or output that the circuit does not have.
    CircuitError
        An element whose value cannot be stamped (zero ohms).
    """
    if layout is None:
        layout = lay_out(circuit)
    size = layout.size
    linear = np.zeros((size, size))
    drive = np.zeros((size, len(inputs)))
    constant = np.zeros(size)
    initial = np.zeros(len(inputs))
    input_at = {_source_name(circuit, name): i for i, name in enumerate(inputs)}
    for element in circuit.elements:
        if isinstance(element, VoltageSource | CurrentSource):
            vector = _stamp_source(element, layout, linear)
            dc = element.dc_volts if isinstance(element, VoltageSource) else element.dc_amps
            column = input_at.get(element.name)
            if column is None:
                constant += vector * dc
            else:
                drive[:, column] = vector
                initial[column] = dc
        else:
            _stamp_linear(element, layout, linear)
    states = [e for e in circuit.elements if isinstance(e, Capacitor | Inductor)]
    reactive = np.zeros((size, len(states)))
    for column, state in enumerate(states):
        reactive[:, column] = _across(layout, size, state.a, state.b)
    devices = _devices(circuit)
    return Network(
        layout=layout,
        gmin_siemens=circuit.gmin_siemens,
        linear=linear,
        reactive=reactive,
        is_capacitor=np.array([isinstance(e, Capacitor) for e in states], dtype=np.bool_),
        reactances=np.array([e.farads if isinstance(e, Capacitor) else e.henries for e in states]),
        junctions=_junction_matrix(devices, layout),
        drive=drive,
        constant=constant,
        initial_inputs=initial,
        read=_read_matrix(outputs, layout),
        parameters=device_parameters(devices),
        charged=any(_has_charge(charge) for device in devices for charge in _charges(device)),
    )


def _row(layout: Layout, node: str) -> int:
    return -1 if node == "0" else layout.rows[node]


def _across(layout: Layout, size: int, a: str, b: str) -> FloatArray:
    vector = np.zeros(size)
    for node, sign in ((a, 1.0), (b, -1.0)):
        row = _row(layout, node)
        if row >= 0:
            vector[row] += sign
    return vector


def _stamp_source(element: VoltageSource | CurrentSource, layout: Layout, linear: FloatArray) -> FloatArray:
    """Stamp a source's equations; return the right-hand side of one volt or one amp."""
    if isinstance(element, CurrentSource):
        return -_across(layout, layout.size, element.a, element.b)
    branch = _stamp_branch(element.name, element.a, element.b, layout, linear)
    vector = np.zeros(layout.size)
    vector[branch] = 1.0
    return vector


def _stamp_branch(name: str, a: str, b: str, layout: Layout, linear: FloatArray) -> int:
    branch = layout.branches[name]
    for node, sign in ((a, 1.0), (b, -1.0)):
        row = _row(layout, node)
        if row >= 0:
            linear[row, branch] += sign
            linear[branch, row] += sign
    return branch


def _stamp_linear(element: Element, layout: Layout, linear: FloatArray) -> None:
    if isinstance(element, Resistor):
        if element.ohms == 0.0:
            raise CircuitError(f"{element.name}: a resistor of 0 ohms cannot be solved; use 1 mOhm or more")
        _stamp_transfer(layout, linear, element.a, element.b, element.a, element.b, 1.0 / element.ohms)
    elif isinstance(element, Vccs):
        _stamp_transfer(layout, linear, element.a, element.b, element.c, element.d, element.siemens)
    elif isinstance(element, Vcvs):
        branch = _stamp_branch(element.name, element.a, element.b, layout, linear)
        for node, sign in ((element.c, -1.0), (element.d, 1.0)):
            row = _row(layout, node)
            if row >= 0:
                linear[branch, row] += sign * element.gain


def _stamp_transfer(
    layout: Layout, linear: FloatArray, a: str, b: str, c: str, d: str, siemens: float
) -> None:
    row_a, row_b, row_c, row_d = (_row(layout, node) for node in (a, b, c, d))
    for row, row_sign in ((row_a, 1.0), (row_b, -1.0)):
        for column, column_sign in ((row_c, 1.0), (row_d, -1.0)):
            if row >= 0 and column >= 0:
                linear[row, column] += row_sign * column_sign * siemens


def _devices(circuit: Circuit) -> list[Bjt | Diode]:
    """Return the devices in the order of their ports."""
    bjts = [e for e in circuit.elements if isinstance(e, Bjt)]
    return [*bjts, *(e for e in circuit.elements if isinstance(e, Diode))]


def _charges(device: Bjt | Diode) -> tuple[JunctionCharge, ...]:
    return (device.law.be, device.law.bc) if isinstance(device, Bjt) else (device.law.charge,)


def _has_charge(charge: JunctionCharge) -> bool:
    return charge.cj_farads != 0.0 or charge.tt_s != 0.0


def _junction_matrix(devices: Sequence[Bjt | Diode], layout: Layout) -> FloatArray:
    columns: list[FloatArray] = []
    for device in devices:
        if isinstance(device, Diode):
            columns.append(_across(layout, layout.size, device.anode, device.cathode))
        else:
            for other in (device.emitter, device.collector):
                columns.append(device.law.polarity * _across(layout, layout.size, device.base, other))
    return np.array(columns).T.reshape(layout.size, len(columns))


def _read_matrix(outputs: Sequence[Output], layout: Layout) -> FloatArray:
    read = np.zeros((len(outputs), layout.size))
    for row, output in enumerate(outputs):
        if isinstance(output, tuple):
            for node, sign in zip(output, (1.0, -1.0), strict=True):
                if node != "0":
                    read[row, _find(node, layout.rows, "node")] += sign
        elif output.lower().startswith("i(") and output.endswith(")"):
            read[row, _find(output[2:-1], layout.branches, "source with a current")] = 1.0
        elif output != "0":
            read[row, _find(output, layout.rows, "node")] = 1.0
    return read


def _find(name: str, known: dict[str, int], what: str) -> int:
    if name in known:
        return known[name]
    for candidate, row in known.items():
        if candidate.lower() == name.lower():
            return row
    raise UnknownName(f"the circuit has no {what} {name!r} {nearest_names(name, known)}")


def _source_name(circuit: Circuit, name: str) -> str:
    sources = [e.name for e in circuit.elements if isinstance(e, VoltageSource | CurrentSource)]
    for source in sources:
        if source.lower() == name.lower():
            return source
    raise UnknownName(f"the circuit has no V or I source {name!r} {nearest_names(name, sources)}")


# --- devices


def critical_volts(is_amps: float, nvt_volts: float) -> float:
    """Return the voltage above which Newton's steps on a junction must be limited (Nagel 1975)."""
    return nvt_volts * math.log(nvt_volts / (math.sqrt(2.0) * is_amps))


def device_parameters(devices: Iterable[Bjt | Diode]) -> FloatArray:
    """Return the parameters of all devices in one flat array, in the order that the kernels read.

    Transistor: two critical voltages, 13 of `bjt_values`, 16 of `bjt_charge_values`. Diode: critical voltage, two of
    `diode_values`, seven of `diode_charge_values`.
    """
    flat: list[float] = []
    for device in devices:
        if isinstance(device, Bjt):
            values = bjt_values(device.law)
            is_amps, nf_vt, nr_vt = values[:3]
            flat += [critical_volts(is_amps, nf_vt), critical_volts(is_amps, nr_vt)]
            flat += [*values, *bjt_charge_values(device.law)]
        else:
            junction = diode_values(device.law)
            flat += [critical_volts(*junction), *junction, *diode_charge_values(device.law)]
    return np.array(flat, dtype=np.float64)


def junction_charges(network: Network, port_volts: FloatArray) -> FloatArray:
    """Return the charge of each port in coulombs, shape (q,)."""
    coulombs = np.zeros(network.layout.ports)
    values = network.parameters.tolist()
    at = port = 0
    for _ in network.layout.bjts:
        vbe, vbc = float(port_volts[port]), float(port_volts[port + 1])
        coulombs[port : port + 2] = bjt_charges(vbe, vbc, *values[at + 15 : at + BJT_PARAMETERS])[:2]
        at, port = at + BJT_PARAMETERS, port + 2
    for _ in network.layout.diodes:
        coulombs[port] = diode_charge(float(port_volts[port]), *values[at + 3 : at + DIODE_PARAMETERS])[0]
        at, port = at + DIODE_PARAMETERS, port + 1
    return coulombs
