"""Control blocks and memory words against closed forms: filters in s and z, delays, sliding averages, sampled loops, tuned loops."""

from __future__ import annotations

import numpy as np
import pytest

import polewise


def run(text: str, study: str = "run_in", **how) -> polewise.Result:
    return polewise.from_text(text).run(study, **how)


# ---------------------------------------------------------------- sliding average

# sin(pi f T)/(pi f T) and phase -180 deg f T of the sliding average over T, computed from the formula.
AVERAGE = [(0.1, 0.983631643, 18.0), (0.25, 0.900316316, 45.0), (1 / 3, 0.826993343, 60.0), (0.5, 0.636619772, 90.0), (1.0, 0.0, 180.0)]


@pytest.mark.parametrize(("share", "gain", "lag_deg"), AVERAGE)
def test_sliding_average_of_a_sine(share: float, gain: float, lag_deg: float) -> None:
    window, f = 10e-3, share / 10e-3
    result = run(
        f"""
        reference gnd
        hum: a --[10 V * sin(2*pi * {f!r} Hz * time)]-- gnd
        load: a --[1 ohm]-- gnd
        signal mean = a.v averaged over 10 ms
        study run_in {{
            start cold
            run for 60 ms
            keep mean
        }}
        """,
        tolerance=1e-9,
    )
    t = result.time[result.time > window]
    wanted = 10 * gain * np.sin(2 * np.pi * f * t - np.radians(lag_deg))
    np.testing.assert_allclose(result.at("mean", t), wanted, rtol=0, atol=1e-5)  # 1e-6 of the amplitude


def test_averages_obey_linear_laws_and_products_do_not() -> None:
    # Exactly: mean of C dv/dt is C (v(t) - v(t - T))/T; mean of v = R i of the mean (Sanders, Noworolski, Liu & Verghese 1991).
    # A product is not the product of means: v^2/R of a sine on 10 V.
    result = run(
        """
        reference gnd
        hum: a --[10 V + 4 V * sin(2*pi * 300 Hz * time)]-- gnd
        path: a --[r: 5 ohm]--[c: 100 uF]-- gnd
        heat: a --[r: 2 ohm]-- gnd
        signal v_c = path.c.v
        signal v_c_old = v_c delayed by 1 ms
        signal mean_i = path.i averaged over 1 ms
        signal mean_v = path.r.v averaged over 1 ms
        signal mean_p = heat.p averaged over 1 ms
        signal mean_a = a.v averaged over 1 ms
        study run_in {
            start cold
            run for 10 ms
            keep v_c, v_c_old, mean_i, mean_v, mean_p, mean_a
        }
        """,
        tolerance=1e-9,
    )
    late = result.time > 1.001e-3
    by_ends = 100e-6 * (result["v_c"] - result["v_c_old"]) / 1e-3
    np.testing.assert_allclose(result["mean_i"][late], by_ends[late], rtol=0, atol=1e-7)
    np.testing.assert_allclose(result["mean_v"], 5 * result["mean_i"], rtol=0, atol=1e-9)
    difference = result["mean_p"][late] - result["mean_a"][late] ** 2 / 2
    assert np.max(difference) > 1.0  # W: the ripple's own heat


# ---------------------------------------------------------------- delays


def test_delayed_sine_keeps_its_shape() -> None:
    # Phase -360 deg f tau (e.g. Buso & Mattavelli 2006): 1.5 periods of 10 kHz turn 500 Hz by 27 deg;
    # before the start the signal is at its start value.
    result = run(
        """
        reference gnd
        hum: a --[sin(2*pi * 500 Hz * time) * 1 V]-- gnd
        load: a --[1 ohm]-- gnd
        signal late = a.v delayed by 150 us
        study run_in {
            start cold
            run for 8 ms
            keep late
        }
        """,
        tolerance=1e-9,
    )
    t = result.time[result.time > 150e-6]
    np.testing.assert_allclose(result.at("late", t), np.sin(2 * np.pi * 500 * t - np.radians(27.0)), rtol=0, atol=1e-6)
    assert np.max(np.abs(result["late"][result.time < 149e-6])) < 1e-12


