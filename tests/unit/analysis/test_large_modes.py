"""Modes by regions equal those of the dense way: values, cluster sizes, shares."""

from __future__ import annotations

import numpy as np
import pytest

import polewise

PIER = """
    reference gnd
    supply: src --[800 V]-- gnd
    feeder: src --[r: 2 mohm]--[l: 5 uH]-- bus
    bank: bus --[esr: 1 mohm]--[c: 2 mF]-- gnd
    assembly berth(inp, inn, out) {
        given L = 180 uH
        link:  inp --[l: 2 uH]--[r: 20 mohm]-- near
        buff:  near --[esr: 50 mohm]--[c: 200 uF]-- inn
        leg:   pole(near, inn, x, upper_duty = 0.5, rate = 40 kHz, upper = transistor(9 mohm), lower = transistor(9 mohm))
        choke: x --[rl: 40 mohm]--[l: L]-- out
        cap:   out --[1.2 mF]-- inn
        boat:  out --[r: 8 ohm]-- inn
    }
    each n in 1..4 { berth{n}: berth(bus, gnd, b{n}, L = 120 uH) }
    each n in 5..14 { berth{n}: berth(bus, gnd, b{n}) }
"""


def test_region_equals_the_dense_way() -> None:
    system = polewise.from_text(PIER)
    region = (5.0, 50e3, 0.95)
    found = system.modes(region=region)
    dense = [m for m in system.modes(sensitivities=False) if region[0] <= m.frequency_hz <= region[1] and m.damping < region[2]]
    assert [m.multiplicity for m in found] == [m.multiplicity for m in dense]
    assert {3, 9} <= {m.multiplicity for m in found}
    assert [m.eigenvalue for m in found] == pytest.approx([m.eigenvalue for m in dense], rel=1e-9)
    for one, other in zip(found, dense, strict=True):
        assert sum(one.participation.values()) == pytest.approx(1.0, abs=1e-6)
        if one.multiplicity == 1:
            for name, share in other.participation.items():
                assert one.participation.get(name, 0.0) == pytest.approx(share, abs=1e-7)
        else:  # read with a few sign vectors: families add up well, single berths roughly
            families = [sum(abs(v) for k, v in m.by_assembly.items() if k in {f"berth{n}" for n in range(1, 5)}) for m in (one, other)]
            assert families[0] == pytest.approx(families[1], abs=0.15)


def test_region_must_make_sense() -> None:
    system = polewise.from_text(PIER)
    with pytest.raises(polewise.PolewiseError, match="region"):
        system.modes(region=(100.0, 10.0, 0.5))
    assert np.isfinite(system.modes(region=(5.0, 50e3, 0.95), count=2)[0].damping)
    assert len(system.modes(region=(5.0, 50e3, 0.95), count=2)) == 2
