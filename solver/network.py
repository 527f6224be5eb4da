"""Ports: from the admittance of the gaps to power waves (Kurokawa, IEEE MTT 13, 194, 1965; real references)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]


@dataclass(frozen=True)
class PortResponse:
    """Impedance and scattering matrices (n_port, n_port) and the gap voltages (n_port, n_port_in) per unit wave."""

    impedance: Complexes
    scattering: Complexes
    voltage: Complexes


def port_response(admittance: Complexes, reference: Floats) -> PortResponse:
    """Terminate every port in its reference resistance and drive them one by one with a unit power wave.

    With ``a = (V + R I)/(2 sqrt R)``: ``I = (1 + Y R)^-1 Y 2 sqrt(R) a``, ``S = 1 - sqrt(R) I``.
    """
    root = np.sqrt(reference)
    identity = np.eye(len(reference))
    current = np.linalg.solve(identity + admittance * reference, 2 * admittance * root)
    scattering = identity - root[:, None] * current
    voltage = 2 * np.diag(root) - reference[:, None] * current
    return PortResponse(np.asarray(np.linalg.inv(admittance), dtype=complex), scattering, voltage)
