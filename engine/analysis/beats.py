"""Beats: poles on one bus whose frequencies, or low multiples of them, are so close that their ripples drift through each other slowly."""

from __future__ import annotations

from polewise.analysis.carriers import Carrier, Carriers
from polewise.analysis.trust import Finding, Trust, TrustLimits
from polewise.circuit.model import Circuit
from polewise.grammar.units import RATE, format_value
from polewise.network.graph import Network

MULTIPLES_MOST = 3  # of a frequency that are looked at
EQUAL_RELATIVE = 1e-12


def find_beats(circuit: Circuit, network: Network, carriers: Carriers, limits: TrustLimits) -> list[Finding]:
    """Pairs that beat, one finding per pole with its closest partner."""
    buses = {c.pole: _buses(circuit, network, c.pole) for c in carriers.each}
    closest: dict[str, tuple[float, Carrier, Carrier, int, int]] = {}
    each = carriers.each
    for number, one in enumerate(each):
        for other in each[number + 1 :]:
            if not buses[one.pole] & buses[other.pole]:
                continue
            beat = _beat(one.rate_hz, other.rate_hz)
            if beat is None or beat[0] >= limits.beat_bandwidth * min(one.rate_hz, other.rate_hz):
                continue
            for mine, its in ((one, other), (other, one)):
                m, n = (beat[1], beat[2]) if mine is one else (beat[2], beat[1])
                if mine.pole not in closest or beat[0] < closest[mine.pole][0]:
                    closest[mine.pole] = (beat[0], mine, its, m, n)
    return [_finding(*found, limits) for found in closest.values()]


def _beat(f: float, g: float) -> tuple[float, int, int] | None:
    """Smallest |m f - n g| above zero of low multiples; None where the frequencies are equal or one is a multiple of the other."""
    found = []
    for k in range(1, MULTIPLES_MOST + 1):
        for m, n in ((k, 1), (1, k)):
            gap = abs(m * f - n * g)
            if gap <= EQUAL_RELATIVE * m * f:
                return None
            found.append((gap, m, n))
    return min(found)


def _buses(circuit: Circuit, network: Network, pole: str) -> set[str]:
    """Nodes that carry a pole's ripple: its rails and the far ends of its choke, references left out."""
    device = circuit.devices[pole]
    nodes = {node for terminal, node in device.terminals.items() if terminal != "mid"}
    nodes |= {path.far for path in network.chokes.get(pole, ())}
    return {n for n in nodes if not circuit.nodes[n].is_reference}


def _finding(gap_hz: float, mine: Carrier, its: Carrier, m: int, n: int, limits: TrustLimits) -> Finding:
    gap = format_value(gap_hz, RATE, prefer="Hz", digits=3)
    what = "their frequencies" if m == n == 1 else f"{m} times the one's frequency and {n} times the other's"
    return Finding(
        "pole",
        mine.pole,
        "beat",
        Trust.DOUBTFUL,
        f"beat at {gap}",
        limits.beat_bandwidth * min(mine.rate_hz, its.rate_hz) / gap_hz,
        f"on the bus it shares with {its.pole} {what} differ by {gap}: the sum of both ripples swells and fades at that rate, which no average shows",
        "give both the same frequency (and a phase), move them apart, or look at it with `magnify` over more than one beat",
    )
