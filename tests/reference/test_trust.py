"""The trust report names each deliberate misuse, by its own check and number, and stays silent on every clean circuit that ships."""

from __future__ import annotations

from pathlib import Path

import pytest

import polewise
from polewise.analysis.trust import Trust

ROOT = Path(__file__).resolve().parents[2]
MISUSED = Path(__file__).parent / "circuits" / "misused"
CLEAN = sorted(p for p in (ROOT / "circuits").rglob("*.pole") if p.parent.name != "parts" and p.name != "pier.pole")

# file, study, subject, check, trust, part of the number
NAMED = [
    ("fast_loop", "rest", "leg", "crossover", Trust.NOT_VALID, "f/3"),
    ("pinned", "rest", "leg", "duty at limit", Trust.DOUBTFUL, "4 ms"),
    ("pinned", "rest", "level", "duty at limit", Trust.NOT_VALID, "leg"),
    ("small_capacitor", "rest", "store.v", "capacitor ripple", Trust.NOT_VALID, "31"),
    ("steep_ripple", "rest", "leg", "ripple slope", Trust.NOT_VALID, "1.1"),
    ("at_the_boundary", "rest", "leg", "conduction boundary", Trust.DOUBTFUL, "3.0%"),
    ("beating", "rest", "leg1", "beat", Trust.DOUBTFUL, "300 Hz"),
    ("beating", "rest", "leg2", "beat", Trust.DOUBTFUL, "300 Hz"),
    ("short_questions", "short_window", "instant", "short window", Trust.NOT_VALID, "4 us"),
    ("short_questions", "short_window", "quick", "short window", Trust.NOT_VALID, "5 us"),
    ("short_questions", "short_window", "ripple", "question", Trust.NOT_VALID, "ripple"),
    ("short_questions", "short_window", "stress", "question", Trust.NOT_VALID, "value"),
    ("short_questions", "short_pulse", "short_pulse", "short event", Trust.NOT_VALID, "4 us"),
    ("fast_content", "rest", "out.v", "content", Trust.DOUBTFUL, "f/4.7"),
]


@pytest.fixture(scope="module")
def reports():
    found = {}

    def report(name: str, study: str):
        if (name, study) not in found:
            found[name, study] = polewise.load(MISUSED / f"{name}.pole").trust(study)
        return found[name, study]

    return report


@pytest.mark.parametrize(("name", "study", "subject", "check", "trust", "number"), NAMED, ids=[f"{n[0]}-{n[2]}-{n[3]}" for n in NAMED])
def test_misuse_is_named(reports, name: str, study: str, subject: str, check: str, trust: Trust, number: str) -> None:
    found = [f for f in reports(name, study)[subject].findings if f.check == check]
    assert [f.trust for f in found] == [trust]
    assert number in found[0].number
    assert found[0].why
    assert found[0].remedy


def test_every_misused_circuit_has_its_line() -> None:
    assert {p.stem for p in MISUSED.glob("*.pole")} == {n[0] for n in NAMED}


@pytest.mark.parametrize("path", CLEAN, ids=lambda p: p.stem)
def test_silent_on_clean_circuits(path: Path) -> None:
    system = polewise.load(path)
    for study in system.studies:
        definition = system.circuit.studies[study]
        if definition.magnifies is None and definition.run_for_s is not None:
            report = system.trust(study)
            assert report.trust is Trust.HOLDS, [(f.name, f.check, f.number) for f in report.findings]


@pytest.mark.parametrize("study", ["black_start", "load_step", "supply_loss", "berth_short"])
def test_silent_on_the_pier(study: str) -> None:
    report = polewise.load(ROOT / "circuits" / "tern_point" / "pier.pole").trust(study)
    assert report.trust is Trust.HOLDS, [(f.name, f.check, f.number) for f in report.findings]
    assert sum(row.kind == "pole" for row in report.rows) == 13


def test_a_filter_that_rings_outside_every_loop_is_no_cause_for_doubt() -> None:
    """An input filter without damping rings at f/5; the regulated stage behind it hardly moves that mode."""
    system = polewise.from_text(
        """
reference gnd
supply: src --[48 V]-- gnd
filter: src --[l: 0.63 uH]-- vin
front:  vin --[c: 100 uF]-- gnd
leg:    pole(vin, gnd, x, upper_duty = drive, rate = 100 kHz, upper = transistor(5 mohm), lower = transistor(5 mohm))
choke:  x --[rl: 20 mohm]--[l: 100 uH]-- out
store:  out --[esr: 30 mohm]--[c: 1 mF]-- gnd
load:   out --[r: 4 ohm]-- gnd
reg:    pi_control(24 V - out.v, kp = 0.002 /V, ki = 2 /V/s, low = 0.02, high = 0.9)
signal drive = reg
"""
    )
    ringing = [m for m in system.modes(sensitivities=False) if m.damping < 0.05]
    assert [round(100e3 / m.natural_frequency_hz, 1) for m in ringing] == [5.0]
    report = system.trust()
    assert report.trust is Trust.HOLDS, [(f.name, f.check, f.number) for f in report.findings]


def test_a_fast_mode_of_a_loop_is_told() -> None:
    """The same stage with its voltage loop turned up until it rings at f/8."""
    report = polewise.from_text(
        """
reference gnd
supply: vin --[48 V]-- gnd
leg:    pole(vin, gnd, x, upper_duty = drive, rate = 100 kHz, upper = transistor(5 mohm), lower = transistor(5 mohm))
choke:  x --[rl: 20 mohm]--[l: 100 uH]-- out
store:  out --[c: 100 uF]-- gnd
load:   out --[r: 4 ohm]-- gnd
signal drive = 0.5 + 1.3 /V * (24 V - out.v)
"""
    ).trust()
    modes = [f for f in report["leg"].findings if f.check == "mode"]
    assert [f.trust for f in modes] == [Trust.DOUBTFUL]
    assert "f/7." in modes[0].number or "f/8." in modes[0].number


def test_limits_are_settings() -> None:
    from polewise.analysis.trust import TrustLimits

    system = polewise.load(ROOT / "circuits" / "basics" / "step_up_dcm.pole")
    assert system.trust().trust is Trust.HOLDS
    strict = system.trust(limits=TrustLimits(boundary=0.3))
    assert [f.check for f in strict.findings] == ["conduction boundary"]
