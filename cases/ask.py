"""Answers from the reduced model kept in a result file: any frequency of its band, any direction, in milliseconds."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ..geometry.errors import InputError
from ..solver.pattern import co_cross, decibel, respond
from ..solver.reduced import ReducedModel
from ..solver.reduced_sweep import reduced_sweep
from ..solver.result import ScanPoints, Sweep
from ..solver.sweep import wavenumber
from .judge import degrees
from .reduced_engine import drive_ratios
from .result import Result

Floats = NDArray[np.float64]
Place = tuple[float, float, float]


def ask(result: Result, frequency: ArrayLike, scan: ScanPoints) -> Sweep:
    """Active multiport solution at new frequencies and directions, from the result's reduced model.

    Parameters
    ----------
    result : of a run with the reduced solver
    frequency : (n_freq,) Hz, within the band of the case
    scan : ScanPoints of n_scan directions

    Returns
    -------
    Sweep, axes (frequency, scan, port, port_in); against a full solution on the same mesh the scattering matrices err
    by ``result.certificate.stated`` in their row sums of magnitudes, and active reflection as `active_error` says

    Raises
    ------
    InputError
        If the result has no reduced model, nothing is asked, or a frequency lies outside the model's band or a
        direction outside what it was certified for.
    """
    model = _model(result)
    asked = _within_band(model, np.atleast_1d(np.asarray(frequency, dtype=float)))
    _check_directions(result, scan)
    return reduced_sweep(model, asked, scan)


def active_error(result: Result) -> Floats:
    """(n_port,) error of the active reflection under the case's own drive; NaN at ports that are not driven.

    The certificate bounds the row sums of |dS|; ``Gamma_i = sum_j S_ij a_j / a_i`` errs by that times the largest drive
    over the port's own.
    """
    if result.certificate is None:
        return np.full(len(result.port_names), np.nan)
    return result.certificate.stated * drive_ratios([port.drive for port in result.job.cell.ports])


def _model(result: Result) -> ReducedModel:
    if result.stored is None:
        raise InputError(
            "this result holds no reduced model, so that nothing new can be asked of it.",
            where="result file",
            allowed='results of runs with [accuracy] solver = "reduced", the default',
            hint='Run the case again without solver = "direct".',
        )
    try:
        model = result.model
    except (KeyError, ValueError) as fault:
        raise InputError(
            f"the reduced model of this result cannot be used here: {fault}.",
            where="result file",
            hint="It may come from another version of the program; run the case again.",
        ) from None
    assert model is not None
    return model


def _within_band(model: ReducedModel, asked: Floats) -> Floats:
    """The frequencies (Hz), rounding at the ends of the band taken off."""
    if not len(asked):
        raise InputError("no frequency is asked for.", where="frequency", allowed="at least one")
    low, high = (k / wavenumber(1.0) for k in model.band)
    outside = asked[(asked < low * (1 - 1e-9)) | (asked > high * (1 + 1e-9)) | ~np.isfinite(asked)]
    if len(outside):
        band = f"{low / 1e9:.6g} to {high / 1e9:.6g} GHz" if high > low * (1 + 1e-9) else f"{low / 1e9:.6g} GHz alone"
        raise InputError(
            f"{outside[0] / 1e9:.6g} GHz lies outside the band the model was made for.",
            where="frequency",
            allowed=band,
            hint="Run the case with a wider [band].",
        )
    return np.clip(asked, low, high)


def _check_directions(result: Result, scan: ScanPoints) -> None:
    """Visible space is certified in every run, invisible space as far out as the case itself went."""
    radius, own = np.hypot(scan.u, scan.v), result.job.scan.points
    certified = max(1.0, float(np.hypot(own.u, own.v).max()))
    outside = ~(radius <= certified * (1 + 1e-9))
    if outside.any() or not len(scan):
        place = "no direction is asked for"
        if len(scan):
            first = int(np.argmax(outside))
            place = f"u = {scan.u[first]:.6g}, v = {scan.v[first]:.6g} lies outside what the model was certified for"
        raise InputError(f"{place}.", where="direction", allowed=f"sqrt(u^2 + v^2) up to {certified:.6g}")


def answers(result: Result, places: Sequence[Place], port: str | None = None) -> list[dict[str, Any]]:
    """One row per place (frequency in Hz, theta and phi in rad) and driven port, under the case's own drive.

    Keys: frequency, theta, phi, port, impedance (ohm), reflection, level (dB), gain_co, gain_cross (dBi), returned,
    radiated, lobes, absorbed (shares of the available power; absorbed by name), error.
    """
    ports = result.job.cell.ports
    names = [one.name for one in ports if one.drive != 0]
    if port is not None and port not in names:
        raise InputError(f"there is no driven port '{port}'.", where="--port", allowed=", ".join(names))
    rows: list[dict[str, Any]] = []
    for frequency, theta, phi in places:
        scan = ScanPoints.from_angles(np.array([theta]), np.array([phi]))
        rows += _rows(result, ask(result, frequency, scan), names if port is None else [port])
    return rows


def _rows(result: Result, sweep: Sweep, names: list[str]) -> Iterable[dict[str, Any]]:
    job = result.job
    response = respond(sweep, [one.drive for one in job.cell.ports], job.cell.lattice.area)
    co, cross = co_cross(response.field, sweep.scan.phi, job.co_polar, job.co_polar_angle)
    main = (response.orders == np.array([0, 0, 1])).all(axis=1)
    error = active_error(result)
    for p, one in enumerate(job.cell.ports):
        if one.name in names:
            gamma = complex(response.reflection[0, 0, p])
            with np.errstate(divide="ignore", invalid="ignore"):
                impedance = complex(one.resistance * np.divide(1 + gamma, 1 - gamma))
            yield {
                "frequency": float(sweep.frequency[0]),
                "theta": float(sweep.scan.theta[0]),
                "phi": float(sweep.scan.phi[0]),
                "port": one.name,
                "impedance": impedance,
                "reflection": gamma,
                "level": float(decibel(abs(gamma) ** 2)),
                "gain_co": float(decibel(np.abs(co[0, 0]) ** 2)),
                "gain_cross": float(decibel(np.abs(cross[0, 0]) ** 2)),
                "returned": float(response.reflected[0, 0]),
                "radiated": float(response.radiated[0, 0, main].sum()),
                "lobes": float(response.radiated[0, 0, ~main].sum()),
                "absorbed": dict(zip(sweep.loss_names, response.absorbed[0, 0].tolist(), strict=True)),
                "error": float(error[p]),
            }


def answer_text(row: dict[str, Any]) -> str:
    """One answer in words."""
    z, gamma = row["impedance"], row["reflection"]
    sign = "+" if z.imag >= 0 else "-"
    lost = "".join(f", {name} {100 * share:.2g} %" for name, share in row["absorbed"].items())
    cross = "none" if row["gain_cross"] < -100 else f"{row['gain_cross']:.2f} dBi"
    angles = f"theta {degrees(row['theta'])}, phi {degrees(row['phi'])}"
    return (
        f"{row['frequency'] / 1e9:.6g} GHz, {angles}, port {row['port']}\n"
        f"  active impedance   {z.real:.2f} {sign} j {abs(z.imag):.2f} ohm\n"
        f"  active reflection  {row['level']:.2f} dB, {abs(gamma):.5f} at {np.degrees(np.angle(gamma)):.2f} deg "
        f"(+/- {row['error']:.1e} against a full solution)\n"
        f"  realised gain      co {row['gain_co']:.2f} dBi, cross {cross}\n"
        f"  power              returned {100 * row['returned']:.2f} %, main wave {100 * row['radiated']:.2f} %, "
        f"lobes {100 * row['lobes']:.2f} %{lost}"
    )


def answer_table(rows: Sequence[dict[str, Any]]) -> list[list[object]]:
    """Header and rows for a CSV file; units are in the column names."""
    absorbers = list(rows[0]["absorbed"]) if rows else []
    header: list[object] = [
        "frequency_ghz", "theta_deg", "phi_deg", "port", "resistance_ohm", "reactance_ohm", "gamma_re", "gamma_im",
        "gamma_db", "gain_co_dbi", "gain_cross_dbi", "returned", "radiated", "lobes",
        *(f"absorbed_{name}" for name in absorbers), "error_gamma",
    ]  # fmt: skip
    table = [header]
    for row in rows:
        z, gamma = row["impedance"], row["reflection"]
        table.append([
            row["frequency"] / 1e9, np.degrees(row["theta"]), np.degrees(row["phi"]), row["port"], z.real, z.imag,
            gamma.real, gamma.imag, row["level"], row["gain_co"], row["gain_cross"], row["returned"], row["radiated"],
            row["lobes"], *row["absorbed"].values(), row["error"],
        ])  # fmt: skip
    return table
