"""Givens, inputs, signals, states, unknowns, latches, functions."""

import pytest

from polewise.grammar import units

HEAD = "reference gnd\na --[1 ohm]-- gnd\na --[5 V]-- gnd\n"
BERTH = """
assembly berth(p, n) {
    given L = 180 uH +- 10 %  "choke"
    given C = 1 mF +- 0.2 mF normal
    given mode = false
    input want = 5 V
    input ask
    choke: p --[L]-- n
    cap: p --[C]-- n
    signal y = want + ask * 1 ohm
}
"""


def test_givens_with_tolerances(build):
    circuit = build(HEAD + BERTH + "latch j = 2 A\nb1: berth(a, gnd, L = 200 uH, ask = j)\nb2: berth(a, gnd, ask = j)\n")
    givens = circuit.givens
    assert (givens["b1.L"].value, givens["b1.L"].tolerance) == pytest.approx((200e-6, 20e-6))
    assert (givens["b2.L"].value, givens["b2.L"].tolerance) == pytest.approx((180e-6, 18e-6))
    assert givens["b2.C"].tolerance == pytest.approx(0.2e-3)
    assert givens["b2.C"].normal
    assert givens["b1.L"].document == "choke"
    assert givens["b1.mode"].is_condition
    assert givens["b1.L"].dimension == units.INDUCTANCE


def test_the_outermost_value_of_a_given_wins(build):
    text = (
        HEAD
        + BERTH
        + """
assembly rack(p, n) {
    one: berth(p, n, ask = 1 A, L = 2 uH)
    given one.L = 3 uH
}
r: rack(a, gnd)
b: berth(a, gnd, ask = 1 A, L = 2 uH)
given b.C = 2 mF +- 5 %
study s1 {
    run for 1 s
    given b.C = 7 mF
    given r.one.L = 8 uH
}
"""
    )
    plain = build(text).givens
    assert plain["r.one.L"].value == pytest.approx(3e-6)
    assert plain["b.L"].value == pytest.approx(2e-6)
    assert (plain["b.C"].value, plain["b.C"].tolerance) == pytest.approx((2e-3, 1e-4))
    of_study = build(text, study="s1").givens
    assert of_study["r.one.L"].value == pytest.approx(8e-6)
    assert of_study["b.C"].value == pytest.approx(7e-3)
    assert of_study["b.C"].tolerance is None  # an absolute tolerance belongs to the value it was written for
    outermost = build(text, study="s1", overrides={"b.C": "9 mF", "r.one.L": "9 uH", "b.mode": "true"}).givens
    assert outermost["r.one.L"].value == pytest.approx(9e-6)
    assert outermost["r.one.L"].tolerance == pytest.approx(0.9e-6)  # a relative one stays
    assert outermost["b.C"].value == pytest.approx(9e-3)
    assert outermost["b.mode"].value == 1.0


def test_a_selection_of_givens(build):
    circuit = build(HEAD + BERTH + "each k in 1..3 {\n b{k}: berth(a, gnd, ask = 1 A)\n}\ngiven b{*}.L = 5 uH\ngiven b2.L = 6 uH\n")
    assert [circuit.givens[f"b{k}.L"].value for k in (1, 2, 3)] == pytest.approx([5e-6, 6e-6, 5e-6])


@pytest.mark.parametrize(
    ("path", "text", "code"),
    [
        ("b.L", "200 uF", "unit-expected"),
        ("b.L", "lots", "override-value"),
        ("b.L", "true", "condition-as-number"),
        ("b.M", "200 uH", "unknown-given"),
        ("b.y", "200 uH", "unknown-given"),
        ("c.L", "200 uH", "unknown-given"),
    ],
)
def test_wrong_values_from_outside(check, path, text, code):
    (found,) = check(HEAD + BERTH + "b: berth(a, gnd, ask = 1 A)\n", [(code, text)], overrides={path: text})
    assert found.span.source.name == f"given {path}"
    if path == "b.M":
        assert found.hint == "Did you mean `b.C`?"
    if path == "b.y":
        assert "signal" in found.headline


