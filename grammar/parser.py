"""A text to its syntax tree and everything wrong in it: the loop over the parse tables, going on after an error, limits."""

from __future__ import annotations

import re
from bisect import bisect_left, bisect_right
from typing import Any

from polewise.grammar import messages
from polewise.grammar.checks import joined_names, without_too_deep
from polewise.grammar.diagnostics import Diagnostic
from polewise.grammar.mistakes import Mistake, explain, line_start, one_per_missing_brace
from polewise.grammar.source import SourceText, Span
from polewise.grammar.syntax import Netlist, Statement
from polewise.grammar.tables import Tables, tables
from polewise.grammar.tokens import MAX_DEPTH, Token, Tokens, tokenise
from polewise.grammar.tree import Builder
from polewise.grammar.words import SOFT_WORDS

MAX_CHARACTERS = 1_000_000
MAX_ERRORS = 50  # more than anyone reads in one go
MAX_APART = 3  # wrong opening lines inside each other, each read anew inside the last
# Control characters, and what stands for bytes that are no UTF-8.
_STRANGE = re.compile("[\x00-\x08\x0e-\x1f\x7f\ufffd]")

_SOFT_TERMINALS = frozenset(SOFT_WORDS.values())
# What a block's body is read as when the line that opens it is wrong, by the first word of that line.
_BODY = {
    "ASSEMBLY": "netlist",
    "EACH": "netlist",
    "STUDY": "orders",
    "SEQUENCE": "steps",
    "STEP": "action_lines",
    "AT": "action_lines",
    "EVERY": "action_lines",
    "WHENEVER": "action_lines",
}
_BLOCK_OPENERS = frozenset({"ASSEMBLY", "EACH", "STUDY", "SEQUENCE", "STEP"})
# Parts of a body: reading can begin again in a state where one of these may stand.
_ITEMS = ("statement", "order", "step", "action")


def parse(source: SourceText) -> tuple[Netlist, tuple[Diagnostic, ...]]:
    """Read a whole text.

    Args:
        source: any text at all.
    Returns:
        The tree, partial where the text is wrong, and what is wrong, in the order of the text: all of it, one diagnostic per cause.
    """
    refused = _refuse(source)
    if refused is not None:
        return Netlist(source, ()), (refused,)
    tokens = tokenise(source)
    if not tokens.complete:
        return Netlist(source, ()), _in_order(tokens.diagnostics)
    reading = _Reading(source, tokens)
    statements: tuple[Statement, ...] = reading.read("netlist", 0, len(tokens.tokens) - 1) or ()
    found = reading.all_diagnostics()
    if tokens.longest_line > MAX_DEPTH:
        statements, too_deep = without_too_deep(statements)
        found += too_deep
    found += joined_names(statements)
    return Netlist(source, statements), _in_order(one_per_missing_brace(found))


def _refuse(source: SourceText) -> Diagnostic | None:
    """What is no netlist at first sight."""
    text = source.text
    if len(text) > MAX_CHARACTERS:
        return messages.text_too_long(Span(source, 0, 0), len(text), MAX_CHARACTERS)
    strange = _STRANGE.search(text)
    if strange is not None:
        return messages.not_text(Span(source, strange.start(), strange.end()))
    return None


def _in_order(diagnostics: list[Diagnostic]) -> tuple[Diagnostic, ...]:
    return tuple(sorted(diagnostics, key=lambda diagnostic: diagnostic.span.start))


class _Stop(Exception):
    """Enough errors."""


