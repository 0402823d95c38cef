"""Exact linearisation of an EquationSystem at one point: sparse E x' = A x + B u, y = C x + D u with delays, holds and clocked values apart."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, TypeAlias

import numpy as np

from polewise.analysis.channels import Channel
from polewise.analysis.point import PointValues
from polewise.circuit.model import Circuit, Quantity
from polewise.equations.system import EquationSystem, Unknown
from polewise.expression.collection import no_collection
from polewise.expression.derivative import Differentiator
from polewise.expression.graph import Node
from polewise.grammar.units import Dimension
from polewise.kernels.program import FloatArray

SparseArray: TypeAlias = Any  # scipy.sparse.csc_matrix; scipy has no types

# A bounded state this close to its bound, in parts of it, rests there.
BOUND_RELATIVE = 1e-9


@dataclass(frozen=True, slots=True)
class Held:
    """A clocked value that renews with others: w[target] becomes its update, row `index` of the system's held updates."""

    period_s: float
    offset_s: float
    rank: int
    targets: tuple[int, ...]


@dataclass(frozen=True, slots=True, eq=False)
class LinearSystem:
    """Small deviations of unknowns x, inputs u, outputs y, and of values w that reach the equations late.

    E x' + E_w w' + E_u u' = A x + A_w w + B u;   y = C x + C_w w + D u;   z = G x + G_w w + G_u u;   w_k = h_k(s) z_k for the channels,
    and for the clocked values (those after the channels) w_k becomes z_k at its instants.

    Args:
        unknowns: the n unknowns, with names, dimensions, owners.
        inputs, outputs: names in the netlist's spelling; input_dimensions, output_dimensions beside them.
        channels: the first entries of w. held: clocks over the rest of w. held_names: names of those entries.
        e, a: (n, n). e_w, a_w: (n, n_w). e_u, b: (n, n_u). c: (n_y, n), c_w, d. g: (n_w, n), g_w, g_u. All sparse, by columns, SI.
        x, p: the point. values: the output quantities there.
        kinks: switches that stand exactly at their kink and matter; `sides` tells the side that was taken.
    """

    unknowns: tuple[Unknown, ...]
    inputs: tuple[str, ...]
    input_dimensions: tuple[Dimension, ...]
    outputs: tuple[str, ...]
    output_dimensions: tuple[Dimension, ...]
    channels: tuple[Channel, ...]
    held: tuple[Held, ...]
    held_names: tuple[str, ...]
    e: SparseArray
    e_w: SparseArray
    e_u: SparseArray
    a: SparseArray
    a_w: SparseArray
    b: SparseArray
    c: SparseArray
    c_w: SparseArray
    d: SparseArray
    g: SparseArray
    g_w: SparseArray
    g_u: SparseArray
    values: tuple[float, ...]
    kinks: tuple[Node, ...]
    sides: tuple[tuple[Node, int], ...]

    @property
    def n(self) -> int:
        """Number of unknowns."""
        return len(self.unknowns)

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the unknowns."""
        return tuple(u.name for u in self.unknowns)

    def input(self, name: str) -> int:
        """Index of an input."""
        return self.inputs.index(name)

    def output(self, name: str) -> int:
        """Index of an output."""
        return self.outputs.index(name)


@dataclass(frozen=True, slots=True)
class InputAt:
    """An input: its name and the parameter it is."""

    name: str
    parameter: str
    dimension: Dimension


@dataclass(frozen=True, slots=True, eq=False)
class Point:
    """Where a system is linearised: x (n,), p (n_p,), study time."""

    x: FloatArray
    p: FloatArray
    time_s: float


def linearise(
    system: EquationSystem,
    circuit: Circuit,
    point: Point,
    inputs: Sequence[InputAt],
    outputs: Sequence[Quantity],
    *,
    flipped: Mapping[Node, int] | None = None,
) -> LinearSystem:
    """Differentiate every law at a point.

    Args:
        system: equations of `circuit` (for the carriers of its poles).
        inputs: parameters of the system.
        outputs: quantities in circuit-level symbols.
        flipped: switches to be taken on another side than the point says.
    """
    with no_collection():
        return _Lineariser(system, circuit, point, inputs, outputs, flipped or {}).run()


def symbol_values(system: EquationSystem, point: Point) -> dict[Node, float]:
    """Every symbol's value at a point."""
    at = {u.symbol: float(v) for u, v in zip(system.unknowns, point.x, strict=True)}
    at.update({q.symbol: float(v) for q, v in zip(system.parameters, point.p, strict=True)})
    at[system.time] = point.time_s
    return at


