"""Expressions to graph nodes, with the unit check in the same pass. Wrong parts are reported and go on as poison, so each cause is said once."""

from __future__ import annotations

from collections.abc import Callable
from typing import Final

from polewise.circuit import dimensions, name_messages, value_messages
from polewise.circuit.asking import condition, number, poisoned
from polewise.circuit.dimensions import CONDITION, PLAIN, POISON, POWER, ZERO, Quality
from polewise.circuit.expansion import Expansion
from polewise.circuit.functions import lower_call
from polewise.circuit.memory import lower_averaged, lower_delayed, lower_filtered, lower_sampled
from polewise.circuit.model import Domain, RateDef
from polewise.circuit.naming import name_of, read_along, report_unknown_name, whole_value
from polewise.circuit.scope import Env, Value
from polewise.circuit.things import ACROSS, READING_WORDS, THROUGH, GivenThing, Thing
from polewise.expression.graph import ExpressionGraph, Node
from polewise.grammar import syntax
from polewise.grammar.units import joined_symbols
from polewise.grammar.words import VALUE_NAMES

PI: Final = 3.141592653589793


def lower(x: Expansion, e: syntax.Expression, env: Env) -> Value:
    """The node and kind of an expression."""
    return _LOWER[type(e)](x, e, env)


# ---------------------------------------------------------------- leaves


def _number(x: Expansion, e: syntax.Number, env: Env) -> Value:
    got = x.numbers.get(id(e))
    if got is None:
        got = x.numbers[id(e)] = _number_once(x, e, env)
    return got


def _number_once(x: Expansion, e: syntax.Number, env: Env) -> Value:
    node = x.graph.constant(e.value)
    if e.unit is None:
        return node, (ZERO if e.number == 0.0 else PLAIN)
    for symbol in joined_symbols(e.unit):
        thing = env.scope.find(symbol)
        # A node called `m` is no factor; only names that have a value could have been meant.
        if symbol in env.frame or (env.parameters is not None and symbol in env.parameters) or (thing is not None and _could_multiply(thing)):
            x.report.add(value_messages.joined_name(e.span, e.unit.symbol, symbol, None if thing is None else thing.span))
            return node, POISON
    return node, dimensions.quality_of_unit(e.unit)


def _could_multiply(thing: Thing) -> bool:
    return thing.word in ("given", "input", "signal", "state", "unknown", "latch", "control block")


def _boolean(x: Expansion, e: syntax.Boolean, env: Env) -> Value:
    return x.graph.constant(1.0 if e.value else 0.0), CONDITION


def _reference(x: Expansion, e: syntax.Reference, env: Env) -> Value:
    parts = e.parts
    pieces = parts[0].pieces
    piece = pieces[0]
    name = piece if len(pieces) == 1 and type(piece) is str else name_of(x, parts[0], env)
    if name is None:
        return poisoned(x)
    if len(parts) > 1:
        return _dotted(x, e, env, name)
    number = env.frame.get(name)
    if number is not None:
        return x.graph.constant(float(number)), (PLAIN if number else ZERO)
    if name in VALUE_NAMES:
        return _reserved(x, e, env, name)
    if env.parameters is not None:
        return _in_function(x, e, env, name)
    if env.own is not None and name in READING_WORDS:
        return _own_by_domain_name(x, e, env, name)
    thing = env.scope.names.get(name) or env.scope.find(name)
    if thing is None:
        report_unknown_name(x, e.span, name, env)
        return poisoned(x)
    return thing.value(x) or whole_value(x, e.span, thing)


def _in_function(x: Expansion, e: syntax.Reference, env: Env, name: str) -> Value:
    assert env.parameters is not None
    value = env.parameters.get(name)
    if value is not None:
        return value
    thing = env.scope.find(name)
    if isinstance(thing, GivenThing):
        return thing.value(x) or poisoned(x)
    if thing is None:
        report_unknown_name(x, e.span, name, env)
    else:
        x.report.add(name_messages.function_reads_outside(e.span, name, thing.word, thing.span))
    return poisoned(x)


def _reserved(x: Expansion, e: syntax.Reference, env: Env, name: str) -> Value:
    if name == "time":
        return x.graph.symbol("time", ""), dimensions.TIME
    if name == "pi":
        return x.graph.constant(PI), PLAIN
    if name in "vip" and env.own is not None:
        domain = x.domain(env.own.left.key)
        if name == "p" and domain is not Domain.HEAT:
            return env.own.power(x), POWER
        if name == "v" and domain is Domain.ELECTRICAL:
            return env.own.across(x), ACROSS[domain]
        if name == "i" and domain is Domain.ELECTRICAL:
            return env.own.through(x), THROUGH[domain]
        x.report.add(name_messages.own_name_of_domain(e.span, name, domain.across, domain.through))
        return poisoned(x)
    if name in "sz":
        x.report.add(name_messages.filter_variable_outside(e.span, name))
    else:
        x.report.add(name_messages.own_name_outside(e.span, name))
    return poisoned(x)


