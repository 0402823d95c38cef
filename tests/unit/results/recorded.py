"""Recordings made by hand for tests: rows as a three-stage run would write them."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from itertools import pairwise

import numpy as np

from polewise.circuit.model import Quantity, Requirement
from polewise.grammar import units
from polewise.grammar.source import no_span
from polewise.grammar.units import Dimension
from polewise.results.curve import AFTER, BEFORE, END, INTERIOR, FloatArray
from polewise.results.plan import Judged, Limit
from polewise.results.recording import Column, MemorySink, Recording

INNER = (0.15505102572168220, 0.64494897427831781)  # where a three-stage collocation step has its inner points
Function = Callable[[float], float]


def rows(edges: Sequence[float], functions: Sequence[Function], jumps: Sequence[float] = ()) -> FloatArray:
    """Rows of steps between these edges; a function is asked a hair before a jump for the value before it."""
    got: list[list[float]] = [[edges[0], END, *(f(edges[0]) for f in functions)]]
    for start, stop in pairwise(edges):
        for c in INNER:
            t = start + c * (stop - start)
            got.append([t, INTERIOR, *(f(t) for f in functions)])
        if stop in jumps:
            before = np.nextafter(stop, 0.0)
            got.append([stop, BEFORE, *(f(before) for f in functions)])
            got.append([stop, AFTER, *(f(stop) for f in functions)])
        else:
            got.append([stop, END, *(f(stop) for f in functions)])
    return np.array(got, dtype=np.float64)


def recording(edges: Sequence[float], functions: dict[str, Function], jumps: Sequence[float] = (), condition: Sequence[str] = ()) -> Recording:
    """A recording of volts (and conditions)."""
    columns = tuple(Column(name, units.NONE if name in condition else units.VOLTAGE, name in condition) for name in functions)
    sink = MemorySink(columns)
    sink.write(rows(edges, list(functions.values()), jumps))
    return sink.finish()


def judged(
    subject: str,
    low: Limit = None,
    high: Limit = None,
    *,
    measure: str = "value",
    parameters: tuple[float, ...] = (),
    window_s: tuple[float, float | None] = (0.0, None),
    dimension: Dimension = units.VOLTAGE,
) -> Judged:
    """A requirement on one column."""
    quantity = Quantity(subject, 0, units.VOLTAGE, measure == "condition")
    return Judged(
        Requirement("r", measure, quantity, parameters, dimension, None, None, window_s, f"{measure} of {subject}", None, no_span()),
        subject,
        low,
        high,
    )
