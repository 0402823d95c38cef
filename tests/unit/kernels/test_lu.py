"""Sparse factors against dense solutions: random, badly scaled, with zero diagonals, with pivots that stop being good, singular."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.sparse as sp

from polewise.kernels import layout, lu
from polewise.kernels.workspace import Workspace

from .cases import make


def _matrix(n: int, seed: int, density: float = 0.15) -> np.ndarray:
    rng = np.random.default_rng(seed)
    a = sp.random(n, n, density=min(1.0, density), random_state=rng).toarray()
    a += np.diag(rng.uniform(-1.0, 1.0, n) * (rng.random(n) > 0.4))
    return a + np.eye(n)[rng.permutation(n)]


def _workspace(a: np.ndarray, ordered: bool) -> tuple[Workspace, np.ndarray]:
    """A workspace whose Jacobian has the pattern of a (diagonal included); the pattern's entries of a."""
    n = len(a)
    case = make(
        n,
        lambda t, x, p: [sum((1.0 * x[j] * 1.5 for j in range(n) if a[i, j] != 0.0), start=0.0 * t) for i in range(n)],
        lambda t, x, p: [None] * n,
        ordered=ordered,
    )
    program = case.program
    columns = np.repeat(np.arange(n), np.diff(program.col_ptr))
    return case.work, a[program.row_idx, columns]


def _solve(work: Workspace, values: np.ndarray, b: np.ndarray, again: bool) -> tuple[int, np.ndarray]:
    is_complex = np.iscomplexobj(values)
    arena, base = (work.C, layout.COMPLEX) if is_complex else (work.F, layout.REAL)
    at, rhs = (layout.AT_MATRIX_COMPLEX, layout.AT_RHS_COMPLEX) if is_complex else (layout.AT_MATRIX, layout.AT_RHS)
    at, rhs = int(work.W[at]), int(work.W[rhs])
    arena[at : at + len(values)] = values
    status = (lu.lu_again_c if again else lu.lu_search_c)(work.W, arena, base, at)
    arena[rhs : rhs + len(b)] = b
    if status == lu.LU_DONE:
        lu.lu_solve_c(work.W, arena, base, rhs)
    return status, arena[rhs : rhs + len(b)].copy()


@pytest.mark.parametrize("n", [1, 2, 3, 7, 20, 70])
@pytest.mark.parametrize("ordered", [False, True])
def test_solutions_agree_with_dense_ones(n, ordered):
    a = _matrix(n, n)
    work, values = _workspace(a, ordered)
    rng = np.random.default_rng(n)
    b = rng.normal(size=n)
    status, x = _solve(work, values, b, again=False)
    assert status == lu.LU_DONE
    np.testing.assert_allclose(x, np.linalg.solve(a, b), rtol=1e-9, atol=1e-9)
    factor = rng.uniform(0.9, 1.1, len(values))
    status, x = _solve(work, values * factor, b, again=True)
    moved = np.zeros_like(a)
    columns = np.repeat(np.arange(n), np.diff(work.W[work.W[layout.AT_COL_PTR] :][: n + 1]))
    rows = work.W[work.W[layout.AT_ROW_IDX] :][: len(values)]
    moved[rows, columns] = values * factor
    if status == lu.LU_DONE:
        np.testing.assert_allclose(x, np.linalg.solve(moved, b), rtol=1e-8, atol=1e-8)
    bc = b + 1j * rng.normal(size=n)
    twisted = moved * (1.0 + 0.3j)
    status, xc = _solve(work, values * factor * (1.0 + 0.3j), bc, again=False)
    assert status == lu.LU_DONE
    np.testing.assert_allclose(xc, np.linalg.solve(twisted, bc), rtol=1e-8, atol=1e-8)


def test_a_pivot_that_turns_bad_is_noticed():
    a = np.array([[1.0, 2.0, 0.0], [3.0, 1.0, 1.0], [0.0, 1.0, 1.0]])
    work, values = _workspace(a, False)
    assert _solve(work, values, np.ones(3), again=False)[0] == lu.LU_DONE
    bad = a.copy()
    bad[0, 0], bad[1, 0] = (1e-9, 1.0)
    columns = np.repeat(np.arange(3), np.diff(work.W[work.W[layout.AT_COL_PTR] :][:4]))
    rows = work.W[work.W[layout.AT_ROW_IDX] :][: len(values)]
    assert _solve(work, bad[rows, columns], np.ones(3), again=True)[0] == lu.LU_BAD_PIVOT
    status, x = _solve(work, bad[rows, columns], np.ones(3), again=False)
    assert status == lu.LU_DONE
    np.testing.assert_allclose(bad @ x, 1.0, rtol=1e-12)


def test_singular_matrices_name_the_column():
    a = np.array([[1.0, 1.0, 0.0], [1.0, 1.0, 0.0], [0.0, 0.0, 1.0]])
    work, values = _workspace(a, False)
    assert _solve(work, values, np.ones(3), again=False)[0] == lu.LU_SINGULAR
    assert work.W[layout.REAL + layout.LU_COLUMN] == 1
    assert _solve(work, np.where(values == 0, 0.0, np.nan), np.ones(3), again=False)[0] == lu.LU_SINGULAR


def test_order_keeps_a_star_sparse():
    """A bus with 200 feeders: eliminated in the right order the factors have hardly more entries than the matrix."""
    n = 201
    a = np.eye(n) * 4.0
    a[0, :], a[:, 0] = 1.0, 1.0
    a[0, 0] = 300.0
    work, values = _workspace(a, True)
    b = np.arange(1.0, n + 1)
    status, x = _solve(work, values, b, again=False)
    assert status == lu.LU_DONE
    np.testing.assert_allclose(a @ x, b, rtol=1e-9)
    base = layout.REAL
    fill = work.W[work.W[base + layout.LU_L_PTR] + n] + work.W[work.W[base + layout.LU_U_PTR] + n]
    assert fill <= 2 * (n - 1)
