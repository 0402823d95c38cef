"""Verdicts as JUnit XML, the open form that CI services read: one suite per study, one case per requirement."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from xml.etree import ElementTree

from polewise.grammar.units import TIME, format_value
from polewise.results.verdict import RequirementVerdict, Verdict


@dataclass(frozen=True, slots=True)
class StudyReport:
    """One study for CI.

    Args:
        verdict: of the study.
        elapsed_s: how long the run took.
        trouble: why the study could not finish, or None.
    """

    verdict: Verdict
    elapsed_s: float
    trouble: str | None = None


def junit_xml(title: str, reports: Sequence[StudyReport]) -> str:
    """The text of a JUnit file.

    Args:
        title: of the netlist; names the whole.
        reports: one per study that was run.
    """
    suites = [_suite(report) for report in reports]
    whole = ElementTree.Element("testsuites", {"name": _clean(title), **_totals(suites), "time": f"{sum(r.elapsed_s for r in reports):.3f}"})
    whole.extend(suites)
    ElementTree.indent(whole)
    return '<?xml version="1.0" encoding="UTF-8"?>\n' + ElementTree.tostring(whole, encoding="unicode") + "\n"


def _suite(report: StudyReport) -> ElementTree.Element:
    verdict = report.verdict
    cases = [_case(verdict.study, requirement) for requirement in verdict.requirements]
    if report.trouble is not None:
        case = ElementTree.Element("testcase", {"classname": _clean(verdict.study), "name": "the study reaches its end"})
        ElementTree.SubElement(case, "error", {"message": _clean(report.trouble)})
        cases.insert(0, case)
    counts = {
        "tests": str(len(cases)),
        "failures": str(sum(case.find("failure") is not None for case in cases)),
        "errors": str(sum(case.find("error") is not None for case in cases)),
        "skipped": "0",
    }
    suite = ElementTree.Element("testsuite", {"name": _clean(verdict.study), **counts, "time": f"{report.elapsed_s:.3f}"})
    suite.extend(cases)
    return suite


def _case(study: str, requirement: RequirementVerdict) -> ElementTree.Element:
    place = {"file": _clean(requirement.span.source.name), "line": str(requirement.span.line)} if requirement.span.source.text else {}
    case = ElementTree.Element("testcase", {"classname": _clean(study), "name": _clean(requirement.name), **place})
    details = "\n".join(_details(requirement))
    if not requirement.passed:
        failure = ElementTree.SubElement(case, "failure", {"message": _clean(requirement.why)})
        failure.text = _clean(details)
    else:
        ElementTree.SubElement(case, "system-out").text = _clean(details)
    return case


def _details(requirement: RequirementVerdict) -> list[str]:
    lines = [requirement.text]
    if requirement.document:
        lines.append(requirement.document)
    for label, text in (("value", requirement.value_text), ("limit", requirement.limit_text), ("margin", requirement.margin_text)):
        if text:
            lines.append(f"{label}: {text}")
    if requirement.time_s is not None:
        lines.append(f"worst at: {format_value(requirement.time_s, TIME, digits=6)}")
    return lines


def _totals(suites: Sequence[ElementTree.Element]) -> dict[str, str]:
    return {key: str(sum(int(suite.attrib[key]) for suite in suites)) for key in ("tests", "failures", "errors")}


def _clean(text: str) -> str:
    """Without the control characters that XML 1.0 does not allow."""
    return "".join(c for c in text if c in "\t\n" or " " <= c <= "\ud7ff" or "\ue000" <= c <= "\ufffd" or c >= "\U00010000")
