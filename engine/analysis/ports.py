"""Ports of a circuit: nodes by name, and a copy of the circuit in which what hangs on a node is split into a source and a load side."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, replace

from polewise.analysis import failures
from polewise.analysis.probes import current_branches, reading_replaced
from polewise.analysis.standpoint import Standpoint
from polewise.circuit.model import Branch, Circuit, Domain, LatchDef, Law
from polewise.circuit.quantities import find
from polewise.expression.graph import SYMBOL
from polewise.grammar.diagnostics import Diagnostic
from polewise.grammar.source import no_span
from polewise.network.graph import Network
from polewise.network.structure import check_structure


@dataclass(frozen=True, slots=True)
class Port:
    """Two nodes; the second is the reference of the first one's island unless stated."""

    name: str
    node: str
    other: str


def find_port(circuit: Circuit, network: Network, name: str) -> Port:
    """A port by name: "bus", "a to b", or a port of an assembly, "berth2.inp".

    Raises:
        UnknownName: no such node.
        AnalysisRefused: two nodes of different islands.
    """
    first, _, second = (part.strip() for part in name.partition(" to "))
    node = _node(circuit, first)
    island = next(i for i in network.islands if node in i.nodes)
    if second:
        other = _node(circuit, second)
        if other not in island.nodes:
            raise failures.refused("port-over-islands", f"`{first}` and `{second}` are in different islands: no impedance lies between them")
        return Port(name, node, other)
    return Port(name, node, island.references[0] if island.references else island.nodes[0])


def _node(circuit: Circuit, name: str) -> str:
    if name in circuit.nodes:
        return name
    if name in circuit.ports:
        return circuit.ports[name].node
    found = find(circuit, f"{name}.{Domain.ELECTRICAL.across}")
    graph = circuit.graph
    if not isinstance(found, Diagnostic):
        node = found.expression
        if graph.operation[node] == SYMBOL and graph.symbols[node][0] == "potential":
            return graph.symbols[node][1]
    known = [n for n, c in circuit.nodes.items() if c.named]
    raise failures.unknown_node(name, known)


def belongs(items: Sequence[str]) -> Callable[[str], bool]:
    """Whether a path lies in one of the named elements or assemblies."""

    def inside(path: str) -> bool:
        return any(path == item or path.startswith((f"{item}.", f"{item}#")) for item in items)

    return inside


def load_side(circuit: Circuit, node: str, source: Sequence[str], load: Sequence[str]) -> tuple[list[str], list[str]]:
    """Branches at a node on the source and on the load side; what is named on neither goes to the side that is not named at all.

    Raises:
        AnalysisRefused: a name without a branch at the node, or a branch that both or neither side claims.
    """
    touching = [name for name, _ in current_branches(circuit, node)]
    in_source, in_load = belongs(source), belongs(load)
    for item in (*source, *load):
        inside = belongs([item])
        if not any(inside(name) for name in touching):
            shown = ", ".join(f"`{_top(n)}`" for n in dict.fromkeys(map(_top, touching)))
            raise failures.refused("side-not-at-node", f"`{item}` does not touch `{node}`", f"what touches it: {shown}")
    left: list[str] = []
    right: list[str] = []
    for name in touching:
        a, b = in_source(name), in_load(name)
        if a and b:
            raise failures.refused("side-twice", f"`{name}` is on the source and on the load side")
        if not a and not b and source and load:
            raise failures.refused("side-missing", f"`{_top(name)}` touches `{node}` and is on neither side", "name it on one of them")
        (right if b or (not a and not load) else left).append(name)
    if not left or not right:
        raise failures.refused("side-empty", f"one side of `{node}` is empty", "name some of what touches it as source or load")
    return left, right


def _top(name: str) -> str:
    return name.split(".")[0].split("#")[0]


def split(stand: Standpoint, port: Port, load: Sequence[str]) -> tuple[Standpoint, Branch]:
    """A copy in which the load's branches hang on a node of their own, tied to the old one by a source of 0 V whose latch is its name.

    Args:
        load: branches at port.node that go to the load side.
    Returns:
        the copy and the tie; its current flows from the source side into the load side.
    """
    circuit, graph = stand.circuit, stand.circuit.graph
    node, twin = port.node, f"{port.node}#load"
    moved = set(load)

    def end(name: str, at: str) -> str:
        return twin if at == node and name in moved else at

    branches = {n: replace(b, left=end(n, b.left), right=end(n, b.right)) for n, b in circuit.branches.items()}
    devices = {
        n: replace(d, terminals={t: twin if at == node and _on_side(d.branches.values(), moved) else at for t, at in d.terminals.items()})
        for n, d in circuit.devices.items()
    }
    key = f"{node}:tie"
    old = circuit.nodes[node]
    latch = LatchDef(key, graph.constant(0.0), old.domain.across_dimension, False, "", no_span())
    tie = Branch(key, node, twin, Law.VOLTAGE, graph.symbol("latch", key), None, "", no_span(), old.domain)
    copy = replace(
        circuit,
        nodes={**circuit.nodes, twin: replace(old, name=twin, is_reference=False, named=False)},
        branches={**branches, key: tie},
        devices=devices,
        latches={**circuit.latches, key: latch},
    )
    owners = {_owner_of(circuit, name) for name in load} - {""}
    if owners:
        inside = belongs(sorted(owners))
        copy = reading_replaced(copy, {graph.symbol("potential", node): graph.symbol("potential", twin)}, owned=inside)
    network, found = check_structure(copy)
    if network is None:
        raise failures.refused("split-impossible", f"`{node}` can't be split: {next(d for d in found if d.is_error).headline}")
    return stand.with_copy(copy, network), tie


def _on_side(branches: Iterable[str], moved: set[str]) -> bool:
    return any(name in moved for name in branches)


def _owner_of(circuit: Circuit, branch: str) -> str:
    """The outermost assembly a branch lies in, "" at top level."""
    owner = circuit.branches[branch].owner
    return owner.split(".")[0] if owner else ""


__all__ = ["Port", "belongs", "find_port", "load_side", "split"]
