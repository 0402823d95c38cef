"""First pass over the statements: every copy of every statement gets its things and names; nothing is worked out but `each` bounds and braces."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from typing import Final

from polewise.circuit import box_messages, file_messages, name_messages, value_messages
from polewise.circuit.blocks import BLOCKS
from polewise.circuit.dimensions import CONDITION
from polewise.circuit.expansion import ELEMENTS_MAX, NESTING_MAX, Expansion, PathGiven, TooLarge
from polewise.circuit.functions import BUILT_IN
from polewise.circuit.model import Domain
from polewise.circuit.naming import name_of, pattern_of, whole_number
from polewise.circuit.near import nearest
from polewise.circuit.scope import Env, Frame, Scope
from polewise.circuit.things import (
    DONE,
    BlockThing,
    BoxThing,
    DefinitionThing,
    DeviceThing,
    GivenThing,
    InputThing,
    InstanceThing,
    LatchThing,
    NodeThing,
    PathThing,
    PortThing,
    SequenceThing,
    SignalThing,
    SolveThing,
    StateThing,
    StudyThing,
    Thing,
    WrongThing,
)
from polewise.devices.kind import KINDS, PARTS, DeviceKind
from polewise.grammar import syntax
from polewise.grammar.source import Span
from polewise.grammar.words import VALUE_NAMES

UNCONNECTED: Final = "unconnected"

Declarer = Callable[[Expansion, Scope, "syntax.Statement", Frame], None]


def declare(x: Expansion, statements: Iterable[syntax.Statement]) -> None:
    """Declare the top level and, level by level, everything placed in it.

    Raises:
        TooLarge: reported.
    """
    top = list(statements)
    _check_size(x, top)
    for statement in top:  # definitions first: they decide what a placement is
        if isinstance(statement, syntax.Assembly | syntax.Function | syntax.Table):
            _definition(x, x.top, statement, {})
    _body(x, x.top, [s for s in top if not isinstance(s, syntax.Assembly | syntax.Function | syntax.Table)], {})
    done = 0
    while done < len(x.waiting):
        thing, definition = x.waiting[done]
        done += 1
        scope = thing.inner
        x.scopes.append(scope)
        _body(x, scope, definition.body, {})
        _check_settings(x, thing, definition)


def _body(x: Expansion, scope: Scope, statements: Iterable[syntax.Statement], frame: Frame) -> None:
    later = []
    for statement in statements:
        if type(statement) is syntax.Each:
            later.append(statement)  # its bounds may need a given of this body
        else:
            x.count(statement.span)
            _DECLARE[type(statement)](x, scope, statement, frame)
    for each in later:
        _each(x, scope, each, frame)


def _each(x: Expansion, scope: Scope, each: syntax.Each, frame: Frame) -> None:
    env = Env(scope, frame)
    first = whole_number(x, each.first, env, "the range of `each`")
    last = whole_number(x, each.last, env, "the range of `each`")
    if first is None or last is None:
        return
    if each.variable in frame or each.variable in VALUE_NAMES:
        x.report.add(name_messages.each_variable_taken(each_line(each), each.variable))
        return
    if (last - first + 1) * max(1, len(each.body)) > ELEMENTS_MAX - x.elements:
        x.report.add(file_messages.each_too_many(each.first.span.to(each.last.span), last - first + 1, ELEMENTS_MAX))
        raise TooLarge
    if last < first:
        x.report.add(name_messages.each_empty(each.first.span.to(each.last.span), first, last))
    x.each_variables.append((scope, each))
    for number in range(first, last + 1):
        _body(x, scope, each.body, {**frame, each.variable: number})


def each_line(each: syntax.Each) -> Span:
    """The opening line of an `each`."""
    return Span(each.span.source, each.span.start, each.last.span.end)


# ---------------------------------------------------------------- size before anything is done


def _check_size(x: Expansion, statements: list[syntax.Statement]) -> None:
    """Refuse at once what plainly expands beyond the limit."""
    assemblies = {s.name: s for s in statements if isinstance(s, syntax.Assembly)}
    sizes: dict[str, int] = {}

    def size(body: Iterable[syntax.Statement], inside: tuple[str, ...]) -> int:
        total = 0
        for statement in body:
            total += 1
            if isinstance(statement, syntax.Each):
                if isinstance(statement.first, syntax.Number) and isinstance(statement.last, syntax.Number):
                    copies = max(0, int(min(statement.last.value - statement.first.value + 1, 1e12)))
                    inner = copies * size(statement.body, inside)
                    if inner > ELEMENTS_MAX:
                        x.report.add(file_messages.each_too_many(statement.first.span.to(statement.last.span), copies, ELEMENTS_MAX))
                        raise TooLarge
                    total += inner
            elif (
                isinstance(statement, syntax.Placement)
                and statement.kind in assemblies
                and statement.kind not in inside
                and len(inside) < NESTING_MAX
            ):
                if statement.kind not in sizes:
                    sizes[statement.kind] = size(assemblies[statement.kind].body, (*inside, statement.kind))
                total += sizes[statement.kind]
            if total > ELEMENTS_MAX:
                x.report.add(file_messages.too_large(statement.span, ELEMENTS_MAX))
                raise TooLarge
        return total

    size(statements, ())


# ---------------------------------------------------------------- names


def _add(x: Expansion, scope: Scope, name: str, thing: Thing) -> bool:
    """Enter a name; a second thing of the same name in one scope is an error that shows both."""
    known = scope.names.get(name)
    if known is not None:
        x.report.add(name_messages.declared_twice(thing.span, name, thing.word, known.word, known.span))
        return False
    if name in VALUE_NAMES:
        x.report.add(name_messages.reserved_name(thing.span, name, VALUE_NAMES[name]))
        return False
    if scope.top is not None and (outer := scope.top.names.get(name)) is not None and outer.shared and isinstance(outer, DefinitionThing):
        x.report.add(name_messages.declared_twice(thing.span, name, thing.word, outer.word, outer.span))
        return False
    scope.names[name] = thing
    return True


def _named(x: Expansion, scope: Scope, part: syntax.NamePart, env: Env) -> tuple[str, str] | None:
    name = part.plain or name_of(x, part, env)
    return None if name is None else (name, scope.prefix + name)


def _node(x: Expansion, scope: Scope, reference: syntax.Reference, env: Env) -> NodeThing | None:
    """The node a path or placement touches; it exists by being named."""
    part = reference.parts[0]
    name = part.plain or name_of(x, part, env)
    if name is None:
        return None
    thing = scope.names.get(name)
    if len(reference.parts) > 1:
        x.report.add(box_messages.node_with_dot(reference.span, reference.span.text))
        return None
    if thing is None:
        if name == UNCONNECTED:
            x.report.add(box_messages.unconnected_on_path(reference.span))
            return None
        flat = scope.prefix + name
        x.add_node(flat, scope, reference.span, True)
        node = NodeThing(flat, scope, reference.span, flat)
        scope.names[name] = node
        x.order.append(node)
        return node
    if isinstance(thing, NodeThing):
        x.nodes[thing.key].count += 1
        return thing
    x.report.add(box_messages.not_a_node(reference.span, name, thing.word, thing.span))
    return None


# ---------------------------------------------------------------- plain statements


def _nothing(x: Expansion, scope: Scope, statement: syntax.Statement, frame: Frame) -> None:
    """Titles and uses: read elsewhere."""


def _reference(x: Expansion, scope: Scope, statement: syntax.ReferenceNode, frame: Frame) -> None:
    env = Env(scope, frame)
    name = _named(x, scope, statement.name, env)
    if name is None:
        return
    domain = Domain.ELECTRICAL
    if statement.kind is not None:
        found = next((d for d in Domain if d.across_dimension == statement.kind.dimension), None)
        if found is None or statement.kind.spelling == "Hz" or statement.kind.offset:
            x.report.add(box_messages.reference_kind_unknown(statement.kind_span or statement.span, statement.kind.symbol))
            return
        domain = found
    known = scope.names.get(name[0])
    if isinstance(known, PortThing):
        x.report.add(box_messages.reference_is_port(statement.span, name[0], known.span))
        return
    if isinstance(known, NodeThing):
        record = x.nodes[known.key]
        if record.domain is not None:
            x.report.add(name_messages.declared_twice(statement.name.span, name[0], "reference", "reference", known.span))
            return
    else:
        record = x.add_node(name[1], scope, statement.name.span, True)
        known = NodeThing(name[1], scope, statement.name.span, name[1])
        if not _add(x, scope, name[0], known):
            return
        x.order.append(known)
        record.count = 0
    record.domain = domain
    record.rank = 0
    record.span = statement.name.span


def _given(x: Expansion, scope: Scope, statement: syntax.Given, frame: Frame) -> None:
    env = Env(scope, frame)
    if len(statement.target.parts) > 1:
        declare_path_given(x, scope, statement, env, len(scope.chain))
        return
    name = _named(x, scope, statement.target.parts[0], env)
    if name is None:
        return
    env.base = name[1]
    thing = GivenThing(name[1], scope, statement.target.span, env, statement)
    thing.setting = scope.settings.get(name[0])
    if _add(x, scope, name[0], thing):
        x.order.append(thing)


def declare_path_given(x: Expansion, scope: Scope, statement: syntax.Given, env: Env, depth: int) -> None:
    """`given berth2.L = …`, or any given of a study: a value from outside for a given."""
    if statement.value is None:
        x.report.add(value_messages.path_given_without_value(statement.span))
        return
    names = [pattern_of(x, part, env) for part in statement.target.parts]
    if None in names:
        return
    given = PathGiven(scope.prefix, [name for name in names if name is not None], statement, env, depth)
    other = x.path_givens.add(given)
    if other is not None:
        x.report.add(name_messages.declared_twice(statement.target.span, given.text, "given", "given", other.written.target.span))


def _input(x: Expansion, scope: Scope, statement: syntax.Input, frame: Frame) -> None:
    env = Env(scope, frame)
    name = _named(x, scope, statement.name, env)
    if name is not None:
        env.base = name[1]
        thing = InputThing(name[1], scope, statement.name.span, env, statement)
        thing.setting = scope.settings.get(name[0])
        if _add(x, scope, name[0], thing):
            x.order.append(thing)


def _signal(x: Expansion, scope: Scope, statement: syntax.Signal, frame: Frame) -> None:
    env = Env(scope, frame)
    name = _named(x, scope, statement.name, env)
    if name is not None:
        env.base = name[1]
        thing = SignalThing(name[1], scope, statement.name.span, env, statement.value)
        if _add(x, scope, name[0], thing):
            x.order.append(thing)


def _state(x: Expansion, scope: Scope, statement: syntax.StateRate, frame: Frame) -> None:
    env = Env(scope, frame)
    name = _named(x, scope, statement.name, env)
    if name is not None:
        env.base = name[1]
        thing = StateThing(name[1], scope, statement.name.span, env, statement)
        if _add(x, scope, name[0], thing):
            x.order.append(thing)


def _latch(x: Expansion, scope: Scope, statement: syntax.Latch, frame: Frame) -> None:
    env = Env(scope, frame)
    name = _named(x, scope, statement.name, env)
    if name is not None:
        thing = LatchThing(name[1], scope, statement.name.span, env, statement.value)
        if _add(x, scope, name[0], thing):
            x.order.append(thing)


def _solve(x: Expansion, scope: Scope, statement: syntax.Solve, frame: Frame) -> None:
    env = Env(scope, frame)
    name = _named(x, scope, statement.name, env)
    if name is not None:
        env.base = name[1]
        thing = SolveThing(name[1], scope, statement.name.span, env, statement)
        if _add(x, scope, name[0], thing):
            x.order.append(thing)


def _definition(x: Expansion, scope: Scope, statement: syntax.Function | syntax.Table | syntax.Assembly, frame: Frame) -> None:
    x.count(statement.span)
    name, span = statement.name, statement.name_span
    if name in BUILT_IN or name in KINDS or name in PARTS or name in BLOCKS:
        word = "function" if name in BUILT_IN else "control block" if name in BLOCKS else "device"
        x.report.add(name_messages.name_of_the_language(span, name, word))
        return
    thing = DefinitionThing(scope.prefix + name, scope, span, Env(scope, frame), statement)
    if _add(x, scope, name, thing):
        x.order.append(thing)


def _wires(x: Expansion, scope: Scope, statement: syntax.Wires, frame: Frame) -> None:
    x.report.add(file_messages.not_yet(statement.span, "`wires` bundles"))


def _study(x: Expansion, scope: Scope, statement: syntax.Study, frame: Frame) -> None:
    thing = StudyThing(statement.name, scope, statement.name_span, statement)
    known = x.studies_by_name.get(statement.name)
    if known is not None:
        x.report.add(name_messages.declared_twice(statement.name_span, statement.name, "study", "study", known.span))
        return
    x.studies_by_name[statement.name] = thing


def _event(x: Expansion, scope: Scope, statement: syntax.At | syntax.Every | syntax.Whenever, frame: Frame) -> None:
    x.events.append((statement, Env(scope, frame)))


def _sequence(x: Expansion, scope: Scope, statement: syntax.Sequence, frame: Frame) -> None:
    env = Env(scope, frame)
    name = _named(x, scope, statement.name, env)
    if name is None:
        return
    env.base = name[1]
    thing = SequenceThing(name[1], scope, statement.name.span, env, statement)
    for step in statement.steps:
        x.count(step.span)
        latch = LatchThing(f"{name[1]}.{step.name}", scope, step.span, env, None)
        latch.quality, latch.stage = CONDITION, DONE
        latch.initial = x.graph.constant(0.0 if thing.steps else 1.0)
        thing.steps[step.name] = latch
    if _add(x, scope, name[0], thing):
        x.order.append(thing)


# ---------------------------------------------------------------- paths


def _path(x: Expansion, scope: Scope, statement: syntax.Path, frame: Frame) -> None:
    env = Env(scope, frame)
    items = statement.items
    ends = [_node(x, scope, item, env) if type(item) is syntax.Reference else None for item in items]
    if any(end is None and type(item) is syntax.Reference for end, item in zip(ends, items)):
        return
    if ends[0] is None or ends[-1] is None:
        return  # it ends in a box: reported by the parser
    name = ""
    if statement.name is not None:
        named = _named(x, scope, statement.name, env)
        if named is None:
            return
        name, flat = named
    else:
        first, last = ends[0], ends[-1]
        assert first is not None
        assert last is not None
        flat = _unnamed(x, f"{first.flat}--{last.flat}")
    boxes = _boxes(x, scope, statement, ends, flat, env)
    left, right = ends[0], ends[-1]
    assert left is not None
    assert right is not None
    if name and not boxes:
        boxes = [_wire_with_name(x, scope, statement, left, right, flat, env)]
    if not boxes:
        return
    path = PathThing(flat, scope, statement.name.span if statement.name is not None else statement.span, left, right, boxes)
    for item in boxes:
        for box in item:
            if box.mark:
                if box.mark in path.named:
                    x.report.add(name_messages.declared_twice(box.span, box.mark, "box", "box", path.named[box.mark].span))
                path.named[box.mark] = box
    if not name or _add(x, scope, name, path):
        x.paths.append(path)


def _unnamed(x: Expansion, base: str) -> str:
    count = x.unnamed_paths[base] = x.unnamed_paths.get(base, 0) + 1
    return base if count == 1 else f"{base}#{count}"


def _boxes(x: Expansion, scope: Scope, statement: syntax.Path, ends: list[NodeThing | None], flat: str, env: Env) -> list[tuple[BoxThing, ...]]:
    """The boxes of a path from left to right; bare wires in between join their nodes."""
    items = statement.items
    result: list[tuple[BoxThing, ...]] = []
    count = sum(len(item.boxes) if isinstance(item, syntax.ParallelBoxes) else 1 for item in items if not isinstance(item, syntax.Reference))
    single = count == 1
    at = ends[0]
    assert at is not None
    number = inner = 0
    for k in range(1, len(items)):
        item = items[k]
        end = ends[k]
        if isinstance(item, syntax.Reference):
            assert end is not None
            if isinstance(items[k - 1], syntax.Reference) and (statement.name is None or count):
                _wire(x, scope, at, end)
            at = end
            continue
        following = ends[k + 1]
        if following is None:
            inner += 1
            key = f"{flat}#{inner}"
            x.add_node(key, scope, item.span, False)
            following = NodeThing(key, scope, item.span, key)
        side_by_side = []
        for box in (item,) if isinstance(item, syntax.Box) else item.boxes:
            number += 1
            made = _box(x, scope, box, at, following, flat, number, single, env)
            if made is not None:
                side_by_side.append(made)
        if side_by_side:
            result.append(tuple(side_by_side))
        at = following
    return result


def _box(
    x: Expansion, scope: Scope, box: syntax.Box, left: NodeThing, right: NodeThing, path: str, number: int, single: bool, env: Env
) -> BoxThing | None:
    mark = ""
    if box.name is not None:
        named = name_of(x, box.name, env)
        if named is None:
            return None
        mark = named
        if mark in VALUE_NAMES:
            x.report.add(name_messages.reserved_name(box.name.span, mark, VALUE_NAMES[mark]))
            return None
    flat = f"{path}.{mark}" if mark else path if single else f"{path}#{number}"
    thing = BoxThing(flat, scope, box.name.span if box.name is not None else box.span, left, right, box, Env(scope, env.frame, flat))
    thing.mark = mark
    thing.kind = _kind_in_box(x, box.content)
    if thing.kind is not None:
        for spec in thing.kind.latches:
            latch = LatchThing(f"{flat}.{spec.name}", scope, box.span, env, None)
            latch.quality, latch.stage = CONDITION, DONE
            thing.latches[spec.name] = latch
    _hang(scope, left, 1, flat)
    _hang(scope, right, -1, flat)
    x.order.append(thing)
    return thing


def _kind_in_box(x: Expansion, content: syntax.BoxContent) -> DeviceKind | None:
    if isinstance(content, syntax.DeviceBox):
        call: syntax.Expression = content.call
    elif isinstance(content, syntax.ValueBox):
        call = content.value
    elif isinstance(content, syntax.PowerBox):
        return KINDS.get("constant_power")
    else:
        return None
    if not isinstance(call, syntax.Call):
        return None
    kind = KINDS.get(call.name)
    return kind if kind is not None and kind.two_terminal else None


def _hang(scope: Scope, node: NodeThing, sign: int, what: str | PortThing) -> None:
    if scope.ports:
        scope.attached.append((node, sign, what))


def _wire(x: Expansion, scope: Scope, a: NodeThing, b: NodeThing) -> None:
    x.join(a.key, b.key)
    if scope.ports:
        scope.wired.append((a, b))


def _wire_with_name(
    x: Expansion, scope: Scope, statement: syntax.Path, left: NodeThing, right: NodeThing, flat: str, env: Env
) -> tuple[BoxThing, ...]:
    """A bare wire with a name: its current can be read, so it is a branch of no voltage."""
    thing = BoxThing(flat, scope, statement.span, left, right, None, Env(scope, env.frame, flat))
    _hang(scope, left, 1, flat)
    _hang(scope, right, -1, flat)
    x.order.append(thing)
    return (thing,)


# ---------------------------------------------------------------- placements


def _placement(x: Expansion, scope: Scope, statement: syntax.Placement, frame: Frame) -> None:
    env = Env(scope, frame)
    named = _named(x, scope, statement.name, env)
    if named is None:
        return
    name, flat = named
    env.base = flat
    definition = scope.find(statement.kind)
    if isinstance(definition, DefinitionThing) and isinstance(definition.written, syntax.Assembly):
        _instance(x, scope, statement, name, flat, env, definition.written)
        return
    kind = KINDS.get(statement.kind)
    if kind is not None and not kind.two_terminal:
        _device(x, scope, statement, name, flat, env, kind)
    elif statement.kind in BLOCKS:
        block = BlockThing(flat, scope, statement.name.span, env, statement)
        BLOCKS[statement.kind].declare(x, block)
        if _add(x, scope, name, block):
            x.order.append(block)
    elif kind is not None:
        x.report.add(box_messages.device_belongs_in_box(statement.kind_span, statement.kind, name))
    else:
        if x.report.wants("unknown-kind", statement.kind_span):
            assemblies = [n for n, t in (scope.top or scope).names.items() if t.word == "assembly"]
            candidates = [*assemblies, *(k for k, v in KINDS.items() if not v.two_terminal), *BLOCKS]
            word = None if definition is None else definition.word
            x.report.add(box_messages.unknown_kind(statement.kind_span, statement.kind, nearest(statement.kind, candidates), word))
        _add(x, scope, name, WrongThing(flat, scope, statement.name.span))


def _device(x: Expansion, scope: Scope, statement: syntax.Placement, name: str, flat: str, env: Env, kind: DeviceKind) -> None:
    thing = DeviceThing(flat, scope, statement.name.span, kind, statement, env)
    nodes = _terminals(x, scope, statement, env, kind.terminals, extra=len(kind.positional))
    if nodes is None:
        _add(x, scope, name, WrongThing(flat, scope, statement.name.span))
        return
    for terminal, node in nodes.items():
        thing.terminals[terminal] = node
    for slot in kind.slots:
        for terminal, sign in ((slot.left, 1), (slot.right, -1)):
            node = nodes[terminal]
            if node is not None:
                _hang(scope, node, sign, thing.slot_name(slot.suffix))
    if _add(x, scope, name, thing):
        x.order.append(thing)


def _terminals(
    x: Expansion, scope: Scope, statement: syntax.Placement, env: Env, terminals: tuple[str, ...], *, extra: int
) -> dict[str, NodeThing | None] | None:
    """Nodes of a placement's terminals, by position, then by name; None for one left `unconnected`, no result where something is wrong."""
    given: dict[str, syntax.Expression] = {}
    for terminal, argument in zip(terminals, statement.arguments):
        given[terminal] = argument
    by_name = [s for s in statement.settings if s.name in terminals]
    wrong = False
    for setting in by_name:
        if setting.name in given:
            x.report.add(box_messages.terminal_twice(setting.name_span, setting.name, given[setting.name].span))
            wrong = True
        given[setting.name] = setting.value
    if len(statement.arguments) > len(terminals) + extra:
        x.report.add(
            box_messages.too_many_arguments(statement.arguments[len(terminals) + extra].span, statement.kind, terminals, len(statement.arguments))
        )
        wrong = True
    missing = [terminal for terminal in terminals if terminal not in given]
    if missing:
        x.report.add(box_messages.terminals_missing(statement.kind_span, statement.kind, terminals, missing))
        wrong = True
    result: dict[str, NodeThing | None] = {}
    for terminal, argument in given.items():
        if not isinstance(argument, syntax.Reference):
            x.report.add(box_messages.terminal_needs_node(argument.span, terminal, statement.kind))
            wrong = True
        elif len(argument.parts) == 1 and argument.parts[0].plain == UNCONNECTED:
            result[terminal] = None
        else:
            node = _node(x, scope, argument, env)
            wrong = wrong or node is None
            result[terminal] = node
    return None if wrong else result


