"""Curves made ready for drawing: few points however long the run, no extreme lost; families of like traces as one band."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from polewise.results.curve import Curve, FloatArray

BINS: Final = 1500  # columns of a figure that a reader can tell apart
_SUBDIVISION_MAX: Final = 400  # points drawn for one long step
_POINTS_MAX: Final = 4  # points a bin may hold before they are thinned
_NUMBER: Final = re.compile(r"\d+")


def polyline(curve: Curve, bins: int = BINS) -> tuple[FloatArray, FloatArray]:
    """Points (time, value) to join by straight lines: the curve itself; where a bin holds many points only its first, lowest, highest, last."""
    if curve.is_empty:
        return np.zeros(0), np.zeros(0)
    span = curve.end_s - curve.begin_s
    time, value = _refined(curve, span / bins)
    return (time, value) if time.size <= _POINTS_MAX * bins else _thinned(time, value, curve.begin_s, span, bins)


def _thinned(time: FloatArray, value: FloatArray, begin_s: float, span_s: float, bins: int) -> tuple[FloatArray, FloatArray]:
    """At most four points of each bin, in their order."""
    index = np.minimum(((time - begin_s) / span_s * bins).astype(np.int64), bins - 1)
    first = np.flatnonzero(np.diff(index, prepend=-1))
    last = np.append(first[1:], time.size) - 1
    bin_of = np.cumsum(np.diff(index, prepend=-1) != 0) - 1
    lowest, highest = np.fmin.reduceat(value, first), np.fmax.reduceat(value, first)
    keep = np.zeros(time.size, dtype=bool)
    keep[first] = keep[last] = True
    for extreme in (lowest, highest):
        hits = np.flatnonzero(value == extreme[bin_of])
        keep[hits[np.flatnonzero(np.diff(bin_of[hits], prepend=-1))]] = True
    return time[keep], value[keep]


def _refined(curve: Curve, width_s: float) -> tuple[FloatArray, FloatArray]:
    """Each piece from its start to its end in parts of about width_s, through its own extremes; at a jump both sides."""
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
    return curve.start[piece] + u * curve.length[piece], value


@dataclass(frozen=True, slots=True, eq=False)
class Band:
    """The lowest and highest value of several traces over time, each shape (b,)."""

    time: FloatArray
    low: FloatArray
    high: FloatArray
    middle: FloatArray


def band(curves: Iterable[Curve], begin_s: float, end_s: float, bins: int = BINS) -> Band:
    """The band that holds all curves; `middle` is their mean. Curves are taken one at a time."""
    edges = np.linspace(begin_s, end_s, bins + 1)
    low, high, total = np.full(bins + 1, np.inf), np.full(bins + 1, -np.inf), np.zeros(bins + 1)
    count = 0
    for curve in curves:
        value = curve.at(edges)
        value = np.where(np.isnan(value), curve.last_value if not curve.is_empty else np.nan, value)
        low, high, total = np.fmin(low, value), np.fmax(high, value), total + value
        smallest, largest = curve.piece_ranges()
        index = np.clip(((curve.start - begin_s) / (end_s - begin_s) * bins).astype(np.int64), 0, bins)
        np.fmin.at(low, index, smallest)
        np.fmax.at(high, index, largest)
        count += 1
    return Band(edges, low, high, total / max(count, 1))


def family(name: str) -> str:
    """What members of one family share: "berth3.choke.i" belongs to "berth{*}.choke.i"."""
    return _NUMBER.sub("{*}", name)


def families(names: Sequence[str]) -> dict[str, list[str]]:
    """Names by family, in order."""
    groups: dict[str, list[str]] = {}
    for name in names:
        groups.setdefault(family(name), []).append(name)
    return groups
