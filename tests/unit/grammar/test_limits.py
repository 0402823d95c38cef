"""Hostile and huge texts end quickly in a clear error. Times are generous: they tell linear from quadratic, not fast from slow."""

from __future__ import annotations

import random
import time

import pytest

from polewise.grammar.parser import MAX_CHARACTERS, parse
from polewise.grammar.source import SourceText
from polewise.grammar.tokens import MAX_DEPTH

ENOUGH_SECONDS = 5.0


def codes(text: str) -> list[str]:
    """Codes of a text's diagnostics, in under the time a hang would take."""
    source = SourceText("<text>", text)
    started = time.perf_counter()
    _, diagnostics = parse(source)
    assert time.perf_counter() - started < ENOUGH_SECONDS
    assert len(diagnostics) < 200
    return [diagnostic.code for diagnostic in diagnostics]


def test_two_megabytes_of_random_bytes() -> None:
    noise = random.Random(1).randbytes(2_000_000).decode("utf-8", errors="replace")
    assert codes(noise) == ["text-too-long"]
    assert codes(noise[: MAX_CHARACTERS - 1]) == ["not-text"]


def test_a_megabyte_of_random_characters() -> None:
    some = random.Random(2)
    printable = "".join(some.choices([chr(c) for c in range(32, 127)] + ["\n"], k=MAX_CHARACTERS - 1))
    assert codes(printable)[-1] == "too-many-errors"
    foreign = "".join(chr(some.randint(0x100, 0x2FFF)) for _ in range(MAX_CHARACTERS - 1))
    assert codes(foreign)[-1] == "too-many-errors"


@pytest.mark.parametrize("opening", ["(", "[", "{", "a{", "f(", "each n in 1..2 {\n", "a --["])
def test_brackets_a_thousand_deep(opening: str) -> None:
    assert codes("signal x = " + opening * 1000) == ["too-deep"]
    assert codes("signal x = " + opening * (900_000 // len(opening))) == ["too-deep"]


@pytest.mark.parametrize("step", ["- ", "not ", "d/dt ", "a^", "a + ", "a if b otherwise ", "(a) * "])
def test_an_expression_a_thousand_deep(step: str) -> None:
    assert codes("signal x = " + step * 1000 + "a") == ["too-deep"]


@pytest.mark.parametrize("word", ["filtered by a", "sampled at a", "delayed by a", "averaged over a"])
def test_a_thousand_postfix_words(word: str) -> None:
    assert codes("signal x = a" + f" {word}" * 1000) == ["too-deep"]


def test_an_expression_of_ordinary_depth_is_read() -> None:
    assert codes("signal x = " + "(" * (MAX_DEPTH - 1) + "a" + ")" * (MAX_DEPTH - 1)) == []
    assert codes("signal x = " + "a + " * (MAX_DEPTH - 2) + "a") == []
    assert codes("signal x = f(" + "a, " * 5000 + "a)") == []


def test_only_the_statement_that_is_too_deep_is_left_out() -> None:
    netlist, diagnostics = parse(SourceText("<text>", "a -- b\nsignal x = " + "- " * 1000 + "a\nc -- d"))
    assert [d.code for d in diagnostics] == ["too-deep"]
    assert len(netlist.statements) == 2


@pytest.mark.parametrize(
    "text",
    [
        "a " * 490_000, "a\n" * 490_000, "a--b\n" * 190_000, ":" * 900_000, '"' * 900_000, "." * 900_000, "1 " + "V*" * 400_000,
        "1 " + "Vx*" * 300_000,
        "table f(x) = " + "(1, 2) " * 60_000, "1." * 400_000, "a " + "-- b " * 150_000, "f(\n" * 99 + "\n" * 900_000, "x = (\n" + "# a\n" * 200_000,
        "given a = b " + "in " * 200_000, "(," * 400_000, "}" * 900_000, "“" * 900_000, "1" * 900_000, "study x\n" * 100_000, "a: b --[\n" * 90_000,
        "at 3 ms: set\n" * 60_000, "a" * 900_000 + " b", "each n in 1..2 {\n}\n" * 40_000, "sequence q {\n" + "step a { open k }\n" * 40_000 + "}",
    ],
    ids=lambda text: repr(text[:12]),
)  # fmt: skip
def test_a_megabyte_of_anything_ends_in_a_clear_error(text: str) -> None:
    assert codes(text)


def test_control_characters_are_named() -> None:
    assert codes("a -- b\x00") == ["not-text"]
    assert codes("a -- b\ufffd") == ["not-text"]
    assert codes("a -- b\x1b[0m") == ["not-text"]


def test_many_errors_are_told_up_to_a_limit() -> None:
    found = codes("x = 3\n" * 1000)
    assert found == ["bare-assignment"] * 50 + ["too-many-errors"]
