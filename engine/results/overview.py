"""What was read: counts, islands, assemblies, which inductor faces each pole, which states depend on others."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from polewise.circuit.model import Circuit
from polewise.devices.catalogue import KINDS
from polewise.grammar.diagnostics import Diagnostic
from polewise.network.graph import Network


@dataclass(frozen=True, slots=True)
class IslandFacts:
    """One island: everything that touches through elements.

    Args:
        domain: "electrical", "rotation", "translation" or "heat".
        reference: its reference node.
        nodes: how many nodes it has, unnamed ones included.
        names: its named nodes at top level.
    """

    domain: str
    reference: str
    nodes: int
    names: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class StudyFacts:
    """One study in a line."""

    name: str
    document: str | None
    start: str
    run_for_s: float | None
    requirements: int


@dataclass(frozen=True, slots=True)
class Overview:
    """A circuit in figures.

    Args:
        title: as stated.
        files: read, the last is the netlist itself.
        counts: what → how many: "nodes", "boxes", "poles", "assemblies", "signals", "states", "latches", "studies", "requirements", "unknowns".
        islands: all of them.
        assemblies: instance path → assembly.
        chokes: pole → inductors that face it.
        dependent: capacitors and inductors whose state follows from others.
        studies: in the order of the text.
        diagnostics: warnings and notes.
    """

    title: str
    files: tuple[str, ...]
    counts: Mapping[str, int]
    islands: tuple[IslandFacts, ...]
    assemblies: Mapping[str, str]
    chokes: Mapping[str, tuple[str, ...]]
    dependent: tuple[str, ...]
    studies: tuple[StudyFacts, ...]
    diagnostics: tuple[Diagnostic, ...]


def overview(circuit: Circuit, network: Network, unknowns: int, diagnostics: tuple[Diagnostic, ...]) -> Overview:
    """Describe a checked circuit.

    Args:
        unknowns: of its equations.
        diagnostics: warnings and notes found on the way.
    """
    poles = sum(KINDS[device.kind].switching for device in circuit.devices.values())
    counts = {
        "nodes": len(circuit.nodes),
        "boxes": sum(b.device is None or KINDS[circuit.devices[b.device].kind].two_terminal for b in circuit.branches.values()),
        "poles": poles,
        "other devices": sum(not KINDS[d.kind].switching and not KINDS[d.kind].two_terminal for d in circuit.devices.values()),
        "assemblies": len(circuit.assemblies),
        "signals": len(circuit.signals),
        "states": len(circuit.states),
        "latches": len(circuit.latches),
        "events": len(circuit.time_events) + len(circuit.clock_events) + len(circuit.condition_events),
        "studies": len(circuit.studies),
        "requirements": sum(len(s.requirements) for s in circuit.studies.values()),
        "unknowns": unknowns,
    }
    return Overview(
        title=circuit.title,
        files=circuit.files,
        counts=counts,
        islands=tuple(_islands(circuit, network)),
        assemblies={name: instance.kind for name, instance in circuit.assemblies.items()},
        chokes={pole: tuple(dict.fromkeys(i for path in paths for i in path.inductors)) for pole, paths in network.chokes.items()},
        dependent=(*network.dependent_capacitors, *network.dependent_inductors),
        studies=tuple(
            StudyFacts(s.name, s.document, _start(s.start, s.start_study), s.run_for_s, len(s.requirements)) for s in circuit.studies.values()
        ),
        diagnostics=diagnostics,
    )


def _islands(circuit: Circuit, network: Network) -> list[IslandFacts]:
    facts = []
    for island in network.islands:
        reference = island.references[0] if island.references else ""
        domain = circuit.nodes[island.nodes[0]].domain.name.lower()
        names = tuple(n for n in island.nodes if circuit.nodes[n].named and not circuit.nodes[n].owner and n != reference)
        facts.append(IslandFacts(domain, reference, len(island.nodes), names))
    return facts


def _start(how: str, study: str | None) -> str:
    return f"from {study}" if how == "from" else how
