"""What `run` prints about small-signal answers: tables of modes, margins, impedance and criteria."""

from __future__ import annotations

import math

import numpy as np

from polewise.analysis.answers import Answer, ResponseCurve
from polewise.analysis.impedance import Impedance
from polewise.analysis.loop import Loop
from polewise.analysis.modes import Modes
from polewise.grammar.units import RATE, RESISTANCE, TIME, format_value, unit_text
from polewise.terminal.style import Style
from polewise.terminal.tables import Heading, table

_MODES_MAX = 20  # told; the rest is in Python
_CURVE_ROWS = 7  # of a curve, evenly over its logarithmic range


def answer_lines(answer: Answer, style: Style) -> list[str]:
    """One answer."""
    head = ["", f"  {style.paint(answer.order.text, 'strong')}"]
    found = answer.found
    if isinstance(found, Modes):
        return [*head, *_modes(found, style)]
    if isinstance(found, ResponseCurve):
        return [*head, *_response(found, style)]
    if isinstance(found, Impedance):
        return [*head, *_impedance(found, style)]
    return [*head, *(line for loop in found for line in _loop(loop, style))]


def _hz(value: float) -> str:
    return format_value(value, RATE, prefer="Hz")


def _modes(modes: Modes, style: Style) -> list[str]:
    rows, kinds = [], []
    for mode in modes.modes[:_MODES_MAX]:
        owner, share = mode.owners()[0]
        state = mode.states()[0][0]
        rows.append(
            [
                f"{mode.multiplicity} ×" if mode.multiplicity > 1 else "",
                _hz(mode.frequency_hz) if mode.frequency_hz else "real",
                f"{mode.damping:.4g}",
                format_value(mode.time_constant_s, TIME),
                f"{owner} {share:.0%}",
                state,
                "dies out" if mode.stable else "GROWS",
            ]
        )
        kinds.append("good" if mode.stable else "bad")
    headings = (
        Heading("", right=True),
        Heading("frequency", right=True),
        Heading("damping", right=True),
        Heading("time constant", right=True),
        Heading("mostly in", most=24),
        Heading("strongest in", most=24),
        Heading(""),
    )
    lines = table(headings, rows, style, kinds=kinds) if rows else ["  no modes"]
    if len(modes) > _MODES_MAX:
        lines.append(f"  and {len(modes) - _MODES_MAX} better damped ones")
    for mode in modes.modes[:3]:
        if mode.elements:
            lines.append(f"  {mode.sentence()}")
    if math.isfinite(modes.complete_to_hz):
        lines.append(f"  complete up to {_hz(modes.complete_to_hz)}")
    for kink, other in zip(modes.kinks, modes.other_sides, strict=True):
        worst = other[0] if len(other) else None
        told = "no modes" if worst is None else f"least damping {worst.damping:.4g} at {_hz(worst.frequency_hz)}"
        lines.append(f"  the point stands at {kink}; on its other side: {told}")
    return lines


def _loop(loop: Loop, style: Style) -> list[str]:
    margins = loop.margins
    rows = [
        ["crossover", _hz(c.frequency_hz), f"phase margin {c.phase_margin_deg:.2f} deg", f"delay margin {format_value(c.delay_margin_s, TIME)}"]
        for c in margins.crossovers
    ]
    rows += [["gain crossing", _hz(g.frequency_hz), f"gain margin {g.decibel:.2f} dB", f"factor {g.factor:.4g}"] for g in margins.gain_crossings]
    rows.append(["nearest to -1", _hz(margins.modulus_frequency_hz), f"modulus margin {margins.modulus:.4g}", ""])
    lines = table((Heading(loop.signal, most=24), Heading("frequency", right=True), Heading("", most=32), Heading("")), rows, style)
    if not margins.crossovers:
        lines.append("  the loop gain never crosses one in this range")
    count = loop.nyquist
    parts = []
    if count.open_unstable is not None:
        parts.append(f"{count.open_unstable} unstable poles of the open loop")
    if count.encirclements is not None:
        parts.append(f"{round(count.encirclements)} encirclements of -1")
    if count.closed_unstable is not None:
        parts.append(f"{count.closed_unstable} unstable modes of the closed loop")
    verdict = _verdict(loop.stable, style)
    lines.append(f"  {', '.join(parts)}: {verdict}")
    if count.agrees is False:
        lines.append("  the curve and the modes disagree: the range or the model needs a look")
    return lines