def test_delay_equation_by_the_method_of_steps() -> None:
    # x' = -x(t - T)/T with x = 1 before 0: on [0, T] 1 - u, on [T, 2T] 1 - u + (u - 1)^2/2, then - (u - 2)^3/6 more (u = t/T).
    result = run(
        """
        d/dt x = -late / 1 ms  initially 1
        signal late = x delayed by 1 ms
        study run_in {
            start cold
            run for 4 ms
            keep x
        }
        """,
        tolerance=1e-9,
    )
    u = result.time / 1e-3
    wanted = 1 - u + np.maximum(u - 1, 0) ** 2 / 2 - np.maximum(u - 2, 0) ** 3 / 6 + np.maximum(u - 3, 0) ** 4 / 24
    np.testing.assert_allclose(result["x"], wanted, rtol=0, atol=1e-8)


# ---------------------------------------------------------------- filters


def test_filters_in_s_follow_their_step_responses() -> None:
    # 1/(1 + s T): 1 - e^(-t/T). (1 + 3 s T)/(1 + s T): 1 + 2 e^(-t/T). 1/(1 + 2 z s T + (s T)^2), z = 1/2: damped sine. 1/(s T): a ramp.
    result = run(
        """
        latch u = 0
        signal lag  = u filtered by 1 / (1 + s * 1 ms)
        signal lead = u filtered by (1 + 3 * s * 1 ms) / (1 + s * 1 ms)
        signal swing = u filtered by 1 / (1 + s * 1 ms + s^2 * 1 ms * 1 ms)
        signal ramp = u filtered by 1 / (s * 1 ms)
        signal both = u filtered by (2 + s * 1 ms) / (s * 1 ms * (1 + s * 1 ms))
        study run_in {
            start cold
            run for 10 ms
            at 1 ms: set u = 1
            keep lag, lead, swing, ramp, both
        }
        """,
        tolerance=1e-9,
    )
    t = result.time[result.time > 1e-3] / 1e-3 - 1
    fall = np.exp(-t)
    w = np.sqrt(3) / 2
    wanted = {
        "lag": 1 - fall,
        "lead": 1 + 2 * fall,
        "swing": 1 - np.exp(-t / 2) * (np.cos(w * t) + np.sin(w * t) / np.sqrt(3)),
        "ramp": t,
        "both": 2 * t - 1 + fall,  # (2 + s)/(s^2 (1 + s)) = 2/s^2 - 1/s + 1/(1 + s)
    }
    for name, values in wanted.items():
        np.testing.assert_allclose(result[name][result.time > 1e-3], values, rtol=1e-8, atol=1e-8, err_msg=name)
        assert np.max(np.abs(result[name][result.time < 1e-3])) == 0.0


def test_filter_in_z_is_its_recursion() -> None:
    # y[k] = 0.9 y[k-1] + 0.3 x[k] - 0.1 x[k-1] with x[k] = x(k T), held in between.
    result = run(
        """
        reference gnd
        hum: a --[1 V * sin(2*pi * 70 Hz * time)]-- gnd
        load: a --[1 ohm]-- gnd
        signal digital = a.v / 1 V sampled at 1 kHz filtered by (0.3 - 0.1*z^-1) / (1 - 0.9*z^-1) in z at 1 kHz
        study run_in {
            start cold
            run for 30.5 ms
            keep digital
        }
        """
    )
    y, before = 0.0, 0.0
    for k in range(31):
        x = np.sin(2 * np.pi * 70 * k * 1e-3)
        y, before = 0.9 * y + 0.3 * x - 0.1 * before, x
        assert result.at("digital", k * 1e-3 + 0.4e-3) == pytest.approx(y, abs=1e-12), k


# ---------------------------------------------------------------- sampled loops

