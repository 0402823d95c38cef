"""The postfix words that bring memory — filtered by, sampled at, delayed by, averaged over — as states, samplers, delays and averages."""

from __future__ import annotations

from typing import TYPE_CHECKING

from polewise.circuit import dimensions, value_messages
from polewise.circuit.asking import constant, number, poisoned, positive_frequency, positive_time, report_varying
from polewise.circuit.dimensions import CONDITION, PLAIN, POISON, Quality, settled
from polewise.circuit.model import AverageDef, DelayDef, SamplerDef, StateDef
from polewise.circuit.rational import VARIABLE, OrderTooHigh, Rational, realise, realise_sampled
from polewise.circuit.scope import Env, Value
from polewise.expression.graph import Node
from polewise.grammar import syntax
from polewise.grammar.source import Span

if TYPE_CHECKING:
    from polewise.circuit.expansion import Expansion


def _refused(x: Expansion, span: Span, env: Env, words: str) -> bool:
    if env.memory is None:
        return False
    x.report.add(value_messages.memory_refused(span, words, env.memory))
    return True


# ---------------------------------------------------------------- sampled, delayed, averaged


def lower_sampled(x: Expansion, e: syntax.Sampled, env: Env) -> Value:
    """`x sampled at f`."""
    node, quality = x.lower(e.operand, env)
    rate = positive_frequency(x, e.rate, env, "`sampled at`")
    if _refused(x, e.span, env, "sampled at") or rate is None or quality is POISON:
        return poisoned(x)
    if x.graph.is_constant(node):
        return node, quality
    name = x.hidden_name(env, e)
    x.samplers[name] = SamplerDef(name, 1.0 / rate, ((name, node),), (quality.dimension,), env.scope.path, e.span)
    return x.graph.symbol("sampled", name), quality


def lower_delayed(x: Expansion, e: syntax.Delayed, env: Env) -> Value:
    """`x delayed by T`."""
    node, quality = number(x, e.operand, env, "`delayed by`")
    delay = positive_time(x, e.time, env, "`delayed by`", zero=True)
    if _refused(x, e.span, env, "delayed by") or delay is None or quality is POISON:
        return poisoned(x)
    if delay == 0.0 or x.graph.is_constant(node):
        return node, quality
    name = x.hidden_name(env, e)
    x.delays[name] = DelayDef(name, node, delay, quality.dimension, env.scope.path, e.span)
    return x.graph.symbol("delayed", name), quality


def lower_averaged(x: Expansion, e: syntax.Averaged, env: Env) -> Value:
    """`x averaged over T`."""
    node, quality = number(x, e.operand, env, "`averaged over`")
    window = positive_time(x, e.time, env, "`averaged over`", zero=False)
    if _refused(x, e.span, env, "averaged over") or window is None or quality is POISON:
        return poisoned(x)
    if x.graph.is_constant(node):
        return node, quality
    name = x.hidden_name(env, e)
    x.averages[name] = AverageDef(name, node, window, quality.dimension, env.scope.path, e.span)
    return x.graph.symbol("averaged", name), quality


# ---------------------------------------------------------------- filtered by


def lower_filtered(x: Expansion, e: syntax.Filtered, env: Env) -> Value:
    """`x filtered by H(s)` or `x filtered by H(z) in z at f`."""
    node, quality = number(x, e.operand, env, "`filtered by`")
    letter = "s" if e.rate is None else "z"
    rate = None if e.rate is None else positive_frequency(x, e.rate, env, "`in z at`")
    try:
        got = _rational(x, e.by, env, letter)
    except OrderTooHigh:
        x.report.add(value_messages.filter_order(e.by.span))
        return poisoned(x)
    if got is None or _refused(x, e.span, env, "filtered by") or (e.rate is not None and rate is None) or quality is POISON:
        return poisoned(x)
    h, gain = got
    result = quality.times(gain) or POISON
    if h.is_constant:
        return x.graph.multiply(x.graph.constant(h.above[0] / h.below[0]), node), result
    if len(h.above) > len(h.below):
        x.report.add(value_messages.improper_filter(e.by.span, letter))
        return poisoned(x)
    if rate is None:
        return _continuous(x, e, env, h, node, result), result
    return _clocked(x, e, env, h, node, result, 1.0 / rate), result


def _continuous(x: Expansion, e: syntax.Filtered, env: Env, h: Rational, u: Node, quality: Quality) -> Node:
    g = x.graph
    form = realise(h)
    base = x.hidden_name(env, e)
    names = [base if len(form.drive) == 1 else f"{base}.{k}" for k in range(1, len(form.drive) + 1)]
    states = [g.symbol("state", name) for name in names]
    for k, name in enumerate(names):
        terms = [g.multiply(g.constant(-form.damping[k]), states[0]), g.multiply(g.constant(form.drive[k]), u)]
        if k + 1 < len(states):
            terms.append(states[k + 1])
        rate = g.multiply(g.constant(form.pace), g.sum(terms))
        x.states[name] = StateDef(name, rate, None, None, None, False, quality.dimension, env.scope.path, e.span)
    return g.add(states[0], g.multiply(g.constant(form.direct), u))


