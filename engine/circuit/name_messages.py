"""What is wrong with names, in words: one function per error, facts in, Diagnostic out."""

from __future__ import annotations

from collections.abc import Sequence

from polewise.circuit.dimensions import Quality, describe
from polewise.circuit.message_form import article, at, declared_at, error, listed, meant, warning
from polewise.grammar.diagnostics import Diagnostic, Label
from polewise.grammar.source import Span

# ---------------------------------------------------------------- declaring names


def declared_twice(span: Span, name: str, word: str, first_word: str, first: Span) -> Diagnostic:
    """Two things of one name in one scope."""
    headline = f"`{name}` is declared twice" if word == first_word else f"`{name}` can't be {article(word)}: it is already {article(first_word)}"
    return error("declared-twice", headline, span, labels=at(first, "first here"), hint="Each name stands for one thing in its file or assembly.")


def reserved_name(span: Span, name: str, meaning: str) -> Diagnostic:
    """`v i p time pi s z`."""
    return error("reserved-name", f"`{name}` can't be declared: it is {meaning}", span, hint="Choose another name.")


def name_of_the_language(span: Span, name: str, word: str) -> Diagnostic:
    """A function named `sin`, an assembly named `pole`."""
    return error("name-taken", f"`{name}` is {article(word)} of the language and can't be declared", span, hint="Choose another name.")


def each_variable_taken(span: Span, name: str) -> Diagnostic:
    """`each n` inside `each n`."""
    return error("each-variable", f"`{name}` already has a meaning here and can't count an `each`", span, hint="Choose another letter.")


def each_variable_declared(span: Span, name: str, word: str, declared: Span) -> Diagnostic:
    """`each n` beside `given n`."""
    return error("each-variable", f"`{name}` counts this `each` and is {article(word)} too", span, labels=declared_at(declared))


def each_empty(span: Span, first: int, last: int) -> Diagnostic:
    """`each n in 3..1`."""
    return warning("each-empty", f"this `each` makes no copy: {first}..{last} is empty", span)


def not_whole(span: Span, asked_by: str) -> Diagnostic:
    """`berth{0.5}`."""
    return error("not-whole", f"{asked_by} needs a whole number from 0 on that does not vary", span)


def port_with_brace(span: Span) -> Diagnostic:
    """`assembly x(a{n})`."""
    return error("port-name", "a port's name has no braces", span)


def near_name(span: Span, name: str, other: str, other_span: Span) -> Diagnostic:
    """A node used once, close to another."""
    return warning(
        "near-name", f"the node `{name}` is used once and looks like `{other}`", span, labels=at(other_span, "the other node"), hint=meant(other)
    )


# ---------------------------------------------------------------- using names


def unknown_name(span: Span, name: str, nearest: str | None) -> Diagnostic:
    """A name that means nothing here."""
    return error("unknown-name", f"nothing here is called `{name}`", span, hint=meant(nearest), replace=nearest)


def outside_assembly(span: Span, name: str, word: str, declared: Span, assembly: str) -> Diagnostic:
    """An assembly that reaches out."""
    hint = (
        f"Make `{name}` a port of `{assembly}`."
        if word == "node"
        else f"Hand it in: `input {name}` in `{assembly}`, `{name} = {name}` where it is placed."
    )
    headline = f"the assembly `{assembly}` does not see the {word} `{name}` outside it"
    return error("outside-assembly", headline, span, labels=declared_at(declared), hint=hint)


def unknown_reading(
    span: Span, name: str, owner: str, word: str, readings: Sequence[str], members: Sequence[str], nearest: str | None, declared: Span
) -> Diagnostic:
    """`bus.q`."""
    known = [*readings, *members]
    hint = meant(nearest)
    if hint is None and known:
        hint = f"It has {listed(known)}."
    if word == "node" and name in ("i", "p"):
        hint = "A node carries no current of its own; read a path's, a box's or a port's."
    return error("unknown-reading", f"the {word} `{owner}` has no `{name}`", span, labels=declared_at(declared), hint=hint)


def reading_has_no_parts(span: Span, name: str) -> Diagnostic:
    """`line.i.a` of a single wire."""
    return error("unknown-reading", f"`{name}` is one value and has no parts", span)


def port_current_unknown(span: Span, port: str, declared: Span) -> Diagnostic:
    """Two ports joined by a bare wire."""
    headline = f"the current into `{port}` can't be told: a bare wire inside joins it to another port"
    return error("port-current", headline, span, labels=declared_at(declared), hint="Give the wire a name, then it has a current: `link: a -- b`.")


