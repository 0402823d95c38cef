"""`polewise average`: the cycle average of a measured waveform, and how a model's study fits it."""

from __future__ import annotations

import csv
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import click
import numpy as np

from polewise.analysis.bench_data import BenchRecord, read_waveforms
from polewise.analysis.bench_fit import Fit, fit_model
from polewise.analysis.bench_period import BenchAverage, Periods, bench_average, found_periods, gate_periods, stated_periods
from polewise.errors import EXIT_HOLDS, EXIT_NETLIST_WRONG
from polewise.grammar.units import NONE, RATE, TIME, Dimension, format_value, read_value
from polewise.results.failures import OutputFailed
from polewise.results.recording import recorded_curve
from polewise.terminal.main import print_json, print_lines, read_or_tell
from polewise.terminal.progress import say_first_compile
from polewise.terminal.style import Style, harmless
from polewise.terminal.tables import Heading, table, title_line

_AVERAGES: Final = (
    Heading("channel"), Heading("mean", right=True), Heading("lowest average", right=True), Heading("highest average", right=True),
    Heading("samples a period", right=True),
)  # fmt: skip
_FITS: Final = (
    Heading("measured"), Heading("model"), Heading("gain", right=True), Heading("offset", right=True), Heading("delay", right=True),
    Heading("rms error", right=True), Heading("of swing", right=True),
)  # fmt: skip


@dataclass(frozen=True, slots=True)
class AverageOptions:
    """Options of the command, as given.

    Args:
        offsets, delays: channel -> text with its unit. matches: channel -> quantity of the model.
    """

    rate: str | None
    gate: str | None
    channels: tuple[str, ...]
    offsets: dict[str, str]
    delays: dict[str, str]
    against: tuple[Path, str] | None
    matches: dict[str, str]
    given: dict[str, str]
    out: Path | None
    as_json: bool


def run_average(file: Path, options: AverageOptions) -> int:
    """Average a file; the exit code."""
    record = _corrected(read_waveforms(file), options)
    names = options.channels or tuple(n for n in record.names if n != options.gate)
    periods = _periods(record, names, options)
    averages = [bench_average(record, record.channel(name).name, periods) for name in names]
    fits: list[Fit] = []
    if options.against is not None:
        found = _fits(record, averages, options)
        if found is None:
            return EXIT_NETLIST_WRONG
        fits = found
    if options.out is not None:
        _write(options.out, record, averages, fits)
    if options.as_json:
        print_json({"exit_code": EXIT_HOLDS, **_content(record, periods, averages, fits)})
        return EXIT_HOLDS
    print_lines(lambda style: _lines(record, periods, averages, fits, style))
    return EXIT_HOLDS


def _corrected(record: BenchRecord, options: AverageOptions) -> BenchRecord:
    for name, text in options.offsets.items():
        record = record.corrected(name, offset=_value(text, record.channel(name).dimension))
    for name, text in options.delays.items():
        record.channel(name)
        record = record.corrected(name, delay_s=_value(text, TIME))
    return record


def _value(text: str, dimension: Dimension) -> float:
    got = read_value(text)
    if got is None or (got[1] != dimension and got[1] != NONE and dimension != NONE):
        raise click.BadParameter(f"`{text}` does not fit here; write a value with its unit, such as 12mV")
    return got[0]


def _periods(record: BenchRecord, names: Sequence[str], options: AverageOptions) -> Periods:
    if options.gate is not None:
        return gate_periods(record, options.gate)
    if options.rate is not None:
        return stated_periods(record, _value(options.rate, RATE))
    return found_periods(record, names[0])


def _fits(record: BenchRecord, averages: Sequence[BenchAverage], options: AverageOptions) -> list[Fit] | None:
    assert options.against is not None
    file, study = options.against
    system = read_or_tell(file, options.given, options.as_json)
    if system is None:
        return None
    say_first_compile()
    result = system.run(study, keep=tuple(options.matches.values()) or None)
    kept = tuple(result.names)
    fits = []
    for average in averages:
        quantity = options.matches.get(average.channel) or _alike(average, record, kept, {n: result.dimension(n) for n in kept}, len(averages))
        if quantity is None:
            hint = f'--match "{average.channel}=QUANTITY"; {study} keeps {", ".join(kept)}'
            raise click.UsageError(f"which quantity of the model is channel `{average.channel}`? Say it with {hint}")
        fits.append(fit_model(average.channel, average.time, average.average, quantity, recorded_curve(result.recording, quantity)))
    return fits


