"""Modes of a circuit: how fast, how damped, whose they are, and which elements move them."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from polewise.analysis.linearise import LinearSystem
from polewise.analysis.point import ComplexArray
from polewise.analysis.sensitivity import Cluster, relative_sensitivities
from polewise.analysis.spectrum import Spectrum, pencil_slope, spectrum
from polewise.analysis.standpoint import Linearised, Standpoint
from polewise.circuit.model import Circuit, Law

# Modes that differ by less than this part of their size count as one repeated mode.
CLUSTER_RELATIVE = 1e-6
ELEMENTS_TOLD = 3  # elements named for each mode
ELEMENT_SHARE_MIN = 0.05  # an element that moves the damping less than this part of the strongest is not worth a word
KINKS_MAX = 3  # kinks whose other sides are looked at
PAIRING_CONDITION_MAX = 1e10  # beyond, the vectors of a repeated mode are not independent (a defective one)
ALIKE_RELATIVE = 1e-6  # elements of a name but for numbers that pull within this of each other are told together
TOP_LEVEL = "(top level)"
_DIGITS = re.compile(r"\d+")


@dataclass(frozen=True, slots=True)
class ElementSensitivity:
    """One element's pull on a mode.

    Args:
        name: of the element ("bank.c"), or of alike ones in a repeated mode ("berth{*}.cap.c").
        value: SI; nan where alike elements differ or the value varies.
        by_ratio: d(lambda)/d(ln value), 1/s. by_value: d(lambda)/d(value), 1/s per SI unit.
        damping_by_percent: change of the damping ratio when the value grows by one per cent.
    """

    name: str
    value: float
    by_ratio: complex
    by_value: complex
    damping_by_percent: float


@dataclass(frozen=True, slots=True)
class Mode:
    """One mode, or a repeated one.

    Args:
        eigenvalue: rad/s; of a pair the one with positive imaginary part.
        multiplicity: how many equal modes ("5 x").
        participation: unknown (or late value) → complex share; they sum to one.
        by_assembly: assembly path → share, the same summed.
        elements: the two or three that move the damping most, strongest first.
    """

    eigenvalue: complex
    multiplicity: int
    participation: Mapping[str, complex]
    by_assembly: Mapping[str, complex]
    elements: tuple[ElementSensitivity, ...]

    @property
    def frequency_hz(self) -> float:
        """Of the oscillation, 0 for a real mode."""
        return abs(self.eigenvalue.imag) / (2.0 * math.pi)

    @property
    def natural_frequency_hz(self) -> float:
        """|lambda| / 2 pi."""
        return abs(self.eigenvalue) / (2.0 * math.pi)

    @property
    def damping(self) -> float:
        """Damping ratio: 1 for a real stable mode, negative for an unstable one."""
        size = abs(self.eigenvalue)
        return -self.eigenvalue.real / size if size > 0.0 else 0.0

    @property
    def time_constant_s(self) -> float:
        """-1 / Re; negative for a mode that grows, inf on the axis."""
        return -1.0 / self.eigenvalue.real if self.eigenvalue.real != 0.0 else math.inf

    @property
    def stable(self) -> bool:
        """Whether it dies out."""
        return self.eigenvalue.real < 0.0

    def owners(self) -> list[tuple[str, float]]:
        """Assemblies by weight: |share| over the sum of all |share|, largest first."""
        return _weights(self.by_assembly)

    def states(self) -> list[tuple[str, float]]:
        """Unknowns by weight, largest first."""
        return _weights(self.participation)

    def sentence(self) -> str:
        """Whose it is and what moves it, in plain words."""
        times = f"{self.multiplicity} equal modes" if self.multiplicity > 1 else "mode"
        kind = f"{times} at {_figure(self.frequency_hz)} Hz" if self.frequency_hz > 0 else f"{times} of {_figure(self.time_constant_s)} s"
        owners = [f"{name} {weight:.0%}" for name, weight in _gathered(self.owners())[:3] if weight >= 0.05]
        text = f"{kind}, damping {_figure(self.damping)}: {', '.join(owners)}"
        if self.elements:
            moves = ", ".join(f"{'more' if e.damping_by_percent > 0 else 'less'} of {e.name}" for e in self.elements)
            text += f"; it would be better damped with {moves}"
        return text


def _gathered(weights: Sequence[tuple[str, float]]) -> list[tuple[str, float]]:
    """Assemblies of one name but for numbers with equal weights, together: "berth{*} 52 %"."""
    groups: dict[tuple[str, float], list[str]] = {}
    for name, weight in weights:
        groups.setdefault((_DIGITS.sub("{*}", name), round(weight, 4)), []).append(name)
    told = [(label if len(names) > 1 else names[0], weight * len(names)) for (label, weight), names in groups.items()]
    return sorted(told, key=lambda item: -item[1])


def _figure(value: float) -> str:
    return f"{value:.4g}"


def _weights(shares: Mapping[str, complex]) -> list[tuple[str, float]]:
    total = sum(abs(v) for v in shares.values())
    return sorted(((name, abs(v) / total if total else 0.0) for name, v in shares.items()), key=lambda item: -item[1])


@dataclass(frozen=True, slots=True, eq=False)
class Modes:
    """All modes at a point.

    Args:
        modes: least damped first.
        complete_to_hz: oscillations above this frequency are not listed (delays have endless ones); inf: all are.
        kinks: where the point stands at a kink, one text per kink.
        other_sides: modes on the other side of each kink.
        period_s: of the clocks in sampled control (modes are ln(z)/T); None without.
        linear: what was solved.
    """

    modes: tuple[Mode, ...]
    complete_to_hz: float
    kinks: tuple[str, ...]
    other_sides: tuple[Modes, ...]
    period_s: float | None
    linear: LinearSystem

    def __iter__(self) -> Iterator[Mode]:
        return iter(self.modes)

    def __len__(self) -> int:
        return len(self.modes)

    def __getitem__(self, k: int) -> Mode:
        return self.modes[k]

    @property
    def eigenvalues(self) -> ComplexArray:
        """Every one, repeated and conjugate ones too, shape (n_modes,), rad/s."""
        values = []
        for mode in self.modes:
            values += [mode.eigenvalue] * mode.multiplicity
            if mode.eigenvalue.imag != 0.0:
                values += [mode.eigenvalue.conjugate()] * mode.multiplicity
        return np.array(values, dtype=complex)

    @property
    def stable(self) -> bool:
        """Whether every mode dies out."""
        return all(mode.stable for mode in self.modes)

    @property
    def least_damped(self) -> Mode:
        """The mode of the smallest damping ratio."""
        return self.modes[0]


def find_modes(stand: Standpoint, *, sensitivities: bool = True) -> Modes:
    """Modes of a small or middling system (dense algebra), with participation and sensitivities; at kinks for both sides."""
    probing = stand.probing()
    scales = {name: probe.latch for name, probe in probing.scale_elements().items()} if sensitivities else {}
    made = stand.linearised(probing, [], [])
    modes = _modes(made, scales, stand.circuit)
    kinks = made.linear.kinks[:KINKS_MAX]
    if not kinks:
        return modes
    others = tuple(_modes(made.flipped({kink: 1 - _side(made, kink)}), scales, stand.circuit) for kink in kinks)
    texts = tuple(_kink_text(made, kink) for kink in kinks)
    return Modes(modes.modes, modes.complete_to_hz, texts, others, modes.period_s, modes.linear)


def _side(made: Linearised, switch: int) -> int:
    from polewise.analysis.linearise import bound_sides, symbol_values
    from polewise.analysis.point import PointValues

    here = PointValues(made.system.graph, symbol_values(made.system, made.point), bound_sides(made.system, made.point))
    return int(here.values([switch])[0])


def _kink_text(made: Linearised, switch: int) -> str:
    """Which laws a kink stands in."""
    graph = made.system.graph
    names = [u.name for u in made.linear.unknowns if switch in graph.reachable([u.residual])]
    return f"a limit or boundary in the law of {', '.join(names[:3])}" if names else "a limit or boundary"


def _modes(made: Linearised, scales: Mapping[str, str], circuit: Circuit) -> Modes:
    linear = made.linear
    if linear.held:
        from polewise.analysis.sampled import sampled_spectrum

        found, lifted, _ = sampled_spectrum(linear)
        names = [*lifted.state_names, *linear.held_names]
        owner_of = {u.name: u.owner for u in linear.unknowns}
        owners = [owner_of.get(n, n.rpartition(".")[0]) for n in names]
        clusters = cluster(found)
        unit: ComplexArray = np.eye(len(names), dtype=np.complex128)
        found = paired(found, clusters, lambda lam: unit)
        modes = [_mode(found, c, _shares(found, c, unit), names, owners, ()) for c in clusters]
        return Modes(_ordered(modes), found.angle_limit_rad_s / (2 * math.pi), (), (), lifted.period_s, linear)
    found = spectrum(linear)
    names = [*linear.names, *(c.name for c in linear.channels)]
    owners = [*(u.owner for u in linear.unknowns), *(c.name.rpartition(".")[0] for c in linear.channels)]
    clusters = cluster(found)
    found = paired(found, clusters, lambda lam: pencil_slope(linear, lam))
    pulls = relative_sensitivities(made, found, clusters, scales) if scales else {}
    modes = []
    for k, c in enumerate(clusters):
        lam = complex(np.mean(found.values[list(c.members)]))
        elements = rank_elements(circuit, lam, {name: complex(v[k]) for name, v in pulls.items()}, len(c.members))
        modes.append(_mode(found, c, _shares(found, c, pencil_slope(linear, lam)), names, owners, elements))
    return Modes(_ordered(modes), found.angle_limit_rad_s / (2 * math.pi), (), (), None, linear)


def cluster(found: Spectrum) -> list[Cluster]:
    """Group equal eigenvalues; of complex pairs only those with positive imaginary part."""
    order = sorted(range(len(found.values)), key=lambda k: (abs(found.values[k]), found.values[k].imag))
    groups: list[list[int]] = []
    for k in order:
        value = found.values[k]
        if value.imag < -1e-12 * abs(value):
            continue
        group = next((g for g in reversed(groups[-8:]) if abs(found.values[g[0]] - value) <= CLUSTER_RELATIVE * abs(value)), None)
        if group is None:
            groups.append([k])
        else:
            group.append(k)
    return [Cluster(tuple(g)) for g in groups]


def paired(found: Spectrum, clusters: Sequence[Cluster], slope_at: Callable[[complex], ComplexArray]) -> Spectrum:
    """Left vectors of each repeated mode chosen so that left^T N' right is the unit matrix: then no choice of right vectors matters."""
    left = found.left.copy()
    for c in clusters:
        members = list(c.members)
        if len(members) == 1:
            continue
        gram = left[:, members].T @ slope_at(complex(np.mean(found.values[members]))) @ found.right[:, members]
        if np.linalg.cond(gram) < PAIRING_CONDITION_MAX:
            left[:, members] = np.linalg.solve(gram, left[:, members].T).T
    return replace(found, left=left)


