"""What is wrong with units, values, filters and tables, in words: one function per error, facts in, Diagnostic out."""

from __future__ import annotations

from collections.abc import Sequence

from polewise.circuit.dimensions import Quality, describe, unit_text
from polewise.circuit.message_form import LISTED_MAX, article, at, declared_at, error, meant, number_text
from polewise.grammar.diagnostics import Diagnostic, Label
from polewise.grammar.source import Span

# ---------------------------------------------------------------- units


def unit_mismatch(span: Span, operator: str, left: Span, a: Quality, right: Span, b: Quality) -> Diagnostic:
    """`12 mohm + 3 uH`."""
    act = {"+": "added", "-": "subtracted"}.get(operator, "compared")
    labels = (Label(left, describe(a)), Label(right, describe(b)))
    return error("unit-mismatch", f"{describe(a)} and {describe(b)} can't be {act}", span, labels=labels, hint=_missing_unit(a, b))


def _missing_unit(a: Quality, b: Quality) -> str | None:
    for plain, other in ((a, b), (b, a)):
        if plain.dimension.is_none and not other.dimension.is_none:
            return f"Is a unit missing? `{unit_text(other)}` behind the plain number, or a division."
    return None


def unit_expected(span: Span, found: Quality, wanted: Quality, reason: str, place: Span | None) -> Diagnostic:
    """A value of the wrong kind where a certain one is asked for."""
    hint = None
    if found.dimension.is_none and not wanted.dimension.is_none:
        hint = f"Is the unit missing? Write it behind the number: `{unit_text(wanted)}`."
    labels = at(place, f"this asks for {describe(wanted)}")
    return error("unit-expected", f"{reason} asks for {describe(wanted)}, and this is {describe(found)}", span, labels=labels, hint=hint)


def turn_missing(span: Span, left: Span, a: Quality, right: Span, b: Quality) -> Diagnostic:
    """Hz against rad/s."""
    labels = (Label(left, describe(a)), Label(right, describe(b)))
    headline = "Hz and rad/s are not the same: a factor 2π is missing"
    return error("turn-missing", headline, span, labels=labels, hint="1 Hz is one turn, 2π rad, per second: write `2*pi * 50 Hz`.")


def turn_expected(span: Span, found: Quality, wanted: Quality, reason: str, place: Span | None) -> Diagnostic:
    """A frequency asked, rad/s given."""
    headline = f"{reason} asks for {describe(wanted)}, and this is {describe(found)}: a factor 2π is missing"
    hint = "Divide it by `2*pi`." if wanted.spelling == "Hz" else "Multiply it by `2*pi`."
    return error("turn-missing", headline, span, labels=at(place, f"this asks for {describe(wanted)}"), hint=hint)


def condition_as_number(span: Span, asked_by: str) -> Diagnostic:
    """true + 1."""
    return error("condition-as-number", f"{asked_by} asks for a number, and this is true or false", span, hint="Write `1 if … otherwise 0`.")


def number_as_condition(span: Span, found: Quality, asked_by: str) -> Diagnostic:
    """if 3."""
    headline = f"{asked_by} asks for a condition, and this is {describe(found)}"
    return error("number-as-condition", headline, span, hint="Compare it: `… > 0`, or write `true` or `false`.")


def branches_differ(span: Span, left: Span, a: Quality, right: Span, b: Quality) -> Diagnostic:
    """5 V if c otherwise 3 A."""
    labels = (Label(left, describe(a)), Label(right, describe(b)))
    return error("unit-mismatch", f"this is {describe(a)} or {describe(b)}; both sides of `otherwise` must be of one kind", span, labels=labels)


def sides_differ(span: Span, left: Span, a: Quality, right: Span, b: Quality) -> Diagnostic:
    """An equation whose sides have different units."""
    labels = (Label(left, describe(a)), Label(right, describe(b)))
    return error("unit-mismatch", f"the sides of this equation differ: {describe(a)} and {describe(b)}", span, labels=labels)


def exponent_with_unit(span: Span, found: Quality) -> Diagnostic:
    """x ^ (2 V)."""
    return error("exponent", f"an exponent is a plain number, and this is {describe(found)}", span)


def varying_exponent(span: Span, base: Span, of_base: Quality) -> Diagnostic:
    """(5 V) ^ n with n varying."""
    labels = at(base, describe(of_base))
    headline = "with an exponent that varies, what is raised must be a plain number"
    return error(
        "exponent", headline, span, labels=labels, hint=f"Divide by a value in {unit_text(of_base)} first: `(x / 1 {unit_text(of_base)})^n`."
    )


