"""Random converters with every edge: Kirchhoff's laws hold for cycle averages at every node and around every loop; energy is accounted for."""

from __future__ import annotations

import networkx as nx
import numpy as np
from hypothesis import HealthCheck, assume, given, settings

import polewise
from polewise.errors import SolverError

from .test_converters import systems

SETTINGS = {"deadline": None, "max_examples": 12, "suppress_health_check": [HealthCheck.too_slow, HealthCheck.filter_too_much]}


@settings(**SETTINGS)
@given(systems())
def test_kirchhoff_for_cycle_averages(made: tuple[str, int]) -> None:
    text, _ = made
    system = polewise.from_text(text + "\nstudy run_up {\n    start cold\n    run for 3 ms\n}\n")
    branches = {n: b for n, b in system.circuit.branches.items() if b.left != b.right}
    keep = [f"{n}.{reading}" for n in branches for reading in "vi"]
    readable = set(system.names)
    aliases = {flat: name for name, flat in system.circuit.aliases.items()}
    names = {}
    for n in branches:
        name = n if f"{n}.i" in readable else aliases.get(n)
        if name is not None and f"{name}.i" in readable:
            names[n] = name
    keep = [f"{name}.{reading}" for name in names.values() for reading in "vi"]
    terminals = {d.name: d.terminals for d in system.circuit.devices.values()}
    keep += [f"{d}.{t}.i" for d, ts in terminals.items() for t in ts if f"{d}.{t}.i" in readable]
    keep += [f"{n}.v" for n, node in system.circuit.nodes.items() if f"{n}.v" in readable and not node.is_reference]
    try:
        window = system.magnify("run_up", 1e-3, 1.4e-3, keep=keep)
    except SolverError:
        assume(False)
    period = window.average_period_s
    times = np.linspace(1e-3 + period, 1.4e-3 - period, 7)

    def mean(name: str) -> np.ndarray:
        return window.cycle_average(name).at(times)

    # Current: what leaves each named node into boxes and devices adds up to nothing.
    sums: dict[str, np.ndarray] = {}
    sizes: dict[str, float] = {}

    def leaves(node: str, current: np.ndarray) -> None:
        sums[node] = sums.get(node, np.zeros_like(times)) + current
        sizes[node] = max(sizes.get(node, 0.0), float(np.max(np.abs(current))))

    for n, name in names.items():
        if branches[n].device is None:
            leaves(branches[n].left, mean(f"{name}.i"))
            leaves(branches[n].right, -mean(f"{name}.i"))
    for device, ts in terminals.items():
        for terminal, node in ts.items():
            leaves(node, mean(f"{device}.{terminal}.i"))
    checked = 0
    for node, total in sums.items():
        whole = all(n in names or b.device is not None for n, b in branches.items() if node in (b.left, b.right))
        if whole:
            assert np.max(np.abs(total)) <= 1e-6 * max(sizes[node], 1.0), node
            checked += 1
    assert checked >= 3
    # Voltage: around every loop of boxes, and against the nodes' own potentials.
    graph = nx.MultiGraph()
    for n, name in names.items():
        if branches[n].device is None:
            graph.add_edge(branches[n].left, branches[n].right, key=n, name=name)
    volts = {n: mean(f"{name}.v") for n, name in names.items()}
    for component in nx.connected_components(graph):
        part = graph.subgraph(component)
        tree = nx.minimum_spanning_edges(nx.Graph(part), data=False)
        forest = nx.Graph(list(tree))
        root = next(iter(component))
        potential = {root: np.zeros_like(times)}
        for a, b in nx.bfs_edges(forest, root) if forest.number_of_nodes() else []:
            n = next(iter(part.get_edge_data(a, b)))
            potential[b] = potential[a] - volts[n] * (1.0 if branches[n].left == a else -1.0)
        for a, b, n in part.edges(keys=True):
            drop = potential[branches[n].left] - potential[branches[n].right]
            assert np.max(np.abs(drop - volts[n])) <= 1e-6 * max(1.0, float(np.max(np.abs(volts[n])))), (a, b, n)
