"""Small-signal orders and requirements in studies: what they find, how they fail, what the terminal shows."""

from __future__ import annotations

import math
from pathlib import Path

import pytest

import polewise
from polewise.analysis.answers import Answer, ResponseCurve
from polewise.analysis.impedance import Impedance
from polewise.analysis.modes import Modes
from polewise.terminal.main import run_command_line

REGULATOR = Path(__file__).resolve().parents[3] / "circuits" / "small_signal" / "regulator.pole"
TANK = """
reference gnd
feed: a --[1 V]-- gnd
tank: a --[r: 0.2 ohm]--[l: 100 uH]-- b
store: b --[c: 200 uF]-- gnd
table mask(f in Hz) in ohm = (10 Hz, {mask} ohm) (10 kHz, {mask} ohm)
latch level = 1 V
study step {{
    start settled
    run for 1 ms
    keep b.v
}}
study look {{
    modes
    modes at 0.5 ms of step
    response of b.v to feed.v over 10 Hz .. 10 kHz
    impedance at b over 10 Hz .. 10 kHz
    damped: require least_damping() above {damping}
    require peak_impedance(b) below 3.6 ohm
    masked: require impedance(b) below mask(frequency)
}}
"""


def test_orders_are_answered_in_their_order() -> None:
    result = polewise.from_text(TANK.format(mask="4", damping="0.1")).run("look")
    assert [type(a.found) for a in result.answers if isinstance(a, Answer)] == [Modes, Modes, ResponseCurve, Impedance]
    assert result.verdict.passed
    row = result.verdict["damped"]
    assert row.value == pytest.approx(0.141421, abs=5e-7)
    assert row.margin == pytest.approx(0.041421, abs=5e-7)
    # |Z| at its peak: s L + R in parallel with C, by hand over a fine grid
    w = [2 * math.pi * f for f in (x / 4 for x in range(4000, 5200))]
    peak = max(abs(1 / (1 / (0.2 + 1j * k * 100e-6) + 1j * k * 200e-6)) for k in w)
    assert result.verdict["requirement 2"].value == pytest.approx(peak, rel=1e-3)


def test_requirements_fail_with_their_worst_point() -> None:
    verdict = polewise.from_text(TANK.format(mask="2", damping="0.2")).run("look").verdict
    assert [r.passed for r in verdict.requirements] == [False, True, False]
    assert "Hz" in verdict["damped"].why
    assert verdict["masked"].limit == pytest.approx(2.0)


def test_terminal_shows_modes_margins_and_verdict(capsys: pytest.CaptureFixture[str]) -> None:
    code = run_command_line(["run", str(REGULATOR)])
    shown = capsys.readouterr().out
    assert code == 0
    for words in ("phase margin 48.54 deg", "dies out", "encirclements of -1", "gain margin of the ratio", "All 8 requirements hold"):
        assert words in shown


@pytest.mark.parametrize(
    ("order", "words"),
    [
        ("loop at nothing over 1 Hz .. 2 Hz", "nothing"),
        ("response of b.v to feed.v over 2 Hz .. 1 Hz", "over"),
        ("impedance at nowhere over 1 Hz .. 2 Hz", "nowhere"),
        ("modes at 1 ms of nothing", "no study"),
        ("impedance at b over 1 V .. 2 V", "V"),
        ("require phase_margin() above 1", "phase_margin"),
        ("require impedance(b) below 3 V", "V"),
        ("require phase_margin(store) above 1", "store"),
    ],
)
def test_wrong_orders_are_refused_when_read(order: str, words: str) -> None:
    text = TANK.format(mask="4", damping="0.1").replace("    modes\n", f"    {order}\n", 1)
    with pytest.raises(polewise.NetlistError, match=words):
        polewise.from_text(text)


def test_every_answer_has_a_figure(tmp_path: Path) -> None:
    pytest.importorskip("matplotlib")
    from polewise.analysis.figure import answer_figure

    for k, answer in enumerate(polewise.load(REGULATOR).run("margins").answers):
        assert isinstance(answer, Answer)
        path = tmp_path / f"{k}.svg"
        answer_figure(answer).savefig(path)
        assert path.stat().st_size > 5000
