"""Ten controlled converters on one bus: the netlist against equations written by hand and integrated by scipy at tight tolerance.

The hand-written side (tests/bench/ten_converters.py) shares nothing with the engine: every algebraic unknown is eliminated on paper.
"""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest
from scipy.integrate import solve_ivp

import polewise

AGREEMENT = 1e-7


def _hand_written() -> ModuleType:
    file = Path(__file__).resolve().parents[1] / "bench" / "ten_converters.py"
    name = "polewise_bench_ten_converters"
    spec = importlib.util.spec_from_file_location(name, file)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module  # dataclasses look their module up
    spec.loader.exec_module(module)
    return module


hand = _hand_written()
WINDOW_S = 23e-3  # 3 ms after the load step: the dip of the stepped stage, the ringing of its cable, the bus's answer


@pytest.fixture(scope="module")
def case():
    return hand.load_step(end_s=WINDOW_S)


@pytest.fixture(scope="module")
def reference(case) -> np.ndarray:
    """Kept quantities at the compared times, integrated at 1e-11 by an implicit method of order 5."""
    y, parts = case.start, []
    for stage, times in zip((case.before, case.after), hand.sample_times(WINDOW_S)):
        columns = stage.as_columns()
        result = solve_ivp(
            lambda t, y, one=stage, many=columns: hand.rates(one if y.ndim == 1 else many, y),
            (times[0], times[-1]),
            y,
            method="Radau",
            t_eval=times,
            rtol=1e-10,
            atol=1e-10 * case.scale,
            vectorized=True,
        )
        assert result.success
        y = result.y[:, -1]
        parts.append(result.y)
    return hand.compared(case, *parts)


@pytest.fixture(scope="module")
def system():
    return polewise.from_text(hand.netlist(10, run_for="23 ms"))


def test_hand_written_start_is_at_rest(case) -> None:
    """Newton's solution of the hand-written equations: no rate moves a state by more than 1e-9 of its size in a second's thousandth."""
    assert np.max(np.abs(hand.rates(case.before, case.start)) / case.scale) * 1e-3 < 1e-9


def test_operating_points_agree(case, system) -> None:
    settled = system.settled()
    by_hand = hand.kept(case.before, case.start[:, None]).ravel()
    for name, value in zip(hand.kept_names(10), by_hand):
        assert settled[name] == pytest.approx(value, rel=1e-9), name


def test_both_modes_of_conduction_take_part(system) -> None:
    modes = [system.settled()[f"berth{n}.leg.mode"] for n in range(1, 11)]
    assert modes.count(1.0) == 2
    assert modes.count(2.0) == 8


def test_load_step_agrees(reference, system) -> None:
    result = system.run("load_step", tolerance=1e-9)
    times = hand.compared_times(WINDOW_S)
    got = np.vstack([result.at(name, times) for name in hand.kept_names(10)])
    assert hand.relative_error(got, reference) < AGREEMENT


def test_error_follows_the_tolerance(reference, system) -> None:
    """At the default tolerance the measured error is of the tolerance's size, and larger than at a tight one."""
    times = hand.compared_times(WINDOW_S)
    errors = []
    for tolerance in (1e-4, 1e-6):
        result = system.run("load_step", tolerance=tolerance)
        got = np.vstack([result.at(name, times) for name in hand.kept_names(10)])
        errors.append(hand.relative_error(got, reference))
    assert errors[1] < 1e-5
    assert errors[0] < 1e-3
    assert errors[1] < errors[0]


def test_written_out_text_is_the_same_circuit(case) -> None:
    """Without assembly and `each` the text has one line per thing and the same operating point."""
    settled = polewise.from_text(hand.flat_netlist(10)).settled()
    by_hand = hand.kept(case.before, case.start[:, None]).ravel()
    assert settled["bus.v"] == pytest.approx(by_hand[0], rel=1e-9)
    for n in range(1, 11):
        assert settled[f"choke{n}.i"] == pytest.approx(by_hand[10 + n], rel=1e-9)
