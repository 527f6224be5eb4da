"""Meshing by gmsh: exact areas, common edges, attachment points, matched borders. No pinned node counts."""

import builtins
import sys

import numpy as np
import pytest
from mesh_samples import (
    MM,
    SKEW,
    SQUARE,
    border_points,
    build,
    edge_counts,
    has_point,
    mm,
    plate,
    polygon,
    sheet_gap,
    sheet_parts,
    strip,
    wire,
)
from scanward.geometry.conductor import Disc
from scanward.geometry.errors import InputError
from scanward.geometry.inspect import describe_mesh

U_SLOT = ((-8, -8, 3), (8, -8, 3), (8, 8, 3), (1, 8, 3), (1, 2, 3), (-1, 2, 3), (-1, 8, 3), (-8, 8, 3))


def total_area(mesh):
    return mesh.triangle_areas.sum() / MM**2


@pytest.mark.gmsh
def test_size_and_shape_of_elements():
    mesh = build(plate("p", (0, 0, 9), (12, 10)), size=1.0, method="unstructured")
    summary = describe_mesh(mesh)
    assert summary["area"] == pytest.approx(120 * MM**2, rel=1e-9)
    assert 0.5 * MM < summary["edge_min"] and summary["edge_max"] < 1.6 * MM
    assert 200 < summary["triangles"] < 420


@pytest.mark.gmsh
def test_disc_and_ring_have_exact_area():
    for inner in (0.0, 2.0):
        ring = Disc(name="d", centre=mm(0, 0, 3), radius=9 * MM, inner_radius=inner * MM)
        mesh = build(ring, wire("w", (4.1, 0.3, 0), (4.1, 0.3, 3)), method="unstructured")
        assert total_area(mesh) == pytest.approx(np.pi * (81 - inner**2), rel=1e-9)
        assert len(np.intersect1d(mesh.triangles, mesh.segments)) == 1


@pytest.mark.gmsh
def test_polygon_with_a_slot_needs_no_method_and_holds_its_probe():
    mesh = build(polygon("patch", *U_SLOT), wire("probe", (0, -3, 0), (0, -3, 3)))
    assert total_area(mesh) == pytest.approx(244, rel=1e-9)
    assert has_point(mesh, 0, -3, 3) and len(np.intersect1d(mesh.triangles, mesh.segments)) == 1


@pytest.mark.gmsh
def test_crossing_strips_become_one_conductor_and_the_first_keeps_the_middle():
    mesh = build(
        strip("x", (-9, 0, 9), (9, 0, 9), 1.5), strip("y", (0, -9, 9), (0, 9, 9), 1.5), method="unstructured"
    )
    assert total_area(mesh) == pytest.approx(2 * 27 - 2.25, rel=1e-9)
    assert sheet_parts(mesh) == 1
    assert mesh.triangle_areas[mesh.triangle_conductor == 0].sum() == pytest.approx(27 * MM**2, rel=1e-9)


@pytest.mark.gmsh
def test_oblique_contacts_share_edges():
    mesh = build(
        polygon("q", (0, 0, 9), (9, 0, 9), (4, 7, 9)),
        strip("s", (3, 0, 9), (3, -5, 9), 1),
        method="unstructured",
    )
    assert sheet_parts(mesh) == 1
    fin = plate("fin", (0, 0, 7), (4, 10), axis=np.array([1.0, 1, 0]), normal=np.array([1.0, -1, 0]))
    crossing = build(plate("roof", (0, 0, 9), (10, 10)), fin, method="unstructured")
    assert edge_counts(crossing).max() == 4
    assert sheet_parts(crossing) == 1


@pytest.mark.gmsh
def test_gap_line_becomes_mesh_edges():
    mesh = build(
        plate("p", (0, 0, 9), (12, 8)), gaps=[sheet_gap((1.3, 0, 9), span=8.0)], method="unstructured"
    )
    on_line = border_points(mesh, 0, 1.3)
    assert len(on_line) >= 4
    assert np.diff(np.sort(on_line[:, 1])).max() < 3 * MM


