"""What a unit in the fixture answers by small-signal analysis of its own circuit: the measure for the whole chain."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from drivers.circuit.elements import Circuit, VoltageSource
from drivers.circuit.operating_point import solve_operating_point
from drivers.circuit.small_signal import linearise, response
from drivers.simulated.pedal import UnitInFixture
from fixture.bench.placing import Placement, place_unit
from fixture.domain.model import Model

LINE = "Vline__fx"
REGULATOR = "Vreg__fx"
PAD = {"fine": 1e-3, "coarse": 0.1}


def unit_circuit(
    model: Model, serial: str, travels: Mapping[str, float], *, relays: tuple[str, ...], celsius: float
) -> Circuit:
    """Return the joined circuit with the supply on and relays and knobs set."""
    unit = UnitInFixture(place_unit(Placement(model, serial)), celsius)
    for name, travel in travels.items():
        unit.turn_control(name, travel)
    for relay in ("regulator_on", f"supply_{model.supply.ground}_ground", "footswitch", *relays):
        assert unit.set_param(relay, 1.0)
    circuit = unit.circuit()
    elements = tuple(
        replace(element, dc_volts=model.supply.volts)
        if isinstance(element, VoltageSource) and element.name == REGULATOR
        else replace(element, ac_volts=1.0)
        if isinstance(element, VoltageSource) and element.name == LINE
        else element
        for element in circuit.elements
    )
    return replace(circuit, elements=elements)


def gain_db(circuit: Circuit, hz: NDArray[np.float64], *, pad: str = "fine") -> NDArray[np.float64]:
    """Return output over the source's e.m.f. in dB at the frequencies."""
    point = solve_operating_point(circuit)
    answer = response(linearise(circuit, point.node_volts), "jack_out", hz)
    return np.asarray(20 * np.log10(np.abs(answer) / PAD[pad]))
