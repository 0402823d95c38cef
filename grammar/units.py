"""Dimensions and units: the table a reader can check against the SI brochure, and how values are read and printed."""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from functools import lru_cache

Exponent = int | Fraction


@dataclass(frozen=True, slots=True)
class Dimension:
    """Exponents of kg, m, s, A, K.

    `spelling` remembers whether a rate was written in cycles ("Hz") or in angle ("rad/s"): both are 1/s, yet adding one to the
    other forgets a factor of 2 pi. It does not take part in equality; products and quotients drop it.
    """

    kg: Exponent = 0
    m: Exponent = 0
    s: Exponent = 0
    A: Exponent = 0
    K: Exponent = 0

    @property
    def exponents(self) -> tuple[Exponent, Exponent, Exponent, Exponent, Exponent]:
        """(kg, m, s, A, K)."""
        return self.kg, self.m, self.s, self.A, self.K

    @property
    def is_none(self) -> bool:
        """Whether it is a plain number."""
        return self == NONE

    def __mul__(self, other: Dimension) -> Dimension:
        return _product(self, other)

    def __truediv__(self, other: Dimension) -> Dimension:
        return _quotient(self, other)

    def __pow__(self, exponent: Exponent) -> Dimension:
        return _power(self, exponent)


@lru_cache(maxsize=4096)
def _product(a: Dimension, b: Dimension) -> Dimension:
    return Dimension(*(_tidy(x + y) for x, y in zip(a.exponents, b.exponents, strict=True)))


@lru_cache(maxsize=4096)
def _quotient(a: Dimension, b: Dimension) -> Dimension:
    return Dimension(*(_tidy(x - y) for x, y in zip(a.exponents, b.exponents, strict=True)))


@lru_cache(maxsize=4096)
def _power(a: Dimension, exponent: Exponent) -> Dimension:
    return Dimension(*(_tidy(x * exponent) for x in a.exponents))


def _tidy(x: Exponent) -> Exponent:
    return int(x) if isinstance(x, Fraction) and x.denominator == 1 else x


NONE = Dimension()
TIME = Dimension(s=1)
RATE = Dimension(s=-1)
LENGTH = Dimension(m=1)
MASS = Dimension(kg=1)
CURRENT = Dimension(A=1)
TEMPERATURE = Dimension(K=1)
ENERGY = Dimension(kg=1, m=2, s=-2)
POWER = Dimension(kg=1, m=2, s=-3)
VOLTAGE = POWER / CURRENT
RESISTANCE = VOLTAGE / CURRENT
CONDUCTANCE = CURRENT / VOLTAGE
CHARGE = CURRENT * TIME
FLUX = VOLTAGE * TIME
CAPACITANCE = CHARGE / VOLTAGE
INDUCTANCE = FLUX / CURRENT
FORCE = Dimension(kg=1, m=1, s=-2)
TORQUE = ENERGY  # N*m; an angle has no dimension
SPEED = LENGTH / TIME


@dataclass(frozen=True, slots=True)
class Unit:
    """One unit as written: value_si = number * factor + offset.

    Args:
        symbol: as written, e.g. "mohm", "V/us".
        factor: to SI.
        dimension: of the value in SI.
        offset: only for degC.
        spelling: "Hz", "rad" or None, see Dimension.
    """

    symbol: str
    factor: float
    dimension: Dimension
    offset: float = 0.0
    spelling: str | None = None
