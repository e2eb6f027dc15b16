"""Part faults in plain words, planted into a netlist: what goes wrong on a workbench.

An open is 10 GΩ and a short 0.1 Ω, so that no node ever floats and no loop is without resistance. A pot is a
pair of resistors ``R<name>_a`` (top to wiper) and ``R<name>_b`` (wiper to the other end).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

from drivers.circuit.cards import Model, Netlist, Part
from drivers.circuit.errors import BadExpression, BadPartFault, UnknownName, nearest_names
from drivers.circuit.expression import names_in
from drivers.circuit.fault_words import PIN_OF_WORD, Amount, PartFault, parse_fault
from drivers.circuit.generic_models import generic_model

__all__ = ["PartFault", "apply_faults", "parse_fault"]

_OPEN_OHMS = "1e10"
_SHORT_OHMS = "0.1"
_REVERSED_ELECTROLYTIC_OHMS = "10k"  # assumption: an electrolytic the wrong way round leaks like this
_PIN_ORDER = "cbe"


def apply_faults(netlist: Netlist, faults: Sequence[PartFault]) -> Netlist:
    """Return the netlist with faults planted, one after the other.

    Raises
    ------
    BadPartFault
        When a fault names a part, node or model that is not there, or one that cannot have such a fault.
    """
    for fault in faults:
        try:
            netlist = _ACTIONS[fault.kind](netlist, fault)
        except UnknownName as error:
            raise BadPartFault(f"'{fault.words}': {error}") from error
    return netlist


@dataclass(frozen=True)
class _Pot:
    top: Part
    bottom: Part


def _refuse(fault: PartFault, text: str) -> BadPartFault:
    return BadPartFault(f"'{fault.words}': {text}")


def _open(netlist: Netlist, fault: PartFault) -> Netlist:
    part = netlist.part(fault.targets[0])
    if part.kind in "rl":
        return _as_resistor(netlist, part, _OPEN_OHMS)
    if part.kind == "c":
        return netlist.with_part(replace(part, value="0"))
    if part.kind == "d":
        return _as_resistor(netlist, part, _OPEN_OHMS)
    if part.kind == "q":
        raise _refuse(fault, f"say which pin: lift {part.name} c, lift {part.name} b or lift {part.name} e")
    raise _refuse(fault, "only R, L, C and D can be open (a pin of a transistor: lift Q1 b)")


def _as_resistor(netlist: Netlist, part: Part, ohms: str) -> Netlist:
    """Put a resistor in a part's place; it keeps the part's name when it may."""
    if part.kind == "r":
        return netlist.with_part(replace(part, value=ohms))
    name = f"R_{part.name}"
    return netlist.without_parts([part.name]).with_part(Part(name, part.nodes, ohms, part.line))


def _short(netlist: Netlist, fault: PartFault) -> Netlist:
    part = netlist.part(fault.targets[0])
    if part.kind not in "rlcd":
        raise _refuse(fault, "only R, L, C and D can be shorted (pins of a transistor: bridge its nodes)")
    return _bridged(netlist, part.nodes[0], part.nodes[1], f"Rshort_{part.name}")


def _bridged(netlist: Netlist, a: str, b: str, name: str, ohms: str = _SHORT_OHMS) -> Netlist:
    return netlist.with_part(Part(name, (a, b), ohms))


def _bridge(netlist: Netlist, fault: PartFault) -> Netlist:
    known = (*netlist.nodes, "0")
    nodes = []
    for word in fault.targets:
        node = "0" if word.lower() in ("ground", "gnd", "chassis") else word.lower()
        if node not in known:
            raise _refuse(fault, f"no node '{word}' {nearest_names(node, known)}")
        nodes.append(node)
    if nodes[0] == nodes[1]:
        raise _refuse(fault, "both are the same node")
    return _bridged(netlist, nodes[0], nodes[1], f"Rbridge_{nodes[0]}_{nodes[1]}")


def _value(netlist: Netlist, fault: PartFault) -> Netlist:
    name, amount = fault.targets[0], _amount(fault)
    if any(part.name.lower() == name.lower() for part in netlist.parts):
        part = netlist.part(name)
        if part.kind in "dq":
            raise _refuse(fault, f"'{part.name}' has no value (accepted: wrong part {part.name} silicon npn)")
        return netlist.with_part(replace(part, value=amount.applied_to(part.value)))
    pot = _find_pot(netlist, name)
    if pot is not None:
        return _pot_value(netlist, pot, amount)
    for param in netlist.params:
        if param.name == name.lower():
            return netlist.with_param(name, amount.applied_to(param.expression))
    known = [part.name for part in netlist.parts] + [param.name for param in netlist.params]
    raise _refuse(fault, f"no part, pot or parameter '{name}' {nearest_names(name, known)}")


def _pot_value(netlist: Netlist, pot: _Pot, amount: Amount) -> Netlist:
    """Scale both halves of a pot, so that the track has the wrong value and the wiper stays where it is."""
    track = f"(({pot.top.value})+({pot.bottom.value}))"
    factor = amount.text if amount.relative else f"({amount.text})/{track}"
    for half in (pot.top, pot.bottom):
        netlist = netlist.with_part(replace(half, value=f"({half.value})*({factor})"))
    return netlist


def _swap_pins(netlist: Netlist, fault: PartFault) -> Netlist:
    part = _transistor(netlist, fault)
    first, second = (_pin(fault, word) for word in fault.targets[1:3])
    if first == second:
        raise _refuse(fault, "both are the same pin")
    nodes = list(part.nodes)
    nodes[first], nodes[second] = nodes[second], nodes[first]
    return netlist.with_part(replace(part, nodes=tuple(nodes)))


def _transistor(netlist: Netlist, fault: PartFault) -> Part:
    part = netlist.part(fault.targets[0])
    if part.kind != "q":
        raise _refuse(fault, f"'{part.name}' is no transistor")
    return part


def _pin(fault: PartFault, word: str) -> int:
    letter = PIN_OF_WORD.get(word.lower())
    if letter is None:
        raise _refuse(fault, f"no pin '{word}' (accepted: c, b, e)")
    return _PIN_ORDER.index(letter)


def _swap(netlist: Netlist, fault: PartFault) -> Netlist:
    first, second = (netlist.part(name) for name in fault.targets)
    if first.kind != second.kind or first.kind not in "rclqd" or first.name == second.name:
        raise _refuse(fault, "two different parts of one kind can be swapped (two R, C, L, Q or D)")
    return netlist.with_part(replace(first, value=second.value, model=second.model)).with_part(
        replace(second, value=first.value, model=first.model)
    )


def _wrong_part(netlist: Netlist, fault: PartFault) -> Netlist:
    part = netlist.part(fault.targets[0])
    if part.kind not in "dq":
        raise _refuse(fault, f"'{part.name}' has no model (accepted: value {part.name} 4k7)")
    wanted = " ".join(fault.targets[1:])
    model = generic_model(wanted) or _own_model(netlist, wanted, fault)
    if (model.kind == "d") != (part.kind == "d"):
        raise _refuse(fault, f"'{wanted}' does not fit in the place of '{part.name}'")
    return netlist.with_model(model).with_part(replace(part, model=model.name))


def _own_model(netlist: Netlist, wanted: str, fault: PartFault) -> Model:
    for model in netlist.models:
        if model.name == wanted.lower():
            return model
    known = ", ".join(
        model.name for model in netlist.models if "@" not in model.name
    )  # not a part's own copy
    raise _refuse(
        fault,
        f"no model '{wanted}' (accepted: {known}, silicon npn, silicon pnp, germanium npn, germanium pnp, "
        "silicon diode, germanium diode, red led)",
    )


def _leaky(netlist: Netlist, fault: PartFault) -> Netlist:
    part = netlist.part(fault.targets[0])
    amount = _amount(fault)
    if part.kind != "q":
        if amount.relative or part.kind not in "rcld":
            raise _refuse(fault, f"a leak here is given in ohms (accepted: leaky {part.name} 100k)")
        return _bridged(netlist, part.nodes[0], part.nodes[1], f"Rleak_{part.name}", amount.text)
    if not amount.relative:
        raise _refuse(fault, f"a transistor's leakage is given as a factor (accepted: leaky {part.name} x5)")
    model = netlist.model(part.model)
    leakage = model.parameter("isc", "0")
    if leakage != "0":
        return netlist.with_own_model(part.name, "isc", amount.applied_to(leakage))
    # no leakage written: what leaks is the collector junction itself, IS/BR
    extra = f"(({amount.text})-1)*({model.parameter('is', '1e-16')})/({model.parameter('br', '1')})"
    return netlist.with_own_model(part.name, "isc", extra).with_own_model(part.name, "nc", "1")


def _gain(netlist: Netlist, fault: PartFault) -> Netlist:
    part = _transistor(netlist, fault)
    nominal = netlist.model(part.model).parameter("bf", "100")
    return netlist.with_own_model(part.name, "bf", _amount(fault).applied_to(nominal))


def _backwards(netlist: Netlist, fault: PartFault) -> Netlist:
    pot = _find_pot(netlist, fault.targets[0])
    if pot is None:
        tops = [part for part in netlist.parts if part.name.lower().endswith("_a")]
        pots = [name for top in tops for name in (top.name[1:-2], *sorted(_names(top.value)))]
        raise _refuse(fault, f"no pot '{fault.targets[0]}' {nearest_names(fault.targets[0], pots)}")
    swapped = netlist.with_part(replace(pot.top, value=pot.bottom.value))
    return swapped.with_part(replace(pot.bottom, value=pot.top.value))


def _find_pot(netlist: Netlist, name: str) -> _Pot | None:
    """Return the pot called ``R<name>_a``/``R<name>_b``, or whose halves hang on the .param of that name."""
    parts = {part.name.lower(): part for part in netlist.parts if part.kind == "r"}
    by_param = None
    for lowered, top in parts.items():
        bottom = parts.get(f"{lowered[:-1]}b")
        if not lowered.endswith("_a") or bottom is None:
            continue
        if lowered[:-2] in (name.lower(), f"r{name.lower()}"):
            return _Pot(top, bottom)
        if name.lower() in _names(top.value) & _names(bottom.value):
            by_param = by_param or _Pot(top, bottom)
    return by_param


def _names(expression: str) -> frozenset[str]:
    try:
        return names_in(expression)
    except BadExpression:
        return frozenset()


def _lift(netlist: Netlist, fault: PartFault) -> Netlist:
    part = netlist.part(fault.targets[0])
    if part.kind != "q":
        if len(fault.targets) > 1:
            raise _refuse(fault, f"only a transistor's pin is named (accepted: lift {part.name})")
        return _open(netlist, fault)
    if len(fault.targets) < 2:
        raise _refuse(fault, f"say which pin (accepted: lift {part.name} c, b or e)")
    pin = _pin(fault, fault.targets[1])
    inner = f"{part.name.lower()}#lifted_{_PIN_ORDER[pin]}"
    nodes = list(part.nodes)
    outer, nodes[pin] = nodes[pin], inner
    gap = Part(f"Rlift_{part.name}_{_PIN_ORDER[pin]}", (outer, inner), _OPEN_OHMS)
    return netlist.with_part(replace(part, nodes=tuple(nodes))).with_part(gap)


def _reversed(netlist: Netlist, fault: PartFault) -> Netlist:
    part = netlist.part(fault.targets[0])
    if part.kind == "d":
        return netlist.with_part(replace(part, nodes=(part.nodes[1], part.nodes[0])))
    if part.kind == "c":
        name = f"Rleak_{part.name}"
        return _bridged(netlist, part.nodes[0], part.nodes[1], name, _REVERSED_ELECTROLYTIC_OHMS)
    raise _refuse(fault, "only D and C can be reversed (transistors: swap pins; pots: backwards)")


def _amount(fault: PartFault) -> Amount:
    if fault.amount is None:
        raise _refuse(fault, "an amount is missing")
    return fault.amount


_ACTIONS: dict[str, Callable[[Netlist, PartFault], Netlist]] = {
    "open": _open,
    "short": _short,
    "value": _value,
    "swap pins": _swap_pins,
    "swap": _swap,
    "wrong part": _wrong_part,
    "leaky": _leaky,
    "gain": _gain,
    "backwards": _backwards,
    "bridge": _bridge,
    "lift": _lift,
    "reversed": _reversed,
}
