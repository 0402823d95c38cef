"""Measured waveforms: formats, units, what is odd, periods stated, from a gate and found, averages, fits to a model."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from polewise.analysis.bench_data import parse_waveforms, read_waveforms
from polewise.analysis.bench_fit import fit_model
from polewise.analysis.bench_period import bench_average, found_periods, gate_periods, stated_periods
from polewise.analysis.cycle_average import curve_through
from polewise.analysis.failures import WaveformRefused
from polewise.results.failures import UnknownName

F = 40e3


def rows(t: np.ndarray, *columns: np.ndarray, separator: str = ",") -> str:
    return "\n".join(separator.join(f"{v:.9g}" for v in row) for row in zip(t, *columns))


def stage_current(t: np.ndarray, duty: float = 0.3) -> np.ndarray:
    """A triangle on a slow swing."""
    part = (t * F) % 1.0
    triangle = np.where(part < duty, part / duty, (1.0 - part) / (1.0 - duty)) - 0.5
    return 10.0 + 2.0 * np.sin(2 * np.pi * 300.0 * t) + 3.0 * triangle


T = np.linspace(0.0, 4e-3, 16001)


# ---------------------------------------------------------------- reading


@pytest.mark.parametrize(
    ("text", "names", "units"),
    [
        ("time (s),i (A)\n0,1\n1,2\n", ("i",), ("A",)),
        ("Instrument,bench\nPoints,2\n\nt,i,v\ns,A,V\n0,1,2\n1,2,3\n", ("i", "v"), ("A", "V")),
        ("Time;Current\nSecond;Ampere\n0,0;1,5\n0,5;2,5\n", ("Current",), ("A",)),
        ("t [us]\tCH1 [mV]\n0\t1\n1\t2\n", ("CH1",), ("mV",)),
        ("0,1,5\n1,2,6\n2,3,7\n", ("column 2", "column 3"), ("", "")),
        ("t/ms,i/kA\n0,1\n1,2\n", ("i",), ("kA",)),
        ("x,x,y\n0,1,1\n1,2,2\n", ("x (2)", "y"), ("", "")),
    ],
)
def test_headers(text: str, names: tuple[str, ...], units: tuple[str, ...]) -> None:
    record = parse_waveforms(text)
    assert record.names == names
    assert tuple(c.unit for c in record.channels) == units


def test_engineering_units_become_si() -> None:
    record = parse_waveforms("t (us),i (mA),v (kV)\n0,1500,0.4\n2.5,2500,0.5\n")
    assert record.time == pytest.approx([0.0, 2.5e-6])
    assert record.channel("i").values == pytest.approx([1.5, 2.5])
    assert record.channel("v").values == pytest.approx([400.0, 500.0])


def test_decimal_commas() -> None:
    record = parse_waveforms("t;i\n0,25;1,5\n0,75;2,5\n")
    assert record.time == pytest.approx([0.25, 0.75])
    assert record.channel("i").values == pytest.approx([1.5, 2.5])


def test_missing_values_doubled_times_and_gaps_are_told() -> None:
    t = np.concatenate([np.linspace(0, 1, 101), [1.0], np.linspace(2.0, 3.0, 101)])
    x = np.arange(t.size, dtype=float)
    text = "t (s),x\n" + rows(t, x) + "\n"
    lines = text.splitlines()
    lines[10] = lines[10].split(",")[0] + ",nan"
    lines[12] = lines[12].split(",")[0] + ","
    lines.insert(20, "oops,1")
    record = parse_waveforms("\n".join(lines))
    said = " | ".join(record.remarks)
    assert "2 values that are no number" in said
    assert "line 11" in said
    assert "one row" in said
    assert "line 21" in said
    assert "1 times stand more than once" in said
    assert "a gap" in said
    assert "of 1 s after 1 s" in said
    assert [len(s[0]) for s in record.segments("x")] == [99, 101]


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("", "no rows of numbers"),
        ("only,words\nand,more\n", "no rows of numbers"),
        ("0,1\n", "fewer than two rows"),
        ("t,x\n0,1\n2,2\n1,3\n", "run backwards in line 4"),
        ("t,x\n1,1\n1,2\n", "same time"),
        ("t (V),x\n0,1\n1,2\n", "not in a unit of time"),
        ("t,x,y\n0,1,nan\n1,2,nan\n", "no number at all"),
    ],
)
def test_refused(text: str, said: str) -> None:
    with pytest.raises(WaveformRefused, match=said):
        parse_waveforms(text)


def test_files(tmp_path: Path) -> None:
    with pytest.raises(WaveformRefused, match="could not be read"):
        read_waveforms(tmp_path / "none.csv")
    damaged = tmp_path / "damaged.csv"
    damaged.write_bytes(b"\xff\xfe\x00\x01" * 50)
    with pytest.raises(WaveformRefused):
        read_waveforms(damaged)


def test_unknown_channel_names_near_ones() -> None:
    record = parse_waveforms("t,current\n0,1\n1,2\n")
    with pytest.raises(UnknownName, match="curent"):
        record.channel("curent")


# ---------------------------------------------------------------- periods and averages


def record_of(t: np.ndarray, **columns: np.ndarray):
    return parse_waveforms("t (s)," + ",".join(columns) + "\n" + rows(t, *columns.values()))


@pytest.mark.parametrize("duty", [0.1, 0.3, 0.5, 0.9])
def test_period_found_from_the_data(duty: float) -> None:
    noise = np.random.default_rng(3).normal(0.0, 0.02, T.size)
    record = record_of(T, i=stage_current(T, duty) + noise)
    assert found_periods(record, "i").rate_hz == pytest.approx(F, rel=1e-4)


def test_period_found_from_edges_of_a_mid_point() -> None:
    """A pulse wave whose third line is its strongest slope is still of its own rate."""
    part = (T * F) % 1.0
    record = record_of(T, x=np.where((part < 0.15) | ((part > 0.33) & (part < 0.48)), 48.0, 0.0))
    assert found_periods(record, "x").rate_hz == pytest.approx(F, rel=1e-4)


def test_no_period_in_noise() -> None:
    record = record_of(T, x=np.random.default_rng(4).normal(size=T.size))
    with pytest.raises(WaveformRefused, match="no period stands out"):
        found_periods(record, "x")


def test_gate_gives_every_period_its_own_length() -> None:
    lengths = 25e-6 * (1.0 + 0.2 * np.sin(np.arange(100) * 0.3))
    starts = np.concatenate([[5e-6], 5e-6 + np.cumsum(lengths)])
    t = np.linspace(0.0, starts[-1] + 5e-6, 40001)
    k = np.clip(np.searchsorted(starts, t, side="right") - 1, 0, 99)
    part = np.clip((t - starts[k]) / lengths[k], 0.0, 1.0)
    gate = np.where((part < 0.4) & (t >= starts[0]), 5.0, 0.0)
    record = record_of(t, gate=gate + np.random.default_rng(5).normal(0, 0.1, t.size), x=part)
    periods = gate_periods(record, "gate")
    assert np.diff(periods.starts)[1:] == pytest.approx(lengths[1 : periods.starts.size - 1], abs=2 * (t[1] - t[0]))
    average = bench_average(record, "x", periods)
    assert average.per_period == pytest.approx(np.full(average.per_period.size, 0.5), abs=4e-3)


def test_averages_and_gaps() -> None:
    keep = (T < 1.5e-3) | (T > 2.2e-3)
    record = record_of(T[keep], i=stage_current(T[keep]))
    average = bench_average(record, "i", stated_periods(record, F))
    expected = 10.0 + 2.0 * np.sinc(300.0 / F) * np.sin(2 * np.pi * 300.0 * average.time)
    assert np.max(np.abs(average.average - expected)) < 2e-3
    assert not ((average.time > 1.49e-3) & (average.time < 2.21e-3)).any()


def test_too_few_samples() -> None:
    t = np.arange(0.0, 4e-3, 1 / (F * 2.5))
    record = record_of(t, i=stage_current(t))
    with pytest.raises(WaveformRefused, match="too few to average"):
        bench_average(record, "i", stated_periods(record, F))
    t = np.arange(0.0, 4e-3, 1 / (F * 5.3))
    record = record_of(t, i=stage_current(t))
    assert "only 5.3 samples in a period" in bench_average(record, "i", stated_periods(record, F)).remarks[0]


def test_offset_and_delay_are_taken_out() -> None:
    record = record_of(T, i=stage_current(T - 3e-6) + 0.25).corrected("i", offset=0.25, delay_s=3e-6)
    good = np.isfinite(record.channel("i").values)
    assert record.channel("i").values[good] == pytest.approx(stage_current(T[good]), abs=0.07)


# ---------------------------------------------------------------- fits


def model() -> tuple[np.ndarray, np.ndarray]:
    t = np.linspace(0.0, 10e-3, 4001)
    return t, 5.0 + np.where(t > 4e-3, 2.0 * (1.0 - np.exp(-(t - 4e-3) / 0.6e-3)), 0.0) + 0.3 * np.exp(-t / 2e-3)


@pytest.mark.parametrize("shift", [-3.0e-3, 0.0, 1.234e-3])
def test_fit_finds_gain_offset_and_delay(shift: float) -> None:
    t, x = model()
    at = np.linspace(2.5e-3, 8e-3, 5001)
    measured = 1.04 * np.interp(at, t, x) - 0.12 + np.random.default_rng(6).normal(0, 1e-3, at.size)
    fit = fit_model("i", at + shift, measured, "choke.i", curve_through(t, x))
    assert fit.gain == pytest.approx(1.04, rel=2e-3)
    assert fit.offset == pytest.approx(-0.12, abs=0.01)
    assert fit.delay_s == pytest.approx(shift, abs=3e-6)
    assert fit.rms < 2e-3
    assert fit.shaped


def test_fit_of_a_model_that_stands_still() -> None:
    t = np.linspace(0.0, 1.0, 101)
    fit = fit_model("v", t, np.full(101, 12.1), "out.v", curve_through(t, np.full(101, 12.0)))
    assert not fit.shaped
    assert (fit.gain, fit.delay_s) == (1.0, 0.0)
    assert fit.offset == pytest.approx(0.1)


def test_fit_without_overlap_in_length() -> None:
    with pytest.raises(WaveformRefused, match="no length"):
        fit_model("v", np.array([1.0, 1.0]), np.array([1.0, 2.0]), "out.v", curve_through([0.0, 1.0], [0.0, 1.0]))
