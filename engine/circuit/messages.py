"""One function per error of this stage: facts in, Diagnostic out. Every code, headline and hint about a circuit's meaning is here."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Final

from polewise.circuit.dimensions import Quality, describe, unit_text
from polewise.grammar.diagnostics import Diagnostic, Edit, Label, Severity
from polewise.grammar.source import Span

# Lists in headlines stop here.
LISTED_MAX: Final = 6


def _error(code: str, headline: str, span: Span, *, labels: Sequence[Label] = (), hint: str | None = None, replace: str | None = None) -> Diagnostic:
    edit = None if replace is None else Edit(span, replace)
    return Diagnostic(code, Severity.ERROR, headline, span, tuple(labels), hint, edit)


def _warning(code: str, headline: str, span: Span, *, labels: Sequence[Label] = (), hint: str | None = None) -> Diagnostic:
    return Diagnostic(code, Severity.WARNING, headline, span, tuple(labels), hint)


def _at(span: Span | None, text: str) -> tuple[Label, ...]:
    return () if span is None else (Label(span, text),)


def _declared(span: Span | None) -> tuple[Label, ...]:
    return _at(span, "declared here")


def _meant(nearest: str | None) -> str | None:
    return None if nearest is None else f"Did you mean `{nearest}`?"


def _listed(names: Iterable[str]) -> str:
    names = list(names)
    shown = ", ".join(f"`{name}`" for name in names[:LISTED_MAX])
    return shown + (", …" if len(names) > LISTED_MAX else "")


def _a(word: str) -> str:
    return f"an {word}" if word[0] in "aeiou" else f"a {word}"


def _number(value: float) -> str:
    return f"{value:.6g}"


def _plural(count: int, word: str) -> str:
    return f"{count} {word}" if count == 1 else f"{count} {word}s"


# ---------------------------------------------------------------- files


def file_not_found(span: Span, name: str) -> Diagnostic:
    """A netlist, part or CSV file that is not there."""
    return _error("file-not-found", f"there is no file `{name}`", span, hint="Paths are relative to the file that names them.")


def file_unreadable(span: Span, name: str, reason: str) -> Diagnostic:
    """The system refuses to read it."""
    return _error("file-unreadable", f"`{name}` can't be read: {reason}", span)


def file_too_large(span: Span, name: str, size: int, most: int) -> Diagnostic:
    """Beyond the limit."""
    return _error("file-too-large", f"`{name}` has {size:,} bytes; at most {most:,} are read", span)


def not_utf8(span: Span, name: str, line: int, offset: int) -> Diagnostic:
    """Bytes that are no text."""
    return _error("not-utf8", f"`{name}` is not a UTF-8 text: byte {offset:,} in line {line:,} is no character", span, hint="Save it as UTF-8.")


def path_refused(span: Span, path: str, reason: str) -> Diagnostic:
    """Outside of what a netlist may read."""
    return _error(
        "path-refused", f"`{path}` is not read: {reason}", span, hint="A netlist reads its own folder, folders inside it, and installed parts."
    )


def use_ending(span: Span, path: str) -> Diagnostic:
    """`use "x.txt"`."""
    return _error("use-ending", f"`{path}` is no netlist's name: they end in `.pole`", span)


def use_circle(span: Span, chain: Sequence[str]) -> Diagnostic:
    """Files that use one another."""
    return _error("use-circle", f"these files use one another: {' → '.join(chain)}", span, hint="Move what both need into a third file.")


def too_many_files(span: Span, most: int) -> Diagnostic:
    """Beyond the limit."""
    return _error("too-many-files", f"more than {most} files are used", span)


def csv_unreadable(span: Span, path: str) -> Diagnostic:
    """No header or no rows."""
    return _error("csv-unreadable", f"`{path}` is no table: it needs a line of column names and lines of numbers divided by commas", span)


def csv_columns_needed(span: Span, path: str, header: Sequence[str]) -> Diagnostic:
    """More than two columns and none named."""
    return _error(
        "csv-column", f"`{path}` has the columns {_listed(header)}; two must be chosen", span, hint='Write `columns "x", "y"` behind the file.'
    )


def csv_no_column(span: Span, path: str, column: str, header: Sequence[str]) -> Diagnostic:
    """A column that is not there."""
    return _error("csv-column", f"`{path}` has no column `{column}`; it has {_listed(header)}", span)


def csv_not_number(span: Span, path: str, line: int, column: str) -> Diagnostic:
    """A cell that is no number."""
    return _error("csv-number", f"`{path}`, line {line}: column `{column}` holds no number", span)


# ---------------------------------------------------------------- limits


def too_large(span: Span, most: int) -> Diagnostic:
    """The circuit expands beyond the limit."""
    return _error("too-large", f"this circuit expands to more than {most:,} statements", span)


def each_too_many(span: Span, count: int, most: int) -> Diagnostic:
    """`each n in 1..10000000`."""
    return _error("too-large", f"this `each` makes {count:,} copies; a circuit may have {most:,} statements in all", span)


def nested_too_deep(span: Span, most: int) -> Diagnostic:
    """Assemblies inside assemblies."""
    return _error("nested-too-deep", f"assemblies are nested more than {most} deep", span)


def too_deep(span: Span, name: str) -> Diagnostic:
    """An expression that needs too many levels."""
    return _error("too-deep", f"`{name}` nests too deep to be worked out", span, hint="Name parts of it with `signal`.")


def recursive_assembly(span: Span, chain: Sequence[str], defined: Span) -> Diagnostic:
    """An assembly that holds itself."""
    labels = _at(defined, "the assembly")
    return _error("recursive-assembly", f"an assembly can't hold itself: {' → '.join(chain)}", span, labels=labels)


def recursive_function(span: Span, chain: Sequence[str]) -> Diagnostic:
    """A function that calls itself."""
    return _error("recursive-function", f"a function can't call itself: {' → '.join(chain)}", span)


def not_yet(span: Span, what: str) -> Diagnostic:
    """Part of the language that this version reads but does not do."""
    return _error("not-yet", f"{what} can't be used in this version yet", span)


# ---------------------------------------------------------------- declaring names


def declared_twice(span: Span, name: str, word: str, first_word: str, first: Span) -> Diagnostic:
    """Two things of one name in one scope."""
    headline = f"`{name}` is declared twice" if word == first_word else f"`{name}` can't be {_a(word)}: it is already {_a(first_word)}"
    return _error("declared-twice", headline, span, labels=_at(first, "first here"), hint="Each name stands for one thing in its file or assembly.")


def reserved_name(span: Span, name: str, meaning: str) -> Diagnostic:
    """`v i p time pi s z`."""
    return _error("reserved-name", f"`{name}` can't be declared: it is {meaning}", span, hint="Choose another name.")


def name_of_the_language(span: Span, name: str, word: str) -> Diagnostic:
    """A function named `sin`, an assembly named `pole`."""
    return _error("name-taken", f"`{name}` is {_a(word)} of the language and can't be declared", span, hint="Choose another name.")


def each_variable_taken(span: Span, name: str) -> Diagnostic:
    """`each n` inside `each n`."""
    return _error("each-variable", f"`{name}` already has a meaning here and can't count an `each`", span, hint="Choose another letter.")


def each_variable_declared(span: Span, name: str, word: str, declared: Span) -> Diagnostic:
    """`each n` beside `given n`."""
    return _error("each-variable", f"`{name}` counts this `each` and is {_a(word)} too", span, labels=_declared(declared))


def each_empty(span: Span, first: int, last: int) -> Diagnostic:
    """`each n in 3..1`."""
    return _warning("each-empty", f"this `each` makes no copy: {first}..{last} is empty", span)


def not_whole(span: Span, asked_by: str) -> Diagnostic:
    """`berth{0.5}`."""
    return _error("not-whole", f"{asked_by} needs a whole number from 0 on that does not vary", span)


def port_with_brace(span: Span) -> Diagnostic:
    """`assembly x(a{n})`."""
    return _error("port-name", "a port's name has no braces", span)


def near_name(span: Span, name: str, other: str, other_span: Span) -> Diagnostic:
    """A node used once, close to another."""
    return _warning(
        "near-name", f"the node `{name}` is used once and looks like `{other}`", span, labels=_at(other_span, "the other node"), hint=_meant(other)
    )


# ---------------------------------------------------------------- using names


def unknown_name(span: Span, name: str, nearest: str | None) -> Diagnostic:
    """A name that means nothing here."""
    return _error("unknown-name", f"nothing here is called `{name}`", span, hint=_meant(nearest), replace=nearest)


def outside_assembly(span: Span, name: str, word: str, declared: Span, assembly: str) -> Diagnostic:
    """An assembly that reaches out."""
    hint = (
        f"Make `{name}` a port of `{assembly}`."
        if word == "node"
        else f"Hand it in: `input {name}` in `{assembly}`, `{name} = {name}` where it is placed."
    )
    headline = f"the assembly `{assembly}` does not see the {word} `{name}` outside it"
    return _error("outside-assembly", headline, span, labels=_declared(declared), hint=hint)


def unknown_reading(
    span: Span, name: str, owner: str, word: str, readings: Sequence[str], members: Sequence[str], nearest: str | None, declared: Span
) -> Diagnostic:
    """`bus.q`."""
    known = [*readings, *members]
    hint = _meant(nearest)
    if hint is None and known:
        hint = f"It has {_listed(known)}."
    if word == "node" and name in ("i", "p"):
        hint = "A node carries no current of its own; read a path's, a box's or a port's."
    return _error("unknown-reading", f"the {word} `{owner}` has no `{name}`", span, labels=_declared(declared), hint=hint)


def reading_has_no_parts(span: Span, name: str) -> Diagnostic:
    """`line.i.a` of a single wire."""
    return _error("unknown-reading", f"`{name}` is one value and has no parts", span)


def port_current_unknown(span: Span, port: str, declared: Span) -> Diagnostic:
    """Two ports joined by a bare wire."""
    headline = f"the current into `{port}` can't be told: a bare wire inside joins it to another port"
    return _error("port-current", headline, span, labels=_declared(declared), hint="Give the wire a name, then it has a current: `link: a -- b`.")


def not_a_value(span: Span, name: str, word: str, readings: Sequence[str], declared: Span) -> Diagnostic:
    """`bus` where `bus.v` is meant."""
    hint = f"Write `{name}.{readings[0]}`." if readings else None
    if word in ("function", "table"):
        hint = f"Call it: `{name}(…)`."
    return _error("not-a-value", f"`{name}` is {_a(word)}, not a value", span, labels=_declared(declared), hint=hint)


def star_misplaced(span: Span) -> Diagnostic:
    """`{*}` where one thing is asked."""
    return _error(
        "star-misplaced", "`{*}` stands for many things; here one is asked for", span, hint="Use it in `sum(…)`, `min(…)`, `max(…)` or `keep`."
    )


def nothing_selected(span: Span) -> Diagnostic:
    """A selection that matches nothing."""
    return _error("nothing-selected", f"`{span.text}` selects nothing", span)


def own_name_outside(span: Span, name: str) -> Diagnostic:
    """`v` outside an equation box."""
    meaning = {"v": "voltage", "i": "current", "p": "power"}[name]
    hint = f"Write whose {meaning} it is: `bus.{name}`." if name == "v" else f"Write whose {meaning} it is: `feeder.{name}`."
    return _error("own-name", f"`{name}` alone is a box's own {meaning} and stands in an equation in that box", span, hint=hint)


def own_name_of_domain(span: Span, name: str, across: str, through: str) -> Diagnostic:
    """`v` in a box of a shaft."""
    return _error("own-name", f"this box has no `{name}`", span, hint=f"In this island a box's own values are `{across}` and `{through}`.")


def own_name_hides(span: Span, name: str, word: str, declared: Span) -> Diagnostic:
    """A signal named `speed` beside a rotation box that reads `speed`."""
    return _error("own-name", f"`{name}` could be the box's own or the {word}", span, labels=_declared(declared), hint=f"Rename the {word}.")


def filter_variable_outside(span: Span, name: str) -> Diagnostic:
    """`s` outside `filtered by`."""
    return _error("filter-letter", f"`{name}` is the variable of a filter and stands behind `filtered by`", span)


def function_reads_outside(span: Span, name: str, word: str, declared: Span | None) -> Diagnostic:
    """A function that reads a signal."""
    headline = f"a function sees its parameters, givens, tables and functions, not the {word} `{name}`"
    return _error("function-reads", headline, span, labels=_declared(declared), hint="Hand it in as a parameter.")


def unknown_function(span: Span, name: str, nearest: str | None) -> Diagnostic:
    """`sni(x)`."""
    return _error("unknown-function", f"there is no function `{name}`", span, hint=_meant(nearest), replace=nearest)


def not_a_function(span: Span, name: str, word: str) -> Diagnostic:
    """`bus(3)`."""
    return _error("unknown-function", f"`{name}` is {_a(word)} and can't be called", span)


def device_as_value(span: Span, name: str, in_box: bool) -> Diagnostic:
    """`signal x = diode(0.8 V)`."""
    hint = f"It stands in a box: `[{name}(…)]`." if in_box else f"It is placed: `name: {name}(…)`."
    return _error("device-as-value", f"`{name}` is a device, not a function", span, hint=hint)


def argument_count(span: Span, name: str, count: int, parameters: str, declared: Span | None) -> Diagnostic:
    """`atan2(y)`."""
    given = "none" if count == 0 else str(count)
    return _error("argument-count", f"`{name}` takes ({parameters}); {given} given", span, labels=_declared(declared))


def setting_in_function(span: Span, name: str) -> Diagnostic:
    """`sin(x = 3)`."""
    return _error("setting-in-function", f"`{name}` is a function: its arguments have no names", span)


def arguments_differ(span: Span, name: str, first_span: Span, first: Quality, span_b: Span, b: Quality) -> Diagnostic:
    """`max(5 V, 3 A)`."""
    labels = (Label(first_span, describe(first)), Label(span_b, describe(b)))
    return _error("unit-mismatch", f"the arguments of `{name}` must be of one kind, not {describe(first)} and {describe(b)}", span, labels=labels)


# ---------------------------------------------------------------- units


def unit_mismatch(span: Span, operator: str, left: Span, a: Quality, right: Span, b: Quality) -> Diagnostic:
    """`12 mohm + 3 uH`."""
    act = {"+": "added", "-": "subtracted"}.get(operator, "compared")
    labels = (Label(left, describe(a)), Label(right, describe(b)))
    return _error("unit-mismatch", f"{describe(a)} and {describe(b)} can't be {act}", span, labels=labels, hint=_missing_unit(a, b))


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
    labels = _at(place, f"this asks for {describe(wanted)}")
    return _error("unit-expected", f"{reason} asks for {describe(wanted)}, and this is {describe(found)}", span, labels=labels, hint=hint)


def turn_missing(span: Span, left: Span, a: Quality, right: Span, b: Quality) -> Diagnostic:
    """Hz against rad/s."""
    labels = (Label(left, describe(a)), Label(right, describe(b)))
    headline = "Hz and rad/s are not the same: a factor 2π is missing"
    return _error("turn-missing", headline, span, labels=labels, hint="1 Hz is one turn, 2π rad, per second: write `2*pi * 50 Hz`.")


def turn_expected(span: Span, found: Quality, wanted: Quality, reason: str, place: Span | None) -> Diagnostic:
    """A frequency asked, rad/s given."""
    headline = f"{reason} asks for {describe(wanted)}, and this is {describe(found)}: a factor 2π is missing"
    hint = "Divide it by `2*pi`." if wanted.spelling == "Hz" else "Multiply it by `2*pi`."
    return _error("turn-missing", headline, span, labels=_at(place, f"this asks for {describe(wanted)}"), hint=hint)


def condition_as_number(span: Span, asked_by: str) -> Diagnostic:
    """true + 1."""
    return _error("condition-as-number", f"{asked_by} asks for a number, and this is true or false", span, hint="Write `1 if … otherwise 0`.")


def number_as_condition(span: Span, found: Quality, asked_by: str) -> Diagnostic:
    """if 3."""
    headline = f"{asked_by} asks for a condition, and this is {describe(found)}"
    return _error("number-as-condition", headline, span, hint="Compare it: `… > 0`, or write `true` or `false`.")


def branches_differ(span: Span, left: Span, a: Quality, right: Span, b: Quality) -> Diagnostic:
    """5 V if c otherwise 3 A."""
    labels = (Label(left, describe(a)), Label(right, describe(b)))
    return _error("unit-mismatch", f"this is {describe(a)} or {describe(b)}; both sides of `otherwise` must be of one kind", span, labels=labels)


def sides_differ(span: Span, left: Span, a: Quality, right: Span, b: Quality) -> Diagnostic:
    """An equation whose sides have different units."""
    labels = (Label(left, describe(a)), Label(right, describe(b)))
    return _error("unit-mismatch", f"the sides of this equation differ: {describe(a)} and {describe(b)}", span, labels=labels)


def exponent_with_unit(span: Span, found: Quality) -> Diagnostic:
    """x ^ (2 V)."""
    return _error("exponent", f"an exponent is a plain number, and this is {describe(found)}", span)


def varying_exponent(span: Span, base: Span, of_base: Quality) -> Diagnostic:
    """(5 V) ^ n with n varying."""
    labels = _at(base, describe(of_base))
    headline = "with an exponent that varies, what is raised must be a plain number"
    return _error(
        "exponent", headline, span, labels=labels, hint=f"Divide by a value in {unit_text(of_base)} first: `(x / 1 {unit_text(of_base)})^n`."
    )


def exponent_too_large(span: Span, base: Span, of_base: Quality) -> Diagnostic:
    """(5 V)^100."""
    return _error("exponent", "this exponent gives a unit beyond all physics", span, labels=_at(base, describe(of_base)))


def joined_name(span: Span, unit: str, symbol: str, declared: Span | None) -> Diagnostic:
    """`50 Hz*T` with a given T."""
    headline = f"`{symbol}` in `{unit}` is a unit here, and it is also a name that is declared"
    hint = f"For arithmetic leave a blank before the operator; for the unit rename `{symbol}`."
    return _error("joined-name", headline, span, labels=_declared(declared), hint=hint)


def degrees_added(span: Span, right: Span) -> Diagnostic:
    """20 degC + 5 degC."""
    return _error(
        "degrees-added",
        "degC is a point on a scale that starts at -273.15; a difference is in K",
        right,
        labels=_at(span, "this adds"),
        hint="Write `5 K`.",
    )


def division_by_zero(span: Span) -> Diagnostic:
    """x / 0."""
    return _error("division-by-zero", "this divides by zero", span)


def list_as_value(span: Span) -> Diagnostic:
    """(1, 2, 3)."""
    return _error("list-as-value", "a list of values can't stand here", span)


def derivative_outside(span: Span) -> Diagnostic:
    """d/dt in a signal."""
    hint = "It stands in an equation in a box, or opens a state: `d/dt x = …`. For a slope write `x filtered by s / (1 + s * T)`."
    return _error("derivative-outside", "`d/dt` can't stand here", span, hint=hint)


def not_finite(span: Span, asked_by: str) -> Diagnostic:
    """1/0 in a given."""
    return _error("not-finite", f"{asked_by} must be a finite number", span)


def varying_value(span: Span, asked_by: str, leaf: str) -> Diagnostic:
    """A constant asked, something varying given."""
    return _error("varying-value", f"{asked_by} must not vary, and this reads `{leaf}`", span)


def varying_given(span: Span, given: str, leaf: str, declared: Span | None) -> Diagnostic:
    """`given` bound to a signal."""
    hint = "Declare it as `input` to hand in a value that varies."
    return _error("varying-given", f"{given} is fixed for a run, and this varies: it reads `{leaf}`", span, labels=_declared(declared), hint=hint)


# ---------------------------------------------------------------- values


def needs_itself(span: Span, word: str, chain: Sequence[str]) -> Diagnostic:
    """given a = b, given b = a."""
    return _error("needs-itself", f"this {word} needs itself: {' → '.join([*chain, chain[0]])}", span)


def algebraic_loop(span: Span, chain: Sequence[str]) -> Diagnostic:
    """Signals in a circle."""
    shown = [*chain[:LISTED_MAX], "…"] if len(chain) > LISTED_MAX else list(chain)
    hint = "Break the circle by a state or a delay, or write `solve … from …`."
    return _error("algebraic-loop", f"these need one another at the same time: {' → '.join([*shown, chain[0]])}", span, hint=hint)


def given_missing(span: Span, name: str, document: str | None, declared: Span) -> Diagnostic:
    """`given x in V` that nobody supplies."""
    meaning = f" ({document})" if document else ""
    labels = _declared(declared) if declared != span else ()
    return _error(
        "given-missing",
        f"the given `{name}`{meaning} has no value",
        span,
        labels=labels,
        hint=f"Supply it: `{name.rpartition('.')[2]} = …`, or from outside.",
    )


def input_missing(span: Span, name: str, document: str | None, declared: Span | None) -> Diagnostic:
    """An input without default that is not bound."""
    meaning = f" ({document})" if document else ""
    return _error(
        "input-missing",
        f"the input `{name}`{meaning} is not supplied",
        span,
        labels=_declared(declared),
        hint=f"Write `{name.rpartition('.')[2]} = …`.",
    )


def override_unreadable(span: Span, path: str, text: str) -> Diagnostic:
    """--given x=abc."""
    return _error(
        "override-value", f"`{text}` is no value for `{path}`", span, hint="Write a number with its unit, such as `200 uH`, or `true` or `false`."
    )


def unknown_given(span: Span, path: str, nearest: str | None, word: str | None) -> Diagnostic:
    """A value from outside for nothing."""
    if word is not None and word != "given":
        return _error("unknown-given", f"`{path}` is {_a(word)}, not a given", span, hint="Only givens take a value from outside.")
    return _error("unknown-given", f"there is no given `{path}`", span, hint=_meant(nearest))


def path_given_without_value(span: Span) -> Diagnostic:
    """`given berth2.L in H`."""
    return _error("path-given", "a given further inside can be given a value here, not declared", span, hint="Write `given berth2.L = …`.")


def tolerance_of_condition(span: Span, name: str) -> Diagnostic:
    """given x = true +- 5 %."""
    return _error("tolerance", f"`{name}` is true or false and has no tolerance", span)


def tolerance_negative(span: Span) -> Diagnostic:
    """+- -5 %."""
    return _error("tolerance", "a tolerance is a finite number from zero on", span)


def tolerance_without_unit(span: Span, text: str) -> Diagnostic:
    """given x = 5 V +- 20."""
    return _error("tolerance", "is this tolerance a share or a size?", span, hint=f"Write `{text} %` for a share, or the unit of the value.")


def bounds_swapped(span: Span, word: str) -> Diagnostic:
    """within 5 .. 1."""
    return _error("bounds-swapped", f"`{word}`: the lower end is above the upper end", span)


def nothing_to_solve(span: Span, name: str) -> Diagnostic:
    """solve x from 1 = 1."""
    return _error("nothing-to-solve", f"this equation does not depend on anything, `{name}` can't be found from it", span)


def time_not_positive(span: Span, asked_by: str, value: float, zero: bool) -> Diagnostic:
    """delayed by -1 s."""
    bound = "zero or above" if zero else "above zero"
    return _error("time-not-positive", f"{asked_by} asks for a time {bound}, and this is {_number(value)} s", span)


def frequency_not_positive(span: Span, asked_by: str, value: float) -> Diagnostic:
    """sampled at 0 Hz."""
    return _error("frequency-not-positive", f"{asked_by} asks for a frequency above zero, and this is {_number(value)} Hz", span)


# ---------------------------------------------------------------- filters and memory


def memory_refused(span: Span, words: str, reason: str) -> Diagnostic:
    """`filtered by` in a function."""
    return _error("memory-refused", f"`{words}` can't stand here: {reason}", span, hint="Give it a name with `signal` and read that.")


def not_rational(span: Span, letter: str) -> Diagnostic:
    """filtered by sin(s)."""
    return _error("filter-form", f"a filter is made of `{letter}` and constants by `+ - * / ^`", span)


def filter_exponent(span: Span) -> Diagnostic:
    """(1 + s)^0.5."""
    return _error("filter-form", "an exponent in a filter is a whole number", span)


def filter_order(span: Span) -> Diagnostic:
    """Order 100."""
    return _error("filter-order", "this filter's order is too high", span, hint="Write it as several filters, one behind the other.")


def improper_filter(span: Span, letter: str) -> Diagnostic:
    """filtered by s."""
    if letter == "z":
        return _error("filter-improper", "this filter needs values that are not there yet: its numerator has a higher power of `z`", span)
    hint = "Add a pole: `s / (1 + s * T)` with a short T."
    return _error("filter-improper", "this filter is a pure derivative at high frequency: its numerator has a higher power of `s`", span, hint=hint)


def samplers_in_circle(span: Span, others: Sequence[Span]) -> Diagnostic:
    """Sampled values that need one another."""
    labels = [Label(other, "and this") for other in others[:LISTED_MAX]]
    headline = "sampled values need one another at the same instant"
    return _error(
        "samplers-in-circle", headline, span, labels=labels, hint="Let one of them take the value of the period before: `filtered by z^-1 in z at …`."
    )


# ---------------------------------------------------------------- tables


def table_too_short(span: Span, name: str) -> Diagnostic:
    """One point."""
    return _error("table-points", f"the table `{name}` needs two points or more", span)


def table_order(span: Span, name: str, value: float, number: int) -> Diagnostic:
    """x not increasing."""
    return _error("table-points", f"the table `{name}` must rise from point to point; point {number} is at {_number(value)}", span)


def table_not_odd(span: Span, name: str) -> Diagnostic:
    """odd with points left of zero."""
    return _error("table-odd", f"the table `{name}` is `odd`: its points start at zero with the value zero, or right of zero", span)


def outside_table(span: Span, name: str, value: float, low: float, high: float, kind: Quality, declared: Span) -> Diagnostic:
    """A constant outside a closed table."""
    unit = f" {unit_text(kind)}" if unit_text(kind) else ""
    headline = f"the table `{name}` goes from {_number(low)} to {_number(high)}{unit}; this reads it at {_number(value)}{unit}"
    hint = "Write `hold`, `extend` or `repeat` behind the table to say how it goes on."
    return _error("outside-table", headline, span, labels=_declared(declared), hint=hint)


# ---------------------------------------------------------------- nodes, paths, boxes


def node_with_dot(span: Span, text: str) -> Diagnostic:
    """A path that ends on an inner node of an assembly."""
    return _error("node-inside", f"`{text}` is inside an assembly; a path can't end there", span, hint="Make it a port of the assembly.")


def not_a_node(span: Span, name: str, word: str, declared: Span) -> Diagnostic:
    """A path that ends on a signal."""
    return _error("not-a-node", f"a path needs a node here, and `{name}` is {_a(word)}", span, labels=_declared(declared))


def unconnected_on_path(span: Span) -> Diagnostic:
    """a --[1 ohm]-- unconnected."""
    return _error("unconnected", "`unconnected` stands for a terminal left open, in the brackets of a placement", span)


def reference_kind_unknown(span: Span, unit: str) -> Diagnostic:
    """reference x (ohm)."""
    hint = "`(rad/s)` is rotation, `(m/s)` translation, `(K)` heat; nothing is electrical."
    return _error("reference-kind", f"no kind of island is measured in `{unit}`", span, hint=hint)


def reference_is_port(span: Span, name: str, declared: Span) -> Diagnostic:
    """A port declared as reference inside its assembly."""
    return _error("reference-port", f"`{name}` is a port; whether it is a reference is said outside", span, labels=_declared(declared))


def kinds_joined(span: Span, kind_a: str, place_a: Span, kind_b: str, place_b: Span) -> Diagnostic:
    """A box between a shaft and a wire."""
    labels = (Label(place_a, f"{kind_a} from here"), Label(place_b, f"{kind_b} from here"))
    headline = f"this joins {_a(kind_a)} island with {_a(kind_b)} island"
    return _error(
        "kinds-joined", headline, span, labels=labels, hint="Couple them by equations that read the other side, as in `[emf: v = k * shaft.speed]`."
    )


_BOX_UNITS: Final = {
    "electrical": "ohm, S, H, F, V or A; W with `above` or `below`",
    "rotation": "rad/(N*m*s), N*m*s/rad, kg*m^2, rad/(N*m), rad/s or N*m",
    "translation": "m/s/N, N*s/m, kg, m/N, m/s or N",
    "heat": "K/W, W/K, J/K, K or W",
}


def box_unit(span: Span, found: Quality, domain: str) -> Diagnostic:
    """A box with a unit that is no element."""
    if found.dimension.is_none:
        hint = f"Is the unit missing? A box in this island has {_BOX_UNITS[domain]}."
    else:
        hint = f"A box in this island has {_BOX_UNITS[domain]}."
        if domain == "electrical":
            hint += " A shaft or a heat path needs a reference of its kind, such as `reference frame (rad/s)`."
    return _error("box-unit", f"no element is {describe(found)}", span, hint=hint)


def box_zero_without_unit(span: Span) -> Diagnostic:
    """[0]."""
    return _error("box-unit", "0 of what? In a box the unit says what it is", span)


def power_without_bound(span: Span) -> Diagnostic:
    """[20 kW]."""
    hint = f"Write `{span.text} above 300 V`: the lowest voltage at which it still draws that power."
    return _error("power-without-bound", "a constant power needs the voltage where it ends", span, hint=hint)


def power_box_in_heat(span: Span) -> Diagnostic:
    """[20 W above 5 K] in a heat island."""
    return _error("power-in-heat", "in a heat island a power flows through: it has no bound", span, hint=f"Write `[{span.text}]`.")


def power_bound_not_positive(span: Span, relation: str) -> Diagnostic:
    """above -5 V."""
    return _error("power-bound", f"the bound behind `{relation}` must be above zero", span)


def power_relation(span: Span, relation: str, value: float) -> Diagnostic:
    """-5 kW above 300 V."""
    if relation == "above":
        return _error(
            "power-relation", "a negative power delivers; it is bounded `below` its highest voltage", span, hint="Write `below` and that voltage."
        )
    return _error(
        "power-relation", "a positive power is a load; it is bounded `above` its lowest voltage", span, hint="Write `above`, or a negative power."
    )


def storage_not_positive(span: Span, found: Quality, value: float) -> Diagnostic:
    """[-5 uH]."""
    return _error("not-positive", f"{describe(found)} must be above zero", span)


def no_resistance(span: Span) -> Diagnostic:
    """[0 ohm]."""
    return _error(
        "not-positive", "a resistance of zero is a bare wire", span, hint="Write `a -- b`; with a name, `link: a -- b`, its current can be read."
    )


def spring_by_stiffness(span: Span, unit: str) -> Diagnostic:
    """[100 N*m/rad]."""
    hint = "A spring is written by its compliance, `0.01 rad/N/m`; a constant torque in `N*m`."
    return _error("spring", f"`{unit}` has the dimension of a torque, and would be read as one", span, hint=hint)


def nothing_stored(span: Span, box: Span) -> Diagnostic:
    """[5 ohm initially 3 V]."""
    return _error("nothing-stored", "`initially` belongs to what stores: nothing in this box does", span, labels=_at(box, "the box"))


def stored_of_varying(span: Span, found: Quality, direct: Quality) -> Diagnostic:
    """A flux as start of a varying inductor."""
    headline = f"with a value that varies, {describe(found)} does not tell the start"
    return _error("initially-kind", headline, span, hint=f"Give {describe(direct)} instead.")


def equation_without_own(span: Span, across: str, through: str) -> Diagnostic:
    """[bus.v = 400 V]."""
    return _error(
        "equation-own",
        f"this equation does not hold the box's own `{across}` or `{through}`",
        span,
        hint="For any other equation write `solve … from …`.",
    )


# ---------------------------------------------------------------- placements and settings


def unknown_kind(span: Span, name: str, nearest: str | None, word: str | None) -> Diagnostic:
    """x: pol(a, b)."""
    if word is not None:
        return _error("unknown-kind", f"`{name}` is {_a(word)} and can't be placed", span, hint=_meant(nearest))
    return _error("unknown-kind", f"there is no assembly, device or control block `{name}`", span, hint=_meant(nearest), replace=nearest)


def device_belongs_in_box(span: Span, kind: str, name: str) -> Diagnostic:
    """d1: diode(a, b)."""
    return _error("device-in-box", f"`{kind}` has two terminals and stands in a box", span, hint=f"Write `{name}: a --[{kind}(…)]-- b`.")


def device_not_electrical(span: Span, kind: str, domain: str) -> Diagnostic:
    """A diode in a heat island."""
    return _error("device-domain", f"`{kind}` is electrical and can't stand in {_a(domain)} island", span)


def terminals_missing(span: Span, kind: str, terminals: Sequence[str], missing: Sequence[str]) -> Diagnostic:
    """pole(a, b)."""
    hint = f"Its terminals are {_listed(terminals)}; one left open on purpose is `unconnected`."
    return _error("terminals-missing", f"`{kind}` has no node for {_listed(missing)}", span, hint=hint)


def terminal_twice(span: Span, terminal: str, first: Span) -> Diagnostic:
    """pole(a, b, c, top = d)."""
    return _error("terminal-twice", f"the terminal `{terminal}` has two nodes", span, labels=_at(first, "first here"))


def terminal_needs_node(span: Span, terminal: str, kind: str) -> Diagnostic:
    """pole(5 V, b, c)."""
    return _error("terminal-node", f"the terminal `{terminal}` of `{kind}` needs a node", span)


def too_many_arguments(span: Span, kind: str, terminals: Sequence[str], count: int) -> Diagnostic:
    """berth(a, b, c, d)."""
    return _error(
        "too-many-arguments",
        f"`{kind}` has {_plural(len(terminals), 'terminal')}: {_listed(terminals)}; {count} given",
        span,
        hint="Settings have names: `name = value`.",
    )


def too_many_settings(span: Span, kind: str, names: Sequence[str]) -> Diagnostic:
    """diode(1 V, 2 mohm, 3)."""
    takes = f"takes {_listed(names)} in this order" if names else "takes no value without a name"
    return _error("too-many-arguments", f"`{kind}` {takes}; this is one too many", span, hint="Others by name: `name = value`.")


def unknown_setting(span: Span, name: str, kind: str, nearest: str | None, known: Sequence[str], word: str | None) -> Diagnostic:
    """berth(…, setpiont = 5 V)."""
    hint = _meant(nearest)
    if hint is None and known:
        hint = f"It has {_listed(known)}."
    if word is not None:
        return _error(
            "unknown-setting", f"`{name}` is {_a(word)} inside `{kind}` and can't be set from outside", span, hint="Make it a `given` or an `input`."
        )
    return _error("unknown-setting", f"`{kind}` has no setting `{name}`", span, hint=hint, replace=nearest)


def setting_missing(span: Span, kind: str, name: str, document: str) -> Diagnostic:
    """pole without rate."""
    meaning = f" ({document})" if document else ""
    return _error("setting-missing", f"`{kind}` needs `{name} = …`{meaning}", span)


def setting_twice(span: Span, name: str, first: Span) -> Diagnostic:
    """By position and by name."""
    return _error("setting-twice", f"`{name}` is set twice", span, labels=_at(first, "first here"))


def settings_contradict(span: Span, sentence: str, hint: str) -> Diagnostic:
    """What a device's own check found."""
    return _error("settings-contradict", sentence, span, hint=hint[:1].upper() + hint[1:] + ("" if hint.endswith(".") else "."))


