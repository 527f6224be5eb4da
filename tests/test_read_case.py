"""Case files read into jobs: SI values, defaults, resolved text, overrides, gaps, scan plan."""

import pickle

import numpy as np
import pytest
from scanward.cases.quantity import SPEED_OF_LIGHT
from scanward.cases.read import parse_case, read_case
from scanward.geometry.errors import InputError

CASE = """
title = "Invented dipole"
ground = true
[parameters]
f0 = "5.4 GHz"
wave = "c0 / f0"
arm = "12.6 mm"
[band]
start = "5 GHz"
stop = "5.8 GHz"
points = 5
[lattice]
a = ["30 mm", 0]
b = ["15 mm", "26 mm"]
[[conductor]]
kind = "wire"
name = "dipole"
points = [["-arm", 0, "wave/4"], ["arm", 0, "wave/4"]]
radius = "0.3 mm"
[[port]]
name = "feed"
conductor = "dipole"
at = [0, 0, "wave/4"]
[limits]
reflection = "-10 dB"
efficiency = "90 %"
cone = "45 deg"
"""

STRIP = (
    CASE[: CASE.index("[[conductor]]")]
    + """
[[conductor]]
kind = "strip"
name = "dipole"
start = ["-arm", 0, "wave/4"]
end = ["arm", 0, "wave/4"]
width = "1 mm"
[[port]]
name = "feed"
conductor = "dipole"
along = 0.5
"""
)

PLATE = (
    CASE[: CASE.index("[[conductor]]")]
    + """
[[conductor]]
kind = "plate"
name = "patch"
centre = [0, 0, "4 mm"]
size = ["22 mm", "16 mm"]
[[conductor]]
kind = "wire"
name = "probe"
points = [["6 mm", 0, "4 mm"], ["6 mm", 0, 0]]
radius = "0.3 mm"
[[port]]
name = "feed"
conductor = "probe"
base = true
"""
)


def test_values_are_in_si():
    job = parse_case(CASE)
    assert job.title == "Invented dipole"
    assert job.frequency == pytest.approx([5e9, 5.2e9, 5.4e9, 5.6e9, 5.8e9])
    assert job.cell.ground and job.path is None
    assert job.cell.lattice.b == pytest.approx([0.015, 0.026])
    points = job.cell.mesh.points
    assert np.ptp(points[:, 0]) == pytest.approx(0.0252)
    assert points[:, 2] == pytest.approx(SPEED_OF_LIGHT / 5.4e9 / 4)
    assert job.element_size == pytest.approx(SPEED_OF_LIGHT / 5.8e9 / 20)
    assert job.tolerance == 1e-6
    assert [(x.quantity, x.value) for x in job.limits] == [("reflection", -10.0), ("efficiency", 0.9)]
    assert job.limits[0].cone == pytest.approx(np.pi / 4) and job.scan.cone == pytest.approx(np.pi / 3)


def test_the_resolved_text_is_the_same_case():
    for text in (CASE, STRIP, PLATE):
        job = parse_case(text)
        again = parse_case(job.text)
        assert again.text == job.text
        assert "arm" not in job.text and "parameters" not in job.text
        np.testing.assert_array_equal(again.cell.mesh.points, job.cell.mesh.points)
        np.testing.assert_array_equal(again.cell.ports[0].gap.centre, job.cell.ports[0].gap.centre)
        np.testing.assert_array_equal(again.scan.points.u, job.scan.points.u)
        assert again.limits == job.limits


def test_the_resolved_text_keeps_awkward_words():
    job = parse_case(CASE.replace('"Invented dipole"', '"a \\"b\\" \\\\ \\n \\u0007 ü"'))
    assert job.title == 'a "b" \\ \n \x07 ü' and parse_case(job.text).title == job.title


