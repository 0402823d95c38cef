"""What each circuit-level symbol stands for: Kirchhoff's laws on the tree, branch laws, device equations, signals.

Every symbol is defined by an expression of other symbols, or is an unknown, a parameter or the study's time. The reduction to few
unknowns is in reduce.py; here nothing is eliminated.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from polewise.circuit.model import Branch, Circuit, Device, Law
from polewise.devices.kind import KINDS, ChokeView, DeviceContext, DeviceEquations, SlotForm
from polewise.expression.derivative import Differentiator
from polewise.expression.graph import ExpressionGraph, Node
from polewise.grammar.source import Span
from polewise.grammar.units import NONE, Dimension
from polewise.network.graph import ChokePath, Network, below, cutset, slot_form


@dataclass(slots=True)
class RowSketch:
    """An unknown and its row, still in circuit-level symbols; charge None for an algebraic row."""

    name: str
    symbol: Node  # ("x", name)
    charge: Node | None
    residual: Node
    dimension: Dimension
    owner: str
    span: Span
    initial: float = 0.0
    fixed_start: bool = False
    held: bool = False
    bounds: tuple[Node, Node] | None = None
    rest: Node | None = None  # where it is not the residual
    scale: float = 1.0  # natural size, SI
    integrator: bool | None = None  # where the text says more than the reduced row, see Unknown.integrator


@dataclass(slots=True)
class DependentSketch:
    """A value that is the time derivative of `charge`: current of a dependent capacitor, voltage of a dependent inductor, d/dt in a box."""

    name: str
    symbol: Node  # ("derivative", name)
    charge: Node
    dimension: Dimension
    owner: str
    span: Span


@dataclass(slots=True)
class Definitions:
    """Definitions by circuit-level symbol; rows for unknowns that the circuit states by itself."""

    circuit: Circuit
    network: Network
    power_scale: Node
    source_scale: Node
    duty_of: Mapping[str, Node]  # poles whose modulator samples or delays: the duty in force
    gates_of: Mapping[str, Mapping[str, Node]]  # poles in the edge picture: their gates
    defined: dict[Node, Node] = field(default_factory=dict)
    rows: list[RowSketch] = field(default_factory=list)
    dependents: dict[Node, DependentSketch] = field(default_factory=dict)
    equations: dict[str, DeviceEquations] = field(default_factory=dict)
    owner_of: dict[Node, tuple[str, Span]] = field(default_factory=dict)
    dimension_of: dict[Node, Dimension] = field(default_factory=dict)
    depth: dict[str, int] = field(default_factory=dict)  # of nodes in the tree

    @property
    def graph(self) -> ExpressionGraph:
        """The circuit's graph."""
        return self.circuit.graph

    def define_all(self) -> None:
        """Fill in nodes, branches and devices."""
        self.depth = dict.fromkeys(self.circuit.nodes, 0)
        for name, step in self.network.steps.items():  # parents come first
            self.depth[name] = self.depth[step.parent] + 1
        self._define_potentials()
        self._define_currents()
        for device in self.circuit.devices.values():
            self._define_device(device)
        for branch in self.circuit.branches.values():
            self._define_branch(branch)

    # ------------------------------------------------------------ Kirchhoff

    def _define_potentials(self) -> None:
        g, circuit = self.graph, self.circuit
        for name, node in circuit.nodes.items():
            symbol = g.symbol("potential", name)
            step = self.network.steps.get(name)
            if step is None:
                self.defined[symbol] = g.constant(0.0)
            else:
                v, above = g.symbol("v", step.branch), g.symbol("potential", step.parent)
                self.defined[symbol] = g.add(above, v) if step.sign > 0 else g.subtract(above, v)
            self._note(symbol, node.owner, node.span, node.domain.across_dimension)

    def _define_currents(self) -> None:
        """Kirchhoff's current law at each node gives the current of the tree branch that leads to its parent."""
        g = self.graph
        leaving: dict[str, list[Node]] = {name: [] for name in self.circuit.nodes}
        for name, branch in self.circuit.branches.items():
            i = g.symbol("i", name)
            if branch.left != branch.right:
                leaving[branch.left].append(i)
                leaving[branch.right].append(g.negate(i))
        for node, step in self.network.steps.items():
            i = g.symbol("i", step.branch)
            own = i if step.sign > 0 else g.negate(i)
            others = g.sum(k for k in leaving[node] if k != own)
            self.defined[i] = g.negate(others) if step.sign > 0 else others
        for name in self.network.dependent_inductors:
            self._define_by_cutset(name)

    def _define_by_cutset(self, name: str) -> None:
        """A dependent inductor's current from its cut-set, which holds inductors and given currents only: node by node the same sum would pass
        through currents that cancel in the end but hang on this inductor's own voltage."""
        g = self.graph
        inside = below(self.network.steps, name)
        branch = self.circuit.branches[name]
        terms = []
        for other in cutset(self.circuit, self.network.steps, self.network.tree, name):
            i = g.symbol("i", other)
            terms.append(i if self.circuit.branches[other].left in inside else g.negate(i))
        total = g.sum(terms)
        self.defined[g.symbol("i", name)] = g.negate(total) if branch.left in inside else total

    def _voltage_along_tree(self, left: str, right: str) -> Node:
        """potential(left) - potential(right) as the voltages on the tree's path between them: what both have in common does not appear."""
        g, steps, depth = self.graph, self.network.steps, self.depth
        terms = []
        while left != right:
            if depth[left] >= depth[right]:
                step = steps[left]
                v = g.symbol("v", step.branch)
                terms.append(v if step.sign > 0 else g.negate(v))
                left = step.parent
            else:
                step = steps[right]
                v = g.symbol("v", step.branch)
                terms.append(g.negate(v) if step.sign > 0 else v)
                right = step.parent
        return g.sum(terms)

    # ------------------------------------------------------------ branches

    def _define_branch(self, branch: Branch) -> None:
        g, name = self.graph, branch.name
        v, i = g.symbol("v", name), g.symbol("i", name)
        self._note(v, branch.owner, branch.span, branch.domain.across_dimension)
        self._note(i, branch.owner, branch.span, branch.domain.through_dimension)
        form = self.network.forms[name]
        in_tree = name in self.network.tree
        if not in_tree:
            self.defined[v] = self._voltage_along_tree(branch.left, branch.right)
        law = self._law(branch)
        if form == "charge":
            self._charge(branch, law, v, i, in_tree)
        elif form == "flux":
            self._flux(branch, law, v, i, in_tree)
        elif form == "resistance":
            by_conductance = branch.law is Law.CONDUCTANCE
            if in_tree:
                self.defined[v] = g.divide(i, law) if by_conductance else g.multiply(law, i)
            else:
                self.defined[i] = g.multiply(law, v) if by_conductance else g.divide(v, law)
        elif form in ("voltage", "nonlinear_voltage"):
            if in_tree:
                self.defined[v] = self._scaled(branch, law)
            else:
                self._algebraic(branch, i, f"{name}.i", g.subtract(v, law), branch.domain.through_dimension)
        elif form in ("current", "nonlinear"):
            if in_tree:
                self._algebraic(branch, v, f"{name}.v", g.subtract(i, law), branch.domain.across_dimension)
            else:
                self.defined[i] = self._scaled(branch, law)
        else:
            assert form == "implicit"
            if in_tree:
                self._algebraic(branch, v, f"{name}.v", law, branch.domain.across_dimension)
            else:
                self._algebraic(branch, i, f"{name}.i", law, branch.domain.through_dimension)

    def _law(self, branch: Branch) -> Node:
        if branch.law is Law.DEVICE:
            assert branch.device is not None
            return self.equations[branch.device].laws[branch.slot]
        assert branch.expression is not None
        return branch.expression

    def _scaled(self, branch: Branch, law: Node) -> Node:
        """Independent sources follow `source_scale`, so that the operating-point search can ramp them."""
        if branch.law not in (Law.VOLTAGE, Law.CURRENT):
            return law
        kinds = {self.graph.symbols[s][0] for s in self.graph.symbols_under([law])}
        return law if kinds - {"time", "latch"} else self.graph.multiply(self.source_scale, law)

    def _charge(self, branch: Branch, law: Node, v: Node, i: Node, in_tree: bool) -> None:
        g = self.graph
        if in_tree:
            self._state(branch, v, f"{branch.name}.{branch.domain.across}", law, g.negate(i), branch.domain.across_dimension)
        else:
            self.defined[i] = self._dependent(
                f"{branch.name}.{branch.domain.through}", law, branch.domain.through_dimension, branch.owner, branch.span
            )

    def _flux(self, branch: Branch, law: Node, v: Node, i: Node, in_tree: bool) -> None:
        g = self.graph
        if not in_tree:
            self._state(branch, i, f"{branch.name}.{branch.domain.through}", law, g.negate(v), branch.domain.through_dimension)
        else:
            domain = branch.domain
            self.defined[v] = self._dependent(f"{branch.name}.{domain.across}", law, domain.across_dimension, branch.owner, branch.span)

    def _state(self, branch: Branch, symbol: Node, name: str, charge: Node, residual: Node, dimension: Dimension) -> None:
        x = self.graph.symbol("x", name)
        self.defined[symbol] = x
        initial = None if branch.initial is None else self.graph.value_of(branch.initial)
        self.rows.append(RowSketch(name, x, charge, residual, dimension, branch.owner, branch.span, initial or 0.0, True))

    def _algebraic(self, branch: Branch, symbol: Node, name: str, residual: Node, dimension: Dimension) -> None:
        x = self.graph.symbol("x", name)
        self.defined[symbol] = x
        initial = None if branch.initial is None else self.graph.value_of(branch.initial)
        self.rows.append(RowSketch(name, x, None, residual, dimension, branch.owner, branch.span, initial or 0.0))

    def _dependent(self, name: str, charge: Node, dimension: Dimension, owner: str, span: Span) -> Node:
        symbol = self.graph.symbol("derivative", name)
        self.dependents[symbol] = DependentSketch(name, symbol, charge, dimension, owner, span)
        return symbol

    def define_rate(self, name: str, symbol: Node, charge: Node, dimension: Dimension, owner: str, span: Span) -> None:
        """A `d/dt` of an expression inside an equation box."""
        self.defined[symbol] = self._dependent(name, charge, dimension, owner, span)

    # ------------------------------------------------------------ devices

    def _define_device(self, device: Device) -> None:
        g, kind = self.graph, KINDS[device.kind]
        settings = dict(device.settings)
        if device.name in self.duty_of:
            for name in ("duty", "upper_duty", "lower_duty"):
                if name in settings:
                    settings[name] = self.duty_of[device.name]
        context = DeviceContext(
            graph=g,
            name=device.name,
            settings=settings,
            potential={t: g.symbol("potential", n) for t, n in device.terminals.items()},
            branch_v={suffix: g.symbol("v", b) for suffix, b in device.branches.items()},
            branch_i={suffix: g.symbol("i", b) for suffix, b in device.branches.items()},
            forms={suffix: self._slot_form(b) for suffix, b in device.branches.items()},
            latches={name: g.symbol("latch", flat) for name, flat in device.latches.items()},
            choke=self._choke_view(device),
            power_scale=self.power_scale,
            source_scale=self.source_scale,
            gates=self.gates_of.get(device.name, {}),
        )
        equations = kind.equations(context)
        self.equations[device.name] = equations
        for reading, node in equations.readings.items():
            symbol = g.symbol("reading", f"{device.name}.{reading}")
            self.defined[symbol] = node
            self._note(symbol, device.owner, device.span, kind.readings.get(reading, NONE))

    def _slot_form(self, branch: str) -> SlotForm:
        return slot_form(self.network.forms[branch])

    def _choke_view(self, device: Device) -> ChokeView | None:
        paths = self.network.chokes.get(device.name, ())
        if not paths or device.settings.get("conduction") == "continuous":
            return None
        g = self.graph
        views = [self._one_choke(p) for p in paths]
        if len(views) == 1:
            return views[0]
        # Several chokes at one mid: 1/L = sum 1/L_k, everything else weighted by L/L_k.
        one = g.constant(1.0)
        total = g.divide(one, g.sum(g.divide(one, k.inductance) for k in views))
        shares = [g.divide(total, k.inductance) for k in views]

        def weighted(nodes: list[Node]) -> Node:
            return g.sum(g.multiply(s, n) for s, n in zip(shares, nodes, strict=True))

        drop = weighted([k.resistive_drop for k in views])
        return ChokeView(
            inductance=total,
            resistive_drop=drop,
            # Each choke carries about its share of the current: r = sum r_k (L/L_k)^2.
            resistance=weighted([g.multiply(s, k.resistance) for s, k in zip(shares, views, strict=True)]),
            far_potential=weighted([k.far_potential for k in views]),
            names=tuple(n for k in views for n in k.names),
        )

    def _one_choke(self, path: ChokePath) -> ChokeView:
        g = self.graph
        inductances, resistances, drops = [], [], []
        far = g.symbol("potential", path.far)
        for name, sign in path.elements:
            branch = self.circuit.branches[name]
            v = g.symbol("v", name)
            along = v if sign > 0 else g.negate(v)
            form = self.network.forms[name]
            if form == "flux":
                assert branch.expression is not None
                i = g.symbol("i", name)
                gradient = Differentiator(g, [i]).gradients([branch.expression])[0]
                inductances.append(gradient.get(i, g.constant(0.0)))
            elif form == "resistance":
                drops.append(along)
                if branch.law in (Law.RESISTANCE, Law.CONDUCTANCE):
                    assert branch.expression is not None
                    one = g.constant(1.0)
                    resistances.append(branch.expression if branch.law is Law.RESISTANCE else g.divide(one, branch.expression))
            else:
                far = g.add(far, along)
        return ChokeView(g.sum(inductances), g.sum(drops), g.sum(resistances), far, path.inductors)

    def _note(self, symbol: Node, owner: str, span: Span, dimension: Dimension) -> None:
        self.owner_of[symbol] = (owner, span)
        self.dimension_of[symbol] = dimension
