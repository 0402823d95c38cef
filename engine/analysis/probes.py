"""Where a circuit is disturbed: a copy of the circuit with small additions that are zero at rest, so that nothing about its point changes.

A disturbance is a latch of value 0 added to a signal, a source, a duty, or as a current source between two nodes. Equations, point and
structure of the copy are those of the circuit itself; the derivative with respect to the latch is what an analysis needs. Elements get a
latch each, too, that scales their value by 1 + latch.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, replace

from polewise.analysis import failures
from polewise.circuit.model import Branch, Circuit, Domain, LatchDef, Law
from polewise.circuit.quantities import find
from polewise.devices.kind import PartValue, SettingValue
from polewise.expression.graph import SYMBOL, ExpressionGraph, Node
from polewise.grammar import units
from polewise.grammar.diagnostics import Diagnostic
from polewise.grammar.source import no_span
from polewise.grammar.units import Dimension
from polewise.network.graph import Network

DUTIES = ("duty", "upper_duty", "lower_duty")
ELEMENT_LAWS = (Law.RESISTANCE, Law.CONDUCTANCE, Law.CHARGE, Law.FLUX)


@dataclass(frozen=True, slots=True)
class Probe:
    """One disturbance.

    Args:
        name: in the netlist's spelling.
        latch: its parameter.
        within: whether reading the name gives the value with the disturbance in it (a signal does, a state does not: its readers do).
    """

    name: str
    latch: str
    dimension: Dimension
    within: bool = True


@dataclass(frozen=True, slots=True)
class Injection:
    """A current that leaves `left` and enters `right` inside a probe, so that it is drawn from left; names of nodes."""

    name: str
    left: str
    right: str


class Probing:
    """Collects disturbances; `circuit` and `network` are the copies with all of them."""

    def __init__(self, circuit: Circuit, network: Network) -> None:
        self.circuit, self.network = circuit, network
        self.probes: dict[str, Probe] = {}

    @property
    def graph(self) -> ExpressionGraph:
        """The circuit's graph; it only grows."""
        return self.circuit.graph

    def add(self, name: str) -> Probe:
        """Disturb what a name stands for.

        Raises:
            NotAnInput: nothing of that name can be disturbed.
        """
        name = name.strip()
        known = self.probes.get(name)
        if known is not None:
            return known
        quantity = find(self.circuit, name)
        if isinstance(quantity, Diagnostic):
            raise failures.unknown_input(self.circuit, name, quantity)
        probe = self._special(name) or self._by_symbol(name, quantity.expression, quantity.dimension)
        if probe is None:
            raise failures.not_an_input(name)
        self.probes[name] = probe
        return probe

    def inject(self, injection: Injection) -> Probe:
        """Add a current source of value 0 between two nodes."""
        domain = self.circuit.nodes[injection.left].domain
        probe, node = self._latch(injection.name, domain.through_dimension)
        branch = Branch(f"{injection.name}:probe", injection.left, injection.right, Law.CURRENT, node, None, "", no_span(), domain)
        self.circuit = replace(self.circuit, branches={**self.circuit.branches, branch.name: branch})
        self.network = replace(self.network, forms={**self.network.forms, branch.name: "current"})
        self.probes[injection.name] = probe
        return probe

    def adopt(self, name: str, latch: str, dimension: Dimension) -> Probe:
        """Take a latch that the copy has already as a disturbance."""
        self.probes[name] = Probe(name, latch, dimension)
        return self.probes[name]

    def scale_elements(self, wanted: Callable[[Branch], bool] | None = None) -> dict[str, Probe]:
        """Give every resistor, capacitor and inductor a factor 1 + latch; branch name → probe."""
        g = self.graph
        branches = dict(self.circuit.branches)
        made = {}
        one = g.constant(1.0)
        latches = dict(self.circuit.latches)
        for name, branch in self.circuit.branches.items():
            if branch.law not in ELEMENT_LAWS or branch.expression is None or (wanted is not None and not wanted(branch)):
                continue
            key = f"{name}:scale"
            latches[key] = LatchDef(key, g.constant(0.0), units.NONE, False, "", no_span())
            factor = g.add(one, g.symbol("latch", key))
            branches[name] = replace(branch, expression=g.multiply(factor, branch.expression))
            made[name] = Probe(key, key, units.NONE)
        self.circuit = replace(self.circuit, branches=branches, latches=latches)
        return made

    # ------------------------------------------------------------ kinds of inputs

    def _latch(self, name: str, dimension: Dimension) -> tuple[Probe, Node]:
        g = self.graph
        key = f"{name}:probe"
        latch = LatchDef(key, g.constant(0.0), dimension, False, "", no_span())
        self.circuit = replace(self.circuit, latches={**self.circuit.latches, key: latch})
        return Probe(name, key, dimension), g.symbol("latch", key)

    def _special(self, name: str) -> Probe | None:
        """Duties of poles, values of sources, powers of constant-power boxes."""
        circuit = self.circuit
        head, _, reading = name.rpartition(".")
        device = circuit.devices.get(circuit.aliases.get(head, head))
        if device is not None and reading == "duty":
            setting = next((k for k in DUTIES if isinstance(device.settings.get(k), int)), None)
            if setting is not None:
                return self._disturb_setting(name, device.name, setting, units.NONE)
        if device is not None and reading == "p" and isinstance(device.settings.get("power"), int):
            return self._disturb_setting(name, device.name, "power", units.POWER)
        branch = circuit.branches.get(circuit.aliases.get(head, head))
        if branch is None or branch.expression is None:
            return None
        if (branch.law is Law.VOLTAGE and reading == branch.domain.across) or (branch.law is Law.CURRENT and reading == branch.domain.through):
            return self._disturb_source(name, branch, 1)
        return None

    def _disturb_setting(self, name: str, device_name: str, setting: str, dimension: Dimension) -> Probe:
        probe, u = self._latch(name, dimension)
        device = self.circuit.devices[device_name]
        value = device.settings[setting]
        assert isinstance(value, int)
        changed = replace(device, settings={**device.settings, setting: self.graph.add(value, u)})
        self.circuit = replace(self.circuit, devices={**self.circuit.devices, device_name: changed})
        return probe

    def _disturb_source(self, name: str, branch: Branch, sign: int) -> Probe:
        g = self.graph
        dimension = branch.domain.across_dimension if branch.law is Law.VOLTAGE else branch.domain.through_dimension
        probe, u = self._latch(name, dimension)
        assert branch.expression is not None
        changed = replace(branch, expression=g.add(branch.expression, u) if sign > 0 else g.subtract(branch.expression, u))
        self.circuit = replace(self.circuit, branches={**self.circuit.branches, branch.name: changed})
        return probe

    def _by_symbol(self, name: str, expression: Node, dimension: Dimension) -> Probe | None:
        g, circuit = self.graph, self.circuit
        if g.operation[expression] != SYMBOL:
            return None
        kind, flat = g.symbols[expression]
        if kind == "signal":
            probe, u = self._latch(name, dimension)
            signal = self.circuit.signals[flat]
            if signal.is_condition:
                return None
            changed = replace(signal, expression=g.add(signal.expression, u))
            self.circuit = replace(self.circuit, signals={**self.circuit.signals, flat: changed})
            return probe
        if kind == "latch" and not circuit.latches[flat].is_condition and flat not in clocked_latches(circuit):
            return Probe(name, flat, dimension)
        if kind == "potential":
            return self._held_node(name, flat)
        if kind in ("state", "unknown", "sampled", "delayed", "averaged", "latch"):
            probe, u = self._latch(name, dimension)
            self.circuit = reading_replaced(self.circuit, {expression: g.add(expression, u)}, keep={flat})
            return replace(probe, within=False)
        return None

    def _held_node(self, name: str, node: str) -> Probe | None:
        """A node that one voltage source ties to the reference stands for that source."""
        step = self.network.steps.get(node)
        branch = None if step is None else self.circuit.branches.get(step.branch)
        if step is None or branch is None or step.parent in self.network.steps or branch.law is not Law.VOLTAGE or branch.expression is None:
            return None
        return self._disturb_source(name, branch, step.sign)


