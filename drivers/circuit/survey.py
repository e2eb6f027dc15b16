"""What an owner asks of a netlist first: node voltages, currents, response, level and distortion.

References
----------
IEC 60268-3:2013, 14.12.5: total harmonic distortion; here harmonics 2 to 10 over the fundamental.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from drivers.circuit.cards import Netlist
from drivers.circuit.elaboration import elaborate
from drivers.circuit.elements import Circuit, CurrentSource, VoltageSource
from drivers.circuit.errors import BadSurvey, UnknownName, nearest_names
from drivers.circuit.linear import visible_nodes
from drivers.circuit.operating_point import solve_operating_point
from drivers.circuit.small_signal import Node, linearise, response

HARMONICS = 10
_LEAST_RATE_HZ = 48_000.0
_LEAST_SAMPLES_PER_PERIOD = 32  # the tenth harmonic stays in the flat part of the rate conversion
_WINDOW_S = 0.25
_LEAST_PERIODS = 8
_FIRST_RUN_S = 1.0
_LONGEST_RUN_S = 64.0
_SETTLED_RATIO = 2e-5
_SETTLED_VOLTS = 1e-12


@dataclass(frozen=True)
class Sine:
    """A sine on the source: frequency and peak."""

    hz: float
    volts_peak: float


@dataclass(frozen=True)
class ResponsePoint:
    """Small-signal level of the probe over the source's amplitude; -inf where nothing comes through."""

    hz: float
    db: float


@dataclass(frozen=True)
class SineResult:
    """The settled answer to a sine.

    Attributes
    ----------
    hz, volts_peak : float
        The sine on the source (amps when the source is a current source).
    rms_volts : float
        Of the probe, without its DC part.
    thd_ratio : float
        Harmonics 2 to 10, root of the sum of squares, over the fundamental.
    settled : bool
        False when the level still drifted after the longest run.
    """

    hz: float
    volts_peak: float
    rms_volts: float
    thd_ratio: float
    settled: bool = True


@dataclass(frozen=True)
class CircuitSurvey:
    """What was found; `node_volts` without nodes inside devices, `source_amps` with the sign of SPICE."""

    title: str
    celsius: float
    probe: str | None
    source: str | None
    node_volts: Mapping[str, float]
    source_amps: Mapping[str, float]
    response: tuple[ResponsePoint, ...]
    sines: tuple[SineResult, ...]
    notes: tuple[str, ...]


def survey(
    netlist: Netlist,
    probe: str | None,
    *,
    hz: Sequence[float] = (),
    sines: Sequence[Sine] = (),
    source: str | None = None,
    params: Mapping[str, float] | None = None,
    celsius: float | None = None,
    oversample: int = 4,
) -> CircuitSurvey:
    """Look a netlist over.

    Parameters
    ----------
    netlist : Netlist
    probe : str
        A node, or two with a comma for their difference; None when neither response nor sines are asked for.
    hz : sequence of float
        Frequencies of the small-signal response.
    sines : sequence of Sine
        Sines whose settled level and distortion are computed in time.
    source : str, optional
        The source that drives; without it the one that has an AC amplitude.
    params : mapping, optional
        Values of .param names.
    celsius : float, optional
        Temperature in place of the netlist's own.
    oversample : int
        Time steps per sample of the sine.

    Raises
    ------
    BadNetlist, UnknownName, NoConvergence, NumericBreakdown
        From the netlist and its solution.
    BadSurvey
        When it is not clear which source drives, or a frequency or amplitude makes no sense.
    """
    _check(hz, sines)
    circuit = elaborate(netlist, params=params, celsius=celsius)
    node = "0" if probe is None else _probe(circuit, probe)
    driving = _driving_source(circuit, source) if hz or sines or source else None
    point = solve_operating_point(circuit)
    points: tuple[ResponsePoint, ...] = ()
    if hz and driving is not None:
        gains = response(linearise(circuit, point.node_volts), node, list(hz), source=driving)
        points = tuple(ResponsePoint(float(f), _db(abs(gain))) for f, gain in zip(hz, gains, strict=True))
    results = tuple(_play(circuit, str(driving), node, sine, oversample) for sine in sines)
    drifting = tuple(
        f"{r.hz:g} Hz at {r.volts_peak:g}: still drifts after {_LONGEST_RUN_S:g} s"
        for r in results
        if not r.settled
    )
    return CircuitSurvey(
        title=netlist.title,
        celsius=circuit.celsius,
        probe=probe,
        source=driving,
        node_volts={name: point.node_volts[name] for name in visible_nodes(circuit.nodes)},
        source_amps=dict(point.source_amps),
        response=points,
        sines=results,
        notes=netlist.notes + drifting,
    )


