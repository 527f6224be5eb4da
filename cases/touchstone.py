"""Touchstone files of the active scattering matrix: one version 1 file per scan point and an index.

Touchstone has no scan axis and, in version 1, one real reference resistance for all ports; what it cannot
represent is refused, never written approximately.
"""

from __future__ import annotations

import re
import warnings
from collections.abc import Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from ..geometry.errors import InputError
from .export import write_csv
from .result import Result

Complexes = NDArray[np.complex128]
Floats = NDArray[np.float64]
MOST_PORTS = 99


def write_touchstone(
    folder: Path, result: Result, scans: Sequence[int] | None = None, resistance: float | None = None
) -> tuple[Path, ...]:
    """Write one ``.sNp`` file per scan point and ``index.csv`` into `folder`.

    Parameters
    ----------
    scans : indices of scan points; default all
    resistance : ohm; renormalise every port to it. Needed when the ports' reference resistances differ.

    Raises
    ------
    InputError
        For unequal references without `resistance`, values that are not finite, or frequencies that do not
        rise.
    """
    reference = _reference(result.sweep.reference, resistance, result.port_names)
    frequency, ports = result.sweep.frequency, len(result.port_names)
    if ports > MOST_PORTS or not ports:
        raise InputError(f"a Touchstone file for {ports} ports cannot be named.", allowed=f"1 to {MOST_PORTS} ports")
    if np.any(np.diff(frequency) <= 0) or np.any(frequency < 0):
        raise InputError("Touchstone files need rising frequencies.", where="[band]")
    scattering = renormalise(result.sweep.scattering, result.sweep.reference, reference)
    folder = Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    files, rows = [], [("file", "scan", "theta_deg", "phi_deg", "u", "v")]
    scan = result.sweep.scan
    for s in range(len(scan)) if scans is None else scans:
        name = file_name(result.job.title, s, scan.theta[s], scan.phi[s], ports)
        _write_one(folder / name, frequency, scattering[:, s], reference, _comments(result, s))
        files.append(folder / name)
        rows.append((name, s, np.degrees(scan.theta[s]), np.degrees(scan.phi[s]), scan.u[s], scan.v[s]))  # type: ignore[arg-type]
    write_csv(folder / "index.csv", rows)
    return (*files, folder / "index.csv")


def renormalise(scattering: Complexes, old: Floats, new: float) -> Complexes:
    """Scattering (..., n, n) of power waves from real references `old` (n,) ohm to one real resistance `new`.

    With z = (1 - S)^-1 (1 + S) scaled by sqrt(old), written so that a matrix without impedance matrix (an
    open circuit, S = 1) needs no inverse of 1 - S: S' = F^-1 (S - G) (1 - G S)^-1 F, G = (new - old)/(new
    + old), F = sqrt(old new) 2 / (old + new) (K. Kurokawa, IEEE Trans. MTT 13, 194, 1965; form from
    memory, checked in the tests against the impedance matrix).
    """
    old = np.asarray(old, dtype=float)
    g = (new - old) / (new + old)
    f = 2 * np.sqrt(new * old) / (new + old)
    identity = np.eye(len(old))
    inner = (scattering - np.diag(g)) @ np.linalg.inv(identity - g[:, None] * scattering)
    return inner * f[None, :] / f[:, None]


def file_name(title: str, scan: int, theta: float, phi: float, ports: int) -> str:
    """Name that holds the scan point: ``title_scan0003_theta30.00_phi90.00.s2p``; plain ASCII."""
    stem = re.sub(r"[^A-Za-z0-9]+", "-", title).strip("-").lower()[:40] or "case"
    angle = f"{np.degrees(theta):.2f}" if np.isfinite(theta) else "invisible"
    return f"{stem}_scan{scan:04d}_theta{angle}_phi{np.degrees(phi) % 360:.2f}.s{ports}p"


def _reference(given: Floats, wanted: float | None, names: Sequence[str]) -> float:
    if wanted is not None:
        if not (np.isfinite(wanted) and wanted > 0):
            raise InputError(f"a reference resistance of {wanted} ohm makes no sense.", allowed="a positive number")
        return float(wanted)
    if len(given) and np.all(given == given[0]):
        return float(given[0])
    listed = ", ".join(f"{name}: {value:g} ohm" for name, value in zip(names, given, strict=True))
    raise InputError(
        f"a Touchstone 1 file has one reference resistance, but the ports have {listed}.",
        allowed="equal references, or one resistance to renormalise to (option --touchstone-reference)",
    )


def _comments(result: Result, s: int) -> str:
    scan = result.sweep.scan
    theta = f"{np.degrees(scan.theta[s]):.6g} deg" if np.isfinite(scan.theta[s]) else "invisible space"
    ports = ", ".join(f"{i + 1} = {name}" for i, name in enumerate(result.port_names))
    lines = (
        f"Scanward {result.provenance.versions.get('scanward', '')}: {result.job.title}",
        "active scattering matrix of one cell of an infinite array, power waves, exp(+j w t)",
        f"scan: theta {theta}, phi {np.degrees(scan.phi[s]):.6g} deg, u {scan.u[s]:.9g}, v {scan.v[s]:.9g}",
        f"ports: {ports}",
    )
    return "\n".join(line.encode("ascii", "replace").decode().replace("\n", " ") for line in lines)


def write_network(path: Path, frequency: Floats, scattering: Complexes, reference: Floats, comments: str) -> None:
    """One Touchstone file of a matrix (n_freq, n, n) of any number of ports, renormalised to the first reference where
    the references (n,) differ."""
    common = float(reference[0])
    _write_one(Path(path), frequency, renormalise(scattering, reference, common), common, comments)


def _write_one(path: Path, frequency: Floats, scattering: Complexes, reference: float, comments: str) -> None:
    if not np.all(np.isfinite(scattering)):
        raise InputError(f"'{path.name}' would hold values that are not finite.", hint="See the report.")
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        import skrf
    network = skrf.Network(f=frequency, f_unit="Hz", s=scattering, z0=reference, name=path.stem, comments=comments)
    network.write_touchstone(
        filename=path.name, dir=str(path.parent), form="ri", skrf_comment=False,
        format_spec_A="{:.12e}", format_spec_B="{:.12e}", format_spec_freq="{:.12e}",
    )  # fmt: skip
    if not path.exists():
        raise RuntimeError(f"the Touchstone writer did not make '{path}'")
