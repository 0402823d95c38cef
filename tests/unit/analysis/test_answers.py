"""Responses, loops, impedances, state space and tuning: names, units, refusals, and agreement between independent ways."""

from __future__ import annotations

import numpy as np
import pytest

import polewise

F = np.geomspace(10.0, 20e3, 60)
STAGE = """
    reference gnd
    input reference_v = 12 V
    supply: vin --[24 V]-- gnd
    leg: pole(vin, gnd, x, upper_duty = drive, rate = 100 kHz, upper = transistor(5 mohm), lower = transistor(5 mohm))
    choke: x --[r: 0.1 ohm]--[l: 50 uH]-- out
    store: out --[esr: 30 mohm]--[c: 200 uF]-- gnd
    load: out --[r: 2 ohm]-- gnd
    signal err = reference_v - out.v
    reg: pi_control(err, kp = 0.01 /V, ki = 40 /V/s, low = 0, high = 0.95)
    signal drive = reg + 0.02 /A * (4 A - choke.i)
"""


def test_state_space_agrees_with_the_response() -> None:
    system = polewise.from_text(STAGE)
    space = system.linear(["reference_v", "supply.v"], ["out.v", "choke.i"])
    assert space.inputs == ("reference_v", "supply.v")
    assert space.input_units == ("V", "V")
    assert space.output_units == ("V", "A")
    assert space.pade_order == 0
    assert space.values == pytest.approx((12.0, system.settled()["choke.i"]), rel=1e-9)
    want = system.response(["out.v", "choke.i"], ["reference_v", "supply.v"], F)
    assert space.response(F) == pytest.approx(want, rel=1e-9)
    assert space.explicit().response(F) == pytest.approx(want, rel=1e-9)
    scipy_space = space.to_scipy()
    told = scipy_space.C @ np.linalg.solve(2j * np.pi * F[9] * np.eye(3) - scipy_space.A, scipy_space.B)
    assert told + scipy_space.D == pytest.approx(want[9], rel=1e-9)


def test_state_space_with_a_delay_is_rational_and_says_so() -> None:
    system = polewise.from_text(STAGE.replace("choke.i)", "choke.i) delayed by 5 us"))
    space = system.linear(["reference_v"], ["out.v"])
    assert space.pade_order == 8
    assert space.response(F)[:, 0, 0] == pytest.approx(system.response("out.v", "reference_v", F), rel=1e-6)


def test_loop_gain_equals_the_product_around_it() -> None:
    # Outer loop at reg by hand: plant with the inner loop closed times the controller.
    system = polewise.from_text(STAGE)
    loop = system.loop("reg", F)
    opened = polewise.from_text(
        STAGE.replace("reg: pi_control(err, kp = 0.01 /V, ki = 40 /V/s, low = 0, high = 0.95)", f"latch reg = {system.settled()['reg']!r}")
    )
    s = 2j * np.pi * F
    by_hand = opened.response("out.v", "reg", F) * (0.01 + 40 / s)
    assert loop.gain == pytest.approx(by_hand, rel=1e-8)
    assert np.asarray(loop) == pytest.approx(loop.gain)


def test_loop_at_a_state_and_at_a_reading_of_a_signal_agree() -> None:
    text = """
        reference gnd
        supply: vin --[10 V * integ]-- gnd
        low: vin --[1 kohm]-- out
        bank: out --[1 uF]-- gnd
        d/dt integ = 100 /V/s * (5 V - out.v)  initially 0.5
        signal twin = integ
    """
    system = polewise.from_text(text)
    s = 2j * np.pi * F
    by_hand = 100 / s * 10 / (1 + s * 1e-3)
    assert system.loop("integ", F).gain == pytest.approx(by_hand, rel=1e-9)
    other = polewise.from_text(text.replace("10 V * integ", "10 V * twin"))
    assert other.loop("twin", F).gain == pytest.approx(by_hand, rel=1e-9)
    assert other.loop("twin", F).nyquist.agrees


