"""A syntax tree to its canonical text, so that reading the text again gives the same tree."""

from __future__ import annotations

from collections.abc import Sequence

from polewise.grammar import syntax as s
from polewise.grammar.units import Unit

INDENT = "    "

# How tightly an expression binds, loose to tight; an operand that binds more loosely than its place asks for goes in brackets.
_LOOSEST = 0
_OR, _AND, _NOT, _COMPARE, _POSTFIX, _SUM, _PRODUCT, _SIGNED, _POWER, _ATOM = range(1, 11)
_BINDS = {"or": _OR, "and": _AND, "+": _SUM, "-": _SUM, "*": _PRODUCT, "/": _PRODUCT, "^": _POWER}
_COMPARISONS = frozenset({"<", "<=", ">", ">=", "==", "!="})


def to_text(netlist: s.Netlist) -> str:
    """The netlist in canonical layout: one statement per line, blocks indented, blanks around operators. Comments are not in the tree."""
    return "".join(line + "\n" for line in _statements(netlist.statements, ""))


def expression_text(expression: s.Expression) -> str:
    """One expression in canonical layout."""
    return _expression(expression, _LOOSEST)


def reference_text(reference: s.Reference) -> str:
    """A dotted name as it is written."""
    return ".".join(_name(part) for part in reference.parts)


# ---------------------------------------------------------------- statements


def _statements(statements: Sequence[s.Statement], indent: str) -> list[str]:
    lines: list[str] = []
    for statement in statements:
        lines += _statement(statement, indent)
    return lines


def _statement(statement: s.Statement | s.Order, indent: str) -> list[str]:
    """The lines of one statement or order."""
    match statement:
        case s.Assembly():
            ports = ", ".join(_name(port) for port in statement.ports)
            head = f"assembly {statement.name}({ports}){_document(statement.document)}"
            return _block(indent, head, _statements(statement.body, indent + INDENT))
        case s.Each():
            ends = f"{_expression(statement.first, _SUM)} .. {_expression(statement.last, _SUM)}"
            return _block(indent, f"each {statement.variable} in {ends}", _statements(statement.body, indent + INDENT))
        case s.At():
            return _event(indent, f"at {expression_text(statement.time)}", statement.actions)
        case s.Every():
            return _event(indent, f"every {expression_text(statement.period)}", statement.actions)
        case s.Whenever():
            return _event(indent, _whenever(statement), statement.actions)
        case s.Sequence():
            lines: list[str] = []
            for step in statement.steps:
                lines += _step(step, indent + INDENT)
            return _block(indent, f"sequence {_name(statement.name)}", lines)
        case s.Study():
            orders: list[str] = []
            for order in statement.orders:
                orders += _statement(order, indent + INDENT)
            return _block(indent, f"study {statement.name}{_document(statement.document)}", orders)
        case _:
            return [indent + _line(statement)]


def _block(indent: str, head: str, lines: list[str]) -> list[str]:
    return [f"{indent}{head} {{", *lines, f"{indent}}}"]


def _line(statement: s.Statement | s.Order) -> str:
    """A statement or order of one line."""
    match statement:
        case s.Path():
            items = " -- ".join(_item(item) for item in statement.items).replace("-- [", "--[").replace("] --", "]--")
            return f"{_label(statement.name)}{items}"
        case s.Placement():
            inside = _arguments(statement.arguments, statement.settings)
            return f"{_name(statement.name)}: {statement.kind}({inside}){_document(statement.document)}"
        case s.Start():
            if statement.how == "from" and statement.time is not None:
                return f"start from {statement.study} at {_expression(statement.time, _SUM)}"
            return f"start {statement.how}"
        case s.RunFor():
            return f"run for {_expression(statement.time, _SUM)}"
        case s.Keep():
            return f"keep {', '.join(reference_text(item) for item in statement.items)}"
        case s.StudyTolerance():
            return f"tolerance {_expression(statement.value, _SUM)}"
        case s.Sampling():
            return f"sampling = {statement.how}"
        case s.Require():
            return _require(statement)
        case s.Analysis():
            return _analysis(statement)
        case s.Magnify():
            return f"magnify {statement.study} over {_expression(statement.low, _SUM)} .. {_expression(statement.high, _SUM)}"
        case _:
            return _declaration(statement)


