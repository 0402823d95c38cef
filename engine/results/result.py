"""The result of a study as a user reads it: quantities by name as arrays, time, units, verdict, events, counters."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike

from polewise.errors import PolewiseError
from polewise.grammar.diagnostics import Diagnostic
from polewise.grammar.units import Dimension
from polewise.results.curve import INTERIOR, FloatArray
from polewise.results.failures import MissingExtra
from polewise.results.recording import Column, Recording, column_index, recorded_curve, row_blocks
from polewise.results.verdict import RequirementVerdict, Verdict

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from polewise.solve.initial import Snapshot


@dataclass(frozen=True, slots=True)
class EventEntry:
    """One entry of the event log: when (s from the study's start) and what."""

    time_s: float
    text: str


class Record:
    """Recorded quantities, read by the netlist's own spelling, at the ends of the solver's steps.

    Between them `at` gives any instant. At a jump two points have the same time: just before and just after it.
    """

    __slots__ = ("_ends", "_recording", "_time")

    def __init__(self, recording: Recording) -> None:
        self._recording = recording
        self._ends = np.flatnonzero(recording.grid.flag != INTERIOR)
        self._time = _frozen(recording.grid.time[self._ends])

    @property
    def recording(self) -> Recording:
        """The rows behind it."""
        return self._recording

    @property
    def names(self) -> tuple[str, ...]:
        """What was kept."""
        return tuple(column.name for column in self._recording.columns if column.role == "kept")

    @property
    def time(self) -> FloatArray:
        """Ends of the solver's steps, s, shape (m,), read-only."""
        return self._time

    def __getitem__(self, name: str) -> FloatArray:
        """The values of a quantity at `time`, SI, shape (m,), read-only; a condition is 0 or 1.

        Raises:
            UnknownName: it was not recorded; a KeyError that lists near names.
        """
        return _frozen(self._recording.values(name)[self._ends])

    def __contains__(self, name: object) -> bool:
        return any(column.name == name for column in self._recording.columns)

    def __iter__(self) -> Iterator[str]:
        return iter(self.names)

    def __len__(self) -> int:
        return len(self.names)

    def unit(self, name: str) -> str:
        """The SI unit of a quantity, "1" for a plain number or a condition."""
        return self._column(name).unit

    def dimension(self, name: str) -> Dimension:
        """The dimension of a quantity."""
        return self._column(name).dimension

    def at(self, name: str, times: ArrayLike) -> FloatArray:
        """Values at any times, from the cubic through the points of each step.

        Args:
            name: a recorded quantity.
            times: s, any shape.
        Returns:
            Values of the same shape; at a jump the one just after it, NaN outside the record.
        """
        return recorded_curve(self._recording, name).at(np.asarray(times, dtype=np.float64))

    def to_pandas(self) -> Any:
        """A pandas DataFrame: one column per kept quantity, time (s) as index, units in `attrs["units"]`."""
        try:
            import pandas
        except ImportError as error:
            raise MissingExtra("pandas", "pandas", "a DataFrame") from error
        frame = pandas.DataFrame({name: self[name] for name in self.names}, index=pandas.Index(self.time, name="time"))
        frame.attrs["units"] = {"time": "s", **{name: self.unit(name) for name in self.names}}
        return frame

    def to_xarray(self) -> Any:
        """An xarray Dataset over the coordinate time (s); each variable has its unit in `attrs["units"]`."""
        try:
            import xarray
        except ImportError as error:
            raise MissingExtra("xarray", "xarray", "a Dataset") from error
        variables = {name: ("time", self[name], {"units": self.unit(name)}) for name in self.names}
        return xarray.Dataset(variables, coords={"time": ("time", self.time, {"units": "s"})})

    def write_csv(self, path: str | Path) -> None:
        """Write the kept quantities as CSV, units in the header.

        Raises:
            OutputFailed: the file can't be written.
        """
        from polewise.results.csv_file import write_csv

        write_csv(Path(path), self._recording)

    def _column(self, name: str) -> Column:
        columns = self._recording.columns
        return columns[column_index(columns, name)]


@dataclass(frozen=True, slots=True)
class RunFacts:
    """What is known of a run beside its rows.

    Args:
        title: of the netlist. study: its name.
        planned_s, reached_s: where it was to end, and did.
        complete: whether it came to its end.
        trouble: why not, where the solver failed; None where it was stopped from outside.
        events: the log, in order of time.
        counters: steps, evaluations and so on, by name.
        elapsed_s: wall time of the run.
        sampling: "exact" or "mean".
        strategy: which search found the operating point it began from, None for a cold start.
        warnings: what a reader should know.
        stand: where it ended, so that others may go on from there; None after a failure. remarks: how it came about, sentences.
        beside: what else was run for it (analysis.edge_window.BesideWindow of a magnified stretch).
    """

    title: str
    study: str
    planned_s: float
    reached_s: float
    complete: bool
    trouble: PolewiseError | None = None
    events: tuple[EventEntry, ...] = ()
    counters: Mapping[str, int] = field(default_factory=dict)
    elapsed_s: float = 0.0
    sampling: str = "exact"
    strategy: str | None = None
    warnings: tuple[Diagnostic, ...] = ()
    stand: Snapshot | None = field(default=None, repr=False, compare=False)
    remarks: tuple[str, ...] = ()
    beside: object | None = field(default=None, repr=False, compare=False)


class Result(Record):
    """One study's result: kept quantities, verdict, events, counters."""

    __slots__ = ("_answers", "_facts", "_recording_itself", "_verdict")

    def __init__(self, recording: Recording, verdict: Verdict, facts: RunFacts, answers: tuple[object, ...] = ()) -> None:
        super().__init__(recording)
        self._recording_itself = recording
        self._verdict = verdict
        self._facts = facts
        self._answers = answers

    def with_answers(self, answers: tuple[object, ...], rows: tuple[RequirementVerdict, ...]) -> Result:
        """The same result with small-signal answers and the verdict on them."""
        verdict = Verdict(self._verdict.study, (*self._verdict.requirements, *rows))
        return Result(self._recording_itself, verdict, self._facts, answers)

    @property
    def answers(self) -> tuple[object, ...]:
        """Answers to the study's small-signal orders (analysis.answers.Answer), in the order of the text."""
        return self._answers

    @property
    def verdict(self) -> Verdict:
        """The study's requirements, judged."""
        return self._verdict

    @property
    def facts(self) -> RunFacts:
        """All that is known of the run."""
        return self._facts

    @property
    def study(self) -> str:
        """The study's name."""
        return self._facts.study

    @property
    def complete(self) -> bool:
        """Whether the study came to its end."""
        return self._facts.complete

    @property
    def trouble(self) -> PolewiseError | None:
        """Why it did not come to its end; None if it did, or was stopped from outside."""
        return self._facts.trouble

    @property
    def events(self) -> tuple[EventEntry, ...]:
        """What happened when."""
        return self._facts.events

    @property
    def counters(self) -> Mapping[str, int]:
        """What the solver did, in numbers."""
        return self._facts.counters

    def __repr__(self) -> str:
        state = "complete" if self.complete else "incomplete"
        return f"<Result of {self.study}: {len(self.names)} quantities, {self.time.size} points, {state}>"

    def write_parquet(self, path: str | Path) -> None:
        """Write everything recorded as one Parquet file.

        Raises:
            MissingExtra: pyarrow is not installed.
            OutputFailed: the file can't be written.
        """
        from polewise.results.parquet_file import ParquetSink

        columns = self._recording.columns
        sink = ParquetSink(Path(path), columns, about=about_run(self._facts.title, self._facts.study))
        for rows in row_blocks(self._recording, columns):
            sink.write(rows)
        sink.close(complete=self.complete, end_s=self._facts.reached_s)

    def figure(self) -> Figure:
        """The study's figure, as a matplotlib Figure that belongs to no window.

        Raises:
            MissingExtra: matplotlib is not installed.
        """
        from polewise.results.figure import FigureFacts, Mark, study_figure

        facts = self._facts
        marks = tuple(Mark(event.time_s, event.text) for event in facts.events)
        return study_figure(self._recording, self._verdict, FigureFacts(facts.title, facts.study, facts.planned_s, facts.reached_s, marks))


def _frozen(values: FloatArray) -> FloatArray:
    values.setflags(write=False)
    return values


def about_run(title: str, study: str) -> dict[str, str]:
    """Facts for the metadata of a recorded file."""
    return {"title": title, "study": study}


def open_recorded(path: str | Path) -> RecordedFile:
    """Open a Parquet file that a run wrote; columns are read one at a time.

    Raises:
        MissingExtra: pyarrow is not installed.
        DamagedRecording: missing, cut off, or not written by a run.
    """
    from polewise.results.parquet_file import ParquetRecording

    recording = ParquetRecording(Path(path))
    return RecordedFile(recording, recording.about, recording.complete)


class RecordedFile(Record):
    """A recorded file: quantities as in a Result, with what the file says of its run."""

    __slots__ = ("_about", "_complete")

    def __init__(self, recording: Recording, about: Mapping[str, str], complete: bool) -> None:
        super().__init__(recording)
        self._about = dict(about)
        self._complete = complete

    @property
    def about(self) -> Mapping[str, str]:
        """Title, study, end."""
        return self._about

    @property
    def complete(self) -> bool:
        """Whether the run came to its end."""
        return self._complete
