"""Instruments, bytes, converters, relays and maths together say what the unit's own circuit is.

The measure is the small-signal answer of the same circuit in the same fixture, computed without any bench
(and itself held against ngspice in tests/circuit).
"""

from __future__ import annotations

from functools import cache
from pathlib import Path

import numpy as np
import pytest

from drivers.circuit.operating_point import solve_operating_point
from fixture.domain.run import RunResult
from fixture.lots.trial import Trial, try_unit
from fixture.modelfile import find_model
from tests.endtoend.analytic import gain_db, unit_circuit

ROOT = Path(__file__).resolve().parents[2]
SERIALS = ("PT-2612-0001", "PT-2612-0044", "PT-2612-7003")
CELSIUS = 23.0
UP, DOWN = {"fuzz": 1.0, "volume": 1.0}, {"fuzz": 0.0, "volume": 1.0}


@cache
def run_of(serial: str) -> RunResult:
    return try_unit(ROOT, "peat", Trial(serial))


def reading(serial: str, step: str, name: str):  # type: ignore[no-untyped-def]
    (found,) = [r.reading for r in run_of(serial).readings if (r.step, r.reading.name) == (step, name)]
    return found


@pytest.mark.parametrize("serial", SERIALS)
@pytest.mark.parametrize(("step", "travels"), [("Gain, Fuzz up", UP), ("Gain, Fuzz down", DOWN)])
def test_the_gain_is_the_circuit_s_own_within_a_tenth_of_a_db(
    serial: str, step: str, travels: dict[str, float]
) -> None:
    circuit = unit_circuit(
        find_model(ROOT, "peat"), serial, travels, relays=("source_line",), celsius=CELSIUS
    )
    measured = reading(serial, step, "gain")
    expected = gain_db(circuit, np.array([997.0]))[0]
    assert measured.value == pytest.approx(expected, abs=0.1)


@pytest.mark.parametrize("serial", SERIALS)
def test_the_response_is_the_circuit_s_own_within_a_tenth_of_a_db_from_20_hz_to_10_khz(serial: str) -> None:
    circuit = unit_circuit(find_model(ROOT, "peat"), serial, UP, relays=("source_line",), celsius=CELSIUS)
    curve = reading(serial, "Response, Fuzz up", "response").curve
    used = (curve.hz >= 20.0) & (curve.hz <= 10_000.0)
    assert curve.hz[used][0] < 21.0 and curve.hz[used][-1] > 9_400.0
    expected = gain_db(circuit, curve.hz[used]) - gain_db(circuit, np.array([997.0]))[0]
    assert np.max(np.abs(curve.db[used] - expected)) < 0.1


@pytest.mark.parametrize("serial", SERIALS)
def test_node_voltages_and_current_are_the_operating_point_s_within_their_uncertainty(serial: str) -> None:
    circuit = unit_circuit(find_model(ROOT, "peat"), serial, UP, relays=("source_short",), celsius=CELSIUS)
    point = solve_operating_point(circuit).node_volts
    nets = {node.name: node.net for node in find_model(ROOT, "peat").nodes.values()}
    for name, net in nets.items():
        measured = reading(serial, "Bias", name)
        # the supply may set 9 V with an error of some millivolts: the rail as measured stands in the run
        assert measured.value == pytest.approx(point[f"pedal.{net}"], abs=0.01)
    shunt_amps = (point["supply"] - point["hot"]) / 10.0
    assert reading(serial, "Supply current", "supply_current").value == pytest.approx(shunt_amps, rel=2e-3)
