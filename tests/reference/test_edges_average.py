"""The averaged run against the cycle average of every edge: the error is the computed one, and falls at the theoretical rate.

Steady state: exact averages by matrix exponentials (switched.py knows nothing of the package), less the averaged operating point, are the
small-ripple error that must be found, for the basic converters in both conduction modes. Rates: 1/f^2, the rule of DC-10; a discontinuous
step-down with K held is the exception: its output ripple is of first order in 1/(C f) and stands in the on-phase one-sidedly, so 1/f (DC-7: 7.1 mV at
220 uF, 0.071 mV at 22 mF).
"""

from __future__ import annotations

from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest

import polewise

from .converters import Stage, inverting, step_down, step_up
from .switched import Part, continuous, discontinuous

TEXTS = {"step-down": step_down, "step-up": step_up, "inverting": inverting}
PIER = Path(__file__).resolve().parents[2] / "circuits" / "tern_point" / "pier.pole"


def parts_of(topology: str, s: Stage) -> tuple[Part, Part, Part]:
    """Transistor on, diode on, nothing on. x = (choke current, output voltage as a magnitude)."""
    feeds_on = topology == "step-down"  # the choke reaches the output while the transistor is on
    feeds_off = True
    source_off = topology == "step-up"  # the source stays in series with the choke while the diode is on

    def part(r_device: float, drop: float, source: bool, feeds: bool) -> Part:
        a = np.array([[-(s.r1 + r_device) / s.l, -1.0 / s.l if feeds else 0.0], [1.0 / s.c if feeds else 0.0, -1.0 / (s.r * s.c)]])
        return Part(a, np.array([((s.vg if source else 0.0) - drop) / s.l, 0.0]))

    idle = Part(np.array([[0.0, 0.0], [0.0, -1.0 / (s.r * s.c)]]), np.zeros(2))
    return part(s.r_on, 0.0, True, feeds_on), part(s.r_d, s.v_d, source_off, feeds_off), idle


LOSSES = {"r1": 0.05, "r_on": 0.03, "r_d": 0.02, "v_d": 0.8}


def stage_at(topology: str, mode: str, f: float) -> Stage:
    if mode == "continuous":
        return Stage(24.0, 0.5, 8.0, l=100e-6, c=100e-6, f=f, **LOSSES)
    k = {"step-down": 0.2, "step-up": 0.08, "inverting": 0.08}[topology]  # K = 2 L f/R held: L falls with f
    return Stage(24.0, 0.3, 10.0, l=k * 10.0 / (2.0 * f), c=100e-6, f=f)


@pytest.mark.parametrize("mode", ["continuous", "discontinuous"])
@pytest.mark.parametrize("topology", list(TEXTS))
def test_steady_error_is_the_computed_one_and_falls_as_it_must(topology: str, mode: str) -> None:
    errors = []
    for f in (50e3, 100e3, 200e3):
        s = stage_at(topology, mode, f)
        system = polewise.from_text(TEXTS[topology](s))
        averaged = system.settled()["v_out"]
        on, off, idle = parts_of(topology, s)
        if mode == "continuous":
            exact = continuous((on, off), s.d, 1.0 / f).average[1]
        else:
            exact = discontinuous((on, off, idle), s.d, 1.0 / f, (0.5 * averaged, 1.5 * averaged)).average[1]
        window = system.magnify_settled(keep=["v_out"])
        curve = window.curve("v_out")
        error = curve.integral() / curve.duration_s() - averaged
        assert error == pytest.approx(exact - averaged, rel=1e-3, abs=2e-9 * averaged)
        errors.append(error)
    ratio = [a / b for a, b in pairwise(errors)]
    order = 2.0 if (topology, mode) == ("step-down", "discontinuous") else 4.0
    assert ratio == pytest.approx([order, order], rel=0.05)


def modulated(kind: str, f: float, carrier: str, sampling: str = "natural") -> str:
    """A stage whose duty swings at 500 Hz."""
    pair = "upper = transistor(30 mohm), lower = transistor(20 mohm)"
    settings = f"rate = {f!r} Hz, carrier = {carrier}, sampling = {sampling}, {pair}"
    legs = {
        "step-up": f"choke: vin --[rl: 50 mohm]--[l: 100 uH]-- x\nleg: pole(out, gnd, x, lower_duty = d, {settings})",
        "step-down": f"leg: pole(vin, gnd, x, upper_duty = d, {settings})\nchoke: x --[rl: 50 mohm]--[l: 100 uH]-- out",
        "inverting": f"leg: pole(vin, out, x, upper_duty = d, {settings})\nchoke: x --[rl: 50 mohm]--[l: 100 uH]-- gnd",
    }
    return f"""
reference gnd
supply: vin --[24 V]-- gnd
{legs[kind]}
store: out --[c: 220 uF]-- gnd
load: out --[r: 20 ohm]-- gnd
signal d = 0.3 + 0.1 * sin(2*pi * 500 Hz * time)
study swing {{
    start cold
    run for 4 ms
    keep choke.i, out.v
}}
"""


