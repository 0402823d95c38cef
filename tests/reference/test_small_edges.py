"""A small sine on the duty of the exactly switched converter: the linearised averaged model against every edge.

Sources: the transfer function of the step-down stage is table 8.2 of Erickson & Maksimovic 2001 (SS-1); that natural sampling on a trailing
edge meets it exactly, and the figures of the discontinuous step-up stage, were computed independently with exact switched states (SS-5, SS-7
of the check values).
"""

from __future__ import annotations

import cmath
import math

import numpy as np
import pytest

import polewise

RATE = 100e3
SINE = """
latch shake = 0
signal duty = {duty!r} + {size!r} * shake * sin(2*pi * {f!r} Hz * time)
d/dt re = (out.v * cos(2*pi * {f!r} Hz * time)) if time > {begin!r} s otherwise 0 V
d/dt im = (out.v * sin(2*pi * {f!r} Hz * time)) if time > {begin!r} s otherwise 0 V
study shaken {{
    start cold
    run for {end!r} s
    at 0 s: set shake = 1
    keep re, im
}}
"""


def measured(circuit: str, duty: float, f: float, *, settled_s: float, size: float) -> complex:
    """Volts at the output per unit of duty, from the fundamental over whole periods once all else has decayed."""
    begin = math.ceil(settled_s * f) / f
    end = begin + 5 / f
    system = polewise.from_text(circuit + SINE.format(duty=duty, size=size, f=f, begin=begin, end=end))
    window = system.magnify("shaken", 0.0, end, keep=["re", "im"], tolerance=1e-10)
    return complex(window["im"][-1], window["re"][-1]) * 2 * f / 5 / size


def linearised(circuit: str, duty: float, f: float) -> complex:
    """The same from the averaged model."""
    system = polewise.from_text(circuit + f"\nlatch duty = {duty!r}")
    return complex(np.asarray(system.response("out.v", "duty", np.array([f])))[0])


STEP_DOWN = """
reference gnd
supply: vin --[28 V]-- gnd
leg: pole(vin, gnd, x, upper_duty = duty, rate = 100 kHz, upper = transistor(0 ohm), lower = transistor(0 ohm))
choke: x --[l: 50 uH initially 5 A]-- out
store: out --[c: 500 uF initially 15 V]-- gnd
load: out --[r: 3 ohm]-- gnd
"""


@pytest.mark.parametrize("share", [100, 20, 10])
def test_step_down_in_continuous_conduction(share: int) -> None:
    f = RATE / share
    s = 2j * math.pi * f
    published = 28 / (1 + s * 50e-6 / 3 + s * s * 50e-6 * 500e-6)
    by_edges = measured(STEP_DOWN, 15 / 28, f, settled_s=60e-3, size=2e-2)  # linear in the duty, so no need to be small
    assert abs(by_edges / published - 1) < 2e-6
    assert abs(linearised(STEP_DOWN, 15 / 28, f) / published - 1) < 1e-9


STEP_UP = """
reference gnd
supply: vin --[24 V]-- gnd
choke: vin --[l: 5 uH]-- x
leg: pole(out, gnd, x, duty = duty, rate = 100 kHz, upper = diode(0 V), lower = transistor(0 ohm))
store: out --[c: 470 uF initially 36 V]-- gnd
load: out --[r: 12 ohm]-- gnd
"""


@pytest.mark.parametrize(
    ("share", "size", "phase_deg", "model_ratio", "model_phase_deg"),
    # exact magnitude (V per unit duty) and phase; full-order model over exact
    [(100, 8.0831149, -84.9054, 1.00032, 0.003), (20, 1.6276950, -95.4581, 0.99737, 0.008), (10, 0.8158620, -102.8372, 0.98832, 0.055)],
)
def test_step_up_in_discontinuous_conduction(share: int, size: float, phase_deg: float, model_ratio: float, model_phase_deg: float) -> None:
    f = RATE / share
    by_edges = measured(STEP_UP, 0.25, f, settled_s=30e-3, size=2e-4)
    assert abs(by_edges) == pytest.approx(size, rel=2e-4)
    assert math.degrees(cmath.phase(by_edges)) == pytest.approx(phase_deg, abs=0.02)
    ratio = linearised(STEP_UP, 0.25, f) / cmath.rect(size, math.radians(phase_deg))
    assert abs(ratio) == pytest.approx(model_ratio, abs=2e-5)
    assert math.degrees(cmath.phase(ratio)) == pytest.approx(model_phase_deg, abs=2e-3)
