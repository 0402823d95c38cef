"""`polewise run`: studies one after another, files as they run, verdicts at the end; what is done is kept whatever happens."""

from __future__ import annotations

import signal
import threading
from collections.abc import Iterator, Sequence
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from importlib.metadata import version
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING, Any

import click

from polewise.analysis.answers import Answer
from polewise.analysis.carriers import carriers_of
from polewise.analysis.figure import answer_figure
from polewise.analysis.magnified import edge_window
from polewise.analysis.trust import TrustReport
from polewise.analysis.trust_of import watching
from polewise.api import System
from polewise.errors import EXIT_HOLDS, EXIT_NETLIST_WRONG, EXIT_NOT_FINISHED, EXIT_REQUIREMENT_FAILS, PolewiseError
from polewise.results.failures import OutputFailed
from polewise.results.junit import StudyReport, junit_xml
from polewise.results.recording import MemorySink, Recording, SeveralSinks, Sink
from polewise.results.result import Result, RunFacts, about_run
from polewise.results.study_run import Sampling, StudyPlan, finished
from polewise.results.summary import verdict_content, write_summary
from polewise.results.verdict import Verdict
from polewise.terminal.json_form import diagnostics_content
from polewise.terminal.main import print_json, print_lines, read_or_tell, tell
from polewise.terminal.progress import StudyProgress, say_first_compile
from polewise.terminal.trust_text import trust_block, trust_content
from polewise.terminal.verdict_text import result_lines

if TYPE_CHECKING:
    from matplotlib.figure import Figure


@dataclass(frozen=True, slots=True)
class RunOptions:
    """Options of the command, as given."""

    given: dict[str, str]
    out: Path | None
    csv: bool
    figure: bool
    junit: Path | None
    tolerance: float | None
    sampling: Sampling | None
    as_json: bool
    trust: bool = True


@dataclass(frozen=True, slots=True)
class _Outcome:
    """How one study went."""

    study: str
    result: Result | None
    error: PolewiseError | None
    elapsed_s: float
    trust: TrustReport | None = None

    @property
    def exit_code(self) -> int:
        """Of this study alone."""
        if self.error is not None:
            return self.error.exit_code
        assert self.result is not None
        if not self.result.complete:
            return EXIT_NOT_FINISHED
        return EXIT_HOLDS if self.result.verdict.passed else EXIT_REQUIREMENT_FAILS


def run_studies(file: Path, names: Sequence[str], options: RunOptions) -> int:
    """Run studies of a file; the exit code."""
    system = read_or_tell(file, options.given, options.as_json)
    if system is None:
        return EXIT_NETLIST_WRONG
    chosen = names or own_studies(system)
    if not chosen:
        raise click.UsageError(f"{file} has no study; write one (`study name {{ … }}`), or use `polewise settle`")
    plans = [system.plan(name, sampling=options.sampling) for name in dict.fromkeys(chosen)]
    if options.trust:
        plans = [watching(plan) for plan in plans]
    _look_for_extras(options)
    if options.out is not None:
        _make_folder(options.out)
    if not options.as_json:
        tell([d for d in system.diagnostics if d.severity.value == "warning"])
    say_first_compile()
    outcomes: list[_Outcome] = []
    with _stop_on_signal() as stop:
        for plan in plans:
            outcome = _run_one(system, plan, options, stop)
            outcomes.append(outcome)
            if not options.as_json:
                _say(outcome)
            if stop.is_set():
                break
    if options.junit is not None:
        _write_junit(options.junit, system, outcomes)
    code = _exit_code(outcomes)
    if options.as_json:
        print_json({"exit_code": code, "title": system.title, "studies": [_content(o) for o in outcomes]})
    return code


def own_studies(system: System) -> tuple[str, ...]:
    """Studies of the file itself; those of files it uses run only when named."""
    circuit = system.circuit
    main = circuit.files[-1] if circuit.files else ""
    return tuple(s.name for s in circuit.studies.values() if s.span.source.name == main)


