"""Currents in a VTK file, read back through meshio."""

import numpy as np
import pytest
from scanward.cases.vtk import write_currents
from synthetic import strip_mesh


def test_currents_round_trip(tmp_path):
    import meshio

    mesh, random = strip_mesh(), np.random.default_rng(1)
    surface = random.normal(size=(len(mesh.triangles), 3)) * (1 + 2j)
    along = np.array([1 - 1j, 0.5j])
    path = write_currents(tmp_path / "currents.vtu", mesh, surface, along)
    read = meshio.read(path)
    assert [block.type for block in read.cells] == ["triangle", "line"]
    np.testing.assert_allclose(read.points, mesh.points)
    np.testing.assert_array_equal(read.cells[0].data, mesh.triangles)
    np.testing.assert_allclose(read.cell_data["current_im"][0], surface.imag)
    np.testing.assert_allclose(read.cell_data["current_rms"][0], np.linalg.norm(surface, axis=1))
    np.testing.assert_allclose(read.cell_data["wire_current_re"][1], along.real)
    assert read.cell_data["conductor"][1].tolist() == [1, 1]


def test_currents_that_do_not_fit_are_refused(tmp_path):
    with pytest.raises(ValueError, match="do not fit"):
        write_currents(tmp_path / "x.vtu", strip_mesh(), np.zeros((3, 3)), np.zeros(2))