def exponent_too_large(span: Span, base: Span, of_base: Quality) -> Diagnostic:
    """(5 V)^100."""
    return error("exponent", "this exponent gives a unit beyond all physics", span, labels=at(base, describe(of_base)))


def joined_name(span: Span, unit: str, symbol: str, declared: Span | None) -> Diagnostic:
    """`50 Hz*T` with a given T."""
    headline = f"`{symbol}` in `{unit}` is a unit here, and it is also a name that is declared"
    hint = f"For arithmetic leave a blank before the operator; for the unit rename `{symbol}`."
    return error("joined-name", headline, span, labels=declared_at(declared), hint=hint)


def degrees_added(span: Span, right: Span) -> Diagnostic:
    """20 degC + 5 degC."""
    return error(
        "degrees-added",
        "degC is a point on a scale that starts at -273.15; a difference is in K",
        right,
        labels=at(span, "this adds"),
        hint="Write `5 K`.",
    )


def division_by_zero(span: Span) -> Diagnostic:
    """x / 0."""
    return error("division-by-zero", "this divides by zero", span)


def list_as_value(span: Span) -> Diagnostic:
    """(1, 2, 3)."""
    return error("list-as-value", "a list of values can't stand here", span)


def derivative_outside(span: Span) -> Diagnostic:
    """d/dt in a signal."""
    hint = "It stands in an equation in a box, or opens a state: `d/dt x = …`. For a slope write `x filtered by s / (1 + s * T)`."
    return error("derivative-outside", "`d/dt` can't stand here", span, hint=hint)


def not_finite(span: Span, asked_by: str) -> Diagnostic:
    """1/0 in a given."""
    return error("not-finite", f"{asked_by} must be a finite number", span)


def varying_value(span: Span, asked_by: str, leaf: str) -> Diagnostic:
    """A constant asked, something varying given."""
    return error("varying-value", f"{asked_by} must not vary, and this reads `{leaf}`", span)


def varying_given(span: Span, given: str, leaf: str, declared: Span | None) -> Diagnostic:
    """`given` bound to a signal."""
    hint = "Declare it as `input` to hand in a value that varies."
    return error("varying-given", f"{given} is fixed for a run, and this varies: it reads `{leaf}`", span, labels=declared_at(declared), hint=hint)


# ---------------------------------------------------------------- values


def needs_itself(span: Span, word: str, chain: Sequence[str]) -> Diagnostic:
    """given a = b, given b = a."""
    return error("needs-itself", f"this {word} needs itself: {' → '.join([*chain, chain[0]])}", span)


def algebraic_loop(span: Span, chain: Sequence[str]) -> Diagnostic:
    """Signals in a circle."""
    shown = [*chain[:LISTED_MAX], "…"] if len(chain) > LISTED_MAX else list(chain)
    hint = "Break the circle by a state or a delay, or write `solve … from …`."
    return error("algebraic-loop", f"these need one another at the same time: {' → '.join([*shown, chain[0]])}", span, hint=hint)


def given_missing(span: Span, name: str, document: str | None, declared: Span) -> Diagnostic:
    """`given x in V` that nobody supplies."""
    meaning = f" ({document})" if document else ""
    labels = declared_at(declared) if declared != span else ()
    return error(
        "given-missing",
        f"the given `{name}`{meaning} has no value",
        span,
        labels=labels,
        hint=f"Supply it: `{name.rpartition('.')[2]} = …`, or from outside.",
    )


def input_missing(span: Span, name: str, document: str | None, declared: Span | None) -> Diagnostic:
    """An input without default that is not bound."""
    meaning = f" ({document})" if document else ""
    return error(
        "input-missing",
        f"the input `{name}`{meaning} is not supplied",
        span,
        labels=declared_at(declared),
        hint=f"Write `{name.rpartition('.')[2]} = …`.",
    )


def override_unreadable(span: Span, path: str, text: str) -> Diagnostic:
    """--given x=abc."""
    return error(
        "override-value", f"`{text}` is no value for `{path}`", span, hint="Write a number with its unit, such as `200 uH`, or `true` or `false`."
    )


def unknown_given(span: Span, path: str, nearest: str | None, word: str | None) -> Diagnostic:
    """A value from outside for nothing."""
    if word is not None and word != "given":
        return error("unknown-given", f"`{path}` is {article(word)}, not a given", span, hint="Only givens take a value from outside.")
    return error("unknown-given", f"there is no given `{path}`", span, hint=meant(nearest))


