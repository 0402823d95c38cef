"""What a name can stand for while a circuit is expanded, and what can be read from each: node, box, path, device, instance, signal, latch, …"""

from __future__ import annotations

from collections.abc import Iterator
from typing import TYPE_CHECKING, ClassVar

from polewise.circuit import dimensions
from polewise.circuit.dimensions import CONDITION, POWER, UNKNOWN, Quality
from polewise.circuit.model import Domain
from polewise.circuit.scope import Env, Scope, Value
from polewise.devices.kind import DeviceKind
from polewise.expression.graph import Node
from polewise.grammar import syntax
from polewise.grammar.source import Span

if TYPE_CHECKING:
    from polewise.circuit.expansion import Expansion

ACROSS = {domain: dimensions.quality(domain.across_dimension) for domain in Domain}
THROUGH = {domain: dimensions.quality(domain.through_dimension) for domain in Domain}
READING_WORDS = frozenset({"v", "i", "p", *(d.across for d in Domain), *(d.through for d in Domain)})


class Thing:
    """Something with a name.

    flat: its name in the whole circuit. span: where it was declared.
    """

    __slots__ = ("flat", "scope", "span")
    word: ClassVar[str] = "name"  # what messages call it
    shared: ClassVar[bool] = False  # whether an assembly sees it at top level

    def __init__(self, flat: str, scope: Scope, span: Span) -> None:
        self.flat = flat
        self.scope = scope
        self.span = span

    def value(self, x: Expansion) -> Value | None:
        """What the plain name reads; None where only a part of it can be read."""
        return None

    def reading(self, x: Expansion, name: str) -> Value | None:
        """What `thing.name` reads, None where there is no such reading."""
        return None

    def member(self, name: str) -> Thing | None:
        """The thing that `thing.name` is, None where there is none."""
        return None

    def readings(self, x: Expansion) -> tuple[str, ...]:
        """Names that `reading` knows."""
        return ()

    def members(self) -> Iterator[str]:
        """Names that `member` knows."""
        return iter(())


def _power(x: Expansion, v: Node, i: Node) -> Value:
    return x.graph.multiply(v, i), POWER


# ---------------------------------------------------------------- nodes


class NodeThing(Thing):
    """A node of the circuit. key: the flat name before bare wires join nodes; a port has its outer node's key."""

    __slots__ = ("key",)
    word = "node"

    def __init__(self, flat: str, scope: Scope, span: Span, key: str) -> None:
        super().__init__(flat, scope, span)
        self.key = key

    def potential(self, x: Expansion) -> Node:
        """Its potential; the number 0 for a reference."""
        return x.potential(self.key)

    def reading(self, x: Expansion, name: str) -> Value | None:
        domain = x.domain(self.key)
        if name == domain.across:
            return self.potential(x), ACROSS[domain]
        return None

    def readings(self, x: Expansion) -> tuple[str, ...]:
        return (x.domain(self.key).across,)


class PortThing(NodeThing):
    """A port of a placed assembly, seen from inside by its name and from outside by path."""

    __slots__ = ("opened",)
    word = "port"

    def __init__(self, flat: str, scope: Scope, span: Span, key: str, opened: bool) -> None:
        super().__init__(flat, scope, span, key)
        self.opened = opened  # left `unconnected`

    def reading(self, x: Expansion, name: str) -> Value | None:
        domain = x.domain(self.key)
        if name == domain.across:
            return self.potential(x), ACROSS[domain]
        if name == domain.through or (name == "p" and domain is not Domain.HEAT):
            current = x.port_current(self)
            if current is None:
                return None
            return (current, THROUGH[domain]) if name != "p" else _power(x, self.potential(x), current)
        return None

    def readings(self, x: Expansion) -> tuple[str, ...]:
        return _branch_readings(x.domain(self.key))


def _branch_readings(domain: Domain) -> tuple[str, ...]:
    return (domain.across, domain.through) if domain is Domain.HEAT else (domain.across, domain.through, "p")


# ---------------------------------------------------------------- boxes, paths, devices


