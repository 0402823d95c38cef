"""Trust of what a run recorded: content of waveforms near the switching frequency, and duties that stood at their limits."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from polewise.analysis.carriers import Carriers
from polewise.analysis.cycle_average import Antiderivative
from polewise.analysis.trust import Finding, Trust, TrustLimits, graded
from polewise.analysis.trust_points import duty_node, follows_circuit, rate_near
from polewise.circuit.model import Circuit, Quantity
from polewise.expression.graph import ExpressionGraph, Node
from polewise.grammar import units
from polewise.grammar.units import TIME, Dimension, format_value
from polewise.kernels import opcodes as op
from polewise.results.curve import Curve, FloatArray
from polewise.results.recording import Recording, recorded_curve
from polewise.results.result import Result

WINDOW_PERIODS = 80  # of a short-time spectrum: f/10 is its eighth line
WINDOW_LEAST = 30  # shorter stretches between events are not looked at
SAMPLES_PER_PERIOD = 4
WINDOWS_MOST = 400  # looked at in one waveform, spread over the run
FLOOR_RELATIVE = 1e-4  # AC amplitude below this part of the waveform's size is rounding and step error
SETTLING_PERIODS = 1.0  # after an event's instant, before a window may begin: the jump itself
CURRENT_LEAST_A = 1e-3  # a pole with less is not in use
DEPTH_MOST = 60  # signals and choices followed into a duty


# ---------------------------------------------------------------- content


def content_findings(circuit: Circuit, result: Result, carriers: Carriers, limits: TrustLimits) -> list[Finding]:
    """Short-time spectra of every kept quantity that is a number."""
    found = []
    breaks = [e.time_s for e in result.events]
    sizes: dict[Dimension, float] = {}
    for column in result.recording.columns:
        if column.role == "kept" and not column.is_condition:
            values = np.abs(result.recording.values(column.name))
            sizes[column.dimension] = max(sizes.get(column.dimension, 0.0), float(np.nanmax(values, initial=0.0)))
    for column in result.recording.columns:
        if column.role != "kept" or column.is_condition:
            continue
        owner = _owner(circuit, column.name)
        rate = rate_near(owner, carriers).rate_hz
        worst = highest_content(recorded_curve(result.recording, column.name), rate, breaks, limits.content_energy, sizes[column.dimension])
        if worst is None:
            continue
        ratio, when = worst
        trust = graded(ratio, limits.content_doubtful, limits.content_not_valid)
        at = format_value(when, TIME, digits=4)
        told = f"content up to f/{1.0 / ratio:.3g}" if ratio > 0.0 else "no content near f"
        share = f"{limits.content_energy:.0%}"
        why = f"around {at} at least {share} of its AC energy lies above f/{1.0 / max(ratio, 1e-12):.3g}, where an average loses amplitude and phase"
        remedy = "" if trust is Trust.HOLDS else "look at that stretch with `magnify`"
        found.append(Finding("quantity", column.name, "content", trust, told, ratio / limits.content_doubtful, why, remedy))
    return found


def _owner(circuit: Circuit, name: str) -> str:
    path = name.rpartition(".")[0]
    while path and path not in circuit.assemblies:
        path = path.rpartition(".")[0]
    return path


def highest_content(curve: Curve, rate_hz: float, breaks: Sequence[float], energy: float, size: float) -> tuple[float, float] | None:
    """Over all windows, the highest frequency (parts of f) above which a window has at least `energy` of its AC energy, and that window's middle.

    Windows never hold an instant of `breaks`: an event's own jump has content at every frequency. None where no window fits. The waveform is
    averaged over a period first (staircases of sampled control become what they stand for), and the average's own fall is taken out again.

    Args:
        size: of this waveform or the largest of its kind, SI: what is small against it is rounding.
    """
    if curve.is_empty or curve.has_nan() is not None:
        return None
    period = 1.0 / rate_hz
    integral = Antiderivative(curve)
    edges = [curve.begin_s, *sorted(t for t in breaks if curve.begin_s < t < curve.end_s), curve.end_s]
    worst: tuple[float, float] | None = None
    for begin, count in _windows(edges, period):
        n = count * SAMPLES_PER_PERIOD
        times: FloatArray = begin + (np.arange(n, dtype=np.float64) + 0.5) * (count * period / n)
        values = integral.between(times - 0.5 * period, times + 0.5 * period)
        if not np.isfinite(values).all():
            continue
        ratio = _upper_edge(values, count, size, energy)
        if worst is None or ratio > worst[0]:
            worst = ratio, begin + 0.5 * count * period
    return worst


def _windows(edges: Sequence[float], period: float) -> list[tuple[float, int]]:
    """(begin, periods) of windows that overlap by half, between breaks."""
    found: list[tuple[float, int]] = []
    for first, last in pairwise(edges):
        room = (last - first) / period - 2.0 * SETTLING_PERIODS
        if room < WINDOW_LEAST:
            continue
        count = int(min(WINDOW_PERIODS, room))
        steps = max(1, int((room - count) / (0.5 * count)) + 1)
        found += [(first + (SETTLING_PERIODS + k * 0.5 * count) * period, count) for k in range(steps)]
    stride = max(1, -(-len(found) // WINDOWS_MOST))
    return found[::stride]


def _upper_edge(values: FloatArray, periods: int, size: float, energy: float) -> float:
    """Frequency, parts of f, above which at least a share of the AC energy lies; 0 for a waveform without any."""
    n = values.size
    line = np.arange(n)
    straight = np.polynomial.polynomial.polyfit(line / n, values, 1)
    rest = values - np.polynomial.polynomial.polyval(line / n, straight)
    if float(np.sqrt(np.mean(rest * rest))) < FLOOR_RELATIVE * size:
        return 0.0
    spectrum = np.abs(np.fft.rfft(rest * np.hanning(n))) ** 2
    part = np.arange(spectrum.size) / periods  # of f
    spectrum = np.where(part <= 0.5, spectrum / np.maximum(np.sinc(part), 0.1) ** 2, 0.0)
    above = np.cumsum(spectrum[::-1])[::-1]
    total = float(above[0])
    beyond = np.flatnonzero(above >= energy * total)
    return float(part[beyond[-1]]) if beyond.size and total > 0.0 else 0.0


# ---------------------------------------------------------------- duties at their limits


@dataclass(frozen=True, slots=True)
class Watched:
    """A pole with the column that tells when its duty stands at a limit."""

    pole: str
    column: str


def watched_quantities(circuit: Circuit) -> list[tuple[Watched, Quantity]]:
    """For every pole whose duty has a limit: a condition that is true while the loop asks for more than it gets."""
    found = []
    for device in circuit.devices.values():
        if device.kind != "pole":
            continue
        late = device.settings.get("sampling", "natural") != "natural" or device.settings.get("delay") is not None
        node = at_limit(circuit, duty_node(device), sampled=late)
        if node is not None:
            name = f"trust: {device.name} asks for more duty than it gets"
            found.append((Watched(device.name, name), Quantity(name, node, units.NONE, True)))
            current = circuit.graph.symbol("i", device.branches["mid_arm"])
            name = f"trust: current of {device.name}"
            found.append((Watched(device.name, name), Quantity(name, current, units.CURRENT)))
    return found


def at_limit(circuit: Circuit, duty: Node, *, sampled: bool = False) -> Node | None:
    """The condition that a limit in a duty's expression is in force; also that the duty is asked beyond 0 .. 1. None for constants.

    It is made of switches that the circuit's own laws have already: a further one would be a further event of the run.
    """
    g = circuit.graph
    condition = _limited(circuit, duty, DEPTH_MOST)
    if g.is_constant(duty) or not follows_circuit(circuit, [duty]):
        return None
    beyond = g.either(g.greater(duty, g.constant(1.0)), g.greater(g.constant(0.0), duty))  # the pole's own limit of its duty
    if sampled:
        return condition
    return beyond if condition is None else g.either(condition, beyond)


def _limited(circuit: Circuit, node: Node, depth: int) -> Node | None:
    """Where a limit cuts the value, followed through signals, choices and plain arithmetic with constants."""
    g = circuit.graph
    if depth == 0:
        return None
    if node in g.symbols:
        kind, name = g.symbols[node]
        return _limited(circuit, circuit.signals[name].expression, depth - 1) if kind == "signal" else None
    operation = g.operation[node]
    if operation == op.MUX:
        return _limited_choice(circuit, node, depth)
    if operation in (op.ADD, op.SUB, op.MUL, op.DIV, op.NEG):
        inner = [k for k in ((g.a[node],) if operation == op.NEG else (g.a[node], g.b[node])) if not g.is_constant(k)]
        return _limited(circuit, inner[0], depth - 1) if len(inner) == 1 else None
    return None


def _limited_choice(circuit: Circuit, node: Node, depth: int) -> Node | None:
    g = circuit.graph
    condition, then, otherwise = g.a[node], g.b[node], g.c[node]
    if g.is_constant(then) and _compares(g, condition, otherwise):
        inner = _limited(circuit, otherwise, depth - 1)
        return condition if inner is None else g.either(condition, inner)
    if g.is_constant(otherwise) and _compares(g, condition, then):
        inner = _limited(circuit, then, depth - 1)
        return g.invert(condition) if inner is None else g.either(g.invert(condition), inner)
    parts = []
    for branch, chosen in ((then, condition), (otherwise, g.invert(condition))):
        inner = _limited(circuit, branch, depth - 1)
        if inner is not None:
            parts.append(g.both(chosen, inner))
    return None if not parts else parts[0] if len(parts) == 1 else g.either(parts[0], parts[1])


def _compares(g: ExpressionGraph, condition: Node, value: Node) -> bool:
    """Whether a condition compares the value, or what a further limit of it lets through, with a number."""
    if g.operation[condition] != op.POSITIVE:
        return False
    inside = g.a[condition]
    operands = {inside}
    if g.operation[inside] in (op.ADD, op.SUB):
        operands |= {g.a[inside], g.b[inside]}
    elif g.operation[inside] == op.NEG:
        operands.add(g.a[inside])
    candidates = {value}
    if g.operation[value] == op.MUX:
        candidates |= {g.b[value], g.c[value]}
    return any(k in operands for k in candidates if not g.is_constant(k))


def pinned_findings(
    watched: Sequence[Watched], result: Result, carriers: Carriers, limits: TrustLimits, requirements: Sequence[tuple[str, float, float]]
) -> list[Finding]:
    """Duties that stood at a limit: doubtful; through a requirement's whole window: not valid for it.

    Args:
        requirements: (name, begin, end) of each requirement's window, s.
    """
    found = []
    currents = {w.pole: w.column for w in watched if w.column.startswith("trust: current")}
    for one in watched:
        if one.column in currents.values():
            continue
        period = carriers.of(one.pole).period_s
        stretches = true_stretches(result.recording, one.column, currents[one.pole])
        long = [(a, b) for a, b in stretches if b - a >= limits.pinned_periods * period]
        if not long:
            longest = max((b - a for a, b in stretches), default=0.0)
            near = longest / (limits.pinned_periods * period)
            found.append(Finding("pole", one.pole, "duty at limit", Trust.HOLDS, "never long at a limit", near, "its duty has room to move"))
            continue
        begin, end = max(long, key=lambda s: s[1] - s[0])
        length, at = format_value(end - begin, TIME, digits=3), format_value(begin, TIME, digits=4)
        why = f"from {at} on its duty stands at a limit for {length} while the loop asks for more: the loop is open there"
        remedy = "give the loop room (ratio of voltages, limits of the controller), or leave that stretch out of the requirements"
        found.append(Finding("pole", one.pole, "duty at limit", Trust.DOUBTFUL, f"{length} at its limit", (end - begin) / period, why, remedy))
        for name, first, last in requirements:
            if last > first and any(a <= first + 1e-9 * last and b >= last - 1e-9 * last for a, b in long):
                sentence = f"the duty of {one.pole} stands at its limit through the whole window: nothing is regulated in it"
                found.append(Finding("requirement", name, "duty at limit", Trust.NOT_VALID, f"{one.pole} pinned", 2.0, sentence, remedy))
    return found


def true_stretches(recording: Recording, name: str, current: str) -> list[tuple[float, float]]:
    """Stretches (begin, end) in which a recorded condition is true while a current flows; a point's value holds until the next one."""
    grid = recording.grid
    ends = np.flatnonzero(grid.flag != 0)
    time, value = grid.time[ends], recording.values(name)[ends] > 0.5
    value &= np.abs(recording.values(current)[ends]) > CURRENT_LEAST_A  # a pole without a current regulates nothing
    if time.size < 2:
        return []
    holds = value[:-1]
    change = np.flatnonzero(np.diff(np.concatenate([[False], holds, [False]]).astype(np.int8)))
    return [(float(time[a]), float(time[b])) for a, b in zip(change[::2], change[1::2], strict=True) if time[b] > time[a]]