def test_unstable_open_loop_is_counted() -> None:
    # A negative conductance makes the plant unstable; the loop holds it: P = 1, one encirclement against the clock.
    system = polewise.from_text("""
        reference gnd
        ask: gnd --[drive]-- out
        bank: out --[c: 1 mF]-- gnd
        bad: out --[i = -0.5 S * v]-- gnd
        signal drive = 2 S * (10 V - out.v)
    """)
    loop = system.loop("drive", np.geomspace(1.0, 10e3, 50))
    assert loop.nyquist.open_unstable == 1
    assert loop.nyquist.closed_unstable == 0
    assert round(loop.nyquist.encirclements) == -1
    assert loop.stable


def test_impedance_between_two_nodes_and_at_a_port() -> None:
    system = polewise.from_text("""
        reference gnd
        supply: a --[10 V]-- gnd
        first: a --[r: 3 ohm]-- b
        second: b --[r: 6 ohm]-- gnd
        assembly unit(inp, inn) {
            part: inp --[r: 2 ohm]-- inn
        }
        unit1: unit(b, gnd)
    """)
    f = [1.0, 1e3]
    assert np.asarray(system.impedance("b", f)) == pytest.approx(np.array([1.0, 1.0]))
    assert np.asarray(system.impedance("unit1.inp", f)) == pytest.approx(np.array([1.0, 1.0]))
    assert np.asarray(system.impedance("a to b", f)) == pytest.approx(np.array([1.0, 1.0]))
    z = system.impedance("b", f, load=["unit1"])
    assert z.split.source_impedance == pytest.approx(np.array([2.0, 2.0]))
    assert z.split.load_impedance == pytest.approx(np.array([2.0, 2.0]))
    assert z.passivity.holds


def test_coupling_of_the_sides_is_measured() -> None:
    # The source's voltage follows the load's own current through control: the split means little, and the figure says so.
    text = """
        reference gnd
        supply: a --[48 V - {gain} ohm * draw]-- gnd
        line: a --[r: 0.5 ohm]--[l: 20 uH]-- b
        bank: b --[c: 100 uF]-- gnd
        load: b --[r: 10 ohm]--[l: 50 uH]-- gnd
        signal draw = load.i
    """
    f = np.geomspace(100.0, 10e3, 40)
    alone = polewise.from_text(text.format(gain="0")).impedance("b", f, load=["load"])
    coupled = polewise.from_text(text.format(gain="0.4")).impedance("b", f, load=["load"])
    assert alone.split.coupling_largest < 1e-12
    # By hand, v_s = ... - 0.4 ohm * i_l and i_l = Y_l v_l: at low frequency 0.04 of 1 + 0.5/10.
    assert coupled.split.coupling[0] == pytest.approx(0.04 / 1.05, rel=2e-3)


def test_pair_of_ports_gives_a_matrix_and_its_count() -> None:
    # Two coupled sides, d and q: a rotating R-L source (cross terms +-w L) and a constant-power-like load of negative conductance in d.
    text = """
        reference gnd
        supply_d: sd --[100 V]-- gnd
        supply_q: sq --[0 V]-- gnd
        line_d: sd --[r: 0.1 ohm]--[l: 1 mH]--[x: v = -0.314 ohm * line_q.i]-- d
        line_q: sq --[r: 0.1 ohm]--[l: 1 mH]--[x: v = 0.314 ohm * line_d.i]-- q
        bank_d: d --[c: 500 uF | x: i = -0.157 S * q.v]-- gnd
        bank_q: q --[c: 500 uF | x: i = 0.157 S * d.v]-- gnd
        load_d: d --[i = {d} S * v]-- gnd
        load_q: q --[0.1 S]-- gnd
    """
    f = np.geomspace(1.0, 10e3, 60)
    for d in ("0.1", "-0.25", "-0.6"):
        system = polewise.from_text(text.format(d=d))
        z = system.impedance(["d", "q"], f, load=["load_d", "load_q"])
        assert z.total.shape == (60, 2, 2)
        assert z.split.ratio.shape == (60, 2)
        g, w = float(d), 0.314e3  # x = (i_d, i_q, v_d, v_q) by hand
        a = np.array([[-100, w, -1e3, 0], [-w, -100, 0, -1e3], [2e3, 0, -g * 2e3, w], [0, 2e3, -w, -0.1 * 2e3]])
        assert z.split.nyquist.closed_unstable == np.count_nonzero(np.linalg.eigvals(a).real > 0)
        assert z.split.nyquist.agrees
        s = 2j * np.pi * f
        series = np.array([[0.1 + s * 1e-3, -0.314 + 0 * s], [0.314 + 0 * s, 0.1 + s * 1e-3]]).transpose(2, 0, 1)
        shunt = np.array([[s * 500e-6, -0.157 + 0 * s], [0.157 + 0 * s, s * 500e-6]]).transpose(2, 0, 1)
        by_hand = np.linalg.inv(np.linalg.inv(series) + shunt)
        assert z.split.source_impedance == pytest.approx(by_hand, rel=1e-9, abs=1e-12)


