"""Wording of structural findings: facts in, Diagnostic out."""

from __future__ import annotations

from collections.abc import Sequence

from polewise.grammar.diagnostics import Diagnostic, Label, Severity
from polewise.grammar.source import Span

# Longer lists are cut: a message is read, not searched.
NAMES_SHOWN_MAX = 6


def listed(names: Sequence[str]) -> str:
    """Names for a sentence, cut after a few."""
    shown = [f"`{name}`" for name in names[:NAMES_SHOWN_MAX]]
    more = len(names) - len(shown)
    if more > 0:
        return f"{', '.join(shown)} and {more} more"
    return shown[0] if len(shown) == 1 else f"{', '.join(shown[:-1])} and {shown[-1]}"


def no_reference(nodes: Sequence[str], domain: str, span: Span) -> Diagnostic:
    kind = "" if domain == "electrical" else f" ({domain})"
    return Diagnostic(
        "no-reference",
        Severity.ERROR,
        f"the island of {listed(nodes)} has no reference{kind}",
        span,
        hint=f"say which of its nodes is at 0: `reference {nodes[-1]}`, or join it to an island that has one",
    )


def two_references(first: str, second: str, first_span: Span, second_span: Span) -> Diagnostic:
    return Diagnostic(
        "two-references",
        Severity.ERROR,
        f"`{second}` and `{first}` are both references of one island",
        second_span,
        labels=(Label(first_span, "the other one"),),
        hint="keep one of them; each galvanic island has exactly one",
    )


def source_loop(names: Sequence[str], span: Span, others: Sequence[Span]) -> Diagnostic:
    return Diagnostic(
        "source-loop",
        Severity.ERROR,
        f"voltage sources close a loop: {listed(names)}",
        span,
        labels=tuple(Label(s, "in the same loop") for s in others[:NAMES_SHOWN_MAX]),
        hint="put the resistance that limits the current between them",
    )


def pole_mid_fixed(pole: str, names: Sequence[str], span: Span) -> Diagnostic:
    return Diagnostic(
        "pole-mid-fixed",
        Severity.ERROR,
        f"the mid of pole `{pole}` is tied to {listed(names)}, which fixes its voltage",
        span,
        hint="a pole switches its mid between two voltages: put an inductor between mid and a source or capacitor",
    )


def current_cutset(names: Sequence[str], nodes: Sequence[str], span: Span) -> Diagnostic:
    return Diagnostic(
        "current-cutset",
        Severity.ERROR,
        f"only current sources lead to {listed(nodes)}: {listed(names)}",
        span,
        hint="their currents have nowhere else to go: add the capacitor or resistance that takes the difference",
    )


def pole_top_floating(pole: str, terminal_node: str, names: Sequence[str], span: Span) -> Diagnostic:
    return Diagnostic(
        "pole-without-input-capacitor",
        Severity.ERROR,
        f"pole `{pole}` draws a pulsed current from `{terminal_node}`, which only {listed(names)} feeds",
        span,
        hint="put the pole's input capacitor between its top and bottom",
    )


def dangling_node(name: str, span: Span, near: str | None) -> Diagnostic:
    hint = f"did you mean `{near}`?" if near else "connect something else to it, or remove what ends there; a device's terminal may be `unconnected`"
    return Diagnostic("dangling-node", Severity.ERROR, f"node `{name}` is touched only once", span, hint=hint)


def no_choke(pole: str, node: str, span: Span) -> Diagnostic:
    return Diagnostic(
        "no-choke",
        Severity.ERROR,
        f"no inductor faces the mid `{node}` of pole `{pole}`",
        span,
        hint="a pole with a diode needs its choke at mid; if it is elsewhere say `choke = NAME`",
    )


def not_a_choke(pole: str, name: str, span: Span, other: Span) -> Diagnostic:
    return Diagnostic(
        "not-a-choke",
        Severity.ERROR,
        f"`{name}` also hangs on the mid of pole `{pole}`, so the pole's current is not its choke's current",
        other,
        labels=(Label(span, "the pole with a diode"),),
        hint="move it to the other side of the choke, or say `choke = NAME` if the pole should follow one choke anyway",
    )


def choke_far_end_switches(pole: str, choke: str, other: str, span: Span) -> Diagnostic:
    return Diagnostic(
        "choke-far-end-switches",
        Severity.ERROR,
        f"the far end of choke `{choke}` of pole `{pole}` is the mid of pole `{other}`, which switches too",
        span,
        hint="put a capacitor to a rail at the far end, or say `conduction = continuous`",
    )


def shared_choke(choke: str, first: str, second: str, span: Span) -> Diagnostic:
    return Diagnostic(
        "shared-choke",
        Severity.ERROR,
        f"poles `{first}` and `{second}` share choke `{choke}`",
        span,
        hint="give each pole with a diode its own choke",
    )


def unknown_choke(pole: str, name: str, span: Span) -> Diagnostic:
    return Diagnostic(
        "unknown-choke",
        Severity.ERROR,
        f"`choke` of pole `{pole}` names `{name}`, which is not an inductor",
        span,
        hint="name the box or path that holds the inductor",
    )


def dependent_capacitor(name: str, loop: Sequence[str], span: Span) -> Diagnostic:
    return Diagnostic(
        "dependent-capacitor",
        Severity.NOTE,
        f"the voltage of capacitor `{name}` follows from {listed(loop)}; it is not a state of its own",
        span,
    )


def dependent_inductor(name: str, others: Sequence[str], span: Span) -> Diagnostic:
    return Diagnostic(
        "dependent-inductor",
        Severity.NOTE,
        f"the current of inductor `{name}` follows from {listed(others)}; it is not a state of its own",
        span,
    )
