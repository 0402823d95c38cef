"""What a place asks of an expression — a number, a condition, a certain unit, a constant — and the reason, which a message repeats."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from polewise.circuit import dimensions, value_messages
from polewise.circuit.dimensions import CONDITION, POISON, ZERO, Quality
from polewise.circuit.scope import Env, Value
from polewise.expression.graph import Node
from polewise.grammar import syntax
from polewise.grammar.source import Span

if TYPE_CHECKING:
    from polewise.circuit.expansion import Expansion

# Value of what is already reported.
POISON_NODE = -1


@dataclass(frozen=True, slots=True)
class Asked:
    """What is asked for and why.

    quality: of the value. reason: completes "… asks for a current (A)": "`i =`", "`initially`". span: where the reason stands, if elsewhere.
    """

    quality: Quality
    reason: str
    span: Span | None = None


def poisoned(x: Expansion) -> Value:
    """The value of something wrong."""
    return x.graph.constant(0.0), POISON


def number(x: Expansion, e: syntax.Expression, env: Env, asked_by: str) -> Value:
    """A value that must be a number; asked_by says who asks: "`-`", "`sqrt`"."""
    node, quality = x.lower(e, env)
    if quality is CONDITION:
        x.report.add(value_messages.condition_as_number(e.span, asked_by))
        return poisoned(x)
    return node, quality


def condition(x: Expansion, e: syntax.Expression, env: Env, asked_by: str) -> Node:
    """A value that must be true or false."""
    node, quality = x.lower(e, env)
    if quality.is_number and quality.sort != "unknown":
        x.report.add(value_messages.number_as_condition(e.span, quality, asked_by))
    return node


def fits(x: Expansion, quality: Quality, asked: Asked, span: Span) -> bool:
    """Whether a value may stand where `asked` is wanted; reports where not. A poisoned one fits: it is reported already."""
    wanted = asked.quality
    if quality is wanted or quality is POISON or wanted is POISON or quality.sort == "unknown" or wanted.sort == "unknown":
        return True
    if wanted is CONDITION:
        x.report.add(value_messages.number_as_condition(span, quality, asked.reason))
        return False
    if quality is CONDITION:
        x.report.add(value_messages.condition_as_number(span, asked.reason))
        return False
    if quality is ZERO:
        return True
    if quality.dimension == wanted.dimension:
        if dimensions.differ_by_turn(quality, wanted):
            x.report.add(value_messages.turn_expected(span, quality, wanted, asked.reason, asked.span))
            return False
        return True
    x.report.add(value_messages.unit_expected(span, quality, wanted, asked.reason, asked.span))
    return False


def wanted(x: Expansion, e: syntax.Expression, env: Env, asked: Asked) -> Node:
    """An expression that must have a quality; the node 0 where it is wrong."""
    node, quality = x.lower(e, env)
    if quality is asked.quality or fits(x, quality, asked, e.span):
        return node
    return x.graph.constant(0.0)


def constant(x: Expansion, e: syntax.Expression, env: Env, asked_by: str) -> tuple[Node, Quality] | None:
    """An expression that must not vary: a constant node and its quality, None where it is wrong."""
    node, quality = x.lower(e, env)
    if quality is POISON:
        return None
    if not x.graph.is_constant(node):
        report_varying(x, node, e.span, asked_by)
        return None
    return node, quality


def report_varying(x: Expansion, node: Node, span: Span, asked_by: str) -> None:
    """Say why a node is no constant: what in it varies, or that it is no finite number."""
    leaves = x.graph.symbols_under([node])
    if not leaves:
        x.report.add(value_messages.not_finite(span, asked_by))
        return
    kind, name = x.graph.symbols[leaves[0]]
    x.report.add(value_messages.varying_value(span, asked_by, "time" if kind == "time" else name))


def constant_number(x: Expansion, e: syntax.Expression, env: Env, asked: Asked) -> float | None:
    """A number that must not vary, with a certain unit, in SI."""
    got = constant(x, e, env, asked.reason)
    if got is None or not fits(x, got[1], asked, e.span):
        return None
    return x.graph.value_of(got[0])


def positive_time(x: Expansion, e: syntax.Expression, env: Env, reason: str, *, zero: bool) -> float | None:
    """A constant time above zero (or from zero on), s."""
    value = constant_number(x, e, env, Asked(dimensions.TIME, reason))
    if value is None:
        return None
    if value < 0.0 or (value == 0.0 and not zero):
        x.report.add(value_messages.time_not_positive(e.span, reason, value, zero))
        return None
    return value


def positive_frequency(x: Expansion, e: syntax.Expression, env: Env, reason: str) -> float | None:
    """A constant frequency above zero, Hz."""
    value = constant_number(x, e, env, Asked(dimensions.FREQUENCY, reason))
    if value is None:
        return None
    if value <= 0.0:
        x.report.add(value_messages.frequency_not_positive(e.span, reason, value))
        return None
    return value
