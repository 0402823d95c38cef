"""Gains for a wanted crossover and phase margin: the k-factor method, then an exact solution on the real loop, at one or several points.

Source: Venable 1983, The k factor: a new mathematical tool for stability analysis and synthesis, Proc. Powercon 10. The exact polish asks
|T| = 1 and the margin at the wanted frequency of the full model; with several points it makes the smallest margin as large as it can be.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from polewise.analysis import failures
from polewise.analysis.linearise import LinearSystem
from polewise.analysis.loop import opened
from polewise.analysis.margins import Margins, margins_of
from polewise.analysis.nyquist import unstable_count
from polewise.analysis.point import ComplexArray
from polewise.analysis.response import transfer
from polewise.analysis.spectrum import spectrum
from polewise.analysis.standpoint import Standpoint
from polewise.grammar import syntax
from polewise.grammar.parser import parse
from polewise.grammar.units import TIME, Dimension, unit_text
from polewise.kernels.program import FloatArray

Shape = Literal["pi", "lead", "one zero", "two zeros"]
SHAPES: tuple[Shape, ...] = ("pi", "lead", "one zero", "two zeros")
BOOST_MAX_DEG = {"pi": 90.0, "lead": 90.0, "one zero": 90.0, "two zeros": 180.0}
POLISH_LIMIT = 60
UNSTABLE_SHORTFALL = 1e3  # degrees; beyond any margin
RESTING_RELATIVE = 1e-6  # modes this much slower than the crossover stand for integrators left idle


@dataclass(frozen=True, slots=True, eq=False)
class Tuned:
    """A compensator, reached figures and text to paste.

    Args:
        shape: "pi": kp + ki/s. "lead": k (1 + s/wz)/(1 + s/wp). "one zero": k (1 + s/wz)/s/(1 + s/wp). "two zeros": k ((1 + s/wz)/(1 + s/wp))^2/s.
        values: name → SI value: kp, ki; or k, wz, wp (rad/s).
        text: the line to paste.
        margins: one per operating point, on the full model with this compensator in place.
        stable: one per operating point: whether the closed loop is.
        notes: what a reader should know.
    """

    shape: Shape
    values: dict[str, float]
    text: str
    margins: tuple[Margins, ...]
    stable: tuple[bool, ...]
    notes: tuple[str, ...]

    @property
    def crossover_hz(self) -> float:
        """At the first point."""
        return self.margins[0].crossover_hz

    @property
    def phase_margin_deg(self) -> float:
        """The smallest over all points."""
        return min((m.phase_margin_deg for m in self.margins), key=abs)


def k_factor(boost_deg: float, pairs: int) -> float:
    """Ratio of pole to zero frequency that gives a phase boost.

    One pair: k = tan(boost/2 + 45 deg), zero at f/k, pole at f k. Two pairs: k = tan(boost/4 + 45 deg)^2, zeros at f/sqrt(k), poles at f sqrt(k).
    """
    if pairs == 1:
        return math.tan(math.radians(boost_deg / 2.0 + 45.0))
    return math.tan(math.radians(boost_deg / 4.0 + 45.0)) ** 2


@dataclass(frozen=True, slots=True, eq=False)
class _Plant:
    """From the compensator's output to its input, sign such that T = plant * compensator; the loop is open at the output."""

    linear: LinearSystem

    def at(self, f: FloatArray) -> ComplexArray:
        value: ComplexArray = transfer(self.linear, 2j * np.pi * f)[:, 0, 0]
        return -value


def tune(
    stands: Sequence[Standpoint], signal: str, *, error: str | None = None, crossover_hz: float, phase_margin_deg: float, shape: Shape = "pi"
) -> Tuned:
    """Find the gains.

    Args:
        stands: operating points, the first one sets the crossover; with several, the smallest margin is made as large as it can be.
        signal: the compensator's output: a `pi_control`'s name, or the signal that `filtered by` gives.
        error: what the compensator is fed with; None: the block's own `error`.
        crossover_hz, phase_margin_deg: wanted.
        shape: see Tuned.
    Raises:
        AnalysisRefused: a phase boost that the shape can't give, or clocked control.
    """
    if crossover_hz <= 0.0 or not 0.0 < phase_margin_deg < 180.0:
        raise failures.refused("tune-target", "the crossover must be positive and the phase margin between 0 and 180 degrees")
    fed = error or f"{signal}.error"
    plants = [_plant(stand, signal, fed) for stand in stands]
    target = complex(plants[0].at(np.array([crossover_hz]))[0])
    values = _exact(shape, target, crossover_hz, phase_margin_deg)
    notes: list[str] = []
    if len(plants) > 1:
        values = _polish(shape, plants, values, crossover_hz, phase_margin_deg)
        notes.append(
            f"one compensator for {len(plants)} operating points: the smallest margin is as large as this shape allows near the wanted crossover"
        )
    law = compensator(shape, values)
    margins, stable = [], []
    for plant in plants:
        found, ok = _judge(plant, shape, values, law, crossover_hz)
        margins.append(found)
        stable.append(ok)
    quantities = stands[0].quantity(signal).dimension, stands[0].quantity(fed).dimension
    if shape == "pi":
        notes.append("keep the block's other settings (low, high)")
    return Tuned(
        shape,
        values,
        _own_text(stands[0], signal, values, *quantities) or _text(shape, signal, _spelling(stands[0], fed), values, *quantities),
        tuple(margins),
        tuple(stable),
        tuple(notes),
    )


