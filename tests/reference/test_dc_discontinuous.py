"""Discontinuous conduction at rest: ratios, worked examples, and the boundary at the published K from both sides.

EM is Erickson & Maksimović, Fundamentals of Power Electronics, 2nd ed. 2001, ch. 5 and 11; K = 2 L f / R.
"""

from __future__ import annotations

import math

import pytest

from .converters import Stage, settle

# EM table 5.1: K_crit. With two chokes L = L1 L2/(L1 + L2).
K_CRIT = {
    "step-down": lambda d: 1 - d,
    "step-up": lambda d: d * (1 - d) ** 2,
    "inverting": lambda d: (1 - d) ** 2,
    "SEPIC": lambda d: (1 - d) ** 2,
    "Ćuk": lambda d: (1 - d) ** 2,
}
# EM table 5.2.
RATIO = {
    "step-down": lambda d, k: 2 / (1 + math.sqrt(1 + 4 * k / d**2)),
    "step-up": lambda d, k: (1 + math.sqrt(1 + 4 * d**2 / k)) / 2,
    "inverting": lambda d, k: d / math.sqrt(k),
    "SEPIC": lambda d, k: d / math.sqrt(k),
    "Ćuk": lambda d, k: d / math.sqrt(k),
}
CONTINUOUS_RATIO = {
    "step-down": lambda d: d,
    "step-up": lambda d: 1 / (1 - d),
    "inverting": lambda d: d / (1 - d),
    "SEPIC": lambda d: d / (1 - d),
    "Ćuk": lambda d: d / (1 - d),
}
# EM table 5.1, the figures as printed, for the three basic converters.
K_CRIT_PRINTED = {
    0.1: (0.9, 0.081, 0.81),
    0.25: (0.75, 0.140625, 0.5625),
    0.5: (0.5, 0.125, 0.25),
    0.75: (0.25, 0.046875, 0.0625),
}


def at_k(topology: str, d: float, k: float, vg: float = 24.0) -> Stage:
    """A lossless stage with the wanted K."""
    r, f = 20.0, 100e3
    chokes = 2.0 if topology in ("SEPIC", "Ćuk") else 1.0
    return Stage(vg=vg, d=d, r=r, l=chokes * k * r / (2 * f), f=f)


def test_printed_boundaries_are_the_formulas() -> None:
    for d, printed in K_CRIT_PRINTED.items():
        assert [K_CRIT[t](d) for t in ("step-down", "step-up", "inverting")] == pytest.approx(printed, abs=1e-12)
    # the step-up boundary is highest at D = 1/3: 4/27
    assert K_CRIT["step-up"](1 / 3) == pytest.approx(0.148148, abs=5e-7)


@pytest.mark.parametrize("d", K_CRIT_PRINTED)
@pytest.mark.parametrize("topology", K_CRIT)
def test_boundary_of_conduction_from_both_sides(topology: str, d: float) -> None:
    critical = K_CRIT[topology](d)
    above = settle(topology, at_k(topology, d, critical * (1 + 1e-6)))
    assert above["leg.mode"] == 2
    assert above["leg.conduction"] == 1.0
    assert above["v_out"] / 24.0 == pytest.approx(CONTINUOUS_RATIO[topology](d), rel=1e-9)
    below = settle(topology, at_k(topology, d, critical * (1 - 1e-6)))
    assert below["leg.mode"] == 1
    assert 1 - 1e-5 < below["leg.conduction"] < 1
    assert below["v_out"] / 24.0 == pytest.approx(RATIO[topology](d, critical * (1 - 1e-6)), rel=1e-9)
    # nothing jumps at the boundary
    assert below["v_out"] == pytest.approx(above["v_out"], rel=1e-5)


# EM table 5.2: K, D → ratio of step-down, step-up, inverting, printed to six decimals; None where the converter is continuous.
DISCONTINUOUS = [
    (0.01, 0.2, 0.828427, 2.561553, 2.0),
    (0.01, 0.4, 0.944272, 4.531129, 4.0),
    (0.01, 0.6, 0.973666, 6.520797, 6.0),
    (0.05, 0.2, 0.579796, 1.524695, 0.894427),
    (0.05, 0.4, 0.800000, 2.357418, 1.788854),
    (0.05, 0.6, 0.889989, 3.229469, 2.683282),
    (0.1, 0.2, 0.463325, 1.306226, 0.632456),
    (0.1, 0.4, 0.696663, 1.860147, 1.264911),
    (0.1, 0.6, 0.815339, None, 1.897367),
    (0.5, 0.2, 0.245657, None, 0.282843),
    (0.5, 0.4, 0.427878, None, None),
]


