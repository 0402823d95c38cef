"""Impedance at a port: total, and split into source and load side with minor-loop ratio, criteria, passivity and measured coupling."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np

from polewise.analysis.criteria import Criterion, judge_ratio, passivity
from polewise.analysis.linearise import LinearSystem
from polewise.analysis.loop import DENSE_MODES_LIMIT
from polewise.analysis.margins import Margins, frequency_grid, margins_of
from polewise.analysis.nyquist import NyquistCount, on_axis_count, unstable_count, winding
from polewise.analysis.point import ComplexArray
from polewise.analysis.ports import Port, find_port, load_side, split
from polewise.analysis.probes import Injection
from polewise.analysis.response import response
from polewise.analysis.spectrum import spectrum
from polewise.analysis.standpoint import Standpoint
from polewise.circuit.model import Quantity
from polewise.kernels.program import FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class Split:
    """Source side and load side of a node (or of a pair, d and q).

    Args:
        source_impedance: Z_s with its current stated; load_admittance: Y_l with its voltage stated. Shapes (m,), or (m, 2, 2) for a pair.
        ratio: minor-loop ratio Z_s Y_l; of a pair its two eigenvalues, shape (m, 2).
        coupling: shape (m,): how far a path between the sides other than the node itself shifts 1 + ratio, relative to it. The split, the
            ratio and every criterion on it mean something only where this is much smaller than one.
        criteria: published ones with their verdict and how conservative they are here.
        margins: of the ratio; None for a pair.
        nyquist: unstable poles of the sides by themselves, unstable modes of both together, encirclements of -1.
    """

    source_impedance: ComplexArray
    load_admittance: ComplexArray
    ratio: ComplexArray
    coupling: FloatArray
    criteria: tuple[Criterion, ...]
    margins: Margins | None
    nyquist: NyquistCount

    @property
    def load_impedance(self) -> ComplexArray:
        """1 / Y_l, or the inverse matrices."""
        if self.load_admittance.ndim == 1:
            value: ComplexArray = 1.0 / self.load_admittance
            return value
        return np.linalg.inv(self.load_admittance)

    @property
    def coupling_largest(self) -> float:
        """The largest coupling in the range."""
        return float(np.max(self.coupling, initial=0.0))

    @property
    def stable(self) -> bool | None:
        """Whether both sides together are stable: the real verdict, coupling included; None where it could not be found."""
        return self.nyquist.stable


@dataclass(frozen=True, slots=True, eq=False)
class Impedance:
    """What a small current put into a port meets.

    Args:
        ports: one name, or two (d and q).
        frequencies: shape (m,), Hz. total: shape (m,), or (m, 2, 2), ohm.
        split: the two sides where they were named.
        passivity: smallest Re Z / |Z| and where; of a pair the smallest eigenvalue of the Hermitian part over the norm.
    """

    ports: tuple[str, ...]
    frequencies: FloatArray
    total: ComplexArray
    split: Split | None
    passivity: Criterion

    def __array__(self, dtype: object = None, copy: object = None) -> ComplexArray:
        return self.total


def find_impedance(
    stand: Standpoint, ports: Sequence[str], frequencies_hz: Sequence[float] | FloatArray, source: Sequence[str] = (), load: Sequence[str] = ()
) -> Impedance:
    """Impedance at one port, or the 2 x 2 matrix at a pair.

    Args:
        ports: "bus", "a to b", "berth2.inp", or two of them named as d and q.
        source, load: elements or assemblies on either side; what is named on neither belongs to the side that is not named.
    """
    places = [find_port(stand.circuit, stand.network, name) for name in ports]
    frequencies = np.asarray(frequencies_hz, dtype=float)
    probing = stand.probing()
    for k, place in enumerate(places):
        probing.inject(Injection(f"port {k}", place.other, place.node))
    linear = stand.linear(probing, [f"port {k}" for k in range(len(places))], [_voltage(stand, p) for p in places])
    total = response(linear, frequencies)
    squeezed = total[:, 0, 0] if len(places) == 1 else total
    sides = _split(stand, places, frequencies, source, load) if source or load else None
    return Impedance(tuple(ports), frequencies, squeezed, sides, passivity(frequencies, total))


def _voltage(stand: Standpoint, port: Port) -> Quantity:
    g = stand.circuit.graph
    domain = stand.circuit.nodes[port.node].domain
    return Quantity(port.name, g.subtract(g.symbol("potential", port.node), g.symbol("potential", port.other)), domain.across_dimension)


@dataclass(frozen=True, slots=True, eq=False)
class _Hybrid:
    """[v_s; i_l] = [[z, a], [b, y]] [i_s; v_l] at each frequency, blocks of shape (m, k, k)."""

    z: ComplexArray
    a: ComplexArray
    b: ComplexArray
    y: ComplexArray

    @property
    def ratio(self) -> ComplexArray:
        """Z_s Y_l."""
        return self.z @ self.y

    @property
    def coupling(self) -> FloatArray:
        """Shift of the return difference by the off-diagonal blocks, relative to it.

        Together v_s = v_l and i_s = -i_l: (1 - a) v = -z i_l and (1 + b) i_l = y v, so that 1 + z y becomes (1 - a) + z (1 + b)^-1 y.
        """
        eye = np.eye(self.z.shape[1])
        plain = eye + self.z @ self.y
        exact = (eye - self.a) + self.z @ np.linalg.solve(eye + self.b, self.y)
        shift = np.linalg.norm(exact - plain, axis=(1, 2))
        size: FloatArray = shift / np.maximum(np.linalg.norm(plain, axis=(1, 2)), 1e-300)
        return size


def _split(stand: Standpoint, places: Sequence[Port], frequencies: FloatArray, source: Sequence[str], load: Sequence[str]) -> Split:
    copy = stand
    ties = []
    for place in places:
        _, moved = load_side(stand.circuit, place.node, _at(stand, place, source), _at(stand, place, load))
        copy, tie = split(copy, place, moved)
        ties.append(tie)
    probing = copy.probing()
    g = copy.circuit.graph
    k = len(places)
    for j, place in enumerate(places):
        probing.inject(Injection(f"shunt {j}", place.other, place.node))
    inputs = [f"shunt {j}" for j in range(k)]
    for j, tie in enumerate(ties):
        name = f"series {j}"
        probing.adopt(name, tie.name, tie.domain.across_dimension)
        inputs.append(name)
    outputs = []
    for place, tie in zip(places, ties, strict=True):
        shunt = g.symbol("latch", probing.probes[f"shunt {places.index(place)}"].latch)
        v_s = _voltage(copy, place).expression
        v_l = g.subtract(g.symbol("potential", tie.right), g.symbol("potential", place.other))
        i_l = g.symbol("i", tie.name)
        across, through = tie.domain.across_dimension, tie.domain.through_dimension
        outputs.append(
            (
                Quantity("v_s", v_s, across),
                Quantity("i_l", i_l, through),
                Quantity("i_s", g.subtract(shunt, i_l), through),
                Quantity("v_l", v_l, across),
            )
        )
    ordered = [outputs[j][part] for part in range(4) for j in range(k)]
    linear = copy.linear(probing, inputs, ordered)
    hybrid = _hybrid(response(linear, frequencies), k)
    poles = spectrum(constrained(linear, range(2 * k, 4 * k))).values if linear.n <= DENSE_MODES_LIMIT and not linear.held else None
    closed = _closed_modes(linear)

    def ratio(f: FloatArray) -> ComplexArray:
        return _hybrid(response(linear, f), k).ratio

    return _verdicts(frequencies, hybrid, ratio, poles, closed)


def _closed_modes(linear: LinearSystem) -> ComplexArray | None:
    """All modes of both sides together; None where there are too many unknowns."""
    if linear.n > DENSE_MODES_LIMIT:
        return None
    if linear.held:
        from polewise.analysis.sampled import sampled_spectrum

        return sampled_spectrum(linear)[0].values
    return spectrum(linear).values


def _at(stand: Standpoint, place: Port, names: Sequence[str]) -> list[str]:
    """Of the names those that touch this port (a pair's sides are named once for both)."""
    from polewise.analysis.ports import belongs
    from polewise.analysis.probes import current_branches

    touching = [n for n, _ in current_branches(stand.circuit, place.node)]
    here = [item for item in names if any(belongs([item])(n) for n in touching)]
    return here or list(names)


def _hybrid(values: ComplexArray, k: int) -> _Hybrid:
    """From 2 k experiments (columns): outputs v_s, i_l, i_s, v_l in blocks of k rows."""
    told, put = values[:, : 2 * k], values[:, 2 * k :]
    # Sizes differ by units: scale the experiments' rows.
    size = np.maximum(np.max(np.abs(put), axis=2, keepdims=True), 1e-300)
    matrix = np.linalg.solve(np.swapaxes(put / size, 1, 2), np.swapaxes(told, 1, 2))
    matrix = np.swapaxes(matrix, 1, 2) / np.swapaxes(size, 1, 2)
    return _Hybrid(matrix[:, :k, :k], matrix[:, :k, k:], matrix[:, k:, :k], matrix[:, k:, k:])


def constrained(linear: LinearSystem, outputs: Sequence[int] | range) -> LinearSystem:
    """The system whose inputs are whatever keeps the outputs at zero: with as many outputs as inputs its modes are the zeros between them."""
    from scipy.sparse import bmat, csc_matrix, hstack, vstack

    rows = list(outputs)
    m = linear.b.shape[1]
    extra = tuple(replace(linear.unknowns[0], name=f"input {j}", charge=None, owner="") for j in range(m)) if linear.unknowns else ()
    return replace(
        linear,
        unknowns=(*linear.unknowns, *extra),
        inputs=(),
        input_dimensions=(),
        outputs=(),
        output_dimensions=(),
        e=bmat([[linear.e, linear.e_u], [csc_matrix((len(rows), linear.n)), csc_matrix((len(rows), m))]], format="csc"),
        e_w=vstack([linear.e_w, csc_matrix((len(rows), linear.e_w.shape[1]))], format="csc"),
        e_u=csc_matrix((linear.n + len(rows), 0)),
        a=bmat([[linear.a, linear.b], [linear.c[rows], linear.d[rows]]], format="csc"),
        a_w=vstack([linear.a_w, linear.c_w[rows]], format="csc"),
        b=csc_matrix((linear.n + len(rows), 0)),
        c=csc_matrix((0, linear.n + m)),
        c_w=csc_matrix((0, linear.c_w.shape[1])),
        d=csc_matrix((0, 0)),
        g=hstack([linear.g, linear.g_u], format="csc"),
        g_u=csc_matrix((linear.g.shape[0], 0)),
        values=(),
    )


def _verdicts(
    frequencies: FloatArray,
    hybrid: _Hybrid,
    ratio: Callable[[FloatArray], ComplexArray],
    poles: ComplexArray | None,
    closed: ComplexArray | None,
) -> Split:
    k = hybrid.z.shape[1]
    resonances = np.zeros(0, dtype=complex) if poles is None else poles
    turns = None
    if poles is not None:
        origin, axis = on_axis_count(poles)
        # Of a pair the curve is det(1 + Z_s Y_l), the product of the eigenvalues' distances to -1.
        turns = None if axis else winding(lambda f: np.linalg.det(np.eye(k) + ratio(f)), poles, origin)
    counts = NyquistCount(None if poles is None else unstable_count(poles), None if closed is None else unstable_count(closed), turns)
    if k > 1:
        loci = np.linalg.eigvals(hybrid.ratio)
        return Split(hybrid.z, hybrid.y, loci, hybrid.coupling, (), None, counts)
    z, y = hybrid.z[:, 0, 0], hybrid.y[:, 0, 0]
    low, high = float(np.min(frequencies)), float(np.max(frequencies))
    grid = np.unique(np.concatenate([frequency_grid(low, high, resonances), frequencies])) if high > low else frequencies

    def scalar(f: FloatArray) -> ComplexArray:
        value: ComplexArray = ratio(f)[:, 0, 0]
        return value

    margins = margins_of(scalar, frequencies, resonances)
    criteria = judge_ratio(scalar, grid, margins)
    return Split(z, y, z * y, hybrid.coupling, criteria, margins, counts)
