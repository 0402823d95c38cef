"""Diagnostics as text for people: place, headline, the marked lines, reasons with their own places, at most one hint."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Final

from polewise.grammar.diagnostics import Diagnostic, Severity
from polewise.grammar.source import Span
from polewise.terminal.style import Style, cells, harmless

_LINE_MAX: Final = 88  # characters of a source line that are shown
_INDENT: Final = "    "
_KIND: Final = {Severity.ERROR: "bad", Severity.WARNING: "doubt", Severity.NOTE: "strong"}
SHOWN_MAX: Final = 100  # diagnostics written out; the rest are counted


def render_all(diagnostics: Sequence[Diagnostic], style: Style) -> str:
    """All diagnostics, errors first, with a last line that counts them."""
    ordered = sorted(diagnostics, key=lambda d: (list(Severity).index(d.severity), d.span.source.name, d.span.start))
    blocks = [render(d, style) for d in ordered[:SHOWN_MAX]]
    if len(ordered) > SHOWN_MAX:
        blocks.append(f"{len(ordered) - SHOWN_MAX} more are not shown.\n")
    return "\n".join(blocks)


def count_text(diagnostics: Iterable[Diagnostic]) -> str:
    """ "2 errors, 1 warning", or "" where there are none."""
    counts = dict.fromkeys(Severity, 0)
    for diagnostic in diagnostics:
        counts[diagnostic.severity] += 1
    return ", ".join(f"{n} {severity.value}{'s' if n != 1 else ''}" for severity, n in counts.items() if n)


def render(diagnostic: Diagnostic, style: Style) -> str:
    """One diagnostic, ending with a newline."""
    kind = _KIND[diagnostic.severity]
    lines = []
    has_place = bool(diagnostic.span.source.text)
    head = [style.paint(_place(diagnostic.span), "place")] if has_place else []
    head += [style.paint(diagnostic.severity.value, kind), style.paint(diagnostic.code, "faint")]
    lines.append("  ".join(head))
    lines.append("  " + style.paint(harmless(diagnostic.headline), "strong"))
    if has_place:
        lines += _marked([(diagnostic.span, ""), *((label.span, label.text) for label in diagnostic.labels)], diagnostic.span, style, kind)
    if diagnostic.hint:
        lines.append("  " + style.paint("Hint: ", "good") + harmless(diagnostic.hint))
    return "\n".join(lines) + "\n"


def _place(span: Span) -> str:
    return f"{harmless(span.source.name)}:{span.line}:{span.column}"


def _marked(places: Sequence[tuple[Span, str]], first: Span, style: Style, kind: str) -> list[str]:
    """Source lines with a stroke under each place; places of one line stand under the same copy of it."""
    by_line: dict[tuple[int, int], list[tuple[Span, str]]] = {}
    for span, text in places:
        if span.source.text:
            by_line.setdefault((id(span.source), span.line), []).append((span, text))
    digits = max((len(str(line)) for _, line in by_line), default=1)
    out: list[str] = []
    for (source, line), spans in by_line.items():
        if source != id(first.source):
            out.append(_INDENT + style.paint(_place(spans[0][0]), "place"))
        whole = spans[0][0].source.line_text(line)
        start = _cut_start(whole, spans[0][0].column - 1)
        shown = whole[start : start + _LINE_MAX]
        lead, tail = ("… " if start else ""), (" …" if start + _LINE_MAX < len(whole) else "")
        out.append(_INDENT + style.paint(f"{line:>{digits}}", "faint") + "  " + lead + harmless(shown) + tail)
        for span, text in spans:
            out.append(_stroke(span, text, start, shown, digits, lead, style, kind if span is first else "place"))
    return out


def _stroke(span: Span, text: str, start: int, shown: str, digits: int, lead: str, style: Style, kind: str) -> str:
    begin = min(max(span.column - 1 - start, 0), len(shown))
    length = max(1, min(span.end - span.start, len(span.text.split("\n", 1)[0]) or 1, len(shown) - begin))
    blank = " " * (len(_INDENT) + digits + 2 + len(lead) + cells(harmless(shown[:begin])))
    width = max(1, cells(harmless(shown[begin : begin + length])))
    reason = f" {harmless(text)}" if text else ""
    return blank + style.paint(style.overline * width + reason, kind)


def _cut_start(line: str, column: int) -> int:
    """Where the shown stretch of a long line begins, so that the mark is in it."""
    return 0 if column < _LINE_MAX - 20 else column - _LINE_MAX // 2
