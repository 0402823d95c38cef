"""Files to syntax trees: the only module that reads files. Follows `use` and tables' CSV files inside the circuit's folder tree and the parts."""

from __future__ import annotations

import csv
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from importlib.resources import files as package_files
from pathlib import Path
from typing import Final

from polewise.circuit import file_messages
from polewise.circuit.csv_file import CsvFile
from polewise.grammar import syntax
from polewise.grammar.diagnostics import Diagnostic
from polewise.grammar.parser import parse
from polewise.grammar.source import SourceText, Span, no_span

NETLIST_BYTES_MAX: Final = 1_000_000
CSV_BYTES_MAX: Final = 50_000_000
FILES_MAX: Final = 200
# `use "parts/berth.pole"` finds a file beside the using one first, then this part among the installed ones.
PARTS_PREFIX: Final = "parts/"
_WORD: Final = re.compile(r"[A-Za-z_][A-Za-z0-9_]*")


@dataclass(frozen=True, slots=True)
class Sources:
    """All that was read.

    Args:
        netlists: used files before those that use them, the top file last.
        csv: (name of the text, path as written in it) → a table's file.
        files: names of all netlists in the same order.
        has_errors: whether reading found errors; the circuit can still be looked through for more.
        broken_names: words on lines that could not be read: what is declared there is not missing, and no second error.
        reported: places (source name, start, end) of the errors found in reading, which are not said again.
        lacks_files: whether a used file could not be read; then assemblies, functions and tables may be missing for that reason.
    """

    netlists: tuple[syntax.Netlist, ...]
    csv: Mapping[tuple[str, str], CsvFile]
    files: tuple[str, ...]
    has_errors: bool
    broken_names: frozenset[str] = frozenset()
    lacks_files: bool = False
    reported: frozenset[tuple[str, int, int]] = frozenset()

    @property
    def statements(self) -> Iterator[syntax.Statement]:
        """Statements of all files."""
        for netlist in self.netlists:
            yield from netlist.statements

    @property
    def title(self) -> str:
        """The title of the top file, "" where it has none."""
        titles = [s.text for s in self.netlists[-1].statements if isinstance(s, syntax.Title)] if self.netlists else []
        return titles[0] if titles else ""


def load_files(path: Path) -> tuple[Sources, tuple[Diagnostic, ...]]:
    """Read a netlist and everything it uses.

    Args:
        path: of the top file; its folder bounds what may be read.
    Returns:
        The sources, partial where something is wrong, and what is wrong.
    """
    reader = _Reader(path.parent if str(path.parent) else Path())
    name = path.name
    text = reader.read_text(path, name, None, NETLIST_BYTES_MAX)
    if text is not None:
        reader.take(SourceText(name, text), _File(path, name, False))
    return reader.sources()


def load_text(text: str, *, name: str = "<text>", folder: Path | None = None) -> tuple[Sources, tuple[Diagnostic, ...]]:
    """Read a netlist from a text.

    Args:
        text: the netlist.
        name: what messages call it.
        folder: where its `use` and CSV files are looked for; None: only the installed parts can be used.
    """
    reader = _Reader(folder)
    reader.take(SourceText(name, text.replace("\r\n", "\n")), _File(None if folder is None else folder / "text.pole", name, False))
    return reader.sources()


@dataclass(frozen=True, slots=True)
class _File:
    """A netlist being read. path: None for a text; name: what messages call it; is_part: it belongs to the installed parts."""

    path: Path | None
    name: str
    is_part: bool


