"""What is in a box: elements by their unit, equations, devices, start values."""

import pytest

from polewise.circuit.model import Law

HEAD = "reference gnd\n"


@pytest.mark.parametrize(
    ("box", "law", "number"),
    [
        ("12 mohm", Law.RESISTANCE, 0.012),
        ("0.5 S", Law.CONDUCTANCE, 0.5),
        ("25 uH", Law.FLUX, 25e-6),
        ("2.2 mF", Law.CHARGE, 2.2e-3),
        ("800 V", Law.VOLTAGE, 800.0),
        ("5 A", Law.CURRENT, 5.0),
        ("2 V / 4 A", Law.RESISTANCE, 0.5),
        ("3 A * 2 ohm", Law.VOLTAGE, 6.0),
        ("-5 A", Law.CURRENT, -5.0),
    ],
)
def test_the_unit_says_what_it_is(build, box, law, number):
    circuit = build(f"{HEAD}x: a --[{box}]-- gnd\n")
    branch = circuit.branches["x"]
    assert branch.law is law
    g = circuit.graph
    node = branch.expression
    if law in (Law.CHARGE, Law.FLUX):  # the law is d/dt of C*v, of L*i
        own = g.symbol("v" if law is Law.CHARGE else "i", "x")
        assert node == g.multiply(g.constant(number), own)
    else:
        assert g.value_of(node) == pytest.approx(number, rel=1e-15)
    assert (branch.left, branch.right) == ("a", "gnd")


def test_branch_names_follow_the_path(build):
    circuit = build(
        HEAD
        + "feeder: src --[r: 6 mohm]--[l: 25 uH]-- bus\nsupply: src --[800 V]-- gnd\n"
        + "bus --[1 ohm]-- gnd\nbus --[2 ohm]-- gnd\nm: bus --[1 S]--[2 S]-- gnd\n"
    )
    assert list(circuit.branches) == ["feeder.r", "feeder.l", "supply", "bus--gnd", "bus--gnd#2", "m#1", "m#2"]
    assert circuit.branches["feeder.r"].right == circuit.branches["feeder.l"].left == "feeder#1"
    assert not circuit.nodes["feeder#1"].named
    assert circuit.nodes["bus"].named
    assert circuit.paths["feeder"].items == (("feeder.r",), ("feeder.l",))


def test_a_path_of_one_named_box_passes_its_readings_through(build):
    circuit = build(HEAD + "load: a --[k: 5 ohm]-- gnd\n")
    assert list(circuit.branches) == ["load.k"]
    assert circuit.aliases["load"] == "load.k"


def test_parallel_boxes_share_their_nodes(build, value):
    circuit = build(HEAD + "x: a --[p1: 5 ohm | 2 S | c: 1 mF initially 3 V]--[1 uH]-- gnd\n")
    assert circuit.paths["x"].items == (("x.p1", "x#2", "x.c"), ("x#4",))
    assert {circuit.branches[n].left for n in ("x.p1", "x#2", "x.c")} == {"a"}
    assert {circuit.branches[n].right for n in ("x.p1", "x#2", "x.c")} == {"x#1"}
    assert value(circuit, "x.i", {"i x.p1": 1.0, "i x#2": 2.0, "i x.c": 4.0}) == 7.0


def test_boxes_vary_with_anything(build, value):
    circuit = build(HEAD + "latch r = 5 ohm\nx: a --[r]-- gnd\ny: a --[325 V * sin(2*pi * 50 Hz * time)]-- gnd\n")
    assert circuit.branches["x"].law is Law.RESISTANCE
    assert circuit.graph.text(circuit.branches["x"].expression) == "latch(r)"
    assert value(circuit, circuit.branches["y"].expression, {"time": 0.005}) == pytest.approx(325.0, rel=1e-12)


def test_start_values(build):
    circuit = build(
        HEAD + "a --[2 mF initially 700 V]-- gnd\nb --[1 mH initially 3 A]-- gnd\nc --[1 mH initially 2 mWb]-- gnd\nd --[1 mF initially 3 mC]-- gnd\n"
    )
    starts = [circuit.graph.value_of(b.initial) for b in circuit.branches.values()]
    assert starts == pytest.approx([700.0, 3.0, 2.0, 3.0], rel=1e-15)


