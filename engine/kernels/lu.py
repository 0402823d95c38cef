"""Sparse LU of real and complex matrices: pivot search, refactorisation on the pattern it found, solution.

A (n × n) is given by columns: col_ptr, row_idx and values. With columns taken in a given order and rows in the order of their pivots, A = L U,
L with unit diagonal. L and U are kept by columns; entries name pivot positions; the diagonal of U is kept inverted. V is the arena of the values,
F or C; `f` is the factors' group of entries in W (layout.REAL, COMPLEX, RESTART). Indices in hot loops are unsigned: that spares a test.

Pivot search: left-looking, each column by a sparse triangular solve whose pattern a depth-first search finds first; a row's diagonal is
preferred as pivot within DIAGONAL_PREFERENCE of the largest entry, which keeps the fill that the column order was chosen for.
Source: Gilbert & Peierls, SIAM J. Sci. Stat. Comput. 9(5), 1988; Davis, Direct Methods for Sparse Linear Systems, 2006, chapter 6.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit

from polewise.kernels.build import KERNEL
from polewise.kernels.layout import (
    AT_COL_PTR,
    AT_ROW_IDX,
    LU_COLUMN,
    LU_DENSE,
    LU_KNOWN,
    LU_L_PTR,
    LU_L_ROW,
    LU_L_VAL,
    LU_MARK,
    LU_ORDER,
    LU_PAUSE,
    LU_PIVOT_INVERSE,
    LU_PLACE,
    LU_SEARCHES,
    LU_STACK,
    LU_U_PTR,
    LU_U_ROW,
    LU_U_VAL,
    SIZE_FACTORS,
    SIZE_N,
)
from polewise.kernels.stamp import STAMP

LU_DONE = 0
LU_BAD_PIVOT = 1  # a pivot is small beside the entries below it: search pivots again
LU_SINGULAR = 2  # no usable pivot in a column
LU_FULL = 3  # no room for the factors

DIAGONAL_PREFERENCE = 0.1  # a diagonal entry this large against the column's largest is taken as pivot
GROWTH_LIMIT = 1e-3  # a refactorisation whose pivot is smaller than this against the column's largest asks for a new search
SINGULAR_LIMIT = 1e-280  # rows are scaled to size 1 before: a pivot below this is no pivot
U = np.uint64  # an unsigned index


def _build(stamp: int) -> Any:
    @njit(inline="always")
    def reach(W, f, start, top):
        """Depth-first search from row `start` through the columns of L done so far; rows are put before stack[top] in topological order.

        Returns the new top. `mark` of visited rows is set to 1 (the caller clears it). The stack's second half holds the path, pause the place in
        each column.
        """
        _ = stamp
        n = W[SIZE_N]
        place, l_ptr, l_row = W[f + LU_PLACE], W[f + LU_L_PTR], W[f + LU_L_ROW]
        mark, stack, pause = W[f + LU_MARK], W[f + LU_STACK], W[f + LU_PAUSE]
        path = stack + n
        head = 0
        W[path] = start
        while head >= 0:
            row = W[path + head]
            column = W[place + row]
            if W[mark + row] == 0:
                W[mark + row] = 1
                W[pause + head] = W[l_ptr + column] if column >= 0 else 0
            finished = True
            last = W[l_ptr + column + 1] if column >= 0 else 0
            for k in range(W[pause + head], last):
                below = W[l_row + k]
                if W[mark + below] == 0:
                    W[pause + head] = k + 1
                    head += 1
                    W[path + head] = below
                    finished = False
                    break
            if finished:
                head -= 1
                top -= 1
                W[stack + top] = row
        return top

    @njit(cache=True, **KERNEL)
    def lu_search(W, V, f, values):
        """Factorise the matrix V[values:] with a new search for pivots. Returns LU_DONE, LU_SINGULAR (W[f + LU_COLUMN]: where) or LU_FULL."""
        _ = stamp
        n, room = W[SIZE_N], W[SIZE_FACTORS]
        col_ptr, row_idx = W[AT_COL_PTR], W[AT_ROW_IDX]
        order, place, mark, stack = W[f + LU_ORDER], W[f + LU_PLACE], W[f + LU_MARK], W[f + LU_STACK]
        l_ptr, l_row, l_val = W[f + LU_L_PTR], W[f + LU_L_ROW], W[f + LU_L_VAL]
        u_ptr, u_row, u_val = W[f + LU_U_PTR], W[f + LU_U_ROW], W[f + LU_U_VAL]
        dense, pivot_inverse = W[f + LU_DENSE], W[f + LU_PIVOT_INVERSE]
        W[f + LU_KNOWN] = 0
        W[f + LU_SEARCHES] += 1
        for i in range(n):
            W[place + i] = -1
            W[mark + i] = 0
            V[dense + i] = 0.0
        n_l, n_u = 0, 0
        for k in range(n):
            W[l_ptr + k], W[u_ptr + k] = n_l, n_u
            column = W[order + k]
            first, last = W[col_ptr + column], W[col_ptr + column + 1]
            # pattern of the solution of L y = A[:, column]
            top = n
            for e in range(first, last):
                if W[mark + W[row_idx + e]] == 0:
                    top = reach_c(W, f, W[row_idx + e], top)
            above = 0
            for s in range(stack + top, stack + n):
                if W[place + W[s]] >= 0:
                    above += 1
            if n_u + above > room or n_l + (n - top - above - 1) > room:
                return LU_FULL
            # numbers
            for e in range(first, last):
                V[dense + W[row_idx + e]] = V[values + e]
            for s in range(stack + top, stack + n):
                row = W[s]
                j = W[place + row]
                if j >= 0:
                    y = V[dense + row]
                    W[u_row + n_u] = j
                    V[u_val + n_u] = y
                    n_u += 1
                    for e in range(W[l_ptr + j], W[l_ptr + j + 1]):
                        V[dense + W[l_row + e]] -= V[l_val + e] * y
            # pivot
            largest, pivot_row = 0.0, -1
            for s in range(stack + top, stack + n):
                row = W[s]
                if W[place + row] < 0:
                    y = V[dense + row]
                    entry = abs(y.real) + abs(y.imag)
                    if entry > largest:
                        largest, pivot_row = entry, row
            if pivot_row < 0 or not (SINGULAR_LIMIT < largest < np.inf):
                W[f + LU_COLUMN] = column
                return LU_SINGULAR
            if W[place + column] < 0 and W[mark + column] == 1:
                y = V[dense + column]
                if abs(y.real) + abs(y.imag) >= DIAGONAL_PREFERENCE * largest:
                    pivot_row = column
            inverse = 1.0 / V[dense + pivot_row]
            V[pivot_inverse + k] = inverse
            W[place + pivot_row] = k
            for s in range(stack + top, stack + n):
                row = W[s]
                if W[place + row] < 0:
                    W[l_row + n_l] = row
                    V[l_val + n_l] = V[dense + row] * inverse
                    n_l += 1
                V[dense + row] = 0.0
                W[mark + row] = 0
            W[l_ptr + k + 1], W[u_ptr + k + 1] = n_l, n_u
        for e in range(n_l):
            W[l_row + e] = W[place + W[l_row + e]]
        W[f + LU_KNOWN] = 1
        return LU_DONE

    @njit(cache=True, **KERNEL)
    def lu_again(W, V, f, values):
        """Factorise the matrix V[values:] on the known pattern with the known pivots. Returns LU_DONE or LU_BAD_PIVOT."""
        _ = stamp
        n = W[SIZE_N]
        col_ptr, row_idx = W[AT_COL_PTR], W[AT_ROW_IDX]
        order, place = W[f + LU_ORDER], W[f + LU_PLACE]
        l_ptr, l_row, l_val = W[f + LU_L_PTR], W[f + LU_L_ROW], W[f + LU_L_VAL]
        u_ptr, u_row, u_val = W[f + LU_U_PTR], W[f + LU_U_ROW], W[f + LU_U_VAL]
        dense, pivot_inverse = W[f + LU_DENSE], W[f + LU_PIVOT_INVERSE]
        good = True
        for k in range(n):
            column = W[U(order + k)]
            for e in range(W[U(col_ptr + column)], W[U(col_ptr + column + 1)]):
                V[U(dense + W[U(place + W[U(row_idx + e)])])] = V[U(values + e)]
            for e in range(W[U(u_ptr + k)], W[U(u_ptr + k + 1)]):
                j = W[U(u_row + e)]
                y = V[U(dense + j)]
                V[U(dense + j)] = 0.0
                V[U(u_val + e)] = y
                if y != 0.0:
                    for m in range(W[U(l_ptr + j)], W[U(l_ptr + j + 1)]):
                        V[U(dense + W[U(l_row + m)])] -= V[U(l_val + m)] * y
            pivot = V[U(dense + k)]
            V[U(dense + k)] = 0.0
            pivot_size = abs(pivot.real) + abs(pivot.imag)
            if not (SINGULAR_LIMIT < pivot_size < np.inf):
                good = False
                pivot = 1.0 + 0.0 * V[U(l_val)]  # any number of the right type: a complex division by zero would raise
            inverse = 1.0 / pivot
            V[U(pivot_inverse + k)] = inverse
            largest = 0.0
            for e in range(W[U(l_ptr + k)], W[U(l_ptr + k + 1)]):
                at = U(dense + W[U(l_row + e)])
                y = V[at]
                V[at] = 0.0
                largest = max(largest, abs(y.real) + abs(y.imag))
                V[U(l_val + e)] = y * inverse
            if not (pivot_size >= GROWTH_LIMIT * largest):
                good = False
        return LU_DONE if good else LU_BAD_PIVOT

    @njit(inline="always")
    def lu_factor(W, V, f, values):
        """Factorise: on the known pattern if there is one and it is still good, else with a new search. Returns LU_DONE, LU_SINGULAR or LU_FULL."""
        _ = stamp
        if W[f + LU_KNOWN] == 1 and lu_again_c(W, V, f, values) == LU_DONE:
            return LU_DONE
        return lu_search_c(W, V, f, values)

    @njit(cache=True, **KERNEL)
    def lu_solve(W, V, f, b):
        """Overwrite the right side V[b:b + n] with the solution of A x = b."""
        _ = stamp
        n = W[SIZE_N]
        order, place, y = W[f + LU_ORDER], W[f + LU_PLACE], W[f + LU_DENSE]
        l_ptr, l_row, l_val = W[f + LU_L_PTR], W[f + LU_L_ROW], W[f + LU_L_VAL]
        u_ptr, u_row, u_val = W[f + LU_U_PTR], W[f + LU_U_ROW], W[f + LU_U_VAL]
        pivot_inverse = W[f + LU_PIVOT_INVERSE]
        for i in range(n):
            V[U(y + W[U(place + i)])] = V[U(b + i)]
        for k in range(n):
            value = V[U(y + k)]
            if value != 0.0:
                for e in range(W[U(l_ptr + k)], W[U(l_ptr + k + 1)]):
                    V[U(y + W[U(l_row + e)])] -= V[U(l_val + e)] * value
        for k in range(n - 1, -1, -1):
            value = V[U(y + k)] * V[U(pivot_inverse + k)]
            V[U(b + W[U(order + k)])] = value
            V[U(y + k)] = 0.0
            if value != 0.0:
                for e in range(W[U(u_ptr + k)], W[U(u_ptr + k + 1)]):
                    V[U(y + W[U(u_row + e)])] -= V[U(u_val + e)] * value

    return reach, lu_search, lu_again, lu_factor, lu_solve


(reach_c, lu_search_c, lu_again_c, lu_factor_c, lu_solve_c) = _build(STAMP)
