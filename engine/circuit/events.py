"""Events: `at`, `every`, `whenever`, their actions, and sequences as latches and events."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

from polewise.circuit import dimensions, event_messages, name_messages
from polewise.circuit.asking import Asked, condition, number, positive_time, wanted
from polewise.circuit.dimensions import CONDITION, POISON
from polewise.circuit.expansion import Expansion
from polewise.circuit.model import Assignment, ClockEvent, ConditionEvent, LatchDef, TimeEvent
from polewise.circuit.naming import find_thing, has_star, matching_things, pattern_of
from polewise.circuit.near import nearest
from polewise.circuit.scope import Env
from polewise.circuit.things import (
    BlockStateThing,
    BoxThing,
    InputThing,
    LatchThing,
    PathThing,
    SequenceThing,
    StateThing,
    Thing,
    ValueThing,
    WrongThing,
)
from polewise.expression.graph import Node
from polewise.grammar import syntax
from polewise.grammar.source import Span

CLOSED: Final = "closed"
Events = tuple[list[TimeEvent], list[ClockEvent], list[ConditionEvent]]


def finish_event(x: Expansion, statement: syntax.At | syntax.Every | syntax.Whenever, env: Env, into: Events) -> None:
    """One event statement."""
    times, clocks, conditions = into
    base = event_name(x, env.scope.prefix)
    env = env.but(base=base)
    actions = assignments(x, statement.actions, env)
    if isinstance(statement, syntax.At):
        time = positive_time(x, statement.time, env, "`at`", zero=True)
        if time is not None:
            times.append(TimeEvent(time, actions, statement.span))
    elif isinstance(statement, syntax.Every):
        period = positive_time(x, statement.period, env, "`every`", zero=False)
        if period is not None:
            clocks.append(ClockEvent(base, period, actions, statement.span))
    else:
        _whenever(x, statement, env, base, actions, conditions)


def event_name(x: Expansion, prefix: str) -> str:
    """A name for an event: event#1, event#2, … in its scope."""
    key = prefix + "event"
    number = x.hidden_counts[key] = x.hidden_counts.get(key, 0) + 1
    return f"{key}#{number}"


def _whenever(x: Expansion, statement: syntax.Whenever, env: Env, name: str, actions: tuple[Assignment, ...], into: list[ConditionEvent]) -> None:
    g = x.graph
    lasting = 0.0
    if statement.lasting is not None:
        got = positive_time(x, statement.lasting, env, "`for`", zero=True)
        if got is None:
            return
        lasting = got
    if statement.edge is None:
        node = condition(x, statement.condition, env, "`whenever`")
        text = statement.condition.span.text
    else:
        value, a = number(x, statement.condition, env, f"`{statement.edge}`")
        assert statement.threshold is not None
        threshold, b = number(x, statement.threshold, env, f"`{statement.edge}`")
        if POISON in (a, b):
            return
        if a.plus(b) is None:
            x.report.add(event_messages.threshold_unit(statement.threshold.span, b, statement.condition.span, a, statement.edge))
            return
        node = g.greater(value, threshold) if statement.edge == "rises above" else g.greater(threshold, value)
        text = f"{statement.condition.span.text} {statement.edge} {statement.threshold.span.text}"
    if g.is_constant(node):
        if not x.report.has_errors and env.scope.top is None and not env.frame:  # in an assembly a given may switch an event off
            x.report.add(event_messages.condition_never_changes(statement.condition.span, g.value_of(node) != 0.0))
        return
    into.append(ConditionEvent(name, node, lasting, statement.edge is not None, actions, statement.span, " ".join(text.split())))


# ---------------------------------------------------------------- actions


def assignments(x: Expansion, actions: Sequence[syntax.Action], env: Env) -> tuple[Assignment, ...]:
    """What a block of actions sets; two actions for one target are an error."""
    result: list[Assignment] = []
    seen: dict[str, Span] = {}
    for action in actions:
        for target in _targets(x, action, env):
            made = _assignment(x, action, target, env)
            if made is None:
                continue
            if made.target in seen:
                x.report.add(event_messages.set_twice(action.target.span, made.target, seen[made.target]))
                continue
            seen[made.target] = action.target.span
            result.append(made)
    return tuple(result)


