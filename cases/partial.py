"""Finished frequencies on disk, so that an interrupted run loses at most the frequency it was at."""

from __future__ import annotations

import hashlib
import os
import zipfile
from dataclasses import fields
from pathlib import Path

import numpy as np

from .. import __version__
from ..solver.result import FloquetWaves, ScanPoints, Sweep
from ..solver.snapshots import Snapshots
from .job import Job

CODE_FOLDERS = ("geometry", "solver")


def fingerprint(job: Job) -> str:
    """Hash of all that decides the numbers: resolved case, mesh, stack, scan, tolerance, the program's own code."""
    digest = hashlib.sha256(f"{__version__}\n{job.tolerance!r}\n{job.text}\n{job.tolerances!r}\n".encode())
    mesh, stack, scan = job.cell.mesh, job.cell.stack, job.scan.points
    digest.update(repr((job.cell.ground, None if stack is None else (stack.layers, stack.sheets))).encode())
    for array in (mesh.points, mesh.triangles, mesh.segments, mesh.segment_radius, scan.u, scan.v, scan.phi):
        digest.update(np.ascontiguousarray(array).tobytes())
    for file in _code_files():
        digest.update(file.read_bytes())
    return digest.hexdigest()[:16]


def _code_files() -> list[Path]:
    root = Path(__file__).resolve().parent.parent
    return sorted(file for folder in CODE_FOLDERS for file in (root / folder).glob("*.py"))


class PartialRun:
    """Single-frequency sweeps kept as ``<folder>/<fingerprint>-<index>.npz`` until the run is complete."""

    def __init__(self, folder: Path, job: Job):
        self.folder, self.key = Path(folder), fingerprint(job)

    def path(self, index: int) -> Path:
        return self.folder / f"{self.key}-{index:04d}.npz"

    def save(self, index: int, sweep: Sweep) -> None:
        """Keep the sweep of frequency `index`; complete or not there."""
        self._write(self.path(index), _arrays(sweep))

    def _write(self, path: Path, arrays: dict[str, np.ndarray]) -> None:
        self.folder.mkdir(parents=True, exist_ok=True)
        temporary = self.folder / f".{path.stem}-{os.getpid()}.part"
        try:
            with temporary.open("wb") as stream:
                np.savez(stream, allow_pickle=False, **arrays)
            os.replace(temporary, path)
        finally:
            temporary.unlink(missing_ok=True)

    def load(self, index: int) -> Sweep | None:
        """The kept sweep, or None if there is none that can be read."""
        try:
            with np.load(self.path(index), allow_pickle=False) as stored:
                return _sweep(dict(stored))
        except (OSError, ValueError, KeyError, EOFError, zipfile.BadZipFile):
            return None

    def save_snapshots(self, snapshots: Snapshots) -> None:
        """Keep the snapshots of a reduced model; complete or not there."""
        self._write(self.folder / f"{self.key}-snapshots.npz", snapshots.arrays())

    def load_snapshots(self) -> Snapshots | None:
        """The kept snapshots of this very case, or None."""
        try:
            with np.load(self.folder / f"{self.key}-snapshots.npz", allow_pickle=False) as stored:
                return Snapshots.from_arrays(dict(stored))
        except (OSError, ValueError, KeyError, EOFError, zipfile.BadZipFile):
            return None

    def count(self) -> int:
        """Number of kept frequencies of this very case."""
        return len(list(self.folder.glob(f"{self.key}-[0-9][0-9][0-9][0-9].npz")))

    def clear(self) -> None:
        """Remove the kept frequencies of this case, and of older versions of it, and the folder if then
        empty."""
        if not self.folder.is_dir():
            return
        for pattern in ("*-[0-9][0-9][0-9][0-9].npz", "*-snapshots.npz"):
            for file in self.folder.glob(pattern):
                file.unlink(missing_ok=True)
        if not any(self.folder.iterdir()):
            self.folder.rmdir()


def join_frequencies(parts: list[Sweep]) -> Sweep:
    """One sweep from sweeps over the same scan, in the given order; wave tables are united."""
    table = _united(parts)
    keys = [tuple(key) for key in _wave_keys(table)]
    waves = []
    for part in parts:
        place = [keys.index(tuple(key)) for key in _wave_keys(part.wave_table)]
        wide = np.zeros((*part.waves.shape[:2], len(keys), part.waves.shape[-1]), dtype=complex)
        wide[:, :, place] = part.waves
        waves.append(wide)
    first = parts[0]

    def stack(name: str) -> np.ndarray:
        return np.concatenate([getattr(part, name) for part in parts])

    kept = all(part.currents is not None for part in parts)
    return Sweep(
        frequency=stack("frequency"),
        scan=first.scan,
        reference=first.reference,
        impedance=stack("impedance"),
        scattering=stack("scattering"),
        waves=np.concatenate(waves),
        wave_table=table,
        loss=stack("loss"),
        loss_names=first.loss_names,
        residual=stack("residual"),
        currents=stack("currents") if kept else None,
        notes=tuple(dict.fromkeys(note for part in parts for note in part.notes)),
    )


def _wave_keys(table: FloquetWaves) -> np.ndarray:
    return np.column_stack([table.order, table.side, table.polarisation])


def _united(parts: list[Sweep]) -> FloquetWaves:
    rows = dict.fromkeys(tuple(key) for part in parts for key in _wave_keys(part.wave_table).tolist())
    keys = np.array(list(rows), dtype=np.int64).reshape(-1, 4)
    return FloquetWaves(keys[:, :2], keys[:, 2], keys[:, 3])


def _arrays(sweep: Sweep) -> dict[str, np.ndarray]:
    arrays = {
        item.name: getattr(sweep, item.name)
        for item in fields(Sweep)
        if item.name not in ("scan", "wave_table", "loss_names", "notes", "currents")
    }
    arrays |= {
        "u": sweep.scan.u,
        "v": sweep.scan.v,
        "phi": sweep.scan.phi,
        "keys": _wave_keys(sweep.wave_table),
    }
    arrays |= {"loss_names": np.array(sweep.loss_names, dtype=str), "notes": np.array(sweep.notes, dtype=str)}
    return arrays if sweep.currents is None else {**arrays, "currents": sweep.currents}


def _sweep(arrays: dict[str, np.ndarray]) -> Sweep:
    keys = arrays.pop("keys")
    scan = ScanPoints(arrays.pop("u"), arrays.pop("v"), arrays.pop("phi"))
    names, notes = (tuple(str(text) for text in arrays.pop(name)) for name in ("loss_names", "notes"))
    table = FloquetWaves(keys[:, :2], keys[:, 2], keys[:, 3])
    return Sweep(scan=scan, wave_table=table, loss_names=names, notes=notes, **arrays)
