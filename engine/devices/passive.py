"""Linear many-terminal passives: ideal transformer and coupled inductors. (R, G, L, C in a box are laws of their branch.)"""

from __future__ import annotations

from polewise.devices.kind import BranchSlot, DeviceContext, DeviceEquations, DeviceKind, SettingSpec, register
from polewise.expression.graph import Node
from polewise.grammar import units
from polewise.kernels import opcodes as op


def _transformer(context: DeviceContext) -> DeviceEquations:
    g, ratio = context.graph, context.node("ratio")
    laws: dict[str, Node] = {}
    if context.forms["secondary"] == "voltage":
        laws["secondary"] = g.multiply(ratio, context.branch_v["primary"])
        laws["primary"] = g.negate(g.multiply(ratio, context.branch_i["secondary"]))
    else:
        laws["primary"] = g.divide(context.branch_v["secondary"], ratio)
        laws["secondary"] = g.negate(g.divide(context.branch_i["primary"], ratio))
    return DeviceEquations(laws)


TRANSFORMER = register(
    DeviceKind(
        name="transformer",
        terminals=("p1", "p2", "s1", "s2"),
        settings=(SettingSpec("ratio", units.NONE, "constant", required=True, document="secondary turns over primary turns"),),
        slots=(BranchSlot("primary", "p1", "p2", "winding"), BranchSlot("secondary", "s1", "s2", "winding")),
        equations=_transformer,
        positional=("ratio",),
        category="load",
        document="Ideal transformer: v_s = ratio*v_p, i_p = -ratio*i_s. Passes direct quantities too, as averaged isolated bridges do.",
        source="Elementary; e.g. Erickson & Maksimović 2001, Fundamentals of Power Electronics, ch. 3 (the DC transformer).",
    )
)


def _coupled(context: DeviceContext) -> DeviceEquations:
    g = context.graph
    first, second = context.node("first"), context.node("second")
    mutual = g.multiply(context.node("coupling"), g.unary(op.SQRT, g.multiply(first, second)))
    i1, i2 = context.branch_i["first"], context.branch_i["second"]
    return DeviceEquations(
        {
            "first": g.add(g.multiply(first, i1), g.multiply(mutual, i2)),
            "second": g.add(g.multiply(mutual, i1), g.multiply(second, i2)),
        },
        {"mutual": mutual},
    )


COUPLED = register(
    DeviceKind(
        name="coupled",
        terminals=("a1", "a2", "b1", "b2"),
        settings=(
            SettingSpec("first", units.INDUCTANCE, "constant", required=True, document="self-inductance between a1 and a2"),
            SettingSpec("second", units.INDUCTANCE, "constant", required=True, document="self-inductance between b1 and b2"),
            SettingSpec("coupling", units.NONE, "constant", required=True, document="coupling factor, between -1 and 1, not included"),
        ),
        slots=(BranchSlot("first", "a1", "a2", "flux"), BranchSlot("second", "b1", "b2", "flux")),
        equations=_coupled,
        positional=("first", "second", "coupling"),
        readings={"mutual": units.INDUCTANCE},
        category="load",
        document="Two coupled inductors; dotted ends a1 and b1. M = coupling*sqrt(first*second).",
        source="Elementary circuit theory.",
    )
)
