"""Trust at the operating point: modes and crossovers against the switching frequency, diode poles against their conduction boundary."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np

from polewise.analysis.carriers import Carrier, Carriers
from polewise.analysis.modes import Mode, find_modes
from polewise.analysis.point import ComplexArray
from polewise.analysis.probes import DUTIES
from polewise.analysis.response import response
from polewise.analysis.standpoint import Standpoint
from polewise.analysis.trust import Finding, Trust, TrustLimits, graded
from polewise.circuit.model import Circuit, Device
from polewise.errors import PolewiseError
from polewise.expression.graph import Node
from polewise.grammar.units import RATE, format_value
from polewise.kernels.program import FloatArray
from polewise.solve.initial import Snapshot
from polewise.solve.problem import reader

LOOPS_MOST = 40  # loops that are opened; more are alike
UNKNOWNS_MOST = 600  # beyond, dense modes cost too much for a report
GRID_DECADES = (1e-3, 0.5)  # of f: where crossovers are looked for
GRID_POINTS = 90
_FASTER = "slow the loop down, raise the switching frequency, or check the answer with `magnify`"


class PointView:
    """An operating point with what the checks read from it."""

    def __init__(self, stand: Standpoint, carriers: Carriers) -> None:
        self.stand, self.carriers = stand, carriers
        self.circuit = stand.circuit
        system = stand.equations([stand.quantity(f"{c.pole}.{r}") for c in carriers.each for r in ("conduction", "mode", "ripple")])
        self.point = stand.point(system)
        self.system = system
        laws = [u.residual for u in system.unknowns]
        self.moves = system.time in system.graph.symbols_under(laws)  # the circuit reads `time`: this is an instant, no point of rest
        g = self.circuit.graph
        roots: list[Node] = []
        for c in carriers.each:
            roots += [g.symbol("reading", f"{c.pole}.{r}") for r in ("conduction", "mode", "ripple", "duty")]
            roots.append(g.symbol("i", f"{c.pole}.mid_arm"))
        values = reader(system, system.resolve(roots))(self.point.x, self.point.time_s, self.point.p)
        self.poles = {c.pole: tuple(values[5 * k : 5 * k + 5]) for k, c in enumerate(carriers.each)}
        self.snapshot = Snapshot(
            self.point.time_s,
            {u.name: float(v) for u, v in zip(system.unknowns, self.point.x, strict=True)},
            {q.name: float(v) for q, v in zip(system.parameters, self.point.p, strict=True)},
            {},
        )


def rate_near(owner: str, carriers: Carriers) -> Carrier:
    """The slowest pole inside an assembly or around it; of the whole circuit where there is none."""
    path = owner
    while path:
        inside = [c for c in carriers.each if c.pole.startswith(path + ".")]
        if inside:
            return min(inside, key=lambda c: c.rate_hz)
        path = path.rpartition(".")[0]
    return min(carriers.each, key=lambda c: c.rate_hz)


def duty_node(device: Device) -> Node:
    """The setting that is a pole's duty."""
    node = next(device.settings[k] for k in DUTIES if isinstance(device.settings.get(k), int))
    assert isinstance(node, int)
    return node


def controlled(circuit: Circuit) -> list[str]:
    """Poles whose duty follows the circuit."""
    found = []
    for device in circuit.devices.values():
        if device.kind == "pole" and follows_circuit(circuit, [duty_node(device)]):
            found.append(device.name)
    return found


def follows_circuit(circuit: Circuit, nodes: Sequence[Node]) -> bool:
    """Whether expressions depend on anything but constants, time and latches."""
    g = circuit.graph
    todo, seen = list(nodes), set()
    while todo:
        for symbol in g.symbols_under([todo.pop()]):
            if symbol in seen:
                continue
            seen.add(symbol)
            kind, name = g.symbols[symbol]
            if kind == "signal":
                todo.append(circuit.signals[name].expression)
            elif kind not in ("time", "latch"):
                return True
    return False


def boundary_findings(view: PointView, limits: TrustLimits) -> list[Finding]:
    """Diode poles against the boundary between continuous and discontinuous conduction."""
    found = []
    for carrier in view.carriers.each:
        conduction, mode, ripple, _, current = view.poles[carrier.pole]
        if carrier.diode is None or mode < 0.5 or view.circuit.devices[carrier.pole].settings.get("conduction") == "continuous":
            continue
        if conduction < 1.0:
            ratio = conduction
        elif ripple > 0.0:
            ratio = 2.0 * abs(current) / ripple
        else:
            continue
        distance = abs(ratio - 1.0)
        side = "discontinuous" if ratio < 1.0 else "continuous"
        trust = Trust.DOUBTFUL if distance < limits.boundary else Trust.HOLDS
        why = f"it runs {side}, {distance:.1%} from the boundary: a little less or more load changes its gain and its poles altogether"
        remedy = "choose L or the load so that it stays on one side, and judge both sides of the boundary"
        nearness = min(limits.boundary / max(distance, 1e-12), 1e3)
        found.append(
            Finding(
                "pole", carrier.pole, "conduction boundary", trust, f"{distance:.1%} from its conduction boundary", nearness, why, _if(trust, remedy)
            )
        )
    return found


def _if(trust: Trust, remedy: str) -> str:
    return "" if trust is Trust.HOLDS else remedy


