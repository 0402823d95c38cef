"""The operating point as a user reads it: any quantity by name, power balance, losses per assembly, modes of conduction."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Literal

from polewise.circuit.model import Circuit, Quantity
from polewise.devices.catalogue import KINDS
from polewise.expression.graph import Node
from polewise.grammar.diagnostics import Diagnostic
from polewise.grammar.units import unit_text
from polewise.results.balance import PowerBalance
from polewise.results.failures import UnknownName

Conduction = Literal["continuous", "discontinuous", "blocked"]
_CONDUCTION: Mapping[int, Conduction] = {2: "continuous", 1: "discontinuous", 0: "blocked"}


@dataclass(frozen=True, slots=True)
class PoleState:
    """A switch pole at rest.

    Args:
        name: its path.
        mode: of conduction.
        duty: on-fraction of its only (or upper) transistor, as asked for.
        current_a: that leaves at its mid.
        loss_w: in its devices, switching loss included.
    """

    name: str
    mode: Conduction
    duty: float
    current_a: float
    loss_w: float


@dataclass(frozen=True, slots=True)
class Finding:
    """Something about the operating point worth a word: `subject` the element, `kind` a stable word ("collapsed", "duty_limited")."""

    kind: str
    subject: str


@dataclass(frozen=True, slots=True, eq=False)
class Settled:
    """The operating point of a system. Values are read by the netlist's own spelling, in SI.

    Args:
        circuit: what it belongs to.
        strategy: which search found it.
        iterations: Newton corrections in all.
        power_balance: of the whole circuit.
        poles: every switch pole.
        findings: what deserves a look.
        warnings: of the search.
    """

    circuit: Circuit
    strategy: str
    iterations: int
    power_balance: PowerBalance
    poles: tuple[PoleState, ...]
    findings: tuple[Finding, ...]
    warnings: tuple[Diagnostic, ...]
    _find: Callable[[str], Quantity] = field(repr=False)
    _evaluate: Callable[[Sequence[Node]], Sequence[float]] = field(repr=False)
    _all: Callable[[], Sequence[str]] = field(repr=False)

    def __getitem__(self, name: str) -> float:
        """The value of a quantity.

        Raises:
            UnknownName: nothing has that name; a KeyError that lists near names.
        """
        return self._evaluate([self._find(name).expression])[0]

    def values(self, names: Sequence[str]) -> list[float]:
        """The values of several quantities, faster than one by one."""
        return list(self._evaluate([self._find(name).expression for name in names]))

    def unit(self, name: str) -> str:
        """The SI unit of a quantity, "1" for a plain number."""
        return unit_text(self._find(name).dimension)

    @property
    def names(self) -> tuple[str, ...]:
        """Every name that can be read."""
        return tuple(self._all())

    @property
    def losses(self) -> Mapping[str, float]:
        """Assembly path → power lost inside it, W; "" is the whole circuit."""
        return self.power_balance.losses

    @property
    def modes(self) -> Mapping[str, Conduction]:
        """Pole → mode of conduction."""
        return {pole.name: pole.mode for pole in self.poles}

    def __contains__(self, name: object) -> bool:
        try:
            self._find(str(name))
        except UnknownName:
            return False
        return True


def pole_states(circuit: Circuit, evaluate: Callable[[Sequence[Node]], Sequence[float]]) -> tuple[PoleState, ...]:
    """Read every pole."""
    g = circuit.graph
    poles = [d for d in circuit.devices.values() if KINDS[d.kind].switching]
    roots: list[Node] = []
    for pole in poles:
        roots += [g.symbol("reading", f"{pole.name}.{reading}") for reading in ("mode", "duty", "loss")]
        roots.append(g.negate(g.symbol("i", pole.branches["mid_arm"])))
    values = evaluate(roots)
    states = []
    for k, pole in enumerate(poles):
        mode, duty, loss, current = values[4 * k : 4 * k + 4]
        states.append(PoleState(pole.name, _CONDUCTION.get(round(mode), "continuous"), duty, current, loss))
    return tuple(states)