def _analysis(order: s.Analysis) -> str:
    """A small-signal order."""
    text = order.kind
    if order.kind == "response":
        text += f" of {reference_text(order.subjects[0])}"
    elif order.subjects:
        text += " at " + ", ".join(reference_text(item) for item in order.subjects)
    if order.other is not None:
        text += f" to {reference_text(order.other)}"
    if order.low is not None and order.high is not None:
        text += f" over {_expression(order.low, _SUM)} .. {_expression(order.high, _SUM)}"
    for word, side in (("source", order.source), ("load", order.load)):
        if side:
            text += f" {word} " + ", ".join(reference_text(item) for item in side)
    if order.place is not None:
        text += f" at {_expression(order.place.time, _SUM)} of {order.place.study}"
    return text


def _declaration(statement: s.Statement | s.Order) -> str:
    """A statement that declares a name, or one of a file's head."""
    match statement:
        case s.Title():
            return f"title {_string(statement.text)}"
        case s.Use():
            return f"use {_string(statement.path)}"
        case s.ReferenceNode():
            return f"reference {_name(statement.name)}" + ("" if statement.kind is None else f" ({statement.kind.symbol})")
        case s.Given():
            return _given(statement)
        case s.Input():
            default = "" if statement.default is None else f" = {expression_text(statement.default)}"
            return f"input {_name(statement.name)}{default}{_document(statement.document)}"
        case s.Signal():
            return f"signal {_name(statement.name)} = {expression_text(statement.value)}"
        case s.StateRate():
            return _state_rate(statement)
        case s.Latch():
            return f"latch {_name(statement.name)} = {expression_text(statement.value)}"
        case s.Solve():
            equation = f"{expression_text(statement.left)} = {expression_text(statement.right)}"
            return f"solve {_name(statement.name)} from {equation}{_initially(statement.initially)}"
        case s.Function():
            return f"function {statement.name}({', '.join(statement.parameters)}) = {expression_text(statement.value)}"
        case s.Table():
            return _table(statement)
        case s.Wires():
            return f"wires {_name(statement.name)}({', '.join(statement.wires)})"
        case _:
            raise AssertionError(f"no layout for {type(statement).__name__}")


def _given(given: s.Given) -> str:
    text = f"given {reference_text(given.target)}"
    if given.value is None:
        text += f" in {_unit(given.unit)}"
    else:
        text += f" = {expression_text(given.value)}"
    if given.tolerance is not None:
        text += f" +- {_expression(given.tolerance.value, _SUM)}" + (" normal" if given.tolerance.normal else "")
    return text + _document(given.document)


def _state_rate(state: s.StateRate) -> str:
    text = f"d/dt {_name(state.name)} = {expression_text(state.rate)}{_initially(state.initially)}"
    if state.within is not None:
        text += f" within {_expression(state.within[0], _SUM)} .. {_expression(state.within[1], _SUM)}"
    return text + (" held" if state.held else "")


def _table(table: s.Table) -> str:
    argument = table.argument + ("" if table.argument_unit is None else f" in {_unit(table.argument_unit)}")
    text = f"table {table.name}({argument})" + ("" if table.unit is None else f" in {_unit(table.unit)}")
    if table.file is not None:
        text += f" from {_string(table.file)}"
        if table.columns is not None:
            text += f" columns {_string(table.columns[0])}, {_string(table.columns[1])}"
    else:
        text += " = " + " ".join(f"({expression_text(x)}, {expression_text(y)})" for x, y in table.points)
    words = [word for word, said in (("smooth", table.smooth), ("odd", table.odd), (table.outside or "", table.outside is not None)) if said]
    return " ".join((text, *words))


