"""Assemblies, `each`, placements, limits."""

import time

import pytest

HEAD = "reference gnd\n"
BERTH = "assembly berth(inp, inn, out) {\n r: inp --[1 ohm]-- mid\n mid --[2 ohm]-- out\n c: out --[1 mF]-- inn\n}\n"


def test_ports_by_position_and_by_name(build):
    circuit = build(
        HEAD + BERTH + "a --[5 V]-- gnd\nb1: berth(a, gnd, out = b)\nb2: berth(out = b, inp = a, inn = gnd)\nb3: berth(a, gnd, unconnected)\n"
    )
    assert circuit.assemblies["b1"].ports == circuit.assemblies["b2"].ports == {"inp": "a", "inn": "gnd", "out": "b"}
    assert circuit.assemblies["b3"].ports["out"] == "b3.out"
    assert circuit.aliases["b1.out"] == "b"
    assert circuit.branches["b1.r"].left == "a"
    assert circuit.branches["b1.r"].right == "b1.mid"
    assert circuit.nodes["b1.mid"].owner == "b1"


def test_port_currents(build, value):
    circuit = build(HEAD + BERTH + "a --[5 V]-- gnd\nb1: berth(a, gnd, b)\nsignal x = b1.out.i\nsignal y = b1.out.p\nsignal q = b1.p\n")
    at = {"i b1.mid--b1.out": 2.0, "i b1.c": 3.0, "i b1.r": 7.0, "potential b": 10.0, "potential a": 100.0}
    assert value(circuit, "x", at) == 1.0
    assert value(circuit, "y", at) == 10.0
    assert value(circuit, "q", at) == 710.0
    assert value(circuit, circuit.ports["b1.inn"].current, at) == -3.0


def test_port_currents_through_nested_assemblies_and_inner_wires(build, value):
    rack = "assembly rack(p, n, o) {\n p -- q\n one: berth(q, n, o)\n two: berth(p, n, o)\n q --[5 ohm]-- n\n signal y = p.i\n}\n"
    text = HEAD + BERTH + rack + "r: rack(a, gnd, b)\na --[5 V]-- gnd\n"
    circuit = build(text)
    at = {"i r.one.r": 1.0, "i r.two.r": 2.0, "i r.q--r.n": 4.0}
    assert value(circuit, "r.y", at) == 7.0
    assert circuit.branches["r.q--r.n"].left == "a"


def test_the_current_between_two_ports_that_a_wire_joins_can_not_be_told(check, build):
    text = HEAD + "assembly x(p, q) {{\n {}\n p --[1 ohm]-- b\n}}\nx1: x(a, b)\na --[1 V]-- gnd\nb --[1 ohm]-- gnd\nsignal y = x1.p.i\n"
    check(text.format("p -- q"), [("port-current", "i")])
    build(text.format("w: p -- q"))


def test_each_with_index_arithmetic_and_selections(build, value):
    circuit = build(
        HEAD
        + """
given count = 3
table wanted(n) in V = (1, 10 V) (2, 20 V) (3, 40 V)
each k in 1..count {
    x{k}: a{k-1} --[wanted(k)]-- a{k}
    latch y{k}_{k+1} = k * 1 A
}
x9: a3 --[1 ohm]-- gnd
a0 -- gnd
signal total = sum(x{*}.v)
signal largest = max(x{*}.i)
"""
    )
    assert [circuit.graph.value_of(circuit.branches[f"x{k}"].expression) for k in (1, 2, 3)] == [10.0, 20.0, 40.0]
    assert list(circuit.latches) == ["y1_2", "y2_3", "y3_4"]
    at = {"v x1": 1.0, "v x2": 2.0, "v x3": 3.0, "v x9": 4.0, "i x1": 5.0, "i x2": 9.0, "i x3": 7.0, "i x9": 1.0}
    assert value(circuit, "total", at) == 10.0
    assert value(circuit, "largest", at) == 9.0


def test_each_in_each(build):
    circuit = build(HEAD + "each j in 1..2 {\n each k in j..3 {\n  x{j}_{k}: a --[j * k * 1 ohm]-- gnd\n }\n}\n")
    assert list(circuit.branches) == ["x1_1", "x1_2", "x1_3", "x2_2", "x2_3"]


