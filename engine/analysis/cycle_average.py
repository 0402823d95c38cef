"""The cycle average: sliding and per-period averages of any waveform on a variable time grid, exact for piecewise polynomials.

mean(t) = 1/T times the integral of x over a window of length T. Nothing is resampled: the antiderivative of each piece is known in closed
form, and the average is a difference of two of its values. Plain arrays are joined by straight lines; two points with one time are a jump.

* Response: a sine of frequency f comes out as sin(pi f T)/(pi f T) of itself; the trailing window adds a phase of -180 deg * f T, the centred
  one none (`averaging_response`).
* Derivative: d mean/dt = (x(t) - x(t - T))/T for the trailing window, whatever x does (`average_slope`).
* Linear laws (Kirchhoff, R, constant L and C) hold for averages exactly; products do not.

Source: Sanders, Noworolski, Liu & Verghese, IEEE Trans. Power Electronics 6(2), 1991; Maksimović, Stanković, Thottuvelil & Verghese, Proc. IEEE
89(6), 2001 (both recalled from memory; the tests check the properties themselves).
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Literal, TypeAlias

import numpy as np
from numpy.typing import ArrayLike

from polewise.analysis.failures import waveform_refused
from polewise.analysis.point import ComplexArray
from polewise.results.curve import Curve, FloatArray

Window = Literal["centred", "trailing"]
Period: TypeAlias = float | FloatArray | Callable[[FloatArray], FloatArray]

_BACK: dict[str, float] = {"centred": 0.5, "trailing": 1.0}  # share of the window that lies before its instant


def curve_through(time: ArrayLike, value: ArrayLike) -> Curve:
    """Straight lines through points.

    Args:
        time: shape (m,), s, not decreasing; two equal times are a jump.
        value: shape (m,).
    Raises:
        WaveformRefused: fewer than two points, times that run backwards, numbers that are none.
    """
    t, x = np.asarray(time, dtype=np.float64), np.asarray(value, dtype=np.float64)
    if t.ndim != 1 or t.shape != x.shape or t.size < 2:
        raise waveform_refused("a waveform needs two or more points, as many values as times")
    if not (np.isfinite(t).all() and np.isfinite(x).all()):
        raise waveform_refused("the waveform holds a value that is not a number")
    step = np.diff(t)
    if np.any(step < 0.0):
        raise waveform_refused(f"the times run backwards at {t[int(np.argmax(step < 0.0))]:.6g} s")
    joined = np.flatnonzero(step > 0.0)
    if not joined.size:
        raise waveform_refused("all points of the waveform have the same time")
    coefficient = np.zeros((joined.size, 4))
    coefficient[:, 0], coefficient[:, 1] = x[joined], x[joined + 1] - x[joined]
    return Curve(t[joined], step[joined], coefficient)


class Antiderivative:
    """The running integral of a curve, less a constant mean so that little is lost to rounding; over gaps of the curve it stands still."""

    def __init__(self, curve: Curve) -> None:
        weights = np.array([1.0, 1 / 2, 1 / 3, 1 / 4])
        total, duration = curve.integral(), curve.duration_s()
        self.curve, self.mean = curve, total / duration
        self._coefficient = curve.coefficient.copy()
        self._coefficient[:, 0] -= self.mean
        pieces = curve.length * (self._coefficient @ weights)
        self._before = np.concatenate([[0.0], np.cumsum(pieces)[:-1]])

    def at(self, times: FloatArray) -> FloatArray:
        """Integral of (x - mean) from the curve's begin; clamped at its ends."""
        curve = self.curve
        k = np.clip(np.searchsorted(curve.start, times, side="right") - 1, 0, curve.start.size - 1)
        u = np.clip((times - curve.start[k]) / curve.length[k], 0.0, 1.0)
        c = self._coefficient[k]
        inner = u * (c[..., 0] + u * (c[..., 1] / 2 + u * (c[..., 2] / 3 + u * c[..., 3] / 4)))
        value: FloatArray = self._before[k] + curve.length[k] * inner
        return value

    def between(self, begin: FloatArray, end: FloatArray) -> FloatArray:
        """Average from begin to end, elementwise; NaN where the curve does not cover it all."""
        curve = self.curve
        slack = 1e-9 * (end - begin)
        with np.errstate(all="ignore"):
            value = self.mean + (self.at(end) - self.at(begin)) / (end - begin)
        covered = (begin >= curve.begin_s - slack) & (end <= curve.end_s + slack)
        return np.asarray(np.where(covered & (end > begin), value, np.nan), dtype=np.float64)


