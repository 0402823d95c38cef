"""The state of rest: which branch, the figure at a fold, and each thing that can't rest, named."""

from __future__ import annotations

import math

import numpy as np
import pytest

from polewise.errors import DependsOnTime, IntegratorCannotRest, IntegratorsFight, NoOperatingPoint, PowerLimit, SingularSystem
from polewise.kernels import opcodes as op
from polewise.solve.operating_point import find_operating_point
from polewise.solve.pseudo_transient import settle_in_pseudo_time
from polewise.solve.square_system import SquareSystem, rest_rows


def _line_with_power(b, power, *, source=100.0, r=0.1, v_min=30.0):
    """A source behind a resistance feeds one constant power: (source - v)/r = i(v)."""
    v = b.x("v")
    drive = b.mul(b.source_scale, source)
    b.algebraic("v", b.sub(b.constant_power("load", v, power, v_min), b.div(b.sub(drive, v), r)), scale=100.0)
    return b.system()


def test_constant_power_rests_on_its_normal_branch(build):
    """100 V, 0.1 ohm, 20 kW: V = (100 + sqrt(100^2 - 4*0.1*20e3))/2 = 72.36 V (check value ST-3's steady state)."""
    point = find_operating_point(_line_with_power(build(), 20e3))
    assert point.x[0] == pytest.approx((100 + math.sqrt(100**2 - 4 * 0.1 * 20e3)) / 2, rel=1e-12)
    assert point.strategy == "power ramp"
    assert point.collapsed == ()


def test_close_to_the_fold(build):
    point = find_operating_point(_line_with_power(build(), 24.999e3))
    assert point.x[0] == pytest.approx((100 + math.sqrt(100**2 - 4 * 0.1 * 24.999e3)) / 2, rel=1e-9)


@pytest.mark.parametrize("power", [25.1e3, 30e3, 400e3])
def test_beyond_the_fold_the_limit_is_told(build, power):
    """The most a line delivers is V^2/4r = 25 kW."""
    with pytest.raises(PowerLimit) as caught:
        find_operating_point(_line_with_power(build(), power))
    assert caught.value.power_w == pytest.approx(25e3, rel=1e-9)
    assert caught.value.power_scale == pytest.approx(25e3 / power, rel=1e-9)
    assert "the line can deliver 25 kW" in caught.value.diagnostic.headline


def test_a_load_that_fades_before_the_fold(build):
    """Stated only down to 80 V, the load gets 80 V * 20 V / 0.1 ohm = 16 kW before it fades; that is no success."""
    with pytest.raises(PowerLimit) as caught:
        find_operating_point(_line_with_power(build(), 20e3, v_min=80.0))
    assert caught.value.power_w == pytest.approx(16e3, rel=1e-6)
    assert "falls below" in caught.value.diagnostic.headline


def test_a_load_that_is_not_fed_is_reported(build):
    point = find_operating_point(_line_with_power(build(), 20e3, source=0.0))
    assert point.x[0] == pytest.approx(0.0, abs=1e-9)
    assert point.collapsed == ("load",)
    assert point.warnings[0].code == "power-collapsed"


def _pi_on_line(b, setpoints):
    """Current sources, each the output of an unbounded integrator of (setpoint - v), feed one resistor."""
    v = b.x("v")
    outputs = []
    for k, setpoint in enumerate(setpoints):
        outputs.append(b.state(f"integ{k}", b.mul(40.0 + k, b.sub(setpoint, v)), integrator=True))
    b.algebraic("v", b.sub(b.div(v, 5.0), b.add(*outputs)), scale=100.0)
    return b.system()


def test_one_integrator_regulates(build):
    point = find_operating_point(_pi_on_line(build(), [50.0]))
    assert point.x == pytest.approx([10.0, 50.0], rel=1e-12)


def test_two_integrators_fight(build):
    with pytest.raises(IntegratorsFight) as caught:
        find_operating_point(_pi_on_line(build(), [50.0, 51.0]))
    assert "`integ0` and `integ1`" in caught.value.diagnostic.headline
    assert "against each other" in caught.value.diagnostic.headline


def test_two_integrators_of_one_setpoint_share(build):
    with pytest.raises(IntegratorsFight) as caught:
        find_operating_point(_pi_on_line(build(), [50.0, 50.0]))
    assert "share" in caught.value.diagnostic.headline


