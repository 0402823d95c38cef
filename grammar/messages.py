"""One function per error in the text: facts in, Diagnostic out. Every headline, hint and code of the text stage is here."""

from __future__ import annotations

from dataclasses import replace

from polewise.grammar.diagnostics import Diagnostic, Edit, Label, Severity
from polewise.grammar.source import Span

# Codes that other text-stage code asks for.
BLOCK_NOT_CLOSED = "missing-brace"
MISPLACED = "statement-place"


def _error(code: str, headline: str, span: Span, *, labels: tuple[Label, ...] = (), hint: str | None = None, mended: str | None = None) -> Diagnostic:
    edit = None if mended is None else Edit(span, mended)
    return Diagnostic(code, Severity.ERROR, headline, span, labels, hint, edit)


# ---------------------------------------------------------------- limits


def text_too_long(span: Span, characters: int, most: int) -> Diagnostic:
    """The whole text is over the limit."""
    return _error("text-too-long", f"this text has {characters:,} characters; a netlist may have {most:,}", span, hint="Split it with `use`.")


def not_text(span: Span) -> Diagnostic:
    """Control bytes or undecodable bytes."""
    return _error("not-text", "this file is not a text: it holds characters that no text has", span)


def too_many_tokens(span: Span, most: int) -> Diagnostic:
    """More words and marks than a netlist may have."""
    return _error("text-too-long", f"this text has more than {most:,} words and marks", span, hint="Split it with `use`.")


def statement_too_long(span: Span, most: int) -> Diagnostic:
    """One statement with more words and marks than any sensible one."""
    hint = "Long tables are read `from` a CSV file; elsewhere a bracket may be left open."
    return _error("statement-too-long", f"this statement has more than {most:,} words and marks", span, hint=hint)


def too_many_errors(span: Span) -> Diagnostic:
    """The rest of the errors is left out."""
    return _error("too-many-errors", "too many errors; reading stopped here", span)


def too_deep(span: Span, most: int) -> Diagnostic:
    """Brackets, braces or an expression nest too deep."""
    return _error("too-deep", f"nested too deep: at most {most} levels are read", span, hint="Name a part of it with `signal` or `given`.")


# ---------------------------------------------------------------- characters, numbers, units


def unknown_character(span: Span, found: str, meant: str | None, *, in_name: bool) -> Diagnostic:
    """A character that the language has no use for outside strings and comments."""
    if meant is not None:
        return _error("unknown-character", f"`{found}` is no mark of the language", span, hint=f"Write `{meant}`.", mended=meant)
    if in_name:
        return _error("unknown-character", f"`{found}` can't stand in a name", span, hint="Names have the letters a to z and A to Z, digits and `_`.")
    return _error("unknown-character", f"`{found}` is no mark of the language", span)


def unterminated_string(span: Span) -> Diagnostic:
    """A string without its closing quote."""
    return _error("unterminated-string", 'this string has no closing `"` on its line', span, hint='Strings stand on one line: `"…"`.')


def wrong_quotes(span: Span, content: str) -> Diagnostic:
    """`'text'`."""
    return _error("wrong-quotes", 'a text stands in straight double quotes `"`', span, mended=f'"{content}"')


def bare_decimal(span: Span, better: str) -> Diagnostic:
    """`.5` or `5.`."""
    return _error("bare-decimal", "a decimal point needs digits on both sides", span, hint=f"Write `{better}`.", mended=better)


def number_too_large(span: Span) -> Diagnostic:
    """1e999."""
    return _error("number-too-large", "this number is too large to compute with", span)


def unknown_unit(span: Span, name: str, nearest: str | None, number: Span | None) -> Diagnostic:
    """A word behind a number, or behind `in`, that is no unit."""
    if nearest is not None:
        return _error("unknown-unit", f"`{name}` is not a known unit", span, hint=f"Did you mean `{nearest}`?", mended=nearest)
    hint = None if number is None else f"For a product write `{number.text} * {name}`."
    return _error("unknown-unit", f"`{name}` is not a known unit", span, hint=hint)


def star_after_slash(span: Span, symbol: str) -> Diagnostic:
    """`V/s*m`."""
    return _error(
        "unit-order", f"in the unit `{symbol}` a `*` follows a `/`, which can be read in two ways", span, hint="Write the products first: `A*s/rad`."
    )


