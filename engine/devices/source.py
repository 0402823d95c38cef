"""Constant power: a load that fades below its lowest voltage, a generator that fades above its highest."""

from __future__ import annotations

from polewise.devices.kind import BranchSlot, DeviceContext, DeviceEquations, DeviceKind, SettingSpec, register
from polewise.grammar import units


def _constant_power(context: DeviceContext) -> DeviceEquations:
    """i = p/v at or above v_min; below, with x = v/v_min, i = (p/v_min)*(2x - x^3): once differentiable, passive at the origin.

    A generator (`below`) keeps p/v up to v_max and fades above it: i = (p/v_max)*(2x - x^3) with x = v_max/v mirrored would grow without
    bound near zero, so it also fades below a tenth of v_max as a load does.
    """
    g = context.graph
    power = g.multiply(context.power_scale, context.node("power"))
    bound = context.node("voltage")
    v = context.branch_v[""]
    if context.settings["relation"] == "above":
        x = g.divide(v, bound)
        faded = g.multiply(g.divide(power, bound), g.subtract(g.multiply(g.constant(2.0), x), g.power(x, g.constant(3.0))))
        collapsed = g.mark_usual(g.positive(g.subtract(bound, v)), 0)
        # In the fading branch v may cross zero; p/v is only chosen where v >= bound > 0.
        current = g.mux(collapsed, faded, g.divide(power, v))
        return DeviceEquations({"": current}, flags={"collapsed": g.both(collapsed, g.positive(g.absolute(power)))})
    lowest = g.multiply(g.constant(GENERATOR_LOWEST_SHARE), bound)
    x = g.divide(v, lowest)
    starting = g.multiply(g.divide(power, lowest), g.subtract(g.multiply(g.constant(2.0), x), g.power(x, g.constant(3.0))))
    # Above the limit the current falls to zero within a tenth of it: (p/v_max)*(1 - u)^2*(1 + u/k') keeps value and slope at u = 0.
    u = g.divide(g.subtract(v, bound), g.multiply(g.constant(GENERATOR_FADE_SHARE), bound))
    one = g.constant(1.0)
    slope_match = g.constant(2.0 - GENERATOR_FADE_SHARE)
    fading = g.multiply(g.divide(power, bound), g.multiply(g.power(g.subtract(one, u), g.constant(2.0)), g.add(one, g.multiply(slope_match, u))))
    over = g.mark_usual(g.positive(g.subtract(v, bound)), 0)
    gone = g.positive(g.subtract(u, one))
    current = g.mux(
        over, g.mux(gone, g.constant(0.0), fading), g.mux(g.mark_usual(g.positive(g.subtract(lowest, v)), 0), starting, g.divide(power, v))
    )
    return DeviceEquations({"": current}, flags={"curtailed": over})


# A generator's current p/v must not grow without bound on a dead bus: below this share of its limit it fades as a load does.
GENERATOR_LOWEST_SHARE = 0.1
# Above its limit a generator's current falls to zero within this share of the limit.
GENERATOR_FADE_SHARE = 0.1

CONSTANT_POWER = register(
    DeviceKind(
        name="constant_power",
        terminals=("left", "right"),
        settings=(
            SettingSpec("power", units.POWER, "varying", required=True, document="absorbed power; negative: a generator"),
            SettingSpec("voltage", units.VOLTAGE, "varying", required=True, document="lowest voltage of a load, highest of a generator"),
            SettingSpec("relation", None, "word", required=True, words=("above", "below")),
        ),
        slots=(BranchSlot("", "left", "right", "nonlinear"),),
        equations=_constant_power,
        category="load",
        document="Constant power, written in a box: `20 kW above 300 V`, `-5 kW below 850 V`.",
        source="Equilibrium and limits: Middlebrook 1976; Emadi, Khaligh, Rivetta & Williamson 2006. The fade is our own convention.",
    )
)
