"""What is in a box, by its unit or its equation: branches with their laws, two-terminal devices."""

from __future__ import annotations

from typing import Final

from polewise.circuit import box_messages, dimensions, value_messages
from polewise.circuit.asking import Asked, constant, fits, number, wanted
from polewise.circuit.device_settings import device_settings
from polewise.circuit.dimensions import CONDITION, POISON, TIME, ZERO, Quality
from polewise.circuit.expansion import Expansion
from polewise.circuit.model import Branch, Device, Domain, Law
from polewise.circuit.things import ACROSS, THROUGH, BoxThing
from polewise.devices.kind import KINDS, DeviceKind, SettingValue
from polewise.expression.graph import Node
from polewise.grammar import syntax
from polewise.grammar.source import Span
from polewise.grammar.units import Dimension


def _laws_by_unit(domain: Domain) -> dict[Dimension, Law]:
    across, through = domain.across_dimension, domain.through_dimension
    second = TIME.dimension
    laws = {
        across / through: Law.RESISTANCE,
        through / across: Law.CONDUCTANCE,
        through * second / across: Law.CHARGE,
        across: Law.VOLTAGE,
        through: Law.CURRENT,
    }
    if domain is not Domain.HEAT:  # nothing stores heat flow
        laws[across * second / through] = Law.FLUX
    return laws


LAWS: Final = {domain: _laws_by_unit(domain) for domain in Domain}


def finish_box(x: Expansion, box: BoxThing) -> None:
    """The branch of a box, and its device where it has one."""
    written = box.written
    if box.flat in x.between_kinds:
        return
    if written is None:
        _add_branch(x, box, Law.VOLTAGE, x.graph.constant(0.0), None, None)
        return
    content = written.content
    if isinstance(content, syntax.EquationBox):
        _equation(x, box, content)
    elif isinstance(content, syntax.PowerBox):
        _constant_power(x, box, content)
    elif box.kind is not None:
        call = content.call if isinstance(content, syntax.DeviceBox) else content.value
        assert isinstance(call, syntax.Call)
        _device(x, box, box.kind, call)
    elif isinstance(content, syntax.DeviceBox):
        x.lower(content.call, box.env)
    else:
        _value(x, box, content.value)


def _add_branch(
    x: Expansion, box: BoxThing, law: Law, expression: Node | None, initial: Node | None, value_span: Span | None, device: str | None = None
) -> None:
    x.branches[box.flat] = Branch(
        box.flat,
        x.root(box.left.key),
        x.root(box.right.key),
        law,
        expression,
        initial,
        box.scope.path,
        box.span,
        x.domain(box.left.key),
        device,
        "",
        value_span,
    )


# ---------------------------------------------------------------- values


def _value(x: Expansion, box: BoxThing, e: syntax.Expression) -> None:
    assert box.written is not None
    node, quality = x.lower(e, box.env)
    if quality is POISON:
        return
    domain = x.domain(box.left.key)
    law = LAWS[domain].get(quality.dimension) if quality.sort == "number" else None
    if law is None:
        _no_element(x, e, quality, domain)
        return
    if domain is Domain.ROTATION and dimensions.differ_by_turn(quality, dimensions.ANGULAR_RATE):
        fits(x, quality, Asked(dimensions.ANGULAR_RATE, "a speed box"), e.span)
        return
    if law is Law.CURRENT and isinstance(e, syntax.Number) and e.unit is not None and e.unit.symbol.endswith("/rad"):
        x.report.add(box_messages.spring_by_stiffness(e.span, e.unit.symbol))
        return
    value = x.graph.value_of(node)
    if value is not None and _wrong_constant(x, e, law, value, quality):
        return
    initial = _initially(x, box, law, node)
    if law in (Law.CHARGE, Law.FLUX):  # the law's expression is the charge C*v or the flux L*i
        node = x.graph.multiply(node, box.across(x) if law is Law.CHARGE else box.through(x))
    _add_branch(x, box, law, node, initial, e.span)