def degrees_joined(span: Span, symbol: str) -> Diagnostic:
    """`W/degC`."""
    return _error("unit-degrees", f"`{symbol}`: degC stands only alone, on a plain number", span, hint="Differences of temperature are in K.")


# ---------------------------------------------------------------- found while a node is built


def _nearest(nearest: str | None) -> str | None:
    return None if nearest is None else f"Did you mean `{nearest}`?"


def reserved_name(span: Span, name: str, meaning: str) -> Diagnostic:
    """A declaration of `v i p time pi s z`."""
    return _error("reserved-name", f"`{name}` can't be declared: it is {meaning}", span, hint="Choose another name.")


def twice(span: Span, word: str) -> Diagnostic:
    """`initially` twice behind one state."""
    return _error("said-twice", f"`{word}` stands twice in one statement", span)


def name_twice(span: Span, name: str, first: Span) -> Diagnostic:
    """A parameter, port or wire named twice."""
    return _error("name-twice", f"`{name}` stands twice in this list", span, labels=(Label(first, "first here"),))


def setting_twice(span: Span, name: str, first: Span) -> Diagnostic:
    """A setting given twice in one pair of brackets."""
    return _error("setting-twice", f"`{name}` is set twice", span, labels=(Label(first, "first here"),))


def argument_after_setting(span: Span, setting: str) -> Diagnostic:
    """`pole(duty = d, a, b)`."""
    return _error("argument-order", f"a plain argument stands after the setting `{setting} = …`", span, hint="Settings come last.")


def table_word_unknown(span: Span, word: str, nearest: str | None) -> Diagnostic:
    """A word behind a table's points that says nothing about it."""
    hint = _nearest(nearest) or "Behind a table stand `smooth`, `odd`, and one of `hold`, `extend`, `repeat`."
    return _error("table-word", f"`{word}` says nothing about a table", span, hint=hint, mended=nearest)


def table_word_again(span: Span, word: str, outside: str | None) -> Diagnostic:
    """`hold extend`, or `smooth smooth`."""
    if outside is None or word in ("smooth", "odd"):
        return _error("table-word", f"`{word}` stands twice behind this table", span)
    return _error("table-word", f"`{word}` contradicts `{outside}`: a table goes on outside its points in one way", span)


def not_inside(span: Span, word: str, place: str) -> Diagnostic:
    """A title, use, study or assembly inside an assembly or each."""
    return _error("statement-place", f"`{word}` can't stand inside {place}", span, hint="Is a `}` missing above this line?")


def path_ends_in_box(span: Span) -> Diagnostic:
    """A path whose last item is a box."""
    return _error("path-end", "this path ends in a box; it must end at a node", span, hint="Go on with `-- node`.")


def filter_variable(span: Span, name: str) -> Diagnostic:
    """`filtered by … in q at f`."""
    return _error("filter-variable", f"a sampled filter is written in `z`, not in `{name}`", span, mended="z")


def step_twice(span: Span, name: str, first: Span) -> Diagnostic:
    """Two steps of one name in a sequence."""
    return _error("name-twice", f"this sequence has two steps named `{name}`", span, labels=(Label(first, "first here"),))


def else_without_until(span: Span) -> Diagnostic:
    """`step x { } else y after T` without until."""
    return _error("step-else", "`else` needs an `until` before it: it says where to go when that takes too long", span)


def else_without_after(span: Span, name: str) -> Diagnostic:
    """`else fault` without its time."""
    return _error("step-else", f"`else {name}` needs a time", span, hint=f"Write `else {name} after 2 s`.")


def order_twice(span: Span, word: str, first: Span) -> Diagnostic:
    """`start`, `run for`, `tolerance` or `sampling` twice in a study."""
    return _error("order-twice", f"this study says `{word}` twice", span, labels=(Label(first, "first here"),))


def start_unknown(span: Span, word: str, nearest: str | None) -> Diagnostic:
    """`start warm`."""
    hint = _nearest(nearest) or "Write `start settled`, `start cold` or `start from STUDY at T`."
    return _error("start-unknown", f"a study can't start `{word}`", span, hint=hint, mended=nearest)