@pytest.mark.parametrize("shape", ["pi", "lead", "one zero", "two zeros"])
def test_tuned_gains_reach_what_was_asked(shape: str) -> None:
    want_hz, want_deg = {"pi": (120.0, 95.0), "lead": (8e3, 50.0), "one zero": (300.0, 100.0), "two zeros": (6e3, 60.0)}[shape]
    text = (
        STAGE
        if shape == "pi"
        else STAGE.replace("reg: pi_control(err, kp = 0.01 /V, ki = 40 /V/s, low = 0, high = 0.95)", "signal reg = err filtered by 1 /V/s * 1 / s")
    )
    # an output capacitor without its series resistance, and no inner loop: nothing but the block is left to turn the phase
    text = text.replace("[esr: 30 mohm]--", "").replace("reg + 0.02 /A * (4 A - choke.i)", "reg" if shape != "lead" else "0.5 + reg")
    system = polewise.from_text(text)
    try:
        tuned = system.tune("reg", error="err", crossover=want_hz, phase_margin=want_deg, shape=shape)
    except polewise.PolewiseError as refusal:
        pytest.fail(str(refusal))
    line = next(row for row in text.splitlines() if "reg:" in row or "signal reg" in row)
    pasted = tuned.text
    loop = polewise.from_text(text.replace(line, "    " + pasted)).loop("drive", np.geomspace(1.0, 100e3, 60))
    assert min(abs(c.frequency_hz / want_hz - 1) for c in loop.margins.crossovers) < 1e-3
    at = min(loop.margins.crossovers, key=lambda c: abs(c.frequency_hz - want_hz))
    assert at.phase_margin_deg == pytest.approx(want_deg, abs=0.1)
    assert tuned.stable[0] == loop.stable


def test_k_factor_table() -> None:
    # Venable 1983: boost 30, 60 deg with one pair: 1.732051, 3.732051; 60, 120 deg with two: 3, 13.928203.
    from polewise.analysis.tune import k_factor

    assert [k_factor(30, 1), k_factor(60, 1), k_factor(60, 2), k_factor(120, 2)] == pytest.approx([1.732051, 3.732051, 3.0, 13.928203], abs=5e-7)


def test_refusals_are_sentences() -> None:
    system = polewise.from_text(STAGE)
    with pytest.raises(polewise.PolewiseError, match="follows from other quantities"):
        system.response("out.v", "choke.i", F)
    with pytest.raises(polewise.PolewiseError, match="no_such"):
        system.loop("no_such", F)
    with pytest.raises(polewise.PolewiseError, match="does not touch"):
        system.impedance("out", F, load=["supply"])
    with pytest.raises(polewise.PolewiseError, match="turn the phase"):
        system.tune("reg", crossover=20e3, phase_margin=120.0)