def _shares(found: Spectrum, c: Cluster, slope: ComplexArray) -> ComplexArray:
    """Diagonal of the spectral projector over the number of equal modes."""
    right, left = found.right[:, list(c.members)], found.left[:, list(c.members)]
    shares: ComplexArray = np.sum((slope.T @ left) * right, axis=1) / len(c.members)
    return shares


def _mode(
    found: Spectrum, c: Cluster, shares: ComplexArray, names: Sequence[str], owners: Sequence[str], elements: tuple[ElementSensitivity, ...]
) -> Mode:
    value = complex(np.mean(found.values[list(c.members)]))
    if abs(value.imag) <= 1e-12 * abs(value):
        value = complex(value.real, 0.0)
    participation = {name: complex(share) for name, share in zip(names, shares, strict=True) if share != 0.0}
    by_assembly: dict[str, complex] = {}
    for owner, share in zip(owners, shares, strict=True):
        key = owner or TOP_LEVEL
        by_assembly[key] = by_assembly.get(key, 0.0) + complex(share)
    return Mode(value, len(c.members), participation, by_assembly, elements)


def rank_elements(circuit: Circuit, lam: complex, pulls: Mapping[str, complex], multiplicity: int) -> tuple[ElementSensitivity, ...]:
    """The elements that move the damping ratio most; alike ones of a repeated mode are taken together."""
    alike: dict[str, list[str]] = {}
    for name in pulls:
        alike.setdefault(_DIGITS.sub("{*}", name), []).append(name)
    groups: dict[str, list[str]] = {}
    for label, members in alike.items():
        spread = max(abs(pulls[m] - pulls[members[0]]) for m in members)
        if multiplicity > 1 or spread <= ALIKE_RELATIVE * abs(pulls[members[0]]):
            groups[label] = members
        else:
            groups.update({m: [m] for m in members})
    made = []
    for label, members in groups.items():
        total = sum((pulls[m] for m in members), 0j)
        values = {element_value(circuit, m) for m in members}
        value = values.pop() if len(values) == 1 else math.nan
        shown = label if len(members) > 1 else members[0]
        made.append(ElementSensitivity(shown, value, total, total / value if value else complex(math.nan), 0.01 * damping_slope(lam, total)))
    made.sort(key=lambda e: -abs(e.damping_by_percent))
    if not made:
        return ()
    strongest = abs(made[0].damping_by_percent)
    return tuple(e for e in made[:ELEMENTS_TOLD] if strongest > 0 and abs(e.damping_by_percent) >= ELEMENT_SHARE_MIN * strongest)


