"""Declared values: where each given comes from, what each input, signal, state, unknown and latch is, and their final definitions."""

from __future__ import annotations

import math
from typing import Final

from polewise.circuit import dimensions, value_messages
from polewise.circuit.asking import Asked, constant, fits, report_varying, wanted
from polewise.circuit.dimensions import CONDITION, POISON, TIME, UNKNOWN, Quality
from polewise.circuit.expansion import Expansion
from polewise.circuit.model import GivenDef, LatchDef, SignalDef, StateDef, UnknownDef
from polewise.circuit.scope import Env, Value
from polewise.circuit.things import GivenThing, InputThing, LatchThing, SignalThing, SolveThing, StateThing, ValueThing
from polewise.expression.graph import Node
from polewise.grammar import syntax
from polewise.grammar.source import SourceText, Span
from polewise.grammar.units import read_value

NO_MEMORY: Final = "it must not vary"


# ---------------------------------------------------------------- givens


def work_out_given(x: Expansion, thing: GivenThing) -> Quality:
    """Value and kind of a given: from outside, else from the outermost text that says it, else from its instance, else its default."""
    written = thing.written
    asked = UNKNOWN
    default: Value | None = None
    if written.unit is not None:
        asked = dimensions.quality_of_unit(written.unit)
    elif written.value is not None:
        default = constant(x, written.value, thing.env.but(memory=NO_MEMORY), f"the given `{thing.flat}`")
        if default is None:
            thing.node = x.graph.constant(0.0)
            return POISON
        asked = dimensions.settled(default[1])
    chosen, own_tolerance = _chosen_value(x, thing, default, asked)
    if chosen is None:
        thing.node = x.graph.constant(0.0)
        return POISON
    node, quality = chosen
    number = x.finite(node)
    assert number is not None
    thing.node, thing.number = node, number
    result = asked if asked is not UNKNOWN else dimensions.settled(quality)
    tolerance = own_tolerance if own_tolerance is not None else written.tolerance
    replaced = default is None or chosen is not default
    thing.tolerance = _tolerance(x, thing, tolerance, result, keeps_absolute=own_tolerance is not None or not replaced)
    return result


def _chosen_value(x: Expansion, thing: GivenThing, default: Value | None, asked: Quality) -> tuple[Value | None, syntax.Tolerance | None]:
    """The value that wins, and the tolerance written with it."""
    wants = Asked(asked, f"the given `{thing.flat}`", thing.span)
    outer = x.path_givens.outermost(thing.flat)
    text = x.overrides.get(thing.flat)
    if text is not None:
        x.used_overrides.add(thing.flat)
        return value_from_outside(x, thing.flat, text, wants), None
    if outer is not None:
        written = outer.written
        assert written.value is not None
        return _constant_that_fits(x, written.value, outer.env, wants), written.tolerance
    if thing.setting is not None:
        return _constant_that_fits(x, thing.setting.value, thing.scope.settings_env or thing.env, wants), None
    if default is None:
        x.report.add(value_messages.given_missing(_asking_place(thing), thing.flat, thing.written.document, thing.span))
    return default, None


def _asking_place(thing: GivenThing) -> Span:
    instance = thing.scope.placed
    return thing.span if instance is None else instance


def _constant_that_fits(x: Expansion, e: syntax.Expression, env: Env, asked: Asked) -> Value | None:
    node, quality = x.lower(e, env.but(memory=NO_MEMORY))
    if quality is POISON:
        return None
    if x.finite(node) is None:
        if x.graph.symbols_under([node]):
            x.report.add(value_messages.varying_given(e.span, asked.reason, _varying_leaf(x, node), asked.span))
        else:
            report_varying(x, node, e.span, asked.reason)
        return None
    return (node, quality) if fits(x, quality, asked, e.span) else None


def _varying_leaf(x: Expansion, node: Node) -> str:
    kind, name = x.graph.symbols[x.graph.symbols_under([node])[0]]
    return "time" if kind == "time" else name


def value_from_outside(x: Expansion, path: str, text: str | float, asked: Asked) -> Value | None:
    """A value from a command line or from Python: a text with its unit, or a number in SI of what is asked for."""
    if isinstance(text, float):
        if asked.quality.is_number and asked.quality is not UNKNOWN and math.isfinite(text):
            return x.graph.constant(text), asked.quality
        text = repr(text)
    source = SourceText(f"given {path}", text)
    span = Span(source, 0, len(text))
    plain = text.strip()
    if plain in ("true", "false"):
        value: Value = (x.graph.constant(1.0 if plain == "true" else 0.0), CONDITION)
    else:
        got = read_value(text)
        if got is None:
            x.report.add(value_messages.override_unreadable(span, path, text))
            return None
        number, dimension = got
        if number == 0.0 and dimension.is_none:
            value = (x.graph.constant(0.0), dimensions.ZERO)
        else:
            value = (x.graph.constant(number), dimensions.quality(dimension))
    return value if fits(x, value[1], asked, span) else None


