"""What one sample instant costs: ten converters with control in `every 25 us` (40 kHz) against a step of the same circuit with continuous control."""

from __future__ import annotations

import ours
import ten_converters as hand
from timing import duration, interleaved

TOLERANCE = 1e-6
END_S = 50e-3


def report(*, rounds: int = 7) -> list[str]:
    """The table as lines of Markdown."""
    continuous = ours.prepare(hand.netlist(), "load_step")
    clocked = ours.prepare(hand.netlist(sampled=True), "load_step")
    plain, counted = continuous.integrate(TOLERANCE), clocked.integrate(TOLERANCE)
    timings = interleaved([lambda: continuous.integrate(TOLERANCE), lambda: clocked.integrate(TOLERANCE)], rounds=rounds)
    step = timings[0].median / (plain.steps + plain.rejected)
    instants = END_S * hand.RATE_HZ
    instant = timings[1].median / instants
    return [
        "| control | time of 50 ms | steps, rejected | instants | cost | ratio | goal |",
        "|---|---|---|---|---|---|---|",
        f"| continuous | {timings[0]} | {plain.steps}, {plain.rejected} | | {duration(step)} a step | 1 | |",
        f"| `every 25 us` | {timings[1]} | {counted.steps}, {counted.rejected} | {instants:.0f} "
        f"| {duration(instant)} an instant | {instant / step:.2f} | ≤ 3 |",
    ]
