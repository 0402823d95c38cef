"""Modes of large systems in a stated region: shift-invert along the axis until the region is covered, sizes of clusters by Jensen's formula.

Arnoldi iteration with (A - sE)^-1 E finds the eigenvalues nearest to a shift, of a repeated one a single copy; how many there are is told by
log|det(sE - A)|: its mean over a circle grows by N log(r2/r1) between two circles with N eigenvalues inside the smaller one and no other inside
the larger. Shares of a repeated mode come from its spectral projector, a contour integral, whose diagonal is read with a few sign vectors for
each family of alike unknowns (probing).
Sources: Saad 2011, Numerical Methods for Large Eigenvalue Problems, 2nd ed., ch. 8 (shift-invert); Jensen's formula: Ahlfors 1979, Complex Analysis,
5.3.1; diagonal by probing: Bekas, Kokiopoulou & Saad 2007, Applied Numerical Mathematics 57. (Recalled from memory.)
"""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from polewise.analysis import failures
from polewise.analysis.linearise import LinearSystem, SparseArray
from polewise.analysis.modes import TOP_LEVEL, Mode, Modes
from polewise.analysis.point import ComplexArray
from polewise.analysis.sparse_factors import SparseFactors
from polewise.analysis.standpoint import Standpoint
from polewise.kernels.program import FloatArray

STEPS_MAX = 70  # of one Arnoldi run
CONVERGED_RELATIVE = 1e-9
EXHAUSTED_RELATIVE = 1e-11
VANISHED_RELATIVE = 1e-12  # such Ritz values stand for eigenvalues at infinity
SHIFTS_MAX = 40
SAME_RELATIVE = 1e-6  # copies of one eigenvalue
CIRCLE_POINTS = 12
INNER, OUTER = 0.08, 0.3  # radii of the two circles in parts of the distance to the next eigenvalue
COUNT_SLACK = 0.15  # how far from a whole number a count may come out
CONTOUR_POINTS = 8
SIGN_VECTORS = 3  # per family of unknowns
_DIGITS = re.compile(r"\d+")


@dataclass(frozen=True, slots=True)
class Region:
    """Where modes are wanted: oscillations between two frequencies with a damping ratio below a limit."""

    low_hz: float
    high_hz: float
    damping_below: float

    def holds(self, value: complex) -> bool:
        """Whether an eigenvalue (of a pair, the upper one) lies in it."""
        f = value.imag / (2.0 * math.pi)
        return self.low_hz <= f <= self.high_hz and -value.real < self.damping_below * abs(value)


def modes_in_region(stand: Standpoint, region: Region, count: int) -> Modes:
    """The least damped modes of a region, with sizes of clusters and participation.

    Raises:
        AnalysisRefused: clocks or delays (their modes come from the dense way), or a region that could not be covered.
    """
    linear = stand.linear(stand.probing(), [], [])
    if linear.held or linear.channels:
        raise failures.refused("large-exact", "modes of a large system with clocked control or delays can't be found by regions")
    if not (0.0 < region.low_hz < region.high_hz and 0.0 < region.damping_below < 1.0):
        raise failures.refused("empty-region", "a region goes from a lower to a higher frequency, with a damping below a limit under one")
    solver = _Solver(linear)
    solver.cover(region)
    inside = sorted((v for v in solver.found if region.holds(v)), key=lambda v: (-v.real / abs(v), abs(v)))
    modes = tuple(solver.mode(v) for v in inside[:count])
    return Modes(modes, region.high_hz, (), (), None, linear)


