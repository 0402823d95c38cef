"""Structural checks of a circuit, in the text's own words, and the Network that the equations stage needs."""

from __future__ import annotations

from polewise.circuit.model import Circuit, Device, Domain
from polewise.devices.kind import KINDS
from polewise.devices.pole import faces_diode
from polewise.grammar.diagnostics import Diagnostic
from polewise.network import messages
from polewise.network.graph import (
    ChokePath,
    Island,
    Network,
    Step,
    choke_paths,
    choose_windings,
    cutset,
    find_islands,
    form_of,
    hang_tree,
    tree_path,
)


def check_structure(circuit: Circuit) -> tuple[Network | None, tuple[Diagnostic, ...]]:
    """The circuit's Network with everything found on the way; None where an error makes the equations senseless.

    Findings: islands without or with two references, loops of sources, cut-sets of current sources, nodes touched once, poles whose mid is
    fixed or whose choke cannot be told, and, as notes, dependent capacitors and inductors.
    """
    forms = {name: form_of(circuit, branch) for name, branch in circuit.branches.items()}
    islands = find_islands(circuit)
    findings = [*_references(circuit, islands), *_dangling(circuit)]
    tree = choose_windings(circuit, forms)
    steps = hang_tree(circuit, tree, islands)
    check = _Checker(circuit, forms, tree, steps)
    findings += check.loops()
    findings += check.cutsets()
    chokes, choke_findings = check.chokes()
    findings += choke_findings
    findings += check.dependent_notes()
    if any(f.is_error for f in findings):
        return None, tuple(findings)
    network = Network(islands, forms, tree, steps, tuple(check.dependent_capacitors), tuple(check.dependent_inductors), chokes)
    return network, tuple(findings)


def _references(circuit: Circuit, islands: tuple[Island, ...]) -> list[Diagnostic]:
    findings = []
    for island in islands:
        if not island.references:
            named = [n for n in island.nodes if circuit.nodes[n].named] or list(island.nodes)
            node = circuit.nodes[named[0]]
            findings.append(messages.no_reference(named, node.domain.name.lower(), node.span))
        elif len(island.references) > 1:
            first, second = (circuit.nodes[n] for n in island.references[:2])
            findings.append(messages.two_references(first.name, second.name, first.span, second.span))
    return findings


def _dangling(circuit: Circuit) -> list[Diagnostic]:
    touches = dict.fromkeys(circuit.nodes, 0)
    for branch in circuit.branches.values():
        touches[branch.left] += 1
        touches[branch.right] += 1
    open_ports = {p.node for p in circuit.ports.values()}
    findings = []
    for name, count in touches.items():
        node = circuit.nodes[name]
        if count == 1 and node.named and not node.is_reference and name not in open_ports and node.domain is Domain.ELECTRICAL:
            findings.append(messages.dangling_node(name, node.span, _near(name, touches)))
    return findings


def _near(name: str, touches: dict[str, int]) -> str | None:
    import difflib

    others = [n for n, count in touches.items() if count > 1 and n != name and "#" not in n]
    close = difflib.get_close_matches(name, others, n=1, cutoff=0.75)
    return close[0] if close else None


