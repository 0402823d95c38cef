"""Modified nodal analysis on a tree: Circuit and Network → EquationSystem of index 1."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from polewise.circuit.model import Assignment, Circuit, Law, Quantity, StateDef, StudyDef
from polewise.equations import messages
from polewise.equations.definitions import Definitions, RowSketch
from polewise.equations.derived import DerivedRates
from polewise.equations.modulators import duties_in_force, gates
from polewise.equations.reduce import LoopOfConditions, Reduction, UnforeseenLoop
from polewise.equations.sketch import ClockSketch, DelaySketch, SystemSketch
from polewise.equations.system import Clock, Conditional, DelayLine, EquationSystem, Flag, Output, Parameter, Target, Timed, Unknown
from polewise.errors import NetlistError
from polewise.expression.collection import no_collection
from polewise.expression.derivative import Differentiator
from polewise.expression.graph import ExpressionGraph, Node
from polewise.grammar import units
from polewise.grammar.source import Span, no_span
from polewise.kernels.program import RANK_EVENTS
from polewise.network.graph import Network

# At an operating point a bounded state satisfies x = limit(x + s*rate, low, high); any s > 0 (seconds) serves.
BOUND_PROBE_S = 1e-3


def assemble(
    circuit: Circuit,
    network: Network,
    *,
    study: str | None = None,
    outputs: Sequence[Quantity] = (),
    sampling: str = "exact",
    picture: str = "averaged",
) -> EquationSystem:
    """Write the circuit's equations with as few unknowns as its structure allows.

    Args:
        study: whose events are in force beside the circuit's own; None: only the circuit's own.
        outputs: what will be recorded.
        sampling: "exact", or "mean" for the s-domain equivalents of sampled blocks.
        picture: "averaged", or "edges" for poles with every switching edge (no operating point exists then); "latched edges" for modulators
            that let each edge pass once a period.
    Raises:
        NetlistError: a loop of conditions, a derivative that cannot be determined, or an event that cannot be carried out.
    """
    with no_collection():
        return _Assembler(circuit, network, circuit.studies[study] if study else None, sampling == "mean", picture).assemble(outputs)


class _Assembler:
    """Collects sketches in circuit-level symbols, then resolves them all at once."""

    def __init__(self, circuit: Circuit, network: Network, study: StudyDef | None, mean: bool, picture: str) -> None:
        self.circuit, self.network, self.study = circuit, network, study
        self.edges, self.latched = picture != "averaged", picture == "latched edges"
        self.graph: ExpressionGraph = circuit.graph
        self.sketch = SystemSketch(self.graph, mean)

    # ------------------------------------------------------------ sketching

    def assemble(self, outputs: Sequence[Quantity]) -> EquationSystem:
        g, circuit = self.graph, self.circuit
        power = self.sketch.parameter("power_scale", "power_scale", 1.0, None, units.NONE)
        source = self.sketch.parameter("source_scale", "source_scale", 1.0, None, units.NONE)
        self._latches_and_clocks()
        duties = {} if self.edges else duties_in_force(circuit, self.sketch)
        pole_gates = gates(circuit, self.sketch, latched=self.latched) if self.edges else {}
        definitions = Definitions(circuit, self.network, power, source, duties, pole_gates)
        definitions.define_all()
        definitions.defined.update(self.sketch.definitions)
        for signal in circuit.signals.values():
            symbol = g.symbol("signal", signal.name)
            definitions.defined[symbol] = signal.expression
            definitions._note(symbol, signal.owner, signal.span, signal.dimension)
        self._states()
        self._averages_and_delays(definitions)
        for rate in circuit.rates.values():
            definitions.define_rate(rate.name, g.symbol("rate", rate.name), rate.expression, rate.dimension / units.TIME, rate.owner, rate.span)
        definitions.defined.update(self.sketch.definitions)
        conditions = frozenset(g.symbol("signal", s.name) for s in circuit.signals.values() if s.is_condition)
        reduction = Reduction(g, definitions.defined, conditions)
        return self._resolve(definitions, reduction, outputs)

    def _latches_and_clocks(self) -> None:
        g, circuit = self.graph, self.circuit
        clock_events = (*circuit.clock_events, *(self.study.clock_events if self.study else ()))
        clocked: dict[str, tuple[Node, float, Span]] = {}
        for event in clock_events:
            sketch = ClockSketch(event.name, event.period_s, True)
            for assignment in event.assignments:
                if assignment.target_kind == "state":
                    raise NetlistError([messages.clock_sets_state(assignment.target, assignment.span)])
                known = clocked.get(assignment.target)
                if known is not None and known[1] == event.period_s:
                    raise NetlistError([messages.clock_conflict(assignment.target, assignment.span)])
                clocked[assignment.target] = (assignment.value, event.period_s, assignment.span)
                sketch.updates.append((assignment.target, assignment.value))
            self.sketch.clocks.append(sketch)
        for latch in circuit.latches.values():
            symbol = g.symbol("latch", latch.name)
            update = clocked.get(latch.name)
            initial = g.value_of(latch.initial)
            assert initial is not None
            if self.sketch.mean and update is not None:
                if latch.is_condition:
                    raise NetlistError([messages.condition_in_mean(latch.name, update[2])])
                self.sketch.mean_state(symbol, latch.name, update[0], update[1], initial, latch.dimension, latch.owner, latch.span)
                continue
            rest = update[0] if update is not None else None
            self.sketch.definitions[symbol] = self.sketch.parameter(
                latch.name, "latch", initial, rest, latch.dimension, is_condition=latch.is_condition, span=latch.span
            )
        if self.sketch.mean:
            self.sketch.clocks = []
        for sampler in circuit.samplers:
            sketch = ClockSketch(sampler.name, sampler.period_s, False)
            for (name, value), dimension in zip(sampler.updates, sampler.dimensions, strict=True):
                symbol = g.symbol("sampled", name)
                if self.sketch.mean:
                    self.sketch.mean_state(symbol, name, value, sampler.period_s, 0.0, dimension, sampler.owner, sampler.span, name == sampler.name)
                    continue
                # A filter's memory of earlier instants is empty at a cold start; what an instant reads there is read at time 0.
                initial = 0.0 if name.startswith(f"{sampler.name.removesuffix('.memory')}.") else None
                self.sketch.definitions[symbol] = self.sketch.parameter(name, "sampled", initial, value, dimension, span=sampler.span)
                sketch.updates.append((name, value))
            if not self.sketch.mean:
                self.sketch.clocks.append(sketch)

    def _states(self) -> None:
        g = self.graph
        zero = g.constant(0.0)
        for state in self.circuit.states.values():
            x = g.symbol("x", state.name)
            self.sketch.definitions[g.symbol("state", state.name)] = x
            initial = (g.value_of(state.initial) or 0.0) if state.initial is not None else 0.0
            rate, rest, bounds = state.rate, None, None
            if state.low is not None and state.high is not None:
                bounds = (state.low, state.high)
                # The rate's sign only matters at a bound: elsewhere its switch sees a constant, so that it cannot flip for nothing.
                away = g.constant(-1.0)
                at_high, at_low = g.positive(g.subtract(x, state.high)), g.positive(g.subtract(state.low, x))
                up, down = g.positive(g.mux(at_high, rate, away)), g.positive(g.mux(at_low, g.negate(rate), away))
                outward = g.either(up, down)
                probe = g.add(x, g.multiply(g.constant(BOUND_PROBE_S), rate))
                rest = g.subtract(x, g.limit(probe, state.low, state.high))
                rate = g.mux(outward, zero, rate)
            if state.held:
                rest = g.subtract(x, g.constant(initial))
            row = RowSketch(state.name, x, x, g.negate(rate), state.dimension, state.owner, state.span, initial, True, state.held, bounds, rest)
            row.integrator = not self._reads_itself(state)
            self.sketch.rows.append(row)
        for unknown in self.circuit.unknowns.values():
            x = g.symbol("x", unknown.name)
            self.sketch.definitions[g.symbol("unknown", unknown.name)] = x
            initial = (g.value_of(unknown.initial) or 0.0) if unknown.initial is not None else 0.0
            self.sketch.rows.append(RowSketch(unknown.name, x, None, unknown.residual, unknown.dimension, unknown.owner, unknown.span, initial))

    def _reads_itself(self, state: StateDef) -> bool:
        """Whether a state's rate reads the state in its own text or signals: a lag. One that is only fed back through the circuit integrates."""
        g = self.graph
        own, seen, stack = g.symbol("state", state.name), set[Node](), [state.rate]
        while stack:
            for symbol in g.symbols_under([stack.pop()]):
                if symbol == own:
                    return True
                kind, name = g.symbols[symbol]
                if kind == "signal" and symbol not in seen:
                    seen.add(symbol)
                    stack.append(self.circuit.signals[name].expression)
        return False

    def _averages_and_delays(self, definitions: Definitions) -> None:
        g = self.graph
        for delay in self.circuit.delays.values():
            symbol = g.symbol("delayed", delay.name)
            parameter = self.sketch.parameter(delay.name, "delayed", None, delay.expression, delay.dimension, span=delay.span)
            self.sketch.definitions[symbol] = parameter
            self.sketch.delays.append(DelaySketch(delay.name, delay.expression, delay.delay_s, None))
        for average in self.circuit.averages.values():
            # mean(x) = (Q(t) - Q(t - T))/T with Q' = x; at rest Q(t - T) = Q - T*x gives the mean x.
            name = f"{average.name}.integral"
            x, window = g.symbol("x", name), g.constant(average.window_s)
            rest = g.subtract(x, g.multiply(window, average.expression))
            late = self.sketch.parameter(f"{name}.delayed", "delayed", None, rest, average.dimension * units.TIME, span=average.span)
            self.sketch.delays.append(DelaySketch(f"{name}.delayed", x, average.window_s, average.expression))
            self.sketch.definitions[g.symbol("averaged", average.name)] = g.divide(g.subtract(x, late), window)
            self.sketch.rows.append(
                RowSketch(
                    name, x, x, g.negate(average.expression), average.dimension * units.TIME, average.owner, average.span, 0.0, True, True, None, x
                )
            )

    # ------------------------------------------------------------ resolving

    def _resolve(self, definitions: Definitions, reduction: Reduction, outputs: Sequence[Quantity]) -> EquationSystem:
        g, circuit = self.graph, self.circuit
        rows = [*definitions.rows, *self.sketch.rows]
        time_events = (*circuit.time_events, *(self.study.time_events if self.study else ()))
        condition_events = (*circuit.condition_events, *(self.study.condition_events if self.study else ()), *self.sketch.conditionals)
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
            *(p.rest for p in self.sketch.parameters.values() if p.rest is not None),
            *(node for c in self.sketch.clocks for _, node in c.updates),
            *(node for d in self.sketch.delays for node in (d.expression, d.start_slope) if node is not None),
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
        index_of_parameter = {name: k for k, name in enumerate(self.sketch.parameters)}
        parameters = tuple(
            Parameter(p.name, p.symbol, p.kind, p.initial, None if p.rest is None else look.one(p.rest), p.dimension, p.is_condition, p.span)
            for p in self.sketch.parameters.values()
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
                DelayLine(index_of_parameter[d.name], look.one(d.expression), d.delay_s, None if d.start_slope is None else look.one(d.start_slope))
                for d in self.sketch.delays
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
            moving=self._moving(look),
        )

    def _moving(self, look: _Look) -> tuple[tuple[str, Span], ...]:
        """Boxes whose value follows `time` by itself, directly or through signals; a step in time is none."""
        g = self.graph
        time = g.symbol("time", "")
        differentiator = Differentiator(g, [time])
        found = []
        for branch in self.circuit.branches.values():
            if branch.expression is None or branch.law not in (Law.VOLTAGE, Law.CURRENT, Law.RESISTANCE, Law.CONDUCTANCE):
                continue
            symbols = g.symbols_under([branch.expression])
            signals = [s for s in symbols if g.symbols[s][0] == "signal"]
            if time in symbols or (signals and time in g.symbols_under(look.resolve(signals))):
                expression = look.one(branch.expression)
                if differentiator.gradients([expression])[0]:
                    found.append((branch.name, branch.span))
        return tuple(found)

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
        integrator = row.integrator
        if integrator is None:
            integrator = row.charge is not None and row.symbol not in self.graph.symbols_under([residual])
        return Unknown(
            name=row.name,
            symbol=row.symbol,
            charge=row.charge,
            residual=residual,
            rest=rest,
            initial=row.initial,
            fixed_start=row.fixed_start,
            scale=row.scale,
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
        of_parameter = {name: k for k, c in enumerate(self.sketch.clocks) if not c.events for name, _ in c.updates}
        resolved = [[(name, look.one(node)) for name, node in c.updates] for c in self.sketch.clocks]
        reads: list[set[int]] = []
        for k, named in enumerate(resolved):
            names = {g.symbols[s][1] for s in g.symbols_under([node for _, node in named]) if g.symbols[s][0] == "p"}
            reads.append({of_parameter[n] for n in names if n in of_parameter} - {k})
        # The circuit lists blocks in the order in which they update: one reads the new values of those before it, the old ones of those after.
        rank = [0] * len(self.sketch.clocks)
        for k in range(len(rank)):
            later_than = [rank[m] + 1 for m in reads[k] if m < k]
            not_before = [rank[m] for m in range(k) if k in reads[m]]
            rank[k] = max([0, *later_than, *not_before])

        groups: dict[tuple[float, float, int], tuple[str, list[tuple[int, Node]]]] = {}
        for k, clock in enumerate(self.sketch.clocks):
            key = (clock.period_s, clock.offset_s, RANK_EVENTS if clock.events else rank[k])
            _, updates = groups.setdefault(key, (clock.name, []))
            updates.extend((index_of[name], node) for name, node in resolved[k])
        return tuple(Clock(name, period, order, tuple(updates), offset) for (period, offset, order), (name, updates) in groups.items())


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
