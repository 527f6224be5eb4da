"""The brute-force references of finite arrays against closed forms, balances and each other's routes."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from cells import FREQUENCY, K, make, point, sheet_gap, strip_dipole, wire_dipole, wire_gap
from reference_finite import NOWHERE, Air, WholeArrayReference, distant_block, element_blocks, smooth_kernel
from reference_finite_layered import GroundedSlab, printed_array, surface_wave_power
from reference_pair import COLLINEAR, ECHELON, SELF_HALF_WAVE, SIDE_BY_SIDE
from reference_slab import SURFACE_WAVES, line_impedance
from scanward.geometry.conductor import Material, Strip, Wire
from scanward.geometry.errors import InputError
from scanward.geometry.lattice import Lattice
from scanward.geometry.port import Load
from scanward.geometry.stack import Layer, Stack
from scanward.solver.basis import build_basis
from scanward.solver.cloud import build_cloud
from scanward.solver.operator import ETA, PeriodicOperator
from scipy.special import hankel2

X, Y, _ = np.eye(3)


def sites_of(columns: int, rows: int) -> np.ndarray:
    return np.array([(p, q) for q in range(rows) for p in range(columns)])


def printed(thickness=0.1, permittivity=2.55, loss=0.0, lattice=None, length=0.36):
    options = {} if lattice is None else {"lattice": lattice}
    cell = strip_dipole(length, 0.02, thickness, 0.02, ground=True, size=0.08, **options)
    return dataclasses.replace(cell, stack=Stack((Layer(thickness, permittivity, loss),), True))


def loaded_crossing():
    """Two crossing strips at two heights, two ports; one strip lossy with a load in it. No symmetry."""
    a = Strip(name="a", start=point(-0.2, 0, 0.2), end=point(0.2, 0, 0.2), width=0.02)
    lossy = Material(sheet_resistance=4.0)
    b = Strip(name="b", start=point(0.1, -0.2, 0.25), end=point(0.1, 0.2, 0.25), width=0.02, material=lossy)
    load = Load("load", sheet_gap((0.1, 0.1, 0.25), 0.02, 0.02, Y, X), resistance=20.0, inductance=1e-9)
    gaps = [sheet_gap((0, 0, 0.2), 0.02, 0.02), sheet_gap((0.1, 0, 0.25), 0.02, 0.02, Y, X)]
    return make([a, b], gaps, ground=True, size=0.08, loads=[load])


def sinusoid_impedances(size: float, lattice: Lattice, lags, radius=1e-4) -> np.ndarray:
    """Imposed sinusoidal current on half-wave wires: self impedance, then that for every lag."""
    wire = Wire(name="arm", points=np.stack([point(-0.25, 0, 0), point(0.25, 0, 0)]), radius=radius)
    roomy = Lattice(np.array([3.0, 0.0]), np.array([0.0, 3.0]))
    mesh = make([wire], [wire_gap((0, 0, 0), 0.01, radius)], lattice=roomy, size=size).mesh
    basis = build_basis(mesh, NOWHERE)
    shapes = basis.coefficients.toarray()
    first = np.argmax(shapes != 0, axis=0)
    segment, end = np.divmod(first - basis.shape_offsets[1], 2)
    node = basis.segments[segment, end, 0]
    sense = np.sign(np.ptp(basis.segments[..., 0], axis=1)) * np.sign(np.diff(basis.segments[..., 0], axis=1)[:, 0])
    current = shapes[first, np.arange(basis.n)] * sense[segment] * np.sin(K * (0.25 - np.abs(node)))
    cloud, found = build_cloud(basis), []
    for lag in [(0, 0), *lags]:
        block = element_blocks(lattice, basis, cloud, np.array([(0, 0), lag]), Air(K, False))[lag]
        found.append(current @ block @ current)
    return np.array(found)


def extrapolated(lattice: Lattice, lags) -> np.ndarray:
    """Linear functions approach the sinusoid as the square of their length."""
    coarse, fine = (sinusoid_impedances(size, lattice, lags) for size in (0.025, 0.0125))
    return (4 * fine - coarse) / 3


def test_mutual_impedances_side_by_side_and_in_echelon():
    """CLOSED, checks.md section 3 (Carter 1932): 0.02 ohm of up to 73, measured 0.006."""
    quarter = Lattice(np.array([0.25, 0.0]), np.array([0.0, 0.25]))
    wanted = {(0, 1): SIDE_BY_SIDE[0.25], (0, 2): SIDE_BY_SIDE[0.5], (2, 2): ECHELON[0.5, 0.5]}
    found = extrapolated(quarter, list(wanted))
    assert found[0].real == pytest.approx(SELF_HALF_WAVE.real, abs=0.02)
    assert np.abs(found[1:] - list(wanted.values())).max() < 0.02


def test_mutual_impedances_of_collinear_dipoles():
    """CLOSED, checks.md section 3: gaps of 0.1 and 1 wavelength, and the self reactance of a thin wire."""
    found = extrapolated(Lattice(np.array([0.6, 0.0]), np.array([0.0, 1.0])), [(1, 0)])
    assert found[1] == pytest.approx(COLLINEAR[0.1], abs=0.02)
    found = extrapolated(Lattice(np.array([1.5, 0.0]), np.array([0.0, 1.0])), [(1, 0)])
    assert found[1] == pytest.approx(COLLINEAR[1.0], abs=0.02)
    assert found[0] == pytest.approx(SELF_HALF_WAVE, abs=0.3)  # the radius of 1e-4 is felt in X


@pytest.mark.parametrize("build", [strip_dipole, lambda **o: wire_dipole(height=0, **o), loaded_crossing])
def test_power_balance_reciprocity(build):
    """INVARIANCE: reflected, absorbed and radiated power add up to 1e-4 (pattern over the sphere); S symmetric."""
    cell = build() if build is loaded_crossing else build(size=0.08)
    array = WholeArrayReference(cell, [(0, 0), (1, 0), (0, 2)], FREQUENCY)
    s = array.scattering
    assert np.abs(s - s.T).max() < 1e-10
    n = len(s)
    for a in (np.eye(n)[0], np.exp(2j * np.arange(n)) / np.sqrt(n)):
        reflected = float(np.sum(np.abs(s @ a) ** 2))
        absorbed = array.absorbed_power(a)
        assert (absorbed > 1e-3) == (build is loaded_crossing)
        assert reflected + absorbed + array.radiated_power(a) == pytest.approx(1, abs=1e-4)


def test_terminated_ports_by_the_network_of_all_ports():
    """CLOSED: terminating ports of the full S by their reflection coefficients gives what the reference solves for."""
    sites = sites_of(2, 2)
    whole = WholeArrayReference(strip_dipole(size=0.08), sites, FREQUENCY)
    ends = {0: "open", (1, 0): 20 + 30j, 3: "short"}
    found = WholeArrayReference(strip_dipole(size=0.08), sites, FREQUENCY, ends)
    dead, alive = [0, 1, 3], [2]
    gamma = np.diag([1, (20 + 30j - 50) / (20 + 30j + 50), -1])
    s = whole.scattering
    loop = np.linalg.solve(np.eye(3) - gamma @ s[np.ix_(dead, dead)], gamma @ s[np.ix_(dead, alive)])
    assert found.scattering == pytest.approx(s[np.ix_(alive, alive)] + s[np.ix_(alive, dead)] @ loop, abs=1e-10)
    assert found.live.tolist() == [[2, 0]]
    assert np.abs(found.port_currents[0]).max() < 1e-12
    assert np.abs(found.port_voltages[3]).max() < 1e-12
    angles = np.array([0.2, 0.9]), np.array([0.5, 3.0])
    parts = np.append(loop[:, 0], 1.0)  # waves into all four ports
    expected = whole.embedded_patterns(*angles)[:, [*dead, *alive]]
    together = np.einsum("dpe,p->de", expected, parts)
    assert np.abs(found.embedded_patterns(*angles)[:, 0] - together).max() < 1e-10
    power = float(np.abs(found.scattering[0, 0]) ** 2) + found.absorbed_power([1.0]) + found.radiated_power([1.0])
    assert power == pytest.approx(1, abs=1e-4)


def test_sites_as_one_large_cell():
    """INVARIANCE: two elements meshed as one cell, against two sites; the bookkeeping of close pairs."""
    close = Lattice(np.array([0.5, 0.0]), np.array([0.0, 0.05]))
    roomy = Lattice(np.array([5.0, 0.0]), np.array([0.0, 5.0]))
    two = WholeArrayReference(strip_dipole(size=0.06, lattice=close), [(0, 0), (0, 1)], FREQUENCY)
    arms = [
        Strip(name=f"arm {y}", start=point(-0.225, y, 0.25), end=point(0.225, y, 0.25), width=0.02) for y in (0.0, 0.05)
    ]
    gaps = [sheet_gap((0, y, 0.25), 0.01, 0.02) for y in (0.0, 0.05)]
    one = WholeArrayReference(make(arms, gaps, lattice=roomy, ground=True, size=0.06), [(0, 0)], FREQUENCY)
    assert np.abs(one.scattering - two.scattering).max() < 2e-3  # meshes differ: neighbours grade each other's


def zone_mean(operator: PeriodicOperator, k: float, count: int, lag) -> np.ndarray:
    """Mean of ``Z(kt) exp(+j kt . rho)`` over count x count points of the zone, half a step off its centre."""
    lattice = operator.cell.lattice
    total = np.zeros((operator.n, operator.n), dtype=complex)
    for p in range(count):
        for q in range(count):
            kt = (np.array([p, q]) + 0.5) / count @ lattice.reciprocal
            total += operator.matrix(k, kt) * np.exp(1j * kt @ lattice.positions(np.array([lag]))[0])
    return total / count**2


@pytest.mark.slow
def test_brillouin_zone_mean_of_the_periodic_operator():
    """SECOND METHOD: half a step off the centre, the mean over n x n points of the zone is Z summed over every n-th lag
    with alternating signs (Munk and Burrell, IEEE TAP 27, 331, 1979, MEMORY). n = 8, the copies from the blocks
    themselves, tapered off: 0.1 % of Z_m's largest entry, measured 4e-4; 1 % two sites away in the H plane,
    measured 6e-3; falling as the square of the rings taken."""
    cell, count, rings = strip_dipole(size=0.1), 8, 8
    operator = PeriodicOperator(cell, K, 1e-8)
    basis = build_basis(cell.mesh, NOWHERE, ground=True)
    cloud, air = build_cloud(basis), Air(K, True)
    copies = [(p, q) for p in range(-rings, rings + 1) for q in range(-rings, rings + 1) if 0 < np.hypot(p, q) < rings]
    for lag, limit in (((0, 0), 1e-3), ((1, 0), 1e-3), ((0, 2), 1e-2)):
        wanted = element_blocks(cell.lattice, basis, cloud, np.array([(0, 0), lag]), air)[lag]
        scale = np.abs(wanted).max()
        for p, q in copies:
            shift = np.append(cell.lattice.positions(np.array([(lag[0] + count * p, lag[1] + count * q)]))[0], 0.0)
            weight = (-1) ** (p + q) * np.cos(0.5 * np.pi * np.hypot(p, q) / rings) ** 2
            wanted = wanted + weight * distant_block(cloud, shift, air)
        assert np.abs(zone_mean(operator, K, count, lag) - wanted).max() < limit * scale


def test_arrays_that_have_no_edge_are_refused():
    with pytest.raises(InputError, match="how such an array ends"):
        WholeArrayReference(strip_dipole(0.5, 0.03, 0.2, size=0.1), [(0, 0)], FREQUENCY)
    with pytest.raises(InputError, match="listed twice"):
        WholeArrayReference(strip_dipole(size=0.1), [(0, 0), (0, 0)], FREQUENCY)
    with pytest.raises(InputError, match="has layers"):
        WholeArrayReference(printed(), [(0, 0)], FREQUENCY)


def test_slab_of_air_is_the_ground_image():
    """CLOSED: permittivity 1 leaves ``exp(-jkR)/(4 pi R)`` less its image at 2 d."""
    slab, rho = GroundedSlab(K, 1.0, 0.25, 1.4), np.array([0.003, 0.1, 0.5, 1.3])
    wanted = smooth_kernel(rho, K) - smooth_kernel(np.hypot(rho, 0.5), K)
    for kernel in (*slab.greens(rho), *slab.integrated(rho)):
        assert np.abs(kernel / wanted - 1).max() < 1e-9


def test_spectra_by_the_textbook_lines():
    """SECOND METHOD, `reference_slab.line_impedance` under the air's line; and the two leading orders at large kt."""
    slab, kt = GroundedSlab(K, 2.55, 0.1, 0.1), np.array([0.3, 0.9, 1.1, 1.5, 4.0]) * K
    z = {}
    for polarisation in ("TE", "TM"):
        up, down = (
            line_impedance(kt**2, layers, polarisation, K, end)
            for layers, end in (((), "air"), (((2.55, 0.1),), "ground"))
        )
        z[polarisation] = up * down / (up + down)
    k_a, k_q = slab.spectra(kt + 1e-12j)
    assert np.abs(k_a / (z["TE"] / (1j * K * ETA)) - 1).max() < 1e-9
    assert np.abs(k_q / (1j * K / ETA * (z["TM"] - z["TE"]) / kt**2) - 1).max() < 1e-9
    far = np.array([60.0, 120.0]) * K
    for whole, leading in zip(slab.spectra(far), slab.leading(far), strict=True):
        rest = np.abs(whole - leading)
        assert np.log2(rest[0] / rest[1]) == pytest.approx(5, abs=0.1)


