"""Measured files: every dialect of Touchstone, port maps, frequency grids, reference resistances, pattern units."""

import numpy as np
import pytest
from coupling_model import panel, scattering
from scanward.cases.frequency_grid import onto_grid
from scanward.cases.invented_measurement import (
    MARK,
    Plant,
    invent,
    write_invented,
    write_invented_pattern,
    write_matrix,
    write_pairs,
)
from scanward.cases.measured_pattern import read_pattern
from scanward.cases.measured_scattering import read_measurement
from scanward.cases.measured_touchstone import read_touchstone
from scanward.cases.prediction import change_reference, change_reference_slope
from scanward.cases.prediction_store import load_prediction, save_prediction
from scanward.cases.uncertainty import Uncertainty

TINY = Uncertainty(1e-7, 1e-7, 1e-9)
RANDOM = np.random.default_rng(5)


def matrix(n, frequencies=3):
    """Not reciprocal, so that every mistake of order shows."""
    return 0.1 * (RANDOM.standard_normal((frequencies, n, n)) + 1j * RANDOM.standard_normal((frequencies, n, n)))


# CLOSED: what was written by `write_matrix`, which shares no code with the reader; order rules of checks.md section 11


@pytest.mark.parametrize("version", [1, 2])
@pytest.mark.parametrize("n", [1, 2, 3, 5])
def test_what_is_written_is_read(n, version, tmp_path):
    s, frequency = matrix(n), np.array([1e9, 2e9, 3e9])
    reference = np.full(n, 75.0) if version == 1 else np.linspace(40, 80, n)
    path = tmp_path / f"a.s{n}p"
    write_matrix(path, frequency, s, reference, version)
    data = read_touchstone(path)
    assert MARK in path.read_text().splitlines()[0]
    np.testing.assert_allclose(data.scattering, s, atol=1e-9)
    np.testing.assert_allclose(data.frequency, frequency)
    np.testing.assert_allclose(data.reference, reference)


def test_a_version_one_two_port_runs_down_its_columns(tmp_path):
    (tmp_path / "a.s2p").write_text("# MHz S MA R 50\n100 0.1 0 0.2 90 0.3 0 0.4 180\n")
    data = read_touchstone(tmp_path / "a.s2p")
    np.testing.assert_allclose(data.scattering[0], [[0.1, 0.3], [0.2j, -0.4]], atol=1e-12)
    assert data.frequency[0] == 100e6


@pytest.mark.parametrize("order", ["12_21", "21_12"])
@pytest.mark.parametrize("kind", ["Lower", "Upper"])
def test_triangles_are_reciprocal_whatever_the_order(kind, order, tmp_path):
    """scikit-rf alone reads Lower with 21_12 as uncoupled ports."""
    (tmp_path / "a.ts").write_text(
        f"[Version] 2.0\n# GHz S RI R 50\n[Number of Ports] 2\n[Two-Port Data Order] {order}\n"
        f"[Number of Frequencies] 1\n[Matrix Format] {kind}\n[Begin Information]\nany 1 2 words\n"
        "[End Information]\n[Network Data]\n1 .1 0 .2 0 .4 0\n[End]\n"
    )
    np.testing.assert_allclose(read_touchstone(tmp_path / "a.ts").scattering[0], [[0.1, 0.2], [0.2, 0.4]])


def test_noise_parameters_of_a_two_port_are_left_out(tmp_path):
    data = "1 .1 0 .2 0 .3 0 .4 0\n2 .1 0 .2 0 .3 0 .4 0\n"
    (tmp_path / "a.s2p").write_text("# GHz S RI\n" + data + "1 2 .3 4 .5\n2 2 .3 4 .5\n")
    assert len(read_touchstone(tmp_path / "a.s2p").frequency) == 2


def test_decibels_and_per_port_resistances_of_version_two_one(tmp_path):
    text = "[Version] 2.1\n# GHz S DB R 50 75 100\n[Number of Ports] 3\n[Number of Frequencies] 1\n[Network Data]\n"
    (tmp_path / "a.s3p").write_text(text + "1 -20 0 -40 90 -40 0\n-40 0 -20 0 -40 0\n-40 0 -40 0 -20 0\n[End]\n")
    data = read_touchstone(tmp_path / "a.s3p")
    np.testing.assert_allclose(data.scattering[0, 0], [0.1, 0.01j, 0.01], atol=1e-12)
    np.testing.assert_allclose(data.reference, [50, 75, 100])


