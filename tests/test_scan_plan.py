"""Scan plans: cuts, map, merging. All values CLOSED (trigonometry)."""

import numpy as np
import pytest
from scanward.cases.scan_plan import build_scan_plan
from scanward.geometry.errors import InputError

DEGREE = np.pi / 180


def plan(**more):
    given = {"cone": 60 * DEGREE, "planes": np.radians([0.0, 45.0, 90.0]), "step": 10 * DEGREE, "grid": 0}
    return build_scan_plan(**{**given, **more})


def test_cuts_share_broadside():
    result = plan()
    assert len(result.points) == 3 * 12 + 1
    shared = {int(indices[6]) for _, indices in result.planes}
    assert len(shared) == 1
    assert result.points.u[shared.pop()] == 0


def test_a_cut_runs_over_signed_theta():
    result = plan()
    (phi, indices), theta = result.planes[1], result.plane_theta[1]
    assert theta / DEGREE == pytest.approx(np.arange(-60, 61, 10))
    assert result.points.u[indices] == pytest.approx(np.sin(theta) * np.cos(phi), abs=1e-15)
    assert result.points.v[indices] == pytest.approx(np.sin(theta) * np.sin(phi), abs=1e-15)
    assert result.points.phi[indices[0]] == pytest.approx(phi + np.pi)


def test_the_end_of_the_cone_is_always_on_the_cut():
    theta = plan(cone=25 * DEGREE).plane_theta[0]
    assert theta / DEGREE == pytest.approx([-25, -20, -10, 0, 10, 20, 25])
    assert plan(cone=5 * DEGREE).plane_theta[0] / DEGREE == pytest.approx([-5, 0, 5])


def test_the_map_covers_the_cone_and_shares_points():
    alone = plan(planes=np.zeros(0), grid=9)
    inside = np.hypot(*np.meshgrid(alone.map_u, alone.map_v, indexing="ij")) <= np.sin(60 * DEGREE) + 1e-12
    np.testing.assert_array_equal(alone.map_index >= 0, inside)
    i, j = 2, 5
    assert alone.points.u[alone.map_index[i, j]] == alone.map_u[i]
    assert alone.points.v[alone.map_index[i, j]] == alone.map_v[j]
    both = plan(grid=9)
    # broadside, and the four ends of the two principal cuts
    assert len(both.points) == len(plan().points) + len(alone.points) - 5


def test_directions_never_repeat():
    result = plan(grid=21, points=np.array([[0.0, 1.0], [10 * DEGREE, 0.0]]), cosines=np.array([[0.0, 0.0]]))
    u, v = result.points.u, result.points.v
    apart = np.hypot(u[:, None] - u, v[:, None] - v) + np.eye(len(u))
    assert apart.min() > 1e-8
    assert len(result.points) == len(plan(grid=21).points)


def test_cosines_reach_invisible_space():
    result = plan(planes=np.zeros(0), cosines=np.array([[1.2, 0.0], [0.3, 0.4]]))
    assert np.isnan(result.points.theta[0])
    assert result.points.theta[1] == pytest.approx(30 * DEGREE)


@pytest.mark.parametrize(
    ("more", "message"),
    [
        ({"grid": 10}, "10 is even"),
        ({"planes": np.zeros(0)}, "no scan direction is left"),
        ({"step": 0.01 * DEGREE, "planes": np.radians([0.0, 45.0, 90.0])}, "more than 20000 directions"),
    ],
)
def test_refusals(more, message):
    with pytest.raises(InputError, match=message):
        plan(**more)
