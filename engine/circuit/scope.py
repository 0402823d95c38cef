"""Where names live: one scope at top level and one per placed assembly; the place (scope, `each` numbers, box) an expression stands in."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, TypeAlias

from polewise.circuit.dimensions import Quality
from polewise.expression.graph import Node

if TYPE_CHECKING:
    from polewise.circuit.things import BoxThing, NodeThing, PortThing, Thing
    from polewise.grammar import syntax
    from polewise.grammar.source import Span

# What lowering an expression gives: its node and its kind.
Value: TypeAlias = tuple[Node, Quality]

Frame: TypeAlias = Mapping[str, int]
NO_FRAME: Frame = {}


@dataclass(slots=True, eq=False)
class Scope:
    """Names of the top level or of one placed assembly.

    Args:
        path: "" at top level, else the instance's path, "buffer" or "rack2.berth1".
        prefix: what flat names begin with: "" or path + ".".
        names: everything declared here.
        top: the top-level scope (itself at top level); an assembly also sees its givens, tables, functions and assemblies.
        definition: the assembly this is an instance of.
        ports: of the instance, in order.
        attached: what hangs on each node of this instance: (node, sign, branch name or a port of an inner instance), for port currents.
        wired: pairs of nodes joined by bare wires here.
        placed: where the instance is placed; settings, settings_env: what stands in its brackets, read in the scope around it.
        chain: names of the assemblies around this scope, its own last; tells recursion.
    """

    path: str
    prefix: str
    names: dict[str, Thing]
    top: Scope | None = None
    definition: syntax.Assembly | None = None
    ports: list[PortThing] = field(default_factory=list)
    attached: list[tuple[NodeThing, int, str | PortThing]] = field(default_factory=list)
    wired: list[tuple[NodeThing, NodeThing]] = field(default_factory=list)
    placed: Span | None = None
    settings: Mapping[str, syntax.Setting] = field(default_factory=dict)
    settings_env: Env | None = None
    chain: tuple[str, ...] = ()

    def find(self, name: str) -> Thing | None:
        """What a plain name means here, None where it means nothing (or something that this scope must not see)."""
        thing = self.names.get(name)
        if thing is None and self.top is not None:
            thing = self.top.names.get(name)
            if thing is not None and not thing.shared:
                return None
        return thing

    def visible(self) -> list[str]:
        """Names that may be written here, for hints."""
        outer = [] if self.top is None else [name for name, thing in self.top.names.items() if thing.shared]
        return [*self.names, *outer]


@dataclass(slots=True, eq=False)
class Env:
    """The place an expression stands in.

    Args:
        scope: whose names it sees.
        frame: the numbers of the `each` blocks around it.
        base: flat name of what the expression belongs to; things it brings along (filters, delays) are named after it.
        own: the box, where `v`, `i`, `p` are its own.
        parameters: of the function being inlined; then only these, givens, tables and functions are seen.
        rates: whether `d/dt` may stand in it (equation boxes).
        memory: why a filter, delay or sample can't stand in it, None where it can.
    """

    scope: Scope
    frame: Frame = field(default_factory=dict)
    base: str = ""
    own: BoxThing | None = None
    parameters: Mapping[str, Value] | None = None
    rates: bool = False
    memory: str | None = None

    def but(self, **changes: object) -> Env:
        """A copy with some entries changed."""
        return replace(self, **changes)  # type: ignore[arg-type]
