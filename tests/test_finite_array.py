"""Finite arrays: brute force, power balance, terminations, the infinite array as their limit."""

from __future__ import annotations

import numpy as np
import pytest
from array_cells import CELLS, array, model
from cells import FREQUENCY, K, strip_dipole
from reference_finite import WholeArrayReference
from reference_finite_layered import printed_array, surface_wave_power
from scanward.geometry.errors import InputError
from scanward.solver.array_basis import basis_error, build_array_model, probe_change
from scanward.solver.array_sites import rectangle
from scanward.solver.finite_array import FiniteArray
from scanward.solver.greedy import build_reduced
from scanward.solver.lag_coupling import lag_couplings
from scanward.solver.reduced import ReducedModel
from scanward.solver.result import ScanPoints
from scanward.solver.sweep import CellSolver

L_SHAPE = np.array([[0, 0], [1, 0], [2, 0], [0, 1], [0, 3]])  # a corner, and an element on its own


def compare(whole: WholeArrayReference, name: str, sites, terminations=None) -> None:
    """S, embedded patterns with their phases, radiated and absorbed power of one array."""
    one = array(name, sites, terminations)
    assert np.abs(one.scattering() - whole.scattering).max() < 2e-5
    theta, phi = (g.ravel() for g in np.meshgrid(np.radians([0.0, 25.0, 50.0, 80.0]), np.radians([10.0, 100.0, 230.0])))
    patterns, true = one.embedded_patterns(ScanPoints.from_angles(theta, phi)), whole.embedded_patterns(theta, phi)
    largest = np.abs(true).max()  # 2e-4 of it is 0.05 dB at -30 dB
    assert np.abs(1j * patterns - true).max() < 2e-4 * largest  # the product leaves j out (`waves`)
    excitation = one.scan_excitation(0.3, 0.2)
    budget = one.power_budget(excitation)
    assert sum(budget.radiated) == pytest.approx(whole.radiated_power(excitation), abs=1e-4)
    absorbed = budget.conductors + budget.loads + budget.terminations
    assert absorbed == pytest.approx(whole.absorbed_power(excitation), abs=1e-4)


@pytest.mark.parametrize(
    ("name", "sites", "terminations"),
    [
        ("strip", rectangle(1, 1), None),
        ("strip", rectangle(2, 3), {0: "open", 2: "matched", 3: "short", 4: 20 - 30j}),
        ("triangular", L_SHAPE, None),
        ("free space", L_SHAPE, None),
        ("lossy", L_SHAPE, {1: "matched"}),
        ("loaded pair", rectangle(1, 3), {0: "open", (2, 1): 15.0}),
        ("patch", rectangle(1, 2), None),
    ],
)
def test_small_arrays_are_those_of_brute_force(name, sites, terminations):
    """SECOND METHOD: one matrix of the whole array without lattice; wanted 1e-4 for the basis."""
    compare(WholeArrayReference(CELLS[name](), sites, FREQUENCY, terminations), name, sites, terminations)


@pytest.mark.parametrize(
    ("name", "sites"),
    [
        ("slab", rectangle(1, 2)),
        *(pytest.param(n, rectangle(3, 3), marks=pytest.mark.slow) for n in ("slab", "lossy slab")),
    ],
)
def test_small_layered_arrays_are_those_of_brute_force(name, sites):
    """SECOND METHOD: space-domain kernels by Sommerfeld integrals, surface waves by their own residues."""
    whole = printed_array(CELLS[name](), sites, FREQUENCY)
    compare(whole, name, sites)
    if name == "slab":
        one = array(name, sites)
        excitation = one.scan_excitation(0.3, 0.2)
        bound = surface_wave_power(whole, excitation)
        assert bound > 0.01 and one.power_budget(excitation).surface_waves == pytest.approx(bound, abs=1e-5)


@pytest.mark.slow
@pytest.mark.parametrize("name", ["strip", "patch"])
def test_five_by_five_is_brute_force(name):
    """SECOND METHOD."""
    compare(WholeArrayReference(CELLS[name](), rectangle(5, 5), FREQUENCY), name, rectangle(5, 5))


def test_lower_half_space_of_an_array_without_ground():
    """SECOND METHOD: theta is measured from -z there."""
    whole, theta, phi = WholeArrayReference(CELLS["free space"](), L_SHAPE, FREQUENCY), np.array([0.6]), np.array([0.8])
    below = array("free space", L_SHAPE).embedded_patterns(ScanPoints.from_angles(theta, phi), side=-1)
    np.testing.assert_allclose(np.abs(below), np.abs(whole.embedded_patterns(np.pi - theta, phi)), atol=1e-4)