def test_tuned_text_is_the_netlists_own_statement() -> None:
    system = polewise.from_text(
        """
        reference gnd
        supply: vin --[48 V]-- gnd
        leg: pole(vin, gnd, x, duty = i_reg, rate = 100 kHz, upper = transistor(10 mohm), lower = diode(0.5 V, 8 mohm))
        choke: x --[rl: 5 mohm]--[l: 22 uH]-- out
        cap: out --[esr: 2 mohm]--[c: 1 mF]-- gnd
        load: out --[3 ohm]-- gnd
        i_reg: pi_control(10 A - choke.i, kp = 0.02 /A, ki = 150 /A/s, low = 0, high = 0.95)
        """
    )
    text = system.tune("i_reg", crossover=7e3, phase_margin=60.0).text
    assert text.startswith("i_reg: pi_control(10 A - choke.i, kp = ")
    assert text.endswith(", low = 0, high = 0.95)")
    assert "0.02 /A," not in text


def test_a_limit_that_no_root_crosses_is_closed_in_on() -> None:
    # The voltage loop asks for at most 30 A, so the stage carries 12 V * 30 A whatever its margins: beyond, nothing regulates.
    system = polewise.from_text(
        """
        reference gnd
        supply: vin --[48 V]-- gnd
        leg: pole(vin, gnd, x, duty = i_reg, rate = 100 kHz, upper = transistor(10 mohm), lower = diode(0.5 V, 8 mohm))
        choke: x --[rl: 5 mohm]--[l: 22 uH]-- out
        cap: out --[esr: 2 mohm]--[c: 1 mF]-- gnd
        board: out --[demand above 6 V]-- gnd
        latch demand = 60 W
        v_reg: pi_control(12 V - out.v, kp = 15 A/V, ki = 25000 A/V/s, low = 0 A, high = 30 A)
        i_reg: pi_control(v_reg - choke.i, kp = 0.02 /A, ki = 150 /A/s, low = 0, high = 0.95)
        """
    )
    limit = system.stability_limit("demand", 10.0, 5000.0)
    assert limit.value == pytest.approx(360.0, rel=1e-6)


def test_one_compensator_for_two_operating_points() -> None:
    # The choke of a step-up stage meets its right-half-plane zero at a frequency that falls with the load: what is exact at light load is
    # too fast at heavy load, and the smallest margin of both can only gain by looking at both.
    text = """
    reference gnd
    supply: vin --[24 V]-- gnd
    choke: vin --[rl: 20 mohm]--[l: 47 uH]-- x
    leg: pole(out, gnd, x, lower_duty = reg, rate = 200 kHz, upper = transistor(5 mohm), lower = transistor(5 mohm))
    store: out --[esr: 5 mohm]--[c: 470 uF]-- gnd
    load: out --[drawn]-- gnd
    latch drawn = 40 ohm
    signal err = 0.01 /V * (48 V - out.v)
    signal reg = err filtered by 60 /s / s
    study heavier {
        start settled
        run for 400 ms
        at 1 ms: set drawn = 8 ohm
    }
    """
    places = [None, ("heavier", 0.4)]
    system = polewise.from_text(text)
    wanted = {"error": "err", "crossover": 1.2e3, "phase_margin": 50.0, "shape": "two zeros"}
    alone, both = system.tune("reg", **wanted), system.tune("reg", at=places, **wanted)
    assert alone.phase_margin_deg == pytest.approx(50.0, abs=0.1)
    assert len(both.margins) == 2
    assert all(both.stable)

    def smallest(pasted: str) -> float:
        row = "signal reg = err filtered by 60 /s / s"
        placed = polewise.from_text(text.replace(row, pasted))
        return min(placed.loop("reg", np.geomspace(10.0, 50e3, 200), at=place).margins.phase_margin_deg for place in places)

    assert smallest(both.text) == pytest.approx(both.phase_margin_deg, abs=0.1)
    assert both.phase_margin_deg >= smallest(alone.text) - 1e-6
