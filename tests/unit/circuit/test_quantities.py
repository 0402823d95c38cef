"""Reading a circuit by the netlist's own spelling."""

import pytest

from polewise.circuit.quantities import all_quantities, find, select
from polewise.grammar.diagnostics import Diagnostic

TEXT = """reference gnd
reference frame (rad/s)
assembly berth(inp, out) {
    given L = 1 mH
    input want = 5 V
    leg: pole(inp, gnd2, x, duty = drive, rate = 40 kHz, upper = transistor(), lower = diode())
    reference gnd2
    choke: x --[rl: 4 mohm]--[l: L]-- out
    store: out --[1 mF]-- gnd2
    signal drive = 0.5
    d/dt q = 1 V/s
}
src --[800 V]-- gnd
feeder: src --[k: breaker(true)]--[r: 6 mohm]-- bus
tap: bus --[breaker(true)]-- gnd
each n in 1..2 {
    berth{n}: berth(bus, b{n})
}
b1 -- b2
turn: frame --[5 N*m]-- shaft
latch u = 5 V
loop: pi_control(u, kp = 1, ki = 1 /s)
solve w from w = u
sequence up {
    step one { } until u > 3 V
    step two { }
}
"""


@pytest.fixture
def circuit(build):
    return build(TEXT)


@pytest.mark.parametrize(
    ("name", "text"),
    [
        ("bus.v", "potential(bus)"),
        ("gnd.v", "0.0"),
        ("feeder.i", "i(feeder.k)"),
        ("feeder.k.i", "i(feeder.k)"),
        ("feeder.r.v", "v(feeder.r)"),
        ("feeder.v", "(potential(src) - potential(bus))"),
        ("feeder.k.closed", "latch(feeder.k.closed)"),
        ("tap.closed", "latch(tap.closed)"),
        ("tap.p", "(v(tap) * i(tap))"),
        ("berth2.choke.i", "i(berth2.choke.rl)"),
        ("berth2.leg.duty", "reading(berth2.leg.duty)"),
        ("berth2.leg.mid.v", "potential(berth2.x)"),
        ("berth2.out.v", "potential(b1)"),
        ("b2.v", "potential(b1)"),
        ("berth2.out.i", "(i(berth2.store) - i(berth2.choke.l))"),
        ("berth1.want", "5.0"),
        ("berth1.L", "0.001"),
        ("berth1.drive", "signal(berth1.drive)"),
        ("berth1.q", "state(berth1.q)"),
        ("shaft.speed", "potential(shaft)"),
        ("turn.torque", "i(turn)"),
        ("u", "latch(u)"),
        ("w", "unknown(w)"),
        ("loop", "signal(loop)"),
        ("loop.integral", "state(loop.integral)"),
        ("loop.error", "latch(u)"),
        ("up.two", "latch(up.two)"),
    ],
)
def test_find(circuit, name, text):
    quantity = find(circuit, name)
    assert not isinstance(quantity, Diagnostic), quantity.headline
    assert quantity.name == name
    assert circuit.graph.text(quantity.expression) == text


@pytest.mark.parametrize(
    ("name", "code", "hint"),
    [
        ("bus", "not-a-value", "Write `bus.v`."),
        ("buss.v", "unknown-name", "Did you mean `bus`?"),
        ("berth2.leg.dutty", "unknown-reading", "Did you mean `duty`?"),
        ("berth2.leg", "not-a-value", "Write `berth2.leg.p`, `berth2.leg.duty` or `berth2.leg.share`."),
        ("shaft.v", "unknown-reading", "It has `speed`."),
        ("feeder.i.x", "unknown-reading", None),
        ("", "unknown-name", None),
        ("berth1.choke.i extra", "unknown-reading", None),
    ],
)
def test_wrong_names(circuit, name, code, hint):
    found = find(circuit, name)
    assert isinstance(found, Diagnostic)
    assert found.code == code
    if hint is not None:
        assert found.hint == hint


def test_select(circuit):
    assert [q.name for q in select(circuit, "berth{*}.choke.i")] == ["berth1.choke.i", "berth2.choke.i"]
    assert [q.name for q in select(circuit, "b{*}.v")] == ["b1.v", "b2.v"]
    assert [q.name for q in select(circuit, "bus.v")] == ["bus.v"]
    for wrong, code in (("q{*}.v", "nothing-selected"), ("berth{*}.leg.dutty", "unknown-reading"), ("b{*}", "not-a-value"), ("x.y", "unknown-name")):
        found = select(circuit, wrong)
        assert isinstance(found, Diagnostic)
        assert found.code == code


def test_everything_that_is_listed_can_be_found(circuit):
    quantities = list(all_quantities(circuit))
    names = [q.name for q in quantities]
    assert len(set(names)) == len(names)
    assert {"bus.v", "feeder.i", "feeder.r.p", "berth1.leg.mid.i", "berth2.out.p", "loop", "loop.error", "loop.integral", "up.one", "u", "w"} <= set(
        names
    )
    assert not any("#" in name or "--" in name for name in names)
    for quantity in quantities:
        assert find(circuit, quantity.name) == quantity


def test_conditions_are_known_as_such(circuit):
    assert find(circuit, "feeder.k.closed").is_condition
    assert find(circuit, "up.one").is_condition
    assert not find(circuit, "u").is_condition
