"""Random linear networks: their netlist, and their solution by dense nodal analysis that shares nothing with the package.

A spanning tree of resistors makes every node reach the reference; what is hung on it may close loops of capacitors and sources, or meet in a
node of inductors only, so that states depend on one another. Values are in SI.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.linalg
from hypothesis import strategies as st


@dataclass(frozen=True)
class Element:
    """A two-terminal element between nodes `a` and `b` (0 is the reference).

    kind: "R" ohm, "C" farad, "L" henry behind `extra` ohm, "I" ampere, "V" volt behind a resistor of `extra` ohm, "bare C" as C,
    "G" a current of value siemens times the voltage from node `c` to node `d`, "E" a voltage of value times the same behind `extra` ohm.
    """

    kind: str
    a: int
    b: int
    value: float
    extra: float = 0.0
    c: int = 0
    d: int = 0


@dataclass(frozen=True)
class RandomNetwork:
    """Nodes 1 … size, elements, and stars of three inductors whose middle touches nothing else: ((node, node, node), (L, L, L))."""

    size: int
    elements: tuple[Element, ...]
    stars: tuple[tuple[tuple[int, int, int], tuple[float, float, float]], ...]


def _values(low: float, high: float) -> st.SearchStrategy[float]:
    """Logarithmically between two bounds, two digits."""
    steps = st.integers(0, 40)
    return steps.map(lambda k: float(f"{low * (high / low) ** (k / 40):.2g}"))


RESISTANCE, CAPACITANCE, INDUCTANCE = _values(2.0, 200.0), _values(1e-6, 1e-4), _values(2e-4, 2e-2)
SOURCE = st.sampled_from([-20.0, -5.0, 3.0, 12.0, 48.0])


@st.composite
def networks(draw: st.DrawFn, *, stores: bool = True) -> RandomNetwork:
    """A random network; without `stores` only what conducts at rest."""
    size = draw(st.integers(2, 6))
    node = st.integers(0, size)
    elements = [Element("R", k, draw(st.integers(0, k - 1)), draw(RESISTANCE)) for k in range(1, size + 1)]

    def pair() -> tuple[int, int]:
        a = draw(node)
        return a, draw(node.filter(lambda b: b != a))

    for _ in range(draw(st.integers(0, 3))):
        elements.append(Element("R", *pair(), draw(RESISTANCE)))
    for kind in draw(st.lists(st.sampled_from("VVIGE"), min_size=1, max_size=5)):
        a, b = pair()
        if kind == "V":
            elements.append(Element("V", a, b, draw(SOURCE), draw(RESISTANCE)))
        elif kind == "I":
            elements.append(Element("I", a, b, draw(SOURCE) / 10))
        else:
            c, d = pair()
            gain = draw(st.sampled_from([-0.5, -0.2, 0.3, 0.6]))
            scale = 0.01 if kind == "G" else 1.0
            elements.append(Element(kind, a, b, gain * scale, 10.0, c, d))
    stars = []
    if stores:
        for kind in draw(st.lists(st.sampled_from(["C", "C", "L"]), min_size=1, max_size=5)):
            a, b = pair()
            elements.append(Element(kind, a, b, draw(CAPACITANCE if kind == "C" else INDUCTANCE), draw(RESISTANCE) if kind == "L" else 0.0))
        if size >= 3 and draw(st.booleans()):
            ends = draw(st.permutations(range(size + 1)))[:3]
            stars.append((tuple(ends), tuple(draw(INDUCTANCE) for _ in range(3))))
    touched = [end for e in elements for end in (e.a, e.b)] + [end for ends, _ in stars for end in ends]
    elements += [Element("R", k, 0, 50.0) for k in range(1, size + 1) if touched.count(k) < 2]  # a node touched once is an error
    return RandomNetwork(size, tuple(elements), tuple(stars))


def _name(node: int) -> str:
    return f"n{node}" if node else "gnd"


def netlist(network: RandomNetwork, *, share: str = "1") -> str:
    """The network as text, sources times `share`, element k called e{k}, star k's arms s{k}_0 … s{k}_2."""
    lines = ["reference gnd"]
    for k, e in enumerate(network.elements):
        a, b = _name(e.a), _name(e.b)
        control = f"({_name(e.c)}.v - {_name(e.d)}.v)"
        box = {
            "R": f"[{e.value!r} ohm]",
            "C": f"[{e.value!r} F]",
            "L": f"[r: {e.extra!r} ohm]--[l: {e.value!r} H]",
            "I": f"[{e.value!r} A * {share}]",
            "V": f"[u: {e.value!r} V * {share}]--[r: {e.extra!r} ohm]",
            "G": f"[{e.value!r} S * {control}]",
            "E": f"[u: {e.value!r} * {control}]--[r: {e.extra!r} ohm]",
        }[e.kind]
        lines.append(f"e{k}: {a} --{box}-- {b}")
    for k, (ends, values) in enumerate(network.stars):
        lines += [f"s{k}_{j}: {_name(end)} --[{value!r} H]-- star{k}" for j, (end, value) in enumerate(zip(ends, values))]
    return "\n".join(lines)


