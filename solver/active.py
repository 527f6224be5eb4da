"""The reduced model under one drive: active reflection and main wave at many directions of one frequency."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .pattern import ideal_gain
from .reduced import ReducedModel
from .reduced_waves import wave_amplitudes
from .result import FloquetWaves, ScanPoints
from .sweep import wavenumber

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

MAIN_WAVE = FloquetWaves(np.zeros((2, 2), dtype=np.int64), np.array([1, 1]), np.array([0, 1]))


class ActiveModel:
    """Answers of a reduced model under the incident power waves `drive`.

    Parameters
    ----------
    model : ReducedModel
    drive : (n_port,) incident power waves, at least one not zero

    Attributes
    ----------
    driven : indices of the driven ports
    share : (n_port,) share of the available power that goes to each port
    """

    def __init__(self, model: ReducedModel, drive: ArrayLike):
        self.model, self.drive = model, np.asarray(drive, dtype=complex)
        power = np.abs(self.drive) ** 2
        if self.drive.shape != model.reference.shape or not power.sum() > 0:
            raise ValueError(f"drive {self.drive} does not drive any of {len(model.reference)} ports")
        self.driven, self.share = np.flatnonzero(self.drive), power / power.sum()

    @property
    def band(self) -> tuple[float, float]:
        """Lowest and highest frequency, Hz."""
        low, high = (k / wavenumber(1.0) for k in self.model.band)
        return low, high

    def reflection(self, frequency: float, uv: Floats) -> Complexes:
        """Active reflection (n, n_port) at direction cosines (n, 2); NaN at ports that are not driven."""
        k, uv = wavenumber(frequency), np.asarray(uv, dtype=float)
        if not len(uv):
            return np.zeros((0, len(self.drive)), dtype=complex)
        return self._active(self.model.solve(k, k * uv).scattering)

    def power(self, frequency: float, uv: Floats) -> Floats:
        """Share of its own available power that comes back into each driven port, (n, n_driven)."""
        return np.abs(self.reflection(frequency, uv)[:, self.driven]) ** 2

    def reflection_and_field(self, frequency: float, uv: Floats) -> tuple[Complexes, Complexes]:
        """Active reflection (n, n_port), and theta and phi parts (n, 2) of the upward main wave with |field|^2 the
        realised gain of the cell (as `pattern.Response.field`)."""
        k, uv = wavenumber(frequency), np.asarray(uv, dtype=float)
        scan = ScanPoints.from_cosines(uv[:, 0], uv[:, 1])
        reflection = np.empty((len(uv), len(self.drive)), dtype=complex)
        field = np.empty((len(uv), 2), dtype=complex)
        for batch in self.model.batches(k, k * uv):
            reflection[batch.index] = self._active(batch.answer.scattering)
            field[batch.index] = wave_amplitudes(self.model, batch, k, scan.phi[batch.index], MAIN_WAVE) @ self.drive
        ceiling = ideal_gain(self.model.cell.lattice.area, frequency, scan)[0]
        available = float(np.sum(np.abs(self.drive) ** 2))
        return reflection, field * np.sqrt(ceiling / available)[:, None]

    def _active(self, scattering: Complexes) -> Complexes:
        b = scattering @ self.drive
        return np.divide(b, self.drive, out=np.full(b.shape, complex(np.nan, np.nan)), where=self.drive != 0)