def _own_by_domain_name(x: Expansion, e: syntax.Reference, env: Env, name: str) -> Value:
    """`speed`, `torque`, … inside an equation box of another domain than electrical; else an ordinary name."""
    assert env.own is not None
    domain = x.domain(env.own.left.key)
    if name in (domain.across, domain.through):
        thing = env.scope.find(name)
        if thing is not None:
            x.report.add(name_messages.own_name_hides(e.span, name, thing.word, thing.span))
            return poisoned(x)
        if name == domain.across:
            return env.own.across(x), ACROSS[domain]
        return env.own.through(x), THROUGH[domain]
    return _reference(x, e, env.but(own=None))


def _dotted(x: Expansion, e: syntax.Reference, env: Env, first: str) -> Value:
    if env.parameters is not None:
        x.report.add(name_messages.function_reads_outside(e.span, e.span.text, "reading", None))
        return poisoned(x)
    thing = env.scope.names.get(first)
    if thing is None:
        thing = env.scope.find(first)
        if thing is None:
            report_unknown_name(x, e.parts[0].span, first, env)
            return poisoned(x)
    return read_along(x, e, env, thing)


# ---------------------------------------------------------------- operators


def _unary(x: Expansion, e: syntax.Unary, env: Env) -> Value:
    operand = e.operand
    if e.operator == "not":
        return x.graph.invert(condition(x, operand, env, "`not`")), CONDITION
    if e.operator == "-" and isinstance(operand, syntax.Number) and operand.unit is not None and operand.unit.offset:
        return x.graph.constant(operand.unit.to_si(-operand.number)), dimensions.quality_of_unit(operand.unit)
    node, quality = number(x, operand, env, f"`{e.operator}`")
    return (x.graph.negate(node) if e.operator == "-" else node), quality


def _binary(x: Expansion, e: syntax.Binary, env: Env) -> Value:
    return _OPERATORS[e.operator](x, e, env)


def _plus(x: Expansion, e: syntax.Binary, env: Env) -> Value:
    a, qa = _LOWER[type(e.left)](x, e.left, env)
    b, qb = _LOWER[type(e.right)](x, e.right, env)
    quality = qa.plus(qb)
    if quality is None or quality is CONDITION:
        return _no_sum(x, e, qa, qb)
    if e.operator == "+":
        if qa is dimensions.TEMPERATURE and _is_celsius(e.left) and _is_celsius(e.right):
            x.report.add(value_messages.degrees_added(e.span, e.right.span))
            return poisoned(x)
        return x.graph.add(a, b), quality
    return x.graph.subtract(a, b), quality


def _is_celsius(e: syntax.Expression) -> bool:
    return isinstance(e, syntax.Number) and e.unit is not None and e.unit.offset != 0.0


def _no_sum(x: Expansion, e: syntax.Binary, qa: Quality, qb: Quality) -> Value:
    for operand, quality in ((e.left, qa), (e.right, qb)):
        if quality is CONDITION:
            x.report.add(value_messages.condition_as_number(operand.span, f"`{e.operator}`"))
            return poisoned(x)
    if dimensions.differ_by_turn(qa, qb):
        x.report.add(value_messages.turn_missing(e.span, e.left.span, qa, e.right.span, qb))
    else:
        x.report.add(value_messages.unit_mismatch(e.span, e.operator, e.left.span, qa, e.right.span, qb))
    return poisoned(x)


def _times(x: Expansion, e: syntax.Binary, env: Env) -> Value:
    a, qa = _LOWER[type(e.left)](x, e.left, env)
    b, qb = _LOWER[type(e.right)](x, e.right, env)
    quality = qa.times(qb)
    if quality is None:
        return _no_sum(x, e, qa, qb)
    return x.graph.multiply(a, b), quality


def _over(x: Expansion, e: syntax.Binary, env: Env) -> Value:
    a, qa = _LOWER[type(e.left)](x, e.left, env)
    b, qb = _LOWER[type(e.right)](x, e.right, env)
    quality = qa.over(qb)
    if quality is None:
        return _no_sum(x, e, qa, qb)
    if x.graph.value_of(b) == 0.0 and quality is not POISON:
        x.report.add(value_messages.division_by_zero(e.right.span))
        return poisoned(x)
    return x.graph.divide(a, b), quality


