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
    lines += [RESCUE]
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
