"""Every diagnostic code has a page that shows a netlist, the exact message it gets, its cause and its repair.

A page may name another code that its netlist can't avoid: `<!-- also: CODE -->`.
With POLEWISE_UPDATE=1 in the environment the pages' messages are rewritten; read the difference before committing it.
"""

from __future__ import annotations

import ast
import os
import re
from pathlib import Path

import pytest

from polewise.api import read_text
from polewise.errors import PolewiseError
from polewise.grammar.diagnostics import Diagnostic
from polewise.terminal.render import render_all
from polewise.terminal.style import Style

from .blocks import DOCS, ROOT, blocks_of

PAGES = sorted((DOCS / "errors").glob("*.md"))
FOLDERS = ("grammar", "engine")
UPDATE = os.environ.get("POLEWISE_UPDATE") == "1"
_CODE = re.compile(r"[a-z0-9]+(-[a-z0-9]+)*")


def _codes() -> set[str]:
    """Codes of every diagnostic: first argument of `Diagnostic(…)` and of the helpers that make one."""
    found: set[str] = set()
    for file in sorted(f for folder in FOLDERS for f in (ROOT / folder).rglob("*.py")):
        tree = ast.parse(file.read_text(encoding="utf-8"))
        borrowed = [node for node in tree.body if isinstance(node, ast.ImportFrom) and (node.module or "").endswith(".message_form")]
        shared = {"error", "warning"} if borrowed else set()
        makers = (
            {"Diagnostic"}
            | shared
            | {
                function.name
                for function in tree.body
                if isinstance(function, ast.FunctionDef) and function.args.args and function.args.args[0].arg == "code"
            }
        )
        for node in ast.walk(tree):
            if isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id in makers and node.args:
                for value in ast.walk(node.args[0]):
                    if isinstance(value, ast.Constant) and isinstance(value.value, str) and _CODE.fullmatch(value.value):
                        found.add(value.value)
    return found


def _findings(text: str, code: str) -> tuple[Diagnostic, ...]:
    """Everything said about a netlist until the code turns up: by reading it, writing its equations, settling it, running its studies."""
    system, found = read_text(text, name="netlist.pole")
    if system is None or any(d.code == code for d in found):
        return found
    steps = [system.check, system.settled] if not system.studies else [system.check]
    for step in [*steps, *((lambda s=study: system.run(s)) for study in system.studies)]:
        try:
            step()
        except PolewiseError as error:
            return (*found, *error.diagnostics)
    return found


def test_every_code_has_a_page() -> None:
    pages, codes = {page.stem for page in PAGES}, _codes()
    assert len(codes) > 40
    assert not codes - pages, f"codes without a page in docs/errors: {sorted(codes - pages)}"
    assert not pages - codes, f"pages whose code nothing says: {sorted(pages - codes)}"


@pytest.mark.parametrize("page", PAGES, ids=lambda p: p.stem)
def test_page_is_complete(page: Path) -> None:
    text = page.read_text(encoding="utf-8")
    assert text.startswith(f"# {page.stem}\n"), f"{page.name} begins with its code"
    assert "**Cause.**" in text, f"{page.name} says no cause"
    assert "**Repair.**" in text, f"{page.name} says no repair"


@pytest.mark.parametrize("page", [p for p in PAGES if any(b.language == "pole" for b in blocks_of(p))], ids=lambda p: p.stem)
def test_page_shows_the_message(page: Path) -> None:
    netlist = next(b.body for b in blocks_of(page) if b.language == "pole")
    shown = next(b.body for b in blocks_of(page) if b.language == "text")
    found = _findings(netlist, page.stem)
    also = re.findall(r"<!-- also: (\S+) -->", page.read_text(encoding="utf-8"))
    others = [d.code for d in found if d.is_error and d.code != page.stem and d.code not in also]
    assert not others, f"the netlist of {page.name} is wrong in other ways too: {others}"
    said = render_all([d for d in found if d.code == page.stem], Style())
    assert said, f"nothing says `{page.stem}` about the netlist of {page.name}"
    if UPDATE and said != shown:
        page.write_text(page.read_text(encoding="utf-8").replace(f"```text\n{shown}```", f"```text\n{said}```"), encoding="utf-8")
        shown = said
    assert said == shown