@pytest.mark.parametrize("name", ["strip", "free space", "lossy", "loaded pair", "patch", "slab", "no ground"])
def test_power_balance(name):
    """CLOSED: reflected, radiated, absorbed and guided away make up the available power (surface waves by residues)."""
    one = array(name, rectangle(2, 3), {1: "matched", 4: 30 - 20j})
    budget = one.power_budget(one.scan_excitation(0.3, 0.2))
    assert abs(budget.rest) < 2e-4
    assert sum(budget.radiated) > 0.03 and budget.terminations > 1e-5
    assert (budget.surface_waves > 0.01) == (name in ("slab", "no ground"))
    assert (budget.conductors > 0.01) == (name == "lossy")


def test_lossy_layers_absorb_the_rest():
    one = array("lossy slab", rectangle(2, 3))
    budget = one.power_budget(one.scan_excitation(0.3, 0.2))
    assert 0.02 < budget.rest < 0.5 and budget.surface_waves == 0


@pytest.mark.parametrize("name", ["loaded pair", "slab", "triangular"])
def test_reciprocal_and_passive(name):
    """CLOSED: S = S^T, no singular value above 1."""
    s = array(name, L_SHAPE).scattering()
    np.testing.assert_allclose(s, s.T, atol=1e-10)
    assert np.linalg.norm(s, 2) < 1


@pytest.mark.parametrize("name", ["slab", "loaded pair"])
def test_iterations_give_what_factorisation_gives(name):
    """SECOND METHOD: the same system, products by the fast Fourier transform, sites that do not fill their box."""
    plain, fast = array(name, L_SHAPE), array(name, L_SHAPE, direct_limit=0, tolerance=1e-9)
    assert plain.system.is_direct and not fast.system.is_direct
    np.testing.assert_allclose(fast.scattering(), plain.scattering(), atol=1e-8)
    x = np.random.default_rng(1).normal(size=(fast.system.n * fast.system.r, 2)) + 0j
    np.testing.assert_allclose(fast.system.apply(x), plain.system.dense() @ x, rtol=1e-9, atol=1e-9)


def test_terminations_are_reflections_at_the_ports():
    """CLOSED: S_ll + S_ld (1 / Gamma - S_dd)^-1 S_dl (network theory), for every kind of load at once."""
    sites, dummies = rectangle(2, 3), {0: "open", 2: "short", 3: "matched", 5: 20 + 70j}
    s = array("strip", sites).scattering()
    gamma = np.diag([1.0, -1.0, 1e-15, (20 + 70j - 50) / (20 + 70j + 50)])
    live, dead = [1, 4], [0, 2, 3, 5]
    inner = np.linalg.inv(np.linalg.inv(gamma) - s[np.ix_(dead, dead)])
    expected = s[np.ix_(live, live)] + s[np.ix_(live, dead)] @ inner @ s[np.ix_(dead, live)]
    one = array("strip", sites, dummies)
    assert one.ports[:, 0].tolist() == live
    np.testing.assert_allclose(one.scattering(), expected, atol=2e-6)


def test_single_ports_of_an_element_can_be_terminated():
    whole, one = array("loaded pair", rectangle(1, 2)), array("loaded pair", rectangle(1, 2), {(0, 1): "matched"})
    np.testing.assert_allclose(one.scattering(), whole.scattering()[np.ix_([0, 2, 3], [0, 2, 3])], atol=1e-10)


def test_active_reflection_and_pattern_are_sums_over_the_ports():
    """CLOSED: superposition."""
    one = array("loaded pair", L_SHAPE)
    a = one.scan_excitation(0.2, -0.4, taper=[1, 0.5, 0.2, 0.5, 1j])
    assert np.sum(np.abs(a) ** 2) == pytest.approx(1)
    active = one.active_reflection(a)
    np.testing.assert_allclose(active, (one.scattering() @ a) / a, atol=1e-10)
    directions = ScanPoints.from_angles(np.radians([0.0, 40.0]), np.radians([0.0, 70.0]))
    np.testing.assert_allclose(
        one.pattern(2 * a, directions), np.einsum("dpe,p->de", one.embedded_patterns(directions), a), atol=1e-10
    )