def _verdict(stable: bool | None, style: Style) -> str:
    if stable is None:
        return "not decided"
    return style.paint("stable", "good") if stable else style.paint("UNSTABLE", "bad")


def _response(curve: ResponseCurve, style: Style) -> list[str]:
    unit = unit_text(curve.dimension)
    rows = []
    for k in _picked(len(curve.frequencies)):
        value = complex(curve.values[k])
        size = abs(value)
        level = f"{20 * math.log10(size):.2f} dB" if size > 0.0 else ""
        rows.append(
            [_hz(float(curve.frequencies[k])), f"{size:.5g}" + ("" if unit == "1" else f" {unit}"), level, f"{math.degrees(np.angle(value)):.2f} deg"]
        )
    return table((Heading("frequency", right=True), Heading("size", right=True), Heading("", right=True), Heading("phase", right=True)), rows, style)


def _impedance(found: Impedance, style: Style) -> list[str]:
    if found.total.ndim > 1:
        lines = [f"  2 x 2 matrix at {found.ports[0]} and {found.ports[1]}"]
    else:
        rows = []
        for k in _picked(len(found.frequencies)):
            row = [_hz(float(found.frequencies[k])), _ohm(complex(found.total[k]))]
            if found.split is not None:
                row += [_ohm(complex(found.split.source_impedance[k])), _ohm(1.0 / complex(found.split.load_admittance[k]))]
                row.append(f"{abs(complex(found.split.ratio[k])):.4g}")
            rows.append(row)
        names = ["frequency", "impedance"] + (["source side", "load side", "ratio"] if found.split is not None else [])
        lines = table([Heading(n, right=True) for n in names], rows, style)
    passive = found.passivity
    word = "passive" if passive.holds else "not passive"
    lines.append(f"  {word} over this range; lowest Re Z / |Z| {passive.value:.4g} at {_hz(passive.frequency_hz)}")
    split = found.split
    if split is None:
        return lines
    if split.criteria:
        rows = [
            [
                c.name,
                f"{c.value:.4g}",
                f"{c.limit:.4g}",
                _hz(c.frequency_hz),
                "" if math.isnan(c.conservatism) else f"{c.conservatism:.3g} ×",
                "holds" if c.holds else "fails",
            ]
            for c in split.criteria
        ]
        headings = (
            Heading("criterion on the ratio"),
            Heading("worst", right=True),
            Heading("limit", right=True),
            Heading("at", right=True),
            Heading("gives away", right=True),
            Heading(""),
        )
        lines += table(headings, rows, style, kinds=["good" if c.holds else "bad" for c in split.criteria])
    count = split.nyquist
    verdict = _verdict(split.stable, style)
    turns = "not decided" if count.encirclements is None else f"{round(count.encirclements)}"
    poles = "not found" if count.open_unstable is None else str(count.open_unstable)
    lines.append(f"  both sides together: {verdict} (unstable poles of the sides {poles}, encirclements {turns})")
    if split.coupling_largest > 1e-6:
        lines.append(
            f"  the sides are coupled past the node: 1 + ratio shifts by up to {split.coupling_largest:.2g}; only the count above holds then"
        )
    return lines


def _ohm(z: complex) -> str:
    return f"{format_value(abs(z), RESISTANCE)} {math.degrees(np.angle(z)):.0f} deg"


def _picked(count: int) -> list[int]:
    return sorted({round(k) for k in np.linspace(0, count - 1, min(_CURVE_ROWS, count))})