class _Reading:
    """One text being read."""

    def __init__(self, source: SourceText, tokens: Tokens, depth: int = 0) -> None:
        self.source = source
        self.depth = depth
        self.tokens = tokens.tokens
        self.lexical = tokens.diagnostics
        self.lexical_at = [diagnostic.span.start for diagnostic in tokens.diagnostics]
        self.diagnostics: list[Diagnostic] = []
        self.builder = Builder(source)
        self.tables: Tables = tables()
        self.makers = [getattr(self.builder, rule.build) if rule.build not in ("", "list") else None for rule in self.tables.rules]

    def all_diagnostics(self) -> list[Diagnostic]:
        """From the characters, the grammar and the nodes."""
        return [*self.lexical, *self.diagnostics, *self.builder.diagnostics]

    def read(self, start: str, first: int, stop: int) -> Any:
        """Read tokens first … stop - 1 as one of tables.STARTS; None where too much is wrong."""
        end = self.tokens[stop].start
        tokens = [*self.tokens[first:stop], Token("$END", "", end, end)]
        stack = _Stack(self.tables.starts[start])
        index = 0
        try:
            while True:
                index = self._advance(tokens, index, stack, self.tables.ends[start])
                if index < 0:
                    return stack.values[-1]
                index = self._mend(tokens, index, stack, start)
        except _Stop:
            return None

    def _advance(self, tokens: list[Token], index: int, stack: _Stack, final: int) -> int:
        """Shift and reduce until the end, then -1, or until a token that can't stand there, then its index."""
        actions, gotos, rules, makers = self.tables.actions, self.tables.gotos, self.tables.rules, self.makers
        states, values, begins, ends = stack.states, stack.values, stack.begins, stack.ends
        state = states[-1]
        while True:
            token = tokens[index]
            type = token.type
            while True:
                action = actions[state].get(type)
                if action is None:
                    if type in _SOFT_TERMINALS and "NAME" in actions[state]:
                        type = "NAME"
                        continue
                    return index
                if action >= 0:
                    state = action
                    states.append(state)
                    values.append(token)
                    begins.append(token.start)
                    ends.append(token.end)
                    index += 1
                    break
                number = -1 - action
                rule = rules[number]
                length = rule.length
                if rule.build == "" and length == 1:  # only another name for what is on the stack
                    state = gotos[states[-2]][rule.origin]
                    states[-1] = state
                    continue
                children: list[Any]
                if length:
                    begin, end = begins[-length], ends[-1]
                    children = []
                    for which in rule.take:
                        if which is None:
                            children.append(None)
                        elif which >= 0:
                            children.append(values[which - length])
                        elif children:
                            children += values[-1 - which - length]
                        else:  # a list that grows at its end: taken over, so that n items cost n and not n * n
                            children = values[-1 - which - length]
                    del states[-length:], values[-length:], begins[-length:], ends[-length:]
                else:
                    begin = end = ends[-1] if ends else 0
                    children = [None] * len(rule.take)
                maker = makers[number]
                value: Any
                if maker is not None:
                    value = maker(begin, end, *children)
                else:
                    value = children if rule.build == "list" else children[0]
                state = gotos[states[-1]][rule.origin]
                states.append(state)
                values.append(value)
                begins.append(begin)
                ends.append(end)
                if state == final and type == "$END":
                    return -1

    # ------------------------------------------------------------ going on after an error

    def _mend(self, tokens: list[Token], index: int, stack: _Stack, body: str) -> int:
        """Report what is wrong at a token and bring stack and index to a place where reading can go on."""
        mistake = Mistake(self.source, tokens, index, self._states_before(tokens, index, stack), self.tables, body)
        self._report(mistake)
        token = tokens[index]
        opener = tokens[mistake.statement].type
        if token.type == "_NEWLINE" and opener in _BLOCK_OPENERS and mistake.accepts("LBRACE") and _closes_later(tokens, index):
            # The block's brace is missing or on the next line: go on inside the block.
            following = tokens[index + 1]
            tokens[index] = Token("LBRACE", "{", token.start, token.start)
            if following.type == "LBRACE":
                del tokens[index + 1]
            return index
        if token.type == "$END" and mistake.accepts("RBRACE"):
            tokens[index:index] = [Token("RBRACE", "}", token.start, token.start), Token("_NEWLINE", "", token.start, token.start)]
            return index
        return self._skip(tokens, index, stack, _BODY.get(opener))

    def _states_before(self, tokens: list[Token], index: int, stack: _Stack) -> tuple[int, ...]:
        """The states before the token was looked at.

        LALR tables may reduce a few times before they find that a token is wrong, which forgets what else could have come: so the
        line is gone through again, states only.
        """
        depth = self._line_start(stack)
        states = stack.states[:depth]
        for at in range(line_start(tokens, index), index):
            type = tokens[at].type
            while True:
                row = self.tables.actions[states[-1]]
                action = row.get(type, row.get("NAME") if type in _SOFT_TERMINALS else None)
                if action is None:
                    return tuple(stack.states)
                if action >= 0:
                    states.append(action)
                    break
                rule = self.tables.rules[-1 - action]
                if rule.length:
                    del states[-rule.length :]
                states.append(self.tables.gotos[states[-1]][rule.origin])
        return tuple(states)

    def _line_start(self, stack: _Stack) -> int:
        """Depth of the innermost state where a line of a body may begin."""
        actions, gotos = self.tables.actions, self.tables.gotos
        for depth in range(len(stack.states), 1, -1):
            state = stack.states[depth - 1]
            if ("RBRACE" in actions[state] or "$END" in actions[state]) and any(item in gotos[state] for item in _ITEMS):
                return depth
        return 1

    def _skip(self, tokens: list[Token], index: int, stack: _Stack, body: str | None) -> int:
        """Pass over the rest of the statement; blocks in it are read on their own, for their errors."""
        depth = 0
        opened = 0
        while True:
            type = tokens[index].type
            if type == "$END":
                break
            if type == "LBRACE":
                if depth == 0:
                    opened = index
                depth += 1
            elif type == "RBRACE":
                if depth == 0:
                    break
                depth -= 1
                if depth == 0 and body is not None:
                    self._read_apart(body, tokens[opened + 1 : index], tokens[index])
            elif depth == 0 and type == "SEMICOLON" and tokens[index + 1].type != "_NEWLINE" and self._to_next_action(stack):
                return index + 1
            elif depth == 0 and type == "_NEWLINE":
                index += 1
                break
            index += 1
        if depth and body is not None:
            self._read_apart(body, tokens[opened + 1 : index], tokens[index])
        stack.cut(self._line_start(stack))
        if tokens[index].type == "RBRACE" and "RBRACE" not in self.tables.actions[stack.states[-1]]:
            index += 1 if tokens[index + 1].type != "_NEWLINE" else 2
        return index

    def _read_apart(self, body: str, tokens: list[Token], end: Token) -> None:
        """Read the inside of a block whose opening line was wrong; only its errors are of use."""
        if self.depth >= MAX_APART:
            return
        apart = _Reading(self.source, Tokens([*tokens, Token("$END", "", end.start, end.start)], self.lexical, 0, True), self.depth + 1)
        apart.read(body, 0, len(tokens))
        self.diagnostics += apart.diagnostics
        self.builder.diagnostics += apart.builder.diagnostics
        if len(self.diagnostics) >= MAX_ERRORS:
            raise _Stop

    def _to_next_action(self, stack: _Stack) -> bool:
        """Take the stack back to where an action may begin; False outside actions."""
        for depth in range(len(stack.states), 0, -1):
            row = self.tables.gotos[stack.states[depth - 1]]
            if any(item in row for item in _ITEMS):
                if "action" in row:
                    stack.cut(depth)
                return "action" in row
        return False

    def _report(self, mistake: Mistake) -> None:
        """Say what is wrong, unless a wrong character or number earlier in the statement already explains it."""
        token = mistake.tokens[mistake.index]
        begins = mistake.tokens[mistake.statement].start
        if bisect_right(self.lexical_at, token.start) > bisect_left(self.lexical_at, begins):
            return
        self.diagnostics.append(explain(mistake))
        if len(self.diagnostics) >= MAX_ERRORS:
            self.diagnostics.append(messages.too_many_errors(Span(self.source, token.start, token.end)))
            raise _Stop


def _closes_later(tokens: list[Token], index: int) -> bool:
    """Whether a `}` follows that closes a block opened at a token."""
    depth = 0
    if tokens[index + 1].type == "LBRACE":
        return True
    for token in tokens[index:]:
        if token.type == "LBRACE":
            depth += 1
        elif token.type == "RBRACE":
            depth -= 1
            if depth < 0:
                return True
    return False


class _Stack:
    """The parser's stack: states, and for each after the first its value and extent."""

    __slots__ = ("begins", "ends", "states", "values")

    def __init__(self, state: int) -> None:
        self.states = [state]
        self.values: list[Any] = []
        self.begins: list[int] = []
        self.ends: list[int] = []

    def cut(self, depth: int) -> None:
        """Keep the first `depth` states."""
        del self.states[depth:], self.values[depth - 1 :], self.begins[depth - 1 :], self.ends[depth - 1 :]