def _instance(x: Expansion, scope: Scope, statement: syntax.Placement, name: str, flat: str, env: Env, definition: syntax.Assembly) -> None:
    if definition.name in scope.chain:
        x.report.add(file_messages.recursive_assembly(statement.kind_span, [*scope.chain, definition.name], definition.name_span))
        _add(x, scope, name, WrongThing(flat, scope, statement.name.span))
        return
    if len(scope.chain) >= NESTING_MAX:
        x.report.add(file_messages.nested_too_deep(statement.kind_span, NESTING_MAX))
        raise TooLarge
    ports = _port_names(x, definition)
    nodes = None if ports is None else _terminals(x, scope, statement, env, ports, extra=0)
    if nodes is None or ports is None:
        _add(x, scope, name, WrongThing(flat, scope, statement.name.span))
        return
    inner = Scope(flat, flat + ".", {}, scope.top or scope, definition, placed=statement.span, chain=(*scope.chain, definition.name))
    for port, part in zip(ports, definition.ports, strict=True):
        outer = nodes[port]
        key = inner.prefix + port if outer is None else outer.key
        if outer is None:
            x.add_node(key, inner, part.span, True)
        thing = PortThing(inner.prefix + port, inner, part.span, key, outer is None)
        inner.ports.append(thing)
        inner.names[port] = thing
        if outer is not None:
            _hang(scope, outer, 1, thing)
    inner.settings = {s.name: s for s in statement.settings if s.name not in ports}
    inner.settings_env = env
    instance = InstanceThing(flat, scope, statement.name.span, definition.name, inner)
    instance.document = statement.document if statement.document is not None else definition.document
    if _add(x, scope, name, instance):
        x.order.append(instance)
        x.waiting.append((instance, definition))


