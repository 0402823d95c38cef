"""Which mistake a token that can't stand where it stands comes from: the facts are found here, worded in messages.py."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

from polewise.grammar import messages
from polewise.grammar.diagnostics import Diagnostic
from polewise.grammar.source import SourceText, Span
from polewise.grammar.tables import Tables
from polewise.grammar.tokens import Token
from polewise.grammar.units import parse_unit
from polewise.grammar.words import (
    ACTION_WORDS,
    EXPRESSION_WORDS,
    LATER_ORDERS,
    OPENERS,
    ORDER_WORDS,
    SOFT_WORDS,
    nearest_word,
)

_OPENER_TYPES = frozenset(word.upper() for word in OPENERS)
_SOFT_TYPES = frozenset(SOFT_WORDS.values())
_WORD_TYPES = frozenset({*_OPENER_TYPES, *_SOFT_TYPES, *EXPRESSION_WORDS.values()})
_CLOSING = {"LPAR": ")", "LSQB": "]"}
_ENDS = frozenset({"_NEWLINE", "$END"})
# Tokens after which a value must come, and those that can end and begin one.
_WANTS_VALUE = frozenset(
    {"SIGN", "TIMES", "POWER", "COMPARE", "AND", "OR", "NOT", "IF", "OTHERWISE", "EQUAL", "RANGE", "COMMA", "TOLERANCE_MARK", "RATE_OF"}
)
_OPERATORS = frozenset({"SIGN", "TIMES", "POWER", "COMPARE", "AND", "OR", "RANGE", "TOLERANCE_MARK", "EQUAL", "COMMA", "VBAR"})
_ENDS_VALUE = frozenset({"NUMBER", "NAME", "NAME_REST", "_INDEX_CLOSE", "RPAR", "TRUE", "FALSE", "RSQB", *_SOFT_TYPES})
_BEGINS_VALUE = frozenset({"NUMBER", "NAME", "LPAR", "TRUE", "FALSE"})
_EVENTS = frozenset({"AT", "EVERY", "WHENEVER"})
_BLOCKS = frozenset({"ASSEMBLY", "EACH", "STUDY", "SEQUENCE", "STEP"})
# How a terminal is called in a list of what was expected; words and marks stand for themselves.
_CALLED = {
    "STRING": "a text in quotes",
    "UNIT": "a unit",
    "_NEWLINE": "the end of the statement",
    "$END": "the end of the text",
    "LBRACE": "a block `{`",
    "LSQB": "a box `[`",
    "COLON": "`:`",
    "COMMA": "`,`",
    "DOT": "`.`",
    "EQUAL": "`=`",
    "LPAR": "`(`",
    "RPAR": "`)`",
    "RSQB": "`]`",
    "RBRACE": "`}`",
    "VBAR": "`|`",
    "WIRE": "`--`",
    "RANGE": "`..`",
    "RATE_OF": "`d/dt`",
    "SEMICOLON": "`;`",
    "TOLERANCE_MARK": "`+-`",
    "SIGN": "`+` or `-`",
    "TIMES": "`*` or `/`",
    "POWER": "`^`",
    "COMPARE": "a comparison",
    "_INDEX_CLOSE": "`}`",
}


def line_start(tokens: Sequence[Token], index: int) -> int:
    """Index of the first token of the statement, order, step or line of actions that a token belongs to."""
    while index > 0 and tokens[index - 1].type not in ("_NEWLINE", "LBRACE"):
        index -= 1
    return index


@dataclass(frozen=True, slots=True)
class Mistake:
    """A token that can't stand where it stands, with the parser's states there."""

    source: SourceText
    tokens: Sequence[Token]
    index: int
    states: tuple[int, ...]
    tables: Tables
    body: str  # which of tables.STARTS is being read

    @property
    def token(self) -> Token:
        """The token itself."""
        return self.tokens[self.index]

    @property
    def previous(self) -> Token | None:
        """The token before it in its statement."""
        return self.tokens[self.index - 1] if self.index > self.statement else None

    @property
    def following(self) -> Token | None:
        """The token behind it."""
        return self.tokens[self.index + 1] if self.index + 1 < len(self.tokens) else None

    @property
    def statement(self) -> int:
        """Index of the first token of its statement."""
        return line_start(self.tokens, self.index)

    @property
    def first(self) -> Token:
        """The first token of its statement."""
        return self.tokens[self.statement]

    @property
    def span(self) -> Span:
        """Of the token."""
        return self.span_of(self.token)

    def span_of(self, token: Token, last: Token | None = None) -> Span:
        """The extent of a token, or from one to another."""
        return Span(self.source, token.start, (last or token).end)

    def open_bracket(self) -> Token | None:
        """The innermost bracket or index brace that this statement opened before the token and has not closed."""
        return self._open(("LPAR", "LSQB", "_INDEX_OPEN"), ("RPAR", "RSQB", "_INDEX_CLOSE"), self.statement)

    def open_block(self) -> int:
        """Index of the brace of the innermost open block; -1 outside any."""
        depth = 0
        for at in range(self.index - 1, -1, -1):
            type = self.tokens[at].type
            if type == "RBRACE":
                depth += 1
            elif type == "LBRACE":
                if depth == 0:
                    return at
                depth -= 1
        return -1

    def _open(self, opening: tuple[str, ...], closing: tuple[str, ...], begin: int) -> Token | None:
        stack: list[Token] = []
        for at in range(begin, self.index):
            token = self.tokens[at]
            if token.type in opening:
                stack.append(token)
            elif token.type in closing and stack:
                stack.pop()
        return stack[-1] if stack else None

    def place(self) -> str:
        """What kind of body the statement stands in: netlist, orders, steps or action_lines."""
        brace = self.open_block()
        if brace < 0:
            return self.body
        opener = self.tokens[line_start(self.tokens, brace)].type
        return {"STUDY": "orders", "SEQUENCE": "steps", "STEP": "action_lines"}.get(opener, "action_lines" if opener in _EVENTS else "netlist")

    def accepts(self, type: str) -> bool:
        """Whether a token of some type could stand here instead."""
        states = list(self.states)
        while True:
            action = self.tables.actions[states[-1]].get(type)
            if action is None or action >= 0:
                return action is not None
            rule = self.tables.rules[-1 - action]
            if rule.length:
                del states[-rule.length :]
            goto = self.tables.gotos[states[-1]].get(rule.origin)
            if goto is None:  # the start rule is complete
                return type == "$END"
            states.append(goto)

    def expected(self) -> list[str]:
        """All terminals that could stand here instead."""
        return [type for type in self.tables.actions[self.states[-1]] if self.accepts(type)]


def explain(mistake: Mistake) -> Diagnostic:
    """The one message for a mistake: the first rule that knows it."""
    for rule in _RULES:
        found = rule(mistake)
        if found is not None:
            return found
    expected = _list_expected(mistake.expected())
    if mistake.token.type in _ENDS and mistake.previous is not None:
        return messages.incomplete(mistake.span_of(mistake.previous), mistake.previous.text, expected)
    return messages.unexpected(mistake.span, _called(mistake.token), expected)


def one_per_missing_brace(diagnostics: list[Diagnostic]) -> list[Diagnostic]:
    """A block that is never closed makes what follows look misplaced: keep the one cause, and let it show the first such place."""
    brace = next((d for d in diagnostics if d.code == messages.BLOCK_NOT_CLOSED and d.labels), None)
    if brace is None:
        return diagnostics
    misplaced = sorted((d for d in diagnostics if d.code == messages.MISPLACED and d.span.start > brace.span.start), key=lambda d: d.span.start)
    if not misplaced:
        return diagnostics
    rest = [d for d in diagnostics if d is not brace and d not in misplaced]
    return [*rest, messages.closes_too_late(brace, misplaced[0].span)]


# ---------------------------------------------------------------- the ends of things


def _brackets(m: Mistake) -> Diagnostic | None:
    """Brackets that are not closed, or closed wrongly."""
    token, opening = m.token, m.open_bracket()
    if opening is not None and token.type in (*_ENDS, "WIRE", "LBRACE", "RBRACE") and not (token.type == "WIRE" and _closes_later(m, opening)):
        if opening.type == "_INDEX_OPEN":
            return messages.missing_index_end(m.span_of(opening))
        end = m.previous or token
        return messages.missing_bracket(m.span_of(opening), _CLOSING[opening.type], Span(m.source, end.end, end.end))
    if token.type in ("RPAR", "RSQB", "_INDEX_CLOSE"):
        if opening is None:
            return messages.extra_bracket(m.span)
        if opening.type in _CLOSING and _CLOSING[opening.type] != token.text:
            return messages.wrong_bracket(m.span, m.span_of(opening), _CLOSING[opening.type])
    return None


def _closes_later(m: Mistake, opening: Token) -> bool:
    """Whether the bracket is closed further on in the same statement."""
    depth = 0
    for at in range(m.index, len(m.tokens)):
        type = m.tokens[at].type
        if type == "_NEWLINE":
            return False
        if type == opening.type:
            return False  # the next box begins: this one was not closed
        if type == ("RSQB" if opening.type == "LSQB" else "RPAR"):
            if depth == 0:
                return True
            depth -= 1
    return False


def _braces(m: Mistake) -> Diagnostic | None:
    """Blocks that are not opened or not closed, indices apart from their name."""
    token, previous = m.token, m.previous
    if token.type == "$END":
        brace = m.open_block()
        if brace >= 0:
            return messages.missing_brace(m.span_of(m.tokens[brace]), m.tokens[line_start(m.tokens, brace)].text, m.span)
    if token.type == "RBRACE" and m.index == m.statement:
        return messages.extra_brace(m.span)
    if token.type == "_NEWLINE" and m.first.type in _BLOCKS and m.accepts("LBRACE"):
        return messages.missing_block(m.span_of(m.first), m.first.text)
    nothing_to_do = m.first.type in _EVENTS and (m.accepts("LBRACE") or m.accepts("SET")) and m.place() != "action_lines"
    if token.type == "_NEWLINE" and nothing_to_do and previous is not None and previous.type != "SEMICOLON":
        return messages.missing_actions(m.span_of(m.first), m.first.text)
    if token.type == "_INDEX_OPEN" and previous is not None:
        return messages.block_touches(m.span, previous.text)
    if token.type == "LBRACE" and not m.accepts("RANGE"):
        following = m.following
        if previous is not None and previous.type == "NAME" and following is not None and following.type in ("NAME", "NUMBER", "TIMES"):
            return messages.index_apart(m.span, previous.text)
        if not m.accepts("NUMBER") and len(set(m.expected()) - {"DOT", "_INDEX_OPEN"}) != 1:
            return messages.block_place(m.span)
    if token.type == "_INDEX_CLOSE" and previous is not None and previous.type == "_INDEX_OPEN":
        return messages.empty_index(m.span_of(previous, token))
    return None


# ---------------------------------------------------------------- the first words of a statement


def _opening(m: Mistake) -> Diagnostic | None:
    """A token that can't begin a statement, an order, a step or an action."""
    token = m.token
    if m.index == m.statement and not (m.place() == "action_lines" and token.type in ("NAME", *_WORD_TYPES)):
        if token.type == "LSQB":
            return messages.path_start(m.span)
        if token.type == "WIRE":
            return messages.wire_first(m.span)
        if token.type in _OPERATORS:
            return messages.operator_first(m.span)
        if token.type == "STRING":
            return messages.string_place(m.span)
        if token.type == "SEMICOLON":
            return messages.semicolon_place(m.span)
        if token.type == "IF":
            return messages.if_first(m.span)
    place = m.place()
    if place == "orders":
        return _order(m)
    if place == "steps":
        return _step(m)
    if place == "action_lines":
        return _action(m)
    return _statement(m)


