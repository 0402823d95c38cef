"""Make the trust report of a circuit at its operating point, and of a study that has been run."""

from __future__ import annotations

from collections.abc import Mapping
from contextlib import AbstractContextManager
from dataclasses import replace
from typing import TYPE_CHECKING

from polewise.analysis.beats import find_beats
from polewise.analysis.carriers import carriers_of
from polewise.analysis.standpoint import Standpoint
from polewise.analysis.trust import Finding, Subject, TrustLimits, TrustReport, put_together
from polewise.analysis.trust_points import PointView, boundary_findings, loop_findings, mode_findings
from polewise.analysis.trust_questions import question_findings
from polewise.analysis.trust_ripple import ripple_findings
from polewise.analysis.trust_waveforms import content_findings, pinned_findings, watched_quantities
from polewise.circuit.model import Circuit
from polewise.errors import PolewiseError
from polewise.network.graph import Network
from polewise.results.plan import RecordPlan
from polewise.results.recording import Column
from polewise.results.study_run import StudyPlan

if TYPE_CHECKING:
    from polewise.results.result import Result
    from polewise.solve.initial import Snapshot


def watching(plan: StudyPlan) -> StudyPlan:
    """The same plan that also records when duties stand at their limits; the report needs it."""
    if plan.study.magnifies is not None:
        return plan
    record = plan.record
    more = [quantity for _, quantity in watched_quantities(plan.circuit) if quantity.name not in {c.name for c in record.columns}]
    columns = tuple(Column(q.name, q.dimension, q.is_condition, "judged") for q in more)
    return replace(plan, record=RecordPlan((*record.outputs, *more), (*record.columns, *columns), record.judged))


def trust_of(
    circuit: Circuit,
    network: Network,
    inputs: Mapping[str, float],
    guard: AbstractContextManager[object],
    *,
    plan: StudyPlan | None = None,
    result: Result | None = None,
    end: Snapshot | None = None,
    limits: TrustLimits | None = None,
) -> TrustReport:
    """The report.

    Args:
        circuit, network: as the study's givens make them. inputs: values of top-level inputs that differ.
        guard: held while the expression graph grows.
        plan, result: of a study that was run, with `watching` columns. end: where it stood at its end.
        limits: thresholds; None: the documented ones.
    """
    limits = TrustLimits() if limits is None else limits
    carriers = carriers_of(circuit)
    study = None if plan is None else plan.study.name
    if carriers is None:
        return put_together(study, (), (), ())
    findings: list[Finding] = []
    notes: list[str] = []
    subjects: list[tuple[Subject, str]] = [("pole", c.pole) for c in carriers.each]
    snapshot = end
    with guard:
        findings += find_beats(circuit, network, carriers, limits)
        for stand in _places(Standpoint(circuit, network, inputs, study), plan, end):
            try:
                view = PointView(stand, carriers)
            except PolewiseError as error:
                notes.append(f"loops, modes and conduction boundaries: there is no operating point ({error.diagnostic.headline})")
                continue
            snapshot = view.snapshot if snapshot is None else snapshot
            if not view.moves:
                findings += boundary_findings(view, limits)
            for check in (loop_findings, mode_findings):
                more, said = check(view, limits)
                findings += more
                notes += [note for note in said if note not in notes]
    if snapshot is not None:
        more, said = ripple_findings(circuit, network, study, carriers, snapshot, limits, guard)
        findings += more
        notes += said
    if plan is not None and result is not None:
        subjects += [("quantity", c.name) for c in result.recording.columns if c.role == "kept" and not c.is_condition]
        subjects += [("requirement", r.name) for r in plan.study.requirements]
        findings += question_findings(circuit, plan.study, carriers)
        findings += content_findings(circuit, result, carriers, limits)
        last = result.facts.reached_s
        windows = [(r.name, r.window_s[0], last if r.window_s[1] is None else min(r.window_s[1], last)) for r in plan.study.requirements]
        recorded = {c.name for c in result.recording.columns}
        watched = [w for w, _ in watched_quantities(circuit) if w.column in recorded]
        findings += pinned_findings(watched, result, carriers, limits, windows)
    return put_together(study, subjects, _gravest(findings), notes)


def _places(rest: Standpoint, plan: StudyPlan | None, end: Snapshot | None) -> list[Standpoint]:
    """Where loops, modes and boundaries are looked at: the operating point, and where a study ended if something happened in it.

    A study that starts cold or from another one need not have an operating point at its start, so only its end is looked at.
    """
    if plan is None or end is None:
        return [rest]
    then = replace(rest, snapshot=end)
    if plan.study.start != "settled":
        return [then]
    eventful = plan.study.time_events or plan.study.condition_events or plan.circuit.time_events or plan.circuit.condition_events
    return [rest, then] if eventful else [rest]


def _gravest(findings: list[Finding]) -> list[Finding]:
    """One finding for each check of a subject: what was found at several places is told once, at its worst."""
    worst: dict[tuple[str, str, str], Finding] = {}
    for finding in findings:
        key = (finding.kind, finding.name, finding.check)
        if key not in worst or (finding.trust, finding.nearness) > (worst[key].trust, worst[key].nearness):
            worst[key] = finding
    return list(worst.values())