class BoxThing(Thing):
    """A box, which is one branch; with `kind` a two-terminal device. left, right: its nodes."""

    __slots__ = ("env", "kind", "latches", "left", "mark", "right", "written")
    word = "box"

    def __init__(self, flat: str, scope: Scope, span: Span, left: NodeThing, right: NodeThing, written: syntax.Box | None, env: Env) -> None:
        super().__init__(flat, scope, span)
        self.left = left
        self.right = right
        self.written = written  # None for a named bare wire
        self.env = env
        self.kind: DeviceKind | None = None
        self.latches: dict[str, LatchThing] = {}
        self.mark = ""  # name inside its path, "" where unnamed

    def across(self, x: Expansion) -> Node:
        """Its voltage."""
        return x.graph.symbol("v", self.flat)

    def through(self, x: Expansion) -> Node:
        """Its current."""
        return x.graph.symbol("i", self.flat)

    def power(self, x: Expansion) -> Node:
        """What it absorbs."""
        return x.graph.multiply(self.across(x), self.through(x))

    def reading(self, x: Expansion, name: str) -> Value | None:
        domain = x.domain(self.left.key)
        if name == domain.through:
            return self.through(x), THROUGH[domain]
        if name == domain.across:
            return self.across(x), ACROSS[domain]
        if name == "p" and domain is not Domain.HEAT:
            return self.power(x), POWER
        return _device_reading(x, self.kind, self.flat, name)

    def readings(self, x: Expansion) -> tuple[str, ...]:
        own = _branch_readings(x.domain(self.left.key))
        return own if self.kind is None else (*own, *self.kind.readings)

    def member(self, name: str) -> Thing | None:
        return self.latches.get(name)

    def members(self) -> Iterator[str]:
        return iter(self.latches)


def _device_reading(x: Expansion, kind: DeviceKind | None, flat: str, name: str) -> Value | None:
    if kind is None:
        return None
    dimension = kind.readings.get(name)
    if dimension is None:
        return None
    quality = CONDITION if name in kind.conditions else dimensions.quality(dimension)
    return x.graph.symbol("reading", f"{flat}.{name}"), quality


class PathThing(Thing):
    """A named path: its boxes in order, those side by side together."""

    __slots__ = ("items", "left", "named", "right")
    word = "path"

    def __init__(self, flat: str, scope: Scope, span: Span, left: NodeThing, right: NodeThing, items: list[tuple[BoxThing, ...]]) -> None:
        super().__init__(flat, scope, span)
        self.left = left
        self.right = right
        self.items = items
        self.named: dict[str, BoxThing] = {}

    @property
    def only(self) -> BoxThing | None:
        """The box of a path that has one."""
        return self.items[0][0] if len(self.items) == 1 and len(self.items[0]) == 1 else None

    def through(self, x: Expansion) -> Node:
        """The current that enters at its left."""
        return x.graph.sum(box.through(x) for box in self.items[0])

    def across(self, x: Expansion) -> Node:
        """Left minus right."""
        if len(self.items) == 1:
            return self.items[0][0].across(x)
        return x.graph.subtract(self.left.potential(x), self.right.potential(x))

    def power(self, x: Expansion) -> Node:
        """What its boxes absorb together (v*i of the path, and more where another path meets a named node inside it)."""
        return x.graph.sum(box.power(x) for item in self.items for box in item)

    def reading(self, x: Expansion, name: str) -> Value | None:
        only = self.only
        if only is not None:
            return only.reading(x, name)
        domain = x.domain(self.left.key)
        if name == domain.through:
            return self.through(x), THROUGH[domain]
        if name == domain.across:
            return self.across(x), ACROSS[domain]
        if name == "p" and domain is not Domain.HEAT:
            return self.power(x), POWER
        return None

    def readings(self, x: Expansion) -> tuple[str, ...]:
        only = self.only
        return only.readings(x) if only is not None else _branch_readings(x.domain(self.left.key))

    def member(self, name: str) -> Thing | None:
        box = self.named.get(name)
        if box is None and self.only is not None:
            return self.only.member(name)
        return box

    def members(self) -> Iterator[str]:
        yield from self.named
        if self.only is not None:
            yield from self.only.members()


