"""Conversion ratios at rest: ideal, with choke resistance, with every conduction loss, against the textbook's closed forms and figures.

EM is Erickson & Maksimović, Fundamentals of Power Electronics, 2nd ed. 2001. Figures with all digits were computed from its formulas.
"""

from __future__ import annotations

import math

import pytest

import polewise

from .converters import Stage, efficiency, settle, step_down, step_up

# EM ch. 2 and 6; Middlebrook & Ćuk 1976: ratios in continuous conduction, no losses.
IDEAL = {
    "step-down": lambda d: d,
    "step-up": lambda d: 1 / (1 - d),
    "inverting": lambda d: d / (1 - d),
    "SEPIC": lambda d: d / (1 - d),
    "Ćuk": lambda d: d / (1 - d),
}


@pytest.mark.parametrize("d", [0.1, 0.25, 0.4, 0.6, 0.85])
@pytest.mark.parametrize("topology", IDEAL)
def test_ideal_continuous_ratio(topology: str, d: float) -> None:
    point = settle(topology, Stage(vg=40.0, d=d, r=5.0))
    assert point["v_out"] / 40.0 == pytest.approx(IDEAL[topology](d), rel=1e-9)
    assert point["leg.mode"] == 2
    assert efficiency(point) == pytest.approx(1.0, rel=1e-9)


def test_transformer_behind_an_inverting_pole_is_a_flyback() -> None:
    # EM ch. 6: V = n D Vg / D' in continuous conduction; Vg 100 V, n 0.5, D 0.35 give 26.9230769231 V.
    point = polewise.from_text("""
        reference gnd
        reference far
        supply: vin --[100 V]-- gnd
        leg: pole(vin, out, x, duty = 0.35, rate = 100 kHz, upper = transistor(0 ohm), lower = diode(0 V))
        choke: x --[l: 1 mH]-- gnd
        core: transformer(gnd, out, sec, far, ratio = 0.5)
        store: sec --[100 uF]-- far
        load: sec --[4 ohm]-- far
    """).settled()
    assert point["sec.v"] == pytest.approx(26.9230769231, rel=1e-9)


# EM 3.2 and 3.3: step-up with choke resistance only, rows R_L/R, entries M and efficiency at six duties, printed to six decimals.
DUTIES = (0.25, 0.5, 0.6, 0.7, 0.8, 0.9)
STEP_UP_WITH_RESISTANCE = {
    0.01: ((1.310044, 0.982533), (1.923077, 0.961538), (2.352941, 0.941176), (3.0, 0.9), (4.0, 0.8), (5.0, 0.5)),
    0.02: ((1.287554, 0.965665), (1.851852, 0.925926), (2.222222, 0.888889), (2.727273, 0.818182), (3.333333, 0.666667), (3.333333, 0.333333)),
    0.05: ((1.224490, 0.918367), (1.666667, 0.833333), (1.904762, 0.761905), (2.142857, 0.642857), (2.222222, 0.444444), (1.666667, 0.166667)),
    0.1: ((1.132075, 0.849057), (1.428571, 0.714286), (1.538462, 0.615385), (1.578947, 0.473684), (1.428571, 0.285714), (0.909091, 0.090909)),
}


@pytest.mark.parametrize(("share", "d", "ratio", "eta"), [(a, d, *e) for a, row in STEP_UP_WITH_RESISTANCE.items() for d, e in zip(DUTIES, row)])
def test_step_up_with_choke_resistance(share: float, d: float, ratio: float, eta: float) -> None:
    point = settle("step-up", Stage(vg=24.0, d=d, r=20.0, r1=share * 20.0))
    off = 1 - d
    assert point["v_out"] / 24.0 == pytest.approx(ratio, abs=5e-7)
    assert efficiency(point) == pytest.approx(eta, abs=5e-7)
    # the formulas behind the figures
    assert point["v_out"] / 24.0 == pytest.approx(1 / (off + share / off), rel=1e-9)
    assert efficiency(point) == pytest.approx(1 / (1 + share / off**2), rel=1e-9)


