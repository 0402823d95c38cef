"""Windows: events inside them, clocks and latches carried over, phases, dead time, losses, latched modulators, refusals."""

from __future__ import annotations

import numpy as np
import pytest

import polewise
from polewise.analysis.carriers import carriers_of, common_period
from polewise.analysis.failures import EdgesRefused
from polewise.errors import NetlistError

STAGE = """
reference gnd
supply: vin --[28 V]-- gnd
leg: pole(vin, gnd, x, upper_duty = 0.5, rate = 100 kHz, upper = transistor(5 mohm), lower = transistor(5 mohm))
choke: x --[50 uH]-- out
store: out --[500 uF]-- gnd
load: out --[r: ohms]-- gnd
latch ohms = 3 ohm
study step {
    start settled
    run for 4 ms
    at 1.0035 ms: set ohms = 2 ohm
    keep choke.i, out.v, x.v
}
"""


def test_events_of_the_study_happen_inside_the_window() -> None:
    window = polewise.from_text(STAGE).magnify("step", 0.98e-3, 1.05e-3)
    assert [round(e.time_s, 7) for e in window.events] == [1.0035e-3]
    current = window.at("out.v", [1.0034e-3, 1.0036e-3]) / np.array([3.0, 2.0])
    assert current[0] < 5.0 < current[1]
    assert window.time[0] == 0.98e-3
    assert window.time[-1] == pytest.approx(1.05e-3)
    assert not window.facts.warnings


def test_what_happened_before_the_window_does_not_happen_again() -> None:
    window = polewise.from_text(STAGE).magnify("step", 3.5e-3, 3.6e-3)
    assert window.events == ()
    assert float(window.at("out.v", 3.55e-3)) / float(window.averaged.at("out.v", 3.55e-3)) == pytest.approx(1.0, abs=1e-3)


@pytest.mark.parametrize("phase", ["0 deg", "90 deg", "-90 deg", "450 deg"])
def test_carriers_keep_their_absolute_phase(phase: str) -> None:
    text = STAGE.replace("rate = 100 kHz", f"rate = 100 kHz, phase = {phase}")
    window = polewise.from_text(text).magnify("step", 2.0123e-3, 2.0623e-3)
    value = float(phase.split()[0]) % 360.0
    rises = window.time[np.flatnonzero((np.diff(window["x.v"]) > 20.0) & (np.diff(window.time) == 0.0))]
    assert rises.size == 5
    assert (rises * 1e5 - value / 360.0) % 1.0 == pytest.approx(np.zeros(5), abs=1e-6) or np.allclose((rises * 1e5 - value / 360.0 + 0.5) % 1.0, 0.5)


def test_sampled_control_keeps_its_instants_and_values() -> None:
    """A clocked integrator: its value in the window is that of the averaged run at every one of its instants, near enough."""
    text = """
reference gnd
supply: vin --[28 V]-- gnd
leg: pole(vin, gnd, x, upper_duty = drive, rate = 100 kHz, carrier = symmetric, sampling = single, upper = transistor(), lower = transistor())
choke: x --[rl: 20 mohm]--[l: 50 uH]-- out
store: out --[esr: 5 mohm]--[c: 500 uF]-- gnd
load: out --[r: ohms]-- gnd
latch ohms = 3 ohm
latch sum = 0.5
every 20 us: set sum = limit(sum + 0.0004 /V * (14 V - out.v), 0, 1)
signal drive = sum
study step {
    start settled
    run for 6 ms
    at 1 ms: set ohms = 2 ohm
    keep out.v, sum, choke.i
}
"""
    window = polewise.from_text(text).magnify("step", 1.5e-3, 1.7e-3)
    changes = window.time[np.flatnonzero(np.abs(np.diff(window["sum"])) > 0.0)]
    assert (changes * 5e4) % 1.0 == pytest.approx(np.zeros(changes.size), abs=1e-6) or np.allclose((changes * 5e4 + 0.5) % 1.0, 0.5)
    assert changes.size == 10
    assert np.max(np.abs(window.at("sum", changes + 1e-6) - window.averaged.at("sum", changes + 1e-6))) < 2e-4
    assert window.overlay()["out.v"].rms < 2e-3