def test_overrides_replace_parameters(tmp_path):
    path = tmp_path / "case.toml"
    path.write_text(CASE)
    job = read_case(path, {"arm": "13 mm"})
    assert np.ptp(job.cell.mesh.points[:, 0]) == pytest.approx(0.026)
    assert job.path == path
    with pytest.raises(InputError, match=r"case\.toml: \[parameters\]: .*Did you mean 'arm'"):
        read_case(path, {"arms": "13 mm"})


def test_remesh_scales_the_elements_and_keeps_the_gap():
    job = parse_case(STRIP)
    fine = job.remesh(0.5)
    assert len(fine.mesh.triangles) == 4 * len(job.cell.mesh.triangles)
    assert fine.ports[0].gap.width == job.cell.ports[0].gap.width == pytest.approx(1e-3)
    assert fine.mesh.triangle_areas.sum() == pytest.approx(0.0252e-3)


def test_a_job_can_be_sent_to_another_process():
    again = pickle.loads(pickle.dumps(parse_case(STRIP)))
    assert len(again.remesh(2.0).mesh.triangles) < len(again.cell.mesh.triangles)


def test_wire_gap_defaults_to_four_radii_along_the_wire():
    gap = parse_case(CASE).cell.ports[0].gap
    assert (gap.kind, gap.width, gap.span) == ("wire", pytest.approx(1.2e-3), pytest.approx(0.6e-3))
    assert gap.direction == pytest.approx([1, 0, 0])


def test_reverse_turns_the_gap():
    gap = parse_case(CASE.replace("at = [0", "reverse = true\nat = [0")).cell.ports[0].gap
    assert gap.direction == pytest.approx([-1, 0, 0])


@pytest.mark.parametrize("along", ["0.25", '"25 %"', '"6.3 mm"', '"arm/2"'])
def test_along_is_a_length_or_a_fraction(along):
    gap = parse_case(STRIP.replace("along = 0.5", f"along = {along}")).cell.ports[0].gap
    assert gap.centre == pytest.approx([-6.3e-3, 0, SPEED_OF_LIGHT / 5.4e9 / 4])
    assert gap.kind == "sheet" and gap.span == pytest.approx(1e-3)
    assert abs(gap.across) == pytest.approx([0, 1, 0])


def test_base_gap_starts_at_the_ground_and_points_up():
    gap = parse_case(PLATE).cell.ports[0].gap
    assert gap.centre == pytest.approx([6e-3, 0, 0.6e-3]) and gap.direction == pytest.approx([0, 0, 1])


def test_a_gap_line_across_a_plate():
    line = 'line = [[0, "-8 mm", "4 mm"], [0, "8 mm", "4 mm"]]\nwidth = "1 mm"'
    text = PLATE.replace('conductor = "probe"\nbase = true', f'conductor = "patch"\n{line}')
    gap = parse_case(text).cell.ports[0].gap
    assert gap.kind == "sheet" and gap.span == pytest.approx(16e-3) and gap.width == pytest.approx(1e-3)
    # normal z x (p2 - p1) along y = -x
    assert gap.direction == pytest.approx([-1, 0, 0]) and gap.centre == pytest.approx([0, 0, 4e-3])


def test_drive_and_load():
    text = CASE.replace(
        'at = [0, 0, "wave/4"]', 'at = [0, 0, "wave/4"]\ndrive = "2 @ 90 deg"\nresistance = "100 ohm"'
    )
    text = text.replace("[limits]", '[[load]]\nname = "tip"\nconductor = "dipole"\nalong = "5 mm"\n'
                        'inductance = "1.2 nH"\nresistance = "3 ohm"\n[limits]')  # fmt: skip
    cell = parse_case(text).cell
    assert cell.ports[0].drive == pytest.approx(2j) and cell.ports[0].resistance == 100
    assert cell.loads[0].impedance(1e9) == pytest.approx(3 + 2j * np.pi * 1.2)
    assert cell.loads[0].capacitance is None