def _order(m: Mistake) -> Diagnostic | None:
    first, span = m.first, m.span_of(m.first)
    if m.index == m.statement:
        if first.type in _OPENER_TYPES or first.type == "RATE_OF":
            return messages.not_in_study(span, first.text)
        return messages.unknown_order(span, first.text, nearest_word(first.text, _ORDERS)) if first.type in _WORD_TYPES else None
    if first.type == "NAME" and m.index == m.statement + 1:
        if first.text in LATER_ORDERS:
            return messages.later_order(span, first.text)
        if m.token.type in ("WIRE", "DOT", "EQUAL"):
            return messages.not_in_study(span, first.text)
        return messages.unknown_order(span, first.text, nearest_word(first.text, _ORDERS))
    if first.type == "NAME" and m.index == m.statement + 2 and m.tokens[m.index - 1].type == "COLON":
        return messages.study_name(m.span)
    return None


_ORDERS = frozenset({*ORDER_WORDS, "at", "every", "whenever", "given"})


def _step(m: Mistake) -> Diagnostic | None:
    return messages.not_a_step(m.span, m.token.text) if m.index == m.statement else None


def _action(m: Mistake) -> Diagnostic | None:
    """Where an action begins: at the start of a line, behind `:` or `;`."""
    if m.accepts("SET") and m.token.type in ("NAME", *_WORD_TYPES):
        if m.index == m.statement and (m.token.text in ORDER_WORDS or m.token.type in _OPENER_TYPES):
            return messages.not_an_action(m.span, m.token.text)
        return messages.unknown_action(m.span, m.token.text, nearest_word(m.token.text, frozenset(ACTION_WORDS)))
    return None


