"""The work-precision diagram: measured error against time for polewise and for scipy's Radau and BDF with a compiled right-hand side."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import ours
from diagram_circuits import ALL, DiagramCircuit
from numpy.typing import NDArray
from precision import Point, sweep
from scipy.integrate import solve_ivp
from timing import duration

FloatArray = NDArray[np.float64]
TOLERANCES = (1e-3, 1e-4, 1e-5, 1e-6, 1e-7, 1e-8, 1e-9)
REFERENCE_TOLERANCE = 1e-11
PICTURE = Path(__file__).resolve().parents[2] / "docs" / "images" / "work_precision.png"
STYLES = {"polewise": ("#1b4f72", "o", "-"), "scipy Radau": ("#b9770e", "s", "--"), "scipy BDF": ("#7b7d7d", "^", ":")}


def _rates(raw: Callable[..., Any], n: int) -> Callable[[float, FloatArray], FloatArray]:
    def f(t: float, y: FloatArray) -> FloatArray:
        out = np.empty(n)
        raw(t, y, out)
        return out

    return f


def scipy_run(circuit: DiagramCircuit, method: str, tolerance: float, *, output: bool, **options: Any) -> list[FloatArray]:
    """All stretches in turn; states at the output times where asked for."""
    y, parts = circuit.start, []
    for stretch in circuit.stretches:
        span = (stretch.times[0], stretch.times[-1])
        f = _rates(stretch.rates, len(y))
        result = solve_ivp(
            f, span, y, method=method, rtol=tolerance, atol=tolerance * circuit.scale, t_eval=stretch.times if output else None, **options
        )
        if not result.success:
            raise RuntimeError(result.message)
        y = result.y[:, -1]
        parts.append(result.y)
    return parts


def reference(circuit: DiagramCircuit) -> FloatArray:
    """A run far finer than any that it judges."""
    if circuit.explicit is not None:
        return circuit.joined(scipy_run(circuit, "DOP853", REFERENCE_TOLERANCE, output=True, max_step=circuit.explicit))
    return circuit.joined(scipy_run(circuit, "Radau", REFERENCE_TOLERANCE, output=True))


def curves(circuit: DiagramCircuit, *, rounds: int = 2) -> dict[str, list[Point]]:
    """Solver → points of the diagram."""
    fine = reference(circuit)
    prepared = ours.prepare(circuit.text, circuit.study)
    names, times = list(circuit.names), circuit.times

    def our_error(tolerance: float) -> float:
        return circuit.error(ours.sampled(prepared.run(tolerance), names, times), fine)

    found = {"polewise": sweep(prepared.integrate, our_error, TOLERANCES, rounds=rounds)}
    for method in ("Radau", "BDF"):
        found[f"scipy {method}"] = sweep(
            lambda tolerance, m=method: scipy_run(circuit, m, tolerance, output=False),
            lambda tolerance, m=method: circuit.error(circuit.joined(scipy_run(circuit, m, tolerance, output=True)), fine),
            TOLERANCES,
            rounds=rounds,
        )
    return found


def report(*, rounds: int = 2, picture: Path | None = PICTURE) -> list[str]:
    """The tables as lines of Markdown; the picture beside them."""
    lines, drawn = [], []
    for make in ALL:
        circuit = make()
        found = curves(circuit, rounds=rounds)
        drawn.append((circuit.title, found))
        lines += [f"**{circuit.title}** (error, time)", "", "| tolerance | " + " | ".join(found) + " |", "|" + "---|" * (len(found) + 1)]
        for tolerance in TOLERANCES:
            cells = []
            for points in found.values():
                at = [p for p in points if p.tolerance == tolerance]
                cells.append(f"{at[0].error:.1e}, {duration(at[0].seconds)}" if at else "not finished")
            lines.append(f"| {tolerance:.0e} | " + " | ".join(cells) + " |")
        lines.append("")
    if picture is not None:
        draw(drawn, picture)
    return lines


def draw(found: list[tuple[str, dict[str, list[Point]]]], picture: Path) -> None:
    """One panel per circuit."""
    import matplotlib

    matplotlib.use("Agg")
    import matplotlib.pyplot as plt

    figure, axes = plt.subplots(2, 2, figsize=(9.0, 6.6), layout="constrained")
    for axis, (title, points_by_solver) in zip(axes.flat, found):
        for solver, points in points_by_solver.items():
            colour, marker, line = STYLES[solver]
            usable = [p for p in points if p.error > 0]
            axis.loglog([p.error for p in usable], [1e3 * p.seconds for p in usable], line, color=colour, marker=marker, ms=4, lw=1.3, label=solver)
        axis.set_title(title, fontsize=10, loc="left")
        axis.invert_xaxis()
        axis.grid(True, which="major", color="#dddddd", lw=0.6)
        for side in ("top", "right"):
            axis.spines[side].set_visible(False)
        axis.set_xlabel("measured error, relative", fontsize=9)
        axis.set_ylabel("time, ms", fontsize=9)
        axis.tick_params(labelsize=8)
    axes.flat[0].legend(frameon=False, fontsize=8)
    picture.parent.mkdir(parents=True, exist_ok=True)
    figure.savefig(picture, dpi=110, metadata={"Software": None})
    plt.close(figure)
