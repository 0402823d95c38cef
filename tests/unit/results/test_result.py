"""Systems and results as a Python caller sees them."""

from __future__ import annotations

import math
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pytest

import polewise

CHARGE = """title "Charge"
reference gnd
given r = 1 kohm
input push = 10 V
supply: src --[push]-- gnd
feed:   src --[r]-- top
store:  top --[c: 1 mF initially 0 V]-- gnd
latch extra = 0 A
bleed:  top --[extra]-- gnd
study charge {
    start cold
    run for 3 s
    keep top.v, feed.i
    reach: require top.v above 9 V after 2.5 s
}
study step {
    start settled
    run for 1 s
    at 250 ms: set extra = 5 mA
    keep top.v, bleed.i
}
study later {
    start from charge at 1 s
    run for 1 s
    keep top.v
}
study thick {
    given r = 2 kohm
    start cold
    run for 1 s
    keep top.v
}
study open_end {
    start cold
}
"""


@pytest.fixture(scope="module")
def system() -> polewise.System:
    return polewise.from_text(CHARGE, name="charge.pole")


def test_values_times_units(system: polewise.System) -> None:
    result = system.run("charge", tolerance=1e-9)
    assert result.names == ("top.v", "feed.i")
    assert result["top.v"] == pytest.approx(10.0 * (1.0 - np.exp(-result.time)), rel=1e-7, abs=1e-8)
    assert result.at("feed.i", [[0.5, 1.0]])[0, 1] == pytest.approx(10e-3 * math.exp(-1.0), rel=1e-6)
    assert (result.unit("top.v"), result.unit("feed.i")) == ("V", "A")
    assert result.complete
    assert result.verdict["reach"].value == pytest.approx(10.0 * (1.0 - math.exp(-2.5)), rel=1e-6)
    assert not result["top.v"].flags.writeable
    assert result.counters["steps"] > 3


def test_both_sides_of_a_jump(system: polewise.System) -> None:
    result = system.run("step")
    at = result["bleed.i"][result.time == 0.25]
    assert at.tolist() == [0.0, 5e-3]
    assert result.events[0].time_s == 0.25
    assert "extra = 5 mA" in result.events[0].text


def test_a_condition_between_points_is_0_or_1() -> None:
    text = CHARGE.replace("latch extra = 0 A", "latch extra = 0 A\nsignal full = top.v > 5 V").replace("keep top.v, feed.i", "keep top.v, full")
    result = polewise.from_text(text).run("charge")
    assert set(result.at("full", np.linspace(0.0, 3.0, 1000)).tolist()) == {0.0, 1.0}
    assert set(result["full"].tolist()) == {0.0, 1.0}
    assert result.unit("full") == "1"


def test_keep_selects_other_quantities(system: polewise.System) -> None:
    result = system.run("charge", keep=["store.c.i", "src.v"])
    assert result.names == ("store.c.i", "src.v")
    assert "top.v" in result  # judged, though not kept
    with pytest.raises(polewise.UnknownName, match=r"feed\.i"):
        result["feed.i"]
    with pytest.raises(polewise.UnknownName):
        system.run("charge", keep=["sto.v"])


def test_times_that_must_be_hit(system: polewise.System) -> None:
    wanted = [0.123456, 1.0, 2.5]
    result = system.run("charge", at=wanted)
    assert set(wanted) <= set(result.time.tolist())
    assert result.events == ()


def test_start_from_another_study(system: polewise.System) -> None:
    result = system.run("later", tolerance=1e-9)
    assert result["top.v"][0] == pytest.approx(10.0 * (1.0 - math.exp(-1.0)), rel=1e-6)
    assert result["top.v"][-1] == pytest.approx(10.0 * (1.0 - math.exp(-2.0)), rel=1e-6)


def test_givens_of_a_study_apply_to_it_alone(system: polewise.System) -> None:
    assert system.run("thick")["top.v"][-1] == pytest.approx(10.0 * (1.0 - math.exp(-0.5)), rel=1e-5)
    assert system.run("charge").at("top.v", 1.0) == pytest.approx(10.0 * (1.0 - math.exp(-1.0)), rel=1e-5)


def test_with_given_leaves_the_first_as_it_was(system: polewise.System) -> None:
    other = system.with_given({"r": "500 ohm"})
    assert other.run("charge").at("top.v", 1.0) == pytest.approx(10.0 * (1.0 - math.exp(-2.0)), rel=1e-5)
    assert system.run("charge").at("top.v", 1.0) == pytest.approx(10.0 * (1.0 - math.exp(-1.0)), rel=1e-5)
    assert other.with_given({"r": 250.0}).run("charge").at("top.v", 1.0) == pytest.approx(10.0 * (1.0 - math.exp(-4.0)), rel=1e-5)
    with pytest.raises(polewise.NetlistError):
        system.with_given({"q": 1})
    with pytest.raises(polewise.NetlistError):
        system.with_given({"r": "3 V"})


