"""What `run` prints: the verdict table of a study, its events and counters."""

from __future__ import annotations

from polewise.analysis.answers import Answer
from polewise.analysis.magnified import EdgeWindow
from polewise.grammar.units import TEMPERATURE, TIME, format_value
from polewise.results.result import Result
from polewise.results.verdict import RequirementVerdict, Verdict
from polewise.terminal.answer_text import answer_lines
from polewise.terminal.stress_text import window_lines
from polewise.terminal.style import Style, harmless
from polewise.terminal.tables import Heading, table, title_line
from polewise.terminal.trust_text import wrapped

_EVENTS_MAX = 24  # of the log; the whole of it is in the summary
_HEADINGS = (
    Heading("requirement", most=26),
    Heading("value", right=True, most=14),
    Heading("limit", right=True, most=18),
    Heading("margin", right=True, most=14),
    Heading("", right=True, most=9),
    Heading("worst at", right=True, most=12),
    Heading("verdict"),
)


def verdict_lines(verdict: Verdict, style: Style) -> list[str]:
    """The verdict table; what fails is explained below it."""
    if not verdict.requirements:
        return [f"  {style.paint('no requirements', 'faint')}"]
    rows = [_row(r) for r in verdict.requirements]
    kinds = ["good" if r.passed else "bad" for r in verdict.requirements]
    lines = table(_HEADINGS, rows, style, kinds=kinds)
    for r in verdict.failed:
        lines.append(f"  {style.paint(r.name, 'bad')}: {harmless(r.text)}")
        lines.append(f"    {harmless(r.why)}{'. ' + harmless(r.document) if r.document else ''}")
    return lines


def summary_line(verdict: Verdict, style: Style) -> str:
    """The verdict as one sentence."""
    sentence = verdict.sentence[0].upper() + verdict.sentence[1:] + "."
    return style.paint(sentence, "bad" if verdict.failed else "good" if verdict.requirements else "plain")


def _row(r: RequirementVerdict) -> list[str]:
    word = "holds" if r.passed else "FAILS" if r.evaluated else "NOT SEEN"
    when = "" if r.time_s is None else format_value(r.time_s, TIME, digits=5)
    limit = f"{r.side} {r.limit_text}" if r.limit is not None else ""
    share = "" if r.margin_percent is None or r.dimension == TEMPERATURE else f"{_signed(r.margin_percent)} %"
    return [r.name, r.value_text, limit, r.margin_text, share, when, word]


def _signed(percent: float) -> str:
    return f"{percent:.3g}" if abs(percent) < 1000.0 else f"{percent:.0f}"


def result_lines(result: Result, style: Style) -> list[str]:
    """All that is said about a finished study."""
    facts = result.facts
    reached = format_value(facts.reached_s, TIME)
    planned = format_value(facts.planned_s, TIME)
    if isinstance(result, EdgeWindow):
        reached = f"{format_value(result.window.begin_s, TIME)} .. {reached} with every edge,"
    state = f"{reached} simulated in {_duration(facts.elapsed_s)}" if facts.complete else f"INCOMPLETE: stopped at {reached} of {planned}"
    if facts.planned_s == 0.0 and facts.complete:
        state = f"at the operating point, answered in {_duration(facts.elapsed_s)}"
    counters = ", ".join(f"{number} {name}" for name, number in facts.counters.items() if number)
    lines = [title_line(facts.study, style), f"  {state}"]
    if counters and facts.planned_s > 0.0:
        lines += wrapped(counters, 2, style, "faint")
    if facts.sampling == "mean":
        lines.append("  sampled blocks as their mean s-domain equivalents")
    if isinstance(result, EdgeWindow):
        lines += window_lines(result, style)
    told = [line for answer in result.answers if isinstance(answer, Answer) for line in answer_lines(answer, style)]
    return [*lines, *_event_lines(result, style), *told, "", *verdict_lines(result.verdict, style), "  " + summary_line(result.verdict, style)]


def _event_lines(result: Result, style: Style) -> list[str]:
    events = result.events
    if not events:
        return []
    rows = [[format_value(e.time_s, TIME, digits=6), e.text] for e in events[:_EVENTS_MAX]]
    lines = ["", *table((Heading("event at", right=True), Heading("", most=78)), rows, style)]
    if len(events) > _EVENTS_MAX:
        lines.append(f"  and {len(events) - _EVENTS_MAX} more, the last at {format_value(events[-1].time_s, TIME, digits=6)}")
    return lines


def _duration(seconds: float) -> str:
    if seconds < 60.0:
        return f"{seconds:.2f} s"
    return f"{int(seconds) // 60} min {int(seconds) % 60} s"
