"""Sources written as equations: a photovoltaic cell's single-diode curve, a lithium cell of two time constants, a chain of thermal cells."""

from __future__ import annotations

import math

import numpy as np
import pytest

import polewise

from .by_hand import integrate, relative_error

# ---------------------------------------------------------------- photovoltaic

# Easwarakhanthan, Bottin, Bouhouch & Boutrit 1986, 57 mm silicon cell at 33 degC: V, measured I, I of the single-diode model.
CELL = [
    (-0.2057, 0.7640, 0.7640881),
    (0.1185, 0.7590, 0.7580435),
    (0.3269, 0.7505, 0.7513885),
    (0.4137, 0.7280, 0.7273973),
    (0.4590, 0.6755, 0.6752957),
    (0.4960, 0.5730, 0.5720831),
    (0.5265, 0.4130, 0.4134950),
    (0.5633, 0.1035, 0.1027231),
    (0.5900, -0.2100, -0.2091913),
]
# I = I_ph - I_0 (e^((V + I R_s)/a) - 1) - (V + I R_s)/R_sh: once as a circuit of boxes, once as one equation in a box.
AS_CIRCUIT = """
    reference gnd
    light: gnd --[0.760776 A]-- inner
    junction: inner --[i = 0.323021 uA * (exp(v / 0.0390765866427 V) - 1)]-- gnd
    shunt: inner --[53.718524 ohm]-- gnd
    series: inner --[0.036377 ohm]-- out
"""
AS_EQUATION = """
    reference gnd
    function inner(u, j) = u + j * 0.036377 ohm
    cell: out --[-i = 0.760776 A - 0.323021 uA * (exp(inner(v, -i) / 0.0390765866427 V) - 1) - inner(v, -i) / 53.718524 ohm]-- gnd
"""


@pytest.mark.parametrize("written", [AS_CIRCUIT, AS_EQUATION], ids=["circuit", "equation"])
@pytest.mark.parametrize(("v", "measured", "model"), CELL)
def test_photovoltaic_cell(written: str, v: float, measured: float, model: float) -> None:
    point = polewise.from_text(f"{written}\ntake: out --[{v!r} V]-- gnd").settled()
    assert point["take.i"] == pytest.approx(model, abs=6e-8)
    # the fit's residual over all measured points is 9.86e-4 A rms, its largest below 3e-3
    assert point["take.i"] == pytest.approx(measured, abs=3e-3)


@pytest.mark.parametrize("written", [AS_CIRCUIT, AS_EQUATION], ids=["circuit", "equation"])
def test_photovoltaic_cell_at_its_ends_and_best(written: str) -> None:
    # the same model: I_sc 0.760260836 A, V_oc 0.572785306 V, largest power at 0.450645052 V, 0.689350358 A (their product is 0.310652328 W)
    short = polewise.from_text(f"{written}\ntake: out --[0 V]-- gnd").settled()
    assert short["take.i"] == pytest.approx(0.760260836, rel=2e-9)
    idle = polewise.from_text(f"{written}\ntake: out --[0 A]-- gnd").settled()
    assert idle["out.v"] == pytest.approx(0.572785306, rel=2e-9)
    best, less, more = (polewise.from_text(f"{written}\ntake: out --[{0.450645052 + d!r} V]-- gnd").settled() for d in (0.0, -1e-3, 1e-3))
    assert best["take.p"] == pytest.approx(0.450645052 * 0.689350358, rel=3e-9)
    assert best["take.i"] == pytest.approx(0.689350358, rel=3e-9)
    assert less["take.p"] < best["take.p"] > more["take.p"]


# ---------------------------------------------------------------- lithium cell

# Chen & Rincón-Mora, IEEE Trans. Energy Convers. 21(2), 2006: elements over the state of charge x.
LITHIUM = """
    function v_oc(x) = -1.031 V * exp(-35 * x) + 3.685 V + 0.2156 V * x - 0.1178 V * x^2 + 0.3201 V * x^3
    function r_s(x)  = 0.1562 ohm * exp(-24.37 * x) + 0.07446 ohm
    function r_ts(x) = 0.3208 ohm * exp(-29.14 * x) + 0.04669 ohm
    function c_ts(x) = -752.9 F * exp(-13.51 * x) + 703.6 F
    function r_tl(x) = 6.603 ohm * exp(-155.2 * x) + 0.04984 ohm
    function c_tl(x) = -6056 F * exp(-27.12 * x) + 4475 F
"""


def elements(x: float) -> tuple[float, ...]:
    """The published functions in plain numbers: V_oc, R_s, R_ts, C_ts, R_tl, C_tl."""
    return (
        -1.031 * math.exp(-35 * x) + 3.685 + 0.2156 * x - 0.1178 * x**2 + 0.3201 * x**3,
        0.1562 * math.exp(-24.37 * x) + 0.07446,
        0.3208 * math.exp(-29.14 * x) + 0.04669,
        -752.9 * math.exp(-13.51 * x) + 703.6,
        6.603 * math.exp(-155.2 * x) + 0.04984,
        -6056 * math.exp(-27.12 * x) + 4475,
    )


