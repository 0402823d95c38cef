"""Events: times to 1e-9, the order of things at one instant, charge and flux kept through jumps, conduction that starts and stops."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.optimize import brentq

import polewise


def run(text: str, study: str = "go", **how) -> polewise.Result:
    return polewise.from_text(text).run(study, **how)


def times(result: polewise.Result) -> list[float]:
    return [entry.time_s for entry in result.events]


# ---------------------------------------------------------------- when


def test_threshold_crossings_of_a_charging_capacitor() -> None:
    # 1 kohm, 1 uF to 10 V passes 5 V at ln 2 ms = 0.6931471806 ms, 7 V at -ln 0.3 ms = 1.2039728043 ms (elementary).
    result = run(
        """
        reference gnd
        supply: a --[10 V]-- gnd
        charge: a --[r: 1 kohm]-- b
        store: b --[1 uF initially 0 V]-- gnd
        latch half = 0 s
        latch more = 0 s
        whenever b.v rises above 5 V: set half = time
        whenever b.v > 7 V: set more = time
        study go {
            start cold
            run for 3 ms
            keep half, more
        }
        """,
        tolerance=1e-9,
    )
    exact = [-math.log(0.5) * 1e-3, -math.log(0.3) * 1e-3]
    assert exact == pytest.approx([0.6931471806e-3, 1.2039728043e-3], rel=1e-10)
    assert times(result) == pytest.approx(exact, rel=1e-9)
    assert [result["half"][-1], result["more"][-1]] == pytest.approx(exact, rel=1e-9)


@pytest.mark.parametrize("tolerance", [1e-6, 1e-9])
def test_crossings_of_an_oscillation_both_ways(tolerance: float) -> None:
    # L C ring from 10 V: v = 10 cos(w t) crosses 3 V falling at acos(0.3)/w + 2 pi n/w, rising at -acos(0.3)/w + 2 pi n/w.
    result = run(
        """
        reference gnd
        store: a --[10 uF initially 10 V]-- gnd
        coil: a --[1 mH]-- gnd
        latch down = 0
        latch up = 0
        whenever a.v falls below 3 V: set down = down + 1
        whenever a.v rises above 3 V: set up = up + 1
        study go {
            start cold
            run for 2 ms
            keep down, up
        }
        """,
        tolerance=tolerance,
    )
    w = 1 / math.sqrt(1e-3 * 10e-6)
    exact = sorted([(math.acos(0.3) + 2 * math.pi * n) / w for n in range(4)] + [(2 * math.pi * n - math.acos(0.3)) / w for n in range(1, 4)])
    exact = [t for t in exact if t < 2e-3]
    assert len(times(result)) == len(exact)
    # the solution itself is only as good as its tolerance; the location adds nothing to that
    assert times(result) == pytest.approx(exact, rel=max(1e-9, 10 * tolerance))


def test_crossings_of_a_stated_waveform_are_exact() -> None:
    # 10 V sin(2 pi 50 Hz t) passes 5 V upwards at 1/600 s after each zero, whatever the tolerance.
    result = run(
        """
        reference gnd
        hum: a --[10 V * sin(2*pi * 50 Hz * time)]-- gnd
        load: a --[r: 1 ohm]--[l: 1 mH]-- gnd
        latch n = 0
        whenever a.v rises above 5 V: set n = n + 1
        study go {
            start cold
            run for 100 ms
            keep n
        }
        """,
        tolerance=1e-5,
    )
    assert times(result) == pytest.approx([0.02 * k + 1 / 600 for k in range(5)], rel=1e-9)


def test_a_condition_that_must_last() -> None:
    # a triangle of 4 ms period: above 1 V for 2 ms each, below for 2 ms; `for 1.5 ms` fires, `for 2.5 ms` never does
    result = run(
        """
        reference gnd
        table wave(t in s) in V = (0 s, 0 V) (1 ms, 1 V) (2 ms, 2 V) (3 ms, 1 V) (4 ms, 0 V) repeat
        drive: a --[wave(time)]-- gnd
        load: a --[1 ohm]-- gnd
        latch n = 0
        latch never = 0
        whenever a.v rises above 1 V for 1.5 ms: set n = n + 1
        whenever a.v rises above 1 V for 2.5 ms: set never = 1
        study go {
            start cold
            run for 12 ms
            keep n, never
        }
        """
    )
    assert times(result) == pytest.approx([2.5e-3, 6.5e-3, 10.5e-3], rel=1e-9)
    assert result["n"][-1] == 3
    assert result["never"][-1] == 0


def test_pre_charge_sequence_on_time() -> None:
    # 20 ohm, 1 mF, 400 V: 95 % at 59.914645471 ms; until then 79.8 J of the 80 J have gone into the resistor (elementary).
    result = run(
        """
        reference gnd
        supply: src --[400 V]-- gnd
        pre: src --[k: breaker(false, closed = 1 uohm)]--[r: 20 ohm - 1 uohm]-- bus
        main: src --[k: breaker(false, open = 1 Gohm)]--[r: 1 ohm]-- bus
        bank: bus --[1 mF initially 0 V]-- gnd
        d/dt heat = pre.r.p  initially 0 J  held
        latch heat_then = 0 J
        whenever start_up.connect: set heat_then = heat
        sequence start_up {
            step charge  { close pre.k } until bus.v > 0.95 * src.v else fault after 500 ms
            step connect { close main.k } until after 20 ms
            step run     { open pre.k }
            step fault   { open pre.k; open main.k }
        }
        study go {
            start cold
            run for 100 ms
            keep heat_then, start_up.run
        }
        """,
        tolerance=1e-9,
    )
    joined = 20e-3 * math.log(20)
    assert joined == pytest.approx(59.914645471e-3, rel=1e-10)
    # the other breaker leaks 1e-9 of the resistor's conductance times 20
    assert any(t == pytest.approx(joined, rel=5e-8) for t in times(result))
    assert any(t == pytest.approx(joined + 20e-3, rel=5e-8) for t in times(result))
    assert result["heat_then"][-1] == pytest.approx(79.8, rel=1e-6)
    assert result["start_up.run"][-1] == 1


def test_time_events_and_clocks_are_hit_exactly() -> None:
    result = run(
        """
        latch n = 0
        latch mark = 0
        every 100 us: set n = n + 1
        study go {
            start cold
            run for 1.05 ms
            at 0.3 ms: set mark = 1
            at 1/3 * 1 ms: set mark = 2
            keep n, mark
        }
        """
    )
    # `every` acts at 0, T, 2T, …: eleven times up to 1.05 ms, three times plus one before 0.35 ms
    assert result["n"][-1] == 11
    assert result.at("n", 0.349e-3) == 4
    assert {0.3e-3, 1e-3 / 3} <= set(times(result))
    assert result.at("mark", [0.29e-3, 0.31e-3, 0.33e-3, 0.34e-3]) == pytest.approx([0, 1, 1, 2])


# ---------------------------------------------------------------- at one instant


def test_all_actions_of_one_instant_apply_together() -> None:
    # both orders of the text: each latch gets the other's value from just before
    for first, second in (("p1", "p2"), ("p2", "p1")):
        lines = {"p1": "at 1 ms: set p1 = p2", "p2": "at 1 ms: set p2 = p1"}
        result = run(
            f"""
            latch p1 = 3
            latch p2 = 5
            study go {{
                start cold
                run for 2 ms
                {lines[first]}
                {lines[second]}
                keep p1, p2
            }}
            """
        )
        assert [result["p1"][-1], result["p2"][-1]] == [5, 3]


def test_time_event_clock_and_sampler_of_one_instant() -> None:
    # At 2 ms: the sampler takes the circuit's value from just before, `every` and `at` read that sample and the old latches, together.
    result = run(
        """
        latch source = 1
        latch by_clock = 0
        latch by_time = 0
        signal seen = source sampled at 1 kHz
        every 1 ms: set by_clock = seen + 10 * source
        study go {
            start cold
            run for 3.5 ms
            at 2 ms { set source = 7; set by_time = seen + 100 * by_clock }
            keep seen, by_clock, by_time
        }
        """
    )
    assert result.at("by_clock", [0.5e-3, 2.5e-3, 3.4e-3]) == pytest.approx([11, 11, 77])
    assert result["by_time"][-1] == 1 + 100 * 11
    assert result.at("seen", [2.5e-3, 3.4e-3]) == pytest.approx([1, 7])


def test_two_values_for_one_target_are_an_error() -> None:
    text = """
        latch x = 0
        study go {{
            start cold
            run for 2 ms
            at 1 ms: set x = 1
            at 1 ms: set x = {second}
            keep x
        }}
    """
    with pytest.raises(polewise.PolewiseError) as caught:
        run(text.format(second="2"))
    assert "x" in str(caught.value)
    assert getattr(caught.value, "time_s", 1e-3) in (None, 1e-3)


def test_conditions_fire_in_rounds_until_all_is_quiet() -> None:
    # one push starts a chain of forty; each link sees the latch the one before set, all at one instant
    links = "\n".join(f"latch c{k} = 0\nwhenever c{k - 1} > 0.5: set c{k} = 1" for k in range(1, 41))
    result = run(
        f"""
        latch c0 = 0
        {links}
        study go {{
            start cold
            run for 2 ms
            at 1 ms: set c0 = 1
            keep c40
        }}
        """
    )
    assert result["c40"][-1] == 1
    assert set(times(result)) == {1e-3}
    assert len(times(result)) == 41


def test_rounds_without_end_are_an_error() -> None:
    with pytest.raises(polewise.SolverError) as caught:
        run(
            """
            latch flip = 0
            whenever flip > 0.5: set flip = 0
            whenever flip < 0.5: set flip = 1
            study go {
                start cold
                run for 2 ms
                keep flip
            }
            """
        )
    assert "1000" in str(caught.value).replace(",", "").replace(" ", "") or "without end" in str(caught.value)


def test_a_relay_without_hysteresis_is_reported_not_looped_on() -> None:
    with pytest.raises(polewise.SolverError) as caught:
        run(
            """
            d/dt x = (-1 /s if x > 0 otherwise 1 /s)  initially 1
            study go {
                start cold
                run for 3 s
                keep x
            }
            """
        )
    assert caught.value.time_s == pytest.approx(1.0, rel=1e-6)  # that is when x first reaches zero


def test_a_relay_with_hysteresis_keeps_time() -> None:
    # x falls from 1 to -1 at 1/s, rises back to +1: legs of 2 s after the first second
    result = run(
        """
        latch rate = -1
        d/dt x = rate / 1 s  initially 0
        whenever x falls below -1: set rate = 1
        whenever x rises above 1: set rate = -1
        study go {
            start cold
            run for 10 s
            keep x
        }
        """
    )
    assert times(result) == pytest.approx([1, 3, 5, 7, 9], rel=1e-9)
    assert result["x"][-1] == pytest.approx(0.0, abs=1e-9)


def test_an_event_restarts_a_state() -> None:
    result = run(
        """
        d/dt x = 1 /s
        whenever x rises above 2: set x = x - 1.5
        study go {
            start cold
            run for 6 s
            keep x
        }
        """
    )
    assert times(result) == pytest.approx([2, 3.5, 5], rel=1e-9)
    assert result["x"][-1] == pytest.approx(1.5, rel=1e-9)


# ---------------------------------------------------------------- charge and flux


def around(result: polewise.Result, name: str, time: float) -> tuple[float, float]:
    """Values just before and just after a jump."""
    at = np.flatnonzero(result.time == time)
    assert len(at) >= 2
    values = result[name]
    return float(values[at[0]]), float(values[at[-1]])


def test_charge_is_kept_when_a_source_steps_across_a_loop_of_capacitors() -> None:
    # Source, 1 uF and 3 uF in a loop: the middle node's charge 3u v_m - 1u (v_s - v_m) cannot jump, so v_m jumps by 10 V * 1/(1 + 3);
    # then 1 kohm drains it with (1 + 3) uF * 1 kohm = 4 ms.
    result = run(
        """
        reference gnd
        supply: a --[volts]-- gnd
        top: a --[1 uF]-- m
        bottom: m --[3 uF]-- gnd
        leak: m --[r: 1 kohm]-- gnd
        latch volts = 0 V
        study go {
            start cold
            run for 9 ms
            at 1 ms: set volts = 10 V
            at 5 ms: set volts = 4 V
            keep m.v, a.v, bottom.i, top.i, supply.i
        }
        """,
        tolerance=1e-9,
    )
    assert around(result, "m.v", 1e-3) == pytest.approx((0.0, 2.5), abs=1e-12)
    before = 2.5 * math.exp(-1)
    assert around(result, "m.v", 5e-3) == pytest.approx((before, before - 1.5), rel=1e-9)
    end = (before - 1.5) * math.exp(-1)
    assert result["m.v"][-1] == pytest.approx(end, rel=1e-8)
    # between the jumps the capacitors' currents follow from dv/dt = -v/(4 ms)
    t = np.array([3e-3])
    slope = -2.5 * math.exp(-0.5) / 4e-3
    assert result.at("bottom.i", t) == pytest.approx(3e-6 * slope, rel=1e-6)
    assert result.at("top.i", t) == pytest.approx(-1e-6 * slope, rel=1e-6)


def test_charge_is_kept_in_a_loop_with_a_nonlinear_capacitor() -> None:
    # q(v) = 1 uF (1 + (v/10 V)^2) v above, 3 uF below: 3u v_m - q(v_s - v_m) is the same before and after the source's step to 30 V
    result = run(
        """
        reference gnd
        supply: a --[volts]-- gnd
        top: a --[c: 1 uF * (1 + ((a.v - m.v) / 10 V)^2)]-- m
        bottom: m --[3 uF]-- gnd
        latch volts = 0 V
        study go {
            start cold
            run for 2 ms
            at 1 ms: set volts = 30 V
            keep m.v
        }
        """
    )
    wanted = brentq(lambda m: 3 * m - (1 + ((30 - m) / 10) ** 2) * (30 - m), 0, 30, xtol=1e-13)
    assert around(result, "m.v", 1e-3)[1] == pytest.approx(wanted, rel=1e-9)
    assert result["m.v"][-1] == pytest.approx(wanted, rel=1e-9)


def test_flux_is_kept_when_a_current_steps_between_inductors_in_series() -> None:
    # 2 mH from a 5 V source to node n, 3 mH on to ground behind 1 ohm, J into n: i2 = i1 + J. The loop's flux 2m i1 + 3m i2 cannot jump:
    # i1 jumps by -3/5 J. Then (L1 + L2) i' = 5 V - R i2.
    result = run(
        """
        reference gnd
        supply: a --[5 V]-- gnd
        first: a --[l1: 2 mH]-- n
        second: n --[l2: 3 mH]--[r: 1 ohm]-- gnd
        push: gnd --[amps]-- n
        latch amps = 0 A
        study go {
            start settled
            run for 20 ms
            at 5 ms: set amps = 10 A
            keep first.i, second.i, n.v
        }
        """,
        tolerance=1e-9,
    )
    assert around(result, "first.i", 5e-3) == pytest.approx((5.0, -1.0), rel=1e-9)
    assert around(result, "second.i", 5e-3) == pytest.approx((5.0, 9.0), rel=1e-9)
    t = result.time[result.time > 5e-3] - 5e-3
    np.testing.assert_allclose(result["second.i"][result.time > 5e-3], 5 + 4 * np.exp(-t / 5e-3), rtol=1e-8)
    # node n: v_n = 5 V - L1 di/dt, di/dt = (5 - i2)/5m
    np.testing.assert_allclose(result["n.v"][result.time > 5e-3], 5 + 2 / 5 * 4 * np.exp(-t / 5e-3), rtol=1e-7)


def test_charge_and_flux_are_kept_when_the_element_itself_changes() -> None:
    # A capacitance that doubles at once halves its voltage, an inductance that doubles halves its current.
    result = run(
        """
        reference gnd
        latch size = 1
        store: a --[c: 1 uF * size initially 8 V]-- gnd
        leak: a --[r: 1 kohm]-- gnd
        coil: b --[l: 1 mH * size initially 6 A]-- gnd
        short: b --[r: 1 ohm]-- gnd
        study go {
            start cold
            run for 2 ms
            at 1 ms: set size = 2
            keep a.v, coil.i
        }
        """,
        tolerance=1e-9,
    )
    v = 8 * math.exp(-1)  # both have a time constant of 1 ms
    assert around(result, "a.v", 1e-3) == pytest.approx((v, v / 2), rel=1e-9)
    i = 6 * math.exp(-1)
    assert around(result, "coil.i", 1e-3) == pytest.approx((i, i / 2), rel=1e-9)


def test_two_capacitors_joined() -> None:
    # 100 uF at 400 V and 50 uF at 100 V: 300 V, 1.5 J lost whatever the resistance, charge kept (elementary).
    for ohms in ("1 ohm", "10 mohm"):
        result = run(
            f"""
            reference gnd
            left: a --[100 uF initially 400 V]-- gnd
            join: a --[k: breaker(false, open = 1 Gohm)]--[r: {ohms}]-- b
            right: b --[50 uF initially 100 V]-- gnd
            d/dt lost = join.p  initially 0 J  held
            signal charge = 100 uF * a.v + 50 uF * b.v
            study go {{
                start cold
                run for 5 ms
                at 1 ms: close join.k
                keep a.v, b.v, lost, charge
            }}
            """,
            tolerance=1e-9,
        )
        # before, 1 Gohm leaks for a millisecond: 300 V/1 Gohm * 1 ms = 0.3 nC of 45 mC
        assert result["a.v"][-1] == pytest.approx(300.0, rel=1e-8)
        assert result["b.v"][-1] == pytest.approx(300.0, rel=1e-8)
        assert result["lost"][-1] == pytest.approx(1.5, rel=1e-6)
        np.testing.assert_allclose(result["charge"], 45e-3, rtol=1e-12)


# ---------------------------------------------------------------- conduction starts and stops


def test_step_up_at_duty_zero_charges_its_output_through_the_diode() -> None:
    # L and C ring from 0 through the diode: v = (Vg - V_F)(1 - cos(w t)), i = (Vg - V_F) C w sin(w t) until the current is gone at pi/w,
    # where v = 2 (Vg - V_F); then the pole blocks and the output stays.
    result = run(
        """
        reference gnd
        supply: vin --[200 V]-- gnd
        choke: vin --[l: 220 uH]-- x
        leg: pole(out, gnd, x, duty = 0, rate = 40 kHz, upper = diode(0.9 V), lower = transistor(0 ohm))
        store: out --[c: 470 uF initially 0 V]-- gnd
        study go {
            start cold
            run for 3 ms
            keep out.v, choke.i, leg.mode
        }
        """,
        tolerance=1e-9,
    )
    w = 1 / math.sqrt(220e-6 * 470e-6)
    t = result.time
    conducting = t <= math.pi / w
    np.testing.assert_allclose(result["out.v"][conducting], 199.1 * (1 - np.cos(w * t[conducting])), rtol=0, atol=4e-6)
    assert np.max(result["choke.i"]) == pytest.approx(199.1 * 470e-6 * w, rel=1e-3)
    np.testing.assert_allclose(result["out.v"][~conducting], 398.2, rtol=1e-8)
    assert np.min(result["choke.i"]) > -1e-6
    np.testing.assert_allclose(result["choke.i"][t > 1.001 * math.pi / w], 0.0, atol=1e-9)
    # the mode changes at the instant the current vanishes
    blocked = t[np.flatnonzero(result["leg.mode"] == 0)]
    assert blocked[0] == pytest.approx(math.pi / w, rel=1e-8)


def test_step_down_into_a_battery_blocks_when_its_transistor_stops() -> None:
    # On: i at rest (d Vg - (1 - d) V_F - E)/r. Off: L i' = -(E + V_F) - r i: gone after L/r ln(1 + r i/(E + V_F)); then nothing flows back.
    result = run(
        """
        reference gnd
        supply: vin --[60 V]-- gnd
        leg: pole(vin, gnd, x, duty = drive, rate = 50 kHz, upper = transistor(0 ohm), lower = diode(0.6 V))
        choke: x --[rl: 50 mohm]--[l: 47 uH]-- out
        pack: out --[24 V]-- gnd
        latch drive = 0.45
        study go {
            start settled
            run for 10 ms
            at 2 ms: set drive = 0
            at 6 ms: set drive = 0.45
            keep choke.i, leg.mode, x.v
        }
        """,
        tolerance=1e-9,
    )
    on = (0.45 * 60 - 0.55 * 0.6 - 24) / 0.05
    assert result["choke.i"][0] == pytest.approx(on, rel=1e-9)
    gone = 2e-3 + 47e-6 / 0.05 * math.log(1 + 0.05 * on / 24.6)
    t = result.time
    falling = (t > 2e-3) & (t < gone)
    wanted = (on + 24.6 / 0.05) * np.exp(-(t[falling] - 2e-3) * 0.05 / 47e-6) - 24.6 / 0.05
    np.testing.assert_allclose(result["choke.i"][falling], wanted, rtol=0, atol=1e-6)
    off = (t > gone * 1.0001) & (t < 6e-3)
    np.testing.assert_allclose(result["choke.i"][off], 0.0, atol=1e-9)
    assert set(result["leg.mode"][off]) == {0}
    np.testing.assert_allclose(result["x.v"][off], 24.0, rtol=1e-9)  # an open mid floats at the far end
    assert np.min(result["choke.i"]) > -1e-6
    blocked = t[np.flatnonzero(result["leg.mode"] == 0)]
    assert blocked[0] == pytest.approx(gone, rel=1e-8)
    assert result["choke.i"][-1] == pytest.approx(on, rel=2e-2)  # and on again: L/r is 0.94 ms


def test_free_wheeling_into_a_collapsed_output() -> None:
    # Output shorted by 1 mohm: the diode is driven on all the time, the pole is continuous although little current is asked for.
    point = polewise.from_text(
        """
        reference gnd
        supply: vin --[48 V]-- gnd
        leg: pole(vin, gnd, x, duty = 0.001, rate = 100 kHz, upper = transistor(0 ohm), lower = diode(0 V))
        choke: x --[rl: 10 mohm]--[l: 10 uH]-- out
        load: out --[r: 1 mohm]-- gnd
        """
    ).settled()
    # K = 2 L f/R with all resistance at the far side is huge: V = d Vg over 11 mohm, 1/11 of it at the output
    assert point["leg.mode"] == 2
    assert point["choke.i"] == pytest.approx(0.048 / 0.011, rel=1e-9)


def test_load_step_takes_the_stage_out_of_and_back_into_discontinuous_conduction() -> None:
    # A ramp of the load's current from 1 A to 6 A: the ideal step-down leaves discontinuous conduction where its choke current reaches half
    # the ripple: (Vg - V) d/(2 L f), V = d Vg. Slow against L and C (tau of a millisecond), so V has settled to within the ramp's own lag.
    result = run(
        """
        reference gnd
        supply: vin --[48 V]-- gnd
        leg: pole(vin, gnd, x, duty = 0.5, rate = 100 kHz, upper = transistor(0 ohm), lower = diode(0 V))
        choke: x --[l: 20 uH]-- out
        store: out --[c: 47 uF]-- gnd
        load: out --[draw]-- gnd
        table ramp(t in s) in A = (0 s, 1 A) (5 s, 6 A) (10 s, 1 A) hold
        signal draw = ramp(time)
        damp: out --[r: 1 ohm]--[c: 470 uF]-- gnd
        study go {
            start cold
            run for 10 s
            keep leg.mode, choke.i, out.v
        }
        """,
        tolerance=1e-7,
    )
    late = result.time > 0.5
    changes = result.time[late][np.flatnonzero(np.diff(result["leg.mode"][late])) + 1]
    border = 24 * 0.5 / (2 * 20e-6 * 100e3)  # 3 A, reached after 2 s and again at 8 s
    assert changes == pytest.approx([border - 1, 10 - (border - 1)], abs=2e-2)
