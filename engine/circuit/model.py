"""The checked, flat circuit: every instance expanded, every name resolved, all values SI, each thing with its place in the text.

Expressions are nodes of one ExpressionGraph. Their leaves are symbols of these kinds (kind, name):
  time ""            study time, s
  potential NODE     potential of a node against its island's reference
  v BRANCH, i BRANCH voltage and current of a branch
  reading DEV.NAME   a device's further reading (leg.duty)
  signal NAME        a named expression
  state NAME         a `d/dt` state
  unknown NAME       a `solve` unknown
  latch NAME         a latch, breakers' `closed` included
  sampled NAME       a value held by a sampler
  delayed NAME       a delayed value
  averaged NAME      a sliding average
  rate NAME          the value of a `d/dt` of an expression inside an equation box
Terminal and port currents, `p` and path readings are expressions of these.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import Enum
from typing import TYPE_CHECKING, Literal

from polewise.devices.kind import SettingValue
from polewise.expression.graph import ExpressionGraph, Node
from polewise.grammar import units
from polewise.grammar.source import Span
from polewise.grammar.units import Dimension

if TYPE_CHECKING:
    from polewise.circuit.expansion import Expansion as NameIndex


class Domain(Enum):
    """A kind of island: what goes across and what goes through."""

    ELECTRICAL = ("v", "i", units.VOLTAGE, units.CURRENT)
    ROTATION = ("speed", "torque", units.RATE, units.TORQUE)
    TRANSLATION = ("speed", "force", units.SPEED, units.FORCE)
    HEAT = ("temp", "heat", units.TEMPERATURE, units.POWER)

    @property
    def across(self) -> str:
        """Name of the across value."""
        return str(self.value[0])

    @property
    def through(self) -> str:
        """Name of the through value."""
        return str(self.value[1])

    @property
    def across_dimension(self) -> Dimension:
        """Dimension of the across value."""
        dimension: Dimension = self.value[2]
        return dimension

    @property
    def through_dimension(self) -> Dimension:
        """Dimension of the through value."""
        dimension: Dimension = self.value[3]
        return dimension


class Law(Enum):
    """How a branch relates its v and i; `expression` of the branch is what the comment says."""

    VOLTAGE = "voltage"  # v = expression (may read the branch's own i)
    CURRENT = "current"  # i = expression (may read the branch's own v)
    RESISTANCE = "resistance"  # v = expression * i
    CONDUCTANCE = "conductance"  # i = expression * v
    CHARGE = "charge"  # i = d/dt expression
    FLUX = "flux"  # v = d/dt expression
    IMPLICIT = "implicit"  # 0 = expression
    DEVICE = "device"  # the device's equations say


@dataclass(frozen=True, slots=True)
class CircuitNode:
    """A node. Unnamed nodes between the boxes of a path have names with "#" ("feeder#1") and `named` False."""

    name: str
    domain: Domain
    is_reference: bool
    named: bool
    owner: str  # path of the assembly it was declared in, "" at top level
    span: Span


@dataclass(frozen=True, slots=True)
class Branch:
    """A two-terminal element, or one slot of a device.

    Args:
        name: path of the box or device slot: "feeder.r", "berth1.choke.l", "supply" (only box of a path), "berth1.leg.mid_arm" (slot).
        left, right: node names; v = potential(left) - potential(right), i enters at left.
        law, expression: see Law. None for DEVICE.
        initial: start value in SI as a constant node: V for CHARGE, A for FLUX, else a guess. None: zero.
        device, slot: for DEVICE branches.
    """

    name: str
    left: str
    right: str
    law: Law
    expression: Node | None
    initial: Node | None
    owner: str
    span: Span
    domain: Domain = Domain.ELECTRICAL
    device: str | None = None
    slot: str = ""
    value_span: Span | None = None


@dataclass(frozen=True, slots=True)
class Device:
    """A placed device: pole, breaker, diode, constant power, transformer."""

    name: str
    kind: str
    terminals: Mapping[str, str]  # terminal → node name; unconnected ones absent
    settings: Mapping[str, SettingValue]
    branches: Mapping[str, str]  # slot suffix → branch name
    latches: Mapping[str, str]  # latch name ("closed") → flat latch name ("feeder.k.closed")
    owner: str
    span: Span


@dataclass(frozen=True, slots=True)
class Path:
    """A named path as written, for readings and reports: branches of each of its items in order (parallel boxes side by side)."""

    name: str
    left: str
    right: str
    items: tuple[tuple[str, ...], ...]
    owner: str
    span: Span


@dataclass(frozen=True, slots=True)
class SignalDef:
    """A named expression."""

    name: str
    expression: Node
    dimension: Dimension
    owner: str
    span: Span
    is_condition: bool = False


@dataclass(frozen=True, slots=True)
class StateDef:
    """d/dt name = rate; low, high: bounds (varying nodes) with anti-windup; held: keeps its start in a settled start.

    `filter_of`: for the states of a filter block, the block's name, else None."""

    name: str
    rate: Node
    initial: Node | None
    low: Node | None
    high: Node | None
    held: bool
    dimension: Dimension
    owner: str
    span: Span


