"""The command line: check a case, run it, ask a result, remake a report, list the ready-made cases.

Exit codes: 0 all limits met; 1 a limit not met or not judged; 2 bad input; 3 the computation did not reach
its tolerance or ran out of memory; 70 a fault of the program; 130 interrupted by Ctrl-C (finished work is
kept).
"""

from __future__ import annotations

import os
import sys
import tempfile
import time
import traceback
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from ..geometry.errors import InputError
from .compare_command import compare

if TYPE_CHECKING:
    from .job import Job
    from .run import Outcome

CONTEXT = {"help_option_names": ["-h", "--help"], "max_content_width": 100}
CODES = (
    "Exit codes: 0 all limits met; 1 a limit not met; 2 bad input; 3 the computation did not reach its "
    "tolerance or ran out of memory; 70 a fault of the program; 130 interrupted (finished work is kept)."
)
BAD_INPUT, NOT_REACHED, CRASHED, INTERRUPTED = 2, 3, 70, 130
"""Repeated from `run`, which is slow to import."""


@click.group(invoke_without_command=True, context_settings=CONTEXT, epilog=CODES)
@click.option("--version", "show_version", is_flag=True, help="Print the version; with --verbose, of all parts.")
@click.option("--verbose", is_flag=True, help="With --version: the versions of Python and the packages used.")
@click.pass_context
def cli(context: click.Context, show_version: bool, verbose: bool) -> None:
    """Active impedance, reflection and embedded patterns of phased-array elements from one unit cell."""
    if show_version:
        _print_version(verbose)
    elif context.invoked_subcommand is None:
        click.echo(context.get_help())


case_argument = click.argument("case", metavar="CASE")
set_option = click.option(
    "--set",
    "assignments",
    multiple=True,
    metavar="NAME=VALUE",
    help='Replace a parameter, e.g. --set arm="12.8 mm".',
)


@cli.command()
@case_argument
@set_option
@click.option("--drawing", type=click.Path(dir_okay=False), help="Where to write the drawing of the cell (PNG).")
def check(case: str, assignments: tuple[str, ...], drawing: str | None) -> int:
    """Read CASE, tell what was understood and what a run will take, draw the cell.

    CASE is a case file or the name of a ready-made case.
    """
    from .check import show_check
    from .drawing import cell_drawing

    job, path = _read(case, assignments)
    show_check(job, _console())
    target = Path(drawing or f"{path.stem}-cell.png")
    _writable(lambda: target.write_bytes(cell_drawing(job.cell).data), target)
    click.echo(f"\ndrawing: {target}")
    return 0


@cli.command(epilog=CODES)
@case_argument
@set_option
@click.option("--out", type=click.Path(file_okay=False), help="Folder for the results; default: CASE-result.")
@click.option("--touchstone", is_flag=True, help="Also write Touchstone files, one per scan direction.")
@click.option(
    "--touchstone-reference",
    type=float,
    metavar="OHM",
    help="Renormalise them to this resistance (implies them).",
)
@click.option(
    "--currents", multiple=True, metavar="PLACE",
    help='Also write currents (VTK) at "FREQUENCY, THETA, PHI", e.g. "5.4 GHz, 30 deg, 0 deg".',
)  # fmt: skip
@click.option("--estimate/--no-estimate", default=True, help="Estimate the error on another mesh (default: do).")
@click.option("--quiet", is_flag=True, help="Print the verdict only.")
def run(
    case: str,
    assignments: tuple[str, ...],
    out: str | None,
    touchstone: bool,
    touchstone_reference: float | None,
    currents: tuple[str, ...],
    estimate: bool,
    quiet: bool,
) -> int:
    """Solve CASE, judge its limits, write result file, tables, figures and report.

    CASE is a case file or the name of a ready-made case. An interrupted run takes up its finished
    frequencies.
    """
    from .currents import parse_place, write_current_files
    from .run import run_case
    from .touchstone import write_touchstone

    job, path = _read(case, assignments)
    places = [parse_place(text) for text in currents]
    folder = Path(out or f"{path.stem}-result")
    _writable(lambda: folder.mkdir(parents=True, exist_ok=True), folder)
    outcome = run_case(job, folder, progress=_progress(quiet), refine=estimate)
    if outcome.result is not None:
        files = list(outcome.files)
        if touchstone or touchstone_reference is not None:
            written = write_touchstone(folder / "touchstone", outcome.result, None, touchstone_reference)
            files.append(written[-1])
        files += write_current_files(folder / "currents", job, places)
        _show_outcome(outcome, files)
    else:
        click.echo(outcome.message, err=True)
    return outcome.code


