"""State space to other tools: numpy arrays with named, unit-bearing inputs, states and outputs; descriptor form always, explicit where it exists."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from polewise.analysis import failures
from polewise.analysis.linearise import LinearSystem
from polewise.analysis.spectrum import CONDITION_MAX, PADE_ORDER, _condition, pade_pencil
from polewise.analysis.standpoint import Standpoint
from polewise.grammar import units
from polewise.grammar.units import unit_text
from polewise.kernels.program import FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class StateSpace:
    """E x' = A x + B u, y = C x + D u around a point.

    Args:
        e, a: (n, n). b: (n, n_u). c: (n_y, n). d: (n_y, n_u). SI throughout.
        states, inputs, outputs: names in the netlist's spelling. state_units, input_units, output_units beside them.
        values: of the outputs at the point.
        pade_order: order of the rational forms that stand for delays and holds here; 0 where there are none and the form is exact.
    """

    e: FloatArray
    a: FloatArray
    b: FloatArray
    c: FloatArray
    d: FloatArray
    states: tuple[str, ...]
    inputs: tuple[str, ...]
    outputs: tuple[str, ...]
    state_units: tuple[str, ...]
    input_units: tuple[str, ...]
    output_units: tuple[str, ...]
    values: tuple[float, ...]
    pade_order: int

    def explicit(self) -> StateSpace:
        """With E the unit matrix: algebraic unknowns eliminated.

        Raises:
            AnalysisRefused: the algebraic rows don't determine their unknowns (then only the descriptor form exists).
        """
        rows, columns = ~np.any(self.e != 0.0, axis=1), ~np.any(self.e != 0.0, axis=0)
        a_aa, e_dd = self.a[np.ix_(rows, columns)], self.e[np.ix_(~rows, ~columns)]
        if a_aa.shape[0] != a_aa.shape[1] or _condition(a_aa) > CONDITION_MAX or _condition(e_dd) > CONDITION_MAX:
            raise failures.refused("descriptor-only", "this system has no explicit state space; its descriptor form (E, A, B, C, D) holds")
        drive = np.hstack([self.a[:, ~columns], self.b])
        algebraic = -np.linalg.solve(a_aa, drive[rows]) if len(a_aa) else np.zeros((0, drive.shape[1]))
        flow = np.linalg.solve(e_dd, drive[~rows] + self.a[np.ix_(~rows, columns)] @ algebraic)
        read = np.hstack([self.c[:, ~columns], self.d]) + self.c[:, columns] @ algebraic
        n = len(e_dd)
        return StateSpace(
            np.eye(n),
            flow[:, :n],
            flow[:, n:],
            read[:, :n],
            read[:, n:],
            tuple(np.array(self.states, dtype=object)[~columns]),
            self.inputs,
            self.outputs,
            tuple(np.array(self.state_units, dtype=object)[~columns]),
            self.input_units,
            self.output_units,
            self.values,
            self.pade_order,
        )

    def to_scipy(self) -> Any:
        """A scipy.signal.StateSpace of the explicit form."""
        from scipy.signal import StateSpace as SignalStateSpace

        x = self.explicit()
        return SignalStateSpace(x.a, x.b, x.c, x.d)

    def to_control(self) -> Any:
        """A state-space object of the optional package `control`, with names.

        Raises:
            AnalysisRefused: it is not installed.
        """
        try:
            import control  # type: ignore[import-not-found,unused-ignore]
        except ImportError:
            raise failures.refused("no-control-package", "the package `control` is not installed", "install it, or take `to_scipy()`") from None
        x = self.explicit()
        return control.ss(x.a, x.b, x.c, x.d, inputs=list(x.inputs), outputs=list(x.outputs), states=list(x.states))

    def response(self, frequencies_hz: Sequence[float] | FloatArray) -> Any:
        """y/u over frequencies from these matrices, shape (m, n_y, n_u)."""
        s = 2j * np.pi * np.asarray(frequencies_hz, dtype=float)
        return np.stack([self.c @ np.linalg.solve(v * self.e - self.a, self.b) + self.d for v in s])


def hand_over(stand: Standpoint, inputs: Sequence[str], outputs: Sequence[str], *, pade_order: int = PADE_ORDER) -> StateSpace:
    """Linearise and pack.

    Args:
        inputs, outputs: by name.
        pade_order: of the rational forms that stand for delays; not used where there are none.
    """
    linear = stand.between(inputs, outputs)
    return pack(linear, pade_order)


def pack(linear: LinearSystem, pade_order: int) -> StateSpace:
    """A LinearSystem as full matrices.

    Raises:
        AnalysisRefused: with clocked control there is no continuous state space.
    """
    if linear.held:
        raise failures.refused("clocked-state-space", "a circuit with clocked control has no continuous state space", "take `response` or `modes`")
    k = len(linear.channels)
    n = linear.n
    e, a = pade_pencil(linear, pade_order) if k else (linear.e.toarray(), linear.a.toarray())
    size = len(e)
    b = np.zeros((size, len(linear.inputs)))
    b[:n] = linear.b.toarray()
    c = np.zeros((len(linear.outputs), size))
    c[:, :n] = linear.c.toarray()
    names, dimensions = list(linear.names), [u.dimension for u in linear.unknowns]
    if k:
        c[:, n : n + k] = linear.c_w[:, :k].toarray()
        _drive_late(linear, b, n, k, pade_order)
        names += [channel.name for channel in linear.channels]
        names += [f"{channel.name}.form{i}" for channel in linear.channels for i in range(pade_order)]
        dimensions += [units.NONE] * (size - n)
    e_u = linear.e_u.toarray()
    if np.any(e_u != 0.0):
        e, a, b, c, names, dimensions = _with_charges(linear, e, a, b, c, names, dimensions)
    return StateSpace(
        e,
        a,
        b,
        c,
        linear.d.toarray(),
        tuple(names),
        linear.inputs,
        linear.outputs,
        tuple(unit_text(d) for d in dimensions),
        tuple(unit_text(d) for d in linear.input_dimensions),
        tuple(unit_text(d) for d in linear.output_dimensions),
        linear.values,
        pade_order if k else 0,
    )


def _drive_late(linear: LinearSystem, b: FloatArray, n: int, k: int, order: int) -> None:
    """The inputs' direct way into the rational forms (see spectrum.pade_pencil)."""
    g_u = linear.g_u.toarray()
    for j, channel in enumerate(linear.channels):
        num, den = (p.real for p in channel.pade(order))
        scale = channel.time_s ** np.arange(order + 1)
        num, den = num / scale, den / scale
        b[n + j] += num[order] / den[order] * g_u[j]
        b[n + k + j * order + order - 1] += g_u[j]


