"""Grids: formulas against their tables, the Galerkin solution against both, Babinet and passivity."""

import pytest
from reference_grids import (
    CAPACITIVE_STRIPS,
    INDUCTIVE_STRIPS,
    WIRE_GRID,
    babinet_defect,
    passivity_defect,
    reflection_of_reactance,
    reflection_of_susceptance,
    strip_grid_reactance,
    strip_grid_reflection,
    strip_grid_susceptance,
    wire_grid_reactance,
)


@pytest.mark.parametrize("grid", WIRE_GRID)
def test_wire_grid(grid):
    gamma = reflection_of_reactance(wire_grid_reactance(*grid))
    assert abs(abs(gamma) - WIRE_GRID[grid]) < 6e-6  # CLOSED


@pytest.mark.parametrize("width", INDUCTIVE_STRIPS)
def test_inductive_strips(width):
    x = strip_grid_reactance(0.1, width)
    assert abs(x - INDUCTIVE_STRIPS[width]) < 6e-6  # MEMORY + CLOSED
    exact = strip_grid_reflection(0.1, width, "along")
    assert abs(exact - reflection_of_reactance(x)) < 0.02 * abs(exact)


@pytest.mark.parametrize("gap", CAPACITIVE_STRIPS)
def test_capacitive_strips(gap):
    b = strip_grid_susceptance(0.1, gap)
    assert abs(b - CAPACITIVE_STRIPS[gap]) < 6e-6  # MEMORY + CLOSED
    exact = strip_grid_reflection(0.1, 1 - gap, "across")
    assert abs(exact - reflection_of_susceptance(b)) < 0.02 * abs(exact)


@pytest.mark.parametrize("spacing, width", [(0.1, 0.1), (0.3, 0.5), (0.6, 0.35)])
def test_galerkin_strips_keep_power_and_babinet(spacing, width):
    along = strip_grid_reflection(spacing, width, "along")
    across = strip_grid_reflection(spacing, 1 - width, "across")
    assert passivity_defect(along) < 1e-12  # CLOSED
    assert passivity_defect(across) < 1e-12  # CLOSED
    assert abs(babinet_defect(along, across)) < 1e-4  # CLOSED; mesh-limited


def test_narrow_strips_act_as_wires_of_a_quarter_of_their_width():
    # CLOSED: the equivalent radius of a flat strip is w/4
    strips = strip_grid_reflection(0.3, 0.02, "along")
    wires = reflection_of_reactance(wire_grid_reactance(0.3, 0.005))
    assert abs(strips - wires) < 1e-3
