"""Published stiff initial value problems written as netlists: how many digits of their reference solutions are reached.

Equations and end values: open Test Set for Initial Value Problem Solvers (CWI: Lioen & de Swart 1998; Bari: Mazzia, Magherini & Iavernaro,
release 2.3, 2006). Intermediate values and sums: the same equations solved by an independent implicit method.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import polewise

CIRCUITS = Path(__file__).parent / "circuits"


def digits(got: np.ndarray, wanted: np.ndarray) -> float:
    """Correct digits of the worst component: -log10 of its relative error."""
    return float(-np.log10(np.max(np.abs((np.asarray(got) - wanted) / wanted))))


def end(result: polewise.Result, names: list[str]) -> np.ndarray:
    return np.array([result[name][-1] for name in names])


def test_ring_modulator() -> None:
    published = [
        -0.2339057358486745e-1, -0.7367485485540825e-2, 0.2582956709291169, -0.4064465721283450, -0.4039455665149794,
        0.2607966765422943, 0.1106761861269975, 0.2939904342435596e-6, -0.2840029933642329e-7, 0.7267198267264553e-3,
        0.7929487196960840e-3, -0.7255283495698965e-3, -0.7941401968526521e-3, 0.7088495416976114e-4, 0.2390059075236570e-4,
    ]  # fmt: skip
    system, names = polewise.load(CIRCUITS / "ring_modulator.pole"), [f"y{k}" for k in range(1, 16)]
    # A hard problem: fast oscillations in all states. Four digits were reached at 1e-7, five at 1e-8; the independent solutions agree to nine.
    for tolerance, reached in ((1e-6, 3.0), (1e-8, 4.5), (1e-10, 6.0)):
        assert digits(end(system.run("millisecond", tolerance=tolerance), names), np.array(published)) > reached


def test_van_der_pol() -> None:
    published = np.array([1.706167732170469, -8.928097010248125e-4])
    system = polewise.load(CIRCUITS / "van_der_pol.pole")
    for tolerance, reached in ((1e-6, 4.5), (1e-8, 6.0), (1e-10, 8.0), (1e-12, 9.5)):
        assert digits(end(system.run("one_period", tolerance=tolerance), ["y1", "y2"]), published) > reached


def test_robertson_over_eleven_decades() -> None:
    result = polewise.load(CIRCUITS / "robertson.pole").run("long_run", tolerance=1e-9, at=[0.4, 40.0])
    names = ["y1", "y2", "y3"]
    early = np.array([result.at(name, [0.4, 40.0]) for name in names])
    assert digits(early[:, 0], np.array([0.985172113861, 3.38639537897e-5, 0.0147940221852])) > 7
    assert digits(early[:, 1], np.array([0.715827068719, 9.18553476456e-6, 0.284163745746])) > 7
    assert digits(end(result, names), np.array([0.2083340149701255e-7, 0.8333360770334713e-13, 0.9999999791665050])) > 5
    assert np.max(np.abs(result["y1"] + result["y2"] + result["y3"] - 1)) < 1e-12  # the conserved sum


def test_nand_gate() -> None:
    published = np.array([
        4.971088699385777, 4.999752103929311, -2.499998781491227, -2.499999999999975, 4.970837023296724,
        -0.2091214032073855, 4.970593243278363, -2.500077409198803, -2.499998781491227, -0.2090289583878100,
        -0.2399999999966269e-3, -0.2091214032073855, -2.499999999999991, -2.500077409198803,
    ])  # fmt: skip
    result = polewise.load(CIRCUITS / "nand_gate.pole").run("cycle", tolerance=1e-8, at=[20.0, 60.0])
    order = ["load.src.v", "load.drn.v", "load.bs.v", "load.bd.v", "n5.v", "upper.src.v", "upper.drn.v", "upper.bs.v", "upper.bd.v", "n10.v",
             "lower.src.v", "lower.drn.v", "lower.bs.v", "lower.bd.v"]  # fmt: skip
    np.testing.assert_allclose(end(result, order), published, rtol=0, atol=1e-6)
    # the outputs at t = 20 and, to 1e-10, the same at t = 60
    for time in (20.0, 60.0):
        assert result.at("load.src.v", time) == pytest.approx(4.97154046263, abs=1e-6)
        assert result.at("n5.v", time) == pytest.approx(4.97129271677, abs=1e-6)
        assert result.at("n10.v", time) == pytest.approx(0.0, abs=1e-6)


def test_adding_unit_adds() -> None:
    instants = np.arange(20.0, 321.0, 20.0)
    result = polewise.load(CIRCUITS / "adding_unit.pole").run("additions", tolerance=1e-5, at=list(instants[:-1]))
    outputs = np.array([result.at(name, instants) for name in ("n49.v", "n130.v", "n148.v")])
    # the published reference was made at tolerance 1e-5, which is what it can be compared to; an independent second-order method at 12.5 ms
    assert outputs[:, -1] == pytest.approx([0.2040419147264534, 4.997238455712048, 0.2038985905095614], abs=1e-5)
    assert outputs[:, -1] == pytest.approx([0.20404191, 4.99724275, 0.20389857], abs=1e-6)
    assert np.all((outputs > 4.9) | (outputs < 0.3))
    bit0, bit1, no_carry = outputs > 2.5
    total = bit0 + 2 * bit1 + 4 * (1 - no_carry)
    assert list(total) == [5, 4, 3, 4, 3, 2, 1, 7, 6, 5, 4, 5, 4, 3, 2, 6]