def sampling_unknown(span: Span, word: str, nearest: str | None) -> Diagnostic:
    """`sampling = fast`."""
    hint = _nearest(nearest) or "Write `sampling = exact` or `sampling = mean`."
    return _error("sampling-unknown", f"sampling can't be `{word}`", span, hint=hint, mended=nearest)


def dotted_name(span: Span) -> Diagnostic:
    """`bus.a: …`."""
    return _error(
        "dotted-name", "a thing's own name has no dot", span, hint="Names with dots are made by assemblies and paths, for what is inside them."
    )


def joined_name(span: Span, unit: str, name: str, better: str) -> Diagnostic:
    """`5 V/m` where `m` is a declared value: a unit or a quotient?"""
    headline = f"`{name}` is a unit here, yet this file also declares a value `{name}`"
    return _error("joined-name", headline, span, hint=f"For arithmetic put a blank before the operator: `{better}`; else rename the value.")


def filter_slash(span: Span, better: str) -> Diagnostic:
    """`filtered by 1/s`."""
    headline = "without blanks this is a number with the unit `/s`, not a division by the filter's variable `s`"
    return _error("joined-name", headline, span, hint=f"Write `{better}`.", mended=better)


# ---------------------------------------------------------------- brackets, braces, ends


def missing_bracket(opening: Span, closing: str, end: Span) -> Diagnostic:
    """`[` or `(` that is never closed."""
    return _error("missing-bracket", f"`{opening.text}` is never closed", opening, labels=(Label(end, f"`{closing}` is missing here at the latest"),))


def wrong_bracket(span: Span, opening: Span, closing: str) -> Diagnostic:
    """`( … ]`."""
    headline = f"`{opening.text}` is closed by `{span.text}`"
    return _error("wrong-bracket", headline, span, labels=(Label(opening, "opened here"),), hint=f"Write `{closing}`.", mended=closing)


def extra_bracket(span: Span) -> Diagnostic:
    """`)` or `]` without its partner."""
    return _error("extra-bracket", f"`{span.text}` closes nothing", span)


def missing_index_end(opening: Span) -> Diagnostic:
    """`cell{n`."""
    return _error("missing-brace", "the brace in this name is never closed", opening)


def missing_brace(opening: Span, what: str, end: Span) -> Diagnostic:
    """The text ends inside a block."""
    return _error(
        "missing-brace", f"the block of `{what}` is never closed", opening, labels=(Label(end, "the text ends here"),), hint="Add the missing `}`."
    )


def closes_too_late(missing: Diagnostic, first_outside: Span) -> Diagnostic:
    """The same, where a line shows how far the block can reach at most."""
    return replace(missing, labels=(Label(first_outside, "a `}` is missing before this line"),))


def missing_block(span: Span, what: str) -> Diagnostic:
    """`study x` without its brace."""
    return _error("missing-block", f"`{what}` needs a block", span, hint="Its `{` stands at the end of the same line.")


def extra_brace(span: Span) -> Diagnostic:
    """A `}` that closes no block."""
    return _error("extra-brace", "this `}` closes no block", span)


def block_touches(span: Span, name: str) -> Diagnostic:
    """`study x{ …`."""
    return _error("brace-blank", "a brace that touches a name is read as its index", span, hint=f"For a block put a blank before it: `{name} {{`.")


def index_apart(span: Span, name: str) -> Diagnostic:
    """`berth {n}`."""
    return _error("brace-blank", f"the index of `{name}` must touch it", span, hint=f"Write `{name}{{…}}` without a blank.")


def block_place(span: Span) -> Diagnostic:
    """A `{` where no block can begin."""
    return _error("block-place", "a block can't begin here", span)


def empty_index(span: Span) -> Diagnostic:
    """`cell{}`."""
    return _error("empty-index", "this name's index is empty", span, hint="Write a whole number, an expression of one, or `*` to select all.")


# ---------------------------------------------------------------- paths and boxes


def path_end(span: Span) -> Diagnostic:
    """`a --` and nothing more."""
    return _error("path-end", "a node or a box is missing after `--`", span)


def path_start(span: Span) -> Diagnostic:
    """A line that begins with a box."""
    return _error("path-start", "a path starts at a node, not with a box", span, hint="Write `node --[…]-- node`.")


def missing_wire(span: Span) -> Diagnostic:
    """`a [12 ohm] b`."""
    return _error("missing-wire", f"a wire `--` is missing before `{span.text}`", span)