# Current of a choke under sampled proportional control with one period of computing delay, k = Kp T/L = 1/3: unit step, z^2 - z + k = 0.
SEQUENCE = [0, 0, 0.333333, 0.666667, 0.888889, 1, 1.037037, 1.037037, 1.024691, 1.012346, 1.004115, 1, 0.998628]
WRITTEN_LOOPS = {
    "latches": """
        latch drive = 0 V
        latch next = 0 V
        every 100 us { set drive = next; set next = gain * (1 A - choke.i) }
    """,
    "z": """
        signal drive = ((1 A - choke.i) sampled at 10 kHz) filtered by gain * z^-1 in z at 10 kHz
    """,
}


@pytest.mark.parametrize("written", ["latches", "z"])
def test_sampled_current_loop_with_one_period_of_delay(written: str) -> None:
    # Kp = L/(2 1.5 T) for L 2 mH at 10 kHz: 6.666667 V/A
    result = run(
        f"""
        reference gnd
        given gain = 2 mH / (3 * 100 us)
        drive_box: x --[drive]-- gnd
        choke: x --[l: 2 mH]-- gnd
        {WRITTEN_LOOPS[written]}
        study run_in {{
            start cold
            run for 1.21 ms
            keep choke.i
        }}
        """,
        tolerance=1e-9,
    )
    i = result.at("choke.i", 100e-6 * np.arange(13))
    assert i == pytest.approx(SEQUENCE, abs=5e-7)
    # the recursion behind the figures: i[k+1] = i[k] + k (1 - i[k-1])
    exact = [0.0, 0.0]
    while len(exact) < 13:
        exact.append(exact[-1] + (1 - exact[-2]) / 3)
    np.testing.assert_allclose(i, exact, rtol=0, atol=1e-10)


def test_sampled_signals_update_in_order_of_dependency() -> None:
    # b reads a's new value of the same instant, whatever the order of the text; `every` reads the samples of its own instant.
    result = run(
        """
        signal b = a sampled at 1 kHz
        signal a = clock sampled at 1 kHz
        d/dt clock = 1 /s
        latch copy = 0
        every 1 ms: set copy = b
        study run_in {
            start cold
            run for 5.5 ms
            keep a, b, copy
        }
        """
    )
    middle = np.array([0.5e-3, 1.5e-3, 2.5e-3, 3.5e-3, 4.5e-3])
    for name in ("a", "b", "copy"):
        np.testing.assert_allclose(result.at(name, middle), 1e-3 * np.arange(5), rtol=0, atol=1e-12, err_msg=name)


# ---------------------------------------------------------------- tuned loops


def test_modulus_optimum() -> None:
    # Kessler 1958; Umland & Safiuddin 1990: Kp = L/(2 Ts), Ti = L/R gives 1/(1 + 2 Ts s + 2 Ts^2 s^2): overshoot 4.3214 %, first at the final
    # value at 4.7124 Ts, within 2 % from 8.432 Ts. L 2 mH, R 0.1 ohm, Ts = 150 us: Kp 6.666667, Ti 20 ms.
    result = run(
        """
        reference gnd
        latch wanted = 0 A
        signal asked = (wanted - arm.i) filtered by 20/3 * 1 V/A * (1 + 1 / (s * 20 ms))
        signal applied = asked filtered by 1 / (1 + s * 150 us)
        drive: x --[applied]-- gnd
        arm: x --[r: 0.1 ohm]--[l: 2 mH]-- gnd
        latch passed = false
        whenever arm.i rises above 1 A: set passed = true
        study run_in {
            start cold
            run for 11 ms
            at 1 ms: set wanted = 1 A
            keep arm.i
            over: require overshoot(arm.i) below 5 % after 1 ms
            band: require settling_time(arm.i, 2 %) below 2 ms after 1 ms
        }
        """,
        tolerance=1e-9,
    )
    ts = 150e-6
    t = result.time[result.time > 1e-3] - 1e-3
    wanted = 1 - np.exp(-t / (2 * ts)) * (np.cos(t / (2 * ts)) + np.sin(t / (2 * ts)))
    np.testing.assert_allclose(result["arm.i"][result.time > 1e-3], wanted, rtol=0, atol=1e-7)
    assert result.verdict["over"].value == pytest.approx(0.043214, abs=5e-7)
    assert result.verdict["band"].value / ts == pytest.approx(8.432, abs=5e-4)
    passed = next(entry.time_s for entry in result.events if entry.time_s > 1e-3)
    assert (passed - 1e-3) / ts == pytest.approx(1.5 * np.pi, rel=1e-8)  # 4.7124