@cli.command()
@click.argument("result", type=click.Path(), metavar="RESULT")
@click.option("--out", type=click.Path(file_okay=False), help="Folder to write to; default: that of RESULT.")
def report(result: str, out: str | None) -> int:
    """Judge again and remake tables, figures and report from a result file, without solving."""
    from .judge import judge
    from .run import Outcome, exit_code, write_views
    from .store import load_result

    loaded = load_result(Path(result))
    folder = Path(out) if out else Path(result).parent
    _writable(lambda: folder.mkdir(parents=True, exist_ok=True), folder)
    files = write_views(folder, loaded)
    verdicts = judge(loaded)
    outcome = Outcome(exit_code(loaded, verdicts), loaded, verdicts, files, loaded.failure)
    _show_outcome(outcome, list(files))
    return outcome.code


@cli.command("ask")
@click.argument("result", type=click.Path(), metavar="RESULT")
@click.option(
    "--at", "places", multiple=True, required=True, metavar="PLACE",
    help='Where: "FREQUENCY, THETA, PHI", e.g. "5.42 GHz, 37.5 deg, 90 deg"; may be given many times.',
)  # fmt: skip
@click.option("--port", help="Only this port; default: every driven one.")
@click.option("--csv", "table", type=click.Path(dir_okay=False), help='Write a table instead; "-" for the screen.')
def ask_result(result: str, places: tuple[str, ...], port: str | None, table: str | None) -> int:
    """Tell impedance, reflection and gain at any frequency of the band and any direction, without solving again.

    RESULT is the file result.nc of a run (or its folder). The answers come from the reduced model kept in it.
    """
    import csv
    import io

    from .ask import answer_table, answer_text, answers
    from .currents import parse_place
    from .store import load_result

    asked = [parse_place(text, "--at") for text in places]
    path = Path(result)
    loaded = load_result(path / "result.nc" if path.is_dir() else path)
    rows = answers(loaded, asked, port)
    code = NOT_REACHED if loaded.failure else 0
    if code:
        click.echo(f"scanward: do not use these numbers: {loaded.failure}", err=True)
    if table is None:
        click.echo("\n".join(answer_text(row) for row in rows))
        return code
    text = io.StringIO()
    csv.writer(text, lineterminator="\n").writerows(answer_table(rows))
    if table == "-":
        click.echo(text.getvalue(), nl=False)
    else:
        _writable(lambda: Path(table).write_text(text.getvalue(), encoding="utf-8"), Path(table))
    return code


cli.add_command(compare)


@cli.command("cases")
def list_cases() -> int:
    """List the ready-made cases that come with the program."""
    from .library import case_title, ready_made

    found = ready_made()
    width = max((len(name) for name in found), default=0)
    for name, path in found.items():
        click.echo(f"{name:<{width}}  {case_title(path)}")
    if not found:
        click.echo("no ready-made cases are installed")
    return 0


def main(argv: Sequence[str] | None = None) -> int:
    """Run the command line and return the exit code; never shows a traceback."""
    for stream in (sys.stdout, sys.stderr):
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="replace")  # type: ignore[union-attr]
    try:
        code = cli.main(args=list(sys.argv[1:] if argv is None else argv), prog_name="scanward", standalone_mode=False)
    except InputError as fault:
        click.echo(f"scanward: {fault}", err=True)
        return BAD_INPUT
    except click.ClickException as fault:
        fault.show()
        return BAD_INPUT
    except (KeyboardInterrupt, click.Abort):
        click.echo("scanward: interrupted", err=True)
        return INTERRUPTED
    except MemoryError:
        click.echo(
            "scanward: there is not enough memory; a coarser mesh needs less ('scanward check' tells)",
            err=True,
        )
        return NOT_REACHED
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except Exception:
        return _crash()
    return code if isinstance(code, int) else 0


