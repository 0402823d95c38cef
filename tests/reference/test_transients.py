"""Transients of whole systems against equations written by hand and integrated by scipy at 1e-12: every quantity to 1e-6 or better.

The equations are derived in comments from the elements' laws (and, for discontinuous conduction, from the triangle of the choke current),
never taken from the package. Compared at the ends of the solver's own steps.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import brentq

import polewise

from .by_hand import integrate, relative_error

TOLERANCE = 1e-8
ERROR_MAX = 1e-6


def test_step_down_start_up_and_load_step() -> None:
    # Two-transistor step-down with on-resistances: L i' = d (Vg - Ru i) - (1 - d) Rl i - rl i - v, C v' = i - v/R. R halves at 4 ms.
    text = """
        reference gnd
        supply: vin --[48 V]-- gnd
        leg: pole(vin, gnd, x, upper_duty = 0.5, rate = 100 kHz, upper = transistor(30 mohm), lower = transistor(10 mohm))
        choke: x --[rl: 50 mohm]--[l: 50 uH]-- out
        store: out --[500 uF]-- gnd
        load: out --[r: ohms]-- gnd
        latch ohms = 4 ohm
        study start_up {
            start cold
            run for 8 ms
            at 4 ms: set ohms = 2 ohm
            keep out.v, choke.i
        }
    """

    def rates(r: float):
        def f(t, x):
            i, v = x
            return [(0.5 * (48 - 0.03 * i) - 0.5 * 0.01 * i - 0.05 * i - v) / 50e-6, (i - v / r) / 500e-6]

        return f

    result = polewise.from_text(text).run("start_up", tolerance=TOLERANCE)
    i, v = integrate([(4e-3, rates(4.0)), (8e-3, rates(2.0))], [0.0, 0.0], result.time, scale=[10, 10])
    assert relative_error(result["choke.i"], i) < ERROR_MAX
    assert relative_error(result["out.v"], v) < ERROR_MAX


def discontinuous_step_up(vg: float, l: float, f: float, d: float, c: float, r_l: float, v_f: float, r: float):  # noqa: E741
    """Charge-corrected averages of a step-up with a diode, by the triangle of its choke current.

    In one period the current rises from 0 for d T. Its mean there is h = (half the peak); mean choke voltage while on is vg - rl h, so the
    peak 2 h = (vg - rl h) d/(L f), i.e. h = vg/(2 L f/d + rl). It then falls to zero within d2 T; the mean over the period is
    i = h (d + d2), so d + d2 = i/h, at least d, at most 1 (continuous). Choke: L i' = d vg + d2 (vg - v_f - v) - rl i.
    The capacitor gets the current of the second part only, h d2 = i d2/(d + d2). While v + v_f < vg the current does not fall when the
    transistor is off (the diode is driven on): it never reaches zero, d + d2 = 1.
    """
    h = vg / (2 * l * f / d + r_l)

    def rates(t, x):
        i, v = x
        part = 1.0 if v + v_f < vg else min(max(i / h, d), 1.0)
        d2 = part - d
        return [(d * vg + d2 * (vg - v_f - v) - r_l * i) / l, (i * d2 / part - v / r) / c]

    return rates


def test_hand_written_discontinuous_step_up_is_the_published_model() -> None:
    # Full-order model of the worked example (EM 11.2): poles 113.02641 Hz and 63577.170 Hz (Sun, Mitchell, Greuel, Krein & Bass 2001).
    rates = discontinuous_step_up(24.0, 5e-6, 100e3, 0.25, 470e-6, 0.0, 0.0, 12.0)
    at = np.array([4.5, 36.0])
    assert np.max(np.abs(rates(0.0, at)) * np.array([5e-6 / 24, 470e-6 / 4.5])) < 1e-12
    jacobian = np.empty((2, 2))
    for k, step in enumerate((1e-4, 1e-3)):  # second differences are exact: the rates are quadratic in the state
        e = np.eye(2)[k] * step
        jacobian[:, k] = (np.array(rates(0.0, at + e)) - np.array(rates(0.0, at - e))) / (2 * step)
    hertz = np.sort(-np.linalg.eigvals(jacobian).real / (2 * np.pi))
    assert hertz == pytest.approx([113.02641, 63577.170], rel=2e-7)


def test_discontinuous_step_up_through_a_change_of_mode() -> None:
    # At rest at 12 ohm discontinuous (K 0.083 < 0.141); 3 ohm from 1 ms on is continuous (K 0.33); back again at 4 ms.
    text = """
        reference gnd
        supply: vin --[24 V]-- gnd
        choke: vin --[rl: 10 mohm]--[l: 5 uH]-- x
        leg: pole(out, gnd, x, duty = 0.25, rate = 100 kHz, upper = diode(0.8 V), lower = transistor(0 ohm))
        store: out --[470 uF initially 20 V]-- gnd
        load: out --[r: ohms]-- gnd
        latch ohms = 12 ohm
        study modes {
            start cold
            run for 9 ms
            at 3 ms: set ohms = 3 ohm
            at 6 ms: set ohms = 12 ohm
            keep out.v, choke.i, leg.mode
        }
    """
    light, heavy = (discontinuous_step_up(24.0, 5e-6, 100e3, 0.25, 470e-6, 0.01, 0.8, r) for r in (12.0, 3.0))
    result = polewise.from_text(text).run("modes", tolerance=TOLERANCE)
    i, v = integrate([(3e-3, light), (6e-3, heavy), (9e-3, light)], [0.0, 20.0], result.time, scale=[5, 30], rtol=1e-11)
    assert relative_error(result["choke.i"], i) < ERROR_MAX
    assert relative_error(result["out.v"], v) < ERROR_MAX
    # and the modes really changed
    assert result.at("leg.mode", [2.9e-3, 5.9e-3, 8.9e-3]) == pytest.approx([1, 2, 1])


def test_constant_power_behind_a_cable_from_nothing_and_through_a_step() -> None:
    # Lc i' = Vs - r i - v, C v' = i - i_load; i_load = P/v at or above v_min, below (P/v_min)(2x - x^3), x = v/v_min (docs/models.md).
    text = """
        reference gnd
        supply: src --[100 V]-- gnd
        line: src --[r: 0.1 ohm]--[l: 20 uH]-- bus
        bank: bus --[c: 2 mF]-- gnd
        load: bus --[demand above 40 V]-- gnd
        latch demand = 10 kW
        study dark_start {
            start cold
            run for 20 ms
            at 10 ms: set demand = 21 kW
            keep bus.v, line.i, load.p
        }
    """

    def rates(power: float):
        def f(t, x):
            i, v = x
            y = v / 40.0
            load = power / v if v >= 40.0 else power / 40.0 * (2 * y - y**3)
            return [(100 - 0.1 * i - v) / 20e-6, (i - load) / 2e-3]

        return f

    result = polewise.from_text(text).run("dark_start", tolerance=TOLERANCE)
    i, v = integrate([(10e-3, rates(10e3)), (20e-3, rates(21e3))], [0.0, 0.0], result.time, scale=[100, 100])
    assert relative_error(result["line.i"], i) < ERROR_MAX
    assert relative_error(result["bus.v"], v) < ERROR_MAX
    assert v[-1] == pytest.approx(0.5 * (100 + np.sqrt(100**2 - 4 * 0.1 * 21e3)), rel=1e-6)  # where it must come to rest


def held(rate: float, x: float, low: float, high: float) -> float:
    """The rate of a state that is held at a bound while its rate points outward."""
    return 0.0 if (x >= high and rate > 0) or (x <= low and rate < 0) else rate


def test_motor_drive_with_shaft_and_heat_over_half_an_hour() -> None:
    # Armature: La i' = d (V - Ron i) - (1 - d) V_F - R(T) i - k w, in continuous conduction (ripple 0.2 A under 2 A). Shaft: J w' = k i - b w - M.
    # Copper: C T' = R(T) i^2 - (T - T_air)/R_th, R = R0 (1 + alpha (T - 25 degC)). Two PI controllers with held integrals.
    text = """
        reference gnd
        reference frame (rad/s)
        reference zero (K)
        given k = 0.5 V*s/rad
        supply: bus --[48 V]-- gnd
        leg: pole(bus, gnd, m, duty = amp_reg, rate = 20 kHz, upper = transistor(8 mohm), lower = diode(0.7 V))
        arm: m --[ra: 0.4 ohm * (1 + 0.004 /K * (copper.temp - 25 degC))]--
            [la: 3 mH]--[emf: v = k * shaft.speed]-- gnd
        twist: frame --[k * arm.i]-- shaft
        rotor: shaft --[0.02 kg*m^2]-- frame
        drag: shaft --[0.003 N*m*s/rad]-- frame
        pump: shaft --[pull]-- frame
        latch pull = 1 N*m
        air: ambient --[25 degC]-- zero
        warm: zero --[arm.ra.p]-- copper
        body: copper --[900 J/K initially 25 degC]-- zero
        cool: copper --[0.8 K/W]-- ambient
        speed_reg: pi_control(80 rad/s - shaft.speed, kp = 0.5 A*s/rad, ki = 2 A/rad, low = 0, high = 30 A)
        amp_reg: pi_control(speed_reg - arm.i, kp = 0.02 /A, ki = 4 /A/s, low = 0.02, high = 0.98)
        study pull_up {
            start settled
            run for 30 min
            at 1 s: set pull = 5 N*m
            keep shaft.speed, copper.temp, arm.i, leg.duty
        }
    """

    def rates(pull: float):
        def f(t, x):
            i, w, temp, want, share = x
            r = 0.4 * (1 + 0.004 * (temp - 298.15))
            e_w = 80 - w
            ask = min(max(0.5 * e_w + want, 0.0), 30.0)
            e_i = ask - i
            d = min(max(0.02 * e_i + share, 0.02), 0.98)
            return [
                (d * (48 - 0.008 * i) - (1 - d) * 0.7 - r * i - 0.5 * w) / 3e-3,
                (0.5 * i - 0.003 * w - pull) / 0.02,
                (r * i * i - (temp - 298.15) / 0.8) / 900,
                held(2 * e_w, want, 0.0, 30.0),
                held(4 * e_i, share, 0.02, 0.98),
            ]

        return f

    # at rest: w = 80, i = (M + b w)/k, the heat R0 (1 + alpha y) i^2 = y/R_th of y kelvin above air, then the duty
    i = (1.0 + 0.003 * 80) / 0.5
    y = 0.8 * 0.4 * i * i / (1 - 0.8 * 0.4 * 0.004 * i * i)
    d = (0.4 * (1 + 0.004 * y) * i + 0.5 * 80 + 0.7) / (48 - 0.008 * i + 0.7)
    start = [i, 80.0, 298.15 + y, i, d]
    result = polewise.from_text(text).run("pull_up", tolerance=TOLERANCE)
    wanted = integrate([(1.0, rates(1.0)), (1800.0, rates(5.0))], start, result.time, method="Radau", rtol=1e-10, scale=[1, 10, 100, 1, 1])
    assert relative_error(result["arm.i"], wanted[0]) < ERROR_MAX
    assert relative_error(result["shaft.speed"], wanted[1]) < ERROR_MAX
    assert relative_error(result["copper.temp"] - 298.15, wanted[2] - 298.15) < ERROR_MAX


def test_berth_with_cascaded_control_through_a_load_step() -> None:
    # Step-down from 760 V; L i' = d (Vin - Ron i) - (1 - d)(V_F + R_D i) - rl i - v_out, C vc' = i - P/v_out, v_out = vc + esr (i - P/v_out):
    # v_out is the larger root of v^2 - (vc + esr i) v + esr P = 0. Voltage loop around current loop, both with limits and held integrals.
    text = """
        reference gnd
        supply: vin --[760 V]-- gnd
        leg: pole(vin, gnd, x, duty = i_reg, rate = 40 kHz, upper = transistor(4 mohm), lower = diode(0.9 V, 1.5 mohm))
        choke: x --[rl: 3 mohm]--[l: 180 uH]-- out
        cap: out --[esr: 2 mohm]--[c: 1.2 mF]-- gnd
        boat: out --[demand above 200 V]-- gnd
        latch demand = 40 kW
        v_reg: pi_control(400 V - out.v, kp = 5.5 A/V, ki = 1700 A/V/s, low = 0 A, high = 260 A)
        i_reg: pi_control(v_reg - choke.i, kp = 0.00446 /A, ki = 10.5 /A/s, low = 0, high = 0.545)
        study load_step {
            start settled
            run for 20 ms
            at 5 ms: set demand = 80 kW
            keep cap.c.v, choke.i, i_reg.integral, v_reg.integral, leg.duty
        }
    """

    def rates(power: float):
        def f(t, x):
            i, vc, ask, share = x
            b = vc + 0.002 * i
            v = 0.5 * (b + np.sqrt(b * b - 4 * 0.002 * power))
            e_v = 400 - v
            want = min(max(5.5 * e_v + ask, 0.0), 260.0)
            e_i = want - i
            d = min(max(0.00446 * e_i + share, 0.0), 0.545)
            return [
                (d * (760 - 0.004 * i) - (1 - d) * (0.9 + 0.0015 * i) - 0.003 * i - v) / 180e-6,
                (i - power / v) / 1.2e-3,
                held(1700 * e_v, ask, 0.0, 260.0),
                held(10.5 * e_i, share, 0.0, 0.545),
            ]

        return f

    # at rest: 400 V, no current in the capacitor, 100 A in the choke
    drop, gain = 0.9 + 0.0015 * 100, 760 - 0.004 * 100
    start = [100.0, 400.0, 100.0, (400 + 0.003 * 100 + drop) / (gain + drop)]
    result = polewise.from_text(text).run("load_step", tolerance=TOLERANCE)
    wanted = integrate([(5e-3, rates(40e3)), (20e-3, rates(80e3))], start, result.time, scale=[100, 100, 100, 1])
    for name, reference in zip(("choke.i", "cap.c.v", "v_reg.integral", "i_reg.integral"), wanted):
        assert relative_error(result[name], reference) < ERROR_MAX, name


def test_saturating_choke_and_voltage_dependent_capacitor() -> None:
    # Flux lambda(i) = Ls i + L0 Ik tanh(i/Ik): R i + d/dt lambda = vs - v. Charge q = C(v) v with C = C0 (1 + (v/V0)^2): d/dt q = i - v/Rp.
    # Here in the states (lambda, q); i and v by root finding, so that nothing is differentiated.
    text = """
        reference gnd
        function flux(i_arm) = 0.2 mH * i_arm + 2 mH * 3 A * tanh(i_arm / 3 A)
        supply: a --[60 V * sin(2*pi * 400 Hz * time)]-- gnd
        choke: a --[r: 0.8 ohm]--[core: v = d/dt flux(i)]-- b
        store: b --[c: i = d/dt (200 uF * (1 + (v / 25 V)^2) * v)]-- gnd
        load: b --[r: 6 ohm]-- gnd
        study swing {
            start cold
            run for 10 ms
            keep choke.i, b.v
        }
    """

    def current(flux: float) -> float:
        bound = abs(flux) / 0.2e-3 + 1.0
        return float(brentq(lambda i: 0.2e-3 * i + 6e-3 * np.tanh(i / 3) - flux, -bound, bound, xtol=1e-15, rtol=1e-15))

    def voltage(charge: float) -> float:
        # v^3/V0^2 + v = q/C0 by v = A sinh(u), A = 2 V0/sqrt(3): sinh(3 u) = 3 (q/C0)/A
        a = 2 * 25 / np.sqrt(3)
        return float(a * np.sinh(np.arcsinh(3 * charge / 200e-6 / a) / 3))

    def f(t, x):
        i, v = current(x[0]), voltage(x[1])
        return [60 * np.sin(2 * np.pi * 400 * t) - 0.8 * i - v, i - v / 6]

    result = polewise.from_text(text).run("swing", tolerance=TOLERANCE)
    flux, charge = integrate([(10e-3, f)], [0.0, 0.0], result.time, scale=[1e-2, 1e-3], rtol=1e-11)
    i = np.array([current(x) for x in flux])
    v = np.array([voltage(x) for x in charge])
    assert np.max(np.abs(i)) > 6.0  # deep in saturation
    assert relative_error(result["choke.i"], i) < ERROR_MAX
    assert relative_error(result["b.v"], v) < ERROR_MAX


def test_straight_line_flux_table_by_pieces() -> None:
    # Flux (0, 0) (2 A, 1 mWb) (10 A, 1.5 mWb), straight and extended: 0.5 mH up to 2 A, 62.5 uH above. 12 V, 1 ohm: i = 12 (1 - e^(-t/0.5 ms)) to
    # 2 A at t1 = 0.5 ms ln(12/10), then 12 - 10 e^(-(t - t1)/62.5 us). The source turns at 1 ms: down through 2 A with 62.5 us, on with 0.5 ms,
    # through -2 A (odd) with 62.5 us again.
    result = polewise.from_text(
        """
        reference gnd
        table flux(i) = (0 A, 0 Wb) (2 A, 1 mWb) (10 A, 1.5 mWb) odd extend
        supply: a --[volts]-- gnd
        choke: a --[r: 1 ohm]--[core: v = d/dt flux(i)]-- gnd
        latch volts = 12 V
        study go {
            start cold
            run for 2 ms
            at 1 ms: set volts = -12 V
            keep choke.i
        }
        """
    ).run("go", tolerance=TOLERANCE)
    slow, fast = 0.5e-3, 62.5e-6
    t1 = slow * np.log(12 / 10)
    top = 12 - 10 * np.exp(-(1e-3 - t1) / fast)
    t2 = 1e-3 + fast * np.log((12 + top) / 14)  # down to 2 A
    t3 = t2 + slow * np.log(14 / 10)  # to -2 A
    pieces = [
        (0.0, t1, lambda t: 12 - 12 * np.exp(-t / slow)),
        (t1, 1e-3, lambda t: 12 - 10 * np.exp(-(t - t1) / fast)),
        (1e-3, t2, lambda t: -12 + (12 + top) * np.exp(-(t - 1e-3) / fast)),
        (t2, t3, lambda t: -12 + 14 * np.exp(-(t - t2) / slow)),
        (t3, 2e-3, lambda t: -12 + 10 * np.exp(-(t - t3) / fast)),
    ]
    t = result.time
    wanted = np.piecewise(t, [(t >= low) & (t <= high) for low, high, _ in pieces], [f for _, _, f in pieces])
    assert relative_error(result["choke.i"], wanted) < ERROR_MAX


def test_output_that_overshoots_its_rail_blocks_and_unblocks_the_pole() -> None:
    # Ideal step-down from nothing into a light load. d + d2 as in `discontinuous_step_up`, here h = (Vg - v) d/(2 L f) while the output is
    # below the rail; L i' = d Vg - (d + d2) v. Above the rail the current only falls; at zero the pole is open: i stays 0, C v' = -v/R, until
    # v is back at the rail, where the triangle starts again from nothing.
    text = """
        reference gnd
        supply: vin --[48 V]-- gnd
        leg: pole(vin, gnd, x, duty = 0.55, rate = 100 kHz, upper = transistor(0 ohm), lower = diode(0 V))
        choke: x --[l: 200 uH]-- out
        store: out --[c: 100 uF]-- gnd
        load: out --[r: 20 ohm]-- gnd
        study start_up {
            start cold
            run for 5 ms
            keep out.v, choke.i, leg.mode
        }
    """
    d, vg, l, c, r, f = 0.55, 48.0, 200e-6, 100e-6, 20.0, 100e3  # noqa: E741

    def rates(t, x):
        i, v = x
        if v >= vg:
            falling = (d * vg - v) / l
            return [falling if i > 0 else 0.0, (i - v / r) / c]
        part = min(max(i * 2 * l * f / ((vg - v) * d), d), 1.0) if v < vg * (1 - 1e-12) else 1.0
        return [(d * vg - part * v) / l if i > 0 or part < 1 else max((d * vg - part * v) / l, 0.0), (i - v / r) / c]

    result = polewise.from_text(text).run("start_up", tolerance=TOLERANCE)
    i, v = integrate([(5e-3, rates)], [0.0, 0.0], result.time, rtol=1e-9, scale=[1, 10], max_step=1e-6)
    assert np.max(v) > 49
    # the hand-written rates jump at the corners, which costs scipy some digits
    assert relative_error(result["choke.i"], i) < 1e-5
    assert relative_error(result["out.v"], v) < 1e-5
    assert set(result["leg.mode"]) == {0, 1, 2}
    assert np.min(result["choke.i"]) > -1e-6
