"""The trust report: for every pole, kept quantity and requirement, whether a cycle average may be believed, with the number that decided it.

The checks are those of docs/trust.md; each of them is a function elsewhere that returns findings (trust_points.py at the operating point,
trust_waveforms.py on what a run recorded, beats.py and trust_questions.py on the text alone). Here they are put together: the gravest finding
about a subject is its state, and of several that hold, the one nearest to its threshold is told.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from enum import IntEnum
from typing import Literal

Subject = Literal["pole", "quantity", "requirement", "study"]


class Trust(IntEnum):
    """How far an average may be believed."""

    HOLDS = 0
    DOUBTFUL = 1
    NOT_VALID = 2

    @property
    def words(self) -> str:
        """As a report says it."""
        return ("holds", "doubtful", "not valid")[int(self)]


@dataclass(frozen=True, slots=True)
class TrustLimits:
    """Where trust ends. Fractions are of the switching frequency f or as stated; docs/trust.md says where each comes from.

    Args:
        content_doubtful, content_not_valid: frequency of a waveform's content, parts of f; content_energy: share of its AC energy that counts.
        mode_doubtful, mode_not_valid: natural frequency of a mode, parts of f; mode_damping: better damped ones don't count.
        mode_shift: relative shift of a mode when all duties are frozen; one that moves less is outside every control loop.
        crossover_doubtful, crossover_not_valid: of a loop, parts of f; the second only without a sampled model.
        boundary: relative distance of a diode pole from its conduction boundary.
        capacitor_doubtful, capacitor_not_valid: peak-to-peak ripple against the average voltage.
        slope_doubtful, slope_not_valid: of the ripple at a modulator's input against its carrier's slope.
        beat_bandwidth: what a study is taken to resolve, parts of the slower pole's f: poles closer than that beat.
        pinned_periods: a duty at its limit for less than so many periods is not told.
    """

    content_doubtful: float = 1 / 10
    content_not_valid: float = 1 / 3
    content_energy: float = 0.05
    mode_doubtful: float = 1 / 10
    mode_not_valid: float = 1 / 3
    mode_damping: float = 0.5
    mode_shift: float = 0.05
    crossover_doubtful: float = 1 / 10
    crossover_not_valid: float = 1 / 5
    boundary: float = 0.10
    capacitor_doubtful: float = 0.05
    capacitor_not_valid: float = 0.20
    slope_doubtful: float = 0.10
    slope_not_valid: float = 0.50
    beat_bandwidth: float = 1 / 10
    pinned_periods: float = 3.0


@dataclass(frozen=True, slots=True)
class Finding:
    """One check on one subject.

    Args:
        kind, name: the subject. check: a stable word ("crossover", "ripple slope", …).
        trust: what follows. number: what decided, as text. nearness: the number over its first threshold; 1 and more is beyond.
        why: one sentence without a full stop. remedy: what to do, a sentence, "" where nothing needs doing.
    """

    kind: Subject
    name: str
    check: str
    trust: Trust
    number: str
    nearness: float
    why: str
    remedy: str = ""


@dataclass(frozen=True, slots=True)
class TrustRow:
    """One subject: its state, and the finding that decided it (None where nothing could be looked at)."""

    kind: Subject
    name: str
    trust: Trust
    decided: Finding | None
    findings: tuple[Finding, ...]


@dataclass(frozen=True, slots=True)
class TrustReport:
    """All subjects.

    Args:
        study: which, None for the operating point alone. rows: poles, quantities, requirements, the study.
        not_looked_at: what could not be checked and why, sentences.
    """

    study: str | None
    rows: tuple[TrustRow, ...]
    not_looked_at: tuple[str, ...] = ()
    _at: Mapping[str, int] = field(default_factory=dict, repr=False)

    def __getitem__(self, name: str) -> TrustRow:
        """A row by its subject's name.

        Raises:
            UnknownName: nothing of that name was looked at.
        """
        from polewise.results.failures import UnknownName, nearest_names

        if name not in self._at:
            raise UnknownName(name, f"the trust report says nothing about `{name}`", nearest_names(name, self._at))
        return self.rows[self._at[name]]

    @property
    def trust(self) -> Trust:
        """The worst of all."""
        return max((row.trust for row in self.rows), default=Trust.HOLDS)

    @property
    def doubts(self) -> tuple[TrustRow, ...]:
        """Rows that do not hold, the gravest first."""
        return tuple(sorted((r for r in self.rows if r.trust is not Trust.HOLDS), key=lambda r: -int(r.trust)))

    @property
    def findings(self) -> tuple[Finding, ...]:
        """Every finding that does not hold, the gravest first."""
        found = [f for row in self.rows for f in row.findings if f.trust is not Trust.HOLDS]
        return tuple(sorted(found, key=lambda f: (-int(f.trust), -f.nearness)))

    @property
    def nearest(self) -> Finding | None:
        """Of those that hold, the finding nearest to its threshold."""
        held = [f for row in self.rows for f in row.findings if f.trust is Trust.HOLDS]
        return max(held, key=lambda f: f.nearness, default=None)

    def sentence(self) -> str:
        """All of it in one."""
        if self.trust is Trust.HOLDS:
            near = self.nearest
            tail = "" if near is None else f"; nearest to a limit: {near.name}, {near.number}"
            return f"the averages hold for {self._counted()}{tail}"
        words = [
            f"{sum(r.trust is t for r in self.rows)} {t.words}" for t in (Trust.NOT_VALID, Trust.DOUBTFUL) if any(r.trust is t for r in self.rows)
        ]
        return f"{' and '.join(words)} of {self._counted()}"

    def _counted(self) -> str:
        parts = []
        for kind, plural in (("pole", "poles"), ("quantity", "quantities"), ("requirement", "requirements")):
            count = sum(row.kind == kind for row in self.rows)
            if count:
                parts.append(f"{count} {kind if count == 1 else plural}")
        return ", ".join(parts) or "nothing that switches"


def put_together(
    study: str | None, subjects: Sequence[tuple[Subject, str]], findings: Iterable[Finding], not_looked_at: Sequence[str]
) -> TrustReport:
    """A report on subjects from findings about them; findings about further subjects add rows of their own.

    Args:
        subjects: (kind, name), in the order of the report.
    """
    by_subject: dict[tuple[Subject, str], list[Finding]] = {subject: [] for subject in subjects}
    for finding in findings:
        by_subject.setdefault((finding.kind, finding.name), []).append(finding)
    rows = []
    for (kind, name), found in by_subject.items():
        decided = max(found, key=lambda f: (int(f.trust), f.nearness), default=None)
        rows.append(TrustRow(kind, name, Trust.HOLDS if decided is None else decided.trust, decided, tuple(found)))
    return TrustReport(study, tuple(rows), tuple(not_looked_at), {row.name: k for k, row in enumerate(rows)})


def graded(value: float, doubtful: float, not_valid: float | None) -> Trust:
    """Beyond which threshold a number is."""
    if not_valid is not None and value > not_valid:
        return Trust.NOT_VALID
    return Trust.DOUBTFUL if value > doubtful else Trust.HOLDS
