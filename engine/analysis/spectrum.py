"""Eigenvalues and both eigenvectors of a LinearSystem without clocks: finite ones of the pencil, exact with delays.

Vectors belong to N(s) [x; w] = 0 with N(s) = [[sE - A, sE_w - A_w], [-H(s) G, I - H(s) G_w]] and are scaled so that left^T N'(s) right = 1.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from polewise.analysis.linearise import LinearSystem
from polewise.analysis.point import BoolArray, ComplexArray
from polewise.analysis.response import bordered, pencil
from polewise.kernels.program import FloatArray

# Order of the Padé forms that give delays their starting values: right to 1e-3 up to about |s T| = 8.
PADE_ORDER = 8
# Roots with a faster oscillation than this many radians within the longest delay are left out: there is no end to them.
DELAY_ANGLE_MAX = 10.0
NEWTON_LIMIT = 30
NEWTON_RELATIVE = 1e-13
SAME_ROOT_RELATIVE = 1e-8
# Beyond this condition number the algebraic rows are not eliminated by themselves.
CONDITION_MAX = 1e12
RANK_RELATIVE = 1e-12


@dataclass(frozen=True, slots=True, eq=False)
class Spectrum:
    """Modes: values (m,), right (n + k, m), left (n + k, m); complete up to angle_limit_rad_s in |Im| (inf without delays)."""

    values: ComplexArray
    right: ComplexArray
    left: ComplexArray
    angle_limit_rad_s: float


def spectrum(linear: LinearSystem) -> Spectrum:
    """All finite modes of a small system; with delays those below a limit of frequency."""
    if not linear.channels:
        e, a = linear.e.toarray(), linear.a.toarray()
        values, right, left = finite_modes(e, a)
        scale = np.sum(left * (e @ right), axis=0)
        return Spectrum(values, right, left / np.where(scale == 0.0, 1.0, scale), np.inf)
    return _with_channels(linear)


def finite_modes(e: FloatArray, a: FloatArray) -> tuple[ComplexArray, ComplexArray, ComplexArray]:
    """Eigenvalues s of (sE - A) v = 0 that are finite, with right and left vectors as columns (left^T (sE - A) = 0).

    Algebraic rows are eliminated where they determine their unknowns (index 1); other pencils are shuffled.
    Source: Kunkel & Mehrmann 2006, Differential-Algebraic Equations, ch. 2 (index).
    """
    rows = ~np.any(e != 0.0, axis=1)
    columns = ~np.any(e != 0.0, axis=0)
    if np.count_nonzero(rows) == np.count_nonzero(columns):
        reduced = _eliminated(e, a, rows, columns)
        if reduced is not None:
            return reduced
    return _by_shuffle(e, a)


def _eliminated(e: FloatArray, a: FloatArray, rows: BoolArray, columns: BoolArray) -> tuple[ComplexArray, ComplexArray, ComplexArray] | None:
    from scipy.linalg import eig, lu_factor, lu_solve

    n = len(e)
    a_aa, a_ad = a[np.ix_(rows, columns)], a[np.ix_(rows, ~columns)]
    a_da, a_dd = a[np.ix_(~rows, columns)], a[np.ix_(~rows, ~columns)]
    e_dd = e[np.ix_(~rows, ~columns)]
    if len(e_dd) == 0:
        empty = np.zeros((n, 0), dtype=complex)
        return np.zeros(0, dtype=complex), empty, empty
    if _condition(a_aa) > CONDITION_MAX or _condition(e_dd) > CONDITION_MAX:
        return None
    to_algebraic = -_scaled_solve(a_aa, a_ad) if len(a_aa) else np.zeros((0, len(e_dd)))
    factors = lu_factor(e_dd)
    matrix = lu_solve(factors, a_dd + a_da @ to_algebraic)
    values, left_h, right_d = eig(matrix, left=True, right=True)
    right = np.zeros((n, len(values)), dtype=complex)
    left = np.zeros((n, len(values)), dtype=complex)
    right[~columns] = right_d
    right[columns] = to_algebraic @ right_d
    left[~rows] = lu_solve(factors, left_h.conj(), trans=1)
    if len(a_aa):
        left[rows] = -_scaled_solve(a_aa.T, a_da.T @ left[~rows])
    return values, right, left


def _scaled_solve(matrix: FloatArray, right: FloatArray | ComplexArray) -> FloatArray:
    """Solve with rows scaled to one first."""
    size = np.max(np.abs(matrix), axis=1, keepdims=True)
    size[size == 0.0] = 1.0
    solution: FloatArray = np.linalg.solve(matrix / size, right / size)
    return solution


def _condition(matrix: FloatArray) -> float:
    """Condition number after scaling rows and columns; inf for a singular one."""
    if len(matrix) == 0:
        return 1.0
    scaled = np.abs(matrix)
    rows = np.max(scaled, axis=1, keepdims=True)
    if np.any(rows == 0.0):
        return np.inf
    scaled = matrix / rows
    columns = np.max(np.abs(scaled), axis=0, keepdims=True)
    if np.any(columns == 0.0):
        return np.inf
    return float(np.linalg.cond(scaled / columns))


def _by_shuffle(e: FloatArray, a: FloatArray) -> tuple[ComplexArray, ComplexArray, ComplexArray]:
    """Any index: values by shuffling, vectors as null vectors at each value."""
    values = finite_values(e, a)
    right = np.zeros((len(e), len(values)), dtype=complex)
    left = np.zeros((len(e), len(values)), dtype=complex)
    done: list[int] = []
    for k, value in enumerate(values):
        if k in done:
            continue
        same = [j for j in range(k, len(values)) if abs(values[j] - value) <= SAME_ROOT_RELATIVE * max(abs(value), 1e-9)]
        basis_r, basis_l = null_vectors(value * e - a, len(same))
        right[:, same], left[:, same] = basis_r, basis_l
        done += same
    return values, right, left


def null_vectors(matrix: ComplexArray, count: int) -> tuple[ComplexArray, ComplexArray]:
    """The `count` smallest right and left singular directions of a matrix, rows and columns scaled first; shapes (n, count)."""
    rows = np.maximum(np.max(np.abs(matrix), axis=1, keepdims=True), 1e-300)
    columns = np.maximum(np.max(np.abs(matrix / rows), axis=0, keepdims=True), 1e-300)
    u, _, v = np.linalg.svd(matrix / rows / columns)
    return v[-count:].conj().T / columns.T, u[:, -count:].conj() / rows


def finite_values(e: FloatArray, a: FloatArray) -> ComplexArray:
    """Finite eigenvalues of sE - A of any index.

    Rows without E are constraints A_2 x = 0: x is written in their null space, and so on until E is regular.
    Source: Luenberger 1977, Dynamic equations in descriptor form, IEEE Trans. Automatic Control 22 (the shuffle algorithm; here with
    singular values for every decision of rank).
    """
    while len(e):
        rows = np.maximum(np.maximum(np.max(np.abs(e), axis=1), np.max(np.abs(a), axis=1)), 1e-300)[:, None]
        e, a = e / rows, a / rows
        columns = np.maximum(np.maximum(np.max(np.abs(e), axis=0), np.max(np.abs(a), axis=0)), 1e-300)[None, :]
        e, a = e / columns, a / columns
        size = np.maximum(np.max(np.abs(e), axis=1), 1e-300)[:, None]
        live = np.max(np.abs(e), axis=1) > 0.0
        u, values, _ = np.linalg.svd(np.where(live[:, None], e / size, 0.0))
        rank = int(np.count_nonzero(values > RANK_RELATIVE * max(values[0], 1e-300))) if len(values) else 0
        scaled_e = np.where(live[:, None], e / size, 0.0)
        scaled_a = np.where(live[:, None], a / size, a)
        e_1, a_1, a_2 = (u.T @ scaled_e)[:rank], (u.T @ scaled_a)[:rank], (u.T @ scaled_a)[rank:]
        if rank == len(e):
            found: ComplexArray = np.linalg.eigvals(np.linalg.solve(e_1, a_1)).astype(np.complex128)
            return found
        if rank == 0:
            return np.zeros(0, dtype=complex)
        a_2 = a_2 / np.maximum(np.max(np.abs(a_2), axis=1, keepdims=True), 1e-300)
        _, constraint, v = np.linalg.svd(a_2)
        kept = int(np.count_nonzero(constraint > RANK_RELATIVE * max(constraint[0], 1e-300)))
        null = v[kept:].T
        if null.shape[1] != rank:
            return np.zeros(0, dtype=complex)  # a singular pencil: every s would do
        e, a = e_1 @ null, a_1 @ null
    return np.zeros(0, dtype=complex)


# ---------------------------------------------------------------- delays


def pencil_slope(linear: LinearSystem, s: complex) -> ComplexArray:
    """dN/ds, dense, shape (n + k, n + k)."""
    e_w, _, _, g, g_w, _ = bordered(linear)
    n, k = linear.n, len(linear.channels)
    slope = np.zeros((n + k, n + k), dtype=complex)
    slope[:n, :n] = linear.e.toarray()
    if k:
        h = np.array([channel.slope(s) for channel in linear.channels]).reshape(k, 1)
        slope[:n, n:] = e_w.toarray()
        slope[n:, :n] = -h * g.toarray()
        slope[n:, n:] = -h * g_w.toarray()
    return slope


def pade_pencil(linear: LinearSystem, order: int) -> tuple[FloatArray, FloatArray]:
    """E and A with every channel replaced by its Padé form; unknowns x, w, then the forms' own states."""
    e_w, a_w, _, g, g_w, _ = (m.toarray() for m in bordered(linear))
    n, k = linear.n, len(linear.channels)
    size = n + k + k * order
    e, a = np.zeros((size, size)), np.zeros((size, size))
    e[:n, :n], a[:n, :n] = linear.e.toarray(), linear.a.toarray()
    e[:n, n : n + k], a[:n, n : n + k] = e_w, a_w
    for j, channel in enumerate(linear.channels):
        num, den = (p.real for p in channel.pade(order))
        # States in units of 1/T, or their sizes would differ by T^order.
        scale = channel.time_s ** np.arange(order + 1)
        num, den = num / scale, den / scale
        num, den = num / den[order], den / den[order]
        first = n + k + j * order
        for i in range(order - 1):
            e[first + i, first + i] = channel.time_s
            a[first + i, first + i + 1] = 1.0
        last = first + order - 1
        e[last, last] = channel.time_s
        a[last, first : first + order] = -den[:order]
        a[last, :n] = g[j]
        a[last, n : n + k] = g_w[j]
        # w_j = c xi + d z
        a[n + j, n + j] -= 1.0
        a[n + j, first : first + order] = num[:order] - den[:order] * num[order]
        a[n + j, :n] += num[order] * g[j]
        a[n + j, n : n + k] += num[order] * g_w[j]
    return e, a


