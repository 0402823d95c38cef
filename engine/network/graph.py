"""The circuit as a graph: islands, the tree that chooses state variables, loops, cut-sets, and the path from a pole's mid to its choke.

The tree is a spanning tree of least rank: voltage-defined branches first, then capacitors, then what may be read either way, then
inductors, then given currents. Capacitors outside it and inductors inside it are dependent (Bryant 1959, "The order of complexity of
electrical networks"; Chua & Lin 1975, Computer-Aided Analysis of Electronic Circuits, ch. 8: the normal tree, recalled from memory).
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

import networkx as nx

from polewise.circuit.model import Branch, Circuit, Law
from polewise.devices.kind import KINDS, SlotForm

RANK: Mapping[str, float] = {
    "voltage": 0.0,
    "charge": 1.0,
    "winding": 1.5,
    "resistance": 2.0,
    "nonlinear_voltage": 2.2,
    "implicit": 2.5,
    "nonlinear": 3.0,
    "flux": 4.0,
    "current": 5.0,
}


@dataclass(frozen=True, slots=True)
class Step:
    """How a node hangs on its parent in the tree: potential(node) = potential(parent) + sign*v(branch)."""

    parent: str
    branch: str
    sign: int


@dataclass(frozen=True, slots=True)
class Island:
    """Connected nodes; `reference` is None where there is none."""

    nodes: tuple[str, ...]
    references: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class ChokePath:
    """From a pole's mid to the far end: (branch, sign), sign +1 where the branch's left is on the mid's side."""

    elements: tuple[tuple[str, int], ...]
    far: str
    inductors: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Network:
    """What the graph knows.

    Args:
        forms: branch → how its law reads ("voltage", "current", …); windings already decided.
        tree: names of tree branches.
        steps: node → Step, every node but references; parents come before children.
        chokes: pole → paths found; empty where none.
    """

    islands: tuple[Island, ...]
    forms: Mapping[str, str]
    tree: frozenset[str]
    steps: Mapping[str, Step]
    dependent_capacitors: tuple[str, ...]
    dependent_inductors: tuple[str, ...]
    chokes: Mapping[str, tuple[ChokePath, ...]]


def form_of(circuit: Circuit, branch: Branch) -> str:
    """How a branch's law reads; a key of RANK."""
    if branch.law is Law.DEVICE:
        assert branch.device is not None
        kind = KINDS[circuit.devices[branch.device].kind]
        return next(slot.form for slot in kind.slots if slot.suffix == branch.slot)
    if branch.law in (Law.RESISTANCE, Law.CONDUCTANCE):
        return "resistance"
    if branch.law in (Law.CHARGE, Law.FLUX, Law.IMPLICIT):
        return str(branch.law.value)
    assert branch.expression is not None
    under = circuit.graph.symbols_under([branch.expression])
    own = circuit.graph.symbol("i" if branch.law is Law.VOLTAGE else "v", branch.name)
    if branch.law is Law.VOLTAGE:
        return "nonlinear_voltage" if own in under else "voltage"
    return "nonlinear" if own in under else "current"


# Within "resistance": v = R*i bears R = 0 and belongs into the tree, i = G*v bears G = 0 and belongs outside.
VARYING_RESISTANCE_RANK = 1.9
CONDUCTANCE_RANK = 2.1


def rank_of(circuit: Circuit, branch: Branch, form: str) -> float:
    """RANK with the two ways of writing a resistance told apart where it matters."""
    if form == "resistance":
        if branch.law is Law.CONDUCTANCE:
            return CONDUCTANCE_RANK
        if branch.law is Law.RESISTANCE and branch.expression is not None and not circuit.graph.is_constant(branch.expression):
            return VARYING_RESISTANCE_RANK
    return RANK[form]


def spanning_tree(circuit: Circuit, forms: Mapping[str, str]) -> frozenset[str]:
    """Branches of the tree of least rank (Kruskal 1956); ties go by the order of the text."""
    parent: dict[str, str] = {name: name for name in circuit.nodes}

    def find(node: str) -> str:
        while parent[node] != node:
            parent[node] = parent[parent[node]]
            node = parent[node]
        return node

    chosen = []
    for name in sorted(circuit.branches, key=lambda k: rank_of(circuit, circuit.branches[k], forms[k])):
        branch = circuit.branches[name]
        left, right = find(branch.left), find(branch.right)
        if left != right:
            parent[left] = right
            chosen.append(name)
    return frozenset(chosen)


