"""Times before the first step: reading and building large texts, import, a warm `check`, the first compile on a fresh machine."""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import ours
import ten_converters as hand
from timing import Timing, duration, interleaved

import polewise

_CHECK = "import sys; from polewise.terminal.main import main; main()"


def report(*, rounds: int = 3) -> list[str]:
    """The table as lines of Markdown."""
    rows = [_assembly(rounds), _written_out(rounds), *_import(rounds), *_check(rounds), *_first_compile()]
    return ["| what | time | goal |", "|---|---|---|", *(f"| {what} | {value} | {goal} |" for what, value, goal in rows)]


def _assembly(rounds: int) -> tuple[str, str, str]:
    text = hand.netlist(1000, keep="bus.v")

    def build() -> None:
        seconds = ours.prepare(text, "load_step", settle=False).seconds
        taken.append(sum(seconds[k] for k in ("parse", "expand", "structure", "assemble", "compile")))

    taken: list[float] = []
    for _ in range(rounds):
        build()
    return "parse and build, 1,000 converters from one assembly", duration(sorted(taken)[len(taken) // 2]), "< 1.5 s"


def _written_out(rounds: int) -> tuple[str, str, str]:
    text = hand.flat_netlist(1000)
    lines = text.count("\n")
    taken = interleaved([lambda: polewise.from_text(text)], rounds=rounds, warm=False)[0]
    seconds = ours.prepare(text, "load_step", settle=False).seconds
    total = sum(seconds[k] for k in ("parse", "expand", "structure", "assemble", "compile"))
    return f"{lines:,} lines of text: read and checked / with equations and tape", f"{duration(taken.median)} / {duration(total)}", "< 4 s"


def _python(code: str, *arguments: str, cache: Path | None = None) -> None:
    environment = dict(os.environ)
    if cache is not None:
        environment["NUMBA_CACHE_DIR"] = str(cache)
    subprocess.run([sys.executable, "-c", code, *arguments], check=True, capture_output=True, env=environment)


def _import(rounds: int) -> list[tuple[str, str, str]]:
    bare, package = interleaved([lambda: _python("pass"), lambda: _python("import polewise")], rounds=3 * rounds)
    return [("import of the package, beyond Python's own start", _beyond(package, bare), "< 0.25 s")]


def _beyond(timing: Timing, bare: Timing) -> str:
    return f"{duration(max(0.0, timing.median - bare.median))} (Python's start: {duration(bare.median)})"


def _check(rounds: int) -> list[tuple[str, str, str]]:
    with tempfile.TemporaryDirectory() as folder:
        file = Path(folder) / "twenty.pole"
        text = hand.flat_netlist(20)
        file.write_text(text, encoding="utf-8")
        timing = interleaved([lambda: _python(_CHECK, "check", str(file))], rounds=2 * rounds)[0]
    return [(f"`check` of a {text.count(chr(10))}-line netlist, warm, whole process", str(timing), "< 0.6 s")]


def _first_compile() -> list[tuple[str, str, str]]:
    code = "import sys, polewise; polewise.from_text(open(sys.argv[1]).read()).run('load_step')"
    with tempfile.TemporaryDirectory() as folder:
        file, cache = Path(folder) / "two.pole", Path(folder) / "cache"
        file.write_text(hand.netlist(2, run_for="25 ms", keep="bus.v"), encoding="utf-8")
        took = []
        for _ in range(2):
            began = time.perf_counter()
            _python(code, str(file), cache=cache)
            took.append(time.perf_counter() - began)
    return [
        ("first compile on a fresh machine: first run less second run, whole processes", duration(took[0] - took[1]), "< 10 s"),
        ("… the second run, from the cache, whole process", duration(took[1]), ""),
    ]
