"""Whole netlists read without errors and survive their own layout; the grammar is LALR(1) without conflicts and quick to load."""

from __future__ import annotations

from pathlib import Path

import pytest

from polewise.grammar.layout import to_text
from polewise.grammar.parser import parse
from polewise.grammar.source import SourceText
from polewise.grammar.syntax import Netlist
from polewise.grammar.tables import STARTS, tables

ROOT = Path(__file__).resolve().parents[3]
FILES = sorted([*(ROOT / "tests" / "examples").glob("*.pole"), *(ROOT / "circuits").rglob("*.pole")])


def read(text: str) -> Netlist:
    netlist, diagnostics = parse(SourceText("<text>", text))
    assert diagnostics == ()
    return netlist


def test_the_examples_are_there() -> None:
    names = {path.name for path in FILES}
    assert {"pier.pole", "motor_drive.pole", "sampled_step_up.pole", "grid_rectifier.pole"} <= names


@pytest.mark.parametrize("path", FILES, ids=[path.stem for path in FILES])
def test_a_whole_netlist(path: Path) -> None:
    netlist = read(path.read_text(encoding="utf-8"))
    assert netlist.statements
    laid_out = to_text(netlist)
    again = read(laid_out)
    assert to_text(again) == laid_out
    assert [type(statement) for statement in again.statements] == [type(statement) for statement in netlist.statements]


def test_the_grammar_has_no_conflicts() -> None:
    # tables() builds with strict=True, so a conflict raises.
    found = tables()
    assert set(found.starts) == set(STARTS)
    assert len(found.actions) == len(found.gotos)


def test_every_rule_has_its_builder() -> None:
    from polewise.grammar.tree import Builder

    for rule in tables().rules:
        assert rule.build in ("", "list") or hasattr(Builder, rule.build), rule