@pytest.mark.parametrize(("x", "v"), [(1.0, 4.1029), (0.8, 3.945979), (0.5, 3.803362), (0.2, 3.725029), (0.1, 3.674569)])
def test_open_circuit_voltage(x: float, v: float) -> None:
    point = polewise.from_text(f"{LITHIUM}\nreference gnd\ncells: a --[v_oc({x!r})]-- gnd\nload: a --[0 S + 1 uS]-- gnd").settled()
    assert point["a.v"] == pytest.approx(v, abs=5e-7)


def test_discharge_pulse_with_frozen_elements() -> None:
    # 0.8 A at half charge: 3.743793836 V at once, 3.732232586 V after 10 s, 3.693807680 V after 100 s (the published elements at 0.5).
    result = polewise.from_text(
        f"""
        {LITHIUM}
        reference gnd
        given x = 0.5
        cell: a --[r_s(x)]--[r1: r_ts(x) | c1: c_ts(x)]--[r2: r_tl(x) | c2: c_tl(x)]--[v_oc(x)]-- gnd
        load: a --[amps]-- gnd
        latch amps = 0 A
        study pulse {{
            start settled
            run for 101 s
            at 1 s: set amps = 0.8 A
            keep a.v
        }}
        """
    ).run("pulse", tolerance=1e-9, at=[11.0])
    jump = result["a.v"][np.flatnonzero(result.time == 1.0)]
    assert jump[-1] == pytest.approx(3.743793836, abs=6e-10)
    assert result.at("a.v", 11.0) == pytest.approx(3.732232586, abs=2e-9)
    assert result.at("a.v", 101.0) == pytest.approx(3.693807680, abs=2e-9)


def test_discharge_with_elements_that_follow_the_charge() -> None:
    # 850 mAh from 0.9 down to about 0.43 at 0.8 A in half an hour; the capacitors in charge form: i = d/dt(C(x) v).
    result = polewise.from_text(
        f"""
        {LITHIUM}
        reference gnd
        cell: a --[r_s(x)]--[r1: r_ts(x) | c1: c_ts(x)]--[r2: r_tl(x) | c2: c_tl(x)]--[v_oc(x)]-- gnd
        d/dt x = cell.i / 850 mAh  initially 0.9  held
        load: a --[0.8 A]-- gnd
        study drain {{
            start cold
            run for 30 min
            keep a.v, x
        }}
        """
    ).run("drain", tolerance=1e-9)

    def rates(t, y):
        q1, q2, x = y
        _, _, r1, c1, r2, c2 = elements(x)
        return [-0.8 - q1 / c1 / r1, -0.8 - q2 / c2 / r2, -0.8 / (0.85 * 3600)]

    q1, q2, x = integrate([(1800.0, rates)], [0.0, 0.0, 0.9], result.time, scale=[10, 100, 1])
    table = np.array([elements(k) for k in x]).T
    assert relative_error(result["x"], x) < 1e-8
    assert relative_error(result["a.v"], table[0] - 0.8 * table[1] + q1 / table[3] + q2 / table[5]) < 1e-8


# ---------------------------------------------------------------- heat

FOSTER = "[ra: 0.02 K/W | ca: 0.05 J/K]--[rb: 0.05 K/W | cb: 0.2 J/K]--[rc: 0.08 K/W | cc: 1.25 J/K]--[rd: 0.03 K/W | cd: 33.3333333333333333 J/K]"


def test_thermal_chain_step() -> None:
    # R .02 .05 .08 .03 K/W, tau 1 ms, 10 ms, 0.1 s, 1 s; Z(t) = sum R_k (1 - e^(-t/tau_k)) (elementary).
    result = polewise.from_text(
        f"""
        reference cold (K)
        heat: cold --[1 W]-- junction
        chain: junction --{FOSTER}-- cold
        study step {{
            start cold
            run for 1 s
            keep junction.temp
        }}
        """
    ).run("step", tolerance=1e-9, at=[1e-3, 1e-2, 1e-1])
    z = result.at("junction.temp", [1e-3, 1e-2, 1e-1, 1.0])
    assert z == pytest.approx([0.018226539, 0.059516631, 0.123422252, 0.168959985], abs=1e-9)


def test_thermal_chain_under_pulses() -> None:
    # 200 W at half duty, period 20 ms, settled: highest 22.725071069 K, lowest 13.274928931 K. Started at each cell's mean, R_k 100 W.
    result = polewise.from_text(
        """
        reference cold (K)
        latch on = 1
        every 10 ms: set on = 1 - on
        heat: cold --[200 W * on]-- junction
        chain: junction --[ra: 0.02 K/W | ca: 0.05 J/K initially 2 K]--[rb: 0.05 K/W | cb: 0.2 J/K initially 5 K]--
            [rc: 0.08 K/W | cc: 1.25 J/K initially 8 K]--[rd: 0.03 K/W | cd: 100 J/K / 3 initially 3 K]-- cold
        study pulses {
            start cold
            run for 12 s
            keep junction.temp
            top: require peak(junction.temp) below 30 K during 11 s .. 12 s
            low: require lowest(junction.temp) above 10 K during 11 s .. 12 s
        }
        """
    ).run("pulses", tolerance=1e-9)
    # the slowest cell still lacks e^-11 of its 5 mK ripple
    assert result.verdict["top"].value == pytest.approx(22.725071069, abs=1e-6)
    assert result.verdict["low"].value == pytest.approx(13.274928931, abs=1e-6)