def wire_mark(span: Span) -> Diagnostic:
    """`a -[…]- b`."""
    return _error("wire-mark", "a wire is two hyphens without a blank between them", span, hint="Write `--`.")


def wire_place(span: Span) -> Diagnostic:
    """`a--b` in an expression."""
    return _error("wire-place", "`--` is a wire and can't stand in an expression", span, hint="For a double minus write `a - (-b)`.")


def wire_in_box(span: Span) -> Diagnostic:
    """`[a -- b]`."""
    return _error("wire-in-box", "a box holds one thing, not a path", span, hint="Draw a branch of several boxes as a path of its own.")


def wire_first(span: Span) -> Diagnostic:
    """A line that begins with `--`."""
    return _error("line-start", "a line can't begin with a wire", span, hint="End the line before with `--`; then the path goes on here.")


def operator_first(span: Span) -> Diagnostic:
    """A line that begins with an operator."""
    headline = f"a line can't begin with `{span.text}`"
    return _error("line-start", headline, span, hint="Put the operator at the end of the line before; then the expression goes on here.")


def value_without_box(span: Span, value: str) -> Diagnostic:
    """`a -- 12 ohm -- b`."""
    return _error("value-without-box", "a value on a path stands in a box", span, hint=f"Write `--[{value}]--`.")


def empty_box(span: Span) -> Diagnostic:
    """`[]` or `[r: ]`."""
    return _error("empty-box", "this box is empty", span, hint="For a bare wire write `a -- b`.")


def unnamed_placement(span: Span, kind: str) -> Diagnostic:
    """`pole(a, b, c)` as a whole statement."""
    return _error("unnamed-thing", f"this `{kind}` has no name", span, hint=f"Write `name: {kind}(…)`.")


# ---------------------------------------------------------------- values and operators


def missing_value(span: Span, after: str) -> Diagnostic:
    """`3 +` and nothing more, `(, x)`."""
    return _error("missing-value", f"a value is missing after `{after}`", span)


def empty_brackets(span: Span) -> Diagnostic:
    """`()` as a value."""
    return _error("missing-value", "these brackets are empty; a value belongs in them", span)


def missing_operator(span: Span, left: str, right: str) -> Diagnostic:
    """`2 sin(x)`, `a b`."""
    return _error("missing-operator", f"nothing joins `{left}` and `{right}`", span, hint=f"For a product write `{left} * {right}`.")


def missing_comma(span: Span, left: str, right: str) -> Diagnostic:
    """`pole(a b)`."""
    return _error("missing-comma", f"a comma is missing between `{left}` and `{right}`", span)


def decimal_comma(span: Span, better: str) -> Diagnostic:
    """`1,5 V`."""
    return _error("decimal-comma", "decimals are written with a point", span, hint=f"Write `{better}`.", mended=better)


def unit_blank(span: Span, unit: str) -> Diagnostic:
    """`5 N m`."""
    return _error(
        "unit-blank",
        f"`{unit}` stands apart from the unit before it",
        span,
        hint="The symbols of one unit are joined by `*`, `/`, `^` without blanks.",
    )


def single_equals(span: Span) -> Diagnostic:
    """`if a = b`."""
    return _error("equals", "`=` does not compare", span, hint="Write `==`.", mended="==")


def double_equals(span: Span) -> Diagnostic:
    """`signal x == 3`."""
    return _error("equals", "`==` compares; a value is given with `=`", span, hint="Write `=`.", mended="=")


def colon_equals(span: Span) -> Diagnostic:
    """`x := 3`."""
    return _error("equals", "`:=` is no mark of the language", span, hint="A colon names a thing, `=` gives a value.")


def second_equals(span: Span) -> Diagnostic:
    """`signal x = y = 3`."""
    return _error("equals", "there is already an `=` in this place", span)


def missing_equals(span: Span, name: str) -> Diagnostic:
    """`signal x` or `set x 3`."""
    return _error("missing-equals", f"`= value` is missing after `{name}`", span)


def setting_name(span: Span) -> Diagnostic:
    """`pole(a.b = 3)`."""
    return _error("setting-name", "the name of a setting is one plain word", span)