def _require(require: s.Require) -> str:
    text = ("" if require.name is None else f"{require.name}: ") + f"require {expression_text(require.subject)}"
    if require.relation == "within" and require.low is not None and require.high is not None:
        text += f" within {_expression(require.low, _SUM)} .. {_expression(require.high, _SUM)}"
    elif require.relation == "above" and require.low is not None:
        text += f" above {_expression(require.low, _SUM)}"
    elif require.relation == "below" and require.high is not None:
        text += f" below {_expression(require.high, _SUM)}"
    if require.window_start is not None:
        start = _expression(require.window_start, _SUM)
        text += f" after {start}" if require.window_end is None else f" during {start} .. {_expression(require.window_end, _SUM)}"
    return text + _document(require.document)


# ---------------------------------------------------------------- events


def _event(indent: str, head: str, actions: Sequence[s.Action]) -> list[str]:
    if len(actions) == 1:
        return [f"{indent}{head}: {_action(actions[0])}"]
    return _block(indent, head, [f"{indent}{INDENT}{_action(action)}" for action in actions])


def _whenever(event: s.Whenever) -> str:
    text = f"whenever {expression_text(event.condition)}"
    if event.edge is not None and event.threshold is not None:
        text += f" {event.edge} {_expression(event.threshold, _SUM)}"
    return text + ("" if event.lasting is None else f" for {_expression(event.lasting, _SUM)}")


def _action(action: s.Action) -> str:
    if isinstance(action, s.SetAction):
        return f"set {reference_text(action.target)} = {expression_text(action.value)}"
    return f"{'close' if action.closed else 'open'} {reference_text(action.target)}"


def _step(step: s.Step, indent: str) -> list[str]:
    tail = ""
    if step.until is not None:
        tail = f" until {expression_text(step.until)}" + ("" if step.after is None else f" after {_expression(step.after, _SUM)}")
    elif step.after is not None:
        tail = f" until after {_expression(step.after, _SUM)}"
    if step.else_name is not None:
        tail += f" else {step.else_name}" + ("" if step.else_after is None else f" after {_expression(step.else_after, _SUM)}")
    lines = _block(indent, f"step {step.name}", [f"{indent}{INDENT}{_action(action)}" for action in step.actions])
    return [*lines[:-1], lines[-1] + tail]


# ---------------------------------------------------------------- paths and boxes


def _item(item: s.Reference | s.Box | s.ParallelBoxes) -> str:
    match item:
        case s.Reference():
            return reference_text(item)
        case s.Box():
            return f"[{_box(item)}]"
        case s.ParallelBoxes():
            return f"[{' | '.join(_box(box) for box in item.boxes)}]"


def _box(box: s.Box) -> str:
    match box.content:
        case s.ValueBox(value):
            content = expression_text(value)
        case s.PowerBox(power, relation, voltage):
            content = f"{expression_text(power)} {relation} {_expression(voltage, _SUM)}"
        case s.EquationBox(left, right):
            content = f"{expression_text(left)} = {expression_text(right)}"
        case s.DeviceBox(call):
            content = expression_text(call)
    return f"{_label(box.name)}{content}{_initially(box.initially)}"


# ---------------------------------------------------------------- names, strings, small parts


def _name(name: s.NamePart) -> str:
    text = ""
    for piece in name.pieces:
        match piece:
            case str():
                text += piece
            case s.Star():
                text += "{*}"
            case _:
                text += "{" + expression_text(piece) + "}"
    return text


def _label(name: s.NamePart | None) -> str:
    return "" if name is None else f"{_name(name)}: "


def _string(text: str) -> str:
    """In quotes. A string has no escapes, so what can't stand in one is replaced by its nearest relative."""
    return '"' + text.replace('"', "'").replace("\n", " ") + '"'


def _document(text: str | None) -> str:
    return "" if text is None else f"  {_string(text)}"


def _initially(value: s.Expression | None) -> str:
    return "" if value is None else f" initially {expression_text(value)}"