def _exit_code(outcomes: Sequence[_Outcome]) -> int:
    """The gravest: not finished, wrong, a requirement fails, all holds."""
    codes = {outcome.exit_code for outcome in outcomes}
    return next((code for code in (EXIT_NOT_FINISHED, EXIT_NETLIST_WRONG, EXIT_REQUIREMENT_FAILS) if code in codes), EXIT_HOLDS)


# ---------------------------------------------------------------- one study


def _run_one(system: System, plan: StudyPlan, options: RunOptions, stop: threading.Event) -> _Outcome:
    files = None if options.out is None else _Files(options.out, system, plan, options)
    try:
        with StudyProgress(plan.study.name) as progress:
            store: _Files | _Memory = files or _Memory(plan)
            facts = system.carry_out(plan, store.sink, tolerance=options.tolerance, progress=progress, should_stop=stop.is_set)
            recording = store.close(facts)
            if plan.study.magnifies is not None:
                result: Result = edge_window(plan, facts, recording)
            else:
                result = system.answered(plan, finished(plan, facts, recording))
        report = _trust(system, plan, result) if options.trust else None
        if files is not None:
            files.conclude(result)
        return _Outcome(plan.study.name, result, facts.trouble, facts.elapsed_s, report)
    except PolewiseError as error:
        if files is not None:
            files.abandon(error)
        return _Outcome(plan.study.name, None, error, 0.0)
    except BaseException:
        if files is not None:
            files.abandon(None)
        raise


def _trust(system: System, plan: StudyPlan, result: Result) -> TrustReport | None:
    """The trust report of a study that came to its end; none for edges, which are no averages, nor where nothing switches."""
    if plan.study.magnifies is not None or not result.complete or plan.study.run_for_s is None or carriers_of(plan.circuit) is None:
        return None
    try:
        return system.trust_in(plan, result)
    except PolewiseError:
        return None


class _Memory:
    """A study that leaves no files."""

    def __init__(self, plan: StudyPlan) -> None:
        self.sink = MemorySink(plan.record.columns)

    def close(self, _facts: RunFacts) -> Recording:
        """What was recorded."""
        return self.sink.finish()


class _Files:
    """The files of one study. The summary says "incomplete" from the first moment on, so that a killed run is known as such."""

    def __init__(self, folder: Path, system: System, plan: StudyPlan, options: RunOptions) -> None:
        from polewise.results.csv_file import CsvSink
        from polewise.results.parquet_file import ParquetSink

        self._folder, self._options, self._plan, self._system = folder, options, plan, system
        self._name = plan.study.name
        self._summary = folder / f"{self._name}.json"
        write_summary(self._summary, self._about("running, or killed before its end", None))
        self._parquet = ParquetSink(folder / f"{self._name}.parquet", plan.record.columns, about_run(system.title, self._name))
        self._csv = CsvSink(folder / f"{self._name}.csv", plan.record.columns) if options.csv else None
        self.sink: Sink = self._parquet if self._csv is None else SeveralSinks((self._parquet, self._csv))

    def close(self, facts: RunFacts) -> Recording:
        """Finish the files; what was recorded, read back column by column."""
        from polewise.results.parquet_file import ParquetRecording

        self._parquet.close(complete=facts.complete, end_s=facts.reached_s)
        if self._csv is not None:
            self._csv.close()
        return ParquetRecording(self._parquet.path)

    def conclude(self, result: Result) -> None:
        """Write the figures and the final summary."""
        if self._options.figure:
            self._save(result.figure(), self._name)
            for number, answer in enumerate(result.answers, start=1):
                if isinstance(answer, Answer):
                    self._save(answer_figure(answer), f"{self._name}.{answer.order.kind}{number}")
        facts = result.facts
        reason = None if facts.complete else facts.trouble.diagnostic.headline if facts.trouble else "stopped from outside"
        write_summary(self._summary, self._about(reason, result))

    def _save(self, figure: Figure, name: str) -> None:
        for ending in ("png", "svg"):
            path = self._folder / f"{name}.{ending}"
            try:
                figure.savefig(path)
            except OSError as error:
                raise OutputFailed(str(path), error.strerror or str(error)) from error

    def abandon(self, error: PolewiseError | None) -> None:
        """Let go of the files after a failure; the summary says why, where it can still be written."""
        self._parquet.abandon()
        if self._csv is not None:
            self._csv.abandon()
        with suppress(OutputFailed):  # on a full disk the first summary stays, and says that the run is not complete
            write_summary(self._summary, self._about(error.diagnostic.headline if error else "stopped from outside", None))

    def _about(self, reason: str | None, result: Result | None) -> dict[str, Any]:
        plan = self._plan
        content: dict[str, Any] = {
            "study": self._name,
            "title": self._system.title,
            "netlist": list(plan.circuit.files),
            "given": dict(self._options.given),
            "program": f"polewise {version('polewise')}",
            "complete": result is not None and result.complete,
            "reason": reason,
            "planned_s": plan.study.run_for_s,
        }
        if result is not None:
            content |= run_content(result)
        content["columns"] = [{"name": c.name, "unit": c.unit, "role": c.role} for c in plan.record.columns]
        return content


