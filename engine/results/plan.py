"""What a run must record: the kept quantities, and what its requirements judge by; each expression once."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from polewise.circuit.model import Quantity, Requirement
from polewise.expression.graph import ExpressionGraph, Node
from polewise.results.recording import Column

Limit = float | str | None  # a constant in SI, the column of a limit that varies, or no limit


@dataclass(frozen=True, slots=True)
class Judged:
    """A requirement with the columns it reads."""

    requirement: Requirement
    subject: str
    low: Limit
    high: Limit


@dataclass(frozen=True, slots=True)
class RecordPlan:
    """Outputs of a run, in the order of the columns that stand for them."""

    outputs: tuple[Quantity, ...]
    columns: tuple[Column, ...]
    judged: tuple[Judged, ...]


def plan_recording(graph: ExpressionGraph, keep: Sequence[Quantity], requirements: Sequence[Requirement]) -> RecordPlan:
    """Choose the columns.

    Args:
        graph: of the circuit, for constant limits.
        keep: what was asked for.
        requirements: of the study.
    """
    builder = _Builder()
    for quantity in keep:
        builder.add(quantity, "kept")
    judged = []
    for requirement in requirements:
        subject = builder.add(requirement.subject, "judged")
        low = builder.limit(graph, requirement, requirement.low, "lower limit")
        high = builder.limit(graph, requirement, requirement.high, "upper limit")
        judged.append(Judged(requirement, subject, low, high))
    return RecordPlan(tuple(builder.outputs), tuple(builder.columns), tuple(judged))


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
