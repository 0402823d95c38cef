"""Tables: points or CSV columns to piecewise cubics, and reading them."""

from __future__ import annotations

from typing import TYPE_CHECKING, Final

from polewise.circuit import file_messages, name_messages, value_messages
from polewise.circuit.asking import Asked, constant, fits, poisoned
from polewise.circuit.dimensions import CONDITION, POISON, UNKNOWN, Quality, quality_of_unit, settled
from polewise.circuit.scope import Env, Value
from polewise.circuit.things import DefinitionThing
from polewise.expression.graph import Node, PiecewiseCubic
from polewise.grammar import syntax
from polewise.grammar.source import Span

if TYPE_CHECKING:
    from polewise.circuit.expansion import Expansion

_WRONG: Final = -2
_UNBUILT: Final = -1

Points = list[tuple[float, float]]


def read_table(x: Expansion, e: syntax.Call, env: Env, thing: DefinitionThing) -> Value:
    """`f(x)` of a table."""
    table = thing.written
    assert isinstance(table, syntax.Table)
    if thing.number == _UNBUILT:
        build_table(x, thing)
    if len(e.arguments) != 1:
        x.report.add(name_messages.argument_count(e.span, e.name, len(e.arguments), table.argument, table.name_span))
        return poisoned(x)
    node, quality = x.lower(e.arguments[0], env)
    if thing.number == _WRONG or quality is POISON:
        return poisoned(x)
    if not fits(x, quality, Asked(thing.quality_in, f"the table `{table.name}`", table.name_span), e.arguments[0].span):
        return poisoned(x)
    value = x.graph.value_of(node)
    cubic = x.graph.tables[thing.number]
    if value is not None and cubic.closed and not cubic.knots[0] <= value <= cubic.knots[-1]:
        x.report.add(
            value_messages.outside_table(e.arguments[0].span, table.name, value, cubic.knots[0], cubic.knots[-1], thing.quality_in, table.name_span)
        )
        return poisoned(x)
    if table.outside is not None and "repeat" in table.outside:
        node = _wrapped(x, node, cubic.knots[0], cubic.knots[-1])
    return x.graph.table(thing.number, node), thing.quality_out


def _wrapped(x: Expansion, node: Node, first: float, last: float) -> Node:
    """The argument moved by whole periods into [first, last)."""
    g = x.graph
    period = g.constant(last - first)
    turns = g.floor(g.divide(g.subtract(node, g.constant(first)), period))
    return g.subtract(node, g.multiply(period, turns))


def build_table(x: Expansion, thing: DefinitionThing) -> None:
    """Check a table's points and register it with the graph; thing.number is its number, or tells that it is wrong."""
    table = thing.written
    assert isinstance(table, syntax.Table)
    thing.number = _WRONG
    spans: list[Span] = []
    points = _points_from_file(x, thing, table) if table.file is not None else _points_as_written(x, thing, table, spans)
    if points is None:
        return
    outside = table.outside or ""
    for k in range(1, len(points)):
        if points[k][0] <= points[k - 1][0]:
            x.report.add(value_messages.table_order(spans[k] if spans else table.file_span or table.name_span, table.name, points[k][0], k + 1))
            return
    if table.odd:
        odd = _mirrored(points)
        if odd is None:
            x.report.add(value_messages.table_not_odd(spans[0] if spans else table.name_span, table.name))
            return
        points = odd
    if len(points) < 2:
        x.report.add(value_messages.table_too_short(table.name_span, table.name))
        return
    thing.number = x.graph.add_table(_cubic(table.name, points, smooth=table.smooth, outside=outside.replace("odd", "").strip()))


def _mirrored(points: Points) -> Points | None:
    """Points with their mirror images through the origin."""
    x0, y0 = points[0]
    if x0 < 0.0 or (x0 == 0.0 and y0 != 0.0):
        return None
    right = points if x0 > 0.0 else points[1:]
    middle = [] if x0 > 0.0 else [(0.0, 0.0)]
    return [*((-x, -y) for x, y in reversed(right)), *middle, *right]


# ---------------------------------------------------------------- where the points come from


