"""Published criteria on a minor-loop ratio T_m = Z_s/Z_l, each with its worst point and how conservative it is against the real limit.

Every one of them is sufficient, none is necessary: the count of encirclements decides. `slack` is the factor by which T_m might still grow
(all of it, at every frequency) before the criterion fails; the real limit's is the gain margin. Their quotient tells how much is given away.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from polewise.analysis.margins import Gain, Margins
from polewise.analysis.point import ComplexArray
from polewise.kernels.program import FloatArray

GAIN_MARGIN = 2.0  # 6 dB in all of them
PHASE_MARGIN_DEG = 60.0
PEAK = 2.0


@dataclass(frozen=True, slots=True)
class Criterion:
    """One verdict.

    Args:
        name: short; source: where it was published.
        holds: whether it is met over the whole range.
        value: what it looks at, at its worst, and limit: what that must not pass.
        frequency_hz: where it is worst.
        slack: growth of the whole ratio until it would fail (below 1: it fails); nan where that makes no sense.
        conservatism: the real limit's slack over this one; nan where there is none.
    """

    name: str
    source: str
    holds: bool
    value: float
    limit: float
    frequency_hz: float
    slack: float = math.nan
    conservatism: float = math.nan


def judge_ratio(ratio: Gain, grid: FloatArray, margins: Margins) -> tuple[Criterion, ...]:
    """All criteria on a scalar ratio.

    Args:
        ratio: T_m at frequencies. grid: Hz, fine enough. margins: of the ratio, for the real limit.
    """
    t = ratio(grid)
    above = [g.factor for g in margins.gain_crossings if g.factor > 1.0]
    real = min(above) if above and all(g.factor > 1.0 for g in margins.gain_crossings) else (math.inf if not margins.gain_crossings else math.nan)
    size, at_size = _worst(lambda f: _size(ratio(f)), grid, _size(t), largest=True)
    low, at_low = _worst(lambda f: _real(ratio(f)), grid, _real(t), largest=False)
    near, at_near = _worst(lambda f: _size(1.0 + ratio(f)), grid, _size(1.0 + t), largest=False)
    limit = 1.0 / GAIN_MARGIN
    sector, at_sector = _sector(t, grid)
    found = [
        Criterion("gain margin of the ratio", "Middlebrook 1976", size < limit, size, limit, at_size, limit / size if size else math.inf),
        Criterion(
            "gain and phase margin",
            "Wildrick, Lee, Cho & Choi 1995",
            sector <= limit,
            sector,
            limit,
            at_sector,
            limit / sector if sector else math.inf,
        ),
        Criterion("opposing argument", "Feng, Liu & Lee 2002", low > -limit, low, -limit, at_low, -limit / low if low < 0.0 else math.inf),
        Criterion("highest peak", "Vesti, Suntio, Oliver, Prieto & Cobos 2013", near >= 1.0 / PEAK, near, 1.0 / PEAK, at_near, _peak_slack(t)),
    ]
    return tuple(_against(c, real) for c in found)


def _against(c: Criterion, real: float) -> Criterion:
    ratio = real / c.slack if math.isfinite(real) and c.slack > 0.0 and math.isfinite(c.slack) else math.nan
    return Criterion(c.name, c.source, c.holds, c.value, c.limit, c.frequency_hz, c.slack, ratio)


def _worst(value: Callable[[FloatArray], FloatArray], grid: FloatArray, at: FloatArray, *, largest: bool) -> tuple[float, float]:
    """The extreme over the range, refined between the grid's points."""
    from scipy.optimize import minimize_scalar

    sign = -1.0 if largest else 1.0
    k = int(np.argmin(sign * at))
    best, where = float(at[k]), float(grid[k])
    low, high = float(grid[max(k - 1, 0)]), float(grid[min(k + 1, len(grid) - 1)])
    if high > low:
        found = minimize_scalar(
            lambda x: sign * float(value(np.array([math.exp(x)]))[0]),
            bounds=(math.log(low), math.log(high)),
            method="bounded",
            options={"xatol": 1e-11},
        )
        if found.fun < sign * best:
            best, where = sign * float(found.fun), math.exp(float(found.x))
    return best, where


def _size(values: ComplexArray) -> FloatArray:
    size: FloatArray = np.abs(values).astype(np.float64)
    return size


def _real(values: ComplexArray) -> FloatArray:
    part: FloatArray = values.real.astype(np.float64)
    return part


def _sector(t: ComplexArray, grid: FloatArray) -> tuple[float, float]:
    """Largest |T_m| within 60 degrees of the negative real axis."""
    inside = np.abs(np.angle(-t)) < math.radians(PHASE_MARGIN_DEG)
    if not np.any(inside):
        return 0.0, float(grid[0])
    size = np.where(inside, np.abs(t), 0.0)
    k = int(np.argmax(size))
    return float(size[k]), float(grid[k])


def _peak_slack(t: ComplexArray) -> float:
    """Growth g at which |1 + g T_m| first touches 1/PEAK: |T|^2 g^2 + 2 Re T g + 1 - 1/PEAK^2 = 0."""
    square, real = np.abs(t) ** 2, t.real
    under = real**2 - square * (1.0 - 1.0 / PEAK**2)
    ok = (under >= 0.0) & (real < 0.0) & (square > 0.0)
    if not np.any(ok):
        return math.inf
    growth = (-real[ok] - np.sqrt(under[ok])) / square[ok]
    return float(np.min(growth))


def passivity(frequencies_hz: FloatArray, impedance: ComplexArray) -> Criterion:
    """Re Z >= 0 at every frequency: then no passive addition at the port can make it unstable.

    Args:
        impedance: shape (m, k, k).
    """
    hermitian = 0.5 * (impedance + np.conj(np.swapaxes(impedance, 1, 2)))
    lowest = np.linalg.eigvalsh(hermitian)[:, 0]
    size = np.maximum(np.linalg.norm(impedance, ord=2, axis=(1, 2)), 1e-300)
    share = lowest / size
    k = int(np.argmin(share)) if len(share) else 0
    worst = float(share[k]) if len(share) else 0.0
    at = float(frequencies_hz[k]) if len(share) else math.nan
    return Criterion("passivity", "Riccobono & Santi 2014", worst >= -1e-9, worst, 0.0, at)
