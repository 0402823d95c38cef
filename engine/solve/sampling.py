"""How many sample instants a study has, and the refusal of a study that has too many without saying how they are to be treated."""

from __future__ import annotations

import math

from polewise.equations.system import EquationSystem
from polewise.grammar.source import Span
from polewise.solve import diagnosis

INSTANTS_UNASKED = 1e6  # more need a choice (numerics.md)
# Cost of one instant with the steps around it, for the message only: 27 us were measured on ten converters with 40 kHz control (docs/benchmarks.md).
INSTANT_COST_S = 7e-6
INSTANT_COST_PER_UNKNOWN_S = 3e-7


def count_instants(system: EquationSystem, run_for_s: float) -> float:
    """Number of instants at which clocks fire in a run of that length; clocks of one period and offset share theirs."""
    grids = {(c.period_s, c.offset_s) for c in system.clocks}
    return float(sum(math.floor((run_for_s - offset) / period * (1.0 + 1e-12)) + 1 for period, offset in grids if run_for_s >= offset))


def require_choice(system: EquationSystem, run_for_s: float, sampling: str | None, *, study: str, span: Span | None) -> None:
    """Refuse a study of more than INSTANTS_UNASKED sample instants that has no `sampling` choice.

    Raises:
        SamplingChoice: with what each choice costs.
    """
    if sampling is not None:
        return
    instants = count_instants(system, run_for_s)
    if instants > INSTANTS_UNASKED:
        exact_s = instants * (INSTANT_COST_S + INSTANT_COST_PER_UNKNOWN_S * len(system.unknowns))
        raise diagnosis.sampling_choice(study, instants, exact_s, span)
