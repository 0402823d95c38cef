"""Events, actions and sequences."""

import pytest

HEAD = """reference gnd
a --[1 ohm]-- gnd
a --[5 V]-- gnd
latch u = 5 V
latch ok = false
d/dt x = 1 V/s initially 0 V
feed: a --[k: breaker(true)]--[1 ohm]-- gnd
loop: pi_control(u, kp = 1, ki = 1 /s)
"""


def assigned(circuit, event):
    return {(a.target_kind, a.target): circuit.graph.text(a.value) for a in event.assignments}


def test_time_clock_and_condition_events(build):
    circuit = build(
        HEAD
        + """
at 50 ms: set u = 2 * a.v; set ok = true
every 25 us {
    set x = 0
    set loop.integral = 1 V
}
whenever a.v falls below 3 V for 2 ms: open feed.k; set u = 0
whenever a.v rises above u: close feed
whenever not ok and time > 1 s: set feed.k.closed = ok
"""
    )
    (timed,) = circuit.time_events
    assert timed.time_s == 0.05
    assert assigned(circuit, timed) == {("latch", "u"): "(2.0 * potential(a))", ("latch", "ok"): "1.0"}
    (clock,) = circuit.clock_events
    assert clock.period_s == 25e-6
    assert assigned(circuit, clock) == {("state", "x"): "0.0", ("state", "loop.integral"): "1.0"}
    falls, rises, plain = circuit.condition_events
    assert (falls.lasting_s, falls.crossing, falls.text) == (0.002, True, "a.v falls below 3 V")
    assert circuit.graph.text(falls.condition) == "positive((3.0 - potential(a)))"
    assert assigned(circuit, falls) == {("latch", "feed.k.closed"): "0.0", ("latch", "u"): "0.0"}
    assert circuit.graph.text(rises.condition) == "positive((potential(a) - latch(u)))"
    assert assigned(circuit, rises) == {("latch", "feed.k.closed"): "1.0"}
    assert not plain.crossing
    assert assigned(circuit, plain) == {("latch", "feed.k.closed"): "latch(ok)"}


@pytest.mark.parametrize(
    ("event", "code", "marked"),
    [
        ("at 1 s: set y = 3", "unknown-name", "y"),
        ("at 1 s: set u = 3 A", "unit-expected", "3 A"),
        ("at 1 s: set u = ok", "condition-as-number", "ok"),
        ("at 1 s: set ok = 3", "number-as-condition", "3"),
        ("at 1 s: set u = 3 V; set u = 4 V", "set-twice", "u"),
        ("at 1 s: open feed.k; set feed.k.closed = true", "set-twice", "feed.k.closed"),
        ("at 1 s: set q = 3 V\nsignal q = 4 V", "not-settable", "q"),
        ("at 1 s: set q = 3 V\ngiven q = 4 V", "not-settable", "q"),
        ("at 1 s: set q = 3 V\ninput q = 4 V", "not-settable", "q"),
        ("at 1 s: set feed.k = true", "not-settable", "feed.k"),
        ("at 1 s: set a = 3 V", "not-settable", "a"),
        ("at 1 s: set loop = 3 V", "not-settable", "loop"),
        ("at 1 s: open u", "nothing-to-switch", "u"),
        ("at 1 s: open u{*}", "nothing-selected", "u{*}"),
        ("at 1 V: set u = 3 V", "unit-expected", "1 V"),
        ("at -1 s: set u = 3 V", "time-not-positive", "-1 s"),
        ("at a.v * 1 s / 1 V: set u = 3 V", "varying-value", "a.v * 1 s / 1 V"),
        ("every 0 s: set u = 3 V", "time-not-positive", "0 s"),
        ("whenever a.v: set u = 3 V", "number-as-condition", "a.v"),
        ("whenever a.v rises above 3 A: set u = 3 V", "unit-mismatch", "3 A"),
        ("whenever ok rises above 3 A: set u = 3 V", "condition-as-number", "ok"),
        ("whenever a.v > 3 V for 2 V: set u = 3 V", "unit-expected", "2 V"),
        ("whenever 3 > 2: set u = 3 V", "condition-constant", "3 > 2"),
    ],
)
def test_wrong_events(check, event, code, marked):
    check(f"{HEAD}{event}\n", [(code, marked)])


def test_hints_of_what_can_not_be_set(check):
    (found,) = check(HEAD + "signal q = 4 V\nat 1 s: set q = 3 V\n", [("not-settable", "q")])
    assert found.hint == "Make it a latch: `latch q = …`."
    (found,) = check(HEAD + "at 1 s: set feed.k = true\n", [("not-settable", "feed.k")])
    assert "feed.k.closed" in (found.hint or "")