def _with_channels(linear: LinearSystem) -> Spectrum:
    n, k = linear.n, len(linear.channels)
    e, a = pade_pencil(linear, PADE_ORDER)
    values, right, _ = finite_modes(e, a)
    limit = DELAY_ANGLE_MAX / max(channel.time_s for channel in linear.channels)
    found: list[complex] = []
    for value, vector in zip(values, right[: n + k].T, strict=True):
        # Fast modes without oscillation may lie far left, where e^(-s T) overflows and Padé says nothing: they are no roots.
        if value.imag < -1e-9 * abs(value) or abs(value.imag) > 1.2 * limit:
            continue
        root = refine(linear, complex(value), vector)
        if root is None or abs(root.imag) > limit:
            continue
        root = complex(root.real, 0.0) if abs(root.imag) < 1e-9 * abs(root) else complex(root.real, abs(root.imag))
        found.append(root)
    roots = _multiplied(linear, found)
    return _vectors(linear, np.array(roots, dtype=complex), limit)


def refine(linear: LinearSystem, start: complex, vector: ComplexArray) -> complex | None:
    """Newton's method for N(s) v = 0 with a fixed normalisation of v.

    Source: Güttel & Tisseur 2017, The nonlinear eigenvalue problem, Acta Numerica 26, section 4.
    """
    s, v = start, vector / np.linalg.norm(vector)
    size = len(v)
    norm_row = v.conj()
    for _ in range(NEWTON_LIMIT):
        with np.errstate(over="ignore", invalid="ignore"):
            full = pencil(linear, s).toarray()
            slope = pencil_slope(linear, s)
        if not (np.all(np.isfinite(full)) and np.all(np.isfinite(slope))):
            return None
        rows = np.max(np.abs(full), axis=1)
        rows[rows == 0.0] = 1.0
        matrix = np.zeros((size + 1, size + 1), dtype=complex)
        matrix[:size, :size] = full / rows[:, None]
        matrix[:size, size] = slope @ v / rows
        matrix[size, :size] = norm_row
        right = np.concatenate([-(full @ v) / rows, [1.0 - norm_row @ v]])
        try:
            step = np.linalg.solve(matrix, right)
        except np.linalg.LinAlgError:
            return s if _rank_loss(linear, s) else None
        v = v + step[:size]
        s += step[size]
        if abs(s - start) > 0.5 * abs(start) + 1.0:
            return None
        if abs(step[size]) <= NEWTON_RELATIVE * abs(s):
            return complex(s)
    return None


