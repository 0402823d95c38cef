"""What a run must record: the kept quantities, and what its requirements judge by; each expression once."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

from polewise.circuit.model import Quantity, Requirement
from polewise.expression.graph import ExpressionGraph, Node
from polewise.results.recording import Column

# Readings of a pole's devices: what they are within a period, their averages do not tell.
DEVICE_READINGS = ("upper_i", "lower_i", "upper_v", "lower_v")
_STRESS_MEASURES = ("value", "peak", "lowest", "swing", "rms")
_ASK_EDGES = "ask it in a study with `magnify STUDY over T1 .. T2`, which runs every switching edge"

Limit = float | str | None  # a constant in SI, the column of a limit that varies, or no limit


@dataclass(frozen=True, slots=True)
class Judged:
    """A requirement with the columns it reads; unknowable: why an averaged run can't answer it, "" where it can."""

    requirement: Requirement
    subject: str
    low: Limit
    high: Limit
    unknowable: str = ""


@dataclass(frozen=True, slots=True)
class RecordPlan:
    """Outputs of a run, in the order of the columns that stand for them."""

    outputs: tuple[Quantity, ...]
    columns: tuple[Column, ...]
    judged: tuple[Judged, ...]


def plan_recording(
    graph: ExpressionGraph, keep: Sequence[Quantity], requirements: Sequence[Requirement], *, ripple_period_s: float | None = None
) -> RecordPlan:
    """Choose the columns.

    Args:
        graph: of the circuit, for constant limits.
        keep: what was asked for.
        requirements: of the study.
        ripple_period_s: of a run with every switching edge: the period that a ripple is looked for in; None for an averaged run.
    """
    builder = _Builder()
    for quantity in keep:
        builder.add(quantity, "kept")
    judged = []
    for requirement in requirements:
        subject = builder.add(requirement.subject, "judged")
        low = builder.limit(graph, requirement, requirement.low, "lower limit")
        high = builder.limit(graph, requirement, requirement.high, "upper limit")
        why = ""
        if ripple_period_s is None:
            why = unknowable(graph, requirement)
        elif requirement.measure == "ripple":
            requirement = replace(requirement, parameters=(ripple_period_s,))
        judged.append(Judged(requirement, subject, low, high, why))
    return RecordPlan(tuple(builder.outputs), tuple(builder.columns), tuple(judged))


def unknowable(graph: ExpressionGraph, requirement: Requirement) -> str:
    """Why an average can't answer a requirement: it asks for ripple, or for the peak stress of a pole's device."""
    if requirement.measure == "ripple":
        return f"an average has no ripple; {_ASK_EDGES}"
    if requirement.measure not in _STRESS_MEASURES:
        return ""
    read = (graph.symbols[s] for s in graph.symbols_under([requirement.subject.expression]))
    if any(kind == "reading" and name.rpartition(".")[2] in DEVICE_READINGS for kind, name in read):
        return f"the stress of a device is no average; {_ASK_EDGES}"
    return ""


class _Builder:
    """Collects columns; an expression that is recorded already is not recorded again."""

    def __init__(self) -> None:
        self.outputs: list[Quantity] = []
        self.columns: list[Column] = []
        self._name_of: dict[Node, str] = {}
        self._names: set[str] = set()

    def add(self, quantity: Quantity, role: str) -> str:
        """The column of a quantity, new or known."""
        known = self._name_of.get(quantity.expression)
        if known is not None and (role == "judged" or quantity.name in self._names):
            return known
        name = quantity.name
        number = 2
        while name in self._names:
            name = f"{quantity.name} ({number})"
            number += 1
        self._names.add(name)
        self._name_of.setdefault(quantity.expression, name)
        self.outputs.append(Quantity(name, quantity.expression, quantity.dimension, quantity.is_condition))
        self.columns.append(Column(name, quantity.dimension, quantity.is_condition, "kept" if role == "kept" else "judged"))
        return name

    def limit(self, graph: ExpressionGraph, requirement: Requirement, node: Node | None, which: str) -> Limit:
        """A limit as a number or as a column."""
        if node is None:
            return None
        value = graph.value_of(node)
        if value is not None:
            return value
        return self.add(Quantity(f"{requirement.name}: {which}", node, requirement.dimension), "judged")