@dataclass(frozen=True, slots=True)
class UnknownDef:
    """solve name from 0 = residual."""

    name: str
    residual: Node
    residual_dimension: Dimension
    initial: Node | None
    dimension: Dimension
    owner: str
    span: Span


@dataclass(frozen=True, slots=True)
class RateDef:
    """`d/dt expression` inside an equation box: symbol ("rate", name) stands for its value."""

    name: str
    expression: Node
    dimension: Dimension  # of the expression, not of its rate
    owner: str
    span: Span


@dataclass(frozen=True, slots=True)
class LatchDef:
    """A value that only events change."""

    name: str
    initial: Node  # constant
    dimension: Dimension
    is_condition: bool
    owner: str
    span: Span


@dataclass(frozen=True, slots=True)
class SamplerDef:
    """A clocked block: at each instant k*period all `updates` (sampled symbol name → new value) apply together, read with their own block's old
    values. Blocks that share an instant update one after the other in the order of Circuit.samplers: a block reads the new values of those
    listed before it and the old ones of those listed after it.

    mean: the s-domain equivalent used with `sampling = mean` is derived by the equations stage from these same updates.
    """

    name: str
    period_s: float
    updates: tuple[tuple[str, Node], ...]
    dimensions: tuple[Dimension, ...]
    owner: str
    span: Span


@dataclass(frozen=True, slots=True)
class DelayDef:
    """`expression delayed by delay_s`."""

    name: str
    expression: Node
    delay_s: float
    dimension: Dimension
    owner: str
    span: Span


@dataclass(frozen=True, slots=True)
class AverageDef:
    """`expression averaged over window_s`, the window ending now."""

    name: str
    expression: Node
    window_s: float
    dimension: Dimension
    owner: str
    span: Span


@dataclass(frozen=True, slots=True)
class Assignment:
    """`set target = value`: target_kind "latch" or "state"."""

    target_kind: Literal["latch", "state"]
    target: str
    value: Node
    span: Span


@dataclass(frozen=True, slots=True)
class TimeEvent:
    """At one time (s, from the study's start).

    entry: it belongs to what the circuit is at its very start (the first step of a sequence); a study that starts from another one leaves it out.
    """

    time_s: float
    assignments: tuple[Assignment, ...]
    span: Span
    entry: bool = False


@dataclass(frozen=True, slots=True)
class ClockEvent:
    """Every period_s, first at 0. All values are read before any is written."""

    name: str
    period_s: float
    assignments: tuple[Assignment, ...]
    span: Span


@dataclass(frozen=True, slots=True)
class ConditionEvent:
    """On becoming true (and, if lasting_s > 0, having stayed true for that long).

    crossing: "rises above"/"falls below": true at the start does not count as becoming true. Otherwise it does.
    text: how a log names it.
    """

    name: str
    condition: Node
    lasting_s: float
    crossing: bool
    assignments: tuple[Assignment, ...]
    span: Span
    text: str


@dataclass(frozen=True, slots=True)
class PortDef:
    """A port of an assembly instance: its node, and its current into the port as an expression of branch currents."""

    name: str  # "berth2.out"
    node: str
    current: Node


@dataclass(frozen=True, slots=True)
class AssemblyInstance:
    """A placed assembly."""

    name: str  # path
    kind: str
    ports: Mapping[str, str]  # port → node
    document: str | None
    span: Span


@dataclass(frozen=True, slots=True)
class GivenDef:
    """A given as it stands in this circuit, for reports and sweeps."""

    name: str  # path
    value: float
    dimension: Dimension
    tolerance: float | None  # absolute, SI
    normal: bool
    document: str | None
    owner: str
    span: Span
    is_condition: bool = False


