"""The unit check: every rule of the language about units, conditions and plain numbers."""

import math

import pytest

from polewise.circuit.dimensions import unit_text

HEAD = """reference gnd
a --[1 ohm]-- gnd
a --[5 V]-- gnd
latch u = 5 V
latch j = 2 A
latch ok = true
latch f = 50 Hz
latch w = 80 rad/s
latch n = 3
"""


@pytest.mark.parametrize(
    ("expression", "number", "unit"),
    [
        ("12 mohm * 2 A", 0.024, "V"),
        ("50 Hz * time", 1.0, ""),
        ("2*pi * 50 Hz", 100 * math.pi, "1/s"),
        ("0 + 5 V", 5.0, "V"),
        ("5 V - 0", 5.0, "V"),
        ("max(0, 5 V)", 5.0, "V"),
        ("limit(7 V, 0, 5 V)", 5.0, "V"),
        ("5 V if ok otherwise 0", 5.0, "V"),
        ("sqrt(9 V * 1 V)", 3.0, "V"),
        ("(2 V)^2", 4.0, "V^2"),
        ("(4 V)^0.5", 2.0, "V^1/2"),
        ("2^(-3)", 0.125, ""),
        ("2^n", 8.0, ""),
        ("25 degC", 298.15, "K"),
        ("-5 degC", 268.15, "K"),
        ("25 degC - 20 degC", 5.0, "K"),
        ("25 degC + 5 K", 303.15, "K"),
        ("sin(90 deg)", 1.0, ""),
        ("atan2(1 V, 1 V)", math.pi / 4, ""),
        ("sign(-3 V)", -1.0, ""),
        ("abs(-3 V)", 3.0, "V"),
        ("min(3 V, 2 V, 5 V)", 2.0, "V"),
        ("hypot(3 V, 4 V)", 5.0, "V"),
        ("remainder(7 V, 4 V)", 3.0, "V"),
        ("floor(2.7)", 2.0, ""),
        ("ceil(2.2)", 3.0, ""),
        ("round(2.5)", 3.0, ""),
        ("ln(exp(2))", 2.0, ""),
        ("log10(1000)", 3.0, ""),
        ("20 %", 0.2, ""),
        ("1 if u > 3 V and not (j > 5 A or ok == false) otherwise 0", 1.0, ""),
        ("1 if n == 3 and n != 4 and n >= 3 and n <= 3 otherwise 0", 1.0, ""),
        ("1 if ok != true otherwise 2", 2.0, ""),
        ("a - (-5 V)".replace("a", "2 V"), 7.0, "V"),
        ("sum(1 V, 2 V, 3 V)", 6.0, "V"),
    ],
)
def test_right_expressions(build, value, expression, number, unit):
    circuit = build(f"{HEAD}signal x = {expression}\n")
    at = {"time": 0.02, "latch u": 5.0, "latch j": 2.0, "latch ok": 1.0, "latch n": 3.0}
    assert value(circuit, "x", at) == pytest.approx(number, rel=1e-12)
    assert unit_text(circuit.signals["x"].dimension) == unit


