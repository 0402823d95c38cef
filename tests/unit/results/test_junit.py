"""JUnit XML: counts, failures, errors, and text that would break XML."""

from __future__ import annotations

from dataclasses import replace
from xml.etree import ElementTree

import numpy as np

from polewise.results.junit import StudyReport, junit_xml
from polewise.results.verdict import judge

from .recorded import judged, recording

RECORD = recording(list(np.linspace(0.0, 1.0, 11)), {"v": lambda t: t})


def _verdict(*highs: float):
    return judge("s<1>", tuple(judged("v", None, high) for high in highs), RECORD, planned_end_s=1.0, reached_s=1.0)


def test_counts_and_cases() -> None:
    root = ElementTree.fromstring(junit_xml('A & B "pier"', [StudyReport(_verdict(2.0, 0.5), 0.25), StudyReport(_verdict(3.0), 0.5)]))
    assert root.tag == "testsuites"
    assert (root.get("tests"), root.get("failures"), root.get("errors")) == ("3", "1", "0")
    assert root.get("name") == 'A & B "pier"'
    assert root.get("time") == "0.750"
    first, second = root.findall("testsuite")
    assert first.get("name") == "s<1>"
    assert [case.find("failure") is not None for case in first.findall("testcase")] == [False, True]
    failure = first.findall("testcase")[1].find("failure")
    assert failure is not None
    assert "above its limit of 500 mV" in (failure.get("message") or "")
    assert second.get("failures") == "0"


def test_a_study_that_could_not_finish_is_an_error() -> None:
    root = ElementTree.fromstring(junit_xml("t", [StudyReport(_verdict(2.0), 0.1, trouble="the step became too small")]))
    assert root.get("errors") == "1"
    assert root.find(".//error").get("message") == "the step became too small"


def test_control_characters_do_not_break_it() -> None:
    verdict = _verdict(2.0)
    wild = replace(verdict, requirements=tuple(replace(r, name="a\x00b\x1b", document="\ud800 ]]> <") for r in verdict.requirements))
    root = ElementTree.fromstring(junit_xml("t\x07", [StudyReport(wild, 0.0)]))
    assert root.find(".//testcase").get("name") == "ab"
