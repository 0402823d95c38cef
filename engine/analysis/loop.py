"""Loop gain at a signal, opened without touching the operating point, with margins and the Nyquist verdict."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from polewise.analysis.linearise import LinearSystem
from polewise.analysis.margins import Gain, Margins, margins_of
from polewise.analysis.nyquist import NyquistCount, count_encirclements
from polewise.analysis.point import ComplexArray
from polewise.analysis.response import transfer
from polewise.analysis.spectrum import spectrum
from polewise.analysis.standpoint import Standpoint
from polewise.equations.system import Unknown
from polewise.kernels.program import FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class Loop:
    """A loop opened at one signal, all others closed.

    Args:
        signal: where.
        frequencies: shape (m,), Hz. gain: shape (m,), loop gain T, positive real part means negative feedback.
        margins: every crossover with its phase and delay margin, gain margins, modulus margin.
        nyquist: unstable poles of the open loop and of the closed one, and encirclements counted on the curve.
    """

    signal: str
    frequencies: FloatArray
    gain: ComplexArray
    margins: Margins
    nyquist: NyquistCount
    linear: LinearSystem
    _gain: Gain

    def __array__(self, dtype: object = None, copy: object = None) -> ComplexArray:
        return self.gain

    @property
    def stable(self) -> bool | None:
        """Whether the closed loop is stable; None where nothing decides it (a system too large to find all its modes)."""
        return self.nyquist.stable

    def at(self, frequencies_hz: Sequence[float] | FloatArray) -> ComplexArray:
        """The loop gain at further frequencies."""
        return self._gain(np.asarray(frequencies_hz, dtype=float))


def open_loops(stand: Standpoint, signals: Sequence[str], frequencies_hz: Sequence[float] | FloatArray) -> tuple[Loop, ...]:
    """Loop gains at several signals, each with the others closed.

    Args:
        signals: names of signals, states, or duties of poles.
        frequencies_hz: shape (m,), increasing, Hz.
    """
    probing = stand.probing()
    names = [s.strip() for s in signals]
    for name in names:
        probing.add(name)
    closed = stand.linear(probing, names, [stand.quantity(n) for n in names])
    frequencies = np.asarray(frequencies_hz, dtype=float)
    if closed.held:
        from polewise.analysis.sampled import sampled_loop

        return tuple(sampled_loop(closed, k, probing.probes[name].within, frequencies) for k, name in enumerate(names))
    unstable = spectrum(closed).values if closed.n <= DENSE_MODES_LIMIT else None
    return tuple(_loop(opened(closed, k, k, within=probing.probes[n].within), n, frequencies, unstable) for k, n in enumerate(names))


DENSE_MODES_LIMIT = 800  # unknowns up to which all modes are found to count the unstable ones


def _loop(linear: LinearSystem, signal: str, frequencies: FloatArray, closed: ComplexArray | None) -> Loop:
    def gain(f: FloatArray) -> ComplexArray:
        return -transfer(linear, 2j * np.pi * f)[:, 0, 0]

    poles = spectrum(linear).values if linear.n <= DENSE_MODES_LIMIT else None
    resonances = np.zeros(0, dtype=complex) if poles is None else poles
    return Loop(
        signal,
        frequencies,
        gain(frequencies),
        margins_of(gain, frequencies, resonances),
        count_encirclements(gain, poles, closed),
        linear,
        gain,
    )


def opened(linear: LinearSystem, u: int, y: int, *, within: bool = True) -> LinearSystem:
    """The system with one loop cut: input a is what the signal's readers see, output b what its law gives.

    The closed system has b + u read in place of b. Then u = a - b, and b becomes an algebraic unknown:
    0 = c x + c_w w + d_b (a - b) - b, where d_b is the direct part of b.

    Args:
        u, y: index of the signal's input and output.
        within: whether the output reads the signal with u in it.
    """
    from scipy.sparse import bmat, csc_matrix, hstack, vstack

    one = csc_matrix([[1.0]])
    zero_row = csc_matrix((1, linear.n))
    direct = linear.d[y : y + 1, u : u + 1] - (one if within else 0.0 * one)
    b, e_u, g_u = linear.b[:, u : u + 1], linear.e_u[:, u : u + 1], linear.g_u[:, u : u + 1]
    c, c_w = linear.c[y : y + 1], linear.c_w[y : y + 1]
    nothing = csc_matrix((1, 1))
    output = csc_matrix(([1.0], ([0], [linear.n])), shape=(1, linear.n + 1))
    return replace(
        linear,
        unknowns=(*linear.unknowns, _cut_unknown(linear.inputs[u], linear.unknowns)),
        inputs=(linear.inputs[u],),
        input_dimensions=(linear.input_dimensions[u],),
        outputs=(linear.outputs[y],),
        output_dimensions=(linear.output_dimensions[y],),
        e=bmat([[linear.e, -e_u], [zero_row, nothing]], format="csc"),
        e_w=vstack([linear.e_w, csc_matrix((1, linear.e_w.shape[1]))], format="csc"),
        e_u=vstack([e_u, nothing], format="csc"),
        a=bmat([[linear.a, -b], [c, -direct - one]], format="csc"),
        a_w=vstack([linear.a_w, c_w], format="csc"),
        b=vstack([b, direct], format="csc"),
        c=output,
        c_w=csc_matrix((1, linear.c_w.shape[1])),
        d=csc_matrix((1, 1)),
        g=hstack([linear.g, -g_u], format="csc"),
        g_u=g_u,
        values=(linear.values[y],),
    )


def _cut_unknown(name: str, others: Sequence[Unknown]) -> Unknown:
    """A stand-in for the cut signal among the unknowns."""
    if others:
        return replace(others[0], name=f"{name} before the cut", charge=None, owner="")
    from polewise.grammar.source import no_span
    from polewise.grammar.units import NONE

    return Unknown(f"{name} before the cut", -1, None, -1, -1, 0.0, False, 1.0, NONE, False, False, None, "", no_span())