def _tolerance(x: Expansion, thing: GivenThing, tolerance: syntax.Tolerance | None, quality: Quality, *, keeps_absolute: bool) -> float | None:
    if tolerance is None:
        return None
    if quality is CONDITION:
        x.report.add(value_messages.tolerance_of_condition(tolerance.span, thing.flat))
        return None
    got = constant(x, tolerance.value, thing.env.but(memory=NO_MEMORY), "a tolerance")
    if got is None:
        return None
    node, kind = got
    size = x.finite(node)
    if size is None or size < 0.0:
        x.report.add(value_messages.tolerance_negative(tolerance.value.span))
        return None
    value = tolerance.value
    with_share_unit = isinstance(value, syntax.Number) and value.unit is not None and value.unit.dimension.is_none
    if with_share_unit or (kind.is_number and kind.dimension.is_none and kind.sort != "zero" and not quality.dimension.is_none):
        if isinstance(value, syntax.Number) and value.unit is None:
            x.report.add(value_messages.tolerance_without_unit(value.span, value.text))
            return None
        return size * abs(thing.number)
    if isinstance(value, syntax.Number) and value.unit is not None and value.unit.offset:
        x.report.add(value_messages.degrees_added(tolerance.span, value.span))
        return None
    if not fits(x, kind, Asked(quality, f"a tolerance of `{thing.flat}`", thing.span), value.span):
        return None
    return size if keeps_absolute else None


def finish_given(x: Expansion, thing: GivenThing) -> None:
    """Its definition."""
    x.ensure(thing)
    if thing.quality is POISON:
        return
    written = thing.written
    normal = written.tolerance.normal if written.tolerance is not None else False
    x.givens[thing.flat] = GivenDef(
        thing.flat,
        thing.number,
        thing.quality.dimension,
        thing.tolerance,
        normal,
        written.document,
        thing.scope.path,
        thing.span,
        thing.quality is CONDITION,
    )


# ---------------------------------------------------------------- inputs


def work_out_input(x: Expansion, thing: InputThing) -> Quality:
    """What an input is bound to, and its kind."""
    asked = UNKNOWN
    default: Value | None = None
    written = thing.written
    if written.default is not None:
        node, quality = x.lower(written.default, thing.env)
        default = (node, quality)
        if quality.sort in ("number", "condition"):
            asked = quality
        elif thing.setting is None:
            asked = dimensions.settled(quality)
    if thing.scope.top is None:
        return _top_input(x, thing, default, asked)
    if thing.setting is None:
        if default is None:
            x.report.add(value_messages.input_missing(thing.scope.placed or thing.span, thing.flat, written.document, thing.span))
            thing.node = x.graph.constant(0.0)
            return POISON
        thing.node = default[0]
        return default[1]
    node, quality = x.lower(thing.setting.value, thing.scope.settings_env or thing.env)
    thing.node = node
    if not fits(x, quality, Asked(asked, f"the input `{written.name.plain}`", thing.span), thing.setting.value.span):
        return POISON
    return asked if asked is not UNKNOWN else quality


def _top_input(x: Expansion, thing: InputThing, default: Value | None, asked: Quality) -> Quality:
    text = x.overrides.get(thing.flat)
    if text is not None:
        x.used_overrides.add(thing.flat)
        got = value_from_outside(x, thing.flat, text, Asked(asked, f"the input `{thing.flat}`", thing.span))
        if got is None:
            return POISON
        thing.node = got[0]
        return got[1] if asked is UNKNOWN else asked
    if default is None:
        x.report.add(value_messages.input_missing(thing.span, thing.flat, thing.written.document, None))
        return POISON
    if not x.graph.is_constant(default[0]):
        report_varying(x, default[0], thing.span, "the start value of an input at top level")
        return POISON
    thing.node = default[0]
    return asked if asked is not UNKNOWN else default[1]


def finish_input(x: Expansion, thing: InputThing) -> None:
    """Its definition: a latch at top level, else a signal."""
    x.ensure(thing)
    if thing.quality is POISON:
        return
    if thing.scope.top is None:
        x.inputs.append(thing.flat)
        x.latches[thing.flat] = LatchDef(thing.flat, thing.node, thing.quality.dimension, thing.quality is CONDITION, "", thing.span)
    else:
        x.signals[thing.flat] = SignalDef(thing.flat, thing.node, thing.quality.dimension, thing.scope.path, thing.span, thing.quality is CONDITION)


# ---------------------------------------------------------------- signals, states, unknowns, latches


def finish_signal(x: Expansion, thing: SignalThing) -> None:
    """Its definition."""
    x.ensure(thing)
    if thing.quality is POISON:
        return
    x.signals[thing.flat] = SignalDef(thing.flat, thing.node, thing.quality.dimension, thing.scope.path, thing.span, thing.quality is CONDITION)


