"""Exact transfer factors that no finite set of states has: delays, holds and sliding averages, with their derivatives in s."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from polewise.analysis.point import ComplexArray

ChannelKind = Literal["delay", "hold", "average"]
# Below this |s T| the quotient (1 - e^-sT)/(sT) is read from its series: six terms are exact to rounding there.
SERIES_BELOW = 0.05


@dataclass(frozen=True, slots=True)
class Channel:
    """One factor h(s): the channel's output is h(s) times its input.

    Args:
        name: of the parameter it stands for.
        kind: "delay": e^(-s T). "hold", "average": (1 - e^(-s T))/(s T), a value renewed each T and kept, or the mean over the last T.
        time_s: T.
    """

    name: str
    kind: ChannelKind
    time_s: float

    def factor(self, s: complex | ComplexArray) -> ComplexArray:
        """h(s)."""
        u: ComplexArray = np.multiply(np.asarray(s, dtype=np.complex128), self.time_s)
        return np.exp(-u) if self.kind == "delay" else _mean(u)

    def slope(self, s: complex | ComplexArray) -> ComplexArray:
        """dh/ds."""
        u: ComplexArray = np.multiply(np.asarray(s, dtype=np.complex128), self.time_s)
        value: ComplexArray = np.multiply(-self.time_s, np.exp(-u)) if self.kind == "delay" else np.multiply(self.time_s, _mean_slope(u))
        return value

    def pade(self, order: int) -> tuple[ComplexArray, ComplexArray]:
        """Numerator and denominator of the diagonal Padé approximant, coefficients of s^0, s^1, …; a starting point, never the answer.

        Source: Golub & Van Loan 2013, Matrix Computations, 4th ed., 9.3.1. A mean over T is a delay of T through (1 - h)/(s T).
        """
        n = order
        weights = [1.0]
        for k in range(n):
            weights.append(weights[-1] * (n - k) / ((2 * n - k) * (k + 1)))
        scale = np.array([self.time_s**k for k in range(n + 1)])
        den = np.array(weights) * scale
        num = np.array([w * (-1) ** k for k, w in enumerate(weights)]) * scale
        if self.kind == "delay":
            return num.astype(complex), den.astype(complex)
        mean = (den - num)[1:] / self.time_s  # the constant terms cancel
        return np.append(mean, 0.0).astype(complex), den.astype(complex)


def _mean(u: ComplexArray) -> ComplexArray:
    small = np.abs(u) < SERIES_BELOW
    safe = np.where(small, 1.0, u)
    series = 1.0 - u / 2 * (1.0 - u / 3 * (1.0 - u / 4 * (1.0 - u / 5 * (1.0 - u / 6 * (1.0 - u / 7 * (1.0 - u / 8))))))
    value: ComplexArray = np.where(small, series, (1.0 - np.exp(-safe)) / safe)
    return value


def _mean_slope(u: ComplexArray) -> ComplexArray:
    """d/du of (1 - e^-u)/u."""
    small = np.abs(u) < SERIES_BELOW
    safe = np.where(small, 1.0, u)
    total = np.zeros_like(u)
    factorial = 1.0
    for k in range(1, 10):  # sum over k of (-1)^k k u^(k-1)/(k+1)!
        factorial *= k + 1
        total = total + (-1) ** k * k * u ** (k - 1) / factorial
    value: ComplexArray = np.where(small, total, (np.exp(-safe) * (safe + 1.0) - 1.0) / (safe * safe))
    return value
