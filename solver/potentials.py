"""Closed-form potentials of a flat triangle: integrals of 1/R and of position/R over it.

Wilton, Rao, Glisson, Schaubert, Al-Bundak, Butler, IEEE TAP 32, 276, 1984; Graglia, IEEE TAP 41, 1448, 1993
(formulas from memory; verified against adaptive quadrature in the tests).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


def triangle_potentials(triangles: Floats, points: Floats, softening: float | Floats = 0.0) -> tuple[Floats, Floats]:
    """Barycentric moments ``int lambda_a / R dS`` and the plain ``int 1/R dS`` of each triangle at each point.

    Parameters
    ----------
    triangles : (n, 3, 3) corners, m
    points : (n, m, 3) observation points, m, for each triangle
    softening : radius a, m, scalar or broadcasting to (n, m): ``R = sqrt(d^2 + a^2)``, the kernel of a wire's
        axis seen from its surface

    Returns
    -------
    (n, m, 3) moments and (n, m) potentials, metres.
    """
    v0, v1, v2 = triangles[:, 0], triangles[:, 1], triangles[:, 2]
    normal = np.cross(v1 - v0, v2 - v0)
    double_area = np.linalg.norm(normal, axis=1)
    normal = normal / double_area[:, None]
    offset = points - v0[:, None]
    height = np.einsum("nmc,nc->nm", offset, normal)
    foot = points - height[..., None] * normal[:, None]
    w = np.sqrt(height**2 + softening**2)

    total = np.zeros(points.shape[:2])
    vector = np.zeros(points.shape)  # int (r' - foot)/R
    tiny = 1e-14 * np.sqrt(double_area)[:, None]
    for start, stop in ((v0, v1), (v1, v2), (v2, v0)):
        edge = stop - start
        length = np.linalg.norm(edge, axis=1, keepdims=True)
        along = edge / length
        outward = np.cross(along, normal)
        to_start = start[:, None] - foot
        t0 = np.einsum("nmc,nc->nm", to_start, outward)  # distance of the edge's line from the foot, outward
        s0 = np.einsum("nmc,nc->nm", to_start, along)
        s1 = s0 + length
        r0_squared = t0**2 + w**2
        rp, rm = np.sqrt(s1**2 + r0_squared), np.sqrt(s0**2 + r0_squared)
        log = _log_ratio(s0, s1, rm, rp, r0_squared, tiny)
        total += t0 * log
        total -= w * (_angle(t0, s1, r0_squared, w, rp, tiny) - _angle(t0, s0, r0_squared, w, rm, tiny))
        vector += outward[:, None] * (0.5 * (r0_squared * log + s1 * rp - s0 * rm))[..., None]
    moments = np.empty((*total.shape, 3))
    for a, (b, c) in enumerate(((v1, v2), (v2, v0), (v0, v1))):
        # lambda_a = n . ((b - r') x (c - r')) / 2A, linear in r': value at the foot plus gradient
        gradient = np.cross(normal, c - b) / double_area[:, None]
        value = np.einsum("nmc,nc->nm", foot - b[:, None], gradient)
        moments[..., a] = value * total + np.einsum("nmc,nc->nm", vector, gradient)
    return moments, total


def _log_ratio(s0: Floats, s1: Floats, rm: Floats, rp: Floats, r0_squared: Floats, tiny: Floats) -> Floats:
    """ln((R+ + s+)/(R- + s-)), without cancellation when both s are negative; 0 on the edge's own line."""
    mirrored = s1 < 0
    top = np.where(mirrored, rm - s0, rp + s1)
    bottom = np.where(mirrored, rp - s1, rm + s0)
    straddle = (s0 < 0) & ~mirrored  # R- + s- = r0^2 / (R- - s-)
    bottom = np.where(straddle, r0_squared / np.where(straddle, rm - s0, 1.0), bottom)
    usable = (bottom > 0) & (r0_squared > tiny**2)
    safe = np.where(bottom > 0, bottom, 1.0)
    return np.where(usable | ((bottom > 0) & ~straddle), np.log(np.where(top > 0, top, 1.0) / safe), 0.0)


def _angle(t0: Floats, s: Floats, r0_squared: Floats, w: Floats, r: Floats, tiny: Floats) -> Floats:
    """arctan(t0 s / (r0^2 + w R)), 0 on the edge's own line."""
    bottom = r0_squared + w * r
    return np.where(bottom > tiny**2, np.arctan2(t0 * s, np.where(bottom > tiny**2, bottom, 1.0)), 0.0)
