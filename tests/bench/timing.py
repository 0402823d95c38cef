"""Times of several ways of doing one job, taken in turn so that a busy machine is busy for all of them alike; medians, and how they scatter."""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True, slots=True)
class Timing:
    """Seconds of one job: median, quartiles and smallest of the runs."""

    median: float
    low: float
    high: float
    best: float

    def __str__(self) -> str:
        """Median with the quartiles, in a readable unit."""
        return f"{duration(self.median)} ({duration(self.low)} … {duration(self.high)})"


def interleaved(jobs: Sequence[Callable[[], object]], *, rounds: int, warm: bool = True) -> list[Timing]:
    """Run every job once per round, in turn.

    Args:
        rounds: how often each job is timed.
        warm: run each once before, untimed.
    """
    if warm:
        for job in jobs:
            job()
    taken = np.empty((rounds, len(jobs)))
    for row in range(rounds):
        for column, job in enumerate(jobs):
            began = time.perf_counter()
            job()
            taken[row, column] = time.perf_counter() - began
    return [Timing(float(np.median(c)), float(np.quantile(c, 0.25)), float(np.quantile(c, 0.75)), float(c.min())) for c in taken.T]


def duration(seconds: float) -> str:
    """Seconds with three digits and a fitting unit."""
    for unit, size in (("s", 1.0), ("ms", 1e-3), ("us", 1e-6)):
        if seconds >= size:
            return f"{seconds / size:.3g} {unit}"
    return f"{seconds / 1e-9:.3g} ns"
