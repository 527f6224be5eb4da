"""What a measurement is compared with: the predicted finite array, its infinite array, and what may be off in it.

Plain arrays only: whoever predicts (a finite-array solver, a file, a test) fills these and nothing else is asked for.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from ..geometry.errors import InputError
from ..geometry.lattice import Lattice

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]


@dataclass(frozen=True)
class InfinitePrediction:
    """The infinite array beside the finite one.

    Parameters
    ----------
    directions : (n_scan, 2) scan directions u, v
    scattering : (n_freq, n_scan, p, p) active scattering matrix of one cell, same frequencies and references as the
        finite array; port order that of `ports`
    ports : names of the p ports of one cell
    lags : (n_lag, 2) integer cells m - n; empty when the coupling is not given
    coupling : (n_freq, n_lag, p, p) coupling into cell m from cell n at that lag
    """

    directions: Floats
    scattering: Complexes
    ports: tuple[str, ...]
    lags: Ints = field(default_factory=lambda: np.zeros((0, 2), dtype=np.int64))
    coupling: Complexes | None = None


@dataclass(frozen=True)
class Sensitivity:
    """How the scattering matrix moves with one parameter the designer names.

    Parameters
    ----------
    name, unit : as they shall be shown, e.g. "permittivity" and "", "arm" and "mm"
    nominal : value in `unit` the prediction was made with
    tolerance : how far the parameter may be off, in `unit`, > 0
    derivative : (n_freq, n, n) dS/dp, per `unit`
    """

    name: str
    unit: str
    nominal: float
    tolerance: float
    derivative: Complexes


@dataclass(frozen=True)
class CutPattern:
    """Predicted embedded pattern of one element in one cut.

    Parameters
    ----------
    frequency : Hz
    cell : column along a, row along b
    port : name
    phi : cut plane, rad; `theta` (n,) rising, rad, negative towards phi + pi
    co, cross : (n,) dBi in the finite array
    infinite_co, infinite_cross : the same in the infinite array, or None
    """

    frequency: float
    cell: tuple[int, int]
    port: str
    phi: float
    theta: Floats
    co: Floats
    cross: Floats
    infinite_co: Floats | None = None
    infinite_cross: Floats | None = None


@dataclass(frozen=True)
class Prediction:
    """Predicted scattering matrix of a finite array, ready to be compared.

    Parameters
    ----------
    frequency : (n_freq,) rising, Hz
    cells : (n, 2) integer cell of each port: column along lattice vector a, row along b
    ports : name of each of the n ports (the same names in every cell)
    scattering : (n_freq, n, n) power waves
    reference : (n,) real reference resistances, ohm
    lattice : Lattice
    error : r.m.s. error of each coefficient the predictor estimates for itself (absolute)
    drive : (n,) excitation of each port at broadside; zero where a port is terminated. Default: all 1
    infinite, sensitivities, patterns : see there
    title : of the case

    Raises
    ------
    InputError
        If shapes do not fit together, values are not finite, or two ports share cell and name.
    """

    frequency: Floats
    cells: Ints
    ports: tuple[str, ...]
    scattering: Complexes
    reference: Floats
    lattice: Lattice
    error: float = 0.0
    drive: Complexes | None = None
    infinite: InfinitePrediction | None = None
    sensitivities: tuple[Sensitivity, ...] = ()
    patterns: tuple[CutPattern, ...] = ()
    title: str = ""

    def __post_init__(self) -> None:
        n, f = len(self.ports), len(self.frequency)
        shapes = {
            "cells": (np.shape(self.cells), (n, 2)),
            "scattering": (np.shape(self.scattering), (f, n, n)),
            "reference": (np.shape(self.reference), (n,)),
        }
        shapes |= {f"sensitivity '{s.name}'": (np.shape(s.derivative), (f, n, n)) for s in self.sensitivities}
        if self.infinite is not None:
            p, d = len(self.infinite.ports), len(self.infinite.directions)
            shapes["infinite array"] = (np.shape(self.infinite.scattering), (f, d, p, p))
        for name, (given, wanted) in shapes.items():
            if given != wanted:
                raise InputError(f"{name} has shape {given}.", where="prediction", allowed=f"{wanted}")
        if not f or np.any(np.diff(self.frequency) <= 0):
            raise InputError("frequencies do not rise.", where="prediction")
        if not np.all(np.isfinite(self.scattering)) or not np.all(self.reference > 0):
            raise InputError("values are not finite, or a reference resistance is not positive.", where="prediction")
        if len(self.index) != n:
            raise InputError("two ports share cell and name.", where="prediction")

    @classmethod
    def of_sites(cls, sites: Ints, port_names: Sequence[str], **rest: object) -> Prediction:
        """From (n_site, 2) cells that all have the ports `port_names`; port order: site by site."""
        cells = np.repeat(np.asarray(sites, dtype=np.int64), len(port_names), axis=0)
        return cls(cells=cells, ports=tuple(port_names) * len(sites), **rest)  # type: ignore[arg-type]

    @property
    def index(self) -> dict[tuple[int, int, str], int]:
        """Position of each port by (column, row, name)."""
        return {(int(c), int(r), name): i for i, ((c, r), name) in enumerate(zip(self.cells, self.ports, strict=True))}

    @property
    def positions(self) -> Floats:
        """(n, 2) metres."""
        return self.lattice.positions(self.cells)

    @property
    def excitation(self) -> Complexes:
        """(n,) `drive`, or all 1."""
        return np.ones(len(self.ports), dtype=complex) if self.drive is None else np.asarray(self.drive, dtype=complex)

    @property
    def centre(self) -> int:
        """The driven port nearest to the middle of the array."""
        away = np.linalg.norm(self.positions - self.positions.mean(axis=0), axis=1)
        return int(np.argmin(np.where(self.excitation != 0, np.round(away, 9), np.inf)))

    @property
    def depth(self) -> Ints:
        """(n,) how many rings of elements lie outside each port's element: 0 at the edge."""
        left = {(int(c), int(r)) for c, r in self.cells}
        ring, depth = 0, {}
        while left:
            edge = {
                (c, r) for c, r in left if not {(c + 1, r), (c - 1, r), (c, r + 1), (c, r - 1)} <= left
            }  # a finite set always has an edge
            depth |= dict.fromkeys(edge, ring)
            left, ring = left - edge, ring + 1
        return np.array([depth[int(c), int(r)] for c, r in self.cells], dtype=np.int64)

    def port_label(self, i: int) -> str:
        """Such as "row 3, column 4", with the port's name where cells have several."""
        column, row = self.cells[i]
        several = len(set(self.ports)) > 1
        return f"row {row}, column {column}" + (f", port {self.ports[i]}" if several else "")

    def at(self, rows: Ints) -> Prediction:
        """Only the frequencies with the indices `rows`."""
        infinite = self.infinite
        if infinite is not None:
            coupling = None if infinite.coupling is None else infinite.coupling[rows]
            infinite = replace(infinite, scattering=infinite.scattering[rows], coupling=coupling)
        slopes = tuple(replace(s, derivative=s.derivative[rows]) for s in self.sensitivities)
        return replace(
            self,
            frequency=self.frequency[rows],
            scattering=self.scattering[rows],
            infinite=infinite,
            sensitivities=slopes,
        )

    def infinite_coupling(self) -> Complexes | None:
        """(n_freq, n, n) coupling the infinite array would have between the same ports, nan at lags not given."""
        if self.infinite is None or self.infinite.coupling is None:
            return None
        names = {name: i for i, name in enumerate(self.infinite.ports)}
        which = {(int(a), int(b)): i for i, (a, b) in enumerate(self.infinite.lags)}
        lags = self.cells[:, None, :] - self.cells[None, :, :]
        rows = np.array([[which.get((int(x), int(y)), -1) for x, y in line] for line in lags])
        own = np.array([names[name] for name in self.ports])
        found = self.infinite.coupling[:, rows, own[:, None], own[None, :]]
        return np.where(rows >= 0, found, np.nan)


