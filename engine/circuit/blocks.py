"""Control blocks, `loop: pi_control(…)`: a registry of what each takes, what can be read from it, and how it is made of states and latches."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Final

from polewise.circuit import box_messages, dimensions, value_messages
from polewise.circuit.asking import Asked, constant, fits, number, poisoned, wanted
from polewise.circuit.dimensions import CONDITION, POISON, TIME, UNKNOWN, Quality
from polewise.circuit.model import Assignment, ConditionEvent, SignalDef, StateDef
from polewise.circuit.near import nearest
from polewise.circuit.scope import Env, Value
from polewise.circuit.things import DONE, BlockStateThing, BlockThing, LatchThing
from polewise.expression.graph import Node
from polewise.grammar import syntax

if TYPE_CHECKING:
    from polewise.circuit.expansion import Expansion

# A rate limiter follows its input with this time constant where it does not limit.
RATE_LIMIT_LAG_S: Final = 10e-6


@dataclass(frozen=True, slots=True)
class BlockSetting:
    """One setting of a control block."""

    name: str
    document: str
    required: bool = True


@dataclass(frozen=True, slots=True)
class Written:
    """What a block's maker works on: its place, its argument and the settings that are written."""

    block: BlockThing
    argument: syntax.Expression
    settings: dict[str, syntax.Setting]

    @property
    def env(self) -> Env:
        """Where its expressions stand."""
        return self.block.env


@dataclass(frozen=True, slots=True)
class BlockKind:
    """A kind of control block.

    Args:
        name: as written.
        settings: all by name; the one plain argument is the input.
        readings: name → what it reads; the block's own name reads its main output.
        make: works out main output and readings, adds states and latches.
        finish: adds what needs the output's kind, once everything is known.
        states, latches: names inside it that events may set.
        document: for help and docs.
    """

    name: str
    settings: tuple[BlockSetting, ...]
    readings: dict[str, str]
    make: Callable[[Expansion, Written], Value]
    finish: Callable[[Expansion, Written], None]
    document: str
    states: tuple[str, ...] = ()
    latches: tuple[str, ...] = field(default=())

    def declare(self, x: Expansion, block: BlockThing) -> None:
        """Give the block its inner things, so that they can be read and set before it is worked out."""
        for name in self.states:
            block.states[name] = BlockStateThing(f"{block.flat}.{name}", block.scope, block.span, block.env, block)
        for name in self.latches:
            latch = LatchThing(f"{block.flat}.{name}", block.scope, block.span, block.env, None)
            latch.quality, latch.stage = CONDITION, DONE
            block.states[name] = latch


def work_out_block(x: Expansion, block: BlockThing) -> Quality:
    """Main output and readings of a block."""
    kind = BLOCKS[block.written.kind]
    written = _read_settings(x, block, kind)
    if written is None:
        block.outputs = {name: poisoned(x) for name in kind.readings}
        return _wrong(block)
    node, quality = kind.make(x, written)
    if quality is POISON:
        return _wrong(block)
    block.node = node
    return quality


def _wrong(block: BlockThing) -> Quality:
    for thing in block.states.values():
        if isinstance(thing, BlockStateThing):
            thing.quality, thing.stage = POISON, DONE
    return POISON


def finish_block(x: Expansion, block: BlockThing) -> None:
    """Its signal, states, latches and events."""
    x.ensure(block)
    if block.quality is POISON:
        return
    kind = BLOCKS[block.written.kind]
    written = _read_settings(x, block, kind)
    assert written is not None
    block.node = kind.make(x, written)[0]  # once more: everything it reads is known by now
    is_condition = block.quality is CONDITION
    if "output" not in kind.states and "output" not in kind.latches:
        x.signals[block.flat] = SignalDef(block.flat, block.node, block.quality.dimension, block.scope.path, block.span, is_condition)
    kind.finish(x, written)


def _read_settings(x: Expansion, block: BlockThing, kind: BlockKind) -> Written | None:
    statement = block.written
    if len(statement.arguments) != 1:
        x.report.add(box_messages.block_argument(statement.kind_span, kind.name, len(statement.arguments), [s.name for s in kind.settings]))
        return None
    names = [s.name for s in kind.settings]
    settings: dict[str, syntax.Setting] = {}
    wrong = False
    for setting in statement.settings:
        if setting.name not in names:
            x.report.add(box_messages.unknown_setting(setting.name_span, setting.name, kind.name, nearest(setting.name, names), names, None))
            wrong = True
        settings[setting.name] = setting
    for spec in kind.settings:
        if spec.required and spec.name not in settings:
            x.report.add(box_messages.setting_missing(statement.kind_span, kind.name, spec.name, spec.document))
            wrong = True
    return None if wrong else Written(block, statement.arguments[0], settings)


