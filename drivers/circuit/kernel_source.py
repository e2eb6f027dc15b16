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
from drivers.circuit.kernel_text import ADVANCE, ARRAY_NEWTON, BY_ARRAYS, HEAD, RESCUE, SETTLE

_MOST_UNROLLED_PORTS = 12
_BJT_LAW_ARGUMENTS = 13
_NEAR_VOLTS = 3e-4
"""Within this distance a diffusion charge is taken along its tangent. At a transit time of 60 ns and 192 kHz the rest
is worth 40 nV of junction voltage, -116 dB of VT."""
_NEAR_DEPLETION_VOLTS = 3e-3
"""The same for depletion charges, whose curve bends over tenths of a volt and which cost two logarithms."""
_REVERSE_VOLTS = -0.2
_BEND_VOLTS = 4e-3
_TOLERANCE_VOLTS = 1e-5
_TOLERANCE_REVERSE_RATIO = 0.01
"""In reverse a step counts for this much: what is left of the curve bends a thousand times less."""
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
    parts = [HEAD, _device_laws(), _evaluate(bjts, diodes, charged), ARRAY_NEWTON]
    solve = _unrolled(bjts, diodes, charged) if ports <= _MOST_UNROLLED_PORTS else BY_ARRAYS
    advance = ADVANCE.replace("JUNCTIONS\n", _indented(solve, 8) + "\n" if ports else "")
    opening = _no_charges_yet(bjts, diodes) if charged else []
    advance = advance.replace("OPENING\n", "".join(_indented(line, 4) + "\n" for line in opening))
    parts += [advance, SETTLE]
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
            at = base + 2 + _BJT_LAW_ARGUMENTS
            diffusion = f"{_arguments(at, 7)}, 0.0, 1.0, 0.5, 0.0, 1.0, 0.5, {_arguments(at + 13, 3)}"
            lines += _depletion_lines(j, at + 7, at + 13) + _depletion_lines(k, at + 10, at + 13)
            lines += [
                f"if not ({_near(j)} and {_near(k)}):",
                f"    e{j}, e{k}, t{j}_{j}, t{j}_{k}, t{k}_{k} = bjt_charges(w{j}, w{k}, {diffusion})",
                f"    x{j} = w{j}",
                f"    x{k} = w{k}",
                f"q{j} = b{j} + p{j} * (w{j} - y{j}) + e{j} + t{j}_{j} * (w{j} - x{j}) + t{j}_{k} * (w{k} - x{k})",
                f"q{k} = b{k} + p{k} * (w{k} - y{k}) + e{k} + t{k}_{k} * (w{k} - x{k})",
                f"f{j}_{j} = p{j} + t{j}_{j}",
                f"f{j}_{k} = t{j}_{k}",
                f"f{k}_{k} = p{k} + t{k}_{k}",
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
            diffusion = f"{_arguments(base + 3, 2)}, 0.0, {_arguments(base + 6, 4)}"
            lines += _depletion_lines(j, base + 5, base + 8)
            lines += [
                f"if not ({_near(j)}):",
                f"    e{j}, t{j}_{j} = diode_charge(w{j}, {diffusion})",
                f"    x{j} = w{j}",
                f"q{j} = b{j} + p{j} * (w{j} - y{j}) + e{j} + t{j}_{j} * (w{j} - x{j})",
                f"f{j}_{j} = p{j} + t{j}_{j}",
                f"i{j} += per_second * (q{j} - h{j})",
                f"g{j}_{j} += per_second * f{j}_{j}",
            ]
        slopes[j, j] = f"g{j}_{j}"
    return lines, slopes


def _depletion_lines(j: int, at: int, at_fc: int) -> list[str]:
    """Lines that keep the tangent of a depletion charge, b + p (w - y), near the present voltage."""
    return [
        f"if not abs(w{j} - y{j}) < {_NEAR_DEPLETION_VOLTS}:",
        f"    b{j}, p{j} = depletion_charge(w{j}, {_arguments(at, 3)}, parameters[{at_fc}])",
        f"    y{j} = w{j}",
    ]


def _near(j: int) -> str:
    """A condition: the tangent of the diffusion charges will do, for there is none in reverse or it is near."""
    return f"(abs(w{j} - x{j}) < {_NEAR_VOLTS} or (w{j} < {_REVERSE_VOLTS} and x{j} < {_REVERSE_VOLTS}))"


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
            f"moved = abs(n{j} - w{j})",
            f"if w{j} < {_REVERSE_VOLTS} and n{j} < {_REVERSE_VOLTS}:",
            f"    moved *= {_TOLERANCE_REVERSE_RATIO}",
            "change = max(change, moved)",
        ]
    body += [f"s{j} = n{j} - w{j}" for j in every]
    body += [f"w{j} = n{j}" for j in every]
    # the last step is taken along the tangent, so that Kirchhoff's laws hold to rounding
    last = [f"if change < {_TOLERANCE_VOLTS} and not limited:"]
    for r in every:
        tangent = " + ".join(f"{slopes[r, c]} * s{c}" for c in every if (r, c) in slopes)
        last.append(f"    i{r} += {tangent}")
    if charged:
        last += [f"    q{r} += f{r}_{c} * s{c}" for r, c in _charge_slopes(bjts, diodes)]
    last += ["    converged = True", "    break"]
    lines = [f"k{r}_{c} = feedback[{c}, {r}]" for r in every for c in every]
    lines += [f"vc{j} = {text}" for j, text in enumerate(_critical(bjts, diodes))]
    lines += [f"v{j} = state[states + {j}]" for j in every]
    lines += [f"u{j} = state[states + {2 * ports + j}]" for j in every]
    for j in every:
        # along the parabola where it bends little, along the line at edges
        lines += [
            f"bend = v{j} - 2.0 * u{j} + state[states + {3 * ports + j}]",
            f"w{j} = 2.0 * v{j} - u{j}",
            f"if abs(bend) < {_BEND_VOLTS}:",
            f"    w{j} += bend",
            f"w{j} = min(w{j}, vc{j})",
        ]
    lines += [f"h{j} = state[states + {ports + j}]" for j in every if charged]
    lines += ["converged = False", "for _ in range(25):", _indented("\n".join(body + last), 4)]
    lines += [RESCUE]
    lines += [f"    w{j} = found[{j}]\n    i{j} = amps[{j}]" for j in every]
    lines += [f"    q{j} = charges[{j}]" for j in every if charged]
    lines += ["for r in range(rows):"]
    lines += ["    acc[r] += " + " + ".join(f"feedback[{j}, r] * i{j}" for j in every)]
    for j in every:
        lines += [f"state[states + {3 * ports + j}] = u{j}", f"state[states + {2 * ports + j}] = v{j}"]
        lines.append(f"state[states + {j}] = w{j}")
        if charged:
            lines.append(f"state[states + {ports + j}] = (1.0 + remember) * q{j} - remember * h{j}")
    return "\n".join(lines)


