"""The source text of a compiled time step.

The device laws are copied word for word from `drivers.circuit.devices`, so there is one place where they are written.
Up to a dozen ports everything about the junctions is unrolled into scalars; beyond that the same Newton iteration
runs on arrays, which compiles faster and costs little against the size of the problem.
"""

from __future__ import annotations

import ast
import inspect

from drivers.circuit import devices
from drivers.circuit.assembly import BJT_PARAMETERS, DIODE_PARAMETERS

_MOST_UNROLLED_PORTS = 12
_BJT_LAW_ARGUMENTS = 13
_NEAR_VOLTS = 1e-4
"""Within this distance a charge is taken along its tangent: off by (0.1 mV / VT)^2 / 2, 8e-6 of the diffusion charge
of the same distance, and without the logarithms that a depletion charge costs."""
_LAWS = (
    "junction_current",
    "depletion_charge",
    "diode_charge",
    "base_charge",
    "bjt_currents",
    "bjt_charges",
)


def kernel_source(bjts: int, diodes: int, charged: bool) -> str:
    """Return a module's text with the functions `advance` and `settle`."""
    ports = 2 * bjts + diodes
    parts = [_HEAD, _device_laws(), _evaluate(bjts, diodes, charged), _ARRAY_NEWTON]
    solve = _unrolled(bjts, diodes, charged) if ports <= _MOST_UNROLLED_PORTS else _BY_ARRAYS
    advance = _ADVANCE.replace("JUNCTIONS\n", _indented(solve, 8) + "\n" if ports else "")
    opening = _no_charges_yet(bjts, diodes) if charged else []
    advance = advance.replace("OPENING\n", "".join(_indented(line, 4) + "\n" for line in opening))
    parts += [advance, _SETTLE]
    return "\n\n".join(parts).replace("PORTS", str(ports)) + "\n"


def _device_laws() -> str:
    tree = ast.parse(inspect.getsource(devices))
    kept: list[str] = []
    for node in tree.body:
        if isinstance(node, ast.Assign) or (isinstance(node, ast.Import) and node.names[0].name == "math"):
            kept.append(ast.unparse(node))
        elif isinstance(node, ast.FunctionDef) and node.name in _LAWS:
            node.returns = None
            for argument in node.args.args:
                argument.annotation = None
            kept.append(f"@njit(**_OPTIONS)\n{ast.unparse(node)}")
    return "\n\n".join(kept)


def _indented(text: str, spaces: int) -> str:
    return "\n".join(" " * spaces + line if line else line for line in text.splitlines())


def _arguments(first: int, count: int) -> str:
    return ", ".join(f"parameters[{first + i}]" for i in range(count))


def _bases(bjts: int, diodes: int) -> tuple[list[int], list[int]]:
    split = BJT_PARAMETERS * bjts
    return (
        [BJT_PARAMETERS * i for i in range(bjts)],
        [split + DIODE_PARAMETERS * i for i in range(diodes)],
    )


def _law_lines(bjts: int, diodes: int, charged: bool) -> tuple[list[str], dict[tuple[int, int], str]]:
    """Return lines that set i<port> and the slopes from w<port>, and which slopes there are."""
    lines: list[str] = []
    slopes: dict[tuple[int, int], str] = {}
    bjt_bases, diode_bases = _bases(bjts, diodes)
    for number, base in enumerate(bjt_bases):
        j, k = 2 * number, 2 * number + 1
        law = _arguments(base + 2, _BJT_LAW_ARGUMENTS)
        lines += [
            f"ic, ib, c_be, c_bc, b_be, b_bc = bjt_currents(w{j}, w{k}, {law})",
            f"i{j} = ic + ib - shift * w{j}",
            f"i{k} = -ic - shift * w{k}",
            f"g{j}_{j} = c_be + b_be - shift",
            f"g{j}_{k} = c_bc + b_bc",
            f"g{k}_{j} = -c_be",
            f"g{k}_{k} = -c_bc - shift",
        ]
        if charged:
            charge = _arguments(base + 2 + _BJT_LAW_ARGUMENTS, BJT_PARAMETERS - 2 - _BJT_LAW_ARGUMENTS)
            lines += [
                f"if not (abs(w{j} - x{j}) < {_NEAR_VOLTS} and abs(w{k} - x{k}) < {_NEAR_VOLTS}):",
                f"    e{j}, e{k}, f{j}_{j}, f{j}_{k}, f{k}_{k} = bjt_charges(w{j}, w{k}, {charge})",
                f"    x{j} = w{j}",
                f"    x{k} = w{k}",
                f"q{j} = e{j} + f{j}_{j} * (w{j} - x{j}) + f{j}_{k} * (w{k} - x{k})",
                f"q{k} = e{k} + f{k}_{k} * (w{k} - x{k})",
                f"i{j} += per_second * (q{j} - h{j})",
                f"i{k} += per_second * (q{k} - h{k})",
                f"g{j}_{j} += per_second * f{j}_{j}",
                f"g{j}_{k} += per_second * f{j}_{k}",
                f"g{k}_{k} += per_second * f{k}_{k}",
            ]
        slopes |= {(r, c): f"g{r}_{c}" for r in (j, k) for c in (j, k)}
    for number, base in enumerate(diode_bases):
        j = 2 * bjts + number
        lines += [
            f"junction_amps, junction_siemens = junction_current(w{j}, {_arguments(base + 1, 2)})",
            f"i{j} = junction_amps - shift * w{j}",
            f"g{j}_{j} = junction_siemens - shift",
        ]
        if charged:
            lines += [
                f"if not abs(w{j} - x{j}) < {_NEAR_VOLTS}:",
                f"    e{j}, f{j}_{j} = diode_charge(w{j}, {_arguments(base + 3, 7)})",
                f"    x{j} = w{j}",
                f"q{j} = e{j} + f{j}_{j} * (w{j} - x{j})",
                f"i{j} += per_second * (q{j} - h{j})",
                f"g{j}_{j} += per_second * f{j}_{j}",
            ]
        slopes[j, j] = f"g{j}_{j}"
    return lines, slopes


