"""The syntax tree: one frozen node per rule of netlist.lark, each with its span. Values are as written; nothing is resolved."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TypeAlias

from polewise.grammar.source import SourceText, Span
from polewise.grammar.units import Unit

# ---------------------------------------------------------------- names


@dataclass(frozen=True, slots=True)
class Star:
    """`{*}` in a selection."""

    span: Span


@dataclass(frozen=True, slots=True)
class NamePart:
    """One part of a dotted name: pieces of text and whole-number expressions in braces, `cell{n}_{m+1}`.

    A plain name has one piece, a str.
    """

    span: Span
    pieces: tuple[str | Expression | Star, ...]

    @property
    def plain(self) -> str | None:
        """The name where it has no braces."""
        return self.pieces[0] if len(self.pieces) == 1 and isinstance(self.pieces[0], str) else None


@dataclass(frozen=True, slots=True)
class Reference:
    """A dotted name: `bus.v`, `berth{n}.choke.i`, `berth{*}.out.p`."""

    span: Span
    parts: tuple[NamePart, ...]


# ---------------------------------------------------------------- expressions


@dataclass(frozen=True, slots=True)
class Number:
    """A number with or without a unit. `number` is as written, `text` its digits, `unit` its unit; SI is number * unit.factor + unit.offset."""

    span: Span
    number: float
    unit: Unit | None
    text: str

    @property
    def value(self) -> float:
        """In SI."""
        return self.number if self.unit is None else self.unit.to_si(self.number)


@dataclass(frozen=True, slots=True)
class Boolean:
    """`true` or `false`."""

    span: Span
    value: bool


@dataclass(frozen=True, slots=True)
class Unary:
    """`-x`, `+x`, `not x`."""

    span: Span
    operator: str
    operand: Expression


@dataclass(frozen=True, slots=True)
class Binary:
    """`+ - * / ^`, comparisons `< <= > >= == !=`, `and`, `or`."""

    span: Span
    operator: str
    left: Expression
    right: Expression


@dataclass(frozen=True, slots=True)
class Conditional:
    """`value if condition otherwise other`."""

    span: Span
    value: Expression
    condition: Expression
    otherwise: Expression


@dataclass(frozen=True, slots=True)
class Setting:
    """`name = value` inside brackets."""

    span: Span
    name: str
    name_span: Span
    value: Expression


@dataclass(frozen=True, slots=True)
class Call:
    """`name(arguments, setting = value)`: a function, a device in a box, a transistor in a setting."""

    span: Span
    name: str
    name_span: Span
    arguments: tuple[Expression, ...]
    settings: tuple[Setting, ...] = ()


@dataclass(frozen=True, slots=True)
class ListOf:
    """`(x, y, z)`: two or more values."""

    span: Span
    items: tuple[Expression, ...]


@dataclass(frozen=True, slots=True)
class Derivative:
    """`d/dt x` inside an equation."""

    span: Span
    operand: Expression


@dataclass(frozen=True, slots=True)
class Filtered:
    """`x filtered by H(s)`, or `x filtered by H(z) in z at f` (then `rate` is f)."""

    span: Span
    operand: Expression
    by: Expression
    rate: Expression | None


@dataclass(frozen=True, slots=True)
class Sampled:
    """`x sampled at f`."""

    span: Span
    operand: Expression
    rate: Expression


@dataclass(frozen=True, slots=True)
class Delayed:
    """`x delayed by T`."""

    span: Span
    operand: Expression
    time: Expression


@dataclass(frozen=True, slots=True)
class Averaged:
    """`x averaged over T`."""

    span: Span
    operand: Expression
    time: Expression


Expression: TypeAlias = (
    Number | Boolean | Reference | Unary | Binary | Conditional | Call | ListOf | Derivative | Filtered | Sampled | Delayed | Averaged
)

# ---------------------------------------------------------------- paths and boxes


@dataclass(frozen=True, slots=True)
class ValueBox:
    """A box that holds a value: its unit says what it is. `12 mohm`, `ohms`, `2 mF initially 700 V`."""

    value: Expression


@dataclass(frozen=True, slots=True)
class PowerBox:
    """`20 kW above 300 V` or `-5 kW below 850 V`; `relation` is "above" or "below"."""

    power: Expression
    relation: str
    voltage: Expression


@dataclass(frozen=True, slots=True)
class EquationBox:
    """`left = right` in the box's own v, i, p."""

    left: Expression
    right: Expression


@dataclass(frozen=True, slots=True)
class DeviceBox:
    """A two-terminal device by its trade name: `diode(0.8 V, 2 mohm)`, `breaker(true)`."""

    call: Call


BoxContent: TypeAlias = ValueBox | PowerBox | EquationBox | DeviceBox


