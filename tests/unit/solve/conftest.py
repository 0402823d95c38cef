"""A small builder of EquationSystems by hand, so that the solver is tested without text, devices or assembly."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field

import pytest

from polewise.equations.system import Clock, Conditional, DelayLine, EquationSystem, Flag, Output, Parameter, Target, Timed, Unknown
from polewise.expression.graph import ExpressionGraph, Node
from polewise.grammar.source import SourceText, Span, no_span
from polewise.grammar.units import NONE


@dataclass
class Names:
    """Resolver of circuit-level symbols that the test states one by one."""

    graph: ExpressionGraph
    known: dict[Node, Node] = field(default_factory=dict)

    def resolve(self, expressions: Sequence[Node]) -> list[Node]:
        for leaf in self.graph.symbols_under(expressions):
            kind, _ = self.graph.symbols[leaf]
            if kind not in ("x", "p", "time") and leaf not in self.known:
                raise KeyError(leaf)
        return self.graph.substitute(expressions, self.known)


class Builder:
    """Rows of d/dt q + f = 0 written one by one: `x("v")` names an unknown, `state`/`algebraic` give it its row."""

    def __init__(self) -> None:
        self.g = ExpressionGraph()
        self.time = self.g.symbol("time", "")
        self.names = Names(self.g)
        self.unknowns: list[Unknown] = []
        self.parameters: list[Parameter] = []
        self.delays: list[DelayLine] = []
        self.clocks: list[Clock] = []
        self.timed: list[Timed] = []
        self.conditionals: list[Conditional] = []
        self.outputs: list[Output] = []
        self.flags: list[Flag] = []
        self.text = ""
        self.power_scale = self.parameter("power_scale", 1.0, kind="power_scale")
        self.source_scale = self.parameter("source_scale", 1.0, kind="source_scale")

    # expressions
    def x(self, name: str) -> Node:
        return self.g.symbol("x", name)

    def c(self, value: float) -> Node:
        return self.g.constant(value)

    def n(self, value: Node | float) -> Node:
        return value if isinstance(value, int) else self.g.constant(value)

    def mul(self, *factors: Node | float) -> Node:
        result = self.n(factors[0])
        for factor in factors[1:]:
            result = self.g.multiply(result, self.n(factor))
        return result

    def add(self, *terms: Node | float) -> Node:
        result = self.n(terms[0])
        for term in terms[1:]:
            result = self.g.add(result, self.n(term))
        return result

    def sub(self, a: Node | float, b: Node | float) -> Node:
        return self.g.subtract(self.n(a), self.n(b))

    def div(self, a: Node | float, b: Node | float) -> Node:
        return self.g.divide(self.n(a), self.n(b))

    def above(self, a: Node | float, b: Node | float) -> Node:
        return self.g.greater(self.n(a), self.n(b))

    # parts
    def span(self, text: str) -> Span:
        return Span(SourceText("test.pole", text), 0, len(text))

    def state(
        self,
        name: str,
        rate: Node | float,
        *,
        initial: float = 0.0,
        scale: float = 1.0,
        charge: Node | None = None,
        rest: Node | None = None,
        held: bool = False,
        integrator: bool = False,
        bounds: tuple[float, float] | None = None,
    ) -> Node:
        """d/dt charge = rate (charge: the unknown itself)."""
        g, x = self.g, self.x(name)
        rate = self.n(rate)
        low_high = None
        residual = g.negate(rate)
        rest = rest if rest is not None else residual
        if held:
            rest = self.sub(x, initial)
        if bounds is not None:
            low, high = self.c(bounds[0]), self.c(bounds[1])
            low_high = (low, high)
            rest = g.subtract(x, g.limit(g.add(x, rate), low, high))
            blocked = g.either(
                g.both(g.invert(g.greater(high, x)), g.positive(rate)), g.both(g.invert(g.greater(x, low)), g.positive(g.negate(rate)))
            )
            residual = g.mux(blocked, self.c(0.0), g.negate(rate))
        self.unknowns.append(
            Unknown(
                name,
                x,
                charge if charge is not None else x,
                residual,
                rest,
                initial,
                True,
                scale,
                NONE,
                held,
                integrator,
                low_high,
                "",
                self.span(name),
            )
        )
        return x

    def algebraic(self, name: str, residual: Node, *, guess: float = 0.0, scale: float = 1.0) -> Node:
        x = self.x(name)
        self.unknowns.append(Unknown(name, x, None, residual, residual, guess, False, scale, NONE, False, False, None, "", self.span(name)))
        return x

    def parameter(self, name: str, initial: float | None, *, kind: str = "latch", rest: Node | None = None) -> Node:
        symbol = self.g.symbol("p", name)
        self.parameters.append(Parameter(name, symbol, kind, initial, rest, NONE, False, no_span()))  # type: ignore[arg-type]
        return symbol

    def index_p(self, name: str) -> int:
        return next(j for j, q in enumerate(self.parameters) if q.name == name)

    def index_x(self, name: str) -> int:
        return next(j for j, u in enumerate(self.unknowns) if u.name == name)

    def targets(self, actions: Mapping[str, Node | float], text: str) -> tuple[Target, ...]:
        made = []
        for name, value in actions.items():
            is_p = any(q.name == name for q in self.parameters)
            made.append(
                Target(
                    "parameter" if is_p else "unknown", self.index_p(name) if is_p else self.index_x(name), self.n(value), self.span(f"{text} {name}")
                )
            )
        return tuple(made)

    def at(self, time_s: float, **actions: Node | float) -> None:
        self.timed.append(Timed(time_s, self.targets(actions, f"at {time_s}"), self.span(f"at {time_s}")))

    def whenever(self, name: str, condition: Node, *, lasting: float = 0.0, crossing: bool = False, **actions: Node | float) -> None:
        self.conditionals.append(Conditional(name, condition, lasting, crossing, self.targets(actions, name), self.span(name), name))

    def clock(self, name: str, period_s: float, rank: int, **updates: Node | float) -> None:
        self.clocks.append(Clock(name, period_s, rank, tuple((self.index_p(k), self.n(v)) for k, v in updates.items())))

    def delayed(self, name: str, expression: Node, delay_s: float, *, slope: Node | None = None) -> Node:
        symbol = self.parameter(name, None, kind="delayed", rest=expression)
        self.delays.append(DelayLine(self.index_p(name), expression, delay_s, slope))
        return symbol

    def keep(self, name: str, expression: Node) -> None:
        self.outputs.append(Output(name, expression, NONE, False))

    def constant_power(self, name: str, v: Node, power: Node | float, v_min: float) -> Node:
        """Current of a constant power, fading below v_min (models.md), with its flag and its v and i known by name."""
        g = self.g
        p = self.mul(self.power_scale, power)
        ratio = self.div(v, v_min)
        faded = self.mul(self.div(p, v_min), self.sub(self.mul(2.0, ratio), self.mul(ratio, ratio, ratio)))
        high = self.above(v, v_min)
        current = g.mux(high, self.div(p, v), faded)
        self.flags.append(Flag("collapsed", name, g.invert(high), self.span(name)))
        self.names.known[g.symbol("v", name)] = v
        self.names.known[g.symbol("i", name)] = current
        return current

    def system(self) -> EquationSystem:
        return EquationSystem(
            graph=self.g,
            time=self.time,
            unknowns=tuple(self.unknowns),
            parameters=tuple(self.parameters),
            delays=tuple(self.delays),
            clocks=tuple(self.clocks),
            timed=tuple(self.timed),
            conditionals=tuple(self.conditionals),
            outputs=tuple(self.outputs),
            flags=tuple(self.flags),
            power_scale=0,
            source_scale=1,
            notes=(),
            resolver=self.names,
        )


@pytest.fixture
def build() -> Callable[[], Builder]:
    """A fresh builder."""
    return Builder