def _read(case: str, assignments: Sequence[str]) -> tuple[Job, Path]:
    from .library import find_case
    from .read import read_case

    overrides = {}
    for text in assignments:
        name, sign, value = text.partition("=")
        if not sign or not name.strip() or not value.strip():
            raise InputError(f"'{text}' sets nothing.", where="--set", allowed='NAME=VALUE such as arm="12.8 mm"')
        overrides[name.strip()] = value.strip()
    path = find_case(case)
    return read_case(path, overrides or None), path


def _writable(action: Any, place: Path) -> None:
    """Do `action`; a file system that refuses is the user's to mend."""
    try:
        action()
    except OSError as fault:
        raise InputError(f"'{place}' cannot be written: {fault.strerror or fault}.", where="output") from None


def _console() -> Any:
    from rich.console import Console

    return Console(highlight=False) if sys.stdout.isatty() else Console(highlight=False, width=120)


def _progress(quiet: bool) -> Any:
    from .progress import Bar, Lines, Silent

    if quiet:
        return Silent()
    return Bar(_console()) if sys.stdout.isatty() else Lines()


def _show_outcome(outcome: Outcome, files: list[Path]) -> None:
    """The verdict in words, the files, and nothing that the report says better."""
    from .bench_text import bench_facts
    from .judge import degrees, number
    from .report import error_text, headline, margin_text
    from .survey_text import blindness_summary, signed_rows

    assert outcome.result is not None
    click.echo(headline(outcome.result, outcome.verdicts))
    if outcome.message:
        click.echo(f"  cause: {outcome.message}")
    for v in outcome.verdicts:
        click.echo(f"  {v.state}: {v.requirement} within {degrees(v.limit.cone)}")
        if v.reason:
            click.echo(f"      {v.reason}")
            continue
        error = error_text(v).replace("±", "+/-")
        click.echo(f"      worst {number(v.worst, v.unit)}{' at ' if v.place else ''}{v.place}")
        click.echo(f"      margin {margin_text(v)}{error and ', estimated error '}{error}")
    accuracy = outcome.result.accuracy
    if accuracy.samples:
        click.echo(f"estimated error: reflection coefficient +/- {accuracy.reflection:.3f}, "
                   f"impedance +/- {100 * accuracy.impedance:.1f} %")  # fmt: skip
    else:
        click.echo(f"estimated error: none made ({accuracy.note})")
    if outcome.result.survey is not None:
        for name, text in signed_rows(outcome.result)[1:5]:
            click.echo(f"{name[0].lower()}{name[1:]}: {text}")
        click.echo(f"blindness: {blindness_summary(outcome.result)}")
    for name, text in bench_facts(outcome.result)[:3]:
        click.echo(f"breadboard, {name[0].lower()}{name[1:]}: {text}")
    if outcome.result.certificate is not None:
        certificate = outcome.result.certificate
        click.echo(f"reduced model: {certificate} ({certificate.full_solutions} full solutions in all)")
    for path in files:
        if path.suffix in (".nc", ".html", ".vtu") or path.name == "index.csv":
            click.echo(f"  {path}")


def _print_version(verbose: bool) -> None:
    from .. import __version__

    click.echo(f"scanward {__version__}")
    if verbose:
        from .result import versions

        for name, version in versions().items():
            if name != "scanward":
                click.echo(f"  {name} {version}")


def _crash() -> int:
    """Write the traceback to a file, apologise, tell where it is."""
    text = traceback.format_exc()
    handle, name = tempfile.mkstemp(prefix=f"scanward-fault-{time.strftime('%Y%m%d-%H%M%S')}-", suffix=".log")
    with os.fdopen(handle, "w", encoding="utf-8") as stream:
        stream.write(f"{' '.join(sys.argv)}\n{text}")
    click.echo(
        "scanward: sorry, this is a fault of the program, not of your case.\n"
        f"The details are in {name}; please send that file with the case.",
        err=True,
    )
    return CRASHED


if __name__ == "__main__":
    sys.exit(main())
