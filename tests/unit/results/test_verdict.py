"""Requirements judged on recordings with known answers."""

from __future__ import annotations

import math

import numpy as np
import pytest

from polewise.grammar import units
from polewise.results.failures import UnknownName
from polewise.results.measures import MEASURES
from polewise.results.plan import Judged
from polewise.results.recording import Recording
from polewise.results.verdict import RequirementVerdict, judge
from polewise.results.wording import difference_text, preferred_unit, value_text

from .recorded import judged, recording

EDGES = list(np.linspace(0.0, 1.0, 101))


def _one(one: Judged, record: Recording, *, planned_end_s: float = 1.0, reached_s: float = 1.0) -> RequirementVerdict:
    (got,) = judge("s", (one,), record, planned_end_s=planned_end_s, reached_s=reached_s).requirements
    return got


def test_within_names_the_nearer_limit_and_its_margin() -> None:
    record = recording(EDGES, {"v": lambda t: 765.0 + 35.0 * math.sin(2.0 * math.pi * t)})
    got = _one(judged("v", 700.0, 820.0), record)
    assert got.passed
    assert (got.side, got.limit) == ("below", 820.0)
    assert got.value == pytest.approx(800.0, abs=1e-6)
    assert got.margin == pytest.approx(20.0, abs=1e-6)
    assert got.margin_percent == pytest.approx(100.0 * 20.0 / 820.0, rel=1e-6)
    assert got.time_s == pytest.approx(0.25, abs=1e-4)


def test_a_crossed_limit_fails_with_a_negative_margin() -> None:
    got = _one(judged("v", 730.0, 820.0), recording(EDGES, {"v": lambda t: 760.0 + 40.0 * math.sin(2.0 * math.pi * t)}))
    assert not got.passed
    assert got.margin == pytest.approx(-10.0, abs=1e-6)
    assert got.time_s == pytest.approx(0.75, abs=1e-4)
    assert "below its limit of 730 V" in got.why


def test_a_value_at_its_limit_holds() -> None:
    got = _one(judged("v", None, 0.97), recording(EDGES, {"v": lambda t: 0.97}))
    assert got.passed
    assert got.margin == 0.0


def test_a_dip_between_recorded_points_is_found() -> None:
    got = _one(judged("v", 0.001), recording([0.0, 1.0], {"v": lambda t: (t - 0.4) ** 2}))
    assert not got.passed
    assert got.time_s == pytest.approx(0.4, rel=1e-9)


def test_both_sides_of_a_jump_count() -> None:
    record = recording([0.0, 0.5, 1.0], {"v": lambda t: 1.0 + t if t < 0.5 else 0.5}, jumps=[0.5])
    assert _one(judged("v", None, 1.4), record).value == pytest.approx(1.5)
    assert _one(judged("v", 0.6), record).value == 0.5
    assert _one(judged("v", None, 1.4, window_s=(0.5, None)), record).passed  # the side before belongs to the time before
    assert _one(judged("v", 0.6, window_s=(0.0, 0.5)), record).passed


def test_a_limit_that_varies() -> None:
    record = recording(EDGES, {"v": lambda t: 1.0 + t, "limit": lambda t: 1.5 + 0.25 * t})
    got = _one(judged("v", None, "limit"), record)
    assert not got.passed
    assert got.margin == pytest.approx(-0.25)
    assert got.limit == pytest.approx(1.75)
    assert got.time_s == pytest.approx(1.0)


def test_condition() -> None:
    record = recording(EDGES, {"c": lambda t: float(t >= 0.25 - 1e-12), "never": lambda t: 0.0}, condition=["c", "never"])
    got = _one(judged("c", measure="condition"), record)
    assert not got.passed
    assert got.time_s == 0.0
    assert got.value is None
    assert got.margin is None
    assert _one(judged("c", measure="condition", window_s=(0.3, None)), record).passed
    assert "never" in _one(judged("never", measure="condition"), record).why


