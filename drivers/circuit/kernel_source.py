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
_TRANSPORT_ARGUMENTS = 7
_TERMINAL_ARGUMENTS = 6
_NEAR_VOLTS = 3e-3
_NEAR_RATIO = 0.01
"""Within this distance, and in reverse this share of the voltage more, a depletion charge is taken along its tangent:
the curve costs two logarithms and bends over tenths of a volt."""
_REVERSE_VOLTS = -0.2
_BEND_VOLTS = 4e-3
_TOLERANCE_VOLTS = 1.5e-5
"""The last step goes along the tangent: what it leaves out is (15 uV / VT)^2 / 2 of a current, -135 dB."""
_TOLERANCE_REVERSE_RATIO = 0.01
"""In reverse a step counts for this much: what is left of the curve bends a thousand times less."""
_SHARED = "forward, g_forward, reverse, g_reverse, qb, qb_by_vbe, qb_by_vbc"
_LAWS = (
    "junction_current",
    "depletion_charge",
    "base_charge",
    "transport",
    "terminal_currents",
    "diffusion_charges",
)


def kernel_source(bjts: int, diodes: int, charged: bool) -> str:
    """Return a module's text with the functions `advance` and `settle`."""
    ports = 2 * bjts + diodes
    parts = [HEAD, _device_laws(), _evaluate(bjts, diodes, charged), ARRAY_NEWTON]
    solve = _unrolled(bjts, diodes, charged) if ports <= _MOST_UNROLLED_PORTS else BY_ARRAYS
    advance = ADVANCE.replace("JUNCTIONS\n", _indented(solve, 8) + "\n" if ports else "")
    opening: list[str] = []
    if ports <= _MOST_UNROLLED_PORTS:
        every = range(ports)
        opening = _constants(bjts, diodes) + (_no_charges_yet(bjts, diodes) if charged else [])
        opening += [f"k{r}_{c} = feedback[{c}, {r}]" for r in every for c in every]
        opening += [f"vc{j} = {text}" for j, text in enumerate(_critical(bjts, diodes))]
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
            kept.append(f"@njit(forceinline=True, **_OPTIONS)\n{ast.unparse(node)}")
    return "\n\n".join(kept)


def _indented(text: str, spaces: int) -> str:
    return "\n".join(" " * spaces + line if line else line for line in text.splitlines())


def _arguments(first: int, count: int) -> str:
    return ", ".join(f"c{first + i}" for i in range(count))


