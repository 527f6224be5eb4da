"""The command `compare`: a measurement held against a predicted finite array."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

import click

from ..geometry.errors import InputError

if TYPE_CHECKING:
    from .comparison import Comparison
    from .pattern_comparison import PatternUncertainty
    from .prediction import Prediction
    from .uncertainty import Uncertainty

SUPPORTED, NOT_SUPPORTED = 0, 1
EPILOG = (
    "Exit codes: 0 the measurement supports the prediction; 1 it does not, or tests nothing; 2 bad input. "
    "Uncertainties are standard (one sigma) and are never guessed."
)


@click.command("compare", epilog=EPILOG)
@click.argument("result", type=click.Path(), metavar="RESULT")
@click.option(
    "--measured", multiple=True, required=True, type=click.Path(), metavar="FILE",
    help="Touchstone file (1.x or 2.x); repeat for several, such as one .s2p per element.",
)  # fmt: skip
@click.option(
    "--map", "port_map", required=True, type=click.Path(), help="Port map: measured port,row,column[,port][,file]."
)
@click.option("--magnitude-uncertainty", required=True, metavar="DB", help='Of each coefficient, e.g. "0.1 dB".')
@click.option("--phase-uncertainty", required=True, metavar="ANGLE", help='Of each coefficient, e.g. "1 deg".')
@click.option("--noise-floor", required=True, metavar="DB", help='R.m.s., below full transmission, e.g. "-75 dB".')
@click.option(
    "--pattern", "patterns", multiple=True, type=click.Path(), metavar="FILE", help="Measured pattern cuts (CSV)."
)
@click.option("--pattern-uncertainty", metavar="DB", help='Of each level, e.g. "0.3 dB"; needed with --pattern.')
@click.option("--stray-level", metavar="DB", help='Stray field of the range below the peak, e.g. "-45 dB".')
@click.option(
    "--fit", "parameters", multiple=True, metavar="NAME", help="Parameter to fit; default: all with tolerances."
)
@click.option(
    "--wanted", default=0.1, show_default=True, help="A direction counts as tested if known better than this."
)
@click.option("--out", type=click.Path(file_okay=False), help="Folder to write to; default: that of RESULT.")
def compare(
    result: str,
    measured: tuple[str, ...],
    port_map: str,
    magnitude_uncertainty: str,
    phase_uncertainty: str,
    noise_floor: str,
    patterns: tuple[str, ...],
    pattern_uncertainty: str | None,
    stray_level: str | None,
    parameters: tuple[str, ...],
    wanted: float,
    out: str | None,
) -> int:
    """Compare measured S-parameters and patterns with the finite array predicted in RESULT."""
    from .comparison import compare_files
    from .comparison_report import write_comparison

    prediction = _load()(Path(result))
    uncertainty = _uncertainty(magnitude_uncertainty, phase_uncertainty, noise_floor)
    of_patterns = _pattern_uncertainty(pattern_uncertainty, stray_level) if patterns else None
    if not 0 < wanted <= 2:
        raise InputError(
            f"{wanted:g} is no uncertainty of a reflection coefficient.", where="--wanted", allowed="0 to 2"
        )
    comparison = compare_files(
        prediction,
        [Path(name) for name in measured],
        Path(port_map),
        uncertainty,
        [Path(name) for name in patterns],
        of_patterns,
        fit=parameters or None,
        wanted=wanted,
    )
    folder = Path(out) if out else Path(result) if Path(result).is_dir() else Path(result).parent
    try:
        files = write_comparison(folder, comparison)
    except OSError as fault:
        raise InputError(f"'{folder}' cannot be written: {fault.strerror or fault}.", where="output") from None
    _show(comparison, files)
    return SUPPORTED if comparison.supported else NOT_SUPPORTED


def _load() -> Callable[[Path], Prediction]:
    """How a prediction is read from RESULT."""
    from .bench_store import prediction_of

    return prediction_of


def _uncertainty(magnitude: str, phase: str, floor: str) -> Uncertainty:
    from .quantity import Quantities
    from .uncertainty import Uncertainty

    read = Quantities({}).value
    return Uncertainty.from_decibel(
        read(magnitude, "level", "--magnitude-uncertainty"),
        read(phase, "angle", "--phase-uncertainty"),
        read(floor, "level", "--noise-floor"),
    )


def _pattern_uncertainty(level: str | None, stray: str | None) -> PatternUncertainty:
    from .pattern_comparison import PatternUncertainty
    from .quantity import Quantities

    if level is None or stray is None:
        raise InputError(
            "patterns are given without their uncertainty.",
            where="--pattern",
            allowed="--pattern-uncertainty and --stray-level beside it",
        )
    read = Quantities({}).value
    return PatternUncertainty(read(level, "level", "--pattern-uncertainty"), read(stray, "level", "--stray-level"))


def _show(comparison: Comparison, files: tuple[Path, ...]) -> None:
    from .comparison_words import cable_rows, headline, parameter_rows, support_rows, untested

    if comparison.invented:
        click.echo("The measured files say that they are INVENTED.")
    click.echo(headline(comparison)[0])
    click.echo(comparison.diagnosis.sentence)
    for name, frequencies, directions, worst in support_rows(comparison):
        click.echo(f"  {name}:\n      {frequencies}\n      directions: {directions}\n      worst: {worst}")
    for name, _, move, tolerance, remark in parameter_rows(comparison):
        click.echo(f"  {name} moves by {move} (tolerance {tolerance}){': ' if remark else ''}{remark}")
    cables = cable_rows(comparison)
    if cables:
        click.echo(f"  cables fitted at {len(cables)} ports, listed in the page; not applied to the data as measured")
    click.echo("untested:")
    for line in untested(comparison):
        click.echo(f"  {line}")
    for path in files:
        if path.suffix == ".html":
            click.echo(f"  {path}")