def _statement(m: Mistake) -> Diagnostic | None:
    first, span, token = m.first, m.span_of(m.first), m.token
    if m.first.type in _EVENTS:
        return _action(m)
    if m.index != m.statement + 1 or first.type not in ("NAME", *_SOFT_TYPES) or token.type in ("COLON", "DOT", "WIRE"):
        return None
    if first.text in ORDER_WORDS and token.type != "EQUAL":
        return messages.order_place(span, first.text)
    if first.text in ACTION_WORDS and token.type == "NAME":
        return messages.action_place(span, first.text)
    if first.text == "step" and token.type == "NAME":
        return messages.step_place(span)
    if token.type == "EQUAL":
        return messages.bare_assignment(span, first.text)
    if token.type == "LPAR":
        return messages.unnamed_placement(span, first.text)
    if token.type == "LSQB":
        return messages.missing_wire(m.span)
    if token.type == "SIGN" and token.text == "-":
        return messages.wire_mark(m.span)
    if token.type in ("NAME", "NUMBER", "STRING", "_NEWLINE", "$END", "RATE_OF", *_WORD_TYPES):
        return messages.unknown_statement(span, first.text, nearest_word(first.text, OPENERS))
    return None


# ---------------------------------------------------------------- paths and boxes


def _paths(m: Mistake) -> Diagnostic | None:
    """Wires and boxes."""
    token, previous, opening = m.token, m.previous, m.open_bracket()
    if previous is None:
        return None
    if token.type == "WIRE":
        if opening is not None and opening.type == "LSQB":
            return messages.wire_in_box(m.span)
        return messages.wire_place(m.span)
    if opening is not None:
        if token.type == "RSQB" and previous.type in ("LSQB", "COLON", "VBAR"):
            return messages.empty_box(m.span_of(opening, token))
        return None
    if previous.type == "WIRE":
        if token.type in _ENDS:
            return messages.path_end(m.span_of(previous))
        if token.type in ("NUMBER", "LPAR"):
            return messages.value_without_box(m.span, _value_text(m, m.index))
        return None
    if m.accepts("WIRE") and token.type in ("LSQB", "NAME") and previous.type in ("RSQB", "NAME", "_INDEX_CLOSE", "NAME_REST"):
        return messages.missing_wire(m.span)
    if m.accepts("WIRE") and token.type == "SIGN" and token.text == "-":
        return messages.wire_mark(m.span)
    if previous.type == "SIGN" and token.type == "LSQB":
        return messages.wire_mark(m.span_of(previous))
    if token.type == "COLON" and any(t.type == "DOT" for t in m.tokens[m.statement : m.index]) and m.first.type == "NAME" and m.accepts("WIRE"):
        return messages.dotted_name(m.span_of(m.first, previous))
    return None


