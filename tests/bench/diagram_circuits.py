"""Benchmark circuits of the work-precision diagram: netlist, and the same equations as a compiled right-hand side for scipy."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import ten_converters as hand
from compiled import compiled_rates
from numba import njit
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Stretch:
    """One smooth stretch: rates f(t, y, out), from `times[0]` to `times[-1]`, output at `times`; kept: states (n, k) → quantities."""

    rates: Callable[..., Any]
    times: FloatArray
    kept: Callable[[FloatArray], FloatArray]


@dataclass(frozen=True, slots=True)
class DiagramCircuit:
    """One circuit.

    Args:
        text, study: the netlist. names: kept quantities; kinds: which of them share one scale.
        start: shape (n,). scale: shape (n,), size of each state. stretches: in order; quantities may jump between them.
        explicit: largest step (s) of the explicit reference, None: an implicit reference.
    """

    title: str
    text: str
    study: str
    names: tuple[str, ...]
    kinds: tuple[slice, ...]
    start: FloatArray
    scale: FloatArray
    stretches: tuple[Stretch, ...]
    explicit: float | None

    @property
    def times(self) -> FloatArray:
        """Compared times: all outputs but the first of each stretch and, where another follows, its last."""
        last = len(self.stretches) - 1
        return np.concatenate([s.times[1:] if k == last else s.times[1:-1] for k, s in enumerate(self.stretches)])

    def joined(self, parts: list[FloatArray]) -> FloatArray:
        """Kept quantities at the compared times from states at each stretch's times."""
        last = len(parts) - 1
        cut = [p[:, 1:] if k == last else p[:, 1:-1] for k, p in enumerate(parts)]
        return np.hstack([s.kept(p) for s, p in zip(self.stretches, cut)])

    def error(self, got: FloatArray, reference: FloatArray) -> float:
        """Largest deviation over the largest value of each kind."""
        return float(max(np.max(np.abs(got[k] - reference[k])) / np.max(np.abs(reference[k])) for k in self.kinds))


# ------------------------------------------------------------------------------------------------ ten converters


def ten_converters() -> DiagramCircuit:
    """The load step of the main case."""
    case = hand.load_step()
    before, after = hand.sample_times()
    stretches = tuple(Stretch(compiled_rates(s), times, lambda y, s=s: hand.kept(s, y)) for s, times in ((case.before, before), (case.after, after)))
    kinds = (slice(0, 1), slice(1, 11), slice(11, 21))
    names = tuple(hand.kept_names())
    return DiagramCircuit("ten converters", hand.netlist(), "load_step", names, kinds, case.start, case.scale, stretches, 10e-6)


# ------------------------------------------------------------------------------------------------ surge on a line

_SECTIONS = 30


def surge_line() -> DiagramCircuit:
    """A surge current runs down a cable of 30 sections into an arrester i = 1 A (v/900 V)^25: smooth, stiff where the arrester conducts."""
    sections = "\n".join(f"s{k}: n{k - 1} --[r: 20 mohm]--[l: 4 uH]-- n{k}\nc{k}: n{k} --[20 nF]-- gnd" for k in range(1, _SECTIONS + 1))
    text = f"""title "Surge on a cable with an arrester at its far end"
reference gnd
head:  n0 --[20 nF]-- gnd
match: n0 --[14 ohm]-- gnd
surge: gnd --[200 A * (exp(-time / 40 us) - exp(-time / 2 us))]-- n0
{sections}
guard: n{_SECTIONS} --[i = 1 A * (v / 900 V)^25]-- gnd
study strike {{
    start cold
    run for 100 us
    keep n1.v, n15.v, n{_SECTIONS}.v, guard.i
}}
"""
    m = _SECTIONS

    @njit(error_model="numpy")
    def f(t, y, out):
        surge = 200.0 * (math.exp(-t / 40e-6) - math.exp(-t / 2e-6))
        out[0] = (surge - y[0] / 14.0 - y[m + 1]) / 20e-9
        for k in range(1, m + 1):
            i = y[m + k]
            far = y[m + k + 1] if k < m else (y[m] / 900.0) ** 25
            out[k] = (i - far) / 20e-9
            out[m + k] = (y[k - 1] - y[k] - 20e-3 * i) / 4e-6

    def kept(y: FloatArray) -> FloatArray:
        return np.vstack([y[1], y[15], y[m], (y[m] / 900.0) ** 25])

    scale = np.concatenate([np.full(m + 1, 900.0), np.full(m, 50.0)])
    names, kinds = ("n1.v", "n15.v", f"n{m}.v", "guard.i"), (slice(0, 3), slice(3, 4))
    stretch = Stretch(f, np.linspace(0.0, 100e-6, 201), kept)
    return DiagramCircuit("surge on a cable", text, "strike", names, kinds, np.zeros(2 * m + 1), scale, (stretch,), None)


