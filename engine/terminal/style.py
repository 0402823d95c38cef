"""Colour and width of the terminal: colour only where a person looks, never where NO_COLOR is set or output goes to a file."""

from __future__ import annotations

import os
import shutil
import unicodedata
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final, TextIO

WIDTH_MAX: Final = 100  # tables are laid out for this; a narrower terminal wraps by itself
_CODES: Final = {"plain": "", "strong": "1", "faint": "2", "bad": "31", "good": "32", "doubt": "33", "place": "36"}


@dataclass(frozen=True, slots=True)
class Style:
    """How text is painted on one stream."""

    colour: bool = False
    overline: str = "¯"

    def paint(self, text: str, kind: str) -> str:
        """Text in one of the kinds: strong, faint, bad, good, doubt, place."""
        code = _CODES[kind]
        return f"\033[{code}m{text}\033[0m" if self.colour and code and text else text


def style_of(stream: TextIO, environment: Mapping[str, str] | None = None) -> Style:
    """The style that fits a stream. https://no-color.org: any non-empty NO_COLOR means none."""
    environment = os.environ if environment is None else environment
    colour = stream.isatty() and not environment.get("NO_COLOR") and environment.get("TERM") != "dumb"
    try:
        "¯".encode(stream.encoding or "ascii")
        overline = "¯"
    except (UnicodeEncodeError, LookupError):
        overline = "="
    return Style(colour, overline)


def terminal_width() -> int:
    """Columns to use, at most WIDTH_MAX."""
    return min(shutil.get_terminal_size((WIDTH_MAX, 24)).columns, WIDTH_MAX)


def cells(text: str) -> int:
    """Columns that text takes on a terminal: wide characters two, combining ones none."""
    if text.isascii():
        return len(text)
    return sum(0 if unicodedata.combining(c) else 2 if unicodedata.east_asian_width(c) in "WF" else 1 for c in text)


def harmless(text: str) -> str:
    """Text of a file made safe to print: tabs as blanks, control characters (which could steer the terminal) as a mark."""
    return "".join("    " if c == "\t" else "\ufffd" if unicodedata.category(c) in ("Cc", "Cf") else c for c in text)