def change_reference(scattering: Complexes, old: Floats, new: Floats) -> Complexes:
    """Scattering (..., n, n) of power waves from real references `old` (n,) to `new` (n,), ohm.

    S' = F^-1 (S - G) (1 - G S)^-1 F, G = (new - old) / (new + old), F = 2 sqrt(old new) / (old + new)
    (K. Kurokawa, IEEE Trans. MTT 13, 194, 1965; form from memory, checked in the tests against impedance matrices).
    """
    g, f, _ = _steps(old, new)
    inner = (scattering - np.diag(g)) @ np.linalg.inv(np.eye(len(g)) - g[:, None] * scattering)
    return inner * f[None, :] / f[:, None]


def change_reference_slope(scattering: Complexes, derivative: Complexes, old: Floats, new: Floats) -> Complexes:
    """Derivative of `change_reference` along dS = `derivative`: F^-1 [1 + (S - G) X G] dS X F, X = (1 - G S)^-1."""
    g, f, identity = _steps(old, new)
    x = np.linalg.inv(identity - g[:, None] * scattering)
    inner = (identity + (scattering - np.diag(g)) @ x * g[None, :]) @ derivative @ x
    return inner * f[None, :] / f[:, None]


def _steps(old: Floats, new: Floats) -> tuple[Floats, Floats, Floats]:
    old, new = np.asarray(old, dtype=float), np.asarray(new, dtype=float)
    return (new - old) / (new + old), 2 * np.sqrt(new * old) / (new + old), np.eye(len(old))


def with_reference(prediction: Prediction, reference: Floats) -> Prediction:
    """The same prediction for other reference resistances (n,), ohm, all the same in every cell.

    The infinite array follows if each port name has one reference; its coupling is dropped, since a change of all
    terminations mixes all lags, those that are not given too.
    """
    reference = np.asarray(reference, dtype=float)
    if np.allclose(reference, prediction.reference, rtol=1e-9):
        return prediction
    old = prediction.reference
    slopes = tuple(
        replace(s, derivative=change_reference_slope(prediction.scattering, s.derivative, old, reference))
        for s in prediction.sensitivities
    )
    infinite = prediction.infinite
    if infinite is not None:
        before, after = _by_name(prediction, old), _by_name(prediction, reference)
        cell_old, cell_new = (np.array([one[name] for name in infinite.ports]) for one in (before, after))
        infinite = replace(
            infinite, scattering=change_reference(infinite.scattering, cell_old, cell_new), coupling=None
        )
    return replace(
        prediction,
        scattering=change_reference(prediction.scattering, old, reference),
        reference=reference,
        sensitivities=slopes,
        infinite=infinite,
    )


def _by_name(prediction: Prediction, reference: Floats) -> dict[str, float]:
    found: dict[str, float] = {}
    for name, value in zip(prediction.ports, reference, strict=True):
        if not np.isclose(found.setdefault(name, float(value)), value, rtol=1e-9):
            raise InputError(
                f"port '{name}' has the reference resistances {found[name]:g} and {value:g} ohm in different cells.",
                where="measured data",
                allowed="one reference per port name, where an infinite array is compared",
            )
    return found
