"""Settings of devices and parts: by position and by name, checked against what the kind asks, defaults filled in."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from polewise.circuit import box_messages, dimensions
from polewise.circuit.asking import Asked, condition, constant, fits, number, wanted
from polewise.circuit.dimensions import CONDITION, FREQUENCY, POISON
from polewise.circuit.expansion import Expansion
from polewise.circuit.naming import find_thing
from polewise.circuit.near import nearest
from polewise.circuit.scope import Env
from polewise.circuit.things import BoxThing, LatchThing, PathThing
from polewise.devices.kind import PARTS, DeviceKind, PartValue, SettingSpec, SettingValue
from polewise.expression.graph import Node
from polewise.grammar import syntax
from polewise.grammar.source import Span
from polewise.grammar.units import RATE


def device_settings(
    x: Expansion,
    kind: DeviceKind,
    env: Env,
    positional: Sequence[syntax.Expression],
    by_name: Sequence[syntax.Setting],
    span: Span,
    latches: Mapping[str, LatchThing],
) -> dict[str, SettingValue] | None:
    """A device's settings.

    Args:
        positional: arguments after the terminals.
        by_name: settings that are no terminals.
        latches: that the device brings; their start values are set here.
    Returns:
        Values with defaults filled in, optional ones without default absent; None where something is wrong (reported).
    """
    if len(positional) > len(kind.positional):
        extra = positional[len(kind.positional)]
        x.report.add(box_messages.too_many_settings(extra.span, kind.name, kind.positional))
        return None
    written: dict[str, tuple[syntax.Expression, Span]] = {name: (e, e.span) for name, e in zip(kind.positional, positional)}
    wrong = False
    for setting in by_name:
        if setting.name in written:
            wrong = True
            x.report.add(box_messages.setting_twice(setting.name_span, setting.name, written[setting.name][1]))
        elif kind.setting(setting.name) is None:
            wrong = True
            known = [spec.name for spec in kind.settings]
            x.report.add(box_messages.unknown_setting(setting.name_span, setting.name, kind.name, nearest(setting.name, known), known, None))
        else:
            written[setting.name] = (setting.value, setting.name_span)
    values: dict[str, SettingValue] = {}
    for spec in kind.settings:
        given = written.get(spec.name)
        if given is None:
            if spec.required:
                wrong = True
                x.report.add(box_messages.setting_missing(span, kind.name, spec.name, spec.document))
            default = _default(x, spec)
            if default is not None:
                values[spec.name] = default
            continue
        value = _setting(x, kind.name, spec, given[0], given[1], env)
        if value is None:
            wrong = True
        else:
            values[spec.name] = value
    for spec_latch in kind.latches:
        _start_latch(x, latches[spec_latch.name], values.get(spec_latch.from_setting), written.get(spec_latch.from_setting))
    if wrong:
        return None
    problem = None if kind.check is None else kind.check(values)
    if problem is not None:
        x.report.add(box_messages.settings_contradict(span, problem[0], problem[1]))
        return None
    return values


def _start_latch(x: Expansion, latch: LatchThing, value: SettingValue | None, written: tuple[syntax.Expression, Span] | None) -> None:
    if not isinstance(value, int):
        return
    if not x.graph.is_constant(value):
        if written is not None:
            x.report.add(box_messages.start_varies(written[0].span, latch.flat))
        return
    latch.initial = value


def _default(x: Expansion, spec: SettingSpec) -> SettingValue | None:
    if isinstance(spec.default, str):
        return spec.default
    return None if spec.default is None else x.graph.constant(float(spec.default))


def _asked(kind: str, spec: SettingSpec, span: Span) -> Asked:
    quality = dimensions.PLAIN if spec.dimension is None else dimensions.quality(spec.dimension)
    if spec.dimension == RATE:
        quality = FREQUENCY  # a device's rates are in cycles
    return Asked(quality, f"`{spec.name}` of `{kind}`", span)


def _setting(x: Expansion, kind: str, spec: SettingSpec, e: syntax.Expression, span: Span, env: Env) -> SettingValue | None:
    if spec.role == "word":
        return _word(x, kind, spec, e)
    if spec.role == "part":
        return _part(x, kind, spec, e, env)
    if spec.role == "inductors":
        return _inductors(x, spec, e, env)
    if spec.role == "condition":
        return condition(x, e, env, f"`{spec.name}` of `{kind}`")
    asked = _asked(kind, spec, span)
    if spec.role == "constant":
        got = constant(x, e, env.but(memory="it must not vary"), asked.reason)
        if got is None:
            return None
        node, quality = got
        if spec.dimension is None and quality is not CONDITION:
            return node
        return node if fits(x, quality, asked, e.span) else None
    if spec.dimension is None:
        node, quality = number(x, e, env, asked.reason)
        return None if quality is POISON else node
    return wanted(x, e, env, asked)


def _word(x: Expansion, kind: str, spec: SettingSpec, e: syntax.Expression) -> str | None:
    name = e.parts[0].plain if isinstance(e, syntax.Reference) and len(e.parts) == 1 else None
    if name in spec.words:
        return name
    x.report.add(box_messages.word_wanted(e.span, spec.name, kind, spec.words, None if name is None else nearest(name, spec.words)))
    return None


def _part(x: Expansion, kind: str, spec: SettingSpec, e: syntax.Expression, env: Env) -> PartValue | None:
    name, name_span = "", e.span
    if isinstance(e, syntax.Call):
        name, name_span = e.name, e.name_span
    elif isinstance(e, syntax.Reference) and len(e.parts) == 1:
        name = e.parts[0].plain or ""
    if name not in spec.parts:
        x.report.add(box_messages.part_wanted(name_span, spec.name, kind, spec.parts, nearest(name, spec.parts) if name else None))
        return None
    if not isinstance(e, syntax.Call):
        x.report.add(box_messages.part_without_brackets(e.span, name))
        return None
    part = PARTS[name]
    names = [parameter.name for parameter in part.parameters]
    if len(e.arguments) > len(names):
        x.report.add(box_messages.too_many_settings(e.arguments[len(names)].span, name, tuple(names)))
        return None
    written: dict[str, tuple[syntax.Expression, Span]] = {n: (a, a.span) for n, a in zip(names, e.arguments)}
    for setting in e.settings:
        if setting.name in written:
            x.report.add(box_messages.setting_twice(setting.name_span, setting.name, written[setting.name][1]))
        elif setting.name not in names:
            x.report.add(box_messages.unknown_setting(setting.name_span, setting.name, name, nearest(setting.name, names), names, None))
        else:
            written[setting.name] = (setting.value, setting.name_span)
    values: dict[str, Node | None] = {}
    for parameter in part.parameters:
        given = written.get(parameter.name)
        if given is None:
            if parameter.required:
                x.report.add(box_messages.setting_missing(e.span, name, parameter.name, parameter.document))
            default = _default(x, parameter)
            values[parameter.name] = default if isinstance(default, int) else None
            continue
        value = _setting(x, name, parameter, given[0], given[1], env)
        values[parameter.name] = value if isinstance(value, int) else None
    return PartValue(name, values)


def _inductors(x: Expansion, spec: SettingSpec, e: syntax.Expression, env: Env) -> tuple[str, ...] | None:
    names: list[str] = []
    for item in e.items if isinstance(e, syntax.ListOf) else (e,):
        if not isinstance(item, syntax.Reference):
            x.report.add(box_messages.inductor_wanted(item.span, spec.name, None))
            return None
        thing = find_thing(x, item, env)
        if thing is None:
            return None
        box = thing.only if isinstance(thing, PathThing) else thing
        if not isinstance(box, BoxThing):
            x.report.add(box_messages.inductor_wanted(item.span, spec.name, thing.word))
            return None
        names.append(box.flat)
    return tuple(names)