def test_timers_are_carried_over() -> None:
    """A condition that must hold for 1 ms becomes true before the window and fires inside it, once."""
    text = STAGE.replace("study step {", "latch late = false\nstudy step {\n    whenever ohms < 2.5 ohm for 1 ms: set late = true").replace(
        "keep choke.i", "keep late, choke.i"
    )
    window = polewise.from_text(text).magnify("step", 1.9e-3, 2.1e-3)
    assert [round(e.time_s, 7) for e in window.events] == [2.0035e-3]


def test_dead_time_is_real() -> None:
    """In the dead time the lower transistor's own diode carries the current: its drop is seen for that long twice a period."""
    text = STAGE.replace("lower = transistor(5 mohm)", "lower = transistor(5 mohm, reverse_drop = 0.8 V), dead_time = 200 ns")
    window = polewise.from_text(text).magnify("step", 2.0e-3, 2.05e-3)
    curve = window.curve("x.v")
    low = curve.coefficient[:, 0] < -0.5
    assert float(np.sum(curve.length[low])) == pytest.approx(2 * 5 * 200e-9, rel=1e-3)


def test_losses_of_a_stage() -> None:
    """Conduction: R I^2 of each device; switching: the datasheet's energies scaled by 28 V and the edge's current, f times a second."""
    device = "transistor(5 mohm, turn_on = 30 uJ, turn_off = 20 uJ, recovery = 10 uJ, at_voltage = 56 V, at_current = 10 A)"
    text = STAGE.replace("upper = transistor(5 mohm), lower = transistor(5 mohm)", f"upper = {device}, lower = {device}")
    window = polewise.from_text(text).magnify_settled(keep=["choke.i"])
    stress = window.stress
    low, high = stress["choke"].current.lowest, stress["choke"].current.highest
    scale = 28.0 / 56.0 / 10.0
    for part in ("leg.upper", "leg.lower"):
        assert stress[part].conduction_loss_w == pytest.approx(5e-3 * stress[part].current.rms ** 2, rel=1e-9)
        assert stress[part].edges == 2
    # the upper one turns on into the lowest current and off from the highest; the lower one's diode recovers as the upper turns on
    assert stress["leg.upper"].switching_loss_w == pytest.approx(1e5 * scale * (30e-6 * low + 20e-6 * high), rel=2e-3)
    assert stress["leg.lower"].switching_loss_w == pytest.approx(1e5 * scale * 10e-6 * low, rel=2e-3)


def test_power_balances_over_a_period() -> None:
    """What the supply delivers is what resistor and devices lose, over one period of the periodic state."""
    window = polewise.from_text(STAGE).magnify_settled(keep=["supply.p", "load.p"])
    supply, load = (window.curve(n).integral() / 1e-5 for n in ("supply.p", "load.p"))
    lost = sum(window.stress[d].conduction_loss_w for d in ("leg.upper", "leg.lower"))
    assert -supply == pytest.approx(load + lost, rel=1e-8)


def test_rates_without_a_common_period_are_run_and_told() -> None:
    text = """
reference gnd
supply: bus --[48 V]-- gnd
leg1: pole(bus, gnd, x1, upper_duty = 0.5, rate = 40 kHz, upper = transistor(5 mohm), lower = transistor(5 mohm))
choke1: x1 --[100 uH]-- out
leg2: pole(bus, gnd, x2, upper_duty = 0.5, rate = 56.789 kHz, upper = transistor(5 mohm), lower = transistor(5 mohm))
choke2: x2 --[100 uH]-- out
store: out --[1 mF]-- gnd
load: out --[2 ohm]-- gnd
"""
    window = polewise.from_text(text).magnify_settled(keep=["out.v"])
    assert window.window.common_period_s is None
    assert not window.window.periodic
    assert "no common period" in window.window.note
    assert window.curve("out.v").integral() / window.curve("out.v").duration_s() == pytest.approx(24.0 - 12.0 * 5e-3 / 2, abs=1e-3)