def test_condition_in_force_when_the_window_opens_between_points() -> None:
    record = recording([0.0, 0.5, 1.0], {"c": lambda t: float(t > 0.6)}, condition=["c"])
    assert not _one(judged("c", measure="condition", window_s=(0.55, 0.58)), record).passed


def test_condition_that_comes_true_at_the_instant_the_window_opens() -> None:
    record = recording([0.0, 0.5, 1.0], {"c": lambda t: float(t >= 0.5)}, jumps=[0.5], condition=["c"])
    assert _one(judged("c", measure="condition", window_s=(0.5, None)), record).passed
    assert not _one(judged("c", measure="condition", window_s=(0.0, 0.5)), record).passed


@pytest.mark.parametrize("bad", [math.nan, math.inf])
@pytest.mark.parametrize("measure", ["value", "condition", "mean", "peak", "final"])
def test_what_is_not_a_number_never_passes(bad: float, measure: str) -> None:
    record = recording([0.0, 0.5, 1.0], {"v": lambda t: bad if t == 0.5 and (math.isnan(bad) or measure != "condition") else 0.0})
    low, high = (None, None) if measure == "condition" else (-10.0, 10.0)
    got = _one(judged("v", low, high, measure=measure), record)
    assert not got.passed


def test_a_study_that_stopped_early_is_not_judged_as_whole() -> None:
    record = recording(list(np.linspace(0.0, 0.4, 20)), {"v": lambda t: t})
    late = _one(judged("v", None, 1.0, window_s=(0.5, None)), record, reached_s=0.4)
    assert not late.passed
    assert not late.evaluated
    assert "stopped at 400 ms" in late.why
    part = _one(judged("v", None, 1.0), record, reached_s=0.4)
    assert not part.passed
    assert not part.evaluated
    seen = _one(judged("v", None, 1.0, window_s=(0.0, 0.3)), record, reached_s=0.4)
    assert seen.passed
    broken = _one(judged("v", None, 0.2), record, reached_s=0.4)  # what failed before the stop has failed
    assert not broken.passed
    assert broken.evaluated
    assert broken.value == pytest.approx(0.4)


def test_windows_beyond_the_study() -> None:
    record = recording(EDGES, {"v": lambda t: t})
    for window in ((2.0, None), (0.5, 2.0)):
        got = _one(judged("v", None, 5.0, window_s=window), record)
        assert not got.passed
        assert not got.evaluated
        assert "study's end" in got.why


def test_an_instant_as_a_window() -> None:
    got = _one(judged("v", None, 0.6, window_s=(0.5, 0.5)), recording(EDGES, {"v": lambda t: t}))
    assert got.passed
    assert got.value == pytest.approx(0.5)


# ---------------------------------------------------------------- measures


def _measured(measure: str, function, *, parameters: tuple[float, ...] = (), high: float = 1e9, **more) -> RequirementVerdict:
    dimension = units.TIME if measure == "settling_time" else units.VOLTAGE
    record = recording(list(np.linspace(0.0, 1.0, 401)), {"v": function})
    return _one(judged("v", None, high, measure=measure, parameters=parameters, dimension=dimension, **more), record)


def test_settling_time_of_an_exponential() -> None:
    got = _measured("settling_time", lambda t: 10.0 + math.exp(-t / 0.02), parameters=(0.01,))
    assert got.value == pytest.approx(0.02 * math.log(10.0), rel=1e-6)  # e^(-t/tau) = 0.01 * 10
    assert got.time_s == got.value


def test_settling_time_counts_from_the_windows_start() -> None:
    got = _measured("settling_time", lambda t: 10.0 + math.exp(-t / 0.02), parameters=(0.01,), window_s=(0.03, None))
    assert got.value == pytest.approx(0.02 * math.log(10.0) - 0.03, rel=1e-5)


def test_settled_from_the_start() -> None:
    assert _measured("settling_time", lambda t: 10.0, parameters=(0.01,)).value == 0.0


def test_settling_to_zero_has_no_band() -> None:
    got = _measured("settling_time", lambda t: 0.0, parameters=(0.01,))
    assert not got.passed
    assert not got.evaluated


