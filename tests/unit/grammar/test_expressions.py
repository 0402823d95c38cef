"""Values: precedence, associativity, numbers and their units."""

from __future__ import annotations

import pytest

from polewise.grammar import syntax
from polewise.grammar.parser import parse
from polewise.grammar.source import SourceText

from .shown import check_value


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("a + b - c", "((a + b) - c)"),
        ("a - b * c / d", "(a - ((b * c) / d))"),
        ("-a^2", "(- (a ^ 2))"),
        ("a^b^c", "(a ^ (b ^ c))"),
        ("z^-1", "(z ^ (- 1))"),
        ("2^-x^2", "(2 ^ (- (x ^ 2)))"),
        ("-a * b", "((- a) * b)"),
        ("a - -b", "(a - (- b))"),
        ("a - (-b)", "(a - (- b))"),
        ("d/dt a * b", "(Derivative(a) * b)"),
        ("d/dt (a * b)", "Derivative((a * b))"),
        ("d / dt", "(d / dt)"),
        ("a < b + 1", "(a < (b + 1))"),
        ("not a == b and c or d", "(((not (a == b)) and c) or d)"),
        ("a and b or c and d", "((a and b) or (c and d))"),
        ("a if b otherwise c if d otherwise e", "Conditional(a, b, Conditional(c, d, e))"),
        ("(a if b otherwise c) + d", "(Conditional(a, b, c) + d)"),
        ("f(x, y + 1, low = -3)", "Call(f, <x (y + 1)>, <low=(- 3)>)"),
        ("pi_2()", "Call(pi_2)"),
        ("(a, b, c)", "ListOf(<a b c>)"),
        ("((a))", "a"),
        ("a <= b", "(a <= b)"),
        ("a != b", "(a != b)"),
        ("a >= b", "(a >= b)"),
    ],
)
def test_operators(text: str, expected: str) -> None:
    check_value(text, expected)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("a + b filtered by c * d", "Filtered((a + b), (c * d))"),
        ("x filtered by 12 /V * (1 + s/wz) / s / (1 + s/wp)", "Filtered(x, (((12 /V * (1 + (s / wz))) / s) / (1 + (s / wp))))"),
        ("x filtered by (1 - 0.9*z^-1) in z at 40 kHz", "Filtered(x, (1 - (0.9 * (z ^ (- 1)))), 40 kHz)"),
        ("x sampled at 40 kHz delayed by 25 us > 3", "(Delayed(Sampled(x, 40 kHz), 25 us) > 3)"),
        ("x averaged over 1 / f", "Averaged(x, (1 / f))"),
    ],
)
def test_postfix_words(text: str, expected: str) -> None:
    check_value(text, expected)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("0.6 /V/s * x", "(0.6 /V/s * x)"),
        ("5V", "5 V"),
        ("20%", "20 %"),
        ("2*pi * 50 Hz * time", "(((2 * pi) * 50 Hz) * time)"),
        ("5 V*x", "(5 V * x)"),
        ("5 V*s2", "(5 V * s2)"),
        ("5 V * s", "(5 V * s)"),
        ("1 / s", "(1 / s)"),
        ("0.02 kg*m^2", "0.02 kg*m^2"),
        ("4 A*s/rad", "4 A*s/rad"),
        ("3 µs + 2 kΩ", "(3 µs + 2 kΩ)"),
        ("2.5e-3 F", "2.5e-3 F"),
        ("1 /rate", "(1 / rate)"),
        ("30 min", "30 min"),
        ("4 mm", "4 mm"),
    ],
)
def test_units_follow_their_number(text: str, expected: str) -> None:
    check_value(text, expected)


def number(text: str) -> syntax.Number:
    netlist, diagnostics = parse(SourceText("<text>", f"signal x = {text}"))
    statement = netlist.statements[0]
    assert not diagnostics
    assert isinstance(statement, syntax.Signal)
    assert isinstance(statement.value, syntax.Number)
    return statement.value


def test_a_number_knows_its_value_in_si() -> None:
    assert number("12 mohm").value == 0.012
    assert number("200 uH").value == 2e-4
    assert number("25 degC").value == 298.15
    assert number("94 Ah").value == 94 * 3600
    assert number("0.5").value == 0.5
    assert number("20 %").value == 0.2


def test_spans_cover_what_they_stand_for() -> None:
    text = "signal x = (a + 3 mV) * f(b, low = c)  # said\nleg: pole(a, b{n+1})\n"
    netlist, _ = parse(SourceText("<text>", text))
    signal, leg = netlist.statements
    assert signal.span.text == "signal x = (a + 3 mV) * f(b, low = c)"
    assert isinstance(signal, syntax.Signal)
    assert isinstance(signal.value, syntax.Binary)
    assert signal.value.left.span.text == "a + 3 mV"
    assert signal.value.span.text == "(a + 3 mV) * f(b, low = c)"
    call = signal.value.right
    assert isinstance(call, syntax.Call)
    assert (call.name_span.text, call.settings[0].span.text, call.settings[0].name_span.text) == ("f", "low = c", "low")
    assert isinstance(leg, syntax.Placement)
    assert (leg.span.text, leg.kind_span.text, leg.arguments[1].span.text) == ("leg: pole(a, b{n+1})", "pole", "b{n+1}")