class DeviceThing(Thing):
    """A placed device with more than two terminals."""

    __slots__ = ("env", "kind", "terminals", "written")
    word = "device"

    def __init__(self, flat: str, scope: Scope, span: Span, kind: DeviceKind, written: syntax.Placement, env: Env) -> None:
        super().__init__(flat, scope, span)
        self.kind = kind
        self.written = written
        self.env = env
        self.terminals: dict[str, NodeThing | None] = {}

    def slot_name(self, suffix: str) -> str:
        """Name of one of its branches."""
        return f"{self.flat}.{suffix}" if suffix else self.flat

    def terminal_current(self, x: Expansion, terminal: str) -> Node:
        """The current that enters at a terminal."""
        g = x.graph
        total = g.constant(0.0)
        for slot in self.kind.slots:
            if slot.left == terminal:
                total = g.add(total, g.symbol("i", self.slot_name(slot.suffix)))
            if slot.right == terminal:
                total = g.subtract(total, g.symbol("i", self.slot_name(slot.suffix)))
        return total

    def power(self, x: Expansion) -> Node:
        """What it absorbs at all its terminals."""
        g = x.graph
        names = [self.slot_name(slot.suffix) for slot in self.kind.slots]
        return g.sum(g.multiply(g.symbol("v", name), g.symbol("i", name)) for name in names)

    def reading(self, x: Expansion, name: str) -> Value | None:
        if name == "p":
            return self.power(x), POWER
        return _device_reading(x, self.kind, self.flat, name)

    def readings(self, x: Expansion) -> tuple[str, ...]:
        return ("p", *self.kind.readings)

    def member(self, name: str) -> Thing | None:
        if name in self.terminals:
            return TerminalThing(self, name)
        for slot in self.kind.slots:
            if slot.suffix == name:
                return SlotThing(self, name)
        return None

    def members(self) -> Iterator[str]:
        return iter(self.terminals)


class TerminalThing(Thing):
    """A terminal of a placed device."""

    __slots__ = ("device", "name")
    word = "terminal"

    def __init__(self, device: DeviceThing, name: str) -> None:
        super().__init__(f"{device.flat}.{name}", device.scope, device.span)
        self.device = device
        self.name = name

    def reading(self, x: Expansion, name: str) -> Value | None:
        node = self.device.terminals[self.name]
        if name == "i":
            return self.device.terminal_current(x, self.name), dimensions.CURRENT
        if node is None:
            return None
        if name == "v":
            return node.potential(x), dimensions.VOLTAGE
        if name == "p":
            return _power(x, node.potential(x), self.device.terminal_current(x, self.name))
        return None

    def readings(self, x: Expansion) -> tuple[str, ...]:
        return ("v", "i", "p") if self.device.terminals[self.name] is not None else ("i",)


class SlotThing(Thing):
    """A winding or arm inside a placed device, read by its name."""

    __slots__ = ()
    word = "part"

    def __init__(self, device: DeviceThing, suffix: str) -> None:
        super().__init__(device.slot_name(suffix), device.scope, device.span)

    def reading(self, x: Expansion, name: str) -> Value | None:
        g = x.graph
        v, i = g.symbol("v", self.flat), g.symbol("i", self.flat)
        if name == "v":
            return v, dimensions.VOLTAGE
        if name == "i":
            return i, dimensions.CURRENT
        return _power(x, v, i) if name == "p" else None

    def readings(self, x: Expansion) -> tuple[str, ...]:
        return ("v", "i", "p")


class InstanceThing(Thing):
    """A placed assembly. inner: its scope."""

    __slots__ = ("document", "inner", "kind")
    word = "assembly"

    def __init__(self, flat: str, scope: Scope, span: Span, kind: str, inner: Scope) -> None:
        super().__init__(flat, scope, span)
        self.kind = kind
        self.inner = inner
        self.document: str | None = None

    def reading(self, x: Expansion, name: str) -> Value | None:
        if name != "p":
            return None
        parts = []
        for port in self.inner.ports:
            current = x.port_current(port)
            if current is None:
                return None
            heat = x.domain(port.key) is Domain.HEAT
            parts.append(current if heat else x.graph.multiply(port.potential(x), current))
        return x.graph.sum(parts), POWER

    def readings(self, x: Expansion) -> tuple[str, ...]:
        return ("p",)

    def member(self, name: str) -> Thing | None:
        return self.inner.names.get(name)

    def members(self) -> Iterator[str]:
        return iter(self.inner.names)


# ---------------------------------------------------------------- values