def start_varies(span: Span, name: str) -> Diagnostic:
    """breaker(bus.v > 5 V)."""
    hint = "Let an event change it: `whenever …: close …`. A contact that follows a condition is `switch(on = …)`."
    return _error("varying-value", f"the start of `{name}` must not vary", span, hint=hint)


def word_wanted(span: Span, setting: str, kind: str, words: Sequence[str], nearest: str | None) -> Diagnostic:
    """conduction = always."""
    return _error("word-wanted", f"`{setting}` of `{kind}` is one of {_listed(words)}", span, hint=_meant(nearest), replace=nearest)


def part_wanted(span: Span, setting: str, kind: str, parts: Sequence[str], nearest: str | None) -> Diagnostic:
    """upper = 5."""
    shown = ", ".join(f"`{part}(…)`" for part in parts)
    return _error("part-wanted", f"`{setting}` of `{kind}` is one of {shown}", span, hint=_meant(nearest))


def part_without_brackets(span: Span, part: str) -> Diagnostic:
    """upper = transistor."""
    return _error("part-wanted", f"`{part}` needs its brackets", span, hint=f"Write `{part}()` for an ideal one.", replace=f"{part}()")


def inductor_wanted(span: Span, setting: str, word: str | None) -> Diagnostic:
    """choke = 5."""
    found = "" if word is None else f", and this is {_a(word)}"
    return _error("inductor-wanted", f"`{setting}` asks for the name of an inductor's box, or a list of them{found}", span)


