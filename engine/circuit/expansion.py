"""The one thing that changes while a circuit is expanded: graph, diagnostics, names of nodes, and what has been worked out so far."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Mapping
from dataclasses import replace
from typing import Final

from polewise.circuit import file_messages, value_messages
from polewise.circuit.csv_file import CsvFile
from polewise.circuit.dimensions import POISON, UNKNOWN, Quality, settled
from polewise.circuit.model import (
    AverageDef,
    Branch,
    ClockEvent,
    ConditionEvent,
    DelayDef,
    Device,
    Domain,
    GivenDef,
    LatchDef,
    RateDef,
    SamplerDef,
    SignalDef,
    StateDef,
    TimeEvent,
    UnknownDef,
)
from polewise.circuit.scope import Env, Scope, Value
from polewise.circuit.things import (
    BUSY,
    DONE,
    NEW,
    BlockThing,
    GivenThing,
    InputThing,
    InstanceThing,
    LatchThing,
    NodeThing,
    PathThing,
    PortThing,
    SolveThing,
    StateThing,
    StudyThing,
    Thing,
    ValueThing,
)
from polewise.expression.graph import ExpressionGraph, Node
from polewise.grammar import syntax
from polewise.grammar.diagnostics import Diagnostic, Label
from polewise.grammar.source import Span

# Statements and copies of statements that one circuit may expand to.
ELEMENTS_MAX: Final = 1_000_000
# Assemblies inside assemblies.
NESTING_MAX: Final = 40
# Values that need one another are worked out by recursion to this depth, beyond it from a list.
RECURSION_MAX: Final = 25
DIAGNOSTICS_MAX: Final = 100
# Codes that say that a name means nothing.
MISSING_CODES: Final = frozenset(f"unknown-{what}" for what in ("name", "kind", "function", "reading", "setting", "given", "step"))


class TooLarge(Exception):
    """The circuit is larger than ELEMENTS_MAX; already reported."""


class _Needed(Exception):
    """A value has to be worked out first, at a depth where recursion stops."""

    def __init__(self, thing: ValueThing) -> None:
        self.thing = thing


class Report:
    """Diagnostics found so far, one per place and code. Mute while something is only tried."""

    def __init__(self) -> None:
        self.found: dict[tuple[str, str, int, int], Diagnostic] = {}
        self.mute = 0
        self.broken_names: frozenset[str] = frozenset()
        self.lacks_files = False
        self.reported: frozenset[tuple[str, int, int]] = frozenset()

    def take_over(self, broken_names: frozenset[str], lacks_files: bool, reported: frozenset[tuple[str, int, int]]) -> None:
        """What reading found, so that nothing is said twice."""
        self.broken_names, self.lacks_files, self.reported = broken_names, lacks_files, reported

    def wants(self, code: str, span: Span) -> bool:
        """Whether a diagnostic of this code at this place would be news. Asked before a costly one is made: copies repeat their errors."""
        if self.mute or len(self.found) >= DIAGNOSTICS_MAX or (code, span.source.name, span.start, span.end) in self.found:
            return False
        if (span.source.name, span.start, span.end) in self.reported:
            return False
        if code not in MISSING_CODES:
            return True
        # What is only missing because its line or its file could not be read is reported already.
        return not (self.lacks_files and code in ("unknown-kind", "unknown-function")) and span.text not in self.broken_names

    def add(self, diagnostic: Diagnostic) -> None:
        """Keep a diagnostic if it is news."""
        span = diagnostic.span
        if self.wants(diagnostic.code, span):
            self.found[diagnostic.code, span.source.name, span.start, span.end] = diagnostic

    def note_call(self, first: int, span: Span, name: str) -> None:
        """Add to the diagnostics found since there were `first` that a call of a function led to them."""
        for key in list(self.found)[first:]:
            d = self.found[key]
            if d.is_error and not any(label.span == span for label in d.labels):
                self.found[key] = replace(d, labels=(*d.labels, Label(span, f"`{name}` is called here")))

    @property
    def has_errors(self) -> bool:
        """Whether an error is among them."""
        return any(d.is_error for d in self.found.values())


class NodeRecord:
    """A node before bare wires join it to others."""

    __slots__ = ("count", "domain", "flat", "named", "owner", "rank", "span")

    def __init__(self, flat: str, owner: str, span: Span, named: bool, rank: int) -> None:
        self.flat = flat
        self.owner = owner
        self.span = span
        self.named = named
        self.rank = rank  # 0 reference, 1 named at top level, 2 named inside, 3 unnamed: the lowest names a joined node
        self.count = 1
        self.domain: Domain | None = None  # of a reference


class PathGiven:
    """`given berth2.L = …`: a value for a given further inside. depth: how far inside it is written itself; the outermost wins."""

    __slots__ = ("depth", "env", "pattern", "text", "used", "written")

    def __init__(self, prefix: str, names: list[str | re.Pattern[str]], written: syntax.Given, env: Env, depth: int) -> None:
        self.text = prefix + ".".join(name if isinstance(name, str) else name.pattern for name in names)
        parts = [re.escape(name) if isinstance(name, str) else name.pattern for name in names]
        plain = all(isinstance(name, str) for name in names)
        self.pattern = None if plain else re.compile(re.escape(prefix) + r"\.".join(parts))
        self.written = written
        self.env = env
        self.depth = depth
        self.used = False


class PathGivens:
    """All values that the text gives from outside."""

    def __init__(self) -> None:
        self.by_text: dict[str, list[PathGiven]] = {}
        self.patterns: list[PathGiven] = []

    def add(self, given: PathGiven) -> PathGiven | None:
        """Enter one; returns one that says the same from the same depth, if there is one."""
        same = self.by_text.setdefault(given.text, [])
        other = next((g for g in same if g.depth == given.depth), None)
        same.append(given)
        if given.pattern is not None:
            self.patterns.append(given)
        return other

    def outermost(self, flat: str) -> PathGiven | None:
        """The one that counts for a given; at one depth a plain path counts before a selection."""
        found = [g for g in self.by_text.get(flat, ()) if g.pattern is None]
        found += [g for g in self.patterns if g.pattern is not None and g.pattern.fullmatch(flat)]
        for given in found:
            given.used = True
        return min(found, key=lambda g: g.depth, default=None)

    def unused(self) -> list[PathGiven]:
        """Those that met no given."""
        return [g for same in self.by_text.values() for g in same if not g.used]


class Expansion:
    """State of one expansion. Nothing outside circuit.expand keeps it, but the reading index of the finished circuit."""

    def __init__(self, overrides: Mapping[str, str | float]) -> None:
        self.graph = ExpressionGraph()
        self.report = Report()
        self.top = Scope("", "", {})
        self.scopes: list[Scope] = [self.top]
        self.order: list[Thing] = []
        self.elements = 0
        # nodes
        self.nodes: dict[str, NodeRecord] = {}
        self.parent: dict[str, str] = {}  # union of keys joined by bare wires
        self.references: set[str] = set()  # roots, once declared
        self.domains: dict[str, Domain] = {}  # by root; empty where all is electrical
        self.between_kinds: set[str] = set()  # boxes that join two kinds of islands, reported
        self.port_currents: dict[int, Node | None] = {}
        # given values from outside
        self.overrides = dict(overrides)
        self.used_overrides: set[str] = set()
        self.path_givens = PathGivens()
        # values
        self.numbers: dict[int, Value] = {}
        self.depth = 0
        self.stack: list[ValueThing] = []
        self.unfinished = 0  # how often something unfinished was read
        self.recheck: list[ValueThing] = []
        self.inlining: list[str] = []
        self.hidden_names: dict[tuple[str, int], str] = {}
        self.hidden_counts: dict[str, int] = {}
        self.unnamed_paths: dict[str, int] = {}
        # statements kept for after the first pass
        self.paths: list[PathThing] = []
        self.waiting: list[tuple[InstanceThing, syntax.Assembly]] = []
        self.port_names: dict[str, tuple[str, ...]] = {}
        self.each_variables: list[tuple[Scope, syntax.Each]] = []
        self.events: list[tuple[syntax.At | syntax.Every | syntax.Whenever, Env]] = []
        self.studies_by_name: dict[str, StudyThing] = {}
        self.csv: Mapping[tuple[str, str], CsvFile] = {}
        # results
        self.branches: dict[str, Branch] = {}
        self.devices: dict[str, Device] = {}
        self.signals: dict[str, SignalDef] = {}
        self.states: dict[str, StateDef] = {}
        self.unknowns: dict[str, UnknownDef] = {}
        self.rates: dict[str, RateDef] = {}
        self.latches: dict[str, LatchDef] = {}
        self.samplers: dict[str, SamplerDef] = {}
        self.reads_old: dict[str, str] = {}  # sampler → one of whose values it reads the old ones, and so stands before it
        self.delays: dict[str, DelayDef] = {}
        self.averages: dict[str, AverageDef] = {}
        self.givens: dict[str, GivenDef] = {}
        self.inputs: list[str] = []
        self.time_events: list[TimeEvent] = []
        self.clock_events: list[ClockEvent] = []
        self.condition_events: list[ConditionEvent] = []
        self.makers: dict[type, Callable[..., Quality]] = {}
        # lowering an expression, set by circuit.lower
        self.lower: Callable[[syntax.Expression, Env], Value]

    # ------------------------------------------------------------ size

    def count(self, span: Span) -> None:
        """One more statement or copy of one.

        Raises:
            TooLarge: over the limit.
        """
        self.elements += 1
        if self.elements > ELEMENTS_MAX:
            self.report.add(file_messages.too_large(span, ELEMENTS_MAX))
            raise TooLarge

    # ------------------------------------------------------------ nodes

    def add_node(self, flat: str, scope: Scope, span: Span, named: bool) -> NodeRecord:
        """A new node."""
        rank = 3 if not named else 1 if scope.top is None else 2
        record = self.nodes[flat] = NodeRecord(flat, scope.path, span, named, rank)
        return record

    def root(self, key: str) -> str:
        """The name that stands for a node and everything joined to it."""
        parent = self.parent
        above = parent.get(key)
        if above is None:
            return key
        while (higher := parent.get(above)) is not None:
            parent[key] = higher
            key, above = above, higher
        return above

    def join(self, a: str, b: str) -> None:
        """A bare wire."""
        a, b = self.root(a), self.root(b)
        if a == b:
            return
        if self.nodes[b].rank < self.nodes[a].rank:
            a, b = b, a
        self.parent[b] = a

    def potential(self, key: str) -> Node:
        """Potential of a node by key."""
        root = self.root(key) if self.parent else key
        if root in self.references:
            return self.graph.constant(0.0)
        return self.graph.symbol("potential", root)

    def domain(self, key: str) -> Domain:
        """Kind of the island a node is in."""
        return self.domains.get(self.root(key), Domain.ELECTRICAL) if self.domains else Domain.ELECTRICAL

    def port_current(self, port: PortThing) -> Node | None:
        """The current into a port, None where a bare wire inside joins it to another port."""
        known = self.port_currents.get(id(port), -1)
        if known != -1:
            return known
        self._find_port_currents(port.scope)
        return self.port_currents[id(port)]

    def _find_port_currents(self, scope: Scope) -> None:
        g = self.graph
        if not scope.wired:
            groups = {id(port): id(port) for port in scope.ports}
        else:
            groups = _grouped(scope)
        sums: dict[int, Node | None] = {}
        members = [groups[id(port)] for port in scope.ports]
        for group in members:
            sums[group] = None if members.count(group) > 1 else g.constant(0.0)
        for node, sign, what in scope.attached:
            group = groups.get(id(node), -1)
            total = sums.get(group)
            if total is None:
                continue
            current = g.symbol("i", what) if isinstance(what, str) else self.port_current(what)
            if current is None:
                sums[group] = None
            else:
                sums[group] = g.add(total, current) if sign > 0 else g.subtract(total, current)
        for port in scope.ports:
            self.port_currents[id(port)] = sums[groups[id(port)]]

    # ------------------------------------------------------------ values on demand

    def ensure(self, thing: ValueThing) -> None:
        """Work a value out unless that is done or under way.

        A value that is under way is read as of unknown kind; what read it is worked out again at the end, when everything is known.
        """
        if thing.stage == DONE:
            return
        if thing.stage == BUSY:
            self.unfinished += 1
            if isinstance(thing, GivenThing | LatchThing):
                chain = self.stack[self.stack.index(thing) :] if thing in self.stack else [thing]
                self.report.add(value_messages.needs_itself(thing.span, thing.word, [t.flat for t in chain]))
                thing.quality = POISON
            return
        if self.depth >= RECURSION_MAX:
            raise _Needed(thing)
        if self.depth == 0:
            self._work_off(thing)
        else:
            self._work_out(thing)

    def _work_off(self, thing: ValueThing) -> None:
        waiting = [thing]
        while waiting:
            try:
                self._work_out(waiting[-1])
                waiting.pop()
            except _Needed as needed:
                if needed.thing in waiting:
                    needed.thing.stage = BUSY  # a circle longer than the recursion: read as unknown here, told by circuit.check
                else:
                    waiting.append(needed.thing)

    def _work_out(self, thing: ValueThing) -> None:
        if thing.stage == DONE:
            return
        before = self.unfinished
        thing.stage = BUSY
        self.depth += 1
        self.stack.append(thing)
        try:
            quality = thing.work_out(self)
        except BaseException:
            thing.stage = NEW
            raise
        finally:
            self.depth -= 1
            self.stack.pop()
        if thing.quality is POISON:
            quality = POISON
        if quality is UNKNOWN and self.depth > 0:
            thing.stage = NEW  # asked again by something that knows more
            return
        thing.quality = settled(quality)
        thing.stage = DONE
        if self.unfinished != before:
            self.recheck.append(thing)

    def hidden_name(self, env: Env, expression: object) -> str:
        """Name of a filter, delay, … inside an expression: base#1, base#2, …; the same when the expression is lowered again."""
        key = (env.base, id(expression))
        name = self.hidden_names.get(key)
        if name is None:
            number = self.hidden_counts[env.base] = self.hidden_counts.get(env.base, 0) + 1
            name = self.hidden_names[key] = f"{env.base}#{number}"
        return name

    def finite(self, node: Node) -> float | None:
        """The number a node is, None where it is none or not finite."""
        value = self.graph.value_of(node)
        return value if value is not None and math.isfinite(value) else None

    # ------------------------------------------------------------ makers of values, registered by their own files

    def work_out_given(self, thing: GivenThing) -> Quality:
        """See circuit.values."""
        return self.makers[GivenThing](self, thing)

    def work_out_input(self, thing: InputThing) -> Quality:
        """See circuit.values."""
        return self.makers[InputThing](self, thing)

    def work_out_state(self, thing: StateThing) -> Quality:
        """See circuit.values."""
        return self.makers[StateThing](self, thing)

    def work_out_solve(self, thing: SolveThing) -> Quality:
        """See circuit.values."""
        return self.makers[SolveThing](self, thing)

    def work_out_latch(self, thing: LatchThing) -> Quality:
        """See circuit.values."""
        return self.makers[LatchThing](self, thing)

    def work_out_block(self, thing: BlockThing) -> Quality:
        """See circuit.blocks."""
        return self.makers[BlockThing](self, thing)


def _grouped(scope: Scope) -> dict[int, int]:
    """Nodes of a scope joined by its bare wires: id of a node → id that stands for its group."""
    parent: dict[int, int] = {}

    def root(k: int) -> int:
        while parent.setdefault(k, k) != k:
            k = parent[k]
        return k

    things: list[NodeThing] = [*scope.ports, *(node for node, _, _ in scope.attached)]
    for a, b in scope.wired:
        parent[root(id(a))] = root(id(b))
        things += (a, b)
    return {id(thing): root(id(thing)) for thing in things}
