"""From written names to things: braces in names, dotted paths, selections with `{*}`, and what was probably meant."""

from __future__ import annotations

import re
from collections.abc import Iterator
from typing import TYPE_CHECKING

from polewise.circuit import name_messages
from polewise.circuit.asking import poisoned
from polewise.circuit.dimensions import POISON
from polewise.circuit.near import nearest
from polewise.circuit.scope import Env, Scope, Value
from polewise.circuit.things import Thing
from polewise.grammar import syntax
from polewise.grammar.diagnostics import Diagnostic
from polewise.grammar.source import Span
from polewise.grammar.words import VALUE_NAMES

if TYPE_CHECKING:
    from polewise.circuit.expansion import Expansion

# Whole numbers in braces; far more than any circuit has of one thing.
INDEX_MAX = 10_000_000


def name_of(x: Expansion, part: syntax.NamePart, env: Env) -> str | None:
    """A name with its braces worked out; None where they are wrong."""
    pieces = part.pieces
    if len(pieces) == 1 and isinstance(pieces[0], str):
        return pieces[0]
    text = []
    for piece in pieces:
        if isinstance(piece, str):
            text.append(piece)
        elif isinstance(piece, syntax.Star):
            x.report.add(name_messages.star_misplaced(piece.span))
            return None
        else:
            index = _index(x, piece, env)
            if index is None:
                return None
            text.append(str(index))
    return "".join(text)


def _index(x: Expansion, piece: syntax.Expression, env: Env) -> int | None:
    if isinstance(piece, syntax.Reference) and len(piece.parts) == 1 and (plain := piece.parts[0].plain) is not None:
        number = env.frame.get(plain)
        if number is not None:
            return number
    return whole_number(x, piece, env, "a brace in a name")


def whole_number(x: Expansion, e: syntax.Expression, env: Env, asked_by: str) -> int | None:
    """A constant whole number."""
    node, quality = x.lower(e, env)
    if quality is POISON:
        return None
    value = x.graph.value_of(node)
    if value is None or not quality.is_number or not quality.dimension.is_none or value != int(value) or not 0 <= value <= INDEX_MAX:
        x.report.add(name_messages.not_whole(e.span, asked_by))
        return None
    return int(value)


def members_of(thing: Thing) -> list[str]:
    """Names inside a thing."""
    return list(thing.members())


def unknown_name(x: Expansion, span: Span, name: str, env: Env) -> Diagnostic:
    """The message for a name that means nothing here."""
    scope = env.scope
    if scope.top is not None:
        outer = scope.top.names.get(name)
        if outer is not None:
            return name_messages.outside_assembly(span, name, outer.word, outer.span, "" if scope.definition is None else scope.definition.name)
    candidates = [*env.frame, *(env.parameters or ()), *scope.visible(), *VALUE_NAMES]
    return name_messages.unknown_name(span, name, nearest(name, candidates))


def report_unknown_name(x: Expansion, span: Span, name: str, env: Env) -> None:
    """Say that a name means nothing here, unless that is said."""
    if x.report.wants("unknown-name", span):
        x.report.add(unknown_name(x, span, name, env))


# ---------------------------------------------------------------- dotted names


def find_thing(x: Expansion, reference: syntax.Reference, env: Env) -> Thing | None:
    """The thing a dotted name stands for as a whole; None where it is wrong (reported)."""
    name = name_of(x, reference.parts[0], env)
    if name is None:
        return None
    thing = env.scope.find(name)
    if thing is None:
        report_unknown_name(x, reference.parts[0].span, name, env)
        return None
    for part in reference.parts[1:]:
        name = name_of(x, part, env)
        if name is None:
            return None
        inner = thing.member(name)
        if inner is None:
            if x.report.wants("unknown-reading", part.span):
                x.report.add(_no_member(x, part, name, thing))
            return None
        thing = inner
    return thing


def _no_member(x: Expansion, part: syntax.NamePart, name: str, thing: Thing) -> Diagnostic:
    members = members_of(thing)
    return name_messages.unknown_reading(part.span, name, thing.flat, thing.word, (), members, nearest(name, members), thing.span)


def read_along(x: Expansion, reference: syntax.Reference, env: Env, thing: Thing) -> Value:
    """Follow the parts after the first from thing to thing, the last of them to a reading."""
    parts = reference.parts
    last = len(parts) - 1
    for position in range(1, last + 1):
        part = parts[position]
        name = part.plain or name_of(x, part, env)
        if name is None:
            return poisoned(x)
        member = thing.member(name)
        if member is not None:
            thing = member
            continue
        value = thing.reading(x, name) if position == last else None
        if value is None:
            if getattr(thing, "quality", None) is not POISON and x.report.wants("unknown-reading", part.span):
                x.report.add(no_reading(x, part.span, name, thing) if position == last else _no_further(x, part, name, thing))
            return poisoned(x)
        return value
    return whole_value(x, reference.span, thing)


