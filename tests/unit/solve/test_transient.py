"""Runs against closed forms: events at their times, the order at one instant, charge kept, clocks, delays, starts, failures."""

from __future__ import annotations

import math

import numpy as np
import pytest

from polewise.errors import Chatter, EventConflict, EventStorm, NotFinite, SolverError, StepFailure
from polewise.expression.graph import PiecewiseCubic
from polewise.kernels import opcodes as op
from polewise.kernels.program import RANK_EVENTS
from polewise.solve.initial import start_cold, start_from, start_settled
from polewise.solve.problem import build_problem
from polewise.solve.trajectory import MemorySink
from polewise.solve.transient import run


def _run(builder, stop, *, tolerance=1e-9, start=None, **options):
    """Run a builder's system cold, everything in memory."""
    problem = build_problem(builder.system())
    sink = MemorySink(problem.output_names)
    state = start_cold(problem) if start is None else start(problem)
    summary = run(problem, start=state, stop_s=stop, tolerance=tolerance, sink=sink, **options)
    return summary, sink


def _times(summary):
    return {e.text: e.time_s for e in summary.events}


# ---------------------------------------------------------------- events and their times


def test_rc_thresholds(build):
    """EV-1: RC 1 kohm, 1 uF to 10 V: 5 V at 0.6931471806 ms, 7 V at 1.2039728043 ms (elementary circuit law)."""
    b = build()
    v = b.x("v")
    hit = b.parameter("hit", 0.0)
    b.state("v", b.div(b.sub(10.0, v), 1e-3), scale=10.0)
    b.whenever("five", b.above(v, 5.0), hit=b.add(hit, 1.0))
    b.whenever("seven", b.above(v, 7.0), crossing=True, hit=b.add(hit, 1.0))
    b.keep("hit", hit)
    summary, sink = _run(b, 5e-3)
    assert summary.complete
    times = _times(summary)
    assert times["five"] == pytest.approx(1e-3 * math.log(2.0), rel=1e-9)
    assert times["seven"] == pytest.approx(1e-3 * math.log(10 / 3), rel=1e-9)
    assert sink["hit"][-1] == 2.0


def test_precharge(build):
    """EV-2: 20 ohm, 1 mF, 400 V: 95 % at 59.914645471 ms; 79.8 J in the resistor by then, 80 J in all (elementary circuit law)."""
    b = build()
    v, energy = b.x("v"), b.x("energy")
    current = b.div(b.sub(400.0, v), 20.0)
    b.state("v", b.div(current, 1e-3), scale=400.0)
    b.state("energy", b.mul(20.0, current, current), scale=80.0)
    seen = b.parameter("seen", 0.0)
    b.whenever("charged", b.above(v, 380.0), crossing=True, seen=energy)
    b.keep("energy", energy)
    b.keep("seen", seen)
    summary, sink = _run(b, 1.0)
    assert _times(summary)["charged"] == pytest.approx(59.914645471e-3, rel=1e-9)
    assert summary.events[0].changes[0][1] == pytest.approx(79.8, rel=1e-8)
    assert sink["energy"][-1] == pytest.approx(80.0, rel=1e-8)


def test_joined_capacitors_keep_their_charge(build):
    """EV-3: 100 uF at 400 V and 50 uF at 100 V joined: 300 V, 1.5 J lost, charge kept. Joined by a latch: q of both in one row, v equal."""
    b = build()
    v1, v2 = b.x("v1"), b.x("v2")
    joined = b.parameter("joined", 0.0)
    q1, q2 = b.mul(100e-6, v1), b.mul(50e-6, v2)
    # Row 1: the total charge. Row 2: apart, the second capacitor's charge stays; joined, the voltages are equal. The closed form of a reduced loop.
    b.state("v1", 0.0, initial=400.0, scale=400.0, charge=b.add(q1, q2))
    kept = b.parameter("kept", 5e-3)
    b.algebraic("v2", b.g.mux(joined, b.sub(v1, v2), b.sub(q2, kept)), guess=100.0, scale=100.0)
    energy = b.add(b.mul(0.5, q1, v1), b.mul(0.5, q2, v2))
    b.keep("v1", v1)
    b.keep("v2", v2)
    b.keep("energy", energy)
    b.at(1e-3, joined=1.0)
    _, sink = _run(b, 2e-3)
    assert sink["v1"][0] == pytest.approx(400.0)
    assert sink["v2"][0] == pytest.approx(100.0)
    assert sink["v1"][-1] == pytest.approx(300.0, rel=1e-12)
    assert sink["v2"][-1] == pytest.approx(300.0, rel=1e-12)
    assert sink["energy"][0] - sink["energy"][-1] == pytest.approx(1.5, rel=1e-9)
    before, after = sink.value("v1", 1e-3, before=True), sink.value("v1", 1e-3)
    assert (before, after) == (pytest.approx(400.0), pytest.approx(300.0))