def _critical(bjts: int, diodes: int) -> list[str]:
    bjt_bases, diode_bases = _bases(bjts, diodes)
    places = [at for base in bjt_bases for at in (base, base + 1)] + diode_bases
    return [f"parameters[{at}]" for at in places]


def _evaluate(bjts: int, diodes: int, charged: bool) -> str:
    """Return the function that evaluates all laws on arrays (rare path, many ports)."""
    ports = 2 * bjts + diodes
    lines = [f"w{j} = volts[{j}]" for j in range(ports)]
    if charged:
        lines += [f"h{j} = held[{j}]" for j in range(ports)]
        lines += _no_charges_yet(bjts, diodes)
    laws, slopes = _law_lines(bjts, diodes, charged)
    lines += laws
    lines += [f"amps_out[{j}] = i{j}" for j in range(ports)]
    lines += [f"charges_out[{j}] = q{j}" for j in range(ports) if charged]
    lines += [f"slopes_out[{r}, {c}] = {name}" for (r, c), name in slopes.items()]
    lines += [f"critical_out[{j}] = {text}" for j, text in enumerate(_critical(bjts, diodes))]
    head = (
        "@njit(**_OPTIONS)\n"
        "def evaluate(\n"
        "    volts, parameters, held, shift, per_second, amps_out, slopes_out, charges_out, critical_out\n"
        "):\n"
    )
    return head + _indented("\n".join(lines or ["pass"]), 4) + "\n"


def _unrolled(bjts: int, diodes: int, charged: bool) -> str:
    """Return the Newton iteration of one step in scalars: from acc (port part) to acc (all rows)."""
    ports = 2 * bjts + diodes
    every = range(ports)
    laws, slopes = _law_lines(bjts, diodes, charged)
    body = list(laws)
    for r in every:
        fed_back = " + ".join(f"k{r}_{c} * i{c}" for c in every)
        body.append(f"d{r} = w{r} - acc[{r}] - ({fed_back})")
    for r in every:
        for c in every:
            product = " + ".join(f"k{r}_{m} * {slopes[m, c]}" for m in every if (m, c) in slopes)
            body.append(f"a{r}_{c} = {'1.0 - ' if r == c else '-'}({product})")
    body += _elimination(ports)
    body += ["change = 0.0", "limited = False"]
    for j in every:
        body += [
            f"n{j} = w{j} - d{j}",
            f"top = max(w{j}, vc{j}) + 0.05",
            f"if n{j} > top:",
            f"    n{j} = top",
            "    limited = True",
            f"change = max(change, abs(n{j} - w{j}))",
        ]
    body += [f"s{j} = n{j} - w{j}" for j in every]
    body += [f"w{j} = n{j}" for j in every]
    # the last step is taken along the tangent, so that Kirchhoff's laws hold to rounding
    last = ["if change < 1e-5 and not limited:"]
    for r in every:
        tangent = " + ".join(f"{slopes[r, c]} * s{c}" for c in every if (r, c) in slopes)
        last.append(f"    i{r} += {tangent}")
    if charged:
        last += [f"    q{r} += f{r}_{c} * s{c}" for r, c in _charge_slopes(bjts, diodes)]
    last += ["    converged = True", "    break"]
    lines = [f"k{r}_{c} = feedback[{c}, {r}]" for r in every for c in every]
    lines += [f"vc{j} = {text}" for j, text in enumerate(_critical(bjts, diodes))]
    lines += [f"v{j} = state[states + {j}]" for j in every]
    lines += [f"w{j} = min(2.0 * v{j} - state[states + {ports + j}], vc{j})" for j in every]
    lines += [f"h{j} = state[states + {2 * ports + j}]" for j in every if charged]
    lines += ["converged = False", "for _ in range(25):", _indented("\n".join(body + last), 4)]
    lines += [_RESCUE]
    lines += [f"    w{j} = found[{j}]\n    i{j} = amps[{j}]" for j in every]
    lines += [f"    q{j} = charges[{j}]" for j in every if charged]
    lines += ["for r in range(rows):"]
    lines += ["    acc[r] += " + " + ".join(f"feedback[{j}, r] * i{j}" for j in every)]
    lines += [f"state[states + {ports + j}] = v{j}\nstate[states + {j}] = w{j}" for j in every]
    if charged:
        held = "state[states + {at}] = (1.0 + remember) * q{j} - remember * h{j}"
        lines += [held.format(at=2 * ports + j, j=j) for j in every]
    return "\n".join(lines)