def _value_text(m: Mistake, index: int) -> str:
    """The text from a token to the next wire or the statement's end."""
    end = index
    while end + 1 < len(m.tokens) and m.tokens[end + 1].type not in ("WIRE", *_ENDS) and end - index < 20:
        end += 1
    return m.source.text[m.tokens[index].start : m.tokens[end].end]


# ---------------------------------------------------------------- values


def _equals(m: Mistake) -> Diagnostic | None:
    """`=`, `==` and what is mistaken for them."""
    token, previous = m.token, m.previous
    if token.type == "EQUAL" and previous is not None:
        if previous.type == "COLON":
            return messages.colon_equals(m.span_of(previous, token))
        opening = m.open_bracket()
        if opening is not None and opening.type == "LPAR" and previous.type in ("NAME", "_INDEX_CLOSE", "NAME_REST") and _after_dot_or_index(m):
            return messages.setting_name(m.span)
        before = [t.type for t in m.tokens[m.statement : m.index]]
        if m.accepts("COMPARE") and ("IF" in before or "EQUAL" not in before):
            return messages.single_equals(m.span)
        if "EQUAL" in before:
            return messages.second_equals(m.span)
    following = m.following
    if token.type == "COLON" and following is not None and following.type == "EQUAL" and following.start == token.end:
        return messages.colon_equals(m.span_of(token, following))
    if token.type == "COMPARE":
        if token.text == "==" and m.accepts("EQUAL") and not m.accepts("COMPARE"):
            return messages.double_equals(m.span)
        if m.accepts("AND"):
            return messages.comparison_chain(m.span)
    return None


