"""Reference solutions of ordinary differential equations written by hand, integrated by scipy far below the tolerance that is tested."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from scipy.integrate import solve_ivp

Rates = Callable[[float, np.ndarray], Sequence[float]]


def integrate(
    stretches: Sequence[tuple[float, Rates]],
    start: Sequence[float],
    times: np.ndarray,
    *,
    method: str = "DOP853",
    rtol: float = 1e-12,
    scale: Sequence[float] | float = 1.0,
    max_step: float = np.inf,
) -> np.ndarray:
    """The solution at `times`, shape (states, times).

    Args:
        stretches: (end time, rates) one after the other from t = 0; a new stretch wherever something in the rates jumps.
        start: state at t = 0.
        times: ascending, from 0 to the last end; a time twice stands for just before and just after a jump, which a state does not see.
        scale: size of each state; absolute tolerance is rtol times this.
    """
    x, begin = np.asarray(start, dtype=float), 0.0
    found = np.empty((len(x), len(times)))
    for end, rates in stretches:
        inside = np.flatnonzero((times >= begin) & (times <= end))
        wanted = np.unique(np.append(times[inside], end))
        solution = solve_ivp(rates, (begin, end), x, method=method, rtol=rtol, atol=rtol * np.asarray(scale), t_eval=wanted, max_step=max_step)
        assert solution.success, solution.message
        found[:, inside] = solution.y[:, np.searchsorted(solution.t, times[inside])]
        x, begin = solution.y[:, -1], end
    return found


def relative_error(got: np.ndarray, wanted: np.ndarray) -> float:
    """Largest difference over the run, as a share of the quantity's largest size."""
    return float(np.max(np.abs(np.asarray(got) - wanted)) / np.max(np.abs(wanted)))