def test_two_of_three_integrators_are_named(build):
    b = build()
    _pi_on_line(b, [50.0, 51.0])
    b.state("other", b.sub(3.0, b.x("other")))
    with pytest.raises(IntegratorsFight) as caught:
        find_operating_point(b.system())
    assert "`other`" not in caught.value.diagnostic.headline


def test_integrators_that_fight_behind_limits(build):
    """The searches end where one output is at its limit; the fight is told all the same."""
    b = build()
    v = b.x("v")
    drives = []
    for k, setpoint in enumerate((50.0, 51.0)):
        integ = b.state(f"integ{k}", b.mul(4.0, b.sub(setpoint, v)), initial=0.5, integrator=True)
        drives.append(b.mul(40.0, b.g.limit(integ, b.c(0.0), b.c(1.0))))
    b.algebraic("v", b.sub(b.div(v, 1.0), b.add(*drives)), scale=100.0)
    with pytest.raises(IntegratorsFight) as caught:
        find_operating_point(b.system())
    assert "`integ0` and `integ1` work against each other" in caught.value.diagnostic.headline


def test_an_inductor_on_a_source_never_rests(build):
    b = build()
    i = b.x("i")
    b.state("i", 300.0, charge=b.mul(1e-3, i), integrator=True)
    with pytest.raises(IntegratorCannotRest) as caught:
        find_operating_point(b.system())
    assert "3e+05 /s" in caught.value.diagnostic.headline


def test_sources_are_ramped_where_newton_fails(build):
    """From a guess far up a steep law Newton's steps are too short; from no source at all a few small steps of the source get there."""
    b = build()
    v = b.x("v")
    steep = b.g.unary(op.SINH, b.div(v, 0.03))
    b.algebraic("v", b.sub(b.mul(1e-9, steep), b.sub(b.mul(b.source_scale, 20.0), v)), guess=60.0)
    point = find_operating_point(b.system())
    assert point.strategy == "source ramp"
    assert 1e-9 * math.sinh(point.x[0] / 0.03) == pytest.approx(20.0 - point.x[0], rel=1e-9)


def test_pseudo_time_settles_where_newton_goes_astray(build):
    """x' = -x - 3 sin(9 x) has many stationary points of its residual's size; in pseudo-time x falls into a basin and rests."""
    b = build()
    x = b.x("x")
    b.state("x", b.sub(b.mul(-1.0, x), b.mul(3.0, b.g.unary(op.SIN, b.mul(9.0, x)))))
    system = b.system()
    square = SquareSystem(system, rest_rows(system))
    outcome, _ = settle_in_pseudo_time(square, np.array([3.0]))
    assert outcome.converged
    assert outcome.z[0] + 3 * math.sin(9 * outcome.z[0]) == pytest.approx(0.0, abs=1e-12)


def test_an_integrator_of_a_constant_never_rests(build):
    b = build()
    b.state("turns", 3.0, integrator=True)
    b.state("v", b.sub(1.0, b.x("v")))
    with pytest.raises(IntegratorCannotRest) as caught:
        find_operating_point(b.system())
    assert "`turns`" in caught.value.diagnostic.headline
    assert "3 /s" in caught.value.diagnostic.headline


def test_an_integrator_behind_a_limit_never_rests(build):
    """v = 10 limit(u, 0, 1) can't reach the 50 that the integrator wants."""
    b = build()
    v, u = b.x("v"), b.x("u")
    b.state("u", b.mul(2.0, b.sub(50.0, v)), initial=0.5, integrator=True)
    b.algebraic("v", b.sub(v, b.mul(10.0, b.g.limit(u, b.c(0.0), b.c(1.0)))), scale=10.0)
    with pytest.raises(IntegratorCannotRest) as caught:
        find_operating_point(b.system())
    assert "`u`" in caught.value.diagnostic.headline
    assert "80 /s" in caught.value.diagnostic.headline


def test_a_bounded_integrator_rests_at_its_bound(build):
    b = build()
    v, u = b.x("v"), b.x("u")
    b.state("u", b.mul(2.0, b.sub(50.0, v)), initial=0.5, integrator=True, bounds=(0.0, 1.0))
    b.algebraic("v", b.sub(v, b.mul(10.0, u)), scale=10.0)
    assert find_operating_point(b.system()).x == pytest.approx([1.0, 10.0])