def _after_dot_or_index(m: Mistake) -> bool:
    at = m.index - 1
    return m.tokens[at].type in ("_INDEX_CLOSE", "NAME_REST") or (at > 0 and m.tokens[at - 1].type == "DOT")


def _conditions(m: Mistake) -> Diagnostic | None:
    """`if` and `otherwise`."""
    token = m.token
    if m.accepts("OTHERWISE"):
        if token.text == "else":
            return messages.else_for_otherwise(m.span)
        condition = next((t for t in reversed(m.tokens[m.statement : m.index]) if t.type == "IF"), None)
        if condition is not None and (token.type in _ENDS or token.type in ("RPAR", "RSQB", "COMMA")):
            return messages.missing_otherwise(m.span_of(condition))
    if token.type in ("IF", "OTHERWISE"):
        return messages.if_place(m.span)
    return None


def _marks(m: Mistake) -> Diagnostic | None:
    """Tolerances, ranges, strings, semicolons."""
    token, previous = m.token, m.previous
    if previous is None:
        return None
    if token.type == "TOLERANCE_MARK":
        return messages.tolerance_place(m.span)
    if token.type == "NUMBER" and m.accepts("TOLERANCE_MARK"):
        return messages.tolerance_mark(m.span)
    if token.type == "COMMA" and previous.type == "NUMBER" and previous.unit is None:
        following = m.following
        if following is not None and following.type == "NUMBER" and previous.end == token.start and token.end == following.start:
            return messages.decimal_comma(m.span_of(previous, following), f"{previous.text}.{m.source.text[following.start : following.end]}")
    if m.accepts("RANGE") and not m.accepts("NUMBER"):
        word = next((t for t in reversed(m.tokens[m.statement : m.index]) if t.type in ("IN", "WITHIN", "DURING")), None)
        if word is not None:
            return messages.range_missing(m.span_of(word), word.text)
    if m.accepts("STRING") and not m.accepts("_NEWLINE") and not m.accepts("LBRACE"):
        return messages.missing_string(m.span if token.type not in _ENDS else m.span_of(previous), previous.text)
    if token.type == "STRING":
        return messages.string_place(m.span)
    if token.type == "SEMICOLON":
        return None if m.accepts("NAME") else messages.semicolon_place(m.span)
    if token.type == "VBAR" and m.accepts("OR"):
        return messages.bar_place(m.span)
    if token.type == "TIMES" and token.text == "*" and previous.text == "*" and previous.end == token.start:
        return messages.power_mark(m.span_of(previous, token))
    if m.first.type == "TABLE" and token.type == "RPAR" and m.accepts("COMMA") and m.open_bracket() is not None:
        return messages.table_point(m.span)
    if m.accepts("UNIT") and not m.accepts("NUMBER"):
        return messages.missing_unit(m.span_of(previous), previous.text)
    return None


def _missing(m: Mistake) -> Diagnostic | None:
    """A value or a name that is not there."""
    token, previous = m.token, m.previous
    if previous is None:
        return None
    where = m.span_of(previous) if token.type in _ENDS else m.span
    if m.accepts("NUMBER"):
        if token.type == "RPAR" and previous.type == "LPAR":
            return messages.empty_brackets(m.span_of(previous, token))
        if (token.type in _OPENER_TYPES and token.type != "AT") or token.type in EXPRESSION_WORDS.values():
            return messages.reserved_word(m.span, token.text, token.type in _OPENER_TYPES)
        if previous.type in _WANTS_VALUE or previous.type in _WORD_TYPES or previous.type in ("LPAR", "COLON", "LSQB", "VBAR", "_INDEX_OPEN"):
            return messages.missing_value(where, previous.text)
    if m.accepts("NAME") and not m.accepts("_NEWLINE"):
        if token.type == "NUMBER":
            return messages.name_starts_with_digit(m.span)
        if token.type in _OPENER_TYPES or token.type in EXPRESSION_WORDS.values():
            return messages.reserved_word(m.span, token.text, token.type in _OPENER_TYPES)
        return messages.missing_name(where, previous.text)
    return None