@pytest.mark.parametrize(
    ("co", "expected"),
    [('"x"', ("x", 0)), ('"y"', ("y", np.pi / 2)), ('"30 deg"', ("x", np.pi / 6)), ('"left"', ("left", 0))],
)
def test_polarisation(co, expected):
    job = parse_case(CASE + f"[polarisation]\nco = {co}\n")
    assert job.co_polar == expected[0]
    assert job.co_polar_angle == pytest.approx(expected[1])


def test_expectations_join_the_scan_plan():
    text = (
        CASE
        + """
[[expect]]
quantity = "resistance"
value = "101 ohm"
tolerance = "2 ohm"
origin = "invented"
frequency = "5.4 GHz"
theta = "17 deg"
phi = "33 deg"
"""
    )
    job = parse_case(text)
    (expected,) = job.expect
    assert (expected.value, expected.tolerance, expected.port) == (101, 2, None)
    s = np.sin(np.radians(17))
    wanted = s * np.cos(np.radians(33)), s * np.sin(np.radians(33))
    assert np.hypot(job.scan.points.u - wanted[0], job.scan.points.v - wanted[1]).min() < 1e-12
    assert parse_case(job.text).expect == job.expect


def vtk(points, triangles):
    """Legacy ASCII VTK text of a triangle mesh."""
    rows = [" ".join(map(str, p)) for p in points] + [f"CELLS {len(triangles)} {4 * len(triangles)}"]
    rows += (
        [f"3 {a} {b} {c}" for a, b, c in triangles]
        + [f"CELL_TYPES {len(triangles)}"]
        + ["5"] * len(triangles)
    )
    head = (
        f"# vtk DataFile Version 3.0\nsheet\nASCII\nDATASET UNSTRUCTURED_GRID\nPOINTS {len(points)} double\n"
    )
    return head + "\n".join(rows) + "\n"


def test_mesh_file_beside_the_case(tmp_path):
    corners = [(0, 0, 0), (10, 0, 0), (10, 2, 0), (0, 2, 0)]
    (tmp_path / "sheet.vtk").write_text(vtk(corners, [(0, 1, 2), (0, 2, 3)]))
    text = (
        CASE[: CASE.index("[[conductor]]")]
        + """
[[conductor]]
kind = "mesh"
name = "sheet"
file = "sheet.vtk"
unit = "1 mm"
offset = ["-5 mm", "-1 mm", "14 mm"]
[[port]]
name = "feed"
conductor = "sheet"
line = [[0, "-1 mm", "14 mm"], [0, "1 mm", "14 mm"]]
width = "1 mm"
"""
    )
    path = tmp_path / "case.toml"
    path.write_text(text)
    job = read_case(path)
    assert job.cell.mesh.triangle_areas.sum() == pytest.approx(20e-6)
    assert job.cell.ports[0].gap.direction == pytest.approx([-1, 0, 0])
    assert "sheet.vtk" in job.text and str(tmp_path) not in job.text


@pytest.mark.parametrize(
    ("band", "frequencies"),
    [
        ('frequency = "5.4 GHz"', [5.4e9]),
        ('frequencies = ["5 GHz", "5.5 GHz"]', [5e9, 5.5e9]),
        ('start = "5 GHz"\nstop = "6 GHz"\npoints = 3', [5e9, 5.5e9, 6e9]),
        ('start = "5 GHz"\nstop = "5 GHz"\npoints = 1', [5e9]),
    ],
)
def test_bands(band, frequencies):
    text = CASE.replace('start = "5 GHz"\nstop = "5.8 GHz"\npoints = 5', band)
    assert parse_case(text).frequency == pytest.approx(frequencies)


def test_a_byte_order_mark_is_no_obstacle(tmp_path):
    path = tmp_path / "case.toml"
    path.write_bytes(b"\xef\xbb\xbf" + CASE.encode())
    assert read_case(path).title == "Invented dipole"
