"""Printed dipoles and patches against the independent spectral method and finite elements (issue: 1 % of |Z|)."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from cells import FREQUENCY, SQUARE, make, point, sheet_gap, strip_dipole
from fine_meshes import FINE, Flat, Grading, fine_cell
from reference_fem import GIVEN, GIVEN_GAP, solve_strip_over_ground
from reference_patches import Box, Ladder, PatchArray, Rectangle
from reference_sinusoid import wave_vector
from reference_spectral import SLAB, solve_strip
from reference_spectral import Strip as ReferenceStrip
from scanward.geometry.cell import UnitCell
from scanward.geometry.conductor import Plate, Strip
from scanward.geometry.mesher import mesh_conductors
from scanward.geometry.stack import Layer, Stack
from scanward.solver.plane_wave import plane_wave_response
from scanward.solver.result import ScanPoints
from scanward.solver.sweep import CellSolver, solve_sweep

DIRECTIONS = (
    (0, 0), (25, 0), (50, 0), (30, 90), (60, 90), (20, 45), (40, 30), (50, 60), (35, 70), (55, 15),
)  # fmt: skip
"""theta, phi in degrees: both principal planes and five directions off them."""


def scan_of(directions) -> ScanPoints:
    return ScanPoints.from_angles(*np.radians(np.array(directions, dtype=float).T))


def solved(cell: UnitCell, directions) -> np.ndarray:
    return solve_sweep(cell, [FREQUENCY], scan_of(directions)).impedance[0]


def reference(layers, flats, directions, along=30, across=6, orders=(80, 80)) -> np.ndarray:
    """Impedances of the gaps by `reference_patches`, (n_scan, n_gap, n_gap); flat i lies on top of layer i."""
    sheets = tuple(Rectangle(i, f.length, f.width, f.centre, along, across) for i, f in enumerate(flats))
    boxes = tuple(Box(i, f.gap[1], f.width, (f.gap[0], 0.0)) for i, f in enumerate(flats) if f.gap)
    array = PatchArray(Ladder(layers), sheets, boxes, orders=orders)
    return np.array([array.impedance(wave_vector(*np.radians(d))) for d in directions])


def stack_of(layers) -> Stack:
    return Stack(tuple(Layer(thickness, permittivity) for permittivity, thickness in layers), True)


PATCHES = {
    "0.05 of 2.55": (((2.55, 0.05),), Flat(0.28, 0.25, 0.05, (0.08, 0.04))),
    "0.03 of 2.2": (((2.2, 0.03),), Flat(0.31, 0.2, 0.03, (0.09, 0.03))),
}
"""Near resonance, |Z| is 3 to 12 ohm of a reactance that changes by 170 ohm times the relative change of frequency."""


def test_patch_against_the_spectral_method():
    """SECOND METHOD, tests/reference_patches.py; 1 % of |Z| (measured 0.5 to 0.7 %, 723 unknowns)."""
    layers, flat = PATCHES["0.05 of 2.55"]
    directions = [DIRECTIONS[0], DIRECTIONS[6]]
    z = solved(fine_cell([flat], stack_of(layers), Grading()), directions)
    assert np.abs(z / reference(layers, [flat], directions) - 1).max() < 0.01


def test_patch_on_a_very_thin_layer():
    """SECOND METHOD: 0.005 of 2.55, cells up to ten times as long as the layer is thick; 1 % of |Z|, measured 0.1 %
    (and 0.05 % with cells half as long)."""
    layers, flat, directions = ((2.55, 0.005),), Flat(0.27, 0.2, 0.005, (0.08, 0.03)), [DIRECTIONS[0], DIRECTIONS[6]]
    z = solved(fine_cell([flat], stack_of(layers), Grading(growth=5.0)), directions)
    assert np.abs(z / reference(layers, [flat], directions) - 1).max() < 0.01


@pytest.mark.slow
@pytest.mark.parametrize("name", PATCHES)
def test_patch_at_ten_directions(name):
    """SECOND METHOD; measured 0.5 % (2.55) and 0.1 % (2.2) with cells that grow by 2.5 from 0.0001 at the edges."""
    layers, flat = PATCHES[name]
    z = solved(fine_cell([flat], stack_of(layers), FINE), DIRECTIONS)
    assert np.abs(z / reference(layers, [flat], DIRECTIONS) - 1).max() < 0.0075


@pytest.mark.slow
@pytest.mark.parametrize("name", PATCHES)
def test_patch_with_the_meshers_own_grading_is_off_in_frequency(name):
    """How far the default first cell (1/20 of the element size) takes a patch: its reactance is that of a patch tuned
    0.2 % away, which so near resonance is 3 and 6 % of |Z|. Measured here -0.19 and -0.22 %, with elements of 0.03
    instead of 0.05 -0.12 and -0.11 %; the first cell decides, the others hardly matter. OWN RUN"""
    layers, flat = PATCHES[name]
    assert flat.gap is not None
    plate = Plate(name="patch", centre=point(0, 0, flat.height), size=np.array([flat.length, flat.width]))
    gap = sheet_gap((flat.gap[0], 0, flat.height), flat.gap[1], flat.width)
    mesh = make([plate], [gap], ground=True, size=0.05)
    z = solved(dataclasses.replace(mesh, stack=stack_of(layers)), [(0, 0)])[0, 0, 0]
    at = [1.0, 0.995]
    exact = [
        PatchArray(
            Ladder(layers),
            (Rectangle(0, flat.length, flat.width, along=30, across=6),),
            (Box(0, flat.gap[1], flat.width, (flat.gap[0], 0.0)),),
            orders=(80, 80),
            k=2 * np.pi * f,
        ).impedance(np.zeros(2))[0, 0]
        for f in at
    ]
    slope = (exact[0] - exact[1]).imag / (at[0] - at[1])
    assert abs((z - exact[0]).imag / slope) < 0.003


@pytest.mark.slow
def test_stacked_patches_against_the_spectral_method():
    """SECOND METHOD: the lower patch fed, the upper one larger and off centre, on foam; measured 0.1 to 0.2 %."""
    layers = ((2.2, 0.04), (1.07, 0.06))
    flats = [Flat(0.3, 0.24, 0.04, (0.08, 0.04)), Flat(0.34, 0.28, 0.1, None, (0.01, 0.02))]
    z = solved(fine_cell(flats, stack_of(layers), Grading()), DIRECTIONS)
    assert np.abs(z / reference(layers, flats, DIRECTIONS, 26, 6, (60, 60)) - 1).max() < 0.005


@pytest.mark.slow
def test_two_fed_patches_against_the_spectral_method():
    """SECOND METHOD: all four impedances of two fed patches under a cover, over the self impedances; measured 0.6 %
    at 50 degrees in the E plane and 0.2 % elsewhere."""
    layers = ((2.55, 0.05), (3.8, 0.03), (1.5, 0.04))
    flats = [Flat(0.24, 0.2, 0.05, (0.05, 0.04)), Flat(0.2, 0.26, 0.08, (-0.03, 0.04), (-0.02, 0.01))]
    directions = [DIRECTIONS[i] for i in (0, 2, 6)]
    z = solved(fine_cell(flats, stack_of(layers), Grading(gap=0.002, largest=(0.02, 0.05))), directions)
    exact = reference(layers, flats, directions, 26, 6, (60, 60))
    own = np.sqrt(np.abs(np.einsum("sii->si", exact)))
    assert (np.abs(z - exact) / (own[:, :, None] * own[:, None, :])).max() < 0.01


@pytest.mark.parametrize(
    ("grading", "limit"), [(Grading(), 0.025), pytest.param(FINE, 0.012, marks=pytest.mark.slow)], ids=["quick", "fine"]
)
def test_screen_of_patches_reflects_as_in_the_spectral_method(grading, limit):
    """SECOND METHOD: passive reflection of a screen near resonance, both polarisations and between them; phase to a
    degree or so (the phase turns by 3 degrees per 0.1 % of frequency)."""
    layers, directions = ((2.55, 0.05),), [(0, 20), (30, 0), (40, 30), (60, 75)]
    cell = fine_cell([Flat(0.26, 0.25, 0.05)], stack_of(layers), grading)
    response = plane_wave_response(CellSolver(cell, FREQUENCY), [FREQUENCY], scan_of(directions))
    up = [response.table.index((0, 0), 1, p) for p in (0, 1)]
    screen = PatchArray(Ladder(layers), (Rectangle(0, 0.26, 0.25, along=24, across=6),), orders=(80, 80))
    for s, (theta, phi) in enumerate(directions):
        exact = screen.reflection(wave_vector(np.radians(theta), np.radians(phi)), np.radians(phi))
        assert np.abs(response.waves[0, s][up] - exact).max() < limit


def printed_dipole(length, width, gap, *, size, refinement=1.0) -> UnitCell:
    """Strip on 0.19 of permittivity 2.55."""
    cell = strip_dipole(length, width, 0.19, gap, size=size)
    if refinement != 1.0:
        strip = Strip(name="arm", start=point(-length / 2, 0, 0.19), end=point(length / 2, 0, 0.19), width=width)
        gaps = [cell.ports[0].gap]
        finer = mesh_conductors([strip], SQUARE, ground=True, element_size=size, gaps=gaps, refinement=refinement)
        cell = dataclasses.replace(cell, mesh=finer)
    return dataclasses.replace(cell, stack=Stack((Layer(0.19, 2.55),), True))


@pytest.mark.slow
def test_printed_dipole_at_ten_directions():
    """SECOND METHOD, 1 % of |Z|; measured 0.35 % at 60 degrees in the H plane and 0.2 % elsewhere."""
    exact = np.array(
        [
            solve_strip(ReferenceStrip(0.39, 0.01, 0.01), 0.5 * np.eye(2), wave_vector(*np.radians(d)), SLAB)
            for d in DIRECTIONS
        ]
    )
    z = solved(printed_dipole(0.39, 0.01, 0.01, size=0.02, refinement=1.5), DIRECTIONS)[:, 0, 0]
    assert np.abs(z / exact - 1).max() < 0.01


def test_printed_strip_against_the_given_finite_elements():
    """SECOND METHOD (checks.md section 4): strip .45 by .02 on 2.55, d .19, 124.9+j12.4 at broadside; 3 %. Its gap is
    not stated; `reference_fem.GIVEN_GAP` fits."""
    permittivity, height, given = GIVEN[1]
    assert (permittivity, height) == (2.55, 0.19)
    z = solved(printed_dipole(0.45, 0.02, GIVEN_GAP, size=0.02), [(0, 0)])[0, 0, 0]
    assert abs(z / given - 1) < 0.03


@pytest.mark.slow
def test_printed_strip_against_finite_elements():
    """SECOND METHOD: scikit-fem, second-order edge elements, broadside TEM cell with the slab; 3 % of |Z|."""
    exact = solve_strip_over_ground(0.45, 0.02, 0.5, 0.5, 0.19, 0.02, permittivity=2.55)
    z = solved(printed_dipole(0.45, 0.02, 0.02, size=0.02), [(0, 0)])[0, 0, 0]
    assert abs(z / exact - 1) < 0.03
