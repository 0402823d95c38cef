"""One function per error in the text: facts in, Diagnostic out. Every headline, hint and code of the text stage is here."""

from __future__ import annotations

from polewise.grammar.diagnostics import Diagnostic, Edit, Label, Severity
from polewise.grammar.source import Span


def _error(code: str, headline: str, span: Span, *, labels: tuple[Label, ...] = (), hint: str | None = None, replace: str | None = None) -> Diagnostic:
    edit = None if replace is None else Edit(span, replace)
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
        return _error("unknown-character", f"`{found}` is no mark of the language", span, hint=f"Write `{meant}`.", replace=meant)
    if in_name:
        return _error("unknown-character", f"`{found}` can't stand in a name", span, hint="Names have the letters a to z and A to Z, digits and `_`.")
    return _error("unknown-character", f"`{found}` is no mark of the language", span)


def unterminated_string(span: Span) -> Diagnostic:
    """A string without its closing quote."""
    return _error("unterminated-string", 'this string has no closing `"` on its line', span, hint='Strings stand on one line: `"…"`.')


def bare_decimal(span: Span, better: str) -> Diagnostic:
    """`.5` or `5.`."""
    return _error("bare-decimal", "a decimal point needs digits on both sides", span, hint=f"Write `{better}`.", replace=better)


def number_too_large(span: Span) -> Diagnostic:
    """1e999."""
    return _error("number-too-large", "this number is too large to compute with", span)


def unknown_unit(span: Span, name: str, nearest: str | None, number: Span | None, *, touching: bool) -> Diagnostic:
    """A word behind a number, or behind `in`, that is no unit."""
    if nearest is not None:
        return _error("unknown-unit", f"`{name}` is not a known unit", span, hint=f"Did you mean `{nearest}`?", replace=nearest)
    if number is not None and touching:
        return _error("unknown-unit", f"`{name}` is not a known unit", span, hint=f"For a product write `{number.text} * {name}`.")
    if number is not None:
        return _error("unknown-unit", f"`{name}` is not a known unit", span, hint=f"For a product write `{number.text} * {name}`.")
    return _error("unknown-unit", f"`{name}` is not a known unit", span)


def star_after_slash(span: Span, symbol: str) -> Diagnostic:
    """`V/s*m`."""
    return _error("unit-order", f"in the unit `{symbol}` a `*` follows a `/`, which can be read in two ways", span, hint="Write the products first: `A*s/rad`.")


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
    return _error("table-word", f"`{word}` says nothing about a table", span, hint=hint, replace=nearest)


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
    return _error("filter-variable", f"a sampled filter is written in `z`, not in `{name}`", span, replace="z")


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
    return _error("start-unknown", f"a study can't start `{word}`", span, hint=hint, replace=nearest)


def sampling_unknown(span: Span, word: str, nearest: str | None) -> Diagnostic:
    """`sampling = fast`."""
    hint = _nearest(nearest) or "Write `sampling = exact` or `sampling = mean`."
    return _error("sampling-unknown", f"sampling can't be `{word}`", span, hint=hint, replace=nearest)


# ---------------------------------------------------------------- a token that can't stand where it stands


def unexpected(span: Span, text: str) -> Diagnostic:
    """Whatever has no message of its own."""
    return _error("syntax", f"`{text}` can't stand here", span)