def _own_text(stand: Standpoint, signal: str, values: dict[str, float], out: Dimension, fed: Dimension) -> str | None:
    """The statement of a `pi_control` that stands in the netlist, with its gains replaced; None where the signal is no such block."""
    known = stand.circuit.signals.get(signal)
    if known is None or not {"kp", "ki"} <= values.keys():
        return None
    placement = _placement(parse(known.span.source)[0].statements, known.span.start)
    if placement is None or placement.kind != "pi_control":
        return None
    per = out / fed
    gains = {"kp": _with_unit(values["kp"], per), "ki": _with_unit(values["ki"], per / TIME)}
    text, begin = placement.span.text, placement.span.start
    for setting in sorted(placement.settings, key=lambda one: -one.span.start):
        if setting.name in gains:
            at = setting.value.span
            text = text[: at.start - begin] + gains.pop(setting.name) + text[at.end - begin :]
    return None if gains else text


def _placement(statements: Sequence[syntax.Statement], start: int) -> syntax.Placement | None:
    """The placement that begins there, wherever it is nested."""
    for statement in statements:
        if isinstance(statement, syntax.Placement) and statement.span.start == start:
            return statement
        if isinstance(statement, syntax.Assembly | syntax.Each):
            found = _placement(statement.body, start)
            if found is not None:
                return found
    return None


def _spelling(stand: Standpoint, error: str) -> str:
    """The error's own name where the block was fed with a signal."""
    graph = stand.circuit.graph
    node = stand.quantity(error).expression
    kind, name = graph.symbols.get(node, ("", ""))
    return name if kind == "signal" else error


def _plant(stand: Standpoint, signal: str, error: str) -> _Plant:
    probing = stand.probing()
    probe = probing.add(signal)
    linear = stand.linear(probing, [signal], [stand.quantity(signal), stand.quantity(error)])
    if linear.held:
        raise failures.refused("tune-clocked", "gains of clocked control can't be found here", "tune the continuous form and convert it")
    cut = opened(linear, 0, 0, within=probe.within)
    from scipy.sparse import bmat, csc_matrix

    # The cut system's output is the signal before the cut; take the error instead: y = c x + d (a - b).
    c, d = linear.c[1:2], linear.d[1:2, 0:1]
    return _Plant(replace(cut, c=bmat([[c, -d]], format="csc"), c_w=linear.c_w[1:2], d=csc_matrix(d)))


def compensator(shape: Shape, values: dict[str, float]) -> Callable[[ComplexArray], ComplexArray]:
    """C(s)."""
    if shape == "pi":
        return lambda s: values["kp"] + values["ki"] / s
    k, wz, wp = values["k"], values["wz"], values["wp"]
    if shape == "lead":
        return lambda s: k * (1.0 + s / wz) / (1.0 + s / wp)
    if shape == "one zero":
        return lambda s: k * (1.0 + s / wz) / (s * (1.0 + s / wp))
    return lambda s: k * (1.0 + s / wz) ** 2 / (s * (1.0 + s / wp) ** 2)


