"""The wording of failures after reading: facts in, exceptions with diagnostics out."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from polewise.equations.system import EquationSystem, Flag, Unknown
from polewise.errors import (
    Chatter,
    DependsOnTime,
    EventConflict,
    EventStorm,
    IntegratorCannotRest,
    IntegratorsFight,
    NoOperatingPoint,
    NotFinite,
    OutsideTable,
    PowerLimit,
    RestartFailure,
    SamplingChoice,
    SingularSystem,
    StartFailure,
    StepFailure,
)
from polewise.grammar import units
from polewise.grammar.diagnostics import Diagnostic, Label, Severity
from polewise.grammar.source import Span, no_span
from polewise.grammar.units import Dimension, format_value


def _error(code: str, headline: str, span: Span, *, labels: Sequence[Label] = (), hint: str | None = None) -> Diagnostic:
    return Diagnostic(code, Severity.ERROR, headline, span, tuple(labels), hint)


def _warning(code: str, headline: str, span: Span, *, hint: str | None = None) -> Diagnostic:
    return Diagnostic(code, Severity.WARNING, headline, span, (), hint)


def time_text(t: float) -> str:
    """A study time as people write it."""
    return format_value(t, units.TIME, digits=7)


def _listed(names: Sequence[str]) -> str:
    if len(names) <= 1:
        return "".join(names)
    shown = list(names[:4]) + ([f"{len(names) - 4} more"] if len(names) > 4 else [])
    return ", ".join(shown[:-1]) + " and " + shown[-1]


@dataclass(frozen=True, slots=True)
class Named:
    """An unknown or held value for a message."""

    name: str
    span: Span
    owner: str
    dimension: Dimension

    @property
    def text(self) -> str:
        """Its name; names carry their owner's path."""
        return f"`{self.name}`"


def named_unknown(unknown: Unknown) -> Named:
    """An unknown for a message."""
    return Named(unknown.name, unknown.span, unknown.owner, unknown.dimension)


# ---------------------------------------------------------------- operating point


def depends_on_time(rows: Sequence[Named]) -> DependsOnTime:
    """`start settled` with laws that read `time`."""
    first = rows[0]
    others = [Label(r.span, "this one too") for r in rows[1:5] if r.span != first.span]
    return DependsOnTime(
        [
            _error(
                "time-never-rests",
                f"{_listed([r.text for r in rows])} follows `time`, so the circuit has no state of rest",
                first.span,
                labels=others,
                hint="start the study with `start cold`, or hold the value in a latch that `at` changes",
            )
        ]
    )


def integrators_cannot_rest(integrators: Sequence[Named], rates: Sequence[float], elements: Sequence[bool]) -> IntegratorCannotRest:
    """Unbounded integrators whose inputs can't vanish.

    Args:
        rates: of each, as it stays when everything else rests.
        elements: whether each is the state of an inductor or capacitor (or of what stands for them elsewhere) rather than of a `d/dt`.
    """
    diagnostics = []
    for one, rate, element in zip(integrators, rates, elements, strict=True):
        moving = f"; it keeps changing by {format_value(rate, one.dimension / units.TIME)}" if rate else ""
        why, hint = _why_it_moves(one.dimension, element)
        diagnostics.append(_error("integrator-never-rests", f"{one.text} can't come to rest: {why}{moving}", one.span, hint=hint))
    return IntegratorCannotRest(diagnostics)


def _why_it_moves(dimension: Dimension, element: bool) -> tuple[str, str]:
    """Reason and hint for something that integrates."""
    if element and dimension == units.CURRENT:
        return "nothing can bring the voltage across this inductance to zero", "put the resistance of its winding in series with it"
    if element and dimension == units.VOLTAGE:
        return "nothing can bring the current into this capacitance to zero", "give the current a way past it, such as a load or a leakage resistance"
    hint = "give it bounds with `within low .. high`, or write `held` if it only counts (a charge, an energy)"
    return "nothing in the circuit can bring its input to zero", hint


def integrators_fight(integrators: Sequence[Named], *, same: bool) -> IntegratorsFight:
    """Integrators that regulate one quantity; `same`: to the same value, so that only their shares are open."""
    names = _listed([one.text for one in integrators])
    first = integrators[0]
    if same:
        headline = f"{names} regulate the same quantity: nothing decides how they share the work"
        hint = "let one of them regulate and give the others a droop or a share of the first one's output"
    else:
        headline = f"{names} work against each other: each wants another value of the same quantity, so neither comes to rest"
        hint = "give all but one of them a droop, or bounds with `within low .. high`"
    labels = [Label(one.span, "and this one") for one in integrators[1:5] if one.span != first.span]
    return IntegratorsFight([_error("integrators-fight", headline, first.span, labels=labels, hint=hint)])


