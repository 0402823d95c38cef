"""The switch pole with every edge: gates in place of duties, dead time and diodes as they are.

Same terminals, same branches, same readings as the averaged pole of pole.py, so that every other part of a circuit stays as it is.
"""

from __future__ import annotations

from polewise.devices.kind import DeviceContext, DeviceEquations, PartValue
from polewise.expression.graph import ExpressionGraph, Node

# What `mode` reads: with edges a pole is either conducting or open.
CONDUCTING, OPEN = 2.0, 0.0
# A current below these is none. A diode that stops leaves its choke at the first; the error of the instant (2e-13 of the study's time, some
# A/us steep) must not turn the opposite device's own diode on, which is why that one asks for more.
CURRENT_LEAST_A = 1e-9
CURRENT_OPPOSITE_A = 1e-5


def _value(part: PartValue, name: str, graph: ExpressionGraph) -> Node:
    node = part.values.get(name)
    return graph.constant(0.0) if node is None else node


def edge_equations(context: DeviceContext) -> DeviceEquations:
    """Equations at one switch position; `context.gates` says which transistors are on.

    A device that is on: transistor v = R i either way; a diode, or a transistor's own diode while neither is on, V_F + R_D i in its
    direction. With no path for the current the pole is open: mid floats at the far end of its choke, and the current stays zero.
    """
    g = context.graph
    zero = g.constant(0.0)
    upper, lower = context.part("upper"), context.part("lower")
    i = g.negate(context.branch_i["mid_arm"])  # leaves at mid
    bottom = context.potential["bottom"]
    rail = g.subtract(context.potential["top"], bottom)
    upper_on = context.gates["upper"] if upper.kind == "transistor" else zero
    lower_on = context.gates["lower"] if lower.kind == "transistor" else zero
    r_upper, r_lower = _value(upper, "resistance", g), _value(lower, "resistance", g)
    v_upper, v_lower = _diode_drop(upper, g), _diode_drop(lower, g)
    diode_r_upper = r_upper if upper.kind == "diode" else zero
    diode_r_lower = r_lower if lower.kind == "diode" else zero

    # mid against bottom in each position
    by_upper = g.subtract(rail, g.multiply(r_upper, i))
    by_lower = g.negate(g.multiply(r_lower, i))
    by_upper_diode = g.subtract(g.add(rail, v_upper), g.multiply(diode_r_upper, i))
    by_lower_diode = g.subtract(g.negate(v_lower), g.multiply(diode_r_lower, i))
    least_leaving = CURRENT_LEAST_A if lower.kind == "diode" else CURRENT_OPPOSITE_A
    least_entering = CURRENT_LEAST_A if upper.kind == "diode" else CURRENT_OPPOSITE_A
    leaving, entering = g.greater(i, g.constant(least_leaving)), g.greater(g.negate(i), g.constant(least_entering))
    if context.choke is None:
        open_mid, drives_upper, drives_lower = g.multiply(g.constant(0.5), rail), zero, zero
    else:
        far = g.subtract(context.choke.far_potential, bottom)
        open_mid = far
        drives_upper = g.positive(g.subtract(far, g.add(rail, v_upper)))  # the far end pushes current up through the upper diode
        drives_lower = g.positive(g.negate(g.add(far, v_lower)))  # or pulls it up through the lower one
    idle = g.invert(g.either(upper_on, lower_on))
    upper_diode = g.both(idle, g.either(entering, g.both(g.invert(leaving), drives_upper)))
    lower_diode = g.both(idle, g.either(leaving, g.both(g.invert(entering), drives_lower)))
    is_open = g.both(idle, g.invert(g.either(upper_diode, lower_diode)))
    mid = g.mux(upper_on, by_upper, g.mux(lower_on, by_lower, g.mux(upper_diode, by_upper_diode, g.mux(lower_diode, by_lower_diode, open_mid))))
    through_upper = g.mux(g.either(upper_on, upper_diode), i, zero)
    through_lower = g.mux(g.either(lower_on, lower_diode), i, zero)
    driven = context.gates["driven"]
    loss = g.add(
        g.multiply(context.branch_v["mid_arm"], context.branch_i["mid_arm"]),
        g.multiply(context.branch_v["top_arm"], context.branch_i["top_arm"]),
    )
    v_mid = context.branch_v["mid_arm"]
    return DeviceEquations(
        laws={"mid_arm": mid, "top_arm": through_upper},
        readings={
            "duty": driven,
            "share": driven,
            "conduction": g.invert(is_open),
            "mode": g.mux(is_open, g.constant(OPEN), g.constant(CONDUCTING)),
            "loss": loss,
            "ripple": zero,
            "upper_i": through_upper,
            "lower_i": g.negate(through_lower),
            "upper_v": g.subtract(rail, v_mid),
            "lower_v": v_mid,
        },
    )


def _diode_drop(part: PartValue, graph: ExpressionGraph) -> Node:
    return _value(part, "drop" if part.kind == "diode" else "reverse_drop", graph)
