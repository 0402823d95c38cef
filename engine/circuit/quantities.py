"""What can be read from a circuit, by the netlist's own spelling: one name, a selection with `{*}`, or everything there is."""

from __future__ import annotations

import re
from collections.abc import Iterator

from polewise.circuit import name_messages
from polewise.circuit.dimensions import CONDITION, POISON
from polewise.circuit.expansion import Expansion
from polewise.circuit.model import Circuit, Quantity
from polewise.circuit.naming import matching_things, no_reading
from polewise.circuit.near import nearest
from polewise.circuit.scope import Value
from polewise.circuit.things import (
    BlockThing,
    BoxThing,
    DefinitionThing,
    DeviceThing,
    GivenThing,
    NodeThing,
    PathThing,
    PortThing,
    SequenceThing,
    Thing,
    ValueThing,
)
from polewise.grammar.diagnostics import Diagnostic
from polewise.grammar.source import SourceText, Span

_STAR = "{*}"


def find(circuit: Circuit, name: str) -> Quantity | Diagnostic:
    """One quantity.

    Args:
        circuit: from circuit.expand.
        name: as the netlist would write it: "bus.v", "berth2.choke.i", "loop.error", "start_up.run".
    Returns:
        The quantity under that name, or what is wrong with the name, with the nearest one as hint.
    """
    x = _index(circuit)
    span = _span(name)
    names = name.strip().split(".")
    thing = x.top.names.get(names[0])
    if thing is None:
        return name_messages.unknown_name(span, names[0], nearest(names[0], _first_names(x)))
    for position, part in enumerate(names[1:], start=1):
        member = thing.member(part)
        if member is not None:
            thing = member
            continue
        value = thing.reading(x, part) if position == len(names) - 1 else None
        if value is None:
            return no_reading(x, span, part, thing)
        return _quantity(name.strip(), value)
    value = thing.value(x)
    if value is None:
        return name_messages.not_a_value(span, name.strip(), thing.word, thing.readings(x), thing.span)
    return _quantity(name.strip(), value)


def select(circuit: Circuit, pattern: str) -> tuple[Quantity, ...] | Diagnostic:
    """The quantities that a name with `{*}` selects, in the order of the text; one where there is no `{*}`.

    Args:
        circuit: from circuit.expand.
        pattern: "berth{*}.leg.duty"; each `{*}` stands for any whole number.
    """
    if _STAR not in pattern:
        one = find(circuit, pattern)
        return one if isinstance(one, Diagnostic) else (one,)
    x = _index(circuit)
    span = _span(pattern)
    names: list[str | re.Pattern[str]] = []
    for part in pattern.strip().split("."):
        pieces = [re.escape(piece) for piece in part.split(_STAR)]
        names.append(part if len(pieces) == 1 else re.compile("[0-9]+".join(pieces)))
    found = []
    for thing, rest in matching_things(x, x.top, names):
        value = thing.reading(x, rest) if rest else thing.value(x)
        if value is None:
            return (
                no_reading(x, span, rest, thing) if rest else name_messages.not_a_value(span, thing.flat, thing.word, thing.readings(x), thing.span)
            )
        found.append(_quantity(f"{thing.flat}.{rest}" if rest else thing.flat, value))
    return tuple(found) if found else name_messages.nothing_selected(span)


def all_quantities(circuit: Circuit) -> Iterator[Quantity]:
    """Everything that can be read: top level first, then what is in each placed assembly. Givens are left out: they do not vary."""
    x = _index(circuit)
    seen: set[str] = set()
    for scope in x.scopes:
        for thing in scope.names.values():
            if isinstance(thing, NodeThing) and x.root(thing.key) in x.references and not isinstance(thing, PortThing):
                continue  # 0 by definition
            for quantity in _of_thing(x, thing):
                if quantity.name not in seen:
                    seen.add(quantity.name)
                    yield quantity


def _of_thing(x: Expansion, thing: Thing) -> Iterator[Quantity]:
    if isinstance(thing, GivenThing | DefinitionThing):
        return
    if isinstance(thing, ValueThing):
        value = thing.value(x)
        if value is not None and value[1] is not POISON:
            yield _quantity(thing.flat, value)
    if not isinstance(thing, ValueThing) or isinstance(thing, BlockThing):
        for name in thing.readings(x):
            value = thing.reading(x, name) if thing.member(name) is None else None
            if value is not None and value[1] is not POISON:
                yield _quantity(f"{thing.flat}.{name}", value)
    if isinstance(thing, PathThing | BoxThing | DeviceThing | BlockThing | SequenceThing):
        for name in thing.members():
            member = thing.member(name)
            if member is not None and not (isinstance(thing, BlockThing) and name in thing.outputs):
                yield from _of_thing(x, member)


def _first_names(x: Expansion) -> list[str]:
    return [name for name, thing in x.top.names.items() if not isinstance(thing, DefinitionThing)]


def _index(circuit: Circuit) -> Expansion:
    if circuit.names is None:
        raise ValueError("this circuit was not made by circuit.expand, its names can't be read")
    return circuit.names


def _span(name: str) -> Span:
    return Span(SourceText("name", name), 0, len(name))


def _quantity(name: str, value: Value) -> Quantity:
    node, kind = value
    return Quantity(name, node, kind.dimension, kind is CONDITION)