@pytest.mark.parametrize("name", ["strip", *(pytest.param(n, marks=pytest.mark.slow) for n in ("triangular", "slab"))])
def test_large_array_tends_to_the_infinite_one(name):
    """CLOSED limit: the centre's active reflection in a growing array against that of the infinite one."""
    infinite = model(name)[0].solve(K, K * np.array([[0.1, 0.05]])).scattering[0, 0, 0]
    errors = []
    for side in (5, 11, 25):
        one = array(name, rectangle(side, side), direct_limit=2000)
        errors.append(abs(one.active_reflection(one.scan_excitation(0.1, 0.05))[side * side // 2] - infinite))
    assert errors[2] < 0.35 * errors[0] and errors[2] < 0.03


@pytest.mark.slow
def test_edge_ripple_has_its_period():
    """CLOSED: the edge's wave exp(-j k x) beats with the excitation exp(-j k x sin t): period lambda / (1 - sin t).

    An abstract gives half that (Hansen, Radio Science 31, 1996, checks.md section 9): not what comes out here.
    """
    sine, count = 0.5, 81
    one = array("strip", rectangle(count, 9), direct_limit=0)
    active = one.active_reflection(one.scan_excitation(0.0, sine))
    middle = active[one.sites[:, 0] == 4]
    ripple = middle[8:-8] - middle[8:-8].mean()
    frequency = np.fft.rfftfreq(4096, 0.5)
    spectrum = np.abs(np.fft.fft(ripple * np.hanning(len(ripple)), 4096))[: len(frequency)]
    both = np.maximum(spectrum, np.abs(np.fft.fft(ripple.conj() * np.hanning(len(ripple)), 4096))[: len(frequency)])
    assert frequency[np.argmax(both)] == pytest.approx(1 - sine, rel=0.1)


@pytest.mark.parametrize("name", ["strip", *(pytest.param(n, marks=pytest.mark.slow) for n in ("patch", "slab"))])
def test_stated_error_of_the_basis_is_met(name):
    """SECOND METHOD: a larger basis; the estimate is that of the basis without its newest snapshots."""
    rough, certificate = model(name, 1e-3)
    fine, better = model(name, 1e-6)
    assert certificate.reached and better.reached and better.size > certificate.size
    sites = rectangle(3, 3)
    found, true = (FiniteArray(m, FREQUENCY, sites).scattering() for m in (rough, fine))
    assert np.abs(found - true).max() < certificate.estimated
    assert probe_change(fine, FREQUENCY, 4) > 1e-4


def test_basis_of_a_band():
    """SECOND METHOD: brute force at a frequency that is no node of anything."""
    band = (0.9 * FREQUENCY, 1.1 * FREQUENCY)
    cell = strip_dipole(size=0.08)
    banded, certificate = build_array_model(CellSolver(cell, band[1]), band, error=1e-3)
    assert certificate.reached
    whole = WholeArrayReference(cell, L_SHAPE, 0.937 * FREQUENCY)
    found = FiniteArray(banded, 0.937 * FREQUENCY, L_SHAPE).scattering()
    assert np.abs(found - whole.scattering).max() < 1e-3


def test_reduced_models_of_visible_space_and_stored_ones_serve_too():
    """SECOND METHOD: brute force with the basis of a scan map; the change by its newest snapshots bounds the error."""
    cell = CELLS["strip"]()
    visible, _ = build_reduced(CellSolver(cell, FREQUENCY), (FREQUENCY, FREQUENCY), error=1e-3)
    read = ReducedModel.from_arrays(cell, visible.arrays())
    error = np.abs(
        FiniteArray(read, FREQUENCY, L_SHAPE).scattering() - WholeArrayReference(cell, L_SHAPE, FREQUENCY).scattering
    ).max()
    assert error < max(1e-6, basis_error(visible, FREQUENCY)) < 1e-3


def test_couplings_of_a_site_with_itself_are_the_isolated_element():
    """CLOSED: one site alone, its impedance from Z_0."""
    m = model("strip")[0]
    z = lag_couplings(m, FREQUENCY, np.zeros((1, 2), dtype=int))[0]
    drive = m.ports.excitation(np.zeros((1, 2)))[0]
    impedance = 1 / (drive.T @ np.linalg.solve(z, drive))[0, 0]
    s = array("strip", rectangle(1, 1)).scattering()[0, 0]
    assert s == pytest.approx((impedance - 50) / (impedance + 50), abs=1e-10)


@pytest.mark.parametrize(
    ("sites", "terminations", "words"),
    [
        ([[0, 0], [1, 0], [0, 0]], None, r"site \[0, 0\] is listed twice"),
        ([[0, 0], [5000, 700]], None, "5001 by 701 cells would take"),
        ([[0.5, 0]], None, "not a list of integer cells"),
        ([[0, 0]], {0: "matched"}, "at least one live port"),
        ([[0, 0]], {1: "open"}, "sites 0 to 0"),
        ([[0, 0], [0, 1]], {0: "opne"}, "Did you mean 'open'"),
        ([[0, 0], [0, 1]], {0: -5.0}, "a resistance of 0 or more"),
    ],
)
def test_refusals(sites, terminations, words):
    with pytest.raises(InputError, match=words):
        array("strip", sites, terminations)
    with pytest.raises(InputError, match="0 by 3"):
        rectangle(0, 3)


def test_excitations_that_are_none_are_refused():
    one = array("strip", rectangle(1, 2))
    for bad in (np.zeros(2), np.ones(3), [np.nan, 1.0]):
        with pytest.raises(ValueError, match="excitation"):
            one.solve(bad)


def test_frequencies_outside_the_band_are_refused():
    with pytest.raises(ValueError, match="outside the reduced model's band"):
        FiniteArray(model("strip")[0], 1.01 * FREQUENCY, [[0, 0]])


def test_connected_arrays_are_refused():
    cell = strip_dipole(0.5, 0.03, 0.2, size=0.1)
    with pytest.raises(InputError, match="how the array ends"):
        build_array_model(CellSolver(cell, FREQUENCY), (FREQUENCY, FREQUENCY))
