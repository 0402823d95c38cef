"""The switch pole: two devices that tie a mid terminal to a top or a bottom rail, as its cycle average.

Equations and their sources are in docs/models.md. Here i is the current that leaves at mid, j the choke current in the diode's direction,
f the switching frequency, d the on-fraction of the driven device.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from polewise.devices.kind import (
    BranchSlot,
    DeviceContext,
    DeviceEquations,
    DeviceKind,
    PartKind,
    PartValue,
    SettingSpec,
    SettingValue,
    register,
    register_part,
)
from polewise.devices.pole_edges import edge_equations
from polewise.expression.graph import ExpressionGraph, Node
from polewise.grammar import units

# The estimate of ripple conduction loss fades out over the last part of the discontinuous range, so that nothing jumps at the boundary.
RIPPLE_LOSS_FADE = 0.05
# It never draws more than this part of the diode's current: before the diode conducts there is no triangle yet, and a loss drawn then would push
# the output of an inverting stage the wrong way. A real stage's loss is far below.
RIPPLE_LOSS_OF_DIODE = 0.5
# Below this rail voltage the loss drawn from the rails is set to zero: its current would be a quotient of two small numbers.
RAIL_VOLTAGE_MIN_V = 1e-3
# A choke current that no tolerance resolves.
CURRENT_FAINT_A = 1e-6
# Below this part of it the pole reads as open.
PART_IDLE = 0.5
# Smallest slope with which conduction fades.
SOFT_LEAST = 1e-4
# Smallest width (A) of the current band in which dead time changes sign, where no output capacitance gives one.
DEAD_TIME_BAND_MIN_A = 1e-3

TRANSISTOR = register_part(
    PartKind(
        name="transistor",
        parameters=(
            SettingSpec("resistance", units.RESISTANCE, "varying", 0.0, document="on-resistance, both current directions"),
            SettingSpec("turn_on", units.ENERGY, "constant", document="turn-on energy at the datasheet point"),
            SettingSpec("turn_off", units.ENERGY, "constant", document="turn-off energy at the datasheet point"),
            SettingSpec("recovery", units.ENERGY, "constant", document="reverse-recovery energy of its own diode at the datasheet point"),
            SettingSpec("at_voltage", units.VOLTAGE, "constant", document="voltage of the datasheet point"),
            SettingSpec("at_current", units.CURRENT, "constant", document="current of the datasheet point"),
            SettingSpec("reverse_drop", units.VOLTAGE, "constant", 0.0, document="forward voltage of its own diode, seen during dead time"),
            SettingSpec("output_capacitance", units.CAPACITANCE, "constant", 1e-10, document="effective output capacitance"),
        ),
        document="A controlled device that conducts both ways when on.",
    )
)
DIODE_PART = register_part(
    PartKind(
        name="diode",
        parameters=(
            SettingSpec("drop", units.VOLTAGE, "varying", 0.0, document="forward voltage at no current"),
            SettingSpec("resistance", units.RESISTANCE, "varying", 0.0, document="slope resistance"),
            SettingSpec("recovery", units.ENERGY, "constant", document="reverse-recovery energy at the datasheet point"),
            SettingSpec("at_voltage", units.VOLTAGE, "constant", document="voltage of the datasheet point"),
            SettingSpec("at_current", units.CURRENT, "constant", document="current of the datasheet point"),
        ),
        document="An uncontrolled device.",
    )
)


def _value(part: PartValue, name: str, graph: ExpressionGraph) -> Node:
    node = part.values.get(name)
    return graph.constant(0.0) if node is None else node


def driven_devices(settings: Mapping[str, SettingValue]) -> tuple[str, str]:
    """Kinds of the upper and lower part."""
    upper, lower = settings["upper"], settings["lower"]
    assert isinstance(upper, PartValue)
    assert isinstance(lower, PartValue)
    return upper.kind, lower.kind


def faces_diode(settings: Mapping[str, SettingValue]) -> bool:
    """Whether the pole's conduction mode depends on the choke current: one diode, and not told to be continuous."""
    return "diode" in driven_devices(settings) and settings.get("conduction") != "continuous"