@pytest.mark.parametrize(
    ("settings", "code", "marked"),
    [
        ("ask = 1 A, L = a.v * 1 uH / 1 V", "varying-given", "a.v * 1 uH / 1 V"),
        ("ask = 1 A, L = 5 mF", "unit-expected", "5 mF"),
        ("ask = 1 V", "unit-mismatch", "want + ask * 1 ohm"),
        ("ask = 1 A, want = 3 A", "unit-expected", "3 A"),
        ("ask = 1 A, wnat = 3 V", "unknown-setting", "wnat"),
        ("ask = 1 A, y = 3 V", "unknown-setting", "y"),
        ("L = 1 uH", "input-missing", "b: berth(a, gnd, L = 1 uH)"),
        ("ask = 1 A, mode = 5", "number-as-condition", "5"),
    ],
)
def test_wrong_settings(check, settings, code, marked):
    check(f"{HEAD}{BERTH}b: berth(a, gnd, {settings})\n", [(code, marked)])


def test_givens_may_use_givens_in_any_order(build):
    circuit = build(HEAD + "given b1 = 2 * c1\ngiven c1 = 3 V\nfunction f(x) = x^2\ngiven d1 = f(b1)\n")
    assert [g.value for g in circuit.givens.values()] == [6.0, 3.0, 36.0]


@pytest.mark.parametrize(
    ("lines", "code", "marked"),
    [
        ("given b = c\ngiven c = b", "needs-itself", "b"),
        ("given b = time", "varying-value", "time"),
        ("given b = a.v", "varying-value", "a.v"),
        ("given b in V", "given-missing", "b"),
        ("given b = 5 V +- -3 %", "tolerance", "-3 %"),
        ("given b = 5 V +- 20", "tolerance", "20"),
        ("given b = 5 V +- 2 A", "unit-expected", "2 A"),
        ("given b = 5 degC +- 2 degC", "degrees-added", "2 degC"),
        ("given b = true +- 20 %", "tolerance", "+- 20 %"),
        ("given c.L = 3 uH", "unknown-given", "c.L"),
        ("given b = 1 / 0", "division-by-zero", "0"),
        ("given b = exp(5000)", "not-finite", "exp(5000)"),
        ("latch b = a.v", "varying-value", "a.v"),
        ("input b", "input-missing", "b"),
        ("input b = a.v", "varying-value", "b"),
        ("signal b = c\nsignal c = b + 1", "algebraic-loop", "b"),
        ("signal b = b", "algebraic-loop", "b"),
        ("d/dt b = 3 V initially 3 V", "unit-expected", "3 V"),
        ("d/dt b = 3 V/s initially a.v", "varying-value", "a.v"),
        ("d/dt b = 3 V/s initially 1 V within 5 V .. 2 V", "bounds-swapped", "5 V .. 2 V"),
        ("d/dt b = 3 V/s initially 1 V within 0 .. 2 A", "unit-expected", "2 A"),
        ("solve b from b^2 = 4 initially 1 V", "unit-mismatch", "solve b from b^2 = 4 initially 1 V"),
        ("solve b from 3 = 4", "nothing-to-solve", "solve b from 3 = 4"),
        ("function f(x) = f(x - 1)\nsignal y = f(3)", "recursive-function", "f"),
        ("function f(x) = g(x)\nfunction g(x) = f(x)\nsignal y = f(3)", "recursive-function", "f"),
        ("function f(x) = x * a.v\nsignal y = f(3)", "function-reads", "a.v"),
        ("signal k = 3\nfunction f(x) = x * k\nsignal y = f(3)", "function-reads", "k"),
        ("function f(x) = x filtered by 1 / (1 + s * 1 ms)\nsignal y = f(a.v)", "memory-refused", "x filtered by 1 / (1 + s * 1 ms)"),
        ("function f(x, y) = x + y\nsignal y = f(3)", "argument-count", "f(3)"),
        ("function f(x) = x + 3 V\nsignal y = f(3 A)", "unit-mismatch", "x + 3 V"),
    ],
)
def test_wrong_values(check, lines, code, marked):
    check(f"{HEAD}{lines}\n", [(code, marked)])


def test_the_call_that_led_into_a_function_is_shown(check):
    (found,) = check(HEAD + "function f(x) = x + 3 V\nsignal y = f(3 A)\n", [("unit-mismatch", "x + 3 V")])
    assert found.labels[-1].span.text == "f(3 A)"


def test_functions_are_inlined_for_each_unit(build, value):
    circuit = build(HEAD + "given k = 2\nfunction twice(x) = k * x\nfunction four(x) = twice(twice(x))\nsignal y = four(a.v)\nsignal q = four(3 A)\n")
    assert value(circuit, "y", {"potential a": 5.0}) == 20.0
    assert circuit.signals["y"].dimension == units.VOLTAGE
    assert circuit.signals["q"].dimension == units.CURRENT


