"""What is wrong with nodes, boxes, placements and settings, in words: one function per error, facts in, Diagnostic out."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

from polewise.circuit.dimensions import Quality, describe
from polewise.circuit.message_form import article, at, declared_at, error, listed, meant, plural
from polewise.grammar.diagnostics import Diagnostic, Label
from polewise.grammar.source import Span

# ---------------------------------------------------------------- nodes, paths, boxes


def node_with_dot(span: Span, text: str) -> Diagnostic:
    """A path that ends on an inner node of an assembly."""
    return error("node-inside", f"`{text}` is inside an assembly; a path can't end there", span, hint="Make it a port of the assembly.")


def not_a_node(span: Span, name: str, word: str, declared: Span) -> Diagnostic:
    """A path that ends on a signal."""
    return error("not-a-node", f"a path needs a node here, and `{name}` is {article(word)}", span, labels=declared_at(declared))


def unconnected_on_path(span: Span) -> Diagnostic:
    """a --[1 ohm]-- unconnected."""
    return error("unconnected", "`unconnected` stands for a terminal left open, in the brackets of a placement", span)


def reference_kind_unknown(span: Span, unit: str) -> Diagnostic:
    """reference x (ohm)."""
    hint = "`(rad/s)` is rotation, `(m/s)` translation, `(K)` heat; nothing is electrical."
    return error("reference-kind", f"no kind of island is measured in `{unit}`", span, hint=hint)


def reference_is_port(span: Span, name: str, declared: Span) -> Diagnostic:
    """A port declared as reference inside its assembly."""
    return error("reference-port", f"`{name}` is a port; whether it is a reference is said outside", span, labels=declared_at(declared))


def kinds_joined(span: Span, kind_a: str, place_a: Span, kind_b: str, place_b: Span) -> Diagnostic:
    """A box between a shaft and a wire."""
    labels = (Label(place_a, f"{kind_a} from here"), Label(place_b, f"{kind_b} from here"))
    headline = f"this joins {article(kind_a)} island with {article(kind_b)} island"
    return error(
        "kinds-joined", headline, span, labels=labels, hint="Couple them by equations that read the other side, as in `[emf: v = k * shaft.speed]`."
    )


_BOX_UNITS: Final = {
    "electrical": "ohm, S, H, F, V or A; W with `above` or `below`",
    "rotation": "rad/(N*m*s), N*m*s/rad, kg*m^2, rad/(N*m), rad/s or N*m",
    "translation": "m/s/N, N*s/m, kg, m/N, m/s or N",
    "heat": "K/W, W/K, J/K, K or W",
}


def box_unit(span: Span, found: Quality, domain: str) -> Diagnostic:
    """A box with a unit that is no element."""
    if found.dimension.is_none:
        hint = f"Is the unit missing? A box in this island has {_BOX_UNITS[domain]}."
    else:
        hint = f"A box in this island has {_BOX_UNITS[domain]}."
        if domain == "electrical":
            hint += " A shaft or a heat path needs a reference of its kind, such as `reference frame (rad/s)`."
    return error("box-unit", f"no element is {describe(found)}", span, hint=hint)


def box_zero_without_unit(span: Span) -> Diagnostic:
    """[0]."""
    return error("box-unit", "0 of what? In a box the unit says what it is", span)


def power_without_bound(span: Span) -> Diagnostic:
    """[20 kW]."""
    hint = f"Write `{span.text} above 300 V`: the lowest voltage at which it still draws that power."
    return error("power-without-bound", "a constant power needs the voltage where it ends", span, hint=hint)


def power_box_in_heat(span: Span) -> Diagnostic:
    """[20 W above 5 K] in a heat island."""
    return error("power-in-heat", "in a heat island a power flows through: it has no bound", span, hint=f"Write `[{span.text}]`.")


def power_bound_not_positive(span: Span, relation: str) -> Diagnostic:
    """above -5 V."""
    return error("power-bound", f"the bound behind `{relation}` must be above zero", span)


def power_relation(span: Span, relation: str, value: float) -> Diagnostic:
    """-5 kW above 300 V."""
    if relation == "above":
        return error(
            "power-relation", "a negative power delivers; it is bounded `below` its highest voltage", span, hint="Write `below` and that voltage."
        )
    return error(
        "power-relation", "a positive power is a load; it is bounded `above` its lowest voltage", span, hint="Write `above`, or a negative power."
    )


def storage_not_positive(span: Span, found: Quality, value: float) -> Diagnostic:
    """[-5 uH]."""
    return error("not-positive", f"{describe(found)} must be above zero", span)


def no_resistance(span: Span) -> Diagnostic:
    """[0 ohm]."""
    return error(
        "not-positive", "a resistance of zero is a bare wire", span, hint="Write `a -- b`; with a name, `link: a -- b`, its current can be read."
    )


def spring_by_stiffness(span: Span, unit: str) -> Diagnostic:
    """[100 N*m/rad]."""
    hint = "A spring is written by its compliance, `0.01 rad/N/m`; a constant torque in `N*m`."
    return error("spring", f"`{unit}` has the dimension of a torque, and would be read as one", span, hint=hint)


def nothing_stored(span: Span, box: Span) -> Diagnostic:
    """[5 ohm initially 3 V]."""
    return error("nothing-stored", "`initially` belongs to what stores: nothing in this box does", span, labels=at(box, "the box"))


def start_of_mixed_box(span: Span, box: Span) -> Diagnostic:
    """[v = 2 ohm * i + d/dt (1 mH * i) initially 3 A]."""
    hint = "Put what stores into a box of its own beside it: `[v = d/dt …  initially …]`."
    return error("initially-kind", "this box does more than store, so `initially` can't tell its start", span, labels=at(box, "the box"), hint=hint)


def stored_of_varying(span: Span, found: Quality, direct: Quality) -> Diagnostic:
    """A flux as start of a varying inductor."""
    headline = f"with a value that varies, {describe(found)} does not tell the start"
    return error("initially-kind", headline, span, hint=f"Give {describe(direct)} instead.")


def equation_without_own(span: Span, across: str, through: str) -> Diagnostic:
    """[bus.v = 400 V]."""
    return error(
        "equation-own",
        f"this equation does not hold the box's own `{across}` or `{through}`",
        span,
        hint="For any other equation write `solve … from …`.",
    )


# ---------------------------------------------------------------- placements and settings


def unknown_kind(span: Span, name: str, nearest: str | None, word: str | None) -> Diagnostic:
    """x: pol(a, b)."""
    if word is not None:
        return error("unknown-kind", f"`{name}` is {article(word)} and can't be placed", span, hint=meant(nearest))
    return error("unknown-kind", f"there is no assembly, device or control block `{name}`", span, hint=meant(nearest), replace=nearest)


def device_belongs_in_box(span: Span, kind: str, name: str) -> Diagnostic:
    """d1: diode(a, b)."""
    return error("device-in-box", f"`{kind}` has two terminals and stands in a box", span, hint=f"Write `{name}: a --[{kind}(…)]-- b`.")


def device_not_electrical(span: Span, kind: str, domain: str) -> Diagnostic:
    """A diode in a heat island."""
    return error("device-domain", f"`{kind}` is electrical and can't stand in {article(domain)} island", span)


def terminals_missing(span: Span, kind: str, terminals: Sequence[str], missing: Sequence[str]) -> Diagnostic:
    """pole(a, b)."""
    hint = f"Its terminals are {listed(terminals)}; one left open on purpose is `unconnected`."
    return error("terminals-missing", f"`{kind}` has no node for {listed(missing)}", span, hint=hint)


def terminal_twice(span: Span, terminal: str, first: Span) -> Diagnostic:
    """pole(a, b, c, top = d)."""
    return error("terminal-twice", f"the terminal `{terminal}` has two nodes", span, labels=at(first, "first here"))


def terminal_needs_node(span: Span, terminal: str, kind: str) -> Diagnostic:
    """pole(5 V, b, c)."""
    return error("terminal-node", f"the terminal `{terminal}` of `{kind}` needs a node", span)


def too_many_arguments(span: Span, kind: str, terminals: Sequence[str], count: int) -> Diagnostic:
    """berth(a, b, c, d)."""
    return error(
        "too-many-arguments",
        f"`{kind}` has {plural(len(terminals), 'terminal')}: {listed(terminals)}; {count} given",
        span,
        hint="Settings have names: `name = value`.",
    )


def too_many_settings(span: Span, kind: str, names: Sequence[str]) -> Diagnostic:
    """diode(1 V, 2 mohm, 3)."""
    takes = f"takes {listed(names)} in this order" if names else "takes no value without a name"
    return error("too-many-arguments", f"`{kind}` {takes}; this is one too many", span, hint="Others by name: `name = value`.")


def unknown_setting(span: Span, name: str, kind: str, nearest: str | None, known: Sequence[str], word: str | None) -> Diagnostic:
    """berth(…, setpiont = 5 V)."""
    hint = meant(nearest)
    if hint is None and known:
        hint = f"It has {listed(known)}."
    if word is not None:
        return error(
            "unknown-setting",
            f"`{name}` is {article(word)} inside `{kind}` and can't be set from outside",
            span,
            hint="Make it a `given` or an `input`.",
        )
    return error("unknown-setting", f"`{kind}` has no setting `{name}`", span, hint=hint, replace=nearest)


def setting_missing(span: Span, kind: str, name: str, document: str) -> Diagnostic:
    """pole without rate."""
    meaning = f" ({document})" if document else ""
    return error("setting-missing", f"`{kind}` needs `{name} = …`{meaning}", span)


def setting_twice(span: Span, name: str, first: Span) -> Diagnostic:
    """By position and by name."""
    return error("setting-twice", f"`{name}` is set twice", span, labels=at(first, "first here"))


def settings_contradict(span: Span, sentence: str, hint: str) -> Diagnostic:
    """What a device's own check found."""
    return error("settings-contradict", sentence, span, hint=hint[:1].upper() + hint[1:] + ("" if hint.endswith(".") else "."))


