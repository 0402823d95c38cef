"""The stress table of an edge-by-edge run: ripple, extremes with their instants, averages, RMS, losses, per pole device and passive element.

Conduction loss is the integral of v*i while a device conducts. Switching energies are the datasheet's, scaled by voltage and current at each
edge: E = E_ref * |v|/v_ref * |i|/i_ref with v the voltage blocked before turn-on (after turn-off), i the current after (before) it. So an edge
at zero voltage or zero current costs nothing, as in the averaged model of docs/models.md.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from typing import Final

import numpy as np

from polewise.analysis.carriers import Carriers
from polewise.circuit.model import Circuit, Domain, Law, Quantity
from polewise.devices.kind import PartValue
from polewise.grammar import units
from polewise.results.curve import AFTER, Curve
from polewise.results.recording import Column, Recording, recorded_curve

PASSIVE: Final[Mapping[Law, str]] = {Law.RESISTANCE: "resistor", Law.CONDUCTANCE: "resistor", Law.CHARGE: "capacitor", Law.FLUX: "inductor"}
CURRENT_NONE_A: Final = 1e-6  # a device that carries less is off
_POLE_READINGS: Final = ("upper_i", "lower_i", "upper_v", "lower_v")


@dataclass(frozen=True, slots=True)
class Waveform:
    """One quantity over the window, SI.

    Args:
        ripple: largest peak-to-peak value within one period.
        highest, lowest: with the study times at which they are first reached, s. mean, rms: over the window.
    """

    ripple: float
    highest: float
    highest_s: float
    lowest: float
    lowest_s: float
    mean: float
    rms: float

    @property
    def peak(self) -> float:
        """The largest size, with its sign."""
        return self.highest if abs(self.highest) >= abs(self.lowest) else self.lowest

    @property
    def peak_s(self) -> float:
        """When that is."""
        return self.highest_s if abs(self.highest) >= abs(self.lowest) else self.lowest_s


@dataclass(frozen=True, slots=True)
class ElementStress:
    """One element: a passive box, or one device of a pole ("berth1.leg.upper").

    Args:
        kind: "resistor", "inductor", "capacitor", "transistor", "diode".
        voltage, current: left minus right, entering at the left; of a transistor from its top to its bottom, of a diode in its own direction.
        blocking_v: largest voltage in the blocking direction of a device; None for a passive.
        conduction_loss_w, switching_loss_w: averages over the window; a resistor's loss counts as conduction.
        edges: how often a device took over or gave up a current in the window.
    """

    name: str
    kind: str
    owner: str
    voltage: Waveform
    current: Waveform
    blocking_v: float | None = None
    conduction_loss_w: float = 0.0
    switching_loss_w: float = 0.0
    edges: int = 0

    @property
    def loss_w(self) -> float:
        """Both."""
        return self.conduction_loss_w + self.switching_loss_w


@dataclass(frozen=True, slots=True)
class StressTable:
    """All of a window's.

    Args:
        begin_s, end_s: what it covers. elements: poles' devices first, in the order of the text.
    """

    begin_s: float
    end_s: float
    elements: tuple[ElementStress, ...]
    _at: Mapping[str, int] = field(default_factory=dict, repr=False)

    def __getitem__(self, name: str) -> ElementStress:
        """An element by its path.

        Raises:
            UnknownName: there is none.
        """
        from polewise.results.failures import UnknownName, nearest_names

        k = self._at.get(name)
        if k is None:
            raise UnknownName(name, f"`{name}` is not in the stress table", nearest_names(name, self._at))
        return self.elements[k]

    def __iter__(self) -> Iterator[ElementStress]:
        return iter(self.elements)

    def __len__(self) -> int:
        return len(self.elements)

    @property
    def names(self) -> tuple[str, ...]:
        """Of all elements."""
        return tuple(self._at)


def stress_quantities(circuit: Circuit) -> list[Quantity]:
    """What must be recorded for the table."""
    g = circuit.graph
    found = []
    for device in circuit.devices.values():
        if device.kind == "pole":
            for reading in _POLE_READINGS:
                dimension = units.VOLTAGE if reading.endswith("v") else units.CURRENT
                found.append(Quantity(_column(device.name, reading), g.symbol("reading", f"{device.name}.{reading}"), dimension))
    for branch in circuit.branches.values():
        if branch.law in PASSIVE and branch.domain is Domain.ELECTRICAL:
            found.append(Quantity(_column(branch.name, "v"), g.symbol("v", branch.name), units.VOLTAGE))
            found.append(Quantity(_column(branch.name, "i"), g.symbol("i", branch.name), units.CURRENT))
    return found


def stress_columns(circuit: Circuit) -> list[Column]:
    """Their columns."""
    return [Column(q.name, q.dimension, False, "judged") for q in stress_quantities(circuit)]


def _column(element: str, reading: str) -> str:
    return f"stress of {element}: {reading}"


def stress_table(circuit: Circuit, carriers: Carriers, recording: Recording) -> StressTable:
    """Work the table out.

    Args:
        circuit: which. carriers: its poles'. recording: of every edge, with stress_quantities in it.
    """
    begin_s, end_s = float(recording.grid.time[0]), float(recording.grid.time[-1])
    maker = _Maker(recording, begin_s, end_s)
    elements = []
    for device in circuit.devices.values():
        if device.kind == "pole":
            period_s = carriers.of(device.name).period_s
            for part in ("upper", "lower"):
                value = device.settings[part]
                assert isinstance(value, PartValue)
                energies = {k: circuit.graph.value_of(node) for k, node in value.values.items() if node is not None}
                elements.append(maker.device(device.name, part, value.kind, device.owner, period_s, energies))
    for branch in circuit.branches.values():
        if branch.law in PASSIVE and branch.domain is Domain.ELECTRICAL:
            elements.append(maker.passive(branch.name, PASSIVE[branch.law], branch.owner, carriers.longest_s))
    return StressTable(begin_s, end_s, tuple(elements), {e.name: k for k, e in enumerate(elements)})


class _Maker:
    """Waveforms of one recording."""

    def __init__(self, recording: Recording, begin_s: float, end_s: float) -> None:
        self.recording, self.begin_s, self.end_s = recording, begin_s, end_s
        flag = recording.grid.flag
        self.after = np.flatnonzero(flag == AFTER)
        self.after = self.after[self.after > 0]

    def passive(self, name: str, kind: str, owner: str, period_s: float) -> ElementStress:
        """A box."""
        v, i = (recorded_curve(self.recording, _column(name, r)) for r in ("v", "i"))
        loss = product_integral(v, i) / max(v.duration_s(), 1e-300) if kind == "resistor" else 0.0
        return ElementStress(name, kind, owner, self.waveform(v, period_s), self.waveform(i, period_s), None, loss)

    def device(self, pole: str, part: str, kind: str, owner: str, period_s: float, energies: Mapping[str, float | None]) -> ElementStress:
        """One device of a pole."""
        v, i = (recorded_curve(self.recording, _column(pole, f"{part}_{r}")) for r in ("v", "i"))
        duration = max(v.duration_s(), 1e-300)
        energy, edges = self._edges(pole, part, kind, energies)
        blocking = max(v.highest()[0], 0.0)
        conduction = product_integral(v, i) / duration
        if kind == "diode":
            v, i = v.negated(), i.negated()
        voltage, current = self.waveform(v, period_s), self.waveform(i, period_s)
        return ElementStress(f"{pole}.{part}", kind, owner, voltage, current, blocking, conduction, energy / duration, edges)

    def _edges(self, pole: str, part: str, kind: str, energies: Mapping[str, float | None]) -> tuple[float, int]:
        """Energy of all edges in the window, J, and their number."""
        v, i = (self.recording.values(_column(pole, f"{part}_{r}")) for r in ("v", "i"))
        before, after = self.after - 1, self.after
        on = (np.abs(i[before]) <= CURRENT_NONE_A) & (np.abs(i[after]) > CURRENT_NONE_A)
        off = (np.abs(i[before]) > CURRENT_NONE_A) & (np.abs(i[after]) <= CURRENT_NONE_A)
        v_ref, i_ref = energies.get("at_voltage"), energies.get("at_current")
        if not v_ref or not i_ref:
            return 0.0, int(on.sum() + off.sum())
        scale = 1.0 / (v_ref * i_ref)
        forward_on, forward_off = on & (i[after] > 0.0), off & (i[before] > 0.0)
        backward_off = off & (i[before] < 0.0)
        blocked = np.maximum(v[before], 0.0), np.maximum(v[after], 0.0)
        total = (energies.get("turn_on") or 0.0) * float(np.sum(blocked[0][forward_on] * i[after][forward_on])) if kind == "transistor" else 0.0
        total += (energies.get("turn_off") or 0.0) * float(np.sum(blocked[1][forward_off] * i[before][forward_off])) if kind == "transistor" else 0.0
        total += (energies.get("recovery") or 0.0) * float(np.sum(blocked[1][backward_off] * -i[before][backward_off]))
        return total * scale, int(on.sum() + off.sum())

    def waveform(self, curve: Curve, period_s: float) -> Waveform:
        """Its numbers."""
        (high, high_s), (low, low_s) = curve.highest(), curve.lowest()
        duration = max(curve.duration_s(), 1e-300)
        rms = float(np.sqrt(max(0.0, curve.square_integral() / duration)))
        return Waveform(curve.ripple(period_s)[0], high, high_s, low, low_s, curve.integral() / duration, rms)


def product_integral(a: Curve, b: Curve) -> float:
    """Integral of the product of two curves of one recording, exact for cubics (degree six)."""
    points, weights = np.polynomial.legendre.leggauss(4)
    total = np.zeros_like(a.start)
    for point, weight in zip(points, weights, strict=True):
        u = 0.5 * (point + 1.0)
        powers = np.array([1.0, u, u * u, u**3])
        total += 0.5 * weight * (a.coefficient @ powers) * (b.coefficient @ powers)
    return float(np.dot(a.length, total))