def _check(hz: Sequence[float], sines: Sequence[Sine]) -> None:
    for frequency in (*hz, *(sine.hz for sine in sines)):
        if not (math.isfinite(frequency) and frequency > 0.0):
            raise BadSurvey(f"a frequency of {frequency:g} Hz (accepted: greater than zero)")
    for sine in sines:
        if not (math.isfinite(sine.volts_peak) and sine.volts_peak > 0.0):
            raise BadSurvey(f"a sine of {sine.volts_peak:g} V (accepted: greater than zero)")


def _probe(circuit: Circuit, probe: str) -> Node:
    known = visible_nodes(circuit.nodes)
    named = [word.strip().lower() for word in probe.split(",")]
    for name in named:
        if name not in circuit.nodes and name not in ("0", "gnd"):
            raise UnknownName(f"no node '{name}' {nearest_names(name, known)}")
    if len(named) > 2:
        raise BadSurvey(f"'{probe}': a probe is one node, or two with a comma")
    grounded = ["0" if name == "gnd" else name for name in named]
    return grounded[0] if len(grounded) == 1 else (grounded[0], grounded[1])


def _driving_source(circuit: Circuit, wanted: str | None) -> str:
    sources = [e for e in circuit.elements if isinstance(e, VoltageSource | CurrentSource)]
    names = [element.name for element in sources]
    if wanted is not None:
        for name in names:
            if name.lower() == wanted.lower():
                return name
        raise UnknownName(f"no source '{wanted}' {nearest_names(wanted, names)}")
    live = [e.name for e in sources if (e.ac_volts if isinstance(e, VoltageSource) else e.ac_amps) != 0.0]
    if len(live) == 1:
        return live[0]
    if not live:
        listed = ", ".join(names) or "none in this netlist"
        raise BadSurvey(f"no source has an AC amplitude; say which one drives (accepted: {listed})")
    raise BadSurvey(
        f"several sources have an AC amplitude; say which one drives (accepted: {', '.join(live)})"
    )


def _db(ratio: float) -> float:
    return 20.0 * math.log10(ratio) if ratio > 0.0 else -math.inf


def _play(circuit: Circuit, source: str, node: Node, sine: Sine, oversample: int) -> SineResult:
    """Play a sine from the operating point until its level stands still."""
    from drivers.circuit.transient import Simulator  # the compiler is not woken for a DC question

    simulator = Simulator(circuit, inputs=[source], outputs=[node])
    start_volts = float(simulator.initial_inputs[0])
    per_period = max(_LEAST_SAMPLES_PER_PERIOD, math.ceil(_LEAST_RATE_HZ / sine.hz))
    window = max(_LEAST_PERIODS, math.ceil(_WINDOW_S * sine.hz))  # periods
    run_s = _FIRST_RUN_S
    while True:
        periods = max(math.ceil(run_s * sine.hz), 3 * window)
        phase = 2.0 * np.pi * np.arange(periods * per_period + per_period) / per_period
        samples = start_volts + sine.volts_peak * np.sin(phase)
        simulator.start_at_operating_point()
        heard = simulator.run(samples[:, None], per_period * sine.hz, oversample)[:, 0]
        heard = heard[: periods * per_period]  # the last period lies at the edge of the rate conversion
        last = _measure(heard[-window * per_period :], per_period)
        before = _measure(heard[-2 * window * per_period : -window * per_period], per_period)
        settled = last.agrees_with(before)
        if settled or run_s >= _LONGEST_RUN_S:
            return SineResult(sine.hz, sine.volts_peak, last.rms_volts, last.thd_ratio, settled)
        run_s *= 4.0


@dataclass(frozen=True)
class _Heard:
    rms_volts: float
    thd_ratio: float

    def agrees_with(self, other: _Heard) -> bool:
        level = abs(self.rms_volts - other.rms_volts) <= _SETTLED_VOLTS + _SETTLED_RATIO * self.rms_volts
        return level and abs(self.thd_ratio - other.thd_ratio) <= _SETTLED_RATIO + 1e-3 * self.thd_ratio


def _measure(volts: NDArray[np.float64], per_period: int) -> _Heard:
    """Return level and distortion over whole periods."""
    periods = len(volts) // per_period
    alternating = volts - np.mean(volts)
    peaks = 2.0 * np.abs(np.fft.rfft(alternating)) / len(volts)
    harmonics = peaks[periods * np.arange(1, HARMONICS + 1)]
    fundamental = float(harmonics[0])
    above = float(np.sqrt(np.sum(harmonics[1:] ** 2)))
    return _Heard(
        rms_volts=float(np.sqrt(np.mean(alternating**2))),
        thd_ratio=above / fundamental if fundamental > 0.0 else math.inf,
    )