def _neighbours(m: Mistake) -> Diagnostic | None:
    """Two things side by side that nothing joins."""
    token, previous = m.token, m.previous
    if previous is None:
        return None
    if token.type in _OPENER_TYPES and token.type != "AT":
        return messages.two_statements(m.span, token.text)
    if token.type == "NAME" or token.type in _SOFT_TYPES:
        words = frozenset(word for word, type in {**SOFT_WORDS, **EXPRESSION_WORDS}.items() if m.accepts(type))
        near = nearest_word(token.text, words)
        if near is not None:
            return messages.unknown_word(m.span, token.text, near)
        if previous.type == "NUMBER" and previous.unit is not None and parse_unit(token.text) is not None:
            return messages.unit_blank(m.span, token.text)
    if m.first.type == "ASSEMBLY" and token.type == "LPAR" and previous.type == "NAME" and m.open_bracket() is not None:
        return messages.port_bundle(m.span_of(previous), previous.text)
    if m.accepts("EQUAL") and (not m.accepts("COMPARE") or m.first.type == "SOLVE") and (token.type in _ENDS or token.type in _BEGINS_VALUE):
        return messages.missing_equals(m.span_of(previous), previous.text)
    expected = m.expected()
    only = [type for type in expected if type not in ("DOT", "_INDEX_OPEN")]
    if len(only) == 1 and only[0] not in ("_NEWLINE", "NAME", "NUMBER", "UNIT"):
        return messages.expected_word(m.span if token.type not in _ENDS else m.span_of(previous), _called(token), previous.text, _bare(only[0]))
    if previous.type in _ENDS_VALUE and token.type in _BEGINS_VALUE and m.accepts("SIGN"):
        opening = m.open_bracket()
        left = _left_text(m)
        if opening is not None and opening.type == "LPAR":
            return messages.missing_comma(m.span, left, token.text)
        return messages.missing_operator(m.span, left, token.text)
    return None


def _left_text(m: Mistake) -> str:
    """The text of the value's last stretch before the token."""
    previous = m.tokens[m.index - 1]
    return m.source.text[previous.start : previous.end]


_RULES: tuple[Callable[[Mistake], Diagnostic | None], ...] = (
    _brackets,
    _braces,
    _opening,
    _paths,
    _equals,
    _conditions,
    _marks,
    _missing,
    _neighbours,
)


# ---------------------------------------------------------------- what was expected


def _bare(type: str) -> str:
    return _CALLED.get(type, type.lower()).strip("`")


def _called(token: Token) -> str:
    if token.type == "_NEWLINE":
        return "the end of the statement"
    if token.type == "$END":
        return "the end of the text"
    return f"`{token.text}`" if token.type != "STRING" else "a text in quotes"


def _list_expected(types: list[str]) -> str:
    """What could have stood there, in the language's words."""
    names: list[str] = []
    rest = set(types) - {"DOT", "_INDEX_OPEN"}
    if {"NAME", "NUMBER"} <= rest:
        names.append("a value")
        rest -= {"NAME", "NUMBER", "LPAR", "NOT", "TRUE", "FALSE", "SIGN", "RATE_OF", "STAR"}
    elif "NAME" in rest:
        names.append("a name")
        rest.discard("NAME")
    if {"TIMES", "SIGN"} <= rest:
        names.append("an operator")
        rest -= {"TIMES", "SIGN", "POWER", "COMPARE", "AND", "OR", "IF", "FILTERED", "SAMPLED", "DELAYED", "AVERAGED"}
    if "_NEWLINE" in rest:
        names.append("the end of the statement")
        rest -= {"_NEWLINE", "SEMICOLON"}
    names += [_CALLED.get(type, f"`{type.lower()}`") for type in sorted(rest)]
    if len(names) > 5:
        return ""
    return names[0] if len(names) == 1 else ", ".join(names[:-1]) + " or " + names[-1] if names else ""
