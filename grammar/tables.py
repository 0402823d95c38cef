"""The parse tables of netlist.lark: built by lark once per process, kept as plain numbers for the parser's loop."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import lru_cache
from importlib.resources import files
from typing import Any

from lark import Lark
from lark.lexer import Lexer, Token

# What can be read: a whole file, one value, or the body of a block on its own.
STARTS = ("netlist", "orders", "steps", "action_lines", "expression")


@dataclass(frozen=True, slots=True)
class Rule:
    """One way to reduce.

    Args:
        origin: the rule's name.
        length: symbols it takes off the stack.
        build: name of the method of tree.Builder that makes its node; "" hands on its only child; "list" gathers children to be spliced in.
        take: for each kept child its index, -1 - index for one whose items are spliced in, None for an optional part that is absent.
    """

    origin: str
    length: int
    build: str
    take: tuple[int | None, ...]


@dataclass(frozen=True, slots=True)
class Tables:
    """LALR(1) tables.

    Args:
        rules: all rules.
        actions: for each state what to do at a terminal: a state >= 0 to shift to, or -1 - rule to reduce by.
        gotos: for each state where to go from it once a rule is complete.
        starts: first state for each of STARTS.
        ends: state that is final for each of STARTS.
    """

    rules: tuple[Rule, ...]
    actions: tuple[dict[str, int], ...]
    gotos: tuple[dict[str, int], ...]
    starts: dict[str, int]
    ends: dict[str, int]


class _NoLexer(Lexer):
    """Tokens come from tokens.py; lark builds the tables only."""

    def __init__(self, conf: Any) -> None:
        pass

    def lex(self, lexer_state: Any, parser_state: Any) -> Iterator[Token]:
        return iter(())


def grammar_text() -> str:
    """The text of netlist.lark."""
    return files("polewise.grammar").joinpath("netlist.lark").read_text(encoding="utf-8")


@lru_cache(maxsize=1)
def tables() -> Tables:
    """Build the tables; strict, so that a conflict in the grammar is an error and never a silent choice."""
    lark = Lark(grammar_text(), parser="lalr", lexer=_NoLexer, strict=True, start=list(STARTS), maybe_placeholders=True)
    table: Any = lark.parser.parser._parse_table
    numbers = {rule: index for index, rule in enumerate(lark.rules)}
    actions: list[dict[str, int]] = [{} for _ in table.states]
    gotos: list[dict[str, int]] = [{} for _ in table.states]
    terminals = {terminal.name for terminal in lark.terminals} | {"$END", *_declared()}
    for state, row in table.states.items():
        for symbol, (action, argument) in row.items():
            if action.name == "Reduce":
                actions[state][str(symbol)] = -1 - numbers[argument]
            elif symbol in terminals:
                actions[state][str(symbol)] = int(argument)
            else:
                gotos[state][str(symbol)] = int(argument)
    return Tables(tuple(_rule(rule) for rule in lark.rules), tuple(actions), tuple(gotos), dict(table.start_states), dict(table.end_states))


def _declared() -> list[str]:
    line = next(line for line in grammar_text().splitlines() if line.startswith("%declare"))
    return line.split()[1:]


def _rule(rule: Any) -> Rule:
    """One of lark's rules with its choice of children written out."""
    origin = str(rule.origin.name)
    empty = list(rule.options.empty_indices) or [False] * len(rule.expansion)
    take: list[int | None] = []
    index = 0
    for absent in empty:
        if absent:
            take.append(None)
            continue
        symbol = rule.expansion[index]
        if not symbol.is_term and symbol.name.startswith("_"):
            take.append(-1 - index)
        elif not (symbol.is_term and symbol.filter_out):
            take.append(index)
        index += 1
    alias = None if rule.alias is None else str(rule.alias)
    if origin.startswith("_"):
        build = "list"
    elif alias is None and rule.options.expand1 and len(take) == 1 and take[0] is not None and take[0] >= 0:
        build = ""
    else:
        build = alias or origin
    return Rule(origin, len(rule.expansion), build, tuple(take))
