"""Systems with clocks: exact between instants by matrix exponentials, over the common period of all clocks by lifting.

State s = (states of the circuit, clocked values). The map over one common period gives modes as ln(z)/T; a sine put in gives a steady
pattern whose part at its own frequency is the response, holds included. Source: Åström & Wittenmark 1997, Computer-Controlled Systems, 3rd
ed., ch. 2 and 7; lifting: Chen & Francis 1995, Optimal Sampled-Data Control Systems, ch. 8. (Both recalled from memory.)
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property

import numpy as np

from polewise.analysis import failures
from polewise.analysis.linearise import LinearSystem
from polewise.analysis.loop import Loop
from polewise.analysis.margins import margins_of
from polewise.analysis.nyquist import NyquistCount, winding
from polewise.analysis.point import ComplexArray
from polewise.analysis.spectrum import CONDITION_MAX, Spectrum, _condition
from polewise.kernels.program import FloatArray

RATIO_DENOMINATOR_MAX = 64  # clocks whose periods are in a ratio of whole numbers up to this have a common period
RATIO_RELATIVE = 1e-9
INSTANTS_MAX = 4096  # within one common period
VANISHED = 1e-10  # |z| below: a value that is forgotten within a period, no mode


@dataclass(frozen=True, slots=True)
class Instant:
    """Clocks that fire together: targets of each, in order of rank."""

    time_s: float
    updates: tuple[tuple[int, ...], ...]


class Lifted:
    """A LinearSystem with clocks, reduced to its states.

    x_d' = a x_d + b_w w + b_u u; all unknowns x = to_x x_d + x_w w + x_u u; w_t becomes its row of z = g x + g_w w + g_u u at its instants.
    """

    def __init__(self, linear: LinearSystem) -> None:
        refuse(linear)
        self.linear = linear
        e, a = linear.e.toarray(), linear.a.toarray()
        rows, columns = ~np.any(e != 0.0, axis=1), ~np.any(e != 0.0, axis=0)
        a_aa, e_dd = a[np.ix_(rows, columns)], e[np.ix_(~rows, ~columns)]
        if a_aa.shape[0] != a_aa.shape[1] or _condition(a_aa) > CONDITION_MAX or _condition(e_dd) > CONDITION_MAX:
            raise failures.refused("sampled-form", "the states of this circuit can't be told from its other unknowns, which clocked control needs")
        a_w, b = linear.a_w.toarray(), linear.b.toarray()
        n, n_w, n_u = linear.n, a_w.shape[1], b.shape[1]
        self.n_d = len(e_dd)
        drive = np.hstack([a[:, ~columns], a_w, b])
        algebraic = -np.linalg.solve(a_aa, drive[rows]) if len(a_aa) else np.zeros((0, drive.shape[1]))
        flow = np.linalg.solve(e_dd, drive[~rows] + a[np.ix_(~rows, columns)] @ algebraic) if self.n_d else np.zeros((0, drive.shape[1]))
        whole = np.zeros((n, drive.shape[1]))
        whole[~columns, : self.n_d] = np.eye(self.n_d)
        whole[columns] = algebraic
        cut = [self.n_d, self.n_d + n_w]
        self.a, self.b_w, self.b_u = np.split(flow, cut, axis=1)
        self.to_x, self.x_w, self.x_u = np.split(whole, cut, axis=1)
        self.state_names = tuple(np.array(linear.names, dtype=object)[~columns])
        self.n_w, self.n_u = n_w, n_u
        self.period_s, self.instants = common_period(linear)
        self._flows: dict[float, tuple[FloatArray, FloatArray]] = {}

    @property
    def size(self) -> int:
        """Of s."""
        return int(self.n_d + self.n_w)

    @cached_property
    def z_rows(self) -> FloatArray:
        """Shape (n_w, n_d + n_w): new clocked values from states and the values that the circuit saw just before the instant."""
        g = self.linear.g.toarray()
        return np.hstack([g @ self.to_x, g @ self.x_w])

    def flow(self, step_s: float) -> tuple[FloatArray, FloatArray]:
        """x_d after a time without instants: phi x_d + gamma w."""
        from scipy.linalg import expm

        key = round(step_s / self.period_s, 12)
        known = self._flows.get(key)
        if known is None:
            block = np.zeros((self.size, self.size))
            block[: self.n_d, : self.n_d], block[: self.n_d, self.n_d :] = self.a * step_s, self.b_w * step_s
            full = expm(block)
            known = full[: self.n_d, : self.n_d], full[: self.n_d, self.n_d :]
            self._flows[key] = known
        return known

    def at_instant(self, instant: Instant, opened: int | None = None) -> tuple[FloatArray, FloatArray]:
        """Map of s over an instant, and what its update of the opened value would have been (a row over s; zero where it is not updated).

        opened: a clocked value that is not renewed here but from outside: its row of the map is zero.
        """
        n_d, size = self.n_d, self.size
        g_w = self.linear.g_w.toarray()
        rows = np.eye(size)
        told = np.zeros(size)
        before = self.z_rows
        for targets in instant.updates:
            current = before + g_w @ rows[n_d:]  # values renewed at this instant by lower ranks are read new
            for t in targets:
                if t == opened:
                    told = current[t].copy()
            for t in targets:
                rows[n_d + t] = 0.0 if t == opened else current[t]
        return rows, told

    def step(self, k: int) -> FloatArray:
        """Map of s from just after instant k to just before the next one."""
        begin = self.instants[k].time_s
        end = self.instants[k + 1].time_s if k + 1 < len(self.instants) else self.instants[0].time_s + self.period_s
        phi, gamma = self.flow(end - begin)
        full = np.eye(self.size)
        full[: self.n_d, : self.n_d], full[: self.n_d, self.n_d :] = phi, gamma
        return full

    def monodromy(self) -> FloatArray:
        """Map of s over the common period, from just before the first instant."""
        total = np.eye(self.size)
        for k, instant in enumerate(self.instants):
            total = self.step(k) @ self.at_instant(instant)[0] @ total
        return total


def refuse(linear: LinearSystem) -> None:
    """Say why a system with clocks can't be treated exactly.

    Raises:
        AnalysisRefused: delays beside clocks, or a charge that jumps with a clocked value.
    """
    if linear.channels:
        names = ", ".join(f"`{c.name}`" for c in linear.channels[:3])
        hint = "write the delay with latches (`set drive = next`), or take `sampled at` and `every` out of this question"
        raise failures.refused("delay-beside-clock", f"clocked control together with {names} has no finite exact form", hint)
    if linear.e_w.nnz or linear.e_u.nnz:
        raise failures.refused("clocked-charge", "a charge or flux depends on a clocked value or on the input, so that it jumps at instants")


def common_period(linear: LinearSystem) -> tuple[float, tuple[Instant, ...]]:
    """The shortest time after which all clocks stand alike, and the instants in it.

    Raises:
        AnalysisRefused: clocks without a common period, or with too many instants in it.
    """
    base = min(h.period_s for h in linear.held)
    ratios = []
    for held in linear.held:
        ratio = Fraction(held.period_s / base).limit_denominator(RATIO_DENOMINATOR_MAX)
        if abs(float(ratio) * base - held.period_s) > RATIO_RELATIVE * held.period_s:
            headline = f"clocks of {1 / held.period_s:.6g} Hz and {1 / base:.6g} Hz have no common period that could be followed"
            raise failures.refused("clocks-without-common-period", headline, "choose rates in a ratio of small whole numbers")
        ratios.append(ratio)
    common = Fraction(math.lcm(*(r.numerator for r in ratios)), math.gcd(*(r.denominator for r in ratios)))
    period_s = float(common) * base
    counts = [round(period_s / h.period_s) for h in linear.held]
    if sum(counts) > INSTANTS_MAX:
        raise failures.refused("clocks-without-common-period", f"the common period of the clocks holds {sum(counts)} instants, too many to follow")
    fired: dict[float, list[tuple[int, tuple[int, ...]]]] = {}
    for held, count in zip(linear.held, counts, strict=True):
        for k in range(count):
            t = math.fmod(held.offset_s + k * held.period_s, period_s)
            key = next((s for s in fired if abs(s - t) < 1e-12), t if period_s - t > 1e-12 else 0.0)
            fired.setdefault(key, []).append((held.rank, held.targets))
    return period_s, tuple(Instant(t, tuple(targets for _, targets in sorted(fired[t]))) for t in sorted(fired))


def sampled_spectrum(linear: LinearSystem) -> tuple[Spectrum, Lifted, FloatArray]:
    """Modes s = ln(z)/T over the common period, vectors over (states, clocked values), and the map itself.

    Values that are forgotten within a period (z = 0) are no modes and left out.
    """
    from scipy.linalg import eig

    lifted = Lifted(linear)
    matrix = lifted.monodromy()
    z, left_h, right = eig(matrix, left=True, right=True)
    lasting = np.abs(z) > VANISHED
    z, right, left = z[lasting], right[:, lasting], left_h[:, lasting].conj()
    scale = np.sum(left * right, axis=0)
    values = np.log(z.astype(complex)) / lifted.period_s
    return Spectrum(values, right, left / np.where(scale == 0.0, 1.0, scale), math.pi / lifted.period_s), lifted, matrix


def sampled_response(linear: LinearSystem, s: ComplexArray) -> ComplexArray:
    """The part of y at the frequency of u, over u; shape (m, n_y, n_u). s must be imaginary."""
    lifted = Lifted(linear)
    g, g_u = linear.g.toarray(), linear.g_u.toarray()
    c, c_w, d = linear.c.toarray(), linear.c_w.toarray(), linear.d.toarray()
    events = [lifted.at_instant(i)[0] for i in lifted.instants]
    steps = [lifted.step(k) for k in range(len(lifted.instants))]
    matrix = np.eye(lifted.size, dtype=complex)
    for event, step in zip(events, steps, strict=True):
        matrix = step @ event @ matrix
    result = np.empty((len(s), len(linear.outputs), len(linear.inputs)), dtype=complex)
    eye_d = np.eye(lifted.n_d)
    for m, value in enumerate(s):
        free = np.linalg.solve(value * eye_d - lifted.a, lifted.b_u) if lifted.n_d else np.zeros((0, lifted.n_u), dtype=complex)
        x_u = lifted.to_x @ free + lifted.x_u  # what u does by itself, clocked values standing still
        asked = g @ x_u + g_u
        begin = lifted.instants[0].time_s
        offset = np.zeros((lifted.size, lifted.n_u), dtype=complex)
        drives: list[ComplexArray] = []
        for k, instant in enumerate(lifted.instants):
            drive = _driven(lifted, instant, asked * np.exp(value * instant.time_s))
            drives.append(drive)
            offset = steps[k] @ (events[k] @ offset + drive)
        turn = np.exp(value * lifted.period_s)
        state: ComplexArray = np.linalg.solve(turn * np.eye(lifted.size) - matrix, offset)
        w_at = np.zeros((lifted.n_w, lifted.n_u), dtype=complex)
        for k, instant in enumerate(lifted.instants):
            state = events[k] @ state + drives[k]
            end = lifted.instants[k + 1].time_s if k + 1 < len(lifted.instants) else begin + lifted.period_s
            w_at += state[lifted.n_d :] * _window(value, instant.time_s, end) / lifted.period_s
            state = steps[k] @ state
        x_d = np.linalg.solve(value * eye_d - lifted.a, lifted.b_w @ w_at + lifted.b_u) if lifted.n_d else np.zeros((0, lifted.n_u), dtype=complex)
        x = lifted.to_x @ x_d + lifted.x_w @ w_at + lifted.x_u
        result[m] = c @ x + c_w @ w_at + d
    return result


def _driven(lifted: Lifted, instant: Instant, asked: ComplexArray) -> ComplexArray:
    """What u adds to s at an instant: the updates' own reading of it, and of values renewed at the same instant by lower ranks."""
    g_w = lifted.linear.g_w.toarray()
    added = np.zeros((lifted.size, lifted.n_u), dtype=complex)
    for targets in instant.updates:
        current = asked + g_w @ added[lifted.n_d :]
        for t in targets:
            added[lifted.n_d + t] = current[t]
    return added


