"""Measured S-parameters brought into the port order and onto the frequencies of a prediction."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from ..geometry.errors import InputError
from .frequency_grid import mean_delay, onto_grid
from .measured_map import MapEntry, entries_of, read_map
from .measured_touchstone import TouchstoneData, read_touchstone
from .prediction import Prediction, change_reference, with_reference
from .uncertainty import Uncertainty

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Booleans = NDArray[np.bool_]


@dataclass(frozen=True)
class MeasuredScattering:
    """Measured coefficients in the prediction's port order and at its frequencies.

    Parameters
    ----------
    scattering : (n_freq, n, n), nan where not measured
    uncertainty : as stated
    delay : (n, n) s, mean delay of each coefficient over the measured frequencies themselves, nan where unknown
    spread : r.m.s. difference of coefficients measured more than once over the stated uncertainty; nan when none was
    notes : what was done to the data, in words
    """

    scattering: Complexes
    uncertainty: Uncertainty
    delay: Floats | None = None
    spread: float = float("nan")
    notes: tuple[str, ...] = ()

    @property
    def known(self) -> Booleans:
        """(n_freq, n, n) whether measured."""
        return np.isfinite(self.scattering)


def read_measurement(
    files: Sequence[Path], map_path: Path, prediction: Prediction, uncertainty: Uncertainty
) -> tuple[MeasuredScattering, Prediction]:
    """Read all files; give the measured coefficients, and the prediction at the references they are measured in.

    One file with all ports is renormalised to the prediction's references. With ports missing that is impossible, since
    the unmeasured ones were terminated in the measured reference: then the prediction, which is complete, is
    renormalised.

    Raises
    ------
    InputError
        For broken files or maps, no common frequency, or references that contradict each other.
    """
    entries = read_map(map_path, prediction)
    data = [read_touchstone(Path(path)) for path in files]
    several = len(data) > 1
    _all_used(entries, data, Path(map_path))
    chosen = [entries_of(entries, one.path, one.scattering.shape[1], Path(map_path), several) for one in data]
    notes: list[str] = []
    if len(data) == 1 and len(chosen[0]) == len(prediction.ports) == data[0].scattering.shape[1]:
        data[0] = _whole(data[0], chosen[0], prediction, notes)
    else:
        prediction = _partial(data, chosen, prediction, notes)
    total, count, square, delay = _gather(data, chosen, prediction, notes)
    if not np.any(count):
        low, high = (f"{x / 1e9:.6g}" for x in (min(d.frequency[0] for d in data), max(d.frequency[-1] for d in data)))
        raise InputError(
            f"the measured band, {low} to {high} GHz, holds none of the predicted frequencies.",
            where=str(files[0]),
            allowed=f"{prediction.frequency[0] / 1e9:.6g} to {prediction.frequency[-1] / 1e9:.6g} GHz",
        )
    with np.errstate(invalid="ignore", divide="ignore"):
        mean = np.where(count > 0, total / count, np.nan)
    spread = _spread(mean, count, square, uncertainty)
    return MeasuredScattering(mean, uncertainty, delay, spread, tuple(notes)), prediction


def _all_used(entries: tuple[MapEntry, ...], data: list[TouchstoneData], map_path: Path) -> None:
    names = [one.path.name for one in data]
    if len(set(names)) < len(names):
        double = next(name for name in names if names.count(name) > 1)
        raise InputError(f"the measured file '{double}' was given twice.", where="measured files")
    for e in entries:
        if e.file and e.file not in names:
            raise InputError(
                f"the map names the file '{e.file}', which was not given.",
                where=f"{map_path}: line {e.line}",
                allowed=", ".join(names),
            )


def _whole(
    data: TouchstoneData, chosen: tuple[MapEntry, ...], prediction: Prediction, notes: list[str]
) -> TouchstoneData:
    """All ports in one file: renormalise the measurement."""
    wanted = prediction.reference[[e.index for e in chosen]]
    if np.allclose(data.reference, wanted, rtol=1e-6) or np.any(_empty(data.scattering)):
        if not np.allclose(data.reference, wanted, rtol=1e-6):
            raise InputError(
                "the measured references differ from the prediction's, and coefficients are missing.",
                where=str(data.path),
                allowed=f"references of {wanted[0]:g} ohm, or the full matrix",
            )
        return data
    notes.append(
        f"The measured matrix was renormalised from {_listed(data.reference)} ohm to the ports' {_listed(wanted)} ohm."
    )
    return replace(data, scattering=change_reference(data.scattering, data.reference, wanted), reference=wanted)


def _partial(
    data: list[TouchstoneData], chosen: list[tuple[MapEntry, ...]], prediction: Prediction, notes: list[str]
) -> Prediction:
    """Ports missing: renormalise the prediction to what was measured."""
    reference = np.full(len(prediction.ports), np.nan)
    for one, entries in zip(data, chosen, strict=True):
        for e in entries:
            value = one.reference[e.measured - 1]
            if np.isfinite(reference[e.index]) and not np.isclose(reference[e.index], value, rtol=1e-6):
                raise InputError(
                    f"{prediction.port_label(e.index)} has the reference {value:g} ohm here and "
                    f"{reference[e.index]:g} ohm in another file.",
                    where=str(one.path),
                    allowed="one reference per port",
                )
            reference[e.index] = value
    missing = np.isnan(reference)
    if np.any(missing):
        known = np.unique(np.round(reference[~missing], 6)).astype(np.float64)
        if len(known) > 1:
            raise InputError(
                f"ports are missing, and those measured have different references ({_listed(known)} ohm), so that "
                "nobody knows how the missing ones were terminated.",
                where="measured files",
                allowed="equal references",
            )
        reference[missing] = known[0]
        notes.append(
            f"{np.count_nonzero(missing)} of {len(missing)} ports were not measured; they are taken as terminated in "
            f"{known[0]:g} ohm."
        )
    if not np.allclose(reference, prediction.reference, rtol=1e-6):
        notes.append(
            "Ports or coefficients are missing, so the prediction was renormalised from "
            f"{_listed(prediction.reference)} ohm to the measurement's {_listed(reference)} ohm; all reflections here "
            "refer to that."
        )
        return with_reference(prediction, reference)
    return prediction


def _listed(values: Floats) -> str:
    return ", ".join(f"{x:g}" for x in np.unique(np.round(values, 6)))


def _empty(scattering: Complexes) -> Booleans:
    """(n, n) coefficients that are exactly zero throughout: nobody measured them."""
    return np.all(scattering == 0, axis=0)


def _gather(
    data: list[TouchstoneData], chosen: list[tuple[MapEntry, ...]], prediction: Prediction, notes: list[str]
) -> tuple[Complexes, NDArray[np.int64], Floats, Floats]:
    """Sum, number and sum of squares of all values of each coefficient, and its mean delay."""
    n, f = len(prediction.ports), len(prediction.frequency)
    total, count = np.zeros((f, n, n), dtype=complex), np.zeros((f, n, n), dtype=np.int64)
    square, delay, made, zero = np.zeros((f, n, n)), np.full((n, n), np.nan), set(), 0
    for one, entries in zip(data, chosen, strict=True):
        rows, ports = np.array([e.index for e in entries]), np.array([e.measured - 1 for e in entries])
        block = one.scattering[:, ports[:, None], ports[None, :]]
        dead = _empty(block)
        zero += int(np.count_nonzero(dead))
        values, covered, interpolated = onto_grid(one.frequency, block, prediction.frequency)
        use = covered[:, None, None] & ~dead
        place = (slice(None), rows[:, None], rows[None, :])
        total[place] += np.where(use, values, 0)
        square[place] += np.where(use, np.abs(values) ** 2, 0)
        count[place] += use
        own = mean_delay(one.frequency, block.reshape(len(block), -1)).reshape(dead.shape)
        delay[place[1:]] = np.where(dead, delay[place[1:]], own)
        made |= set(np.flatnonzero(interpolated).tolist())
    if made:
        notes.append(
            f"At {len(made)} of {f} frequencies the measurement was interpolated between its own points (delay taken "
            "out, cubic spline)."
        )
    if zero:
        notes.append(f"{zero} coefficients are exactly zero at all frequencies and are taken as not measured.")
    return total, count, square, delay


def _spread(mean: Complexes, count: NDArray[np.int64], square: Floats, uncertainty: Uncertainty) -> float:
    """R.m.s. scatter of repeated values about their mean, over what the stated uncertainty lets expect."""
    often = count > 1
    if not np.any(often):
        return float("nan")
    scatter = np.maximum(square[often] - count[often] * np.abs(mean[often]) ** 2, 0)
    one, two = uncertainty.deviations(np.abs(mean[often]))
    return float(np.sqrt(np.sum(scatter) / np.sum((count[often] - 1) * (one**2 + two**2))))
