"""The power balance of a state of rest: who delivers, who absorbs, what is lost where, and what is left over (which must be next to nothing)."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Literal

from polewise.circuit.model import Branch, Circuit, Domain, Law
from polewise.devices.catalogue import KINDS
from polewise.expression.graph import Node

Role = Literal["loss", "storage", "exchange"]


@dataclass(frozen=True, slots=True)
class PowerItem:
    """One element: a box or a device as a whole.

    Args:
        name: its path.
        power_w: absorbed; negative where it delivers.
        role: "loss" turns what it absorbs into heat; "storage" holds it; "exchange" is a source or a load, a resistance that is a path of its own
            from a top-level node to a reference included.
        owner: assembly path, "" at top level.
        domain: "electrical", "rotation" or "translation".
    """

    name: str
    power_w: float
    role: Role
    owner: str
    domain: str


@dataclass(frozen=True, slots=True)
class PowerFlow:
    """Power of the islands of one kind, W.

    Args:
        delivered_w: by sources and by loads that give back, >= 0.
        absorbed_w: by loads, >= 0.
        lost_w: dissipated in resistances, semiconductors and other parts that heat up.
        stored_w: flowing into capacitors, inductors, masses; 0 at rest.
    """

    delivered_w: float
    absorbed_w: float
    lost_w: float
    stored_w: float

    @property
    def residual_w(self) -> float:
        """delivered - absorbed - lost - stored: what the solution's tolerance leaves over."""
        return self.delivered_w - self.absorbed_w - self.lost_w - self.stored_w

    @property
    def efficiency(self) -> float | None:
        """What reaches the loads as a share of what is delivered; None where nothing is delivered."""
        return self.absorbed_w / self.delivered_w if self.delivered_w > 0.0 else None


@dataclass(frozen=True, slots=True)
class PowerBalance:
    """Power of a circuit at one instant, kind of island by kind of island; what passes from one kind to another is absorbed in the one and
    delivered in the other.

    Args:
        items: every element.
        flows: "electrical", and "rotation", "translation" where there are such islands. Heat islands carry heat, not power, and are left out.
        losses: assembly path → W dissipated inside it, inner assemblies included; "" is the whole circuit.
    """

    items: tuple[PowerItem, ...]
    flows: Mapping[str, PowerFlow]
    losses: Mapping[str, float] = field(default_factory=dict)

    @property
    def electrical(self) -> PowerFlow:
        """Of the electrical islands."""
        return self.flows["electrical"]

    @property
    def delivered_w(self) -> float:
        """Delivered in the electrical islands, W."""
        return self.electrical.delivered_w

    @property
    def absorbed_w(self) -> float:
        """Absorbed by loads of the electrical islands, W."""
        return self.electrical.absorbed_w

    @property
    def lost_w(self) -> float:
        """Dissipated in the electrical islands, W."""
        return self.electrical.lost_w

    @property
    def residual_w(self) -> float:
        """What the solution's tolerance leaves over, all islands together, W."""
        return sum(flow.residual_w for flow in self.flows.values())

    @property
    def efficiency(self) -> float | None:
        """Of the electrical islands."""
        return self.electrical.efficiency


def power_balance(circuit: Circuit, evaluate: Callable[[Sequence[Node]], Sequence[float]]) -> PowerBalance:
    """Add up the power of every element.

    Args:
        circuit: whose branches are counted.
        evaluate: gives the values of circuit-level expressions.
    """
    branches = [b for b in circuit.branches.values() if b.domain is not Domain.HEAT]
    g = circuit.graph
    powers = evaluate([g.multiply(g.symbol("v", b.name), g.symbol("i", b.name)) for b in branches])
    items = _items(circuit, branches, powers)
    kinds = dict.fromkeys(("electrical", *(item.domain for item in items)))
    return PowerBalance(items, {kind: _flow([i for i in items if i.domain == kind]) for kind in kinds}, _losses(circuit, items))


def _flow(items: Sequence[PowerItem]) -> PowerFlow:
    exchanged = [item.power_w for item in items if item.role == "exchange"]
    delivered, absorbed = sum(-p for p in exchanged if p < 0.0), sum(p for p in exchanged if p > 0.0)
    lost = sum(item.power_w for item in items if item.role == "loss")
    return PowerFlow(delivered, absorbed, lost, sum(item.power_w for item in items if item.role == "storage"))


def _items(circuit: Circuit, branches: Sequence[Branch], powers: Sequence[float]) -> tuple[PowerItem, ...]:
    """One item per box or device; the slots of a device are added up."""
    sums: dict[str, float] = {}
    first: dict[str, Branch] = {}
    for branch, power in zip(branches, powers, strict=True):
        name = branch.device or branch.name
        sums[name] = sums.get(name, 0.0) + power
        first.setdefault(name, branch)
    loads = _loads(circuit)
    return tuple(
        PowerItem(name, power, _role(circuit, first[name], loads), first[name].owner, first[name].domain.name.lower()) for name, power in sums.items()
    )


def _loads(circuit: Circuit) -> frozenset[str]:
    """Resistances that stand for a load: electrical, at top level, alone on their path, from a node straight to a reference."""
    alone = [path.items[0][0] for path in circuit.paths.values() if path.owner == "" and len(path.items) == 1 and len(path.items[0]) == 1]
    branches = [circuit.branches[name] for name in alone if name in circuit.branches]
    ends = [(b.name, b.domain, circuit.nodes[b.left].is_reference or circuit.nodes[b.right].is_reference) for b in branches]
    return frozenset(name for name, domain, to_reference in ends if domain is Domain.ELECTRICAL and to_reference)


def _role(circuit: Circuit, branch: Branch, loads: frozenset[str]) -> Role:
    if branch.law in (Law.RESISTANCE, Law.CONDUCTANCE):
        return "exchange" if branch.name in loads else "loss"
    if branch.law in (Law.CHARGE, Law.FLUX):
        return "storage"
    if branch.device is not None:
        kind = KINDS[circuit.devices[branch.device].kind]
        if kind.category == "loss":
            return "loss"
        if all(slot.form in ("flux", "charge") for slot in kind.slots):
            return "storage"
    return "exchange"


def _losses(circuit: Circuit, items: Sequence[PowerItem]) -> dict[str, float]:
    """Losses by assembly: each counts for every assembly around it."""
    losses = {"": 0.0, **dict.fromkeys(circuit.assemblies, 0.0)}
    for item in items:
        if item.role != "loss":
            continue
        owner = item.owner
        while True:
            if owner in losses:
                losses[owner] += item.power_w
            if not owner:
                break
            owner = owner.rpartition(".")[0]
    return losses
