"""The command line as a user types it: what is printed, what is written, and the exit code."""

from __future__ import annotations

import csv
import json
import re
import subprocess
import sys
import threading
from collections.abc import Callable
from pathlib import Path
from xml.etree import ElementTree

import click
import pyarrow.parquet as parquet
import pytest

from polewise.terminal import main as terminal
from polewise.terminal.main import run_command_line

GOOD = """title "Step-down on a bench"
reference gnd
given duty = 0.5
assembly stage(inp, inn, out) {
    given L = 50 uH
    input drive
    leg:   pole(inp, inn, x, duty = drive, rate = 100 kHz, upper = transistor(10 mohm), lower = diode(0.7 V))
    choke: x --[r: 5 mohm]--[l: L]-- out
    cap:   out --[200 uF]-- inn
}
supply: vin --[24 V]-- gnd
one:    stage(vin, gnd, out, drive = duty)
load:   out --[ohms]-- gnd
latch ohms = 4 ohm
study load_step "the load doubles" {
    start settled
    run for 2 ms
    at 200 us: set ohms = 2 ohm
    keep out.v, one.choke.i
    dip:     require out.v above 5 V after 200 us
    current: require one.choke.i below 12 A  "the choke saturates"
}
study idle {
    start settled
    run for 1 ms
    keep out.v
    steady: require out.v within 0 V .. 24 V
}
"""
TOO_MUCH = """title "More than the line can carry"
reference gnd
line:   gnd --[u: -100 V]--[r: 0.1 ohm]-- b
load:   b --[30 kW above 50 V]-- gnd
keeper: b --[1 mF]-- gnd
study one {
    start settled
    run for 1 ms
}
study two {
    start cold
    run for 1 us
    keep b.v
    require b.v below 200 V
}
"""
FAILING = GOOD.replace("out.v above 5 V", "out.v above 20 V")


@pytest.fixture
def good(tmp_path: Path) -> Path:
    path = tmp_path / "bench.pole"
    path.write_text(GOOD, encoding="utf-8")
    return path


@pytest.fixture
def failing(tmp_path: Path) -> Path:
    path = tmp_path / "failing.pole"
    path.write_text(FAILING, encoding="utf-8")
    return path


@pytest.fixture
def say(capsys: pytest.CaptureFixture[str]) -> Callable[..., tuple[int, str, str]]:
    def run(*arguments: object) -> tuple[int, str, str]:
        code = run_command_line([str(a) for a in arguments])
        said = capsys.readouterr()
        assert "Traceback" not in said.out + said.err
        return code, said.out, said.err

    return run


# ---------------------------------------------------------------- check, settle, format, explain


def test_check_says_what_was_read(good: Path, say) -> None:
    code, out, err = say("check", good)
    assert code == 0
    assert err == ""
    assert "Step-down on a bench" in out
    assert "1 pole" in out
    assert "2 studies, 3 requirements" in out
    assert re.search(r"one\.leg\s+one\.choke\.l\s+1", out)
    assert re.search(r"load_step\s+settled\s+2 ms\s+2\s+the load doubles", out)
    assert max(len(line) for line in out.splitlines()) <= 100


def test_check_as_json(good: Path, say) -> None:
    code, out, _ = say("check", good, "--json")
    content = json.loads(out)
    assert content["exit_code"] == code == 0
    assert content["overview"]["counts"]["poles"] == 1
    assert content["overview"]["chokes"] == {"one.leg": ["one.choke.l"]}


def test_everything_wrong_is_told_at_once(tmp_path: Path, say) -> None:
    path = tmp_path / "wrong.pole"
    path.write_text("reference gnd\na: x --[12 mohm + 3 uH]-- gnd\nb: x --[nothing]-- gnd\n", encoding="utf-8")
    code, out, err = say("check", path)
    assert code == 2
    assert out == ""
    assert "wrong.pole:2:" in err
    assert "wrong.pole:3:" in err
    assert err.rstrip().endswith("2 errors")
    code, out, _ = say("run", path, "--json")
    assert code == 2
    assert [d["place"]["line"] for d in json.loads(out)["diagnostics"]] == [2, 3]


def test_settle_prints_the_operating_point(good: Path, say) -> None:
    code, out, _ = say("settle", good)
    assert code == 0
    assert re.search(r"one\.leg\s+continuous\s+0\.5\s", out)
    assert re.search(r"supply\s+vin to gnd\s+-[\d.]+ A\s+24 V\s+delivers [\d.]+ W", out)
    assert "absorbed by loads" in out
    assert max(len(line) for line in out.splitlines()) <= 100


