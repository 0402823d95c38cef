"""Modes: whose they are, repeated ones, sensitivities against differences, delays, kinks, points of a run."""

from __future__ import annotations

import math

import numpy as np
import pytest

import polewise
from polewise.analysis.modes import Mode

BERTHS = """
    reference gnd
    src: a --[270 V]-- gnd
    feed: a --[r: 0.05 ohm]--[l: 50 uH]-- bus
    bank: bus --[c: 200 uF]-- gnd
    assembly berth(inp, inn) {{
        given c = 300 uF
        filter: inp --[r: 0.02 ohm]--[l: 20 uH]-- m
        store: m --[c: c]-- inn
        load: m --[2 kW above 100 V]-- inn
    }}
    each n in 1..6 {{ berth{{n}}: berth(bus, gnd) }}
    {more}
"""


def test_participation_names_the_culprit() -> None:
    # Berth 4 alone has a small capacitor: the least damped mode is its own.
    system = polewise.from_text(BERTHS.format(more="given berth4.c = 10 uF"))
    mode = system.modes()[0]
    assert mode.owners()[0][0] == "berth4"
    assert mode.owners()[0][1] > 0.8
    assert all(e.name.startswith("berth4.") for e in mode.elements)
    assert "berth4" in mode.sentence()


def test_participations_sum_to_one() -> None:
    for mode in polewise.from_text(BERTHS.format(more="")).modes():
        assert sum(mode.participation.values()) == pytest.approx(1.0, abs=1e-12)
        assert sum(mode.by_assembly.values()) == pytest.approx(1.0, abs=1e-12)


def test_identical_berths_are_one_repeated_mode() -> None:
    modes = polewise.from_text(BERTHS.format(more="")).modes()
    assert sorted(m.multiplicity for m in modes) == [1, 1, 5]
    repeated = next(m for m in modes if m.multiplicity == 5)
    # Between themselves: each berth's filter with the bus standing still.
    r, l_h, c = 0.02, 20e-6, 300e-6
    v = polewise.from_text(BERTHS.format(more="")).settled()["berth1.m.v"]
    by_hand = np.linalg.eigvals(np.array([[-r / l_h, -1 / l_h], [1 / c, 2e3 / v**2 / c]]))
    assert repeated.eigenvalue == pytest.approx(by_hand[np.argmax(by_hand.imag)], rel=1e-9)
    assert [weight for _, weight in repeated.owners()[:6]] == pytest.approx([1 / 6] * 6, rel=1e-9)
    assert repeated.elements[0].name.startswith("berth{*}.")


def regulated(scale: dict[str, float]) -> polewise.System:
    """A step-up stage with integral control and a lossy choke, in which every sensitivity has a part through the operating point."""
    value = {"r": 0.05, "l": 100e-6, "c": 220e-6, "load": 20.0, **scale}
    return polewise.from_text(f"""
        reference gnd
        table gain(i in A) in V = (0 A, 0 V) (5 A, 0.2 V) (20 A, 1 V) smooth extend
        supply: vin --[24 V]-- gnd
        choke: vin --[r: {value["r"]!r} ohm]--[l: {value["l"]!r} H]--[v = gain(i)]-- x
        leg: pole(out, gnd, x, duty = drive, rate = 100 kHz, upper = diode(0.8 V, 20 mohm), lower = transistor(30 mohm))
        store: out --[c: {value["c"]!r} F]-- gnd
        load: out --[r: {value["load"]!r} ohm]-- gnd
        d/dt drive = 2 /V/s * (44 V - out.v)  initially 0.45  within 0 .. 0.9
    """)


def nearest(modes: polewise.analysis.modes.Modes, value: complex) -> Mode:
    return min(modes, key=lambda m: abs(m.eigenvalue - value))


@pytest.mark.parametrize("name", ["r", "l", "c", "load"])
def test_sensitivities_equal_differences(name: str) -> None:
    from polewise.analysis.modes import cluster
    from polewise.analysis.sensitivity import relative_sensitivities
    from polewise.analysis.spectrum import spectrum

    system = regulated({})
    stand = system._stand(None)
    probing = stand.probing()
    scales = {n: p.latch for n, p in probing.scale_elements().items()}
    made = stand.linearised(probing, [], [])
    found = spectrum(made.linear)
    clusters = cluster(found)
    pulls = relative_sensitivities(made, found, clusters, scales)
    element = {"r": "choke.r", "l": "choke.l", "c": "store.c", "load": "load.r"}[name]
    base = {"r": 0.05, "l": 100e-6, "c": 220e-6, "load": 20.0}[name]
    step = 1e-4
    up, down = (regulated({name: base * (1 + k * step)}).modes(sensitivities=False) for k in (1, -1))
    for k, c in enumerate(clusters):
        value = complex(found.values[c.members[0]])
        difference = (nearest(up, value).eigenvalue - nearest(down, value).eigenvalue) / (2 * step)
        assert pulls[element][k] == pytest.approx(difference, rel=2e-6, abs=1e-6 * abs(value))


