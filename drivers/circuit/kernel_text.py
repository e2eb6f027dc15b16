"""The fixed parts of a compiled time step, as text that `drivers.circuit.kernel_source` puts together.

PORTS stands for the number of junctions, JUNCTIONS for the solution of the port equations, OPENING for what must be
there before the first step.
"""

from __future__ import annotations

HEAD = '''"""Made by drivers.circuit.kernel_source; the first import compiles it."""

import numpy as np
from numba import njit

_OPTIONS = dict(fastmath={"contract", "arcp", "nsz"}, error_model="numpy")
_VECTOR = "float64[::1]"
_MATRIX = "float64[:,::1]"'''

ARRAY_NEWTON = '''@njit(**_OPTIONS)
def solve_dense(matrix, vector):
    """Gauss elimination with partial pivoting, in place."""
    size = vector.size
    for pivot in range(size):
        best = pivot
        for r in range(pivot + 1, size):
            if abs(matrix[r, pivot]) > abs(matrix[best, pivot]):
                best = r
        if best != pivot:
            for c in range(size):
                matrix[pivot, c], matrix[best, c] = matrix[best, c], matrix[pivot, c]
            vector[pivot], vector[best] = vector[best], vector[pivot]
        for r in range(pivot + 1, size):
            factor = matrix[r, pivot] / matrix[pivot, pivot]
            for c in range(pivot + 1, size):
                matrix[r, c] -= factor * matrix[pivot, c]
            vector[r] -= factor * vector[pivot]
    for r in range(size - 1, -1, -1):
        for c in range(r + 1, size):
            vector[r] -= matrix[r, c] * vector[c]
        vector[r] /= matrix[r, r]


@njit(**_OPTIONS)
def newton(rounds, offset, feedback, parameters, held, shift, per_second, found, amps, charges):
    """Solve v = offset + K i(v) from `found` on; True when it converged, with amps and charges at the end."""
    jacobian = np.empty((PORTS, PORTS))
    slopes = np.zeros((PORTS, PORTS))
    step = np.empty(PORTS)
    critical = np.empty(PORTS)
    settled = False
    for _ in range(rounds):
        evaluate(found, parameters, held, shift, per_second, amps, slopes, charges, critical)
        if settled:
            return True
        for r in range(PORTS):
            step[r] = offset[r] - found[r]
            for c in range(PORTS):
                step[r] += feedback[c, r] * amps[c]
                jacobian[r, c] = 1.0 if r == c else 0.0
                for m in range(PORTS):
                    jacobian[r, c] -= feedback[m, r] * slopes[m, c]
        solve_dense(jacobian, step)
        settled = True
        for r in range(PORTS):
            top = max(found[r], critical[r]) + 0.05
            if found[r] + step[r] > top:
                step[r] = top - found[r]
                settled = False
            if not abs(step[r]) < 1e-7:
                settled = False
            found[r] += step[r]
    return False


@njit(**_OPTIONS)
def rescue(acc, feedback, parameters, held, before, shift, per_second, found, amps, charges):
    """Walk from the last solution to the new one: what the linear part offers is moved over bit by bit."""
    start = np.empty(PORTS)
    offset = np.empty(PORTS)
    good = np.empty(PORTS)
    slopes = np.zeros((PORTS, PORTS))
    evaluate(before, parameters, held, shift, per_second, amps, slopes, charges, start)
    for r in range(PORTS):
        good[r] = before[r]
        start[r] = before[r]
        for c in range(PORTS):
            start[r] -= feedback[c, r] * amps[c]
    level = 0.0
    step = 0.25
    for _ in range(400):
        wanted = min(1.0, level + step)
        for r in range(PORTS):
            offset[r] = start[r] + wanted * (acc[r] - start[r])
            found[r] = good[r]
        if newton(40, offset, feedback, parameters, held, shift, per_second, found, amps, charges):
            if wanted == 1.0:
                return True
            level = wanted
            step *= 2.0
            for r in range(PORTS):
                good[r] = found[r]
        else:
            step *= 0.25
            if step < 1e-6:
                return False
    return False'''

RESCUE = """if not converged:
    for r in range(PORTS):
        before[r] = state[states + r]
        held[r] = state[states + PORTS + r]
    if not rescue(acc, feedback, parameters, held, before, shift, per_second, found, amps, charges):
        return n"""

BY_ARRAYS = """for r in range(PORTS):
    before[r] = state[states + r]
    held[r] = state[states + PORTS + r]
    found[r] = 3.0 * (before[r] - state[states + 2 * PORTS + r]) + state[states + 3 * PORTS + r]
evaluate(before, parameters, held, shift, per_second, amps, unused, charges, critical)
for r in range(PORTS):
    found[r] = min(found[r], critical[r])
if not newton(25, acc, feedback, parameters, held, shift, per_second, found, amps, charges):
    if not rescue(acc, feedback, parameters, held, before, shift, per_second, found, amps, charges):
        return n
for j in range(PORTS):
    for r in range(rows):
        acc[r] += feedback[j, r] * amps[j]
    state[states + 3 * PORTS + j] = state[states + 2 * PORTS + j]
    state[states + 2 * PORTS + j] = before[j]
    state[states + j] = found[j]
    state[states + PORTS + j] = (1.0 + remember) * charges[j] - remember * held[j]"""

