"""Every circuit that ships checks without a warning, runs all its studies, and meets every requirement it states."""

from __future__ import annotations

from pathlib import Path

import pytest

import polewise
from polewise.grammar.diagnostics import Severity

ROOT = Path(__file__).resolve().parents[2]
PIER = ROOT / "circuits" / "tern_point" / "pier.pole"
CIRCUITS = sorted(path for path in (ROOT / "circuits").rglob("*.pole") if path.parent.name != "parts" and path != PIER)
PIER_STUDIES = ("black_start", "load_step", "supply_loss", "berth_short")
POLES_MIN, UNKNOWNS_MIN = 12, 80


def _holds(path: Path, study: str) -> None:
    verdict = polewise.load(path).run(study).verdict
    assert verdict.requirements, f"study {study} of {path.name} requires nothing"
    assert verdict.passed, [f"{r.name}: {r.why}" for r in verdict.failed]


@pytest.mark.parametrize("path", [*CIRCUITS, PIER], ids=lambda p: p.stem)
def test_checks_without_warnings(path: Path) -> None:
    report = polewise.load(path).check()
    warnings = [d.headline for d in report.diagnostics if d.severity is Severity.WARNING]
    assert not warnings


@pytest.mark.parametrize("path", CIRCUITS, ids=lambda p: p.stem)
def test_studies_hold(path: Path) -> None:
    studies = polewise.load(path).studies
    assert studies, f"{path.name} has no study"
    for study in studies:
        _holds(path, study)


@pytest.mark.parametrize("study", PIER_STUDIES)
def test_pier_holds(study: str) -> None:
    _holds(PIER, study)


def test_pier_is_large_enough() -> None:
    report = polewise.load(PIER).check()
    assert report.counts["poles"] >= POLES_MIN
    assert report.counts["unknowns"] >= UNKNOWNS_MIN


def test_pier_has_all_studies() -> None:
    assert tuple(polewise.load(PIER).studies) == PIER_STUDIES
