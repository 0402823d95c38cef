"""Which kind of island each node is in: kinds spread from the references through boxes; a box between two kinds is an error."""

from __future__ import annotations

from polewise.circuit import box_messages
from polewise.circuit.expansion import Expansion
from polewise.circuit.model import Domain
from polewise.circuit.things import BoxThing, DeviceThing
from polewise.grammar.source import Span


def find_domains(x: Expansion) -> None:
    """Fill x.references and x.domains. Nothing to do beyond the references where all are electrical."""
    kinds: dict[str, tuple[Domain, Span]] = {}
    for key, record in x.nodes.items():
        if record.domain is None:
            continue
        root = x.root(key)
        x.references.add(root)
        known = kinds.get(root)
        if known is not None and known[0] is not record.domain:
            x.report.add(box_messages.kinds_joined(record.span, known[0].name.lower(), known[1], record.domain.name.lower(), record.span))
        kinds.setdefault(root, (record.domain, record.span))
    if all(domain is Domain.ELECTRICAL for domain, _ in kinds.values()):
        return
    islands = _Islands(kinds)
    for thing in x.order:
        if isinstance(thing, DeviceThing):
            for node in thing.terminals.values():
                if node is not None:
                    islands.claim(x.root(node.key), thing.span)
    for thing in x.order:
        if isinstance(thing, BoxThing):
            clash = islands.join(x.root(thing.left.key), x.root(thing.right.key))
            if clash is not None:
                x.between_kinds.add(thing.flat)
                (a, place_a), (b, place_b) = clash
                x.report.add(box_messages.kinds_joined(thing.span, a.name.lower(), place_a, b.name.lower(), place_b))
    for key in x.nodes:
        root = x.root(key)
        x.domains[root] = islands.kind(root)


class _Islands:
    """Union of nodes with the kind known for each union and where it comes from."""

    def __init__(self, kinds: dict[str, tuple[Domain, Span]]) -> None:
        self.parent: dict[str, str] = {}
        self.kinds = dict(kinds)

    def root(self, key: str) -> str:
        parent = self.parent
        while (above := parent.get(key)) is not None:
            higher = parent.get(above)
            if higher is not None:
                parent[key] = higher
            key = above
        return key

    def claim(self, key: str, span: Span) -> None:
        """A device makes its island electrical, unless a reference says otherwise (then the device is wrong, see circuit.boxes)."""
        self.kinds.setdefault(self.root(key), (Domain.ELECTRICAL, span))

    def join(self, a: str, b: str) -> tuple[tuple[Domain, Span], tuple[Domain, Span]] | None:
        """A box between two nodes. Returns both kinds where they differ; then nothing is joined."""
        a, b = self.root(a), self.root(b)
        if a == b:
            return None
        kind_a, kind_b = self.kinds.get(a), self.kinds.get(b)
        if kind_a is not None and kind_b is not None and kind_a[0] is not kind_b[0]:
            return kind_a, kind_b
        self.parent[b] = a
        if kind_a is None and kind_b is not None:
            self.kinds[a] = kind_b
        return None

    def kind(self, key: str) -> Domain:
        """The kind of a node; electrical where nothing tells."""
        known = self.kinds.get(self.root(key))
        return Domain.ELECTRICAL if known is None else known[0]
