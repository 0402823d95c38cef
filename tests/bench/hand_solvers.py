"""The hand-written equations through scipy's and SUNDIALS' solvers, one row per sensible way of calling them.

Every way is a `Contender`: `run(tolerance)` is what is timed, `sample(tolerance)` gives the kept quantities at the common times.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import ten_converters as hand
from compiled import compiled_jacobian, compiled_rates
from scipy.integrate import solve_ivp
from ten_converters import Case, FloatArray, Stages

REFERENCE_TOLERANCE = 1e-12


@dataclass(frozen=True, slots=True)
class Contender:
    """One way of solving the case.

    Args:
        family: "scipy", "SUNDIALS numpy", "SUNDIALS compiled", ...: ratios are against the best of a family.
        run: tolerance → number of accepted steps (or right-hand sides where steps are not told).
        sample: tolerance → kept quantities at the common times, shape (quantities, times).
    """

    name: str
    family: str
    run: Callable[[float], int]
    sample: Callable[[float], FloatArray]


@dataclass(frozen=True, slots=True)
class _Forms:
    """Right-hand side and Jacobian of one stretch."""

    numpy: Callable[..., Any]
    compiled: Callable[..., Any]
    numpy_jacobian: Callable[..., Any]
    compiled_jacobian: Callable[..., Any]


def _forms(s: Stages, size: FloatArray) -> _Forms:
    columns = s.as_columns()
    raw, raw_jacobian = compiled_rates(s), compiled_jacobian(s, size)
    n = len(size)

    def numpy_rates(t: float, y: FloatArray) -> FloatArray:
        return hand.rates(s if y.ndim == 1 else columns, y)

    def numpy_jacobian(t: float, y: FloatArray) -> FloatArray:
        step = 1e-8 * np.maximum(np.abs(y), size)
        return (hand.rates(columns, y[:, None] + np.diag(step)) - hand.rates(s, y)[:, None]) / step

    def rates(t: float, y: FloatArray) -> FloatArray:
        out = np.empty(n)
        raw(t, y, out)
        return out

    def jacobian(t: float, y: FloatArray) -> FloatArray:
        out = np.empty((n, n))
        raw_jacobian(t, y, out)
        return out

    return _Forms(numpy_rates, rates, numpy_jacobian, jacobian)


def reference(case: Case) -> FloatArray:
    """Kept quantities at the compared times from an explicit method of order 8 at tolerance 1e-12: far finer than anything it judges.

    Its steps are held below 10 us, inside its region of stability, so that no step is ever rejected for it.
    """
    y, parts = case.start, []
    for s, times in zip((case.before, case.after), hand.sample_times(case.end_s)):
        form, span = _forms(s, case.scale), (times[0], times[-1])
        options = {"rtol": REFERENCE_TOLERANCE, "atol": REFERENCE_TOLERANCE * case.scale, "max_step": 10e-6}
        result = solve_ivp(form.compiled, span, y, method="DOP853", t_eval=times, **options)
        if not result.success:
            raise RuntimeError(f"reference: {result.message}")
        parts.append(result.y)
        y = result.y[:, -1]
    return hand.compared(case, parts[0], parts[1])


def scipy_contenders(case: Case) -> list[Contender]:
    """LSODA, BDF and Radau, right-hand side in numpy and compiled, Jacobian by the solver or by one call."""
    forms = [_forms(case.before, case.scale), _forms(case.after, case.scale)]
    made = []
    for method in ("LSODA", "BDF", "Radau"):
        for kind in ("numpy", "compiled"):
            for own_jacobian in (False, True):
                name = f"scipy {method}, {kind}" + (", whole Jacobian" if own_jacobian else "")
                family = f"scipy {kind}"
                made.append(_scipy(case, forms, method, kind, own_jacobian, name, family))
    return made


def _scipy(case: Case, forms: list[_Forms], method: str, kind: str, own_jacobian: bool, name: str, family: str) -> Contender:
    spans = ((0.0, case.step_s), (case.step_s, case.end_s))

    def solve(tolerance: float, times: tuple[FloatArray, ...] | None) -> tuple[list[Any], int]:
        y, results, steps = case.start, [], 0
        for k, (span, form) in enumerate(zip(spans, forms)):
            options: dict[str, Any] = {"rtol": tolerance, "atol": tolerance * case.scale, "t_eval": None if times is None else times[k]}
            if own_jacobian:
                options["jac"] = form.numpy_jacobian if kind == "numpy" else form.compiled_jacobian
            if method != "LSODA" and kind == "numpy":
                options["vectorized"] = True
            result = solve_ivp(form.numpy if kind == "numpy" else form.compiled, span, y, method=method, **options)
            if not result.success:
                raise RuntimeError(f"{name}: {result.message}")
            y, steps = result.y[:, -1], steps + len(result.t) - 1
            results.append(result)
        return results, steps

    def run(tolerance: float) -> int:
        return solve(tolerance, None)[1]

    def sample(tolerance: float) -> FloatArray:
        results, _ = solve(tolerance, hand.sample_times(case.end_s))
        return hand.compared(case, results[0].y, results[1].y)

    return Contender(name, family, run, sample)


def sundials_contenders(case: Case) -> list[Contender]:
    """CVODE (and IDA once) through scikit-sundae; empty where the package is missing."""
    try:
        from sksundae.cvode import CVODE
        from sksundae.ida import IDA
    except ImportError:
        return []
    made = []
    times = hand.sample_times(case.end_s)
    for kind in ("numpy", "compiled"):
        for own_jacobian in (False, True):
            name = f"CVODE, {kind}" + (", whole Jacobian" if own_jacobian else "")
            made.append(_sundials(case, times, CVODE, kind, own_jacobian, name))
    made.append(_sundials(case, times, IDA, "compiled", False, "IDA, compiled"))
    return made


def _sundials(case: Case, times: tuple[FloatArray, ...], solver: Any, kind: str, own_jacobian: bool, name: str) -> Contender:
    stretches = [_sundials_functions(s, case.scale, kind, solver.__name__) for s in (case.before, case.after)]
    starting_rate = [compiled_rates(s) for s in (case.before, case.after)] if solver.__name__ == "IDA" else [None, None]

    def solve(tolerance: float) -> tuple[list[Any], int]:
        y, results, work = case.start, [], 0
        for when, (f, jacobian), starting in zip(times, stretches, starting_rate):
            options: dict[str, Any] = {"jacfn": jacobian} if own_jacobian else {}
            made = solver(f, rtol=tolerance, atol=tolerance * case.scale, max_num_steps=1_000_000, linsolver="dense", **options)
            if starting is not None:
                rate = np.empty_like(y)
                starting(0.0, y, rate)
                result = made.solve(when, y, rate)
            else:
                result = made.solve(when, y)
            if not result.success:
                raise RuntimeError(f"{name}: {result.message}")
            y, work = result.y[-1], work + int(result.nfev)
            results.append(result)
        return results, work

    def run(tolerance: float) -> int:
        return solve(tolerance)[1]

    def sample(tolerance: float) -> FloatArray:
        results, _ = solve(tolerance)
        return hand.compared(case, results[0].y.T, results[1].y.T)

    return Contender(name, f"SUNDIALS {kind}", run, sample)


def _sundials_functions(s: Stages, size: FloatArray, kind: str, solver: str) -> tuple[Callable[..., Any], Callable[..., Any] | None]:
    raw, raw_jacobian = compiled_rates(s), compiled_jacobian(s, size)
    if solver == "IDA":
        from numba import njit

        @njit
        def residual(t, y, yp, res):
            raw(t, y, res)
            for k in range(len(y)):
                res[k] = yp[k] - res[k]

        return residual, None
    form = _forms(s, size)
    if kind == "compiled":
        from numba import njit

        @njit
        def jacobian(t, y, yp, out):
            raw_jacobian(t, y, out)

        return raw, jacobian

    def f(t: float, y: FloatArray, out: FloatArray) -> None:
        out[:] = form.numpy(t, y)

    def numpy_jacobian(t: float, y: FloatArray, yp: FloatArray, out: FloatArray) -> None:
        out[:] = form.numpy_jacobian(t, y)

    return f, numpy_jacobian