def work_out_state(x: Expansion, thing: StateThing) -> Quality:
    """Kind of a state: from its start, else from its bounds, else from its rate."""
    written = thing.written
    for e in (written.initially, *(written.within or ())):
        if e is not None:
            quality = x.lower(e, thing.env)[1]
            if quality.sort == "number":
                return quality
            if quality in (CONDITION, POISON):
                return POISON
    quality = x.lower(written.rate, thing.env)[1]
    if quality.sort == "number":
        return quality.times(TIME) or POISON
    return UNKNOWN if quality.sort in ("unknown", "zero") else POISON


def finish_state(x: Expansion, thing: StateThing) -> None:
    """Its definition."""
    x.ensure(thing)
    written, env, quality = thing.written, thing.env, thing.quality
    if quality is POISON:
        x.lower(written.rate, env)
        for e in (written.initially, *(written.within or ())):
            if e is not None:
                wanted_number(x, e, env)
        return
    reason = f"the state `{thing.flat}`"
    initial = None
    if written.initially is not None:
        initial = constant_wanted(x, written.initially, env.but(memory=NO_MEMORY), Asked(quality, reason, thing.span), "`initially`")
    rate = wanted(x, written.rate, env, Asked(quality.over(TIME) or POISON, f"`d/dt {thing.flat} =`", thing.span))
    low = high = None
    if written.within is not None:
        low = wanted(x, written.within[0], env, Asked(quality, reason, thing.span))
        high = wanted(x, written.within[1], env, Asked(quality, reason, thing.span))
        a, b = x.graph.value_of(low), x.graph.value_of(high)
        if a is not None and b is not None and a > b:
            x.report.add(value_messages.bounds_swapped(written.within[0].span.to(written.within[1].span), "within"))
    x.states[thing.flat] = StateDef(thing.flat, rate, initial, low, high, written.held, quality.dimension, thing.scope.path, thing.span)


def wanted_number(x: Expansion, e: syntax.Expression, env: Env) -> None:
    """Report a condition where only a number makes sense."""
    _, quality = x.lower(e, env)
    if quality is CONDITION:
        x.report.add(value_messages.condition_as_number(e.span, "a state"))


def constant_wanted(x: Expansion, e: syntax.Expression, env: Env, asked: Asked, asked_by: str) -> Node | None:
    """A constant of a certain kind; None where it is wrong."""
    got = constant(x, e, env, asked_by)
    if got is None or not fits(x, got[1], asked, e.span):
        return None
    return got[0]


def work_out_solve(x: Expansion, thing: SolveThing) -> Quality:
    """Kind of an unknown: from its guess, else from the other side of an equation that has it alone on one side."""
    written = thing.written
    if written.initially is not None:
        quality = x.lower(written.initially, thing.env)[1]
        if quality.sort == "number":
            return quality
    own = written.name.plain
    for side, other in ((written.left, written.right), (written.right, written.left)):
        if isinstance(side, syntax.Reference) and len(side.parts) == 1 and side.parts[0].plain == own:
            return x.lower(other, thing.env)[1]
    return UNKNOWN


def finish_solve(x: Expansion, thing: SolveThing) -> None:
    """Its definition."""
    x.ensure(thing)
    written, env = thing.written, thing.env
    left, a = x.lower(written.left, env)
    right, b = x.lower(written.right, env)
    if POISON in (thing.quality, a, b):
        return
    joined = a.plus(b)
    if joined is None or joined is CONDITION:
        x.report.add(value_messages.sides_differ(written.span, written.left.span, a, written.right.span, b))
        return
    initial = None
    if written.initially is not None:
        asked = Asked(thing.quality, f"the unknown `{thing.flat}`", thing.span)
        initial = constant_wanted(x, written.initially, env.but(memory=NO_MEMORY), asked, "`initially`")
    residual = x.graph.subtract(left, right)
    if x.graph.is_constant(residual):
        x.report.add(value_messages.nothing_to_solve(written.span, thing.flat))
        return
    x.unknowns[thing.flat] = UnknownDef(thing.flat, residual, joined.dimension, initial, thing.quality.dimension, thing.scope.path, thing.span)


def work_out_latch(x: Expansion, thing: LatchThing) -> Quality:
    """Start value and kind of a latch."""
    assert thing.written is not None
    got = constant(x, thing.written, thing.env.but(memory=NO_MEMORY), f"the start value of the latch `{thing.flat}`")
    if got is None:
        return POISON
    thing.initial = got[0]
    return dimensions.settled(got[1])


def finish_latch(x: Expansion, thing: LatchThing) -> None:
    """Its definition."""
    x.ensure(thing)
    if thing.quality is POISON or thing.initial < 0:
        return
    x.latches[thing.flat] = LatchDef(thing.flat, thing.initial, thing.quality.dimension, thing.quality is CONDITION, thing.scope.path, thing.span)


def lower_again(x: Expansion, thing: ValueThing) -> None:
    """Check a value once more that was worked out while something it reads was unfinished."""
    if thing.quality is not POISON and not isinstance(thing, GivenThing | LatchThing | StateThing):
        quality = thing.quality
        thing.work_out(x)
        thing.quality = quality
