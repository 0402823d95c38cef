"""From reductions to syntax nodes: one method per rule of netlist.lark, called by the parser with the rule's extent and its kept children."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from polewise.grammar import messages
from polewise.grammar import syntax as s
from polewise.grammar.checks import walk
from polewise.grammar.diagnostics import Diagnostic
from polewise.grammar.source import SourceText, Span
from polewise.grammar.tokens import Token
from polewise.grammar.words import SAMPLING_WORDS, START_WORDS, TABLE_WORDS, VALUE_NAMES, nearest_word


class Builder:
    """Builds the nodes of one text and notes what a node shows to be wrong."""

    def __init__(self, source: SourceText) -> None:
        self.source = source
        self.diagnostics: list[Diagnostic] = []

    def _span(self, start: int, end: int) -> Span:
        return Span(self.source, start, end)

    def _of(self, token: Token) -> Span:
        return Span(self.source, token.start, token.end)

    def _text(self, token: Token | None) -> str | None:
        return None if token is None else token.text

    # ------------------------------------------------------------ a file

    def netlist(self, start: int, end: int, *statements: s.Statement) -> tuple[s.Statement, ...]:
        return statements

    def orders(self, start: int, end: int, *orders: s.Order) -> tuple[s.Order, ...]:
        return orders

    def steps(self, start: int, end: int, *steps: s.Step) -> tuple[s.Step, ...]:
        return steps

    def action_lines(self, start: int, end: int, *actions: s.Action) -> tuple[s.Action, ...]:
        return actions

    def title(self, start: int, end: int, text: Token) -> s.Title:
        return s.Title(self._span(start, end), text.text)

    def use(self, start: int, end: int, path: Token) -> s.Use:
        return s.Use(self._span(start, end), path.text, self._of(path))

    def reference_node(self, start: int, end: int, name: s.NamePart, kind: Token | None) -> s.ReferenceNode:
        return s.ReferenceNode(self._span(start, end), name, None if kind is None else kind.unit, None if kind is None else self._of(kind))

    # ------------------------------------------------------------ names

    def name(self, start: int, end: int, first: Token, *indices: tuple[Any, ...]) -> s.NamePart:
        if not indices:
            return s.NamePart(Span(self.source, start, end), (first.text,))
        pieces: list[Any] = [first.text]
        for index in indices:
            pieces.extend(index)
        return s.NamePart(Span(self.source, start, end), tuple(pieces))

    def index(self, start: int, end: int, inside: s.Expression | Token, rest: Token | None) -> tuple[Any, ...]:
        value = s.Star(self._of(inside)) if isinstance(inside, Token) else inside
        return (value,) if rest is None else (value, rest.text)

    def reference(self, start: int, end: int, *parts: s.NamePart) -> s.Reference:
        return s.Reference(parts[0].span if len(parts) == 1 else Span(self.source, start, end), parts)

    # ------------------------------------------------------------ values, signals, control

    def _declared(self, name: s.NamePart) -> s.NamePart:
        plain = name.plain
        if plain is not None and plain in VALUE_NAMES:
            self.diagnostics.append(messages.reserved_name(name.span, plain, VALUE_NAMES[plain]))
        return name

    def given(self, start: int, end: int, target: s.Reference, value: s.Expression, tolerance: s.Tolerance | None, document: Token | None) -> s.Given:
        if len(target.parts) == 1:
            self._declared(target.parts[0])
        return s.Given(self._span(start, end), target, value, None, tolerance, self._text(document))

    def given_from_outside(self, start: int, end: int, target: s.Reference, unit: Token, document: Token | None) -> s.Given:
        if len(target.parts) == 1:
            self._declared(target.parts[0])
        return s.Given(self._span(start, end), target, None, unit.unit, None, self._text(document))

    def tolerance(self, start: int, end: int, value: s.Expression, normal: Token | None) -> s.Tolerance:
        return s.Tolerance(self._span(start, end), value, normal is not None)

    def input(self, start: int, end: int, name: s.NamePart, default: s.Expression | None, document: Token | None) -> s.Input:
        return s.Input(self._span(start, end), self._declared(name), default, self._text(document))

    def signal(self, start: int, end: int, name: s.NamePart, value: s.Expression) -> s.Signal:
        return s.Signal(self._span(start, end), self._declared(name), value)

    def state_rate(self, start: int, end: int, name: s.NamePart, rate: s.Expression, *clauses: tuple[str, Span, Any]) -> s.StateRate:
        found: dict[str, Any] = {}
        for clause, span, content in clauses:
            if clause in found:
                self.diagnostics.append(messages.twice(span, clause))
            found[clause] = content
        return s.StateRate(self._span(start, end), self._declared(name), rate, found.get("initially"), found.get("within"), held="held" in found)

    def state_initially(self, start: int, end: int, value: s.Expression) -> tuple[str, Span, Any]:
        return "initially", self._span(start, end), value

    def state_within(self, start: int, end: int, low: s.Expression, high: s.Expression) -> tuple[str, Span, Any]:
        return "within", self._span(start, end), (low, high)

    def state_held(self, start: int, end: int) -> tuple[str, Span, Any]:
        return "held", self._span(start, end), True

    def latch(self, start: int, end: int, name: s.NamePart, value: s.Expression) -> s.Latch:
        return s.Latch(self._span(start, end), self._declared(name), value)

    def solve(self, start: int, end: int, name: s.NamePart, left: s.Expression, right: s.Expression, initially: s.Expression | None) -> s.Solve:
        return s.Solve(self._span(start, end), self._declared(name), left, right, initially)

    def function(self, start: int, end: int, name: Token, parameters: tuple[Token, ...], value: s.Expression) -> s.Function:
        self._declared_token(name)
        self._distinct(parameters)
        return s.Function(self._span(start, end), name.text, self._of(name), tuple(parameter.text for parameter in parameters), value)

    def _declared_token(self, name: Token) -> None:
        if name.text in VALUE_NAMES:
            self.diagnostics.append(messages.reserved_name(self._of(name), name.text, VALUE_NAMES[name.text]))

    def _distinct(self, names: Sequence[Token]) -> None:
        seen: dict[str, Token] = {}
        for name in names:
            if name.text in seen:
                self.diagnostics.append(messages.name_twice(self._of(name), name.text, self._of(seen[name.text])))
            seen[name.text] = name

    def parameters(self, start: int, end: int, *names: Token) -> tuple[Token, ...]:
        return names

    def table_argument(self, start: int, end: int, name: Token, unit: Token | None) -> tuple[Token, Token | None]:
        return name, unit

    def table_unit(self, start: int, end: int, unit: Token) -> Token:
        return unit

    def point(self, start: int, end: int, x: s.Expression, y: s.Expression) -> tuple[s.Expression, s.Expression]:
        return x, y

    def table_points(self, start: int, end: int, *points: tuple[s.Expression, s.Expression]) -> tuple[tuple[s.Expression, s.Expression], ...]:
        return points

    def table_columns(self, start: int, end: int, x: Token, y: Token) -> tuple[str, str]:
        return x.text, y.text

    def table_words(self, start: int, end: int, *words: Token) -> tuple[Token, ...]:
        return words

    def _table_words(self, words: tuple[Token, ...]) -> tuple[bool, bool, str | None]:
        """Check the words behind a table; gives (smooth, odd, outside)."""
        smooth = odd = False
        outside: str | None = None
        for word in words:
            if word.text == "smooth" and not smooth:
                smooth = True
            elif word.text == "odd" and not odd:
                odd = True
            elif word.text in ("hold", "extend", "repeat") and outside is None:
                outside = word.text
            elif word.text in TABLE_WORDS:
                self.diagnostics.append(messages.table_word_again(self._of(word), word.text, outside))
            else:
                self.diagnostics.append(messages.table_word_unknown(self._of(word), word.text, nearest_word(word.text, TABLE_WORDS)))
        return smooth, odd, outside

    def table_of_points(
        self,
        start: int,
        end: int,
        name: Token,
        argument: tuple[Token, Token | None],
        unit: Token | None,
        points: tuple[tuple[s.Expression, s.Expression], ...],
        words: tuple[Token, ...],
    ) -> s.Table:
        self._declared_token(name)
        smooth, odd, outside = self._table_words(words)
        return s.Table(
            span=self._span(start, end),
            name=name.text,
            name_span=self._of(name),
            argument=argument[0].text,
            argument_unit=None if argument[1] is None else argument[1].unit,
            unit=None if unit is None else unit.unit,
            points=points,
            file=None,
            file_span=None,
            columns=None,
            smooth=smooth,
            odd=odd,
            outside=outside,
        )

    def table_from_file(
        self,
        start: int,
        end: int,
        name: Token,
        argument: tuple[Token, Token | None],
        unit: Token | None,
        file: Token,
        columns: tuple[str, str] | None,
        words: tuple[Token, ...],
    ) -> s.Table:
        self._declared_token(name)
        smooth, odd, outside = self._table_words(words)
        return s.Table(
            span=self._span(start, end),
            name=name.text,
            name_span=self._of(name),
            argument=argument[0].text,
            argument_unit=None if argument[1] is None else argument[1].unit,
            unit=None if unit is None else unit.unit,
            points=(),
            file=file.text,
            file_span=self._of(file),
            columns=columns,
            smooth=smooth,
            odd=odd,
            outside=outside,
        )

    def wires(self, start: int, end: int, name: s.NamePart, wires: tuple[Token, ...]) -> s.Wires:
        self._distinct(wires)
        return s.Wires(self._span(start, end), name, tuple(wire.text for wire in wires))

    # ------------------------------------------------------------ assemblies and repetition

    def assembly(self, start: int, end: int, name: Token, ports: tuple[s.NamePart, ...], document: Token | None, *body: s.Statement) -> s.Assembly:
        self._no_file_statements(body, "an assembly")
        return s.Assembly(self._span(start, end), name.text, self._of(name), ports, self._text(document), body)

    def _no_file_statements(self, body: Sequence[s.Statement], place: str) -> None:
        for statement in body:
            if isinstance(statement, s.Title | s.Use | s.Study | s.Assembly):
                word = type(statement).__name__.lower()
                opening = Span(self.source, statement.span.start, statement.span.start + len(word))
                self.diagnostics.append(messages.not_inside(opening, word, place))

    def ports(self, start: int, end: int, *ports: s.NamePart) -> tuple[s.NamePart, ...]:
        seen: dict[str, s.NamePart] = {}
        for port in ports:
            plain = port.plain
            if plain is not None and plain in seen:
                self.diagnostics.append(messages.name_twice(port.span, plain, seen[plain].span))
            elif plain is not None:
                seen[plain] = port
        return ports

    def each(self, start: int, end: int, variable: Token, first: s.Expression, last: s.Expression, *body: s.Statement) -> s.Each:
        self._declared_token(variable)
        self._no_file_statements(body, "`each`")
        return s.Each(self._span(start, end), variable.text, first, last, body)

    # ------------------------------------------------------------ paths and boxes

    def path(self, start: int, end: int, name: s.NamePart | None, *items: s.Reference | s.Box | s.ParallelBoxes) -> s.Path:
        if not isinstance(items[-1], s.Reference):
            self.diagnostics.append(messages.path_ends_in_box(items[-1].span))
        return s.Path(self._span(start, end), None if name is None else self._declared(name), items)

    def box(self, start: int, end: int, inside: s.Box) -> s.Box:
        return s.Box(self._span(start, end), inside.name, inside.content, inside.initially)

    def parallel_boxes(self, start: int, end: int, *boxes: s.Box) -> s.ParallelBoxes:
        return s.ParallelBoxes(self._span(start, end), boxes)

    def box_inside(self, start: int, end: int, name: s.NamePart | None, content: s.BoxContent, initially: s.Expression | None) -> s.Box:
        return s.Box(self._span(start, end), name, content, initially)

    def value_box(self, start: int, end: int, value: s.Expression) -> s.ValueBox:
        return s.ValueBox(value)

    def power_box(self, start: int, end: int, power: s.Expression, relation: Token, voltage: s.Expression) -> s.PowerBox:
        return s.PowerBox(power, relation.text, voltage)

    def equation_box(self, start: int, end: int, left: s.Expression, right: s.Expression) -> s.EquationBox:
        return s.EquationBox(left, right)

    def placement(
        self, start: int, end: int, name: s.NamePart, kind: Token, arguments: tuple[Any, ...] | None, document: Token | None
    ) -> s.Placement:
        plain, settings = self._arguments(arguments)
        return s.Placement(self._span(start, end), self._declared(name), kind.text, self._of(kind), plain, settings, self._text(document))

    # ------------------------------------------------------------ expressions

    def conditional(self, start: int, end: int, value: s.Expression, condition: s.Expression, otherwise: s.Expression) -> s.Conditional:
        return s.Conditional(self._span(start, end), value, condition, otherwise)

    def binary(self, start: int, end: int, left: s.Expression, operator: Token, right: s.Expression) -> s.Binary:
        return s.Binary(Span(self.source, start, end), operator.text, left, right)

    def unary(self, start: int, end: int, operator: Token, operand: s.Expression) -> s.Unary:
        return s.Unary(Span(self.source, start, end), operator.text, operand)

    def filtered(self, start: int, end: int, operand: s.Expression, by: s.Expression) -> s.Filtered:
        for node in walk(by):
            # `1/s` reads as one per second; in a filter the reader meant a division.
            if isinstance(node, s.Number) and node.unit is not None and node.unit.symbol.startswith("/s") and "/" in node.span.text.split(" ")[0]:
                self.diagnostics.append(messages.filter_slash(node.span, node.span.text.replace("/", " / ", 1)))
        return s.Filtered(self._span(start, end), operand, by, None)

    def filtered_in_z(self, start: int, end: int, operand: s.Expression, by: s.Expression, variable: Token, rate: s.Expression) -> s.Filtered:
        if variable.text != "z":
            self.diagnostics.append(messages.filter_variable(self._of(variable), variable.text))
        return s.Filtered(self._span(start, end), operand, by, rate)

    def sampled(self, start: int, end: int, operand: s.Expression, rate: s.Expression) -> s.Sampled:
        return s.Sampled(self._span(start, end), operand, rate)

    def delayed(self, start: int, end: int, operand: s.Expression, time: s.Expression) -> s.Delayed:
        return s.Delayed(self._span(start, end), operand, time)

    def averaged(self, start: int, end: int, operand: s.Expression, time: s.Expression) -> s.Averaged:
        return s.Averaged(self._span(start, end), operand, time)

    def derivative(self, start: int, end: int, operand: s.Expression) -> s.Derivative:
        return s.Derivative(self._span(start, end), operand)

    def number(self, start: int, end: int, token: Token) -> s.Number:
        return s.Number(Span(self.source, start, end), token.number, token.unit, token.text)

    def true(self, start: int, end: int, token: Token) -> s.Boolean:
        return s.Boolean(self._span(start, end), True)

    def false(self, start: int, end: int, token: Token) -> s.Boolean:
        return s.Boolean(self._span(start, end), False)

    def call(self, start: int, end: int, name: Token, arguments: tuple[Any, ...] | None) -> s.Call:
        plain, settings = self._arguments(arguments)
        return s.Call(self._span(start, end), name.text, self._of(name), plain, settings)

    def list_of(self, start: int, end: int, *items: s.Expression) -> s.ListOf:
        return s.ListOf(self._span(start, end), items)

    def arguments(self, start: int, end: int, *items: Any) -> tuple[Any, ...]:
        return items

    def setting(self, start: int, end: int, name: Token, value: s.Expression) -> s.Setting:
        return s.Setting(self._span(start, end), name.text, self._of(name), value)

    def _arguments(self, items: tuple[Any, ...] | None) -> tuple[tuple[s.Expression, ...], tuple[s.Setting, ...]]:
        """Split what stands in brackets into plain arguments and settings: the former first, no setting twice."""
        if items is None:
            return (), ()
        plain: list[s.Expression] = []
        settings: dict[str, s.Setting] = {}
        for item in items:
            if isinstance(item, s.Setting):
                if item.name in settings:
                    self.diagnostics.append(messages.setting_twice(item.name_span, item.name, settings[item.name].name_span))
                settings[item.name] = item
            else:
                if settings:
                    self.diagnostics.append(messages.argument_after_setting(item.span, next(reversed(settings))))
                plain.append(item)
        return tuple(plain), tuple(settings.values())

    # ------------------------------------------------------------ events

    def at(self, start: int, end: int, time: s.Expression, *actions: s.Action) -> s.At:
        return s.At(self._span(start, end), time, actions)

    def every(self, start: int, end: int, period: s.Expression, *actions: s.Action) -> s.Every:
        return s.Every(self._span(start, end), period, actions)

    def whenever(
        self,
        start: int,
        end: int,
        condition: s.Expression,
        edge: tuple[str, s.Expression] | None,
        lasting: s.Expression | None,
        *actions: s.Action,
    ) -> s.Whenever:
        how, threshold = (None, None) if edge is None else edge
        return s.Whenever(self._span(start, end), condition, how, threshold, lasting, actions)

    def rises_above(self, start: int, end: int, word: Token, threshold: s.Expression) -> tuple[str, s.Expression]:
        return "rises above", threshold

    def falls_below(self, start: int, end: int, word: Token, threshold: s.Expression) -> tuple[str, s.Expression]:
        return "falls below", threshold

    def set_action(self, start: int, end: int, target: s.Reference, value: s.Expression) -> s.SetAction:
        return s.SetAction(self._span(start, end), target, value)

    def open_action(self, start: int, end: int, target: s.Reference) -> s.SwitchAction:
        return s.SwitchAction(self._span(start, end), target, False)

    def close_action(self, start: int, end: int, target: s.Reference) -> s.SwitchAction:
        return s.SwitchAction(self._span(start, end), target, True)

    def sequence(self, start: int, end: int, name: s.NamePart, *steps: s.Step) -> s.Sequence:
        seen: dict[str, s.Step] = {}
        for step in steps:
            if step.name in seen:
                self.diagnostics.append(messages.step_twice(step.span, step.name, seen[step.name].span))
            seen[step.name] = step
        return s.Sequence(self._span(start, end), self._declared(name), steps)

    def step_actions(self, start: int, end: int, *actions: s.Action) -> tuple[s.Action, ...]:
        return actions

    def step(
        self,
        start: int,
        end: int,
        name: Token,
        actions: tuple[s.Action, ...],
        until: tuple[s.Expression | None, s.Expression | None] | None,
        otherwise: tuple[Token, s.Expression | None] | None,
    ) -> s.Step:
        condition, after = (None, None) if until is None else until
        else_name, else_after = (None, None) if otherwise is None else otherwise
        if otherwise is not None and else_name is not None:
            if until is None:
                self.diagnostics.append(messages.else_without_until(self._of(else_name)))
            if else_after is None:
                self.diagnostics.append(messages.else_without_after(self._of(else_name), else_name.text))
        return s.Step(
            self._span(start, end),
            name.text,
            actions,
            condition,
            after,
            None if else_name is None else else_name.text,
            None if else_name is None else self._of(else_name),
            else_after,
        )

    def until(self, start: int, end: int, condition: s.Expression, after: s.Expression | None) -> tuple[s.Expression | None, s.Expression | None]:
        return condition, after

    def until_after(self, start: int, end: int, after: s.Expression) -> tuple[s.Expression | None, s.Expression | None]:
        return None, after

    def step_else(self, start: int, end: int, name: Token, after: s.Expression | None) -> tuple[Token, s.Expression | None]:
        return name, after

    # ------------------------------------------------------------ studies

    def study(self, start: int, end: int, name: Token, document: Token | None, *orders: s.Order) -> s.Study:
        seen: dict[type, Span] = {}
        for order in orders:
            if isinstance(order, s.Start | s.RunFor | s.StudyTolerance | s.Sampling | s.Magnify):
                if type(order) in seen:
                    self.diagnostics.append(messages.order_twice(order.span, order.span.text.split()[0], seen[type(order)]))
                seen[type(order)] = order.span
        return s.Study(self._span(start, end), name.text, self._of(name), self._text(document), orders)

    def start(self, start: int, end: int, how: Token) -> s.Start:
        if how.text not in ("settled", "cold"):
            self.diagnostics.append(messages.start_unknown(self._of(how), how.text, nearest_word(how.text, START_WORDS)))
        return s.Start(self._span(start, end), how.text, None, None)

    def start_from(self, start: int, end: int, study: Token, time: s.Expression) -> s.Start:
        return s.Start(self._span(start, end), "from", study.text, time)

    def run_for(self, start: int, end: int, time: s.Expression) -> s.RunFor:
        return s.RunFor(self._span(start, end), time)

    def keep(self, start: int, end: int, *items: s.Reference) -> s.Keep:
        return s.Keep(self._span(start, end), items)

    def study_tolerance(self, start: int, end: int, value: s.Expression) -> s.StudyTolerance:
        return s.StudyTolerance(self._span(start, end), value)

    def sampling(self, start: int, end: int, how: Token) -> s.Sampling:
        if how.text not in SAMPLING_WORDS:
            self.diagnostics.append(messages.sampling_unknown(self._of(how), how.text, nearest_word(how.text, SAMPLING_WORDS)))
        return s.Sampling(self._span(start, end), how.text)

    def modes(self, start: int, end: int, place: s.Place | None) -> s.Analysis:
        return s.Analysis(self._span(start, end), "modes", (), None, None, None, (), (), place)

    def loop(
        self, start: int, end: int, signals: tuple[s.Reference, ...], low: s.Expression, high: s.Expression, place: s.Place | None
    ) -> s.Analysis:
        return s.Analysis(self._span(start, end), "loop", signals, None, low, high, (), (), place)

    def response(
        self, start: int, end: int, output: s.Reference, input: s.Reference, low: s.Expression, high: s.Expression, place: s.Place | None
    ) -> s.Analysis:
        return s.Analysis(self._span(start, end), "response", (output,), input, low, high, (), (), place)

    def impedance(
        self,
        start: int,
        end: int,
        node: s.Reference,
        low: s.Expression,
        high: s.Expression,
        source: tuple[s.Reference, ...] | None,
        load: tuple[s.Reference, ...] | None,
        place: s.Place | None,
    ) -> s.Analysis:
        return s.Analysis(self._span(start, end), "impedance", (node,), None, low, high, source or (), load or (), place)

    def impedance_between(
        self,
        start: int,
        end: int,
        node: s.Reference,
        other: s.Reference,
        low: s.Expression,
        high: s.Expression,
        source: tuple[s.Reference, ...] | None,
        load: tuple[s.Reference, ...] | None,
        place: s.Place | None,
    ) -> s.Analysis:
        return s.Analysis(self._span(start, end), "impedance", (node,), other, low, high, source or (), load or (), place)

    def impedance_of_pair(
        self,
        start: int,
        end: int,
        d: s.Reference,
        q: s.Reference,
        low: s.Expression,
        high: s.Expression,
        source: tuple[s.Reference, ...] | None,
        load: tuple[s.Reference, ...] | None,
        place: s.Place | None,
    ) -> s.Analysis:
        return s.Analysis(self._span(start, end), "impedance", (d, q), None, low, high, source or (), load or (), place)

    def magnify(self, start: int, end: int, study: Token, low: s.Expression, high: s.Expression) -> s.Magnify:
        return s.Magnify(self._span(start, end), study.text, self._of(study), low, high)

    def source_side(self, start: int, end: int, items: tuple[s.Reference, ...]) -> tuple[s.Reference, ...]:
        return items

    def load_side(self, start: int, end: int, items: tuple[s.Reference, ...]) -> tuple[s.Reference, ...]:
        return items

    def references(self, start: int, end: int, *items: s.Reference) -> tuple[s.Reference, ...]:
        return items

    def place(self, start: int, end: int, time: s.Expression, study: Token) -> s.Place:
        return s.Place(self._span(start, end), time, study.text, self._of(study))

    def require(
        self,
        start: int,
        end: int,
        name: Token | None,
        subject: s.Expression,
        bound: tuple[str, s.Expression | None, s.Expression | None] | None,
        window: tuple[s.Expression, s.Expression | None] | None,
        document: Token | None,
    ) -> s.Require:
        relation, low, high = (None, None, None) if bound is None else bound
        opens, closes = (None, None) if window is None else window
        return s.Require(self._span(start, end), self._text(name), subject, relation, low, high, opens, closes, self._text(document))

    def bound_within(self, start: int, end: int, low: s.Expression, high: s.Expression) -> tuple[str, s.Expression | None, s.Expression | None]:
        return "within", low, high

    def bound_one_side(self, start: int, end: int, side: Token, limit: s.Expression) -> tuple[str, s.Expression | None, s.Expression | None]:
        return (side.text, limit, None) if side.text == "above" else (side.text, None, limit)

    def window_after(self, start: int, end: int, opens: s.Expression) -> tuple[s.Expression, s.Expression | None]:
        return opens, None

    def window_during(self, start: int, end: int, opens: s.Expression, closes: s.Expression) -> tuple[s.Expression, s.Expression | None]:
        return opens, closes
