"""The JSON summary beside a recorded file: what was run, how far it came, whether it is whole, and its verdict. Replaced as one piece."""

from __future__ import annotations

import json
import math
import os
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from polewise.grammar.units import unit_text
from polewise.results.failures import DamagedRecording, OutputFailed
from polewise.results.verdict import RequirementVerdict, Verdict


def write_summary(path: Path, content: Mapping[str, Any]) -> None:
    """Write a summary so that a reader sees the old or the new one, never half of one."""
    part = path.with_name(path.name + ".part")
    try:
        part.write_text(json.dumps(plain(content), indent=1, ensure_ascii=False) + "\n", encoding="utf-8")
        os.replace(part, path)
    except OSError as error:
        raise OutputFailed(str(path), os.strerror(error.errno) if error.errno else str(error)) from error


def read_summary(path: Path) -> dict[str, Any]:
    """Read a summary.

    Raises:
        DamagedRecording: missing, cut off, or not a summary.
    """
    try:
        content = json.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError as error:
        raise DamagedRecording(str(path), "there is no such file") from error
    except (OSError, ValueError) as error:
        raise DamagedRecording(str(path), "this is no summary of a run") from error
    if not isinstance(content, dict) or "study" not in content:
        raise DamagedRecording(str(path), "this is no summary of a run")
    return content


def verdict_content(verdict: Verdict) -> dict[str, Any]:
    """A verdict as plain JSON values."""
    return {"study": verdict.study, "passed": verdict.passed, "requirements": [_requirement(r) for r in verdict.requirements]}


def _requirement(r: RequirementVerdict) -> dict[str, Any]:
    return {
        "name": r.name,
        "text": r.text,
        "document": r.document,
        "passed": r.passed,
        "evaluated": r.evaluated,
        "measure": r.measure,
        "unit": unit_text(r.dimension, prefer=r.prefer),
        "value": r.value,
        "side": r.side or None,
        "limit": r.limit,
        "margin": r.margin,
        "margin_percent": r.margin_percent,
        "time_s": r.time_s,
        "why": r.why,
        "file": r.span.source.name,
        "line": r.span.line,
    }


def plain(value: Any) -> Any:
    """Values that JSON has a form for; a number that is none becomes null."""
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [plain(item) for item in value]
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value
