"""The exceptions of the package, each with its diagnostics and the exit code a terminal ends with.

PolewiseError                       everything this package raises on purpose
├── NetlistError                    the text is wrong (exit code 2)
│   └── SamplingChoice              a study has so many sample instants that it must say how to treat them
└── SolverError                     the text is right, the mathematics could not be finished (exit code 3)
    ├── NoOperatingPoint            no state of rest was found
    │   ├── PowerLimit              constant powers ask for more than the network can deliver
    │   └── CannotRest              something in the circuit never rests
    │       ├── IntegratorCannotRest    an unbounded integrator whose input can't vanish
    │       ├── IntegratorsFight        several integrators want different values of one quantity
    │       └── DependsOnTime           a law that reads `time`
    ├── SingularSystem              the equations don't determine an unknown
    ├── StartFailure                no consistent state at the start
    ├── RestartFailure              no consistent state after an event
    ├── StepFailure                 the step size fell below its limit
    ├── NotFinite                   a value that is not a number
    ├── OutsideTable                a table was read outside its range
    ├── Chatter                     switches that flip without end
    ├── EventConflict               two values for one target at one instant
    └── EventStorm                  rounds of events without end at one instant
"""

from __future__ import annotations

from collections.abc import Sequence

from polewise.grammar.diagnostics import Diagnostic

EXIT_HOLDS = 0
EXIT_REQUIREMENT_FAILS = 1
EXIT_NETLIST_WRONG = 2
EXIT_NOT_FINISHED = 3


class PolewiseError(Exception):
    """Base of all: one or more diagnostics, the first is the cause.

    Args:
        diagnostics: at least one.
    """

    exit_code = EXIT_NOT_FINISHED

    def __init__(self, diagnostics: Sequence[Diagnostic]) -> None:
        if not diagnostics:
            raise ValueError("an error needs a diagnostic")
        super().__init__("\n".join(_line(d) for d in diagnostics))
        self.diagnostics = tuple(diagnostics)

    @property
    def diagnostic(self) -> Diagnostic:
        """The cause."""
        return self.diagnostics[0]

    @property
    def code(self) -> str:
        """The cause's code."""
        return self.diagnostics[0].code


def _line(diagnostic: Diagnostic) -> str:
    span = diagnostic.span
    place = f"{span.source.name}:{span.line}:{span.column}: " if span.source.text else ""
    hint = f" ({diagnostic.hint})" if diagnostic.hint else ""
    return f"{place}{diagnostic.headline}{hint}"


class NetlistError(PolewiseError):
    """The netlist is wrong; `diagnostics` holds every error found, warnings too."""

    exit_code = EXIT_NETLIST_WRONG


class SamplingChoice(NetlistError):
    """A study with more than a million sample instants and no `sampling` choice."""


class SolverError(PolewiseError):
    """The circuit was read, its equations could not be solved.

    Args:
        time_s: study time at which it happened, None outside a run.

    Attributes:
        partial: what the run had done until then (solve.transient.RunSummary), None outside a run.
    """

    def __init__(self, diagnostics: Sequence[Diagnostic], *, time_s: float | None = None) -> None:
        super().__init__(diagnostics)
        self.time_s = time_s
        self.partial: object | None = None


class NoOperatingPoint(SolverError):
    """No state of rest was found."""


class PowerLimit(NoOperatingPoint):
    """Constant powers ask for more than can be delivered.

    Args:
        power_scale: the largest share of all constant powers that has an operating point above the loads' stated voltages.
        power_w: the power they take there in all, None where it isn't known.
    """

    def __init__(self, diagnostics: Sequence[Diagnostic], *, power_scale: float, power_w: float | None) -> None:
        super().__init__(diagnostics)
        self.power_scale = power_scale
        self.power_w = power_w


class CannotRest(NoOperatingPoint):
    """Something in the circuit never rests."""


class IntegratorCannotRest(CannotRest):
    """An unbounded integrator whose input can't vanish."""


class IntegratorsFight(CannotRest):
    """Several integrators want different values of one quantity."""


class DependsOnTime(CannotRest):
    """A law that reads `time`, so that nothing is at rest."""


class SingularSystem(SolverError):
    """The equations don't determine an unknown."""


class StartFailure(SolverError):
    """No consistent state at the start of a run."""


class RestartFailure(SolverError):
    """No consistent state after an event."""


class StepFailure(SolverError):
    """The step size fell below its limit."""


class NotFinite(SolverError):
    """A value that is not a number."""


class OutsideTable(SolverError):
    """A table was read outside its range."""


class Chatter(SolverError):
    """Switches that flip without end."""


class EventConflict(SolverError):
    """Two different values for one target at one instant."""


class EventStorm(SolverError):
    """Rounds of events without end at one instant."""
