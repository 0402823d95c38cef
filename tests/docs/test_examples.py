"""The whole netlists in tests/examples: they are read, and all but the one with wires run and hold."""

from pathlib import Path

import pytest

import polewise
from polewise.grammar.parser import parse
from polewise.grammar.source import SourceText

EXAMPLES = Path(__file__).parents[1] / "examples"


@pytest.mark.parametrize("name", ["motor_drive", "pier", "sampled_step_up"])
def test_example_runs_and_holds(name: str) -> None:
    system = polewise.load(EXAMPLES / f"{name}.pole")
    for study in system.studies:
        result = system.run(study)
        assert result.complete
        assert result.verdict.passed, study


def test_the_example_with_wires_is_read() -> None:
    path = EXAMPLES / "grid_rectifier.pole"
    netlist, diagnostics = parse(SourceText(path.name, path.read_text(encoding="utf-8")))
    assert diagnostics == ()
    assert len(netlist.statements) > 20