def choose_windings(circuit: Circuit, forms: dict[str, str]) -> frozenset[str]:
    """The tree, with one winding of each ideal transformer in it and the other outside; writes the choice into `forms`."""
    pairs = [(d.branches["primary"], d.branches["secondary"]) for d in circuit.devices.values() if "primary" in d.branches]
    tree = spanning_tree(circuit, forms)
    for _ in range(2 * len(pairs) + 1):
        moved = False
        for primary, secondary in pairs:
            if (primary in tree) != (secondary in tree) or forms[secondary] != "winding":
                continue
            forms[secondary] = "current" if primary in tree else "voltage"
            moved = True
            break
        if not moved:
            break
        tree = spanning_tree(circuit, forms)
    for primary, secondary in pairs:
        in_tree = secondary in tree
        forms[secondary] = "voltage" if in_tree else "current"
        forms[primary] = "current" if in_tree else "voltage"
    return tree


def find_islands(circuit: Circuit) -> tuple[Island, ...]:
    """Connected parts, in the order of the text."""
    graph = nx.Graph()
    graph.add_nodes_from(circuit.nodes)
    graph.add_edges_from((b.left, b.right) for b in circuit.branches.values())
    order = {name: k for k, name in enumerate(circuit.nodes)}
    islands = []
    for component in nx.connected_components(graph):
        nodes = tuple(sorted(component, key=order.__getitem__))
        islands.append(Island(nodes, tuple(n for n in nodes if circuit.nodes[n].is_reference)))
    return tuple(islands)


def hang_tree(circuit: Circuit, tree: frozenset[str], islands: Iterable[Island]) -> dict[str, Step]:
    """Every node's step to its parent, breadth first from each island's reference (or first node where there is none)."""
    neighbours: dict[str, list[tuple[str, str, int]]] = {name: [] for name in circuit.nodes}
    for name in circuit.branches:
        if name in tree:
            branch = circuit.branches[name]
            neighbours[branch.left].append((branch.right, name, -1))
            neighbours[branch.right].append((branch.left, name, +1))
    steps: dict[str, Step] = {}
    for island in islands:
        root = island.references[0] if island.references else island.nodes[0]
        front, seen = [root], {root}
        while front:
            later = []
            for node in front:
                for other, branch_name, sign in neighbours[node]:
                    if other not in seen:
                        seen.add(other)
                        steps[other] = Step(node, branch_name, sign)
                        later.append(other)
            front = later
    return steps


def tree_path(steps: Mapping[str, Step], left: str, right: str) -> list[str]:
    """Tree branches between two nodes of one island: the fundamental loop of a branch outside the tree."""

    def up(node: str) -> list[tuple[str, str]]:
        chain = []
        while node in steps:
            step = steps[node]
            chain.append((node, step.branch))
            node = step.parent
        return chain

    first, second = up(left), up(right)
    while first and second and first[-1] == second[-1]:
        first.pop()
        second.pop()
    return [branch for _, branch in first] + [branch for _, branch in reversed(second)]


def below(steps: Mapping[str, Step], branch: str) -> set[str]:
    """Nodes that a tree branch's removal cuts off from the reference."""
    children: dict[str, list[str]] = {}
    top = None
    for node, step in steps.items():
        children.setdefault(step.parent, []).append(node)
        if step.branch == branch:
            top = node
    assert top is not None
    found, stack = {top}, [top]
    while stack:
        for child in children.get(stack.pop(), ()):
            found.add(child)
            stack.append(child)
    return found


def cutset(circuit: Circuit, steps: Mapping[str, Step], tree: frozenset[str], branch: str) -> list[str]:
    """Branches outside the tree that cross the cut of a tree branch: its fundamental cut-set without itself."""
    inside = below(steps, branch)
    return [n for n, b in circuit.branches.items() if n not in tree and (b.left in inside) != (b.right in inside)]


PATH_FORMS = ("resistance", "voltage", "nonlinear_voltage", "flux")


def choke_paths(
    circuit: Circuit, forms: Mapping[str, str], touching: Mapping[str, list[str]], mid: str, own: str
) -> tuple[list[ChokePath], list[str]]:
    """Paths from a mid node through an inductor to the next node that is not inside one, and branches at mid that are no such path."""
    paths: list[ChokePath] = []
    others: list[str] = []
    for first in touching[mid]:
        if first == own:
            continue
        elements: list[tuple[str, int]] = []
        node, name = mid, first
        while True:
            branch = circuit.branches[name]
            if forms[name] not in PATH_FORMS or (branch.law is Law.DEVICE and forms[name] != "resistance"):
                break
            elements.append((name, 1 if branch.left == node else -1))
            node = branch.right if branch.left == node else branch.left
            if circuit.nodes[node].is_reference or len(touching[node]) != 2 or node == mid:
                break
            name = next(k for k in touching[node] if k != name)
        inductors = tuple(k for k, _ in elements if forms[k] == "flux")
        if inductors and node != mid:
            paths.append(ChokePath(tuple(elements), node, inductors))
        else:
            others.append(first)
    return paths, others


def slot_form(form: str) -> SlotForm:
    """A network form as the form a device is told."""
    assert form in ("voltage", "current", "nonlinear", "resistance", "flux", "charge")
    return form  # type: ignore[return-value]
