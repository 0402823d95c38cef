"""The operating point as read by a user, against hand-worked networks."""

from __future__ import annotations

import pytest

import polewise

DIVIDER = """title "Two lamps behind a cable"
reference gnd
assembly lamp(p1, n1) {
    given r = 10 ohm
    inner: p1 --[wire: 1 ohm]--[glow: r]-- n1
}
supply: src --[100 V]-- gnd
cable:  src --[2 ohm]-- bus
first:  lamp(bus, gnd)
second: lamp(bus, gnd, r = 21 ohm)
draw:   bus --[1 A]-- gnd
"""


def test_values_units_and_balance_of_a_resistive_network() -> None:
    settled = polewise.from_text(DIVIDER).settled()
    # (100 - v)/2 = v/11 + v/22 + 1 gives v = 49 / (7/11) = 77
    assert settled["bus.v"] == pytest.approx(77.0, rel=1e-12)
    assert settled["first.inner.i"] == pytest.approx(7.0, rel=1e-12)
    assert settled["cable.i"] == pytest.approx(11.5, rel=1e-12)
    assert (settled.unit("bus.v"), settled.unit("cable.i"), settled.unit("cable.p")) == ("V", "A", "W")
    balance = settled.power_balance
    assert balance.delivered_w == pytest.approx(1150.0, rel=1e-12)
    assert balance.absorbed_w == pytest.approx(77.0, rel=1e-12)  # the current source's
    assert balance.lost_w == pytest.approx(1150.0 - 77.0, rel=1e-12)
    assert abs(balance.residual_w) < 1e-9
    assert settled.losses["first"] == pytest.approx(77.0**2 / 11.0, rel=1e-12)
    assert settled.losses["second"] == pytest.approx(77.0**2 / 22.0, rel=1e-12)
    assert settled.losses[""] == pytest.approx(balance.lost_w)
    assert balance.efficiency == pytest.approx(77.0 / 1150.0)


def test_a_name_that_is_none_lists_near_ones() -> None:
    settled = polewise.from_text(DIVIDER).settled()
    with pytest.raises(polewise.UnknownName) as caught:
        settled["buss.v"]
    assert isinstance(caught.value, KeyError)
    assert "bus" in str(caught.value)
    assert "bus.v" in settled
    assert "buss.v" not in settled
    assert {"bus.v", "first.inner.i", "cable.p"} <= set(settled.names)


POLE = """title "Step-down"
reference gnd
supply: vin --[48 V]-- gnd
leg:    pole(vin, gnd, x, duty = {duty}, rate = 100 kHz, upper = transistor(30 mohm), lower = diode(0.7 V, 10 mohm))
choke:  x --[r: 50 mohm]--[l: 500 uH]-- out
cap:    out --[100 uF]-- gnd
load:   out --[{ohms} ohm]-- gnd
"""


def test_pole_in_continuous_conduction() -> None:
    settled = polewise.from_text(POLE.format(duty=0.5, ohms=4)).settled()
    (pole,) = settled.poles
    assert pole.mode == "continuous"
    assert pole.duty == pytest.approx(0.5)
    # check value DC-3: Erickson & Maksimovic, Fundamentals of Power Electronics, 2nd ed. 2001, section 3.5
    assert settled["out.v"] == pytest.approx(23.2432432432, rel=1e-4)
    assert pole.current_a == pytest.approx(5.81081081081, rel=1e-4)
    balance = settled.power_balance
    assert balance.residual_w == pytest.approx(0.0, abs=1e-9 * balance.delivered_w)
    assert pole.loss_w > 0.0


def test_pole_in_discontinuous_conduction_and_blocked() -> None:
    assert polewise.from_text(POLE.format(duty=0.3, ohms=2000)).settled().modes == {"leg": "discontinuous"}
    assert polewise.from_text(POLE.format(duty=0.0, ohms=4)).settled().modes == {"leg": "blocked"}


def test_collapsed_load_is_a_failure_with_its_figure() -> None:
    text = "reference gnd\nsource: a --[100 V]-- gnd\nline: a --[0.1 ohm]-- b\nload: b --[{p} kW above 50 V]-- gnd\n"
    assert polewise.from_text(text.format(p=20)).settled()["b.v"] == pytest.approx(72.360679775, rel=1e-9)  # (100 + sqrt(100^2 - 4*0.1*20000))/2
    with pytest.raises(polewise.NoOperatingPoint, match="25 kW"):
        polewise.from_text(text.format(p=30)).settled()


SHAFT = """title "Motor"
reference gnd
reference frame (rad/s)
given k = 0.5 V*s/rad
supply: bus --[50 V]-- gnd
arm:    bus --[ra: 1 ohm]--[emf: v = k * shaft.speed]-- gnd
twist:  frame --[k * arm.i]-- shaft
drag:   shaft --[0.25 N*m*s/rad]-- frame
"""


def test_power_that_passes_to_a_shaft_counts_in_both_kinds_of_islands() -> None:
    # k*i = 0.25 w and 50 - i = k*w: i = w/2, w = 50
    settled = polewise.from_text(SHAFT).settled()
    assert settled["shaft.speed"] == pytest.approx(50.0, rel=1e-9)
    electrical, rotation = (settled.power_balance.flows[kind] for kind in ("electrical", "rotation"))
    assert electrical.delivered_w == pytest.approx(1250.0, rel=1e-9)
    assert electrical.absorbed_w == pytest.approx(625.0, rel=1e-9)
    assert electrical.lost_w == pytest.approx(625.0, rel=1e-9)
    assert rotation.delivered_w == pytest.approx(625.0, rel=1e-9)
    assert rotation.lost_w == pytest.approx(625.0, rel=1e-9)
    assert settled.losses[""] == pytest.approx(1250.0, rel=1e-9)
