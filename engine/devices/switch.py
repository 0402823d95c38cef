"""Two-terminal switches on a path: diode, breaker, controlled switch."""

from __future__ import annotations

from polewise.devices.kind import BranchSlot, DeviceContext, DeviceEquations, DeviceKind, LatchSpec, SettingSpec, register
from polewise.expression.graph import Node
from polewise.grammar import units

# Slope of an arc's voltage with its current; small against any circuit it breaks, large enough for the solver.
ARC_RESISTANCE_OHM = 0.01


def _diode(context: DeviceContext) -> DeviceEquations:
    g = context.graph
    v = context.branch_v[""]
    leak = g.divide(v, context.node("reverse"))
    beyond = g.subtract(v, context.node("drop"))
    forward = g.divide(beyond, context.node("resistance"))
    conducts = g.positive(beyond)
    return DeviceEquations({"": g.add(leak, g.mux(conducts, forward, g.constant(0.0)))}, {"conducts": conducts})


DIODE = register(
    DeviceKind(
        name="diode",
        terminals=("left", "right"),
        settings=(
            SettingSpec("drop", units.VOLTAGE, "constant", 0.0, document="forward voltage at no current"),
            SettingSpec("resistance", units.RESISTANCE, "constant", 1e-3, document="slope resistance when it conducts"),
            SettingSpec("reverse", units.RESISTANCE, "constant", 1e6, document="resistance when it blocks"),
        ),
        slots=(BranchSlot("", "left", "right", "nonlinear"),),
        equations=_diode,
        positional=("drop", "resistance"),
        readings={"conducts": units.NONE},
        conditions=("conducts",),
        document="A diode that is not switched by a pole: conducts from left to right. Piecewise linear.",
        source="Common practice.",
    )
)


def _contact(context: DeviceContext, closed: Node) -> DeviceEquations:
    g = context.graph
    resistance = g.mux(closed, context.node("closed"), context.node("open"))
    return DeviceEquations({"": resistance}, {"closed": closed})


def _breaker(context: DeviceContext) -> DeviceEquations:
    return _contact(context, context.latches["closed"])


def _switch(context: DeviceContext) -> DeviceEquations:
    return _contact(context, context.node("on"))


_CONTACT = (
    SettingSpec("closed", units.RESISTANCE, "constant", 1e-4, document="resistance when closed"),
    SettingSpec("open", units.RESISTANCE, "constant", 1e6, document="resistance when open"),
)

BREAKER = register(
    DeviceKind(
        name="breaker",
        terminals=("left", "right"),
        settings=(SettingSpec("start", None, "condition", True, document="whether it is closed at the start"), *_CONTACT),
        slots=(BranchSlot("", "left", "right", "resistance"),),
        equations=_breaker,
        positional=("start",),
        latches=(LatchSpec("closed", "start"),),
        document="A breaker or contactor that events open and close. Both positions have a resistance, so that charge and flux have a way to "
        "go: opening on an inductive current drives that current through the open resistance.",
        source="Common practice.",
    )
)

SWITCH = register(
    DeviceKind(
        name="switch",
        terminals=("left", "right"),
        settings=(SettingSpec("on", None, "condition", required=True, document="closed while true"), *_CONTACT),
        slots=(BranchSlot("", "left", "right", "resistance"),),
        equations=_switch,
        positional=("on",),
        readings={"closed": units.NONE},
        conditions=("closed",),
        document="A contact that follows a condition.",
        source="Common practice.",
    )
)


def _arc_breaker(context: DeviceContext) -> DeviceEquations:
    """Closed: a resistance. Open: the arc holds `arc` volts against the current until it is gone; below that voltage only `open` leaks."""
    g = context.graph
    v, arc = context.branch_v[""], context.node("arc")
    closed = context.latches["closed"]
    slope = g.constant(1.0 / ARC_RESISTANCE_OHM)
    zero = g.constant(0.0)
    over = g.mux(g.greater(v, arc), g.multiply(slope, g.subtract(v, arc)), zero)
    under = g.mux(g.greater(g.negate(arc), v), g.multiply(slope, g.add(v, arc)), zero)
    opened = g.sum([g.divide(v, context.node("open")), over, under])
    return DeviceEquations({"": g.mux(closed, g.divide(v, context.node("closed")), opened)}, {"closed": closed})


ARC_BREAKER = register(
    DeviceKind(
        name="dc_breaker",
        terminals=("left", "right"),
        settings=(
            SettingSpec("start", None, "condition", True, document="whether it is closed at the start"),
            SettingSpec("arc", units.VOLTAGE, "constant", required=True, document="voltage its arc holds while it clears a current"),
            *_CONTACT,
        ),
        slots=(BranchSlot("", "left", "right", "nonlinear"),),
        equations=_arc_breaker,
        positional=("start", "arc"),
        latches=(LatchSpec("closed", "start"),),
        document="A breaker that clears direct current by an arc voltage above the system's: after opening, the current falls at "
        "(arc - source)/L to zero and the arc takes the energy.",
        source="Common practice (arc voltage above system voltage forces a direct current to zero).",
    )
)
