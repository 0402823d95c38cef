"""Names to quantities: one by name, many by selection, what is kept where nothing is asked for, values for inputs."""

from __future__ import annotations

from typing import Final

from polewise.circuit.model import Circuit, Quantity
from polewise.circuit.quantities import all_quantities, find, select
from polewise.errors import NetlistError
from polewise.grammar.diagnostics import Diagnostic, Label, Severity
from polewise.grammar.source import no_span
from polewise.grammar.units import read_value, unit_text
from polewise.results.failures import UnknownName, nearest_names

DEFAULT_KEPT_MAX: Final = 60  # nodes, and paths, that a study without `keep` records

Value = str | float | int | bool


def found_quantity(circuit: Circuit, name: str) -> Quantity:
    """A quantity by name.

    Raises:
        UnknownName: nothing has that name.
    """
    quantity = find(circuit, name)
    if isinstance(quantity, Quantity):
        return quantity
    raise UnknownName(name, quantity.headline, nearest_names(name, (q.name for q in all_quantities(circuit))), quantity.hint)


def selected_quantities(circuit: Circuit, name: str) -> list[Quantity]:
    """The quantities that a name or selection stands for.

    Raises:
        UnknownName: it stands for none.
    """
    if "{" not in name:
        return [found_quantity(circuit, name)]
    chosen = select(circuit, name)
    if isinstance(chosen, Diagnostic):
        raise UnknownName(name, chosen.headline, (), chosen.hint)
    return list(chosen)


def default_quantities(circuit: Circuit) -> list[Quantity]:
    """What a study without `keep` records: named nodes and paths at top level, at most DEFAULT_KEPT_MAX of each."""
    nodes = [n for n in circuit.nodes.values() if n.named and not n.is_reference and not n.owner][:DEFAULT_KEPT_MAX]
    names = [f"{n.name}.{n.domain.across}" for n in nodes]
    for path in [p for p in circuit.paths.values() if not p.owner][:DEFAULT_KEPT_MAX]:
        branches = [b for item in path.items for b in item]
        if branches:
            names.append(f"{path.name}.{circuit.branches[branches[0]].domain.through}")
    found = [find(circuit, name) for name in names]
    return [q for q in found if isinstance(q, Quantity)]


def whole_network(circuit: Circuit) -> list[Quantity]:
    """Every voltage, current and potential: equations that can tell them can tell everything else afterwards."""
    g = circuit.graph
    outputs = [Quantity(n.name, g.symbol("potential", n.name), n.domain.across_dimension) for n in circuit.nodes.values()]
    for b in circuit.branches.values():
        outputs.append(Quantity(f"{b.name}.{b.domain.across}", g.symbol("v", b.name), b.domain.across_dimension))
        outputs.append(Quantity(f"{b.name}.{b.domain.through}", g.symbol("i", b.name), b.domain.through_dimension))
    return outputs


def input_value(circuit: Circuit, name: str, value: Value) -> float:
    """A value for a top-level input, in SI.

    Raises:
        UnknownName: there is no such input.
        NetlistError: the value has another unit.
    """
    if name not in circuit.inputs:
        raise UnknownName(name, f"there is no top-level input `{name}`", nearest_names(name, circuit.inputs))
    latch = circuit.latches[name]
    if isinstance(value, bool) or value in ("true", "false"):
        if latch.is_condition:
            return float(value in (True, "true"))
    elif not isinstance(value, str):
        return float(value)
    elif not latch.is_condition:
        got = read_value(value)
        if got is not None and got[1] == latch.dimension:
            return got[0]
    wanted = "true or false" if latch.is_condition else f"a value in {unit_text(latch.dimension)}"
    headline = f"the input `{name}` asks for {wanted}, not `{value}`"
    raise NetlistError([Diagnostic("input-value", Severity.ERROR, headline, no_span("input"), (Label(latch.span, "the input stands here"),))])