def test_any_port_order_comes_back_by_the_map(tmp_path):
    p = panel(2, 3, points=3, sensitive=False)
    (file,), port_map = write_invented(tmp_path, p, TINY, Plant())
    order = [4, 0, 5, 1, 3, 2]
    shuffled = invent(p, TINY, Plant())[:, order][:, :, order]
    write_matrix(file, p.frequency, shuffled, p.reference, 1)
    rows = [f"{k + 1},{p.cells[i][1]},{p.cells[i][0]}" for k, i in enumerate(order)]
    port_map.write_text("measured port,row,column\n" + "\n".join(rows[::-1]) + "\n")
    data, _ = read_measurement([file], port_map, p, TINY)
    np.testing.assert_allclose(data.scattering, p.scattering, atol=1e-6)


def test_two_port_files_give_row_column_and_reflections(tmp_path):
    p = panel(3, 3, points=3, sensitive=False)
    files, port_map = write_pairs(tmp_path, p, TINY, Plant(), driven=4)
    data, _ = read_measurement(files, port_map, p, TINY)
    known = data.known[0]
    assert known[4].all() and known[:, 4].all() and known.diagonal().all()
    assert np.count_nonzero(known) == 8 + 8 + 9
    np.testing.assert_allclose(data.scattering[data.known], p.scattering[data.known], atol=1e-6)
    assert data.spread < 3  # the driven element's reflection was measured eight times


def test_one_row_of_a_matrix_is_recognised_by_its_zeros(tmp_path):
    p = panel(3, 3, points=3, sensitive=False)
    files, port_map = write_invented(tmp_path, p, TINY, Plant(row=4))
    data, _ = read_measurement(files, port_map, p, TINY)
    assert data.known[:, 4].all() and np.count_nonzero(data.known[0]) == 9
    assert "72 coefficients are exactly zero" in data.notes[-1]


def test_a_full_matrix_is_renormalised_to_the_design(tmp_path):
    p, other = panel(2, 2, points=3, sensitive=False), panel(2, 2, points=3, sensitive=False, reference=50.0)
    s = scattering(p.frequency, p.positions, reference=82.0)
    write_matrix(tmp_path / "a.s4p", p.frequency, s, np.full(4, 82.0), 1)
    _, port_map = write_invented(tmp_path, other, TINY, Plant())
    data, used = read_measurement([tmp_path / "a.s4p"], port_map, p, TINY)
    np.testing.assert_allclose(data.scattering, p.scattering, atol=1e-9)
    assert used is p and "renormalised from 82 ohm" in data.notes[0]


def test_with_ports_missing_the_prediction_is_renormalised(tmp_path):
    p = panel(2, 2, points=3)
    s = scattering(p.frequency, p.positions, reference=82.0)
    write_matrix(tmp_path / "a.s2p", p.frequency, s[:, :2, :2], np.full(2, 82.0), 1)
    (tmp_path / "map.csv").write_text("measured port,row,column\n1,1,1\n2,1,2\n")
    data, used = read_measurement([tmp_path / "a.s2p"], tmp_path / "map.csv", p, TINY)
    np.testing.assert_allclose(used.scattering, s, atol=1e-12)
    np.testing.assert_allclose(data.scattering[:, :2, :2], used.scattering[:, :2, :2], atol=1e-9)
    assert used.infinite.coupling is None and any("2 of 4 ports were not measured" in note for note in data.notes)


def test_renormalisation_agrees_with_impedances_and_its_slope_with_differences():
    """CLOSED: S = F (Z - R)(Z + R)^-1 F^-1 for power waves at real references (Kurokawa 1965)."""
    z = 60 * np.eye(3) + 10 * matrix(3, 1)[0]
    old, new = np.array([50.0, 75.0, 100.0]), np.array([30.0, 120.0, 50.0])

    def of(r):
        root = np.sqrt(r)
        return (z - np.diag(r)) @ np.linalg.inv(z + np.diag(r)) * root[None, :] / root[:, None]

    np.testing.assert_allclose(change_reference(of(old), old, new), of(new), atol=1e-13)
    d, h = matrix(3, 1)[0], 1e-6
    slope = (change_reference(of(old) + h * d, old, new) - change_reference(of(old) - h * d, old, new)) / (2 * h)
    np.testing.assert_allclose(change_reference_slope(of(old), d, old, new), slope, atol=1e-8)