def _unit(unit: Unit | None) -> str:
    return "1" if unit is None else unit.symbol


# ---------------------------------------------------------------- expressions


def _expression(expression: s.Expression, place: int) -> str:
    """An expression where at least the binding `place` is asked for."""
    text, binds = _bound(expression)
    return text if binds >= place else f"({text})"


def _bound(expression: s.Expression) -> tuple[str, int]:
    """The text of an expression and how tightly it binds."""
    match expression:
        case s.Number():
            return (expression.text or repr(expression.number)) + ("" if expression.unit is None else f" {expression.unit.symbol}"), _ATOM
        case s.Boolean():
            return ("true" if expression.value else "false"), _ATOM
        case s.Reference():
            return reference_text(expression), _ATOM
        case s.Call():
            return f"{expression.name}({_arguments(expression.arguments, expression.settings)})", _ATOM
        case s.ListOf():
            return f"({', '.join(expression_text(item) for item in expression.items)})", _ATOM
        case s.Unary():
            return _unary(expression)
        case s.Binary():
            return _binary(expression)
        case s.Derivative():
            return f"d/dt {_expression(expression.operand, _SIGNED)}", _SIGNED
        case s.Conditional():
            value, condition = _expression(expression.value, _OR), _expression(expression.condition, _OR)
            return f"{value} if {condition} otherwise {expression_text(expression.otherwise)}", _LOOSEST
        case _:
            return _postfix(expression), _POSTFIX


def _postfix(expression: s.Filtered | s.Sampled | s.Delayed | s.Averaged) -> str:
    operand = _expression(expression.operand, _POSTFIX)
    match expression:
        case s.Filtered():
            rate = "" if expression.rate is None else f" in z at {_expression(expression.rate, _SUM)}"
            return f"{operand} filtered by {_expression(expression.by, _SUM)}{rate}"
        case s.Sampled():
            return f"{operand} sampled at {_expression(expression.rate, _SUM)}"
        case s.Delayed():
            return f"{operand} delayed by {_expression(expression.time, _SUM)}"
        case s.Averaged():
            return f"{operand} averaged over {_expression(expression.time, _SUM)}"


def _unary(unary: s.Unary) -> tuple[str, int]:
    if unary.operator == "not":
        return f"not {_expression(unary.operand, _NOT)}", _NOT
    # A sign directly before another one would read as a wire or a tolerance.
    inner = isinstance(unary.operand, s.Unary)
    return unary.operator + _expression(unary.operand, _POWER if inner else _SIGNED), _SIGNED


def _binary(binary: s.Binary) -> tuple[str, int]:
    operator = binary.operator
    if operator in _COMPARISONS:
        return f"{_expression(binary.left, _POSTFIX)} {operator} {_expression(binary.right, _POSTFIX)}", _COMPARE
    binds = _BINDS[operator]
    if operator == "^":
        return _power(binary), _POWER
    right = _expression(binary.right, binds + 1)
    if isinstance(binary.right, s.Unary) and binary.right.operator != "not" and not right.startswith("("):
        right = f"({right})"  # a - (-b): two signs side by side would be hard to read, or a wire
    return f"{_expression(binary.left, binds)} {operator} {right}", binds


def _power(binary: s.Binary) -> str:
    left = _expression(binary.left, _ATOM)
    if isinstance(binary.left, s.Number) and binary.left.unit is not None:
        left = f"({left})"  # 5 V^2 is a number in square volts
    right = binary.right
    if isinstance(right, s.Unary) and right.operator != "not":
        return f"{left}^{right.operator}{_exponent(right.operand)}"
    return f"{left}^{_exponent(right)}"


def _exponent(expression: s.Expression) -> str:
    return _expression(expression, _POWER)


def _arguments(arguments: Sequence[s.Expression], settings: Sequence[s.Setting]) -> str:
    return ", ".join([*map(expression_text, arguments), *(f"{setting.name} = {expression_text(setting.value)}" for setting in settings)])
