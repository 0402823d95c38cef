"""Islands of other kinds: rotation, translation, heat."""

import pytest

from polewise.circuit.model import Domain, Law

HEAD = "reference gnd\nreference frame (rad/s)\nreference wall (m/s)\nreference zero (K)\n"


@pytest.mark.parametrize(
    ("node", "box", "law"),
    [
        ("frame", "5 N*m", Law.CURRENT),
        ("frame", "80 rad/s", Law.VOLTAGE),
        ("frame", "1000 rpm", Law.VOLTAGE),
        ("frame", "0.02 kg*m^2", Law.CHARGE),
        ("frame", "0.003 N*m*s/rad", Law.CONDUCTANCE),
        ("frame", "1 / 0.003 N*m*s/rad", Law.RESISTANCE),
        ("frame", "0.01 rad/N/m", Law.FLUX),
        ("wall", "5 N", Law.CURRENT),
        ("wall", "3 m/s", Law.VOLTAGE),
        ("wall", "20 kg", Law.CHARGE),
        ("wall", "3 N*s/m", Law.CONDUCTANCE),
        ("wall", "0.01 m/N", Law.FLUX),
        ("zero", "5 W", Law.CURRENT),
        ("zero", "25 degC", Law.VOLTAGE),
        ("zero", "900 J/K", Law.CHARGE),
        ("zero", "0.8 K/W", Law.RESISTANCE),
        ("zero", "0.8 W/K", Law.CONDUCTANCE),
    ],
)
def test_units_take_the_role_they_have_there(build, node, box, law):
    circuit = build(f"{HEAD}x: a --[{box}]-- {node}\n")
    branch = circuit.branches["x"]
    assert branch.law is law
    assert branch.domain is circuit.nodes["a"].domain is circuit.nodes[node].domain


@pytest.mark.parametrize(
    ("node", "box", "code", "marked"),
    [
        ("frame", "5 ohm", "box-unit", "5 ohm"),
        ("frame", "50 Hz", "turn-missing", "50 Hz"),
        ("frame", "100 N*m/rad", "spring", "100 N*m/rad"),
        ("frame", "diode(0.8 V)", "device-domain", "diode"),
        ("frame", "v = 3 rad/s", "own-name", "v"),
        ("zero", "1 K*s/W", "box-unit", "1 K*s/W"),
        ("zero", "20 W above 5 K", "power-in-heat", "20 W"),
        ("gnd", "5 N*m", "box-unit", "5 N*m"),
        ("gnd", "900 J/K", "box-unit", "900 J/K"),
    ],
)
def test_wrong_units_there(check, node, box, code, marked):
    check(f"{HEAD}x: a --[{box}]-- {node}\n", [(code, marked)])


def test_readings_have_the_names_of_their_kind(build, value, check):
    text = HEAD + "twist: frame --[5 N*m]-- shaft\nrotor: shaft --[0.02 kg*m^2]-- frame\nwarm: zero --[5 W]-- copper\ncopper --[1 K/W]-- zero\n"
    circuit = build(text + "signal a = shaft.speed\nsignal b = twist.torque\nsignal c = twist.p\nsignal d = warm.heat\nsignal e = copper.temp\n")
    at = {"potential shaft": 3.0, "i twist": 5.0, "v twist": -3.0, "i warm": 7.0, "potential copper": 300.0}
    assert [value(circuit, name, at) for name in "abcde"] == [3.0, 5.0, -15.0, 7.0, 300.0]
    (found,) = check(text + "signal a = shaft.v\n", [("unknown-reading", "v")])
    assert found.hint == "It has `speed`."
    check(text + "signal a = warm.p\n", [("unknown-reading", "p")])


def test_equation_boxes_use_their_names_too(build, check):
    circuit = build(HEAD + "x: a --[torque = 0.01 N*m*s/rad * speed]-- frame\n")
    assert circuit.branches["x"].law is Law.CURRENT
    assert circuit.graph.text(circuit.branches["x"].expression) == "(0.01 * v(x))"
    build(HEAD + "signal speed = 3\nx: a --[v = 3 V * speed]-- gnd\n")
    check(HEAD + "signal speed = 3\nx: a --[torque = 0.01 N*m*s/rad * speed]-- frame\n", [("own-name", "speed")])


def test_kinds_spread_through_boxes_and_wires(build):
    circuit = build(HEAD + "a --[1 kg*m^2]-- b -- c\nc --[1 N*m]-- d\nd --[1 N*m]-- frame\nq --[1 ohm]-- r\n")
    assert circuit.nodes["a"].domain is Domain.ROTATION
    assert circuit.nodes["q"].domain is Domain.ELECTRICAL


def test_a_box_never_joins_two_kinds(check):
    (found,) = check(HEAD + "x: a --[1 N*m]-- frame\ny: a --[5 ohm]-- gnd\n", [("kinds-joined", "[5 ohm]")])
    assert found.headline == "this joins a rotation island with an electrical island"
    assert {label.span.text for label in found.labels} == {"frame", "gnd"}
    check(HEAD + "frame -- gnd\n", [("kinds-joined", "frame")])


def test_devices_are_electrical(check):
    text = "leg: pole(shaft, gnd, m, duty = 0.5, rate = 20 kHz, upper = transistor(), lower = diode())\nshaft --[1 N*m]-- frame\nm --[1 ohm]-- gnd\n"
    check(HEAD + text, [("kinds-joined", "[1 N*m]")])
    check(HEAD + text.replace("shaft, gnd", "b, frame").replace("shaft --[1 N*m]-- frame", "b --[1 ohm]-- gnd"), [("device-domain", "pole")])


@pytest.mark.parametrize("kind", ["ohm", "Hz", "degC", "kg"])
def test_unknown_kinds(check, kind):
    check(f"reference x ({kind})\n", [("reference-kind", kind)])


def test_assemblies_may_hold_shafts_and_heat(build, value):
    circuit = build(
        HEAD
        + """
assembly motor(plus, n, shaft, body) {
    arm: plus --[1 ohm]--[emf: v = 0.5 V*s/rad * shaft.speed]-- n
    turn: ground --[0.5 V*s/rad * arm.i]-- shaft
    reference ground (rad/s)
    out: cold --[arm.p]-- body
    reference cold (K)
    signal y = shaft.torque
    signal q = body.heat
}
m1: motor(a, gnd, s1, b1)
s1 --[1 kg*m^2]-- frame
b1 --[1 J/K]-- zero
a --[5 V]-- gnd
signal all = m1.p
"""
    )
    assert circuit.nodes["s1"].domain is Domain.ROTATION
    assert value(circuit, "m1.y", {"i m1.turn": 3.0}) == -3.0
    at = {"i m1.turn": 3.0, "i m1.out": 7.0, "i m1.arm#1": 2.0, "i m1.arm.emf": 2.0, "potential a": 10.0, "potential s1": 4.0}
    assert value(circuit, "all", at) == 20.0 - 12.0 - 7.0