# ------------------------------------------------------------------------------------------------ ring modulator


def ring_modulator() -> DiagramCircuit:
    """IVP-1 of the open Test Set for Initial Value Problem Solvers (Bari, release 2.3, 2006), its first twentieth (50 us): as states."""
    text = """title "Ring modulator, first twentieth of its time"
reference gnd
tie: top --[1 V]-- gnd
load: top --[1 ohm]-- gnd
signal u_1 = 0.5 * sin(2000*pi * 1 Hz * time)
signal u_2 = 2 * sin(20000*pi * 1 Hz * time)
function q(u) = 40.67286402 * 0.000000001 * (exp(17.7493332 * u) - 1)
signal q_1 = q(y3 - y5 - y7 - u_2)
signal q_2 = q(-y4 + y6 - y7 - u_2)
signal q_3 = q(y4 + y5 + y7 + u_2)
signal q_4 = q(-y3 - y6 + y7 + u_2)
given c  = 0.000000016
given cs = 0.000000000002
given cp = 0.00000001
d/dt y1 = 1 Hz * (y8 - y10/2 + y11/2 + y14 - y1/25000) / c   initially 0
d/dt y2 = 1 Hz * (y9 - y12/2 + y13/2 + y15 - y2/25000) / c   initially 0
d/dt y3 = 1 Hz * (y10 - q_1 + q_4) / cs    initially 0
d/dt y4 = 1 Hz * (-y11 + q_2 - q_3) / cs   initially 0
d/dt y5 = 1 Hz * (y12 + q_1 - q_3) / cs    initially 0
d/dt y6 = 1 Hz * (-y13 - q_2 + q_4) / cs   initially 0
d/dt y7 = 1 Hz * (-y7/50 + q_1 + q_2 - q_3 - q_4) / cp       initially 0
d/dt y8 = 1 Hz * -y1 / 4.45    initially 0
d/dt y9 = 1 Hz * -y2 / 4.45    initially 0
d/dt y10 = 1 Hz * (y1/2 - y3 - 17.3*y10) / 0.0005            initially 0
d/dt y11 = 1 Hz * (-y1/2 + y4 - 17.3*y11) / 0.0005           initially 0
d/dt y12 = 1 Hz * (y2/2 - y5 - 17.3*y12) / 0.0005            initially 0
d/dt y13 = 1 Hz * (-y2/2 + y6 - 17.3*y13) / 0.0005           initially 0
d/dt y14 = 1 Hz * (-y1 + u_1 - 86.3*y14) / 0.002             initially 0
d/dt y15 = 1 Hz * (-y2 - 636.3*y15) / 0.002                  initially 0
study modulate {
    start cold
    run for 50 us
    keep y1, y2, y3, y7, y10, y14
}
"""

    @njit(error_model="numpy")
    def f(t, y, out):
        u_1, u_2 = 0.5 * math.sin(2000 * math.pi * t), 2.0 * math.sin(20000 * math.pi * t)
        g, d = 40.67286402e-9, 17.7493332
        q_1 = g * (math.exp(d * (y[2] - y[4] - y[6] - u_2)) - 1.0)
        q_2 = g * (math.exp(d * (-y[3] + y[5] - y[6] - u_2)) - 1.0)
        q_3 = g * (math.exp(d * (y[3] + y[4] + y[6] + u_2)) - 1.0)
        q_4 = g * (math.exp(d * (-y[2] - y[5] + y[6] + u_2)) - 1.0)
        c, cs, cp = 1.6e-8, 2e-12, 1e-8
        out[0] = (y[7] - y[9] / 2 + y[10] / 2 + y[13] - y[0] / 25e3) / c
        out[1] = (y[8] - y[11] / 2 + y[12] / 2 + y[14] - y[1] / 25e3) / c
        out[2] = (y[9] - q_1 + q_4) / cs
        out[3] = (-y[10] + q_2 - q_3) / cs
        out[4] = (y[11] + q_1 - q_3) / cs
        out[5] = (-y[12] - q_2 + q_4) / cs
        out[6] = (-y[6] / 50.0 + q_1 + q_2 - q_3 - q_4) / cp
        out[7], out[8] = -y[0] / 4.45, -y[1] / 4.45
        out[9] = (y[0] / 2 - y[2] - 17.3 * y[9]) / 5e-4
        out[10] = (-y[0] / 2 + y[3] - 17.3 * y[10]) / 5e-4
        out[11] = (y[1] / 2 - y[4] - 17.3 * y[11]) / 5e-4
        out[12] = (-y[1] / 2 + y[5] - 17.3 * y[12]) / 5e-4
        out[13] = (-y[0] + u_1 - 86.3 * y[13]) / 2e-3
        out[14] = (-y[1] - 636.3 * y[14]) / 2e-3

    index = [0, 1, 2, 6, 9, 13]
    scale = np.array([0.3, 0.3, 0.3, 0.3, 0.3, 0.3, 0.3, 1e-6, 1e-6, 1e-3, 1e-3, 1e-3, 1e-3, 1e-3, 1e-3])
    names, kinds = ("y1", "y2", "y3", "y7", "y10", "y14"), (slice(0, 4), slice(4, 6))
    stretch = Stretch(f, np.linspace(0.0, 50e-6, 101), lambda y: y[index])
    return DiagramCircuit("ring modulator", text, "modulate", names, kinds, np.zeros(15), scale, (stretch,), None)


