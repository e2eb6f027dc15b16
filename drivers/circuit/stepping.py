"""A circuit with its values in, ready to step: matrices by step length, and the compiled kernel that uses them."""

from __future__ import annotations

from dataclasses import dataclass

from drivers.circuit.assembly import FloatArray, Network
from drivers.circuit.elements import Circuit
from drivers.circuit.kernels import Kernel, KernelKey, load_kernel
from drivers.circuit.reduction import SHIFT_SIEMENS, Reduced, reduce_network

_STEPS_KEPT = 64


@dataclass(frozen=True, eq=False)
class Tolerances:
    """How far a step and its two halves may disagree: per state, per output, and relative to either."""

    states: FloatArray
    outputs: FloatArray
    relative: float


class CircuitValues:
    """A circuit with one set of values, its compiled kernel, and the steps that have been reduced for it.

    Attributes
    ----------
    circuit : Circuit
    network : Network
    """

    def __init__(self, circuit: Circuit, network: Network) -> None:
        layout = network.layout
        self.circuit = circuit
        self.network = network
        self._shift = SHIFT_SIEMENS - network.gmin_siemens
        self._kernel: Kernel = load_kernel(
            KernelKey(bjts=len(layout.bjts), diodes=len(layout.diodes), charged=network.charged)
        )
        self._steps: dict[tuple[float, bool], Reduced] = {}

    def reduced(self, half_step_s: float, *, trapezoidal: bool) -> Reduced:
        """Return the matrices of a step; the last few dozen are kept."""
        key = (half_step_s, trapezoidal)
        found = self._steps.get(key)
        if found is None:
            if len(self._steps) >= _STEPS_KEPT:
                self._steps.clear()
            found = reduce_network(self.network, half_step_s, trapezoidal=trapezoidal)
            self._steps[key] = found
        return found

    def advance(self, step: Reduced, inputs: FloatArray, flat: FloatArray, outputs: FloatArray) -> int:
        """Take one step per row of inputs; return how many converged."""
        return self._kernel.advance(
            inputs.shape[0],
            inputs,
            step.map,
            step.feedback,
            self.network.parameters,
            flat,
            outputs,
            step.per_second,
            step.remember,
            self._shift,
            self.network.is_capacitor.size,
        )

    def settle(
        self,
        step_s: float,
        count: int,
        row: FloatArray,
        flat: FloatArray,
        outputs: FloatArray,
        tolerances: Tolerances,
    ) -> tuple[int, int]:
        """Take up to `count` extrapolated backward Euler steps with constant inputs.

        Returns how many were taken, and 1 when longer steps would do, -1 when shorter ones are needed, else 0.
        """
        whole = self.reduced(step_s, trapezoidal=False)
        half = self.reduced(step_s / 2.0, trapezoidal=False)
        return self._kernel.settle(
            count,
            row,
            whole.map,
            whole.feedback,
            half.map,
            half.feedback,
            self.network.parameters,
            flat,
            outputs,
            whole.per_second,
            tolerances.states,
            tolerances.outputs,
            tolerances.relative,
            self._shift,
            self.network.is_capacitor.size,
        )