def _multiplied(linear: LinearSystem, found: list[complex]) -> list[complex]:
    """Roots each as often as N(s) loses rank there, complex pairs complete, slowest first."""
    distinct: list[complex] = []
    for root in found:
        if all(abs(root - other) > SAME_ROOT_RELATIVE * max(abs(root), 1e-9) for other in distinct):
            distinct.append(root)
    result: list[complex] = []
    for root in distinct:
        times = min(_rank_loss(linear, root), sum(abs(root - f) <= 1e3 * SAME_ROOT_RELATIVE * max(abs(root), 1e-9) for f in found))
        result += [root] * times
        if root.imag != 0.0:
            result += [root.conjugate()] * times
    return sorted(result, key=abs)


def _rank_loss(linear: LinearSystem, s: complex) -> int:
    full = pencil(linear, s).toarray()
    full = full / np.maximum(np.max(np.abs(full), axis=1, keepdims=True), 1e-300)
    values = np.linalg.svd(full / np.maximum(np.max(np.abs(full), axis=0, keepdims=True), 1e-300), compute_uv=False)
    return int(np.count_nonzero(values <= 1e-7 * values[0]))


def _vectors(linear: LinearSystem, values: ComplexArray, limit: float) -> Spectrum:
    """Null vectors of N at each root; equal roots get a basis of their null space."""
    size = linear.n + len(linear.channels)
    right = np.zeros((size, len(values)), dtype=complex)
    left = np.zeros((size, len(values)), dtype=complex)
    k = 0
    while k < len(values):
        same = [j for j in range(k, len(values)) if values[j] == values[k]]
        m = len(same)
        basis_r, basis_l = null_vectors(pencil(linear, complex(values[k])).toarray(), m)
        gram = basis_l.T @ pencil_slope(linear, complex(values[k])) @ basis_r
        basis_l = np.linalg.solve(gram, basis_l.T).T if np.linalg.cond(gram) < 1e12 else basis_l
        right[:, same], left[:, same] = basis_r, basis_l
        k = same[-1] + 1 if same == list(range(k, k + m)) else k + 1
    return Spectrum(values, right, left, limit)
