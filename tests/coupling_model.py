"""Synthetic finite arrays for tests of the comparison: reciprocal, passive coupling that any engineer would believe.

Not a field solution: impedances of coupled half-wave elements that decay as exp(-jkr)/r^1.5 with a dipole's
preference for its H plane, turned into scattering. Reciprocal by symmetry; passive because every self resistance
exceeds the sum of its row's couplings (Gershgorin; the tests look).
"""

import numpy as np
from scanward.cases.prediction import CutPattern, InfinitePrediction, Prediction, Sensitivity
from scanward.geometry.lattice import Lattice

LIGHT = 299792458.0
CENTRE = 5.4e9
SPACING = 0.54 * LIGHT / CENTRE


def impedance(frequency, positions, resonance=CENTRE, strength=1.0):
    """(n_freq, n, n) ohm."""
    offset = positions[:, None, :] - positions[None, :, :]
    r = np.linalg.norm(offset, axis=-1)
    far = np.where(r > 0, r, np.inf)
    side = 1.0 - 0.7 * (offset[..., 0] / far) ** 2
    k = 2 * np.pi * np.asarray(frequency)[:, None, None] / LIGHT
    mutual = strength * 9.0 * side * np.exp(-1j * (k * np.where(r > 0, r, 0) + 0.6)) * (SPACING / far) ** 1.5
    own = 60.0 + 1j * 700.0 * (np.asarray(frequency) / resonance - resonance / np.asarray(frequency))
    return mutual + own[:, None, None] * np.eye(len(positions))


def scattering(frequency, positions, reference=50.0, **rest):
    z = impedance(frequency, positions, **rest)
    identity = reference * np.eye(z.shape[-1])
    return (z - identity) @ np.linalg.inv(z + identity)


def panel(rows=5, columns=5, points=9, sensitive=True, reference=50.0, resonance=CENTRE, strength=1.0):
    """A `Prediction` of rows x columns elements with two parameters, an infinite array and patterns."""
    frequency = np.linspace(5.2e9, 5.6e9, points)
    sites = np.array([(c, r) for r in range(1, rows + 1) for c in range(1, columns + 1)])
    lattice = Lattice(np.array([SPACING, 0.0]), np.array([0.0, SPACING]))
    positions = lattice.positions(sites)

    def at(**change):
        return scattering(frequency, positions, **({"resonance": resonance, "strength": strength} | change))

    slopes = ()
    if sensitive:
        shift = (at(resonance=resonance * 1.0005) - at(resonance=resonance * 0.9995)) / 0.1  # per per cent
        force = (at(strength=strength * 1.01) - at(strength=strength * 0.99)) / 0.02
        slopes = (
            Sensitivity("arm", "%", 100.0, 1.0, -shift),
            Sensitivity("coupling strength", "", 1.0, 0.1, force),
        )
    return Prediction.of_sites(
        sites,
        ("feed",),
        frequency=frequency,
        scattering=at(),
        reference=np.full(len(sites), reference),
        lattice=lattice,
        sensitivities=slopes,
        infinite=infinite(frequency, lattice),
        patterns=(pattern(),),
        title="avalanche-watch panel, invented",
    )


def infinite(frequency, lattice, reach=6):
    """Infinite array by the middle of a large finite one, good enough for a model that is no field solution."""
    side = np.arange(-reach, reach + 1)
    lags = np.array([(c, r) for c in side for r in side])
    s = scattering(frequency, lattice.positions(lags))
    middle = int(np.flatnonzero(np.all(lags == 0, axis=1))[0])
    angle = np.radians(np.arange(-60, 61, 5))
    directions = np.concatenate([np.stack([np.sin(angle), 0 * angle], 1), np.stack([0 * angle, np.sin(angle)], 1)])
    k = 2 * np.pi * frequency / LIGHT
    phase = np.exp(1j * k[:, None, None] * (directions @ lattice.positions(lags).T))
    active = np.einsum("fdl,fl->fd", phase, s[:, :, middle])
    return InfinitePrediction(directions, active[:, :, None, None], ("feed",), lags, s[:, :, middle, None, None])


def pattern(frequency=CENTRE, cell=(3, 3)):
    theta = np.radians(np.arange(-90, 91, 2.0))
    co = 6 + 10 * np.log10(np.maximum(np.cos(theta), 1e-4) ** 1.3 + 1e-4) + 0.3 * np.cos(9 * theta)
    infinite_co = 6 + 10 * np.log10(np.maximum(np.cos(theta), 1e-4) ** 1.3 + 1e-4)
    return CutPattern(frequency, cell, "feed", 0.0, theta, co, co - 25, infinite_co, infinite_co - 30)
