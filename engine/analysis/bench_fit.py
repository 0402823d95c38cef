"""A measured cycle average against a model's quantity: aligned in time, with gain, offset, delay and the error that is left.

measured(t) = gain * model(t - delay) + offset + error; for each delay, gain and offset follow by least squares, and the delay with the
smallest error is taken: first on a grid over all delays at which enough of both overlaps, then refined.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Final

import numpy as np

from polewise.analysis.failures import waveform_refused
from polewise.results.curve import Curve, FloatArray

if TYPE_CHECKING:
    from matplotlib.figure import Figure

POINTS: Final = 2000  # at which the two are compared
DELAYS: Final = 801  # of the first search
OVERLAP_LEAST: Final = 0.5  # of the shorter of both that must be covered
SWING_LEAST: Final = 1e-6  # of the model's size: a model that moves less has no shape to fit a gain or a delay to


@dataclass(frozen=True, slots=True, eq=False)
class Fit:
    """How a model fits a measurement.

    Args:
        quantity: of the model. gain: measured over model. offset: SI. delay_s: the measurement comes later by it.
        rms: of what is left, SI; worst: its largest value by size. swing: of the measured average over the overlap.
        shaped: whether the model moves enough to tell gain and delay; otherwise gain is 1 and delay 0 by choice.
        time, measured, model: shape (m,), on the model's time; `model` as it is, without gain and offset.
    """

    channel: str
    quantity: str
    gain: float
    offset: float
    delay_s: float
    rms: float
    worst: float
    swing: float
    shaped: bool
    time: FloatArray
    measured: FloatArray
    model: FloatArray

    @property
    def rms_relative(self) -> float:
        """rms / swing; 0 for no swing."""
        return self.rms / self.swing if self.swing > 0.0 else 0.0

    def figure(self, title: str = "") -> Figure:
        """Measurement, model, and what is left between them.

        Raises:
            MissingExtra: matplotlib is not installed.
        """
        from polewise.results.figure import require_matplotlib

        require_matplotlib()
        from matplotlib.figure import Figure

        figure = Figure(figsize=(10.0, 5.6), dpi=120, facecolor="#fdfdfb")
        above, below = figure.subplots(2, 1, sharex=True, gridspec_kw={"height_ratios": [3, 1], "hspace": 0.12})
        fitted = self.gain * self.model + self.offset
        above.plot(self.time, self.measured, color="#b4511c", linewidth=1.4, label=f"measured {self.channel}, cycle average")
        above.plot(self.time, fitted, color="#0b6e75", linewidth=1.2, label=f"model {self.quantity} * {self.gain:.4g} + {self.offset:.3g}")
        above.legend(frameon=False, fontsize=8)
        above.set_title(title or f"{self.channel} against {self.quantity}", loc="left", fontsize=10)
        below.plot(self.time, self.measured - fitted, color="#566573", linewidth=0.9)
        below.set_ylabel("left over", fontsize=8)
        below.set_xlabel("time of the model (s)", fontsize=9)
        for ax in (above, below):
            ax.set_facecolor("#fdfdfb")
            ax.tick_params(labelsize=8)
            for side in ("top", "right"):
                ax.spines[side].set_visible(False)
        return figure


def fit_model(channel: str, time: FloatArray, measured: FloatArray, quantity: str, model: Curve) -> Fit:
    """Fit a model's quantity to a measured average.

    Args:
        time, measured: shape (m,), s and SI, time increasing.
        model: the quantity over its study.
    Raises:
        WaveformRefused: they can't overlap.
    """
    span, length = float(time[-1] - time[0]), model.end_s - model.begin_s
    if span <= 0.0 or length <= 0.0:
        raise waveform_refused("nothing to align: the measurement or the model has no length")
    low, high = (float(f(v)) for f, v in ((np.min, model.piece_ranges()[0]), (np.max, model.piece_ranges()[1])))
    if high - low <= SWING_LEAST * max(abs(low), abs(high)):
        offset = float(np.mean(measured)) - 0.5 * (low + high)
        return _fit(channel, time, measured, quantity, model, time[0] - model.begin_s, shaped=False, offset=offset)
    need = OVERLAP_LEAST * min(span, length)
    first, last = time[0] + need - model.end_s, time[-1] - need - model.begin_s
    delays = np.linspace(first, last, DELAYS)
    errors = np.array([_left(time, measured, model, d)[0] for d in delays])
    k = int(np.nanargmin(errors)) if np.isfinite(errors).any() else 0
    from scipy.optimize import minimize_scalar

    step = delays[1] - delays[0]
    found = minimize_scalar(
        lambda d: _left(time, measured, model, d)[0],
        bounds=(delays[k] - 2 * step, delays[k] + 2 * step),
        method="bounded",
        options={"xatol": 1e-6 * step},
    )
    delay = float(found.x) if found.fun <= errors[k] else float(delays[k])
    return _fit(channel, time, measured, quantity, model, delay, shaped=True)


def _points(time: FloatArray, measured: FloatArray, model: Curve, delay: float) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Instants of the model, measurement and model there, over their overlap."""
    begin, end = max(time[0] - delay, model.begin_s), min(time[-1] - delay, model.end_s)
    if end <= begin:
        nothing = np.zeros(0)
        return nothing, nothing, nothing
    at = np.linspace(begin, end, POINTS)
    return at, np.interp(at + delay, time, measured), model.at(at)


def _left(time: FloatArray, measured: FloatArray, model: Curve, delay: float) -> tuple[float, float, float]:
    """Error against the measurement's own spread, gain and offset at a delay."""
    at, y, x = _points(time, measured, model, delay)
    good = np.isfinite(x)
    if good.sum() < 8:
        return np.inf, 1.0, 0.0
    x, y = x[good], y[good]
    spread = float(np.sum((x - x.mean()) ** 2))
    gain = float(np.sum((x - x.mean()) * (y - y.mean())) / spread) if spread > 0.0 else 0.0
    offset = float(y.mean() - gain * x.mean())
    whole = float(np.sum((y - y.mean()) ** 2))
    rest = float(np.sum((y - gain * x - offset) ** 2))
    assert at.size
    return rest / whole if whole > 0.0 else np.inf, gain, offset


def _fit(
    channel: str, time: FloatArray, measured: FloatArray, quantity: str, model: Curve, delay: float, *, shaped: bool, offset: float = 0.0
) -> Fit:
    at, y, x = _points(time, measured, model, delay)
    if not at.size:
        raise waveform_refused("the measurement and the model do not overlap")
    gain = 1.0
    if shaped:
        _, gain, offset = _left(time, measured, model, delay)
    rest = y - gain * x - offset
    rest = rest[np.isfinite(rest)]
    worst = float(rest[int(np.argmax(np.abs(rest)))])
    swing = float(np.max(y) - np.min(y))
    return Fit(channel, quantity, gain, offset, delay if shaped else 0.0, float(np.sqrt(np.mean(rest**2))), worst, swing, shaped, at, y, x)
