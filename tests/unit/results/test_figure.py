"""Figures: units on every axis, no extreme lost in thinning, families of many traces as bands, files of both kinds."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest

from polewise.grammar import units
from polewise.results.figure import FigureFacts, Mark, study_figure
from polewise.results.plan import Judged
from polewise.results.recording import Column, MemorySink, Recording, recorded_curve
from polewise.results.traces import band, families, polyline
from polewise.results.verdict import judge

from .recorded import judged, recording, rows

EDGES = list(np.linspace(0.0, 0.1, 200))


def _record(columns: list[Column], functions) -> Recording:
    sink = MemorySink(tuple(columns))
    sink.write(rows(EDGES, functions))
    return sink.finish()


def _figure(record: Recording, requirements: tuple[Judged, ...] = (), marks: tuple[Mark, ...] = (), planned_s: float = 0.1):
    verdict = judge("load_step", requirements, record, planned_end_s=planned_s, reached_s=0.1)
    return study_figure(record, verdict, FigureFacts("Title", "load_step", planned_s, 0.1, marks))


def _texts(figure) -> str:
    return "\n".join([t.get_text() for t in figure.texts] + [t.get_text() for ax in figure.axes for t in ax.texts])


def test_one_panel_per_unit_with_units_on_every_axis(tmp_path: Path) -> None:
    columns = [
        Column("bus.v", units.VOLTAGE),
        Column("a.i", units.CURRENT),
        Column("out.v", units.VOLTAGE),
        Column("duty", units.NONE),
        Column("run", units.NONE, True),
    ]
    record = _record(columns, [lambda t: 700 + t, lambda t: 0.02 * t, lambda t: 690 - t, lambda t: 0.4, lambda t: float(t > 0.05)])
    figure = _figure(record)
    labels = [ax.get_ylabel() for ax in figure.axes]
    assert labels[:3] == ["voltage (V)", "current (mA)", "plain number (1)"]
    assert figure.axes[-1].get_xlabel() == "time (ms)"
    for ending in ("png", "svg"):
        figure.savefig(tmp_path / f"f.{ending}")
        assert (tmp_path / f"f.{ending}").stat().st_size > 5000


def test_marks_limits_and_verdict_are_written() -> None:
    record = _record([Column("bus.v", units.VOLTAGE)], [lambda t: 700 + 10 * math.sin(100 * t)])
    figure = _figure(record, (judged("bus.v", 695.0, 720.0),), (Mark(0.02, "set demand2"), Mark(0.0201, "open k"), Mark(0.07, "late")))
    text = _texts(figure)
    assert "the requirement fails" in text
    assert "at 20 ms  set demand2; open k" in text
    assert "at 70 ms  late" in text
    assert "load step" in text


def test_an_incomplete_run_says_so() -> None:
    record = _record([Column("bus.v", units.VOLTAGE)], [lambda t: 700.0])
    assert "incomplete: stopped at 100 ms of 500 ms" in _texts(_figure(record, planned_s=0.5))


def test_a_thousand_converters_become_bands() -> None:
    count = 1000
    columns = [Column(f"berth{k}.choke.i", units.CURRENT) for k in range(count)]
    figure = _figure(_record(columns, [lambda t, k=k: k + math.sin(60 * t) for k in range(count)]))
    (axes,) = figure.axes
    assert "berth{*}.choke.i (1000)" in _texts(figure)
    assert len(axes.lines) < 20
    assert "berth999.choke.i" in _texts(figure)  # what reaches furthest has its name


def test_nothing_kept() -> None:
    assert "nothing was kept" in _texts(_figure(_record([Column("r", units.VOLTAGE, role="judged")], [lambda t: 1.0])))


def test_what_is_not_finite_is_left_out() -> None:
    figure = _figure(_record([Column("v", units.VOLTAGE)], [lambda t: math.nan if t > 0.05 else 1.0]))
    assert np.all(np.isfinite(figure.axes[0].get_ylim()))


@pytest.mark.parametrize("steps", [50, 5000, 20_000])
def test_thinning_keeps_extremes_and_ends(steps: int) -> None:
    edges = list(np.linspace(0.0, 1.0, steps))
    record = recording(edges, {"v": lambda t: math.exp(-(((t - 0.31) / 1e-3) ** 2)) + 0.1 * t})
    curve = recorded_curve(record, "v")
    times, values = polyline(curve, 300)
    assert times.size <= 20_000
    assert np.all(np.diff(times) >= 0.0)
    assert values.max() == pytest.approx(curve.highest()[0], abs=1e-6)
    assert (times[0], times[-1]) == (0.0, 1.0)
    assert values[-1] == pytest.approx(0.1)


def test_few_long_steps_among_thousands_of_short_ones_run_as_the_curve_does() -> None:
    edges = [*np.linspace(0.0, 0.1, 8000), 0.4, 0.7, *np.linspace(0.75, 0.8, 3000), 1.0]
    record = recording(edges, {"v": lambda t: t**3})
    times, values = polyline(recorded_curve(record, "v"), 300)
    assert np.all(np.diff(times) >= 0.0)
    fine = np.linspace(0.0, 1.0, 5001)
    assert np.interp(fine, times, values) == pytest.approx(fine**3, abs=1e-2)
    long = (fine > 0.1) & (fine < 0.75)
    assert np.interp(fine[long], times, values) == pytest.approx(fine[long] ** 3, abs=2e-5)


def test_a_jump_stays_a_jump() -> None:
    record = recording([0.0, 0.5, 1.0], {"v": lambda t: 1.0 if t < 0.5 else 5.0}, jumps=[0.5])
    times, values = polyline(recorded_curve(record, "v"))
    at = values[times == 0.5]
    assert sorted(set(at.tolist())) == [1.0, 5.0]


def test_band_holds_every_curve() -> None:
    record = recording(EDGES, {f"v{k}": lambda t, k=k: k * math.sin(400 * t) for k in range(-3, 4)})
    got = band((recorded_curve(record, f"v{k}") for k in range(-3, 4)), 0.0, 0.1, 500)
    assert got.high.max() == pytest.approx(3.0, abs=1e-3)
    assert got.low.min() == pytest.approx(-3.0, abs=1e-3)
    assert np.allclose(got.middle, 0.0, atol=1e-9)
    assert {got.highest, got.lowest} <= {0, 6}


def test_families() -> None:
    assert families(["b1.v", "b2.v", "bus.v"]) == {"b{*}.v": ["b1.v", "b2.v"], "bus.v": ["bus.v"]}
