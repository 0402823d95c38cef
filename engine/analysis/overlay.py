"""Averaged run, edge-by-edge waveform and its cycle average over one another, and the error between the first and the last in numbers."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Final

import numpy as np

from polewise.analysis.cycle_average import average_curve
from polewise.grammar.units import Dimension, unit_text
from polewise.results.curve import Curve, FloatArray
from polewise.results.recording import Recording, column_index, recorded_curve

if TYPE_CHECKING:
    from matplotlib.figure import Figure

PANELS_MOST: Final = 8  # quantities drawn
_GAUSS_POINTS: Final = 5  # per piece: squares of differences of quartics are integrated exactly to degree nine
_EDGES_INK, _AVERAGE_INK, _CYCLE_INK, _TEXT_INK, _PAPER = "#b9c2c9", "#0b6e75", "#b4511c", "#22272b", "#fdfdfb"


@dataclass(frozen=True, slots=True)
class AverageError:
    """Cycle average of the edges less the averaged run, of one quantity.

    Args:
        rms, worst: SI; worst is the largest by size, with its sign, at worst_s.
        swing: of the edge-by-edge waveform, highest less lowest. rms_relative, worst_relative: to it (0 where it is 0).
    """

    name: str
    dimension: Dimension
    rms: float
    worst: float
    worst_s: float
    swing: float

    @property
    def rms_relative(self) -> float:
        """rms / swing."""
        return self.rms / self.swing if self.swing > 0.0 else 0.0

    @property
    def worst_relative(self) -> float:
        """|worst| / swing."""
        return abs(self.worst) / self.swing if self.swing > 0.0 else 0.0

    @property
    def unit(self) -> str:
        """Its SI unit."""
        return unit_text(self.dimension)


@dataclass(frozen=True, slots=True, eq=False)
class Overlay:
    """Three curves per quantity.

    Args:
        edges, cycle, averaged: by name. errors: one per quantity, over the stretch in which a whole centred period fits.
        period_s: of the average.
    """

    edges: dict[str, Curve]
    cycle: dict[str, Curve]
    averaged: dict[str, Curve]
    errors: tuple[AverageError, ...]
    period_s: float
    title: str = ""
    study: str = ""
    _at: dict[str, int] = field(default_factory=dict, repr=False)

    def __getitem__(self, name: str) -> AverageError:
        """The error of a quantity.

        Raises:
            UnknownName: it was not kept.
        """
        from polewise.results.failures import UnknownName, nearest_names

        if name not in self._at:
            raise UnknownName(name, f"`{name}` is not in the overlay", nearest_names(name, self._at))
        return self.errors[self._at[name]]

    def figure(self) -> Figure:
        """One panel per quantity: edges faint, their cycle average and the averaged run on top, the error beside its name.

        Raises:
            MissingExtra: matplotlib is not installed.
        """
        return _figure(self)


def overlay(edges: Recording, averaged: Recording, names: Sequence[str], period_s: float, title: str = "", study: str = "") -> Overlay:
    """Lay them over one another.

    Args:
        edges, averaged: recordings that hold the names, the second over at least the stretch of the first.
        period_s: of the cycle average, centred.
    """
    found: dict[str, tuple[Curve, Curve, Curve]] = {}
    errors = []
    for name in names:
        waveform, model = recorded_curve(edges, name), recorded_curve(averaged, name)
        cycle = average_curve(waveform, period_s)
        dimension = edges.columns[column_index(edges.columns, name)].dimension
        errors.append(average_error(name, dimension, waveform, cycle, model))
        found[name] = waveform, cycle, model.window(waveform.begin_s, waveform.end_s)
    return Overlay(
        {n: c[0] for n, c in found.items()},
        {n: c[1] for n, c in found.items()},
        {n: c[2] for n, c in found.items()},
        tuple(errors),
        period_s,
        title,
        study,
        {n: k for k, n in enumerate(found)},
    )


def average_error(name: str, dimension: Dimension, waveform: Curve, cycle: Curve, model: Curve) -> AverageError:
    """The error of one quantity, over the stretch that cycle average and model share."""
    rms, worst, worst_s = difference(cycle, model)
    swing = waveform.highest()[0] - waveform.lowest()[0]
    return AverageError(name, dimension, rms, worst, worst_s, swing)


def difference(one: Curve, other: Curve) -> tuple[float, float, float]:
    """RMS of one - other over the stretch they share, the largest difference by size and when; nan where they share none."""
    begin, end = max(one.begin_s, other.begin_s), min(one.end_s, other.end_s)
    if end <= begin:
        return float("nan"), float("nan"), float("nan")
    knots = np.unique(np.concatenate([[begin, end], one.start, other.start]))
    knots = knots[(knots >= begin) & (knots <= end)]
    start, length = knots[:-1], np.diff(knots)
    points, weights = np.polynomial.legendre.leggauss(_GAUSS_POINTS)
    times: FloatArray = start[:, None] + length[:, None] * 0.5 * (points + 1.0)
    gap = one.at(times) - other.at(times)
    good = np.isfinite(gap).all(axis=1)
    if not good.any():
        return float("nan"), float("nan"), float("nan")
    total = float(np.sum(length[good] * (gap[good] ** 2 @ (0.5 * weights))))
    k = int(np.argmax(np.abs(gap[good])))
    return float(np.sqrt(total / float(np.sum(length[good])))), float(gap[good].ravel()[k]), float(times[good].ravel()[k])


def _figure(over: Overlay) -> Figure:
    from polewise.results.figure import require_matplotlib

    require_matplotlib()
    from matplotlib.figure import Figure

    from polewise.results.traces import polyline

    names = list(over.edges)[:PANELS_MOST]
    height = 1.2 + 2.0 * max(1, len(names))
    figure = Figure(figsize=(10.0, height), dpi=120, facecolor=_PAPER)
    grid = figure.add_gridspec(max(1, len(names)), 1, left=0.09, right=0.97, top=1.0 - 0.75 / height, bottom=0.5 / height, hspace=0.35)
    scale, unit = _time_scale(max((c.end_s for c in over.edges.values()), default=1.0))
    for row, name in enumerate(names):
        ax = figure.add_subplot(grid[row])
        ax.set_facecolor(_PAPER)
        for curve, ink, width, label in (
            (over.edges[name], _EDGES_INK, 0.7, "every edge"),
            (over.averaged[name], _AVERAGE_INK, 1.8, "averaged run"),
            (over.cycle[name], _CYCLE_INK, 1.0, "cycle average of the edges"),
        ):
            t, v = polyline(curve)
            ax.plot(t / scale, v, color=ink, linewidth=width, label=label if row == 0 else None)
        error = over[name]
        note = f"{name} ({error.unit})   error rms {error.rms:.2g}, worst {error.worst:.2g} = {100.0 * error.worst_relative:.2g} % of the swing"
        ax.set_title(note, loc="left", fontsize=8.5, color=_TEXT_INK)
        for side in ("top", "right"):
            ax.spines[side].set_visible(False)
        ax.tick_params(labelsize=8, labelbottom=row == len(names) - 1)
        if row == len(names) - 1:
            ax.set_xlabel(f"time ({unit})", color=_TEXT_INK)
    heading = f"{over.title} · {over.study}" if over.title else over.study
    figure.text(0.09, 1.0 - 0.3 / height, heading, fontsize=11, color=_TEXT_INK, va="center")
    if names:
        figure.legend(loc="upper right", ncols=3, fontsize=8, frameon=False, bbox_to_anchor=(0.97, 1.0 - 0.1 / height))
    return figure


def _time_scale(end_s: float) -> tuple[float, str]:
    for scale, unit in ((1.0, "s"), (1e-3, "ms"), (1e-6, "us")):
        if end_s >= 0.5 * scale:
            return scale, unit
    return 1e-9, "ns"