class _Solver:
    """Factors at shifts, and what was found so far."""

    def __init__(self, linear: LinearSystem) -> None:
        self.linear = linear
        self.e: SparseArray = linear.e.tocsc()
        self.a: SparseArray = linear.a.tocsc()
        self.found: list[complex] = []
        self.vectors: dict[complex, ComplexArray] = {}
        self.shifts = 0

    def factors(self, s: complex) -> SparseFactors:
        """LU of sE - A."""
        return SparseFactors(s * self.e - self.a)

    # ------------------------------------------------------------ search

    def cover(self, region: Region) -> None:
        """Shift along the axis until the discs in which all eigenvalues are known cover the region."""
        lean = region.damping_below / math.sqrt(1.0 - region.damping_below**2)
        pending = [(2 * math.pi * region.low_hz, 2 * math.pi * region.high_hz)]
        discs: list[tuple[complex, float]] = []
        while pending:
            low, high = pending.pop()
            corners = [complex(0.0, low), complex(0.0, high), complex(-lean * low, low), complex(-lean * high, high)]
            if any(all(abs(c - centre) <= radius for c in corners) for centre, radius in discs):
                continue
            if self.shifts >= SHIFTS_MAX:
                raise failures.refused(
                    "region-too-large", f"the region holds more eigenvalues than {SHIFTS_MAX} searches find", "ask for a smaller region"
                )
            centre = complex(-0.5 * lean * low, math.sqrt(low * high) if high > 4 * low else 0.5 * (low + high))
            radius = self.search(centre)
            discs.append((centre, radius))
            if not all(abs(c - centre) <= radius for c in corners):
                pending += [(low, centre.imag), (centre.imag, high)]

    def search(self, centre: complex) -> float:
        """Nearest eigenvalues; the radius within which all distinct ones are known.

        One unrestarted Arnoldi run with full orthogonalisation: of a repeated eigenvalue it meets a single vector, so that copies take no room, and
        it ends by itself where the circuit has no further distinct ones.
        """
        self.shifts += 1
        thetas, vectors, ended = self._arnoldi(centre)
        order = np.argsort(-np.abs(thetas))
        radius = 0.0
        for k in order:
            residual, theta = vectors[k][1], complex(thetas[k])
            if abs(theta) <= VANISHED_RELATIVE * abs(thetas[order[0]]):
                break
            if residual > CONVERGED_RELATIVE * abs(theta):
                break
            root = centre + 1.0 / theta
            radius = abs(root - centre)
            vector = vectors[k][0]
            if root.imag < 0.0:
                root, vector = root.conjugate(), vector.conj()
            if all(abs(root - other) > SAME_RELATIVE * abs(root) for other in self.found):
                self.found.append(root)
                self.vectors[root] = vector
        else:
            ended = ended or len(order) == self.linear.n
        return math.inf if ended else 0.999 * radius

    def _arnoldi(self, centre: complex) -> tuple[ComplexArray, list[tuple[ComplexArray, float]], bool]:
        """Ritz values of (A - cE)^-1 E, their vectors with residuals, and whether the space was exhausted."""
        n = self.linear.n
        steps = min(STEPS_MAX, n)
        lu = self.factors(centre)
        basis = np.zeros((n, steps + 1), dtype=complex)
        start = np.random.default_rng(7).standard_normal(n) + 0j
        start = -lu.solve(self.e @ start)  # no part in what is infinitely fast
        basis[:, 0] = start / np.linalg.norm(start)
        h = np.zeros((steps + 1, steps), dtype=complex)
        used, ended = steps, False
        for j in range(steps):
            w = -lu.solve(self.e @ basis[:, j])
            size = np.linalg.norm(w)
            for _ in range(2):
                overlap = basis[:, : j + 1].conj().T @ w
                h[: j + 1, j] += overlap
                w = w - basis[:, : j + 1] @ overlap
            h[j + 1, j] = np.linalg.norm(w)
            if abs(h[j + 1, j]) <= EXHAUSTED_RELATIVE * size:
                used, ended = j + 1, True
                break
            basis[:, j + 1] = w / h[j + 1, j]
        thetas, small = np.linalg.eig(h[:used, :used])
        last = 0.0 if ended else abs(h[used, used - 1])
        pairs = [(basis[:, :used] @ small[:, k], float(last * abs(small[used - 1, k]))) for k in range(used)]
        return thetas, pairs, ended

    # ------------------------------------------------------------ one mode

    def mode(self, value: complex) -> Mode:
        """Size and shares of one cluster."""
        others = [abs(value - v) for v in (*self.found, *(v.conjugate() for v in self.found)) if v != value]
        room = min(min(others, default=abs(value)), abs(value))
        size = self._size(value, room)
        shares = self._simple(value) if size == 1 else self._projector(value, room)
        names, owners = self.linear.names, [u.owner for u in self.linear.unknowns]
        participation = {name: complex(share) for name, share in zip(names, shares, strict=True) if abs(share) > 1e-9}
        by_assembly: dict[str, complex] = {}
        for owner, share in zip(owners, shares, strict=True):
            by_assembly[owner or TOP_LEVEL] = by_assembly.get(owner or TOP_LEVEL, 0j) + complex(share)
        return Mode(value, size, participation, {k: v for k, v in by_assembly.items() if abs(v) > 1e-9}, ())

    def _size(self, value: complex, room: float) -> int:
        """Number of equal eigenvalues by Jensen's formula."""
        angles = 2 * np.pi * (np.arange(CIRCLE_POINTS) + 0.5) / CIRCLE_POINTS
        inner, outer = (
            float(np.mean([self._log_determinant(value + radius * room * np.exp(1j * angle)) for angle in angles])) for radius in (INNER, OUTER)
        )
        count = (outer - inner) / math.log(OUTER / INNER)
        if abs(count - round(count)) > COUNT_SLACK or round(count) < 1:
            raise failures.refused(
                "cluster-not-counted", f"the modes near {abs(value) / (2 * math.pi):.6g} Hz lie too close together to be counted ({count:.3f})"
            )
        return round(count)

    def _log_determinant(self, s: complex) -> float:
        return self.factors(s).log_determinant()

    def _simple(self, value: complex) -> ComplexArray:
        """Shares of a simple eigenvalue from its right and left vectors, the left one by inverse iteration."""
        lu = self.factors(value * (1.0 + 1e-9))
        right = self.vectors[value]
        left = np.ones(self.linear.n, dtype=complex)
        for _ in range(3):
            right = lu.solve(self.e @ right)
            right /= np.linalg.norm(right)
            left = lu.solve(self.e.T @ left, transposed=True)
            left /= np.linalg.norm(left)
        weighted = (self.e.T @ left) * right
        shares: ComplexArray = weighted / np.sum(weighted)
        return shares

    def _projector(self, value: complex, room: float) -> ComplexArray:
        """Diagonal of the spectral projector over its trace, read with sign vectors on each family of alike unknowns."""
        families: dict[str, list[int]] = {}
        for k, name in enumerate(self.linear.names):
            families.setdefault(_DIGITS.sub("#", name), []).append(k)
        probes, places = _sign_vectors(list(families.values()), self.linear.n)
        total = np.zeros_like(probes, dtype=complex)
        radius = OUTER * room
        for j in range(CONTOUR_POINTS):
            turn = np.exp(2j * np.pi * (j + 0.5) / CONTOUR_POINTS)
            total += self.factors(value + radius * turn).solve(self.e @ probes.astype(complex)) * (radius * turn / CONTOUR_POINTS)
        diagonal = np.zeros(self.linear.n, dtype=complex)
        for column, family in places:
            diagonal[family] += probes[family, column] * total[family, column]
        shares: ComplexArray = diagonal / np.sum(diagonal)
        return shares


def _sign_vectors(families: Sequence[list[int]], n: int) -> tuple[FloatArray, list[tuple[int, list[int]]]]:
    """Random signs on one family each; a family of one needs a single vector."""
    rng = np.random.default_rng(11)
    columns: list[FloatArray] = []
    places: list[tuple[int, list[int]]] = []
    for family in families:
        for _ in range(1 if len(family) == 1 else SIGN_VECTORS):
            column = np.zeros(n)
            column[family] = rng.choice([-1.0, 1.0], len(family))
            places.append((len(columns), family))
            columns.append(column)
    return np.stack(columns, axis=1), places
