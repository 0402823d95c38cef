"""Run the benchmarks by hand: `python tests/bench/run.py [ten] [growth] [samples] [reading] [diagram]`, all of them without arguments.

Prints tables of ratios as Markdown; with `--record` it also puts them into docs/benchmarks.md. Needs the extras `bench` (scikit-sundae; without
it those rows are missing) and `figures`. Nothing here is a test: pytest does not collect it, and no figure fails anything.
"""

from __future__ import annotations

import argparse
import os
import platform
import sys
import time
import warnings
from pathlib import Path

import diagram
import edges
import growth
import headline
import reading
import samples

PARTS = {
    "ten": ("Ten controlled converters, 50 ms with a load step", headline.report),
    "growth": ("Growth with the number of converters", growth.report),
    "samples": ("One sample instant at 40 kHz", samples.report),
    "edges": ("Every edge: against the averaged run, and against a hand-written loop", edges.report),
    "reading": ("Reading, building, starting", reading.report),
    "diagram": ("Work and precision", diagram.report),
}

PAGE = Path(__file__).resolve().parents[2] / "docs" / "benchmarks.md"


def machine() -> str:
    """The machine in general words."""
    from importlib.metadata import version

    packages = ", ".join(f"{name} {version(name)}" for name in ("numpy", "scipy", "numba"))
    memory = ""
    if hasattr(os, "sysconf") and "SC_PHYS_PAGES" in os.sysconf_names:
        memory = f", {os.sysconf('SC_PAGE_SIZE') * os.sysconf('SC_PHYS_PAGES') / 2**30:.0f} GiB of memory"
    load = f", load average {os.getloadavg()[0]:.1f} at the start" if hasattr(os, "getloadavg") else ""
    return f"{os.cpu_count()} cores ({platform.machine()}){memory}; Python {platform.python_version()}, {packages}{load}"


def record(name: str, lines: list[str]) -> None:
    """Put lines between the page's marks `<!-- NAME: begin -->` and `<!-- NAME: end -->`."""
    begin, end = f"<!-- {name}: begin -->\n", f"<!-- {name}: end -->"
    page = PAGE.read_text(encoding="utf-8")
    head, found, rest = page.partition(begin)
    _, closed, tail = rest.partition(end)
    if not found or not closed:
        raise SystemExit(f"{PAGE.name} has no place marked for `{name}`")
    PAGE.write_text(head + begin + "\n" + "\n".join(lines).rstrip() + "\n\n" + end + tail, encoding="utf-8")


def main() -> None:
    """Read the arguments, run the parts, print their tables."""
    parser = argparse.ArgumentParser(description="Benchmarks of polewise; prints tables of ratios.")
    parser.add_argument("parts", nargs="*", metavar="part", help=f"which: {', '.join(PARTS)} (default: all)")
    parser.add_argument("--rounds", type=int, default=None, help="timed runs of each job")
    parser.add_argument("--record", action="store_true", help="put the tables into docs/benchmarks.md")
    options = parser.parse_args()
    unknown = [p for p in options.parts if p not in PARTS]
    if unknown:
        parser.error(f"no part {', '.join(unknown)}; there are {', '.join(PARTS)}")
    warnings.filterwarnings("ignore", category=RuntimeWarning, module="scipy")  # its BDF probes values that are not finite
    print(machine())
    for name in options.parts or PARTS:
        title, report = PARTS[name]
        began, on = time.perf_counter(), machine()
        print(f"\n## {title}\n")
        lines = report() if options.rounds is None else report(rounds=options.rounds)
        print("\n".join(lines))
        print(f"\n({name}: {time.perf_counter() - began:.0f} s)", file=sys.stderr)
        if options.record:
            record(name, [f"On {on}.", "", *lines])


if __name__ == "__main__":
    main()