@pytest.mark.parametrize("topology", ["step-down", "step-up", "inverting"])
@pytest.mark.parametrize(("k", "d", "down", "up", "inv"), DISCONTINUOUS)
def test_discontinuous_ratio(topology: str, k: float, d: float, down: float, up: float | None, inv: float | None) -> None:
    printed = {"step-down": down, "step-up": up, "inverting": inv}[topology]
    point = settle(topology, at_k(topology, d, k))
    if printed is None:
        assert point["leg.mode"] == 2
        assert point["v_out"] / 24.0 == pytest.approx(CONTINUOUS_RATIO[topology](d), rel=1e-9)
        return
    assert point["leg.mode"] == 1
    assert point["v_out"] / 24.0 == pytest.approx(printed, abs=5e-7)
    assert point["v_out"] / 24.0 == pytest.approx(RATIO[topology](d, k), rel=1e-9)
    assert point["load.p"] == pytest.approx(-point["supply.p"], rel=1e-9)  # nothing is lost


@pytest.mark.parametrize("topology", ["SEPIC", "Ćuk"])
@pytest.mark.parametrize(("k", "d"), [(0.01, 0.2), (0.05, 0.6), (0.1, 0.4), (0.3, 0.3)])
def test_discontinuous_ratio_of_two_chokes(topology: str, k: float, d: float) -> None:
    # EM table 5.2: D/sqrt(K), K of the two chokes in parallel.
    point = settle(topology, at_k(topology, d, k))
    assert point["leg.mode"] == 1
    assert point["v_out"] / 24.0 == pytest.approx(d / math.sqrt(k), rel=1e-9)


def test_step_up_worked_example() -> None:
    # EM 11.2: 24 V, 5 uH, 470 uF, 12 ohm, 100 kHz, D 0.25 → K 0.0833333 (K_crit 0.140625), 36 V, peak choke current 12 A, average 4.5 A,
    # diode conducts 0.5 T.
    point = settle("step-up", Stage(vg=24.0, d=0.25, r=12.0, l=5e-6, c=470e-6))
    assert point["v_out"] == pytest.approx(36.0, rel=1e-9)
    assert point["choke.i"] == pytest.approx(4.5, rel=1e-9)
    assert point["leg.conduction"] - 0.25 == pytest.approx(0.5, rel=1e-9)
    # a triangle of average i over the conducting part delta has the peak 2 i/delta
    assert 2 * point["choke.i"] / point["leg.conduction"] == pytest.approx(12.0, rel=1e-9)
    # The exact switched circuit (matrix exponentials): 35.9999974 V, 4.49999978 A, d2 0.499778438; averaging is that close.
    assert point["v_out"] == pytest.approx(35.9999974, rel=1e-7)
    assert point["choke.i"] == pytest.approx(4.49999978, rel=1e-7)
    assert point["leg.conduction"] - 0.25 == pytest.approx(0.499778438, rel=5e-4)


def test_step_down_worked_example() -> None:
    # 48 V, 10 uH, 10 ohm, 100 kHz, D 0.3 → K 0.2, M 0.482548584904, 23.1623320754 V, d2 0.321699056603 (EM table 5.2).
    point = settle("step-down", Stage(vg=48.0, d=0.3, r=10.0, l=10e-6, c=220e-6))
    assert point["v_out"] / 48.0 == pytest.approx(0.482548584904, rel=2e-12)
    assert point["v_out"] == pytest.approx(23.1623320754, rel=3e-12)
    assert point["leg.conduction"] - 0.3 == pytest.approx(0.321699056603, rel=1e-9)
    # The exact switched circuit with so large a capacitor (22 mF) that its ripple is gone: 23.1624032 V.
    assert point["v_out"] == pytest.approx(23.1624032, rel=4e-6)


def test_inverting_worked_example() -> None:
    # 24 V, 8 uH, 20 ohm, 100 kHz, D 0.4 → K 0.08, M = sqrt(2), 33.9411254970 V; the exact switched circuit with 470 uF: 33.9411245 V.
    point = settle("inverting", Stage(vg=24.0, d=0.4, r=20.0, l=8e-6, c=470e-6))
    assert point["v_out"] == pytest.approx(33.9411254970, rel=2e-12)
    assert point["v_out"] == pytest.approx(33.9411245, rel=4e-8)