@dataclass(frozen=True, slots=True)
class Box:
    """`[name: content initially value]`. A bare Call in a ValueBox may still turn out to be a device: the parser decides by syntax
    alone and writes ValueBox(Call); circuit.expand knows which names are devices."""

    span: Span
    name: NamePart | None
    content: BoxContent
    initially: Expression | None


@dataclass(frozen=True, slots=True)
class ParallelBoxes:
    """`[a | b]`: boxes side by side."""

    span: Span
    boxes: tuple[Box, ...]


@dataclass(frozen=True, slots=True)
class Path:
    """`name: left --[box]--[box]-- right`.

    items: node references and boxes in order. Two node references in a row are a bare wire. It starts and ends with a node.
    """

    span: Span
    name: NamePart | None
    items: tuple[Reference | Box | ParallelBoxes, ...]


@dataclass(frozen=True, slots=True)
class Placement:
    """`name: kind(arguments, setting = value)`: pole, transformer, assembly, control block. `unconnected` is a plain reference."""

    span: Span
    name: NamePart
    kind: str
    kind_span: Span
    arguments: tuple[Expression, ...]
    settings: tuple[Setting, ...]
    document: str | None = None


# ---------------------------------------------------------------- declarations


@dataclass(frozen=True, slots=True)
class Title:
    """`title "…"`."""

    span: Span
    text: str


@dataclass(frozen=True, slots=True)
class Use:
    """`use "file.pole"`."""

    span: Span
    path: str
    path_span: Span


@dataclass(frozen=True, slots=True)
class ReferenceNode:
    """`reference node` or `reference node (unit)`."""

    span: Span
    name: NamePart
    kind: Unit | None
    kind_span: Span | None


@dataclass(frozen=True, slots=True)
class Tolerance:
    """`+- 20 %` or `+- 0.2 mF`, with `normal` if so written."""

    span: Span
    value: Expression
    normal: bool


@dataclass(frozen=True, slots=True)
class Given:
    """`given x = value +- tolerance "document"`, `given x in V`, `given berth2.L = 200 uH` (target has several parts: an override)."""

    span: Span
    target: Reference
    value: Expression | None
    unit: Unit | None
    tolerance: Tolerance | None
    document: str | None


@dataclass(frozen=True, slots=True)
class Input:
    """`input x = default "document"`."""

    span: Span
    name: NamePart
    default: Expression | None
    document: str | None


@dataclass(frozen=True, slots=True)
class Signal:
    """`signal x = value`."""

    span: Span
    name: NamePart
    value: Expression


@dataclass(frozen=True, slots=True)
class StateRate:
    """`d/dt x = rate initially value within low .. high held`."""

    span: Span
    name: NamePart
    rate: Expression
    initially: Expression | None
    within: tuple[Expression, Expression] | None
    held: bool


@dataclass(frozen=True, slots=True)
class Latch:
    """`latch x = value`."""

    span: Span
    name: NamePart
    value: Expression


@dataclass(frozen=True, slots=True)
class Solve:
    """`solve x from left = right initially value`."""

    span: Span
    name: NamePart
    left: Expression
    right: Expression
    initially: Expression | None


@dataclass(frozen=True, slots=True)
class Function:
    """`function f(x, y) = value`."""

    span: Span
    name: str
    name_span: Span
    parameters: tuple[str, ...]
    value: Expression


@dataclass(frozen=True, slots=True)
class Table:
    """`table f(x in unit) in unit = (x, y) (x, y) smooth hold`, or `from "file" columns "a", "b"`.

    odd: mirrored through the origin. outside: "hold", "extend", "repeat" or None (an error that names the value).
    """

    span: Span
    name: str
    name_span: Span
    argument: str
    argument_unit: Unit | None
    unit: Unit | None
    points: tuple[tuple[Expression, Expression], ...]
    file: str | None
    file_span: Span | None
    columns: tuple[str, str] | None
    smooth: bool
    odd: bool
    outside: str | None


@dataclass(frozen=True, slots=True)
class Wires:
    """`wires grid(a, b, c)` (read; not yet supported by the circuit stage)."""

    span: Span
    name: NamePart
    wires: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Assembly:
    """`assembly name(port, port) "document" { … }`. Body: statements; givens and inputs among them are its settings."""

    span: Span
    name: str
    name_span: Span
    ports: tuple[NamePart, ...]
    document: str | None
    body: tuple[Statement, ...]


@dataclass(frozen=True, slots=True)
class Each:
    """`each n in 1..6 { … }`."""

    span: Span
    variable: str
    first: Expression
    last: Expression
    body: tuple[Statement, ...]


# ---------------------------------------------------------------- events


@dataclass(frozen=True, slots=True)
class SetAction:
    """`set x = value`."""

    span: Span
    target: Reference
    value: Expression


@dataclass(frozen=True, slots=True)
class SwitchAction:
    """`open k` or `close k`; `closed` says which."""

    span: Span
    target: Reference
    closed: bool