@dataclass(frozen=True, slots=True)
class Quantity:
    """Something that can be read: expression and dimension under the netlist's own spelling."""

    name: str
    expression: Node
    dimension: Dimension
    is_condition: bool = False


@dataclass(frozen=True, slots=True)
class Requirement:
    """`require …`. measure: "value" (the expression itself at every time of the window), "condition" (must hold at every time),
    or a measure's name ("settling_time", "overshoot", …) with its constant parameters.

    low, high: constant or varying nodes, None where there is no such limit. window_s: (start, end), end None for the study's end.
    text: the requirement as written, for reports.
    """

    name: str
    measure: str
    subject: Quantity
    parameters: tuple[float, ...]
    dimension: Dimension  # of the measured value
    low: Node | None
    high: Node | None
    window_s: tuple[float, float | None]
    text: str
    document: str | None
    span: Span


@dataclass(frozen=True, slots=True)
class AnalysisOrder:
    """A small-signal order of a study.

    Args:
        subjects: signals of a loop, the output of a response, the node of an impedance or a pair of them. other: a response's input, an
            impedance's second node, or "".
        low_hz, high_hz: the range, Hz; 0 for modes.
        source, load: elements or assemblies on either side.
        place: (study, time in s) where it is asked; None: the operating point.
    """

    kind: Literal["modes", "loop", "response", "impedance"]
    subjects: tuple[str, ...]
    other: str
    low_hz: float
    high_hz: float
    source: tuple[str, ...]
    load: tuple[str, ...]
    place: tuple[str, float] | None
    text: str
    span: Span


@dataclass(frozen=True, slots=True)
class MagnifiedStretch:
    """`magnify STUDY over T1 .. T2`: a stretch of another study, s of its time, to be run with every switching edge."""

    study: str
    begin_s: float
    end_s: float
    span: Span


@dataclass(frozen=True, slots=True)
class StudyDef:
    """A study as read; its own givens are applied by expanding the circuit for it."""

    name: str
    document: str | None
    start: Literal["settled", "cold", "from"]
    start_study: str | None
    start_time_s: float | None
    run_for_s: float | None
    keep: tuple[Quantity, ...]  # empty: the default selection
    requirements: tuple[Requirement, ...]
    time_events: tuple[TimeEvent, ...]
    clock_events: tuple[ClockEvent, ...]
    condition_events: tuple[ConditionEvent, ...]
    tolerance: float | None
    sampling: Literal["exact", "mean"] | None
    has_givens: bool
    span: Span
    analyses: tuple[AnalysisOrder, ...] = ()
    analysis_requirements: tuple[Requirement, ...] = ()  # on small-signal answers; measure: a name of circuit.analyses
    magnifies: MagnifiedStretch | None = None  # then it runs nothing of its own

    @property
    def asks_analysis(self) -> bool:
        """Whether it asks for small-signal answers."""
        return bool(self.analyses or self.analysis_requirements)


@dataclass(frozen=True, slots=True)
class Circuit:
    """One circuit. Mappings keep the order of the text."""

    graph: ExpressionGraph
    title: str
    nodes: Mapping[str, CircuitNode]
    branches: Mapping[str, Branch]
    devices: Mapping[str, Device]
    paths: Mapping[str, Path]
    signals: Mapping[str, SignalDef]
    states: Mapping[str, StateDef]
    unknowns: Mapping[str, UnknownDef]
    rates: Mapping[str, RateDef]
    latches: Mapping[str, LatchDef]
    samplers: tuple[SamplerDef, ...]
    delays: Mapping[str, DelayDef]
    averages: Mapping[str, AverageDef]
    time_events: tuple[TimeEvent, ...]
    clock_events: tuple[ClockEvent, ...]
    condition_events: tuple[ConditionEvent, ...]
    ports: Mapping[str, PortDef]
    assemblies: Mapping[str, AssemblyInstance]
    givens: Mapping[str, GivenDef]
    studies: Mapping[str, StudyDef]
    files: tuple[str, ...] = ()
    aliases: Mapping[str, str] = field(default_factory=dict)  # readable name → flat name, e.g. path of one box → its branch
    inputs: tuple[str, ...] = ()  # inputs at top level, kept as latches that Python sets
    names: NameIndex | None = field(default=None, compare=False, repr=False)  # how circuit.quantities reads names; nothing else uses it