@pytest.mark.parametrize(
    ("box", "code", "marked"),
    [
        ("5 ohm initially 3 V", "nothing-stored", "3 V"),
        ("v = 2 ohm * i + d/dt (2 mH * i) initially 3 A", "initially-kind", "3 A"),
        ("v = 2 ohm * i initially 3 A", "nothing-stored", "3 A"),
        ("breaker() initially 3 A", "nothing-stored", "3 A"),
        ("1 mH initially 3 V", "unit-expected", "3 V"),
        ("1 mH initially time", "varying-value", "time"),
        ("5", "box-unit", "5"),
        ("0", "box-unit", "0"),
        ("5 K", "box-unit", "5 K"),
        ("true", "condition-as-number", "true"),
        ("20 kW", "power-without-bound", "20 kW"),
        ("20 kW above 0 V", "power-bound", "0 V"),
        ("20 kW above 3 A", "unit-expected", "3 A"),
        ("-20 kW above 300 V", "power-relation", "-20 kW"),
        ("20 kW below 300 V", "power-relation", "20 kW"),
        ("-5 uH", "not-positive", "-5 uH"),
        ("0 ohm", "not-positive", "0 ohm"),
        ("v = 5 A", "unit-expected", "5 A"),
        ("i = d/dt (5 V * time)", "unit-expected", "5 V * time"),
        ("v = 3 ohm * i + 2 A", "unit-mismatch", "3 ohm * i + 2 A"),
        ("5 V = 3 V", "equation-own", "5 V = 3 V"),
        ("v + i = 3 V", "unit-mismatch", "v + i"),
        ("v^2 = 3 V", "unit-mismatch", "v^2 = 3 V"),
        ("5 ohm * (1 + i / 3 A)", "own-name", "i"),
        ("diode(3 A)", "unit-expected", "3 A"),
        ("diode(0.8 V, 2 mohm, 3 V)", "too-many-arguments", "3 V"),
        ("diode(drop = 0.8 V, drip = 2 V)", "unknown-setting", "drip"),
        ("diode(0.8 V, drop = 2 V)", "setting-twice", "drop"),
        ("breaker(5)", "number-as-condition", "5"),
        ("breaker(a.v > 3 V)", "varying-value", "a.v > 3 V"),
        ("switch()", "setting-missing", "switch"),
        ("diod(0.8 V)", "unknown-function", "diod"),
        ("pole(1, 2)", "device-as-value", "pole"),
        ("i = d/dt d/dt v", "derivative-outside", "d/dt v"),
    ],
)
def test_wrong_boxes(check, box, code, marked):
    check(f"{HEAD}x: a --[{box}]-- gnd\n", [(code, marked)])


@pytest.mark.parametrize(
    ("box", "law", "text"),
    [
        ("i = 1 A * (v / 900 V)^2", Law.CURRENT, None),
        ("v = 5 V", Law.VOLTAGE, "5.0"),
        ("5 V = v", Law.VOLTAGE, "5.0"),
        ("v = 2 ohm * i", Law.VOLTAGE, "(2.0 * i(x))"),
        ("v = d/dt (2 mH * i)", Law.FLUX, "(0.002 * i(x))"),
        ("i = d/dt (1 mF * v)", Law.CHARGE, "(0.001 * v(x))"),
        ("d/dt (1 mF * v) = i", Law.CHARGE, "(0.001 * v(x))"),
        ("p = 5 W", Law.IMPLICIT, "((v(x) * i(x)) - 5.0)"),
        ("v * i = 5 W", Law.IMPLICIT, "((v(x) * i(x)) - 5.0)"),
        ("v = 3 V + 0.1 * v", Law.IMPLICIT, None),
        ("v = 2 ohm * i + d/dt (2 mH * i)", Law.VOLTAGE, "((2.0 * i(x)) + rate(x#1))"),
    ],
)
def test_equations(build, box, law, text):
    circuit = build(f"{HEAD}x: a --[{box}]-- gnd\n")
    branch = circuit.branches["x"]
    assert branch.law is law
    if text is not None:
        assert circuit.graph.text(branch.expression) == text
    for rate in circuit.rates.values():
        assert circuit.graph.text(rate.expression) == "(0.002 * i(x))"


def test_constant_power_is_a_device(build):
    circuit = build(HEAD + "latch d = 20 kW\nx: a --[d above 300 V]-- gnd\ny: a --[g: -5 kW below 850 V]-- gnd\n")
    device = circuit.devices["x"]
    assert device.kind == "constant_power"
    assert device.settings["relation"] == "above"
    assert circuit.graph.text(device.settings["power"]) == "latch(d)"
    assert circuit.devices["y.g"].settings["relation"] == "below"
    assert circuit.branches["y.g"].device == "y.g"
    assert circuit.branches["x"].law is Law.DEVICE


def test_breakers_bring_a_latch(build):
    circuit = build(HEAD + "x: a --[k: breaker(false)]--[1 ohm]-- gnd\ny: a --[breaker()]-- gnd\n")
    assert {n: circuit.graph.value_of(x.initial) for n, x in circuit.latches.items()} == {"x.k.closed": 0.0, "y.closed": 1.0}
    assert circuit.devices["x.k"].latches == {"closed": "x.k.closed"}
    assert all(latch.is_condition for latch in circuit.latches.values())


def test_bare_wires_join_nodes(build):
    circuit = build(HEAD + "a -- b\nb --[1 ohm]-- c -- d\nd --[1 ohm]-- gnd\ne -- gnd\na --[5 V]-- e\n")
    assert set(circuit.nodes) == {"gnd", "a", "c"}
    assert circuit.aliases["b"] == "a"
    assert circuit.aliases["e"] == "gnd"
    assert [(b.left, b.right) for b in circuit.branches.values()] == [("a", "c"), ("c", "gnd"), ("a", "gnd")]


def test_a_bare_wire_with_a_name_is_a_branch_whose_current_reads(build, value):
    circuit = build(HEAD + "link: a -- b\na --[1 V]-- gnd\nb --[1 ohm]-- gnd\nsignal x = link.i\n")
    assert circuit.branches["link"].law is Law.VOLTAGE
    assert circuit.graph.value_of(circuit.branches["link"].expression) == 0.0
    assert value(circuit, "x", {"i link": 3.0}) == 3.0


def test_a_path_may_pass_named_nodes(build, value):
    circuit = build(HEAD + "x: a --[1 ohm]-- b --[2 ohm]-- gnd\n")
    at = {"i x#1": 3.0, "i x#2": 4.0, "v x#1": 3.0, "v x#2": 8.0, "potential a": 11.0}
    assert value(circuit, "x.i", at) == 3.0
    assert value(circuit, "x.v", at) == 11.0
    assert value(circuit, "x.p", at) == 9.0 + 32.0
