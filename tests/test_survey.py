"""The survey of the scan volume: maps, peaks, causes and the clear cone, against the direct solver and closed forms."""

from __future__ import annotations

import dataclasses
from functools import cache

import numpy as np
import pytest
from cells import FREQUENCY, K, strip_dipole
from scanward.geometry.lattice import Lattice
from scanward.geometry.stack import Layer, Stack
from scanward.solver.active import ActiveModel
from scanward.solver.blindness import find_blindness, peak_width
from scanward.solver.causes import find_cause, reactions
from scanward.solver.free_cone import ANGLE, first_angles, free_cone
from scanward.solver.greedy import build_reduced
from scanward.solver.guided_waves import guided_waves
from scanward.solver.peaks import Starts, climb, find_peaks
from scanward.solver.result import ScanPoints
from scanward.solver.roots import quality, roots_between
from scanward.solver.scan_map import scan_map
from scanward.solver.survey import BLIND
from scanward.solver.sweep import CellSolver, solve_sweep
from scipy.optimize import minimize_scalar

BAND = (0.97 * FREQUENCY, FREQUENCY)
PLANES = np.radians([0.0, 45.0, 90.0])
SLAB = Layer(0.19, 2.55)


def slab_cell(layer: Layer = SLAB, length: float = 0.39):
    cell = strip_dipole(length, 0.02, layer.thickness, 0.02, ground=True, size=0.08)
    return dataclasses.replace(cell, stack=Stack((layer,), True))


@cache
def printed():
    """Direct solver and reduced model of a dipole on a thick slab, which is blind near 45 deg in its E plane."""
    solver = CellSolver(slab_cell(), BAND[1])
    return solver, ActiveModel(build_reduced(solver, BAND)[0], [1.0])


@cache
def surveyed():
    _, active = printed()
    maps = scan_map(active, np.array(BAND))
    return maps, find_blindness(active, maps, np.radians(60), PLANES)


def direct_power(solver, frequency: float, theta, phi) -> np.ndarray:
    sweep = solve_sweep(solver.cell, frequency, ScanPoints.from_angles(theta, phi), solver=solver)
    return np.abs(sweep.scattering[0, :, 0, 0]) ** 2


def strongest(found, kind="surface wave", order=(-1, 0)):
    (one,) = [b for b in found if b.cause.kind == kind and b.cause.order == order]
    return one


