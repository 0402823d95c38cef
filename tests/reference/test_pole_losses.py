"""Losses of a two-transistor pole: dead time with its diodes, switching energies, conduction; each by its textbook formula, both ways of current.

Mean output of a leg with dead time t_d: the incoming device's on-time is short by t_d, and in both gaps the current flows in a diode
(e.g. Erickson & Maksimović 2001, ch. 4; Holmes & Lipo 2003, dead-time effect). Energies are proportional to voltage and current about the
data sheet's point (common practice).
"""

from __future__ import annotations

import pytest

import polewise

DEAD = 400e-9
RATE = 50e3


def leg(current: float, *, upper: str = "", lower: str = "", dead: float = 0.0) -> polewise.Settled:
    """A leg on 400 V at 60 % duty whose choke carries a stated current out of (positive) or into its mid."""
    return polewise.from_text(
        f"""
        reference gnd
        supply: bus --[400 V]-- gnd
        leg: pole(bus, gnd, x, upper_duty = 0.6, rate = {RATE!r} Hz, dead_time = {dead!r} s,
                  upper = transistor(10 mohm{upper}), lower = transistor(20 mohm{lower}))
        choke: x --[l: 1 mH]-- out
        sink: out --[{current!r} A]-- gnd
        store: out --[10 uF]-- gnd
        """
    ).settled()


@pytest.mark.parametrize("current", [40.0, -40.0])
def test_conduction_both_ways(current: float) -> None:
    point = leg(current)
    assert point["out.v"] == pytest.approx(0.6 * 400 - (0.6 * 0.01 + 0.4 * 0.02) * current, rel=1e-12)
    assert point["leg.loss"] == pytest.approx((0.6 * 0.01 + 0.4 * 0.02) * current**2, rel=1e-10)


@pytest.mark.parametrize(("current", "sign"), [(40.0, 1.0), (-40.0, -1.0)])
def test_dead_time_takes_volt_seconds_from_the_current(current: float, sign: float) -> None:
    # the share lost or won is t_d f; in both gaps the freewheeling diode (lower for current out, upper for current in) adds its drop
    drops = {"upper": ", reverse_drop = 1.1 V", "lower": ", reverse_drop = 0.9 V"}
    point = leg(current, dead=DEAD, **drops)
    share = 0.6 - sign * DEAD * RATE
    drop = 0.9 if sign > 0 else 1.1
    wanted = share * (400 - 0.01 * current) - (1 - share) * 0.02 * current - sign * 2 * DEAD * RATE * drop
    assert point["out.v"] == pytest.approx(wanted, rel=1e-12)
    assert point["leg.share"] == pytest.approx(share, rel=1e-12)
    # the supply's current follows the same share, so that only conduction and diode drops are lost
    assert -point["supply.i"] == pytest.approx(share * current, rel=1e-12)
    lost = (share * 0.01 + (1 - share) * 0.02) * current**2 + 2 * DEAD * RATE * drop * abs(current)
    assert point["leg.loss"] == pytest.approx(lost, rel=1e-9)


def test_dead_time_does_nothing_inside_the_ripple() -> None:
    # ripple 400 V * 0.6 * 0.4/(1 mH * 50 kHz) = 1.92 A peak to peak: at 0.3 A the current changes sign within each period
    point = leg(0.3, dead=DEAD)
    assert point["leg.ripple"] == pytest.approx(1.92, rel=1e-3)
    assert point["leg.share"] == pytest.approx(0.6, abs=1e-12)


@pytest.mark.parametrize(("current", "energy"), [(40.0, 3.0e-3 + 2.0e-3 + 0.5e-3), (-40.0, 4.0e-3 + 1.0e-3 + 0.7e-3)])
def test_switching_energies_scale_with_voltage_and_current(current: float, energy: float) -> None:
    # current out: the upper device switches hard and the lower one's diode recovers; current in: the other way round
    data = ", at_voltage = 600 V, at_current = 100 A"
    point = leg(
        current,
        upper=f", turn_on = 3 mJ, turn_off = 2 mJ, recovery = 0.7 mJ{data}",
        lower=f", turn_on = 4 mJ, turn_off = 1 mJ, recovery = 0.5 mJ{data}",
    )
    switching = RATE * energy * (400 / 600) * (40 / 100)
    conduction = (0.6 * 0.01 + 0.4 * 0.02) * current**2
    assert point["leg.loss"] == pytest.approx(switching + conduction, rel=1e-10)
    # drawn from the rails: the supply pays, the output voltage does not change
    assert point["out.v"] == pytest.approx(0.6 * 400 - (0.6 * 0.01 + 0.4 * 0.02) * current, rel=1e-12)
    assert -point["supply.p"] == pytest.approx(point["out.v"] * current + switching + conduction, rel=1e-10)
    assert abs(point.power_balance.residual_w) < 1e-9 * 400 * 40


def test_switching_loss_of_a_diode_pole() -> None:
    # step-up, 24 V to about 48 V: transistor energies and the diode's recovery at the output's voltage and the choke's current
    point = polewise.from_text(
        """
        reference gnd
        supply: vin --[24 V]-- gnd
        choke: vin --[l: 100 uH]-- x
        leg: pole(out, gnd, x, duty = 0.5, rate = 100 kHz,
                  upper = diode(0 V, recovery = 10 uJ, at_voltage = 50 V, at_current = 10 A),
                  lower = transistor(0 ohm, turn_on = 20 uJ, turn_off = 30 uJ, at_voltage = 50 V, at_current = 10 A))
        store: out --[220 uF]-- gnd
        load: out --[r: 20 ohm]-- gnd
        """
    ).settled()
    v, i = point["out.v"], point["choke.i"]
    assert v == pytest.approx(48.0, rel=1e-9)  # the choke's volt balance is untouched
    loss = 100e3 * 60e-6 * (v / 50) * (i / 10)
    assert point["leg.loss"] == pytest.approx(loss, rel=1e-9)
    assert 24 * i == pytest.approx(v * v / 20 + loss, rel=1e-9)
