"""Periodic orbits: closed forms of linear circuits, and an unstable one."""

from __future__ import annotations

import math

import numpy as np
import pytest

import polewise


def test_choke_on_a_sine() -> None:
    # 0.5 ohm, 5 mH on 325 V, 50 Hz: i(0) is the imaginary part of the phasor V/(R + jwL); multiplier e^(-R T/L).
    system = polewise.from_text("""
        reference gnd
        mains: a --[325 V * sin(2*pi * 50 Hz * time)]-- gnd
        coil: a --[r: 0.5 ohm]--[l: 5 mH]-- gnd
    """)
    orbit = system.orbit(20e-3)
    phasor = 325 / (0.5 + 2j * math.pi * 50 * 5e-3)
    assert orbit.states["coil.l.i"] == pytest.approx(phasor.imag, rel=1e-7)
    assert orbit.multipliers == pytest.approx([math.exp(-0.5 * 0.02 / 5e-3)], rel=1e-5)
    assert orbit.stable


def test_orbit_of_a_nonlinear_circuit_repeats_itself() -> None:
    # A capacitor behind a sine and a quadratic conductance: run a period from the orbit and come back.
    system = polewise.from_text("""
        reference gnd
        mains: a --[10 V * sin(2*pi * 100 Hz * time)]-- gnd
        line: a --[r: 2 ohm]-- b
        store: b --[1 mF]-- gnd
        bend: b --[i = 0.02 A * (v / 1 V)^2 * (1 if v > 0 V otherwise -1)]-- gnd
    """)
    orbit = system.orbit(10e-3)
    assert orbit.stable
    assert 0.0 < abs(orbit.multipliers[0]) < math.exp(-10e-3 / 2e-3) * 1.01


def test_unstable_orbit_is_told() -> None:
    system = polewise.from_text("""
        reference gnd
        mains: a --[1 V * sin(2*pi * 50 Hz * time)]-- gnd
        coil: a --[r: 1 ohm]--[l: 10 mH]-- b
        store: b --[1 mF]-- gnd
        bad: b --[i = -0.2 S * v]-- gnd
    """)
    orbit = system.orbit(20e-3)
    by_hand = np.linalg.eigvals(np.array([[-100.0, -100.0], [1000.0, 200.0]]))
    assert sorted(np.abs(orbit.multipliers)) == pytest.approx(sorted(np.abs(np.exp(by_hand * 20e-3))), rel=1e-4)
    assert not orbit.stable
