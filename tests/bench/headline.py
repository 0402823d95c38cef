"""Ten controlled converters, 50 ms with a load step, against the same equations written by hand for scipy and SUNDIALS, at equal measured error."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import ours
import ten_converters as hand
from compiled import compiled_rates
from hand_solvers import Contender, reference, scipy_contenders, sundials_contenders
from precision import Point, cost_at, sweep, tolerance_for
from timing import Timing, duration, interleaved

TOLERANCES = (1e-3, 1e-4, 1e-5, 1e-6, 1e-7, 1e-8, 1e-9)
OUR_TOLERANCE = 1e-6  # the default; the error it delivers is the common one
AGREEMENT = 1e-7
COMMON_ERRORS = (1e-4, 1e-5, 1e-6, 1e-7)
# family → goal of the ratio, None where no figure was set
GOALS = {"scipy numpy": 30.0, "scipy compiled": None, "SUNDIALS numpy": 8.0, "SUNDIALS compiled": 1.5}


@dataclass(frozen=True, slots=True)
class Headline:
    """What was found.

    Args:
        agreement: error of a run at 1e-9 against the reference. error: common error.
        points: name → sweep. best: family → (contender, tolerance, error). times: name → paired timing.
    """

    agreement: float
    error: float
    counters: object
    points: dict[str, list[Point]]
    best: dict[str, tuple[Contender, float, float]]
    times: dict[str, Timing]


def measure(*, rounds: int = 15, sweep_rounds: int = 2) -> Headline:
    """Agreement first, then sweeps, then the best of each family in one interleaved race at equal error."""
    case = hand.load_step()
    _forms_agree(case)
    fine = reference(case)
    prepared = ours.prepare(hand.netlist(), "load_step")
    names, times = hand.kept_names(), hand.compared_times()

    def our_error(tolerance: float) -> float:
        return hand.relative_error(ours.sampled(prepared.run(tolerance), names, times), fine)

    agreement = our_error(1e-9)
    if not agreement < AGREEMENT:
        raise RuntimeError(f"the netlist and the hand-written equations differ by {agreement:.1e}: nothing was timed")
    error = our_error(OUR_TOLERANCE)
    contenders = scipy_contenders(case) + sundials_contenders(case)
    errors = {c.name: (lambda tolerance, c=c: hand.relative_error(c.sample(tolerance), fine)) for c in contenders}
    points = {"polewise, integration": sweep(prepared.integrate, our_error, TOLERANCES, rounds=sweep_rounds)}
    points |= {c.name: sweep(c.run, errors[c.name], TOLERANCES, rounds=sweep_rounds) for c in contenders}

    best = {}
    for family in dict.fromkeys(c.family for c in contenders):
        first = min((c for c in contenders if c.family == family), key=lambda c: np.nan_to_num(cost_at(points[c.name], error), nan=np.inf))
        best[family] = (first, *tolerance_for(points[first.name], errors[first.name], error))
    jobs = {
        "polewise, integration": lambda: prepared.integrate(OUR_TOLERANCE),
        "polewise, whole run": lambda: prepared.run(OUR_TOLERANCE),
        **{c.name: (lambda c=c, tolerance=tolerance: c.run(tolerance)) for c, tolerance, _ in best.values()},
    }
    taken = dict(zip(jobs, interleaved(list(jobs.values()), rounds=rounds)))
    return Headline(agreement, error, prepared.integrate(OUR_TOLERANCE), points, best, taken)


def _forms_agree(case: hand.Case) -> None:
    """The compiled form must be the numpy form."""
    rng = np.random.default_rng(1)
    for s in (case.before, case.after):
        f, out = compiled_rates(s), np.empty(len(case.start))
        for _ in range(20):
            y = case.start * (1.0 + 0.02 * rng.standard_normal(len(case.start)))
            f(0.0, y, out)
            expected = hand.rates(s, y)
            if not np.allclose(out, expected, rtol=1e-9, atol=1e-9 * np.max(np.abs(expected))):
                raise RuntimeError("the two hand-written forms differ")


def report(*, rounds: int = 15, sweep_rounds: int = 2) -> list[str]:
    """The tables as lines of Markdown."""
    found = measure(rounds=rounds, sweep_rounds=sweep_rounds)
    own, whole = found.times["polewise, integration"], found.times["polewise, whole run"]
    lines = [
        f"Netlist against hand-written equations at tolerance 1e-9: {found.agreement:.1e}. Common error: {found.error:.1e} (ours at tolerance 1e-6).",
        "",
        "| | best way of calling it | time (quartiles) | over our integration | over our whole run | goal |",
        "|---|---|---|---|---|---|",
        f"| polewise | integration alone | {own} | 1 | | |",
        f"| polewise | `system.run`, repeated | {whole} | {whole.median / own.median:.2f} | 1 | |",
    ]
    for family, (contender, tolerance, error) in found.best.items():
        timing, goal = found.times[contender.name], GOALS.get(family)
        shown = f"≥ {goal:g}" if goal else ""
        ratios = f"{timing.median / own.median:.1f} | {timing.median / whole.median:.1f}"
        lines.append(f"| {family} | {contender.name}, {tolerance:.0e}, error {error:.1e} | {timing} | {ratios} | {shown} |")
    lines += ["", f"Our counters: {_counters(found.counters)}", "", *work_precision(found.points)]
    return lines


def _counters(counters: object) -> str:
    names = [n for n in getattr(counters, "__slots__", ()) if not n.startswith("_")] or list(getattr(counters, "__dataclass_fields__", ()))
    return ", ".join(f"{n.replace('_', ' ')} {getattr(counters, n)}" for n in names if isinstance(getattr(counters, n), int))


def work_precision(points: dict[str, list[Point]], errors: Sequence[float] = COMMON_ERRORS) -> list[str]:
    """Cost at common errors, interpolated between swept tolerances."""
    lines = ["| time at error | " + " | ".join(f"{e:.0e}" for e in errors) + " |", "|---|" + "---|" * len(errors)]
    for name, found in points.items():
        cells = [duration(c) if np.isfinite(c := cost_at(found, e)) else "–" for e in errors]
        lines.append(f"| {name} | " + " | ".join(cells) + " |")
    return lines
