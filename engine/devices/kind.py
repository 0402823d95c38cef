"""What a kind of device is: terminals, settings with units, branches, equations, document and source; and the registry of kinds."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Literal

from polewise.expression.graph import ExpressionGraph, Node
from polewise.grammar.units import Dimension

SlotForm = Literal["voltage", "current", "nonlinear", "resistance", "flux", "charge", "winding"]
SettingRole = Literal["varying", "constant", "condition", "part", "inductors", "word"]


@dataclass(frozen=True, slots=True)
class SettingSpec:
    """One setting of a device or part.

    Args:
        name: as written in the netlist.
        dimension: what the value must have; None takes any.
        role: "varying" an expression of anything; "constant" fixed for a run; "condition" true or false, may vary;
            "part" a call such as transistor(9 mohm), one of `parts`; "inductors" a name or list of names of chokes; "word" one of `words`.
        default: SI value, True/False, word, or None where there is none.
        required: whether it must be given.
        document: one line for help.
        initial_only: for conditions that only state a start value (a breaker's position); they become a latch.
    """

    name: str
    dimension: Dimension | None = None
    role: SettingRole = "varying"
    default: float | bool | str | None = None
    required: bool = False
    document: str = ""
    parts: tuple[str, ...] = ()
    words: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class PartKind:
    """A part in a setting, `transistor(9 mohm)`: parameters in positional order, each also by name."""

    name: str
    parameters: tuple[SettingSpec, ...]
    document: str


@dataclass(frozen=True, slots=True)
class PartValue:
    """A part as given: values of its parameters as nodes (defaults filled in; None where not given and without default)."""

    kind: str
    values: Mapping[str, Node | None]


SettingValue = Node | PartValue | str | tuple[str, ...]


@dataclass(frozen=True, slots=True)
class BranchSlot:
    """A branch that a device brings.

    form says what its law expresses: "voltage" its v; "current" its i, from elsewhere; "nonlinear" its i as a function of its own v;
    "resistance" v / i; "flux" v = d/dt of it; "charge" i = d/dt of it; "winding" v or i, as the network stage chooses (ideal transformer).
    """

    suffix: str  # "" for the only branch of a two-terminal device
    left: str  # terminal
    right: str
    form: SlotForm


@dataclass(frozen=True, slots=True)
class LatchSpec:
    """A latch that a device brings (a breaker's `closed`); its start value comes from a setting."""

    name: str
    from_setting: str


@dataclass(frozen=True, slots=True)
class ChokeView:
    """What a diode pole sees from its mid: one equivalent choke (models.md).

    Args:
        inductance: L, node, henry.
        resistive_drop: voltage lost in the path's resistance, in the direction of the current that leaves at mid, node, volt.
        resistance: equivalent series resistance, node, ohm.
        far_potential: potential of the far end, series sources included, node, volt.
        names: the inductor branches found.
    """

    inductance: Node
    resistive_drop: Node
    resistance: Node
    far_potential: Node
    names: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class DeviceContext:
    """What a device's equations may read.

    Args:
        graph: where to build.
        name: the device's path, for messages.
        settings: values as nodes, parts or words; defaults filled in; missing optional ones absent.
        potential: terminal → node of its potential; absent terminals ("unconnected") are missing.
        branch_v, branch_i: slot suffix → symbol of the branch's voltage and current.
        forms: slot suffix → the form its law must have; differs from the slot's own only for "winding" ("voltage" or "current").
        latches: latch name → symbol.
        choke: for poles, what faces mid, else None.
        gates: for a pole in the edge picture: "upper", "lower" and "driven" (the device the duty belongs to) → condition that it is on;
            empty in the averaged picture.
        power_scale: node, 1 in a run; the operating-point search ramps constant powers with it.
        source_scale: node, 1 in a run; the same for sources.
    """

    graph: ExpressionGraph
    name: str
    settings: Mapping[str, SettingValue]
    potential: Mapping[str, Node]
    branch_v: Mapping[str, Node]
    branch_i: Mapping[str, Node]
    forms: Mapping[str, SlotForm]
    latches: Mapping[str, Node]
    choke: ChokeView | None
    power_scale: Node
    source_scale: Node
    gates: Mapping[str, Node] = field(default_factory=dict)

    def node(self, setting: str) -> Node:
        """A setting that is a value."""
        value = self.settings[setting]
        assert isinstance(value, int)
        return value

    def optional(self, setting: str) -> Node | None:
        """A setting that may be absent."""
        value = self.settings.get(setting)
        return value if isinstance(value, int) else None

    def part(self, setting: str) -> PartValue:
        """A setting that is a part."""
        value = self.settings[setting]
        assert isinstance(value, PartValue)
        return value


@dataclass(frozen=True, slots=True)
class DeviceEquations:
    """A device's equations: slot suffix → expression of the slot's form; readings beyond v, i, p; warnings that settle reports.

    flags: name → condition node that, when true at an operating point or in a run, is reported ("duty at its limit", "collapsed").
    """

    laws: Mapping[str, Node]
    readings: Mapping[str, Node] = field(default_factory=dict)
    flags: Mapping[str, Node] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class DeviceKind:
    """A kind of device.

    Args:
        name: as written, `pole`, `breaker`.
        terminals: in positional order. ("left", "right") for a two-terminal device in a box.
        positional: settings that may be given without their name, in order (after the terminals of a placement).
        settings: all settings.
        slots: its branches.
        readings: name → dimension of what can be read from it beside v, i, p and terminal currents.
        conditions: which of the readings are true or false.
        latches: what events may set.
        equations: builds the equations.
        check: facts wrong in the settings' combination → sentence and hint, or None.
        category: "loss" (what it absorbs is lost), "load" or "source" for the power balance.
        document, source: for help and docs.
        switching: whether it is a pole (has `rate`, faces a choke).
    """

    name: str
    terminals: tuple[str, ...]
    settings: tuple[SettingSpec, ...]
    slots: tuple[BranchSlot, ...]
    equations: Callable[[DeviceContext], DeviceEquations]
    positional: tuple[str, ...] = ()
    readings: Mapping[str, Dimension] = field(default_factory=dict)
    latches: tuple[LatchSpec, ...] = ()
    check: Callable[[Mapping[str, SettingValue]], tuple[str, str] | None] | None = None
    category: Literal["loss", "load", "source"] = "loss"
    document: str = ""
    source: str = ""
    switching: bool = False
    conditions: tuple[str, ...] = ()

    @property
    def two_terminal(self) -> bool:
        """Whether it goes into a box on a path."""
        return self.terminals == ("left", "right")

    def setting(self, name: str) -> SettingSpec | None:
        """A setting by name."""
        return next((s for s in self.settings if s.name == name), None)


KINDS: dict[str, DeviceKind] = {}
PARTS: dict[str, PartKind] = {}


def register(kind: DeviceKind) -> DeviceKind:
    """Add a kind to the registry."""
    assert kind.name not in KINDS
    KINDS[kind.name] = kind
    return kind


def register_part(part: PartKind) -> PartKind:
    """Add a part kind to the registry."""
    assert part.name not in PARTS
    PARTS[part.name] = part
    return part
