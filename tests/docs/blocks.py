"""Finds the fenced blocks of the documentation and what is asked of each.

Marks in a page:
    ```pole            a whole netlist: it must check without errors
    ```pole run        a whole netlist: every study runs and every requirement holds
    ```pole fragment   statements that stand in the page's frame: together they must check without errors
    ```pole wrong      a whole netlist that must not check
    ```python          executed; blocks of one page share their names and run in a folder that holds `circuits/`
    ```console         not executed, except after `<!-- compare -->`: then each `$ polewise …` line is run and the lines below must appear
    <!-- frame …-->    the statements that fragments stand in, from here on
    <!-- file: NAME --> the next block is also saved under this name for the page's python and console blocks
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
DOCS = ROOT / "docs"
_PIECE = re.compile(
    r"^```(?P<info>[^\n`]*)\n(?P<body>.*?)^```[ ]*$"
    r"|<!--\s*frame\n(?P<frame>.*?)-->|<!--\s*file:\s*(?P<file>\S+)\s*-->|(?P<compare><!--\s*compare\s*-->)",
    re.DOTALL | re.MULTILINE,
)


@dataclass(frozen=True, slots=True)
class Block:
    """One fenced block.

    Args:
        page: file name, for test ids.
        line: of its opening fence.
        language, mark: first and second word behind the fence, "" where there is none.
        body: its text.
        frame: statements that stand before a fragment.
        file: name to save it under, or None.
        compare: whether `<!-- compare -->` stands before it.
    """

    page: str
    line: int
    language: str
    mark: str
    body: str
    frame: str
    file: str | None
    compare: bool

    @property
    def id(self) -> str:
        """Name of a test about it."""
        return f"{self.page}:{self.line}"


def blocks_of(path: Path) -> list[Block]:
    """All fenced blocks of a page in order."""
    text = path.read_text(encoding="utf-8")
    found: list[Block] = []
    frame, file, compare = "", None, False
    for piece in _PIECE.finditer(text):
        if piece["frame"] is not None:
            frame = piece["frame"]
        elif piece["file"] is not None:
            file = piece["file"]
        elif piece["compare"] is not None:
            compare = True
        else:
            words = piece["info"].split()
            line = text.count("\n", 0, piece.start()) + 1
            name = str(path.relative_to(ROOT))
            found.append(Block(name, line, words[0] if words else "", words[1] if len(words) > 1 else "", piece["body"], frame, file, compare))
            file, compare = None, False
    return found


def pages() -> list[Path]:
    """README, DEVELOPERS and every page of docs but the error pages, which have a test of their own."""
    return [ROOT / "README.md", ROOT / "DEVELOPERS.md", *sorted(p for p in DOCS.rglob("*.md") if p.parent.name != "errors")]