def comparison_chain(span: Span) -> Diagnostic:
    """`a < b < c`."""
    return _error("comparison-chain", "comparisons can't be chained", span, hint="Write `a < b and b < c`.")


def missing_otherwise(span: Span) -> Diagnostic:
    """`x if c`."""
    return _error(
        "missing-otherwise", "`otherwise` and a second value are missing after this condition", span, hint="Write `a if condition otherwise b`."
    )


def else_for_otherwise(span: Span) -> Diagnostic:
    """`x if c else y`."""
    return _error("missing-otherwise", "the second value of a condition is given by `otherwise`", span, hint="Write `otherwise`.", mended="otherwise")


def if_first(span: Span) -> Diagnostic:
    """A line that begins with `if`."""
    return _error(
        "if-place", "no statement begins with `if`", span, hint="A value is `a if condition otherwise b`; an event is `whenever condition: …`."
    )


def if_place(span: Span) -> Diagnostic:
    """`= if c …`, or `otherwise` without its `if`."""
    return _error("if-place", f"`{span.text}` can't stand here", span, hint="Write `a if condition otherwise b`.")


def range_missing(span: Span, after: str) -> Diagnostic:
    """`within 3 V`, `each n in 3 {`."""
    return _error("missing-range", f"a range needs two ends after `{after}`", span, hint="Write `low .. high`.")


def tolerance_place(span: Span) -> Diagnostic:
    """`+-` outside a given."""
    return _error(
        "tolerance-place", "`+-` gives a tolerance and stands only behind the value of a `given`", span, hint="In an expression write `a + (-b)`."
    )


def tolerance_mark(span: Span) -> Diagnostic:
    """`given x = 3 V 20 %`."""
    return _error("tolerance-mark", "a tolerance begins with `+-`", span, hint=f"Write `+- {span.text}`.")


# ---------------------------------------------------------------- words


def reserved_word(span: Span, word: str, opens: bool) -> Diagnostic:
    """`signal input = 3`."""
    why = "opens a statement" if opens else "is a word of expressions"
    return _error("reserved-word", f"`{word}` {why}, so it can't be a name", span)


def two_statements(span: Span, word: str) -> Diagnostic:
    """Two statements on one line."""
    return _error("two-statements", f"`{word}` opens a statement of its own", span, hint="Begin a new line before it.")


def unknown_word(span: Span, word: str, nearest: str) -> Diagnostic:
    """`3 kW abvoe 300 V`."""
    return _error("unknown-word", f"`{word}` is no word of the language in this place", span, hint=f"Did you mean `{nearest}`?", mended=nearest)


def unknown_statement(span: Span, word: str, nearest: str | None) -> Diagnostic:
    """`resistor r1 a b`."""
    hint = _nearest(nearest) or "A thing is named with a colon: `name: a --[…]-- b` or `name: kind(…)`."
    return _error("unknown-statement", f"no statement begins with `{word}`", span, hint=hint, mended=nearest)


def bare_assignment(span: Span, name: str) -> Diagnostic:
    """`x = 3`."""
    return _error(
        "bare-assignment", f"this does not say what `{name}` is", span, hint=f"Write `given {name} = …`, `signal {name} = …` or `latch {name} = …`."
    )


def order_place(span: Span, word: str) -> Diagnostic:
    """`run for 3 ms` outside a study."""
    return _error("statement-place", f"`{word}` is an order and stands in a study", span, hint="Is there a `}` too many above?")


def action_place(span: Span, word: str) -> Diagnostic:
    """`set x = 3` outside an event."""
    hint = "Write `at 20 ms: …`, `every 25 us { … }` or `whenever condition: …`."
    return _error("statement-place", f"`{word}` is an action and stands in an event", span, hint=hint)


def step_place(span: Span) -> Diagnostic:
    """`step x { }` outside a sequence."""
    return _error("statement-place", "`step` stands in a sequence", span, hint="Write `sequence name { step … }`.")


def not_in_study(span: Span, word: str) -> Diagnostic:
    """`signal x = 3` inside a study."""
    return _error("statement-place", f"`{word}` can't stand in a study", span, hint="Is a `}` missing above this line?")


def not_a_step(span: Span, word: str) -> Diagnostic:
    """Anything but a step in a sequence."""
    return _error("statement-place", "a sequence holds only steps", span, hint="Write `step name { actions } until condition`.")