def _with_charges(  # an input that moves a charge: E x' + E_u u' = …, made proper by the charges themselves as states
    linear: LinearSystem, e: FloatArray, a: FloatArray, b: FloatArray, c: FloatArray, names: list[str], dimensions: list[units.Dimension]
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray, list[str], list[units.Dimension]]:
    size, n = len(e), linear.n
    rows = np.flatnonzero(np.any(linear.e_u.toarray() != 0.0, axis=1))
    m = len(rows)
    wide_e, wide_a = np.zeros((size + m, size + m)), np.zeros((size + m, size + m))
    wide_e[:size, :size], wide_a[:size, :size] = e, a
    wide_b, wide_c = np.zeros((size + m, b.shape[1])), np.zeros((c.shape[0], size + m))
    wide_b[:size], wide_c[:, :size] = b, c
    for j, row in enumerate(rows):
        # q_j' = A x + B u of that row, and 0 = E x + E_u u - q_j.
        wide_e[row] = 0.0
        wide_e[row, size + j] = 1.0
        wide_a[size + j, :size] = e[row]
        wide_a[size + j, size + j] = -1.0
        wide_b[size + j] = linear.e_u.toarray()[row]
    charges = [f"{linear.names[row]}.charge" for row in rows if row < n]
    return wide_e, wide_a, wide_b, wide_c, [*names, *charges], [*dimensions, *[units.NONE] * m]
