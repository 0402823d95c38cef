"""Calls in expressions: the mathematical functions, the file's own functions (inlined) and tables."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Final, Literal, TypeAlias

from polewise.circuit import dimensions, file_messages, name_messages, value_messages
from polewise.circuit.asking import Asked, fits, poisoned
from polewise.circuit.dimensions import CONDITION, PLAIN, POISON, Quality, settled
from polewise.circuit.naming import has_star, selected
from polewise.circuit.near import nearest
from polewise.circuit.scope import Env, Scope, Value
from polewise.circuit.tables import read_table
from polewise.circuit.things import DefinitionThing
from polewise.devices.kind import KINDS, PARTS
from polewise.expression.graph import ExpressionGraph, Node
from polewise.grammar import syntax
from polewise.grammar.diagnostics import Diagnostic
from polewise.kernels import opcodes as op

if TYPE_CHECKING:
    from polewise.circuit.expansion import Expansion

# Functions inside functions.
INLINING_MAX: Final = 40

# How a function treats units: plain numbers to a plain number; one common unit, kept; one common unit to a plain number; its square root.
Rule: TypeAlias = Literal["plain", "same", "ratio", "root"]


@dataclass(frozen=True, slots=True)
class BuiltIn:
    """A mathematical function.

    least, most: number of arguments, most None for any number. make: graph, argument values → node. parameters: how messages show a call.
    many: whether an argument may be a selection.
    """

    name: str
    parameters: str
    least: int
    most: int | None
    make: Callable[[ExpressionGraph, list[Node]], Node]
    kind: Rule
    document: str
    many: bool = False


def lower_call(x: Expansion, e: syntax.Call, env: Env) -> Value:
    """`name(arguments)` where a value is wanted."""
    thing = env.scope.find(e.name)
    if isinstance(thing, DefinitionThing) and not isinstance(thing.written, syntax.Assembly):
        if e.settings:
            x.report.add(name_messages.setting_in_function(e.settings[0].span, e.name))
            return poisoned(x)
        if isinstance(thing.written, syntax.Function):
            return _inline(x, e, env, thing, thing.written)
        return read_table(x, e, env, thing)
    built_in = BUILT_IN.get(e.name)
    if built_in is None:
        if x.report.wants("unknown-function", e.name_span):
            x.report.add(_no_function(e, env.scope, None if thing is None else thing.word))
        return poisoned(x)
    if e.settings:
        x.report.add(name_messages.setting_in_function(e.settings[0].span, e.name))
        return poisoned(x)
    return _call_built_in(x, e, env, built_in)


def _no_function(e: syntax.Call, scope: Scope, word: str | None) -> Diagnostic:
    if word is not None:
        return name_messages.not_a_function(e.name_span, e.name, word)
    if e.name in KINDS or e.name in PARTS:
        return name_messages.device_as_value(e.name_span, e.name, e.name in KINDS and KINDS[e.name].two_terminal)
    own = [name for name in scope.visible() if isinstance(scope.find(name), DefinitionThing)]
    return name_messages.unknown_function(e.name_span, e.name, nearest(e.name, [*own, *BUILT_IN]))


def _inline(x: Expansion, e: syntax.Call, env: Env, thing: DefinitionThing, function: syntax.Function) -> Value:
    if len(e.arguments) != len(function.parameters):
        x.report.add(name_messages.argument_count(e.span, e.name, len(e.arguments), ", ".join(function.parameters), function.name_span))
        return poisoned(x)
    values = {name: x.lower(argument, env) for name, argument in zip(function.parameters, e.arguments, strict=True)}
    if thing.flat in x.inlining or len(x.inlining) > INLINING_MAX:
        x.report.add(file_messages.recursive_function(function.name_span, [*x.inlining, thing.flat]))
        return poisoned(x)
    if any(quality is POISON for _, quality in values.values()):
        return poisoned(x)
    place = Env(thing.scope, thing.env.frame, env.base, parameters=values, memory="a function has no memory")
    x.inlining.append(thing.flat)
    before = len(x.report.found)
    try:
        value = x.lower(function.value, place)
    finally:
        x.inlining.pop()
    if len(x.report.found) > before and value[1] is POISON:
        x.report.note_call(before, e.span, e.name)
    return value


def _call_built_in(x: Expansion, e: syntax.Call, env: Env, function: BuiltIn) -> Value:
    values: list[Value] = []
    places: list[syntax.Expression] = []
    for argument in e.arguments:
        if function.many and isinstance(argument, syntax.Reference) and has_star(argument):
            for _, value in selected(x, argument, env):
                values.append(value)
                places.append(argument)
            if not values:
                return poisoned(x)
        else:
            values.append(x.lower(argument, env))
            places.append(argument)
    if len(values) < function.least or (function.most is not None and len(values) > function.most):
        x.report.add(name_messages.argument_count(e.span, e.name, len(values), function.parameters, None))
        return poisoned(x)
    qualities = []
    for (_, quality), place in zip(values, places, strict=True):
        if quality is POISON:
            return poisoned(x)
        if quality is CONDITION:
            x.report.add(value_messages.condition_as_number(place.span, f"`{e.name}`"))
            return poisoned(x)
        qualities.append(quality)
    result = _quality_of_call(x, e, function, qualities, places)
    if result is None:
        return poisoned(x)
    return function.make(x.graph, [node for node, _ in values]), result


def _quality_of_call(x: Expansion, e: syntax.Call, function: BuiltIn, qualities: list[Quality], places: list[syntax.Expression]) -> Quality | None:
    if function.kind == "plain":
        for quality, place in zip(qualities, places, strict=True):
            if not fits(x, quality, Asked(PLAIN, f"`{e.name}`"), place.span):
                return None
        return PLAIN
    if function.kind == "root":
        return dimensions.raised(settled(qualities[0]), 0.5)
    common = qualities[0]
    for quality, place in zip(qualities[1:], places[1:], strict=True):
        joined = common.plus(quality)
        if joined is None:
            if dimensions.differ_by_turn(common, quality):
                x.report.add(value_messages.turn_missing(e.span, places[0].span, common, place.span, quality))
            else:
                x.report.add(name_messages.arguments_differ(e.span, e.name, places[0].span, common, place.span, quality))
            return None
        common = joined
    return PLAIN if function.kind == "ratio" else common


# ---------------------------------------------------------------- the table of functions


def _unary(operation: int) -> Callable[[ExpressionGraph, list[Node]], Node]:
    return lambda g, a: g.unary(operation, a[0])


def _fold(make: Callable[[ExpressionGraph, Node, Node], Node]) -> Callable[[ExpressionGraph, list[Node]], Node]:
    def fold(g: ExpressionGraph, a: list[Node]) -> Node:
        result = a[0]
        for node in a[1:]:
            result = make(g, result, node)
        return result

    return fold


def _round(g: ExpressionGraph, a: list[Node]) -> Node:
    return g.floor(g.add(a[0], g.constant(0.5)))


def _remainder(g: ExpressionGraph, a: list[Node]) -> Node:
    return g.subtract(a[0], g.multiply(a[1], g.floor(g.divide(a[0], a[1]))))


def _log10(g: ExpressionGraph, a: list[Node]) -> Node:
    return g.multiply(g.constant(1.0 / math.log(10.0)), g.unary(op.LOG, a[0]))


def _hypotenuse(g: ExpressionGraph, a: list[Node]) -> Node:
    return g.unary(op.SQRT, g.add(g.multiply(a[0], a[0]), g.multiply(a[1], a[1])))


BUILT_IN: Final[dict[str, BuiltIn]] = {
    f.name: f
    for f in (
        BuiltIn("sqrt", "x", 1, 1, _unary(op.SQRT), "root", "square root"),
        BuiltIn("exp", "x", 1, 1, _unary(op.EXP), "plain", "exponential"),
        BuiltIn("ln", "x", 1, 1, _unary(op.LOG), "plain", "natural logarithm"),
        BuiltIn("log10", "x", 1, 1, _log10, "plain", "logarithm to base 10"),
        BuiltIn("sin", "angle", 1, 1, _unary(op.SIN), "plain", "sine of an angle in rad"),
        BuiltIn("cos", "angle", 1, 1, _unary(op.COS), "plain", "cosine of an angle in rad"),
        BuiltIn("tan", "angle", 1, 1, _unary(op.TAN), "plain", "tangent of an angle in rad"),
        BuiltIn("asin", "x", 1, 1, _unary(op.ASIN), "plain", "angle whose sine is x, rad"),
        BuiltIn("acos", "x", 1, 1, _unary(op.ACOS), "plain", "angle whose cosine is x, rad"),
        BuiltIn("atan", "x", 1, 1, _unary(op.ATAN), "plain", "angle whose tangent is x, rad"),
        BuiltIn("atan2", "y, x", 2, 2, lambda g, a: g.atan2(a[0], a[1]), "ratio", "angle of the point (x, y), rad"),
        BuiltIn("sinh", "x", 1, 1, _unary(op.SINH), "plain", "hyperbolic sine"),
        BuiltIn("cosh", "x", 1, 1, _unary(op.COSH), "plain", "hyperbolic cosine"),
        BuiltIn("tanh", "x", 1, 1, _unary(op.TANH), "plain", "hyperbolic tangent"),
        BuiltIn("abs", "x", 1, 1, lambda g, a: g.absolute(a[0]), "same", "size without sign"),
        BuiltIn("sign", "x", 1, 1, lambda g, a: g.sign(a[0]), "ratio", "-1, 0 or 1"),
        BuiltIn("min", "x, y, …", 1, None, _fold(ExpressionGraph.minimum), "same", "the smallest", many=True),
        BuiltIn("max", "x, y, …", 1, None, _fold(ExpressionGraph.maximum), "same", "the largest", many=True),
        BuiltIn("sum", "x, y, …", 1, None, lambda g, a: g.sum(a), "same", "the sum", many=True),
        BuiltIn("limit", "x, low, high", 3, 3, lambda g, a: g.limit(a[0], a[1], a[2]), "same", "x held between low and high"),
        BuiltIn("hypot", "x, y", 2, 2, _hypotenuse, "same", "square root of x^2 + y^2"),
        BuiltIn("floor", "x", 1, 1, lambda g, a: g.floor(a[0]), "plain", "the largest whole number not above x"),
        BuiltIn("ceil", "x", 1, 1, lambda g, a: g.negate(g.floor(g.negate(a[0]))), "plain", "the smallest whole number not below x"),
        BuiltIn("round", "x", 1, 1, _round, "plain", "the nearest whole number, halves upwards"),
        BuiltIn("remainder", "x, y", 2, 2, _remainder, "same", "x - y*floor(x/y)"),
    )
}