def _port_names(x: Expansion, definition: syntax.Assembly) -> tuple[str, ...] | None:
    known = x.port_names.get(definition.name)
    if known is None:
        names = [part.plain for part in definition.ports]
        for part, name in zip(definition.ports, names, strict=True):
            if name is None:
                x.report.add(name_messages.port_with_brace(part.span))
                return None
        known = x.port_names[definition.name] = tuple(name for name in names if name is not None)
    return known


def _check_settings(x: Expansion, thing: InstanceThing, definition: syntax.Assembly) -> None:
    for name, setting in thing.inner.settings.items():
        target = thing.inner.names.get(name)
        if not isinstance(target, GivenThing | InputThing) and x.report.wants("unknown-setting", setting.name_span):
            known = [n for n, t in thing.inner.names.items() if isinstance(t, GivenThing | InputThing)]
            word = None if target is None else target.word
            x.report.add(box_messages.unknown_setting(setting.name_span, name, definition.name, nearest(name, known), known, word))


_DECLARE: Final[dict[type, Callable[..., None]]] = {
    syntax.Title: _nothing,
    syntax.Use: _nothing,
    syntax.ReferenceNode: _reference,
    syntax.Given: _given,
    syntax.Input: _input,
    syntax.Signal: _signal,
    syntax.StateRate: _state,
    syntax.Latch: _latch,
    syntax.Solve: _solve,
    syntax.Function: _definition,
    syntax.Table: _definition,
    syntax.Assembly: _definition,
    syntax.Wires: _wires,
    syntax.Study: _study,
    syntax.At: _event,
    syntax.Every: _event,
    syntax.Whenever: _event,
    syntax.Sequence: _sequence,
    syntax.Path: _path,
    syntax.Placement: _placement,
}
