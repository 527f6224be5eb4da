"""The lattice: grating lobes (checks.md section 6), reduction, counting."""

import numpy as np
import pytest
from scanward.geometry.errors import InputError
from scanward.geometry.lattice import Lattice

K = 2 * np.pi  # wavelength 1


def square(d):
    return Lattice(np.array([d, 0.0]), np.array([0.0, d]))


def equilateral(side):
    return Lattice(np.array([side, 0.0]), np.array([side / 2, side * np.sqrt(3) / 2]))


# CLOSED: square d = lambda / (1 + sin t); equilateral side = 2 / sqrt(3) of that.
@pytest.mark.parametrize(("degrees", "spacing"), [(30, 0.6667), (45, 0.5858), (60, 0.5359)])
def test_square_lattice_is_free_of_lobes_up_to_the_cone(degrees, spacing):
    assert np.degrees(square(spacing).grating_lobe_free_cone(K)) == pytest.approx(degrees, abs=0.02)
    assert 1 / (1 + np.sin(np.radians(degrees))) == pytest.approx(spacing, abs=5e-5)


def test_equilateral_lattice_at_60_degrees():
    assert np.degrees(equilateral(0.6188).grating_lobe_free_cone(K)) == pytest.approx(60, abs=0.02)


def test_equilateral_lattice_saves_13_4_percent():
    # CLOSED 1 - sqrt(3)/2; PUBLISHED: Sharp, IRE TAP 9, 126, 1961 (abstract); same 60 degree cone.
    d = 1 / (1 + np.sin(np.radians(60)))
    for lattice in (square(d), equilateral(2 / np.sqrt(3) * d)):
        assert lattice.grating_lobe_free_cone(K) == pytest.approx(np.radians(60), abs=1e-9)
    saved = 1 - square(d).area / equilateral(2 / np.sqrt(3) * d).area
    assert saved == pytest.approx(0.134, abs=5e-4)


def test_half_wave_square_lattice_has_no_lobe_at_any_angle():
    # PRACTICE and CLOSED: the lobe reaches the horizon only as the beam does
    assert square(0.5).grating_lobe_free_cone(K) == pytest.approx(np.pi / 2, abs=1e-6)
    for phi in np.radians([0, 20, 45, 90, 200]):
        assert square(0.4999).grating_lobe_onset(K, phi) == (pytest.approx(np.pi / 2), None)


def test_one_wave_square_lattice_has_lobes_on_the_horizon_at_broadside():
    # PRACTICE and CLOSED
    assert square(1.0).grating_lobe_free_cone(K) == pytest.approx(0, abs=1e-6)
    assert square(1.001).grating_lobe_onset(K, 0.3)[0] == 0


def brute_force_onset(lattice, phi):
    """First angle of a fine scan at which any other harmonic propagates."""
    orders = np.array([(p, q) for p in range(-4, 5) for q in range(-4, 5) if (p, q) != (0, 0)])
    theta = np.arange(0, np.pi / 2, 2e-4)
    kt = K * np.sin(theta)[:, None, None] * np.array([np.cos(phi), np.sin(phi)])
    visible = (np.linalg.norm(kt + orders @ lattice.reciprocal, axis=2) < K).any(1)
    return theta[np.argmax(visible)] if visible.any() else np.pi / 2


def test_onset_agrees_with_brute_force_on_random_lattices():
    rng = np.random.default_rng(54)
    found = 0
    for _ in range(25):
        lattice = Lattice(rng.uniform(0.45, 0.9, 2) * [1, 0.4], rng.uniform(0.45, 0.9, 2) * [0.3, 1])
        phi = rng.uniform(0, 2 * np.pi)
        onset, order = lattice.grating_lobe_onset(K, phi)
        assert onset == pytest.approx(brute_force_onset(lattice, phi), abs=4e-4)
        found += order is not None
    assert found > 5


def test_onset_is_never_before_the_free_cone_and_reaches_it():
    lattice = equilateral(0.62)
    onset = [lattice.grating_lobe_onset(K, phi)[0] for phi in np.radians(np.arange(0, 360, 1.0))]
    assert min(onset) == pytest.approx(lattice.grating_lobe_free_cone(K), abs=1e-6)


@pytest.mark.parametrize("matrix", [[[1, 0], [3, 1]], [[2, 1], [5, 3]], [[0, 1], [-1, 4]]])
def test_reduced_basis_spans_the_same_lattice(matrix):
    base = equilateral(0.6)
    lattice = Lattice(*(np.array(matrix) @ base.vectors))
    reduced = lattice.reduced
    change = reduced.vectors @ np.linalg.inv(lattice.vectors)
    np.testing.assert_allclose(change, np.round(change), atol=1e-9)
    assert abs(np.linalg.det(change)) == pytest.approx(1)
    np.testing.assert_allclose(np.linalg.norm(reduced.vectors, axis=1), 0.6)
    phi = 0.4
    assert lattice.grating_lobe_onset(K, phi)[0] == pytest.approx(base.grating_lobe_onset(K, phi)[0])


def test_reciprocal_and_coordinates():
    lattice = equilateral(0.6)
    np.testing.assert_allclose(lattice.vectors @ lattice.reciprocal.T, 2 * np.pi * np.eye(2), atol=1e-12)
    cells = np.array([[2, -3], [0, 1]])
    np.testing.assert_allclose(lattice.coordinates(lattice.positions(cells)), cells, atol=1e-12)


def test_cells_within_counts_all_and_sorts_by_distance():
    lattice, centre = equilateral(0.6), np.array([0.35, -0.2])
    cells = lattice.cells_within(2.2, centre)
    grid = np.stack(np.meshgrid(np.arange(-9, 10), np.arange(-9, 10)), -1).reshape(-1, 2)
    distance = np.linalg.norm(lattice.positions(grid) - centre, axis=1)
    assert len(cells) == (distance <= 2.2).sum()
    found = np.linalg.norm(lattice.positions(cells) - centre, axis=1)
    assert (np.diff(found) >= -1e-8).all()


@pytest.mark.parametrize(
    ("a", "b", "message"),
    [
        ([1, 0], [2, 0.01], r"parallel or zero.*1 degree"),
        ([0, 0], [0, 1], "parallel or zero"),
        ([1, np.nan], [0, 1], "lattice vector a"),
        ([1, 0], [0, 1, 0], "lattice vector b"),
    ],
)
def test_bad_vectors_are_refused(a, b, message):
    with pytest.raises(InputError, match=message):
        Lattice(np.array(a, float), np.array(b, float))
