"""Definitions → few unknowns: loops of definitions are torn, the rest is substituted, dependent states are folded into index 1.

An algebraic loop of definitions (a resistor mesh, a controlled source that reads what it feeds) keeps one of its symbols as an unknown.
Everything else becomes an expression of unknowns, parameters and time. Symbols that gather many unknowns and are read more than once
stay unknowns too, or the Jacobian would fill up.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field

import networkx as nx

from polewise.expression.graph import SYMBOL, ExpressionGraph, Node

# A symbol that gathers more unknowns than this and is read at least twice stays an unknown.
GATHERED_UNKNOWNS_MAX = 12

# Which symbol of a loop stays an unknown: currents and voltages have a natural size, signals may be anything, conditions cannot.
TEAR_PREFERENCE = {"v": 0, "i": 0, "potential": 0, "reading": 1, "signal": 1}


@dataclass(slots=True)
class Reduction:
    """Resolves circuit-level expressions; grows as more of them are asked for.

    Args:
        definitions: circuit-level symbol → expression of circuit-level symbols, unknowns, parameters, time.
        conditions: symbols that are true or false: they are never torn.
    """

    graph: ExpressionGraph
    definitions: Mapping[Node, Node]
    conditions: frozenset[Node] = frozenset()
    image: dict[Node, Node] = field(default_factory=dict)
    torn: dict[Node, Node] = field(default_factory=dict)  # symbol → its ("x", …) leaf
    sealed: bool = False
    _support: dict[Node, frozenset[Node] | None] = field(default_factory=dict)
    _symbols: dict[Node, list[Node]] = field(default_factory=dict)

    def resolve(self, expressions: Sequence[Node]) -> list[Node]:
        """Expressions of unknowns, parameters and time.

        Raises:
            LoopOfConditions: a loop of definitions runs through conditions only.
            UnforeseenLoop: after sealing, an expression needs an unknown that the system does not have.
        """
        fresh = self._discover(expressions)
        if fresh:
            order = self._tear(fresh)
            self._substitute(order, expressions)
        return self._rebuild(expressions)

    def _under(self, expression: Node) -> list[Node]:
        found = self._symbols.get(expression)
        if found is None:
            found = self.graph.symbols_under([expression])
            self._symbols[expression] = found
        return found

    def _discover(self, expressions: Iterable[Node]) -> dict[Node, list[Node]]:
        """Symbols to be resolved, each with the symbols its definition reads (defined ones only)."""
        definitions, image = self.definitions, self.image
        needs: dict[Node, list[Node]] = {}
        stack = [s for e in expressions for s in self._under(e) if s in definitions and s not in image]
        while stack:
            symbol = stack.pop()
            if symbol in needs:
                continue
            reads = [s for s in self._under(definitions[symbol]) if s in definitions and s not in image]
            needs[symbol] = reads
            stack.extend(s for s in reads if s not in needs)
        return needs

    def _tear(self, needs: dict[Node, list[Node]]) -> list[Node]:
        """Choose the symbols that stay unknowns; an order in which every definition only reads earlier ones or torn ones."""
        graph = nx.DiGraph()
        graph.add_nodes_from(needs)
        graph.add_edges_from((symbol, read) for symbol, reads in needs.items() for read in reads)
        pending = [c for c in nx.strongly_connected_components(graph) if len(c) > 1 or any(graph.has_edge(s, s) for s in c)]
        while pending:
            part = graph.subgraph(pending.pop()).copy()
            symbol = self._choose(part)
            if self.sealed:
                raise UnforeseenLoop(self.graph.symbols[symbol])
            kind, name = self.graph.symbols[symbol]
            self.torn[symbol] = self.graph.symbol("x", name if kind == "signal" else f"{name}.{kind}")
            graph.remove_edges_from(list(graph.in_edges(symbol)))
            part.remove_node(symbol)
            pending.extend(c for c in nx.strongly_connected_components(part) if len(c) > 1 or any(part.has_edge(s, s) for s in c))
        return list(reversed(list(nx.topological_sort(graph))))

    def _choose(self, part: nx.DiGraph) -> Node:
        candidates = [s for s in part if s not in self.conditions]
        if not candidates:
            raise LoopOfConditions(self.graph.symbols[min(part)])

        def rank(symbol: Node) -> tuple[int, int, int]:
            kind = self.graph.symbols[symbol][0]
            return TEAR_PREFERENCE.get(kind, 9), -part.in_degree(symbol) * part.out_degree(symbol), symbol

        chosen: Node = min(candidates, key=rank)
        return chosen

    def _substitute(self, order: Sequence[Node], expressions: Sequence[Node]) -> None:
        readers: dict[Node, int] = {}
        for expression in [*(self.definitions[s] for s in order), *expressions]:
            for symbol in self._under(expression):
                readers[symbol] = readers.get(symbol, 0) + 1
        for symbol in order:
            leaf = self.torn.get(symbol)
            if leaf is not None:  # readers of a torn symbol may come before it
                self.image[symbol] = leaf
                self._support[symbol] = frozenset((leaf,))
        for symbol in order:
            leaf = self.torn.get(symbol)
            support = self._gather(self.definitions[symbol])
            if leaf is None and support is None and readers.get(symbol, 0) > 1 and not self.sealed and symbol not in self.conditions:
                kind, name = self.graph.symbols[symbol]
                leaf = self.graph.symbol("x", name if kind == "signal" else f"{name}.{kind}")
                self.torn[symbol] = leaf
            if leaf is not None:
                self.image[symbol] = leaf
                self._support[symbol] = frozenset((leaf,))
            else:
                self.image[symbol] = self._rebuild([self.definitions[symbol]])[0]
                self._support[symbol] = support

    def _gather(self, expression: Node) -> frozenset[Node] | None:
        """Unknowns under an expression; None where they are too many. Derivatives of dependent states count as none, and block gathering:
        a symbol with one under it must not become an unknown of its own (it belongs into a charge)."""
        gathered: set[Node] = set()
        too_many = False
        for symbol in self._under(expression):
            kind = self.graph.symbols[symbol][0]
            if kind == "derivative":
                return _DERIVATIVE
            if kind == "x":
                gathered.add(symbol)
            elif symbol in self._support:
                support = self._support[symbol]
                if support is _DERIVATIVE:
                    return _DERIVATIVE
                if support is None:
                    too_many = True
                else:
                    gathered |= support
        return None if too_many or len(gathered) > GATHERED_UNKNOWNS_MAX else frozenset(gathered)

    def _rebuild(self, expressions: Sequence[Node]) -> list[Node]:
        graph, image = self.graph, self.image
        for node in graph.reachable([e for e in expressions if e not in image]):
            if node in image:
                continue
            image[node] = node if graph.operation[node] < 0 else graph.rebuild(node, image)
        return [image[e] for e in expressions]


# Marks a support with a derivative of a dependent state in it. Compared by identity.
_DERIVATIVE: frozenset[Node] = frozenset((SYMBOL,))


class LoopOfConditions(Exception):
    """A loop of definitions through conditions only; args[0] is a (kind, name)."""


class UnforeseenLoop(Exception):
    """A sealed system was asked for a quantity that needs a further unknown; args[0] is a (kind, name)."""