def test_overshoot_of_a_second_order_step() -> None:
    damping, rate = 0.4, 60.0
    damped = rate * math.sqrt(1.0 - damping**2)

    def step(t: float) -> float:
        return 5.0 * (1.0 - math.exp(-damping * rate * t) * (math.cos(damped * t) + damping * rate / damped * math.sin(damped * t)))

    got = _measured("overshoot", step)
    assert got.value == pytest.approx(math.exp(-math.pi * damping / math.sqrt(1.0 - damping**2)), rel=1e-5)  # the textbook form
    assert got.time_s == pytest.approx(math.pi / damped, rel=1e-3)


def test_overshoot_downwards() -> None:
    got = _measured("overshoot", lambda t: 10.0 - 4.0 * (1.0 - math.exp(-t / 0.05) * math.cos(40.0 * t)))
    assert got.value is not None
    assert 0.0 < got.value < 1.0


def test_overshoot_without_a_change_is_no_question() -> None:
    assert not _measured("overshoot", lambda t: 10.0).evaluated


def test_averages_weigh_by_time() -> None:
    edges = [0.0, 0.001, 0.002, 0.003, 1.0]
    record = recording(edges, {"v": lambda t: 3.0 * t**2})
    mean = _one(judged("v", None, 9.0, measure="mean"), record)
    assert mean.value == pytest.approx(1.0, rel=1e-12)
    rms = _one(judged("v", None, 9.0, measure="rms"), record)
    assert rms.value == pytest.approx(math.sqrt(9.0 / 5.0), rel=1e-12)


def test_extremes_and_final() -> None:
    def wave(t: float) -> float:
        return 2.0 + math.sin(2.0 * math.pi * t)

    assert _measured("peak", wave).value == pytest.approx(3.0, abs=1e-7)
    assert _measured("lowest", wave).value == pytest.approx(1.0, abs=1e-7)
    assert _measured("swing", wave).value == pytest.approx(2.0, abs=1e-7)
    assert _measured("final", wave).value == pytest.approx(2.0, abs=1e-7)
    assert _measured("integral", wave).value == pytest.approx(2.0, abs=1e-7)


def test_every_measure_says_what_it_is() -> None:
    assert all(measure.document.endswith(".") for measure in MEASURES.values())


def test_requirement_by_name() -> None:
    record = recording(EDGES, {"v": lambda t: t})
    verdict = judge("s", (judged("v", None, 2.0),), record, planned_end_s=1.0, reached_s=1.0)
    assert verdict.passed
    assert verdict["r"].passed
    with pytest.raises(UnknownName, match="has no requirement"):
        verdict["q"]


# ---------------------------------------------------------------- units as written


@pytest.mark.parametrize(
    ("text", "dimension", "unit"),
    [
        ("tap3.absorbed below 250 J", units.ENERGY, "J"),
        ("tap3.absorbed below 2 kJ", units.ENERGY, "J"),
        ("shaft.torque below 3 N*m", units.TORQUE, "N*m"),
        ("shaft.speed above 70 rad/s after 2 s", units.RATE, "rad/s"),
        ("pll.f within 49 Hz .. 51 Hz", units.RATE, "Hz"),
        ("copper.temp below 110 degC", units.TEMPERATURE, "degC"),
        ("bus.v within 700 V .. limit2", units.VOLTAGE, "V"),
        ("b2.v below limit", units.VOLTAGE, None),
        ("x below 3 bananas", units.VOLTAGE, None),
    ],
)
def test_values_are_told_in_the_unit_the_requirement_uses(text: str, dimension: units.Dimension, unit: str | None) -> None:
    assert preferred_unit(text, dimension) == unit


def test_degrees_and_their_differences() -> None:
    assert value_text(383.15, units.TEMPERATURE, prefer="degC") == "110 degC"
    assert difference_text(48.6, units.TEMPERATURE, prefer="degC") == "48.6 K"
