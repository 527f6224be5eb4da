"""The operator with an imposed sinusoidal current against closed forms (checks.md sections 1, 3 and 5).

The sinusoid is projected on the wire's own linear functions; the impedance is the quadratic form I^T Z I / I0^2.
Nothing is solved, so what is tested is the operator alone.
"""

from __future__ import annotations

import numpy as np
import pytest
from cells import FREQUENCY, K, point
from reference_pair import mutual_impedance
from reference_sinusoid import TABLE, one_wave_ratio
from reference_waveguide import PROBE_RESISTANCE, probe_resistance
from scanward.geometry.cell import UnitCell
from scanward.geometry.conductor import Wire
from scanward.geometry.lattice import Lattice
from scanward.geometry.mesher import mesh_conductors
from scanward.solver.operator import SPEED_OF_LIGHT, PeriodicOperator


class Sinusoid:
    """Dipole along x with current sin(k(L/2 - |x|)) / sin(kL/2); radius = the closed form's test offset."""

    def __init__(self, lattice, length, radius, height, *, segments=64):
        self.lattice = Lattice(*(np.asarray(v, dtype=float) for v in lattice))
        z = 0.0 if height is None else height
        wire = Wire(
            name="w", points=np.stack([point(-length / 2, 0, z), point(length / 2, 0, z)]), radius=radius
        )
        mesh = mesh_conductors(
            [wire],
            self.lattice,
            ground=height is not None,
            element_size=length / segments * 1.001,
            grading=False,
        )
        self.operator = PeriodicOperator(UnitCell(self.lattice, mesh, (), (), height is not None), 1.01 * K)
        basis = self.operator.basis
        peaks = np.array([self._peak(basis, i) for i in range(basis.n)])
        self.current = np.sin(K * (length / 2 - np.abs(peaks[:, 0]))) / np.sin(K * length / 2) * peaks[:, 1]

    @staticmethod
    def _peak(basis, i):
        """x and sense of function i where it is 1."""
        rows = basis.coefficients[:, [i]].nonzero()[0]
        shape = rows[0] - basis.shape_offsets[1]
        segment = basis.segments[shape // 2]
        value = basis.coefficients[rows[0], i] * np.sign(segment[1, 0] - segment[0, 0])
        return segment[shape % 2, 0], value

    def impedance(self, kt):
        return complex(self.current @ self.operator.matrix(K, np.asarray(kt)) @ self.current)


@pytest.fixture(scope="module")
def dipoles():
    made = {}

    def get(row):
        key = (row.lattice, row.height)
        if key not in made:
            made[key] = Sinusoid(row.lattice, 0.5, row.offset, row.height)
        return made[key]

    return get


@pytest.mark.parametrize("row", TABLE, ids=lambda r: f"{r.height}-{r.theta}-{r.phi}-{len(set(r.lattice[1]))}")
def test_array_of_sinusoids(dipoles, row):
    """CLOSED, 0.3 %: the double sum tested on a filament one radius away, against the tube's mean."""
    z = dipoles(row).impedance(row.kt)
    assert abs(z - row.impedance) < 0.003 * abs(row.impedance)


@pytest.mark.parametrize(("plane", "angle"), [("E", 0.3), ("H", 0.3), ("E", 0.5)])
@pytest.mark.parametrize("height", [None, 0.25])
def test_resistance_with_one_wave_follows_the_element_factor(plane, angle, height):
    """CLOSED: R/R0 with one propagating wave (checks.md section 1)."""
    dipole = Sinusoid(((0.55, 0), (0, 0.5)), 0.5, 0.001, height, segments=30)
    kt = K * np.sin(angle) * (np.array([1.0, 0]) if plane == "E" else np.array([0, 1.0]))
    ratio = dipole.impedance(kt).real / dipole.impedance([0.0, 0.0]).real
    assert ratio == pytest.approx(one_wave_ratio(angle, plane, height), rel=2e-3)


def zone_rule(period, n=10, sectors=8):
    """Points and weights for a square Brillouin zone wider than the light circle, singularities of 1/kz removed.

    Inside, k_t = k sin t; outside, k_t = k cosh s up to the zone's edge. Weights average over the zone.
    """
    x, w = np.polynomial.legendre.leggauss(n)
    x, w = 0.5 * (x + 1), 0.5 * w
    edge = np.pi / period
    points, weights = [], []
    for sector in range(sectors):
        for phi, wp in zip((sector + x) * 2 * np.pi / sectors, w * 2 * np.pi / sectors, strict=True):
            direction = np.array([np.cos(phi), np.sin(phi)])
            for t, wt in zip(x * np.pi / 2, w * np.pi / 2, strict=True):
                points.append(K * np.sin(t) * direction)
                weights.append(wp * wt * K * K * np.sin(t) * np.cos(t))
            top = np.arccosh(edge / np.abs(direction).max() / K)
            for s, ws in zip(x * top, w * top, strict=True):
                points.append(K * np.cosh(s) * direction)
                weights.append(wp * ws * K * K * np.sinh(s) * np.cosh(s))
    return np.array(points), np.array(weights) / (2 * edge) ** 2


def test_coupling_between_two_dipoles_is_carter_s():
    """Brillouin-zone transform of the active impedance = mutual impedances of isolated pairs (Carter 1932). CLOSED

    One source in an infinite array of imposed currents: the coefficient of lag m couples two dipoles that see nothing
    else. Lattice 0.45, length 0.4.
    """
    dipole = Sinusoid(((0.45, 0), (0, 0.45)), 0.4, 0.002, None, segments=24)
    points, weights = zone_rule(0.45)
    assert weights.sum() == pytest.approx(1.0, abs=1e-6)
    active = np.array([dipole.impedance(kt) for kt in points])
    for cell in ((0, 1), (0, 2), (1, 1), (1, 2)):
        rho = 0.45 * np.array(cell)
        z = np.sum(weights * active * np.exp(1j * points @ rho))
        exact = complex(mutual_impedance(0.4, rho[1], rho[0]))
        assert abs(z - exact) < 0.05 + 0.005 * abs(exact), cell
    own = np.sum(weights * active)
    exact = complex(mutual_impedance(0.4, 0.002))
    assert own.real == pytest.approx(exact.real, rel=3e-3)
    assert own.imag == pytest.approx(exact.imag, abs=1.5)


@pytest.mark.parametrize("probe", PROBE_RESISTANCE)
def test_probe_in_a_waveguide(probe):
    """A probe in a TE10 guide is an array of dipoles scanned to the guide's angle (Hannan and Balfour 1965). CLOSED

    R = (2 eta/(a b beta k)) sin^2(beta l) tan^2(kd/2) for the imposed sinusoid (checks.md section 5).
    """
    wavelength = SPEED_OF_LIGHT / 10e9
    a, b = 22.86e-3 / wavelength, 2 * 10.16e-3 / wavelength
    beta = K * np.sqrt(1 - (0.5 / a) ** 2)
    wall = 0.25 * 2 * np.pi / beta
    # dipole 2d along x (through the broad wall's images), broad wall along y with alternate phase
    dipole = Sinusoid(((b, 0), (0, a)), 2 * probe / wavelength, 0.0005, wall, segments=24)
    z = dipole.impedance([0.0, np.pi / a])
    expected = probe_resistance(probe, 39.707e-3 / 4, 22.86e-3, 10.16e-3, 10e9)
    assert expected == pytest.approx(PROBE_RESISTANCE[probe], abs=0.01)
    # the dipole of length 2d is two probes in series
    assert z.real / 2 == pytest.approx(expected, rel=5e-3)
    assert FREQUENCY == SPEED_OF_LIGHT