def block_argument(span: Span, kind: str, count: int, settings: Sequence[str]) -> Diagnostic:
    """pi_control()."""
    return _error(
        "block-argument",
        f"`{kind}` takes one input; {'none' if count == 0 else count} given",
        span,
        hint=f"Settings have names: {_listed(settings)}.",
    )


def pi_gains_differ(span: Span, ki: Quality, kp_span: Span, kp: Quality) -> Diagnostic:
    """ki not kp per second."""
    labels = _at(kp_span, describe(kp))
    headline = f"`ki` must be `kp` per second, and it is {describe(ki)}"
    return _error("pi-gains", headline, span, labels=labels, hint="`kp * err` and the integral of `ki * err` are added.")


# ---------------------------------------------------------------- events


def set_twice(span: Span, name: str, first: Span) -> Diagnostic:
    """Two values for one target."""
    return _error("set-twice", f"`{name}` is set twice in one event", span, labels=_at(first, "first here"))


def not_settable(span: Span, name: str, word: str, declared: Span, hint: str | None) -> Diagnostic:
    """set of a signal."""
    return _error("not-settable", f"`{name}` is {_a(word)}; events set latches, states and `closed`", span, labels=_declared(declared), hint=hint)


def nothing_to_switch(span: Span, word: str, name: str, thing: str, declared: Span) -> Diagnostic:
    """open of a resistor."""
    hint = "Name the breaker's box: `open feeder.k`."
    return _error("nothing-to-switch", f"there is nothing to {word} in the {thing} `{name}`", span, labels=_declared(declared), hint=hint)