ADVANCE = '''@njit(
    f"int64(int64, {_MATRIX}, {_MATRIX}, {_MATRIX}, {_VECTOR}, {_VECTOR}, {_MATRIX}, "
    "float64, float64, float64, int64)",
    cache=True,
    **_OPTIONS,
)
def advance(
    count, inputs, table, feedback, parameters, state, outputs, per_second, remember, shift, states
):
    """Take `count` steps; return how many of them converged."""
    columns, rows = table.shape
    driven = inputs.shape[1]
    read = outputs.shape[1]
    acc = np.empty(rows)
    before = np.empty(PORTS)
    held = np.zeros(PORTS)
    found = np.empty(PORTS)
    amps = np.empty(PORTS)
    charges = np.zeros(PORTS)
    critical = np.empty(PORTS)
    unused = np.zeros((PORTS, PORTS))
OPENING
    for n in range(count):
        constant = table[columns - 1]
        for r in range(rows):
            acc[r] = constant[r]
        for s in range(states):
            column = table[s]
            x = state[s]
            for r in range(rows):
                acc[r] += column[r] * x
        for s in range(driven):
            column = table[states + s]
            x = inputs[n, s]
            for r in range(rows):
                acc[r] += column[r] * x
JUNCTIONS
        for r in range(read):
            outputs[n, r] = acc[PORTS + r]
        for s in range(states):
            state[s] = acc[PORTS + read + s]
    return count'''

SETTLE = '''@njit(
    f"Tuple((int64, int64))(int64, {_MATRIX}, {_MATRIX}, {_MATRIX}, {_MATRIX}, {_MATRIX}, {_VECTOR}, {_VECTOR}, "
    f"{_MATRIX}, float64, {_VECTOR}, {_VECTOR}, float64, float64, int64)",
    cache=True,
    **_OPTIONS,
)
def settle(
    count,
    inputs,
    whole_table,
    whole_feedback,
    half_table,
    half_feedback,
    parameters,
    state,
    outputs,
    per_second,
    state_tolerances,
    output_tolerances,
    relative,
    shift,
    states,
):
    """Take up to `count` backward Euler steps, each also as two halves, and extrapolate to second order.

    Returns the steps done and why it came back: 0 all done, 1 the steps may be longer, -1 they must be shorter.
    """
    read = outputs.shape[1]
    size = state.size
    whole = np.empty(size)
    half = np.empty(size)
    whole_out = np.empty((1, read))
    for n in range(count):
        for s in range(size):
            whole[s] = state[s]
            half[s] = state[s]
        ok = advance(
            1, inputs, whole_table, whole_feedback, parameters, whole, whole_out, per_second, 0.0, shift, states
        )
        for _ in range(2):
            ok = ok and advance(
                1, inputs, half_table, half_feedback, parameters, half, outputs, 2.0 * per_second, 0.0, shift, states
            )
        if not ok:
            return n, -1
        error = 0.0
        for s in range(states):
            gap = abs(half[s] - whole[s]) / (state_tolerances[s] + relative * abs(half[s]))
            if not gap <= error:
                error = gap
        for r in range(read):
            gap = abs(outputs[0, r] - whole_out[0, r]) / (output_tolerances[r] + relative * abs(outputs[0, r]))
            if not gap <= error:
                error = gap
        if not error <= 1.0:
            return n, -1
        for s in range(size):
            state[s] = 2.0 * half[s] - whole[s]
        for s in range(states + 2 * PORTS, size):
            state[s] = half[s]
        for r in range(read):
            outputs[0, r] = 2.0 * outputs[0, r] - whole_out[0, r]
        if error < 0.1:
            return n + 1, 1
    return count, 0'''

FILTER_SOURCE = '''"""Made by drivers.circuit.kernel_source; the first import compiles it."""

from numba import njit

_OPTIONS = dict(fastmath={"contract", "arcp", "nsz", "reassoc"}, error_model="numpy", cache=True)


@njit("void(float64[::1], float64[:,::1], float64[:])", **_OPTIONS)
def interpolate(padded, phases, out):
    factor, taps = phases.shape
    for frame in range(padded.size - taps + 1):
        window = padded[frame : frame + taps]
        for phase in range(factor):
            weights = phases[phase]
            total = 0.0
            for t in range(taps):
                total += window[t] * weights[t]
            out[frame * factor + phase] = total


@njit("void(float64[:,::1], float64[::1], int64, float64[:,::1])", **_OPTIONS)
def decimate(fine, taps, factor, out):
    for channel in range(out.shape[0]):
        row = fine[channel]
        for frame in range(out.shape[1]):
            window = row[frame * factor : frame * factor + taps.size]
            total = 0.0
            for t in range(taps.size):
                total += window[t] * taps[t]
            out[channel, frame] = total
'''
"""Loops of the rate conversion; the sums may be reordered here so that they vectorise."""
