"""Meshes from files: formats, units, merging, and what is refused."""

import meshio
import numpy as np
import pytest
from mesh_samples import MM, SQUARE, build, mm, wire
from scanward.geometry.conductor import MeshFile
from scanward.geometry.errors import InputError
from scanward.geometry.structured import rectangle_mesh

TOLERANCE = 1e-9


def sheet(points_per_side=5):
    """A 10 x 8 plate in millimetres, as a file would hold it."""
    uv, triangles = rectangle_mesh(np.linspace(0, 10, points_per_side), np.linspace(0, 8, points_per_side))
    return np.column_stack([uv, np.zeros(len(uv))]), triangles


def write(path, points, cells, **options):
    meshio.write(path, meshio.Mesh(points, cells), **options)
    return path


def load(path, **more):
    from scanward.geometry.mesh_file import read_mesh_file

    return read_mesh_file(MeshFile(name="import", path=path, scale=MM, **more), TOLERANCE)


FORMATS = {
    "msh2": ("m.msh", {"file_format": "gmsh22"}),
    "msh4": ("m.msh", {"file_format": "gmsh"}),
    "msh4 text": ("m.msh", {"file_format": "gmsh", "binary": False}),
    "vtk": ("m.vtk", {}),
    "vtu": ("m.vtu", {}),
    "stl": ("m.stl", {}),
    "stl text": ("m.stl", {"binary": False}),
}


@pytest.mark.parametrize("name", FORMATS)
def test_formats_give_the_same_connected_sheet(tmp_path, name, capsys):
    file, options = FORMATS[name]
    points, triangles = sheet()
    path = write(tmp_path / file, points, [("triangle", triangles)], **options)
    got, tri, lines = load(path, offset=mm(-5, -4, 6))
    assert got.shape == (25, 3) and len(tri) == 32 and len(lines) == 0
    np.testing.assert_allclose(got.min(0), mm(-5, -4, 6), atol=1e-8)
    np.testing.assert_allclose(got.max(0), mm(5, 4, 6), atol=1e-8)
    mesh = build(MeshFile(name="import", path=path, scale=MM, offset=mm(-5, -4, 6)))
    assert mesh.triangle_areas.sum() == pytest.approx(80 * MM**2, rel=1e-6)


def test_wire_ends_on_an_imported_vertex(tmp_path):
    points, triangles = sheet()
    path = write(tmp_path / "m.vtu", points, [("triangle", triangles)])
    mesh = build(
        MeshFile(name="import", path=path, scale=MM, offset=mm(-5, -4, 6)), wire("w", (0, 0, 0), (0, 0, 6))
    )
    assert len(np.intersect1d(mesh.triangles, mesh.segments)) == 1


def test_quads_are_cut_along_the_shorter_diagonal(tmp_path):
    corners = np.array([[0, 0, 0], [4, 0, 0], [6, 3, 0], [2, 3, 0.0]])
    _, triangles, _ = load(write(tmp_path / "m.vtu", corners, [("quad", np.array([[0, 1, 2, 3]]))]))
    edges = {tuple(e) for e in np.sort(triangles[:, [0, 1, 1, 2, 2, 0]].reshape(-1, 2), axis=1).tolist()}
    assert (1, 3) in edges and (0, 2) not in edges


def test_lines_become_wires(tmp_path):
    points = np.array([[0, 0, 0], [0, 0, 3], [0, 0, 6.0], [9, 9, 9]])
    path = write(tmp_path / "m.vtu", points, [("line", np.array([[0, 1], [1, 2]]))])
    mesh = build(MeshFile(name="import", path=path, scale=MM, wire_radius=0.2 * MM), lattice=SQUARE)
    assert len(mesh.points) == 3  # the unused point is dropped
    np.testing.assert_allclose(mesh.segment_lengths, 3 * MM)
    np.testing.assert_allclose(mesh.segment_radius, 0.2 * MM)


def test_lines_without_radius_are_refused(tmp_path):
    points = np.array([[0, 0, 0], [0, 0, 3.0]])
    path = write(tmp_path / "m.vtu", points, [("line", np.array([[0, 1]]))])
    with pytest.raises(InputError, match="1 lines of the file become wires, but wire_radius is None"):
        load(path)


def test_border_lines_of_sheets_are_left_out(tmp_path):
    points, triangles = sheet()
    border = np.array([[k, k + 1] for k in range(4)])
    _, tri, lines = load(write(tmp_path / "m.vtu", points, [("triangle", triangles), ("line", border)]))
    assert len(tri) == 32 and len(lines) == 0


@pytest.mark.parametrize("file", ["m.msh", "m.vtk", "m.vtu", "m.stl", "m.unheard"])
def test_rubbish_is_refused_with_the_path_and_never_ends_the_process(tmp_path, file, capsys):
    path = tmp_path / file
    path.write_text("this is no mesh\n")
    with pytest.raises(InputError, match=rf"{file}' cannot be read as a mesh"):
        load(path)
    assert capsys.readouterr().out == ""


def test_absent_file(tmp_path):
    with pytest.raises(InputError, match=r"there is no file '.*gone.msh'"):
        load(tmp_path / "gone.msh")


def test_other_elements_are_refused(tmp_path):
    points = np.array([[0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1.0]])
    path = write(tmp_path / "m.vtu", points, [("tetra", np.array([[0, 1, 2, 3]]))])
    with pytest.raises(InputError, match=r"elements of type 'tetra'.*triangle, quad, line"):
        load(path)


def test_empty_and_infinite_files_are_refused(tmp_path):
    points = np.array([[0, 0, 0], [1, 0, 0], [0, 1, 0.0]])
    path = write(tmp_path / "m.vtu", points, [("vertex", np.array([[0], [1]]))])
    with pytest.raises(InputError, match="neither triangles nor lines"):
        load(path)
    points[1, 0] = np.inf
    path = write(tmp_path / "n.vtu", points, [("triangle", np.array([[0, 1, 2]]))])
    with pytest.raises(InputError, match="infinite or missing"):
        load(path)


def test_edge_with_three_triangles_is_refused(tmp_path):
    points = np.array([[0, 0, 0], [4, 0, 0], [2, 3, 0], [2, -3, 0], [2, 0, 3.0]])
    cells = [("triangle", np.array([[0, 1, 2], [0, 1, 3], [0, 1, 4]]))]
    with pytest.raises(InputError, match="3 triangles of the file share the edge"):
        load(write(tmp_path / "m.vtu", points, cells))
