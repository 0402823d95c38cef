"""Every snippet of the documentation is what its mark says: it checks, runs, fails to check, executes, or shows what the terminal says."""

from __future__ import annotations

import re
import shlex
import shutil
from collections import defaultdict
from pathlib import Path
from typing import Any

import pytest

import polewise
from polewise.terminal.main import run_command_line

from .blocks import DOCS, ROOT, Block, blocks_of, pages

BLOCKS = [block for page in pages() for block in blocks_of(page)]
NETLISTS = [block for block in BLOCKS if block.language == "pole"]
MARKS = {"pole": {"", "run", "fragment", "wrong"}, "python": {""}, "console": {""}}


def _ids(block: Block) -> str:
    return block.id


@pytest.mark.parametrize("block", BLOCKS, ids=_ids)
def test_marks_are_known(block: Block) -> None:
    if block.language in MARKS:
        assert block.mark in MARKS[block.language], f"{block.id}: unknown mark `{block.mark}`"
    if block.mark == "fragment":
        assert block.frame, f"{block.id}: a fragment needs a frame before it"


@pytest.mark.parametrize("block", [b for b in NETLISTS if b.mark in {"", "run", "fragment"}], ids=_ids)
def test_netlist_checks(block: Block) -> None:
    text = f"{block.frame}{block.body}" if block.mark == "fragment" else block.body
    polewise.from_text(text, name=block.id).check()


@pytest.mark.parametrize("block", [b for b in NETLISTS if b.mark == "run"], ids=_ids)
def test_netlist_holds(block: Block) -> None:
    system = polewise.from_text(block.body, name=block.id)
    assert system.studies, f"{block.id} has no study to run"
    for study in system.studies:
        verdict = system.run(study).verdict
        assert verdict.requirements, f"{block.id}: study {study} requires nothing"
        assert verdict.passed, [r.why for r in verdict.failed]


@pytest.mark.parametrize("block", [b for b in NETLISTS if b.mark == "wrong"], ids=_ids)
def test_wrong_netlist_is_refused(block: Block) -> None:
    with pytest.raises(polewise.NetlistError):
        polewise.from_text(block.body, name=block.id).check()


def _workshop(folder: Path, page: str) -> None:
    """A folder with the circuits and the page's files."""
    shutil.copytree(ROOT / "circuits", folder / "circuits")
    for block in BLOCKS:
        if block.page == page and block.file is not None:
            (folder / block.file).write_text(block.body, encoding="utf-8")


@pytest.mark.parametrize("page", sorted({b.page for b in BLOCKS if b.language == "python"}))
def test_python_runs(page: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    _workshop(tmp_path, page)
    monkeypatch.chdir(tmp_path)
    names: dict[str, Any] = {"__name__": "page"}
    for block in BLOCKS:
        if block.page == page and block.language == "python":
            exec(compile(block.body, block.id, "exec"), names)


_NUMBER = re.compile(r"[-+−]?\d+(?:\.\d+)?(?:e[-+]?\d+)?")


def _loosely(line: str) -> str:
    """A line without frames, widths and the figures of its numbers."""
    plain = re.sub(r"[^\w\s.,;:%=/()*'`_+−-]", " ", line)
    return " ".join(_NUMBER.sub("#", plain).split())


@pytest.mark.parametrize("page", sorted({b.page for b in BLOCKS if b.compare}))
def test_console_shows_what_the_page_shows(page: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    _workshop(tmp_path, page)
    monkeypatch.chdir(tmp_path)
    for block in BLOCKS:
        if block.page == page and block.compare:
            for command, shown in _commands(block).items():
                words = shlex.split(command)
                assert words[0] == "polewise", f"{block.id}: only polewise can be compared"
                assert run_command_line(words[1:]) == 0
                output = capsys.readouterr().out
                said = {_loosely(line) for line in output.splitlines()}
                for line in shown:
                    assert _loosely(line) in said, f"{block.id}: `{command}` does not say\n{line}\nbut\n{output}"


def _commands(block: Block) -> dict[str, list[str]]:
    """Commands of a console block with the lines shown below each; "…" and empty lines stand for anything."""
    found: dict[str, list[str]] = defaultdict(list)
    command = ""
    for line in block.body.splitlines():
        if line.startswith("$ "):
            command = line[2:].strip()
            found[command] = []
        elif line.strip() not in {"", "…"}:
            found[command].append(line)
    return found


def test_links_lead_somewhere() -> None:
    for page in [*pages(), *sorted((DOCS / "errors").glob("*.md"))]:
        for target in re.findall(r"\]\((?!https?:)([^)#\s]+)", page.read_text(encoding="utf-8")):
            assert (page.parent / target).exists(), f"{page.relative_to(ROOT)} links to {target}, which is not there"
