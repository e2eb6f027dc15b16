"""Checks of how a circuit hangs together: floating nodes, loops of voltage sources."""

from __future__ import annotations

from collections.abc import Iterator

from drivers.circuit.elements import (
    Bjt,
    Circuit,
    Diode,
    Element,
    Inductor,
    Resistor,
    Vcvs,
    VoltageSource,
    terminals,
)


class _Islands:
    """Disjoint sets of nodes."""

    def __init__(self) -> None:
        self._above: dict[str, str] = {}

    def root(self, node: str) -> str:
        while (above := self._above.get(node, node)) != node:
            node = above
        return node

    def join(self, a: str, b: str) -> bool:
        """Join two islands; return False when they were one already."""
        first, second = self.root(a), self.root(b)
        self._above[first] = second
        return first != second


def wiring_faults(circuit: Circuit) -> Iterator[tuple[str, str]]:
    """Yield (name of the element to blame, what is wrong)."""
    yield from _floating_nodes(circuit)
    yield from _voltage_loops(circuit)


def _floating_nodes(circuit: Circuit) -> Iterator[tuple[str, str]]:
    islands = _Islands()
    touching: dict[str, list[str]] = {}
    for element in circuit.elements:
        for node in terminals(element):
            touching.setdefault(node, []).append(element.name)
        for a, b in _conducting_pairs(element):
            islands.join(a, b)
    if "0" not in touching:
        yield "", "no element touches node 0 (ground)"
        return
    ground = islands.root("0")
    for node, names in touching.items():
        listed = ", ".join(dict.fromkeys(names))
        if node != "0" and len(names) == 1:
            yield names[0], f"node '{node}' floats: only {listed} touches it, with one terminal"
        elif islands.root(node) != ground:
            yield names[0], f"node '{node}' floats: it has no DC path to node 0 (touched by {listed})"


def _conducting_pairs(element: Element) -> tuple[tuple[str, str], ...]:
    """Return the pairs of nodes that an element joins for direct current."""
    if isinstance(element, Resistor | Inductor | VoltageSource | Vcvs):
        return ((element.a, element.b),)
    if isinstance(element, Diode):
        return ((element.anode, element.cathode),)
    if isinstance(element, Bjt):
        return ((element.base, element.emitter), (element.base, element.collector))
    return ()


def _voltage_loops(circuit: Circuit) -> Iterator[tuple[str, str]]:
    islands = _Islands()
    for element in circuit.elements:
        if isinstance(element, Inductor):
            islands.join(element.a, element.b)
    for element in circuit.elements:
        if isinstance(element, VoltageSource | Vcvs) and not islands.join(element.a, element.b):
            yield (
                element.name,
                f"'{element.name}' closes a loop of voltage sources (or inductors); put a resistor in it",
            )