def not_a_value(span: Span, name: str, word: str, readings: Sequence[str], declared: Span) -> Diagnostic:
    """`bus` where `bus.v` is meant."""
    shown = [f"`{name}.{reading}`" for reading in readings[:3]]
    hint = None if not shown else f"Write {shown[0]}." if len(shown) == 1 else f"Write {', '.join(shown[:-1])} or {shown[-1]}."
    if word in ("function", "table"):
        hint = f"Call it: `{name}(…)`."
    return error("not-a-value", f"`{name}` is {article(word)}, not a value", span, labels=declared_at(declared), hint=hint)


def star_misplaced(span: Span) -> Diagnostic:
    """`{*}` where one thing is asked."""
    return error(
        "star-misplaced", "`{*}` stands for many things; here one is asked for", span, hint="Use it in `sum(…)`, `min(…)`, `max(…)` or `keep`."
    )


def nothing_selected(span: Span) -> Diagnostic:
    """A selection that matches nothing."""
    return error("nothing-selected", f"`{span.text}` selects nothing", span)


def own_name_outside(span: Span, name: str) -> Diagnostic:
    """`v` outside an equation box."""
    meaning = {"v": "voltage", "i": "current", "p": "power"}[name]
    hint = f"Write whose {meaning} it is: `bus.{name}`." if name == "v" else f"Write whose {meaning} it is: `feeder.{name}`."
    return error("own-name", f"`{name}` alone is a box's own {meaning} and stands in an equation in that box", span, hint=hint)


def own_name_of_domain(span: Span, name: str, across: str, through: str) -> Diagnostic:
    """`v` in a box of a shaft."""
    return error("own-name", f"this box has no `{name}`", span, hint=f"In this island a box's own values are `{across}` and `{through}`.")


def own_name_hides(span: Span, name: str, word: str, declared: Span) -> Diagnostic:
    """A signal named `speed` beside a rotation box that reads `speed`."""
    return error("own-name", f"`{name}` could be the box's own or the {word}", span, labels=declared_at(declared), hint=f"Rename the {word}.")


def filter_variable_outside(span: Span, name: str) -> Diagnostic:
    """`s` outside `filtered by`."""
    return error("filter-letter", f"`{name}` is the variable of a filter and stands behind `filtered by`", span)


def function_reads_outside(span: Span, name: str, word: str, declared: Span | None) -> Diagnostic:
    """A function that reads a signal."""
    headline = f"a function sees its parameters, givens, tables and functions, not the {word} `{name}`"
    return error("function-reads", headline, span, labels=declared_at(declared), hint="Hand it in as a parameter.")


def unknown_function(span: Span, name: str, nearest: str | None) -> Diagnostic:
    """`sni(x)`."""
    return error("unknown-function", f"there is no function `{name}`", span, hint=meant(nearest), replace=nearest)


def not_a_function(span: Span, name: str, word: str) -> Diagnostic:
    """`bus(3)`."""
    return error("unknown-function", f"`{name}` is {article(word)} and can't be called", span)


def device_as_value(span: Span, name: str, in_box: bool) -> Diagnostic:
    """`signal x = diode(0.8 V)`."""
    hint = f"It stands in a box: `[{name}(…)]`." if in_box else f"It is placed: `name: {name}(…)`."
    return error("device-as-value", f"`{name}` is a device, not a function", span, hint=hint)


def argument_count(span: Span, name: str, count: int, parameters: str, declared: Span | None) -> Diagnostic:
    """`atan2(y)`."""
    given = "none" if count == 0 else str(count)
    return error("argument-count", f"`{name}` takes ({parameters}); {given} given", span, labels=declared_at(declared))


def setting_in_function(span: Span, name: str) -> Diagnostic:
    """`sin(x = 3)`."""
    return error("setting-in-function", f"`{name}` is a function: its arguments have no names", span)


def arguments_differ(span: Span, name: str, first_span: Span, first: Quality, span_b: Span, b: Quality) -> Diagnostic:
    """`max(5 V, 3 A)`."""
    labels = (Label(first_span, describe(first)), Label(span_b, describe(b)))
    return error("unit-mismatch", f"the arguments of `{name}` must be of one kind, not {describe(first)} and {describe(b)}", span, labels=labels)