def _charge_slopes(bjts: int, diodes: int) -> list[tuple[int, int]]:
    pairs = [(2 * n + r, 2 * n + c) for n in range(bjts) for r, c in ((0, 0), (0, 1), (1, 1))]
    return pairs + [(2 * bjts + n, 2 * bjts + n) for n in range(diodes)]


def _no_charges_yet(bjts: int, diodes: int) -> list[str]:
    lines = [f"x{j} = 1e300\ne{j} = 0.0" for j in range(2 * bjts + diodes)]
    return lines + [f"f{r}_{c} = 0.0" for r, c in _charge_slopes(bjts, diodes)]


def _elimination(ports: int) -> list[str]:
    lines: list[str] = []
    for pivot in range(ports):
        lines.append(f"inv = 1.0 / a{pivot}_{pivot}")
        for r in range(pivot + 1, ports):
            lines.append(f"f = a{r}_{pivot} * inv")
            lines += [f"a{r}_{c} -= f * a{pivot}_{c}" for c in range(pivot + 1, ports)]
            lines.append(f"d{r} -= f * d{pivot}")
    for r in reversed(range(ports)):
        rest = "".join(f" - a{r}_{c} * d{c}" for c in range(r + 1, ports))
        lines.append(f"d{r} = (d{r}{rest}) / a{r}_{r}")
    return lines


_HEAD = '''"""Made by drivers.circuit.kernel_source; the first import compiles it."""

import numpy as np
from numba import njit

_OPTIONS = dict(fastmath={"contract", "arcp", "nsz"}, error_model="numpy")
_VECTOR = "float64[::1]"
_MATRIX = "float64[:,::1]"'''

_ARRAY_NEWTON = '''@njit(**_OPTIONS)
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

_RESCUE = """if not converged:
    for r in range(PORTS):
        before[r] = state[states + r]
        held[r] = state[states + 2 * PORTS + r]
    if not rescue(acc, feedback, parameters, held, before, shift, per_second, found, amps, charges):
        return n"""

_BY_ARRAYS = """for r in range(PORTS):
    before[r] = state[states + r]
    held[r] = state[states + 2 * PORTS + r]
    found[r] = 2.0 * before[r] - state[states + PORTS + r]
evaluate(before, parameters, held, shift, per_second, amps, unused, charges, critical)
for r in range(PORTS):
    found[r] = min(found[r], critical[r])
if not newton(25, acc, feedback, parameters, held, shift, per_second, found, amps, charges):
    if not rescue(acc, feedback, parameters, held, before, shift, per_second, found, amps, charges):
        return n
for j in range(PORTS):
    for r in range(rows):
        acc[r] += feedback[j, r] * amps[j]
    state[states + PORTS + j] = before[j]
    state[states + j] = found[j]
    state[states + 2 * PORTS + j] = (1.0 + remember) * charges[j] - remember * held[j]"""

_ADVANCE = '''@njit(
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

_SETTLE = '''@njit(
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
    whole = np.empty_like(state)
    half = np.empty_like(state)
    whole_out = np.empty_like(outputs)
    for n in range(count):
        whole[:] = state
        half[:] = state
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
        for s in range(states + 3 * PORTS):
            state[s] = 2.0 * half[s] - whole[s]
        for s in range(PORTS):
            state[states + PORTS + s] = half[states + PORTS + s]
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
