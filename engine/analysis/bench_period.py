"""The switching period of a measured waveform: stated, from a gate signal, or found from the data; and its cycle average."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np

from polewise.analysis.bench_data import BenchRecord
from polewise.analysis.cycle_average import sliding_average
from polewise.analysis.failures import waveform_refused
from polewise.grammar.units import RATE, TIME, format_value
from polewise.results.curve import FloatArray

SAMPLES_FEW: Final = 8.0  # per period: fewer are told
SAMPLES_LEAST: Final = 3.0  # fewer can't be averaged
PERIODS_LEAST: Final = 4  # in a record whose period is to be found
POINTS_MOST: Final = 1 << 18  # of the spectrum that the period is looked for in
GATE_BAND: Final = 0.3  # of a gate's swing, around its middle: it must leave the band to count as another level
HARMONIC_SHARE: Final = 0.02  # a lower line with this share of the strongest one's size is the fundamental
COMB_LINES: Final = 6


@dataclass(frozen=True, slots=True, eq=False)
class Periods:
    """The switching periods of a record.

    Args:
        starts: shape (n,), s, where periods begin (every period's own from a gate; evenly spaced otherwise).
        rate_hz: the average one. how: where they come from, a phrase.
    """

    starts: FloatArray
    rate_hz: float
    how: str

    def length_at(self, times: FloatArray) -> FloatArray:
        """The length of the period an instant lies in, s; beyond the known ones that of the nearest."""
        lengths = np.diff(self.starts)
        k = np.clip(np.searchsorted(self.starts, times, side="right") - 1, 0, lengths.size - 1)
        value: FloatArray = lengths[k]
        return value


def stated_periods(record: BenchRecord, rate_hz: float) -> Periods:
    """Evenly spaced ones of a stated rate, from the record's begin."""
    if not rate_hz > 0.0:
        raise waveform_refused("the rate must be above zero")
    return _even(record, rate_hz, "as stated")


def _even(record: BenchRecord, rate_hz: float, how: str) -> Periods:
    begin, end = float(record.time[0]), float(record.time[-1])
    count = int(np.floor((end - begin) * rate_hz * (1.0 + 1e-9)))
    if count < 1:
        raise waveform_refused(f"the record is shorter than one period of {format_value(1.0 / rate_hz, TIME)}")
    return Periods(begin + np.arange(count + 1, dtype=np.float64) / rate_hz, rate_hz, how)


def gate_periods(record: BenchRecord, gate: str) -> Periods:
    """From the rising edges of a gate signal, with a band around its middle against noise."""
    t = record.time
    values = record.channel(gate).values
    good = np.isfinite(values)
    t, x = t[good], values[good]
    low, high = np.percentile(x, [2.0, 98.0])
    if not high > low:
        raise waveform_refused(f"channel `{gate}` never changes, so it is no gate signal")
    middle, half = 0.5 * (low + high), 0.5 * GATE_BAND * (high - low)
    state = np.where(x > middle + half, 1, np.where(x < middle - half, -1, 0))
    known = np.flatnonzero(state)
    rises = np.flatnonzero((state[known[:-1]] < 0) & (state[known[1:]] > 0))
    starts = []
    for k in rises:
        a, b = int(known[k]), int(known[k + 1])
        above = a + int(np.argmax(x[a : b + 1] >= middle))
        if above == a:
            continue
        x0, x1 = x[above - 1], x[above]
        starts.append(t[above - 1] + (middle - x0) / (x1 - x0) * (t[above] - t[above - 1]))
    if len(starts) < 2:
        raise waveform_refused(f"channel `{gate}` rises fewer than twice, so it shows no whole period")
    edges = np.array(starts, dtype=np.float64)
    return Periods(edges, float((edges.size - 1) / (edges[-1] - edges[0])), f"from the rising edges of `{gate}`")


def found_periods(record: BenchRecord, name: str) -> Periods:
    """Found from the data: the fundamental of the strongest line of the waveform's slope."""
    longest = max(record.segments(name), key=lambda s: s[0].size, default=None)
    if longest is None or longest[0].size < 16:
        raise waveform_refused(f"channel `{name}` is too short to find a period in", "state it with --rate")
    rate, share = _fundamental(*longest)
    if rate is None:
        raise waveform_refused(
            f"no period stands out in channel `{name}` (the strongest line has {share:.1%} of its energy)", "state it with --rate, or name a --gate"
        )
    return _even(record, rate, f"found from `{name}`")


def _fundamental(t: FloatArray, x: FloatArray) -> tuple[float | None, float]:
    """Frequency of the fundamental, and the share of the slope's energy in the strongest line and its multiples."""
    n = int(min(POINTS_MOST, max(64, t.size)))
    grid = np.linspace(t[0], t[-1], n)
    slope = np.gradient(np.interp(grid, t, x))  # favours the ripple over what is slow
    slope = slope - slope.mean()
    window = np.hanning(n)
    size = np.abs(np.fft.rfft(slope * window))
    duration = grid[-1] - grid[0]
    size[:PERIODS_LEAST] = 0.0
    peak = int(np.argmax(size))
    if size[peak] <= 0.0:
        return None, 0.0
    fundamental = peak
    for k in range(COMB_LINES, 1, -1):  # the strongest line may be a multiple of the fundamental
        lower = round(peak / k)
        near = slice(max(lower - 1, PERIODS_LEAST), lower + 2)
        if lower >= PERIODS_LEAST and size[near].size and float(size[near].max()) > HARMONIC_SHARE * size[peak] and _is_line(size, lower):
            fundamental = max(range(near.start, near.stop), key=lambda j: size[j])
            break
    lines = [j for m in range(1, 4 * COMB_LINES) for j in range(m * fundamental - 2, m * fundamental + 3) if 0 < j < size.size]
    share = float(np.sum(size[sorted(set(lines))] ** 2) / np.sum(size**2))
    if share < 0.3:
        return None, share
    return _refined(grid, slope * window, fundamental / duration, 1.0 / duration), share


def _is_line(size: FloatArray, k: int) -> bool:
    """Whether a spectrum has a peak at a place, not just a slope or noise."""
    around = np.concatenate([size[max(k - 8, 1) : max(k - 3, 1)], size[k + 4 : k + 9]])
    return bool(around.size and size[max(k - 1, 0) : k + 2].max() > 8.0 * np.median(around))


def _refined(grid: FloatArray, signal: FloatArray, rate: float, width: float) -> float:
    """The frequency near `rate` at which the first multiples together are strongest."""
    from scipy.optimize import minimize_scalar

    time = grid - grid[0]

    def energy(f: float) -> float:
        return -float(sum(abs(np.vdot(np.exp(2j * np.pi * m * f * time), signal)) ** 2 for m in range(1, 4)))

    found = minimize_scalar(energy, bounds=(rate - 0.6 * width, rate + 0.6 * width), method="bounded", options={"xatol": 1e-9 * rate})
    return float(found.x)


@dataclass(frozen=True, slots=True, eq=False)
class BenchAverage:
    """The cycle average of one channel.

    Args:
        time, average: shape (m,), s and the channel's unit: centred sliding average, gaps left out.
        middles, per_period: one value per period.
        samples_per_period: of the record. remarks: what was odd.
    """

    channel: str
    time: FloatArray
    average: FloatArray
    middles: FloatArray
    per_period: FloatArray
    periods: Periods
    samples_per_period: float
    remarks: tuple[str, ...]


def bench_average(record: BenchRecord, name: str, periods: Periods) -> BenchAverage:
    """Average a channel over its periods, never across a gap.

    Raises:
        WaveformRefused: too few samples per period, or no whole period without a gap.
    """
    from polewise.analysis.cycle_average import Antiderivative

    samples = 1.0 / (periods.rate_hz * record.step_s)
    rate = format_value(periods.rate_hz, RATE, prefer="Hz", digits=4)
    if samples < SAMPLES_LEAST:
        raise waveform_refused(
            f"channel `{name}` has {samples:.2g} samples in a period of {rate}, too few to average", "record with a finer time step"
        )
    remarks = []
    if samples < SAMPLES_FEW:
        remarks.append(
            f"channel `{name}` has only {samples:.2g} samples in a period of {rate}: its average may be off by an edge's share of one step"
        )
    times, values, middles, means = [], [], [], []
    for curve in record.curves(name):
        knots = np.append(curve.start, curve.end_s)
        mean = sliding_average(curve, periods.length_at, knots)
        good = np.isfinite(mean)
        times.append(knots[good])
        values.append(mean[good])
        per = Antiderivative(curve).between(periods.starts[:-1], periods.starts[1:])
        whole = np.isfinite(per)
        middles.append((0.5 * (periods.starts[1:] + periods.starts[:-1]))[whole])
        means.append(per[whole])
    time = np.concatenate(times) if times else np.zeros(0)
    if not time.size:
        raise waveform_refused(f"channel `{name}` holds no whole period without a gap")
    return BenchAverage(name, time, np.concatenate(values), np.concatenate(middles), np.concatenate(means), periods, samples, tuple(remarks))
