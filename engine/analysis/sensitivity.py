"""How modes move when an element's value changes: exact derivatives of eigenvalues, the shift of the operating point included.

d(lambda) = -left^T dN right for N(s) = [[sE - A, sE_w - A_w], [-H G, I - H G_w]] with left^T N' right = 1. One backward sweep through the
expressions of all Jacobian entries gives the explicit part for every element and the pull of every unknown at once; the unknowns' own
shift follows from the laws of rest. Source: Kato 1995, Perturbation Theory for Linear Operators, ch. 2; for repeated modes the mean over
the cluster, which is what stays differentiable.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from polewise.analysis.linearise import LinearSystem, bound_sides, symbol_values
from polewise.analysis.point import ComplexArray, PointValues
from polewise.analysis.spectrum import Spectrum
from polewise.analysis.standpoint import Linearised
from polewise.equations.system import EquationSystem
from polewise.expression.derivative import Differentiator
from polewise.expression.graph import Node
from polewise.solve.square_system import rest_rows


@dataclass(frozen=True, slots=True)
class Cluster:
    """Columns of a Spectrum that belong to one (repeated) mode."""

    members: tuple[int, ...]


def relative_sensitivities(made: Linearised, spectrum: Spectrum, clusters: Sequence[Cluster], scales: Mapping[str, str]) -> dict[str, ComplexArray]:
    """d(lambda)/d(ln value) of every element for every cluster.

    Args:
        made: linearised with a scale latch for every element.
        spectrum: of made.linear.
        clusters: m of them.
        scales: element → its scale parameter.
    Returns:
        element → shape (m,), 1/s.
    """
    system, linear = made.system, made.linear
    here = PointValues(system.graph, symbol_values(system, made.point), {**bound_sides(system, made.point), **dict(linear.sides)})
    weights = _weights(system, linear, spectrum, clusters)
    pull = here.gradient_of_sum(weights)
    m = len(clusters)
    symbol_of = {q.name: q.symbol for q in system.parameters}
    elements = {name: symbol_of[scale] for name, scale in scales.items() if scale in symbol_of}
    result = {name: -pull.get(symbol, np.zeros(m, dtype=complex)) for name, symbol in elements.items()}
    if made.stand.snapshot is None:
        shifts = _through_the_point(system, here, pull, elements, m)
        result = {name: value - shifts.get(name, 0.0) for name, value in result.items()}
    return result


def _weights(system: EquationSystem, linear: LinearSystem, spectrum: Spectrum, clusters: Sequence[Cluster]) -> dict[Node, ComplexArray]:
    """Jacobian entry's expression → how much each cluster's mean of left^T N right changes with it."""
    graph = system.graph
    unknowns = list(linear.unknowns)
    n = len(unknowns)
    w_symbols, w_factor = _late_symbols(system, linear)
    place = {u.symbol: j for j, u in enumerate(unknowns)}
    place.update({symbol: n + k for k, symbol in enumerate(w_symbols)})
    factor_of = np.concatenate([np.ones(n), w_factor])
    differentiator = Differentiator(graph, list(place))
    lam = np.array([np.mean(spectrum.values[list(c.members)]) for c in clusters], dtype=complex)
    weights: dict[Node, ComplexArray] = {}

    def add(node: Node, row: int, column: int, coefficient: ComplexArray) -> None:
        product = np.array([np.mean(spectrum.left[row, list(c.members)] * spectrum.right[column, list(c.members)]) for c in clusters], dtype=complex)
        value = coefficient * product * factor_of[column]
        if np.any(value != 0.0):
            weights[node] = weights[node] + value if node in weights else value

    one = np.ones(len(clusters), dtype=complex)
    for row, gradient in enumerate(differentiator.gradients([u.residual for u in unknowns])):
        for symbol, node in gradient.items():
            add(node, row, place[symbol], one)
    charged = [(row, u.charge) for row, u in enumerate(unknowns) if u.charge is not None]
    for (row, _), gradient in zip(charged, differentiator.gradients([q for _, q in charged]), strict=True):
        for symbol, node in gradient.items():
            add(node, row, place[symbol], lam)
    inputs = _late_inputs(system, linear)
    for k, gradient in enumerate(differentiator.gradients(inputs)):
        for symbol, node in gradient.items():
            add(node, n + k, place[symbol], -linear.channels[k].factor(lam))
    return {node: value for node, value in weights.items() if not graph.is_constant(node)}


def _late_symbols(system: EquationSystem, linear: LinearSystem) -> tuple[list[Node], ComplexArray]:
    """Symbols of the channels' parameters and the factor between w and their deviation."""
    by_name = {q.name: q.symbol for q in system.parameters}
    symbols = [by_name[channel.name] for channel in linear.channels]
    factor = np.array([-channel.time_s if channel.kind == "average" else 1.0 for channel in linear.channels], dtype=complex)
    return symbols, factor


def _late_inputs(system: EquationSystem, linear: LinearSystem) -> list[Node]:
    """What enters each channel."""
    of_line = {system.parameters[d.parameter].name: d.expression for d in system.delays}
    of_clock = {system.parameters[j].name: update for c in system.clocks for j, update in c.updates}
    residual_of = {u.symbol: u.residual for u in system.unknowns}
    nodes = []
    for channel in linear.channels:
        node = of_line.get(channel.name, of_clock.get(channel.name))
        assert node is not None
        nodes.append(system.graph.negate(residual_of[node]) if channel.kind == "average" else node)
    return nodes


def _through_the_point(
    system: EquationSystem, here: PointValues, pull: Mapping[Node, ComplexArray], elements: Mapping[str, Node], m: int
) -> dict[str, ComplexArray]:
    """Part of each sensitivity that comes from the shift of the state of rest: -pull^T F_z^-1 F_element."""
    from scipy.sparse import csc_matrix
    from scipy.sparse.linalg import splu

    rows = rest_rows(system)
    symbols = [system.unknowns[r.index].symbol if r.kind == "x" else system.parameters[r.index].symbol for r in rows]
    place = {symbol: k for k, symbol in enumerate(symbols)}
    right = np.zeros((len(rows), m), dtype=complex)
    for symbol, value in pull.items():
        if symbol in place:
            right[place[symbol]] = value
    if not np.any(right):
        return {}
    name_of = {symbol: name for name, symbol in elements.items()}
    gradients = Differentiator(system.graph, [*symbols, *elements.values()]).gradients([r.residual for r in rows])
    entries = [(row, symbol, node) for row, gradient in enumerate(gradients) for symbol, node in gradient.items()]
    values = here.values([node for _, _, node in entries])
    square = [(row, place[symbol], v) for (row, symbol, _), v in zip(entries, values, strict=True) if symbol in place and v != 0.0]
    matrix = csc_matrix(([v for _, _, v in square], ([r for r, _, _ in square], [c for _, c, _ in square])), shape=(len(rows), len(rows)))
    adjoint = splu(matrix.T.tocsc().astype(complex)).solve(right)
    shifts: dict[str, ComplexArray] = {}
    for (row, symbol, _), v in zip(entries, values, strict=True):
        name = name_of.get(symbol)
        if name is not None and v != 0.0:
            shifts[name] = shifts.get(name, np.zeros(m, dtype=complex)) - v * adjoint[row]
    return shifts
