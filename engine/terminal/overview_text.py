"""What `check` prints: a circuit in figures, its islands, assemblies, chokes and studies."""

from __future__ import annotations

import re

from polewise.grammar.units import TIME, format_value
from polewise.results.overview import Overview
from polewise.results.traces import families
from polewise.terminal.style import Style
from polewise.terminal.tables import Heading, table, title_line

_NAMES_SHOWN = 8  # of a list in running text
_ROWS_MAX = 40
_NUMBER = re.compile(r"\d+")


def overview_lines(facts: Overview, style: Style) -> list[str]:
    """All lines."""
    files = facts.files
    more = f" and {len(files) - 1} more file{'s' if len(files) > 2 else ''}" if len(files) > 1 else ""
    lines = [title_line(facts.title or "(no title)", style), f"  {files[-1] if files else ''}{more}", ""]
    lines += _counts(facts) + _islands(facts, style) + _assemblies(facts, style) + _chokes(facts, style)
    if facts.dependent:
        lines += ["", title_line("States that follow from others (legal; reduced before solving)", style), f"  {listed(facts.dependent)}"]
    return lines + _studies(facts, style)


def listed(names: tuple[str, ...] | list[str]) -> str:
    """Names in running text, families folded: "berth1 … berth6 (6)", the rest counted."""
    shown: list[str] = []
    for _, members in families(list(names)).items():
        shown += members if len(members) <= 2 else [f"{members[0]} … {members[-1]} ({len(members)})"]
    rest = len(shown) - _NAMES_SHOWN
    return ", ".join(shown[:_NAMES_SHOWN]) + (f" and {rest} more" if rest > 0 else "")


def _counts(facts: Overview) -> list[str]:
    pairs = [f"{number} {_singular(what) if number == 1 else what}" for what, number in facts.counts.items() if number]
    lines, line = [], "  "
    for pair in pairs:
        if len(line) + len(pair) > 88:
            lines.append(line.rstrip(" ,") + ",")
            line = "  "
        line += pair + ", "
    return [*lines, line.rstrip(" ,")]


def _singular(what: str) -> str:
    return {"boxes": "box", "studies": "study", "assemblies": "assembly", "latches": "latch"}.get(what, what.removesuffix("s"))


def _islands(facts: Overview, style: Style) -> list[str]:
    rows = [[i.reference, i.domain, str(i.nodes), listed(i.names)] for i in facts.islands[:_ROWS_MAX]]
    headings = (Heading("reference"), Heading("kind"), Heading("nodes", right=True), Heading("named at top level", most=60))
    return ["", title_line("Islands", style), *table(headings, rows, style), *_left_out(len(facts.islands))]


def _assemblies(facts: Overview, style: Style) -> list[str]:
    if not facts.assemblies:
        return []
    by_kind: dict[str, list[str]] = {}
    for name, kind in facts.assemblies.items():
        by_kind.setdefault(kind, []).append(name)
    rows = [[kind, str(len(names)), listed(names)] for kind, names in by_kind.items()]
    headings = (Heading("assembly"), Heading("placed", right=True), Heading("as", most=70))
    return ["", title_line("Assemblies", style), *table(headings, rows[:_ROWS_MAX], style), *_left_out(len(rows))]


def _chokes(facts: Overview, style: Style) -> list[str]:
    if not facts.chokes:
        return []
    folded: dict[tuple[str, str], list[str]] = {}
    for pole, chokes in facts.chokes.items():
        names = ", ".join(chokes) if chokes else "none"
        folded.setdefault((_NUMBER.sub("{*}", pole), _NUMBER.sub("{*}", names)), []).append(pole)
    rows = []
    for (pole, names), members in folded.items():
        rows.append([pole, names, str(len(members))] if len(members) > 1 else [members[0], ", ".join(facts.chokes[members[0]]) or "none", "1"])
    headings = (Heading("pole"), Heading("choke", most=48), Heading("poles", right=True))
    return ["", title_line("Poles and the choke each one faces", style), *table(headings, rows[:_ROWS_MAX], style), *_left_out(len(rows))]


def _studies(facts: Overview, style: Style) -> list[str]:
    if not facts.studies:
        return []
    rows = [
        [s.name, s.start, format_value(s.run_for_s, TIME) if s.run_for_s is not None else "", str(s.requirements), s.document or ""]
        for s in facts.studies[:_ROWS_MAX]
    ]
    headings = (Heading("study"), Heading("start"), Heading("runs for", right=True), Heading("requirements", right=True), Heading("", most=46))
    return ["", title_line("Studies", style), *table(headings, rows, style), *_left_out(len(facts.studies))]


def _left_out(rows: int) -> list[str]:
    return [f"  and {rows - _ROWS_MAX} more"] if rows > _ROWS_MAX else []
