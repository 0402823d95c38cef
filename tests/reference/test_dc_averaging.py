"""What averaging leaves out: operating points of the averaged model against exactly switched circuits and published ripple formulas.

EM is Erickson & Maksimović, Fundamentals of Power Electronics, 2nd ed. 2001. The exact states were computed twice: for the reference figures
quoted here, and by tests/reference/switched.py, which must agree with them.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

import polewise

from .converters import Stage, settle, step_up
from .switched import Part, continuous, discontinuous

# DC-3's lossy step-up and its chokes and capacitors.
STEP_UP = Stage(24.0, 0.5, 20.0, l=100e-6, c=220e-6, r1=0.05, r_on=0.03, r_d=0.02, v_d=0.8)


def switched_step_up(s: Stage) -> tuple[Part, Part]:
    """Transistor on: L i' = Vg - (r1 + Ron) i, C v' = -v/R. Diode on: L i' = Vg - V_D - (r1 + R_D) i - v, C v' = i - v/R."""
    on = Part(np.array([[-(s.r1 + s.r_on) / s.l, 0.0], [0.0, -1 / (s.r * s.c)]]), np.array([s.vg / s.l, 0.0]))
    off = Part(np.array([[-(s.r1 + s.r_d) / s.l, -1 / s.l], [1 / s.c, -1 / (s.r * s.c)]]), np.array([(s.vg - s.v_d) / s.l, 0.0]))
    return on, off


def switched_step_down(s: Stage) -> tuple[Part, Part]:
    """Lossless: L i' = (Vg or 0) - v, C v' = i - v/R."""
    a = np.array([[0.0, -1 / s.l], [1 / s.c, -1 / (s.r * s.c)]])
    return Part(a, np.array([s.vg / s.l, 0.0])), Part(a, np.zeros(2))


def idle(s: Stage) -> Part:
    """No choke current: only the capacitor discharges."""
    return Part(np.array([[0.0, 0.0], [0.0, -1 / (s.r * s.c)]]), np.zeros(2))


@pytest.mark.parametrize(("f", "difference"), [(50e3, -4.5923e-3), (100e3, -1.1480e-3), (200e3, -2.8700e-4), (400e3, -7.1749e-5)])
def test_averaging_error_falls_as_the_square_of_the_rate(f: float, difference: float) -> None:
    # Lossy step-up, L 100 uH, C 220 uF: exact minus averaged output voltage, four decimals of the mantissa published with this file's case.
    s = Stage(24.0, 0.5, 20.0, l=100e-6, c=220e-6, f=f, r1=0.05, r_on=0.03, r_d=0.02, v_d=0.8)
    exact = continuous(switched_step_up(s), s.d, 1 / f).average[1]
    point = settle("step-up", s)
    assert exact - point["v_out"] == pytest.approx(difference, rel=5e-5)


def test_exact_states_agree_with_the_reference_figures() -> None:
    a = Stage(28.0, 15 / 28, 3.0, l=50e-6, c=500e-6)
    case_a = continuous(switched_step_down(a), a.d, 1e-5)
    assert case_a.start == pytest.approx([4.303513676821, 15.000163910381], rel=1e-11)
    assert case_a.average == pytest.approx([5.0, 15.0], rel=1e-11)
    case_b = continuous(switched_step_up(STEP_UP), 0.5, 1e-5)
    assert case_b.start == pytest.approx([4.059557217788, 46.526616839341], rel=1e-11)
    assert case_b.average == pytest.approx([4.650390610929, 46.501315044760], rel=1e-11)
    c = Stage(48.0, 0.3, 10.0, l=10e-6, c=220e-6)
    case_c = discontinuous((*switched_step_down(c), idle(c)), c.d, 1e-5, (20.0, 26.0))
    assert case_c.start == pytest.approx([0.0, 23.149123189043], rel=1e-11)
    assert case_c.average == pytest.approx([2.316943851319, 23.169438513188], rel=1e-11)
    d = Stage(24.0, 0.25, 12.0, l=5e-6, c=470e-6)
    case_d = discontinuous((*switched_step_up(d), idle(d)), d.d, 1e-5, (30.0, 42.0))
    assert case_d.start == pytest.approx([0.0, 35.994671419871], rel=1e-11)
    assert case_d.average == pytest.approx([4.499999783756, 35.999997405070], rel=1e-11)


def test_averaged_points_lie_within_the_ripple_of_the_exact_ones() -> None:
    # averages of the exact states above; the averaged model may differ by ripple terms, which fall as 1/f^2
    for topology, stage, i, v, room in (
        ("step-down", Stage(28.0, 15 / 28, 3.0, l=50e-6, c=500e-6), 5.0, 15.0, 1e-9),
        ("step-up", STEP_UP, 4.650390610929, 46.501315044760, 4e-5),
        ("step-down", Stage(48.0, 0.3, 10.0, l=10e-6, c=220e-6), 2.316943851319, 23.169438513188, 4e-4),
        ("step-up", Stage(24.0, 0.25, 12.0, l=5e-6, c=470e-6), 4.499999783756, 35.999997405070, 1e-6),
    ):
        point = settle(topology, stage)
        assert point["choke.i"] == pytest.approx(i, rel=room)
        assert point["v_out"] == pytest.approx(v, rel=room)


@pytest.mark.parametrize("d", [0.15, 0.2, 0.3])
def test_discontinuous_stage_with_losses_is_close_to_exact_switching(d: float) -> None:
    # docs/models.md's claim: with R, r and V_F of a few per cent within 0.4 % of exact switching.
    s = Stage(24.0, d, 12.0, l=5e-6, c=470e-6, r1=0.02, r_on=0.03, r_d=0.02, v_d=0.8)
    exact = discontinuous((*switched_step_up(s), idle(s)), d, 1e-5, (15.0, 60.0))
    point = settle("step-up", s)
    assert point["leg.mode"] == 1
    assert point["v_out"] == pytest.approx(exact.average[1], rel=4e-3)
    assert point["choke.i"] == pytest.approx(exact.average[0], rel=8e-3)


def test_ripple_formulas() -> None:
    # EM 2.4 and 2.5 on the step-down case 28 V, D 15/28, L 50 uH, C 500 uF, 3 ohm, 100 kHz: choke ripple (Vg - V) D/(L f) = 1.392857 A
    # peak to peak; the exact circuit's is 1.392973 A. rms of choke, switch and diode: sqrt(I^2 + ripple^2/12) times 1, sqrt(D), sqrt(D').
    text = """
        reference gnd
        supply: vin --[28 V]-- gnd
        leg: pole(vin, gnd, x, upper_duty = 15/28, rate = 100 kHz, upper = transistor(0 ohm), lower = transistor(0 ohm))
        choke: x --[l: 50 uH]-- out
        store: out --[c: 500 uF]-- gnd
        load: out --[r: 3 ohm]-- gnd
    """
    point = polewise.from_text(text).settled()
    ripple = point["leg.ripple"]
    assert ripple == pytest.approx(1.392857, abs=5e-7)
    assert ripple == pytest.approx(1.392973, rel=1e-4)
    rms = math.sqrt(point["choke.i"] ** 2 + ripple**2 / 12)
    assert rms == pytest.approx(5.0161442586, rel=1e-6)  # exact
    assert math.sqrt(15 / 28) * rms == pytest.approx(3.671441, rel=1e-6)  # figures of the exact waveform
    assert math.sqrt(13 / 28) * rms == pytest.approx(3.417926, rel=1e-6)
    assert ripple / math.sqrt(12) == pytest.approx(0.402117, rel=1e-4)
    assert ripple / (8 * 500e-6 * 100e3) == pytest.approx(3.482143e-3, abs=5e-10)


def test_start_up_of_the_averaged_step_down() -> None:
    # The same case from zero, duty fixed; the averaged model is linear. Ten digits from its exponential.
    text = """
        reference gnd
        supply: vin --[28 V]-- gnd
        leg: pole(vin, gnd, x, upper_duty = 15/28, rate = 100 kHz, upper = transistor(0 ohm), lower = transistor(0 ohm))
        choke: x --[l: 50 uH]-- out
        store: out --[c: 500 uF]-- gnd
        load: out --[r: 3 ohm]-- gnd
        study start_up {
            start cold
            run for 1 ms
            keep out.v, choke.i
            top_v: require peak(out.v) below 30 V
            top_i: require peak(choke.i) below 50 A
        }
    """
    result = polewise.from_text(text).run("start_up", tolerance=1e-10, at=[0.1e-3, 0.497420755884e-3, 0.2571e-3])
    assert result.at("out.v", 0.1e-3) == pytest.approx(2.838339233, abs=5e-9)
    assert result.at("choke.i", 0.1e-3) == pytest.approx(28.071647935, abs=5e-8)
    assert result.at("out.v", 1e-3) == pytest.approx(4.239256195, abs=5e-9)
    assert result.at("out.v", 0.497420755884e-3) == pytest.approx(27.7081469824, rel=1e-9)
    assert result.at("choke.i", 0.2571e-3) == pytest.approx(48.53896663, rel=1e-8)
    # the measure `peak` finds the same tops, between the solver's steps
    tops = result.verdict
    assert tops["top_v"].value == pytest.approx(27.7081469824, rel=1e-7)
    assert tops["top_i"].value == pytest.approx(48.53896663, rel=1e-7)


def test_two_edges_of_a_text_give_one_point() -> None:
    # The order of a path's boxes and of statements does not matter (language principle 6): the same point to rounding.
    text = step_up(STEP_UP)
    lines = text.strip().splitlines()
    shuffled = "\n".join([lines[0], *reversed(lines[1:])]).replace("[rl: 0.05 ohm]--[l: 0.0001 H]", "[l: 0.0001 H]--[rl: 0.05 ohm]")
    assert shuffled != text
    first, second = polewise.from_text(text).settled(), polewise.from_text(shuffled).settled()
    for name in ("v_out", "choke.i", "leg.loss", "supply.p"):
        assert first[name] == pytest.approx(second[name], rel=1e-12)