def damping_slope(lam: complex, by_ratio: complex) -> float:
    """d(damping ratio) for d(lambda); of a real mode the relative change of its decay instead."""
    size = abs(lam)
    if size == 0.0:
        return 0.0
    if lam.imag == 0.0:
        return -by_ratio.real / size
    return -by_ratio.real / size + lam.real * (lam.conjugate() * by_ratio).real / size**3


def element_value(circuit: Circuit, name: str) -> float:
    """R, G, L or C of a branch in SI where it is constant, else nan."""
    graph, branch = circuit.graph, circuit.branches[name]
    if branch.expression is None:
        return math.nan
    value = graph.value_of(branch.expression)
    if branch.law in (Law.RESISTANCE, Law.CONDUCTANCE):
        return math.nan if value is None else value
    from polewise.expression.derivative import Differentiator

    own = graph.symbol("v" if branch.law is Law.CHARGE else "i", name)
    slope = Differentiator(graph, [own]).gradients([branch.expression])[0].get(own)
    value = None if slope is None else graph.value_of(slope)
    return math.nan if value is None else value


def _ordered(modes: Sequence[Mode]) -> tuple[Mode, ...]:
    """Unstable ones first, then by damping, then slow before fast."""
    return tuple(sorted(modes, key=lambda m: (m.damping, abs(m.eigenvalue))))
