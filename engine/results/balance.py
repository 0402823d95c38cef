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
        role: "loss" turns what it absorbs into heat; "storage" holds it; "exchange" is a source or a load.
        owner: assembly path, "" at top level.
    """

    name: str
    power_w: float
    role: Role
    owner: str


@dataclass(frozen=True, slots=True)
class PowerBalance:
    """Power of a circuit at one instant, W; electrical and mechanical islands together.

    Args:
        items: every element.
        delivered_w: by sources and by loads that give back, > 0.
        absorbed_w: by loads, > 0.
        lost_w: in resistances, semiconductors and other parts that heat up.
        stored_w: flowing into capacitors, inductors, masses; 0 at rest.
        residual_w: delivered - absorbed - lost - stored: what the solution's tolerance leaves over.
        losses: assembly path → W lost inside it, inner assemblies included; "" is the whole circuit.
    """

    items: tuple[PowerItem, ...]
    delivered_w: float
    absorbed_w: float
    lost_w: float
    stored_w: float
    residual_w: float
    losses: Mapping[str, float] = field(default_factory=dict)

    @property
    def efficiency(self) -> float | None:
        """What reaches the loads as a share of what is delivered; None where nothing is delivered."""
        return self.absorbed_w / self.delivered_w if self.delivered_w > 0.0 else None


def power_balance(circuit: Circuit, evaluate: Callable[[Sequence[Node]], Sequence[float]]) -> PowerBalance:
    """Add up the power of every element.

    Args:
        circuit: whose branches are counted; heat islands carry heat as their through value and are left out.
        evaluate: gives the values of circuit-level expressions.
    """
    branches = [b for b in circuit.branches.values() if b.domain is not Domain.HEAT]
    g = circuit.graph
    powers = evaluate([g.multiply(g.symbol("v", b.name), g.symbol("i", b.name)) for b in branches])
    items = _items(circuit, branches, powers)
    exchanged = [item.power_w for item in items if item.role == "exchange"]
    delivered, absorbed = -sum(p for p in exchanged if p < 0.0), sum(p for p in exchanged if p > 0.0)
    lost = sum(item.power_w for item in items if item.role == "loss")
    stored = sum(item.power_w for item in items if item.role == "storage")
    return PowerBalance(items, delivered, absorbed, lost, stored, delivered - absorbed - lost - stored, _losses(circuit, items))


def _items(circuit: Circuit, branches: Sequence[Branch], powers: Sequence[float]) -> tuple[PowerItem, ...]:
    """One item per box or device; the slots of a device are added up."""
    sums: dict[str, float] = {}
    first: dict[str, Branch] = {}
    for branch, power in zip(branches, powers, strict=True):
        name = branch.device or branch.name
        sums[name] = sums.get(name, 0.0) + power
        first.setdefault(name, branch)
    return tuple(PowerItem(name, power, _role(circuit, first[name]), first[name].owner) for name, power in sums.items())


def _role(circuit: Circuit, branch: Branch) -> Role:
    if branch.law in (Law.RESISTANCE, Law.CONDUCTANCE):
        return "loss"
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