def _no_further(x: Expansion, part: syntax.NamePart, name: str, thing: Thing) -> Diagnostic:
    if name in thing.readings(x):
        return name_messages.reading_has_no_parts(part.span, f"{thing.flat}.{name}")
    return no_reading(x, part.span, name, thing)


def whole_value(x: Expansion, span: Span, thing: Thing) -> Value:
    """What a thing reads by its name alone."""
    value = thing.value(x)
    if value is None:
        x.report.add(name_messages.not_a_value(span, thing.flat, thing.word, thing.readings(x), thing.span))
        return poisoned(x)
    return value


def no_reading(x: Expansion, span: Span, name: str, thing: Thing) -> Diagnostic:
    """The message for `thing.name` that reads nothing."""
    readings = thing.readings(x)
    if thing.word in ("port", "assembly") and name in readings:
        return name_messages.port_current_unknown(span, thing.flat, thing.span)
    members = members_of(thing)
    return name_messages.unknown_reading(span, name, thing.flat, thing.word, readings, members, nearest(name, [*readings, *members]), thing.span)


# ---------------------------------------------------------------- selections


def has_star(reference: syntax.Reference) -> bool:
    """Whether it is a selection."""
    return any(isinstance(piece, syntax.Star) for part in reference.parts for piece in part.pieces)


def selected(x: Expansion, reference: syntax.Reference, env: Env) -> Iterator[tuple[str, Value]]:
    """What a selection reads: (flat name, value) one by one, in the order of the text. Nothing selected is reported."""
    found: list[tuple[str, Value]] = []
    wrong = len(x.report.found)
    for thing, rest in _matching(x, reference.parts, env):
        name = f"{thing.flat}.{rest}" if rest else thing.flat
        value = thing.reading(x, rest) if rest else thing.value(x)
        if value is None:
            x.report.add(
                no_reading(x, reference.parts[-1].span, rest, thing)
                if rest
                else name_messages.not_a_value(reference.span, thing.flat, thing.word, thing.readings(x), thing.span)
            )
            return iter(())
        found.append((name, value))
    if not found and len(x.report.found) == wrong:
        x.report.add(name_messages.nothing_selected(reference.span))
    return iter(found)


def _matching(x: Expansion, parts: tuple[syntax.NamePart, ...], env: Env) -> Iterator[tuple[Thing, str]]:
    """Things that match all parts, or all but the last, with that last name."""
    names: list[str | re.Pattern[str]] = []
    for part in parts:
        name = pattern_of(x, part, env)
        if name is None:
            return
        names.append(name)
    yield from matching_things(x, env.scope, names)


def pattern_of(x: Expansion, part: syntax.NamePart, env: Env) -> str | re.Pattern[str] | None:
    """A part of a selection: its name, or a pattern where it has a `{*}`, which stands for any whole number."""
    if not any(isinstance(piece, syntax.Star) for piece in part.pieces):
        return name_of(x, part, env)
    text = []
    for piece in part.pieces:
        if isinstance(piece, syntax.Star):
            text.append("[0-9]+")
        elif isinstance(piece, str):
            text.append(re.escape(piece))
        else:
            index = _index(x, piece, env)
            if index is None:
                return None
            text.append(str(index))
    return re.compile("".join(text))


def matching_things(x: Expansion, scope: Scope, names: list[str | re.Pattern[str]]) -> Iterator[tuple[Thing, str]]:
    """Things of a scope whose path matches; ("thing", "reading") where the last name is no thing but may be a reading."""
    first = names[0]
    if isinstance(first, str):
        thing = scope.find(first)
        things = [] if thing is None else [thing]
    else:
        things = [thing for name, thing in scope.names.items() if first.fullmatch(name)]
    for thing in things:
        yield from _matching_inside(thing, names, 1)


def _matching_inside(thing: Thing, names: list[str | re.Pattern[str]], position: int) -> Iterator[tuple[Thing, str]]:
    if position == len(names):
        yield thing, ""
        return
    name = names[position]
    if isinstance(name, str):
        inner = thing.member(name)
        if inner is not None:
            yield from _matching_inside(inner, names, position + 1)
        elif position == len(names) - 1:
            yield thing, name
        return
    for candidate in list(thing.members()):
        if name.fullmatch(candidate):
            inner = thing.member(candidate)
            assert inner is not None
            yield from _matching_inside(inner, names, position + 1)
