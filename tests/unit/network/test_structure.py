"""Structural checks: islands, loops of sources, cut-sets of currents, chokes, dependent states."""

import pytest

from polewise.circuit.expand import expand
from polewise.circuit.load import load_text
from polewise.circuit.model import Circuit
from polewise.grammar.diagnostics import Diagnostic
from polewise.network.graph import Network
from polewise.network.structure import check_structure


def circuit_of(text: str) -> Circuit:
    sources, diagnostics = load_text(text)
    assert not [d for d in diagnostics if d.is_error]
    circuit, diagnostics = expand(sources)
    assert circuit is not None, [d.headline for d in diagnostics]
    return circuit


def check(text: str) -> tuple[Network | None, tuple[Diagnostic, ...]]:
    return check_structure(circuit_of(text))


def codes(text: str) -> list[str]:
    return [d.code for d in check(text)[1]]


STEP_DOWN = """
reference gnd
supply: vin --[48 V]-- gnd
leg: pole(vin, gnd, x, duty = 0.5, rate = 100 kHz, upper = transistor(10 mohm), lower = diode(0.7 V))
{choke}
cap: out --[100 uF]-- gnd
load: out --[4 ohm]-- gnd
"""


def test_a_sound_circuit_has_nothing_to_say() -> None:
    network, diagnostics = check(STEP_DOWN.format(choke="choke: x --[rl: 5 mohm]--[l: 47 uH]-- out"))
    assert diagnostics == ()
    assert network is not None
    (path,) = network.chokes["leg"]
    assert path.inductors == ("choke.l",)
    assert path.far == "out"


@pytest.mark.parametrize(
    ("text", "code"),
    [
        ("a: x --[1 V]-- y\nb: x --[1 ohm]-- y", "no-reference"),
        ("reference x\nreference y\na: x --[1 V]-- y\nb: x --[1 ohm]-- y", "two-references"),
        ("reference gnd\na: x --[1 V]-- gnd\nb: x --[2 V]-- gnd", "source-loop"),
        ("reference gnd\na: gnd --[1 A]-- x\nb: x --[2 A]-- gnd", "current-cutset"),
        ("reference gnd\na: x --[1 V]-- gnd\nb: x --[1 ohm]-- y", "dangling-node"),
        (STEP_DOWN.format(choke="choke: x --[1 ohm]-- out"), "no-choke"),
        (STEP_DOWN.format(choke="choke: x --[47 uH]-- out\nextra: x --[1 kohm]-- gnd"), "not-a-choke"),
        (STEP_DOWN.format(choke="choke: x --[47 uH]-- out\nextra: x --[1 nF]-- gnd"), "pole-mid-fixed"),
    ],
)
def test_each_fault_has_its_own_word(text: str, code: str) -> None:
    network, diagnostics = check(text)
    assert network is None
    assert code in [d.code for d in diagnostics]


def test_a_fault_names_what_it_is_about() -> None:
    _, diagnostics = check("reference gnd\na: x --[1 V]-- gnd\nb: x --[2 V]-- gnd")
    (loop,) = [d for d in diagnostics if d.code == "source-loop"]
    assert "`a`" in loop.headline
    assert "`b`" in loop.headline
    assert loop.span.line == 3


def test_a_pole_fed_through_an_inductor_asks_for_its_input_capacitor() -> None:
    text = STEP_DOWN.format(choke="choke: x --[47 uH]-- out").replace(
        "supply: vin --[48 V]-- gnd", "supply: src --[48 V]-- gnd\nf: src --[1 uH]-- vin"
    )
    assert "pole-without-input-capacitor" in codes(text)


def test_chokes_that_cannot_be_told() -> None:
    two = """
reference gnd
supply: vin --[48 V]-- gnd
one: pole(vin, gnd, x, duty = 0.5, rate = 100 kHz, upper = transistor(10 mohm), lower = diode(0.7 V))
two: pole(vin, gnd, y, duty = 0.5, rate = 100 kHz, upper = transistor(10 mohm), lower = diode(0.7 V))
choke: x --[47 uH]-- y
"""
    assert "choke-far-end-switches" in codes(two)


def test_conduction_continuous_switches_the_question_off() -> None:
    text = STEP_DOWN.format(choke="choke: x --[1 ohm]-- out").replace("rate = 100 kHz", "rate = 100 kHz, conduction = continuous")
    network, diagnostics = check(text)
    assert network is not None, diagnostics


def test_dependent_states_are_said_and_legal() -> None:
    text = """
reference gnd
src: a --[10 V]-- gnd
c1: a --[1 uF]-- gnd
l1: a --[1 mH]--[l: 2 mH]--[10 ohm]-- gnd
"""
    network, diagnostics = check(text)
    assert network is not None
    assert sorted(d.code for d in diagnostics) == ["dependent-capacitor", "dependent-inductor"]
    assert network.dependent_capacitors == ("c1",)
    assert len(network.dependent_inductors) == 1


def test_two_chokes_at_one_mid() -> None:
    network, diagnostics = check(
        STEP_DOWN.format(choke="choke: x --[47 uH]-- out\nother: x --[94 uH]-- out2\nc2: out2 --[10 uF]-- gnd\nl2: out2 --[5 ohm]-- gnd")
    )
    assert network is not None, diagnostics
    assert {p.inductors[0] for p in network.chokes["leg"]} == {"choke", "other"}
    assert {p.far for p in network.chokes["leg"]} == {"out", "out2"}


def test_a_series_source_belongs_to_the_path() -> None:
    text = STEP_DOWN.format(choke="choke: x --[47 uH]--[emf: 12 V]-- out")
    network, _ = check(text)
    assert network is not None
    (path,) = network.chokes["leg"]
    assert [name for name, _ in path.elements][-1] == "choke.emf"


def test_an_ideal_transformer_has_one_winding_in_the_tree() -> None:
    text = """
reference gnd
reference hot
src: a --[10 V]--[1 ohm]-- gnd
t: transformer(a, gnd, b, hot, ratio = 2)
c: b --[1 uF]-- hot
r: b --[10 ohm]-- hot
"""
    network, diagnostics = check(text)
    assert network is not None, diagnostics
    assert {network.forms["t.primary"], network.forms["t.secondary"]} == {"voltage", "current"}
    assert ("t.primary" in network.tree) == (network.forms["t.primary"] == "voltage")
