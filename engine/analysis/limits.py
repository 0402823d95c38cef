"""How far a value may go until a mode breaks: largest stable constant power, smallest stable capacitance, by exact root search on eigenvalues."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from polewise.analysis import failures
from polewise.analysis.linearise import Point, linearise
from polewise.analysis.modes import Modes, find_modes
from polewise.analysis.point import ComplexArray
from polewise.analysis.probes import Probing
from polewise.analysis.spectrum import spectrum
from polewise.analysis.standpoint import Standpoint
from polewise.circuit.model import Law
from polewise.errors import SolverError

SCAN_POINTS = 25  # values looked at between the ends before a root is enclosed
FOLD_BISECTIONS = 34  # the end of operating points to 1e-10 of the range


@dataclass(frozen=True, slots=True, eq=False)
class StabilityLimit:
    """Where stability ends.

    Args:
        name: what was varied; unit: SI unit of the value.
        value: at the limit; nan where the whole range is stable.
        largest: whether the stable side is below the value.
        eigenvalue: of the mode that breaks there; frequency_hz its oscillation, 0 for a drift.
        reason: "mode": a mode reaches the axis; "no operating point": the state of rest ends first; "none": stable over the range.
        modes: all modes at the limit, the breaking one first; None where there is no point.
    """

    name: str
    unit: str
    value: float
    largest: bool
    eigenvalue: complex
    reason: str
    modes: Modes | None

    @property
    def frequency_hz(self) -> float:
        """Of the oscillation that breaks out."""
        return abs(self.eigenvalue.imag) / (2.0 * math.pi)


class _Dial:
    """A circuit with one value on a latch; modes and points at its settings, each point the next one's guess."""

    def __init__(self, stand: Standpoint, name: str) -> None:
        probing = stand.probing()
        branch = stand.circuit.branches.get(stand.circuit.aliases.get(name, name))
        device = stand.circuit.devices.get(stand.circuit.aliases.get(name.removesuffix(".p"), name.removesuffix(".p")))
        if branch is not None and branch.law in (Law.RESISTANCE, Law.CONDUCTANCE, Law.CHARGE, Law.FLUX):
            from polewise.analysis.modes import element_value

            self.base = element_value(stand.circuit, branch.name)
            if not math.isfinite(self.base) or self.base == 0.0:
                raise failures.refused("no-constant-value", f"`{name}` has no constant value that could be turned")
            self.latch = probing.scale_elements(lambda b: b.name == branch.name)[branch.name].latch
            self.relative = True
        else:
            target = f"{name}.p" if device is not None and not name.endswith(".p") else name
            probe = probing.add(target)
            self.latch, self.relative = probe.latch, False
            self.base = self._present(stand, probing, target)
        self.stand = stand.with_copy(probing.circuit, probing.network)
        self.system = self.stand.equations()
        self.guess: dict[str, float] | None = None

    def _present(self, stand: Standpoint, probing: Probing, name: str) -> float:
        """The value that a disturbance of 0 leaves in place; a latch of the circuit's own is set as a whole."""
        if self.latch in stand.circuit.latches:
            return 0.0
        quantity = stand.quantity(name)
        system = stand.equations([quantity])
        from polewise.solve.problem import reader

        point = stand.point(system)
        return reader(system, system.resolve([quantity.expression]))(point.x, point.time_s, point.p)[0]

    def at(self, value: float) -> tuple[Standpoint, Point, ComplexArray] | None:
        """Modes with the value in place; None where there is no operating point."""
        latch = value / self.base - 1.0 if self.relative else value - self.base
        place = Standpoint(
            self.stand.circuit, self.stand.network, {**self.stand.latches, self.latch: latch}, self.stand.study, self.stand.snapshot, self.guess
        )
        try:
            point = place.point(self.system)
        except SolverError:
            return None
        self.guess = {u.name: float(x) for u, x in zip(self.system.unknowns, point.x, strict=True)}
        linear = linearise(self.system, place.circuit, point, [], [])
        if linear.held:
            from polewise.analysis.sampled import sampled_spectrum

            return place, point, sampled_spectrum(linear)[0].values
        return place, point, spectrum(linear).values

    def abscissa(self, value: float) -> float:
        """The largest real part over the largest size; +1 where there is no operating point."""
        found = self.at(value)
        if found is None:
            return 1.0
        values = found[2]
        return float(np.max(values.real) / np.max(np.abs(values))) if len(values) else -1.0


def stability_limit(stand: Standpoint, name: str, low: float, high: float, unit: str = "") -> StabilityLimit:
    """The value between low and high at which the circuit stops being stable.

    Args:
        name: an element (R, L, C), a constant power, a latch, an input, a signal or the value of a source.
        low, high: SI, ends of the search; one of them must be stable.
    Raises:
        AnalysisRefused: neither end is stable.
    """
    if not (0.0 < low < high or low < high <= 0.0 or low < 0.0 < high or (low == 0.0 and high > 0.0)):
        raise failures.refused("empty-range", "the range of a search must go from a lower to a higher value")
    dial = _Dial(stand, name)
    values = np.geomspace(low, high, SCAN_POINTS) if low > 0.0 else np.linspace(low, high, SCAN_POINTS)
    stable_low, stable_high = dial.abscissa(low) < 0.0, dial.abscissa(high) < 0.0
    if not stable_low and not stable_high:
        raise failures.refused("never-stable", f"the circuit is stable neither at the lowest nor at the highest value of `{name}`")
    ascending = stable_low
    walk = values if ascending else values[::-1]
    dial.guess = None
    previous = float(walk[0])
    for value in walk[1:]:
        if dial.abscissa(float(value)) >= 0.0:
            return _found(dial, stand, name, unit, previous, float(value), ascending)
        previous = float(value)
    return StabilityLimit(name, unit, math.nan, ascending, complex(math.nan), "none", None)


def _found(dial: _Dial, stand: Standpoint, name: str, unit: str, stable: float, unstable: float, largest: bool) -> StabilityLimit:
    """Enclose the limit: bisect past the end of operating points, then an exact root of the largest real part."""
    from scipy.optimize import brentq

    inside, outside = stable, unstable
    for _ in range(FOLD_BISECTIONS):
        if dial.at(outside) is not None:
            break
        middle = 0.5 * (inside + outside)
        if dial.abscissa(middle) < 0.0:
            inside = middle
        else:
            outside = middle
    if dial.at(outside) is None:
        return StabilityLimit(name, unit, inside, largest, complex(math.nan), "no operating point", None)
    if dial.abscissa(inside) < 0.0 < dial.abscissa(outside):
        value = float(brentq(dial.abscissa, inside, outside, xtol=1e-15 * max(abs(inside), abs(outside)), rtol=8.9e-16))
    else:
        # No crossing to follow: a limit is reached and a mode stands at zero at once, or another branch begins. Close in on the last stable value.
        for _ in range(FOLD_BISECTIONS):
            middle = 0.5 * (inside + outside)
            if dial.abscissa(middle) < 0.0:
                inside = middle
            else:
                outside = middle
        value = outside
    found = dial.at(value)
    if found is None:
        return StabilityLimit(name, unit, inside, largest, complex(math.nan), "no operating point", None)
    place, _, eigenvalues = found
    breaking = complex(eigenvalues[int(np.argmax(eigenvalues.real))])
    if breaking.imag < 0.0:
        breaking = breaking.conjugate()
    return StabilityLimit(name, unit, value, largest, breaking, "mode", find_modes(place))
