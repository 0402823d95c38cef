"""Every way to be wrong that the text stage knows has its own message, and each is shown by a sample in wrong_texts.txt."""

from __future__ import annotations

import inspect
from collections.abc import Callable
from typing import Any

import pytest

from polewise.grammar import messages
from polewise.grammar.diagnostics import Diagnostic
from polewise.grammar.parser import parse
from polewise.grammar.source import SourceText

from .wrong_texts import head_and_samples, said

SAMPLES = head_and_samples()[1]
# Reached only by texts too large for a sample: test_limits.py has them.
OF_LIMITS = {"text_too_long", "not_text", "too_many_tokens", "statement_too_long", "too_many_errors", "too_deep"}


@pytest.mark.parametrize(("text", "expected"), SAMPLES, ids=[expected.split(":")[1][2:50] for _, expected in SAMPLES])
def test_what_is_said_about_a_wrong_text(text: str, expected: str) -> None:
    assert said(text) == expected


def test_every_message_of_the_text_stage_has_a_sample(monkeypatch: pytest.MonkeyPatch) -> None:
    used: set[str] = set()

    def noting(name: str, message: Callable[..., Diagnostic]) -> Callable[..., Diagnostic]:
        def noted(*args: Any, **settings: Any) -> Diagnostic:
            used.add(name)
            return message(*args, **settings)

        return noted

    public = {
        name: message
        for name, message in inspect.getmembers(messages, inspect.isfunction)
        if message.__module__ == messages.__name__ and name[0] != "_"
    }
    for name, message in public.items():
        monkeypatch.setattr(messages, name, noting(name, message))
    for text, _ in SAMPLES:
        said(text)
    assert set(public) - used - OF_LIMITS == set()


def test_headlines_and_hints_read_as_the_house_wants_them() -> None:
    for text, _ in SAMPLES:
        for diagnostic in parse(SourceText("<text>", text))[1]:
            assert not diagnostic.headline.endswith("."), diagnostic
            assert diagnostic.hint is None or diagnostic.hint.endswith((".", "?")), diagnostic
            assert "\n" not in diagnostic.headline
            assert diagnostic.code == diagnostic.code.lower().replace("_", "-")


def test_an_edit_mends_what_it_is_offered_for() -> None:
    """Applying a diagnostic's edit takes that diagnostic away."""
    for text, _ in SAMPLES:
        for diagnostic in parse(SourceText("<text>", text))[1]:
            if diagnostic.edit is not None:
                span = diagnostic.edit.span
                mended = text[: span.start] + diagnostic.edit.replacement + text[span.end :]
                after = [(d.code, d.span.start) for d in parse(SourceText("<text>", mended))[1]]
                assert (diagnostic.code, diagnostic.span.start) not in after, (text, mended)


def test_an_error_does_not_hide_the_rest_of_the_file() -> None:
    good = "a: b --[3 ohm]-- c\nstudy rest {\n    start settled\n}"
    for text, expected in SAMPLES:
        if "missing-brace" in expected or "missing-block" in expected or "extra-brace" in expected:
            continue
        netlist, _ = parse(SourceText("<text>", text + "\n" + good))
        assert [type(statement).__name__ for statement in netlist.statements[-2:]] == ["Path", "Study"], text