def _constants(bjts: int, diodes: int) -> list[str]:
    """Lines that fetch all parameters of the devices."""
    return [f"c{at} = parameters[{at}]" for at in range(BJT_PARAMETERS * bjts + DIODE_PARAMETERS * diodes)]


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
        at = base + 2
        charge_at = at + 2 * _TRANSPORT_ARGUMENTS + _TERMINAL_ARGUMENTS
        lines += [
            f"{_SHARED} = transport(w{j}, w{k}, {_arguments(at, _TRANSPORT_ARGUMENTS)})",
            f"ic, ib, c_be, c_bc, b_be, b_bc = terminal_currents(w{j}, w{k}, {_SHARED}, "
            f"{_arguments(at + _TRANSPORT_ARGUMENTS, _TERMINAL_ARGUMENTS)})",
            f"i{j} = ic + ib - shift * w{j}",
            f"i{k} = -ic - shift * w{k}",
            f"g{j}_{j} = c_be + b_be - shift",
            f"g{j}_{k} = c_bc + b_bc",
            f"g{k}_{j} = -c_be",
            f"g{k}_{k} = -c_bc - shift",
        ]
        if charged:
            lines += _depletion_lines(j, charge_at, charge_at + 6) + _depletion_lines(
                k, charge_at + 3, charge_at + 6
            )
            lines += [
                f"q{j}, q{k}, f{j}_{j}, f{j}_{k}, f{k}_{k} = diffusion_charges(w{j}, {_SHARED}, "
                f"{_arguments(charge_at + 7, 2)})",
                f"q{j} += b{j} + p{j} * (w{j} - y{j})",
                f"q{k} += b{k} + p{k} * (w{k} - y{k})",
                f"f{j}_{j} += p{j}",
                f"f{k}_{k} += p{k}",
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
            lines += _depletion_lines(j, base + 5, base + 8)
            lines += [
                f"q{j} = b{j} + p{j} * (w{j} - y{j}) + {_arguments(base + 9, 1)} * junction_amps",
                f"f{j}_{j} = p{j} + {_arguments(base + 9, 1)} * junction_siemens",
                f"i{j} += per_second * (q{j} - h{j})",
                f"g{j}_{j} += per_second * f{j}_{j}",
            ]
        slopes[j, j] = f"g{j}_{j}"
    return lines, slopes


def _depletion_lines(j: int, at: int, at_fc: int) -> list[str]:
    """Lines that keep the tangent of a depletion charge, b + p (w - y), near the present voltage."""
    return [
        f"if not abs(w{j} - y{j}) < {_NEAR_VOLTS} - {_NEAR_RATIO} * min(w{j}, 0.0):",
        f"    b{j}, p{j} = depletion_charge(w{j}, {_arguments(at, 3)}, {_arguments(at_fc, 1)})",
        f"    y{j} = w{j}",
    ]


def _critical(bjts: int, diodes: int) -> list[str]:
    bjt_bases, diode_bases = _bases(bjts, diodes)
    places = [at for base in bjt_bases for at in (base, base + 1)] + diode_bases
    return [_arguments(at, 1) for at in places]


def _evaluate(bjts: int, diodes: int, charged: bool) -> str:
    """Return the function that evaluates all laws on arrays (rare path, many ports)."""
    ports = 2 * bjts + diodes
    lines = _constants(bjts, diodes) + [f"w{j} = volts[{j}]" for j in range(ports)]
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
    body += _elimination(bjts, diodes)
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
    lines = [f"v{j} = state[states + {j}]" for j in every]
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
        lines += [f"y{j} = 1e300", f"b{j} = 0.0", f"p{j} = 0.0"]
    return lines


def _elimination(bjts: int, diodes: int) -> list[str]:
    """Lines of Gauss's elimination, a device at a time: a transistor's two ports are one pivot.

    There is one division a device, and they wait for each other; a poor pivot shows as a step that does not converge.
    """
    ports = 2 * bjts + diodes
    lines: list[str] = []
    devices = [(2 * n, 2 * n + 1) for n in range(bjts)] + [(j,) for j in range(2 * bjts, ports)]
    for pivot in devices:
        lines += _inverse(pivot)
        after = range(pivot[-1] + 1, ports)
        for r in after:
            for p in pivot:
                lines.append(f"l{p} = " + " + ".join(f"a{r}_{m} * m{m}_{p}" for m in pivot))
            for c in after:
                lines.append(f"a{r}_{c} -= " + " + ".join(f"l{p} * a{p}_{c}" for p in pivot))
            lines.append(f"d{r} -= " + " + ".join(f"l{p} * d{p}" for p in pivot))
    for pivot in reversed(devices):
        for p in pivot:
            lines.append(f"l{p} = d{p}" + "".join(f" - a{p}_{c} * d{c}" for c in range(pivot[-1] + 1, ports)))
        for p in pivot:
            lines.append(f"d{p} = " + " + ".join(f"m{p}_{m} * l{m}" for m in pivot))
    return lines


def _inverse(pivot: tuple[int, ...]) -> list[str]:
    """Lines that invert a diagonal block of the matrix a into m."""
    if len(pivot) == 1:
        return [f"m{pivot[0]}_{pivot[0]} = 1.0 / a{pivot[0]}_{pivot[0]}"]
    p, q = pivot
    return [
        f"inverse = 1.0 / (a{p}_{p} * a{q}_{q} - a{p}_{q} * a{q}_{p})",
        f"m{p}_{p} = a{q}_{q} * inverse",
        f"m{q}_{q} = a{p}_{p} * inverse",
        f"m{p}_{q} = -a{p}_{q} * inverse",
        f"m{q}_{p} = -a{q}_{p} * inverse",
    ]