NEW, BUSY, DONE = 0, 1, 2


class ValueThing(Thing):
    """A name for a value, worked out when it is first needed. symbol_kind: the leaf that stands for it."""

    __slots__ = ("env", "quality", "stage")
    symbol_kind: ClassVar[str] = "signal"

    def __init__(self, flat: str, scope: Scope, span: Span, env: Env) -> None:
        super().__init__(flat, scope, span)
        self.env = env
        self.quality: Quality = UNKNOWN
        self.stage = NEW

    def value(self, x: Expansion) -> Value | None:
        if self.stage != DONE:
            x.ensure(self)
        return x.graph.symbol(self.symbol_kind, self.flat), self.quality

    def work_out(self, x: Expansion) -> Quality:
        """Find the quality and whatever else the thing holds; called once by Expansion.ensure (again where it met something unfinished)."""
        raise NotImplementedError


class SignalThing(ValueThing):
    """`signal x = …`."""

    __slots__ = ("node", "written")
    word = "signal"

    def __init__(self, flat: str, scope: Scope, span: Span, env: Env, written: syntax.Expression) -> None:
        super().__init__(flat, scope, span, env)
        self.written = written
        self.node: Node = -1

    def work_out(self, x: Expansion) -> Quality:
        self.node, quality = x.lower(self.written, self.env)
        return quality


class GivenThing(ValueThing):
    """`given x = …`: a number for a run. setting: what its instance's brackets say. node, number: its value."""

    __slots__ = ("node", "number", "setting", "tolerance", "written")
    word = "given"
    shared = True

    def __init__(self, flat: str, scope: Scope, span: Span, env: Env, written: syntax.Given) -> None:
        super().__init__(flat, scope, span, env)
        self.written = written
        self.setting: syntax.Setting | None = None
        self.node: Node = -1
        self.number = 0.0
        self.tolerance: float | None = None

    def value(self, x: Expansion) -> Value | None:
        if self.stage != DONE:
            x.ensure(self)
        return self.node, self.quality

    def work_out(self, x: Expansion) -> Quality:
        return x.work_out_given(self)


class InputThing(ValueThing):
    """`input x = …`: inside an assembly what its setting says; at top level a latch that Python sets."""

    __slots__ = ("node", "setting", "written")
    word = "input"

    def __init__(self, flat: str, scope: Scope, span: Span, env: Env, written: syntax.Input) -> None:
        super().__init__(flat, scope, span, env)
        self.written = written
        self.setting: syntax.Setting | None = None
        self.node: Node = -1

    def value(self, x: Expansion) -> Value | None:
        if self.stage != DONE:
            x.ensure(self)
        if self.stage == DONE and self.scope.top is not None and self.node >= 0:
            return self.node, self.quality
        kind = "latch" if self.scope.top is None else "signal"
        return x.graph.symbol(kind, self.flat), self.quality

    def work_out(self, x: Expansion) -> Quality:
        return x.work_out_input(self)


class StateThing(ValueThing):
    """`d/dt x = …`, also the states that control blocks bring."""

    __slots__ = ("written",)
    word = "state"
    symbol_kind = "state"

    def __init__(self, flat: str, scope: Scope, span: Span, env: Env, written: syntax.StateRate) -> None:
        super().__init__(flat, scope, span, env)
        self.written = written

    def work_out(self, x: Expansion) -> Quality:
        return x.work_out_state(self)


class BlockStateThing(ValueThing):
    """A state inside a control block."""

    __slots__ = ("block",)
    word = "state"
    symbol_kind = "state"

    def __init__(self, flat: str, scope: Scope, span: Span, env: Env, block: BlockThing) -> None:
        super().__init__(flat, scope, span, env)
        self.block = block

    def value(self, x: Expansion) -> Value | None:
        if self.stage != DONE:
            x.ensure(self.block)
        return x.graph.symbol(self.symbol_kind, self.flat), self.quality


class SolveThing(ValueThing):
    """`solve x from …`."""

    __slots__ = ("written",)
    word = "unknown"
    symbol_kind = "unknown"

    def __init__(self, flat: str, scope: Scope, span: Span, env: Env, written: syntax.Solve) -> None:
        super().__init__(flat, scope, span, env)
        self.written = written

    def work_out(self, x: Expansion) -> Quality:
        return x.work_out_solve(self)