def test_assemblies_repeat_by_their_givens(build):
    text = HEAD + "assembly row(a) {\n given count = 1\n each k in 1..count {\n  x{k}: a --[1 ohm]-- gnd2\n }\n}\n"
    circuit = build(text + "r1: row(gnd, count = 3)\nr2: row(gnd)\n")
    assert list(circuit.branches) == ["r1.x1", "r1.x2", "r1.x3", "r2.x1"]
    assert len(build(text + "r1: row(gnd)\n", overrides={"r1.count": "4"}).branches) == 4


@pytest.mark.parametrize(
    ("lines", "code", "marked"),
    [
        ("each k in 1..2.5 {\n a{k} --[1 ohm]-- gnd\n}", "not-whole", "2.5"),
        ("each k in 1..time {\n a{k} --[1 ohm]-- gnd\n}", "not-whole", "time"),
        ("each k in 1..3 V {\n a{k} --[1 ohm]-- gnd\n}", "not-whole", "3 V"),
        ("each k in 1..2 {\n a{k / 4} --[1 ohm]-- gnd\n}", "not-whole", "k / 4"),
        ("each k in 1..2 {\n a{0 - k} --[1 ohm]-- gnd\n}", "not-whole", "0 - k"),
        ("given k = 3\neach k in 1..2 {\n a{k} --[1 ohm]-- gnd\n}", "each-variable", "each k in 1..2"),
        ("each k in 1..2 {\n each k in 1..2 {\n  a{k} --[1 ohm]-- gnd\n }\n}", "each-variable", "each k in 1..2"),
        ("each k in 1..2 {\n x: a{k} --[1 ohm]-- gnd\n}", "declared-twice", "x"),
        ("signal x = sum(b{*}.v)", "nothing-selected", "b{*}.v"),
        ("b1 --[1 ohm]-- gnd\nsignal x = b{*}.v + 3 V", "star-misplaced", "*"),
        ("b1 --[1 ohm]-- gnd\nsignal x = sum(b{*}.q)", "unknown-reading", "q"),
        ("x: berth(a, gnd)", "terminals-missing", "berth"),
        ("x: berth(a, gnd, c, d)", "too-many-arguments", "d"),
        ("x: berth(a, gnd, c, out = d)", "terminal-twice", "out"),
        ("x: berth(a, gnd, 5 V)", "terminal-node", "5 V"),
        ("x: berht(a, gnd, c)", "unknown-kind", "berht"),
        ("x: diode(a, gnd)", "device-in-box", "diode"),
        ("signal s1 = 3\nx: s1(a, gnd)", "unknown-kind", "s1"),
        ("x: pole(a, gnd, m, duty = 0.5, rate = 20 kHz, upper = transistor, lower = diode())", "part-wanted", "transistor"),
        ("x: pole(a, gnd, m, duty = 0.5, rate = 20 kHz, upper = breaker(true), lower = diode())", "part-wanted", "breaker"),
        ("x: pole(a, gnd, m, duty = 0.5, rate = 20 krad/s, upper = transistor(), lower = diode())", "turn-missing", "20 krad/s"),
        ("x: pole(a, gnd, m, duty = 0.5 V, rate = 20 kHz, upper = transistor(), lower = diode())", "unit-expected", "0.5 V"),
        ("x: pole(a, gnd, m, duty = 0.5, upper = transistor(), lower = diode())", "setting-missing", "pole"),
        ("x: pole(a, gnd, m, duty = 0.5, rate = 20 kHz, upper = transistor(), lower = transistor())", "settings-contradict", "pole"),
        ("x: pole(a, gnd, m, duty = 0.5, rate = 20 kHz, upper = transistor(3 V), lower = diode())", "unit-expected", "3 V"),
        ("x: pole(a, gnd, m, duty = 0.5, rate = 20 kHz, upper = transistor(), lower = diode(), conduction = continous)", "word-wanted", "continous"),
        ("x: pole(a, gnd, m, duty = 0.5, rate = 20 kHz, upper = transistor(), lower = diode(), choke = 5)", "inductor-wanted", "5"),
        ("x: pole(a, gnd, m, duty = 0.5, rate = 20 kHz, upper = transistor(), lower = diode(), choke = a)", "inductor-wanted", "a"),
        ("x: pole(a, gnd, m, dutty = 0.5, rate = 20 kHz, upper = transistor(), lower = diode())", "unknown-setting", "dutty"),
    ],
)
def test_wrong_placements(check, lines, code, marked):
    check(f"{HEAD}a --[1 V]-- gnd\na --[1 ohm]-- gnd\n{BERTH}{lines}\n", [(code, marked)])


