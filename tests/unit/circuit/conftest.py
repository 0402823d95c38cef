"""One way to read a netlist in these tests, and one to say what must be wrong with it."""

from __future__ import annotations

from collections.abc import Callable, Mapping

import pytest

from polewise.circuit.expand import expand
from polewise.circuit.load import load_text
from polewise.circuit.model import Circuit
from polewise.circuit.quantities import find
from polewise.grammar.diagnostics import Diagnostic

Findings = list[tuple[str, str]]


def read(text: str, **options: object) -> tuple[Circuit | None, tuple[Diagnostic, ...]]:
    """Circuit and all diagnostics of a text."""
    sources, first = load_text(text)
    circuit, second = expand(sources, **options)  # type: ignore[arg-type]
    return circuit, (*first, *second)


def render(diagnostics: tuple[Diagnostic, ...]) -> str:
    """Diagnostics for a failing test's output."""
    return "\n".join(f"{d.code} line {d.span.line} `{d.span.text}`: {d.headline} | {d.hint}" for d in diagnostics)


@pytest.fixture
def build() -> Callable[..., Circuit]:
    """A circuit from a text that must be right."""

    def build(text: str, **options: object) -> Circuit:
        circuit, diagnostics = read(text, **options)
        assert circuit is not None, render(diagnostics)
        return circuit

    return build


@pytest.fixture
def check() -> Callable[..., tuple[Diagnostic, ...]]:
    """check(text, expected): the diagnostics are exactly these (code, marked text), in order."""

    def check(text: str, expected: Findings, **options: object) -> tuple[Diagnostic, ...]:
        circuit, diagnostics = read(text, **options)
        assert [(d.code, d.span.text) for d in diagnostics] == expected, render(diagnostics)
        assert (circuit is None) == any(d.is_error for d in diagnostics)
        return diagnostics

    return check


@pytest.fixture
def value() -> Callable[..., float]:
    """The number a quantity of a circuit has where its leaves have the given values; leaves by "kind name", `time` alone."""

    def value(circuit: Circuit, what: str | int, at: Mapping[str, float] | None = None) -> float:
        node = what
        if isinstance(what, str):
            quantity = find(circuit, what)
            assert not isinstance(quantity, Diagnostic), quantity.headline
            node = quantity.expression
        leaves = {}
        for leaf in circuit.graph.symbols_under([node]):  # type: ignore[list-item]
            kind, name = circuit.graph.symbols[leaf]
            if kind == "signal":
                leaves[leaf] = value(circuit, circuit.signals[name].expression, at)
            else:
                leaves[leaf] = (at or {})[f"{kind} {name}".strip()]
        return circuit.graph.evaluate([node], leaves)[0]  # type: ignore[list-item]

    return value