def _targets(x: Expansion, action: syntax.Action, env: Env) -> list[Thing]:
    if not has_star(action.target):
        thing = find_thing(x, action.target, env)
        return [] if thing is None else [thing]
    names = [pattern_of(x, part, env) for part in action.target.parts]
    if None in names:
        return []
    found = [thing for thing, rest in matching_things(x, env.scope, [n for n in names if n is not None]) if not rest]
    if not found:
        x.report.add(name_messages.nothing_selected(action.target.span))
    return found


def _assignment(x: Expansion, action: syntax.Action, thing: Thing, env: Env) -> Assignment | None:
    if isinstance(thing, WrongThing):
        return None
    if isinstance(action, syntax.SwitchAction):
        latch = contact_of(thing)
        if latch is None:
            x.report.add(
                event_messages.nothing_to_switch(action.target.span, "close" if action.closed else "open", thing.flat, thing.word, thing.span)
            )
            return None
        return Assignment("latch", latch.flat, x.graph.constant(1.0 if action.closed else 0.0), action.span)
    if not isinstance(thing, LatchThing | StateThing | BlockStateThing):
        contact = contact_of(thing)
        hint = f"Write `set {action.target.span.text}.{CLOSED} = …`, or `open`, `close`." if contact is not None else _set_hint(thing)
        x.report.add(event_messages.not_settable(action.target.span, thing.flat, thing.word, thing.span, hint))
        return None
    quality = _quality_of(x, thing)
    node = wanted(x, action.value, env, Asked(quality, f"`{thing.flat}`", thing.span))
    if quality is POISON:
        return None
    return Assignment("latch" if isinstance(thing, LatchThing) else "state", thing.flat, node, action.span)


def _quality_of(x: Expansion, thing: ValueThing) -> dimensions.Quality:
    value = thing.value(x)
    return POISON if value is None else value[1]


def _set_hint(thing: Thing) -> str | None:
    if thing.word == "signal":
        return f"Make it a latch: `latch {thing.flat.rpartition('.')[2]} = …`."
    if isinstance(thing, InputThing):
        return (
            "Bind the input to a latch where the assembly is placed, and set that."
            if thing.scope.top is not None
            else "Use a latch; an input at top level is set from Python."
        )
    if thing.word == "given":
        return "A given is fixed for a run; make it a latch."
    return None


def contact_of(thing: Thing) -> LatchThing | None:
    """The `closed` of a breaker, or of a path that has one breaker."""
    if isinstance(thing, LatchThing) and thing.flat.endswith("." + CLOSED):
        return thing
    if isinstance(thing, BoxThing):
        return thing.latches.get(CLOSED)
    if isinstance(thing, PathThing):
        found = [box.latches[CLOSED] for item in thing.items for box in item if CLOSED in box.latches]
        return found[0] if len(found) == 1 else None
    return None


# ---------------------------------------------------------------- sequences


def finish_sequence(x: Expansion, thing: SequenceThing) -> None:
    """Latches and events of a sequence.

    The first step is active from the start and its actions apply at time 0. A change of step is one event: the old step's latch, the new
    one's and the new one's actions change together.
    """
    steps = thing.written.steps
    if not steps:
        x.report.add(event_messages.sequence_empty(thing.span, thing.flat))
        return
    for step in steps:
        latch = thing.steps[step.name]
        x.latches[latch.flat] = LatchDef(latch.flat, latch.initial, CONDITION.dimension, True, thing.scope.path, step.span)
    entries = {step.name: _entry(x, thing, step) for step in steps}
    first = steps[0]
    if entries[first.name]:
        x.time_events.append(TimeEvent(0.0, entries[first.name], first.span, True))
    for position, step in enumerate(steps):
        _leave(x, thing, step, steps[position + 1].name if position + 1 < len(steps) else None, entries)