def test_surface_wave_far_away():
    """CLOSED: index of TM0 (checks.md section 2), and the charge kernel tends to the residue's Hankel function,
    ``-(j/2) kp R H0(kp rho)``; what is left falls faster than 1/rho (space wave, 1/rho^2)."""
    permittivity, thickness, index = SURFACE_WAVES[1][:3]
    slab, rho = GroundedSlab(K, permittivity, thickness, 0.1), np.array([20.0, 40.0])
    pole, (none, residue) = slab.surface_wave()
    assert pole / K == pytest.approx(index, abs=1e-5)
    assert abs(none) < 1e-12
    wave = -0.5j * pole * residue * hankel2(0, pole * rho)
    left = np.abs(slab.integrated(rho)[1] - wave)
    assert np.all(left < [0.05 * abs(wave[0]), 0.02 * abs(wave[1])])
    assert np.log2(left[0] / left[1]) > 1.5


@pytest.mark.parametrize("thickness", [0.1, 0.19])
def test_printed_pair_balances_its_power(thickness):
    """INVARIANCE: reflected + radiated by stationary phase + TM0 by its residue = 1 to 1e-4; reciprocal."""
    array = printed_array(printed(thickness), [(0, 0), (1, 0)], FREQUENCY)
    s = array.scattering
    assert np.abs(s - s.T).max() < 1e-12
    for a in (np.array([1, 0]), np.array([0.6, 0.8j])):
        bound = surface_wave_power(array, a)
        assert bound > 1e-3
        power = float(np.sum(np.abs(s @ a) ** 2)) + array.radiated_power(a) + bound
        assert power == pytest.approx(1, abs=1e-4)


