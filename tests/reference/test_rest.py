"""Operating points: the normal branch of constant-power circuits from nothing, the fold's figure, and each kind of thing that can't rest."""

from __future__ import annotations

import math

import numpy as np
import pytest

import polewise
from polewise.errors import DependsOnTime, IntegratorCannotRest, IntegratorsFight, PowerLimit


def line(vs: float, r: float, power: str, extra: str = "") -> str:
    return f"""
        reference gnd
        supply: src --[{vs!r} V]-- gnd
        line: src --[r: {r!r} ohm]--[l: 100 uH]-- bus
        bank: bus --[c: 500 uF]-- gnd
        load: bus --[{power}]-- gnd
        {extra}
    """


@pytest.mark.parametrize(
    ("vs", "r", "kw", "printed"),
    [(100.0, 0.1, 20.0, 72.36), (100.0, 0.1, 24.99, 51.0), (100.0, 0.1, 4.53514739229, 95.2380952381), (270.0, 0.05, 14.2927164004, 267.326732673)],
)
def test_normal_branch_of_constant_power_behind_a_line(vs: float, r: float, kw: float, printed: float) -> None:
    # V = (Vs + sqrt(Vs^2 - 4 r P))/2 (Middlebrook 1976; Emadi, Khaligh, Rivetta & Williamson 2006): 100 V, 0.1 ohm, 20 kW give 72.36 V;
    # the last two rows are the published stability limits P* with V at P*.
    point = polewise.from_text(line(vs, r, f"{kw!r} kW above 40 V")).settled()
    exact = (vs + math.sqrt(vs**2 - 4 * r * kw * 1e3)) / 2
    assert exact == pytest.approx(printed, rel=5e-5)
    assert point["bus.v"] == pytest.approx(exact, rel=1e-9)
    assert point["load.p"] == pytest.approx(kw * 1e3, rel=1e-9)
    assert point.power_balance.losses[""] == pytest.approx(point["line.r.p"], rel=1e-9)


@pytest.mark.parametrize(("vs", "r", "fold_kw"), [(100.0, 0.1, 25.0), (270.0, 0.05, 364.5)])
def test_fold_gives_the_limiting_figure(vs: float, r: float, fold_kw: float) -> None:
    # no operating point above Vs^2/(4 r): 25 kW and 364.5 kW
    with pytest.raises(PowerLimit) as caught:
        polewise.from_text(line(vs, r, f"{1.2 * fold_kw!r} kW above 10 V")).settled()
    assert caught.value.power_w == pytest.approx(fold_kw * 1e3, rel=1e-3)
    assert f"{fold_kw:g} kW" in str(caught.value)
    assert caught.value.power_scale == pytest.approx(1 / 1.2, rel=1e-3)


def test_a_point_below_the_loads_stated_voltage_is_collapsed_not_success() -> None:
    # 24 kW has the branch (100 + sqrt(400))/2 = 60 V; a load that states 65 V fades there
    with pytest.raises(polewise.NoOperatingPoint) as caught:
        polewise.from_text(line(100.0, 0.1, "24 kW above 65 V")).settled()
    assert "load" in str(caught.value)


def test_several_constant_powers_on_a_long_line() -> None:
    # Five loads and a generator along a line: node equations solved by hand with scipy from the no-load voltages.
    powers = [4e3, 6e3, -3e3, 5e3, 2e3, 7e3]
    boxes = "\n".join(
        f"wire{k}: n{k} --[r: 20 mohm]-- n{k + 1}\nload{k}: n{k + 1} --[{p!r} W {'above 100 V' if p > 0 else 'below 600 V'}]-- gnd"
        for k, p in enumerate(powers)
    )
    point = polewise.from_text(f"reference gnd\nsupply: n0 --[380 V]-- gnd\n{boxes}").settled()

    def balance(v):
        all_v = np.concatenate([[380.0], v, [v[-1]]])
        return [(all_v[k + 1] - all_v[k]) / 0.02 + (all_v[k + 1] - all_v[k + 2]) / 0.02 + powers[k] / all_v[k + 1] for k in range(6)]

    wanted = np.full(6, 380.0)
    for _ in range(8):  # Newton; the balance is quadratic near the root
        slopes = np.array([(np.array(balance(wanted + e)) - balance(wanted - e)) / 2e-3 for e in 1e-3 * np.eye(6)]).T
        wanted = wanted - np.linalg.solve(slopes, balance(wanted))
    assert [point[f"n{k + 1}.v"] for k in range(6)] == pytest.approx(list(wanted), rel=1e-9)