def sliding_average(curve: Curve, period: Period, times: ArrayLike, *, window: Window = "centred") -> FloatArray:
    """The average over one period around (or before) each instant.

    Args:
        curve: what is averaged.
        period: T in s: one number, one per instant, or a function of the instants; so the period may change.
        times: s, any shape.
        window: "centred": t - T/2 .. t + T/2; "trailing": t - T .. t.
    Returns:
        Averages of the same shape; NaN where the window reaches beyond the curve.
    """
    return _sliding(Antiderivative(curve), period, times, window)


def _sliding(integral: Antiderivative, period: Period, times: ArrayLike, window: Window) -> FloatArray:
    at = np.asarray(times, dtype=np.float64)
    length = np.broadcast_to(np.asarray(period(at) if callable(period) else period, dtype=np.float64), at.shape)
    if not np.all(length > 0.0):
        raise waveform_refused("the period of an average must be above zero")
    begin = at - _BACK[window] * length
    return integral.between(begin, begin + length)


def period_averages(curve: Curve, starts: ArrayLike) -> tuple[FloatArray, FloatArray]:
    """One average per period.

    Args:
        curve: what is averaged.
        starts: shape (m,), s, increasing: where each period begins and the one before it ends; they need not be equally long.
    Returns:
        The periods' middles and their averages, each shape (m - 1,).
    """
    edges = np.asarray(starts, dtype=np.float64)
    if edges.ndim != 1 or edges.size < 2 or np.any(np.diff(edges) <= 0.0):
        raise waveform_refused("averages per period need two or more increasing period starts")
    return 0.5 * (edges[1:] + edges[:-1]), Antiderivative(curve).between(edges[:-1], edges[1:])


def average_slope(curve: Curve, period_s: float, times: ArrayLike, *, window: Window = "centred") -> FloatArray:
    """The exact rate of change of the sliding average: (x at the window's end - x at its begin)/T."""
    at = np.asarray(times, dtype=np.float64)
    begin = at - _BACK[window] * period_s
    return (curve.at(begin + period_s) - curve.at(begin)) / period_s


def averaging_response(frequency_hz: ArrayLike, period_s: float, *, window: Window = "centred") -> ComplexArray:
    """What the sliding average does to a sine: sin(pi f T)/(pi f T), turned by -pi f T for the trailing window."""
    f = np.asarray(frequency_hz, dtype=np.float64)
    size = np.sinc(f * period_s)
    phase = 0.0 if window == "centred" else -np.pi * f * period_s
    return np.asarray(size * np.exp(1j * phase), dtype=np.complex128)


def average_curve(curve: Curve, period_s: float, *, window: Window = "centred") -> Curve:
    """The sliding average as a curve of its own, wherever the window fits.

    It is a polynomial between the instants at which either edge of the window meets a joint of the curve. Up to quadratic pieces this is
    exact; of cubic ones (averages of degree four) each piece is a cubic through four of its points, their error of fourth order in the piece.
    """
    back = _BACK[window] * period_s
    first, last = curve.begin_s + back, curve.end_s + back - period_s
    if last <= first:
        raise waveform_refused("the waveform is shorter than one period")
    joints = np.concatenate([curve.start, curve.start + curve.length])
    knots = np.unique(np.concatenate([[first, last], joints + back, joints + back - period_s]))
    knots = knots[(knots >= first) & (knots <= last)]
    knots = knots[np.concatenate([[True], np.diff(knots) > 1e-9 * period_s])]
    start, length = knots[:-1], np.diff(knots)
    u = np.array([0.0, 1 / 3, 2 / 3, 1.0])
    value = sliding_average(curve, period_s, start[:, None] + length[:, None] * u, window=window)
    to_powers = np.linalg.inv(np.vander(u, 4, increasing=True))
    return Curve(start, length, np.nan_to_num(value) @ to_powers.T)


def cycle_average(
    time: ArrayLike, value: ArrayLike, period: Period, *, times: ArrayLike | None = None, window: Window = "centred"
) -> tuple[FloatArray, FloatArray]:
    """The sliding average of a waveform given as plain arrays.

    Args:
        time: shape (m,), s, not decreasing, any spacing; two equal times are a jump.
        value: shape (m,).
        period: T in s: a number, one per instant, or a function of the instants.
        times: where to give the average; None: at the waveform's own times at which the window fits.
        window: see sliding_average.
    Returns:
        Instants and averages.

    >>> import numpy as np
    >>> t = np.linspace(0.0, 1.0, 11)
    >>> at, mean = cycle_average(t, t, 0.2, times=[0.5, 0.6])
    >>> mean.round(12).tolist()
    [0.5, 0.6]
    """
    curve = curve_through(time, value)
    own = times is None
    at = np.unique(np.asarray(time, dtype=np.float64)) if own else np.asarray(times, dtype=np.float64)
    mean = sliding_average(curve, period, at, window=window)
    if own:
        fits = np.isfinite(mean)
        return at[fits], mean[fits]
    return at, mean
