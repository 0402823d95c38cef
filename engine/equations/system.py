"""The equations of a circuit: d/dt q(x) + f(x, t, p) = 0 of index 1 as expressions, with everything a solver must know about each part.

Leaves of all expressions in an EquationSystem are the symbols ("x", NAME) of unknowns, ("time", "") and ("p", NAME) of parameters.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Literal, Protocol

from polewise.expression.graph import ExpressionGraph, Node
from polewise.grammar.source import Span
from polewise.grammar.units import Dimension


@dataclass(frozen=True, slots=True)
class Unknown:
    """One unknown x_i with the row i that belongs to it.

    Args:
        name: in the netlist's spelling, e.g. "berth1.choke.l.i", "bus.v", "berth1.integ".
        symbol: its leaf.
        charge: q_i, or None for an algebraic row.
        residual: f_i.
        rest: what must vanish at an operating point (already written for bounds: x - limit(x + s*rate, low, high), and for held
            states: x - start).
        initial: start value (SI) for a cold start of a state; a guess for an algebraic unknown.
        fixed_start: whether `initial` was stated (or is the natural zero of a state), False for a mere guess.
        scale: natural size of the unknown, SI, > 0.
        held: keeps its start value in a settled start.
        integrator: its rate does not depend on itself (it can only rest where its input is zero); for messages.
        owner: assembly path; span: where it comes from in the text.
    """

    name: str
    symbol: Node
    charge: Node | None
    residual: Node
    rest: Node
    initial: float
    fixed_start: bool
    scale: float
    dimension: Dimension
    held: bool
    integrator: bool
    bounds: tuple[Node, Node] | None
    owner: str
    span: Span

    @property
    def is_state(self) -> bool:
        """Whether its row has a charge."""
        return self.charge is not None


ParameterKind = Literal["latch", "sampled", "delayed", "power_scale", "source_scale"]


@dataclass(frozen=True, slots=True)
class Parameter:
    """A value that the solver holds: changed by events, clocks or history, constant in between.

    initial: at a cold start (delayed and sampled values: None, they start from their expressions).
    rest: its value at an operating point as an expression of x, t, p; None: it keeps `initial` (a plain latch, the scales at 1).
    """

    name: str
    symbol: Node
    kind: ParameterKind
    initial: float | None
    rest: Node | None
    dimension: Dimension
    is_condition: bool
    span: Span | None


@dataclass(frozen=True, slots=True)
class DelayLine:
    """Parameter `parameter` is `expression` delay_s ago. Before the start: value + slope*(t - t_start), slope as an expression at the start
    (None: zero)."""

    parameter: int
    expression: Node
    delay_s: float
    start_slope: Node | None


@dataclass(frozen=True, slots=True)
class Clock:
    """At offset_s + k*period_s (k = 0, 1, …): parameter[j] becomes updates[j]. rank: order at one instant (kernels.program)."""

    name: str
    period_s: float
    rank: int
    updates: tuple[tuple[int, Node], ...]
    offset_s: float = 0.0


@dataclass(frozen=True, slots=True)
class Target:
    """What an event sets: a parameter (latch) or an unknown that is a state (its charge follows)."""

    kind: Literal["parameter", "unknown"]
    index: int
    value: Node
    span: Span


@dataclass(frozen=True, slots=True)
class Timed:
    """Actions at one time from the study's start."""

    time_s: float
    targets: tuple[Target, ...]
    span: Span


@dataclass(frozen=True, slots=True)
class Conditional:
    """Actions on becoming true; see circuit.model.ConditionEvent."""

    name: str
    condition: Node
    lasting_s: float
    crossing: bool
    targets: tuple[Target, ...]
    span: Span
    text: str


@dataclass(frozen=True, slots=True)
class Output:
    """A recorded quantity."""

    name: str
    expression: Node
    dimension: Dimension
    is_condition: bool


@dataclass(frozen=True, slots=True)
class Flag:
    """A condition worth a word when true: "duty at its limit", "collapsed"; kind is a stable word, subject the device's path."""

    kind: str
    subject: str
    condition: Node
    span: Span


@dataclass(frozen=True, slots=True)
class EquationSystem:
    """All of it.

    notes: what the reduction did, for `check`. moving: boxes whose own value follows `time`, with their places: they never rest.
    """

    graph: ExpressionGraph
    time: Node
    unknowns: tuple[Unknown, ...]
    parameters: tuple[Parameter, ...]
    delays: tuple[DelayLine, ...]
    clocks: tuple[Clock, ...]
    timed: tuple[Timed, ...]
    conditionals: tuple[Conditional, ...]
    outputs: tuple[Output, ...]
    flags: tuple[Flag, ...]
    power_scale: int  # parameter index
    source_scale: int
    notes: tuple[str, ...]
    resolver: Resolver
    moving: tuple[tuple[str, Span], ...] = ()

    def resolve(self, expressions: Sequence[Node]) -> list[Node]:
        """Circuit-level expressions (circuit.model's symbols) as expressions of x, t, p."""
        return self.resolver.resolve(expressions)


class Resolver(Protocol):
    """Turns circuit-level symbols into expressions of x, t, p."""

    def resolve(self, expressions: Sequence[Node]) -> list[Node]:
        """See EquationSystem.resolve."""
        ...


Scales = Mapping[Dimension, float]
