"""The ready-made cases read, stay small, say that they are invented, and give the origin of every number."""

from pathlib import Path

import numpy as np
import pytest
import scanward.cases
from scanward.cases.read import parse_case, read_case

READY = sorted(Path(scanward.cases.__file__).parent.glob("*.toml"))


@pytest.fixture(params=READY, ids=[path.stem for path in READY], scope="module")
def job(request):
    return read_case(request.param)


def test_there_are_at_least_six():
    assert len(READY) >= 6


def test_the_mesh_is_modest(job):
    mesh = job.cell.mesh
    assert 0 < 1.5 * len(mesh.triangles) + len(mesh.segments) < 600
    assert len(job.frequency) * len(job.scan.points) < 1000


def test_it_is_marked_invented_and_stays_free_of_grating_lobes_in_its_limits(job):
    assert 'notes = "\\nInvented' in job.text or 'notes = "Invented' in job.text
    k = 2 * np.pi * job.frequency[-1] / 299792458.0
    assert job.limits and job.limits[0].cone < job.cell.lattice.grating_lobe_free_cone(k)


def test_every_expected_number_has_an_origin_with_a_label(job):
    labels = ("CLOSED", "SECOND METHOD", "PUBLISHED", "MEMORY", "PRACTICE", "OWN RUN")
    assert job.expect
    assert all(expected.origin.startswith(labels) for expected in job.expect)


def test_the_resolved_text_is_the_same_case(job):
    again = parse_case(job.text)
    assert again.text == job.text
    np.testing.assert_array_equal(again.cell.mesh.points, job.cell.mesh.points)
