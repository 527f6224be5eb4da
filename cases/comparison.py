"""A measurement against its prediction, from files to verdict: all that report, tables and command show."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from ..geometry.errors import InputError, nearest
from .diagnosis import Diagnosis, diagnose
from .measured_pattern import MeasuredCut, read_pattern
from .measured_scattering import MeasuredScattering, read_measurement
from .pattern_comparison import CutComparison, PatternUncertainty, compare_cut, match_cut
from .prediction import Prediction
from .scan_synthesis import ScanReflection, synthesise
from .support import Support, judge_support
from .uncertainty import Uncertainty

Floats = NDArray[np.float64]
WANTED = 0.1


@dataclass(frozen=True)
class Comparison:
    """Outcome of a comparison.

    Parameters
    ----------
    prediction : as compared (its references may have been changed to the measured ones)
    data : measured coefficients
    diagnosis : why they differ
    scan, support : active reflection over scan and the tests, with the data as measured
    corrected_scan, corrected_support : with exchanged ports undone and fitted cables taken out; None where none found
    moved_scan, moved_support : with the model's parameters moved within their tolerances besides; None without any
    fitted : indices of the sensitivities that were fitted
    invented : whether a measured file says that it is invented
    patterns : cuts compared; `loose_cuts` those that found no predicted cut, with the reason
    """

    prediction: Prediction
    data: MeasuredScattering
    diagnosis: Diagnosis
    scan: ScanReflection
    support: Support
    corrected_scan: ScanReflection | None
    corrected_support: Support | None
    moved_scan: ScanReflection | None
    moved_support: Support | None
    fitted: tuple[int, ...]
    patterns: tuple[CutComparison, ...]
    loose_cuts: tuple[tuple[MeasuredCut, str], ...]
    invented: bool = False

    @property
    def headline_support(self) -> Support:
        """The tests that count: after faults of the bench were taken out, where the data ask for it."""
        return self.support if self.corrected_support is None else self.corrected_support

    @property
    def supported(self) -> bool:
        """Whether coefficients, scan and patterns support the prediction, faults of the bench aside, and the
        measurement does not contradict itself."""
        sound = not [f for f in self.diagnosis.checks.failed if f.name in ("reciprocity", "passivity")]
        return self.headline_support.holds and all(p.supported for p in self.patterns) and sound


def compare(
    prediction: Prediction,
    data: MeasuredScattering,
    *,
    fit: Sequence[str] | None = None,
    directions: Floats | None = None,
    cuts: Sequence[MeasuredCut] = (),
    pattern_uncertainty: PatternUncertainty | None = None,
    wanted: float = WANTED,
) -> Comparison:
    """Hold a measurement against a prediction.

    Parameters
    ----------
    fit : names of the parameters to fit; default: all that the prediction has sensitivities for
    directions : (n_dir, 2) u, v; default: those of the infinite array, else cuts to 60 degrees along rows and columns
    wanted : a direction counts as tested when its active reflection is known better than this

    Raises
    ------
    InputError
        For unknown parameter names, or patterns without a stated uncertainty.
    """
    fitted = _parameters(prediction, fit)
    directions = _directions(prediction) if directions is None else directions
    diagnosis = diagnose(data, prediction, fitted)
    use, raw = data.uncertainty, diagnosis.fits.plain
    scan = synthesise(data.scattering, prediction, use, directions)
    support = judge_support(data.scattering, raw.model, prediction, use, scan, wanted=wanted)
    corrected_scan = corrected_support = moved_scan = moved_support = None
    undone, gain = diagnosis.undone, diagnosis.gain
    if diagnosis.swaps or diagnosis.cabled:
        bench = diagnosis.fits.cables if diagnosis.cabled else diagnosis.fits.raw
        corrected_scan = synthesise(diagnosis.corrected, prediction, use, directions, scan.port, gain)
        corrected_support = judge_support(undone, bench.model, prediction, use, corrected_scan, bench, wanted)
    if fitted:
        rich = diagnosis.fits.both if diagnosis.cabled else diagnosis.fits.parameters
        moved = _moved(prediction, fitted, rich.moves)
        moved_scan = synthesise(diagnosis.corrected, moved, use, directions, scan.port, gain)
        moved_support = judge_support(undone, rich.model, moved, use, moved_scan, rich, wanted)
    done, loose = _patterns(cuts, prediction, pattern_uncertainty)
    return Comparison(
        prediction,
        data,
        diagnosis,
        scan,
        support,
        corrected_scan,
        corrected_support,
        moved_scan,
        moved_support,
        fitted,
        done,
        loose,
    )


def compare_files(
    prediction: Prediction,
    files: Sequence[Path],
    map_path: Path,
    uncertainty: Uncertainty,
    patterns: Sequence[Path] = (),
    pattern_uncertainty: PatternUncertainty | None = None,
    *,
    fit: Sequence[str] | None = None,
    wanted: float = WANTED,
) -> Comparison:
    """`compare` from files; see `read_measurement` and `read_pattern` for what they may hold."""
    data, prediction = read_measurement(files, map_path, prediction, uncertainty)
    cuts = [cut for path in patterns for cut in read_pattern(path)]
    done = compare(prediction, data, fit=fit, cuts=cuts, pattern_uncertainty=pattern_uncertainty, wanted=wanted)
    return replace(done, invented=any(_says_invented(Path(path)) for path in (*files, *patterns)))


def _says_invented(path: Path) -> bool:
    with open(path, "rb") as stream:
        return b"INVENTED" in stream.read(2000)


def _parameters(prediction: Prediction, names: Sequence[str] | None) -> tuple[int, ...]:
    have = [s.name for s in prediction.sensitivities]
    if names is None:
        return tuple(range(len(have)))
    for name in names:
        if name not in have:
            raise InputError(
                f"there is no sensitivity to '{name}'.",
                where="parameters to fit",
                allowed=", ".join(have) or "none: the prediction holds no sensitivities",
                hint=nearest(name, have),
            )
    return tuple(sorted({have.index(name) for name in names}))


def _moved(prediction: Prediction, fitted: tuple[int, ...], moves: Floats) -> Prediction:
    total = prediction.scattering.copy()
    for k, move in zip(fitted, moves, strict=True):
        total = total + move * prediction.sensitivities[k].derivative
    return replace(prediction, scattering=total)


def _directions(prediction: Prediction) -> Floats:
    if prediction.infinite is not None and len(prediction.infinite.directions):
        return prediction.infinite.directions
    s = np.sin(np.radians(np.arange(-60, 61, 5.0)))
    return np.concatenate([np.stack([s, 0 * s], axis=1), np.stack([0 * s, s], axis=1)])


def _patterns(
    cuts: Sequence[MeasuredCut], prediction: Prediction, uncertainty: PatternUncertainty | None
) -> tuple[tuple[CutComparison, ...], tuple[tuple[MeasuredCut, str], ...]]:
    if cuts and uncertainty is None:
        raise InputError(
            "patterns are given without their uncertainty.",
            where="stated uncertainty",
            allowed="a level uncertainty and a stray level",
        )
    done, loose = [], []
    for cut in cuts:
        assert uncertainty is not None
        found = match_cut(cut, prediction)
        if isinstance(found, str):
            loose.append((cut, found))
        else:
            done.append(compare_cut(cut, found, uncertainty))
    return tuple(done), tuple(loose)
