"""What is printed about trust: one line where all holds, else a table of what does not, with why and what to do; like subjects together."""

from __future__ import annotations

import re
import textwrap
from collections.abc import Sequence
from typing import Any, Final

from polewise.analysis.trust import Finding, Trust, TrustReport, TrustRow
from polewise.terminal.style import WIDTH_MAX, Style, harmless
from polewise.terminal.tables import Heading, table

_DIGITS: Final = re.compile(r"\d+")
_FINDINGS_MOST: Final = 200  # in the block of a run, before like ones are put together
_PAINT: Final = {Trust.HOLDS: "good", Trust.DOUBTFUL: "doubt", Trust.NOT_VALID: "bad"}
_HEADINGS: Final = (Heading("trust", most=44), Heading("check", most=20), Heading("number", most=40), Heading(""))


def trust_block(report: TrustReport, style: Style) -> list[str]:
    """The block at the end of a run."""
    sentence = report.sentence()
    lines = wrapped(f"Trust: {sentence}.", 2, style, _PAINT[report.trust])
    lines += _doubts(report.findings[:_FINDINGS_MOST], style)
    return [*lines, *_notes(report, style)]


def trust_lines(report: TrustReport, style: Style) -> list[str]:
    """The whole report: every pole, quantity and requirement with the number that decided."""
    title = f"trust in {report.study}" if report.study else "trust at the operating point"
    lines = [style.paint(title, "strong")]
    rows, kinds = [], []
    for label, members in _alike_rows(report.rows):
        decided = members[0].decided
        rows.append([label, decided.check if decided else "", decided.number if decided else "nothing to doubt it", members[0].trust.words])
        kinds.append(_PAINT[members[0].trust])
    if rows:
        lines += table(_HEADINGS, rows, style, kinds=kinds)
    lines += _doubts(report.findings, style)
    return [*lines, *wrapped(report.sentence() + ".", 2, style, _PAINT[report.trust]), *_notes(report, style)]


def _doubts(findings: Sequence[Finding], style: Style) -> list[str]:
    """Findings with why, and what to do once per check."""
    lines: list[str] = []
    told: set[str] = set()
    for label, finding in _alike(findings):
        lines += wrapped(f"{finding.trust.words} {label}: {finding.number}", 2, style, _PAINT[finding.trust])
        lines += wrapped(f"{finding.why}.", 4, style, "plain")
        if finding.remedy and finding.remedy not in told:
            told.add(finding.remedy)
            lines += wrapped(f"{finding.remedy[0].upper()}{finding.remedy[1:]}.", 4, style, "faint")
    return lines


def wrapped(text: str, indent: int, style: Style, kind: str) -> list[str]:
    """Text in lines that fit the terminal."""
    room = WIDTH_MAX - indent
    return [" " * indent + style.paint(line, kind) for line in textwrap.wrap(harmless(text), room, break_long_words=False) or [""]]


def _notes(report: TrustReport, style: Style) -> list[str]:
    return [line for note in report.not_looked_at for line in wrapped(f"not looked at: {note}", 2, style, "faint")]


def _alike(findings: Sequence[Finding]) -> list[tuple[str, Finding]]:
    """Findings of one check about names that differ in numbers only, told once."""
    groups: dict[tuple[str, str, Trust], list[Finding]] = {}
    for finding in findings:
        groups.setdefault((_DIGITS.sub("{*}", finding.name), finding.check, finding.trust), []).append(finding)
    return [(label if len(found) > 1 else found[0].name, found[0]) for (label, _, _), found in groups.items()]


def _alike_rows(rows: Sequence[TrustRow]) -> list[tuple[str, list[TrustRow]]]:
    groups: dict[tuple[str, str, str], list[TrustRow]] = {}
    for row in rows:
        check = row.decided.check if row.decided else ""
        groups.setdefault((_DIGITS.sub("{*}", row.name), f"{row.kind} {check}", row.trust.words), []).append(row)
    found = []
    for (label, _, _), members in groups.items():
        members.sort(key=lambda r: -(r.decided.nearness if r.decided else 0.0))
        found.append((label if len(members) > 1 else members[0].name, members))
    return found


def trust_content(report: TrustReport) -> dict[str, Any]:
    """A report as plain JSON values."""
    return {
        "study": report.study,
        "trust": report.trust.words,
        "sentence": report.sentence(),
        "rows": [
            {
                "kind": row.kind,
                "name": row.name,
                "trust": row.trust.words,
                "decided_by": None if row.decided is None else finding_content(row.decided),
            }
            for row in report.rows
        ],
        "findings": [finding_content(f) for f in report.findings],
        "not_looked_at": list(report.not_looked_at),
    }


def finding_content(finding: Finding) -> dict[str, Any]:
    """A finding as plain JSON values."""
    return {
        "kind": finding.kind,
        "name": finding.name,
        "check": finding.check,
        "trust": finding.trust.words,
        "number": finding.number,
        "why": finding.why,
        "remedy": finding.remedy,
    }
