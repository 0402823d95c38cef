"""What can go wrong with results: a name that was not recorded, a missing extra, output that can't be written or read back."""

from __future__ import annotations

from collections.abc import Iterable
from difflib import get_close_matches

from polewise.errors import EXIT_NETLIST_WRONG, EXIT_NOT_FINISHED, PolewiseError
from polewise.grammar.diagnostics import Diagnostic, Severity
from polewise.grammar.source import no_span

_NEAREST_MAX = 3  # more names than this help nobody
_CANDIDATES_MAX = 20_000  # beyond, looking for near names would take seconds


def _diagnostic(code: str, headline: str, hint: str | None = None) -> Diagnostic:
    return Diagnostic(code, Severity.ERROR, headline, no_span(), hint=hint)


class UnknownName(PolewiseError, KeyError):
    """A name that stands for nothing here; `nearest` lists names close to it."""

    exit_code = EXIT_NETLIST_WRONG

    def __init__(self, name: str, headline: str, nearest: tuple[str, ...] = (), hint: str | None = None) -> None:
        if hint is None and nearest:
            hint = "near names: " + ", ".join(nearest)
        super().__init__([_diagnostic("unknown-name", headline, hint)])
        self.name = name
        self.nearest = nearest

    def __str__(self) -> str:
        return str(self.args[0])


class MissingExtra(PolewiseError, ImportError):
    """An optional package is needed and not installed."""

    exit_code = EXIT_NETLIST_WRONG

    def __init__(self, package: str, extra: str, purpose: str) -> None:
        PolewiseError.__init__(
            self, [_diagnostic("missing-extra", f"{purpose} needs {package}, which is not installed", f'pip install "polewise[{extra}]"')]
        )


class OutputFailed(PolewiseError):
    """A result could not be written: full disk, missing rights."""

    exit_code = EXIT_NOT_FINISHED

    def __init__(self, path: str, reason: str) -> None:
        super().__init__([_diagnostic("output-failed", f"{path} could not be written: {reason}")])


class Interrupted(PolewiseError):
    """A study that another one starts from was stopped before its end."""

    exit_code = EXIT_NOT_FINISHED

    def __init__(self, study: str) -> None:
        super().__init__([_diagnostic("interrupted", f"study `{study}` was stopped before another could start from it")])


class DamagedRecording(PolewiseError):
    """A recorded file that can't be read."""

    exit_code = EXIT_NETLIST_WRONG

    def __init__(self, path: str, headline: str, hint: str | None = None) -> None:
        super().__init__([_diagnostic("damaged-recording", f"{path}: {headline}", hint)])


def nearest_names(name: str, known: Iterable[str]) -> tuple[str, ...]:
    """At most three known names that a misspelt one may have meant, likeliest first."""
    candidates = list(known)
    if len(candidates) > _CANDIDATES_MAX:
        same_end = name.rsplit(".", 1)[-1]
        candidates = [c for c in candidates if c.rsplit(".", 1)[-1] == same_end][:_CANDIDATES_MAX]
    return tuple(get_close_matches(name, candidates, n=_NEAREST_MAX, cutoff=0.6))