def test_controlled_stage_rests_where_its_integrals_put_it() -> None:
    # Step-down with voltage loop around current loop, 760 V to 400 V at 40 kW: 100 A, duty from the volt balance of the choke.
    point = polewise.from_text(
        """
        reference gnd
        supply: vin --[760 V]-- gnd
        leg: pole(vin, gnd, x, duty = i_reg, rate = 40 kHz, upper = transistor(4 mohm), lower = diode(0.9 V, 1.5 mohm))
        choke: x --[rl: 3 mohm]--[l: 180 uH]-- out
        cap: out --[esr: 2 mohm]--[c: 1.2 mF]-- gnd
        boat: out --[40 kW above 200 V]-- gnd
        v_reg: pi_control(400 V - out.v, kp = 5.5 A/V, ki = 1700 A/V/s, low = 0 A, high = 220 A)
        i_reg: pi_control(v_reg - choke.i, kp = 0.00446 /A, ki = 10.5 /A/s, low = 0, high = 0.97)
        """
    ).settled()
    drop, gain = 0.9 + 0.0015 * 100, 760 - 0.004 * 100
    assert point["out.v"] == pytest.approx(400.0, rel=1e-9)
    assert point["choke.i"] == pytest.approx(100.0, rel=1e-9)
    assert point["leg.duty"] == pytest.approx((400.3 + drop) / (gain + drop), rel=1e-9)


def test_integral_at_its_bound_rests_there() -> None:
    # 10 A at most into 20 ohm cannot reach 400 V: the integral stays at its bound, the output at 200 V
    point = polewise.from_text(
        """
        reference gnd
        drive: gnd --[reg]-- out
        cap: out --[1 mF]-- gnd
        load: out --[20 ohm]-- gnd
        reg: pi_control(400 V - out.v, kp = 0 A/V, ki = 10 A/V/s, low = 0 A, high = 10 A)
        """
    ).settled()
    assert point["reg"] == pytest.approx(10.0, rel=1e-12)
    assert point["out.v"] == pytest.approx(200.0, rel=1e-12)


def test_held_state_keeps_its_value() -> None:
    point = polewise.from_text(
        """
        reference gnd
        cells: bus --[v = 300 V + 60 V * charge]-- gnd
        load: bus --[5 kW above 100 V]-- gnd
        d/dt charge = cells.i / 40 Ah  initially 0.75  held
        """
    ).settled()
    assert point["charge"] == 0.75
    assert point["bus.v"] == pytest.approx(345.0, rel=1e-12)


