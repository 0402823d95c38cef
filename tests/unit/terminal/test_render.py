"""Diagnostics as text: marks under the right columns, whatever stands in the line, and nothing that could steer a terminal."""

from __future__ import annotations

import io

import pytest
from hypothesis import given
from hypothesis import strategies as st

from polewise.grammar.diagnostics import Diagnostic, Edit, Label, Severity
from polewise.grammar.source import SourceText, Span, no_span
from polewise.terminal.json_form import diagnostics_content
from polewise.terminal.render import SHOWN_MAX, count_text, render, render_all
from polewise.terminal.style import Style, cells, harmless, style_of

TEXT = SourceText("pier.pole", 'title "x"\ngiven r = 12 mohm + 3 uH\nfeeder: src --[r]-- bus\n')
PLAIN = Style()


def _at(text: SourceText, piece: str) -> Span:
    start = text.text.index(piece)
    return Span(text, start, start + len(piece))


def test_layout() -> None:
    diagnostic = Diagnostic(
        "unit-mismatch",
        Severity.ERROR,
        "A resistance and an inductance can't be added",
        _at(TEXT, "12 mohm + 3 uH"),
        (Label(_at(TEXT, "3 uH"), "an inductance"), Label(_at(TEXT, "[r]"), "used here")),
        "give both in ohm",
    )
    assert render(diagnostic, PLAIN).splitlines() == [
        "pier.pole:2:11  error  unit-mismatch",
        "  A resistance and an inductance can't be added",
        "    2  given r = 12 mohm + 3 uH",
        "                 ¯¯¯¯¯¯¯¯¯¯¯¯¯¯",
        "                           ¯¯¯¯ an inductance",
        "    3  feeder: src --[r]-- bus",
        "                     ¯¯¯ used here",
        "  Hint: give both in ohm",
    ]


def test_a_label_in_another_file_names_its_place() -> None:
    other = SourceText("parts/tap.pole", "x\ny: z\n")
    diagnostic = Diagnostic("c", Severity.NOTE, "h", _at(TEXT, "src"), (Label(_at(other, "z"), "first here"),))
    assert "    parts/tap.pole:2:4" in render(diagnostic, PLAIN).splitlines()


def test_long_lines_are_cut_around_the_mark() -> None:
    source = SourceText("a", "x" * 500 + "HERE" + "y" * 500)
    lines = render(Diagnostic("c", Severity.ERROR, "h", _at(source, "HERE")), PLAIN).splitlines()
    assert len(lines[2]) < 110
    assert lines[2].index("HERE") == lines[3].index("¯¯¯¯")


def test_wide_characters_and_tabs_keep_the_mark_in_place() -> None:
    source = SourceText("a", "\t港\tHERE")
    lines = render(Diagnostic("c", Severity.ERROR, "h", _at(source, "HERE")), PLAIN).splitlines()
    assert cells(lines[2][: lines[2].index("HERE")]) == lines[3].index("¯")


def test_a_span_over_several_lines_marks_the_first() -> None:
    span = Span(TEXT, TEXT.text.index("12 mohm"), len(TEXT.text))
    lines = render(Diagnostic("c", Severity.ERROR, "h", span), PLAIN).splitlines()
    assert lines[3].count("¯") == len("12 mohm + 3 uH")


def test_an_empty_span_at_the_end_of_the_text_still_has_a_mark() -> None:
    lines = render(Diagnostic("c", Severity.ERROR, "h", Span(TEXT, len(TEXT.text), len(TEXT.text))), PLAIN).splitlines()
    assert lines[0].startswith("pier.pole:4:1")
    assert lines[3].strip() == "¯"


def test_without_a_place_there_is_no_line() -> None:
    assert render(Diagnostic("missing-extra", Severity.ERROR, "pyarrow is missing", no_span(), hint="install it"), PLAIN).splitlines() == [
        "error  missing-extra",
        "  pyarrow is missing",
        "  Hint: install it",
    ]


@given(st.text(max_size=300), st.integers(0, 300), st.integers(0, 300))
def test_anything_renders_and_no_control_character_gets_through(text: str, a: int, b: int) -> None:
    source = SourceText("a\x1b[31m", text.replace("\r", "\n") or "x")
    start, end = sorted((min(a, len(source.text)), min(b, len(source.text))))
    shown = render(Diagnostic("c", Severity.ERROR, text, Span(source, start, end), (Label(Span(source, start, start), text),), text), PLAIN)
    assert "\x1b" not in shown
    assert all(c == "\n" or c >= " " for c in shown)


def test_errors_come_first_and_all_are_counted() -> None:
    many = [Diagnostic("w", Severity.WARNING, "warn", _at(TEXT, "src"))] + [
        Diagnostic("e", Severity.ERROR, f"e{k}", _at(TEXT, "bus")) for k in range(150)
    ]
    shown = render_all(many, PLAIN)
    assert shown.index("e0") < shown.index(f"{151 - SHOWN_MAX} more are not shown")
    assert "warn" not in shown
    assert count_text(many) == "150 errors, 1 warning"


class _Terminal(io.StringIO):
    encoding = "utf-8"

    def isatty(self) -> bool:
        return True


class _OldTerminal(_Terminal):
    encoding = "ascii"


@pytest.mark.parametrize(
    ("stream", "environment", "colour"),
    [
        (_Terminal(), {}, True),
        (_Terminal(), {"NO_COLOR": "1"}, False),
        (_Terminal(), {"NO_COLOR": ""}, True),
        (_Terminal(), {"TERM": "dumb"}, False),
        (io.StringIO(), {}, False),
    ],
)
def test_colour_only_where_a_person_looks(stream: io.StringIO, environment: dict[str, str], colour: bool) -> None:
    assert style_of(stream, environment).colour is colour


def test_a_terminal_without_the_stroke_gets_another() -> None:
    assert style_of(_OldTerminal(), {}).overline == "="


def test_colour_changes_nothing_but_colour() -> None:
    import re

    diagnostic = Diagnostic("c", Severity.WARNING, "h", _at(TEXT, "src"), hint="x")
    assert re.sub(r"\033\[\d*m", "", render(diagnostic, Style(colour=True))) == render(diagnostic, PLAIN)


def test_harmless() -> None:
    assert harmless("a\tb\x1b[2J\u202e") == "a    b\ufffd[2J\ufffd"


def test_json_form() -> None:
    diagnostic = Diagnostic("c", Severity.ERROR, "h", _at(TEXT, "12 mohm"), (Label(_at(TEXT, "bus"), "l"),), "hint", Edit(_at(TEXT, "12"), "13"))
    (content,) = diagnostics_content([diagnostic])
    assert content == {
        "code": "c",
        "severity": "error",
        "headline": "h",
        "place": {"file": "pier.pole", "line": 2, "column": 11, "end_line": 2, "end_column": 18},
        "labels": [{"place": {"file": "pier.pole", "line": 3, "column": 21, "end_line": 3, "end_column": 24}, "text": "l"}],
        "hint": "hint",
        "edit": {"place": {"file": "pier.pole", "line": 2, "column": 11, "end_line": 2, "end_column": 13}, "replacement": "13"},
    }
    assert diagnostics_content([Diagnostic("c", Severity.NOTE, "h", no_span())]) == [
        {"code": "c", "severity": "note", "headline": "h", "place": None}
    ]
