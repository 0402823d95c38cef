"""Wording of what the equations stage refuses: facts in, Diagnostic out."""

from __future__ import annotations

from polewise.grammar.diagnostics import Diagnostic, Severity
from polewise.grammar.source import Span


def loop_of_conditions(name: str, span: Span) -> Diagnostic:
    return Diagnostic(
        "condition-loop",
        Severity.ERROR,
        f"the condition `{name}` depends on itself at the same instant",
        span,
        hint="break the loop with a latch that events set, or with `sampled at`",
    )


def derivative_of_algebraic(name: str, other: str, span: Span) -> Diagnostic:
    return Diagnostic(
        "derivative-not-determined",
        Severity.ERROR,
        f"`{name}` is read, but it is the rate of change of something that depends on `{other}`, which has no rate of its own",
        span,
        hint="read another quantity, or add the small capacitance or inductance that is there in reality",
    )


def not_kept(name: str, span: Span) -> Diagnostic:
    return Diagnostic(
        "quantity-not-foreseen",
        Severity.ERROR,
        f"`{name}` can only be read when it is named before the run",
        span,
        hint="add it to `keep`",
    )


def clock_sets_state(name: str, span: Span) -> Diagnostic:
    return Diagnostic(
        "clock-sets-state",
        Severity.ERROR,
        f"`every` can't set the state `{name}`",
        span,
        hint="make it a latch that `every` updates, or restart the state with `at` or `whenever`",
    )


def clock_conflict(name: str, span: Span) -> Diagnostic:
    return Diagnostic(
        "two-values",
        Severity.ERROR,
        f"`{name}` is set twice at the same instants",
        span,
        hint="leave one of the two `set` actions",
    )


def condition_in_mean(name: str, span: Span) -> Diagnostic:
    return Diagnostic(
        "mean-of-condition",
        Severity.ERROR,
        f"`{name}` is true or false and changes at sample instants, so `sampling = mean` has no equivalent for it",
        span,
        hint="use `sampling = exact` in this study",
    )
