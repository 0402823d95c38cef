"""Linear algebra of the operating point: equilibrated factors, determinant's sign, null vectors. Dense when small, sparse otherwise.

Runs carry their own compiled factorisation (kernels.lu); this one is for the few dozen matrices of a search for a state of rest, where
near-singular matrices must be recognised and explained.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from polewise.kernels.program import FloatArray, IntArray

DENSE_LIMIT = 200  # up to here dense factors are faster than sparse ones
NULL_SPACE_LIMIT = 1500  # up to here a full singular value decomposition explains a singular matrix; above, inverse iteration gives one vector
SINGULAR_RELATIVE = 1e-13  # of an equilibrated matrix: below, the smallest singular value is rounding

DECOMPOSED_MOST = 40  # unknowns up to which a singular matrix is decomposed into singular values; beyond, damped least squares are cheaper
DAMPING = 1e-7  # of the damped least squares, in equilibrated units


@dataclass(frozen=True, slots=True, eq=False)
class SparseMatrix:
    """A square matrix by columns: entries values[col_ptr[j]:col_ptr[j+1]] of column j in rows row_idx[...]."""

    col_ptr: IntArray
    row_idx: IntArray
    values: FloatArray

    @property
    def n(self) -> int:
        """Rows."""
        return len(self.col_ptr) - 1

    @property
    def column_of_entry(self) -> IntArray:
        """Shape (nnz,): the column of each entry."""
        return np.repeat(np.arange(self.n), np.diff(self.col_ptr))

    def dense(self) -> FloatArray:
        """As a full array."""
        full = np.zeros((self.n, self.n))
        full[self.row_idx, self.column_of_entry] = self.values
        return full

    def times(self, x: FloatArray) -> FloatArray:
        """A x."""
        product: FloatArray = np.bincount(self.row_idx, self.values * x[self.column_of_entry], minlength=self.n).astype(float)
        return product

    def scaled(self, row_scale: FloatArray, column_scale: FloatArray) -> SparseMatrix:
        """diag(row_scale) A diag(column_scale)."""
        return SparseMatrix(self.col_ptr, self.row_idx, self.values * row_scale[self.row_idx] * column_scale[self.column_of_entry])


def row_sizes(matrix: SparseMatrix, column_scale: FloatArray) -> FloatArray:
    """Shape (n,): the largest |a_ij| * column_scale_j of each row; 1 for an empty row."""
    size = np.zeros(matrix.n)
    np.maximum.at(size, matrix.row_idx, np.abs(matrix.values) * column_scale[matrix.column_of_entry])
    size[(size == 0.0) | ~np.isfinite(size)] = 1.0
    return size


@dataclass(frozen=True, slots=True, eq=False)
class Factors:
    """Factors of A = diag(row_size) B diag(1 / column_scale), B equilibrated.

    sign: the sign of det A, 0 where it is singular. exact: False where A is singular and `solve` gives damped least squares.
    """

    matrix: SparseMatrix
    row_size: FloatArray
    column_scale: FloatArray
    sign: int
    exact: bool
    _solve: Any
    _solve_transposed: Any

    def solve(self, b: FloatArray) -> FloatArray:
        """x with A x = b (or nearest to it, with the smallest scaled x, where A is singular)."""
        scaled: FloatArray = self._solve(b / self.row_size)
        return scaled * self.column_scale

    def smallest_singular(self) -> tuple[float, FloatArray, FloatArray]:
        """Estimate of the smallest singular value of B with its right and left vectors, by inverse iteration.

        Source: Golub & Van Loan 2013, Matrix Computations, 4th ed., 3.5.4 (condition estimation) and 8.2.2 (inverse iteration).
        """
        rng = np.random.default_rng(1)
        right = rng.standard_normal(self.matrix.n)
        left = right
        size = 0.0
        for _ in range(3):
            left = _unit(self._solve_transposed(right))
            right = self._solve(left)
            size = float(np.linalg.norm(right))
            if not np.isfinite(size) or size == 0.0:
                return 0.0, _unit(right), left
            right = right / size
        return 1.0 / size, right, left


def _unit(v: FloatArray) -> FloatArray:
    v = np.nan_to_num(v, posinf=0.0, neginf=0.0)
    size = float(np.linalg.norm(v))
    return v / size if size > 0.0 else v


def factorise(matrix: SparseMatrix, column_scale: FloatArray) -> Factors:
    """Factor A; a singular A gets damped least squares instead.

    Args:
        column_scale: shape (n,), size of each unknown, > 0.
    """
    row_size = row_sizes(matrix, column_scale)
    scaled = matrix.scaled(1.0 / row_size, column_scale)
    if not np.all(np.isfinite(scaled.values)):
        scaled = SparseMatrix(scaled.col_ptr, scaled.row_idx, np.nan_to_num(scaled.values, nan=0.0, posinf=0.0, neginf=0.0))
    return _dense(matrix, scaled, row_size, column_scale) if matrix.n <= DENSE_LIMIT else _sparse(matrix, scaled, row_size, column_scale)


def _dense(matrix: SparseMatrix, scaled: SparseMatrix, row_size: FloatArray, column_scale: FloatArray) -> Factors:
    from scipy.linalg import lapack

    if matrix.n == 0:  # everything follows explicitly
        return Factors(matrix, row_size, column_scale, 1, True, lambda b: b, lambda b: b)
    full = scaled.dense()
    lu, pivots, info = lapack.dgetrf(full)
    diagonal = np.diagonal(lu)
    if info != 0 or np.min(np.abs(diagonal)) < SINGULAR_RELATIVE:
        if matrix.n > DECOMPOSED_MOST:
            return _damped(matrix, scaled, row_size, column_scale)
        left, values, right_t = np.linalg.svd(full)
        keep = values > SINGULAR_RELATIVE * max(values[0], 1e-300) * matrix.n
        inverse = np.where(keep, 1.0 / np.where(keep, values, 1.0), 0.0)
        return Factors(
            matrix, row_size, column_scale, 0, False, lambda b: right_t.T @ (inverse * (left.T @ b)), lambda b: left @ (inverse * (right_t @ b))
        )
    swaps = int(np.count_nonzero(pivots != np.arange(matrix.n)))
    sign = (-1) ** (swaps + int(np.count_nonzero(diagonal < 0)))
    return Factors(
        matrix, row_size, column_scale, sign, True, lambda b: lapack.dgetrs(lu, pivots, b)[0], lambda b: lapack.dgetrs(lu, pivots, b, trans=1)[0]
    )


def _sparse(matrix: SparseMatrix, scaled: SparseMatrix, row_size: FloatArray, column_scale: FloatArray) -> Factors:
    import scipy.sparse
    from scipy.sparse.linalg import splu

    n = matrix.n
    csc = scipy.sparse.csc_matrix((scaled.values, scaled.row_idx, scaled.col_ptr), shape=(n, n))
    try:
        lu = splu(csc)
        diagonal = lu.U.diagonal()
        if np.min(np.abs(diagonal)) < SINGULAR_RELATIVE:
            raise RuntimeError
    except RuntimeError:
        return _damped(matrix, scaled, row_size, column_scale)
    sign = _parity(lu.perm_r) * _parity(lu.perm_c) * (-1) ** int(np.count_nonzero(diagonal < 0))
    return Factors(matrix, row_size, column_scale, sign, True, lu.solve, lambda b: lu.solve(b, "T"))


def _damped(matrix: SparseMatrix, scaled: SparseMatrix, row_size: FloatArray, column_scale: FloatArray) -> Factors:
    """Damped least squares, min |B x - b|^2 + d^2 |x|^2, as a regular sparse system."""
    import scipy.sparse
    from scipy.sparse.linalg import splu

    n = matrix.n
    csc = scipy.sparse.csc_matrix((scaled.values, scaled.row_idx, scaled.col_ptr), shape=(n, n))
    eye = scipy.sparse.identity(n, format="csc")
    both = splu(scipy.sparse.bmat([[eye, csc], [csc.T, -(DAMPING**2) * eye]], format="csc"))
    zero = np.zeros(n)
    return Factors(
        matrix,
        row_size,
        column_scale,
        0,
        False,
        lambda b: both.solve(np.concatenate([b, zero]))[n:],
        lambda b: both.solve(np.concatenate([zero, b]))[:n],
    )


def _parity(permutation: IntArray) -> int:
    """+1 or -1."""
    seen = np.zeros(len(permutation), dtype=bool)
    odd = False
    for start in range(len(permutation)):
        k, length = start, 0
        while not seen[k]:
            seen[k] = True
            k = int(permutation[k])
            length += 1
        odd ^= length > 0 and length % 2 == 0
    return -1 if odd else 1


def null_spaces(matrix: SparseMatrix, column_scale: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Right and left null vectors of the equilibrated matrix, shapes (n, k) and (n, k); k = 0 for a regular one.

    Right: directions in which scaled unknowns move without any row noticing. Left: combinations of rows that no unknown changes.
    """
    row_size = row_sizes(matrix, column_scale)
    scaled = matrix.scaled(1.0 / row_size, column_scale)
    if matrix.n <= NULL_SPACE_LIMIT:
        left, values, right_t = np.linalg.svd(np.nan_to_num(scaled.dense()))
        null = values <= SINGULAR_RELATIVE * max(float(values[0]), 1e-300) * matrix.n
        return right_t[null].T, left[:, null]
    smallest, right, left_vector = factorise(matrix, column_scale).smallest_singular()
    if smallest > SINGULAR_RELATIVE * matrix.n:
        return np.zeros((matrix.n, 0)), np.zeros((matrix.n, 0))
    return right[:, None], left_vector[:, None]
