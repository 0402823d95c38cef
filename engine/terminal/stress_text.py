"""What is printed about an edge-by-edge window: how it came about, the stress table, and how far the cycle average is from the averaged run."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, Final

from polewise.analysis.magnified import EdgeWindow
from polewise.analysis.overlay import Overlay
from polewise.analysis.stress import ElementStress, Waveform
from polewise.grammar.units import CURRENT, POWER, TIME, VOLTAGE, Dimension, format_value
from polewise.terminal.style import Style
from polewise.terminal.tables import Heading, table
from polewise.terminal.trust_text import wrapped

_ROWS_MOST: Final = 40
_STRESS: Final = (
    Heading("element", most=30),
    *(Heading(text, right=True, most=11) for text in ("V peak", "at", "V ripple", "I peak", "at", "I ripple", "I rms", "loss")),
)
_ERRORS: Final = (
    Heading("cycle average less averaged run", most=40),
    *(Heading(text, right=True) for text in ("rms", "worst", "at", "worst of swing")),
)


def window_lines(result: EdgeWindow, style: Style) -> list[str]:
    """All that is said about a window beside its verdict."""
    lines = wrapped(result.window.note, 2, style, "plain")
    lines += ["", *stress_lines(result.stress.elements, style)]
    if result.has_averaged:
        lines += ["", *overlay_lines(result.overlay(), style)]
    return lines


def stress_lines(elements: Sequence[ElementStress], style: Style) -> list[str]:
    """The stress table."""
    rows = [_stress_row(e) for e in elements[:_ROWS_MOST]]
    lines = table(_STRESS, rows, style)
    if len(elements) > _ROWS_MOST:
        lines.append(style.paint(f"  and {len(elements) - _ROWS_MOST} more: `.stress` in Python, or --json", "faint"))
    return lines


def _stress_row(e: ElementStress) -> list[str]:
    v_peak, v_at = (e.blocking_v, e.voltage.peak_s) if e.blocking_v is not None else (e.voltage.peak, e.voltage.peak_s)
    return [
        e.name,
        _value(v_peak, VOLTAGE),
        format_value(v_at, TIME, digits=5),
        _value(e.voltage.ripple, VOLTAGE),
        _value(e.current.peak, CURRENT),
        format_value(e.current.peak_s, TIME, digits=5),
        _value(e.current.ripple, CURRENT),
        _value(e.current.rms, CURRENT),
        _value(e.loss_w, POWER) if e.loss_w else "",
    ]


def _value(value: float, dimension: Dimension) -> str:
    return format_value(value, dimension, digits=4)


def overlay_lines(over: Overlay, style: Style) -> list[str]:
    """Errors between cycle average and averaged run."""
    rows = []
    for error in over.errors:
        rms, worst = (format_value(v, error.dimension, digits=3) for v in (error.rms, error.worst))
        rows.append([error.name, rms, worst, format_value(error.worst_s, TIME, digits=5), f"{100.0 * error.worst_relative:.3g} %"])
    return table(_ERRORS, rows, style) if rows else []


def window_content(result: EdgeWindow) -> dict[str, Any]:
    """A window as plain JSON values."""
    window = result.window
    content: dict[str, Any] = {
        "begin_s": window.begin_s,
        "end_s": window.end_s,
        "common_period_s": window.common_period_s,
        "periodic": window.periodic,
        "note": window.note,
        "stress": [_element(e) for e in result.stress],
    }
    if result.has_averaged:
        content["errors"] = [
            {
                "name": e.name, "unit": e.unit, "rms": e.rms, "worst": e.worst, "worst_s": e.worst_s, "swing": e.swing,
                "rms_relative": e.rms_relative, "worst_relative": e.worst_relative,
            }
            for e in result.overlay().errors
        ]  # fmt: skip
    return content


def _element(e: ElementStress) -> dict[str, Any]:
    return {
        "name": e.name,
        "kind": e.kind,
        "voltage": _waveform(e.voltage),
        "current": _waveform(e.current),
        "blocking_v": e.blocking_v,
        "conduction_loss_w": e.conduction_loss_w,
        "switching_loss_w": e.switching_loss_w,
        "edges": e.edges,
    }


def _waveform(w: Waveform) -> dict[str, float]:
    return {
        "ripple": w.ripple, "highest": w.highest, "highest_s": w.highest_s, "lowest": w.lowest, "lowest_s": w.lowest_s, "mean": w.mean, "rms": w.rms,
    }  # fmt: skip
