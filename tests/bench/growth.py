"""How the cost of a step grows with the number of converters, and what every stage before it costs."""

from __future__ import annotations

import ours
import ten_converters as hand
from timing import Timing, duration, interleaved

COUNTS = (10, 100, 1000)
TOLERANCE = 1e-6


def report(*, counts: tuple[int, ...] = COUNTS, rounds: int = 5) -> list[str]:
    """The tables as lines of Markdown. Growth is cost per step and converter against the smallest count."""
    lines = ["| converters | unknowns | integration of 50 ms | steps, rejected | residuals a step | cost a step | a step and converter | growth |"]
    lines.append("|---|---|---|---|---|---|---|---|")
    stages: list[tuple[int, dict[str, float]]] = []
    first: float | None = None
    for count in counts:
        prepared = ours.prepare(hand.netlist(count, keep="bus.v"), "load_step")
        counters = prepared.integrate(TOLERANCE)
        timing: Timing = interleaved([lambda p=prepared: p.integrate(TOLERANCE)], rounds=max(2, rounds if count < 1000 else 2), warm=False)[0]
        attempts = counters.steps + counters.rejected
        step = timing.median / attempts
        each = step / count
        first = first or each
        stages.append((count, prepared.seconds))
        lines.append(
            f"| {count} | {prepared.problem.n} | {timing} | {counters.steps}, {counters.rejected} | {counters.residuals / attempts:.1f} "
            f"| {duration(step)} | {duration(each)} | {each / first:.2f} |"
        )
    lines += ["", "| converters | " + " | ".join(stages[0][1]) + " |", "|---|" + "---|" * len(stages[0][1])]
    for count, seconds in stages:
        lines.append(f"| {count} | " + " | ".join(duration(s) for s in seconds.values()) + " |")
    return lines
