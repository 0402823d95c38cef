"""The state of rest: Newton's method, then constant powers ramped up, sources ramped up, pseudo-time; and why there is none."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np

from polewise.equations.system import EquationSystem, Flag
from polewise.errors import PolewiseError
from polewise.grammar import units
from polewise.grammar.diagnostics import Diagnostic
from polewise.kernels import opcodes as op
from polewise.kernels.program import FloatArray
from polewise.solve import diagnosis
from polewise.solve.continuation import RampOutcome, ramp
from polewise.solve.linear import SINGULAR_RELATIVE
from polewise.solve.newton import NewtonOutcome, solve_newton
from polewise.solve.problem import DaeProblem, reader
from polewise.solve.pseudo_transient import settle_in_pseudo_time
from polewise.solve.rest_failure import RestFailure, explain, explain_singular, rows_that_read_time
from polewise.solve.square_system import SquareSystem, rest_rows

Strategy = Literal["newton", "regular operation", "power ramp", "source ramp", "pseudo-transient"]
COLLAPSED = "collapsed"  # kind of the flags that tell that a constant power is below its stated voltage


@dataclass(frozen=True, slots=True, eq=False)
class OperatingPoint:
    """A state of rest.

    Args:
        x: shape (n,), unknowns, SI.
        p: shape (n_p,), parameters: latches as stated, sampled and delayed values at rest.
        strategy: which search found it: "newton"; "regular operation": with every limit away and every pole in continuous conduction first;
            "power ramp": constant powers raised from the solution without them; "source ramp";
            "pseudo-transient".
        iterations: Newton corrections in all.
        flags: every flag of the system that is true here.
        warnings: what a reader should know.
    """

    x: FloatArray
    p: FloatArray
    strategy: Strategy
    iterations: int
    flags: tuple[Flag, ...]
    warnings: tuple[Diagnostic, ...]

    @property
    def collapsed(self) -> tuple[str, ...]:
        """Constant powers below their stated voltage (not fed at all: one that a fold stops raises PowerLimit instead)."""
        return tuple(f.subject for f in self.flags if f.kind == COLLAPSED)


def find_operating_point(
    problem: DaeProblem | EquationSystem, *, guess: FloatArray | None = None, start_latches: Mapping[str, float] | None = None
) -> OperatingPoint:
    """Find x with every time derivative zero, sampled and delayed values at their fixed points, latches at their start values.

    Args:
        problem: or its equations alone; nothing of the run program is needed.
        guess: shape (n,), SI; None: the `initial` values.
        start_latches: parameter name → value instead of its initial one.
    Raises:
        DependsOnTime, IntegratorCannotRest, IntegratorsFight: what can't rest, named.
        PowerLimit: constant powers ask for more than can be delivered, with the limiting figure.
        SingularSystem: the unknown that is left open.
        NoOperatingPoint: nothing worked; names the laws that hold least.
    """
    system = problem if isinstance(problem, EquationSystem) else problem.system
    moving = [diagnosis.named_row(system, r.kind, r.index) for r in rows_that_read_time(system)]
    if moving or system.moving:
        # A source that follows time is a plainer culprit than the unknowns it moves.
        raise diagnosis.depends_on_time([diagnosis.named_box(name, span) for name, span in system.moving] or moving)
    return _Search(system, guess, start_latches or {}).run()


# Newton corrections with every switch in its usual mode: nearly linear equations need few.
REGULAR_CORRECTIONS = 30
# A rate (per second, in the integrator's own unit) below this is none.
RATE_OF_REST = 1e-9
# Shares of the constant powers at which the ramp may begin, in the order in which the slow strategies try them.
POWER_RAMP_BEGINS = (0.01, 0.0, 0.1, 1.0)


class _Search:
    """One search with its square system and the points at which strategies ended."""

    def __init__(self, system: EquationSystem, guess: FloatArray | None, start_latches: Mapping[str, float]) -> None:
        self.system = system
        self.square = SquareSystem(system, rest_rows(system))
        index_of = {q.name: j for j, q in enumerate(system.parameters)}
        for name, value in start_latches.items():
            self.square.p[index_of[name]] = value
        self.start = self._start_point(guess)
        self.has_guess = guess is not None
        self.iterations = 0
        self.ends: list[FloatArray] = []
        self.collapse_flags = [f for f in system.flags if f.kind == COLLAPSED]
        self.read_collapse = reader(system, [f.condition for f in self.collapse_flags])
        self.dead: frozenset[str] = frozenset()  # loads that are below their voltage even without any constant power
        symbols = set(system.graph.symbols_under([r.residual for r in self.square.rows]))
        self.powered = system.parameters[system.power_scale].symbol in symbols

    def run(self) -> OperatingPoint:
        """Try the strategies in their order."""
        square, system = self.square, self.system
        if self.has_guess or not self.powered:
            outcome = self._newton(self.start)
            if outcome.converged and not self._refused(outcome.z):
                return self._accept(outcome, "newton")
        regular = self._regular()
        if regular is not None:
            return self._accept(regular, "regular operation")
        if not self.powered:
            return self._accept(*self._unpowered())
        base, strategy, begin = self._base()
        if begin == 0.0:
            square.p[system.power_scale] = 1.0  # a load without power never tells that its voltage is too low
            self.dead = frozenset(self._collapsed(base.z))
            square.p[system.power_scale] = 0.0
        result = ramp(square, base, system.power_scale, self._refused, begin=begin)
        self.iterations += result.iterations
        if result.limit == "none":
            square.p[system.power_scale] = 1.0
            return self._accept(self._newton(result.z), "power ramp" if strategy == "newton" else strategy)
        if result.limit in ("fold", "refused"):
            raise self._power_limit(result)
        self.ends.append(result.z)
        square.p[system.power_scale] = 1.0
        outcome, end = settle_in_pseudo_time(square, result.z)
        self.iterations += outcome.iterations
        if outcome.converged and not self._refused(outcome.z):
            return self._accept(outcome, "pseudo-transient")
        if outcome.converged:
            raise self._power_limit(result)
        self.ends.append(end)
        raise self._failure(f"; up to {result.reached:.3g} times the constant powers there is one")

    def _regular(self) -> NewtonOutcome | None:
        """The point at which everything regulates: no limit reached, poles in continuous conduction, loads above their voltage.

        With those switches held the equations are smooth and determined even without load; the constant powers are ramped up there, then the
        switches are let go. None where that leads to no point of rest.
        """
        square, power = self.square, self.system.power_scale
        if len(square.usual_switch) == 0:
            return None
        square.assume_usual = True
        try:
            square.p[power] = 0.0 if self.powered else 1.0
            base = solve_newton(square, self._powered_up(), limit=REGULAR_CORRECTIONS)
            self.iterations += base.iterations
            if not base.converged or base.factors is None or not base.factors.exact:
                return None
            z = base.z
            if self.powered:
                result = ramp(square, base, power, lambda z: False)
                self.iterations += result.iterations
                if result.limit != "none":
                    return None
                z = result.z
        finally:
            square.assume_usual = False
            square.p[power] = 1.0
        outcome = solve_newton(square, z)
        self.iterations += outcome.iterations
        good = outcome.converged and outcome.factors is not None and outcome.factors.exact and not self._refused(outcome.z)
        return outcome if good else None

    def _powered_up(self) -> FloatArray:
        """The start with voltages that nothing states at the size of the strongest source, everything else away from zero.

        Products of a voltage and a duty have two solutions: the one near the source's own voltage is wanted.
        """
        square, system, graph = self.square, self.system, self.system.graph
        scale_symbol = system.parameters[system.source_scale].symbol
        values = {q.symbol: float(v) for q, v in zip(system.parameters, square.p, strict=True)}
        strongest = 0.0
        for node in graph.reachable([r.residual for r in square.rows]):
            if graph.operation[node] == op.MUL and scale_symbol in (graph.a[node], graph.b[node]):
                other = graph.b[node] if graph.a[node] == scale_symbol else graph.a[node]
                value = graph.value_of(other)
                strongest = max(strongest, abs(values.get(other, 0.0) if value is None else value))
        size = square.scale.copy()
        if strongest > 0.0:
            is_voltage = [r.kind == "x" and system.unknowns[r.index].dimension == units.VOLTAGE for r in square.rows]
            size[is_voltage] = strongest
        guess: FloatArray = np.where(self.start == 0.0, size, self.start)
        return guess

    def _base(self) -> tuple[NewtonOutcome, Strategy, float]:
        """A solution to ramp the constant powers up from: without any, or with as little as makes it the only one.

        A step-down stage with a diode has no single point of rest without load: its output may stand anywhere above the set point.
        """
        failure: PolewiseError | None = None
        for begin, thorough in (*((b, False) for b in sorted(POWER_RAMP_BEGINS)), *((b, True) for b in POWER_RAMP_BEGINS)):
            self.square.p[self.system.power_scale] = begin
            strategy: Strategy = "newton"
            try:
                if thorough:
                    base, strategy = self._unpowered()
                else:
                    base = self._newton(self.start)
                    if not base.converged or (begin > 0.0 and self._refused(base.z)):
                        continue
                # Without any power the output of a stage that is switched off may stand anywhere; only the end of the ramp must be the only one.
                if not (thorough and begin == 0.0):
                    self._refuse_singular(base)
            except PolewiseError as error:
                failure = failure or error
                continue
            return base, strategy, begin
        assert failure is not None
        raise failure

    def _start_point(self, guess: FloatArray | None) -> FloatArray:
        """Stated values; held parameters from their expressions there."""
        system, square = self.system, self.square
        x = np.array([u.initial for u in system.unknowns], dtype=float) if guess is None else np.asarray(guess, dtype=float).copy()
        p = square.p.copy()
        rests = [(j, q.rest) for j, q in enumerate(system.parameters) if q.rest is not None and q.initial is None]
        if rests:
            values = reader(system, [rest for _, rest in rests])(x, 0.0, p)
            for (j, _), value in zip(rests, values, strict=True):
                p[j] = value if np.isfinite(value) else 0.0
        return np.concatenate([x, p[square.solved_p]])

    def _newton(self, start: FloatArray) -> NewtonOutcome:
        outcome = solve_newton(self.square, start)
        self.iterations += outcome.iterations
        if not outcome.converged:
            self.ends.append(outcome.z)
        return outcome

    def _unpowered(self) -> tuple[NewtonOutcome, Strategy]:
        """Source ramp, then pseudo-time, at the present constant powers."""
        square, source = self.square, self.system.source_scale
        square.p[source] = 0.0
        dark = self._newton(np.zeros(square.n))
        if dark.converged:
            result = ramp(square, dark, source, lambda z: False)
            self.iterations += result.iterations
            if result.limit == "none":
                square.p[source] = 1.0
                outcome = self._newton(result.z)
                if outcome.converged and not self._refused(outcome.z):
                    return outcome, "source ramp"
            else:
                self.ends.append(result.z)
        square.p[source] = 1.0
        outcome, end = settle_in_pseudo_time(square, self.start)
        self.iterations += outcome.iterations
        if outcome.converged and not self._refused(outcome.z):
            return outcome, "pseudo-transient"
        self.ends.insert(0, outcome.z)
        self.ends.append(end)
        raise self._failure("")

    def _accept(self, outcome: NewtonOutcome, strategy: Strategy) -> OperatingPoint:
        """A solution that is the only one near."""
        if not outcome.converged:
            raise self._failure("")
        self._refuse_singular(outcome)
        square, system = self.square, self.system
        p = square.parameters_of(outcome.z)
        x = outcome.z[: square.n_x].copy()
        values = reader(system, [f.condition for f in system.flags])(x, 0.0, p)
        flags = tuple(f for f, value in zip(system.flags, values, strict=True) if value != 0.0)
        warnings = tuple(diagnosis.collapsed_warning(f) for f in flags if f.kind == COLLAPSED)
        return OperatingPoint(x, p, strategy, self.iterations, flags, warnings)

    def _refuse_singular(self, outcome: NewtonOutcome) -> None:
        """A solution with a singular Jacobian is one of many: name what is open."""
        if self.square.n == 0:
            return
        if outcome.factors is not None and outcome.factors.exact:
            smallest, _, _ = outcome.factors.smallest_singular()
            if smallest > SINGULAR_RELATIVE * self.square.n:
                return
        found = explain_singular(self.square, outcome.z)
        if found is not None and found.kind == "integrator" and max(abs(rate) for rate in found.rates) <= RATE_OF_REST:
            return  # an integrator that nothing moves (its stage is switched off) rests wherever it stands
        if found is not None:
            raise self._explained(found, "")

    def _collapsed(self, z: FloatArray) -> list[str]:
        values = self.read_collapse(z[: self.square.n_x], 0.0, self.square.parameters_of(z))
        return [f.subject for f, value in zip(self.collapse_flags, values, strict=True) if value != 0.0]

    def _refused(self, z: FloatArray) -> bool:
        """Whether a load that can be fed has collapsed."""
        return any(subject not in self.dead for subject in self._collapsed(z))

    def _failure(self, reached: str) -> PolewiseError:
        square = self.square
        finite = [z for z in self.ends if np.all(np.isfinite(square.residual(z)))]
        if not finite:
            f = square.residual(self.start)
            row = square.rows[int(np.argmin(np.isfinite(f)))]
            return diagnosis.not_finite_at_rest(diagnosis.named_row(self.system, row.kind, row.index))
        return self._explained(explain(square, finite, self.start), reached)

    def _explained(self, found: RestFailure, reached: str) -> PolewiseError:
        rows = [diagnosis.named_row(self.system, r.kind, r.index) for r in found.rows]
        if found.kind == "integrator":
            elements = [r.kind == "x" and self.system.unknowns[r.index].charge != self.system.unknowns[r.index].symbol for r in found.rows]
            return diagnosis.integrators_cannot_rest(rows, found.rates, elements)
        if found.kind in ("fight", "share"):
            return diagnosis.integrators_fight(rows, same=found.kind == "share")
        if found.kind == "singular":
            return diagnosis.singular_at_rest(rows)
        return diagnosis.no_operating_point(rows, reached)

    def _power_limit(self, result: RampOutcome) -> PolewiseError:
        """The figure at the end of the branch."""
        loads = [f for f in self.collapse_flags if f.subject not in self.dead]
        square = self.square
        x, p = result.z[: square.n_x], square.parameters_of(result.z)
        delivered = self._powers(loads, x, p)
        if delivered is None:
            return diagnosis.power_limit(loads, result.reached, None, None, fades=result.limit == "refused")
        asked = {name: power / result.reached if result.reached > 0.0 else 0.0 for name, power in delivered.items()}
        loads.sort(key=lambda f: -abs(delivered[f.subject]))
        taking = [f for f in loads if delivered[f.subject] > 0.0] or loads
        return diagnosis.power_limit(taking, result.reached, asked, delivered, fades=result.limit == "refused")

    def _powers(self, loads: list[Flag], x: FloatArray, p: FloatArray) -> dict[str, float] | None:
        """v*i of each load's branch, None where the system can't tell."""
        graph = self.system.graph
        try:
            products = [graph.multiply(graph.symbol("v", f.subject), graph.symbol("i", f.subject)) for f in loads]
            values = reader(self.system, self.system.resolve(products))(x, 0.0, p)
        except (KeyError, LookupError):
            return None
        return {f.subject: value for f, value in zip(loads, values, strict=True)}
