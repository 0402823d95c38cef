"""The commands, their options and their exit codes: 0 all holds, 1 a requirement fails, 2 the netlist or the call is wrong, 3 not finished."""

from __future__ import annotations

import json
import os
import sys
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any, Final

import click

from polewise.errors import EXIT_HOLDS, EXIT_NETLIST_WRONG, EXIT_NOT_FINISHED, PolewiseError
from polewise.terminal.style import Style, style_of

if TYPE_CHECKING:
    from polewise.api import System
    from polewise.grammar.diagnostics import Diagnostic

DETAILS_VARIABLE: Final = "POLEWISE_DETAILS"  # set to anything: an error of the program itself shows where it happened
_CODES: Final = """Exit codes: 0 everything holds; 1 a requirement fails; 2 the netlist or the call is wrong; 3 a study could not be finished."""
_CONTEXT: Final = {"help_option_names": ["-h", "--help"], "max_content_width": 100}


def main(arguments: Sequence[str] | None = None) -> None:
    """Run the command line and leave with its exit code."""
    sys.exit(run_command_line(arguments))


def run_command_line(arguments: Sequence[str] | None = None) -> int:
    """Run the command line.

    Args:
        arguments: without the program's name; None: the process's own.
    Returns:
        The exit code. Nothing is raised but SystemExit by the interpreter itself.
    """
    try:
        result = commands.main(args=None if arguments is None else list(arguments), prog_name="polewise", standalone_mode=False)
        sys.stdout.flush()
        return result if isinstance(result, int) else EXIT_HOLDS
    except click.ClickException as error:
        error.show()
        return EXIT_NETLIST_WRONG
    except (click.Abort, KeyboardInterrupt):
        click.echo("stopped", err=True)
        return EXIT_NOT_FINISHED
    except PolewiseError as error:
        if "--json" in (sys.argv[1:] if arguments is None else arguments):
            tell_as_json(error.diagnostics, error.exit_code)
        else:
            tell(error.diagnostics)
        return error.exit_code
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())  # whoever read our output has gone: end quietly
        return EXIT_NOT_FINISHED
    except Exception as error:
        return _apologise(error)


def tell(diagnostics: Sequence[Diagnostic]) -> None:
    """Diagnostics on the error stream."""
    from polewise.terminal.render import count_text, render_all

    if diagnostics:
        click.echo(render_all(diagnostics, style_of(sys.stderr)), err=True, color=True)
        if len(diagnostics) > 1:
            click.echo(count_text(diagnostics), err=True)


def _apologise(error: BaseException) -> int:
    """An error of the program itself: one line, never a traceback unless it was asked for."""
    if os.environ.get(DETAILS_VARIABLE):
        import traceback

        traceback.print_exception(error)
    kind = type(error).__name__
    click.echo(f"Sorry: polewise itself failed ({kind}). This is a fault of the program; set {DETAILS_VARIABLE}=1 to see where.", err=True)
    return EXIT_NOT_FINISHED


# ---------------------------------------------------------------- options that several commands share


def _given(_context: click.Context, _parameter: click.Parameter, values: tuple[str, ...]) -> dict[str, str]:
    given: dict[str, str] = {}
    for value in values:
        name, mark, text = value.partition("=")
        if not mark or not name.strip() or not text.strip():
            raise click.BadParameter(f"`{value}` is not of the form name=value, such as berth2.L=200uH")
        given[name.strip()] = text.strip()
    return given


_file = click.argument("file", type=click.Path(path_type=Path))
_givens = click.option(
    "--given",
    "given",
    multiple=True,
    callback=_given,
    metavar="NAME=VALUE",
    help='Another value for a given, by its path: --given "berth2.L=200 uH".',
)
_as_json = click.option("--json", "as_json", is_flag=True, help="Print one JSON object instead of text.")


@click.group(context_settings=_CONTEXT, epilog=_CODES)
@click.version_option(package_name="polewise", prog_name="polewise", message="%(prog)s %(version)s")
def commands() -> None:
    """Averaged simulation of power-conversion systems from one plain-text netlist.

    A netlist (FILE, ending in .pole) describes the physical circuit, its studies and its requirements.
    """