class _Reader:
    """What has been read so far."""

    def __init__(self, folder: Path | None) -> None:
        self.folder = None if folder is None else folder.resolve()
        self.netlists: dict[str, syntax.Netlist] = {}
        self.csv: dict[tuple[str, str], CsvFile] = {}
        self.csv_read: dict[Path, CsvFile] = {}
        self.diagnostics: list[Diagnostic] = []
        self.broken_names: set[str] = set()
        self.lacks_files = False
        self.read: set[Path] = set()  # resolved
        self.open: list[_File] = []  # being read, outermost first

    def sources(self) -> tuple[Sources, tuple[Diagnostic, ...]]:
        """The result."""
        has_errors = any(d.is_error for d in self.diagnostics)
        reported = frozenset((d.span.source.name, d.span.start, d.span.end) for d in self.diagnostics if d.is_error)
        sources = Sources(
            tuple(self.netlists.values()), self.csv, tuple(self.netlists), has_errors, frozenset(self.broken_names), self.lacks_files, reported
        )
        return sources, tuple(self.diagnostics)

    def take(self, source: SourceText, file: _File) -> None:
        """Parse a text, read what it uses, then enter it."""
        netlist, found = parse(source)
        self.diagnostics += found
        for diagnostic in found:
            if diagnostic.is_error:
                self.broken_names.update(_words_of_lines(diagnostic.span))
        if file.path is not None:
            self.read.add(file.path.resolve())
        self.open.append(file)
        for statement in netlist.statements:
            if isinstance(statement, syntax.Use):
                self._use(statement, file)
        for table in _tables(netlist.statements):
            self._table(table, file)
        self.open.pop()
        self.netlists[source.name] = netlist

    # ------------------------------------------------------------ use

    def _use(self, use: syntax.Use, user: _File) -> None:
        span = use.path_span
        if not use.path.endswith(".pole"):
            self.diagnostics.append(file_messages.use_ending(span, use.path))
            return
        found = self._find(use.path, span, user)
        if found is None:
            self.lacks_files = True
            return
        assert found.path is not None
        resolved = found.path.resolve()
        opened = [file.path.resolve() for file in self.open if file.path is not None]
        if resolved in opened:
            chain = [file.name for file in self.open if file.path is not None][opened.index(resolved) :]
            self.diagnostics.append(file_messages.use_circle(span, [*chain, chain[0]]))
            return
        if resolved in self.read:
            return  # each file once
        if len(self.read) >= FILES_MAX:
            self.diagnostics.append(file_messages.too_many_files(span, FILES_MAX))
            return
        text = self.read_text(found.path, use.path, span, NETLIST_BYTES_MAX)
        if text is None:
            self.lacks_files = True
        else:
            self.take(SourceText(found.name, text), found)

    def _find(self, written: str, span: Span, user: _File) -> _File | None:
        """A used netlist: beside the file that uses it, else among the installed parts."""
        refused = _refused_spelling(written)
        if refused is not None:
            self.diagnostics.append(file_messages.path_refused(span, written, refused))
            return None
        if user.path is not None:
            beside = user.path.parent / written
            if beside.is_file():
                if user.is_part:
                    return _File(beside, PARTS_PREFIX + written, True)
                if self.folder is None or not beside.resolve().is_relative_to(self.folder):
                    self.diagnostics.append(file_messages.path_refused(span, written, "it leads out of the circuit's folder"))
                    return None
                return _File(beside, beside.resolve().relative_to(self.folder).as_posix(), False)
        part = _installed_part(written)
        if part is not None:
            return _File(part, written, True)
        self.diagnostics.append(file_messages.file_not_found(span, written))
        return None

    # ------------------------------------------------------------ tables

    def _table(self, table: syntax.Table, user: _File) -> None:
        assert table.file is not None
        span = table.file_span or table.name_span
        key = (span.source.name, table.file)
        if key in self.csv:
            return
        path = None if user.path is None else user.path.parent / table.file
        refused = _refused_spelling(table.file)
        if refused is None and path is None:
            refused = "a netlist given as a text has no folder"
        elif refused is None and path is not None and not user.is_part and path.exists():
            inside = self.folder is not None and path.resolve().is_relative_to(self.folder)
            refused = None if inside else "it leads out of the circuit's folder"
        if refused is not None or path is None:
            self.diagnostics.append(file_messages.path_refused(span, table.file, refused or ""))
            return
        known = self.csv_read.get(path.resolve())
        if known is None:
            text = self.read_text(path, table.file, span, CSV_BYTES_MAX)
            if text is None:
                return
            known = _read_csv(text)
            if known is None:
                self.diagnostics.append(file_messages.csv_unreadable(span, table.file))
                return
            self.csv_read[path.resolve()] = known
        self.csv[key] = known

    # ------------------------------------------------------------ bytes

    def read_text(self, path: Path, name: str, span: Span | None, most: int) -> str | None:
        """A file's text, None where it can't be read (reported)."""
        place = span if span is not None else no_span(name)
        try:
            if not path.is_file():
                self.diagnostics.append(file_messages.file_not_found(place, name))
                return None
            size = path.stat().st_size
            if size > most:
                self.diagnostics.append(file_messages.file_too_large(place, name, size, most))
                return None
            with path.open("rb") as stream:
                data = stream.read(most + 1)
        except (OSError, ValueError) as problem:
            reason = problem.strerror if isinstance(problem, OSError) and problem.strerror else "it can't be opened"
            self.diagnostics.append(file_messages.file_unreadable(place, name, reason))
            return None
        if len(data) > most:
            self.diagnostics.append(file_messages.file_too_large(place, name, len(data), most))
            return None
        try:
            text = data.decode("utf-8-sig")
        except UnicodeDecodeError as problem:
            line = data.count(b"\n", 0, problem.start) + 1
            self.diagnostics.append(file_messages.not_utf8(place, name, line, problem.start))
            return None
        return text.replace("\r\n", "\n").replace("\r", "\n")


def _words_of_lines(span: Span) -> list[str]:
    """Names on the lines a span touches."""
    last = span.source.position(max(span.start, span.end - 1))[0]
    return [word for line in range(span.line, last + 1) for word in _WORD.findall(span.source.line_text(line))]


def _refused_spelling(written: str) -> str | None:
    """Why a path as written is not followed, None where it may be."""
    if "\\" in written or "\x00" in written:
        return "folders are divided by `/`"
    if not written:
        return "it is empty"
    if written.startswith(("/", "~")) or (len(written) > 1 and written[1] == ":"):
        return "it must be relative to this file"
    if ".." in written.split("/"):
        return "`..` leads out of the file's folder"
    return None


def _installed_part(written: str) -> Path | None:
    if not written.startswith(PARTS_PREFIX):
        return None
    path = Path(str(package_files("polewise.parts"))) / written[len(PARTS_PREFIX) :]
    return path if path.is_file() else None


def _tables(statements: tuple[syntax.Statement, ...]) -> Iterator[syntax.Table]:
    """Tables that read files, those in assemblies and `each` too."""
    for statement in statements:
        if isinstance(statement, syntax.Table):
            if statement.file is not None:
                yield statement
        elif isinstance(statement, syntax.Assembly | syntax.Each):
            yield from _tables(statement.body)


def _read_csv(text: str) -> CsvFile | None:
    try:
        lines = list(csv.reader(text.splitlines()))
    except csv.Error:
        return None
    if not lines or not lines[0]:
        return None
    header = tuple(cell.strip() for cell in lines[0])
    rows = tuple((number, tuple(cell.strip() for cell in row)) for number, row in enumerate(lines[1:], start=2) if any(cell.strip() for cell in row))
    return CsvFile(header, rows) if rows else None