def _entry(x: Expansion, thing: SequenceThing, step: syntax.Step) -> tuple[Assignment, ...]:
    return assignments(x, step.actions, thing.env.but(base=f"{thing.flat}.{step.name}"))


def _leave(x: Expansion, thing: SequenceThing, step: syntax.Step, following: str | None, entries: dict[str, tuple[Assignment, ...]]) -> None:
    g = x.graph
    env = thing.env.but(base=f"{thing.flat}.{step.name}")
    active = g.symbol("latch", thing.steps[step.name].flat)
    done: Node | None = None
    if step.until is not None:
        done = condition(x, step.until, env, "`until`")
    least = None if step.after is None else positive_time(x, step.after, env, "`after`", zero=True)
    has_until = step.until is not None or step.after is not None
    if has_until and following is None:
        x.report.add(event_messages.no_next_step(step.span, step.name, thing.flat))
        return
    if has_until and following is not None:
        change = _change(x, thing, step.name, following, entries, step.span)
        leaving = active
        lasting = least or 0.0
        if done is not None and lasting > 0.0:
            leaving = g.both(active, _stayed(x, thing, step, lasting))
            lasting = 0.0
        if done is not None:
            leaving = g.both(leaving, done)
            done = leaving
        text = f"{thing.flat}: {step.name} to {following}"
        x.condition_events.append(ConditionEvent(f"{thing.flat}.{step.name}#until", leaving, lasting, False, change, step.span, text))
    if step.else_name is not None:
        _escape(x, thing, step, env, active, done, entries)


def _stayed(x: Expansion, thing: SequenceThing, step: syntax.Step, least_s: float) -> Node:
    """A latch that is true once a step has lasted that long; leaving the step clears it."""
    g = x.graph
    name = f"{thing.steps[step.name].flat}#stayed"
    symbol = g.symbol("latch", name)
    x.latches[name] = LatchDef(name, g.constant(0.0), CONDITION.dimension, True, thing.scope.path, step.span)
    active = g.symbol("latch", thing.steps[step.name].flat)
    for suffix, watched, lasting, value in (("#on", active, least_s, 1.0), ("#off", g.both(symbol, g.invert(active)), 0.0, 0.0)):
        made = Assignment("latch", name, g.constant(value), step.span)
        x.condition_events.append(ConditionEvent(name + suffix, watched, lasting, False, (made,), step.span, f"{thing.flat}: time in {step.name}"))
    return g.both(symbol, active)


def _escape(
    x: Expansion,
    thing: SequenceThing,
    step: syntax.Step,
    env: Env,
    active: Node,
    done: Node | None,
    entries: dict[str, tuple[Assignment, ...]],
) -> None:
    """`else fault after 2 s`."""
    assert step.else_name is not None
    if step.else_name not in thing.steps:
        x.report.add(event_messages.unknown_step(step.else_span or step.span, step.else_name, thing.flat, nearest(step.else_name, thing.steps)))
        return
    if step.else_after is None:
        return
    after = positive_time(x, step.else_after, env, "`else`", zero=False)
    if after is None:
        return
    g = x.graph
    # Not while `until` holds: where both come at one instant, the ordinary way is taken.
    waiting = active if done is None else g.both(active, g.invert(done))
    change = _change(x, thing, step.name, step.else_name, entries, step.else_span or step.span)
    text = f"{thing.flat}: {step.name} to {step.else_name}"
    x.condition_events.append(ConditionEvent(f"{thing.flat}.{step.name}#else", waiting, after, False, change, step.span, text))


def _change(x: Expansion, thing: SequenceThing, old: str, new: str, entries: dict[str, tuple[Assignment, ...]], span: Span) -> tuple[Assignment, ...]:
    g = x.graph
    latches = {} if old == new else {old: 0.0, new: 1.0}
    own = [Assignment("latch", thing.steps[name].flat, g.constant(value), span) for name, value in latches.items()]
    return (*own, *entries[new])
