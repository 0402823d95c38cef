"""The hand-written equations of ten_converters.py as compiled loops, with a compiled Jacobian by differences: the strongest hand-written form."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np
from numba import njit
from ten_converters import FloatArray, Stages


@njit(error_model="numpy")
def _rates(stage, feed, y, out):  # stage (4, N): set point, choke, output capacitor, power; feed (4,): feeder r, l, bank esr, c
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
        v_store, acc_v, acc_i = y[2 + 3 * n + k], y[2 + 4 * n + k], y[2 + 5 * n + k]
        idle = v_store + 2e-3 * j
        v_out = 0.5 * (idle + math.sqrt(idle * idle - 4.0 * 2e-3 * power))
        e_v = setpoint - v_out
        want = min(max(5.5 * e_v + acc_v, 0.0), 260.0)
        e_i = want - j
        d = min(max(0.0045 * e_i + acc_i, 0.01), 0.97)
        slope = 2.0 * inductance * 40e3 + (4e-3 + 3e-3) * d
        charge, reach = j * slope, (v_in - v_out) * d
        half_peak = reach / slope
        loss = 0.0
        if charge > reach:
            delta, i_on = 1.0, j * d
        else:
            if reach * d > charge:
                delta, i_on = d, j
            else:
                delta, i_on = charge / reach, half_peak * d
            loss = (4e-3 * d + 1.5e-3 * (delta - d)) * half_peak * half_peak / 3.0 * min((1.0 - delta) / 0.05, 1.0) / v_in
        v_mid = d * v_in - 4e-3 * i_on - (delta - d) * 0.9 - 1.5e-3 * (j - i_on) + (1.0 - delta) * v_out
        rate_v, rate_i = 1700.0 * e_v, 10.0 * e_i
        out[2 + k] = (v_bus - v_in - 30e-3 * i_cable) / 10e-6
        out[2 + n + k] = (i_cable - i_on - loss) / 470e-6
        out[2 + 2 * n + k] = (v_mid - v_out - 3e-3 * j) / inductance
        out[2 + 3 * n + k] = (j - power / v_out) / c_out
        out[2 + 4 * n + k] = 0.0 if (acc_v >= 260.0 and rate_v > 0) or (acc_v <= 0 and rate_v < 0) else rate_v
        out[2 + 5 * n + k] = 0.0 if (acc_i >= 0.97 and rate_i > 0) or (acc_i <= 0 and rate_i < 0) else rate_i


@njit(error_model="numpy")
def _jacobian(stage, feed, y, size, out):
    n = len(y)
    base, moved, point = np.empty(n), np.empty(n), y.copy()
    _rates(stage, feed, y, base)
    for column in range(n):
        step = 1e-8 * max(abs(y[column]), size[column])
        point[column] = y[column] + step
        _rates(stage, feed, point, moved)
        for row in range(n):
            out[row, column] = (moved[row] - base[row]) / step
        point[column] = y[column]


def _arrays(s: Stages) -> tuple[FloatArray, FloatArray]:
    return np.vstack([s.setpoint, s.L, s.c_out, s.power]), np.array([s.feeder_r, s.feeder_l, s.bank_esr, s.bank_c])


def compiled_rates(s: Stages) -> Callable[[float, FloatArray, FloatArray], None]:
    """f(t, y, out), compiled without Python in between; values are read from arrays."""
    stage, feed = _arrays(s)

    @njit(error_model="numpy")
    def f(t, y, out):
        _rates(stage, feed, y, out)

    return f


def compiled_jacobian(s: Stages, size: FloatArray) -> Callable[..., Any]:
    """g(t, y, out), df/dy by forward differences, compiled. size: shape (n,), what steps are a fraction of."""
    stage, feed = _arrays(s)

    @njit(error_model="numpy")
    def g(t, y, out):
        _jacobian(stage, feed, y, size, out)

    return g