def threshold_unit(span: Span, found: Quality, watched: Span, wanted: Quality, edge: str) -> Diagnostic:
    """bus.v rises above 5 A."""
    labels = _at(watched, describe(wanted))
    return _error("unit-mismatch", f"`{edge}` compares {describe(wanted)} with {describe(found)}", span, labels=labels)


def condition_never_changes(span: Span, value: bool) -> Diagnostic:
    """whenever true."""
    return _warning("condition-constant", f"this condition is always {'true' if value else 'false'}; the event is left out", span)


def sequence_empty(span: Span, name: str) -> Diagnostic:
    """No steps."""
    return _error("sequence-empty", f"the sequence `{name}` has no steps", span)


def no_next_step(span: Span, step: str, sequence: str) -> Diagnostic:
    """until in the last step."""
    return _error(
        "sequence-end",
        f"`{step}` is the last step of `{sequence}`; its `until` leads nowhere",
        span,
        hint="Leave `until` out, or add a step behind it.",
    )


def unknown_step(span: Span, name: str, sequence: str, nearest: str | None) -> Diagnostic:
    """else to a step that is not there."""
    return _error("unknown-step", f"the sequence `{sequence}` has no step `{name}`", span, hint=_meant(nearest))


# ---------------------------------------------------------------- studies