@pytest.mark.gmsh
def test_finer_element_size_of_one_conductor():
    mesh = build(
        plate("coarse", (0, 0, 9), (12, 8)),
        strip("fine", (6, 0, 9), (12, 0, 9), 1, element_size=0.5 * MM),
        method="unstructured",
    )
    areas = [mesh.triangle_areas[mesh.triangle_conductor == k].mean() for k in (0, 1)]
    assert areas[0] > 4 * areas[1]


@pytest.mark.gmsh
@pytest.mark.parametrize("lattice", [SKEW, SQUARE], ids=["skew", "square"])
def test_borders_match_modulo_the_lattice(lattice):
    height = lattice.b[1] / MM
    mesh = build(plate("roof", (0, 0, 9), (27, height)), lattice=lattice, method="unstructured")
    assert total_area(mesh) == pytest.approx(27 * height, rel=1e-9)
    left, right = (border_points(mesh, 0, s * 13.5) for s in (-1, 1))
    np.testing.assert_allclose(left[:, 1:], right[:, 1:], atol=1e-9)
    bottom, top = (border_points(mesh, 1, s * height / 2)[:, 0] for s in (-1, 1))
    if lattice is SKEW:
        assert has_point(mesh, 0, height / 2, 9)  # cut where the copy has its corner
    fold = [
        np.unique(np.round(np.mod(x + 13.5 * MM, 27 * MM) / MM, 6) % 27) for x in (bottom + lattice.b[0], top)
    ]
    np.testing.assert_allclose(fold[0], fold[1], atol=1e-5)


@pytest.mark.gmsh
def test_sheet_touching_the_copy_of_another_off_its_corners():
    mesh = build(
        polygon("p", (-13.5, -4, 9), (-5, -4, 9), (-5, 4, 9), (-9, 6, 9), (-13.5, 4, 9)),
        strip("s", (-5, 1, 9), (13.5, 1, 9), 1.5),
        method="unstructured",
    )
    assert has_point(mesh, -13.5, 1.75, 9) and has_point(mesh, -13.5, 0.25, 9)


@pytest.mark.gmsh
def test_skewed_unit_of_notch_elements_connected_across_the_cell():
    half = [(-13.5, 0, 0), (-0.5, 0, 0), (-0.5, 0, 5), (-1, 0, 10), (-4, 0, 20), (-13.5, 0, 20)]
    other = [(-x, y, z) for x, y, z in half]
    mesh = build(polygon("left", *half), polygon("right", *other))
    left, right = border_points(mesh, 0, -13.5), border_points(mesh, 0, 13.5)
    np.testing.assert_allclose(left[:, 2], right[:, 2], atol=1e-9)


@pytest.mark.gmsh
def test_session_is_closed_even_after_a_failure(monkeypatch):
    import gmsh
    from scanward.geometry import unstructured

    def fail(*_):
        raise Exception("kernel said no")

    monkeypatch.setattr(unstructured, "_set_sizes", fail)
    with pytest.raises(InputError, match="kernel said no"):
        build(plate("p", (0, 0, 9), (12, 8)), method="unstructured")
    assert not gmsh.isInitialized()


@pytest.mark.parametrize("fault", [ImportError("no module"), OSError("libGLU.so.1: cannot open")])
def test_missing_gmsh_names_the_system_libraries(monkeypatch, fault):
    real = builtins.__import__

    def no_gmsh(name, *args, **kwargs):
        if name == "gmsh":
            raise fault
        return real(name, *args, **kwargs)

    monkeypatch.delitem(sys.modules, "gmsh", raising=False)
    monkeypatch.setattr(builtins, "__import__", no_gmsh)
    with pytest.raises(InputError, match=r"cannot be loaded.*libglu1-mesa libgl1 .*libgomp1"):
        build(polygon("patch", *U_SLOT))


@pytest.mark.gmsh
@pytest.mark.parametrize("sizes", [(2, 0.6), (0.6, 2)])
def test_border_between_a_coarse_and_a_fine_sheet_matches(sizes):
    coarse, fine = (s * MM for s in sizes)
    mesh = build(
        plate("left", (-9.5, 0, 9), (8, 10), element_size=coarse),
        plate("right", (9.5, 0, 9), (8, 10), element_size=fine),
        method="unstructured",
    )
    left, right = border_points(mesh, 0, -13.5), border_points(mesh, 0, 13.5)
    np.testing.assert_allclose(left[:, 1:], right[:, 1:], atol=1e-9)