def singular_at_rest(rows: Sequence[Named]) -> SingularSystem:
    """Unknowns that the equations leave open."""
    first = rows[0]
    return SingularSystem(
        [
            _error(
                "value-not-determined",
                f"the equations leave {_listed([r.text for r in rows])} open: any value would do, or none",
                first.span,
                labels=[Label(r.span, "together with this one") for r in rows[1:4] if r.span != first.span],
                hint="look for a node that is tied to nothing but current sources or open switches, or for two laws that say the same",
            )
        ]
    )


def no_operating_point(rows: Sequence[Named], reached: str) -> NoOperatingPoint:
    """Every strategy failed without a clear cause."""
    first = rows[0]
    return NoOperatingPoint(
        [
            _error(
                "no-operating-point",
                f"no state of rest was found; the law of {_listed([r.text for r in rows])} holds least{reached}",
                first.span,
                hint="give starting guesses with `initially`, or use `start cold` and look where the run goes",
            )
        ]
    )


def not_finite_at_rest(row: Named) -> NoOperatingPoint:
    """A row is not a number at the first guess."""
    return NoOperatingPoint(
        [
            _error(
                "value-not-finite",
                f"the law of {row.text} is not a number at the starting guess",
                row.span,
                hint="look for a division by zero, a root or logarithm of a negative value, or give a guess with `initially`",
            )
        ]
    )


def power_limit(
    flags: Sequence[Flag], share: float, asked_w: Mapping[str, float] | None, delivered_w: Mapping[str, float] | None, *, fades: bool
) -> PowerLimit:
    """Constant powers ask for more than the network delivers.

    Args:
        flags: of the loads in question, the largest first.
        share: largest share of all constant powers that can be delivered.
        asked_w, delivered_w: power of each load as stated and at the limit, by subject; None where it isn't known.
        fades: at the limit a load has reached the voltage below which it fades, rather than the network its own limit.
    """
    first = flags[0]
    labels = [Label(f.span, "this one too") for f in flags[1:4]]
    total: float | None = None
    watt = units.POWER
    names = _listed([f"`{f.subject}`" for f in flags])
    if asked_w and delivered_w:
        total = sum(delivered_w[f.subject] for f in flags)
        asked = sum(asked_w[f.subject] for f in flags)
        verb = "asks" if len(flags) == 1 else "together ask"
        headline = f"{names} {verb} for {format_value(asked, watt)}, the line can deliver {format_value(total, watt)}"
    else:
        headline = f"{names} can get {format_value(share, units.NONE)} times the stated power, the line can deliver no more"
    if fades:
        headline += " before the voltage falls below the stated one"
    hint = "less power, a stiffer line or a higher voltage"
    return PowerLimit([_error("power-limit", headline, first.span, labels=labels, hint=hint)], power_scale=share, power_w=total)


def collapsed_warning(flag: Flag) -> Diagnostic:
    """A constant power below its stated voltage."""
    return _warning(
        "power-collapsed",
        f"`{flag.subject}` is below its stated voltage and takes less than its power",
        flag.span,
        hint="its bus is not fed: look for an open breaker or a source that is off",
    )


# ---------------------------------------------------------------- start and run


def start_failed(row: Named) -> StartFailure:
    """No consistent state from the `initially` values."""
    return StartFailure(
        [
            _error(
                "no-consistent-start",
                f"no voltages and currents agree with the starting values; the law of {row.text} holds least",
                row.span,
                hint="look at the `initially` values of the states around it",
            )
        ],
        time_s=0.0,
    )


def start_singular(row: Named) -> SingularSystem:
    """At the start an unknown is left open."""
    return SingularSystem(
        [
            _error(
                "value-not-determined",
                f"at the start the equations leave {row.text} open",
                row.span,
                hint="look for a node that is tied to nothing but current sources or open switches",
            )
        ],
        time_s=0.0,
    )


def restart_failed(t: float, row: Named) -> RestartFailure:
    """After an event no consistent state was found."""
    return RestartFailure(
        [
            _error(
                "restart-failed",
                f"after the event at {time_text(t)} no voltages and currents agree with the stored charges and fluxes; "
                f"the law of {row.text} holds least",
                row.span,
                hint="look at what the event switched: it may short a source or open the only path of a current",
            )
        ],
        time_s=t,
    )