def unknown_study(span: Span, name: str, nearest: str | None) -> Diagnostic:
    """start from a study that is not there."""
    return _error("unknown-study", f"there is no study `{name}`", span, hint=_meant(nearest))


def study_from_itself(span: Span, name: str) -> Diagnostic:
    """start from in a circle."""
    return _error("study-circle", f"the study `{name}` starts, in the end, from itself", span)


def study_without_run(span: Span, name: str) -> Diagnostic:
    """Requirements and no time."""
    return _error("study-run", f"the study `{name}` does not say how long it runs", span, hint="Write `run for 100 ms`.")


def event_after_end(span: Span, time_s: float, end_s: float, study: str) -> Diagnostic:
    """at 5 s in a run of 1 s."""
    return _warning("after-end", f"`{study}` runs for {_number(end_s)} s; nothing happens at {_number(time_s)} s any more", span)


def window_after_end(span: Span, start_s: float, end_s: float, study: str) -> Diagnostic:
    """require … after 5 s in a run of 1 s."""
    return _error("after-end", f"`{study}` runs for {_number(end_s)} s; a window from {_number(start_s)} s on is empty", span)


def tolerance_range(span: Span, tightest: float, loosest: float) -> Diagnostic:
    """tolerance 5."""
    return _error("tolerance-range", f"a tolerance is relative, between {_number(tightest)} and {_number(loosest)}", span)


def requirement_without_bound(span: Span, subject: Span) -> Diagnostic:
    """require bus.v."""
    hint = f"Write `{subject.text} within … .. …`, `above …` or `below …`."
    return _error("requirement-bound", "a requirement on a number needs its bound", span, hint=hint)


def condition_with_bound(span: Span, relation: str) -> Diagnostic:
    """require a > b above 5."""
    return _error(
        "requirement-bound",
        f"this is true or false; `{relation}` asks for a number",
        span,
        hint="Leave the bound out: the condition itself must hold.",
    )


def unknown_measure(span: Span, name: str, nearest: str | None, known: Sequence[str]) -> Diagnostic:
    """require setling_time(…)."""
    return _error("unknown-measure", f"there is no measure or function `{name}`", span, hint=_meant(nearest) or f"Measures are {', '.join(known)}.")


def band_not_positive(span: Span, name: str, measure: str) -> Diagnostic:
    """settling_time(x, 0 %)."""
    return _error("measure-setting", f"`{name}` of `{measure}` must be above zero", span)
