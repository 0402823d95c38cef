"""Exact periodic states of switched piecewise-linear circuits by matrix exponentials: what averaging is compared with.

x' = A x + b in each part of the period; state x = (choke current, capacitor voltage). Nothing here knows polewise.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import expm
from scipy.optimize import brentq


@dataclass(frozen=True)
class Part:
    """A stretch of the period with one circuit."""

    a: np.ndarray
    b: np.ndarray

    def advance(self, x: np.ndarray, duration: float) -> tuple[np.ndarray, np.ndarray]:
        """State after the duration, and the integral of the state over it."""
        n = len(x)
        # d/dt (x, integral of x, 1) is linear
        big = np.zeros((2 * n + 1, 2 * n + 1))
        big[:n, :n], big[:n, -1] = self.a, self.b
        big[n : 2 * n, :n] = np.eye(n)
        end = expm(big * duration) @ np.concatenate([x, np.zeros(n), [1.0]])
        return end[:n], end[n : 2 * n]


@dataclass(frozen=True)
class Periodic:
    """A periodic state: at the turn-on edge, averaged over the period, and the durations of its parts, s."""

    start: np.ndarray
    average: np.ndarray
    durations: tuple[float, ...]


def continuous(parts: tuple[Part, Part], d: float, period: float) -> Periodic:
    """Two parts of fixed duration."""
    durations = (d * period, (1 - d) * period)
    n = len(parts[0].b)

    def through(x: np.ndarray) -> np.ndarray:
        for part, duration in zip(parts, durations):
            x, _ = part.advance(x, duration)
        return x

    # the period's map is affine: x → M x + m
    m = through(np.zeros(n))
    matrix = np.column_stack([through(e) - m for e in np.eye(n)])
    start = np.linalg.solve(np.eye(n) - matrix, m)
    return Periodic(start, _average(parts, durations, start, period), durations)


def discontinuous(parts: tuple[Part, Part, Part], d: float, period: float, bracket: tuple[float, float]) -> Periodic:
    """Three parts; the second ends when state 0 (the choke current) reaches zero, the third holds it there.

    bracket: voltages between which the periodic one lies.
    """

    def durations_from(x: np.ndarray) -> tuple[float, float, float]:
        on, _ = parts[0].advance(x, d * period)
        second = brentq(lambda t: parts[1].advance(on, t)[0][0], 1e-12, (1 - d) * period, xtol=1e-22, rtol=1e-15)
        return d * period, second, (1 - d) * period - second

    def drift(v: float) -> float:
        x = np.array([0.0, v])
        on, _ = parts[0].advance(x, d * period)
        if parts[1].advance(on, (1 - d) * period)[0][0] > 0:
            return 1.0  # the choke does not run empty: so low a voltage would rise
        for part, duration in zip(parts, durations_from(x)):
            x, _ = part.advance(x, duration)
        return float(x[1]) - v

    start = np.array([0.0, brentq(drift, *bracket, xtol=1e-13, rtol=1e-15)])
    durations = durations_from(start)
    return Periodic(start, _average(parts, durations, start, period), durations)


def _average(parts, durations, start: np.ndarray, period: float) -> np.ndarray:
    total, x = np.zeros(len(start)), start
    for part, duration in zip(parts, durations):
        x, integral = part.advance(x, duration)
        total += integral
    return total / period