def test_common_periods() -> None:
    assert common_period([1e-5, 2e-5, 5e-6]) == pytest.approx(2e-5)
    assert common_period([1 / 40e3, 1 / 30e3]) == pytest.approx(1e-4)
    assert common_period([1 / 40e3, 1 / 40.3e3]) is None
    assert common_period([]) is None


def test_a_duty_that_jumps_back_at_its_own_edge_is_latched() -> None:
    """Feed-forward from a rail behind a resistance: at turn-off the rail jumps up and the duty with it, on again, and so on."""
    text = """
reference gnd
supply: src --[400 V]-- gnd
line: src --[r: 100 mohm]--[l: 5 uH]-- bus
front: bus --[esr: 60 mohm]--[c: 100 uF]-- gnd
leg: pole(bus, gnd, x, upper_duty = drive, rate = 50 kHz, upper = transistor(5 mohm), lower = transistor(5 mohm))
choke: x --[l: 200 uH]-- out
store: out --[c: 500 uF]-- gnd
load: out --[r: 4 ohm]-- gnd
signal drive = 0.5 + 0.0009 /V * (bus.v - 390 V)
"""
    window = polewise.from_text(text).magnify_settled(keep=["out.v", "x.v"])
    assert np.sum(np.abs(np.diff(window["x.v"])) > 100.0) == 2


def test_instability_of_the_periodic_state_is_told() -> None:
    """A disturbance of peak-controlled current becomes -(m2 - ma)/(m1 + ma) of itself each period (Erickson & Maksimović, ch. 12; SS-8).

    Here m1 = 15 V/L, m2 = 33 V/L and the carrier stands for a ramp of ma = f/(2 /A): -(0.33 - 0.05)/(0.15 + 0.05) = -1.4.
    """
    text = """
reference gnd
supply: vin --[48 V]-- gnd
leg: pole(vin, gnd, x, upper_duty = 0.7 + 2 /A * (5 A - choke.i), rate = 100 kHz, upper = transistor(1 mohm), lower = transistor(1 mohm))
choke: x --[l: 100 uH]-- out
hold: out --[33 V]-- gnd
"""
    window = polewise.from_text(text).magnify_settled(keep=["choke.i"])
    assert window.window.periodic
    assert window.multipliers.real == pytest.approx([-1.4], rel=1e-2)
    assert "not stable" in window.window.note


def test_refusals() -> None:
    system = polewise.from_text(STAGE)
    with pytest.raises(EdgesRefused, match="after the end"):
        system.magnify("step", 3.9e-3, 4.1e-3)
    with pytest.raises(EdgesRefused, match="empty"):
        system.magnify("step", 2e-3, 1e-3)
    still = polewise.from_text("reference gnd\nsupply: a --[1 V]-- gnd\nload: a --[1 ohm]-- gnd\nstudy s {\n    start cold\n    run for 1 s\n}\n")
    with pytest.raises(EdgesRefused, match="no pole"):
        still.magnify("s", 0.1, 0.2)
    with pytest.raises(EdgesRefused, match="no pole"):
        still.magnify_settled()
    assert carriers_of(still.circuit) is None


def test_a_magnified_study_is_not_magnified_again() -> None:
    system = polewise.from_text(STAGE + "study close {\n    magnify step over 1 ms .. 1.1 ms\n    keep out.v\n}\n")
    with pytest.raises(NetlistError, match="itself a magnified stretch"):
        system.magnify("close", 1e-3, 1.05e-3)
    assert system.run("close").complete