def _exact(shape: Shape, plant: complex, f: float, margin_deg: float) -> dict[str, float]:
    """|T| = 1 with the wanted margin at f for one plant value."""
    w = 2.0 * math.pi * f
    needed = math.remainder(-180.0 + margin_deg - math.degrees(math.atan2(plant.imag, plant.real)), 360.0)  # angle of C
    gain = 1.0 / abs(plant)
    if shape == "pi":
        if not -90.0 < needed < 0.0:
            raise _out_of_reach(shape, needed, (-90.0, 0.0))
        angle = math.radians(needed)
        return {"kp": gain * math.cos(angle), "ki": -gain * w * math.sin(angle)}
    boost = needed if shape == "lead" else needed + 90.0
    limit = BOOST_MAX_DEG[shape]
    if not 0.0 < boost < limit:
        raise _out_of_reach(shape, needed, (0.0, limit) if shape == "lead" else (-90.0, limit - 90.0))
    k = k_factor(boost, 2 if shape == "two zeros" else 1)
    spread = math.sqrt(k) if shape == "two zeros" else k
    values = {"k": 1.0, "wz": w / spread, "wp": w * spread}
    values["k"] = gain / abs(complex(compensator(shape, values)(np.array(1j * w))))
    return values


def _out_of_reach(shape: Shape, needed_deg: float, reach: tuple[float, float]) -> Exception:
    headline = f"the compensator would have to turn the phase by {needed_deg:.1f} degrees; `{shape}` gives {reach[0]:.0f} .. {reach[1]:.0f}"
    hint = "ask for less margin or a lower crossover" if needed_deg > reach[1] else "ask for more margin or a higher crossover"
    return failures.refused("boost-out-of-reach", headline, hint)


def _polish(shape: Shape, plants: Sequence[_Plant], start: dict[str, float], f: float, margin_deg: float) -> dict[str, float]:
    """Keep the first point's crossover, raise the smallest margin over all points."""
    from scipy.optimize import minimize

    names = list(start)
    grid = np.geomspace(f / 30.0, f * 30.0, 240)
    curves = [plant.at(grid) for plant in plants]
    here = np.array([plants[0].at(np.array([f]))[0]])

    def built(x: FloatArray) -> dict[str, float]:
        values = {name: start[name] * math.exp(float(v)) for name, v in zip(names, x, strict=True)}
        gain = abs(complex((here * compensator(shape, values)(np.array([2j * np.pi * f])))[0]))
        for name in ("kp", "ki", "k"):
            if name in values:
                values[name] /= gain
        return values

    def shortfall(x: FloatArray) -> float:
        values = built(x)
        # A margin counts only where every closed loop is stable; outside, the way back is downhill.
        growth = max(_growth(_closed_modes(plant, shape, values, f), f) for plant in plants)
        if growth >= 0.0:
            return UNSTABLE_SHORTFALL * (1.0 + growth)
        law = compensator(shape, values)
        worst = math.inf
        for curve in curves:
            t = curve * law(2j * np.pi * grid)
            size = np.log(np.abs(t))
            for k in np.flatnonzero(size[:-1] * size[1:] < 0):
                share = size[k] / (size[k] - size[k + 1])
                angle = np.unwrap(np.angle(t[k : k + 2]))
                worst = min(worst, math.degrees(angle[0] + share * (angle[1] - angle[0])) % 360.0 - 180.0)
        return -min(worst, 180.0) + 1e-3 * float(np.sum(np.square(x)))

    best = minimize(
        shortfall, np.zeros(len(names)), method="Nelder-Mead", options={"maxiter": POLISH_LIMIT * len(names), "xatol": 1e-6, "fatol": 1e-6}
    )
    return built(best.x if best.fun < shortfall(np.zeros(len(names))) else np.zeros(len(names)))


def _judge(plant: _Plant, shape: Shape, values: dict[str, float], law: Callable[[ComplexArray], ComplexArray], f: float) -> tuple[Margins, bool]:
    """Margins and closed-loop stability with the compensator in place of the one in the circuit."""
    poles = spectrum(plant.linear).values

    def gain(g: FloatArray) -> ComplexArray:
        value: ComplexArray = plant.at(g) * law(2j * np.pi * g)
        return value

    margins = margins_of(gain, np.array([f / 1e3, f * 1e2]), poles)
    return margins, unstable_count(_closed_modes(plant, shape, values, f)) == 0


def _closed_modes(plant: _Plant, shape: Shape, values: dict[str, float], f: float) -> ComplexArray:
    """Eigenvalues of the closed loop with the compensator in place of the one in the circuit."""
    closed: ComplexArray = spectrum(_closed(plant.linear, shape, values)).values
    # The circuit's own compensator still follows the error without driving anything: its integrators stay at the origin.
    return closed[np.abs(closed) > RESTING_RELATIVE * 2.0 * math.pi * f]


