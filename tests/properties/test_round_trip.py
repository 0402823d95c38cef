"""Any tree to text and back, any text at all to a tree and diagnostics."""

from __future__ import annotations

import time
from dataclasses import fields, is_dataclass
from typing import Any

from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from polewise.grammar.layout import to_text
from polewise.grammar.parser import parse
from polewise.grammar.source import SourceText, Span
from polewise.grammar.syntax import Netlist
from polewise.grammar.units import Unit

from .strategies import netlists

# What a netlist is made of, for texts that are nearly right.
PIECES = (
    "a", "bus.v", "given", "signal", "latch", "d/dt", "each n in 1..3", "study s1", "sequence q", "step x", "{", "}",
    "(", ")", "[", "]", "--", "|", ":", ";", ",", "=", "==", "+-", "+", "-", "*", "^", "..", ".", "12 mohm", "3 V",
    "0.5", "/V", '"text"', '"', "\n", "\n", "\n", " ", "# c\n", "if", "otherwise", "not", "above", "within", "run for",
    "keep", "require", "at", "set", "open", "until", "else", "after", "cell{n}", "{*}", "filtered by", "in z at", "µ",
    "ä",
)  # fmt: skip


def without_spans(node: Any) -> Any:
    """A tree as nested tuples that leave out where things stand."""
    if isinstance(node, tuple):
        return tuple(without_spans(item) for item in node)
    if isinstance(node, Span):
        return None
    if isinstance(node, Unit) or not is_dataclass(node):
        return node
    return (type(node).__name__, *(without_spans(getattr(node, field.name)) for field in fields(node) if field.name != "source"))


def read(text: str) -> tuple[Netlist, tuple[Any, ...]]:
    """Parse a text."""
    return parse(SourceText("<text>", text))


@settings(max_examples=300, deadline=None, suppress_health_check=[HealthCheck.too_slow, HealthCheck.data_too_large])
@given(netlists)
def test_a_tree_survives_its_own_text(tree: Netlist) -> None:
    text = to_text(tree)
    again, diagnostics = read(text)
    assert not diagnostics, text
    assert without_spans(again.statements) == without_spans(tree.statements), text
    assert to_text(again) == text


@settings(max_examples=300, deadline=None)
@given(st.text(max_size=200) | st.binary(max_size=200).map(lambda data: data.decode("utf-8", errors="replace")))
def test_any_text_at_all_is_read_without_failing(text: str) -> None:
    _, diagnostics = read(text)
    for diagnostic in diagnostics:
        assert 0 <= diagnostic.span.start <= diagnostic.span.end <= len(text)


@settings(max_examples=400, deadline=None)
@given(st.lists(st.sampled_from(PIECES), max_size=60), st.sampled_from((" ", "")))
def test_nearly_right_texts_are_read_without_failing(pieces: list[str], glue: str) -> None:
    text = glue.join(pieces)
    started = time.perf_counter()
    netlist, diagnostics = read(text)
    assert time.perf_counter() - started < 5, "reading goes on for ever"
    assert [d.span.start for d in diagnostics] == sorted(d.span.start for d in diagnostics)
    if not diagnostics:  # then the text was a netlist, and its layout is the same netlist
        again, none = read(to_text(netlist))
        assert not none, (text, to_text(netlist))
        assert without_spans(again.statements) == without_spans(netlist.statements)