def test_bounded_integrators_that_fight_rest_at_a_bound(build):
    """Both regulate one node, the second to a lower value: it goes to its lower bound and the first one regulates."""
    b = build()
    v = b.x("v")
    i1 = b.state("i1", b.mul(40.0, b.sub(51.0, v)), integrator=True, bounds=(-5.0, 30.0))
    i2 = b.state("i2", b.mul(30.0, b.sub(50.0, v)), integrator=True, bounds=(-5.0, 30.0))
    b.algebraic("v", b.sub(b.div(v, 5.0), b.add(i1, i2)), scale=100.0)
    assert find_operating_point(b.system()).x == pytest.approx([51 / 5 + 5, -5.0, 51.0])


def test_held_state_keeps_its_start(build):
    b = build()
    b.state("charge", 7.0, initial=0.6, held=True, integrator=True)
    assert find_operating_point(b.system()).x == pytest.approx([0.6])


def test_a_law_that_reads_time_is_named(build):
    b = build()
    b.algebraic("v", b.sub(b.x("v"), b.g.unary(10, b.mul(314.0, b.time))))
    with pytest.raises(DependsOnTime) as caught:
        find_operating_point(b.system())
    assert "`v`" in caught.value.diagnostic.headline


def test_a_step_in_time_rests_before_it(build):
    b = build()
    later = b.above(b.time, 1.0)
    b.algebraic("v", b.sub(b.x("v"), b.g.mux(later, b.c(7.0), b.c(4.0))))
    assert find_operating_point(b.system()).x == pytest.approx([4.0])


def test_an_open_unknown_is_named(build):
    """Two nodes joined by a resistor and tied to nothing else."""
    b = build()
    a, c = b.x("a"), b.x("c")
    b.algebraic("a", b.sub(a, c))
    b.algebraic("c", b.sub(c, a))
    b.algebraic("d", b.sub(b.x("d"), 2.0))
    with pytest.raises(SingularSystem) as caught:
        find_operating_point(b.system())
    assert "`a`" in caught.value.diagnostic.headline
    assert "`d`" not in caught.value.diagnostic.headline


def test_no_solution_at_all_ends_with_a_name(build):
    b = build()
    x = b.x("odd")
    b.algebraic("odd", b.add(b.mul(x, x), 1.0), guess=0.3)
    with pytest.raises(NoOperatingPoint) as caught:
        find_operating_point(b.system())
    assert "`odd`" in caught.value.diagnostic.headline


def test_sampled_integrator_sits_at_its_fixed_point(build):
    """A sampled accumulator acc := acc + 0.1*(4 - v) rests where v = 4."""
    b = build()
    v = b.x("v")
    acc = b.parameter("acc", 0.0, kind="latch", rest=b.add(b.g.symbol("p", "acc"), b.mul(0.1, b.sub(4.0, v))))
    b.algebraic("v", b.sub(v, b.mul(2.0, acc)))
    b.clock("c", 1e-3, 0, acc=b.parameters[-1].rest)
    point = find_operating_point(b.system())
    assert point.x == pytest.approx([4.0])
    assert point.p[b.index_p("acc")] == pytest.approx(2.0)


def test_start_latches(build):
    b = build()
    set_v = b.parameter("want", 4.0)
    b.algebraic("v", b.sub(b.x("v"), set_v))
    assert find_operating_point(b.system(), start_latches={"want": 9.0}).x == pytest.approx([9.0])


def test_large_ladder_uses_sparse_factors(build):
    """400 sections of a resistive ladder with constant powers at the far end of each tenth."""
    b = build()
    count = 400
    nodes = [b.x(f"n{k}") for k in range(count)]
    for k, v in enumerate(nodes):
        left = b.mul(b.source_scale, 400.0) if k == 0 else nodes[k - 1]
        current = b.div(b.sub(v, left), 0.01)
        if k + 1 < count:
            current = b.add(current, b.div(b.sub(v, nodes[k + 1]), 0.01))
        if k % 40 == 39:
            current = b.add(current, b.constant_power(f"load{k}", v, 300.0, 100.0))
        b.algebraic(f"n{k}", current, scale=400.0)
    point = find_operating_point(b.system())
    assert point.strategy == "power ramp"
    assert np.all(np.diff(point.x) < 0)
    into = (400.0 - point.x[0]) / 0.01
    taken = sum(300.0 / point.x[k] for k in range(39, count, 40))
    assert into == pytest.approx(taken, rel=1e-9)