@pytest.mark.parametrize(
    ("share", "highest", "at"), [(0.01, 5.0, 0.9), (0.02, 3.535534, 0.858579), (0.05, 2.236068, 0.776393), (0.1, 1.581139, 0.683772)]
)
def test_step_up_has_a_highest_ratio(share: float, highest: float, at: float) -> None:
    # EM 3.2: the largest M is 1/(2 sqrt(R_L/R)), at D' = sqrt(R_L/R).
    best = 1 - math.sqrt(share)
    assert best == pytest.approx(at, abs=5e-7)

    def ratio(d: float) -> float:
        return settle("step-up", Stage(vg=1.0, d=d, r=20.0, r1=share * 20.0))["v_out"]

    assert ratio(best) == pytest.approx(highest, abs=5e-7)
    assert ratio(best) == pytest.approx(1 / (2 * math.sqrt(share)), rel=1e-9)
    assert ratio(best - 0.01) < ratio(best) > ratio(best + 0.01)


# EM 3.5, the step-up form and the same method for the others: V, choke current, efficiency to twelve digits.
LOSSY = [
    ("step-up", Stage(24.0, 0.5, 20.0, r1=0.05, r_on=0.03, r_d=0.02, v_d=0.8), 46.5024630542, 4.65024630542, 0.968801313629),
    ("step-down", Stage(48.0, 0.5, 4.0, r1=0.05, r_on=0.03, r_d=0.01, v_d=0.7), 23.2432432432, 5.81081081081, 0.968468468468),
    ("inverting", Stage(30.0, 0.6, 10.0, r1=0.1, r_on=0.05, r_d=0.03, v_d=0.7), 40.6888633754, 10.1722158439, 0.904196963898),
]


@pytest.mark.parametrize(("topology", "stage", "v", "i", "eta"), LOSSY, ids=[case[0] for case in LOSSY])
def test_every_conduction_loss(topology: str, stage: Stage, v: float, i: float, eta: float) -> None:
    point = settle(topology, stage)
    assert point["v_out"] == pytest.approx(v, rel=1e-11)
    assert point["choke.i"] == pytest.approx(i, rel=1e-11)
    assert efficiency(point) == pytest.approx(eta, rel=1e-11)
    # what the devices lose is what is missing beside the choke's resistance
    missing = -point["supply.p"] - point["load.p"] - point["choke.rl.p"]
    assert point["leg.loss"] == pytest.approx(missing, rel=1e-9)


@pytest.mark.parametrize("topology", ["SEPIC", "Ćuk"])
@pytest.mark.parametrize("d", [0.3, 0.4, 0.65])
def test_sepic_and_cuk_with_losses(topology: str, d: float) -> None:
    # V = (Vg D/D' - V_D) / (1 + (r1 (D/D')^2 + r2 + R_on D/D'^2)/R): EM's method for two chokes.
    s = Stage(vg=12.0, d=d, r=10.0, l=100e-6, r1=0.05, r2=0.08, r_on=0.03, v_d=0.5)
    off = 1 - d
    wanted = (s.vg * d / off - s.v_d) / (1 + (s.r1 * (d / off) ** 2 + s.r2 + s.r_on * d / off**2) / s.r)
    point = settle(topology, s)
    assert point["v_out"] == pytest.approx(wanted, rel=1e-9)
    assert point["first.i"] == pytest.approx(wanted / s.r * d / off, rel=1e-9)


@pytest.mark.parametrize("topology", ["SEPIC", "Ćuk"])
def test_sepic_and_cuk_lossless_figure(topology: str) -> None:
    # Vg 12 V, D 0.4, lossless: 8 V. L1 = L2 = 100 uH, R 10 ohm: continuous.
    assert settle(topology, Stage(vg=12.0, d=0.4, r=10.0, l=100e-6))["v_out"] == pytest.approx(8.0, rel=1e-9)


@pytest.mark.parametrize("build", [step_down, step_up])
def test_two_transistors_conduct_both_ways(build) -> None:
    # With transistors in both places the same ratios hold at any load, here with power flowing backwards (EM ch. 2; the pole has no diode).
    s = Stage(vg=28.0, d=15 / 28, r=3.0)
    text = build(s).replace("diode(0.0 V, 0.0 ohm)", "transistor(0 ohm)")
    text = text.replace("duty =", "upper_duty =" if build is step_down else "lower_duty =")
    text = text.replace("load: out --[r: 3.0 ohm]-- gnd", "load: gnd --[7 A]-- out")
    point = polewise.from_text(text).settled()
    ratio = s.d if build is step_down else 1 / (1 - s.d)
    assert point["v_out"] == pytest.approx(28.0 * ratio, rel=1e-9)
    assert point["supply.p"] == pytest.approx(7.0 * 28.0 * ratio, rel=1e-9)  # the supply absorbs