def test_settle_as_json_balances(good: Path, say) -> None:
    content = json.loads(say("settle", good, "--json")[1])
    power = content["power"]["electrical"]
    assert power["delivered_w"] == pytest.approx(power["absorbed_w"] + power["lost_w"], rel=1e-9)
    assert content["values"]["out.v"]["unit"] == "V"
    assert content["poles"][0]["mode"] == "continuous"


def test_given_from_the_command_line(good: Path, say) -> None:
    base = json.loads(say("settle", good, "--json")[1])["values"]["out.v"]["value"]
    more = json.loads(say("settle", good, "--json", "--given", "duty=0.75")[1])["values"]["out.v"]["value"]
    assert more > 1.4 * base
    code, _, err = say("settle", good, "--given", "dutty=0.75")
    assert code == 2
    assert "duty" in err
    assert say("settle", good, "--given", "one.L = 3 V")[0] == 2
    assert say("settle", good, "--given", "nonsense")[0] == 2


def test_format_is_canonical_and_stable(good: Path, tmp_path: Path, say) -> None:
    code, out, _ = say("format", good)
    assert code == 0
    again = tmp_path / "again.pole"
    again.write_text(out, encoding="utf-8")
    assert say("format", again)[1] == out
    assert say("check", again)[0] == 0
    assert good.read_text(encoding="utf-8") == GOOD


def test_explain(say) -> None:
    code, out, _ = say("explain")
    assert code == 0
    assert "dangling-node" in out.splitlines()
    code, out, _ = say("explain", "dangling-node")
    assert code == 0
    assert "**Repair.**" in out
    code, _, err = say("explain", "dangling-nod")
    assert code == 2
    assert "dangling-node" in err
    assert say("explain", "../../etc/passwd")[0] == 2


@pytest.mark.parametrize("command", ["check", "settle", "run", "format"])
def test_missing_and_unreadable_files(command: str, tmp_path: Path, say) -> None:
    for path in (tmp_path / "nothing.pole", tmp_path):
        code, out, err = say(command, path)
        assert code == 2
        assert out == ""
        assert "error" in err


@pytest.mark.parametrize("arguments", [["nonsense"], ["run"], ["run", "x.pole", "--tolerance", "7"], ["settle", "--what", "x"], ["check", "a", "b"]])
def test_wrong_calls_end_with_2(arguments: list[str], say) -> None:
    assert say(*arguments)[0] == 2


@pytest.mark.parametrize("command", ["check", "settle", "run", "trust", "magnify", "average", "explain", "format"])
def test_help_reads_well(command: str, say) -> None:
    code, out, _ = say(command, "--help")
    assert code == 0
    assert "…" not in out
    assert "..." not in out.replace("[STUDY]...", "")
    assert not [line for line in out.splitlines() if len(line) > 100]


# ---------------------------------------------------------------- run


def test_run_holds(good: Path, say) -> None:
    code, out, err = say("run", good)
    assert code == 0
    assert err == ""
    assert "load_step" in out
    assert "idle" in out
    assert "Both requirements hold." in out
    assert re.search(r"200 us .*ohms = 2 ohm", out)
    assert max(len(line) for line in out.splitlines()) <= 100


def test_run_one_study(good: Path, say) -> None:
    out = say("run", good, "idle")[1]
    assert "idle" in out
    assert "load_step" not in out


def test_a_requirement_that_fails(failing: Path, say) -> None:
    code, out, _ = say("run", failing, "load_step")
    assert code == 1
    assert "FAILS" in out
    assert "below its limit of 20 V" in out
    assert "1 of 2 requirements fails." in out


def test_files_of_a_run(good: Path, tmp_path: Path, say) -> None:
    out = tmp_path / "new" / "out"
    assert say("run", good, "load_step", "--out", out, "--csv")[0] == 0
    assert {p.name for p in out.iterdir()} == {f"load_step.{ending}" for ending in ("parquet", "csv", "json", "png", "svg")}
    table = parquet.read_table(out / "load_step.parquet")
    assert table.column_names == ["time", "step point", "out.v", "one.choke.i"]
    assert table.schema.field("one.choke.i").metadata[b"unit"] == b"A"
    lines = list(csv.reader((out / "load_step.csv").read_text(encoding="utf-8").splitlines()))
    assert lines[0] == ["time (s)", "out.v (V)", "one.choke.i (A)"]
    assert float(lines[-1][0]) == pytest.approx(2e-3)
    summary = json.loads((out / "load_step.json").read_text(encoding="utf-8"))
    assert summary["complete"] is True
    assert summary["verdict"]["passed"] is True
    assert summary["columns"][1] == {"name": "one.choke.i", "unit": "A", "role": "kept"}
    assert [event["time_s"] for event in summary["events"]] == [pytest.approx(2e-4)]


