"""The language's order at one instant: samples, then conditions and right sides, then all actions together, then a restart, then further rounds.

At an instant (language.md, "Events"):
  1 circuit values are those just before;
  2 sampled signals update, rank by rank;
  3 conditions and right sides are read;
  4 all actions apply together: time events, `every` events, conditions that became true; two values for one target are an error;
  5 charge and flux are kept and the circuit is solved again;
  6 conditions that became true by that are another round.
Instants that only clocks have fire inside the kernel. Everything else, and clocks that share an instant with it, comes through here.
"""

from __future__ import annotations

from bisect import bisect_left, insort
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field, replace
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from polewise.equations.system import EquationSystem, Target
from polewise.grammar.source import Span, no_span
from polewise.grammar.units import format_value
from polewise.kernels.program import RANK_EVENTS
from polewise.kernels.workspace import (
    FLAG_AFTER,
    N_FACTORS_READY,
    N_FLIPS,
    N_JACOBIAN_AGE,
    N_MADE_JUMP,
    N_NEEDS_RESTART,
    N_RECORD,
    N_REG_AT_START,
    N_RESTART_FACTORS,
    N_START_READY,
    S_BAND,
    S_T,
    Workspace,
)
from polewise.solve import diagnosis, kernel_calls
from polewise.solve.initial import Snapshot
from polewise.solve.problem import DaeProblem, Reader, reader

BoolArray: TypeAlias = NDArray[np.bool_]

MERGE_S = 1e-12  # instants this close are one (numerics.md)
MERGE_RELATIVE = 4 * 2.220446049250313e-16
ROUNDS_MOST = 1000  # rounds of events at one instant
FIRINGS_MOST = 1000  # within CHATTER_WINDOW_S
CHATTER_WINDOW_S = 1e-6
SAME_VALUE_RELATIVE = 1e-12  # two actions that set a target to values this close agree
SETTLE_ROUNDS = 10  # passes over the watched switches until they agree with the values just before


@dataclass(frozen=True, slots=True)
class EventEntry:
    """One thing that happened.

    Args:
        time_s: when. text: what set it off, in the netlist's words. changes: (target, new value in SI) of its actions.
    """

    time_s: float
    text: str
    changes: tuple[tuple[str, float], ...]
    span: Span


def merge_distance(t: float) -> float:
    """Instants closer than this are one."""
    return max(MERGE_S, MERGE_RELATIVE * abs(t))


@dataclass(frozen=True, slots=True)
class _Action:
    """A target with its new value and the place that says so."""

    target: Target
    value: float
    text: str


@dataclass(slots=True)
class EventState:
    """What a run must remember about its events: owned by one run, like its Workspace.

    truth: whether each condition was true when last read. timers: (expiry, conditional) of conditions that must stay true, ascending.
    next_timed: index into `timed`, sorted by time. log: everything that happened.
    """

    truth: BoolArray
    timers: list[tuple[float, int]] = field(default_factory=list)
    next_timed: int = 0
    log: list[EventEntry] = field(default_factory=list)
    recent: list[float] = field(default_factory=list)


