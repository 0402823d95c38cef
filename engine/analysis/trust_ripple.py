"""Trust in small ripple: a few periods with every edge from an averaged state tell the ripple on capacitors and at modulators' inputs."""

from __future__ import annotations

from contextlib import AbstractContextManager

import numpy as np

from polewise.analysis.carriers import Carriers
from polewise.analysis.edge_window import Stretch
from polewise.analysis.trust import Finding, Trust, TrustLimits, graded
from polewise.analysis.trust_points import controlled, duty_node
from polewise.circuit.model import Circuit, Domain, Law, Quantity
from polewise.errors import Chatter, PolewiseError
from polewise.grammar import units
from polewise.network.graph import Network
from polewise.results.curve import Curve, FloatArray
from polewise.results.recording import Column, MemorySink, recorded_curve
from polewise.solve import transient
from polewise.solve.initial import Snapshot

UNKNOWNS_MOST = 400  # beyond, a period of every edge costs too much for a report
TOLERANCE = 1e-6
MEAN_SHARE_LEAST = 0.3  # of its RMS: a capacitor with less average carries AC, and its swing is no ripple
_FLATTER = "filter the ripple out of the duty, sample it once a period (`sampling = single`), or lower the loop's gain near f"
VOLTAGE_LEAST_V = 1e-3  # a capacitor with less than this is empty


def ripple_findings(
    circuit: Circuit,
    network: Network,
    study: str | None,
    carriers: Carriers,
    snapshot: Snapshot,
    limits: TrustLimits,
    guard: AbstractContextManager[object],
) -> tuple[list[Finding], list[str]]:
    """Ripple around an averaged state.

    Args:
        snapshot: the averaged state: an operating point, or where a run ended.
    """
    capacitors = [b for b in circuit.branches.values() if b.law is Law.CHARGE and b.domain is Domain.ELECTRICAL]
    modulators = [name for name in controlled(circuit) if carriers.of(name).sampling == "natural"]
    g = circuit.graph
    outputs = [Quantity(f"ripple of {b.name}", g.symbol("v", b.name), units.VOLTAGE) for b in capacitors]
    outputs += [Quantity(f"duty of {name}", duty_node(circuit.devices[name]), units.NONE) for name in modulators]
    columns = tuple(Column(q.name, q.dimension) for q in outputs)
    if len(snapshot.unknowns) > UNKNOWNS_MOST:
        return [], [f"ripple: {len(snapshot.unknowns)} unknowns are too many for this report; `magnify` shows it"]
    stretch = Stretch(circuit, network, study, carriers, TOLERANCE, guard)
    begin, span = snapshot.time_s, stretch.span_s

    def run() -> MemorySink:
        sink = MemorySink(columns)
        problem = stretch.edges(outputs)
        start, _ = stretch.matched(problem, stretch.start(problem, snapshot), wanted, span)
        transient.run(problem, start=start, stop_s=begin + span, tolerance=TOLERANCE, sink=sink)
        return sink

    try:
        wanted = stretch.averaged(snapshot, (), (), begin + span).means(begin, begin + span)
        try:
            sink = run()
        except Chatter:
            stretch.latched = True
            sink = run()
    except PolewiseError as error:
        return [], [f"ripple: with every edge the circuit could not be run ({error.diagnostic.headline})"]
    recording = sink.finish()
    found = []
    for branch in capacitors:
        one = _capacitor(branch.name, recorded_curve(recording, f"ripple of {branch.name}"), limits)
        if one is not None:
            found.append(one)
    for name in modulators:
        curve = recorded_curve(recording, f"duty of {name}")
        carrier = carriers.of(name)
        slope = carrier.rate_hz * (2.0 if carrier.kind == "symmetric" else 1.0)
        ratio = _steepest(curve.coefficient, curve.length) / slope
        trust = graded(ratio, limits.slope_doubtful, limits.slope_not_valid)
        why = f"the ripple at its modulator's input is {ratio:.0%} as steep as the carrier: it shifts the edges, which changes the loop's gain"
        remedy = (
            ""
            if trust is Trust.HOLDS
            else "filter the ripple out of the duty, sample it once a period (`sampling = single`), or lower the loop's gain near f"
        )
        found.append(
            Finding("pole", name, "ripple slope", trust, f"ripple slope {ratio:.2g} of the carrier's", ratio / limits.slope_doubtful, why, remedy)
        )
    return found, []


def _capacitor(name: str, curve: Curve, limits: TrustLimits) -> Finding | None:
    duration = curve.duration_s()
    mean, rms = curve.integral() / duration, float(np.sqrt(max(curve.square_integral() / duration, 0.0)))
    if abs(mean) < VOLTAGE_LEAST_V or abs(mean) < MEAN_SHARE_LEAST * rms:
        return None
    ratio = (curve.highest()[0] - curve.lowest()[0]) / abs(mean)
    trust = graded(ratio, limits.capacitor_doubtful, limits.capacitor_not_valid)
    why = f"its voltage swings by {ratio:.1%} of its average within a period: products of ripples no longer vanish from the averages"
    remedy = "" if trust is Trust.HOLDS else "take a larger capacitor or a higher frequency, or trust the edge-by-edge window only"
    return Finding(
        "quantity", f"{name}.v", "capacitor ripple", trust, f"ripple {ratio:.2%} of the average", ratio / limits.capacitor_doubtful, why, remedy
    )


def _steepest(coefficient: FloatArray, length: FloatArray) -> float:
    """Largest slope by size of the pieces, at their ends and middles, per second."""
    _, c1, c2, c3 = coefficient.T
    slopes = [np.abs(c1 + u * (2.0 * c2 + u * 3.0 * c3)) / length for u in (0.0, 0.5, 1.0)]
    return float(np.max(np.stack(slopes), initial=0.0))