def test_step_of_a_source_with_a_capacitor_loop(build):
    """A capacitor divider on a source, with a load on its middle node: the charge of the middle node is kept when the source steps.

    C1 = 1 uF from the source, C2 = 3 uF to zero, R = 1 kohm: a step of 8 V lifts the middle by 8 * C1/(C1 + C2) = 2 V, which decays with 4 ms."""
    b = build()
    v = b.x("v")
    source = b.parameter("source", 0.0)
    b.state("v", b.div(b.mul(-1.0, v), 1e3), scale=1.0, charge=b.sub(b.mul(4e-6, v), b.mul(1e-6, source)))
    b.at(1e-3, source=8.0)
    b.keep("v", v)
    _, sink = _run(b, 5e-3)
    assert sink.value("v", 1e-3) == pytest.approx(2.0, rel=1e-12)
    assert sink.value("v", 5e-3) == pytest.approx(2.0 * math.exp(-1.0), rel=1e-8)


def test_setting_a_state_takes_its_charge_along(build):
    b = build()
    v = b.x("v")
    b.state("v", b.mul(-100.0, v), initial=1.0, charge=b.mul(2.0, v))
    b.at(1e-3, v=5.0)
    b.keep("v", v)
    _, sink = _run(b, 2e-3)
    assert sink.value("v", 1e-3) == pytest.approx(5.0, rel=1e-12)
    assert sink["v"][-1] == pytest.approx(5.0 * math.exp(-0.05), rel=1e-8)


def test_a_varying_capacitance_keeps_its_charge(build):
    """C halves at 1 ms: the voltage doubles."""
    b = build()
    v = b.x("v")
    c = b.parameter("c", 2.0)
    b.state("v", 0.0, initial=3.0, charge=b.mul(c, v))
    b.at(1e-3, c=1.0)
    b.keep("v", v)
    _, sink = _run(b, 2e-3)
    assert sink["v"][-1] == pytest.approx(6.0, rel=1e-12)


def test_for_a_time_starts_again_when_false(build):
    """sin(2 pi 50 t) > 0.5 lasts 6.67 ms each time: `for 6 ms` fires at 1.667 + 6 ms, `for 7 ms` never."""
    b = build()
    sine = b.g.unary(op.SIN, b.mul(2 * math.pi * 50, b.time))
    high = b.above(sine, 0.5)
    count = b.parameter("count", 0.0)
    never = b.parameter("never", 0.0)
    b.algebraic("y", b.sub(b.x("y"), sine))
    b.whenever("six", high, lasting=6e-3, crossing=True, count=b.add(count, 1.0))
    b.whenever("seven", high, lasting=7e-3, crossing=True, never=1.0)
    b.keep("never", never)
    summary, sink = _run(b, 50e-3)
    fired = [e.time_s for e in summary.events]
    first = math.asin(0.5) / (2 * math.pi * 50) + 6e-3
    assert fired == pytest.approx([first, first + 20e-3, first + 40e-3], rel=1e-9)
    assert sink["never"][-1] == 0.0


def test_true_at_the_start(build):
    """A plain condition that is true at the start fires there; "rises above" does not."""
    b = build()
    b.state("v", 0.0, initial=9.0)
    one, two = b.parameter("one", 0.0), b.parameter("two", 0.0)
    b.whenever("plain", b.above(b.x("v"), 5.0), one=1.0)
    b.whenever("crossing", b.above(b.x("v"), 5.0), crossing=True, two=1.0)
    b.keep("one", one)
    b.keep("two", two)
    summary, sink = _run(b, 1e-3)
    assert _times(summary) == {"plain": 0.0}
    assert (sink["one"][-1], sink["two"][-1]) == (1.0, 0.0)