class _Checker:
    """Shared facts of the checks on one circuit."""

    def __init__(self, circuit: Circuit, forms: dict[str, str], tree: frozenset[str], steps: dict[str, Step]) -> None:
        self.circuit, self.forms, self.tree, self.steps = circuit, forms, tree, steps
        self.touching: dict[str, list[str]] = {name: [] for name in circuit.nodes}
        for name, branch in circuit.branches.items():
            self.touching[branch.left].append(name)
            if branch.right != branch.left:
                self.touching[branch.right].append(name)
        self.mid_arms = {d.branches["mid_arm"]: d.name for d in circuit.devices.values() if KINDS[d.kind].switching}
        self.dependent_capacitors: list[str] = []
        self.dependent_inductors: list[str] = []
        self.fixed_poles: set[str] = set()

    def loops(self) -> list[Diagnostic]:
        """Loops of sources, and capacitors that close a loop of sources and capacitors."""
        findings = []
        for name, form in self.forms.items():
            if name in self.tree or form not in ("voltage", "charge"):
                continue
            branch = self.circuit.branches[name]
            loop = tree_path(self.steps, branch.left, branch.right)
            members = [name, *loop]
            poles = [self.mid_arms[k] for k in members if k in self.mid_arms]
            if poles:
                others = [k for k in members if k not in self.mid_arms]
                if poles[0] not in self.fixed_poles:
                    self.fixed_poles.add(poles[0])
                    findings.append(messages.pole_mid_fixed(poles[0], others or poles[1:], self.circuit.devices[poles[0]].span))
            elif form == "voltage":
                spans = [self.circuit.branches[k].span for k in loop]
                findings.append(messages.source_loop(members, branch.span, spans))
            else:
                self.dependent_capacitors.append(name)
        return findings

    def cutsets(self) -> list[Diagnostic]:
        """Cut-sets of current sources, and inductors in a cut-set of inductors and current sources."""
        findings = []
        for name in self.circuit.branches:
            form = self.forms[name]
            if name not in self.tree or form not in ("current", "flux"):
                continue
            branch = self.circuit.branches[name]
            across = cutset(self.circuit, self.steps, self.tree, name)
            pulsed = [k for k in (name, *across) if self.circuit.branches[k].slot == "top_arm"]
            if form == "current" and not pulsed:
                cut = {branch.left, branch.right}
                nodes = [n for n in cut if not self.circuit.nodes[n].is_reference] or list(cut)
                findings.append(messages.current_cutset([name, *across], nodes, branch.span))
            elif pulsed:
                device = self._device_of(pulsed[0])
                others = [k for k in (name, *across) if k not in pulsed] or [device.name]
                findings.append(messages.pole_top_floating(device.name, device.terminals.get("top", "top"), others, device.span))
            else:
                self.dependent_inductors.append(name)
        return findings

    def _device_of(self, branch: str) -> Device:
        name = self.circuit.branches[branch].device
        assert name is not None
        return self.circuit.devices[name]

    def chokes(self) -> tuple[dict[str, tuple[ChokePath, ...]], list[Diagnostic]]:
        """The inductors that face each pole's mid; refusals only for poles whose diode makes the question matter."""
        found: dict[str, tuple[ChokePath, ...]] = {}
        findings: list[Diagnostic] = []
        owner_of: dict[str, str] = {}
        mids = {d.terminals["mid"]: d.name for d in self.circuit.devices.values() if KINDS[d.kind].switching and "mid" in d.terminals}
        for device in self.circuit.devices.values():
            if not KINDS[device.kind].switching or "mid" not in device.terminals:
                continue
            mid = device.terminals["mid"]
            paths, others = choke_paths(self.circuit, self.forms, self.touching, mid, device.branches["mid_arm"])
            matters = faces_diode(device.settings)
            named = device.settings.get("choke")
            if isinstance(named, tuple):
                paths, wrong = self._named_chokes(device, named, paths)
                findings += wrong
            elif matters and device.name not in self.fixed_poles:
                findings += self._refusals(device, paths, others, mids, owner_of)
            found[device.name] = tuple(paths)
        return found, findings

    def _refusals(
        self, device: Device, paths: list[ChokePath], others: list[str], mids: dict[str, str], owner_of: dict[str, str]
    ) -> list[Diagnostic]:
        if others:
            branch = self.circuit.branches[others[0]]
            if not paths and len(others) == 1 and self.forms[others[0]] in ("resistance", "current", "nonlinear"):
                return [messages.no_choke(device.name, device.terminals["mid"], device.span)]
            return [messages.not_a_choke(device.name, branch.device or branch.name, device.span, branch.span)]
        if not paths:
            return [messages.no_choke(device.name, device.terminals["mid"], device.span)]
        for path in paths:
            choke = path.inductors[0]
            if path.far in mids:
                return [messages.choke_far_end_switches(device.name, choke, mids[path.far], device.span)]
            if choke in owner_of:
                return [messages.shared_choke(choke, owner_of[choke], device.name, device.span)]
            owner_of[choke] = device.name
        return []

    def _named_chokes(self, device: Device, names: tuple[str, ...], paths: list[ChokePath]) -> tuple[list[ChokePath], list[Diagnostic]]:
        """Paths for `choke = …`: a found path that holds the inductor, else the inductor alone, its nearer end on the mid's side."""
        chosen: list[ChokePath] = []
        findings = []
        for name in names:
            if self.forms.get(name) != "flux":
                findings.append(messages.unknown_choke(device.name, name, device.span))
                continue
            path = next((p for p in paths if name in p.inductors), None)
            chosen.append(path if path is not None else self._lone_choke(device.terminals["mid"], name))
        return chosen, findings

    def _lone_choke(self, mid: str, name: str) -> ChokePath:
        branch = self.circuit.branches[name]
        distance = {mid: 0}
        front = [mid]
        while front and not (branch.left in distance and branch.right in distance):
            later = []
            for node in front:
                if self.circuit.nodes[node].is_reference:
                    continue
                for k in self.touching[node]:
                    if k == name:
                        continue
                    b = self.circuit.branches[k]
                    other = b.right if b.left == node else b.left
                    if other not in distance:
                        distance[other] = distance[node] + 1
                        later.append(other)
            front = later
        far_away = len(distance) + 1
        left_near = distance.get(branch.left, far_away) <= distance.get(branch.right, far_away)
        return ChokePath(((name, 1 if left_near else -1),), branch.right if left_near else branch.left, (name,))

    def dependent_notes(self) -> list[Diagnostic]:
        """What the reduction to index 1 will do, said under `check`."""
        notes = []
        for name in self.dependent_capacitors:
            branch = self.circuit.branches[name]
            notes.append(messages.dependent_capacitor(name, tree_path(self.steps, branch.left, branch.right), branch.span))
        for name in self.dependent_inductors:
            others = cutset(self.circuit, self.steps, self.tree, name)
            notes.append(messages.dependent_inductor(name, others, self.circuit.branches[name].span))
        return notes