# ------------------------------------------------------------------------------------------------ relaxation oscillator


def relaxation_oscillator() -> DiagramCircuit:
    """IVP-2 of the same test set: Van der Pol, mu = 1000, scaled to a second a unit of time; long rests, sudden swings."""
    text = """title "Relaxation oscillator"
reference gnd
tie: top --[1 V]-- gnd
load: top --[1 ohm]-- gnd
d/dt y1 = 1 Hz * y2  initially 2
d/dt y2 = 1 Hz * (1000 * (1 - y1^2) * y2 - y1)  initially 0
study swing {
    start cold
    run for 2000 s
    keep y1
}
"""

    @njit(error_model="numpy")
    def f(t, y, out):
        out[0] = y[1]
        out[1] = 1000.0 * (1.0 - y[0] * y[0]) * y[1] - y[0]

    stretch = Stretch(
        f, np.concatenate([np.linspace(0.0, 800.0, 81), np.linspace(820.0, 1600.0, 40), np.linspace(1620.0, 2000.0, 20)]), lambda y: y[:1]
    )
    return DiagramCircuit("relaxation oscillator", text, "swing", ("y1",), (slice(0, 1),), np.array([2.0, 0.0]), np.ones(2), (stretch,), None)


ALL: tuple[Callable[[], DiagramCircuit], ...] = (ten_converters, surge_line, ring_modulator, relaxation_oscillator)
