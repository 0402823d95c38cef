"""Work against precision: the cost of a run as a function of its measured error, and the cost at one common error."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from timing import interleaved

SHORT_S = 30e-3
SHORT_ROUNDS = 8
ERROR_SLACK = 1.05  # a run whose error is within 5 % of the wanted one counts as equal


@dataclass(frozen=True, slots=True)
class Point:
    """One tolerance: measured error, and seconds of the quickest run."""

    tolerance: float
    error: float
    seconds: float


def sweep(run: Callable[[float], object], error: Callable[[float], float], tolerances: Sequence[float], *, rounds: int = 2) -> list[Point]:
    """Measured error and cost at each tolerance; tolerances at which the run fails are left out."""
    points = []
    for tolerance in tolerances:
        try:
            measured = error(tolerance)  # warms the run up too
            job = [lambda at=tolerance: run(at)]
            timing = interleaved(job, rounds=rounds, warm=False)[0]
            if timing.best < SHORT_S:  # another program's time slice is as long as the run itself: try until one run was left alone
                timing = min(timing, interleaved(job, rounds=SHORT_ROUNDS, warm=False)[0], key=lambda t: t.best)
        except (RuntimeError, ValueError, ArithmeticError):
            continue
        points.append(Point(tolerance, measured, timing.best))
    return points


def _usable(points: Sequence[Point]) -> list[Point]:
    """Ordered by error, coarse to fine, without points that cost more than a finer one."""
    good: list[Point] = []
    for point in sorted((p for p in points if np.isfinite(p.error) and p.error > 0), key=lambda p: p.error):
        if not good or point.seconds < good[-1].seconds:
            good.append(point)
    return good[::-1]


def cost_at(points: Sequence[Point], error: float) -> float:
    """Seconds at an error, straight between measured points on logarithmic axes; nan where the error was not reached."""
    curve = _usable(points)
    errors = np.log([p.error for p in curve][::-1])
    if not curve or np.log(error) < errors[0] - 1e-9:
        return float("nan")
    return float(np.exp(np.interp(np.log(error), errors, np.log([p.seconds for p in curve][::-1]))))


def tolerance_for(points: Sequence[Point], error_of: Callable[[float], float], wanted: float, *, tries: int = 8) -> tuple[float, float]:
    """The loosest tolerance found whose measured error is at most `wanted`, with that error: by bisection between swept points."""
    good = [p for p in points if p.error <= wanted * ERROR_SLACK]
    if not good:
        raise RuntimeError("the wanted error was not reached")
    best = max(good, key=lambda p: p.tolerance)
    looser = [p.tolerance for p in points if p.tolerance > best.tolerance]
    low, high, error = best.tolerance, min(looser, default=best.tolerance), best.error
    for _ in range(tries if high > low else 0):
        middle = float(np.sqrt(low * high))
        measured = error_of(middle)
        if measured <= wanted * ERROR_SLACK:
            low, error = middle, measured
        else:
            high = middle
    return low, error