def _check(settings: Mapping[str, SettingValue]) -> tuple[str, str] | None:
    upper, lower = driven_devices(settings)
    given = [name for name in ("duty", "upper_duty", "lower_duty") if settings.get(name) is not None]
    if upper == lower == "diode":
        return "a pole of two diodes has nothing to control", "make one of them a transistor, or put a diode in a box: `[diode(0.8 V)]`"
    if not given:
        name = "upper_duty" if upper == lower else "duty"
        return "the pole has no duty", f"write `{name} = …`"
    if len(given) > 1:
        return f"`{given[0]}` and `{given[1]}` are both given", "keep one of them"
    if upper == lower and given == ["duty"]:
        return (
            "`duty` of a pole with two transistors could mean either of them",
            "write `upper_duty = …` or `lower_duty = …`",
        )
    if (given == ["upper_duty"] and upper == "diode") or (given == ["lower_duty"] and lower == "diode"):
        return f"`{given[0]}` is the duty of a diode", "write `duty = …`: it belongs to the pole's only transistor"
    for name, part in (("upper", settings["upper"]), ("lower", settings["lower"])):
        assert isinstance(part, PartValue)
        energies = [k for k in ("turn_on", "turn_off", "recovery") if part.values.get(k) is not None]
        if energies and (part.values.get("at_voltage") is None or part.values.get("at_current") is None):
            return f"`{energies[0]}` of the {name} device has no datasheet point", "add `at_voltage = …, at_current = …`"
    return None


@dataclass(frozen=True, slots=True)
class _Pole:
    """Quantities every variant shares."""

    graph: ExpressionGraph
    context: DeviceContext
    rail: Node  # v_t - v_b
    mid_current: Node  # i, leaving at mid
    rate: Node
    duty: Node  # limited to 0..1, of the driven device
    asked: Node

    @property
    def upper(self) -> PartValue:
        return self.context.part("upper")

    @property
    def lower(self) -> PartValue:
        return self.context.part("lower")


def _pole(context: DeviceContext) -> DeviceEquations:
    if context.gates:
        return edge_equations(context)
    g = context.graph
    settings = context.settings
    asked = next(context.node(name) for name in ("duty", "upper_duty", "lower_duty") if settings.get(name) is not None)
    pole = _Pole(
        graph=g,
        context=context,
        rail=g.subtract(context.potential["top"], context.potential["bottom"]),
        mid_current=g.negate(context.branch_i["mid_arm"]),
        rate=context.node("rate"),
        duty=g.limit(asked, g.constant(0.0), g.constant(1.0)),
        asked=asked,
    )
    upper, lower = driven_devices(settings)
    if upper == lower:
        return _two_transistors(pole, upper_share=pole.duty if "upper_duty" in settings else g.subtract(g.constant(1.0), pole.duty))
    return _with_diode(pole, lower_diode=lower == "diode")


# ---------------------------------------------------------------- two transistors


def _two_transistors(pole: _Pole, upper_share: Node) -> DeviceEquations:
    """v_m = d(v_t - R_up i) + (1-d)(v_b - R_lo i); i_t = d i; dead time shifts d in all of them alike, so that power balances.

    Source: Wester & Middlebrook 1973; Middlebrook & Cuk 1976; Vorperian 1990.
    """
    g, i = pole.graph, pole.mid_current
    one = g.constant(1.0)
    dead_time = pole.context.node("dead_time")
    shift = _dead_time_share(pole, dead_time, upper_share)
    share = g.subtract(upper_share, shift)
    r_upper, r_lower = _value(pole.upper, "resistance", g), _value(pole.lower, "resistance", g)
    drop = g.multiply(
        g.constant(2.0), g.multiply(shift, g.mux(g.positive(i), _value(pole.lower, "reverse_drop", g), _value(pole.upper, "reverse_drop", g)))
    )
    mid = g.subtract(
        g.subtract(g.multiply(share, g.subtract(pole.rail, g.multiply(r_upper, i))), g.multiply(g.subtract(one, share), g.multiply(r_lower, i))),
        drop,
    )
    top = g.add(g.multiply(share, i), _switching_current(pole, i))
    return _equations(pole, mid, top, share, one, g.constant(2.0))


