"""A digitally controlled stage against a recursion written by hand: exact propagation between samples, the language's order at each of them."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
from scipy.linalg import expm

import polewise

CIRCUIT = Path(__file__).parents[2] / "circuits" / "basics" / "sampled_step_up.pole"
T = 25e-6
R_L, L, V_F, R_ON, ESR, C, VG = 15e-3, 220e-6, 0.9, 12e-3, 5e-3, 470e-6, 200.0


def plant(d: float, r: float) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """x' = A x + b and the row that gives the bus voltage, x = (choke current, capacitor voltage), continuous conduction at duty d.

    The diode carries (1 - d) i into the bus: v = vc + esr ((1 - d) i - v/r), so v = (vc + esr (1 - d) i) r/(r + esr).
    Choke: L i' = Vg - r_l i - d r_on i - (1 - d)(v + V_F). Capacitor: C vc' = (1 - d) i - v/r.
    """
    off = 1 - d
    bus = np.array([ESR * off, 1.0]) * r / (r + ESR)
    a = np.array([[-(R_L + d * R_ON) / L, 0.0], [off / C, 0.0]]) - np.outer([off / L, 1 / (r * C)], bus)
    return a, np.array([(VG - off * V_F) / L, 0.0]), bus


def advanced(x: np.ndarray, d: float, r: float) -> np.ndarray:
    """One period later, exactly."""
    a, b, _ = plant(d, r)
    big = np.zeros((3, 3))
    big[:2, :2], big[:2, 2] = a, b
    return (expm(big * T) @ np.append(x, 1.0))[:2]


def limited(x: float, low: float, high: float) -> float:
    return min(max(x, low), high)


def test_sampled_step_up_through_a_load_step() -> None:
    result = polewise.load(CIRCUIT).run("load_step", tolerance=1e-9, keep=["choke.i", "store.c.v", "leg.mode", "drive", "acc_v"])
    assert set(result["leg.mode"]) == {2}
    # at rest: bus 400 V, so d from the choke's balance, i = I/(1 - d), all latches at their fixed point
    load = 400.0 / 80
    d = 0.5
    for _ in range(60):
        i = load / (1 - d)
        d = 1 - (VG - R_L * i - d * R_ON * i) / (400 + V_F)
    x, drive, following = np.array([i, 400.0]), d, d
    acc_v, acc_i, r = i, d, 80.0
    k_step = 800
    samples = []
    for k in range(2400):
        samples.append((*x, drive, acc_v))
        # circuit values of just before; all read first, then all written; the load's step at 20 ms is the same instant
        bus = float(plant(drive, r)[2] @ x)
        e_v = 400 - bus
        ask = limited(e_v + acc_v, 0.0, 30.0)
        e_i = ask - float(x[0])
        next_drive, next_following = following, limited(0.006 * e_i + acc_i, 0.02, 0.9)
        acc_v, acc_i = limited(acc_v + 4e-3 * e_v, 0.0, 30.0), limited(acc_i + 0.0003 * e_i, 0.0, 0.9)
        drive, following = next_drive, next_following
        if k == k_step:
            r = 40.0
        x = advanced(x, drive, r)
    wanted = np.array(samples)
    t = T * np.arange(2400)
    # states are continuous, so a value at the instant is both before and after it
    for column, name, size in ((0, "choke.i", 20.0), (1, "store.c.v", 400.0)):
        np.testing.assert_allclose(result.at(name, t), wanted[:, column], rtol=0, atol=1e-7 * size, err_msg=name)
    # in the middle of a period the latches stand as written at its start
    np.testing.assert_allclose(result.at("drive", t[:-1] + T / 2), wanted[1:, 2], rtol=0, atol=1e-8)
    np.testing.assert_allclose(result.at("acc_v", t[:-1] + T / 2), wanted[1:, 3], rtol=0, atol=1e-6)
    assert np.min(wanted[:, 1]) < 396  # the step was felt
    assert math.isclose(wanted[-1, 1], 400.0, rel_tol=2e-2)
