"""Crossovers and margins of a loop gain given as a function of frequency: found on a grid, then refined to rounding."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from polewise.analysis.point import ComplexArray
from polewise.kernels.program import FloatArray

Gain = Callable[[FloatArray], ComplexArray]

GRID_POINTS = 600  # at least this many over the asked range
POINTS_PER_RESONANCE = 13  # around each lightly damped pole
REFINED_RELATIVE = 1e-13


@dataclass(frozen=True, slots=True)
class Crossover:
    """|T| = 1: frequency Hz, phase margin in degrees (-180 .. 180), delay margin s (how much more delay until the margin is used up)."""

    frequency_hz: float
    phase_margin_deg: float
    delay_margin_s: float
    falling: bool


@dataclass(frozen=True, slots=True)
class GainCrossing:
    """T real and negative: frequency Hz, 1/|T| as factor and in dB; below 1 the gain would have to fall."""

    frequency_hz: float
    factor: float

    @property
    def decibel(self) -> float:
        """In dB."""
        return 20.0 * math.log10(self.factor)


@dataclass(frozen=True, slots=True)
class Margins:
    """All of them.

    Args:
        crossovers, gain_crossings: by frequency.
        modulus: smallest |1 + T| in the range, at modulus_frequency_hz.
    """

    crossovers: tuple[Crossover, ...]
    gain_crossings: tuple[GainCrossing, ...]
    modulus: float
    modulus_frequency_hz: float

    @property
    def crossover_hz(self) -> float:
        """The last crossover; nan where there is none."""
        return self.crossovers[-1].frequency_hz if self.crossovers else math.nan

    @property
    def phase_margin_deg(self) -> float:
        """The smallest by size over all crossovers; inf where there is none."""
        return min((c.phase_margin_deg for c in self.crossovers), key=abs, default=math.inf)

    @property
    def gain_margin(self) -> float:
        """The factor nearest to one, as a ratio >= 0; inf where T never is real and negative."""
        return min((g.factor for g in self.gain_crossings), key=lambda k: abs(math.log(k)) if k > 0 else math.inf, default=math.inf)

    @property
    def delay_margin_s(self) -> float:
        """The smallest over all crossovers; inf where there is none."""
        return min((c.delay_margin_s for c in self.crossovers), default=math.inf)


def frequency_grid(low_hz: float, high_hz: float, poles: ComplexArray) -> FloatArray:
    """A logarithmic grid with points crowded around lightly damped poles, so that no peak falls between two points."""
    base = [np.geomspace(low_hz, high_hz, GRID_POINTS)]
    for pole in poles:
        f, width = abs(pole.imag) / (2 * math.pi), max(abs(pole.real), 1e-9 * abs(pole)) / (2 * math.pi)
        if low_hz < f < high_hz and width < 0.3 * f:
            base.append(f + width * np.sinh(np.linspace(-4.0, 4.0, POINTS_PER_RESONANCE)))
    grid = np.unique(np.concatenate(base))
    return grid[(grid >= low_hz) & (grid <= high_hz)]


def margins_of(gain: Gain, frequencies_hz: FloatArray, poles: ComplexArray) -> Margins:
    """Margins over the range of the frequencies.

    Args:
        gain: T at frequencies, shape (m,) → (m,).
        frequencies_hz: at least one; the range is from the lowest to the highest.
        poles: of the loop, rad/s; the grid is finer near them.
    """
    low, high = float(np.min(frequencies_hz)), float(np.max(frequencies_hz))
    grid = np.unique(np.concatenate([frequency_grid(low, high, poles), frequencies_hz])) if high > low else np.array([low])
    t = gain(grid)
    return Margins(_crossovers(gain, grid, t), _gain_crossings(gain, grid, t), *_modulus(gain, grid, t))


def _root(function: Callable[[float], float], low: float, high: float) -> float:
    """A root between two frequencies, on a logarithmic scale."""
    from scipy.optimize import brentq

    log = brentq(lambda x: function(math.exp(x)), math.log(low), math.log(high), xtol=1e-15, rtol=8.9e-16, maxiter=200)
    return math.exp(log)


def _crossovers(gain: Gain, grid: FloatArray, t: ComplexArray) -> tuple[Crossover, ...]:
    def level(f: float) -> float:
        return float(np.log(np.abs(gain(np.array([f]))[0])))

    with np.errstate(divide="ignore"):
        size = np.log(np.abs(t))
    found = []
    for k in np.flatnonzero(np.sign(size[:-1]) * np.sign(size[1:]) < 0):
        f = _root(level, grid[k], grid[k + 1])
        at = complex(gain(np.array([f]))[0])
        margin = math.remainder(math.degrees(math.atan2(at.imag, at.real)) + 180.0, 360.0)
        # The further delay turns clockwise: a negative margin is used up only after a whole turn less it.
        angle = math.radians(margin if margin >= 0.0 else margin + 360.0)
        found.append(Crossover(f, margin, angle / (2 * math.pi * f), bool(size[k + 1] < size[k])))
    return tuple(found)


def _gain_crossings(gain: Gain, grid: FloatArray, t: ComplexArray) -> tuple[GainCrossing, ...]:
    def across(f: float) -> float:
        return float(gain(np.array([f]))[0].imag)

    found = []
    for k in np.flatnonzero((np.sign(t.imag[:-1]) * np.sign(t.imag[1:]) < 0) & (np.minimum(t.real[:-1], t.real[1:]) < 0)):
        f = _root(across, grid[k], grid[k + 1])
        at = complex(gain(np.array([f]))[0])
        if at.real < 0.0 and abs(at.imag) < 1e-6 * abs(at.real):
            found.append(GainCrossing(f, 1.0 / abs(at)))
    return tuple(found)


def _modulus(gain: Gain, grid: FloatArray, t: ComplexArray) -> tuple[float, float]:
    from scipy.optimize import minimize_scalar

    distance = np.abs(1.0 + t)
    k = int(np.argmin(distance))
    best, at = float(distance[k]), float(grid[k])
    low, high = grid[max(k - 1, 0)], grid[min(k + 1, len(grid) - 1)]
    if high > low:
        found = minimize_scalar(
            lambda x: float(np.abs(1.0 + gain(np.array([math.exp(x)]))[0])),
            bounds=(math.log(low), math.log(high)),
            method="bounded",
            options={"xatol": 1e-10},
        )
        if found.fun < best:
            best, at = float(found.fun), math.exp(float(found.x))
    return best, at