def test_sampled_control_rests_at_its_fixed_point() -> None:
    # Latches that `every` updates sit where the update gives their own value: the integrator's input vanishes, the output is 400 V;
    # the rest follows from the step-up's balance (EM 3.5 without choke resistance in the diode path).
    point = polewise.from_text(
        """
        reference gnd
        supply: vin --[200 V]-- gnd
        choke: vin --[r: 15 mohm]--[l: 220 uH]-- sw
        leg: pole(bus, gnd, sw, duty = drive, rate = 40 kHz, upper = diode(0.9 V), lower = transistor(12 mohm))
        store: bus --[esr: 5 mohm]--[c: 470 uF initially 200 V]-- gnd
        load: bus --[80 ohm]-- gnd
        latch acc_v = 0 A
        latch acc_i = 0
        latch next = 0.5
        latch drive = 0.5
        signal e_v = 400 V - bus.v
        signal ask = limit(1 A/V * e_v + acc_v, 0, 30 A)
        signal e_i = ask - choke.i
        every 25 us {
            set acc_v = limit(acc_v + 4 mA/V * e_v, 0, 30 A)
            set acc_i = limit(acc_i + 0.0003 /A * e_i, 0, 0.9)
            set drive = next
            set next = limit(0.006 /A * e_i + acc_i, 0.02, 0.9)
        }
        """
    ).settled()
    assert point["bus.v"] == pytest.approx(400.0, rel=1e-9)
    d = point["drive"]
    assert (200 / (1 - d) - 0.9) / (1 + (0.015 + d * 0.012) / ((1 - d) ** 2 * 80)) == pytest.approx(400.0, rel=1e-9)
    assert point["next"] == pytest.approx(d, rel=1e-9)
    assert point["acc_v"] == pytest.approx(5 / (1 - d), rel=1e-9)


def test_a_filter_with_an_integrator_rests_with_its_input_at_zero() -> None:
    point = polewise.from_text(
        """
        reference gnd
        drive: out --[ask]-- gnd
        load: out --[r: 3 ohm]-- gnd
        signal ask = (5 V - out.v / 3) filtered by 3.7 * (1 + 3000 /s / s) / (1 + s / (9e4 /s))
        """
    ).settled()
    assert point["out.v"] == pytest.approx(15.0, rel=1e-10)


# ---------------------------------------------------------------- what can't rest


def failure(text: str) -> polewise.NoOperatingPoint:
    with pytest.raises(polewise.NoOperatingPoint) as caught:
        polewise.from_text(text).settled()
    return caught.value


def test_integrator_with_an_input_that_cannot_vanish() -> None:
    error = failure(
        """
        reference gnd
        supply: a --[10 V]-- gnd
        load: a --[5 ohm]-- gnd
        d/dt used = load.p  initially 0 J
        """
    )
    assert isinstance(error, IntegratorCannotRest)
    assert "used" in str(error)


def test_capacitor_that_charges_for_ever_is_named() -> None:
    error = failure(
        """
        reference gnd
        push: gnd --[2 A]-- a
        store: a --[1 mF]-- gnd
        """
    )
    assert isinstance(error, IntegratorCannotRest)
    assert "store" in str(error) or "`a" in str(error)


def test_inductor_across_a_source_is_named() -> None:
    error = failure(
        """
        reference gnd
        supply: a --[2 V]-- gnd
        coil: a --[1 mH]-- gnd
        """
    )
    assert isinstance(error, IntegratorCannotRest)
    assert "coil" in str(error)


def test_two_integrators_that_fight_over_one_bus() -> None:
    error = failure(
        """
        reference gnd
        one: gnd --[first]-- bus
        two: gnd --[second]-- bus
        load: bus --[10 ohm]-- gnd
        d/dt first = 5 A/V/s * (400 V - bus.v)
        d/dt second = 5 A/V/s * (410 V - bus.v)
        """
    )
    assert isinstance(error, IntegratorsFight)
    assert "first" in str(error)
    assert "second" in str(error)


def test_explicit_time_never_rests() -> None:
    error = failure(
        """
        reference gnd
        hum: a --[10 V * sin(2*pi * 50 Hz * time)]-- gnd
        load: a --[5 ohm]-- gnd
        """
    )
    assert isinstance(error, DependsOnTime)
    assert "hum" in str(error)


def test_a_step_in_time_does_rest() -> None:
    # `a if time > …` is constant at the start: 10 V
    point = polewise.from_text(
        """
        reference gnd
        drive: a --[20 V if time > 1 s otherwise 10 V]-- gnd
        load: a --[5 ohm]-- gnd
        """
    ).settled()
    assert point["a.v"] == 10.0
