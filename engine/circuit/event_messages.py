"""What is wrong with events and studies, in words: one function per error, facts in, Diagnostic out."""

from __future__ import annotations

from collections.abc import Sequence

from polewise.circuit.dimensions import Quality, describe
from polewise.circuit.message_form import article, at, declared_at, error, meant, number_text, warning
from polewise.grammar.diagnostics import Diagnostic, Label
from polewise.grammar.source import Span

# ---------------------------------------------------------------- events


def set_twice(span: Span, name: str, first: Span) -> Diagnostic:
    """Two values for one target."""
    return error("set-twice", f"`{name}` is set twice in one event", span, labels=at(first, "first here"))


def not_settable(span: Span, name: str, word: str, declared: Span, hint: str | None) -> Diagnostic:
    """set of a signal."""
    return error(
        "not-settable", f"`{name}` is {article(word)}; events set latches, states and `closed`", span, labels=declared_at(declared), hint=hint
    )


def nothing_to_switch(span: Span, word: str, name: str, thing: str, declared: Span) -> Diagnostic:
    """open of a resistor."""
    hint = "Name the breaker's box: `open feeder.k`."
    return error("nothing-to-switch", f"there is nothing to {word} in the {thing} `{name}`", span, labels=declared_at(declared), hint=hint)


def threshold_unit(span: Span, found: Quality, watched: Span, wanted: Quality, edge: str) -> Diagnostic:
    """bus.v rises above 5 A."""
    labels = at(watched, describe(wanted))
    return error("unit-mismatch", f"`{edge}` compares {describe(wanted)} with {describe(found)}", span, labels=labels)


def condition_never_changes(span: Span, value: bool) -> Diagnostic:
    """whenever true."""
    return warning("condition-constant", f"this condition is always {'true' if value else 'false'}; the event is left out", span)


def sequence_empty(span: Span, name: str) -> Diagnostic:
    """No steps."""
    return error("sequence-empty", f"the sequence `{name}` has no steps", span)


def no_next_step(span: Span, step: str, sequence: str) -> Diagnostic:
    """until in the last step."""
    return error(
        "sequence-end",
        f"`{step}` is the last step of `{sequence}`; its `until` leads nowhere",
        span,
        hint="Leave `until` out, or add a step behind it.",
    )


def unknown_step(span: Span, name: str, sequence: str, nearest: str | None) -> Diagnostic:
    """else to a step that is not there."""
    return error("unknown-step", f"the sequence `{sequence}` has no step `{name}`", span, hint=meant(nearest))


# ---------------------------------------------------------------- studies


def unknown_study(span: Span, name: str, nearest: str | None) -> Diagnostic:
    """start from a study that is not there."""
    return error("unknown-study", f"there is no study `{name}`", span, hint=meant(nearest))


def study_from_itself(span: Span, name: str) -> Diagnostic:
    """start from in a circle."""
    return error("study-circle", f"the study `{name}` starts, in the end, from itself", span)


def study_without_run(span: Span, name: str) -> Diagnostic:
    """Requirements and no time."""
    return error("study-run", f"the study `{name}` does not say how long it runs", span, hint="Write `run for 100 ms`.")


def event_after_end(span: Span, time_s: float, end_s: float, study: str) -> Diagnostic:
    """at 5 s in a run of 1 s."""
    return warning("after-end", f"`{study}` runs for {number_text(end_s)} s; nothing happens at {number_text(time_s)} s any more", span)


def window_after_end(span: Span, start_s: float, end_s: float, study: str) -> Diagnostic:
    """require … after 5 s in a run of 1 s."""
    return error("after-end", f"`{study}` runs for {number_text(end_s)} s; a window from {number_text(start_s)} s on is empty", span)


def tolerance_range(span: Span, tightest: float, loosest: float) -> Diagnostic:
    """tolerance 5."""
    return error("tolerance-range", f"a tolerance is relative, between {number_text(tightest)} and {number_text(loosest)}", span)


def requirement_without_bound(span: Span, subject: Span) -> Diagnostic:
    """require bus.v."""
    hint = f"Write `{subject.text} within … .. …`, `above …` or `below …`."
    return error("requirement-bound", "a requirement on a number needs its bound", span, hint=hint)


def magnify_with(span: Span, order: Span, study: str) -> Diagnostic:
    """`run for` beside `magnify`."""
    hint = f"Start, length, events and givens are those of `{study}`."
    return error(
        "magnify-with", "a study that magnifies another one runs nothing of its own", span, labels=[Label(order, "it magnifies here")], hint=hint
    )


def magnify_twice(span: Span, study: str) -> Diagnostic:
    """magnify a study that itself magnifies."""
    return error("magnify-twice", f"`{study}` is itself a magnified stretch", span, hint="Name the study that it magnifies.")


def requirement_subject(span: Span, measure: str, takes: str) -> Diagnostic:
    """phase_margin(a + b)."""
    return error("requirement-subject", f"`{measure}` asks for the name of a {takes}", span)


def requirement_limit_varies(span: Span, measure: str) -> Diagnostic:
    """phase_margin(drive) above bus.v."""
    return error("requirement-limit-varies", f"the limit of `{measure}` must be constant", span)


def requirement_window(span: Span, measure: str) -> Diagnostic:
    """least_damping() above 0.1 after 3 ms."""
    hint = "Leave `after` or `during` away."
    return error("requirement-window", f"`{measure}` belongs to the operating point, not to a time of the run", span, hint=hint)


def condition_with_bound(span: Span, relation: str) -> Diagnostic:
    """require a > b above 5."""
    return error(
        "requirement-bound",
        f"this is true or false; `{relation}` asks for a number",
        span,
        hint="Leave the bound out: the condition itself must hold.",
    )


def unknown_measure(span: Span, name: str, nearest: str | None, known: Sequence[str]) -> Diagnostic:
    """require setling_time(…)."""
    return error("unknown-measure", f"there is no measure or function `{name}`", span, hint=meant(nearest) or f"Measures are {', '.join(known)}.")


def band_not_positive(span: Span, name: str, measure: str) -> Diagnostic:
    """settling_time(x, 0 %)."""
    return error("measure-setting", f"`{name}` of `{measure}` must be above zero", span)
