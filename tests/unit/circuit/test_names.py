"""Scopes, names and what was probably meant."""

import pytest

HEAD = "reference gnd\n"


def test_one_name_stands_for_one_thing(check):
    (found,) = check(HEAD + "signal x = 3\nlatch x = 4\n", [("declared-twice", "x")])
    assert found.span.line == 3
    assert found.labels[0].span.line == 2
    check(HEAD + "x: x --[1 ohm]-- gnd\n", [("declared-twice", "x")])
    check(HEAD + "signal a = 3\na --[1 ohm]-- gnd\n", [("not-a-node", "a")])
    check(HEAD + "x: a --[k: 1 ohm]--[k: 2 ohm]-- gnd\n", [("declared-twice", "k")])
    check(HEAD + "reference gnd\n", [("declared-twice", "gnd")])
    check(HEAD + "assembly x(a) {\n a --[1 ohm]-- b\n signal a = 3\n}\nx1: x(gnd)\n", [("declared-twice", "a")])


@pytest.mark.parametrize("name", ["sin", "limit", "pole", "pi_control"])
def test_words_of_the_language_are_taken(check, name):
    check(f"{HEAD}function {name}(x) = x\n", [("name-taken", name)])


@pytest.mark.parametrize("name", ["v", "i", "p", "time", "pi", "s", "z"])
def test_names_with_a_meaning_can_not_be_declared(check, name):
    check(f"{HEAD}signal {name} = 3\n", [("reserved-name", name)])


def test_nodes_and_ports_may_have_them_since_they_are_read_with_a_dot(build, value):
    circuit = build(HEAD + "assembly x(p, n) {\n r: p --[1 ohm]-- n\n signal y = p.v + 1 ohm * p.i\n}\nx1: x(s, gnd)\ns --[5 V]-- gnd\n")
    assert value(circuit, "x1.y", {"potential s": 5.0, "i x1.r": 2.0}) == 7.0


def test_unknown_names_propose_the_nearest(check):
    (found,) = check(HEAD + "signal drive = 3\nsignal x = dirve * 2\n", [("unknown-name", "dirve")])
    assert found.hint == "Did you mean `drive`?"
    assert found.edit is not None
    assert found.edit.replacement == "drive"
    (found,) = check(HEAD + "load: a --[1 ohm]-- gnd\nsignal x = load.q\n", [("unknown-reading", "q")])
    assert found.hint == "It has `v`, `i`, `p`."
    (found,) = check(HEAD + "load: a --[1 ohm]-- gnd\nsignal x = a.i\n", [("unknown-reading", "i")])
    assert "no current of its own" in (found.hint or "")
    check(HEAD + "load: a --[1 ohm]-- gnd\nsignal x = load.i.x\n", [("unknown-reading", "i")])
    check(HEAD + "load: a --[1 ohm]-- gnd\nsignal x = lod.i\n", [("unknown-name", "lod")])


def test_an_assembly_does_not_see_outer_nodes_signals_and_latches(check):
    text = HEAD + "signal ask = 3\nlatch l = 3\nb --[1 V]-- gnd\nassembly x(a) {{\n a --[1 ohm]-- c\n signal y = {}\n}}\nx1: x(b)\n"
    check(text.format("ask"), [("outside-assembly", "ask")])
    check(text.format("l"), [("outside-assembly", "l")])
    (found,) = check(text.format("b.v"), [("outside-assembly", "b")])
    assert "port" in (found.hint or "")


def test_an_assembly_sees_givens_tables_functions_and_assemblies_of_the_file(build, value):
    circuit = build(
        HEAD
        + """
given k = 3
function double(x) = 2 * x
table f(x) = (0, 0) (1, 10) hold
assembly inner(a) {
    a --[1 ohm]-- b
    signal y = k * double(f(0.5))
}
assembly outer(a) {
    part: inner(a)
    signal y = part.y + 1
}
o: outer(gnd)
"""
    )
    assert value(circuit, "o.y") == 31.0
    assert value(circuit, "o.part.y") == 30.0


def test_names_in_an_assembly_are_its_own(build):
    circuit = build(HEAD + "assembly x(a) {\n r: a --[1 ohm]-- b\n}\nx1: x(gnd)\nx2: x(b)\nr: b --[2 ohm]-- gnd\n")
    assert set(circuit.nodes) == {"gnd", "b", "x1.b", "x2.b"}
    assert list(circuit.branches) == ["r", "x1.r", "x2.r"]


def test_mistyped_nodes_are_reported(check):
    text = HEAD + "a1: battery --[1 ohm]-- gnd\na2: battery --[1 V]-- gnd\na3: batery --[2 ohm]-- gnd\n"
    (found,) = check(text, [("near-name", "batery")])
    assert not found.is_error
    check(HEAD + "b1 --[1 ohm]-- gnd\nb2 --[1 ohm]-- gnd\nbus --[1 ohm]-- gnd\nbus2 --[1 ohm]-- gnd\n", [])
    check(HEAD + "Bus --[1 ohm]-- gnd\nbus --[1 V]-- gnd\nbus --[1 A]-- gnd\n", [("near-name", "Bus")])


def test_a_path_ends_on_nodes_of_its_own_scope(check):
    check(HEAD + "assembly x(a) {\n a --[1 ohm]-- b\n}\nx1: x(gnd)\nc --[1 ohm]-- x1.b\n", [("node-inside", "x1.b")])
    check(HEAD + "c --[1 ohm]-- unconnected\n", [("unconnected", "unconnected")])


def test_a_broken_line_makes_no_second_error(check):
    from_parser = "signal drive = 3 +* 4\n"
    found = check(HEAD + from_parser + "signal x = drive + 1\n", [("missing-value", "*")])
    assert len(found) == 1


def test_all_of_a_file_is_looked_at_even_after_errors_of_reading(check):
    found = check(HEAD + "signal a = 3 +* 4\nsignal b = 3 V + 2 A\n", [("missing-value", "*"), ("unit-mismatch", "3 V + 2 A")])
    assert len(found) == 2
