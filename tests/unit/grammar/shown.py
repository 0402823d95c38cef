"""A syntax tree as one short line, for expectations in tests; and the one function through which they go."""

from __future__ import annotations

from dataclasses import fields
from typing import Any

from polewise.grammar import syntax as s
from polewise.grammar.parser import parse
from polewise.grammar.source import SourceText, Span
from polewise.grammar.units import Unit


def check(text: str, *expected: str) -> None:
    """The text has no errors, and its statements are the expected ones in the form of `shown`."""
    netlist, diagnostics = parse(SourceText("<text>", text))
    assert diagnostics == ()
    assert tuple(map(shown, netlist.statements)) == expected


def check_value(text: str, expected: str) -> None:
    """The text of an expression is read as expected."""
    check(f"signal x = {text}", f"Signal(x, {expected})")


def shown(node: Any) -> str:
    """A node as `Name(children)`; what is absent, empty or false is left out, spans too."""
    match node:
        case s.NamePart():
            return "".join(piece if isinstance(piece, str) else "{" + shown(piece) + "}" for piece in node.pieces)
        case s.Reference():
            return ".".join(map(shown, node.parts))
        case s.Number():
            return node.text + ("" if node.unit is None else f" {node.unit.symbol}")
        case s.Boolean():
            return str(node.value).lower()
        case s.Star():
            return "*"
        case s.Unary():
            return f"({node.operator} {shown(node.operand)})"
        case s.Binary():
            return f"({shown(node.left)} {node.operator} {shown(node.right)})"
        case s.Setting():
            return f"{node.name}={shown(node.value)}"
        case s.ValueBox():
            return shown(node.value)
        case Unit():
            return str(node.symbol)
        case tuple():
            return "<" + " ".join(map(shown, node)) + ">"
        case str() | bool() | float():
            return str(node)
        case _:
            parts = [(field.name, getattr(node, field.name)) for field in fields(node)]
            seen = [shown(value) for name, value in parts if not isinstance(value, Span) and value not in (None, (), False)]
            return f"{type(node).__name__}({', '.join(seen)})"