@commands.command(epilog=_CODES, short_help="Read FILE; say what is in it, or all that is wrong.")
@_file
@_givens
@_as_json
def check(file: Path, given: dict[str, str], as_json: bool) -> int:
    """Read FILE and say what is in it, or everything that is wrong with it.

    Shows counts, islands, assemblies, the choke that faces each diode pole, states that depend on one another, studies, and every warning.
    """
    from polewise.terminal.check_command import run_check

    return run_check(file, given, as_json)


@commands.command(epilog=_CODES, short_help="Find the operating point of FILE.")
@_file
@_givens
@click.option("--all", "inner", is_flag=True, help="Nodes and paths inside assemblies too.")
@_as_json
def settle(file: Path, given: dict[str, str], inner: bool, as_json: bool) -> int:
    """Find the operating point of FILE and print it.

    Shows potentials, currents, each pole's mode of conduction, losses per assembly and the power balance.
    """
    from polewise.terminal.settle_command import run_settle

    return run_settle(file, given, inner, as_json)


@commands.command(
    epilog=_CODES + " A run stopped by Ctrl-C keeps what is done, marks it incomplete, and ends with 3.",
    short_help="Run the studies of FILE and judge its requirements.",
)
@_file
@click.argument("studies", nargs=-1, metavar="[STUDY]...")
@_givens
@click.option(
    "--out", metavar="FOLDER", type=click.Path(path_type=Path, file_okay=False), help="Folder for Parquet, figures and summaries; made if missing."
)
@click.option("--csv", "csv", is_flag=True, help="Also write CSV into the --out folder.")
@click.option("--no-figure", is_flag=True, help="Draw no figures.")
@click.option("--junit", type=click.Path(path_type=Path, dir_okay=False), help="Write the verdicts as JUnit XML to this file.")
@click.option(
    "--tolerance", type=click.FloatRange(1e-12, 1e-2), metavar="NUMBER", help="Relative tolerance of the solver, instead of the studies' own."
)
@click.option("--sampling", type=click.Choice(["exact", "mean"]), help="Sampled blocks: every instant, or their mean equivalents.")
@click.option("--no-trust", is_flag=True, help="Leave the trust report out.")
@_as_json
def run(
    file: Path,
    studies: tuple[str, ...],
    given: dict[str, str],
    out: Path | None,
    csv: bool,
    no_figure: bool,
    junit: Path | None,
    tolerance: float | None,
    sampling: str | None,
    no_trust: bool,
    as_json: bool,
) -> int:
    """Run the studies of FILE (all, or the STUDYs named) and judge their requirements.

    Without --out nothing is written; with it each study leaves NAME.parquet, NAME.json, NAME.png and NAME.svg there.
    """
    from polewise.terminal.run_command import RunOptions, run_studies

    if csv and out is None:
        raise click.UsageError("--csv writes files: say where with --out FOLDER")
    options = RunOptions(
        given, out, csv, not no_figure, junit, tolerance, "mean" if sampling == "mean" else "exact" if sampling else None, as_json, not no_trust
    )
    return run_studies(file, studies, options)


@commands.command(
    epilog="Exit codes: 0 holds or doubtful; 1 something is not valid; 2 the netlist or the call is wrong; 3 not finished.",
    short_help="Say where the averages of FILE may be believed.",
)
@_file
@click.argument("studies", nargs=-1, metavar="[STUDY]...")
@_givens
@_as_json
def trust(file: Path, studies: tuple[str, ...], given: dict[str, str], as_json: bool) -> int:
    """Say for every pole, kept quantity and requirement whether a cycle average may be believed, and by which number.

    Without a STUDY the operating point is looked at; each STUDY named is run for its report.
    """
    from polewise.terminal.trust_command import run_trust

    return run_trust(file, studies, given, as_json)