def run_content(result: Result) -> dict[str, Any]:
    """A finished run as plain JSON values."""
    facts = result.facts
    return {
        "reached_s": facts.reached_s,
        "elapsed_s": facts.elapsed_s,
        "sampling": facts.sampling,
        "strategy": facts.strategy,
        "counters": dict(facts.counters),
        "verdict": verdict_content(result.verdict),
        "events": [{"time_s": event.time_s, "text": event.text} for event in facts.events],
    }


# ---------------------------------------------------------------- around the studies


def _look_for_extras(options: RunOptions) -> None:
    """Say that something is not installed before the run, not after it."""
    if options.out is None:
        return
    from polewise.results.figure import require_matplotlib
    from polewise.results.parquet_file import require_pyarrow

    require_pyarrow()
    if options.figure:
        require_matplotlib()


def _make_folder(folder: Path) -> None:
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise OutputFailed(str(folder), error.strerror or str(error)) from error


@contextmanager
def _stop_on_signal() -> Iterator[threading.Event]:
    """An event that the first Ctrl-C (or a request to terminate) sets; a second one ends at once."""
    stop = threading.Event()

    def ask(number: int, _frame: FrameType | None) -> None:
        if stop.is_set():
            raise KeyboardInterrupt
        stop.set()

    if threading.current_thread() is not threading.main_thread():
        yield stop
        return
    before = {number: signal.signal(number, ask) for number in (signal.SIGINT, signal.SIGTERM)}
    try:
        yield stop
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


def _say(outcome: _Outcome) -> None:
    result = outcome.result
    if result is not None:
        report = outcome.trust
        print_lines(lambda style: [*result_lines(result, style), *(trust_block(report, style) if report is not None else []), ""])
        tell(result.facts.warnings)
    if outcome.error is not None:
        click.echo(f"study {outcome.study} could not be finished", err=True)
        tell(outcome.error.diagnostics)


def _content(outcome: _Outcome) -> dict[str, Any]:
    content: dict[str, Any] = {
        "study": outcome.study,
        "exit_code": outcome.exit_code,
        "complete": outcome.result is not None and outcome.result.complete,
    }
    if outcome.result is not None:
        content |= run_content(outcome.result)
        if outcome.trust is not None:
            content["trust"] = trust_content(outcome.trust)
    if outcome.error is not None:
        content["diagnostics"] = diagnostics_content(outcome.error.diagnostics)
    return content


def _write_junit(path: Path, system: System, outcomes: Sequence[_Outcome]) -> None:
    reports = []
    for outcome in outcomes:
        result = outcome.result
        verdict = result.verdict if result is not None else Verdict(outcome.study, ())
        trouble = outcome.error.diagnostic.headline if outcome.error else None
        if trouble is None and result is not None and not result.complete:
            trouble = "stopped before its end"
        reports.append(StudyReport(verdict, outcome.elapsed_s, trouble))
    try:
        path.write_text(junit_xml(system.title, reports), encoding="utf-8")
    except OSError as error:
        raise OutputFailed(str(path), error.strerror or str(error)) from error