# ---------------------------------------------------------------- the order at one instant


def test_all_right_sides_are_read_before_any_action(build):
    """Two latches exchange their values at one instant."""
    b = build()
    b.state("v", 0.0)
    left, right = b.parameter("left", 1.0), b.parameter("right", 2.0)
    b.at(1e-3, left=right)
    b.at(1e-3, right=left)
    b.keep("left", left)
    b.keep("right", right)
    _, sink = _run(b, 2e-3)
    assert (sink["left"][-1], sink["right"][-1]) == (2.0, 1.0)


def test_instants_closer_than_a_picosecond_are_one(build):
    b = build()
    b.state("v", 0.0)
    left, right = b.parameter("left", 1.0), b.parameter("right", 2.0)
    b.at(1e-3, left=right)
    b.at(1e-3 + 4e-13, right=left)
    b.keep("right", right)
    _, sink = _run(b, 2e-3)
    assert sink["right"][-1] == 1.0


def test_two_values_for_one_target_name_both_places(build):
    b = build()
    b.state("v", 0.0)
    b.parameter("k", 0.0)
    b.at(1e-3, k=1.0)
    b.at(1e-3, k=2.0)
    with pytest.raises(EventConflict) as caught:
        _run(b, 2e-3)
    diagnostic = caught.value.diagnostic
    assert "two actions set `k` to different values, 1 and 2" in diagnostic.headline
    assert len(diagnostic.labels) == 1
    assert caught.value.time_s == pytest.approx(1e-3)


def test_two_equal_values_for_one_target_agree(build):
    b = build()
    b.state("v", 0.0)
    k = b.parameter("k", 0.0)
    b.at(1e-3, k=2.0)
    b.at(1e-3, k=2.0)
    b.keep("k", k)
    _, sink = _run(b, 2e-3)
    assert sink["k"][-1] == 2.0


def test_rounds_at_one_instant(build):
    """An action makes a second condition true, that one a third: all at the same instant, one round each."""
    b = build()
    b.state("v", 0.0)
    one, two, three = (b.parameter(name, 0.0) for name in ("one", "two", "three"))
    b.at(1e-3, one=1.0)
    b.whenever("second", b.above(one, 0.5), two=b.add(two, 1.0))
    b.whenever("third", b.above(two, 0.5), three=b.add(b.mul(10.0, two), three))
    b.keep("three", three)
    summary, sink = _run(b, 2e-3)
    assert [e.text for e in summary.events] == ["at 1 ms", "second", "third"]
    assert {e.time_s for e in summary.events} == {1e-3}
    assert sink["three"][-1] == 10.0


def test_rounds_without_end_are_an_error(build):
    b = build()
    b.state("v", 0.0)
    k = b.parameter("k", 0.0)
    b.at(1e-3, k=1.0)
    b.whenever("up", b.above(k, 0.5), k=0.0)
    b.whenever("down", b.above(b.sub(0.5, k), 0.0), crossing=True, k=1.0)
    with pytest.raises(EventStorm) as caught:
        _run(b, 2e-3)
    assert "1000 rounds" in caught.value.diagnostic.headline


def test_a_relay_without_hysteresis_is_chatter(build):
    """Above zero it drives down, below zero up: at zero there is no way on."""
    b = build()
    y = b.x("y")
    down = b.parameter("down", 0.0)
    b.state("y", b.sub(1.0, b.mul(2.0, down)), initial=-1e-3, scale=1e-3)
    b.whenever("high", b.above(y, 0.0), crossing=True, down=1.0)
    b.whenever("low", b.above(b.c(0.0), y), crossing=True, down=0.0)
    with pytest.raises((Chatter, EventStorm)) as caught:
        _run(b, 1.0, tolerance=1e-6)
    assert caught.value.time_s == pytest.approx(1e-3, rel=1e-2)
    assert "`high`" in caught.value.diagnostic.headline or "`low`" in caught.value.diagnostic.headline