@pytest.mark.parametrize(("prefilter", "overshoot"), [(False, 0.434104), (True, 0.081465)])
def test_symmetrical_optimum(prefilter: bool, overshoot: float) -> None:
    # The same sources, Ti = a^2 Ts with a = 2 on an integrating plant: overshoot 43.4104 %, with the reference filter 1/(1 + 4 Ts s) 8.1465 %.
    wanted = "wanted filtered by 1 / (1 + s * 4 ms)" if prefilter else "wanted"
    result = run(
        f"""
        latch wanted = 0
        signal aim = {wanted}
        signal asked = (aim - x) filtered by 0.5 * (1 + 1 / (s * 4 ms))
        signal applied = asked filtered by 1 / (1 + s * 1 ms)
        d/dt x = applied / 1 ms
        study run_in {{
            start cold
            run for 200 ms
            at 1 ms: set wanted = 1
            keep x
            over: require overshoot(x) below 50 % after 1 ms
        }}
        """,
        tolerance=1e-9,
    )
    assert result.verdict["over"].value == pytest.approx(overshoot, abs=1e-6)


def test_regulated_step_down_answers_a_load_step() -> None:
    # EM 9.5.4 (Erickson & Maksimović, 2nd ed. 2001): 28 V to 15 V, 3 ohm, 50 uH, 500 uF, carrier 4 V, sensor 1/3, reference 5 V; block
    # 3.7 (1 + 2 pi 500/s) (1 + s/2 pi 1700)/(1 + s/2 pi 14500). Response to 1 A more, averaged and linear, computed from its poles.
    result = run(
        """
        reference gnd
        supply: vin --[28 V]-- gnd
        leg: pole(vin, gnd, x, upper_duty = ctrl / 4 V, rate = 100 kHz, upper = transistor(0 ohm), lower = transistor(0 ohm))
        choke: x --[l: 50 uH]-- out
        store: out --[c: 500 uF]-- gnd
        load: out --[r: 3 ohm]-- gnd
        step: out --[more]-- gnd
        latch more = 0 A
        signal error = 5 V - out.v / 3
        signal ctrl = error filtered by 3.7 * (1 + 2*pi * 500 /s / s) * (1 + s / (2*pi * 1700 /s)) / (1 + s / (2*pi * 14500 /s))
        study run_in {
            start settled
            run for 2 ms
            at 1 ms: set more = 1 A
            keep out.v, leg.duty
            dip: require lowest(out.v) above 14.9 V after 1 ms
        }
        """,
        tolerance=1e-10,
        at=[1.1e-3, 1.5e-3],
    )
    assert result["out.v"][0] == pytest.approx(15.0, rel=1e-11)
    assert result["leg.duty"][0] == pytest.approx(0.535714, abs=5e-7)
    deviation = result.at("out.v", [1.1e-3, 1.5e-3, 2.0e-3]) - 15
    assert deviation == pytest.approx([-0.0206708062, 0.0041437011, 0.0010835520], abs=2e-9)
    assert result.verdict["dip"].value - 15 == pytest.approx(-0.0494207755, abs=2e-8)
    assert result.verdict["dip"].time_s - 1e-3 == pytest.approx(45.58e-6, abs=0.02e-6)
