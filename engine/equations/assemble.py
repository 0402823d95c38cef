"""Modified nodal analysis on a tree: Circuit and Network → EquationSystem of index 1."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

from polewise.circuit.model import Assignment, Circuit, Quantity, StudyDef
from polewise.devices.kind import KINDS
from polewise.equations import messages
from polewise.equations.definitions import Definitions, RowSketch
from polewise.equations.derived import DerivedRates
from polewise.equations.reduce import LoopOfConditions, Reduction, UnforeseenLoop
from polewise.equations.system import Clock, Conditional, DelayLine, EquationSystem, Flag, Output, Parameter, ParameterKind, Target, Timed, Unknown
from polewise.errors import NetlistError
from polewise.expression.graph import ExpressionGraph, Node
from polewise.grammar import units
from polewise.grammar.source import Span, no_span
from polewise.grammar.units import Dimension
from polewise.kernels.program import RANK_EVENTS
from polewise.network.graph import Network

# At an operating point a bounded state satisfies x = limit(x + s*rate, low, high); any s > 0 (seconds) serves.
BOUND_PROBE_S = 1e-3


@dataclass(slots=True)
class _ParameterSketch:
    name: str
    symbol: Node
    kind: ParameterKind
    initial: float | None
    rest: Node | None
    dimension: Dimension
    is_condition: bool
    span: Span | None


@dataclass(slots=True)
class _ClockSketch:
    name: str
    period_s: float
    events: bool
    updates: list[tuple[str, Node]] = field(default_factory=list)  # parameter name → new value


def assemble(
    circuit: Circuit,
    network: Network,
    *,
    study: str | None = None,
    outputs: Sequence[Quantity] = (),
    sampling: str = "exact",
) -> EquationSystem:
    """Write the circuit's equations with as few unknowns as its structure allows.

    Args:
        study: whose events are in force beside the circuit's own; None: only the circuit's own.
        outputs: what will be recorded.
        sampling: "exact", or "mean" for the s-domain equivalents of sampled blocks.
    Raises:
        NetlistError: a loop of conditions, a derivative that cannot be determined, or an event that cannot be carried out.
    """
    return _Assembler(circuit, network, circuit.studies[study] if study else None, sampling == "mean").assemble(outputs)


class _Assembler:
    """Collects sketches in circuit-level symbols, then resolves them all at once."""

    def __init__(self, circuit: Circuit, network: Network, study: StudyDef | None, mean: bool) -> None:
        self.circuit, self.network, self.study, self.mean = circuit, network, study, mean
        self.graph: ExpressionGraph = circuit.graph
        self.parameters: dict[str, _ParameterSketch] = {}
        self.clocks: list[_ClockSketch] = []
        self.delays: list[tuple[str, Node, float, Node | None]] = []  # parameter, expression, delay, start slope
        self.extra_rows: list[RowSketch] = []
        self.extra_definitions: dict[Node, Node] = {}

    # ------------------------------------------------------------ sketching

    def assemble(self, outputs: Sequence[Quantity]) -> EquationSystem:
        g, circuit = self.graph, self.circuit
        power = self._parameter("power_scale", "power_scale", 1.0, None, units.NONE)
        source = self._parameter("source_scale", "source_scale", 1.0, None, units.NONE)
        self._latches_and_clocks()
        duties = self._modulators()
        definitions = Definitions(circuit, self.network, power, source, duties)
        definitions.define_all()
        definitions.defined.update(self.extra_definitions)
        for signal in circuit.signals.values():
            symbol = g.symbol("signal", signal.name)
            definitions.defined[symbol] = signal.expression
            definitions._note(symbol, signal.owner, signal.span, signal.dimension)
        self._states()
        self._averages_and_delays(definitions)
        for rate in circuit.rates.values():
            definitions.define_rate(rate.name, g.symbol("rate", rate.name), rate.expression, rate.dimension / units.TIME, rate.owner, rate.span)
        definitions.defined.update(self.extra_definitions)
        conditions = frozenset(g.symbol("signal", s.name) for s in circuit.signals.values() if s.is_condition)
        reduction = Reduction(g, definitions.defined, conditions)
        return self._resolve(definitions, reduction, outputs)

    def _parameter(
        self,
        name: str,
        kind: ParameterKind,
        initial: float | None,
        rest: Node | None,
        dimension: Dimension,
        is_condition: bool = False,
        span: Span | None = None,
    ) -> Node:
        symbol = self.graph.symbol("p", name)
        self.parameters[name] = _ParameterSketch(name, symbol, kind, initial, rest, dimension, is_condition, span)
        return symbol

    def _latches_and_clocks(self) -> None:
        g, circuit = self.graph, self.circuit
        clock_events = (*circuit.clock_events, *(self.study.clock_events if self.study else ()))
        clocked: dict[str, tuple[Node, float, Span]] = {}
        for event in clock_events:
            sketch = _ClockSketch(event.name, event.period_s, True)
            for assignment in event.assignments:
                if assignment.target_kind == "state":
                    raise NetlistError([messages.clock_sets_state(assignment.target, assignment.span)])
                known = clocked.get(assignment.target)
                if known is not None and known[1] == event.period_s:
                    raise NetlistError([messages.clock_conflict(assignment.target, assignment.span)])
                clocked[assignment.target] = (assignment.value, event.period_s, assignment.span)
                sketch.updates.append((assignment.target, assignment.value))
            self.clocks.append(sketch)
        for latch in circuit.latches.values():
            symbol = g.symbol("latch", latch.name)
            update = clocked.get(latch.name)
            initial = g.value_of(latch.initial)
            assert initial is not None
            if self.mean and update is not None:
                if latch.is_condition:
                    raise NetlistError([messages.condition_in_mean(latch.name, update[2])])
                self._mean_state(symbol, latch.name, update[0], update[1], initial, latch.dimension, latch.owner, latch.span)
                continue
            rest = update[0] if update is not None else None
            self.extra_definitions[symbol] = self._parameter(latch.name, "latch", initial, rest, latch.dimension, latch.is_condition, latch.span)
        if self.mean:
            self.clocks = []
        for sampler in circuit.samplers:
            sketch = _ClockSketch(sampler.name, sampler.period_s, False)
            for (name, value), dimension in zip(sampler.updates, sampler.dimensions, strict=True):
                symbol = g.symbol("sampled", name)
                if self.mean:
                    self._mean_state(symbol, name, value, sampler.period_s, 0.0, dimension, sampler.owner, sampler.span, name == sampler.name)
                    continue
                self.extra_definitions[symbol] = self._parameter(name, "sampled", None, value, dimension, span=sampler.span)
                sketch.updates.append((name, value))
            if not self.mean:
                self.clocks.append(sketch)

    def _mean_state(
        self,
        symbol: Node,
        name: str,
        update: Node,
        period_s: float,
        initial: float,
        dimension: Dimension,
        owner: str,
        span: Span,
        is_output: bool | None = None,
    ) -> None:
        """The s-domain equivalent of a value renewed every period: it follows its update with a lag.

        A value that feeds back on itself or is only passed on to the next instant lags one period; one that the circuit sees lags the half
        period that a hold takes on average. First order: right in gain at rest and in delay at low frequency.
        """
        g = self.graph
        x = g.symbol("x", name)
        self.extra_definitions[symbol] = x
        own = symbol in g.symbols_under([update])
        lag_s = period_s if own or is_output is False else 0.5 * period_s
        rate = g.divide(g.subtract(update, x), g.constant(lag_s))
        self.extra_rows.append(RowSketch(name, x, x, g.negate(rate), dimension, owner, span, initial, True))

    def _modulators(self) -> dict[str, Node]:
        """The duty in force of poles whose modulator samples it or whose control computes for a while."""
        g = self.graph
        duties: dict[str, Node] = {}
        for device in self.circuit.devices.values():
            if not KINDS[device.kind].switching:
                continue
            settings = device.settings
            sampling = settings.get("sampling", "natural")
            delay_node = settings.get("delay")
            delay_s = (g.value_of(delay_node) or 0.0) if isinstance(delay_node, int) else 0.0
            if sampling == "natural" and delay_s == 0.0:
                continue
            duty = next(settings[k] for k in ("duty", "upper_duty", "lower_duty") if isinstance(settings.get(k), int))
            rate_node = settings["rate"]
            assert isinstance(duty, int)
            assert isinstance(rate_node, int)
            rate_hz = g.value_of(rate_node)
            assert rate_hz is not None
            if sampling != "natural":
                period_s = 1.0 / rate_hz if sampling == "single" else 0.5 / rate_hz
                duty = self._held(f"{device.name}.sampled_duty", duty, period_s, device.owner, device.span)
            if delay_s > 0.0:
                duty = self._late(f"{device.name}.delayed_duty", duty, delay_s, device.owner, device.span)
            duties[device.name] = duty
        return duties

    def _held(self, name: str, value: Node, period_s: float, owner: str, span: Span) -> Node:
        symbol = self.graph.symbol("sampled", name)
        if self.mean:
            self._mean_state(symbol, name, value, period_s, 0.0, units.NONE, owner, span)
        else:
            self.extra_definitions[symbol] = self._parameter(name, "sampled", None, value, units.NONE, span=span)
            self.clocks.append(_ClockSketch(name, period_s, False, [(name, value)]))
        return symbol

    def _late(self, name: str, value: Node, delay_s: float, owner: str, span: Span) -> Node:
        symbol = self.graph.symbol("delayed", name)
        if self.mean:
            self._mean_state(symbol, name, value, 2.0 * delay_s, 0.0, units.NONE, owner, span)
        else:
            self.extra_definitions[symbol] = self._parameter(name, "delayed", None, value, units.NONE, span=span)
            self.delays.append((name, value, delay_s, None))
        return symbol

    def _states(self) -> None:
        g = self.graph
        zero = g.constant(0.0)
        for state in self.circuit.states.values():
            x = g.symbol("x", state.name)
            self.extra_definitions[g.symbol("state", state.name)] = x
            initial = (g.value_of(state.initial) or 0.0) if state.initial is not None else 0.0
            rate, rest, bounds = state.rate, None, None
            if state.low is not None and state.high is not None:
                bounds = (state.low, state.high)
                outward = g.either(
                    g.both(g.positive(g.subtract(x, state.high)), g.positive(rate)),
                    g.both(g.positive(g.subtract(state.low, x)), g.positive(g.negate(rate))),
                )
                probe = g.add(x, g.multiply(g.constant(BOUND_PROBE_S), rate))
                rest = g.subtract(x, g.limit(probe, state.low, state.high))
                rate = g.mux(outward, zero, rate)
            if state.held:
                rest = g.subtract(x, g.constant(initial))
            self.extra_rows.append(
                RowSketch(state.name, x, x, g.negate(rate), state.dimension, state.owner, state.span, initial, True, state.held, bounds, rest)
            )
        for unknown in self.circuit.unknowns.values():
            x = g.symbol("x", unknown.name)
            self.extra_definitions[g.symbol("unknown", unknown.name)] = x
            initial = (g.value_of(unknown.initial) or 0.0) if unknown.initial is not None else 0.0
            self.extra_rows.append(RowSketch(unknown.name, x, None, unknown.residual, unknown.dimension, unknown.owner, unknown.span, initial))

    def _averages_and_delays(self, definitions: Definitions) -> None:
        g = self.graph
        for delay in self.circuit.delays.values():
            symbol = g.symbol("delayed", delay.name)
            parameter = self._parameter(delay.name, "delayed", None, delay.expression, delay.dimension, span=delay.span)
            self.extra_definitions[symbol] = parameter
            self.delays.append((delay.name, delay.expression, delay.delay_s, None))
        for average in self.circuit.averages.values():
            # mean(x) = (Q(t) - Q(t - T))/T with Q' = x; at rest Q(t - T) = Q - T*x gives the mean x.
            name = f"{average.name}.integral"
            x, window = g.symbol("x", name), g.constant(average.window_s)
            rest = g.subtract(x, g.multiply(window, average.expression))
            late = self._parameter(f"{name}.delayed", "delayed", None, rest, average.dimension * units.TIME, span=average.span)
            self.delays.append((f"{name}.delayed", x, average.window_s, average.expression))
            self.extra_definitions[g.symbol("averaged", average.name)] = g.divide(g.subtract(x, late), window)
            self.extra_rows.append(
                RowSketch(
                    name, x, x, g.negate(average.expression), average.dimension * units.TIME, average.owner, average.span, 0.0, True, True, None, x
                )
            )

    # ------------------------------------------------------------ resolving

    def _resolve(self, definitions: Definitions, reduction: Reduction, outputs: Sequence[Quantity]) -> EquationSystem:
        g, circuit = self.graph, self.circuit
        rows = [*definitions.rows, *self.extra_rows]
        time_events = (*circuit.time_events, *(self.study.time_events if self.study else ()))
        condition_events = (*circuit.condition_events, *(self.study.condition_events if self.study else ()))
        flags = [
            (kind, name, condition, circuit.devices[name].span)
            for name, equations in definitions.equations.items()
            for kind, condition in equations.flags.items()
        ]
        asked = [
            *(r.residual for r in rows),
            *(r.charge for r in rows if r.charge is not None),
            *(r.rest for r in rows if r.rest is not None),
            *(node for r in rows if r.bounds is not None for node in r.bounds),
            *(p.rest for p in self.parameters.values() if p.rest is not None),
            *(node for c in self.clocks for _, node in c.updates),
            *(node for _, expression, _, slope in self.delays for node in (expression, slope) if node is not None),
            *(a.value for e in time_events for a in e.assignments),
            *(e.condition for e in condition_events),
            *(a.value for e in condition_events for a in e.assignments),
            *(q.expression for q in outputs),
            *(condition for _, _, condition, _ in flags),
            *(d.charge for d in definitions.dependents.values()),
        ]
        self._guarded(reduction, definitions, asked)
        for symbol, leaf in list(reduction.torn.items()):
            owner, span = definitions.owner_of.get(symbol, ("", no_span()))
            dimension = definitions.dimension_of.get(symbol, units.NONE)
            definition = reduction._rebuild([definitions.defined[symbol]])[0]
            rows.append(RowSketch(g.symbols[leaf][1], leaf, None, g.subtract(leaf, definition), dimension, owner, span))
        reduction.sealed = True
        derived = DerivedRates(g, reduction, definitions.dependents, rows)
        derived.fold()
        look = _Look(reduction, derived)
        derived.require(look.reduced([*asked[len(rows) :]]))
        unknown_rows = derived.finish()
        unknowns = tuple(self._unknown(row, look) for row in unknown_rows)
        index_of_unknown = {u.name: k for k, u in enumerate(unknowns)}
        index_of_parameter = {name: k for k, name in enumerate(self.parameters)}
        parameters = tuple(
            Parameter(p.name, p.symbol, p.kind, p.initial, None if p.rest is None else look.one(p.rest), p.dimension, p.is_condition, p.span)
            for p in self.parameters.values()
        )

        def targets(assignments: Sequence[Assignment]) -> tuple[Target, ...]:
            return tuple(
                Target("unknown", index_of_unknown[a.target], look.one(a.value), a.span)
                if a.target_kind == "state" or a.target not in index_of_parameter
                else Target("parameter", index_of_parameter[a.target], look.one(a.value), a.span)
                for a in assignments
            )

        return EquationSystem(
            graph=g,
            time=g.symbol("time", ""),
            unknowns=unknowns,
            parameters=parameters,
            delays=tuple(
                DelayLine(index_of_parameter[name], look.one(expression), delay_s, None if slope is None else look.one(slope))
                for name, expression, delay_s, slope in self.delays
            ),
            clocks=self._ranked_clocks(look, index_of_parameter),
            timed=tuple(Timed(e.time_s, targets(e.assignments), e.span) for e in time_events),
            conditionals=tuple(
                Conditional(e.name, look.one(e.condition), e.lasting_s, e.crossing, targets(e.assignments), e.span, e.text) for e in condition_events
            ),
            outputs=tuple(Output(q.name, look.one(q.expression), q.dimension, q.is_condition) for q in outputs),
            flags=tuple(Flag(kind, subject, look.one(condition), span) for kind, subject, condition, span in flags),
            power_scale=index_of_parameter["power_scale"],
            source_scale=index_of_parameter["source_scale"],
            notes=(),
            resolver=look,
        )

    def _guarded(self, reduction: Reduction, definitions: Definitions, asked: Sequence[Node]) -> None:
        try:
            reduction.resolve(asked)
        except LoopOfConditions as error:
            _, name = error.args[0]
            owner_of = definitions.owner_of
            symbol = self.graph.symbol(*error.args[0])
            raise NetlistError([messages.loop_of_conditions(name, owner_of.get(symbol, ("", no_span()))[1])]) from None

    def _unknown(self, row: RowSketch, look: _Look) -> Unknown:
        residual = row.residual
        rest = residual if row.rest is None else look.one(row.rest)
        bounds = None if row.bounds is None else (look.one(row.bounds[0]), look.one(row.bounds[1]))
        integrator = row.charge is not None and row.symbol not in self.graph.symbols_under([residual])
        return Unknown(
            name=row.name,
            symbol=row.symbol,
            charge=row.charge,
            residual=residual,
            rest=rest,
            initial=row.initial,
            fixed_start=row.fixed_start,
            scale=1.0,
            dimension=row.dimension,
            held=row.held,
            integrator=integrator,
            bounds=bounds,
            owner=row.owner,
            span=row.span,
        )

    def _ranked_clocks(self, look: _Look, index_of: dict[str, int]) -> tuple[Clock, ...]:
        """Samplers ranked by what they read of each other at one instant, `every` events last; equal period and rank become one clock."""
        g = self.graph
        of_parameter = {name: k for k, c in enumerate(self.clocks) if not c.events for name, _ in c.updates}
        resolved = [[(name, look.one(node)) for name, node in c.updates] for c in self.clocks]
        reads: list[set[int]] = []
        for k, named in enumerate(resolved):
            names = {g.symbols[s][1] for s in g.symbols_under([node for _, node in named]) if g.symbols[s][0] == "p"}
            reads.append({of_parameter[n] for n in names if n in of_parameter} - {k})
        rank: dict[int, int] = {}

        def rank_of(k: int, path: frozenset[int]) -> int:
            if k not in rank:
                inner = [rank_of(m, path | {k}) for m in reads[k] if m not in path]
                rank[k] = max(inner, default=-1) + 1
            return rank[k]

        groups: dict[tuple[float, int], tuple[str, list[tuple[int, Node]]]] = {}
        for k, clock in enumerate(self.clocks):
            key = (clock.period_s, RANK_EVENTS if clock.events else rank_of(k, frozenset()))
            _, updates = groups.setdefault(key, (clock.name, []))
            updates.extend((index_of[name], node) for name, node in resolved[k])
        return tuple(Clock(name, period, order, tuple(updates)) for (period, order), (name, updates) in groups.items())


@dataclass(slots=True)
class _Look:
    """The Resolver of a finished system."""

    reduction: Reduction
    derived: DerivedRates

    def reduced(self, expressions: Sequence[Node]) -> list[Node]:
        """Without the derivatives of dependent states replaced."""
        return self.reduction.resolve(expressions)

    def resolve(self, expressions: Sequence[Node]) -> list[Node]:
        """See EquationSystem.resolve.

        Raises:
            NetlistError: a quantity that needs an unknown the system does not have.
        """
        try:
            return self.derived.replace(self.reduction.resolve(expressions))
        except UnforeseenLoop as error:
            raise NetlistError([messages.not_kept(error.args[0][1], no_span())]) from None

    def one(self, expression: Node) -> Node:
        """A single expression resolved."""
        return self.resolve([expression])[0]
