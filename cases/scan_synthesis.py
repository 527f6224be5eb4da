"""Active reflection over scan, summed from coupling coefficients, with what uncertainty and gaps do to it.

Gamma_m(u, v) = sum_n S_mn (d_n / d_m) exp(-j k (rho_n - rho_m) . (u, v))       d: the drive of each port at broadside

(every element of the array excited alike, phased to (u, v)).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .prediction import Prediction
from .uncertainty import Uncertainty

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Booleans = NDArray[np.bool_]
LIGHT_SPEED = 299792458.0


@dataclass(frozen=True)
class ScanReflection:
    """Active reflection of one port over scan; axes (frequency, direction).

    Parameters
    ----------
    port : index of the port
    directions : (n_dir, 2) u, v
    measured : from the measured coefficients; nan at frequencies where none was
    same : predicted, summed over the very coefficients that were measured
    finite : predicted, of the whole finite array
    infinite : predicted, of the infinite array; nan where not given
    covariance : (n_freq, n_dir, 2, 2) of the real and imaginary part of `measured` (prediction's own error included)
    bound : (n_freq,) what the coefficients not measured may add at most: the sum of their predicted magnitudes
    missing : (n_freq, n) driven ports whose coefficient was not measured
    by_reciprocity : whether S_nm had to stand in for S_mn
    """

    port: int
    directions: Floats
    measured: Complexes
    same: Complexes
    finite: Complexes
    infinite: Complexes
    covariance: Floats
    bound: Floats
    missing: Booleans
    by_reciprocity: bool


def pick_port(measured: Complexes, prediction: Prediction) -> int:
    """The driven port nearest to the middle for which nearly as many coefficients were measured as for any."""
    known = np.isfinite(measured)
    count = np.maximum(known.sum(axis=(0, 2)), known.sum(axis=(0, 1))).astype(float)
    count[prediction.excitation == 0] = -1
    away = np.linalg.norm(prediction.positions - prediction.positions[prediction.centre], axis=1)
    return int(np.argmin(np.where(count >= 0.8 * count.max(), np.round(away, 9), np.inf)))


def synthesise(
    measured: Complexes,
    prediction: Prediction,
    uncertainty: Uncertainty,
    directions: Floats,
    port: int | None = None,
    gain: Complexes | None = None,
) -> ScanReflection:
    """Active reflection of `port` (default: `pick_port`) at directions (n_dir, 2) u, v, measured beside predicted.

    `gain` (n_freq, n): what cables did to a wave at each port before they were taken out of `measured`; noise and
    uncertainty then belong to the weaker, original values.
    """
    m = pick_port(measured, prediction) if port is None else port
    row, column = measured[:, m, :], measured[:, :, m]
    turned = bool(np.isfinite(column).sum() > np.isfinite(row).sum())
    line = column if turned else row
    predicted = prediction.scattering[:, :, m] if turned else prediction.scattering[:, m, :]
    drive = prediction.excitation / prediction.excitation[m]
    k = 2 * np.pi * prediction.frequency / LIGHT_SPEED
    path = (prediction.positions - prediction.positions[m]) @ np.asarray(directions).T  # (n, n_dir)
    phase = np.exp(-1j * k[:, None, None] * path) * drive[:, None]
    known = np.isfinite(line)
    missing = ~known & (drive != 0)
    covered = np.any(known, axis=1)
    faded = np.ones(line.shape) if gain is None else np.abs(gain[:, m : m + 1] * gain)
    total = np.einsum("fn,fnd->fd", np.where(known, line, 0), phase)
    return ScanReflection(
        m,
        np.asarray(directions),
        np.where(covered[:, None], total, np.nan),
        np.einsum("fn,fnd->fd", np.where(known, predicted, 0), phase),
        np.einsum("fn,fnd->fd", predicted, phase),
        _infinite(prediction, np.asarray(directions), m),
        _covariance(np.where(known, predicted, np.nan), phase, uncertainty, prediction.error, faded),
        np.sum(np.where(missing, np.abs(predicted * drive), 0), axis=1),
        missing,
        turned,
    )


def _covariance(line: Complexes, phase: Complexes, uncertainty: Uncertainty, error: float, faded: Floats) -> Floats:
    """Covariance of the sum of (n_freq, n) phasors with independent errors along and across each, turned by `phase`;
    `faded` (n_freq, n): magnitude the measurement saw over that of `line`."""
    known = np.isfinite(line)
    size = np.abs(np.where(known, line, 0))
    along, across = (sigma / faded for sigma in uncertainty.deviations(size * faded, error))
    unit = np.where(size > 0, np.where(known, line, 0) / np.where(size > 0, size, 1), 1)
    power = np.abs(phase) ** 2
    circular = np.einsum("fn,fnd->fd", np.where(known, along**2 + across**2, 0), power)
    skew = np.einsum("fn,fnd->fd", np.where(known, (along**2 - across**2) * unit**2, 0), phase**2)
    result = np.empty((*circular.shape, 2, 2))
    result[..., 0, 0] = (circular + skew.real) / 2
    result[..., 1, 1] = (circular - skew.real) / 2
    result[..., 0, 1] = result[..., 1, 0] = skew.imag / 2
    return result


def _infinite(prediction: Prediction, directions: Floats, m: int) -> Complexes:
    """Active reflection of the same port in the infinite array at the directions it is given for, else nan."""
    found = np.full((len(prediction.frequency), len(directions)), np.nan, dtype=complex)
    infinite = prediction.infinite
    if infinite is None or not len(infinite.directions) or prediction.ports[m] not in infinite.ports:
        return found
    by_name = dict(zip(prediction.ports, prediction.excitation, strict=True))
    drive = np.array([by_name.get(name, 0) for name in infinite.ports]) / prediction.excitation[m]
    own = infinite.ports.index(prediction.ports[m])
    active = np.einsum("fdp,p->fd", infinite.scattering[:, :, own, :], drive)
    away = np.linalg.norm(directions[:, None, :] - infinite.directions[None, :, :], axis=-1)
    near = np.argmin(away, axis=1)
    same = away[np.arange(len(directions)), near] < 1e-6
    found[:, same] = active[:, near[same]]
    return found


def mahalanobis(difference: Complexes, covariance: Floats) -> Floats:
    """d^2 = x^T C^-1 x of complex differences (...), with covariance (..., 2, 2) of real and imaginary part."""
    a, b, c = covariance[..., 0, 0], covariance[..., 0, 1], covariance[..., 1, 1]
    x, y = difference.real, difference.imag
    return (c * x**2 - 2 * b * x * y + a * y**2) / np.maximum(a * c - b**2, 1e-300)


def reach95(covariance: Floats) -> Floats:
    """Radius (...) within which the true value lies with 95 % probability: sqrt(5.99 x largest variance)."""
    a, b, c = covariance[..., 0, 0], covariance[..., 0, 1], covariance[..., 1, 1]
    largest = (a + c) / 2 + np.sqrt(((a - c) / 2) ** 2 + b**2)
    return np.sqrt(5.991 * largest)