def test_printed_dipoles_on_air_are_those_over_ground():
    """SECOND METHOD: the Sommerfeld route with permittivity 1 against images, S and patterns."""
    cell = strip_dipole(size=0.08)
    layered = dataclasses.replace(cell, stack=Stack((Layer(0.25, 1.0),), True))
    sites = [(0, 0), (1, 0), (0, 1)]
    air, slab = WholeArrayReference(cell, sites, FREQUENCY), printed_array(layered, sites, FREQUENCY)
    assert np.abs(air.scattering - slab.scattering).max() < 1e-7
    angles = np.array([0.1, 0.6, 1.2]), np.array([0.4, 2.0, 5.0])
    assert np.abs(air.embedded_patterns(*angles) - slab.embedded_patterns(*angles)).max() < 1e-6


def test_only_what_the_slab_kernel_knows():
    with pytest.raises(ValueError, match="one layer over ground"):
        printed_array(strip_dipole(size=0.1), [(0, 0)], FREQUENCY)
    inside = dataclasses.replace(printed(), stack=Stack((Layer(0.2, 2.55),), True))
    with pytest.raises(ValueError, match="on top of a layer"):
        printed_array(inside, [(0, 0)], FREQUENCY)
    with pytest.raises(ValueError, match="beyond the table"):
        GroundedSlab(K, 2.55, 0.1, 0.1).greens(np.array([0.5]))