def test_events_in_assemblies_and_each(build):
    circuit = build(
        HEAD
        + """
assembly guard(p) {
    latch tripped = false
    line: p --[k: breaker(true)]-- q
    q --[1 ohm]-- e
    whenever line.i rises above 3 A: open line.k; set tripped = true
}
each n in 1..2 {
    g{n}: guard(a)
    at n * 1 s: close g{n}.line.k
}
at 5 s: open g{*}.line
"""
    )
    assert [e.name for e in circuit.condition_events] == ["g1.event#1", "g2.event#1"]
    assert assigned(circuit, circuit.condition_events[1]) == {("latch", "g2.line.k.closed"): "0.0", ("latch", "g2.tripped"): "1.0"}
    assert [e.time_s for e in circuit.time_events] == [5.0, 1.0, 2.0]
    assert assigned(circuit, circuit.time_events[0]) == {("latch", "g1.line.k.closed"): "0.0", ("latch", "g2.line.k.closed"): "0.0"}


SEQUENCE = """
sequence up {
    step charge { close feed.k } until a.v > 4 V else fault after 2 s
    step wait { set u = 1 V } until after 50 ms
    step settle { } until ok after 10 ms else fault after 1 s
    step go { open feed.k }
    step fault { open feed.k; set u = 0 }
}
signal running = 1 if up.go otherwise 0
"""


def test_sequences(build, value):
    circuit = build(HEAD + SEQUENCE)
    g = circuit.graph
    starts = {n: g.value_of(latch.initial) for n, latch in circuit.latches.items() if n.startswith("up.")}
    assert starts == {"up.charge": 1.0, "up.wait": 0.0, "up.settle": 0.0, "up.go": 0.0, "up.fault": 0.0, "up.settle#stayed": 0.0}
    (entry,) = circuit.time_events
    assert (entry.time_s, entry.entry) == (0.0, True)
    assert assigned(circuit, entry) == {("latch", "feed.k.closed"): "1.0"}
    events = {e.name: e for e in circuit.condition_events}
    change = events["up.charge#until"]
    assert assigned(circuit, change) == {("latch", "up.charge"): "0.0", ("latch", "up.wait"): "1.0", ("latch", "u"): "1.0"}
    escape = events["up.charge#else"]
    assert escape.lasting_s == 2.0
    assert assigned(circuit, escape)["latch", "feed.k.closed"] == "0.0"
    at = {"latch up.charge": 1.0, "potential a": 5.0}
    assert value(circuit, change.condition, at) == 1.0
    assert value(circuit, escape.condition, at) == 0.0  # the ordinary way is taken first
    at["potential a"] = 3.0
    assert (value(circuit, change.condition, at), value(circuit, escape.condition, at)) == (0.0, 1.0)
    waited = events["up.wait#until"]
    assert (g.text(waited.condition), waited.lasting_s) == ("latch(up.wait)", 0.05)
    settle = events["up.settle#until"]
    both = {"latch up.settle": 1.0, "latch ok": 1.0, "latch up.settle#stayed": 0.0}
    assert value(circuit, settle.condition, both) == 0.0
    both["latch up.settle#stayed"] = 1.0
    assert value(circuit, settle.condition, both) == 1.0
    assert events["up.settle#stayed#on"].lasting_s == 0.01
    assert value(circuit, "running", {"latch up.go": 1.0}) == 1.0


@pytest.mark.parametrize(
    ("steps", "code", "marked"),
    [
        ("step one { } until ok", "sequence-end", "step one { } until ok"),
        ("step one { } until ok else fautl after 1 s\nstep fault { }", "unknown-step", "fautl"),
        ("step one { } until 5\nstep two { }", "number-as-condition", "5"),
        ("step one { } until after 5 V\nstep two { }", "unit-expected", "5 V"),
        ("step one { set nothing = 3 } until ok\nstep two { }", "unknown-name", "nothing"),
    ],
)
def test_wrong_sequences(check, steps, code, marked):
    check(f"{HEAD}sequence up {{\n{steps}\n}}\n", [(code, marked)])


def test_a_step_is_read_not_set(check):
    check(HEAD + SEQUENCE + "signal y = up\n", [("not-a-value", "up")])
    check(HEAD + SEQUENCE + "signal y = up.gone\n", [("unknown-reading", "gone")])