def _alike(average: BenchAverage, record: BenchRecord, kept: Sequence[str], dimension_of: dict[str, Dimension], channels: int) -> str | None:
    """The kept quantity a channel must be: of the same name, or the only one of its kind."""
    if average.channel in kept:
        return average.channel
    dimension = record.channel(average.channel).dimension
    same = [n for n in kept if dimension == NONE or dimension_of[n] == dimension]
    return same[0] if len(same) == 1 and channels == 1 else None


def _lines(record: BenchRecord, periods: Periods, averages: Sequence[BenchAverage], fits: Sequence[Fit], style: Style) -> list[str]:
    rate = format_value(periods.rate_hz, RATE, prefer="Hz", digits=6)
    span = format_value(float(record.time[-1] - record.time[0]), TIME, digits=5)
    lines = [title_line(f"cycle average of {harmless(record.path)}", style)]
    lines.append(f"  {record.time.size} samples over {span}; {periods.starts.size - 1} periods at {rate}, {periods.how}")
    for remark in (*record.remarks, *(r for a in averages for r in a.remarks)):
        lines.append(f"  {style.paint(harmless(remark), 'doubt')}")
    rows = []
    for a in averages:
        dimension = record.channel(a.channel).dimension
        mean = float(np.trapezoid(a.average, a.time) / (a.time[-1] - a.time[0])) if a.time[-1] > a.time[0] else float(a.average[0])
        told = [format_value(v, dimension, digits=5) for v in (mean, float(a.average.min()), float(a.average.max()))]
        rows.append([a.channel, *told, f"{a.samples_per_period:.4g}"])
    lines += table(_AVERAGES, rows, style)
    if fits:
        lines += ["", *table(_FITS, [_fit_row(f, record) for f in fits], style)]
        lines += [
            f"  {f.quantity} stands still over the study: it has no shape to tell a gain or a delay by, so only the offset was fitted"
            for f in fits
            if not f.shaped
        ]
    return lines


def _fit_row(fit: Fit, record: BenchRecord) -> list[str]:
    dimension = record.channel(fit.channel).dimension
    return [
        fit.channel,
        fit.quantity,
        f"{fit.gain:.5g}",
        format_value(fit.offset, dimension, digits=4),
        format_value(fit.delay_s, TIME, digits=4),
        format_value(fit.rms, dimension, digits=3),
        f"{100.0 * fit.rms_relative:.3g} %",
    ]


def _content(record: BenchRecord, periods: Periods, averages: Sequence[BenchAverage], fits: Sequence[Fit]) -> dict[str, Any]:
    return {
        "file": record.path,
        "samples": int(record.time.size),
        "rate_hz": periods.rate_hz,
        "periods": int(periods.starts.size - 1),
        "how": periods.how,
        "remarks": [*record.remarks, *(r for a in averages for r in a.remarks)],
        "channels": [
            {
                "name": a.channel,
                "unit": record.channel(a.channel).unit,
                "samples_per_period": a.samples_per_period,
                "middles_s": a.middles.tolist(),
                "averages": a.per_period.tolist(),
            }
            for a in averages
        ],
        "fits": [
            {
                "channel": f.channel, "quantity": f.quantity, "gain": f.gain, "offset": f.offset, "delay_s": f.delay_s, "rms": f.rms,
                "worst": f.worst, "swing": f.swing, "rms_relative": f.rms_relative, "shaped": f.shaped,
            }
            for f in fits
        ],
    }  # fmt: skip


def _write(folder: Path, record: BenchRecord, averages: Sequence[BenchAverage], fits: Sequence[Fit]) -> None:
    """CSV of the averages, one figure per fit."""
    try:
        folder.mkdir(parents=True, exist_ok=True)
        stem = Path(record.path).stem
        for a in averages:
            unit = record.channel(a.channel).unit or "1"
            with (folder / f"{stem}.{_safe(a.channel)}.average.csv").open("w", newline="", encoding="utf-8") as file:
                writer = csv.writer(file)
                writer.writerow(["time (s)", f"{a.channel} ({unit})"])
                writer.writerows(zip(a.time.tolist(), a.average.tolist(), strict=True))
        for fit in fits:
            fit.figure().savefig(folder / f"{stem}.{_safe(fit.channel)}.fit.png")
    except OSError as error:
        raise OutputFailed(str(folder), error.strerror or str(error)) from error


def _safe(name: str) -> str:
    return "".join(c if c.isalnum() or c in "._-" else "_" for c in name)
