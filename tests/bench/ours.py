"""The netlist through polewise, whole and stage by stage, as the benchmarks call it."""

from __future__ import annotations

import time
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

import polewise

FloatArray = NDArray[np.float64]


@dataclass(slots=True)
class Prepared:
    """A study with everything done that comes before integration, and what each stage took.

    Args:
        seconds: stage → s.
    """

    system: Any
    plan: Any
    problem: Any
    start: Any
    seconds: dict[str, float] = field(default_factory=dict)

    def run(self, tolerance: float) -> Any:
        """`system.run` as a user calls it: operating point and integration (and whatever else a run does), s."""
        return self.system.run(self.plan.study.name, tolerance=tolerance)

    def integrate(self, tolerance: float) -> Any:
        """Integration alone, from the operating point, recorded in memory; the solver's counters."""
        from polewise.results.recording import MemorySink
        from polewise.solve import transient

        sink = MemorySink(self.plan.record.columns)
        return transient.run(self.problem, start=self.start, stop_s=self.plan.length_s, tolerance=tolerance, sink=sink).counters


def prepare(text: str, study: str, *, settle: bool = True) -> Prepared:
    """Read, check, assemble, compile and settle, each timed; without `settle` there is no start."""
    from polewise.circuit.expand import expand
    from polewise.circuit.load import load_text
    from polewise.equations.assemble import assemble
    from polewise.network.structure import check_structure
    from polewise.solve import initial
    from polewise.solve.operating_point import find_operating_point
    from polewise.solve.problem import build_problem

    clock = _Clock()
    sources, _ = load_text(text)
    clock.lap("parse")
    circuit, found = expand(sources)
    if circuit is None:
        raise RuntimeError(str([d.headline for d in found]))
    clock.lap("expand")
    check_structure(circuit)
    clock.lap("structure")
    system = polewise.from_text(text)
    plan = system.plan(study)
    clock.lap("all three again, through from_text")
    equations = assemble(plan.circuit, plan.network, study=study, outputs=plan.record.outputs, sampling="exact")
    clock.lap("assemble")
    problem = build_problem(equations)
    clock.lap("compile")
    if not settle:
        return Prepared(system, plan, problem, None, clock.seconds)
    if plan.study.start == "settled":
        start = initial.settled_at(problem, find_operating_point(equations))
    else:
        start = initial.start_cold(problem)
    clock.lap("operating point")
    return Prepared(system, plan, problem, start, clock.seconds)


class _Clock:
    """Time since the last lap."""

    def __init__(self) -> None:
        self.seconds: dict[str, float] = {}
        self._last = time.perf_counter()

    def lap(self, name: str) -> None:
        now = time.perf_counter()
        self.seconds[name] = now - self._last
        self._last = now


def sampled(result: Any, names: list[str], times: FloatArray) -> FloatArray:
    """Kept quantities at times, shape (names, times)."""
    return np.vstack([result.at(name, times) for name in names])
