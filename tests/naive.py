"""Slow, obvious twins of the compiled kernels: Python numbers, dense matrices, linear searches. Tests compare the two on random and nasty data."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from polewise.kernels import opcodes as op
from polewise.kernels.program import Program

FloatArray = NDArray[np.float64]

UNARY = {
    op.SQRT: math.sqrt,
    op.EXP: math.exp,
    op.LOG: math.log,
    op.SIN: math.sin,
    op.COS: math.cos,
    op.TAN: math.tan,
    op.ASIN: math.asin,
    op.ACOS: math.acos,
    op.ATAN: math.atan,
    op.SINH: math.sinh,
    op.COSH: math.cosh,
    op.TANH: math.tanh,
}


# ------------------------------------------------------------ tape


def table_segment(knots: Sequence[float], u: float) -> int:
    """Number of knots at or left of u; the last knot itself still counts as inside."""
    if len(knots) > 1 and u == knots[-1]:
        return len(knots) - 1
    return sum(1 for k in knots if k <= u)


def registers(
    program: Program, x: FloatArray, t: float, p: FloatArray, modes: Any, *, live: bool = False, segments: Sequence[int] = (0,)
) -> FloatArray:
    """All registers after running the given segments at one point. `live`: switches follow their values, and `modes` is overwritten."""
    reg = np.zeros(program.n_reg)
    reg[: program.n_const] = program.constants
    reg[program.time_reg] = t
    reg[program.x_reg : program.x_reg + program.n] = x
    reg[program.p_reg : program.p_reg + program.n_p] = p
    for segment in segments:
        first = 0 if segment == 0 else program.segment_end[segment - 1]
        for k in range(first, program.segment_end[segment]):
            a, b, c = (int(v[k]) for v in (program.a, program.b, program.c))
            reg[program.dst[k]] = operate(program, int(program.op[k]), a, b, c, reg, modes, live)
    return reg


def operate(program: Program, operation: int, a: int, b: int, c: int, reg: FloatArray, modes: Any, live: bool) -> float:
    """One operation of the tape."""
    u = float(reg[a])
    if operation in (op.POSITIVE, op.FLOOR):
        if live:
            modes[b] = int(u > 0) if operation == op.POSITIVE else (math.floor(u) if abs(u) < 4e18 else 0)
        return float(modes[b])
    if operation in (op.TABLE, op.TABLE_SLOPE):
        knots = program.table_knots[program.table_ptr[c] : program.table_ptr[c + 1]]
        if live:
            modes[b] = table_segment(list(knots), u)
        c0, c1, c2, c3 = program.table_coef[program.table_ptr[c] + c + modes[b]]
        v = u - knots[max(modes[b] - 1, 0)]
        with np.errstate(over="ignore", invalid="ignore"):
            return float(c0 + c1 * v + c2 * v * v + c3 * v * v * v if operation == op.TABLE else c1 + 2 * c2 * v + 3 * c3 * v * v)
    if operation == op.MUX:
        return float(reg[b] if u != 0 else reg[c])
    try:
        if operation == op.NEG:
            return -u
        if operation in UNARY:
            return UNARY[operation](u)
        v = float(reg[b])
        pair = {op.ADD: lambda: u + v, op.SUB: lambda: u - v, op.MUL: lambda: u * v, op.DIV: lambda: u / v, op.POW: lambda: u**v}
        value = math.atan2(u, v) if operation == op.ATAN2 else pair[operation]()
        return value if isinstance(value, float) else math.nan
    except (ValueError, OverflowError, ZeroDivisionError):
        return math.nan


def residual(program: Program, x: FloatArray, t: float, p: FloatArray, modes: Any) -> tuple[FloatArray, FloatArray]:
    """f and q (0 in algebraic rows)."""
    reg = registers(program, x, t, p, modes)
    return reg[program.f_reg], np.where(program.q_reg >= 0, reg[program.q_reg], 0.0)


def jacobians(program: Program, x: FloatArray, t: float, p: FloatArray, modes: Any) -> tuple[FloatArray, FloatArray]:
    """df/dx and dq/dx as full matrices."""
    reg = registers(program, x, t, p, modes, segments=(0, 1))
    df, dq = np.zeros((program.n, program.n)), np.zeros((program.n, program.n))
    for j in range(program.n):
        for e in range(program.col_ptr[j], program.col_ptr[j + 1]):
            df[program.row_idx[e], j] = reg[program.jf_reg[e]]
            dq[program.row_idx[e], j] = reg[program.jq_reg[e]]
    return df, dq


# ------------------------------------------------------------ switches


def violation(program: Program, modes: Any, s: int, value: float) -> float:
    """How far the value is beyond the interval its mode allows; negative inside."""
    kind, m = program.switch_kind[s], modes[s]
    low, high = -math.inf, math.inf
    if kind == op.SWITCH_POSITIVE:
        low, high = (0.0, math.inf) if m else (-math.inf, 0.0)
    elif kind == op.SWITCH_FLOOR:
        low, high = float(m), float(m + 1)
    else:
        table = program.switch_table[s]
        knots = list(program.table_knots[program.table_ptr[table] : program.table_ptr[table + 1]])
        low = knots[m - 1] if m > 0 else -math.inf
        high = knots[m] if m < len(knots) else math.inf
    return max(low - value, value - high)


# ------------------------------------------------------------ Radau IIA, three stages

_ROOT6 = math.sqrt(6.0)
NODES = np.array([(4 - _ROOT6) / 10, (4 + _ROOT6) / 10, 1.0])


def collocation_matrix() -> FloatArray:
    """A of the collocation method on the nodes: integrals of the Lagrange polynomials."""
    powers = np.vander(NODES, 3, increasing=True)
    return np.array([[c ** (k + 1) / (k + 1) for k in range(3)] for c in NODES]) @ np.linalg.inv(powers)


def radau_stages(program: Program, x: FloatArray, t: float, p: FloatArray, modes: Any, h: float, p_stages: Any = None) -> FloatArray:
    """X_j - x, shape (n, 3), by full Newton on all 3 n equations at once."""
    n, a = program.n, collocation_matrix()
    dynamic = program.q_reg >= 0
    _, q0 = residual(program, x, t, p, modes)
    z = np.zeros((n, 3))
    for _ in range(50):
        f, q, df, dq = [], [], [], []
        for j in range(3):
            at = (program, x + z[:, j], t + NODES[j] * h, p if p_stages is None else p_stages[j], modes)
            for store, value in zip((f, q, df, dq), (*residual(*at), *jacobians(*at)), strict=True):
                store.append(value)
        g, big = np.zeros((3, n)), np.zeros((3, n, 3, n))
        for i in range(3):
            g[i] = np.where(dynamic, q[i] - q0 + h * sum(a[i, j] * f[j] for j in range(3)), f[i])
            for j in range(3):
                big[i, :, j, :] = np.where(dynamic[:, None], h * a[i, j] * df[j] + (dq[i] if i == j else 0.0), df[i] if i == j else 0.0)
        step = np.linalg.solve(big.reshape(3 * n, 3 * n), -g.reshape(3 * n)).reshape(3, n).T
        z = z + step
        if np.max(np.abs(step) / (np.abs(x)[:, None] + program.scale[:, None])) < 1e-14:
            break
    return z


def error_estimate(program: Program, x: FloatArray, t: float, p: FloatArray, modes: Any, h: float, z: FloatArray) -> FloatArray:
    """The filtered embedded estimate, shape (n,)."""
    gamma = float(np.real(next(v for v in np.linalg.eigvals(np.linalg.inv(collocation_matrix())) if abs(v.imag) < 1e-9)))
    e = np.array([-13 - 7 * _ROOT6, -13 + 7 * _ROOT6, -1.0]) / 3.0
    dynamic = program.q_reg >= 0
    f0, q0 = residual(program, x, t, p, modes)
    df, dq = jacobians(program, x, t, p, modes)
    q = [residual(program, x + z[:, j], t + NODES[j] * h, p, modes)[1] for j in range(3)]
    right = np.where(dynamic, -f0 + sum(e[j] * (q[j] - q0) for j in range(3)) / h, 0.0)
    return np.linalg.solve(gamma / h * dq + df, right)


# ------------------------------------------------------------ restart


def restart(program: Program, x: FloatArray, t: float, p: FloatArray, modes: Any, q_keep: FloatArray) -> FloatArray:
    """x with the charges kept and the algebraic rows solved: undamped Newton, modes set from their values until they stay."""
    dynamic = program.q_reg >= 0
    for _ in range(1000):
        for _ in range(60):
            f, q = residual(program, x, t, p, modes)
            df, dq = jacobians(program, x, t, p, modes)
            step = np.linalg.solve(np.where(dynamic[:, None], dq, df), np.where(dynamic, q_keep - q, -f))
            x = x + step
            if np.max(np.abs(step) / (np.abs(x) + program.scale)) < 1e-14:
                break
        before = list(modes)
        registers(program, x, t, p, modes, live=True)
        if before == list(modes):
            return x
    raise AssertionError("modes do not settle")


# ------------------------------------------------------------ delays


def delayed(pieces: Sequence[tuple[float, float, Sequence[float]]], t_past: float, value0: float, slope0: float, t0: float, *, right: bool) -> float:
    """Value at t_past from pieces (start, size, values at 0, c1, c2, 1), in order; before the first piece value0 + slope0 (t_past - t0)."""
    chosen = None
    for start, size, values in pieces:
        if start < t_past - 1e-12 or (right and start <= t_past + 1e-12):
            chosen = start, size, values
    if chosen is None:
        return value0 + slope0 * (t_past - t0)
    start, size, values = chosen
    coefficients = np.linalg.solve(np.vander([0.0, *NODES], 4), np.asarray(values))
    return float(np.polyval(coefficients, (t_past - start) / size))


# ------------------------------------------------------------ clocks


def instants(periods: Sequence[float], offsets: Sequence[float], ranks: Sequence[int], t_stop: float) -> list[tuple[float, list[list[int]]]]:
    """Every sample instant before t_stop with the clocks that fire, grouped by ascending rank."""
    found: list[tuple[float, int]] = []
    for k, (period, offset) in enumerate(zip(periods, offsets, strict=True)):
        j = 0
        while offset + j * period < t_stop - 1e-12:
            found.append((offset + j * period, k))
            j += 1
    found.sort()
    merged: list[tuple[float, list[int]]] = []
    for t, k in found:
        if merged and t - merged[-1][0] <= 1e-12:
            merged[-1][1].append(k)
        else:
            merged.append((t, [k]))
    return [(t, [[k for k in clocks if ranks[k] == r] for r in sorted({ranks[k] for k in clocks})]) for t, clocks in merged]