def path_given_without_value(span: Span) -> Diagnostic:
    """`given berth2.L in H`."""
    return error("path-given", "a given further inside can be given a value here, not declared", span, hint="Write `given berth2.L = …`.")


def tolerance_of_condition(span: Span, name: str) -> Diagnostic:
    """given x = true +- 5 %."""
    return error("tolerance", f"`{name}` is true or false and has no tolerance", span)


def tolerance_negative(span: Span) -> Diagnostic:
    """+- -5 %."""
    return error("tolerance", "a tolerance is a finite number from zero on", span)


def tolerance_without_unit(span: Span, text: str) -> Diagnostic:
    """given x = 5 V +- 20."""
    return error("tolerance", "is this tolerance a share or a size?", span, hint=f"Write `{text} %` for a share, or the unit of the value.")


def bounds_swapped(span: Span, word: str) -> Diagnostic:
    """within 5 .. 1."""
    return error("bounds-swapped", f"`{word}`: the lower end is above the upper end", span)


def nothing_to_solve(span: Span, name: str) -> Diagnostic:
    """solve x from 1 = 1."""
    return error("nothing-to-solve", f"this equation does not depend on anything, `{name}` can't be found from it", span)


def time_not_positive(span: Span, asked_by: str, value: float, zero: bool) -> Diagnostic:
    """delayed by -1 s."""
    bound = "zero or above" if zero else "above zero"
    return error("time-not-positive", f"{asked_by} asks for a time {bound}, and this is {number_text(value)} s", span)


def frequency_not_positive(span: Span, asked_by: str, value: float) -> Diagnostic:
    """sampled at 0 Hz."""
    return error("frequency-not-positive", f"{asked_by} asks for a frequency above zero, and this is {number_text(value)} Hz", span)


# ---------------------------------------------------------------- filters and memory


def memory_refused(span: Span, words: str, reason: str) -> Diagnostic:
    """`filtered by` in a function."""
    return error("memory-refused", f"`{words}` can't stand here: {reason}", span, hint="Give it a name with `signal` and read that.")


def not_rational(span: Span, letter: str) -> Diagnostic:
    """filtered by sin(s)."""
    return error("filter-form", f"a filter is made of `{letter}` and constants by `+ - * / ^`", span)


def filter_exponent(span: Span) -> Diagnostic:
    """(1 + s)^0.5."""
    return error("filter-form", "an exponent in a filter is a whole number", span)


def filter_order(span: Span) -> Diagnostic:
    """Order 100."""
    return error("filter-order", "this filter's order is too high", span, hint="Write it as several filters, one behind the other.")


def improper_filter(span: Span, letter: str) -> Diagnostic:
    """filtered by s."""
    if letter == "z":
        return error("filter-improper", "this filter needs values that are not there yet: its numerator has a higher power of `z`", span)
    hint = "Add a pole: `s / (1 + s * T)` with a short T."
    return error("filter-improper", "this filter is a pure derivative at high frequency: its numerator has a higher power of `s`", span, hint=hint)


def samplers_in_circle(span: Span, others: Sequence[Span]) -> Diagnostic:
    """Sampled values that need one another."""
    labels = [Label(other, "and this") for other in others[:LISTED_MAX]]
    headline = "sampled values need one another at the same instant"
    return error(
        "samplers-in-circle", headline, span, labels=labels, hint="Let one of them take the value of the period before: `filtered by z^-1 in z at …`."
    )


# ---------------------------------------------------------------- tables


def table_too_short(span: Span, name: str) -> Diagnostic:
    """One point."""
    return error("table-points", f"the table `{name}` needs two points or more", span)


def table_order(span: Span, name: str, value: float, number: int) -> Diagnostic:
    """x not increasing."""
    return error("table-points", f"the table `{name}` must rise from point to point; point {number} is at {number_text(value)}", span)


def table_not_odd(span: Span, name: str) -> Diagnostic:
    """odd with points left of zero."""
    return error("table-odd", f"the table `{name}` is `odd`: its points start at zero with the value zero, or right of zero", span)


def outside_table(span: Span, name: str, value: float, low: float, high: float, kind: Quality, declared: Span) -> Diagnostic:
    """A constant outside a closed table."""
    unit = f" {unit_text(kind)}" if unit_text(kind) else ""
    headline = f"the table `{name}` goes from {number_text(low)} to {number_text(high)}{unit}; this reads it at {number_text(value)}{unit}"
    hint = "Write `hold`, `extend` or `repeat` behind the table to say how it goes on."
    return error("outside-table", headline, span, labels=declared_at(declared), hint=hint)
