"""Dependent states to index 1: their charges are folded into the rows they act on; where their rate is read, the chain rule gives it.

d/dt q_i(x) + f_i + c*d/dt q_dep(x) = 0 with constant c is d/dt (q_i + c q_dep) + f_i = 0: a capacitor that closes a loop of capacitors
and sources, an inductor in series with others. Where d/dt q_dep itself is wanted (the current of such a capacitor), it is an algebraic
unknown: the sum of dq_dep/dx_k times the rates x_k', and those follow from the rows of their states.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from polewise.equations import messages
from polewise.equations.definitions import DependentSketch, RowSketch
from polewise.equations.reduce import Reduction, UnforeseenLoop
from polewise.errors import NetlistError
from polewise.expression.derivative import Differentiator
from polewise.expression.graph import ExpressionGraph, Node
from polewise.grammar import units

# Natural sizes of what only follows from derivatives: rounding in a voltage of 1e-8 V is 1e-5 A/s in a choke of 1 mH, and no iteration gets
# below that. A rate counts in changes of its state within a microsecond.
RATE_SCALE = 1e6
DERIVED_SCALE = 100.0


class DerivedRates:
    """Works on rows whose expressions are already reduced to unknowns, parameters, time and derivative symbols."""

    def __init__(self, graph: ExpressionGraph, reduction: Reduction, dependents: Mapping[Node, DependentSketch], rows: list[RowSketch]) -> None:
        self.graph = graph
        self.reduction = reduction
        self.dependents = dependents
        self.rows = rows
        self.time = graph.symbol("time", "")
        self.charge_of = dict(zip(dependents, reduction.resolve([d.charge for d in dependents.values()]), strict=True))
        self.leaf_of: dict[Node, Node] = {}  # derivative symbol → unknown
        self.rate_of: dict[Node, Node] = {}  # state's symbol → unknown for its rate
        self.row_of: dict[Node, RowSketch] = {}
        self.added: list[RowSketch] = []

    def fold(self) -> None:
        """Reduce every row and move derivatives with constant factors into the charges."""
        g = self.graph
        residuals = self.reduction.resolve([r.residual for r in self.rows])
        charges = iter(self.reduction.resolve([r.charge for r in self.rows if r.charge is not None]))
        derivative = Differentiator(g, list(self.dependents))
        for row, residual in zip(self.rows, residuals, strict=True):
            row.residual = residual
            if row.charge is None:
                continue
            row.charge = next(charges)
            self.row_of[row.symbol] = row
            if not self.dependents or not self._derivatives_under([residual]):
                continue
            gradient = derivative.gradients([residual])[0]
            if all(g.is_constant(c) for c in gradient.values()):
                for symbol, factor in gradient.items():
                    row.charge = g.add(row.charge, g.multiply(factor, self.charge_of[symbol]))
                zero = g.constant(0.0)
                row.residual = g.substitute([residual], dict.fromkeys(gradient, zero))[0]

    def require(self, expressions: Sequence[Node]) -> None:
        """Make unknowns of the derivatives that reduced expressions and algebraic rows still read."""
        pending = self._derivatives_under([*expressions, *(r.residual for r in self.rows)])
        while pending:
            symbol = pending.pop()
            if symbol not in self.leaf_of:
                pending |= self._derivatives_under(self._chain_row(symbol))

    def finish(self) -> list[RowSketch]:
        """All rows, derivative symbols replaced by their unknowns."""
        rows = [*self.rows, *self.added]
        if self.leaf_of:
            for row, residual in zip(rows, self.graph.substitute([r.residual for r in rows], self.leaf_of), strict=True):
                row.residual = residual
        return rows

    def replace(self, expressions: Sequence[Node]) -> list[Node]:
        """Reduced expressions with derivative symbols replaced.

        Raises:
            UnforeseenLoop: a derivative that was not required before the system was finished.
        """
        if not self.dependents:
            return list(expressions)
        missing = self._derivatives_under(expressions) - self.leaf_of.keys()
        if missing:
            raise UnforeseenLoop(self.graph.symbols[min(missing)])
        return self.graph.substitute(expressions, self.leaf_of) if self.leaf_of else list(expressions)

    def _derivatives_under(self, expressions: Sequence[Node]) -> set[Node]:
        if not self.dependents:
            return set()
        return {s for s in self.graph.symbols_under(expressions) if s in self.dependents}

    def _chain_row(self, symbol: Node) -> list[Node]:
        """Add the row of one derivative; returns residuals that may read further ones."""
        g, dependent = self.graph, self.dependents[symbol]
        charge = self.charge_of[symbol]
        leaf = g.symbol("x", f"{dependent.name}.derived")
        self.leaf_of[symbol] = leaf
        own_row = RowSketch(f"{dependent.name}.derived", leaf, None, leaf, dependent.dimension, dependent.owner, dependent.span, scale=DERIVED_SCALE)
        algebraic = [s for s in self._unknowns_under(charge) if s not in self.row_of]
        if algebraic:
            # The charge reads an unknown without a rate of its own: then this row is what gives it one (`left = right` with d/dt in it).
            if self._has_own_rate(charge, algebraic):
                own_row.charge = charge
                own_row.residual = g.negate(leaf)
                self.added.append(own_row)
                return []
            raise NetlistError([messages.derivative_of_algebraic(dependent.name, g.symbols[algebraic[0]][1], dependent.span)])
        before = len(self.added)
        own_row.residual = g.subtract(leaf, self._rate_of_expression(charge))
        self.added.append(own_row)
        return [r.residual for r in self.added[before:]]

    def _has_own_rate(self, charge: Node, algebraic: Sequence[Node]) -> bool:
        """Whether an algebraic unknown under the charge is free to become its state: no algebraic row determines it without derivatives."""
        return any(r.symbol in algebraic and r.charge is None and bool(self._derivatives_under([r.residual])) for r in self.rows)

    def _unknowns_under(self, expression: Node) -> list[Node]:
        return [s for s in self.graph.symbols_under([expression]) if self.graph.symbols[s][0] == "x"]

    def _rate_of_expression(self, expression: Node) -> Node:
        """d/dt of an expression of states and time by the chain rule."""
        g = self.graph
        unknowns = self._unknowns_under(expression)
        gradient = Differentiator(g, [*unknowns, self.time]).gradients([expression])[0]
        terms = [gradient.get(self.time, g.constant(0.0))]
        terms += [g.multiply(gradient[s], self._rate(s)) for s in unknowns if s in gradient]
        return g.sum(terms)

    def _rate(self, state: Node) -> Node:
        known = self.rate_of.get(state)
        if known is not None:
            return known
        g = self.graph
        row = self.row_of.get(state)
        name = g.symbols[state][1]
        if row is None:
            raise NetlistError([messages.derivative_of_algebraic(name, name, self.rows[0].span)])
        leaf = g.symbol("x", f"{name}.rate")
        self.rate_of[state] = leaf
        assert row.charge is not None
        residual = g.add(self._rate_of_expression(row.charge), row.residual)
        self.added.append(
            RowSketch(f"{name}.rate", leaf, None, residual, row.dimension / units.TIME, row.owner, row.span, scale=RATE_SCALE * row.scale)
        )
        return leaf