def _dead_time_share(pole: _Pole, dead_time: Node, share: Node) -> Node:
    """t_d f sigma: zero inside the ripple band, +-t_d f outside; sigma = (sat((i - ripple/2)/w) + sat((i + ripple/2)/w))/2."""
    g = pole.graph
    if g.value_of(dead_time) == 0.0:
        return g.constant(0.0)
    capacitance = g.add(_value(pole.upper, "output_capacitance", g), _value(pole.lower, "output_capacitance", g))
    # w = 2 C_oss (v_t - v_b)/t_d with C_oss of one device: the sum of both is twice their mean.
    width = g.maximum(g.divide(g.multiply(capacitance, pole.rail), dead_time), g.constant(DEAD_TIME_BAND_MIN_A))
    half_ripple = g.multiply(g.constant(0.5), _ripple(pole, share))
    low, high = g.constant(-1.0), g.constant(1.0)
    left = g.limit(g.divide(g.subtract(pole.mid_current, half_ripple), width), low, high)
    right = g.limit(g.divide(g.add(pole.mid_current, half_ripple), width), low, high)
    sigma = g.multiply(g.constant(0.5), g.add(left, right))
    return g.multiply(g.multiply(dead_time, pole.rate), sigma)


def _ripple(pole: _Pole, share: Node) -> Node:
    """Peak-to-peak choke ripple (v_t - v_b) d (1-d)/(L f), or the setting `ripple`. Zero where no choke is known."""
    g = pole.graph
    stated = pole.context.optional("ripple")
    if stated is not None:
        return stated
    if pole.context.choke is None:
        return g.constant(0.0)
    volt_seconds = g.multiply(pole.rail, g.multiply(share, g.subtract(g.constant(1.0), share)))
    return g.divide(volt_seconds, g.multiply(pole.context.choke.inductance, pole.rate))


def _switching_current(pole: _Pole, i: Node) -> Node:
    """Current that draws f(E_on + E_off + E_rr) from the rails, energies proportional to voltage and current.

    With p = f E (v/v_ref)(|i|/i_ref) drawn from the t-b port the current is f E |i|/(v_ref i_ref): no division by the rail voltage.
    """
    g = pole.graph
    hard_upper = g.add(_energy(g, pole.upper, ("turn_on", "turn_off")), _energy(g, pole.lower, ("recovery",)))
    hard_lower = g.add(_energy(g, pole.lower, ("turn_on", "turn_off")), _energy(g, pole.upper, ("recovery",)))
    if g.value_of(hard_upper) == 0.0 and g.value_of(hard_lower) == 0.0:
        return g.constant(0.0)
    forward = g.positive(i)
    return g.multiply(pole.rate, g.mux(forward, g.multiply(hard_upper, i), g.negate(g.multiply(hard_lower, i))))


def _energy(g: ExpressionGraph, part: PartValue, names: tuple[str, ...]) -> Node:
    """Sum of energies over v_ref*i_ref of its datasheet point."""
    total = g.sum([_value(part, name, g) for name in names])
    at_voltage, at_current = part.values.get("at_voltage"), part.values.get("at_current")
    if at_voltage is None or at_current is None:
        return g.constant(0.0)
    return g.divide(total, g.multiply(at_voltage, at_current))


# ---------------------------------------------------------------- one diode