class LatchThing(ValueThing):
    """`latch x = …`, a device's `closed`, a step of a sequence. written None: its quality and start are set by its maker."""

    __slots__ = ("initial", "written")
    word = "latch"
    symbol_kind = "latch"

    def __init__(self, flat: str, scope: Scope, span: Span, env: Env, written: syntax.Expression | None) -> None:
        super().__init__(flat, scope, span, env)
        self.written = written
        self.initial: Node = -1

    def work_out(self, x: Expansion) -> Quality:
        return x.work_out_latch(self)


class BlockThing(ValueThing):
    """A control block, `loop: pi_control(…)`: main output and further readings, worked out by its maker in circuit.blocks.

    node: the main output; rate: of its state; outputs: what can be read; states: inner things, which events may set.
    """

    __slots__ = ("node", "outputs", "rate", "states", "written")
    word = "control block"

    def __init__(self, flat: str, scope: Scope, span: Span, env: Env, written: syntax.Placement) -> None:
        super().__init__(flat, scope, span, env)
        self.written = written
        self.node: Node = -1
        self.rate: Node = -1
        self.outputs: dict[str, Value] = {}
        self.states: dict[str, Thing] = {}

    def work_out(self, x: Expansion) -> Quality:
        return x.work_out_block(self)

    def value(self, x: Expansion) -> Value | None:
        if self.stage != DONE:
            x.ensure(self)
        output = self.states.get("output")
        if output is not None:
            return x.graph.symbol("latch" if isinstance(output, LatchThing) else "state", output.flat), self.quality
        return x.graph.symbol("signal", self.flat), self.quality

    def reading(self, x: Expansion, name: str) -> Value | None:
        if self.stage != DONE:
            x.ensure(self)
        if self.stage == BUSY and name not in self.outputs:
            return x.graph.constant(0.0), UNKNOWN  # worked out again at the end
        return self.outputs.get(name)

    def readings(self, x: Expansion) -> tuple[str, ...]:
        if self.stage != DONE:
            x.ensure(self)
        return tuple(self.outputs)

    def member(self, name: str) -> Thing | None:
        return self.states.get(name)

    def members(self) -> Iterator[str]:
        return iter(self.states)


class SequenceThing(Thing):
    """`sequence x { step … }`: `x.step` is true during that step."""

    __slots__ = ("env", "steps", "written")
    word = "sequence"

    def __init__(self, flat: str, scope: Scope, span: Span, env: Env, written: syntax.Sequence) -> None:
        super().__init__(flat, scope, span)
        self.env = env
        self.written = written
        self.steps: dict[str, LatchThing] = {}

    def member(self, name: str) -> Thing | None:
        return self.steps.get(name)

    def members(self) -> Iterator[str]:
        return iter(self.steps)


# ---------------------------------------------------------------- definitions


class DefinitionThing(Thing):
    """A function, table or assembly: used with brackets, never read."""

    __slots__ = ("env", "number", "quality_in", "quality_out", "written")
    shared = True

    def __init__(self, flat: str, scope: Scope, span: Span, env: Env, written: syntax.Function | syntax.Table | syntax.Assembly) -> None:
        super().__init__(flat, scope, span)
        self.env = env
        self.written = written
        self.number = -1  # of a table in the graph, once built; -2 where it is wrong
        self.quality_in: Quality = UNKNOWN
        self.quality_out: Quality = UNKNOWN

    @property
    def word(self) -> str:  # type: ignore[override]
        """function, table or assembly."""
        return type(self.written).__name__.lower()


class StudyThing(Thing):
    """A study's name."""

    __slots__ = ("written",)
    word = "study"

    def __init__(self, flat: str, scope: Scope, span: Span, written: syntax.Study) -> None:
        super().__init__(flat, scope, span)
        self.written = written


class WrongThing(Thing):
    """Stands for something that is already reported, so that reading it is no second error."""

    __slots__ = ()

    def value(self, x: Expansion) -> Value | None:
        return x.graph.constant(0.0), dimensions.POISON

    def reading(self, x: Expansion, name: str) -> Value | None:
        return x.graph.constant(0.0), dimensions.POISON

    def member(self, name: str) -> Thing | None:
        return self