def _no_element(x: Expansion, e: syntax.Expression, quality: Quality, domain: Domain) -> None:
    if quality is ZERO:
        x.report.add(box_messages.box_zero_without_unit(e.span))
    elif quality is CONDITION:
        x.report.add(value_messages.condition_as_number(e.span, "a box"))
    elif quality.dimension == dimensions.POWER.dimension and domain is not Domain.HEAT:
        x.report.add(box_messages.power_without_bound(e.span))
    else:
        x.report.add(box_messages.box_unit(e.span, quality, domain.name.lower()))


def _wrong_constant(x: Expansion, e: syntax.Expression, law: Law, value: float, quality: Quality) -> bool:
    if law in (Law.CHARGE, Law.FLUX) and value <= 0.0:
        x.report.add(box_messages.storage_not_positive(e.span, quality, value))
        return True
    if law is Law.RESISTANCE and value == 0.0:
        x.report.add(box_messages.no_resistance(e.span))
        return True
    return False


def _initially(x: Expansion, box: BoxThing, law: Law, value: Node) -> Node | None:
    """The start value of a capacitor or inductor; a charge or flux is divided by the constant C or L."""
    assert box.written is not None
    e = box.written.initially
    if e is None:
        return None
    domain = x.domain(box.left.key)
    if law not in (Law.CHARGE, Law.FLUX):
        x.report.add(box_messages.nothing_stored(e.span, box.written.span))
        return None
    got = constant(x, e, box.env.but(memory="it must not vary"), "`initially`")
    if got is None:
        return None
    node, quality = got
    direct = ACROSS[domain] if law is Law.CHARGE else THROUGH[domain]
    stored = (THROUGH[domain] if law is Law.CHARGE else ACROSS[domain]).times(TIME)
    assert stored is not None
    if quality.sort == "number" and quality.dimension == stored.dimension and quality.dimension != direct.dimension:
        if not x.graph.is_constant(value):
            x.report.add(box_messages.stored_of_varying(e.span, quality, direct))
            return None
        return x.graph.divide(node, value)
    if not fits(x, quality, Asked(direct, "`initially` of a capacitor" if law is Law.CHARGE else "`initially` of an inductor"), e.span):
        return None
    return node


# ---------------------------------------------------------------- devices in a box


def _device(x: Expansion, box: BoxThing, kind: DeviceKind, call: syntax.Call) -> None:
    assert box.written is not None
    if box.written.initially is not None:
        x.report.add(box_messages.nothing_stored(box.written.initially.span, box.written.span))
    if not electrical(x, box.left.key, call.name_span, kind.name) or not electrical(x, box.right.key, call.name_span, kind.name):
        return
    settings = device_settings(x, kind, box.env, call.arguments, call.settings, call.name_span, box.latches)
    if settings is not None:
        add_device(x, box, kind, settings, call.span)


def add_device(x: Expansion, box: BoxThing, kind: DeviceKind, settings: dict[str, SettingValue], span: Span) -> None:
    """A two-terminal device with its branch."""
    terminals = {"left": x.root(box.left.key), "right": x.root(box.right.key)}
    latches = {name: latch.flat for name, latch in box.latches.items()}
    slot = kind.slots[0]
    x.devices[box.flat] = Device(box.flat, kind.name, terminals, settings, {slot.suffix: box.flat}, latches, box.scope.path, box.span)
    _add_branch(x, box, Law.DEVICE, None, None, span, device=box.flat)


def electrical(x: Expansion, key: str, span: Span, kind: str) -> bool:
    """Whether a node may carry a device."""
    domain = x.domain(key)
    if domain is Domain.ELECTRICAL:
        return True
    x.report.add(box_messages.device_not_electrical(span, kind, domain.name.lower()))
    return False