def test_map_holds_solutions_and_smooth_values_between():
    """SECOND METHOD: at its solved points the map is the direct solution, elsewhere nearly so."""
    solver, _ = printed()
    maps, _ = surveyed()
    n = len(maps.axis)
    inside = np.isfinite(maps.reflection[0, ..., 0])
    assert inside.sum() == sum(u * u + v * v < 1 for u in maps.axis for v in maps.axis)
    assert 0.1 < maps.solved[0].sum() / inside.sum() < 0.9
    random = np.random.default_rng(4)
    for solved, error in ((True, 1e-4), (False, 0.03)):
        i, j = np.nonzero(inside & (maps.solved[0] == solved))
        for pick in random.choice(len(i), 6, replace=False):
            scan = ScanPoints.from_cosines(maps.axis[i[pick]], maps.axis[j[pick]])
            true = solve_sweep(solver.cell, BAND[0], scan, solver=solver).scattering[0, 0, 0, 0]
            assert abs(maps.reflection[0, i[pick], j[pick], 0] - true) < error
    assert maps.solved[0, n // 2, n // 2]


def test_main_wave_of_the_map_carries_what_is_not_reflected():
    """CLOSED: power balance; |field|^2 = 4 pi S cos(theta) / lambda^2 (1 - |Gamma|^2) with one wave (Hannan 1964)."""
    maps, _ = surveyed()
    u, v = np.meshgrid(maps.axis, maps.axis, indexing="ij")
    pick = maps.solved[0] & (np.hypot(u, v) < 0.95)
    cosine = np.sqrt(1 - u[pick] ** 2 - v[pick] ** 2)
    ceiling = 4 * np.pi * 0.25 * (BAND[0] / FREQUENCY) ** 2 * cosine
    gain = (np.abs(maps.field[0][pick]) ** 2).sum(axis=-1)
    np.testing.assert_allclose(gain, ceiling * (1 - np.abs(maps.reflection[0][pick][:, 0]) ** 2), atol=2e-4)


def test_blind_direction_is_that_of_the_direct_solver():
    """SECOND METHOD: within 0.1 deg of a direct search along the E plane, at both frequencies."""
    solver, _ = printed()
    one = strongest(surveyed()[1])
    assert one.is_blind and one.mirrored and len(one.peaks) == 2
    for peak in one.peaks:
        assert abs((peak.phi + 0.01) % np.pi) < 0.02  # in the E plane
        found = minimize_scalar(
            lambda theta, f=peak.frequency: -direct_power(solver, f, [theta], [0.0])[0],
            bounds=(peak.theta - 0.05, peak.theta + 0.05), method="bounded", options={"xatol": 1e-5},
        )  # fmt: skip
        assert np.degrees(abs(found.x - peak.theta)) < 0.1
        assert peak.power > 0.9999 and peak.radiated < 1e-4


def test_blindness_is_laid_at_the_surface_wave_of_the_bare_slab():
    """CLOSED: TM0 of the slab from its dispersion relation; the meeting angle differs by 1 deg (common practice)."""
    one = strongest(surveyed()[1])
    (wave,) = guided_waves(Stack((SLAB,), True), K * one.worst.frequency / FREQUENCY)
    assert one.cause.wave == wave.name == "TM0"
    assert one.cause.expected == pytest.approx(wave.beta.real)
    assert abs(one.cause.index - one.cause.expected) < 0.03
    assert one.cause.share > 0.9


def test_blindness_narrower_than_the_grid_is_found():
    """SECOND METHOD: out of the H plane TM0 couples so weakly through the wave (0, -1) that total reflection is under
    0.2 deg wide; a grid of 2 deg by the direct solver passes it over."""
    solver, _ = printed()
    one = strongest(surveyed()[1], order=(0, -1))
    peak = min(one.peaks, key=lambda p: p.width)
    assert one.is_blind and np.degrees(peak.width) < 0.2
    degree = np.radians(1.0)
    theta = peak.theta + degree * np.array([-0.2, 0.0, 0.2])
    power = direct_power(solver, peak.frequency, theta, peak.phi)
    assert power[1] > 0.98 and power[0] < 0.5 and power[2] < 0.5
    around = (np.round(np.degrees([peak.theta, peak.phi]) / 2) * 2)[:, None, None] + 2 * np.stack(
        np.meshgrid([-1, 0, 1], [-1, 0, 1], indexing="ij")
    )
    grid = direct_power(solver, peak.frequency, *(np.radians(a).ravel() for a in around))
    assert grid.max() < 0.5


def test_width_is_where_half_of_the_power_comes_back():
    """SECOND METHOD: both edges by the direct solver."""
    solver, active = printed()
    peak = strongest(surveyed()[1]).peaks[0]
    uv = np.array([peak.u, peak.v])
    fine = peak.theta + np.radians(np.linspace(-9, 9, 181))
    over = direct_power(solver, peak.frequency, fine, peak.phi) > 0.5
    assert np.degrees(peak.width) == pytest.approx(0.1 * over.sum(), abs=0.2)
    assert peak_width(active, peak.frequency, 0.5 * uv, 0) != peak_width(active, peak.frequency, uv, 0)


def test_power_of_a_peak_is_accounted_for():
    """CLOSED: power balance."""
    for one in surveyed()[1]:
        for peak in (*one.peaks, one.worst):
            total = peak.returned.sum() + peak.radiated + peak.lobes + peak.absorbed.sum()
            assert total == pytest.approx(1.0, abs=1e-5)
            assert abs(peak.reflection) ** 2 == pytest.approx(peak.returned[0], abs=1e-9)


def test_reactions_add_up_to_all_of_the_exact_waves():
    """CLOSED: shares add to one, orders are distinct, and the wave (0, 0) runs at sin(theta) k."""
    _, active = printed()
    found = reactions(active, K, K * np.array([0.3, 0.2]))
    assert found.share.sum() == pytest.approx(1.0)
    assert len(np.unique(found.orders, axis=0)) == len(found.orders)
    main = ~found.orders.any(axis=1)
    assert found.index[main] == pytest.approx([np.hypot(0.3, 0.2)])
    order = found.orders[~main][0]
    g = order @ active.model.cell.lattice.reciprocal / K
    assert found.index[~main][0] == pytest.approx(np.hypot(*(np.array([0.3, 0.2]) + g)))


def test_grating_lobe_onset_is_named():
    """CLOSED: in rows 0.7 wavelength apart the lobe (0, -1) starts at sin(theta) = 1/0.7 - 1 in the H plane."""
    lattice = Lattice(np.array([0.5, 0.0]), np.array([0.0, 0.7]))
    solver = CellSolver(strip_dipole(size=0.08, lattice=lattice), FREQUENCY)
    active = ActiveModel(build_reduced(solver, (FREQUENCY, FREQUENCY))[0], [1.0])
    cause = find_cause(active, FREQUENCY, np.array([0.0, 1 / 0.7 - 1 - 1e-5]))
    assert (cause.kind, cause.order, cause.expected) == ("grating lobe", (0, -1), 1.0)


class Circuit:
    """In place of a ReducedModel: a series circuit of 1 ohm at its port, resonant at k = 10 + u."""

    band, reference = (8.0, 12.0), np.array([1.0])
    q = 400.0

    class exact:
        class zone:
            @staticmethod
            def reduce(kt):
                return kt, np.zeros_like(kt)

    class ports:
        @staticmethod
        def excitation(kt):
            return np.ones((len(kt), 1, 1))

    def matrix(self, k, kt):
        centre = 10.0 + kt[:, 0]
        return (1j * self.q * (k / centre - centre / k))[:, None, None]


def test_roots_of_a_circuit():
    """CLOSED: a series circuit of quality factor Q has its root at k0 (1 + j / 2Q)."""
    circuit = Circuit()
    assert quality(circuit, 10.0, np.zeros(2)) == pytest.approx(circuit.q, rel=0.02)
    assert np.isnan(quality(circuit, 8.0, np.zeros(2)))
    row, place = roots_between(circuit, 10.0, 10.0, np.array([[-0.1, 0.0], [1.0, 0.0]]), np.array([[0.3, 0.0]] * 2))
    assert row[0] == 0 and place[0].real == pytest.approx(0.25, abs=0.01) and 0 < abs(place[0].imag) < 0.05


class Hill:
    """In place of an ActiveModel: a crest of known place, 0.002 wide, on a smooth floor."""

    def __init__(self, top=(0.4, 0.3), width=0.002):
        self.top, self.width, self.drive = np.array(top), width, np.ones(1)

    def power(self, frequency, uv):
        away = np.hypot(*(np.asarray(uv) - self.top).T) / self.width
        return (0.9 / (1 + away**2) + 0.05)[:, None]


def test_climbing_reaches_the_top_of_a_narrow_hill():
    """CLOSED: Lorentzian hill."""
    hill = Hill()
    start = Starts(hill.top + np.array([[0.003, -0.002]]), np.array([0.001]), np.array([0]))
    uv, power = climb(hill, 1.0, start)
    np.testing.assert_allclose(uv[0], hill.top, atol=2e-4)
    assert power[0] == pytest.approx(0.95, abs=1e-4)


def test_peaks_of_neighbouring_frequencies_serve_as_starts():
    _, active = printed()
    maps, found = surveyed()
    peak = strongest(found).peaks[0]
    blank = np.full((*maps.reflection.shape[1:3], 1), np.nan)
    start = Starts(np.array([[peak.u + 0.01, peak.v]]), np.array([0.01]), np.array([0]))
    maxima = find_peaks(active, BAND[0], maps.axis, blank, BLIND, start)
    assert np.hypot(maxima.uv[:, 0] - peak.u, maxima.uv[:, 1] - peak.v).min() < 0.1


@cache
def cone():
    _, active = printed()
    maps, found = surveyed()
    level = 10 ** (-5 / 10)
    return free_cone(
        active, maps, found, level=level, wanted=np.radians(40), planes=list(PLANES), polarisation=("x", 0.0)
    )


def test_clear_angles_are_those_of_a_fine_direct_sweep():
    """SECOND METHOD: along two cuts in steps of 0.1 deg."""
    solver, active = printed()
    level, azimuth = 10 ** (-5 / 10), np.array([0.0, np.pi / 4])
    found = first_angles(active, BAND[0], azimuth, level)
    for phi, theta in zip(azimuth, found, strict=True):
        fine = np.radians(np.arange(max(0.0, np.degrees(theta) - 4), np.degrees(theta) + 1, 0.1))
        power = direct_power(solver, BAND[0], fine, phi)
        assert fine[np.argmax(power > level)] == pytest.approx(theta, abs=np.radians(0.1) + ANGLE)


def test_cone_is_the_narrowest_over_band_and_azimuth():
    found = cone()
    assert found.cone == found.theta.min() <= min(theta for _, theta in found.by_plane)
    assert np.radians(30) < found.cone < np.radians(45)
    narrow = strongest(surveyed()[1], order=(0, -1))
    nearest = min(peak.theta for peak in narrow.peaks)
    row = np.argmin(np.abs(found.azimuth - narrow.peaks[0].phi))
    assert found.theta[:, row].min() < nearest  # the narrow one limits its own azimuth


def test_usable_band_ends_where_the_wanted_cone_is_passed():
    """SECOND METHOD: at the end of the band the level is reached on the rim of the cone."""
    solver, _ = printed()
    found = cone()
    assert found.usable is not None
    low, high = found.usable
    assert low == BAND[0] and BAND[0] < high < BAND[1]
    level = direct_power(solver, high, [found.wanted], [0.0])[0]
    assert 10 * np.log10(level) == pytest.approx(-5.0, abs=0.1)


def test_gain_drop_is_that_of_the_direct_solver():
    """SECOND METHOD: worst drop on the rim and half way; far larger with blindness inside."""
    solver, active = printed()
    found = cone()
    drop = []
    for frequency in BAND:
        theta = np.concatenate([[0.0], np.tile(found.cone * np.array([0.5, 1.0]), 8)])
        phi = np.concatenate([[0.0], np.repeat(np.arange(8) * np.pi / 4, 2)])
        power = direct_power(solver, frequency, theta, phi)
        gain = np.cos(theta) * (1 - power)
        drop.append(10 * np.log10(gain[0] / gain.min()))
    assert found.gain_drop == pytest.approx(max(drop), abs=0.05)
    assert found.gain_drop < found.wanted_drop < 40
    everywhere = free_cone(
        active, *surveyed(), level=0.3, wanted=np.radians(55), planes=[], polarisation=("x", 0.0)
    )  # fmt: skip
    assert everywhere.wanted_drop > 30 and everywhere.usable is None


def test_a_thin_slab_blinds_close_to_the_horizon():
    """SECOND METHOD: blindness 0.1 deg wide at 87 deg, as in test_reduced; found though the map ends near there."""
    cell = strip_dipole(0.42, 0.02, 0.15, 0.02, ground=True, size=0.08)
    solver = CellSolver(dataclasses.replace(cell, stack=Stack((Layer(0.01, 3.0),), True)), FREQUENCY)
    active = ActiveModel(build_reduced(solver, (0.95 * FREQUENCY, FREQUENCY))[0], [1.0])
    maps = scan_map(active, np.array([FREQUENCY]))
    found = find_blindness(active, maps, np.radians(60), np.array([0.0]))
    peaks = [p for one in found for p in one.peaks if abs(p.v) < 0.02 and np.degrees(p.theta) > 86]
    assert any(direct_power(solver, FREQUENCY, [p.theta], [p.phi])[0] > 0.999 for p in peaks)