def step_too_small(t: float, row: Named, step_s: float) -> StepFailure:
    """The step size fell below its limit."""
    return StepFailure(
        [
            _error(
                "step-too-small",
                f"at {time_text(t)} the solver can't go on: {row.text} changes faster than steps of {format_value(step_s, units.TIME)} can follow",
                row.span,
                hint="look for a value that runs away there, a law with a jump or a pole, or a far too small L or C; a looser `tolerance` "
                "may show more",
            )
        ],
        time_s=t,
    )


def singular_in_run(t: float, row: Named) -> SingularSystem:
    """The iteration matrix is singular."""
    return SingularSystem(
        [
            _error(
                "value-not-determined",
                f"at {time_text(t)} the equations leave {row.text} open",
                row.span,
                hint="look for a node or loop that a switch has just cut off",
            )
        ],
        time_s=t,
    )


def not_finite(t: float, row: Named) -> NotFinite:
    """A value is not a number."""
    return NotFinite(
        [
            _error(
                "value-not-finite",
                f"at {time_text(t)} the law of {row.text} is not a number",
                row.span,
                hint="look for a division by zero, or a root or logarithm of a negative value",
            )
        ],
        time_s=t,
    )


def outside_table(t: float, table: str, above: bool, low: float, high: float, row: Named | None) -> OutsideTable:
    """A table without `hold`, `extend` or `repeat` was read outside its range."""
    return OutsideTable(
        [
            _error(
                "outside-table",
                f"at {time_text(t)} table `{table}` is read {'above' if above else 'below'} its range {low:.6g} .. {high:.6g} (in SI)",
                row.span if row is not None else no_span(),
                hint="end the table with `hold` or `extend`, or give it more points",
            )
        ],
        time_s=t,
    )


def chatter(t: float, what: str, span: Span | None, limit: int) -> Chatter:
    """Switches flip without end."""
    return Chatter(
        [
            _error(
                "chatter",
                f"at {time_text(t)} {what} switches to and fro without end ({limit} times within a moment)",
                span or no_span(),
                hint="two conditions undo each other: add a hysteresis, or `for T` to the condition",
            )
        ],
        time_s=t,
    )


def event_conflict(t: float, target: str, first: tuple[Span, str], second: tuple[Span, str]) -> EventConflict:
    """Two values for one target at one instant."""
    return EventConflict(
        [
            _error(
                "event-conflict",
                f"at {time_text(t)} two actions set `{target}` to different values, {first[1]} and {second[1]}",
                first[0],
                labels=[Label(second[0], "the other action")],
                hint="put them at different times, or let one condition exclude the other",
            )
        ],
        time_s=t,
    )


def event_value_not_finite(t: float, target: str, span: Span) -> NotFinite:
    """The right side of an action is not a number."""
    return NotFinite([_error("value-not-finite", f"at {time_text(t)} the new value of `{target}` is not a number", span)], time_s=t)


def event_storm(t: float, text: str, span: Span, limit: int) -> EventStorm:
    """Rounds of events at one instant without end."""
    return EventStorm(
        [
            _error(
                "events-without-end",
                f"at {time_text(t)} events set off one another without end ({limit} rounds); one of them is `{text}`",
                span,
                hint="an event's action makes its own condition false and true again: add `for T`, or a latch that remembers",
            )
        ],
        time_s=t,
    )


def late_event(time_s: float, run_for_s: float, span: Span) -> Diagnostic:
    """A time event that the run never reaches."""
    return _warning("event-after-end", f"this is at {time_text(time_s)}, but the run ends at {time_text(run_for_s)}", span)


def sampling_choice(study: str, instants: float, exact_s: float, span: Span | None) -> SamplingChoice:
    """Too many sample instants without a choice."""
    return SamplingChoice(
        [
            _error(
                "sampling-choice",
                f"study `{study}` has {instants:.3g} sample instants: say how they are to be treated",
                span or no_span(),
                hint=f"`sampling = exact` computes each of them and takes roughly {_duration(exact_s)}; `sampling = mean` replaces delay and hold by "
                "continuous blocks and takes only the steps that the signals need, without what happens between samples",
            )
        ]
    )


def _duration(seconds: float) -> str:
    if seconds < 90.0:
        return f"{max(seconds, 1.0):.0f} s"
    if seconds < 5400.0:
        return f"{seconds / 60.0:.0f} min"
    return f"{seconds / 3600.0:.0f} h"


def named_box(name: str, span: Span) -> Named:
    """A box, for a message."""
    return Named(name, span, "", units.NONE)


def named_row(system: EquationSystem, kind: str, index: int) -> Named:
    """The unknown ("x") or held value ("p") of a row, for a message."""
    if kind == "x":
        return named_unknown(system.unknowns[index])
    parameter = system.parameters[index]
    return Named(parameter.name, parameter.span or no_span(), "", parameter.dimension)