def test_no_figure(good: Path, tmp_path: Path, say) -> None:
    assert say("run", good, "idle", "--out", tmp_path / "o", "--no-figure")[0] == 0
    assert {p.suffix for p in (tmp_path / "o").iterdir()} == {".parquet", ".json"}


def test_junit_and_json(failing: Path, tmp_path: Path, say) -> None:
    code, out, _ = say("run", failing, "--junit", tmp_path / "j.xml", "--json")
    assert code == 1
    root = ElementTree.parse(tmp_path / "j.xml").getroot()
    assert (root.get("tests"), root.get("failures")) == ("3", "1")
    case = root.find(".//testcase[@name='dip']")
    assert case is not None
    assert case.get("file") == "failing.pole"
    content = json.loads(out)
    assert content["exit_code"] == 1
    assert [s["exit_code"] for s in content["studies"]] == [1, 0]
    verdict = content["studies"][0]["verdict"]["requirements"][0]
    assert verdict["unit"] == "V"
    assert verdict["margin"] < 0.0


def test_csv_needs_a_folder(good: Path, say) -> None:
    code, _, err = say("run", good, "--csv")
    assert code == 2
    assert "--out" in err


def test_unknown_study(good: Path, say) -> None:
    code, _, err = say("run", good, "load_stepp")
    assert code == 2
    assert "load_step" in err


def test_no_study(tmp_path: Path, say) -> None:
    path = tmp_path / "a.pole"
    path.write_text("reference gnd\nsource: a --[5 V]-- gnd\nr: a --[1 ohm]-- gnd\n", encoding="utf-8")
    code, _, err = say("run", path)
    assert code == 2
    assert "no study" in err


def test_no_operating_point_ends_with_3_and_the_rest_runs(tmp_path: Path, say) -> None:
    path = tmp_path / "a.pole"
    path.write_text(TOO_MUCH, encoding="utf-8")
    code, out, err = say("run", path, "--junit", tmp_path / "j.xml")
    assert code == 3
    assert "study one could not be finished" in err
    assert "25 kW" in err  # 100 V through 0.1 ohm delivers at most 100^2 / (4 * 0.1) W
    assert "The requirement holds." in out
    assert ElementTree.parse(tmp_path / "j.xml").getroot().get("errors") == "1"


def test_an_error_of_our_own_is_an_apology(good: Path, say, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("polewise.terminal.check_command.run_check", lambda *_: 1 // 0)
    code, _, err = say("check", good)
    assert code == 3
    assert err.startswith("Sorry: polewise itself failed (ZeroDivisionError)")
    assert terminal.DETAILS_VARIABLE in err
    assert len(err.splitlines()) == 1


def test_details_on_request(good: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("polewise.terminal.check_command.run_check", lambda *_: 1 // 0)
    monkeypatch.setenv(terminal.DETAILS_VARIABLE, "1")
    assert run_command_line(["check", str(good)]) == 3
    assert "Traceback" in capsys.readouterr().err


def test_a_missing_extra_is_told_before_the_run(good: Path, tmp_path: Path, say, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "matplotlib", None)
    monkeypatch.setitem(sys.modules, "matplotlib.figure", None)
    code, out, err = say("run", good, "--out", tmp_path / "o")
    assert code == 2
    assert out == ""
    assert 'pip install "polewise[figures]"' in err
    assert not (tmp_path / "o").exists()


def test_commands_run_outside_the_main_thread(good: Path) -> None:
    codes: list[int] = []
    thread = threading.Thread(target=lambda: codes.append(run_command_line(["run", str(good), "idle"])))
    thread.start()
    thread.join()
    assert codes == [0]


def test_no_colour_codes_in_a_pipe(good: Path) -> None:
    done = subprocess.run([sys.executable, "-m", "polewise", "run", str(good), "idle"], capture_output=True, text=True, check=False)
    assert done.returncode == 0
    assert "\x1b" not in done.stdout + done.stderr


def test_a_reader_that_leaves_early_is_no_error(good: Path) -> None:
    done = subprocess.run(
        f"'{sys.executable}' -m polewise check '{good}' | true; exit ${{PIPESTATUS[0]}}",
        shell=True,
        executable="/bin/bash",
        capture_output=True,
        text=True,
        check=False,
    )
    assert "Traceback" not in done.stderr
    assert "Exception" not in done.stderr


def test_every_command_has_a_short_help() -> None:
    assert all(isinstance(c, click.Command) and c.get_short_help_str(100).endswith(".") for c in terminal.commands.commands.values())
