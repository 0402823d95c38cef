"""Source texts and places in them: offsets, lines, columns."""

from __future__ import annotations

from bisect import bisect_right
from dataclasses import dataclass, field


@dataclass(frozen=True, slots=True, eq=False)
class SourceText:
    """One netlist text with the name it is shown under.

    Args:
        name: what messages call it: a path relative to the circuit's folder, or "<text>".
        text: the whole text, newlines as "\\n".
    """

    name: str
    text: str = field(repr=False)
    line_starts: tuple[int, ...] = field(init=False, repr=False)

    def __post_init__(self) -> None:
        starts = [0]
        find = self.text.find
        at = find("\n")
        while at >= 0:
            starts.append(at + 1)
            at = find("\n", at + 1)
        object.__setattr__(self, "line_starts", tuple(starts))

    def position(self, offset: int) -> tuple[int, int]:
        """Line and column of an offset, both counted from 1, columns in characters."""
        line = bisect_right(self.line_starts, offset)
        return line, offset - self.line_starts[line - 1] + 1

    def line_text(self, line: int) -> str:
        """The text of a line (counted from 1) without its newline."""
        start = self.line_starts[line - 1]
        end = self.line_starts[line] - 1 if line < len(self.line_starts) else len(self.text)
        return self.text[start:end]


@dataclass(frozen=True, slots=True)
class Span:
    """A half-open stretch of a source text."""

    source: SourceText
    start: int
    end: int

    @property
    def text(self) -> str:
        """The characters the span covers."""
        return self.source.text[self.start : self.end]

    @property
    def line(self) -> int:
        """Line of its first character, from 1."""
        return self.source.position(self.start)[0]

    @property
    def column(self) -> int:
        """Column of its first character, from 1."""
        return self.source.position(self.start)[1]

    def to(self, other: Span) -> Span:
        """The span from the start of this one to the end of another in the same source."""
        return Span(self.source, self.start, other.end)


def no_span(name: str = "<built>") -> Span:
    """A span for things that no text stands behind."""
    return Span(SourceText(name, ""), 0, 0)