def _window(s: complex, begin: float, end: float) -> complex:
    """Integral of e^(-s t) from begin to end."""
    if abs(s) * (end - begin) < 1e-8:
        return complex((end - begin) * np.exp(-s * 0.5 * (begin + end)))
    return complex((np.exp(-s * begin) - np.exp(-s * end)) / s)


# ---------------------------------------------------------------- loops


def sampled_loop(linear: LinearSystem, k: int, within: bool, frequencies_hz: FloatArray) -> Loop:
    """The loop gain at input k, which adds to output k.

    At a clocked value of a single clock: exact in z. Anywhere else: the part of the answer at the frequency of the sine put in, as an
    analyser measures it; the verdict then rests on the closed loop's modes alone.
    """
    name = linear.inputs[k]
    spectrum, lifted, _ = sampled_spectrum(linear)
    closed = int(np.count_nonzero(spectrum.values.real > 1e-9 / lifted.period_s))
    if name in linear.held_names and len(lifted.instants) == 1:
        return _clocked_loop(lifted, linear.held_names.index(name), name, frequencies_hz, closed)

    def gain(f: FloatArray) -> ComplexArray:
        whole = sampled_response(linear, 2j * np.pi * f)[:, k, k]
        before = whole - 1.0 if within else whole
        value: ComplexArray = -before / (before + 1.0)
        return value

    counts = NyquistCount(None, closed, None)
    return Loop(name, frequencies_hz, gain(frequencies_hz), margins_of(gain, frequencies_hz, spectrum.values), counts, linear, gain)