def test_frequencies_are_interpolated_inside_and_never_outside():
    measured = np.linspace(5.2e9, 5.5e9, 31)
    delay = 12e-9  # a long cable: 0.75 rad per point
    wanted = np.array([5.1e9, 5.2e9, 5.2543e9, 5.4999e9, 5.6e9])

    def truth(f):
        return (0.2 + 0.05j * np.sin(f / 1e8)) * np.exp(-2j * np.pi * f * delay)

    values, covered, made = onto_grid(measured, truth(measured)[:, None], wanted)
    assert covered.tolist() == [False, True, True, True, False] and made.tolist() == [False, False, True, True, False]
    np.testing.assert_allclose(values[1:4, 0], truth(wanted[1:4]), atol=2e-5)
    assert np.all(np.isnan(values[[0, 4]]))


def test_nothing_is_interpolated_across_a_gap_left_out():
    measured = np.concatenate([np.linspace(5.2e9, 5.3e9, 11), np.linspace(5.5e9, 5.6e9, 11)])
    _, covered, _ = onto_grid(measured, np.ones((22, 1), dtype=complex), np.array([5.255e9, 5.4e9]))
    assert covered.tolist() == [True, False]


@pytest.mark.parametrize("swapped", [(), ((1, 6),)])
def test_a_fine_measurement_resolves_cables_the_coarse_prediction_cannot(swapped, tmp_path):
    """Spacing 50 MHz leaves 20 ns open; the measurement's own 5 MHz tell 2 x 14 ns of cable."""
    from scanward.cases.comparison import compare

    p, fine = panel(4, 4, points=9, sensitive=False), panel(4, 4, points=81, sensitive=False)
    use, delay = Uncertainty.from_decibel(0.1, np.radians(1), -70), np.linspace(9e-9, 14e-9, 16)
    files, port_map = write_invented(tmp_path, fine, use, Plant(delay=delay, swapped=swapped))
    data, p = read_measurement(files, port_map, p, use)
    found = compare(p, data).diagnosis
    assert found.cabled and tuple((s.one, s.two) for s in found.swaps) == swapped
    np.testing.assert_allclose(found.fits.chosen.delay, delay, atol=2e-12)


def test_a_prediction_survives_its_file(tmp_path):
    p = panel(2, 2, points=3)
    save_prediction(tmp_path / "p.nc", p)
    q = load_prediction(tmp_path / "p.nc")
    np.testing.assert_array_equal(p.scattering, q.scattering)
    np.testing.assert_array_equal(p.infinite.coupling, q.infinite.coupling)
    np.testing.assert_array_equal(p.sensitivities[1].derivative, q.sensitivities[1].derivative)
    np.testing.assert_array_equal(p.patterns[0].infinite_co, q.patterns[0].infinite_co)
    assert (q.ports, q.title, q.sensitivities[0].tolerance) == (p.ports, p.title, 1.0)


@pytest.mark.parametrize("unit", ["dB", "power", "amplitude"])
def test_levels_and_angles_in_any_stated_unit_are_the_same_pattern(unit, tmp_path):
    angle, level = np.radians([-40.0, 0, 20, 60]), np.array([-3.0, 0, -1, -9])
    scale = {"dB": level, "power": 10 ** (level / 10), "amplitude": 10 ** (level / 20)}[unit]
    rows = [f"{np.pi / 2:.12f},{a:.12f},{x:.12f},{x:.12f}" for a, x in zip(angle, scale, strict=True)]
    (tmp_path / "a.csv").write_text(f"cut (rad),angle (rad),co ({unit}),cross ({unit})\n" + "\n".join(rows[::-1]))
    (cut,) = read_pattern(tmp_path / "a.csv")
    np.testing.assert_allclose([cut.theta, cut.co], [angle, level], atol=1e-9)
    assert cut.phi == pytest.approx(np.pi / 2) and not cut.absolute


def test_an_invented_pattern_says_so_and_is_read(tmp_path):
    p = panel(5, 5, points=3, sensitive=False)
    path = write_invented_pattern(tmp_path / "a.csv", p, 0.2, -40)
    (cut,) = read_pattern(path)
    assert path.read_text().startswith(f"# {MARK}") and cut.cell == (3, 3) and cut.frequency == 5.4e9 and cut.absolute