def _constant_power(x: Expansion, box: BoxThing, content: syntax.PowerBox) -> None:
    assert box.written is not None
    domain = x.domain(box.left.key)
    if box.written.initially is not None:
        x.report.add(box_messages.nothing_stored(box.written.initially.span, box.written.span))
    if domain is Domain.HEAT:
        x.report.add(box_messages.power_box_in_heat(content.power.span))
        return
    power = wanted(x, content.power, box.env, Asked(dimensions.POWER, f"a box with `{content.relation}`"))
    voltage, quality = number(x, content.voltage, box.env, f"`{content.relation}`")
    if not fits(x, quality, Asked(ACROSS[domain], f"`{content.relation}`"), content.voltage.span) or quality is POISON:
        return
    bound = x.graph.value_of(voltage)
    if bound is not None and bound <= 0.0:
        x.report.add(box_messages.power_bound_not_positive(content.voltage.span, content.relation))
        return
    value = x.graph.value_of(power)
    if value is not None and ((value < 0.0) == (content.relation == "above")) and value != 0.0:
        x.report.add(box_messages.power_relation(content.power.span, content.relation, value))
        return
    settings: dict[str, SettingValue] = {"power": power, "voltage": voltage, "relation": content.relation}
    add_device(x, box, KINDS["constant_power"], settings, content.power.span.to(content.voltage.span))


# ---------------------------------------------------------------- equations


def _equation(x: Expansion, box: BoxThing, content: syntax.EquationBox) -> None:
    """`left = right`: an explicit v or i where one side is just that, a stored charge or flux where the other is one `d/dt`, else implicit."""
    assert box.written is not None
    env = box.env.but(own=box, rates=True)
    domain = x.domain(box.left.key)
    for left, right in ((content.left, content.right), (content.right, content.left)):
        own = _own_name(left, domain)
        if own == "":
            continue
        quality = ACROSS[domain] if own == "across" else THROUGH[domain]
        asked = Asked(quality, f"`{left.span.text} =`", left.span)
        if isinstance(right, syntax.Derivative):
            stored = quality.times(TIME)
            assert stored is not None
            node = wanted(x, right.operand, env.but(rates=False), Asked(stored, f"`{left.span.text} = d/dt`", left.span))
            law = Law.FLUX if own == "across" else Law.CHARGE
            _add_branch(x, box, law, node, _initially(x, box, law, node), right.span)
            return
        node = wanted(x, right, env, asked)
        symbol = box.across(x) if own == "across" else box.through(x)
        _no_initially(x, box)
        if symbol in x.graph.symbols_under([node]):
            _add_branch(x, box, Law.IMPLICIT, x.graph.subtract(symbol, node), None, content.right.span)
        else:
            _add_branch(x, box, Law.VOLTAGE if own == "across" else Law.CURRENT, node, None, content.right.span)
        return
    a, qa = number(x, content.left, env, "an equation")
    b, qb = number(x, content.right, env, "an equation")
    _no_initially(x, box)
    if POISON in (qa, qb):
        return
    if qa.plus(qb) is None:
        x.report.add(value_messages.sides_differ(content.left.span.to(content.right.span), content.left.span, qa, content.right.span, qb))
        return
    residual = x.graph.subtract(a, b)
    leaves = set(x.graph.symbols_under([residual]))
    rates = [x.rates[x.graph.symbols[n][1]].expression for n in leaves if x.graph.symbols[n][0] == "rate"]
    leaves.update(x.graph.symbols_under(rates))
    if box.across(x) not in leaves and box.through(x) not in leaves:
        x.report.add(box_messages.equation_without_own(content.left.span.to(content.right.span), domain.across, domain.through))
        return
    _add_branch(x, box, Law.IMPLICIT, residual, None, content.left.span.to(content.right.span))


def _own_name(e: syntax.Expression, domain: Domain) -> str:
    """ "across" or "through" where an expression is just the box's own v or i."""
    if not isinstance(e, syntax.Reference) or len(e.parts) != 1:
        return ""
    name = e.parts[0].plain
    if name == domain.across:
        return "across"
    return "through" if name == domain.through else ""


def _no_initially(x: Expansion, box: BoxThing) -> None:
    assert box.written is not None
    if box.written.initially is None:
        return
    if any(name.startswith(f"{box.flat}#") for name in x.rates):
        x.report.add(box_messages.start_of_mixed_box(box.written.initially.span, box.written.span))
    else:
        x.report.add(box_messages.nothing_stored(box.written.initially.span, box.written.span))