def test_samples_update_before_conditions_are_read_and_circuit_follows_after(build):
    """At one tick: the sampled signal takes the new value, the condition sees it, its right side reads the circuit just before."""
    b = build()
    v, y = b.x("v"), b.x("y")
    held = b.parameter("held", 0.0, kind="sampled")
    seen = b.parameter("seen", -1.0)
    b.state("v", 1000.0)
    b.algebraic("y", b.sub(y, b.mul(2.0, held)))
    b.clock("sampler", 1e-3, 0, held=v)
    b.whenever("high", b.above(held, 2.5), seen=y)
    b.keep("seen", seen)
    b.keep("y", y)
    summary, sink = _run(b, 4.5e-3)
    assert _times(summary)["high"] == pytest.approx(3e-3, abs=1e-15)
    assert summary.events[0].changes == (("seen", pytest.approx(4.0, rel=1e-9)),)
    assert sink.value("y", 3e-3) == pytest.approx(6.0, rel=1e-9)


def test_every_reads_all_before_it_writes(build):
    """`every 1 ms { set drive = next; set next = next + 1 }`: drive is one period behind. A time event shares the instant of the third tick."""
    b = build()
    b.state("v", 0.0)
    nxt, drive, mark = b.parameter("next", 0.0), b.parameter("drive", -1.0), b.parameter("mark", 0.0)
    b.clock("every", 1e-3, RANK_EVENTS, drive=nxt, next=b.add(nxt, 1.0))
    b.at(2e-3, mark=nxt)
    b.keep("drive", drive)
    b.keep("next", nxt)
    b.keep("mark", mark)
    _, sink = _run(b, 3.5e-3)
    assert [sink.value("drive", t * 1e-3 + 1e-4) for t in range(4)] == pytest.approx([0.0, 1.0, 2.0, 3.0])
    assert sink["next"][-1] == 4.0
    assert sink["mark"][-1] == 2.0  # read before `every` wrote


def test_every_and_a_time_event_on_one_latch_conflict(build):
    b = build()
    b.state("v", 0.0)
    nxt = b.parameter("next", 0.0)
    b.clock("every 1 ms", 1e-3, RANK_EVENTS, next=b.add(nxt, 1.0))
    b.at(2e-3, next=77.0)
    with pytest.raises(EventConflict):
        _run(b, 3.5e-3)


def test_ranks_of_samplers(build):
    """The second sampler of one instant sees the first one's new value, whatever the order of the text."""
    b = build()
    v = b.x("v")
    first, second = b.parameter("first", 0.0, kind="sampled"), b.parameter("second", 0.0, kind="sampled")
    b.state("v", 1000.0)
    b.clock("late", 1e-3, 1, second=b.add(first, 100.0))
    b.clock("early", 1e-3, 0, first=v)
    b.keep("second", second)
    b.keep("v", v)
    _, sink = _run(b, 3.5e-3)
    assert sink["second"][-1] == pytest.approx(103.0, rel=1e-9)


# ---------------------------------------------------------------- clocks and delays


def test_sampled_current_control(build):
    """SS-11: choke L, one period of delay, K_p = L/(3 T): currents at the sample instants 0, 0, 1/3, 2/3, 8/9, 1, 28/27 … (z^2 - z + 1/3)."""
    period, inductance = 100e-6, 1e-3
    b = build()
    i = b.x("i")
    gain = inductance / (3.0 * period)
    drive, nxt = b.parameter("drive", 0.0), b.parameter("next", 0.0)
    b.state("i", b.div(drive, inductance))
    b.clock("control", period, RANK_EVENTS, drive=nxt, next=b.mul(gain, b.sub(1.0, i)))
    b.keep("i", i)
    _, sink = _run(b, 13.5 * period)
    got = [sink.value("i", k * period) for k in range(13)]
    want = [0.0, 0.0]
    while len(want) < 13:
        want.append(want[-1] + (1.0 - want[-2]) / 3.0)
    assert got == pytest.approx(want, abs=1e-9)
    assert got == pytest.approx([0, 0, 0.333333, 0.666667, 0.888889, 1, 1.037037, 1.037037, 1.024691, 1.012346, 1.004115, 1, 0.998628], abs=6e-7)


