"""What the equations stage collects before it resolves anything: parameters, clocks, delays and rows in circuit-level symbols."""

from __future__ import annotations

from dataclasses import dataclass, field

from polewise.circuit.model import ConditionEvent
from polewise.equations.definitions import RowSketch
from polewise.equations.system import ParameterKind
from polewise.expression.graph import ExpressionGraph, Node
from polewise.grammar import units
from polewise.grammar.source import Span
from polewise.grammar.units import Dimension


@dataclass(slots=True)
class ParameterSketch:
    """A parameter, see system.Parameter."""

    name: str
    symbol: Node
    kind: ParameterKind
    initial: float | None
    rest: Node | None
    dimension: Dimension
    is_condition: bool
    span: Span | None


@dataclass(slots=True)
class ClockSketch:
    """A clock; `events` for `every`, else a sampler."""

    name: str
    period_s: float
    events: bool
    updates: list[tuple[str, Node]] = field(default_factory=list)  # parameter name → new value
    offset_s: float = 0.0


@dataclass(slots=True)
class DelaySketch:
    """Parameter `name` is `expression` delay_s ago; see system.DelayLine."""

    name: str
    expression: Node
    delay_s: float
    start_slope: Node | None


@dataclass(slots=True)
class SystemSketch:
    """The collection. `mean` replaces sampled blocks by their s-domain equivalents."""

    graph: ExpressionGraph
    mean: bool
    parameters: dict[str, ParameterSketch] = field(default_factory=dict)
    clocks: list[ClockSketch] = field(default_factory=list)
    delays: list[DelaySketch] = field(default_factory=list)
    rows: list[RowSketch] = field(default_factory=list)
    conditionals: list[ConditionEvent] = field(default_factory=list)
    definitions: dict[Node, Node] = field(default_factory=dict)

    def parameter(
        self,
        name: str,
        kind: ParameterKind,
        initial: float | None,
        rest: Node | None,
        dimension: Dimension,
        *,
        is_condition: bool = False,
        span: Span | None = None,
    ) -> Node:
        """Add a parameter; its leaf."""
        symbol = self.graph.symbol("p", name)
        self.parameters[name] = ParameterSketch(name, symbol, kind, initial, rest, dimension, is_condition, span)
        return symbol

    def held(self, name: str, value: Node, period_s: float, owner: str, span: Span, *, offset_s: float = 0.0) -> Node:
        """A value read at offset_s + k*period_s and held; its circuit-level symbol."""
        symbol = self.graph.symbol("sampled", name)
        if self.mean:
            self.mean_state(symbol, name, value, period_s, 0.0, units.NONE, owner, span)
        else:
            self.definitions[symbol] = self.parameter(name, "sampled", None, value, units.NONE, span=span)
            self.clocks.append(ClockSketch(name, period_s, False, [(name, value)], offset_s))
        return symbol

    def late(self, name: str, value: Node, delay_s: float, owner: str, span: Span) -> Node:
        """A value delayed; its circuit-level symbol."""
        symbol = self.graph.symbol("delayed", name)
        if self.mean:
            self.mean_state(symbol, name, value, 2.0 * delay_s, 0.0, units.NONE, owner, span)
        else:
            self.definitions[symbol] = self.parameter(name, "delayed", None, value, units.NONE, span=span)
            self.delays.append(DelaySketch(name, value, delay_s, None))
        return symbol

    def mean_state(
        self,
        symbol: Node,
        name: str,
        update: Node,
        period_s: float,
        initial: float,
        dimension: Dimension,
        owner: str,
        span: Span,
        is_output: bool | None = None,
    ) -> None:
        """The s-domain equivalent of a value renewed every period: it follows its update with a lag.

        A value that feeds back on itself or is only passed on to the next instant lags one period; one that the circuit sees lags the half
        period that a hold takes on average. First order: right in gain at rest and in delay at low frequency.
        """
        g = self.graph
        x = g.symbol("x", name)
        self.definitions[symbol] = x
        own = symbol in g.symbols_under([update])
        lag_s = period_s if own or is_output is False else 0.5 * period_s
        rate = g.divide(g.subtract(update, x), g.constant(lag_s))
        self.rows.append(RowSketch(name, x, x, g.negate(rate), dimension, owner, span, initial, True))