def _points_as_written(x: Expansion, thing: DefinitionThing, table: syntax.Table, spans: list[Span]) -> Points | None:
    before = len(x.report.found)
    kinds: list[Quality] = [UNKNOWN, UNKNOWN]
    first: list[Span | None] = [None, None]
    for k, unit in enumerate((table.argument_unit, table.unit)):
        if unit is not None:
            kinds[k], first[k] = quality_of_unit(unit), table.name_span
    points: Points = []
    for pair in table.points:
        numbers = []
        for k, e in enumerate(pair):
            got = constant(x, e, Env(thing.scope, thing.env.frame, thing.flat, memory="a table has no memory"), "a point of a table")
            if got is None:
                continue
            node, quality = got
            if not fits(x, quality, Asked(kinds[k], f"the table `{table.name}`", first[k]), e.span):
                continue
            if kinds[k].sort == "unknown" and quality.sort != "zero":
                kinds[k], first[k] = quality, e.span
            value = x.finite(node)
            if value is not None:
                numbers.append(value)
        if len(numbers) == 2:
            points.append((numbers[0], numbers[1]))
            spans.append(pair[0].span)
    thing.quality_in, thing.quality_out = settled(kinds[0]), settled(kinds[1])
    if CONDITION in kinds:
        x.report.add(value_messages.condition_as_number(table.name_span, "a table"))
    return points if len(x.report.found) == before and len(points) == len(table.points) else None


def _points_from_file(x: Expansion, thing: DefinitionThing, table: syntax.Table) -> Points | None:
    thing.quality_in = quality_of_unit(table.argument_unit)
    thing.quality_out = quality_of_unit(table.unit)
    assert table.file is not None
    span = table.file_span or table.name_span
    file = x.csv.get((span.source.name, table.file))
    if file is None:
        return None  # reported by circuit.load
    if table.columns is None:
        if len(file.header) != 2:
            x.report.add(file_messages.csv_columns_needed(span, table.file, file.header))
            return None
        places = [0, 1]
    else:
        for column in table.columns:
            if column not in file.header:
                x.report.add(file_messages.csv_no_column(span, table.file, column, file.header))
                return None
        places = [file.header.index(column) for column in table.columns]
    points: Points = []
    for line, row in file.rows:
        pair = []
        for place, unit in zip(places, (table.argument_unit, table.unit), strict=True):
            try:
                number = float(row[place]) if place < len(row) else float("nan")
            except ValueError:
                number = float("nan")
            value = number if unit is None else unit.to_si(number)
            if not abs(value) < float("inf"):
                x.report.add(file_messages.csv_not_number(span, table.file, line, file.header[place]))
                return None
            pair.append(value)
        points.append((pair[0], pair[1]))
    return points


# ---------------------------------------------------------------- the curve


def _cubic(name: str, points: Points, *, smooth: bool, outside: str) -> PiecewiseCubic:
    knots = tuple(x for x, _ in points)
    slopes = _smooth_slopes(points, periodic=outside == "repeat") if smooth else None
    segments: list[tuple[float, float, float, float]] = []
    for k in range(len(points) - 1):
        (x0, y0), (x1, y1) = points[k], points[k + 1]
        width, secant = x1 - x0, (y1 - y0) / (x1 - x0)
        if slopes is None:
            segments.append((y0, secant, 0.0, 0.0))
        else:
            m0, m1 = slopes[k], slopes[k + 1]
            segments.append((y0, m0, (3.0 * secant - 2.0 * m0 - m1) / width, (m0 + m1 - 2.0 * secant) / width**2))
    first, last = points[0][1], points[-1][1]
    if outside == "hold":
        left, right = (first, 0.0, 0.0, 0.0), (last, 0.0, 0.0, 0.0)
    else:  # extend; where the table is closed or repeats, rounding alone may reach these
        slope_left = slopes[0] if slopes is not None else segments[0][1]
        slope_right = slopes[-1] if slopes is not None else segments[-1][1]
        left, right = (first, slope_left, 0.0, 0.0), (last, slope_right, 0.0, 0.0)
    return PiecewiseCubic(name, knots, (left, *segments, right), closed=outside == "")


def _smooth_slopes(points: Points, *, periodic: bool) -> list[float]:
    """Slopes of the monotone cubic through the points.

    Source: Fritsch & Carlson 1980, SIAM Journal on Numerical Analysis 17(2), with the circle of radius 3 as the region of monotonicity.
    """
    secants = [(points[k + 1][1] - points[k][1]) / (points[k + 1][0] - points[k][0]) for k in range(len(points) - 1)]
    count = len(points)
    before = [secants[-1] if periodic else secants[0], *secants]
    after = [*secants, secants[0] if periodic else secants[-1]]
    slopes = [0.0 if before[k] * after[k] <= 0.0 else 0.5 * (before[k] + after[k]) for k in range(count)]
    for k, secant in enumerate(secants):
        if secant == 0.0:
            slopes[k] = slopes[k + 1] = 0.0
            continue
        a, b = slopes[k] / secant, slopes[k + 1] / secant
        size = (a * a + b * b) ** 0.5
        if size > 3.0:
            slopes[k] = 3.0 / size * a * secant
            slopes[k + 1] = 3.0 / size * b * secant
    if periodic:
        slopes[0] = slopes[-1] = min(slopes[0], slopes[-1], key=abs)
    return slopes