def test_delayed_ramp_and_its_start(build):
    """y = t delayed by 2 ms: 0 until 2 ms, then t - 2 ms."""
    b = build()
    ramp = b.x("ramp")
    late = b.delayed("late", ramp, 2e-3)
    b.state("ramp", 1.0)
    b.keep("late", late)
    _, sink = _run(b, 10e-3)
    for t in (0.5e-3, 2e-3, 3.7e-3, 10e-3):
        assert sink.value("late", t) == pytest.approx(max(0.0, t - 2e-3), abs=1e-12)


def test_delay_equation_by_the_method_of_steps(build):
    """y' = -y(t - 1), y = 1 before: 1 - t on 0..1, 1 - t + (t-1)^2/2 on 1..2, and so on (method of steps)."""
    b = build()
    late = b.delayed("late", b.x("y"), 1.0)
    b.state("y", b.mul(-1.0, late), initial=1.0)
    b.keep("y", b.x("y"))
    _, sink = _run(b, 4.0)
    for t in (0.5, 1.0, 1.5, 2.5, 3.3, 4.0):
        want = sum((-1) ** k * (t - (k - 1)) ** k / math.factorial(k) for k in range(int(t) + 2))
        assert sink.value("y", t) == pytest.approx(want, abs=1e-7)


def test_sliding_average_stays_exact_over_many_windows(build):
    """The average over 20 ms of 760 V + a 50 Hz sine is 760 V, after 5,000 windows too."""
    b = build()
    g = b.g
    wave = b.add(760.0, b.mul(10.0, g.unary(op.SIN, b.mul(2 * math.pi * 50, b.time))))
    total = b.x("total")
    late = b.delayed("late", total, 20e-3, slope=wave)
    b.state("total", wave, scale=15.0)
    b.keep("average", b.mul(50.0, b.sub(total, late)))
    _, sink = _run(b, 10.0, tolerance=1e-8)
    late_half = sink["average"][sink.time > 9.0]
    assert late_half == pytest.approx(np.full(len(late_half), 760.0), abs=2e-3)


# ---------------------------------------------------------------- starts, stops, failures


def test_settled_start_stays_settled(build):
    """The line with a constant power of the operating-point tests, L and C added: at rest for 10 ms (P below the limit of ST-3)."""
    b = build()
    v, i = b.x("v"), b.x("i")
    b.state("i", b.div(b.sub(b.mul(b.source_scale, 100.0), b.add(b.mul(0.1, i), v)), 100e-6), scale=100.0)
    b.state("v", b.div(b.sub(i, b.constant_power("load", v, 4000.0, 30.0)), 500e-6), scale=100.0)
    b.keep("v", v)
    _, sink = _run(b, 10e-3, start=start_settled, tolerance=1e-8)
    want = (100 + math.sqrt(100**2 - 0.4 * 4000)) / 2
    assert sink["v"] == pytest.approx(np.full(len(sink["v"]), want), rel=1e-8)


@pytest.mark.parametrize(("power", "grows"), [(4400.0, False), (4700.0, True)])
def test_constant_power_oscillates_above_its_limit(build, power, grows):
    """ST-3: 100 V, 0.1 ohm, 100 uH, 500 uF: stable below 4535.147 W, oscillating above."""
    b = build()
    v, i = b.x("v"), b.x("i")
    b.state("i", b.div(b.sub(b.mul(b.source_scale, 100.0), b.add(b.mul(0.1, i), v)), 100e-6), scale=100.0)
    b.state("v", b.div(b.sub(i, b.constant_power("load", v, power, 30.0)), 500e-6), scale=100.0)
    b.at(0.0, v=95.0)
    b.keep("v", v)
    _, sink = _run(b, 60e-3, start=start_settled, tolerance=1e-8)
    early, late = sink["v"][sink.time < 6e-3], sink["v"][sink.time > 54e-3]
    assert (np.ptp(late) > np.ptp(early)) == grows