def start_varies(span: Span, name: str) -> Diagnostic:
    """breaker(bus.v > 5 V)."""
    hint = "Let an event change it: `whenever …: close …`. A contact that follows a condition is `switch(on = …)`."
    return error("varying-value", f"the start of `{name}` must not vary", span, hint=hint)


def word_wanted(span: Span, setting: str, kind: str, words: Sequence[str], nearest: str | None) -> Diagnostic:
    """conduction = always."""
    return error("word-wanted", f"`{setting}` of `{kind}` is one of {listed(words)}", span, hint=meant(nearest), replace=nearest)


def part_wanted(span: Span, setting: str, kind: str, parts: Sequence[str], nearest: str | None) -> Diagnostic:
    """upper = 5."""
    shown = ", ".join(f"`{part}(…)`" for part in parts)
    return error("part-wanted", f"`{setting}` of `{kind}` is one of {shown}", span, hint=meant(nearest))


def part_without_brackets(span: Span, part: str) -> Diagnostic:
    """upper = transistor."""
    return error("part-wanted", f"`{part}` needs its brackets", span, hint=f"Write `{part}()` for an ideal one.", replace=f"{part}()")


def inductor_wanted(span: Span, setting: str, word: str | None) -> Diagnostic:
    """choke = 5."""
    found = "" if word is None else f", and this is {article(word)}"
    return error("inductor-wanted", f"`{setting}` asks for the name of an inductor's box, or a list of them{found}", span)


def block_argument(span: Span, kind: str, count: int, settings: Sequence[str]) -> Diagnostic:
    """pi_control()."""
    return error(
        "block-argument",
        f"`{kind}` takes one input; {'none' if count == 0 else count} given",
        span,
        hint=f"Settings have names: {listed(settings)}.",
    )


def pi_gains_differ(span: Span, ki: Quality, kp_span: Span, kp: Quality) -> Diagnostic:
    """ki not kp per second."""
    labels = at(kp_span, describe(kp))
    headline = f"`ki` must be `kp` per second, and it is {describe(ki)}"
    return error("pi-gains", headline, span, labels=labels, hint="`kp * err` and the integral of `ki * err` are added.")