def loop_findings(view: PointView, limits: TrustLimits) -> tuple[list[Finding], list[str]]:
    """Crossovers of the loops opened at the duties."""
    names = controlled(view.circuit)
    notes = []
    if len(names) > LOOPS_MOST:
        notes.append(f"loops of {len(names) - LOOPS_MOST} poles were not opened: {LOOPS_MOST} are looked at")
        names = names[:LOOPS_MOST]
    found: list[Finding] = []
    if not names:
        return found, notes
    slowest = min(c.rate_hz for c in view.carriers.each)
    fastest = max(c.rate_hz for c in view.carriers.each)
    grid = np.geomspace(GRID_DECADES[0] * slowest, GRID_DECADES[1] * fastest, GRID_POINTS)
    try:
        linear = view.stand.between([f"{name}.duty" for name in names], [f"{name}.duty" for name in names])
        closed = response(linear, grid)
    except (PolewiseError, np.linalg.LinAlgError) as error:
        return found, [*notes, f"loop crossovers: {_reason(error)}"]
    clocked = bool(linear.held)
    for k, name in enumerate(names):
        carrier = view.carriers.of(name)
        crossover_hz = last_crossover(grid, closed[:, k, k], 0.5 * carrier.rate_hz)
        if crossover_hz is None:
            continue
        ratio = crossover_hz / carrier.rate_hz
        trust = graded(ratio, limits.crossover_doubtful, None if clocked or carrier.sampling != "natural" else limits.crossover_not_valid)
        told = f"f/{1.0 / ratio:.3g}"
        crossover = format_value(crossover_hz, RATE, prefer="Hz", digits=3)
        why = f"its loop crosses over at {crossover}, {told}: near the switching frequency an average lacks the loop's true delay and gain"
        found.append(Finding("pole", name, "crossover", trust, f"crossover {told}", ratio / limits.crossover_doubtful, why, _if(trust, _FASTER)))
    return found, notes


def last_crossover(grid: FloatArray, closed: ComplexArray, most_hz: float) -> float | None:
    """The last frequency up to most_hz at which a loop's gain falls through one, Hz; None where it does not.

    Args:
        closed: response at the grid of what the signal reads to a disturbance added to it, all loops closed: S = 1/(1 + T), so T = 1/S - 1.
    """
    with np.errstate(all="ignore"):
        size = np.log(np.abs(1.0 / closed - 1.0))
    falling = np.flatnonzero((size[:-1] > 0.0) & (size[1:] <= 0.0) & np.isfinite(size[1:]) & np.isfinite(size[:-1]))
    crossings = [math.exp(math.log(grid[k]) + size[k] / (size[k] - size[k + 1]) * (math.log(grid[k + 1]) - math.log(grid[k]))) for k in falling]
    inside = [f for f in crossings if f <= most_hz]
    return max(inside) if inside else None


def _reason(error: Exception) -> str:
    return error.diagnostic.headline if isinstance(error, PolewiseError) else "the equations are singular there"


def mode_findings(view: PointView, limits: TrustLimits) -> tuple[list[Finding], list[str]]:
    """Lightly damped modes of control loops against the switching frequency.

    A mode counts as part of a loop if freezing every duty moves it; a filter's own ringing and a discontinuous choke's mode stay where they
    are, and are as fast as they are by nature.
    """
    if len(view.system.unknowns) > UNKNOWNS_MOST:
        return [], [f"modes: {len(view.system.unknowns)} unknowns are too many for this report; `modes` in a study looks at a region"]
    if not controlled(view.circuit):
        return [], []
    try:
        closed = find_modes(view.stand, sensitivities=False)
        frozen = find_modes(_with_frozen_duties(view), sensitivities=False)
    except (PolewiseError, np.linalg.LinAlgError) as error:
        return [], [f"modes: {_reason(error)}"]
    still = frozen.eigenvalues
    worst: dict[str, tuple[float, Mode]] = {}
    for mode in closed:
        if mode.damping >= limits.mode_damping or mode.eigenvalue.imag == 0.0:
            continue
        if still.size and float(np.min(np.abs(still - mode.eigenvalue))) <= limits.mode_shift * abs(mode.eigenvalue):
            continue
        carrier = rate_near(_owner(mode), view.carriers)
        ratio = mode.natural_frequency_hz / carrier.rate_hz
        if ratio > 0.5 + 1e-9:
            continue  # beyond what the switching lets exist; the loops' crossovers tell of it
        if carrier.pole not in worst or ratio > worst[carrier.pole][0]:
            worst[carrier.pole] = ratio, mode
    found = []
    for pole, (ratio, mode) in worst.items():
        trust = graded(ratio, limits.mode_doubtful, limits.mode_not_valid)
        frequency = format_value(mode.natural_frequency_hz, RATE, prefer="Hz", digits=3)
        states = ", ".join(name for name, _ in mode.states()[:2])
        why = f"a mode of its loop ({states}) rings at {frequency}, f/{1.0 / ratio:.3g}, damping {mode.damping:.2g}: too near the switching frequency"
        found.append(Finding("pole", pole, "mode", trust, f"mode at f/{1.0 / ratio:.3g}", ratio / limits.mode_doubtful, why, _if(trust, _FASTER)))
    return found, []


def _owner(mode: Mode) -> str:
    states = mode.states()
    return states[0][0].rpartition(".")[0] if states else ""


def _with_frozen_duties(view: PointView) -> Standpoint:
    """The same point with every duty a constant."""
    g, circuit = view.circuit.graph, view.circuit
    devices = dict(circuit.devices)
    for name in controlled(circuit):
        device = devices[name]
        setting = next(k for k in DUTIES if isinstance(device.settings.get(k), int))
        node = duty_node(device)
        value = _value(view, node)
        settings: Mapping[str, object] = {**device.settings, setting: g.constant(value)}
        devices[name] = replace(device, settings=settings)  # type: ignore[arg-type]
    copy = replace(circuit, devices=devices)
    return replace(view.stand, circuit=copy, snapshot=view.snapshot)


def _value(view: PointView, node: Node) -> float:
    (value,) = reader(view.system, view.system.resolve([node]))(view.point.x, view.point.time_s, view.point.p)
    return value if math.isfinite(value) else 0.0
