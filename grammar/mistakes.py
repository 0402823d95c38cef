"""Which mistake a token that can't stand where it stands comes from: the facts are found here, worded in messages.py."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from polewise.grammar import messages
from polewise.grammar.diagnostics import Diagnostic
from polewise.grammar.source import SourceText, Span
from polewise.grammar.tables import Tables
from polewise.grammar.tokens import Token


@dataclass(frozen=True, slots=True)
class Mistake:
    """A token that can't stand where it stands, with the parser's states there."""

    source: SourceText
    tokens: Sequence[Token]
    index: int
    states: tuple[int, ...]
    tables: Tables

    @property
    def token(self) -> Token:
        """The token itself."""
        return self.tokens[self.index]

    @property
    def statement(self) -> int:
        """Index of the first token of its statement."""
        at = self.index
        while at > 0 and self.tokens[at - 1].type not in ("_NEWLINE", "LBRACE", "RBRACE"):
            at -= 1
        return at

    def accepts(self, type: str) -> bool:
        """Whether a token of some type could stand here instead."""
        states = list(self.states)
        for _ in range(len(states) + 1000):
            action = self.tables.actions[states[-1]].get(type)
            if action is None or action >= 0:
                return action is not None
            rule = self.tables.rules[-1 - action]
            if rule.length:
                del states[-rule.length :]
            if not states:
                return False
            goto = self.tables.gotos[states[-1]].get(rule.origin)
            if goto is None:
                return True
            states.append(goto)
        return False


def explain(mistake: Mistake) -> Diagnostic:
    """The one message for a mistake."""
    token = mistake.token
    return messages.unexpected(Span(mistake.source, token.start, token.end), token.text)
