"""`trust`, `magnify`, `average` and the trust block of `run`, as a user types them."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from polewise.terminal.main import run_command_line

STAGE = """title "Stage"
reference gnd
supply: vin --[28 V]-- gnd
leg: pole(vin, gnd, x, upper_duty = 0.5, rate = 100 kHz, upper = transistor(5 mohm), lower = transistor(5 mohm))
choke: x --[50 uH]-- out
store: out --[500 uF]-- gnd
load: out --[r: ohms]-- gnd
latch ohms = 3 ohm
study step {
    start settled
    run for 4 ms
    at 1 ms: set ohms = 2 ohm
    keep choke.i, out.v
    level: require out.v above 12 V
    STRESS
}
study close {
    magnify step over 0.9 ms .. 1 ms
    keep choke.i, out.v
    ripple: require ripple(choke.i) below 1.5 A
}
"""


@pytest.fixture
def say(capsys: pytest.CaptureFixture[str]) -> Callable[..., tuple[int, str, str]]:
    def run(*words: object) -> tuple[int, str, str]:
        code = run_command_line([str(w) for w in words])
        captured = capsys.readouterr()
        return code, captured.out, captured.err

    return run


@pytest.fixture
def stage(tmp_path: Path) -> Path:
    file = tmp_path / "stage.pole"
    file.write_text(STAGE.replace("    STRESS\n", ""), encoding="utf-8")
    return file


def test_run_ends_with_trust(stage: Path, say) -> None:
    code, out, _ = say("run", stage)
    assert code == 0
    assert "Trust: the averages hold for 1 pole" in out
    assert "with every edge" in out
    assert "begun 3 periods before the window" in out
    assert "cycle average less averaged run" in out
    assert out.count("Trust:") == 1
    assert "Trust:" not in say("run", stage, "step", "--no-trust")[1]
    assert max(len(line) for line in out.splitlines()) <= 100


def test_device_stress_is_refused_in_an_averaged_run(tmp_path: Path, say) -> None:
    file = tmp_path / "stage.pole"
    file.write_text(STAGE.replace("STRESS", "stress: require leg.upper_v below 60 V"), encoding="utf-8")
    code, out, _ = say("run", file, "step")
    assert code == 1
    assert "NOT SEEN" in out
    assert "not valid stress: value" in out
    assert say("trust", file, "step")[0] == 1


def test_run_as_json_holds_trust(stage: Path, say) -> None:
    code, out, _ = say("run", stage, "step", "--json")
    assert code == 0
    assert json.loads(out)["studies"][0]["trust"]["trust"] == "holds"


def test_files_of_a_magnified_study(stage: Path, say, tmp_path: Path) -> None:
    code, _, err = say("run", stage, "close", "--out", tmp_path / "out")
    assert (code, err) == (0, "")
    assert {p.name for p in (tmp_path / "out").iterdir()} == {"close.json", "close.parquet", "close.png", "close.svg"}


def test_trust(stage: Path, say) -> None:
    code, out, err = say("trust", stage, "step")
    assert (code, err) == (0, "")
    assert "trust in step" in out
    assert "leg" in out
    code, out, _ = say("trust", stage, "--json")
    assert json.loads(out)["reports"][0]["study"] is None


def test_magnify(stage: Path, say, tmp_path: Path) -> None:
    figure = tmp_path / "edges.png"
    code, out, err = say("magnify", stage, "step", "--from", "0.95ms", "--to", "1.05ms", "--figure", figure)
    assert (code, err) == (0, "")
    assert "leg.upper" in out
    assert figure.stat().st_size > 1000
    code, out, _ = say("magnify", stage, "--json")
    content = json.loads(out)
    assert content["periodic"] is True
    assert {"leg.upper", "choke", "store"} <= {e["name"] for e in content["stress"]}


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["step"], "say which stretch"),
        (["step", "--from", "1 A", "--to", "2ms"], "not a time"),
        (["step", "--from", "3.9ms", "--to", "5ms"], "after the end of `step`"),
        (["stop", "--from", "1ms", "--to", "2ms"], "there is no study `stop`"),
    ],
)
def test_magnify_refuses(stage: Path, say, words: list[str], said: str) -> None:
    code, _, err = say("magnify", stage, *words)
    assert code == 2
    assert said in err


@pytest.fixture
def scope(tmp_path: Path) -> Path:
    """The stage's choke current around the load step, measured with a gain, an offset and noise; a gate beside it."""
    import polewise

    window = polewise.from_text(STAGE.replace("    STRESS\n", "")).magnify("step", 0.7e-3, 1.9e-3, keep=["choke.i", "leg.duty"])
    t = np.linspace(0.7e-3, 1.9e-3, 24001)
    i = 1.02 * window.at("choke.i", t) + 0.05 + np.random.default_rng(1).normal(0.0, 5e-3, t.size)
    gate = 5.0 * window.at("leg.duty", t)
    file = tmp_path / "scope.csv"
    rows = "\n".join(f"{a * 1e3:.7f},{b:.5f},{c:.2f}" for a, b, c in zip(t - 0.7e-3, i, gate))
    file.write_text(f"Bench record,invented\ntime,current,gate\nms,A,V\n{rows}\n", encoding="utf-8")
    return file


@pytest.mark.parametrize("period", [["--rate", "100kHz"], ["--gate", "gate"], []])
def test_average(scope: Path, say, period: list[str]) -> None:
    code, out, err = say("average", scope, "--channel", "current", "--json", *period)
    assert (code, err) == (0, "")
    content = json.loads(out)
    assert content["rate_hz"] == pytest.approx(1e5, rel=1e-4)
    assert content["channels"][0]["averages"][5] == pytest.approx(1.02 * 14 / 3 + 0.05, abs=0.02)


def test_average_against_a_study(scope: Path, stage: Path, say, tmp_path: Path) -> None:
    words = ["average", scope, "--gate", "gate", "--channel", "current", "--match", "current=choke.i", "--against", stage, "step"]
    code, out, err = say(*words, "--out", tmp_path / "fit")
    assert (code, err) == (0, "")
    assert "choke.i" in out
    assert {p.name for p in (tmp_path / "fit").iterdir()} == {"scope.current.average.csv", "scope.current.fit.png"}
    fit = json.loads(say(*words, "--json", "--offset", "current=50mA")[1])["fits"][0]
    assert fit["gain"] == pytest.approx(1.02, rel=3e-3)
    assert fit["offset"] == pytest.approx(0.0, abs=0.02)
    assert fit["delay_s"] == pytest.approx(-0.7e-3, abs=2e-6)
    assert fit["rms_relative"] < 0.01


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["--rate", "40 V"], "does not fit here"),
        (["--channel", "curent"], "no channel `curent`"),
        (["--gate", "current2"], "no channel"),
        (["--rate", "20GHz"], "too few to average"),
        (["--offset", "current"], "not of the form"),
    ],
)
def test_average_refuses(scope: Path, say, words: list[str], said: str) -> None:
    code, _, err = say("average", scope, *words)
    assert code == 2
    assert said in err


def test_average_of_what_is_no_waveform(tmp_path: Path, say) -> None:
    file = tmp_path / "text.csv"
    file.write_text("nothing here\n", encoding="utf-8")
    assert say("average", file)[0] == 2
    assert say("average", tmp_path / "none.csv")[0] == 2