def test_an_error_in_an_assembly_is_said_once(check):
    check(HEAD + "assembly x(a) {\n a --[5]-- b\n}\neach k in 1..50 {\n x{k}: x(gnd)\n}\n", [("box-unit", "5")])


def test_an_empty_each_is_doubtful(check):
    check(HEAD + "each k in 3..1 {\n a{k} --[1 ohm]-- gnd\n}\n", [("each-empty", "3..1")])


def test_devices(build, value):
    circuit = build(
        HEAD
        + """
bus --[48 V]-- gnd
drive: m --[r: 1 ohm]--[l: 1 mH]-- out
out --[1 mF]-- gnd
leg: pole(bus, gnd, mid = m, duty = 0.4, rate = 20 kHz, upper = transistor(8 mohm), lower = diode(0.7 V), choke = drive.l)
signal x = leg.mid.i
signal y = leg.mid.v
signal q = leg.loss
"""
    )
    device = circuit.devices["leg"]
    assert device.terminals == {"top": "bus", "bottom": "gnd", "mid": "m"}
    assert device.settings["choke"] == ("drive.l",)
    upper = device.settings["upper"]
    assert upper.kind == "transistor"
    assert circuit.graph.value_of(upper.values["resistance"]) == 0.008
    assert circuit.graph.value_of(device.settings["rate"]) == 20e3
    slots = device.branches
    assert all(circuit.branches[name].device == "leg" for name in slots.values())
    arms = {f"i {name}": float(k) for k, name in enumerate(slots.values(), start=1)}
    expected = sum(v * (1 if circuit.branches[k[2:]].left == "m" else -1 if circuit.branches[k[2:]].right == "m" else 0) for k, v in arms.items())
    assert value(circuit, "x", arms) == expected
    assert circuit.graph.text(circuit.signals["q"].expression) == "reading(leg.loss)"


# ---------------------------------------------------------------- limits


@pytest.mark.parametrize(
    "text",
    [
        "each k in 1..10000000 {\n a{k} --[1 ohm]-- gnd\n}\n",
        "given n = 10000000\neach k in 1..n {\n a{k} --[1 ohm]-- gnd\n}\n",
        "each j in 1..1000 {\n each k in 1..10000 {\n  a{k} --[1 ohm]-- gnd\n }\n}\n",
        "assembly x0(a) {\n a --[1 ohm]-- b\n a --[1 ohm]-- b\n}\n"
        + "".join(f"assembly x{n + 1}(a) {{\n each k in 1..10 {{\n  x{{k}}: x{n}(a)\n }}\n}}\n" for n in range(7))
        + "top: x7(gnd)\n",
    ],
)
def test_too_large_ends_quickly(check, text):
    begin = time.perf_counter()
    (found,) = check(HEAD + text, [("too-large", ANYTHING)])
    assert "1,000,000" in found.headline
    assert time.perf_counter() - begin < 5.0


class _Any:
    def __eq__(self, other: object) -> bool:
        return True

    def __hash__(self) -> int:
        return 0


ANYTHING = _Any()


def test_recursive_assemblies(check):
    check(HEAD + "assembly x(a) {\n y1: y(a)\n}\nassembly y(a) {\n x1: x(a)\n}\ntop: x(gnd)\n", [("recursive-assembly", "x")])
    (found,) = check(HEAD + "assembly x(a) {\n x1: x(a)\n}\ntop: x(gnd)\n", [("recursive-assembly", "x")])
    assert "x → x" in found.headline


def test_nesting_depth(check):
    chain = "".join(f"assembly x{n}(a) {{\n x: x{n + 1}(a)\n}}\n" for n in range(60)) + "assembly x60(a) {\n a --[1 ohm]-- b\n}\n"
    check(HEAD + chain + "top: x0(gnd)\n", [("nested-too-deep", "x40")])


def test_copies_of_a_wrong_statement_say_it_once(check):
    copies = "each k in 1..3000 {\n x{k}: bertg(gnd)\n y{k}: gnd --[1 ohm]-- a{k}\n whenever y{k}.q > 3 A: set nothing = 3\n}\n"
    check(HEAD + BERTH + copies, [("unknown-kind", "bertg"), ("unknown-reading", "q"), ("unknown-name", "nothing")])