def unknown_order(span: Span, word: str, nearest: str | None) -> Diagnostic:
    """`frobnicate` inside a study."""
    hint = (
        _nearest(nearest)
        or "A study holds start, run for, keep, require, at, every, whenever, given, tolerance, sampling, modes, loop, response, impedance "
        "and magnify."
    )
    return _error("unknown-order", f"`{word}` is no order of a study", span, hint=hint, mended=nearest)


def later_order(span: Span, word: str) -> Diagnostic:
    """An order that this version does not carry out."""
    return _error("order-not-available", f"the order `{word}` is not available in this version", span)


def study_name(span: Span) -> Diagnostic:
    """`dip: run for 3 ms`."""
    return _error("study-name", "in a study only a requirement has a name", span, hint="Write `name: require …`.")


def unknown_action(span: Span, word: str, nearest: str | None) -> Diagnostic:
    """`switch k` inside an event."""
    hint = _nearest(nearest) or "Actions are `set x = value`, `open k` and `close k`."
    return _error("unknown-action", f"`{word}` is no action", span, hint=hint, mended=nearest)


def not_an_action(span: Span, word: str) -> Diagnostic:
    """An order or a statement inside the block of an event or a step."""
    return _error("statement-place", f"`{word}` can't stand among actions", span, hint="Is a `}` missing above this line?")


def missing_actions(span: Span, word: str) -> Diagnostic:
    """`at 20 ms` and nothing more."""
    return _error("missing-actions", f"this `{word}` has nothing to do", span, hint="Go on with `: action` or a block `{ actions }`.")


def name_starts_with_digit(span: Span) -> Diagnostic:
    """`given 2x = 3`."""
    return _error("name-digit", "a name can't begin with a digit", span)


def missing_name(span: Span, after: str) -> Diagnostic:
    """`signal = 3`, `bus.`."""
    return _error("missing-name", f"a name is missing after `{after}`", span)


def missing_string(span: Span, after: str) -> Diagnostic:
    """`title Pier`."""
    return _error("missing-string", f"a text in quotes is missing after `{after}`", span, hint=f'Write `{after} "…"`.')


def string_place(span: Span) -> Diagnostic:
    """A string in an expression or on its own line."""
    hint = "A text stands behind `title` and `use`, and at the end of a given, input, require, thing, or the head of an assembly or study."
    return _error("string-place", "a text in quotes can't stand here", span, hint=hint)


def bar_place(span: Span) -> Diagnostic:
    """`a || b` in an expression."""
    return _error("bar-place", "`|` stands only between boxes side by side", span, hint="For a choice of conditions write `or`.")


def power_mark(span: Span) -> Diagnostic:
    """`3 ** 2`."""
    return _error("power-mark", "a power is written with `^`", span, mended="^")


def table_point(span: Span) -> Diagnostic:
    """`table f(x) = (1, 2) (3)`."""
    return _error("table-point", "a point of a table has two values", span, hint="Write `(x, y)`.")


def missing_unit(span: Span, after: str) -> Diagnostic:
    """`given x in`."""
    return _error("missing-unit", f"a unit is missing after `{after}`", span, hint="For a plain number write `1`.")


def semicolon_place(span: Span) -> Diagnostic:
    """`;` between statements."""
    return _error("semicolon-place", "`;` separates actions only", span, hint="Statements stand on lines of their own.")


def port_bundle(span: Span, name: str) -> Diagnostic:
    """`assembly x(ac(a, b, c))`."""
    return _error(
        "port-bundle", f"the port `{name}` takes a bundle of wires, which is not available in this version", span, hint="List the wires as ports."
    )


def expected_word(span: Span, found: str, after: str, expected: str) -> Diagnostic:
    """Only one word or mark can stand here."""
    return _error("expected-word", f"after `{after}` comes `{expected}`, not {found}", span)


def incomplete(span: Span, last: str, expected: str) -> Diagnostic:
    """The statement ends too early, and nothing more is known."""
    return _error("incomplete", f"this statement can't end after `{last}`", span, hint=f"Expected {expected}." if expected else None)


def unexpected(span: Span, found: str, expected: str) -> Diagnostic:
    """Whatever has no message of its own."""
    return _error("unexpected", f"{found} can't stand here", span, hint=f"Expected {expected}." if expected else None)
