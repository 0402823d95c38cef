"""A recorded quantity between its points: one polynomial per step, with exact extremes, integrals, crossings and values at any time.

A recording is rows of (time, flag, values). Flags: INTERIOR a point inside a step, END a step's end, BEFORE a step's end just before a
jump, AFTER the same instant just after it. A step's start, its interior points and its end are joined by the one cubic (or lower)
polynomial through them; nothing is ever drawn across a jump.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

INTERIOR: Final = 0
END: Final = 1
BEFORE: Final = 2
AFTER: Final = 3

_POINTS_MAX: Final = 4  # a cubic's; a step with more interior points becomes several pieces

_GAP_LEAST: Final = 1e-3  # between the points of a step, as a share of its length; methods have no smaller one


@dataclass(frozen=True, slots=True, eq=False)
class StepGrid:
    """Where the pieces of a recording begin and how many points each one joins; shared by all its quantities.

    Args:
        time: shape (m,), s, not decreasing.
        flag: shape (m,).
        first: shape (k,), index of each piece's first point.
        count: shape (k,), 2 to 4 points, the last one included.
    """

    time: FloatArray
    flag: IntArray
    first: IntArray
    count: IntArray


def step_grid(time: FloatArray, flag: IntArray) -> StepGrid:
    """Divide a recording into pieces.

    Args:
        time: shape (m,), s, not decreasing.
        flag: shape (m,), see the module.
    """
    closed = np.flatnonzero(flag != INTERIOR)
    if closed.size < 2:
        empty = np.zeros(0, dtype=np.int64)
        return StepGrid(time, flag, empty, empty)
    first, last = closed[:-1], closed[1:]
    joined = (flag[last] != AFTER) & (time[last] > time[first])
    first, last = first[joined], last[joined]
    points = last - first + 1
    if points.size and int(points.max()) > _POINTS_MAX:
        first, last = _divided(first, last)
        points = last - first + 1
    return StepGrid(time, flag, first, points)


def _divided(first: IntArray, last: IntArray) -> tuple[IntArray, IntArray]:
    """Steps of many points as neighbouring pieces of at most four."""
    gaps = _POINTS_MAX - 1
    pieces = (last - first + gaps - 1) // gaps
    number = np.repeat(first, pieces)
    within = np.arange(number.size) - np.repeat(np.cumsum(pieces) - pieces, pieces)
    begin = number + gaps * within
    return begin, np.minimum(begin + gaps, np.repeat(last, pieces))


@dataclass(frozen=True, slots=True, eq=False)
class Curve:
    """Pieces x(t) = sum_j coefficient[k, j] * u**j with u = (t - start[k]) / length[k] in 0 .. 1, in order of time.

    Args:
        start: shape (k,), s. length: shape (k,), s, > 0. coefficient: shape (k, 4), in the quantity's SI unit.
    """

    start: FloatArray
    length: FloatArray
    coefficient: FloatArray

    @property
    def is_empty(self) -> bool:
        """Whether there is nothing to read."""
        return self.start.size == 0

    @property
    def begin_s(self) -> float:
        """Where it begins, s."""
        return float(self.start[0])

    @property
    def end_s(self) -> float:
        """Where it ends, s."""
        return float(self.start[-1] + self.length[-1])

    @property
    def first_value(self) -> float:
        """Value at its beginning."""
        return float(self.coefficient[0, 0])

    @property
    def last_value(self) -> float:
        """Value at its end."""
        return float(self.coefficient[-1].sum())

    def shifted(self, by: float) -> Curve:
        """The same curve plus a constant."""
        coefficient = self.coefficient.copy()
        coefficient[:, 0] += by
        return Curve(self.start, self.length, coefficient)

    def minus(self, other: Curve) -> Curve:
        """The difference of two curves of one recording."""
        return Curve(self.start, self.length, self.coefficient - other.coefficient)

    def negated(self) -> Curve:
        """The curve upside down."""
        return Curve(self.start, self.length, -self.coefficient)

    def window(self, begin_s: float, end_s: float) -> Curve:
        """The part inside begin_s .. end_s, pieces cut at its edges."""
        stop = self.start + self.length
        inside = (stop > begin_s) & (self.start < end_s)
        start, length, coefficient = self.start[inside], self.length[inside].copy(), self.coefficient[inside].copy()
        if not start.size:
            return Curve(start, length, coefficient)
        start = start.copy()
        for k in {0, start.size - 1}:
            low = max(0.0, (begin_s - start[k]) / length[k])
            high = min(1.0, (end_s - start[k]) / length[k])
            if low > 0.0 or high < 1.0:
                coefficient[k] = _reparametrised(coefficient[k], low, high - low)
                start[k], length[k] = start[k] + low * length[k], (high - low) * length[k]
        kept = length > 0.0
        return Curve(start[kept], length[kept], coefficient[kept])

    def cut_at(self, times: FloatArray) -> Curve:
        """The same curve with its pieces divided at some instants, so that each piece lies in one interval between them."""
        stop = self.start + self.length
        cuts = times[(times > self.begin_s) & (times < self.end_s)]
        k = np.clip(np.searchsorted(self.start, cuts, side="right") - 1, 0, self.start.size - 1)
        inside = (cuts - self.start[k] > 1e-12 * self.length[k]) & (stop[k] - cuts > 1e-12 * self.length[k])
        cuts, k = cuts[inside], k[inside]
        if not cuts.size:
            return self
        start, owner = np.concatenate([self.start, cuts]), np.concatenate([np.arange(self.start.size), k])
        order = np.lexsort((start, owner))
        start, owner = start[order], owner[order]
        ends_here = np.append(owner[1:] != owner[:-1], True)
        length = np.where(ends_here, stop[owner], np.append(start[1:], stop[-1])) - start
        low, width = (start - self.start[owner]) / self.length[owner], length / self.length[owner]
        return Curve(start, length, _reparametrised(self.coefficient[owner].T, low, width).T.copy())

    def ripple(self, period_s: float) -> tuple[float, float]:
        """Largest peak-to-peak value within one of the periods that the curve is divided into from its begin, and when that period's peak is.

        A last part of a period counts only where it is the only one.
        """
        begin, end = self.begin_s, self.end_s
        whole = int(np.floor((end - begin) / period_s * (1.0 + 1e-9)))
        if whole < 1:
            top, when = self.highest()
            return top - self.lowest()[0], when
        cuts: FloatArray = begin + period_s * np.arange(1, whole + 1, dtype=np.float64)
        parts = self.cut_at(cuts)
        low, high = parts.piece_ranges()
        number = np.floor((parts.start + 0.5 * parts.length - begin) / period_s).astype(np.int64)
        inside = (number >= 0) & (number < whole)
        lows, highs = np.full(whole, np.inf), np.full(whole, -np.inf)
        np.minimum.at(lows, number[inside], low[inside])
        np.maximum.at(highs, number[inside], high[inside])
        swing = np.where(np.isfinite(lows) & np.isfinite(highs), highs - lows, -np.inf)
        k = int(np.argmax(swing))
        part = self.window(begin + k * period_s, begin + (k + 1) * period_s)
        return float(max(swing[k], 0.0)), part.highest()[1]

    def at(self, times: FloatArray) -> FloatArray:
        """Values at times, shape as given; at a jump the value just after it; NaN outside the curve."""
        times = np.asarray(times, dtype=np.float64)
        if self.is_empty:
            return np.full(times.shape, np.nan)
        k = np.clip(np.searchsorted(self.start, times, side="right") - 1, 0, self.start.size - 1)
        u = (times - self.start[k]) / self.length[k]
        c = self.coefficient[k]
        value = c[..., 0] + u * (c[..., 1] + u * (c[..., 2] + u * c[..., 3]))
        slack = 1e-9  # of a piece, for rounding at its ends
        return np.asarray(np.where((u < -slack) | (u > 1.0 + slack), np.nan, value), dtype=np.float64)

    def piece_ranges(self) -> tuple[FloatArray, FloatArray]:
        """Smallest and largest value of each piece, each shape (k,)."""
        low = np.minimum(self.coefficient[:, 0], self.coefficient.sum(axis=1))
        high = np.maximum(self.coefficient[:, 0], self.coefficient.sum(axis=1))
        for u in self.stationary():
            value = _horner(self.coefficient, u)
            low, high = np.fmin(low, value), np.fmax(high, value)
        return low, high

    def lowest_place(self) -> tuple[int, float]:
        """Piece k and place u of the smallest value, the earliest of several; between points too."""
        best, place = np.inf, (0, 0.0)
        for u in (np.zeros_like(self.start), np.ones_like(self.start), *self.stationary()):
            value = _horner(self.coefficient, u)
            if np.all(np.isnan(value)):
                continue
            k = int(np.nanargmin(value))
            if value[k] < best or (value[k] == best and (k, u[k]) < place):
                best, place = float(value[k]), (k, float(u[k]))
        return place

    def value_in(self, k: int, u: float) -> float:
        """Value at place u of piece k."""
        c0, c1, c2, c3 = self.coefficient[k]
        return float(c0 + u * (c1 + u * (c2 + u * c3)))

    def time_in(self, k: int, u: float) -> float:
        """Time at place u of piece k, s."""
        return float(self.start[k] + u * self.length[k])

    def lowest(self) -> tuple[float, float]:
        """Smallest value and the first time it is reached; between points too."""
        place = self.lowest_place()
        return self.value_in(*place), self.time_in(*place)

    def highest(self) -> tuple[float, float]:
        """Largest value and the first time it is reached; between points too."""
        value, when = self.negated().lowest()
        return -value, when

    def integral(self) -> float:
        """Integral over time, exact for the pieces; unit*s."""
        return float(np.dot(self.length, self.coefficient @ np.array([1.0, 1 / 2, 1 / 3, 1 / 4])))

    def square_integral(self) -> float:
        """Integral of the square over time, exact for the pieces; unit^2*s."""
        points, weights = np.polynomial.legendre.leggauss(4)  # exact to degree 7; the square of a cubic has degree 6
        total = np.zeros_like(self.start)
        for point, weight in zip(points, weights, strict=True):
            total += 0.5 * weight * _horner(self.coefficient, np.full_like(self.start, 0.5 * (point + 1.0))) ** 2
        return float(np.dot(self.length, total))

    def duration_s(self) -> float:
        """Time it covers, s."""
        return float(self.length.sum())

    def last_outside(self, low: float, high: float) -> float | None:
        """The last time at which it is below low or above high, s; None if it never is."""
        smallest, largest = self.piece_ranges()
        outside = np.flatnonzero((smallest < low) | (largest > high))
        if not outside.size:
            return None
        k = int(outside[-1])
        if not low <= float(self.coefficient[k].sum()) <= high:
            return float(self.start[k] + self.length[k])
        crossings = [u for level in (low, high) for u in _crossings(self.coefficient[k], level)]
        return float(self.start[k] + max(crossings, default=0.0) * self.length[k])

    def has_nan(self) -> float | None:
        """The start of the first piece with a value that is not a number, or None."""
        bad = np.flatnonzero(~np.isfinite(self.coefficient).all(axis=1))
        return float(self.start[bad[0]]) if bad.size else None

    def stationary(self) -> tuple[FloatArray, FloatArray]:
        """Places u of the two stationary points of each piece, 0 where there is none inside."""
        _, c1, c2, c3 = self.coefficient.T
        with np.errstate(all="ignore"):
            root = np.sqrt(c2 * c2 - 3.0 * c1 * c3)
            q = -(c2 + np.copysign(root, c2))  # avoids cancellation: the roots are q/(3 c3) and c1/q
            pair = (q / (3.0 * c3), c1 / q)
        first, second = (np.where((u > 0.0) & (u < 1.0), u, 0.0) for u in pair)
        return first, second


def curve(grid: StepGrid, value: FloatArray) -> Curve:
    """The curve of a quantity.

    Args:
        grid: of its recording.
        value: shape (m,), one entry per point of the recording.
    """
    k = grid.first.size
    start = grid.time[grid.first]
    length = grid.time[grid.first + grid.count - 1] - start
    coefficient = np.zeros((k, _POINTS_MAX))
    for count in range(2, _POINTS_MAX + 1):
        rows = np.flatnonzero(grid.count == count)
        if rows.size:
            index = grid.first[rows][:, None] + np.arange(count)
            u = (grid.time[index] - start[rows][:, None]) / length[rows][:, None]
            coefficient[rows, :count] = _through(u, value[index])
            if count > 2:  # so short a step that its inner times are lost to rounding: a straight line
                flat = rows[np.diff(u, axis=1).min(axis=1) < _GAP_LEAST]
                ends = value[grid.first[flat]], value[grid.first[flat] + count - 1]
                coefficient[flat] = 0.0
                coefficient[flat, 0], coefficient[flat, 1] = ends[0], ends[1] - ends[0]
    return Curve(start, length, coefficient)


def _through(u: FloatArray, y: FloatArray) -> FloatArray:
    """Coefficients in powers of u of the polynomials through the points of each row; shapes (k, n). Newton's divided differences."""
    n = u.shape[1]
    table, coefficient = y.copy(), np.zeros_like(y)
    with np.errstate(all="ignore"):  # what is not finite stays so and is found by whoever reads it
        for order in range(1, n):
            table[:, order:] = (table[:, order:] - table[:, order - 1 : -1]) / (u[:, order:] - u[:, :-order])
        coefficient[:, 0] = table[:, n - 1]
        for j in range(n - 2, -1, -1):  # p <- p * (u - u_j) + table_j
            coefficient[:, 1:] = coefficient[:, :-1] - u[:, j : j + 1] * coefficient[:, 1:]
            coefficient[:, 0] = table[:, j] - u[:, j] * coefficient[:, 0]
    return coefficient


def _horner(c: FloatArray, u: FloatArray) -> FloatArray:
    result: FloatArray = c[:, 0] + u * (c[:, 1] + u * (c[:, 2] + u * c[:, 3]))
    return result


def _reparametrised(c: FloatArray, low: float | FloatArray, width: float | FloatArray) -> FloatArray:
    """Coefficients of p(low + width * v) in powers of v; c: shape (4,), or (4, k) with low, width of shape (k,)."""
    c0, c1, c2, c3 = c
    return np.array(
        [
            c0 + low * (c1 + low * (c2 + low * c3)),
            width * (c1 + low * (2.0 * c2 + low * 3.0 * c3)),
            width * width * (c2 + 3.0 * low * c3),
            width**3 * c3,
        ]
    )


def _crossings(c: FloatArray, level: float) -> list[float]:
    """Places in 0 .. 1 where a piece has a value."""
    roots = np.roots([c[3], c[2], c[1], c[0] - level]) if np.any(c[1:] != 0.0) else np.zeros(0)
    real = roots[np.abs(roots.imag) < 1e-9].real
    return [float(u) for u in real if -1e-12 <= u <= 1.0 + 1e-12]