@pytest.mark.parametrize("carrier", ["trailing", "symmetric"])
@pytest.mark.parametrize("kind", ["step-down", "step-up", "inverting"])
def test_transient_error_falls_with_the_square_of_the_frequency(kind: str, carrier: str) -> None:
    """With natural sampling, in a transient, from a start whose means agree: terms of ripple only."""
    errors = []
    for f in (50e3, 100e3, 200e3):
        window = polewise.from_text(modulated(kind, f, carrier)).magnify("swing", 2e-3, 3e-3, tolerance=1e-9)
        over = window.overlay()
        errors.append((over["choke.i"].rms, over["out.v"].rms))
    for a, b in pairwise(errors):
        assert (a[0] / b[0], a[1] / b[1]) == pytest.approx((4.0, 4.0), rel=0.1)


@pytest.mark.parametrize(("carrier", "shift"), [("trailing", -1.0), ("leading", 1.0), ("symmetric", 0.0)])
def test_what_a_carrier_adds_within_its_period(carrier: str, shift: float) -> None:
    """models.md: (1/2 - D) T times the slope for a sawtooth, O(T^2) for a symmetric one; on the pole's own voltage, whole periods centred."""
    f, slope, base = 100e3, 40.0, 0.25
    pair = "upper = transistor(0 ohm), lower = transistor(0 ohm)"
    window = polewise.from_text(
        f"""
reference gnd
supply: vin --[10 V]-- gnd
leg: pole(vin, gnd, x, upper_duty = {base} + {slope} /s * time, rate = {f!r} Hz, carrier = {carrier}, {pair})
load: x --[l: 1 mH]--[r: 1 ohm]-- gnd
study ramp {{
    start cold
    run for 3 ms
    keep x.v
}}
"""
    ).magnify("ramp", 1e-3, 2e-3, tolerance=1e-10)
    middles = 1e-3 + (np.arange(5, 90) + 0.5) / f
    error = window.cycle_average("x.v").at(middles) - window.averaged.at("x.v", middles)
    duty = base + slope * middles
    expected = shift * (0.5 - duty) / f * slope * 10.0
    assert error == pytest.approx(expected, rel=2e-2, abs=3e-6 * slope / 40.0)


def bridge(f: float) -> str:
    return "\n".join(
        [
            "reference rail_n",
            "supply: rail_p --[700 V]-- rail_n",
            *(
                f"leg{k}: pole(rail_p, rail_n, m{k}, upper_duty = d{k}, rate = {f!r} Hz, carrier = symmetric, "
                f"upper = transistor(10 mohm), lower = transistor(10 mohm))\n"
                f"line{k}: m{k} --[l: 2 mH]--[r: 5 ohm]-- star\n"
                f"signal d{k} = 0.5 + 0.4 * sin(2*pi * 50 Hz * time - {120 * k} deg)"
                for k in range(3)
            ),
            "study turning {\n    start cold\n    run for 30 ms\n    keep line0.i, line1.i, supply.i\n}",
        ]
    )


def test_three_phase_bridge_with_sine_modulation() -> None:
    """Errors fall with 1/f^2; the average of the source's current is 0.75 m I cos(phi) (AC-10's last line, m = 0.8)."""
    errors = []
    for f in (4e3, 8e3, 16e3):
        window = polewise.from_text(bridge(f)).magnify("turning", 10e-3, 30e-3, keep=["line0.i", "supply.i"], tolerance=1e-7)
        errors.append(window.overlay()["line0.i"].rms)
    for a, b in pairwise(errors):
        assert a / b == pytest.approx(4.0, rel=0.1)
    z = 5.01 + 2j * np.pi * 50 * 2e-3
    peak = 0.4 * 700 / abs(z)
    curve = window.curve("supply.i")
    assert -curve.integral() / curve.duration_s() == pytest.approx(0.75 * 0.8 * peak * np.cos(np.angle(z)), rel=5e-3)


def test_the_demo_pier() -> None:
    """Thirteen poles of 20, 30 and 40 kHz: the error is a small part of the ripple itself."""
    system = polewise.load(PIER)
    names = ["bus.v", "battery1.choke.i", "berth2.stage.choke.i", "roof1.choke.i", "lights.choke.i"]
    window = system.magnify("load_step", 20.5e-3, 21.5e-3, keep=names)
    for error in window.overlay().errors:
        assert error.rms_relative < 0.04, (error.name, error.rms, error.swing)