def _growth(modes: ComplexArray, f: float) -> float:
    """The largest real part in crossovers (rad/s)."""
    return float(np.max(modes.real)) / (2.0 * math.pi * f) if len(modes) else -1.0


def _closed(cut: LinearSystem, shape: Shape, values: dict[str, float]) -> LinearSystem:
    """The cut system with input a = C(s) * error: states of C and a itself become unknowns."""
    from scipy.sparse import bmat, csc_matrix, vstack

    a_c, b_c, c_c, d_c = _realised(shape, values)
    m, n = len(a_c), cut.n
    like = replace(cut.unknowns[0], owner="")
    extra = tuple(replace(like, name=f"compensator {j}") for j in range(m + 1))
    error = cut.c.toarray()
    direct = cut.d.toarray()
    # compensator: xi' = a_c xi + b_c (c x + c_w w + d a);   0 = c_c xi + d_c (c x + c_w w + d a) - a
    a = bmat(
        [
            [cut.a, csc_matrix((n, m)), cut.b],
            [csc_matrix(b_c @ error), csc_matrix(a_c), csc_matrix(b_c @ direct)],
            [csc_matrix(d_c @ error), csc_matrix(c_c), csc_matrix(d_c @ direct - 1.0)],
        ],
        format="csc",
    )
    e = bmat([[cut.e, csc_matrix((n, m)), cut.e_u], [None, csc_matrix(np.eye(m)), None], [None, None, csc_matrix((1, 1))]], format="csc")
    late = cut.c_w.toarray()
    return replace(
        cut,
        unknowns=(*cut.unknowns, *extra),
        inputs=(),
        input_dimensions=(),
        outputs=(),
        output_dimensions=(),
        e=e,
        e_w=vstack([cut.e_w, csc_matrix((m + 1, cut.e_w.shape[1]))], format="csc"),
        e_u=csc_matrix((n + m + 1, 0)),
        a=a,
        a_w=vstack([cut.a_w, csc_matrix(b_c @ late), csc_matrix(d_c @ late)], format="csc"),
        b=csc_matrix((n + m + 1, 0)),
        c=csc_matrix((0, n + m + 1)),
        c_w=csc_matrix((0, cut.c_w.shape[1])),
        d=csc_matrix((0, 0)),
        g=bmat([[cut.g, csc_matrix((cut.g.shape[0], m)), cut.g_u]], format="csc"),
        g_u=csc_matrix((cut.g.shape[0], 0)),
        values=(),
    )


def _realised(shape: Shape, values: dict[str, float]) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """C(s) as matrices of its own states."""
    from scipy.signal import tf2ss

    if shape == "pi":
        return np.zeros((1, 1)), np.ones((1, 1)), np.array([[values["ki"]]]), np.array([[values["kp"]]])
    zero, pole = [1.0 / values["wz"], 1.0], [1.0 / values["wp"], 1.0]
    if shape == "lead":
        num, den = np.multiply(values["k"], zero), np.array(pole)
    elif shape == "one zero":
        num, den = np.multiply(values["k"], zero), np.polymul(pole, [1.0, 0.0])
    else:
        num, den = np.multiply(values["k"], np.polymul(zero, zero)), np.polymul(np.polymul(pole, pole), [1.0, 0.0])
    return tf2ss(num, den)  # type: ignore[no-any-return]


def _text(shape: Shape, signal: str, error: str, values: dict[str, float], out: Dimension, fed: Dimension) -> str:
    """The line to paste."""
    per = out / fed
    if shape == "pi":
        return f"{signal}: pi_control({error}, kp = {_with_unit(values['kp'], per)}, ki = {_with_unit(values['ki'], per / TIME)})"
    hz = {name: f"{v / (2.0 * math.pi):.10g} Hz" for name, v in values.items() if name != "k"}
    zero, pole = f"(1 + s/(2*pi * {hz['wz']}))", f"(1 + s/(2*pi * {hz['wp']}))"
    if shape == "lead":
        return f"signal {signal} = {error} filtered by {_with_unit(values['k'], per)} * {zero} / {pole}"
    gain = _with_unit(values["k"], per / TIME)
    if shape == "one zero":
        return f"signal {signal} = {error} filtered by {gain} * {zero} / s / {pole}"
    return f"signal {signal} = {error} filtered by {gain} * {zero}^2 / s / {pole}^2"


def _with_unit(value: float, dimension: Dimension) -> str:
    unit = unit_text(dimension)
    return f"{value:.10g}" if unit == "1" else f"{value:.10g} {unit.removeprefix('1')}"