@pytest.mark.parametrize(
    ("expression", "code", "marked"),
    [
        ("12 mohm + 3 uH", "unit-mismatch", "12 mohm + 3 uH"),
        ("u + 3", "unit-mismatch", "u + 3"),
        ("u - j", "unit-mismatch", "u - j"),
        ("1 if u > j otherwise 0", "unit-mismatch", "u > j"),
        ("u if ok otherwise j", "unit-mismatch", "u if ok otherwise j"),
        ("u if ok otherwise false", "unit-mismatch", "u if ok otherwise false"),
        ("max(u, j)", "unit-mismatch", "max(u, j)"),
        ("f + w", "turn-missing", "f + w"),
        ("1 if f > w otherwise 0", "turn-missing", "f > w"),
        ("max(f, w)", "turn-missing", "max(f, w)"),
        ("f if ok otherwise w", "turn-missing", "f if ok otherwise w"),
        ("20 degC + 5 degC", "degrees-added", "5 degC"),
        ("sin(u)", "unit-expected", "u"),
        ("exp(3 V)", "unit-expected", "3 V"),
        ("2^(3 V)", "exponent", "3 V"),
        ("u^n", "exponent", "n"),
        ("u^100", "exponent", "100"),
        ("ok + 1", "condition-as-number", "ok"),
        ("2 * ok", "condition-as-number", "ok"),
        ("-ok", "condition-as-number", "ok"),
        ("sin(ok)", "condition-as-number", "ok"),
        ("1 if ok > false otherwise 0", "condition-as-number", "ok"),
        ("1 if u otherwise 0", "number-as-condition", "u"),
        ("1 if not u otherwise 0", "number-as-condition", "u"),
        ("1 if ok and 3 otherwise 0", "number-as-condition", "3"),
        ("u / 0", "division-by-zero", "0"),
        ("(1 V, 2 V)", "list-as-value", "(1 V, 2 V)"),
        ("d/dt u", "derivative-outside", "d/dt u"),
        ("s * 5", "filter-letter", "s"),
        ("v", "own-name", "v"),
        ("p + 3 W", "own-name", "p"),
        ("atan2(1)", "argument-count", "atan2(1)"),
        ("sin(x = 3)", "setting-in-function", "x = 3"),
        ("sni(3)", "unknown-function", "sni"),
        ("u(3)", "unknown-function", "u"),
        ("diode(3 V)", "device-as-value", "diode"),
        ("a", "not-a-value", "a"),
    ],
)
def test_wrong_expressions(check, expression, code, marked):
    check(f"{HEAD}signal x = {expression}\n", [(code, marked)])


def test_a_mismatch_shows_both_places_and_kinds(check):
    (found,) = check(f"{HEAD}signal x = 12 mohm + 3 uH\n", [("unit-mismatch", "12 mohm + 3 uH")])
    assert found.headline == "a resistance (ohm) and an inductance (H) can't be added"
    assert [(label.span.text, label.text) for label in found.labels] == [("12 mohm", "a resistance (ohm)"), ("3 uH", "an inductance (H)")]


def test_a_missing_unit_is_proposed(check):
    (found,) = check(f"{HEAD}signal x = u + 3\n", [("unit-mismatch", "u + 3")])
    assert found.hint is not None
    assert "`V`" in found.hint


def test_the_reason_of_an_expectation_has_its_place(check):
    (found,) = check("reference gnd\nx: a --[i = 5 V]-- gnd\n", [("unit-expected", "5 V")])
    assert found.headline == "`i =` asks for a current (A), and this is a voltage (V)"
    assert found.labels[0].span.text == "i"


def test_two_pi_is_said(check):
    (found,) = check(f"{HEAD}signal x = f + w\n", [("turn-missing", "f + w")])
    assert "2π" in found.headline
    (found,) = check(f"{HEAD}signal x = u sampled at w\n", [("varying-value", "w")])
    (found,) = check(f"{HEAD}signal x = u sampled at 300 rad/s\n", [("turn-missing", "300 rad/s")])
    assert "2π" in found.headline


def test_a_joined_symbol_that_is_a_name_asks_for_a_blank(check, build):
    (found,) = check("reference gnd\na --[1 ohm]-- gnd\nlatch m = 3\nsignal x = 5 N*m\n", [("joined-name", "5 N*m")])
    assert "blank" in (found.hint or "")
    build("reference gnd\nm --[1 ohm]-- gnd\nsignal x = 5 N*m\n")  # a node is no factor


def test_wrong_parts_do_not_cascade(check):
    check(
        f"{HEAD}signal x = nothing_of_it * 3 + 5 V\nsignal y = x + 3 A\nsignal z1 = y * 2\nb --[x]-- gnd\nb --[z1 + 3 V]-- gnd\n"
        "whenever x > 3 V: set u = y\n",
        [("unknown-name", "nothing_of_it")],
    )


def test_every_error_in_one_go(check):
    check(f"{HEAD}signal x = u + j\nsignal y = sin(u) + exp(j)\nb --[5]-- gnd\n", [
        ("unit-mismatch", "u + j"),
        ("unit-expected", "u"),
        ("unit-expected", "j"),
        ("box-unit", "5"),
    ])  # fmt: skip
