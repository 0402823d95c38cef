"""Figures of small-signal answers in the plain look of results.figure: size and phase over frequency, the curve round -1, modes in the plane."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import numpy as np

from polewise.analysis.answers import Answer, ResponseCurve
from polewise.analysis.impedance import Impedance
from polewise.analysis.loop import Loop
from polewise.analysis.modes import Modes
from polewise.analysis.point import ComplexArray
from polewise.kernels.program import FloatArray
from polewise.results.figure import require_matplotlib

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

_INK, _FAINT, _PAPER = "#22272b", "#c9ced2", "#fdfdfb"
_LINES = ("#0b6e75", "#b4511c", "#4b4fa8", "#73791a")
_HOLDS, _FAILS = "#4d7a57", "#b3261e"
_VIEW = 3.0  # of the curve round -1, in each direction


def answer_figure(answer: Answer) -> Figure:
    """The figure of one answer. Raises MissingExtra without matplotlib."""
    found = answer.found
    title = answer.order.text
    if isinstance(found, Modes):
        return modes_figure(found, title)
    if isinstance(found, ResponseCurve):
        return curves_figure(found.frequencies, {f"{found.output} / {found.input}": found.values}, title)
    if isinstance(found, Impedance):
        return impedance_figure(found, title)
    return loops_figure(found, title)


def loops_figure(loops: tuple[Loop, ...], title: str) -> Figure:
    """Size and phase of loop gains, crossovers marked, and the curve near -1."""
    figure = _sheet(title, 7.0)
    grid = figure.add_gridspec(2, 2, width_ratios=(3, 2), left=0.08, right=0.97, top=0.9, bottom=0.09, hspace=0.12, wspace=0.2)
    size, phase, plane = figure.add_subplot(grid[0, 0]), figure.add_subplot(grid[1, 0]), figure.add_subplot(grid[:, 1])
    for k, loop in enumerate(loops):
        colour = _LINES[k % len(_LINES)]
        _bode(size, phase, loop.frequencies, loop.gain, colour, loop.signal)
        for crossover in loop.margins.crossovers:
            size.plot([crossover.frequency_hz], [0.0], "o", color=colour, markersize=4)
            size.annotate(
                f"{crossover.phase_margin_deg:.1f} deg", (crossover.frequency_hz, 0.0), xytext=(4, 5), textcoords="offset points", color=colour
            )
        plane.plot(loop.gain.real, loop.gain.imag, color=colour, linewidth=1.3)
    _frame(plane)
    plane.plot([-1.0], [0.0], "x", color=_FAILS if any(loop.stable is False for loop in loops) else _HOLDS, markersize=8)
    angle = np.linspace(0.0, 2.0 * math.pi, 181)
    plane.plot(np.cos(angle), np.sin(angle), color=_FAINT, linewidth=0.8)
    plane.set_xlim(-_VIEW, _VIEW)
    plane.set_ylim(-_VIEW, _VIEW)
    plane.set_aspect("equal")
    plane.set_xlabel("real part")
    plane.set_ylabel("imaginary part")
    size.axhline(0.0, color=_INK, linewidth=0.6)
    size.legend(frameon=False, loc="best")
    return figure


def curves_figure(frequencies: FloatArray, curves: dict[str, ComplexArray], title: str, *, above: str = "1") -> Figure:
    """Size and phase over frequency; `above` is the unit that 0 dB stands for."""
    figure = _sheet(title, 5.5)
    size, phase = figure.subplots(2, 1, sharex=True, gridspec_kw={"left": 0.09, "right": 0.97, "top": 0.9, "bottom": 0.1, "hspace": 0.12})
    for k, (name, values) in enumerate(curves.items()):
        _bode(size, phase, frequencies, values, _LINES[k % len(_LINES)], name, above=above)
    size.legend(frameon=False, loc="best")
    return figure


def impedance_figure(found: Impedance, title: str) -> Figure:
    """Impedance, and its two sides where they were named; of a pair the diagonal."""
    if found.total.ndim > 1:
        return curves_figure(found.frequencies, {name: found.total[:, k, k] for k, name in enumerate(found.ports)}, title, above="ohm")
    curves = {"impedance": found.total}
    if found.split is not None:
        curves |= {"source side": found.split.source_impedance, "load side": found.split.load_impedance}
    return curves_figure(found.frequencies, curves, title, above="ohm")


def modes_figure(modes: Modes, title: str) -> Figure:
    """Modes in the upper half plane, both axes logarithmic about zero, repeated ones with their number."""
    figure = _sheet(title, 5.0)
    ax = figure.add_axes((0.1, 0.12, 0.86, 0.76))
    _frame(ax)
    smallest = min((abs(m.eigenvalue) for m in modes if m.eigenvalue != 0), default=1.0)
    ax.set_xscale("symlog", linthresh=0.1 * smallest)
    ax.set_yscale("symlog", linthresh=0.1 * smallest / (2 * math.pi))
    for mode in modes:
        ax.plot([mode.eigenvalue.real], [mode.frequency_hz], "o", color=_HOLDS if mode.stable else _FAILS, markersize=5)
        if mode.multiplicity > 1:
            at = (mode.eigenvalue.real, mode.frequency_hz)
            ax.annotate(f"{mode.multiplicity} ×", at, xytext=(5, 4), textcoords="offset points", color=_INK)
    ax.axvline(0.0, color=_INK, linewidth=0.8)
    ax.set_xlabel("real part, 1/s")
    ax.set_ylabel("frequency, Hz")
    return figure


def _sheet(title: str, height_in: float) -> Figure:
    require_matplotlib()
    from matplotlib.figure import Figure as Sheet

    figure = Sheet(figsize=(10.0, height_in), facecolor=_PAPER)
    figure.text(0.04, 0.95, title, color=_INK, fontsize=11)
    return figure


def _frame(ax: Axes) -> None:
    ax.set_facecolor(_PAPER)
    for side in ("top", "right"):
        ax.spines[side].set_visible(False)
    for side in ("left", "bottom"):
        ax.spines[side].set_color(_FAINT)
    ax.tick_params(colors=_INK, labelsize=8)
    ax.grid(True, color=_FAINT, linewidth=0.4)


def _bode(size: Axes, phase: Axes, frequencies: FloatArray, values: ComplexArray, colour: str, label: str, *, above: str = "1") -> None:
    """Size in dB above one unit and phase in degrees without jumps."""
    with np.errstate(divide="ignore"):
        level: Any = 20.0 * np.log10(np.abs(values))
    for ax in (size, phase):
        _frame(ax)
        ax.set_xscale("log")
    size.plot(frequencies, level, color=colour, linewidth=1.4, label=label)
    phase.plot(frequencies, np.degrees(np.unwrap(np.angle(values))), color=colour, linewidth=1.4)
    size.set_ylabel("size, dB" if above == "1" else f"size, dB above 1 {above}")
    phase.set_ylabel("phase, deg")
    phase.set_xlabel("frequency, Hz")