def _clocked(x: Expansion, e: syntax.Filtered, env: Env, h: Rational, u: Node, quality: Quality, period_s: float) -> Node:
    g = x.graph
    form = realise_sampled(h)
    assert form is not None
    name = x.hidden_name(env, e)
    order = len(form.a) - 1
    held = [g.symbol("sampled", f"{name}.{k}") for k in range(1, order + 1)]
    y = g.multiply(g.constant(form.b[0]), u)
    if held:
        y = g.add(y, held[0])
    later: list[tuple[str, Node]] = []
    for k in range(1, order + 1):
        terms = [g.multiply(g.constant(form.b[k]), u), g.multiply(g.constant(-form.a[k]), y)]
        if k < order:
            terms.append(held[k])
        later.append((f"{name}.{k}", g.sum(terms)))
    if form.b[0] == 0.0 and held:
        # The output needs no input of the same instant: it updates first, so that a loop may close through it, and the memory after it.
        _sampler(x, e, env, name, period_s, [(name, y)], quality)
        _sampler(x, e, env, f"{name}.memory", period_s, later, quality)
        x.reads_old[name] = f"{name}.memory"
    else:
        _sampler(x, e, env, name, period_s, [(name, y), *later], quality)
    return g.symbol("sampled", name)


def _sampler(x: Expansion, e: syntax.Filtered, env: Env, name: str, period_s: float, updates: list[tuple[str, Node]], quality: Quality) -> None:
    x.samplers[name] = SamplerDef(name, period_s, tuple(updates), (quality.dimension,) * len(updates), env.scope.path, e.span)


# ---------------------------------------------------------------- the rational function


def _rational(x: Expansion, e: syntax.Expression, env: Env, letter: str) -> tuple[Rational, Quality] | None:
    """An expression in s or z with constant coefficients; s counts as rad/s, z as a plain number. None where it is wrong."""
    if isinstance(e, syntax.Reference) and len(e.parts) == 1 and e.parts[0].plain == letter:
        return VARIABLE, (dimensions.ANGULAR_RATE if letter == "s" else PLAIN)
    if isinstance(e, syntax.Unary) and e.operator in "+-":
        got = _rational(x, e.operand, env, letter)
        if got is None or e.operator == "+":
            return got
        return Rational.of(-1.0).times(got[0]), got[1]
    if isinstance(e, syntax.Binary) and e.operator in ("+", "-", "*", "/", "^") and _mentions(e, letter):
        return _rational_binary(x, e, env, letter)
    if _mentions(e, letter):
        x.report.add(value_messages.not_rational(e.span, letter))
        return None
    return _coefficient(x, e, env)


def _coefficient(x: Expansion, e: syntax.Expression, env: Env) -> tuple[Rational, Quality] | None:
    got = constant(x, e, env, "a filter's coefficient")
    if got is None:
        return None
    node, quality = got
    if quality is CONDITION:
        x.report.add(value_messages.condition_as_number(e.span, "a filter"))
        return None
    value = x.finite(node)
    if value is None:
        report_varying(x, node, e.span, "a filter's coefficient")
        return None
    return Rational.of(value), quality


def _rational_binary(x: Expansion, e: syntax.Binary, env: Env, letter: str) -> tuple[Rational, Quality] | None:
    left = _rational(x, e.left, env, letter)
    if e.operator == "^":
        return None if left is None else _rational_power(x, e, env, left)
    right = _rational(x, e.right, env, letter)
    if left is None or right is None:
        return None
    (a, qa), (b, qb) = left, right
    if e.operator in "+-":
        joined = qa.plus(qb)
        if joined is None:
            if dimensions.differ_by_turn(qa, qb):
                x.report.add(value_messages.turn_missing(e.span, e.left.span, qa, e.right.span, qb))
            else:
                x.report.add(value_messages.unit_mismatch(e.span, e.operator, e.left.span, qa, e.right.span, qb))
            return None
        return a.plus(b, 1.0 if e.operator == "+" else -1.0), joined
    if e.operator == "*":
        return a.times(b), qa.times(qb) or POISON
    if b.is_zero:
        x.report.add(value_messages.division_by_zero(e.right.span))
        return None
    return a.over(b), qa.over(qb) or POISON


def _rational_power(x: Expansion, e: syntax.Binary, env: Env, base: tuple[Rational, Quality]) -> tuple[Rational, Quality] | None:
    got = constant(x, e.right, env, "an exponent in a filter")
    if got is None:
        return None
    exponent = x.finite(got[0])
    if exponent is None or exponent != int(exponent) or not got[1].dimension.is_none or (base[0].is_zero and exponent < 0):
        x.report.add(value_messages.filter_exponent(e.right.span))
        return None
    if abs(exponent) > 100:
        raise OrderTooHigh
    raised = dimensions.raised(settled(base[1]), exponent)
    if raised is None:
        raise OrderTooHigh
    return base[0].raised(int(exponent)), raised


def _mentions(e: syntax.Expression, letter: str) -> bool:
    """Whether the filter's variable is in an expression."""
    if isinstance(e, syntax.Reference):
        return len(e.parts) == 1 and e.parts[0].plain == letter
    if isinstance(e, syntax.Unary):
        return _mentions(e.operand, letter)
    if isinstance(e, syntax.Binary):
        return _mentions(e.left, letter) or _mentions(e.right, letter)
    if isinstance(e, syntax.Call):
        return any(_mentions(a, letter) for a in e.arguments)
    if isinstance(e, syntax.Conditional):
        return _mentions(e.value, letter) or _mentions(e.condition, letter) or _mentions(e.otherwise, letter)
    return False
