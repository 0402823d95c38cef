"""Studies and requirements."""

import pytest

from polewise.circuit.studies import MEASURES
from polewise.results.measures import MEASURES as FOUND_BY

HEAD = """reference gnd
r: a --[1 ohm]-- gnd
a --[5 V]-- gnd
latch u = 5 V
latch ok = false
each k in 1..3 {
    x{k}: a --[1 ohm]-- gnd
}
"""


def test_a_study(build):
    circuit = build(
        HEAD
        + """
study step "a load step" {
    start cold
    run for 120 ms
    tolerance 1e-6
    sampling = mean
    keep a.v, x{*}.i, a.v, u
    at 20 ms: set u = 9 V
    every 1 ms: set ok = not ok
    whenever a.v rises above 4 V: set u = 1 V
    require a.v within 4 V .. 6 V after 25 ms
    recover: require settling_time(a.v, 1 %) below 15 ms after 20 ms  "chargers trip"
    require r.i - 0.5 A below u / 1 ohm during 10 ms .. 20 ms
    require ok or a.v > 3 V
    require peak(abs(a.v)) above 1 V
}
study more {
    start from step at 20 ms
    run for 1 s
}
"""
    )
    study = circuit.studies["step"]
    assert (study.start, study.run_for_s, study.tolerance, study.sampling, study.document) == ("cold", 0.12, 1e-6, "mean", "a load step")
    assert [q.name for q in study.keep] == ["a.v", "x1.i", "x2.i", "x3.i", "u"]
    assert len(study.time_events) == len(study.clock_events) == len(study.condition_events) == 1
    assert not circuit.time_events
    within, recover, below, holds, peak = study.requirements
    g = circuit.graph
    assert (within.name, within.measure, g.value_of(within.low), g.value_of(within.high)) == ("requirement 1", "value", 4.0, 6.0)
    assert within.window_s == (0.025, None)
    assert within.text == "a.v within 4 V .. 6 V after 25 ms"
    assert (recover.name, recover.measure, recover.parameters, recover.subject.name) == ("recover", "settling_time", (0.01,), "a.v")
    assert (recover.low, g.value_of(recover.high), recover.document) == (None, 0.015, "chargers trip")
    assert recover.dimension.s == 1
    assert g.text(below.high) == "latch(u)"
    assert below.window_s == (0.01, 0.02)
    assert (holds.measure, holds.subject.is_condition, holds.low, holds.high) == ("condition", True, None, None)
    assert (peak.measure, peak.subject.name, g.value_of(peak.low)) == ("peak", "abs(a.v)", 1.0)
    more = circuit.studies["more"]
    assert (more.start, more.start_study, more.start_time_s) == ("from", "step", 0.02)


def test_a_study_starts_settled_unless_it_says_otherwise(build):
    assert build(HEAD + "study x {\n run for 1 s\n}\n").studies["x"].start == "settled"


@pytest.mark.parametrize(
    ("order", "code", "marked"),
    [
        ("run for 5 V", "unit-expected", "5 V"),
        ("tolerance 5", "tolerance-range", "5"),
        ("keep a", "not-a-value", "a"),
        ("keep q.v", "unknown-name", "q"),
        ("keep q{*}.v", "nothing-selected", "q{*}.v"),
        ("at 5 s: set q = 3", "unknown-name", "q"),
        ("require a.v within 5 V .. 3 V", "bounds-swapped", "5 V .. 3 V"),
        ("require a.v above 5 A", "unit-expected", "5 A"),
        ("require a.v", "requirement-bound", "require a.v"),
        ("require ok above 3", "requirement-bound", "ok"),
        ("require peak(a.v)", "requirement-bound", "require peak(a.v)"),
        ("require setling_time(a.v, 1 %) below 3 ms", "unknown-measure", "setling_time"),
        ("require settling_time(a.v) below 3 ms", "argument-count", "settling_time(a.v)"),
        ("require settling_time(a.v, 1 V) below 3 ms", "unit-expected", "1 V"),
        ("require settling_time(a.v, 0 %) below 3 ms", "measure-setting", "0 %"),
        ("require settling_time(a.v, 1 %) below 3 V", "unit-expected", "3 V"),
        ("require settling_time(a.v, brand = 1 %) below 3 s", "unknown-setting", "brand"),
        ("require peak(ok) below 3", "condition-as-number", "ok"),
        ("require a.v below 3 V after 5 A", "unit-expected", "5 A"),
        ("require a.v below 3 V during 5 s .. 3 s", "bounds-swapped", "5 s .. 3 s"),
        ("start from nothing at 3 s", "unknown-study", "start from nothing at 3 s"),
        ("start from x at 3 s", "study-circle", "start from x at 3 s"),
        ("given q = 3", "unknown-given", "q"),
        ("given u = 3", "unknown-given", "u"),
    ],
)
def test_wrong_orders(check, order, code, marked):
    run = "" if order.startswith("run") else " run for 10 s\n"
    check(f"{HEAD}study x {{\n{run} {order}\n}}\n", [(code, marked)])


def test_givens_of_a_study_are_checked_in_every_expansion(check, build):
    text = HEAD + "given g1 = 3 V\na --[g1]-- b\nstudy x {\n run for 1 s\n given g1 = 4 A\n}\n"
    check(text, [("unit-expected", "4 A")])
    check(text, [("unit-expected", "4 A")], study="x")
    right = text.replace("4 A", "4 V")
    assert build(right).givens["g1"].value == 3.0
    assert build(right, study="x").givens["g1"].value == 4.0
    assert build(right).studies["x"].has_givens
    check(right.replace("given g1 = 4 V", "given g1 = a.v"), [("varying-given", "a.v")])


def test_times_and_windows(check):
    check(HEAD + "study x {\n run for 1 s\n at 2 s: set ok = true\n}\n", [("after-end", "at 2 s: set ok = true")])
    check(HEAD + "study x {\n run for 1 s\n require ok after 1 s\n}\n", [("after-end", "require ok after 1 s")])
    check(HEAD + "study x {\n require ok after 1 s\n}\n", [("study-run", "x")])
    check(HEAD + "study x {\n run for 1 s\n r1: require ok\n r1: require ok\n}\n", [("declared-twice", "r1: require ok")])
    check(HEAD + "study x {\n run for 1 s\n}\nstudy x {\n run for 1 s\n}\n", [("declared-twice", "x")])


def test_an_unknown_study_to_expand_for(check):
    (found,) = check(HEAD + "study step {\n run for 1 s\n}\n", [("unknown-study", "")], study="setp")
    assert found.hint == "Did you mean `step`?"


def test_measures_are_those_that_results_can_find():
    assert set(MEASURES) == set(FOUND_BY)
    for name, rule in MEASURES.items():
        assert rule.parameters == FOUND_BY[name].parameters
        assert rule.document
