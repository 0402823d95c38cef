"""Alternating circuits in phase quantities: a three-phase choke switched on, a six-pulse diode bridge, the ripple of a single-phase bus."""

from __future__ import annotations

import math

import numpy as np
import pytest

import polewise

PHASES = {"a": 0.0, "b": -2 * math.pi / 3, "c": 2 * math.pi / 3}


def rotating(result: polewise.Result, names: list[str], t: float) -> complex:
    """d + j q of three phase values at one time, amplitude-invariant, d along phase a's voltage at t = 0."""
    i = [result.at(name, t) for name in names]
    vector = 2 / 3 * sum(k * np.exp(1j * shift) for k, shift in zip(i, (0.0, 2 * math.pi / 3, -2 * math.pi / 3)))
    return complex(vector * np.exp(-1j * 2 * math.pi * 50 * t))


def test_three_phase_choke_switched_on() -> None:
    # R 0.5 ohm, L 5 mH on 325 V peak, 50 Hz, v_a at its peak at t = 0: i_dq = V/(R + jwL) (1 - e^(-(R/L + jw) t)) (elementary).
    lines = "\n".join(
        f"mains_{k}: {k} --[325 V * cos(2*pi * 50 Hz * time + {shift!r})]-- star\ncoil_{k}: {k} --[r: 0.5 ohm]--[l: 5 mH]-- neutral"
        for k, shift in PHASES.items()
    )
    result = polewise.from_text(
        f"""
        reference star
        {lines}
        ground: neutral --[r: 1 ohm]-- star
        study on {{
            start cold
            run for 300 ms
            keep coil_a.i, coil_b.i, coil_c.i, neutral.v
        }}
        """
    ).run("on", tolerance=1e-9, at=[5e-3, 20e-3])
    names = ["coil_a.i", "coil_b.i", "coil_c.i"]
    early = rotating(result, names, 5e-3)
    assert early.real == pytest.approx(173.746615092, rel=1e-8)
    assert early.imag == pytest.approx(-151.596160745, rel=1e-8)
    assert result.at("coil_a.i", 5e-3) == pytest.approx(151.596160745, rel=1e-8)
    assert result.at("coil_a.i", 20e-3) == pytest.approx(51.706763665, rel=1e-8)
    settled = rotating(result, names, 0.3)
    assert settled.real == pytest.approx(59.799784428, rel=1e-8)
    assert settled.imag == pytest.approx(-187.866563444, rel=1e-8)
    assert 1.5 * 325 * settled.real == pytest.approx(29152.394909, rel=1e-8)  # W
    assert -1.5 * 325 * settled.imag == pytest.approx(91584.949679, rel=1e-8)  # var
    # balanced: nothing in the neutral
    np.testing.assert_allclose(result["neutral.v"], 0.0, atol=1e-6)
    # at every step of the solver
    t = result.time
    z = 0.5 + 2j * math.pi * 50 * 5e-3
    wanted = (325 / z * (1 - np.exp(-(100 + 2j * math.pi * 50) * t)) * np.exp(2j * math.pi * 50 * t)).real
    np.testing.assert_allclose(result["coil_a.i"], wanted, rtol=0, atol=2e-6)


@pytest.mark.parametrize("reverse", ["1 Mohm", "10 Mohm"])
@pytest.mark.parametrize("bleed", ["", "bleed: minus --[r: 10 Mohm]-- star"], ids=["chokes meet alone", "with a bleeder"])
def test_six_pulse_diode_bridge_with_overlap(reverse: str, bleed: str) -> None:
    # 400 V line to line, 50 Hz, 1 mH in each phase, 50 A smooth: mean 540.189790 - 3 w L I/pi = 525.189790 V, overlap u 19.184734 deg
    # (Kassakian, Schlecht & Verghese, Principles of Power Electronics, 1991, ch. 5; IEC 60146-1-1).
    # Diodes of slope r take 2 r I outside the overlaps and 1.5 r I in them, and as the incoming current there averages about I/3, a
    # commutation loses r I u/3 less: 2 r I (1 - 3 u/(4 pi)) - r I u/(2 pi) in all, to second order.
    peak = 400 * math.sqrt(2 / 3)
    lines = "\n".join(
        f"mains_{k}: m{k} --[{peak!r} V * cos(2*pi * 50 Hz * time + {shift!r})]-- star\n"
        f"coil_{k}: m{k} --[l: 1 mH]-- {k}\n"
        f"up_{k}: {k} --[d: diode(0 V, 1 mohm, reverse = {reverse})]-- plus\n"
        f"down_{k}: minus --[d: diode(0 V, 1 mohm, reverse = {reverse})]-- {k}"
        for k, shift in PHASES.items()
    )
    result = polewise.from_text(
        f"""
        reference star
        {lines}
        {bleed}
        load: plus --[amps]-- minus
        table rise(t in s) in A = (0 s, 0 A) (50 ms, 50 A) hold
        signal amps = rise(time)
        signal v_d = plus.v - minus.v
        study steady {{
            start cold
            run for 120 ms
            keep v_d, coil_a.i
            mean: require mean(v_d) above 500 V during 100 ms .. 120 ms
            size: require rms(coil_a.i) below 50 A during 100 ms .. 120 ms
        }}
        """
    ).run("steady", tolerance=1e-8)
    u = math.radians(19.184734)
    drop = 2 * 1e-3 * 50 * (1 - 3 * u / (4 * math.pi)) - 1e-3 * 50 * u / (2 * math.pi)
    assert result.verdict["mean"].value == pytest.approx(525.189790 - drop, abs=5e-4)
    # line current of the same case, from the closed-form overlap waveform: 39.943934 A rms, fundamental 38.863355 A at -12.768465 deg
    # (1 Mohm lets up to 1.5 mA through)
    assert result.verdict["size"].value == pytest.approx(39.943934, rel=5e-5)
    t = np.linspace(100e-3, 120e-3, 20001)
    i = result.at("coil_a.i", t)
    fundamental = 2 * np.trapezoid(i * np.exp(-2j * math.pi * 50 * t), t) / 20e-3 / math.sqrt(2)
    assert abs(fundamental) == pytest.approx(38.863355, rel=1e-4)
    assert math.degrees(np.angle(fundamental)) == pytest.approx(-12.768465, abs=1e-2)