def bound_sides(system: EquationSystem, point: Point) -> dict[Node, int]:
    """A bounded state that rests at its bound counts as held there: its rate, if it points outward, is cut."""
    g = system.graph
    bounded = [(k, u) for k, u in enumerate(system.unknowns) if u.bounds is not None]
    if not bounded:
        return {}
    here = PointValues(g, symbol_values(system, point))
    sides = {}
    for k, u in bounded:
        assert u.bounds is not None
        low, high = here.values(u.bounds)
        x = float(point.x[k])
        for bound, over in ((high, g.subtract(u.symbol, u.bounds[1])), (low, g.subtract(u.bounds[0], u.symbol))):
            if abs(x - bound) <= BOUND_RELATIVE * max(abs(bound), abs(high - low)):
                sides[g.positive(over)] = 1
    return sides


class _Lineariser:
    """One linearisation."""

    def __init__(
        self,
        system: EquationSystem,
        circuit: Circuit,
        point: Point,
        inputs: Sequence[InputAt],
        outputs: Sequence[Quantity],
        flipped: Mapping[Node, int],
    ) -> None:
        self.system, self.circuit, self.point = system, circuit, point
        self.inputs, self.outputs = inputs, outputs
        self.graph = system.graph
        self.sides = {**bound_sides(system, point), **flipped}
        self.flipped = flipped
        self.here = PointValues(self.graph, symbol_values(system, point), self.sides)
        self.index_of_p = {q.name: j for j, q in enumerate(system.parameters)}

    def run(self) -> LinearSystem:
        system, g = self.system, self.graph
        self._channels()
        outputs = system.resolve([q.expression for q in self.outputs])
        p_symbols = [system.parameters[self.index_of_p[i.parameter]].symbol for i in self.inputs]
        w_symbols = [system.parameters[j].symbol for j in self.w_parameters]
        self.place: dict[Node, tuple[str, int]] = {u.symbol: ("x", k) for k, u in enumerate(system.unknowns)}
        self.place.update({s: ("w", k) for k, s in enumerate(w_symbols)})
        self.place.update({s: ("u", k) for k, s in enumerate(p_symbols)})
        self.differentiator = Differentiator(g, list(self.place))
        # The column of a running integral is dropped: with its late copy it is a sliding average, a channel of its own.
        averages = {self.average_row[k]: k for k in self.average_row}
        keep = [k for k in range(len(system.unknowns)) if k not in averages]
        self.keep_of = {k: i for i, k in enumerate(keep)}
        charges = [system.unknowns[k].charge for k in keep]
        zero = g.constant(0.0)
        e = self._blocks([zero if q is None else q for q in charges])
        a = self._blocks([g.negate(system.unknowns[k].residual) for k in keep])
        c = self._blocks(outputs)
        z = self._blocks(self.z_nodes)
        roots = [*(system.unknowns[k].residual for k in keep), *(q for q in charges if q is not None), *outputs, *self.z_nodes]
        kinks = self._kinks(roots)
        values = self.here.values(outputs)
        return LinearSystem(
            unknowns=tuple(system.unknowns[k] for k in keep),
            inputs=tuple(i.name for i in self.inputs),
            input_dimensions=tuple(i.dimension for i in self.inputs),
            outputs=tuple(q.name for q in self.outputs),
            output_dimensions=tuple(q.dimension for q in self.outputs),
            channels=tuple(self.channels),
            held=tuple(self.held),
            held_names=tuple(system.parameters[j].name for j in self.w_parameters[len(self.channels) :]),
            e=e["x"],
            e_w=e["w"],
            e_u=e["u"],
            a=a["x"],
            a_w=a["w"],
            b=a["u"],
            c=c["x"],
            c_w=c["w"],
            d=c["u"],
            g=z["x"],
            g_w=z["w"],
            g_u=z["u"],
            values=tuple(values),
            kinks=tuple(kinks),
            sides=tuple(self.flipped.items()),
        )

    # ------------------------------------------------------------ late values

    def _channels(self) -> None:
        """Sort the parameters that follow the circuit: delays and averages, modulators' holds, clocked values."""
        system, g = self.system, self.graph
        self.channels: list[Channel] = []
        self.w_parameters: list[int] = []
        self.w_factor: list[float] = []  # the parameter's deviation is this times w
        self.z_nodes: list[Node] = []
        self.average_row: dict[int, int] = {}  # channel → row of its running integral
        index_of = {u.symbol: k for k, u in enumerate(system.unknowns)}
        for line in system.delays:
            name = system.parameters[line.parameter].name
            row = index_of.get(line.expression)
            if line.start_slope is not None and row is not None and system.unknowns[row].charge == line.expression:
                self.average_row[len(self.channels)] = row
                self._channel(Channel(name, "average", line.delay_s), line.parameter, g.negate(system.unknowns[row].residual), -line.delay_s)
            else:
                self._channel(Channel(name, "delay", line.delay_s), line.parameter, line.expression, 1.0)
        self.held: list[Held] = []
        modulators = [self._modulator(clock.updates[0][0], clock.period_s) if len(clock.updates) == 1 else None for clock in system.clocks]
        if all(m is not None for m in modulators):
            for clock, channel in zip(system.clocks, modulators, strict=True):
                assert channel is not None
                self._channel(channel, clock.updates[0][0], clock.updates[0][1], 1.0)
            return
        for clock in system.clocks:
            targets = []
            for parameter, update in clock.updates:
                targets.append(len(self.w_parameters))
                self.w_parameters.append(parameter)
                self.w_factor.append(1.0)
                self.z_nodes.append(update)
            self.held.append(Held(clock.period_s, clock.offset_s, clock.rank, tuple(targets)))

    def _channel(self, channel: Channel, parameter: int, z: Node, factor: float) -> None:
        self.channels.append(channel)
        self.w_parameters.append(parameter)
        self.w_factor.append(factor)
        self.z_nodes.append(z)

    def _modulator(self, parameter: int, period_s: float) -> Channel | None:
        """What a pole's modulator that reads its duty at instants does to small changes; None for any other clock.

        A sawtooth moves one edge, D T (trailing) or (1-D) T (leading) after the reading. A symmetric carrier moves both around the middle:
        on average a hold. Source: Maksimović & Zane, IEEE Trans. Power Electron. 22(6), 2007; docs/models.md.
        """
        name = self.system.parameters[parameter].name
        pole, _, kind = name.rpartition(".")
        device = self.circuit.devices.get(pole)
        if kind != "sampled_duty" or device is None:
            return None
        carrier = device.settings.get("carrier", "trailing")
        if carrier == "symmetric":
            return Channel(name, "hold", period_s)
        duty = min(max(float(self.point.p[parameter]), 0.0), 1.0)
        share = duty if carrier == "trailing" else 1.0 - duty
        if device.settings.get("sampling") == "double":  # period_s is half a carrier's period, read again at its middle
            share = 2.0 * share if share < 0.5 else 2.0 * share - 1.0
        return Channel(name, "delay", share * period_s)

    # ------------------------------------------------------------ matrices

    def _blocks(self, nodes: Sequence[Node]) -> dict[str, SparseArray]:
        """Derivatives of expressions by x, w and u at the point."""
        from scipy.sparse import csc_matrix

        gradients = self.differentiator.gradients(list(nodes))
        entries: dict[str, tuple[list[int], list[int], list[Node]]] = {k: ([], [], []) for k in "xwu"}
        for row, gradient in enumerate(gradients):
            for symbol, slope in gradient.items():
                kind, column = self.place[symbol]
                rows, columns, slopes = entries[kind]
                rows.append(row)
                columns.append(column)
                slopes.append(slope)
        shapes = {"x": len(self.system.unknowns), "w": len(self.w_parameters), "u": len(self.inputs)}
        blocks = {}
        for kind, (rows, columns, slopes) in entries.items():
            values = np.array(self.here.values(slopes), dtype=float)
            matrix = csc_matrix((values, (rows, columns)), shape=(len(nodes), shapes[kind]))
            if kind == "x":
                matrix = matrix[:, list(self.keep_of)]
            if kind == "w" and self.w_factor:
                matrix = matrix.multiply(np.array(self.w_factor)[None, :]).tocsc()
            matrix.eliminate_zeros()
            blocks[kind] = matrix
        return blocks

    def _kinks(self, roots: Sequence[Node]) -> list[Node]:
        """Switches at their kink whose other side changes some derivative."""
        candidates = self.here.kinks(roots)
        if not candidates:
            return []
        gradients = self.differentiator.gradients(list(roots))
        slopes = [slope for gradient in gradients for slope in gradient.values()]
        before = np.array(self.here.values(slopes))
        found = []
        for switch in candidates:
            other = PointValues(self.graph, self.here.at, {**self.sides, switch: 1 - int(self.here.known[switch])})
            after = np.array(other.values(slopes))
            if np.any(np.abs(after - before) > 1e-9 * np.maximum(np.abs(after), np.abs(before))):
                found.append(switch)
        return found
