"""Modulators of poles: the duty in force in the averaged picture, carriers and gates in the edge picture.

Every carrier runs from 0 to 1 over a period that starts at the ticks of a clock, so that those edges are hit exactly; the other edge is
where the duty crosses the carrier, a located event. Dead time keeps a transistor off until its gate has been due for that long.
"""

from __future__ import annotations

import math
from collections.abc import Mapping

from polewise.circuit.model import Assignment, Circuit, ConditionEvent, Device
from polewise.devices.kind import KINDS
from polewise.equations.sketch import ClockSketch, SystemSketch
from polewise.expression.graph import ExpressionGraph, Node
from polewise.grammar import units
from polewise.grammar.source import no_span

# Source name of events that no log tells.
HIDDEN = "<asked for>"
DUTIES = ("duty", "upper_duty", "lower_duty")


def duties_in_force(circuit: Circuit, sketch: SystemSketch) -> dict[str, Node]:
    """The duty of poles whose modulator samples it or whose control computes for a while."""
    duties: dict[str, Node] = {}
    for device in circuit.devices.values():
        if not KINDS[device.kind].switching:
            continue
        sampling, delay_s = device.settings.get("sampling", "natural"), _constant(circuit.graph, device, "delay")
        if sampling != "natural" or delay_s > 0.0:
            duties[device.name] = _duty(circuit.graph, device, sketch)
    return duties


def gates(circuit: Circuit, sketch: SystemSketch, *, latched: bool = False) -> dict[str, Mapping[str, Node]]:
    """For every pole: "upper", "lower" and "driven" conditions.

    Args:
        latched: each edge that the duty makes passes once a period, whatever the duty does then. Without it a duty that jumps back at its own
            edge (through a series resistance, say) switches to and fro without end, as a comparator without a latch does.
    """
    return {d.name: _gates(circuit.graph, d, sketch, latched) for d in circuit.devices.values() if KINDS[d.kind].switching}


def _constant(graph: ExpressionGraph, device: Device, name: str) -> float:
    node = device.settings.get(name)
    return (graph.value_of(node) or 0.0) if isinstance(node, int) else 0.0


def _duty(g: ExpressionGraph, device: Device, sketch: SystemSketch) -> Node:
    duty = next(device.settings[k] for k in DUTIES if isinstance(device.settings.get(k), int))
    assert isinstance(duty, int)
    sampling, delay_s = device.settings.get("sampling", "natural"), _constant(g, device, "delay")
    if sampling != "natural":
        period_s = 1.0 / _constant(g, device, "rate")
        offset_s = period_s * _constant(g, device, "phase") / math.tau % period_s
        if sampling == "double":
            period_s *= 0.5
        duty = sketch.held(f"{device.name}.sampled_duty", duty, period_s, device.owner, device.span, offset_s=math.fmod(offset_s, period_s))
    if delay_s > 0.0:
        duty = sketch.late(f"{device.name}.delayed_duty", duty, delay_s, device.owner, device.span)
    return duty


def _gates(g: ExpressionGraph, device: Device, sketch: SystemSketch, latched: bool) -> Mapping[str, Node]:
    rate_hz = _constant(g, device, "rate")
    period_s = 1.0 / rate_hz
    offset_s = period_s * _constant(g, device, "phase") / math.tau % period_s
    duty = _duty(g, device, sketch)
    name, time = f"{device.name}.period_start", g.symbol("time", "")
    symbol = g.symbol("sampled", name)
    before = offset_s - period_s if offset_s > 0.0 else 0.0
    sketch.definitions[symbol] = sketch.parameter(name, "sampled", before, None, units.TIME, span=device.span)
    clock = ClockSketch(name, period_s, False, [(name, time)], offset_s)
    sketch.clocks.append(clock)
    into = g.multiply(g.subtract(time, symbol), g.constant(rate_hz))
    carrier = str(device.settings.get("carrier", "trailing"))
    due = g.positive(g.subtract(duty, carrier_at(g, carrier, into)))
    if latched:
        due = _latched(g, device, sketch, clock, carrier, due, into)
    dead_share = _constant(g, device, "dead_time") * rate_hz
    on = {"driven": due, "other": g.invert(due)}
    if dead_share > 0.0:
        shifted = g.subtract(into, g.constant(dead_share))
        earlier = g.mux(g.positive(g.negate(shifted)), g.add(shifted, g.constant(1.0)), shifted)
        was_due = g.positive(g.subtract(duty, carrier_at(g, carrier, earlier)))
        on = {"driven": g.both(due, was_due), "other": g.both(g.invert(due), g.invert(was_due))}
    upper_driven = _upper_is_driven(device)
    upper, lower = (on["driven"], on["other"]) if upper_driven else (on["other"], on["driven"])
    return {"upper": upper, "lower": lower, "driven": due}


def _latched(g: ExpressionGraph, device: Device, sketch: SystemSketch, clock: ClockSketch, carrier: str, due: Node, into: Node) -> Node:
    """Due with each of the carrier's edges passed once: what has risen stays, what has fallen stays, until the period ends.

    Dead time looks back at the unlatched comparison; only the gate that is on is held.
    """
    half = g.positive(g.subtract(into, g.constant(0.5)))
    for edge, phase in (("risen", "leading"), ("fallen", "trailing")):
        if carrier not in (phase, "symmetric"):
            continue
        name = f"{device.name}.{edge}"
        symbol = g.symbol("latch", name)
        sketch.definitions[symbol] = sketch.parameter(name, "latch", 0.0, None, units.NONE, is_condition=True, span=device.span)
        clock.updates.append((name, g.constant(0.0)))
        there = g.constant(1.0) if carrier == phase else half if edge == "fallen" else g.invert(half)
        passed = due if edge == "risen" else g.invert(due)
        condition = g.both(there, g.both(passed, g.invert(symbol)))
        span = no_span(HIDDEN)
        assignment = Assignment("latch", name, g.constant(1.0), span)
        sketch.conditionals.append(ConditionEvent(f"{name}.latch", condition, 0.0, False, (assignment,), span, name))
        held = g.both(there, symbol)
        due = g.either(due, held) if edge == "risen" else g.both(due, g.invert(held))
    return due


def _upper_is_driven(device: Device) -> bool:
    if device.settings.get("upper_duty") is not None:
        return True
    if device.settings.get("lower_duty") is not None:
        return False
    upper = device.settings["upper"]
    return not isinstance(upper, int | str | tuple) and upper.kind == "transistor"


def carrier_at(g: ExpressionGraph, carrier: str, into: Node) -> Node:
    """A carrier's value at a part of its period: the driven device is due while the duty is above it.

    trailing: rises, the pulse starts with the period; leading: falls, the pulse ends with the period; symmetric: falls and rises, the
    pulse is centred in the period.
    """
    one = g.constant(1.0)
    if carrier == "trailing":
        return into
    if carrier == "leading":
        return g.subtract(one, into)
    return g.absolute(g.subtract(g.multiply(g.constant(2.0), into), one))