class Events:
    """The events of one run on its workspace.

    Args:
        restart: makes the workspace consistent at its time; raises on failure.
    """

    def __init__(self, problem: DaeProblem, work: Workspace, restart: Callable[[Workspace], Workspace]) -> None:
        self.problem, self.work = problem, work
        self.system: EquationSystem = problem.system
        self.restart = restart
        self.timed = sorted(self.system.timed, key=lambda e: e.time_s)
        self.state = EventState(np.zeros(len(self.system.conditionals), dtype=bool))
        self.read_conditional = [self._reader_of(c.targets) for c in self.system.conditionals]
        self.read_timed = [self._reader_of(e.targets) for e in self.timed]
        self.read_clock = [reader(self.system, [node for _, node in c.updates]) if c.rank >= RANK_EVENTS else None for c in self.system.clocks]
        self.watched = np.flatnonzero(problem.program.switch_watched)
        sampled = {self.system.parameters[j].symbol for c in self.system.clocks for j, _ in c.updates if c.rank < RANK_EVENTS}
        read = set(self.system.graph.symbols_under([c.condition for c in self.system.conditionals]))
        # A condition that reads a sampled signal is read between the samples and the restart: only here, never inside the kernel.
        self.conditions_read_samples = bool(sampled & read)

    def _reader_of(self, targets: tuple[Target, ...]) -> Reader:
        return reader(self.system, [t.value for t in targets])

    # ------------------------------------------------------------ queue

    def next_time(self) -> float:
        """The next instant that is known in advance, s; inf if there is none."""
        times = [self.timed[self.state.next_timed].time_s] if self.state.next_timed < len(self.timed) else []
        if self.state.timers:
            times.append(self.state.timers[0][0])
        if self.conditions_read_samples:
            times.append(self._next_tick())
        return min(times, default=np.inf)

    def _next_tick(self) -> float:
        work = self.work
        ticks = work.clock_offset + work.clock_count * self.problem.program.clock_period
        return float(np.min(ticks, initial=np.inf))

    def late(self, stop_s: float) -> list[tuple[float, Span]]:
        """Time events that a run to stop_s never reaches."""
        return [(e.time_s, e.span) for e in self.timed if e.time_s > stop_s + merge_distance(stop_s)]

    # ------------------------------------------------------------ one instant

    def begin(self, continues: Snapshot | None = None) -> bool:
        """The instant of the start. The workspace stands at a consistent point just before it. Returns whether anything was set.

        Args:
            continues: the run that goes on here: what has happened in it does not happen again.
        """
        self._settle_watched()
        truth = self._read_truth()
        # "rises above" at the start: what is true already does not become true.
        for k, conditional in enumerate(self.system.conditionals):
            self.state.truth[k] = truth[k] and conditional.crossing
        if continues is not None:
            self._go_on(continues)
        return self.instant()

    def _go_on(self, continues: Snapshot) -> None:
        state, t = self.state, continues.time_s
        while state.next_timed < len(self.timed) and self.timed[state.next_timed].time_s <= t + merge_distance(t):
            state.next_timed += 1
        for k, conditional in enumerate(self.system.conditionals):
            state.truth[k] = continues.truths.get(conditional.name, bool(state.truth[k]))
            if conditional.name in continues.timers:
                insort(state.timers, (continues.timers[conditional.name], k))

    def noted(self, snapshot: Snapshot) -> Snapshot:
        """A snapshot with what the events and clocks of this run must not forget."""
        names = [c.name for c in self.system.conditionals]
        ticks = self.work.clock_offset + self.work.clock_count * self.problem.program.clock_period
        parameters = self.system.parameters
        return replace(
            snapshot,
            next_ticks={parameters[j].name: float(t) for c, t in zip(self.system.clocks, ticks, strict=True) for j, _ in c.updates},
            truths={name: bool(value) for name, value in zip(names, self.state.truth, strict=True)},
            timers={names[k]: t for t, k in self.state.timers},
        )

    def instant(self) -> bool:
        """All that is due at the workspace's time, in the language's order. Returns whether anything was set."""
        t = float(self.work.state[S_T])
        jumped = self._sample()
        if jumped or self.work.counter[N_NEEDS_RESTART]:
            self._settle_watched()
        actions = self._due_timed(t) + self._due_clocks(t)
        fired = self._became_true(t)
        for rounds in range(ROUNDS_MOST + 1):
            if rounds == ROUNDS_MOST:
                worst = self.system.conditionals[fired[0]]
                raise diagnosis.event_storm(t, worst.text, worst.span, ROUNDS_MOST)
            actions += self._conditional_actions(fired, t)
            if not actions and not jumped:
                return rounds > 0
            self._apply(actions, t)
            self._solve_again()
            jumped, actions = False, []
            fired = self._became_true(t)
        raise AssertionError("unreachable")

    def _sample(self) -> bool:
        """Step 2: sampled signals, rank by rank, from the values just before. Returns whether a value changed."""
        if not len(self.problem.program.clock_period):
            return False
        work, program, changed = self.work, self.problem.program, 0
        rank = kernel_calls.next_rank(program, work, -1)
        while 0 <= rank < RANK_EVENTS:
            changed += kernel_calls.fire_clocks(program, work, rank)
            rank = kernel_calls.next_rank(program, work, rank)
        return changed > 0

    def _settle_watched(self) -> None:
        """Let the switches of conditions agree with the present values, nothing solved again."""
        work, program = self.work, self.problem.program
        if not len(self.watched):
            return
        for _ in range(SETTLE_ROUNDS):
            kernel_calls.run_residual(program, work)
            work.counter[N_REG_AT_START] = 0
            wrong = 0
            for s in self.watched:
                value = work.reg[program.switch_reg[s]]
                if kernel_calls.violation(program, work, int(s), value) > program.switch_scale[s] * work.state[S_BAND]:
                    work.mode[s] = kernel_calls.live_mode(program, int(s), value)
                    wrong += 1
            if wrong == 0:
                return
            self._changed()

    def _read_truth(self) -> BoolArray:
        """Step 3: the conditions with the switches as they stand."""
        if not len(self.system.conditionals):
            return np.zeros(0, dtype=bool)
        kernel_calls.run_residual(self.problem.program, self.work)
        self.work.counter[N_REG_AT_START] = 0
        truth: BoolArray = self.work.reg[self.problem.condition_register] != 0.0
        return truth

    def _became_true(self, t: float) -> list[int]:
        """Conditions that fire now: became true, or have stayed true for as long as they must. Starts and stops timers."""
        state = self.state
        truth = self._read_truth()
        fired = []
        for k, conditional in enumerate(self.system.conditionals):
            now, before = bool(truth[k]), bool(state.truth[k])
            if now and not before:
                if conditional.lasting_s > 0.0:
                    insort(state.timers, (t + conditional.lasting_s, k))
                else:
                    fired.append(k)
            elif not now and before and conditional.lasting_s > 0.0:
                state.timers = [timer for timer in state.timers if timer[1] != k]
        state.truth = truth
        due = bisect_left(state.timers, (t + merge_distance(t), len(self.system.conditionals)))
        fired += [k for _, k in state.timers[:due]]
        del state.timers[:due]
        return fired

    def _due_timed(self, t: float) -> list[_Action]:
        state, actions = self.state, []
        while state.next_timed < len(self.timed) and self.timed[state.next_timed].time_s <= t + merge_distance(t):
            event = self.timed[state.next_timed]
            made = self._actions(event.targets, self.read_timed[state.next_timed], f"at {diagnosis.time_text(event.time_s)}", event.span, t)
            actions += made
            state.next_timed += 1
        return actions

    def _due_clocks(self, t: float) -> list[_Action]:
        """`every` events that share this instant: their right sides; the clocks count on."""
        work, program, actions = self.work, self.problem.program, []
        for k, clock in enumerate(self.system.clocks):
            read = self.read_clock[k]
            if read is None or work.clock_offset[k] + work.clock_count[k] * program.clock_period[k] > t + merge_distance(t):
                continue
            values = read(work.x, t, work.p)
            for (j, node), value in zip(clock.updates, values, strict=True):
                target = Target("parameter", j, node, self.system.parameters[j].span or no_span())
                actions.append(_Action(target, value, clock.name))
            work.clock_count[k] += 1
        return actions

    def _conditional_actions(self, fired: Iterable[int], t: float) -> list[_Action]:
        actions: list[_Action] = []
        for k in fired:
            conditional = self.system.conditionals[k]
            actions += self._actions(conditional.targets, self.read_conditional[k], conditional.text, conditional.span, t)
            self._watch_for_chatter(k, t)
        return actions

    def _actions(self, targets: tuple[Target, ...], read: Reader, text: str, span: Span, t: float) -> list[_Action]:
        values = read(self.work.x, t, self.work.p)
        made = [_Action(target, value, text) for target, value in zip(targets, values, strict=True)]
        for action in made:
            if not np.isfinite(action.value):
                raise diagnosis.event_value_not_finite(t, self._name(action.target), action.target.span)
        self.state.log.append(EventEntry(t, text, tuple((self._name(a.target), a.value) for a in made), span))
        return made

    def _watch_for_chatter(self, k: int, t: float) -> None:
        recent = self.state.recent
        if recent and t - recent[0] > CHATTER_WINDOW_S:
            recent.clear()
        recent.append(t)
        if len(recent) > FIRINGS_MOST and recent[-1] > recent[0]:
            conditional = self.system.conditionals[k]
            raise diagnosis.chatter(t, f"`{conditional.text}`", conditional.span, FIRINGS_MOST)

    def _name(self, target: Target) -> str:
        if target.kind == "parameter":
            return self.system.parameters[target.index].name
        return self.system.unknowns[target.index].name

    def _apply(self, actions: list[_Action], t: float) -> None:
        """Step 4."""
        chosen: dict[tuple[str, int], _Action] = {}
        for action in actions:
            key = (action.target.kind, action.target.index)
            other = chosen.setdefault(key, action)
            if abs(other.value - action.value) > SAME_VALUE_RELATIVE * max(abs(other.value), abs(action.value)):
                raise self._conflict(t, other, action)
        work = self.work
        states = []
        for (kind, index), action in chosen.items():
            if kind == "parameter":
                work.p[index] = action.value
            else:
                states.append((index, action.value))
        self._changed()
        if states:
            self._set_states(states)

    def _set_states(self, states: list[tuple[int, float]]) -> None:
        """The charges of set states follow them; all others stay as they were."""
        work, program = self.work, self.problem.program
        for index, value in states:
            work.x[index] = value
        kernel_calls.run_residual(program, work)
        for index, _ in states:
            if program.q_reg[index] >= 0:
                work.q_keep[index] = work.reg[program.q_reg[index]]

    def _conflict(self, t: float, one: _Action, other: _Action) -> Exception:
        dimension = (self.system.parameters if one.target.kind == "parameter" else self.system.unknowns)[one.target.index].dimension
        return diagnosis.event_conflict(
            t,
            self._name(one.target),
            (one.target.span, format_value(one.value, dimension)),
            (other.target.span, format_value(other.value, dimension)),
        )

    def _changed(self) -> None:
        """Tell the kernels that p or modes are not what their factors and registers belong to."""
        counter = self.work.counter
        counter[N_START_READY] = 0
        counter[N_REG_AT_START] = 0
        counter[N_JACOBIAN_AGE] = 0
        counter[N_FACTORS_READY] = 0
        counter[N_RESTART_FACTORS] = 0
        counter[N_MADE_JUMP] = 1
        counter[N_NEEDS_RESTART] = 1

    def _solve_again(self) -> None:
        """Step 5, and the record's row after the jump."""
        self._changed()
        self.work.counter[N_FLIPS] = 0  # rounds have their own limit
        self.work = self.restart(self.work)
        assert self.work.counter[N_NEEDS_RESTART] == 0
        if self.work.counter[N_RECORD] != 0:
            kernel_calls.record_point(self.problem.program, self.work, FLAG_AFTER)