def _clocked_loop(lifted: Lifted, target: int, name: str, frequencies_hz: FloatArray, closed: int) -> Loop:
    """T(z) with the clocked value renewed from outside."""
    instant = lifted.instants[0]
    event, told = lifted.at_instant(instant, opened=target)
    step = lifted.step(0)
    # Values of higher rank that read the opened one at the same instant see what comes from outside.
    enters = np.zeros(lifted.size)
    enters[lifted.n_d + target] = 1.0
    g_w = lifted.linear.g_w.toarray()
    seen = False
    for targets in instant.updates:
        if seen:
            current = g_w @ enters[lifted.n_d :]
            for t in targets:
                enters[lifted.n_d + t] = current[t]
        seen = seen or target in targets
    matrix, drive = step @ event, step @ enters
    poles = np.linalg.eigvals(matrix)

    def gain(f: FloatArray) -> ComplexArray:
        z: ComplexArray = np.exp(np.multiply(f, 2j * np.pi * lifted.period_s))
        left = z[:, None, None] * np.eye(lifted.size) - matrix
        states = np.linalg.solve(left, np.broadcast_to(drive, (len(f), lifted.size))[..., None].astype(complex))[..., 0]
        value: ComplexArray = np.negative(states @ told)
        return value

    half = 0.5 / lifted.period_s
    inside = frequencies_hz[frequencies_hz <= half]
    if len(inside) == 0:
        raise failures.refused("above-half-the-clock", f"a loop with a clock of {2 * half:.6g} Hz says nothing above {half:.6g} Hz")
    lasting = poles[np.abs(poles) > VANISHED]
    slow = np.log(lasting.astype(complex)) / lifted.period_s
    at_one = int(np.count_nonzero(np.abs(poles - 1.0) < 1e-9))
    on_circle = int(np.count_nonzero(np.abs(np.abs(poles) - 1.0) < 1e-9)) - at_one
    turns = None if on_circle else winding(lambda f: 1.0 + gain(f), slow[np.abs(slow) > 1e-6 / lifted.period_s], at_one, end_hz=half)
    unstable = int(np.count_nonzero(np.abs(poles) > 1.0 + 1e-9))
    counts = NyquistCount(unstable, closed, turns)
    return Loop(name, inside, gain(inside), margins_of(gain, inside, slow), counts, lifted.linear, gain)
