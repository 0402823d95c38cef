"""What only the finished tree of a file shows to be wrong: expressions too deep to handle, unit symbols that are also names."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from typing import Any

from polewise.grammar import messages
from polewise.grammar import syntax as s
from polewise.grammar.diagnostics import Diagnostic
from polewise.grammar.source import Span
from polewise.grammar.tokens import MAX_DEPTH
from polewise.grammar.units import joined_symbols, parse_unit

_EXPRESSIONS = (
    s.Number, s.Boolean, s.Reference, s.Unary, s.Binary, s.Conditional, s.Call, s.ListOf, s.Derivative, s.Filtered, s.Sampled, s.Delayed, s.Averaged,
)  # fmt: skip


def without_too_deep(statements: tuple[s.Statement, ...]) -> tuple[tuple[s.Statement, ...], list[Diagnostic]]:
    """Leave out statements whose expressions nest deeper than later stages handle, with a diagnostic for each."""
    kept: list[s.Statement] = []
    found: list[Diagnostic] = []
    for statement in statements:
        deep = _deepest(statement)
        if deep is None:
            kept.append(statement)
        else:
            found.append(messages.too_deep(deep, MAX_DEPTH))
    return tuple(kept), found


def _deepest(statement: s.Statement) -> Span | None:
    """Extent of an expression that lies more than MAX_DEPTH levels deep, None where there is none. No recursion: depth is what it looks for."""
    waiting: list[tuple[Any, int]] = [(statement, 0)]
    while waiting:
        node, depth = waiting.pop()
        if isinstance(node, tuple):
            waiting.extend((item, depth) for item in node)
            continue
        inside = depth + 1 if isinstance(node, _EXPRESSIONS) else 0
        if inside > MAX_DEPTH:
            return node.span if isinstance(node.span, Span) else None
        waiting.extend((child, inside) for child in _children(node))
    return None


def _children(node: Any) -> Iterator[Any]:
    for name in getattr(type(node), "__dataclass_fields__", ()):
        if name not in ("span", "name_span", "path_span", "kind_span", "file_span", "else_span", "unit"):
            child = getattr(node, name)
            if child is not None and not isinstance(child, str | int | float):
                yield child


def walk(node: Any) -> Iterator[Any]:
    """Every node at and below a node or a tuple of them, in no particular order."""
    waiting = [node]
    while waiting:
        item = waiting.pop()
        if isinstance(item, tuple):
            waiting.extend(item)
        else:
            yield item
            waiting.extend(_children(item))


def joined_names(statements: tuple[s.Statement, ...]) -> list[Diagnostic]:
    """Units with a joined symbol that is also a declared value: `5 V/m` beside `given m = …` can be read in two ways."""
    ambiguous = {name for name in _declared_values(statements) if parse_unit(name) is not None}
    if not ambiguous:
        return []
    found: list[Diagnostic] = []
    for node in walk(statements):
        if isinstance(node, s.Number) and node.unit is not None:
            name = next((symbol for symbol in joined_symbols(node.unit) if symbol in ambiguous), None)
            if name is not None:
                at = node.span.text.rfind(name)
                better = f"{node.span.text[: at - 1]} {node.span.text[at - 1 : at]} {node.span.text[at:]}"
                found.append(messages.joined_name(node.span, node.unit.symbol, name, better))
    return found


def _declared_values(statements: Iterable[s.Statement]) -> set[str]:
    """Names of values declared anywhere in a file: an assembly's own too, since the reader of a unit can't tell scopes apart either."""
    names: set[str] = set()
    waiting = list(statements)
    while waiting:
        statement = waiting.pop()
        if isinstance(statement, s.Assembly | s.Each):
            waiting.extend(statement.body)
        if isinstance(statement, s.Given) and len(statement.target.parts) == 1:
            names.add(statement.target.parts[0].plain or "")
        elif isinstance(statement, s.Input | s.Signal | s.StateRate | s.Latch | s.Solve):
            names.add(statement.name.plain or "")
    return names
