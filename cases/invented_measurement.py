"""An INVENTED measurement made from a predicted scattering matrix, to try the comparison on and to test it.

Every file it writes says in its first line that it is invented. The caller states what is planted, so that a test can
hold what the comparison finds against it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from .bench_fit import port_gain
from .prediction import Prediction
from .uncertainty import Uncertainty

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
MARK = "INVENTED measurement: made by a program for trials and tests, nobody measured this"


@dataclass(frozen=True)
class Plant:
    """What is wrong with an invented measurement.

    Parameters
    ----------
    moves : change of named parameters, in their units, by the prediction's sensitivities
    scattering : (n_freq, n, n) to start from instead of the prediction's own (then `moves` are ignored)
    delay : (n,) s; loss : (n,) dB; of the cable at each port
    swapped : pairs of ports whose cables were exchanged
    row : port that alone was driven, for one row; None for the full matrix
    seed : of the noise
    """

    moves: Mapping[str, float] = field(default_factory=dict)
    scattering: Complexes | None = None
    delay: Floats | None = None
    loss: Floats | None = None
    swapped: tuple[tuple[int, int], ...] = ()
    row: int | None = None
    seed: int = 1


def invent(prediction: Prediction, uncertainty: Uncertainty, plant: Plant) -> Complexes:
    """(n_freq, n, n) invented coefficients; not measured ones are zero, as analysers write them."""
    n, s = len(prediction.ports), prediction.scattering
    if plant.scattering is not None:
        s = plant.scattering
    else:
        known = {one.name: one for one in prediction.sensitivities}
        s = s + sum(move * known[name].derivative for name, move in plant.moves.items())
    delay = np.zeros(n) if plant.delay is None else plant.delay
    loss = np.zeros(n) if plant.loss is None else plant.loss
    g = port_gain(prediction.frequency, delay, loss)
    s = disturb(s * g[:, :, None] * g[:, None, :], uncertainty, plant.seed)
    order = np.arange(n)
    for i, j in plant.swapped:
        order[[i, j]] = order[[j, i]]
    s = s[:, order[:, None], order[None, :]]
    if plant.row is not None:
        kept = np.zeros_like(s)
        kept[:, plant.row, :] = s[:, plant.row, :]
        s = kept
    return s


def disturb(scattering: Complexes, uncertainty: Uncertainty, seed: int) -> Complexes:
    """Independent Gaussian errors along and across each phasor, as the stated uncertainty says."""
    random = np.random.default_rng(seed)
    size = np.abs(scattering)
    along, across = uncertainty.deviations(size)
    unit = np.where(size > 0, scattering / np.where(size > 0, size, 1), 1)
    error = along * random.standard_normal(size.shape) + 1j * across * random.standard_normal(size.shape)
    return scattering + unit * error


def write_invented(
    folder: Path, prediction: Prediction, uncertainty: Uncertainty, plant: Plant, version: int = 1
) -> tuple[tuple[Path, ...], Path]:
    """Write the invented coefficients as one Touchstone file and its map; (files, map)."""
    folder = Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    n = len(prediction.ports)
    file = folder / f"invented.s{n}p"
    s = invent(prediction, uncertainty, plant)
    write_matrix(file, prediction.frequency, s, prediction.reference, version)
    port_map = folder / "invented-map.csv"
    rows = [
        f"{i + 1},{r},{c},{name}"
        for i, ((c, r), name) in enumerate(zip(prediction.cells, prediction.ports, strict=True))
    ]
    port_map.write_text("\n".join([f"# {MARK}", "measured port,row,column,port", *rows]) + "\n", encoding="ascii")
    return (file,), port_map


def write_pairs(
    folder: Path, prediction: Prediction, uncertainty: Uncertainty, plant: Plant, driven: int
) -> tuple[tuple[Path, ...], Path]:
    """Write one two-port file for the driven element (its port 1) against each other one, and their map."""
    folder = Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    s = invent(prediction, uncertainty, plant)
    files, rows = [], [f"# {MARK}", "file,measured port,row,column,port"]
    for other in range(len(prediction.ports)):
        if other == driven:
            continue
        pair = np.array([driven, other])
        file = folder / f"invented-{driven + 1:03d}-{other + 1:03d}.s2p"
        block = s[:, pair[:, None], pair[None, :]]
        write_matrix(file, prediction.frequency, block, prediction.reference[pair], 1)
        files.append(file)
        for k, index in enumerate(pair):
            column, row = prediction.cells[index]
            rows.append(f"{file.name},{k + 1},{row},{column},{prediction.ports[index]}")
    port_map = folder / "invented-map.csv"
    port_map.write_text("\n".join(rows) + "\n", encoding="ascii")
    return tuple(files), port_map


def write_matrix(path: Path, frequency: Floats, s: Complexes, reference: Floats, version: int) -> None:
    """A Touchstone file of version 1 (one reference) or 2, four pairs to a line, marked INVENTED."""
    n, head = s.shape[1], [f"! {MARK}"]
    if version == 1:
        if not np.allclose(reference, reference[0]):
            raise ValueError("version 1 knows one reference resistance only")
        head.append(f"# Hz S RI R {float(reference[0])!r}")
    else:
        head += ["[Version] 2.0", "# Hz S RI R 50", f"[Number of Ports] {n}"]
        if n == 2:
            head.append("[Two-Port Data Order] 12_21")
        listed = " ".join(repr(float(r)) for r in reference)
        head += [f"[Number of Frequencies] {len(frequency)}", f"[Reference] {listed}", "[Network Data]"]
    lines = head
    for f, matrix in zip(frequency, s, strict=True):
        if n == 2 and version == 1:
            matrix = matrix.T
        rows = [matrix.reshape(-1)] if n == 2 else list(matrix)
        first = True
        for row in rows:
            for start in range(0, len(row), 4):
                pairs = " ".join(f"{x.real:.9e} {x.imag:.9e}" for x in row[start : start + 4])
                lines.append(f"{f:.9e} {pairs}" if first else f"  {pairs}")
                first = False
    if version != 1:
        lines.append("[End]")
    path.write_text("\n".join(lines) + "\n", encoding="ascii")


def write_invented_pattern(
    path: Path, prediction: Prediction, level: float, stray: float, seed: int = 1, turn: float = 0.0, gain: float = 0.0
) -> Path:
    """Write the prediction's cuts as measured ones: `level` dB of scatter, `stray` dB of stray field, turned by
    `turn` rad, `gain` dB off, in dBi."""
    random = np.random.default_rng(seed)
    lines = [f"# {MARK}", "frequency (GHz),row,column,port,cut (deg),angle (deg),co (dBi),cross (dBi)"]
    for p in prediction.patterns:
        for theta in p.theta[::2]:
            levels = []
            for values in (p.co, p.cross):
                here = np.interp(theta - turn, p.theta, values) + gain
                field = 10 ** ((here - p.co.max()) / 20)
                noise = 10 ** (stray / 20) / np.sqrt(2) * complex(*random.standard_normal(2))
                levels.append(20 * np.log10(abs(field + noise)) + p.co.max() + level * random.standard_normal())
            place = f"{p.frequency / 1e9:.9g},{p.cell[1]},{p.cell[0]},{p.port}"
            angles = f"{np.degrees(p.phi):.6g},{np.degrees(theta):.6g}"
            lines.append(f"{place},{angles},{levels[0]:.3f},{levels[1]:.3f}")
    path = Path(path)
    path.write_text("\n".join(lines) + "\n", encoding="ascii")
    return path