def _limits(x: Expansion, written: Written, quality: Quality) -> tuple[Node | None, Node | None]:
    """Nodes of `low` and `high`."""
    asked = Asked(quality, f"the output of `{written.block.flat}`", written.block.written.kind_span)
    low, high = (wanted(x, written.settings[name].value, written.env, asked) if name in written.settings else None for name in ("low", "high"))
    if low is not None and high is not None:
        a, b = x.graph.value_of(low), x.graph.value_of(high)
        if a is not None and b is not None and a > b:
            x.report.add(value_messages.bounds_swapped(written.settings["low"].span, written.block.written.kind))
    return low, high


def _limited(x: Expansion, node: Node, low: Node | None, high: Node | None) -> Node:
    g = x.graph
    if low is not None and high is not None:
        return g.limit(node, low, high)
    if low is not None:
        return g.maximum(node, low)
    return node if high is None else g.minimum(node, high)


# ---------------------------------------------------------------- pi_control


def _make_pi(x: Expansion, written: Written) -> Value:
    block, g = written.block, x.graph
    error, of_error = number(x, written.argument, written.env, "`pi_control`")
    kp, of_kp = number(x, written.settings["kp"].value, written.env, "`kp`")
    ki, of_ki = number(x, written.settings["ki"].value, written.env, "`ki`")
    share = of_kp.times(of_error) or POISON
    rate = of_ki.times(of_error) or POISON
    from_rate = rate.times(TIME) or POISON
    quality = share.plus(from_rate)
    if quality is None:
        x.report.add(box_messages.pi_gains_differ(written.settings["ki"].span, of_ki, written.settings["kp"].span, of_kp))
        quality = POISON
    integral = g.symbol("state", f"{block.flat}.integral")
    if quality is UNKNOWN or quality.sort == "zero":
        for name in ("low", "high", "initially"):
            if name in written.settings:
                bound = x.lower(written.settings[name].value, written.env)[1]
                if bound.sort == "number":
                    quality = bound
                    break
    state = block.states["integral"]
    assert isinstance(state, BlockStateThing)
    if quality.sort not in ("unknown",):
        state.quality, state.stage = dimensions.settled(quality), DONE
    proportional = g.multiply(kp, error)
    block.outputs = {"error": (error, of_error), "proportional": (proportional, quality)}
    low, high = _limits(x, written, quality)
    block.rate = g.multiply(ki, error)
    return _limited(x, g.add(proportional, integral), low, high), quality


def _finish_pi(x: Expansion, written: Written) -> None:
    block, quality = written.block, written.block.quality
    low, high = _limits(x, written, quality)
    initial = None
    if "initially" in written.settings:
        e = written.settings["initially"].value
        got = constant(x, e, written.env, "`initially`")
        if got is not None and fits(x, got[1], Asked(quality, "`initially`"), e.span):
            initial = got[0]
    name = f"{block.flat}.integral"
    x.states[name] = StateDef(name, block.rate, initial, low, high, False, quality.dimension, block.scope.path, block.span)


# ---------------------------------------------------------------- rate_limit


def _make_rate_limit(x: Expansion, written: Written) -> Value:
    block, g = written.block, x.graph
    node, quality = number(x, written.argument, written.env, "`rate_limit`")
    state = block.states["output"]
    assert isinstance(state, BlockStateThing)
    if quality.sort != "unknown":
        state.quality, state.stage = dimensions.settled(quality), DONE
    output = g.symbol("state", f"{block.flat}.output")
    per_second = Asked(quality.over(TIME) or POISON, f"the slope of `{block.flat}`", written.argument.span)
    rise = wanted(x, written.settings["rise"].value, written.env, per_second)
    fall = wanted(x, written.settings["fall"].value, written.env, per_second) if "fall" in written.settings else rise
    lag = g.constant(RATE_LIMIT_LAG_S)
    if "lag" in written.settings:
        lag = wanted(x, written.settings["lag"].value, written.env, Asked(TIME, "`lag`"))
    block.outputs = {"input": (node, quality)}
    block.rate = g.limit(g.divide(g.subtract(node, output), lag), g.negate(fall), rise)
    return output, quality


