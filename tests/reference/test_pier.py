"""The demo in service against the same pier written by hand: state of rest and a load step, 111 states, thirteen converters.

Source of the equations: pier_by_hand.py, integrated by scipy's implicit Runge-Kutta method of order 5 at tight tolerance.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import solve_ivp

import polewise

from .pier_by_hand import BATTERY_AT, Pier, at_rest

PIER = Path(__file__).resolve().parents[2] / "circuits" / "tern_point" / "pier.pole"
STEP_S, END_S = 0.020, 0.045
BERTH_2 = 13  # first state of berth 2
NAMES = {  # reading → state of the hand-written pier
    "entry.i": 0,
    "bank.c.v": 1,
    "tap2.line.i": BERTH_2,
    "berth2.stage.store.c.v": BERTH_2 + 2,
    "berth2.stage.choke.i": BERTH_2 + 3,
    "berth2.stage.cap.c.v": BERTH_2 + 4,
    "hold2.c.v": BERTH_2 + 10,
    "battery1.choke.i": BATTERY_AT,
    "roof1.choke.i": BATTERY_AT + 13,
}


@pytest.fixture(scope="module")
def rest() -> np.ndarray:
    return at_rest(Pier())


def test_state_of_rest(rest: np.ndarray) -> None:
    point = polewise.load(PIER).settled()
    for name, state in NAMES.items():
        assert point[name] == pytest.approx(rest[state], rel=1e-7, abs=1e-6), name
    assert point["bus.v"] == pytest.approx(Pier().bus(rest), rel=1e-9)


def test_load_step(rest: np.ndarray) -> None:
    pier = Pier()
    pier.demands[1] = 90e3
    by_hand = solve_ivp(pier.rates, (STEP_S, END_S), rest, method="Radau", rtol=1e-10, atol=1e-8, dense_output=True)
    assert by_hand.success
    result = polewise.load(PIER).run("load_step", tolerance=1e-9, keep=list(NAMES))
    times = np.linspace(STEP_S + 1e-5, END_S, 500)
    for name, state in NAMES.items():
        exact = by_hand.sol(times)[state]
        size = np.max(np.abs(exact - rest[state]))
        error = np.max(np.abs(result.at(name, times) - exact))
        assert error < 1e-6 * max(np.max(np.abs(exact)), size), (name, error)