def test_bus_ripple_at_twice_line_frequency() -> None:
    # Constant 1 kW out, 1 kW (1 - cos 2 w t) in, 470 uF at 400 V: ripple exactly sqrt(V^2 + P/wC) - sqrt(V^2 - P/wC) = 16.935172 V
    # (16.931377 V by P/(w C V)). Source: Krein, Balog & Mirjafari, IEEE Trans. Power Electronics 27(11), 2012.
    result = polewise.from_text(
        """
        reference gnd
        bridge: bus --[p = -1 kW * (1 - cos(2*pi * 100 Hz * time))]-- gnd
        store: bus --[c: 470 uF initially 400 V]-- gnd
        load: bus --[1 kW above 300 V]-- gnd
        study beat {
            start cold
            run for 40 ms
            keep bus.v
            ripple: require swing(bus.v) below 20 V during 10 ms .. 40 ms
        }
        """
    ).run("beat", tolerance=1e-9)
    assert result.verdict["ripple"].value == pytest.approx(16.935172, abs=4e-6)  # 1e-8 of the bus voltage
    # C v v' = -P cos(2 w t) integrates to v^2 = 400^2 - (P/(w C)) sin(2 w t)
    w = 2 * math.pi * 50
    np.testing.assert_allclose(result["bus.v"], np.sqrt(160e3 - 1e3 / (w * 470e-6) * np.sin(2 * w * result.time)), rtol=1e-8)


THREE_PHASE_LOADS = {
    "resistor": "load: plus --[r: 20 ohm]-- minus",
    "resistor and choke": "load: plus --[r: 20 ohm]--[l: 10 mH]-- minus",
    "capacitor": "store: plus --[1 mF]-- minus\nload: plus --[r: 20 ohm]-- minus",
}


@pytest.mark.parametrize("load", THREE_PHASE_LOADS)
def test_three_phase_rectifier_without_a_neutral(load: str) -> None:
    # Chokes that meet in floating nodes: their currents sum to zero at every instant, power balances, and the mean voltage obeys
    # V_d = 1.350474 V_LL - 3 w L I/pi - 2 V_F wherever the choke's current is smooth (Kassakian, Schlecht & Verghese 1991, ch. 5).
    lines = "\n".join(
        f"mains_{k}: m{k} --[400 V * sqrt(2/3) * cos(2*pi * 50 Hz * time + {shift!r})]-- star\n"
        f"coil_{k}: m{k} --[l: 1 mH]-- {k}\n"
        f"up_{k}: {k} --[d: diode(0.8 V, 5 mohm)]-- plus\n"
        f"down_{k}: minus --[d: diode(0.8 V, 5 mohm)]-- {k}"
        for k, shift in PHASES.items()
    )
    result = polewise.from_text(
        f"""
        reference star
        {lines}
        {THREE_PHASE_LOADS[load]}
        signal v_d = plus.v - minus.v
        signal p_in = -(mains_a.p + mains_b.p + mains_c.p)
        signal p_lost = up_a.p + up_b.p + up_c.p + down_a.p + down_b.p + down_c.p
        study steady {{
            start cold
            run for 200 ms
            keep v_d, coil_a.i, coil_b.i, coil_c.i, load.i
            v: require mean(v_d) above 400 V during 180 ms .. 200 ms
            i: require mean(load.i) above 20 A during 180 ms .. 200 ms
            p_in: require mean(p_in) above 1 kW during 180 ms .. 200 ms
            p_lost: require mean(p_lost) above 1 W during 180 ms .. 200 ms
            p_out: require mean(load.p) above 1 kW during 180 ms .. 200 ms
        }}
        """
    ).run("steady", tolerance=1e-7)
    total = result["coil_a.i"] + result["coil_b.i"] + result["coil_c.i"]
    assert np.max(np.abs(total)) < 1e-9
    mean = {name: result.verdict[name].value for name in ("v", "i", "p_in", "p_lost", "p_out")}
    assert mean["p_in"] == pytest.approx(mean["p_lost"] + mean["p_out"], rel=2e-4)
    if load == "resistor and choke":
        ideal = 3 * math.sqrt(2) / math.pi * 400 - 3 * (2 * math.pi * 50) * 1e-3 * mean["i"] / math.pi - 2 * 0.8 - 2 * 5e-3 * mean["i"]
        assert mean["v"] == pytest.approx(ideal, rel=1e-3)  # 10 mH leave a few per cent of ripple in the current