def _power(x: Expansion, e: syntax.Binary, env: Env) -> Value:
    base, quality = number(x, e.left, env, "`^`")
    exponent, of_exponent = number(x, e.right, env, "`^`")
    if POISON in (quality, of_exponent):
        return poisoned(x)
    if of_exponent.is_number and not of_exponent.dimension.is_none:
        x.report.add(value_messages.exponent_with_unit(e.right.span, of_exponent))
        return poisoned(x)
    constant = x.graph.value_of(exponent)
    if constant is None:
        if not quality.dimension.is_none:
            x.report.add(value_messages.varying_exponent(e.right.span, e.left.span, quality))
            return poisoned(x)
        return x.graph.power(base, exponent), PLAIN
    raised = dimensions.raised(quality, constant)
    if raised is None:
        x.report.add(value_messages.exponent_too_large(e.right.span, e.left.span, quality))
        return poisoned(x)
    return x.graph.power(base, exponent), (PLAIN if raised is ZERO else raised)


def _compare(x: Expansion, e: syntax.Binary, env: Env) -> Value:
    g = x.graph
    a, qa = _LOWER[type(e.left)](x, e.left, env)
    b, qb = _LOWER[type(e.right)](x, e.right, env)
    joined = qa.plus(qb)
    if joined is None or (joined is CONDITION and e.operator not in ("==", "!=")):
        return _no_sum(x, e, qa, qb)
    if joined is POISON:
        return g.constant(0.0), CONDITION
    return _COMPARISONS[e.operator](g, a, b, joined is CONDITION), CONDITION


def _equal(g: ExpressionGraph, a: Node, b: Node, conditions: bool) -> Node:
    if conditions:
        return g.mux(a, b, g.invert(b))
    return g.both(g.invert(g.greater(a, b)), g.invert(g.greater(b, a)))


_COMPARISONS: Final[dict[str, Callable[[ExpressionGraph, Node, Node, bool], Node]]] = {
    ">": lambda g, a, b, _: g.greater(a, b),
    "<": lambda g, a, b, _: g.greater(b, a),
    ">=": lambda g, a, b, _: g.invert(g.greater(b, a)),
    "<=": lambda g, a, b, _: g.invert(g.greater(a, b)),
    "==": _equal,
    "!=": lambda g, a, b, conditions: g.invert(_equal(g, a, b, conditions)),
}


def _and(x: Expansion, e: syntax.Binary, env: Env) -> Value:
    return x.graph.both(condition(x, e.left, env, "`and`"), condition(x, e.right, env, "`and`")), CONDITION


def _or(x: Expansion, e: syntax.Binary, env: Env) -> Value:
    return x.graph.either(condition(x, e.left, env, "`or`"), condition(x, e.right, env, "`or`")), CONDITION


_OPERATORS: Final[dict[str, Callable[[Expansion, syntax.Binary, Env], Value]]] = {
    "+": _plus,
    "-": _plus,
    "*": _times,
    "/": _over,
    "^": _power,
    "and": _and,
    "or": _or,
    **dict.fromkeys(("<", "<=", ">", ">=", "==", "!="), _compare),
}


def _conditional(x: Expansion, e: syntax.Conditional, env: Env) -> Value:
    chosen = condition(x, e.condition, env, "`if`")
    a, qa = lower(x, e.value, env)
    b, qb = lower(x, e.otherwise, env)
    quality = qa.plus(qb)
    if quality is None:
        if CONDITION in (qa, qb):
            x.report.add(value_messages.branches_differ(e.span, e.value.span, qa, e.otherwise.span, qb))
        elif dimensions.differ_by_turn(qa, qb):
            x.report.add(value_messages.turn_missing(e.span, e.value.span, qa, e.otherwise.span, qb))
        else:
            x.report.add(value_messages.branches_differ(e.span, e.value.span, qa, e.otherwise.span, qb))
        return poisoned(x)
    return x.graph.mux(chosen, a, b), quality


def _list(x: Expansion, e: syntax.ListOf, env: Env) -> Value:
    x.report.add(value_messages.list_as_value(e.span))
    return poisoned(x)


def _derivative(x: Expansion, e: syntax.Derivative, env: Env) -> Value:
    if not env.rates:
        x.report.add(value_messages.derivative_outside(e.span))
        return poisoned(x)
    node, quality = number(x, e.operand, env.but(rates=False), "`d/dt`")
    if quality is POISON:
        return poisoned(x)
    if x.graph.is_constant(node):
        return x.graph.constant(0.0), quality.over(dimensions.TIME) or POISON
    name = x.hidden_name(env, e)
    x.rates[name] = RateDef(name, node, quality.dimension, env.scope.path, e.span)
    return x.graph.symbol("rate", name), quality.over(dimensions.TIME) or POISON


_LOWER: Final[dict[type, Callable[..., Value]]] = {
    syntax.Number: _number,
    syntax.Boolean: _boolean,
    syntax.Reference: _reference,
    syntax.Unary: _unary,
    syntax.Binary: _binary,
    syntax.Conditional: _conditional,
    syntax.Call: lower_call,
    syntax.ListOf: _list,
    syntax.Derivative: _derivative,
    syntax.Filtered: lower_filtered,
    syntax.Sampled: lower_sampled,
    syntax.Delayed: lower_delayed,
    syntax.Averaged: lower_averaged,
}