def _finish_rate_limit(x: Expansion, written: Written) -> None:
    block, quality = written.block, written.block.quality
    initial = None
    if "initially" in written.settings:
        e = written.settings["initially"].value
        got = constant(x, e, written.env, "`initially`")
        if got is not None and fits(x, got[1], Asked(quality, "`initially`"), e.span):
            initial = got[0]
    name = f"{block.flat}.output"
    x.states[name] = StateDef(name, block.rate, initial, None, None, False, quality.dimension, block.scope.path, block.span)


# ---------------------------------------------------------------- hysteresis


def _make_hysteresis(x: Expansion, written: Written) -> Value:
    node, quality = number(x, written.argument, written.env, "`hysteresis`")
    asked = Asked(quality, "`hysteresis`", written.argument.span)
    for name in ("off_below", "on_above"):
        wanted(x, written.settings[name].value, written.env, asked)
    written.block.outputs = {"input": (node, quality)}
    return x.graph.symbol("latch", f"{written.block.flat}.output"), CONDITION


def _finish_hysteresis(x: Expansion, written: Written) -> None:
    from polewise.circuit.values import finish_latch

    block, g = written.block, x.graph
    node, quality = number(x, written.argument, written.env, "`hysteresis`")
    asked = Asked(quality, "`hysteresis`", written.argument.span)
    low = wanted(x, written.settings["off_below"].value, written.env, asked)
    high = wanted(x, written.settings["on_above"].value, written.env, asked)
    latch = block.states["output"]
    assert isinstance(latch, LatchThing)
    latch.initial = g.constant(0.0)
    if "initially" in written.settings:
        e = written.settings["initially"].value
        got = constant(x, e, written.env, "`initially`")
        if got is not None and fits(x, got[1], Asked(CONDITION, "`initially`"), e.span):
            latch.initial = got[0]
    finish_latch(x, latch)
    symbol = g.symbol("latch", latch.flat)
    for name, condition, value in (
        ("on", g.both(g.greater(node, high), g.invert(symbol)), 1.0),
        ("off", g.both(g.greater(low, node), symbol), 0.0),
    ):
        assignment = Assignment("latch", latch.flat, g.constant(value), block.span)
        x.condition_events.append(
            ConditionEvent(f"{block.flat}.{name}", condition, 0.0, False, (assignment,), block.span, f"{block.flat} turns {name}")
        )


# ---------------------------------------------------------------- the registry

BLOCKS: Final[dict[str, BlockKind]] = {
    kind.name: kind
    for kind in (
        BlockKind(
            "pi_control",
            (
                BlockSetting("kp", "gain"),
                BlockSetting("ki", "integral gain, per second"),
                BlockSetting("low", "lowest output", False),
                BlockSetting("high", "highest output", False),
                BlockSetting("initially", "start of the integral", False),
            ),
            {"error": "its input", "integral": "its integral", "proportional": "kp * input"},
            _make_pi,
            _finish_pi,
            "Proportional and integral control: limit(kp*err + integral, low, high), d/dt integral = ki*err. "
            "The integral is held at low and high while its rate points outward (anti-windup).",
            states=("integral",),
        ),
        BlockKind(
            "rate_limit",
            (
                BlockSetting("rise", "steepest rise, per second"),
                BlockSetting("fall", "steepest fall, per second; as `rise` where it is not given", False),
                BlockSetting("lag", "time constant with which it follows where it does not limit; 10 us where it is not given", False),
                BlockSetting("initially", "start of the output", False),
            ),
            {"input": "its input", "output": "its output"},
            _make_rate_limit,
            _finish_rate_limit,
            "Follows its input no faster than rise and fall: d/dt output = limit((input - output)/lag, -fall, rise).",
            states=("output",),
        ),
        BlockKind(
            "hysteresis",
            (
                BlockSetting("off_below", "turns false below"),
                BlockSetting("on_above", "turns true above"),
                BlockSetting("initially", "its start; false where it is not given", False),
            ),
            {"input": "its input", "output": "true or false"},
            _make_hysteresis,
            _finish_hysteresis,
            "A condition that turns true when the input rises above on_above and false when it falls below off_below.",
            latches=("output",),
        ),
    )
}