def branches(network: RandomNetwork) -> list[tuple[str, str, str]]:
    """(path, left node, right node) of everything in the text."""
    found = [(f"e{k}", _name(e.a), _name(e.b)) for k, e in enumerate(network.elements)]
    for k, (ends, _) in enumerate(network.stars):
        found += [(f"s{k}_{j}", _name(end), f"star{k}") for j, end in enumerate(ends)]
    return found


@dataclass(frozen=True)
class Dense:
    """E x' + A x = b: x holds node potentials n1 …, star middles, then currents of V, E, L and star arms, in this order."""

    e: np.ndarray
    a: np.ndarray
    b: np.ndarray
    potentials: list[str]

    def rest(self) -> np.ndarray:
        """Where x' = 0."""
        return np.linalg.solve(self.a, self.b)

    def step_response(self, times: np.ndarray) -> np.ndarray:
        """x(t) after the sources jump from zero to b at t = 0 with no charge or flux anywhere, shape (unknowns, times).

        x = x_rest + sum c_k v_k e^(lambda_k t) over the finite generalised eigenvalues of (-A, E); E x is what cannot jump, so E x(0+) = 0
        gives the c_k.
        """
        values, vectors = scipy.linalg.eig(-self.a, self.e)
        finite = np.isfinite(values) & (np.abs(values) < 1e10)
        values, vectors = values[finite], vectors[:, finite]
        rest = self.rest()
        scale = np.linalg.norm(self.e, axis=1)
        scale = np.where(scale > 0, scale, 1.0)[:, None]
        c, *_ = np.linalg.lstsq(self.e / scale @ vectors, -(self.e / scale) @ rest.astype(complex), rcond=None)
        return rest[:, None] + (vectors @ (c[:, None] * np.exp(np.outer(values, times)))).real

    def growth(self) -> float:
        """Largest real part of the finite eigenvalues, 1/s."""
        values = scipy.linalg.eigvals(-self.a, self.e)
        values = values[np.isfinite(values) & (np.abs(values) < 1e10)]
        return float(np.max(values.real, initial=-np.inf))


def dense(network: RandomNetwork) -> Dense:
    """Modified nodal analysis by stamps: one row of Kirchhoff's current law per node, one of its own law per current."""
    names = [_name(k) for k in range(1, network.size + 1)] + [f"star{k}" for k in range(len(network.stars))]
    row = {name: k for k, name in enumerate(names)}
    own = sum(e.kind in "VEL" for e in network.elements) + 3 * len(network.stars)
    n = len(names) + own
    e_matrix, a_matrix, b = np.zeros((n, n)), np.zeros((n, n)), np.zeros(n)
    current = len(names)

    def between(matrix: np.ndarray, left: str, right: str, value: float) -> None:
        for p, sign_p in ((left, 1.0), (right, -1.0)):
            for q, sign_q in ((left, 1.0), (right, -1.0)):
                if p in row and q in row:
                    matrix[row[p], row[q]] += sign_p * sign_q * value

    def with_current(left: str, right: str, resistance: float, inductance: float, source: float) -> int:
        """Row: v_left - v_right - R i - L i' = source."""
        nonlocal current
        k = current
        current += 1
        for node, sign in ((left, 1.0), (right, -1.0)):
            if node in row:
                a_matrix[row[node], k] += sign
                a_matrix[k, row[node]] += sign
        a_matrix[k, k] -= resistance
        e_matrix[k, k] -= inductance
        b[k] = source
        return k

    for e in network.elements:
        left, right = _name(e.a), _name(e.b)
        if e.kind == "R":
            between(a_matrix, left, right, 1 / e.value)
        elif e.kind == "C":
            between(e_matrix, left, right, e.value)
        elif e.kind == "L":
            with_current(left, right, e.extra, e.value, 0.0)
        elif e.kind == "V":
            with_current(left, right, e.extra, 0.0, e.value)
        elif e.kind == "E":
            k = with_current(left, right, e.extra, 0.0, 0.0)
            for node, sign in ((_name(e.c), 1.0), (_name(e.d), -1.0)):
                if node in row:
                    a_matrix[k, row[node]] -= sign * e.value
        else:
            for node, sign in ((left, 1.0), (right, -1.0)):
                if node not in row:
                    continue
                if e.kind == "I":
                    b[row[node]] -= sign * e.value
                else:
                    for control, turn in ((_name(e.c), 1.0), (_name(e.d), -1.0)):
                        if control in row:
                            a_matrix[row[node], row[control]] += sign * turn * e.value
    for k, (ends, values) in enumerate(network.stars):
        for end, value in zip(ends, values):
            with_current(_name(end), f"star{k}", 0.0, value, 0.0)
    return Dense(e_matrix, a_matrix, b, names)
