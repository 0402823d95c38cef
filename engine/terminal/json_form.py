"""Diagnostics and summaries as plain JSON values, for editors and CI."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

from polewise.grammar.diagnostics import Diagnostic
from polewise.grammar.source import Span


def diagnostics_content(diagnostics: Iterable[Diagnostic]) -> list[dict[str, Any]]:
    """One object per diagnostic; lines and columns count from 1, columns in characters, ends are exclusive."""
    return [_diagnostic(d) for d in diagnostics]


def _diagnostic(d: Diagnostic) -> dict[str, Any]:
    content: dict[str, Any] = {"code": d.code, "severity": d.severity.value, "headline": d.headline, "place": place_content(d.span)}
    if d.labels:
        content["labels"] = [{"place": place_content(label.span), "text": label.text} for label in d.labels]
    if d.hint:
        content["hint"] = d.hint
    if d.edit:
        content["edit"] = {"place": place_content(d.edit.span), "replacement": d.edit.replacement}
    return content


def place_content(span: Span) -> dict[str, Any] | None:
    """A place, or None for something that no text stands behind."""
    if not span.source.text:
        return None
    end_line, end_column = span.source.position(span.end)
    return {"file": span.source.name, "line": span.line, "column": span.column, "end_line": end_line, "end_column": end_column}