@pytest.mark.parametrize(
    ("line", "dimension"),
    [
        ("d/dt x = 3 V/s", units.VOLTAGE),
        ("d/dt x = 3 V/s initially 0", units.VOLTAGE),
        ("d/dt x = (a.v - x) / 1 ms initially 0", units.VOLTAGE),
        ("d/dt x = -x / 1 s initially 0", units.NONE),
        ("d/dt x = -x / 1 s initially 5 A", units.CURRENT),
        ("d/dt x = -x / 1 s within 0 .. 5 A", units.CURRENT),
        ("d/dt x = y / 1 s\nsignal y = a.v - x", units.VOLTAGE),
        ("d/dt x = y\nd/dt y = (a.v - x) / (1 s)^2", units.VOLTAGE),
        ("d/dt x = 0", units.NONE),
    ],
)
def test_the_unit_of_a_state_is_found(build, line, dimension):
    circuit = build(f"{HEAD}{line}\n")
    assert circuit.states["x"].dimension == dimension


def test_states(build, value):
    circuit = build(HEAD + "d/dt x = 3 V/s initially 2 V within 0 .. a.v\nd/dt q = a.v / 1 V / 1 s held\n")
    x, q = circuit.states.values()
    g = circuit.graph
    assert (g.value_of(x.rate), g.value_of(x.initial), g.value_of(x.low), g.text(x.high)) == (3.0, 2.0, 0.0, "potential(a)")
    assert not x.held
    assert q.held
    assert q.initial is None


def test_unknowns(build):
    circuit = build(HEAD + "solve x from x^2 = 4 W initially 1 W^1\n".replace("W^1", "W").replace("4 W", "4 W^2") + "solve y from y = a.v\n")
    unknown = circuit.unknowns["x"]
    assert unknown.dimension == units.POWER
    assert unknown.residual_dimension == units.POWER**2
    assert circuit.graph.text(unknown.residual) == "((unknown(x) * unknown(x)) - 4.0)"
    assert circuit.unknowns["y"].dimension == units.VOLTAGE


def test_inputs(build, value):
    text = "input demand = 5 V\nassembly x(a) {\n input w = 3 V\n a --[1 ohm]-- b\n signal y = w + 1 V\n}\nx1: x(a, w = demand)\nx2: x(a)\n"
    circuit = build(HEAD + text)
    assert circuit.inputs == ("demand",)
    assert value(circuit, "x1.y", {"latch demand": 5.0}) == 6.0
    assert value(circuit, "x2.y") == 4.0
    assert value(circuit, "x1.w", {"latch demand": 5.0}) == 5.0
    circuit = build(HEAD + text.replace("= 5 V", ""), overrides={"demand": "7 V"})
    assert circuit.graph.value_of(circuit.latches["demand"].initial) == 7.0


def test_a_circle_through_a_filter_is_no_loop(build):
    circuit = build(HEAD + "signal ask = (5 V - meas) filtered by 100 / s * 1 /s\nsignal meas = ask filtered by 1 / (1 + s * 1 ms)\n")
    assert set(circuit.states) == {"ask#1", "meas#1"}
    assert circuit.states["ask#1"].dimension == circuit.states["meas#1"].dimension == units.VOLTAGE


def test_a_circle_through_a_filter_that_passes_at_once_is_one(check):
    check(
        HEAD + "signal ask = (5 V - meas) filtered by (1 + s * 2 ms) / (1 + s * 1 ms)\nsignal meas = 2 * ask\n",
        [("algebraic-loop", "ask")],
    )


@pytest.mark.parametrize("count", [30, 3000])
@pytest.mark.parametrize("forwards", [True, False])
def test_long_chains_of_signals(build, value, count, forwards):
    step = f"each k in 1..{count} {{\n signal x{{k}} = x{{k {'-' if forwards else '+'} 1}} + 1 V\n}}\n"
    start = 0 if forwards else count + 1
    circuit = build(f"{HEAD}{step}signal x{start} = a.v\n")
    assert circuit.signals[f"x{1 if not forwards else count}"].dimension == units.VOLTAGE


def test_a_long_circle_of_signals(check):
    text = "each k in 1..500 {\n signal x{k} = x{k + 1} + 1 V\n}\nsignal x501 = x1\n"
    (found,) = check(HEAD + text, [("algebraic-loop", "x501")])
    assert "x501 → x1 → x2" in found.headline
