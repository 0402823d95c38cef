"""Control blocks."""

import pytest

from polewise.circuit.blocks import BLOCKS

HEAD = "reference gnd\na --[1 ohm]-- gnd\na --[5 V]-- gnd\n"


def test_pi_control(build, value):
    circuit = build(
        HEAD + "loop: pi_control(8 V - a.v, kp = 2 A/V, ki = 40 A/V/s, low = -a.v * 1 S, high = 300 A)\nsignal y = loop + loop.integral\n"
    )
    at = {"potential a": 5.0, "state loop.integral": 4.0}
    assert value(circuit, "loop", at) == 10.0
    assert value(circuit, "loop.error", at) == 3.0
    assert value(circuit, "loop.proportional", at) == 6.0
    assert value(circuit, "y", at) == 14.0
    assert value(circuit, "loop", {**at, "state loop.integral": 500.0}) == 300.0
    assert value(circuit, "loop", {**at, "state loop.integral": -500.0}) == -5.0
    state = circuit.states["loop.integral"]
    assert value(circuit, state.rate, at) == 120.0
    assert circuit.graph.value_of(state.high) == 300.0
    assert value(circuit, state.low, at) == -5.0
    assert state.initial is None


def test_loops_through_blocks_are_none(build):
    circuit = build(
        HEAD
        + """
outer: pi_control(5 V - a.v, kp = 1 A/V, ki = 1 A/V/s, low = inner.integral * 1 A, high = 3 A)
inner: pi_control(outer - 1 A, kp = 0.1 /A, ki = 3 /A/s, low = 0, high = 1, initially = 0.5)
"""
    )
    assert circuit.graph.value_of(circuit.states["inner.integral"].initial) == 0.5
    assert circuit.states["inner.integral"].dimension.is_none


def test_rate_limit(build, value):
    circuit = build(HEAD + "soft: rate_limit(a.v, rise = 10 V/s, initially = 2 V)\nsignal y = soft\n")
    rate = circuit.states["soft.output"].rate
    assert value(circuit, rate, {"potential a": 100.0, "state soft.output": 0.0}) == 10.0
    assert value(circuit, rate, {"potential a": -100.0, "state soft.output": 0.0}) == -10.0
    assert value(circuit, "y", {"state soft.output": 3.0}) == 3.0


def test_hysteresis(build, value):
    circuit = build(HEAD + "hot: hysteresis(a.v, off_below = 3 V, on_above = 4 V)\nsignal y = 1 if hot otherwise 0\n")
    assert circuit.latches["hot.output"].is_condition
    on, off = circuit.condition_events
    at = {"potential a": 5.0, "latch hot.output": 0.0}
    assert (value(circuit, on.condition, at), value(circuit, off.condition, at)) == (1.0, 0.0)
    at = {"potential a": 2.0, "latch hot.output": 1.0}
    assert (value(circuit, on.condition, at), value(circuit, off.condition, at)) == (0.0, 1.0)
    assert value(circuit, "y", at) == 1.0


@pytest.mark.parametrize(
    ("block", "code", "marked"),
    [
        ("pi_control(kp = 1, ki = 1 /s)", "block-argument", "pi_control"),
        ("pi_control(a.v, kp = 1)", "setting-missing", "pi_control"),
        ("pi_control(a.v, kp = 1, ki = 1)", "pi-gains", "ki = 1"),
        ("pi_control(a.v, kp = 1, ki = 1 /s, lo = 3)", "unknown-setting", "lo"),
        ("pi_control(a.v, kp = 1, ki = 1 /s, low = 3 A)", "unit-expected", "3 A"),
        ("pi_control(a.v, kp = 1, ki = 1 /s, low = 3 V, high = 1 V)", "bounds-swapped", "low = 3 V"),
        ("pi_control(a.v, kp = 1, ki = 1 /s, initially = a.v)", "varying-value", "a.v"),
        ("pi_control(a.v > 3 V, kp = 1, ki = 1 /s)", "condition-as-number", "a.v > 3 V"),
        ("pi_control(a.w, kp = 1, ki = 1 /s)", "unknown-reading", "w"),
        ("rate_limit(a.v, rise = 3 V)", "unit-expected", "3 V"),
        ("hysteresis(a.v, off_below = 3 A, on_above = 4 V)", "unit-expected", "3 A"),
    ],
)
def test_wrong_blocks(check, block, code, marked):
    check(f"{HEAD}x: {block}\nsignal y = x.integral\n" if "pi_control" in block else f"{HEAD}x: {block}\n", [(code, marked)])


def test_every_block_is_documented():
    for block in BLOCKS.values():
        assert block.document
        assert all(s.document for s in block.settings)
        assert all(block.readings.values())