def _with_diode(pole: _Pole, *, lower_diode: bool) -> DeviceEquations:
    """The full-order, charge-corrected model of continuous and discontinuous conduction, all edge cases.

    Source: Sun, Mitchell, Greuel, Krein & Bass, IEEE Trans. Power Electronics 16(4), 2001.
    """
    g, context = pole.graph, pole.context
    transistor, diode = (pole.upper, pole.lower) if lower_diode else (pole.lower, pole.upper)
    r_on, r_diode, drop = _value(transistor, "resistance", g), _value(diode, "resistance", g), _value(diode, "drop", g)
    zero, one, two = g.constant(0.0), g.constant(1.0), g.constant(2.0)
    d, rail = pole.duty, pole.rail
    j = pole.mid_current if lower_diode else g.negate(pole.mid_current)
    bottom = context.potential["bottom"]
    if context.choke is None:  # conduction = continuous, or nothing faces mid
        d_on, d_diode, ordinary, idle, far = d, g.subtract(one, d), zero, zero, zero
        i_on, peak_half = g.multiply(j, d), zero
    else:
        choke, usual = context.choke, g.mark_usual
        far = g.subtract(choke.far_potential, bottom)
        raising = g.subtract(rail, far) if lower_diode else far
        lowering = g.add(far, drop) if lower_diode else g.subtract(g.add(rail, drop), far)
        # The diode is driven on where b < 0. b = 0 (an ideal diode into an empty output) is still ordinary: there the two would disagree on
        # the diode's current, and a start from rest would hang between them.
        driven = usual(g.positive(g.negate(lowering)), 0)
        ordinary = g.invert(driven)
        # delta = limit(j(2Lf/d + R + r)/a, d, 1). Written with charge = j(2Lf + (R + r)d) and reach = a d nothing divides by d or a.
        slope = g.add(g.multiply(g.multiply(two, choke.inductance), pole.rate), g.multiply(g.add(r_on, choke.resistance), d))
        charge = g.multiply(j, slope)
        full, faint = g.multiply(raising, d), g.multiply(slope, g.constant(CURRENT_FAINT_A))
        some = usual(g.greater(full, faint), 1)
        reach = g.mux(some, full, faint)
        continuous = usual(g.greater(charge, reach), 1)
        reverse = usual(g.positive(g.negate(charge)), 0)
        part = g.mux(continuous, one, g.mux(reverse, zero, g.divide(charge, reach)))
        # Where a d drives less current than any tolerance resolves (a <= 0 or d = 0 above all) the pole conducts on until its current is gone and
        # then is open: all it does fades with the last microampere. `driving` leads over, so that every choice here is continuous and no two of
        # them can undo each other.
        driving = g.mux(usual(g.greater(full, g.multiply(two, faint)), 1), one, g.mux(some, g.subtract(g.divide(full, faint), one), zero))
        # Quadratic towards the end, so that mid floats to the far end itself; never quite flat, so that a pole at rest has a current of its own.
        soft = g.multiply(part, g.maximum(part, g.constant(SOFT_LEAST)))
        fading = g.multiply(g.subtract(one, driving), soft)
        starting = usual(g.greater(d, part), 0)
        beyond = g.mux(starting, zero, g.subtract(part, d))
        d_on = g.mux(driven, d, g.multiply(d, g.add(driving, fading)))
        d_diode = g.mux(driven, g.subtract(one, d), g.add(g.multiply(driving, beyond), g.multiply(fading, g.subtract(one, d))))
        peak_half = g.divide(reach, slope)  # j/delta in discontinuous conduction: half the peak current
        triangle = g.mux(continuous, g.multiply(j, d), g.mux(starting, j, g.multiply(peak_half, d)))
        mixed = g.add(g.multiply(driving, triangle), g.multiply(g.subtract(one, driving), g.multiply(j, d)))
        i_on = g.mux(driven, g.multiply(j, d), mixed)
        idle = g.both(ordinary, g.both(g.invert(some), g.greater(g.constant(PART_IDLE), part)))
    i_diode = g.subtract(j, i_on)
    delta = g.add(d_on, d_diode)
    # Potential of mid against bottom.
    drops = g.add(g.multiply(r_on, i_on), g.multiply(r_diode, i_diode))
    floating = g.multiply(g.subtract(one, delta), far)
    if lower_diode:
        mid = g.add(g.subtract(g.subtract(g.multiply(d_on, rail), g.multiply(d_diode, drop)), drops), floating)
    else:
        mid = g.add(g.add(g.multiply(d_diode, g.add(rail, drop)), drops), floating)
    losses = g.add(_switching_current(pole, pole.mid_current), _ripple_loss_current(pole, ordinary, delta, peak_half, i_diode, r_on, r_diode))
    through_top = i_on if lower_diode else g.negate(i_diode)
    mode = g.mux(idle, zero, g.mux(g.greater(one, delta), one, two))
    return _equations(pole, mid, g.add(through_top, losses), d, delta, mode)


def _ripple_loss_current(pole: _Pole, ordinary: Node, delta: Node, peak_half: Node, i_diode: Node, r_on: Node, r_diode: Node) -> Node:
    """What the average of a triangle leaves out of conduction loss, (R d + R_D d2)(j/delta)^2/3, drawn from the rails; an estimate."""
    g = pole.graph
    if g.value_of(ordinary) == 0.0 or (g.value_of(r_on) == 0.0 and g.value_of(r_diode) == 0.0):
        return g.constant(0.0)
    resistance = g.add(g.multiply(r_on, pole.duty), g.multiply(r_diode, g.subtract(delta, pole.duty)))
    square = g.multiply(peak_half, peak_half)
    power = g.divide(g.multiply(resistance, square), g.constant(3.0))
    zero, one = g.constant(0.0), g.constant(1.0)
    share = g.limit(g.divide(g.subtract(one, delta), g.constant(RIPPLE_LOSS_FADE)), zero, one)
    there = g.both(ordinary, g.greater(pole.rail, g.constant(RAIL_VOLTAGE_MIN_V)))
    most = g.multiply(g.constant(RIPPLE_LOSS_OF_DIODE), i_diode)
    drawn = g.divide(g.multiply(power, share), pole.rail)
    return g.mux(there, g.mux(g.mark_usual(g.greater(drawn, most), 0), most, drawn), zero)


