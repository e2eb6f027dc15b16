"""A circuit in time: steps, settling, and runs of audio samples.

The state is what the circuit holds physically, capacitor voltages, inductor currents and junction voltages, so it
outlives a relay, a turned knob or another temperature: `Simulator.change` swaps the values and time goes on.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from drivers.circuit.assembly import (
    FloatArray,
    Layout,
    Output,
    build_network,
    junction_charges,
    lay_out,
    signature_of,
)
from drivers.circuit.elements import Circuit
from drivers.circuit.errors import CircuitError, NoConvergence
from drivers.circuit.operating_point import solve_operating_point
from drivers.circuit.reduction import Reduced
from drivers.circuit.resample import FACTORS, decimate, half_length, interpolate
from drivers.circuit.stepping import CircuitValues, Tolerances

_CIRCUITS_KEPT = 24
_CHUNK_FRAMES = 4096
_BRIDGE_STEPS = 64

_STATE_TOLERANCE_VOLTS = 1e-4
_STATE_TOLERANCE_AMPS = 1e-8
_OUTPUT_TOLERANCE_VOLTS = 3e-4
_RELATIVE_TOLERANCE = 3e-5
_ANY = 1e300
_FIRST_STEP_S = 1e-5
_FINEST = 40  # halvings of the longest step of a settling
_SHORTEST_STEP_S = 1e-6  # what moves faster has moved: shorter steps are for convergence alone


@dataclass(frozen=True, eq=False)
class State:
    """What a circuit holds: capacitor volts and inductor amps, port volts now and (for the next guess) before."""

    reactive: FloatArray
    port_volts: FloatArray
    port_volts_before: FloatArray


@dataclass(frozen=True, eq=False)
class Trial:
    """A step that was tried; `Simulator.accept` makes it the present.

    Attributes
    ----------
    outputs : array, shape (outputs,)
        At the end of the step.
    """

    outputs: FloatArray
    flat: FloatArray


class Simulator:
    """A circuit in time.

    Parameters
    ----------
    circuit : Circuit
    inputs : sequence of str
        Names of the V and I sources that are driven; their DC values are where they begin.
    outputs : sequence of str or pair of str
        Nodes, pairs of nodes (difference), or ``i(Vname)``: amps from the first terminal through the source.

    Raises
    ------
    UnknownName
        An input or output that the circuit does not have.
    CircuitError
        The circuit cannot be solved; the message says what is not determined.
    """

    def __init__(self, circuit: Circuit, *, inputs: Sequence[str], outputs: Sequence[Output]) -> None:
        self._inputs = tuple(inputs)
        self._outputs = tuple(outputs)
        self._layout: Layout = lay_out(circuit)
        self._known: dict[Circuit, CircuitValues] = {}
        self._values = self._values_of(circuit)
        network = self._values.network
        self._output_tolerances = np.array(
            [
                # a source that charges a capacitor at once has a current without bound
                math.inf if isinstance(o, str) and o.lower().startswith("i(") else _OUTPUT_TOLERANCE_VOLTS
                for o in self._outputs
            ]
        )
        self._state_tolerances = np.where(network.is_capacitor, _STATE_TOLERANCE_VOLTS, _STATE_TOLERANCE_AMPS)
        self._flat = np.zeros(network.is_capacitor.size + 4 * self._layout.ports)
        self._run_step: Reduced | None = None
        self._flat_before = self._flat
        self._settling_step_s = 0.0
        self.start_discharged()

    # --- where it stands

    @property
    def initial_inputs(self) -> FloatArray:
        """DC values of the inputs in the present circuit, shape (inputs,)."""
        return self._values.network.initial_inputs.copy()

    def start_discharged(self) -> None:
        """Begin with every capacitor, inductor and junction at zero."""
        ports = np.zeros(self._layout.ports)
        self.restore(State(np.zeros(self._values.network.is_capacitor.size), ports, np.tile(ports, 2)))

    def start_at_operating_point(self) -> None:
        """Begin settled, all sources at their DC values.

        Raises
        ------
        NoConvergence
            There is no operating point to be found.
        CircuitError
            A node has no DC path to ground.
        """
        point = solve_operating_point(self._values.circuit)
        held = {**point.capacitor_volts, **point.inductor_amps}
        layout = self._layout
        ports = np.array([v for name in (*layout.bjts, *layout.diodes) for v in point.port_volts[name]])
        self.restore(State(np.array([held[name] for name in layout.reactive]), ports, np.tile(ports, 2)))

    def state(self) -> State:
        """Return what the circuit holds now."""
        self._leave_run()
        states, ports = self._sizes()
        return State(
            self._flat[:states].copy(),
            self._flat[states : states + ports].copy(),
            self._flat[states + 2 * ports :].copy(),
        )

    def restore(self, state: State) -> None:
        """Go back to a state; the values of the circuit stay as they are."""
        self._run_step = None
        self._settling_step_s = 0.0
        self._flat = np.concatenate(
            [
                state.reactive,
                state.port_volts,
                np.zeros(self._layout.ports),
                state.port_volts_before,
            ]
        )
        self._charge_junctions()

    def change(self, circuit: Circuit) -> None:
        """Go on with other values: same elements between the same nodes. The state is carried over.

        Raises
        ------
        CircuitError
            The circuit is wired in another way.
        """
        if circuit is self._values.circuit:
            return
        values = self._values_of(circuit)
        if values is self._values:
            return
        self._leave_run()
        self._values = values
        self._settling_step_s = 0.0
        self._charge_junctions()

    def _values_of(self, circuit: Circuit) -> CircuitValues:
        found = self._known.get(circuit)
        if found is not None:
            return found
        if self._known:
            self._check_wiring(circuit)
        if len(self._known) >= _CIRCUITS_KEPT:
            del self._known[next(iter(self._known))]
        network = build_network(circuit, inputs=self._inputs, outputs=self._outputs, layout=self._layout)
        self._known[circuit] = values = CircuitValues(circuit, network)
        return values

    def _check_wiring(self, circuit: Circuit) -> None:
        theirs = signature_of(circuit)
        if theirs == self._layout.signature:
            return
        for ours, other in zip(self._layout.signature, theirs, strict=False):
            if ours != other:
                raise CircuitError(
                    f"only values may change while time goes on: {' '.join(ours)} became {' '.join(other)}"
                )
        raise CircuitError("only values may change while time goes on: elements were added or taken away")

    def _charge_junctions(self) -> None:
        """Junctions keep their voltage; the charge follows from it."""
        if self._values.network.charged:
            states, ports = self._sizes()
            volts = self._flat[states : states + ports]
            self._flat[states + ports : states + 2 * ports] = junction_charges(self._values.network, volts)

    def _sizes(self) -> tuple[int, int]:
        return self._values.network.is_capacitor.size, self._layout.ports

    # --- single steps

    def step(self, dt_s: float, inputs: Sequence[float] | FloatArray) -> FloatArray:
        """Take one backward Euler step; return the outputs at its end, shape (outputs,).

        Raises
        ------
        NoConvergence
            No solution was found.
        """
        trial = self.try_step(dt_s, inputs)
        self.accept(trial)
        return trial.outputs

    def try_step(self, dt_s: float, inputs: Sequence[float] | FloatArray) -> Trial:
        """Try one backward Euler step without taking it.

        Raises
        ------
        NoConvergence
            No solution was found.
        """
        self._leave_run()
        row = self._input_row(inputs)
        flat = self._flat.copy()
        outputs = np.empty((1, len(self._outputs)))
        step = self._values.reduced(_checked_time(dt_s), trapezoidal=False)
        if self._values.advance(step, row, flat, outputs) != 1:
            flat, outputs = self._bridge(self._flat, dt_s, row)
        return Trial(outputs[0], flat)

    def accept(self, trial: Trial) -> None:
        """Make a tried step the present."""
        self._run_step = None
        self._settling_step_s = 0.0
        self._flat = trial.flat.copy()

    def _bridge(self, start: FloatArray, duration_s: float, row: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Cross a stretch that did not converge in one step by many short ones."""
        flat = start.copy()
        outputs = np.empty((_BRIDGE_STEPS, len(self._outputs)))
        step = self._values.reduced(duration_s / _BRIDGE_STEPS, trapezoidal=False)
        if self._values.advance(step, np.repeat(row, _BRIDGE_STEPS, axis=0), flat, outputs) != _BRIDGE_STEPS:
            raise NoConvergence(
                f"the circuit {self._values.circuit.title!r} has no solution within a step of {duration_s:.3g} s, "
                f"nor within {_BRIDGE_STEPS} parts of it"
            )
        return flat, outputs[-1:]

    def _input_row(self, inputs: Sequence[float] | FloatArray) -> FloatArray:
        row = np.ascontiguousarray(inputs, dtype=np.float64).reshape(1, -1)
        if row.shape[1] != len(self._inputs):
            raise ValueError(f"{row.shape[1]} input values for the inputs {', '.join(self._inputs)}")
        return row

    # --- settling

    def settle(
        self, duration_s: float, inputs: Sequence[float] | FloatArray, *, max_step: float | None = None
    ) -> FloatArray:
        """Let time pass with constant inputs; return the outputs at the end, shape (outputs,).

        Backward Euler by whole and by halved steps, extrapolated to second order; the difference of the two is kept
        below a fraction of a millivolt by the choice of the step, which grows as the circuit comes to rest.

        Raises
        ------
        NoConvergence
            No step is short enough.
        """
        self._leave_run()
        row = self._input_row(inputs)
        spans = (
            1 if max_step is None else max(1, math.ceil(_checked_time(duration_s) / max_step * (1 - 1e-12)))
        )
        longest_s = _checked_time(duration_s) / spans
        outputs = np.empty((1, len(self._outputs)))
        level = self._first_level(longest_s)
        at, end = 0, spans << _FINEST
        while at < end:
            size = 1 << (_FINEST - level)
            done, verdict = self._settle_at(longest_s / (1 << level), (end - at) // size, row, outputs)
            at += done * size
            if verdict < 0:
                level += 1
                if level >= _FINEST:
                    raise NoConvergence(
                        f"the circuit {self._values.circuit.title!r} does not settle with steps of "
                        f"{longest_s / (1 << level):.3g} s"
                    )
            elif verdict > 0 and level > 0 and at % (2 * size) == 0:
                level -= 1
        self._settling_step_s = longest_s / (1 << level)
        return np.asarray(outputs[0])

    def _first_level(self, longest_s: float) -> int:
        first_s = max(_FIRST_STEP_S, self._settling_step_s)
        return min(_FINEST - 1, max(0, math.ceil(math.log2(longest_s / first_s) - 1e-9)))

    def _settle_at(self, step_s: float, count: int, row: FloatArray, outputs: FloatArray) -> tuple[int, int]:
        return self._values.settle(
            step_s,
            count,
            row,
            self._flat,
            outputs,
            Tolerances(
                self._state_tolerances,
                self._output_tolerances,
                _RELATIVE_TOLERANCE if step_s > _SHORTEST_STEP_S else _ANY,
            ),
        )

    # --- runs

    def run(self, samples: FloatArray, rate_hz: float, oversample: int = 4) -> FloatArray:
        """Drive the inputs with samples; return shape (frames, outputs), output k at the time of sample k.

        Trapezoidal rule at `rate_hz` times `oversample`; a run that does not continue another one of the same kind
        opens with two backward Euler half steps. Time moves on by frames / rate_hz.

        Parameters
        ----------
        samples : array, shape (frames, inputs)
        rate_hz : float
        oversample : int
            1, 2, 4 or 8.

        Raises
        ------
        NoConvergence
            A step has no solution, divided or not.
        """
        samples = np.asarray(samples, dtype=np.float64)
        if samples.ndim != 2 or samples.shape[1] != len(self._inputs) or not samples.shape[0]:
            raise ValueError(
                f"samples of shape (frames, {len(self._inputs)}) are wanted, got {samples.shape}"
            )
        if oversample not in FACTORS:
            raise ValueError(f"oversample is one of {', '.join(map(str, FACTORS))}, got {oversample}")
        if not np.isfinite(samples).all():
            raise ValueError("samples must be finite")
        half_step_s = 0.5 / (_checked_time(rate_hz) * oversample)
        fine_inputs = interpolate(samples, oversample)
        self._enter_run(half_step_s, fine_inputs[:1])
        reach = half_length(oversample)
        halo = np.empty((0, len(self._outputs)))
        pieces: list[FloatArray] = []
        for begin in range(0, fine_inputs.shape[0], _CHUNK_FRAMES * oversample):
            fine = self._march(fine_inputs[begin : begin + _CHUNK_FRAMES * oversample], half_step_s)
            if not begin:
                halo = np.repeat(fine[:1], reach, axis=0)
            joined = np.concatenate([halo, fine])
            usable = max(0, (joined.shape[0] - 2 * reach) // oversample)
            if usable:
                pieces.append(decimate(joined[: usable * oversample + 2 * reach], oversample))
            halo = joined[usable * oversample :]
        if reach:
            joined = np.concatenate([halo, self._look_ahead(fine_inputs[-1:], reach, half_step_s)])
            pieces.append(decimate(joined, oversample))
        return np.concatenate(pieces)

    def _enter_run(self, half_step_s: float, first: FloatArray) -> None:
        step = self._values.reduced(half_step_s, trapezoidal=True)
        if self._run_step is step:
            return
        self._leave_run()
        opening = self._values.reduced(half_step_s, trapezoidal=False)
        flat = self._flat.copy()
        outputs = np.empty((1, len(self._outputs)))
        if self._values.advance(opening, first, flat, outputs) != 1:
            flat, _ = self._bridge(self._flat, half_step_s, first)
        self._flat = flat
        self._flat_before = flat
        self._run_step = step

    def _march(self, inputs: FloatArray, half_step_s: float) -> FloatArray:
        """Take a trapezoidal step per row; return the outputs, shape (steps, outputs)."""
        outputs = np.empty((inputs.shape[0], len(self._outputs)))
        done = 0
        while done < inputs.shape[0]:
            step = self._values.reduced(half_step_s, trapezoidal=True)
            bulk = inputs.shape[0] - done - 1
            taken = self._values.advance(
                step, inputs[done : done + bulk], self._flat, outputs[done : done + bulk]
            )
            done += taken
            self._flat_before = self._flat.copy()
            if taken == bulk:
                done += self._values.advance(step, inputs[done:], self._flat, outputs[done:])
            if done < inputs.shape[0]:
                self._leave_run()
                row = np.ascontiguousarray(inputs[done : done + 1])
                self._flat, outputs[done : done + 1] = self._bridge(self._flat, 2.0 * half_step_s, row)
                done += 1
                following = inputs[min(done, inputs.shape[0] - 1)]
                self._enter_run(half_step_s, following.reshape(1, -1))
        return outputs

    def _look_ahead(self, last: FloatArray, count: int, half_step_s: float) -> FloatArray:
        """Return what the outputs would do with the last input held, without moving time."""
        kept = self._flat.copy(), self._flat_before.copy()
        outputs = self._march(np.repeat(last, count, axis=0), half_step_s)
        self._flat, self._flat_before = kept
        self._run_step = self._values.reduced(half_step_s, trapezoidal=True)
        return outputs

    def _leave_run(self) -> None:
        """Come back from the trapezoidal rule's own state to the physical one: the mean of two successive ones."""
        if self._run_step is None:
            return
        self._run_step = None
        states, ports = self._sizes()
        physical = self._flat.copy()
        physical[:states] = 0.5 * (self._flat[:states] + self._flat_before[:states])
        held = slice(states + ports, states + 2 * ports)
        physical[held] = 0.5 * (self._flat[held] + self._flat_before[held])
        self._flat = physical


def _checked_time(value: float) -> float:
    if not (value > 0.0 and math.isfinite(value)):
        raise ValueError(f"a positive, finite time or rate is wanted, got {value}")
    return value
