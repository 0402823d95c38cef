"""Curves made ready for drawing: few points however long the run, no extreme lost; families of like traces as one band."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from polewise.results.curve import Curve, FloatArray, IntArray

BINS: Final = 1500  # columns of a figure that a reader can tell apart
_SUBDIVISION_MAX: Final = 400  # points drawn for one long step
_POINTS_MAX: Final = 4  # points a bin may hold before they are thinned
_NUMBER: Final = re.compile(r"\d+")


def polyline(curve: Curve, bins: int = BINS) -> tuple[FloatArray, FloatArray]:
    """Points (time, value) to join by straight lines: long steps as the curve runs, through their extremes; many short ones by what they span."""
    if curve.is_empty:
        return np.zeros(0), np.zeros(0)
    width_s = (curve.end_s - curve.begin_s) / bins
    if curve.start.size <= 2 * bins:
        return _refined(curve, width_s)
    is_long = curve.length >= width_s
    long = np.flatnonzero(is_long)
    times, values, order = [], [], []
    if long.size:
        part = Curve(curve.start[long], curve.length[long], curve.coefficient[long])
        t, v, piece = _refined_pieces(part, width_s)
        times.append(t)
        values.append(v)
        order.append(long[piece])
    short = np.flatnonzero(~is_long)
    if short.size:
        t, v, piece = _spanned(curve, short, width_s)
        times.append(t)
        values.append(v)
        order.append(piece)
    place = np.argsort(np.concatenate(order), kind="stable")
    return np.concatenate(times)[place], np.concatenate(values)[place]


def _spanned(curve: Curve, short: IntArray, width_s: float) -> tuple[FloatArray, FloatArray, IntArray]:
    """Short pieces, neighbours within one bin as four points: first value, both extremes in the order that is likelier, last value."""
    index = ((curve.start[short] - curve.begin_s) / width_s).astype(np.int64)
    fresh = np.ones(short.size, dtype=bool)
    fresh[1:] = (np.diff(index) != 0) | (np.diff(short) != 1)
    first = np.flatnonzero(fresh)
    last = np.append(first[1:], short.size) - 1
    low, high = curve.piece_ranges()
    low, high = np.fmin.reduceat(low[short], first), np.fmax.reduceat(high[short], first)
    a, b = short[first], short[last]
    begin, end = curve.coefficient[a, 0], curve.coefficient[b].sum(axis=1)
    start_s, end_s = curve.start[a], curve.start[b] + curve.length[b]
    middle_s = 0.5 * (start_s + end_s)
    low_first = begin - low < high - begin
    one, other = np.where(low_first, low, high), np.where(low_first, high, low)
    times = np.column_stack([start_s, middle_s, middle_s, end_s]).ravel()
    return times, np.column_stack([begin, one, other, end]).ravel(), np.repeat(a, 4)


def _refined(curve: Curve, width_s: float) -> tuple[FloatArray, FloatArray]:
    times, values, _ = _refined_pieces(curve, width_s)
    return times, values


def _refined_pieces(curve: Curve, width_s: float) -> tuple[FloatArray, FloatArray, IntArray]:
    """Each piece from its start to its end in parts of about width_s, through its own extremes; at a jump both sides. With each point's piece."""
    stationary = curve.stationary()
    turns = np.maximum(*stationary) > 0.0
    parts = np.clip(np.ceil(curve.length / width_s), 1, _SUBDIVISION_MAX).astype(np.int64)
    parts[~np.any(curve.coefficient[:, 2:] != 0.0, axis=1)] = 1
    parts[turns] = np.maximum(parts[turns], 4)
    first = np.cumsum(parts + 1) - (parts + 1)
    piece = np.repeat(np.arange(parts.size), parts + 1)
    u = (np.arange(piece.size) - first[piece]) / parts[piece]
    for place in stationary:  # the nearest inner point moves onto the extreme
        k = np.flatnonzero(place > 0.0)
        u[first[k] + np.clip(np.rint(place[k] * parts[k]).astype(np.int64), 1, parts[k] - 1)] = place[k]
    c = curve.coefficient[piece]
    value = c[:, 0] + u * (c[:, 1] + u * (c[:, 2] + u * c[:, 3]))
    return curve.start[piece] + u * curve.length[piece], value, piece


@dataclass(frozen=True, slots=True, eq=False)
class Band:
    """The lowest and highest value of several traces over time, each shape (b,); which of them reach the whole band's lowest and highest."""

    time: FloatArray
    low: FloatArray
    high: FloatArray
    middle: FloatArray
    lowest: int
    highest: int


def band(curves: Iterable[Curve], begin_s: float, end_s: float, bins: int = BINS) -> Band:
    """The band that holds all curves; `middle` is their mean. Curves are taken one at a time."""
    edges = np.linspace(begin_s, end_s, bins + 1)
    low, high, total = np.full(bins + 1, np.inf), np.full(bins + 1, -np.inf), np.zeros(bins + 1)
    lowest, highest = (np.inf, 0), (-np.inf, 0)
    count = 0
    for curve in curves:
        value = curve.at(edges)
        value = np.where(np.isnan(value), curve.last_value if not curve.is_empty else np.nan, value)
        total += value
        own_low, own_high = value.copy(), value
        smallest, largest = curve.piece_ranges()
        short = curve.length <= (end_s - begin_s) / bins  # longer ones are seen at the edges
        index = np.clip(((curve.start[short] - begin_s) / (end_s - begin_s) * bins).astype(np.int64), 0, bins)
        np.fmin.at(own_low, index, smallest[short])
        np.fmax.at(own_high, index, largest[short])
        low, high = np.fmin(low, own_low), np.fmax(high, own_high)
        if own_low.min() < lowest[0]:
            lowest = (float(own_low.min()), count)
        if own_high.max() > highest[0]:
            highest = (float(own_high.max()), count)
        count += 1
    return Band(edges, low, high, total / max(count, 1), lowest[1], highest[1])


def family(name: str) -> str:
    """What members of one family share: "berth3.choke.i" belongs to "berth{*}.choke.i"."""
    return _NUMBER.sub("{*}", name)


def families(names: Sequence[str]) -> dict[str, list[str]]:
    """Names by family, in order."""
    groups: dict[str, list[str]] = {}
    for name in names:
        groups.setdefault(family(name), []).append(name)
    return groups
