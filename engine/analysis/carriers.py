"""The carriers of a circuit's poles: rates, phases, where their periods start, and the period they have in common."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction

from polewise.circuit.model import Circuit, Device
from polewise.devices.kind import KINDS
from polewise.devices.pole import driven_devices
from polewise.solve.problem import DaeProblem

PERIODS_MOST = 64  # of the slowest clock in a common period
RATIO_RELATIVE = 1e-9  # rates whose ratio is this close to one of whole numbers are in that ratio
START_RELATIVE = 1e-9  # of a period: an instant this close before a period's start counts as that start


@dataclass(frozen=True, slots=True)
class Carrier:
    """One pole's carrier: period k starts at offset_s + k*period_s of study time.

    Args:
        pole: its name. kind: "trailing", "leading", "symmetric".
        diode: "upper", "lower", or None for two transistors.
    """

    pole: str
    rate_hz: float
    offset_s: float
    kind: str
    sampling: str
    diode: str | None

    @property
    def period_s(self) -> float:
        """1/f."""
        return 1.0 / self.rate_hz

    def period_start(self, t: float) -> float:
        """The last start of a period at or before t."""
        k = math.floor((t - self.offset_s) / self.period_s + START_RELATIVE)
        return self.offset_s + k * self.period_s


@dataclass(frozen=True, slots=True)
class Carriers:
    """All of a circuit's."""

    each: tuple[Carrier, ...]

    @property
    def longest_s(self) -> float:
        """Period of the slowest pole."""
        return max(c.period_s for c in self.each)

    @property
    def shortest_s(self) -> float:
        """Period of the fastest pole."""
        return min(c.period_s for c in self.each)

    def of(self, pole: str) -> Carrier:
        """The carrier of a pole."""
        return next(c for c in self.each if c.pole == pole)

    def common_period_s(self, others: Sequence[float] = ()) -> float | None:
        """The shortest time after which all carriers and further clocks repeat; None beyond PERIODS_MOST periods of the slowest."""
        return common_period([*(c.period_s for c in self.each), *others])

    def period_starts(self, t: float) -> dict[str, float]:
        """Value at t of the parameter that holds each carrier's last start."""
        return {f"{c.pole}.period_start": c.period_start(t) for c in self.each}

    def one_way(self, problem: DaeProblem) -> list[tuple[int, float]]:
        """States that are the current of a diode pole: (index, +1 where it can't go below zero, -1 where it can't go above)."""
        g = problem.system.graph
        places = {u.symbol: k for k, u in enumerate(problem.system.unknowns) if u.is_state}
        found = []
        for carrier in self.each:
            if carrier.diode is None:
                continue
            sign = 1.0 if carrier.diode == "lower" else -1.0
            (leaving,) = problem.system.resolve([g.negate(g.symbol("i", f"{carrier.pole}.mid_arm"))])
            if leaving in places:
                found.append((places[leaving], sign))
            elif (opposite := g.negate(leaving)) in places:
                found.append((places[opposite], -sign))
        return found


def common_period(periods: Sequence[float]) -> float | None:
    """Least common multiple of periods that are in ratios of whole numbers; None where there is none within PERIODS_MOST of the longest."""
    if not periods:
        return None
    longest = max(periods)
    multiple = 1
    for period in periods:
        ratio = Fraction(longest / period).limit_denominator(PERIODS_MOST)
        if abs(float(ratio) * period - longest) > RATIO_RELATIVE * longest:
            return None
        multiple = math.lcm(multiple, ratio.denominator)
        if multiple > PERIODS_MOST:
            return None
    return multiple * longest


def carriers_of(circuit: Circuit) -> Carriers | None:
    """The carriers of a circuit; None where nothing switches."""
    found = tuple(_carrier(circuit, d) for d in circuit.devices.values() if KINDS[d.kind].switching)
    return Carriers(found) if found else None


def _carrier(circuit: Circuit, device: Device) -> Carrier:
    def number(name: str, otherwise: float) -> float:
        node = device.settings.get(name)
        value = circuit.graph.value_of(node) if isinstance(node, int) else None
        return otherwise if value is None else value

    rate = number("rate", 1.0)
    offset = number("phase", 0.0) / math.tau / rate % (1.0 / rate)
    upper, lower = driven_devices(device.settings)
    diode = "upper" if upper == "diode" else "lower" if lower == "diode" else None
    return Carrier(device.name, rate, offset, str(device.settings.get("carrier", "trailing")), str(device.settings.get("sampling", "natural")), diode)