def test_modes_of_a_delay_satisfy_its_equation() -> None:
    # x' = -k x(t - T): s + k e^(-s T) = 0, endless roots; with k T = 1 the first is known to be -0.3181315 +- 1.3372357j in units of 1/T.
    system = polewise.from_text("""
        reference gnd
        d/dt x = -1000 /s * late  initially 0
        signal late = x delayed by 1 ms
        feed: a --[1 V * x]-- gnd
        load: a --[1 ohm]-- gnd
    """)
    modes = system.modes()
    assert modes.complete_to_hz == pytest.approx(10.0 / (2 * math.pi * 1e-3))
    assert modes[0].eigenvalue == pytest.approx(1e3 * (-0.31813150520476413 + 1.3372357014306895j), rel=1e-9)
    for mode in modes:
        s = mode.eigenvalue
        assert abs(s + 1e3 * np.exp(-s * 1e-3)) < 1e-8 * abs(s)
        assert sum(mode.participation.values()) == pytest.approx(1.0, abs=1e-9)
    # By Lambert's function: s T = W_k(-1), imaginary parts 1.34 and 7.59 lie below the limit of 10.
    assert len(modes) == 2


def test_sliding_average_is_no_mode_of_its_own() -> None:
    system = polewise.from_text("""
        reference gnd
        feed: a --[1 V]-- gnd
        low: a --[1 kohm]-- b
        bank: b --[1 uF]-- gnd
        signal mean = b.v averaged over 2 ms
    """)
    f = np.geomspace(1.0, 5e3, 40)
    s = 2j * np.pi * f
    assert system.response("mean", "feed.v", f) == pytest.approx((1 - np.exp(-s * 2e-3)) / (s * 2e-3) / (1 + s * 1e-3), abs=1e-12)
    assert [m.eigenvalue for m in system.modes()] == pytest.approx([-1000.0])


def test_both_sides_of_a_kink() -> None:
    # A limited voltage that stands exactly at its limit: one side follows with a gain, the other does not.
    system = polewise.from_text("""
        reference gnd
        feed: a --[limit(2 V + 0.5 * (b.v - 2 V), 0 V, 2 V)]-- gnd
        low: a --[1 kohm]-- b
        bank: b --[1 uF]-- gnd
    """)
    modes = system.modes()
    assert len(modes.kinks) == 1
    both = sorted(m[0].eigenvalue.real for m in (modes, *modes.other_sides))
    assert both == pytest.approx([-1000.0, -500.0], rel=1e-9)


def test_modes_at_a_time_of_a_study() -> None:
    # A resistor that a latch halves during the run.
    system = polewise.from_text(
        """
        reference gnd
        feed: a --[1 V]-- gnd
        low: a --[ohms]-- b
        bank: b --[1 uF]-- gnd
        latch ohms = 1 kohm
        study step { start settled; run for 10 ms; at 5 ms: set ohms = 500 ohm; keep b.v }
    """.replace("; ", "\n        ")
    )
    assert system.modes()[0].eigenvalue.real == pytest.approx(-1000.0)
    assert system.modes(at=("step", 2e-3))[0].eigenvalue.real == pytest.approx(-1000.0)
    assert system.modes(at=("step", 8e-3))[0].eigenvalue.real == pytest.approx(-2000.0)


def test_bounded_integrator_at_its_bound_is_no_mode() -> None:
    system = polewise.from_text("""
        reference gnd
        d/dt x = 5 /s  initially 0  within 0 .. 1
        feed: a --[1 V * x]-- gnd
        low: a --[1 kohm]-- b
        bank: b --[1 uF]-- gnd
    """)
    values = sorted(m.eigenvalue.real for m in system.modes())
    assert values == pytest.approx([-1000.0, 0.0])


def test_circuit_in_phase_quantities_says_that_it_never_rests() -> None:
    system = polewise.from_text("""
        reference gnd
        mains: a --[325 V * sin(2*pi * 50 Hz * time)]-- gnd
        low: a --[1 kohm]-- b
        bank: b --[1 uF]-- gnd
    """)
    with pytest.raises(polewise.PolewiseError, match="no constant operating point"):
        system.modes()