def test_with_input(system: polewise.System) -> None:
    assert system.with_input({"push": "24 V"}).settled()["top.v"] == pytest.approx(24.0)
    assert system.with_input({"push": 5}).run("step")["top.v"][0] == pytest.approx(5.0)
    assert system.settled()["top.v"] == pytest.approx(10.0)
    with pytest.raises(polewise.UnknownName):
        system.with_input({"pushh": 5})
    with pytest.raises(polewise.NetlistError, match="asks for a value in V"):
        system.with_input({"push": "5 A"})


HUM = """title "Hum"
reference gnd
source: top --[10 V * sin(2*pi * 1 kHz * time)]-- gnd
tank:   top --[r: 1 ohm]--[l: 1 mH]--[c: 10 uF]-- gnd
study hum {
    start cold
    run for 1 h
    keep tank.i
    require tank.i within -1 kA .. 1 kA
}
"""


def test_a_stopped_run_is_incomplete() -> None:
    told: list[float] = []
    result = polewise.from_text(HUM).run("hum", should_stop=lambda: True, progress=lambda p: told.append(p.share))
    assert not result.complete
    assert result.trouble is None
    assert 0.0 < result.time[-1] < 3600.0
    assert not result.verdict.passed
    assert not result.verdict.requirements[0].evaluated
    assert told
    assert all(0.0 <= share < 1.0 for share in told)
    assert "incomplete" in repr(result)


def test_unknown_study_and_study_without_length(system: polewise.System) -> None:
    with pytest.raises(polewise.UnknownName, match="charge"):
        system.run("chargee")
    with pytest.raises(polewise.NetlistError, match="how long"):
        system.run("open_end")


def test_wrong_text_raises_once_with_everything() -> None:
    with pytest.raises(polewise.NetlistError) as caught:
        polewise.from_text("reference gnd\na: x --[12 mohm + 3 uH]-- gnd\nb: x --[nothing]-- gnd\n", name="w.pole")
    assert [d.span.line for d in caught.value.diagnostics] == [2, 3]
    assert "w.pole:2:" in str(caught.value)


def test_missing_file() -> None:
    with pytest.raises(polewise.NetlistError):
        polewise.load("nowhere/at/all.pole")


def test_threads_agree_with_one_another(system: polewise.System) -> None:
    def final(r: float) -> float:
        return float(system.with_given({"r": r}).run("charge")["top.v"][-1])

    def shared(_: int) -> float:
        return float(system.run("charge", keep=["top.v", "feed.i", "store.c.i"])["top.v"][-1])

    with ThreadPoolExecutor(4) as pool:
        different = list(pool.map(final, [500.0, 1000.0, 2000.0, 4000.0]))
        same = list(pool.map(shared, range(8)))
    assert different == pytest.approx([10.0 * (1.0 - math.exp(-3000.0 / r)) for r in (500.0, 1000.0, 2000.0, 4000.0)], rel=1e-4)
    assert len(set(same)) == 1


def test_to_other_tools(system: polewise.System, tmp_path: Path) -> None:
    result = system.run("step")
    frame = result.to_pandas()
    assert list(frame.columns) == ["top.v", "bleed.i"]
    assert frame.index.name == "time"
    assert frame.attrs["units"] == {"time": "s", "top.v": "V", "bleed.i": "A"}
    data = result.to_xarray()
    assert data["top.v"].attrs["units"] == "V"
    assert data["time"].attrs["units"] == "s"
    assert np.array_equal(data["bleed.i"].values, result["bleed.i"])
    result.write_parquet(tmp_path / "a.parquet")
    again = polewise.open_recorded(tmp_path / "a.parquet")
    assert again.complete
    assert np.array_equal(again["top.v"], result["top.v"])
    assert again.about["study"] == "step"
    result.write_csv(tmp_path / "a.csv")
    assert (tmp_path / "a.csv").read_text(encoding="utf-8").startswith("time (s),top.v (V),bleed.i (A)\n")
    result.figure().savefig(tmp_path / "a.png")


def test_default_selection() -> None:
    system = polewise.from_text(CHARGE.replace("keep top.v, feed.i", ""))
    assert {"src.v", "top.v", "supply.i", "feed.i", "store.i", "bleed.i"} == set(system.run("charge").names)