# ---------------------------------------------------------------- common end


def _equations(pole: _Pole, mid: Node, top: Node, duty: Node, delta: Node, mode: Node) -> DeviceEquations:
    g, context = pole.graph, pole.context
    loss = g.add(
        g.multiply(context.branch_v["mid_arm"], context.branch_i["mid_arm"]),
        g.multiply(context.branch_v["top_arm"], context.branch_i["top_arm"]),
    )
    one = g.constant(1.0)
    # Averages of the devices' own quantities: current in the direction top → mid → bottom, voltage across each while it may block.
    upper_i = context.branch_i["top_arm"]
    lower_i = g.add(context.branch_i["mid_arm"], context.branch_i["top_arm"])
    v_mid = context.branch_v["mid_arm"]
    at_limit = g.either(g.positive(g.subtract(pole.asked, one)), g.positive(g.negate(pole.asked)))
    return DeviceEquations(
        laws={"mid_arm": mid, "top_arm": top},
        readings={
            "duty": pole.duty,
            "share": duty,
            "conduction": delta,
            "mode": mode,
            "loss": loss,
            "ripple": _ripple(pole, duty),
            "upper_i": upper_i,
            "lower_i": lower_i,
            "upper_v": g.subtract(pole.rail, v_mid),
            "lower_v": v_mid,
        },
        flags={"duty_limited": at_limit},
    )


POLE = register(
    DeviceKind(
        name="pole",
        terminals=("top", "bottom", "mid"),
        settings=(
            SettingSpec("duty", units.NONE, "varying", document="on-fraction of the pole's only transistor"),
            SettingSpec("upper_duty", units.NONE, "varying", document="on-fraction of the upper of two transistors"),
            SettingSpec("lower_duty", units.NONE, "varying", document="on-fraction of the lower of two transistors"),
            SettingSpec("rate", units.RATE, "constant", required=True, document="switching frequency"),
            SettingSpec("upper", None, "part", required=True, parts=("transistor", "diode"), document="device between top and mid"),
            SettingSpec("lower", None, "part", required=True, parts=("transistor", "diode"), document="device between mid and bottom"),
            SettingSpec("dead_time", units.TIME, "constant", 0.0, document="time in which neither of two transistors is on"),
            SettingSpec("ripple", units.CURRENT, "varying", document="peak-to-peak choke ripple, where the circuit does not show it"),
            SettingSpec("choke", None, "inductors", document="the inductors that face mid, where the circuit does not show them"),
            SettingSpec(
                "conduction",
                None,
                "word",
                "automatic",
                words=("automatic", "continuous"),
                document="`continuous` switches the question of discontinuous conduction off",
            ),
            SettingSpec(
                "carrier",
                None,
                "word",
                "trailing",
                words=("trailing", "leading", "symmetric"),
                document="which edge of the pulse the modulator moves",
            ),
            SettingSpec(
                "sampling",
                None,
                "word",
                "natural",
                words=("natural", "single", "double"),
                document="when the modulator reads the duty: all the time, once or twice a period",
            ),
            SettingSpec("phase", units.NONE, "constant", 0.0, document="how far its carrier lags, as an angle: 180 deg is half a period"),
            SettingSpec("delay", units.TIME, "constant", 0.0, document="computing delay between the duty signal and the modulator"),
        ),
        slots=(BranchSlot("mid_arm", "mid", "bottom", "voltage"), BranchSlot("top_arm", "top", "bottom", "current")),
        equations=_pole,
        readings={
            "duty": units.NONE,
            "share": units.NONE,
            "conduction": units.NONE,
            "mode": units.NONE,
            "loss": units.POWER,
            "ripple": units.CURRENT,
            "upper_i": units.CURRENT,
            "lower_i": units.CURRENT,
            "upper_v": units.VOLTAGE,
            "lower_v": units.VOLTAGE,
        },
        check=_check,
        document="A switch pole as its cycle average. mode reads 2 in continuous, 1 in discontinuous conduction, 0 when blocked.",
        source="Wester & Middlebrook 1973; Middlebrook & Cuk 1976; Vorperian 1990; Sun, Mitchell, Greuel, Krein & Bass 2001.",
        switching=True,
    )
)
