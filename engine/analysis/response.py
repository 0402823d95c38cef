"""Frequency responses of a LinearSystem: y/u at s = j 2 pi f with exact delays and holds, dense for small systems, sparse for large ones."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from polewise.analysis.linearise import LinearSystem, SparseArray
from polewise.analysis.point import ComplexArray
from polewise.kernels.program import FloatArray

DENSE_LIMIT = 60  # up to here all frequencies are solved together as full matrices; beyond, sparse factors one by one are faster
BATCH_ENTRIES = 4_000_000  # complex entries held at once in the dense way


def transfer_at(linear: LinearSystem, s: complex) -> ComplexArray:
    """All of y/u at one s, shape (n_y, n_u)."""
    value: ComplexArray = transfer(linear, np.array([s], dtype=complex))[0]
    return value


def response(linear: LinearSystem, frequencies_hz: Sequence[float] | FloatArray) -> ComplexArray:
    """y/u over frequencies.

    Args:
        frequencies_hz: shape (m,), Hz.
    Returns:
        shape (m, n_y, n_u), SI units of y over those of u.
    """
    s = 2j * np.pi * np.asarray(frequencies_hz, dtype=float)
    if linear.held:
        from polewise.analysis.sampled import sampled_response

        return sampled_response(linear, s)
    return transfer(linear, s)


def transfer(linear: LinearSystem, s: ComplexArray) -> ComplexArray:
    """y/u at any complex s, shape (m, n_y, n_u). Clocked values are kept as they are (see sampled.py for systems with clocks)."""
    s = np.asarray(s, dtype=complex)
    if linear.n + len(linear.channels) <= DENSE_LIMIT:
        return _dense(linear, s)
    return _sparse(linear, s)


def bordered(linear: LinearSystem) -> tuple[SparseArray, SparseArray, SparseArray, SparseArray, SparseArray, SparseArray]:
    """Blocks of channels only: (e_w, a_w, c_w, g, g_w, g_u)."""
    k = len(linear.channels)
    return linear.e_w[:, :k], linear.a_w[:, :k], linear.c_w[:, :k], linear.g[:k], linear.g_w[:k, :k], linear.g_u[:k]


def factors(linear: LinearSystem, s: ComplexArray) -> ComplexArray:
    """h_k(s), shape (m, number of channels)."""
    columns = [channel.factor(s) for channel in linear.channels]
    return np.stack(columns, axis=1) if columns else np.zeros((len(s), 0), dtype=complex)


def _dense(linear: LinearSystem, s: ComplexArray) -> ComplexArray:
    e_w, a_w, c_w, g, g_w, g_u = (m.toarray() for m in bordered(linear))
    e, a, b, e_u = (m.toarray() for m in (linear.e, linear.a, linear.b, linear.e_u))
    c, d = linear.c.toarray(), linear.d.toarray()
    n, k, m = linear.n, len(linear.channels), len(s)
    result = np.empty((m, len(linear.outputs), len(linear.inputs)), dtype=complex)
    size = n + k
    batch = max(1, BATCH_ENTRIES // max(size * size, 1))
    for start in range(0, m, batch):
        part = s[start : start + batch]
        h = factors(linear, part)
        left = np.zeros((len(part), size, size), dtype=complex)
        right = np.zeros((len(part), size, len(linear.inputs)), dtype=complex)
        left[:, :n, :n] = part[:, None, None] * e - a
        right[:, :n] = b - part[:, None, None] * e_u
        if k:
            left[:, :n, n:] = part[:, None, None] * e_w - a_w
            left[:, n:, :n] = -h[:, :, None] * g
            left[:, n:, n:] = np.eye(k) - h[:, :, None] * g_w
            right[:, n:] = h[:, :, None] * g_u
        x = solve_balanced(left, right)
        result[start : start + batch] = c @ x[:, :n] + c_w @ x[:, n:] + d
    return result


def solve_balanced(left: ComplexArray, right: ComplexArray) -> ComplexArray:
    """Solve stacks of systems, rows scaled to size one first: units differ by many powers of ten."""
    size = np.max(np.abs(left), axis=2, keepdims=True)
    size[size == 0.0] = 1.0
    solution: ComplexArray = np.linalg.solve(left / size, right / size)
    return solution


def pencil(linear: LinearSystem, s: complex) -> SparseArray:
    """N(s) = [[sE - A, sE_w - A_w], [-H G, I - H G_w]], shape (n + channels, n + channels)."""
    from scipy.sparse import bmat, diags, identity

    base = (s * linear.e - linear.a).tocsc()
    k = len(linear.channels)
    if k == 0:
        return base
    e_w, a_w, _, g, g_w, _ = bordered(linear)
    h = diags([channel.factor(s) for channel in linear.channels])
    return bmat([[base, s * e_w - a_w], [-(h @ g), identity(k) - h @ g_w]], format="csc")


def _sparse(linear: LinearSystem, s: ComplexArray) -> ComplexArray:
    from polewise.analysis.sparse_factors import SparseFactors

    _, _, c_w, _, _, g_u = bordered(linear)
    b, e_u, c, d = (m.toarray() for m in (linear.b, linear.e_u, linear.c, linear.d))
    g_u, c_w = g_u.toarray(), c_w.toarray()
    result = np.empty((len(s), len(linear.outputs), len(linear.inputs)), dtype=complex)
    h = factors(linear, s)
    for k, value in enumerate(s):
        matrix = pencil(linear, complex(value))
        right = np.concatenate([b - value * e_u, h[k][:, None] * g_u]).astype(complex)
        x = SparseFactors(matrix).solve(right)
        result[k] = c @ x[: linear.n] + c_w @ x[linear.n :] + d
    return result
