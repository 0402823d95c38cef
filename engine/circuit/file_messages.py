"""What is wrong with files and sizes, in words: one function per error, facts in, Diagnostic out."""

from __future__ import annotations

from collections.abc import Sequence

from polewise.circuit.message_form import at, error, listed
from polewise.grammar.diagnostics import Diagnostic
from polewise.grammar.source import Span

# ---------------------------------------------------------------- files


def file_not_found(span: Span, name: str) -> Diagnostic:
    """A netlist, part or CSV file that is not there."""
    return error("file-not-found", f"there is no file `{name}`", span, hint="Paths are relative to the file that names them.")


def file_unreadable(span: Span, name: str, reason: str) -> Diagnostic:
    """The system refuses to read it."""
    return error("file-unreadable", f"`{name}` can't be read: {reason}", span)


def file_too_large(span: Span, name: str, size: int, most: int) -> Diagnostic:
    """Beyond the limit."""
    return error("file-too-large", f"`{name}` has {size:,} bytes; at most {most:,} are read", span)


def not_utf8(span: Span, name: str, line: int, offset: int) -> Diagnostic:
    """Bytes that are no text."""
    return error("not-utf8", f"`{name}` is not a UTF-8 text: byte {offset:,} in line {line:,} is no character", span, hint="Save it as UTF-8.")


def path_refused(span: Span, path: str, reason: str) -> Diagnostic:
    """Outside of what a netlist may read."""
    return error(
        "path-refused", f"`{path}` is not read: {reason}", span, hint="A netlist reads its own folder, folders inside it, and installed parts."
    )


def use_ending(span: Span, path: str) -> Diagnostic:
    """`use "x.txt"`."""
    return error("use-ending", f"`{path}` is no netlist's name: they end in `.pole`", span)


def use_circle(span: Span, chain: Sequence[str]) -> Diagnostic:
    """Files that use one another."""
    return error("use-circle", f"these files use one another: {' → '.join(chain)}", span, hint="Move what both need into a third file.")


def too_many_files(span: Span, most: int) -> Diagnostic:
    """Beyond the limit."""
    return error("too-many-files", f"more than {most} files are used", span)


def csv_unreadable(span: Span, path: str) -> Diagnostic:
    """No header or no rows."""
    return error("csv-unreadable", f"`{path}` is no table: it needs a line of column names and lines of numbers divided by commas", span)


def csv_columns_needed(span: Span, path: str, header: Sequence[str]) -> Diagnostic:
    """More than two columns and none named."""
    return error(
        "csv-column", f"`{path}` has the columns {listed(header)}; two must be chosen", span, hint='Write `columns "x", "y"` behind the file.'
    )


def csv_no_column(span: Span, path: str, column: str, header: Sequence[str]) -> Diagnostic:
    """A column that is not there."""
    return error("csv-column", f"`{path}` has no column `{column}`; it has {listed(header)}", span)


def csv_not_number(span: Span, path: str, line: int, column: str) -> Diagnostic:
    """A cell that is no number."""
    return error("csv-number", f"`{path}`, line {line}: column `{column}` holds no number", span)


# ---------------------------------------------------------------- limits


def too_large(span: Span, most: int) -> Diagnostic:
    """The circuit expands beyond the limit."""
    return error("too-large", f"this circuit expands to more than {most:,} statements", span)


def each_too_many(span: Span, count: int, most: int) -> Diagnostic:
    """`each n in 1..10000000`."""
    return error("too-large", f"this `each` makes {count:,} copies; a circuit may have {most:,} statements in all", span)


def nested_too_deep(span: Span, most: int) -> Diagnostic:
    """Assemblies inside assemblies."""
    return error("nested-too-deep", f"assemblies are nested more than {most} deep", span)


def too_deep(span: Span, name: str) -> Diagnostic:
    """An expression that needs too many levels."""
    return error("too-deep", f"`{name}` nests too deep to be worked out", span, hint="Name parts of it with `signal`.")


def recursive_assembly(span: Span, chain: Sequence[str], defined: Span) -> Diagnostic:
    """An assembly that holds itself."""
    labels = at(defined, "the assembly")
    return error("recursive-assembly", f"an assembly can't hold itself: {' → '.join(chain)}", span, labels=labels)


def recursive_function(span: Span, chain: Sequence[str]) -> Diagnostic:
    """A function that calls itself."""
    return error("recursive-function", f"a function can't call itself: {' → '.join(chain)}", span)


def not_yet(span: Span, what: str) -> Diagnostic:
    """Part of the language that this version reads but does not do."""
    return error("not-yet", f"{what} can't be used in this version yet", span)