def _charge_slopes(bjts: int, diodes: int) -> list[tuple[int, int]]:
    pairs = [(2 * n + r, 2 * n + c) for n in range(bjts) for r, c in ((0, 0), (0, 1), (1, 1))]
    return pairs + [(2 * bjts + n, 2 * bjts + n) for n in range(diodes)]


def _no_charges_yet(bjts: int, diodes: int) -> list[str]:
    lines: list[str] = []
    for j in range(2 * bjts + diodes):
        lines += [f"x{j} = 1e300", f"y{j} = 1e300", f"e{j} = 0.0", f"b{j} = 0.0", f"p{j} = 0.0"]
    return lines + [f"t{r}_{c} = 0.0" for r, c in _charge_slopes(bjts, diodes)]


def _elimination(ports: int) -> list[str]:
    """Lines of Gauss's elimination without pivoting; a poor pivot shows as a step that does not converge."""
    lines: list[str] = []
    for pivot in range(ports):
        lines.append(f"r{pivot} = 1.0 / a{pivot}_{pivot}")
        for r in range(pivot + 1, ports):
            lines.append(f"f = a{r}_{pivot} * r{pivot}")
            lines += [f"a{r}_{c} -= f * a{pivot}_{c}" for c in range(pivot + 1, ports)]
            lines.append(f"d{r} -= f * d{pivot}")
    for r in reversed(range(ports)):
        rest = "".join(f" - a{r}_{c} * d{c}" for c in range(r + 1, ports))
        lines.append(f"d{r} = (d{r}{rest}) * r{r}")
    return lines