def clocked_latches(circuit: Circuit) -> set[str]:
    """Latches that `every` updates (of the circuit, not of a study)."""
    return {a.target for event in circuit.clock_events for a in event.assignments if a.target_kind == "latch"}


def reading_replaced(
    circuit: Circuit, mapping: Mapping[Node, Node], *, keep: Iterable[str] = (), owned: Callable[[str], bool] | None = None
) -> Circuit:
    """The circuit with symbols replaced wherever they are read.

    Args:
        mapping: symbol → what stands in its place.
        keep: states, unknowns and samplers whose own laws stay as they are.
        owned: only things of these owners (assembly paths) are changed; None: all.
    """
    g = circuit.graph
    kept = set(keep)

    def there(owner: str) -> bool:
        return owned is None or owned(owner)

    def swap(nodes: Sequence[Node]) -> list[Node]:
        return g.substitute(nodes, mapping)

    def one(node: Node | None) -> Node | None:
        return None if node is None else swap([node])[0]

    def setting(value: SettingValue) -> SettingValue:
        if isinstance(value, bool | str | tuple):
            return value
        if isinstance(value, PartValue):
            return replace(value, values={k: one(v) for k, v in value.values.items()})
        return swap([value])[0]

    return replace(
        circuit,
        branches={n: replace(b, expression=one(b.expression)) if there(b.owner) else b for n, b in circuit.branches.items()},
        devices={n: replace(d, settings={k: setting(v) for k, v in d.settings.items()}) if there(d.owner) else d for n, d in circuit.devices.items()},
        signals={n: replace(s, expression=swap([s.expression])[0]) if there(s.owner) else s for n, s in circuit.signals.items()},
        states={n: replace(s, rate=swap([s.rate])[0]) if there(s.owner) and n not in kept else s for n, s in circuit.states.items()},
        unknowns={n: replace(u, residual=swap([u.residual])[0]) if there(u.owner) and n not in kept else u for n, u in circuit.unknowns.items()},
        rates={n: replace(r, expression=swap([r.expression])[0]) if there(r.owner) else r for n, r in circuit.rates.items()},
        samplers=tuple(
            replace(s, updates=tuple((k, swap([v])[0]) for k, v in s.updates)) if there(s.owner) and s.name not in kept else s
            for s in circuit.samplers
        ),
        delays={n: replace(d, expression=swap([d.expression])[0]) if there(d.owner) and n not in kept else d for n, d in circuit.delays.items()},
        averages={n: replace(a, expression=swap([a.expression])[0]) if there(a.owner) and n not in kept else a for n, a in circuit.averages.items()},
        clock_events=tuple(
            replace(e, assignments=tuple(a if a.target in kept else replace(a, value=swap([a.value])[0]) for a in e.assignments))
            for e in circuit.clock_events
        )
        if owned is None
        else circuit.clock_events,
    )


def current_branches(circuit: Circuit, node: str) -> list[tuple[str, int]]:
    """Branches that touch a node with the sign of the current that leaves the node into them."""
    found = []
    for name, branch in circuit.branches.items():
        if branch.left == branch.right:
            continue
        if branch.left == node:
            found.append((name, 1))
        elif branch.right == node:
            found.append((name, -1))
    return found


__all__ = ["Domain", "Injection", "Probe", "Probing", "clocked_latches", "current_branches", "reading_replaced"]