@commands.command(epilog=_CODES, short_help="Run a stretch of a study with every switching edge.")
@_file
@click.argument("study", required=False)
@click.option("--from", "begin", metavar="T1", help="Where the window begins, such as 20ms.")
@click.option("--to", "end", metavar="T2", help="Where it ends.")
@click.option("--keep", multiple=True, metavar="NAME", help="What to record instead of the study's own; may be repeated.")
@_givens
@click.option("--figure", type=click.Path(path_type=Path, dir_okay=False), help="Draw edges, cycle average and averaged run into this file.")
@_as_json
def magnify(
    file: Path,
    study: str | None,
    begin: str | None,
    end: str | None,
    keep: tuple[str, ...],
    given: dict[str, str],
    figure: Path | None,
    as_json: bool,
) -> int:
    """Run a stretch of STUDY with every switching edge, from its averaged state; without STUDY the periodic state at the operating point.

    Prints ripple, peaks, RMS and losses of every device and passive element, and how far the cycle average is from the averaged run.
    """
    from polewise.terminal.magnify_command import run_magnify

    return run_magnify(file, study, begin, end, keep, given, figure, as_json)


@commands.command(epilog=_CODES, short_help="Cycle average of a measured waveform, and how a study fits it.")
@click.argument("waveform", type=click.Path(path_type=Path))
@click.option("--rate", metavar="FREQUENCY", help="Switching frequency, such as 40kHz. Without it or a gate the period is found from the data.")
@click.option("--gate", metavar="COLUMN", help="A gate signal in the file: every period begins at its rising edge.")
@click.option("--channel", "channels", multiple=True, metavar="COLUMN", help="Average only this column; may be repeated.")
@click.option("--offset", "offsets", multiple=True, callback=_given, metavar="COLUMN=VALUE", help="Take a probe's offset off, such as i=120mA.")
@click.option("--delay", "delays", multiple=True, callback=_given, metavar="COLUMN=TIME", help="Take a probe's delay out, such as i=80ns.")
@click.option("--against", nargs=2, metavar="FILE STUDY", help="Run STUDY of FILE, align its quantities in time, and report the fit.")
@click.option("--match", "matches", multiple=True, callback=_given, metavar="COLUMN=QUANTITY", help='Which quantity a column is: "CH1=out.v".')
@_givens
@click.option("--out", metavar="FOLDER", type=click.Path(path_type=Path, file_okay=False), help="Folder for the averages as CSV and figures of fits.")
@_as_json
def average(
    waveform: Path,
    rate: str | None,
    gate: str | None,
    channels: tuple[str, ...],
    offsets: dict[str, str],
    delays: dict[str, str],
    against: tuple[str, str] | None,
    matches: dict[str, str],
    given: dict[str, str],
    out: Path | None,
    as_json: bool,
) -> int:
    """Give the cycle average of WAVEFORM, a CSV file as oscilloscopes write it; with --against, fit a study of a netlist to it."""
    from polewise.terminal.average_command import AverageOptions, run_average

    model = None if against is None else (Path(against[0]), against[1])
    return run_average(waveform, AverageOptions(rate, gate, channels, offsets, delays, model, matches, given, out, as_json))


@commands.command(short_help="Explain a message by its code.")
@click.argument("code", required=False)
def explain(code: str | None) -> int:
    """Explain a message by its CODE, such as dangling-node; without CODE, list all codes."""
    from polewise.terminal.explain_command import run_explain

    return run_explain(code)


@commands.command(name="format", short_help="Print FILE in canonical layout.")
@_file
def format_file(file: Path) -> int:
    """Print FILE in canonical layout.

    Comments are not kept, so the file itself is never touched.
    """
    from polewise.terminal.format_command import run_format

    return run_format(file)


# ---------------------------------------------------------------- what commands share


def read_or_tell(file: Path, given: dict[str, str], as_json: bool) -> System | None:
    """The system, or None after everything wrong was told."""
    from polewise.api import read

    system, found = read(file, given=given)
    if system is None:
        if as_json:
            tell_as_json(found, EXIT_NETLIST_WRONG)
        else:
            tell(found)
    return system


def tell_as_json(diagnostics: Sequence[Diagnostic], exit_code: int) -> None:
    """Diagnostics as one JSON object on the output."""
    from polewise.terminal.json_form import diagnostics_content

    print_json({"exit_code": exit_code, "diagnostics": diagnostics_content(diagnostics)})


def print_json(content: dict[str, Any]) -> None:
    """One JSON object on the output."""
    from polewise.results.summary import plain

    click.echo(json.dumps(plain(content), indent=1, ensure_ascii=False))


def print_lines(make: Callable[[Style], list[str]]) -> None:
    """Lines on the output, painted where it is a terminal."""
    click.echo("\n".join(make(style_of(sys.stdout))), color=True)
