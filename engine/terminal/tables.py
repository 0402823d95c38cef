"""Plain tables for a terminal of a hundred columns: aligned columns, quiet headings, no boxes; long lists folded by family."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

from polewise.terminal.style import Style, cells, harmless

_GAP: Final = "  "


@dataclass(frozen=True, slots=True)
class Heading:
    """A column's heading; right: numbers stand at its right edge; most: columns it may take, longer text is cut in its middle."""

    text: str
    right: bool = False
    most: int = 40


def table(headings: Sequence[Heading], rows: Sequence[Sequence[str]], style: Style, *, indent: str = "  ", kinds: Sequence[str] = ()) -> list[str]:
    """Lines of a table.

    Args:
        headings: one per column.
        rows: texts, one per column each.
        kinds: paint for the last column of each row ("good", "bad"), or nothing.
    """
    cut = [[_cut(harmless(text), heading.most) for text, heading in zip(row, headings, strict=True)] for row in rows]
    widths = [max([cells(heading.text), *(cells(row[k]) for row in cut)]) for k, heading in enumerate(headings)]
    lines = [style.paint((indent + _GAP.join(_placed(h.text, w, h.right) for h, w in zip(headings, widths, strict=True))).rstrip(), "faint")]
    for number, row in enumerate(cut):
        texts = [_placed(text, w, h.right) for text, w, h in zip(row, widths, headings, strict=True)]
        if kinds:
            texts[-1] = style.paint(texts[-1].rstrip(), kinds[number])
        lines.append((indent + _GAP.join(texts)).rstrip())
    return lines


def title_line(text: str, style: Style) -> str:
    """The line above a table."""
    return style.paint(text, "strong")


def _placed(text: str, width: int, right: bool) -> str:
    blanks = " " * (width - cells(text))
    return blanks + text if right else text + blanks


def _cut(text: str, most: int) -> str:
    if len(text) <= most:
        return text
    tail = (most - 1) // 2
    return text[: most - 1 - tail] + "…" + text[len(text) - tail :]
