"""Where a circuit is looked at: its operating point, or where a run stood; and its linearisation there with chosen inputs and outputs."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from polewise.analysis import failures
from polewise.analysis.linearise import InputAt, LinearSystem, Point, linearise
from polewise.analysis.probes import Probing
from polewise.circuit.model import Circuit, Quantity
from polewise.circuit.quantities import find
from polewise.equations.assemble import assemble
from polewise.equations.system import EquationSystem
from polewise.errors import DependsOnTime
from polewise.expression.graph import Node
from polewise.grammar.diagnostics import Diagnostic
from polewise.network.graph import Network
from polewise.results.failures import UnknownName
from polewise.solve.initial import Snapshot
from polewise.solve.newton import solve_newton
from polewise.solve.operating_point import OperatingPoint, find_operating_point
from polewise.solve.problem import reader
from polewise.solve.square_system import SquareSystem, kept_at_start, start_rows


@dataclass(frozen=True, slots=True, eq=False)
class Standpoint:
    """A circuit and where it stands.

    Args:
        circuit, network: as read, or a copy with probes.
        latches: values of latches and inputs that differ from their start values, SI.
        study: whose clocks are in force; None: only the circuit's own.
        snapshot: where a run stood; None: the operating point.
        guess: unknown's name → value, to begin the search from.
    """

    circuit: Circuit
    network: Network
    latches: Mapping[str, float] = field(default_factory=dict)
    study: str | None = None
    snapshot: Snapshot | None = None
    guess: Mapping[str, float] | None = None

    def quantity(self, name: str) -> Quantity:
        """A quantity by name.

        Raises:
            UnknownName: nothing has that name.
        """
        found = find(self.circuit, name)
        if isinstance(found, Diagnostic):
            raise failures.unknown_input(self.circuit, name, found)
        return found

    def probing(self) -> Probing:
        """Begin to disturb a copy of the circuit."""
        return Probing(self.circuit, self.network)

    def with_copy(self, circuit: Circuit, network: Network) -> Standpoint:
        """The same place in a copy of the circuit."""
        return replace(self, circuit=circuit, network=network)

    def with_latches(self, latches: Mapping[str, float]) -> Standpoint:
        """The same with other values of latches."""
        return replace(self, latches={**self.latches, **latches})

    def equations(self, outputs: Sequence[Quantity] = ()) -> EquationSystem:
        """The equations that can tell the outputs."""
        return assemble(self.circuit, self.network, study=self.study, outputs=outputs)

    def point(self, system: EquationSystem) -> Point:
        """The point in these equations.

        Raises:
            NoOperatingPoint: there is none.
            AnalysisRefused: the circuit reads `time`, so that it has no constant operating point.
        """
        if self.snapshot is not None:
            return self._where_a_run_stood(system, self.snapshot)
        found = self._rest(system)
        return Point(found.x, found.p, 0.0)

    def _rest(self, system: EquationSystem) -> OperatingPoint:
        known = {q.name for q in system.parameters}
        latches = {name: value for name, value in self.latches.items() if name in known}
        guess = None
        if self.guess is not None:
            guess = np.array([self.guess.get(u.name, u.initial) for u in system.unknowns], dtype=float)
        try:
            return find_operating_point(system, guess=guess, start_latches=latches)
        except DependsOnTime as error:
            hint = "in a rotating frame a balanced circuit has one; `orbit` finds the periodic state and its stability"
            raise failures.no_constant_point(error.diagnostic, hint) from None

    def _where_a_run_stood(self, system: EquationSystem, snapshot: Snapshot) -> Point:
        """States, latches and held values of a run; algebraic unknowns from their laws."""
        rows = [r for r in start_rows(system) if r.kind == "x" or system.parameters[r.index].name not in snapshot.parameters]
        square = SquareSystem(system, rows)
        square.at_time(snapshot.time_s)
        for j, parameter in enumerate(system.parameters):
            square.p[j] = self.latches.get(parameter.name, snapshot.parameters.get(parameter.name, square.p[j]))
        x = np.array([snapshot.unknowns.get(u.name, u.initial) for u in system.unknowns], dtype=float)
        states = [i for i, u in enumerate(system.unknowns) if u.is_state]
        square.offset[states] = reader(system, [kept_at_start(system, i) for i in states])(x, snapshot.time_s, square.p)
        outcome = solve_newton(square, np.concatenate([x, square.p[square.solved_p]]))
        if not outcome.converged:
            raise failures.refused("no-point-of-run", f"the state at {snapshot.time_s:.6g} s of the run could not be made consistent")
        return Point(outcome.z[: square.n_x].copy(), square.parameters_of(outcome.z), snapshot.time_s)

    def linear(
        self, probing: Probing, inputs: Sequence[str], outputs: Sequence[Quantity], *, flipped: Mapping[Node, int] | None = None
    ) -> LinearSystem:
        """As linearised, the matrices only."""
        return self.linearised(probing, inputs, outputs, flipped=flipped).linear

    def linearised(
        self, probing: Probing, inputs: Sequence[str], outputs: Sequence[Quantity], *, flipped: Mapping[Node, int] | None = None
    ) -> Linearised:
        """Linearise a probed copy.

        Args:
            probing: with the inputs' probes in it.
            inputs: names of its probes.
            outputs: quantities of the copy.
            flipped: switches at their kink to be taken on another side.
        """
        stand = self.with_copy(probing.circuit, probing.network)
        system = stand.equations(outputs)
        at = [InputAt(name, probing.probes[name].latch, probing.probes[name].dimension) for name in inputs]
        point = stand.point(system)
        return Linearised(stand, system, point, linearise(system, stand.circuit, point, at, outputs, flipped=flipped), tuple(at), tuple(outputs))

    def between(self, inputs: Sequence[str], outputs: Sequence[str]) -> LinearSystem:
        """Linearise between named inputs and outputs.

        Raises:
            UnknownName, NotAnInput: a name that can't be read or disturbed.
        """
        probing = self.probing()
        for name in inputs:
            probing.add(name)
        return self.linear(probing, [n.strip() for n in inputs], [self.quantity(n) for n in outputs])


@dataclass(frozen=True, slots=True, eq=False)
class Linearised:
    """A linear system with what it was made from."""

    stand: Standpoint
    system: EquationSystem
    point: Point
    linear: LinearSystem
    inputs: tuple[InputAt, ...]
    outputs: tuple[Quantity, ...]

    def flipped(self, sides: Mapping[Node, int]) -> Linearised:
        """The same point on another side of a kink."""
        linear = linearise(self.system, self.stand.circuit, self.point, self.inputs, self.outputs, flipped=sides)
        return replace(self, linear=linear)


__all__ = ["Linearised", "Standpoint", "UnknownName"]