Action: TypeAlias = SetAction | SwitchAction


@dataclass(frozen=True, slots=True)
class At:
    """`at T: action; action` or `at T { … }`."""

    span: Span
    time: Expression
    actions: tuple[Action, ...]


@dataclass(frozen=True, slots=True)
class Every:
    """`every T: action` or `every T { … }`."""

    span: Span
    period: Expression
    actions: tuple[Action, ...]


@dataclass(frozen=True, slots=True)
class Whenever:
    """`whenever x falls below y for T: action`, `whenever x rises above y`, `whenever condition`.

    edge: "rises above", "falls below" or None; then `condition` is the whole condition and `threshold` None.
    """

    span: Span
    condition: Expression
    edge: str | None
    threshold: Expression | None
    lasting: Expression | None
    actions: tuple[Action, ...]


@dataclass(frozen=True, slots=True)
class Step:
    """`step name { actions } until condition [after T] [else name after T]`.

    until: a condition, or None. after: `until after T`, time in the step before it may end. else_name, else_after: `else fault after 2 s`.
    """

    span: Span
    name: str
    actions: tuple[Action, ...]
    until: Expression | None
    after: Expression | None
    else_name: str | None
    else_span: Span | None
    else_after: Expression | None


@dataclass(frozen=True, slots=True)
class Sequence:
    """`sequence name { step … }`."""

    span: Span
    name: NamePart
    steps: tuple[Step, ...]


# ---------------------------------------------------------------- studies


@dataclass(frozen=True, slots=True)
class Start:
    """`start settled`, `start cold`, `start from study at T`; how is "settled", "cold" or "from"."""

    span: Span
    how: str
    study: str | None
    time: Expression | None


@dataclass(frozen=True, slots=True)
class RunFor:
    """`run for T`."""

    span: Span
    time: Expression


@dataclass(frozen=True, slots=True)
class Keep:
    """`keep bus.v, berth{*}.leg.duty`."""

    span: Span
    items: tuple[Reference, ...]


@dataclass(frozen=True, slots=True)
class StudyTolerance:
    """`tolerance 1e-6`."""

    span: Span
    value: Expression


@dataclass(frozen=True, slots=True)
class Sampling:
    """`sampling = exact` or `sampling = mean`."""

    span: Span
    how: str


@dataclass(frozen=True, slots=True)
class Require:
    """`[name:] require EXPR within A .. B | above A | below B | (nothing) [after T | during A .. B] ["why"]`.

    relation: "within", "above" (then `low` is the limit), "below" (then `high` is), or None: a condition that must hold.
    """

    span: Span
    name: str | None
    subject: Expression
    relation: str | None
    low: Expression | None
    high: Expression | None
    window_start: Expression | None
    window_end: Expression | None
    document: str | None


@dataclass(frozen=True, slots=True)
class Place:
    """`at T of STUDY`: where a run stands at a time."""

    span: Span
    time: Expression
    study: str
    study_span: Span


@dataclass(frozen=True, slots=True)
class Analysis:
    """A small-signal order: `modes`, `loop at S, …`, `response of Y to U`, `impedance at N`, each `[at T of STUDY]`.

    Args:
        kind: its first word.
        subjects: signals of a loop; the one output of a response; one node, or two as a pair (d and q).
        other: input of a response; second node of an impedance between two.
        low, high: of `over A .. B`; None for modes.
        source, load: elements or assemblies on either side of an impedance.
    """

    span: Span
    kind: str
    subjects: tuple[Reference, ...]
    other: Reference | None
    low: Expression | None
    high: Expression | None
    source: tuple[Reference, ...]
    load: tuple[Reference, ...]
    place: Place | None


@dataclass(frozen=True, slots=True)
class Magnify:
    """`magnify STUDY over T1 .. T2`: that stretch of a study with every switching edge."""

    span: Span
    study: str
    study_span: Span
    low: Expression
    high: Expression


@dataclass(frozen=True, slots=True)
class Study:
    """`study name { … }`. Orders also hold At, Every, Whenever and Given."""

    span: Span
    name: str
    name_span: Span
    document: str | None
    orders: tuple[Order, ...]


Order: TypeAlias = Start | RunFor | Keep | StudyTolerance | Sampling | Require | At | Every | Whenever | Given | Analysis | Magnify

Statement: TypeAlias = (
    Title
    | Use
    | ReferenceNode
    | Given
    | Input
    | Signal
    | StateRate
    | Latch
    | Solve
    | Function
    | Table
    | Wires
    | Assembly
    | Each
    | Path
    | Placement
    | At
    | Every
    | Whenever
    | Sequence
    | Study
)


@dataclass(frozen=True, slots=True)
class Netlist:
    """One file's statements in order; partial where the text has errors."""

    source: SourceText
    statements: tuple[Statement, ...]