def test_start_from_another_run_goes_on_from_there(build):
    def circuit(b):
        b.state("v", b.mul(-1.0, b.x("v")), initial=1.0)
        late = b.delayed("late", b.x("v"), 0.4)
        b.keep("late", late)
        b.keep("v", b.x("v"))
        b.parameter("k", 0.0)
        return b

    first, second = circuit(build()), circuit(build())
    first.at(0.5, k=3.0)
    summary, _ = _run(first, 1.0)
    assert summary.snapshot.parameters["k"] == 3.0
    _, sink = _run(second, 1.0, start=lambda p: start_from(p, summary.snapshot))
    assert sink["v"][-1] == pytest.approx(math.exp(-2.0), rel=1e-8)
    assert sink.value("late", 0.1) == pytest.approx(math.exp(-0.7), rel=1e-7)


def test_stopping_keeps_what_is_done(build):
    b = build()
    b.state("v", b.mul(-1.0, b.x("v")), initial=1.0)
    b.parameter("held", 0.0, kind="sampled")
    b.clock("ticks", 1e-6, 0, held=b.x("v"))
    b.keep("v", b.x("v"))
    problem = build_problem(b.system())
    sink = MemorySink(problem.output_names)
    told = []
    summary = run(
        problem,
        start=start_cold(problem),
        stop_s=1e4,
        tolerance=1e-6,
        sink=sink,
        progress=lambda t, stop: told.append(t),
        should_stop=lambda: len(told) >= 2,
    )
    assert not summary.complete
    assert summary.reason == "stopped"
    assert 0.0 < summary.end_s < 1e4
    assert sink.time[-1] == pytest.approx(summary.end_s)


def test_step_limit(build):
    b = build()
    b.state("v", b.g.unary(op.SIN, b.mul(1e4, b.time)))
    summary, _ = _run(b, 10.0, max_steps=300)
    assert summary.reason == "step limit"
    assert summary.counters.steps == 300


def test_a_value_that_runs_away_is_named_with_its_time(build):
    """y' = y^2 from 1 ends at t = 1."""
    b = build()
    b.state("runs_away", b.mul(b.x("runs_away"), b.x("runs_away")), initial=1.0)
    b.keep("y", b.x("runs_away"))
    with pytest.raises(SolverError) as caught:
        _run(b, 2.0, tolerance=1e-6)
    assert "`runs_away`" in caught.value.diagnostic.headline
    assert caught.value.time_s == pytest.approx(1.0, rel=1e-3)
    assert caught.value.partial.reason == "failed"


def test_not_a_number_is_named(build):
    b = build()
    b.state("ramp", -1.0, initial=1.0)
    b.algebraic("root", b.sub(b.x("root"), b.g.unary(op.SQRT, b.x("ramp"))), guess=1.0)
    with pytest.raises((NotFinite, StepFailure)) as caught:
        _run(b, 2.0, tolerance=1e-6)
    assert caught.value.time_s == pytest.approx(1.0, rel=1e-2)


def test_outside_a_closed_table(build):
    b = build()
    table = b.g.add_table(PiecewiseCubic("map", (0.0, 1.0), ((0.0, 0.0, 0.0, 0.0), (0.0, 2.0, 0.0, 0.0), (2.0, 0.0, 0.0, 0.0)), closed=True))
    b.state("ramp", 1.0)
    b.algebraic("y", b.sub(b.x("y"), b.g.table(table, b.x("ramp"))))
    with pytest.raises(SolverError) as caught:
        _run(b, 2.0)
    assert "`map`" in caught.value.diagnostic.headline
    assert caught.value.time_s == pytest.approx(1.0, rel=1e-6)


def test_late_time_events_are_told(build):
    b = build()
    b.state("v", 0.0)
    b.parameter("k", 0.0)
    b.at(5.0, k=1.0)
    summary, _ = _run(b, 1.0)
    assert [w.code for w in summary.warnings] == ["event-after-end"]


def test_event_at_the_stop_time_happens(build):
    b = build()
    b.state("v", 0.0)
    k = b.parameter("k", 0.0)
    b.at(1.0, k=1.0)
    b.keep("k", k)
    summary, sink = _run(b, 1.0)
    assert len(summary.events) == 1
    assert sink["k"][-1] == 1.0
