"""Small-signal behaviour of a constant-power load behind a line, seen in transients: eigenvalues, and stability on both sides of the limit.

Source Vs, r, L into C with load P: linearised L i' = -r i - v, C v' = i + (P/V^2) v. Sources: Middlebrook 1976; Emadi, Khaligh, Rivetta &
Williamson, IEEE Trans. Veh. Technol. 55(4), 2006; limit P* = (r C/L) Vs^2/(1 + r^2 C/L)^2 by eliminating V.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

import polewise

# 270 V, 50 mohm, 50 uH, 200 uF: P kW → eigenvalue of the upper half plane, 1/s; P* = 14.2927164004 kW.
EIGENVALUES = [(5.0, -327.346008 + 9977.351182j), (10.0, -152.278037 + 9964.003587j), (20.0, 205.358965 + 9927.089693j)]


def disturbed(vs: float, r: float, l: float, c: float, p: float, kick: float, end: float) -> tuple[polewise.Result, float]:  # noqa: E741
    """A run that begins `kick` volts beside the operating point, and that point's voltage."""
    v = (vs + math.sqrt(vs * vs - 4 * r * p)) / 2
    system = polewise.from_text(
        f"""
        reference gnd
        supply: src --[{vs!r} V]-- gnd
        line: src --[r: {r!r} ohm]--[l: {l!r} H initially {p / v!r} A]-- bus
        bank: bus --[c: {c!r} F initially {v + kick!r} V]-- gnd
        load: bus --[{p!r} W above {vs / 3!r} V]-- gnd
        study ring {{
            start cold
            run for {end!r} s
            keep bus.v
        }}
        """
    )
    return system.run("ring", tolerance=1e-10), v


@pytest.mark.parametrize(("kw", "eigenvalue"), EIGENVALUES)
def test_eigenvalues_seen_in_a_small_disturbance(kw: float, eigenvalue: complex) -> None:
    result, v = disturbed(270.0, 0.05, 50e-6, 200e-6, kw * 1e3, 0.01, 3e-3)
    # a second-order linear response sampled every h obeys y[k+2] = a y[k+1] - b y[k]; its roots are e^(lambda h)
    h = 1e-4
    y = result.at("bus.v", h * np.arange(31)) - v
    (a, b), *_ = np.linalg.lstsq(np.column_stack([y[1:-1], -y[:-2]]), y[2:], rcond=None)
    found = np.log(np.roots([1, -a, b]).astype(complex)) / h
    upper = found[np.argmax(found.imag)]
    assert upper.real == pytest.approx(eigenvalue.real, abs=0.1)
    assert upper.imag == pytest.approx(eigenvalue.imag, abs=0.1)


# Vs, r, L, C, P*, V at P*, frequency: both rows published with these digits.
LIMITS = [
    (100.0, 0.1, 100e-6, 500e-6, 4535.14739229, 95.2380952381, 693.740313),
    (270.0, 0.05, 50e-6, 200e-6, 14292.7164004, 267.326732673, 1583.571689),
]


@pytest.mark.parametrize(("vs", "r", "l", "c", "limit", "v_limit", "f"), LIMITS)
def test_stability_limit_from_both_sides(vs: float, r: float, l: float, c: float, limit: float, v_limit: float, f: float) -> None:  # noqa: E741
    periods = 40
    for share in (0.97, 1.03):
        result, v = disturbed(vs, r, l, c, share * limit, 1e-3 * vs, periods / f)
        first = np.max(np.abs(result["bus.v"][result.time < 2 / f] - v))
        last = np.max(np.abs(result["bus.v"][result.time > (periods - 2) / f] - v))
        # real part of the eigenvalue: half the trace, (P/(C V^2) - r/L)/2
        growth = math.exp((share * limit / (c * v * v) - r / l) / 2 * (periods - 2) / f)
        assert (last / first > 1.0) == (share > 1.0)
        assert last / first == pytest.approx(growth, rel=0.05)
    # at the limit itself the ring neither grows nor dies, at the published frequency
    result, v = disturbed(vs, r, l, c, limit, 1e-4 * vs, 20 / f)
    assert v == pytest.approx(v_limit, rel=1e-10)
    y = result.at("bus.v", np.linspace(0, 20 / f, 4001)) - v
    upward = np.flatnonzero((y[:-1] < 0) & (y[1:] >= 0))
    crossings = (upward - y[upward] / (y[upward + 1] - y[upward])) * (20 / f / 4000)
    assert 1 / np.mean(np.diff(crossings)) == pytest.approx(f, rel=1e-5)
    assert np.max(np.abs(y[-400:])) == pytest.approx(np.max(np.abs(y[:400])), rel=5e-3)


def test_beyond_the_limit_a_kick_ends_in_a_limit_cycle_or_collapse_not_at_the_point() -> None:
    # 20 kW on the 270 V row has an operating point (266.2 V) that the transient must leave
    result, v = disturbed(270.0, 0.05, 50e-6, 200e-6, 20e3, 0.01, 60e-3)
    assert abs(result["bus.v"][0] - v) < 0.02
    assert np.max(np.abs(result["bus.v"][result.time > 50e-3] - v)) > 20
