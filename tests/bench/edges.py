"""What every edge costs: averaged against edge-by-edge, ten poles at 40 kHz; and edge-by-edge against a hand-written fixed-step loop.

The loop is what one writes first: compiled, one state vector, Runge-Kutta 4 with a fixed step, gates and diodes looked at once a step. Its error
falls with the step only (an edge is seen up to a step late), so at equal error it pays for every edge with many steps.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import ten_converters as hand
from compiled import _arrays
from numba import njit
from numpy.typing import NDArray
from timing import duration, interleaved

import polewise
from polewise.analysis.carriers import carriers_of
from polewise.analysis.edge_window import Stretch
from polewise.analysis.periodic import resting_snapshot
from polewise.equations.assemble import assemble
from polewise.results.recording import Column, MemorySink, recorded_curve
from polewise.results.study_run import Nothing
from polewise.solve import transient
from polewise.solve.initial import StartState, settled_at
from polewise.solve.operating_point import find_operating_point
from polewise.solve.problem import DaeProblem, build_problem

FloatArray = NDArray[np.float64]

END_S = 50e-3
SHORT_S = 5e-3  # of the race with the loop
TOLERANCE_AVERAGED, TOLERANCE_EDGES, TOLERANCE_REFERENCE = 1e-6, 1e-7, 1e-11
STEPS_FIRST, STEPS_MOST = 64, 65536  # of the loop, per period


@dataclass(frozen=True, slots=True)
class Prepared:
    """A problem with its start."""

    problem: DaeProblem
    start: StartState

    def run(self, tolerance: float, stop_s: float) -> object:
        """Integrate and forget."""
        return transient.run(self.problem, start=self.start, stop_s=stop_s, tolerance=tolerance, sink=Nothing())

    def values(self, tolerance: float, stop_s: float, times: FloatArray) -> FloatArray:
        """Every output at times, shape (n_out, m)."""
        names = self.problem.output_names
        sink = MemorySink(tuple(Column(o.name, o.dimension) for o in self.problem.system.outputs))
        transient.run(self.problem, start=self.start, stop_s=stop_s, tolerance=tolerance, sink=sink)
        recording = sink.finish()
        return np.vstack([recorded_curve(recording, name).at(times) for name in names])


def prepare() -> tuple[Prepared, Prepared]:
    """The averaged and the edge-by-edge problem, both from the averaged operating point."""
    system = polewise.from_text(hand.netlist())
    plan = system.plan("load_step")
    circuit, network, outputs = plan.circuit, plan.network, plan.record.outputs
    averaged = assemble(circuit, network, study="load_step", outputs=outputs)
    problem = build_problem(averaged)
    point = find_operating_point(averaged)
    carriers = carriers_of(circuit)
    assert carriers is not None
    stretch = Stretch(circuit, network, "load_step", carriers, TOLERANCE_EDGES, system._lock)
    edges = stretch.edges(outputs)
    return Prepared(problem, settled_at(problem, point)), Prepared(edges, stretch.start(edges, resting_snapshot(averaged, problem, point)))


# ---------------------------------------------------------------- the loop


@njit(error_model="numpy")
def _slopes(stage, feed, y, on, out):  # as compiled._rates, with switch positions
    n = stage.shape[1]
    i_feed, v_bank = y[0], y[1]
    total = 0.0
    for k in range(n):
        total += y[2 + k]
    v_bus = v_bank + feed[2] * (i_feed - total)
    out[0] = (770.0 - feed[0] * i_feed - v_bus) / feed[1]
    out[1] = (i_feed - total) / feed[3]
    for k in range(n):
        setpoint, inductance, c_out, power = stage[0, k], stage[1, k], stage[2, k], stage[3, k]
        i_cable, v_in, j = y[2 + k], y[2 + n + k], y[2 + 2 * n + k]
        v_store, acc_v = y[2 + 3 * n + k], y[2 + 4 * n + k]
        idle = v_store + 2e-3 * j
        v_out = 0.5 * (idle + math.sqrt(idle * idle - 4.0 * 2e-3 * power))
        e_v = setpoint - v_out
        e_i = min(max(5.5 * e_v + acc_v, 0.0), 260.0) - j
        out[2 + k] = (v_bus - v_in - 30e-3 * i_cable) / 10e-6
        out[2 + n + k] = (i_cable - (j if on[k] == 1 else 0.0)) / 470e-6
        if on[k] == 1:
            v_mid = v_in - 4e-3 * j
        elif on[k] == 0:
            v_mid = -0.9 - 1.5e-3 * j
        else:
            v_mid = v_out + 3e-3 * j  # open
        out[2 + 2 * n + k] = (v_mid - v_out - 3e-3 * j) / inductance
        out[2 + 3 * n + k] = (j - power / v_out) / c_out
        out[2 + 4 * n + k] = 1700.0 * e_v
        out[2 + 5 * n + k] = 10.0 * e_i


@njit(error_model="numpy")
def _positions(stage, y, carrier, on):
    n = stage.shape[1]
    for k in range(n):
        j, v_store = y[2 + 2 * n + k], y[2 + 3 * n + k]
        idle = v_store + 2e-3 * j
        v_out = 0.5 * (idle + math.sqrt(idle * idle - 4.0 * 2e-3 * stage[3, k]))
        e_i = min(max(5.5 * (stage[0, k] - v_out) + y[2 + 4 * n + k], 0.0), 260.0) - j
        d = min(max(0.0045 * e_i + y[2 + 5 * n + k], 0.01), 0.97)
        if d > carrier:
            on[k] = 1
        elif j > 0.0:
            on[k] = 0
        else:
            on[k] = -1
            y[2 + 2 * n + k] = 0.0


@njit(error_model="numpy")
def fixed_steps(stage, feed, y, periods, per_period, rate, kept):
    """Integrate whole periods; kept[p] is the state at the end of period p. y is changed."""
    n, size = stage.shape[1], len(y)
    h = 1.0 / (rate * per_period)
    on = np.zeros(n, np.int64)
    a, b, c, d, point = np.empty(size), np.empty(size), np.empty(size), np.empty(size), np.empty(size)
    for p in range(periods):
        for step in range(per_period):
            _positions(stage, y, step / per_period, on)
            _slopes(stage, feed, y, on, a)
            point[:] = y + 0.5 * h * a
            _slopes(stage, feed, point, on, b)
            point[:] = y + 0.5 * h * b
            _slopes(stage, feed, point, on, c)
            point[:] = y + h * c
            _slopes(stage, feed, point, on, d)
            y += h / 6.0 * (a + 2.0 * b + 2.0 * c + d)
        kept[p] = y


def loop(per_period: int, stop_s: float) -> FloatArray:
    """States at the ends of periods by the loop, shape (6N + 2, periods)."""
    before = hand.stages(10)
    stage, feed = _arrays(before)
    periods = round(stop_s * hand.RATE_HZ)
    y, kept = hand.settled(before), np.empty((periods, 62))
    fixed_steps(stage, feed, y, periods, per_period, hand.RATE_HZ, kept)
    return kept.T


def report(*, rounds: int = 5) -> list[str]:
    """Both tables as lines of Markdown."""
    averaged, edges = prepare()
    jobs: list[Callable[[], object]] = [lambda: averaged.run(TOLERANCE_AVERAGED, END_S), lambda: edges.run(TOLERANCE_EDGES, END_S)]
    plain, every = interleaved(jobs, rounds=rounds)
    lines = [
        "| 50 ms of ten poles at 40 kHz, continuous control | time | ratio | goal |",
        "|---|---|---|---|",
        f"| averaged, tolerance {TOLERANCE_AVERAGED:g} | {plain} | 1 | |",
        f"| every edge, tolerance {TOLERANCE_EDGES:g} | {every} | {every.median / plain.median:.0f} | ≥ 100 |",
        "",
    ]
    times = np.arange(1, round(SHORT_S * hand.RATE_HZ)) / hand.RATE_HZ
    exact = edges.values(TOLERANCE_REFERENCE, SHORT_S, times)
    ours = hand.relative_error(edges.values(TOLERANCE_EDGES, SHORT_S, times), exact)
    stages = hand.stages(10)
    loop(STEPS_FIRST, 1.0 / hand.RATE_HZ)  # compiled before it is timed
    per_period, error = STEPS_FIRST // 2, math.inf
    rows = []
    while error > ours and per_period < STEPS_MOST:
        per_period *= 2
        began = time.perf_counter()
        error = hand.relative_error(hand.kept(stages, loop(per_period, SHORT_S))[:, :-1], exact)
        rows.append(f"| loop, {per_period} steps a period | {error:.1e} | {duration(time.perf_counter() - began)} |")
    own, by_loop = interleaved([lambda: edges.run(TOLERANCE_EDGES, SHORT_S), lambda: loop(per_period, SHORT_S)], rounds=rounds)
    reached = "at equal error" if error <= ours else f"the loop has not reached that error at {per_period} steps a period"
    return [
        *lines,
        f"| {duration(SHORT_S)} with every edge | largest error | time |",
        "|---|---|---|",
        f"| polewise, tolerance {TOLERANCE_EDGES:g} | {ours:.1e} | {own} |",
        *rows,
        "",
        f"Ratio {by_loop.median / own.median:.1f}, {reached}.",
    ]


if __name__ == "__main__":
    print("\n".join(report()))
