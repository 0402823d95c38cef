"""Rational functions of one variable with constant coefficients: arithmetic, and the state equations that realise one."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final, TypeAlias

Polynomial: TypeAlias = tuple[float, ...]  # coefficients of s^0, s^1, …; the last one not zero, but for (0.0,)

# A filter of higher order is a mistake or belongs into states of its own.
ORDER_MAX: Final = 20


class OrderTooHigh(Exception):
    """A power or product beyond ORDER_MAX."""


def _trimmed(a: list[float]) -> Polynomial:
    while len(a) > 1 and a[-1] == 0.0:
        a.pop()
    return tuple(a)


def _product(a: Polynomial, b: Polynomial) -> Polynomial:
    if len(a) + len(b) - 2 > 2 * ORDER_MAX:
        raise OrderTooHigh
    result = [0.0] * (len(a) + len(b) - 1)
    for j, x in enumerate(a):
        for k, y in enumerate(b):
            result[j + k] += x * y
    return _trimmed(result)


def _sum(a: Polynomial, b: Polynomial, sign: float) -> Polynomial:
    size = max(len(a), len(b))
    return _trimmed([(a[k] if k < len(a) else 0.0) + sign * (b[k] if k < len(b) else 0.0) for k in range(size)])


@dataclass(frozen=True, slots=True)
class Rational:
    """above / below. Common factors of the bare variable are cancelled; others stay as written."""

    above: Polynomial
    below: Polynomial

    @staticmethod
    def of(value: float) -> Rational:
        """A constant."""
        return Rational((value,), (1.0,))

    @property
    def is_zero(self) -> bool:
        """Whether it is 0."""
        return self.above == (0.0,)

    @property
    def is_constant(self) -> bool:
        """Whether the variable is not in it."""
        return len(self.above) == 1 and len(self.below) == 1

    def plus(self, other: Rational, sign: float = 1.0) -> Rational:
        """Sum, or with sign -1 difference."""
        if self.below == other.below:
            return _cancelled(_sum(self.above, other.above, sign), self.below)
        return _cancelled(_sum(_product(self.above, other.below), _product(other.above, self.below), sign), _product(self.below, other.below))

    def times(self, other: Rational) -> Rational:
        """Product."""
        return _cancelled(_product(self.above, other.above), _product(self.below, other.below))

    def over(self, other: Rational) -> Rational:
        """Quotient; other must not be zero."""
        return _cancelled(_product(self.above, other.below), _product(self.below, other.above))

    def raised(self, exponent: int) -> Rational:
        """Whole power, negative ones too."""
        if abs(exponent) > ORDER_MAX:
            raise OrderTooHigh
        base = self if exponent >= 0 else Rational.of(1.0).over(self)
        result = Rational.of(1.0)
        for _ in range(abs(exponent)):
            result = result.times(base)
        return result


def _cancelled(above: Polynomial, below: Polynomial) -> Rational:
    if above == (0.0,):
        return Rational((0.0,), (1.0,))
    shift = 0
    while above[shift] == 0.0 and below[shift] == 0.0:
        shift += 1
    return Rational(above[shift:], below[shift:])


VARIABLE: Final = Rational((0.0, 1.0), (1.0,))


@dataclass(frozen=True, slots=True)
class Realisation:
    """States x_1 … x_n of a filter with input u and output y, all in the output's unit:

    y = x_1 + direct*u;  x_k' = pace*(x_{k+1} - damping[k-1]*x_1 + drive[k-1]*u), x_{n+1} = 0.

    Args:
        pace: rate in 1/s that brings the coefficients near 1.
        damping, drive: one number for each state.
        direct: the part that passes at once.
    """

    pace: float
    damping: tuple[float, ...]
    drive: tuple[float, ...]
    direct: float


def realise(h: Rational) -> Realisation:
    """Observable canonical form of a proper rational function of s, with time scaled by the size of its poles.

    Source: Kailath 1980, Linear Systems, section 2.1.
    """
    order = len(h.below) - 1
    assert len(h.above) - 1 <= order
    lead = h.below[-1]
    a = [c / lead for c in h.below]
    b = [c / lead for c in h.above] + [0.0] * (order + 1 - len(h.above))
    direct = b[order]
    lowest = next(k for k, c in enumerate(a) if c != 0.0)
    # Geometric mean of the sizes of the poles that are not at zero; 1/s for pure integrators.
    pace = abs(a[lowest]) ** (1.0 / (order - lowest)) if lowest < order else 1.0
    if not (math.isfinite(pace) and pace > 0.0):
        pace = 1.0
    damping = tuple(a[order - k] / pace**k for k in range(1, order + 1))
    drive = tuple((b[order - k] - direct * a[order - k]) / pace**k for k in range(1, order + 1))
    return Realisation(pace, damping, drive, direct)


@dataclass(frozen=True, slots=True)
class SampledRealisation:
    """A filter in z: y = b[0]*u + w_1;  new w_k = w_{k+1} + b[k]*u - a[k]*y, w_{n+1} = 0 (direct form II transposed).

    Args:
        b, a: coefficients of z^0, z^-1, …, z^-n above and below, a[0] = 1.
    """

    b: tuple[float, ...]
    a: tuple[float, ...]


def realise_sampled(h: Rational) -> SampledRealisation | None:
    """A filter in z as a recursion; None where its output would need later inputs.

    Source: Oppenheim & Schafer 1989, Discrete-Time Signal Processing, section 6.3.
    """
    order = len(h.below) - 1
    if len(h.above) - 1 > order:
        return None
    lead = h.below[-1]
    a = tuple(c / lead for c in reversed(h.below))
    padded = (*h.above, *[0.0] * (order + 1 - len(h.above)))
    return SampledRealisation(tuple(c / lead for c in reversed(padded)), a)
