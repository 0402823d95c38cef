"""The figure of a study: one panel per unit, events and limits marked, readable for three traces and for three thousand."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

import numpy as np

from polewise.grammar import units
from polewise.grammar.units import Dimension, format_value, parse_unit
from polewise.results.curve import Curve
from polewise.results.failures import MissingExtra
from polewise.results.panels import Panel, draws_limits, panels_of
from polewise.results.recording import Recording, recorded_curve
from polewise.results.traces import polyline
from polewise.results.verdict import RequirementVerdict, Verdict

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

_COLOURS: Final = ("#0b6e75", "#b4511c", "#4b4fa8", "#73791a", "#93396f", "#2f7d46", "#b58312", "#566573")
_INK: Final = "#22272b"
_FAINT: Final = "#c9ced2"
_PAPER: Final = "#fdfdfb"
_HOLDS: Final = "#4d7a57"
_FAILS: Final = "#b3261e"
_TAGS_MAX: Final = 12  # numbered marks of events
_WIDTH_IN: Final = 10.0
_PANEL_IN: Final = 2.1

_WORDS: Final[dict[Dimension, str]] = {
    units.VOLTAGE: "voltage",
    units.CURRENT: "current",
    units.POWER: "power",
    units.RESISTANCE: "resistance",
    units.TEMPERATURE: "temperature",
    units.RATE: "rate",
    units.SPEED: "speed",
    units.FORCE: "force",
    units.TORQUE: "torque or energy",
    units.CHARGE: "charge",
    units.FLUX: "flux",
    units.TIME: "time",
    units.NONE: "plain number",
}


@dataclass(frozen=True, slots=True)
class Mark:
    """An instant worth a line in a figure."""

    time_s: float
    text: str


@dataclass(frozen=True, slots=True)
class FigureFacts:
    """What a figure says beside its traces.

    Args:
        title: of the netlist. study: its name.
        planned_s, reached_s: where the study was to end, and did.
        marks: events, in order of time.
    """

    title: str
    study: str
    planned_s: float
    reached_s: float
    marks: tuple[Mark, ...]


def require_matplotlib() -> None:
    """Say so where matplotlib is missing.

    Raises:
        MissingExtra: it is not installed.
    """
    try:
        import matplotlib.figure  # noqa: F401
    except ImportError as error:
        raise MissingExtra("matplotlib", "figures", "drawing a figure") from error


def study_figure(recording: Recording, verdict: Verdict, facts: FigureFacts) -> Figure:
    """Draw a study.

    Args:
        recording: kept quantities; columns are read one at a time.
        verdict: its requirements, for limits and worst points.
        facts: titles, times, events.
    Raises:
        MissingExtra: matplotlib is not installed.
    """
    require_matplotlib()
    from matplotlib.figure import Figure

    panels = panels_of(recording, verdict, facts.reached_s)
    heights = [_PANEL_IN if not panel.lanes else 0.55 + 0.17 * len(panel.lanes) for panel in panels] or [_PANEL_IN]
    tags = _tags(facts)
    key_lines = len(tags)
    head_in, foot_in = 0.85, 0.55 + 0.19 * key_lines
    height = sum(heights) + 0.22 * (len(heights) - 1) + head_in + foot_in
    figure = Figure(figsize=(_WIDTH_IN, height), dpi=120, facecolor=_PAPER)
    grid = figure.add_gridspec(
        len(heights),
        1,
        height_ratios=heights,
        left=0.085,
        right=0.82,
        top=1.0 - head_in / height,
        bottom=foot_in / height,
        hspace=0.22 / (sum(heights) / len(heights)),
    )
    axes: list[Axes] = []
    for row in range(len(heights)):
        axes.append(figure.add_subplot(grid[row], sharex=axes[0] if axes else None))
    scale_s, unit = _time_scale(facts.reached_s)
    for ax, panel in zip(axes, panels, strict=False):
        _bare(ax)
        if panel.lanes:
            _draw_lanes(ax, recording, panel, scale_s)
        else:
            _draw_panel(ax, recording, verdict, panel, scale_s, facts)
    if not panels:
        _bare(axes[0])
        axes[0].text(0.5, 0.5, "nothing was kept", transform=axes[0].transAxes, ha="center", color=_INK)
    for ax in axes[:-1]:
        ax.tick_params(labelbottom=False)
    axes[-1].set_xlabel(f"time ({unit})", color=_INK)
    axes[0].set_xlim(0.0, max(facts.reached_s, 1e-300) / scale_s)
    _draw_tags(figure, axes, tags, scale_s, height)
    _head(figure, verdict, facts, height)
    return figure


# ---------------------------------------------------------------- scales


def _bare(ax: Axes) -> None:
    """Our plain look: two quiet spines, level lines only."""
    ax.set_facecolor(_PAPER)
    for side in ("top", "right"):
        ax.spines[side].set_visible(False)
    for side in ("left", "bottom"):
        ax.spines[side].set_color(_FAINT)
    ax.tick_params(colors=_INK, labelsize=8, color=_FAINT)
    ax.grid(axis="y", color=_FAINT, linewidth=0.5, alpha=0.7)
    ax.set_axisbelow(True)


def _time_scale(span_s: float) -> tuple[float, str]:
    for limit_s, scale_s, unit in ((2e-3, 1e-6, "us"), (2.0, 1e-3, "ms"), (600.0, 1.0, "s"), (7200.0, 60.0, "min")):
        if span_s < limit_s:
            return scale_s, unit
    return 3600.0, "h"


def _value_scale(dimension: Dimension, size: float, prefer: str | None) -> tuple[float, str]:
    """Factor and unit text for an axis whose largest value has this size."""
    text = format_value(size if np.isfinite(size) else 0.0, dimension, digits=3, prefer=prefer)
    _, _, symbol = text.partition(" ")
    if not symbol:
        return 1.0, "1"
    unit = parse_unit(symbol)
    return (unit.factor, symbol) if unit is not None and unit.dimension == dimension else (1.0, units.unit_text(dimension))


# ---------------------------------------------------------------- traces


def _draw_panel(ax: Axes, recording: Recording, verdict: Verdict, panel: Panel, scale_s: float, facts: FigureFacts) -> None:
    drawn = frozenset[str]().union(*(trace.names for trace in panel.traces))
    prefer = next((r.prefer for r in verdict.requirements if r.subject in drawn and r.dimension == panel.dimension and r.prefer), None)
    factor, symbol = _value_scale(panel.dimension, max((_size(t.values) for t in panel.traces), default=0.0), prefer)
    labelled: list[tuple[float, str, str]] = []
    for number, trace in enumerate(panel.traces):
        shade = _COLOURS[number % len(_COLOURS)]
        if trace.band is not None:
            ax.fill_between(trace.times / scale_s, trace.band.low / factor, trace.band.high / factor, color=shade, alpha=0.22, linewidth=0)
        line = "-" if number < len(_COLOURS) else (0, (4, 2))  # colours come round again, dashed
        ax.plot(trace.times / scale_s, trace.values / factor, color=shade, linewidth=1.2, linestyle=line, solid_joinstyle="round")
        if trace.values.size:
            labelled.append((float(trace.values[-1]) / factor, trace.label, shade))
    for requirement in verdict.requirements:
        if requirement.subject in drawn:
            _draw_requirement(ax, recording, requirement, scale_s, factor, facts)
    _frame(ax)
    _end_labels(ax, labelled, panel.left_out)
    word = {"J": "energy", "N*m": "torque"}.get(prefer or "", _WORDS.get(panel.dimension))
    ax.set_ylabel(f"{word} ({symbol})" if word else f"({symbol})", color=_INK, fontsize=9)


def _size(values: Any) -> float:
    finite = np.abs(values[np.isfinite(values)])
    return float(finite.max()) if finite.size else 0.0


def _frame(ax: Axes) -> None:
    """A little air above and below; a flat trace does not fill the panel with its rounding noise."""
    low, high = ax.dataLim.y0, ax.dataLim.y1
    if not (np.isfinite(low) and np.isfinite(high)):
        return
    least = 1e-3 * max(abs(low), abs(high), 1e-12)
    air = max(0.06 * (high - low), least)
    ax.set_ylim(low - air, high + air)
    formatter: Any = ax.yaxis.get_major_formatter()
    formatter.set_useOffset(False)


def _end_labels(ax: Axes, labelled: list[tuple[float, str, str]], left_out: int) -> None:
    """Names beside the right end of their traces, moved apart where they would overlap."""
    low, high = ax.get_ylim()
    step = 0.085
    wanted = sorted(
        ((min(max((value - low) / (high - low), 0.0), 1.0) if np.isfinite(value) else 0.5), label, shade) for value, label, shade in labelled
    )
    places = _spread([w[0] for w in wanted], step)
    for place, (_, label, shade) in zip(places, wanted, strict=True):
        ax.annotate(_shortened(label), (1.012, place), xycoords="axes fraction", fontsize=7.5, color=shade, va="center", annotation_clip=False)
    if left_out:
        ax.annotate(
            f"{left_out} more not drawn", (0.995, 0.97), xycoords="axes fraction", fontsize=7, color=_INK, va="top", ha="right", annotation_clip=False
        )


def _spread(wanted: list[float], step: float) -> list[float]:
    """Places at least `step` apart, in order, near the wanted ones and as far as possible inside 0 .. 1."""
    places: list[float] = []
    for want in wanted:
        places.append(max(want, places[-1] + step) if places else want)
    over = places[-1] - 1.0 if places else 0.0
    if over > 0.0:
        places[-1] = 1.0
        for k in range(len(places) - 2, -1, -1):
            places[k] = min(places[k], places[k + 1] - step)
    return places


def _shortened(label: str, most: int = 30) -> str:
    return label if len(label) <= most else label[: most // 2 - 1] + "…" + label[-most // 2 :]


def _draw_lanes(ax: Axes, recording: Recording, panel: Panel, scale_s: float) -> None:
    """Conditions: a thick stretch while true."""
    time = recording.grid.time / scale_s
    for row, column in enumerate(panel.lanes):
        true = recording.values(column.name) > 0.5
        shade = _COLOURS[row % len(_COLOURS)]
        ax.axhline(-row, color=_FAINT, linewidth=0.6)
        ax.fill_between(time, -row - 0.3, -row + 0.3, where=list(true), color=shade, linewidth=0, step="post")
        ax.annotate(_shortened(column.name), (1.012, -row), xycoords=("axes fraction", "data"), fontsize=7.5, color=shade, va="center")
    ax.set_ylim(-len(panel.lanes) + 0.4, 0.6)
    ax.set_yticks([])
    ax.grid(visible=False)
    ax.set_ylabel("true while\ncoloured", color=_INK, fontsize=8)


# ---------------------------------------------------------------- requirements and events


def _draw_requirement(ax: Axes, recording: Recording, requirement: RequirementVerdict, scale_s: float, factor: float, facts: FigureFacts) -> None:
    shade = _HOLDS if requirement.passed else _FAILS
    begin_s = requirement.window_s[0]
    end_s = min(facts.reached_s, requirement.window_s[1] if requirement.window_s[1] is not None else facts.planned_s)
    if draws_limits(requirement) and end_s > begin_s:
        for limit, forbidden in ((requirement.low, "below"), (requirement.high, "above")):
            if limit is not None:
                times, values = _limit_line(recording, limit, begin_s, end_s)
                _barrier(ax, times / scale_s, values / factor, forbidden, shade)
    if requirement.time_s is not None and (not requirement.passed or requirement.measure == "settling_time"):
        curve = recorded_curve(recording, requirement.subject)
        value = requirement.value if requirement.measure == "value" else float(curve.at(np.array([requirement.time_s]))[0])
        if value is not None and np.isfinite(value):
            late = requirement.time_s > 0.8 * facts.reached_s
            ax.plot(
                [requirement.time_s / scale_s],
                [value / factor],
                marker="o",
                markersize=7,
                markerfacecolor="none",
                markeredgecolor=shade,
                markeredgewidth=1.4,
            )
            ax.annotate(
                requirement.name,
                (requirement.time_s / scale_s, value / factor),
                xytext=(-7, 7) if late else (7, 7),
                textcoords="offset points",
                ha="right" if late else "left",
                fontsize=7,
                color=shade,
                annotation_clip=True,
            )


def _limit_line(recording: Recording, limit: float | str, begin_s: float, end_s: float) -> tuple[Any, Any]:
    if isinstance(limit, str):
        part: Curve = recorded_curve(recording, limit).window(begin_s, end_s)
        return polyline(part)
    return np.array([begin_s, end_s]), np.array([limit, limit])


def _barrier(ax: Axes, times: Any, values: Any, forbidden: str, shade: str) -> None:
    """A limit: a line with short strokes on the side where the trace must not be."""
    from matplotlib import patheffects

    angle = 90.0 if forbidden == "above" else -90.0  # counted from the line's direction, to its left
    strokes = patheffects.TickedStroke(spacing=14.0, angle=angle, length=0.4, linewidth=0.8, foreground=shade)
    ax.plot(times, values, color=shade, linewidth=1.0, path_effects=[strokes, patheffects.Normal()], zorder=1.5)


def _tags(facts: FigureFacts) -> list[tuple[float, str]]:
    """Events as (time, text), those closer than two hundredths of the axis joined, at most twelve."""
    joined: list[list[Mark]] = []
    for mark in facts.marks:
        if joined and mark.time_s - joined[-1][0].time_s < 0.02 * facts.reached_s:
            joined[-1].append(mark)
        else:
            joined.append([mark])
    tags = [(group[0].time_s, _tag_text(group)) for group in joined]
    if len(tags) > _TAGS_MAX:
        more = sum(len(group) for group in joined[_TAGS_MAX:])
        tags = tags[:_TAGS_MAX]
        tags[-1] = (tags[-1][0], f"{tags[-1][1]}; {more} later event{' is' if more == 1 else 's are'} not marked")
    return tags


def _tag_text(group: list[Mark]) -> str:
    texts: list[str] = []
    for mark in group:
        if mark.text not in texts:
            texts.append(mark.text)
    shown = "; ".join(texts[:3])
    rest = f"; {len(texts) - 3} more" if len(texts) > 3 else ""
    return f"{format_value(group[0].time_s, units.TIME)}  {_shortened(shown, 120)}{rest}"


def _draw_tags(figure: Figure, axes: list[Axes], tags: list[tuple[float, str]], scale_s: float, height_in: float) -> None:
    for number, (time_s, text) in enumerate(tags, 1):
        for ax in axes:
            ax.axvline(time_s / scale_s, color=_INK, linewidth=0.7, linestyle=(0, (1, 3)), zorder=1)
        axes[0].annotate(
            str(number),
            (time_s / scale_s, 1.02),
            xycoords=("data", "axes fraction"),
            fontsize=7,
            color=_PAPER,
            ha="center",
            va="bottom",
            bbox={"boxstyle": "round,pad=0.22", "facecolor": _INK, "edgecolor": "none"},
            annotation_clip=False,
        )
        figure.text(0.085, (0.08 + 0.19 * (len(tags) - number)) / height_in, f"{number}  at {text}", fontsize=7.5, color=_INK, va="bottom")


def _head(figure: Figure, verdict: Verdict, facts: FigureFacts, height_in: float) -> None:
    figure.text(0.085, 1.0 - 0.16 / height_in, facts.study.replace("_", " "), fontsize=13, color=_INK, weight="bold", va="top")
    figure.text(0.085, 1.0 - 0.42 / height_in, facts.title, fontsize=8.5, color=_INK, va="top")
    if verdict.requirements:
        shade = _FAILS if verdict.failed else _HOLDS
        figure.text(0.985, 1.0 - 0.18 / height_in, verdict.sentence, fontsize=10, color=shade, va="top", ha="right", weight="bold")
    if facts.reached_s < facts.planned_s * (1.0 - 1e-9):
        words = f"incomplete: stopped at {format_value(facts.reached_s, units.TIME)} of {format_value(facts.planned_s, units.TIME)}"
        figure.text(0.985, 1.0 - 0.42 / height_in, words, fontsize=8.5, color=_FAILS, va="top", ha="right")
