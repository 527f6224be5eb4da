"""A run that finds a blindness between its own scan points: kept in the file, judged, told, drawn, asked."""

from __future__ import annotations

import csv
import dataclasses
import io
from pathlib import Path

import numpy as np
import pytest
import scanward
from scanward.cases import command
from scanward.cases.ask import answer_text, answers, ask
from scanward.cases.export import blindness_rows, cone_rows
from scanward.cases.figures import draw_all
from scanward.cases.job import Limit
from scanward.cases.judge import judge
from scanward.cases.read import parse_case
from scanward.cases.report import report_text
from scanward.cases.run import run_case
from scanward.cases.store import load_result, save_result
from scanward.cases.survey_advice import meeting_angle
from scanward.cases.survey_text import blindness_summary, blindness_texts, signed_rows
from scanward.geometry.errors import InputError
from scanward.geometry.lattice import Lattice
from scanward.solver.guided_waves import guided_waves
from scanward.solver.result import ScanPoints
from scanward.solver.sweep import solve_sweep
from test_store import same

CASE = """title = "Invented printed dipole of an avalanche-watch radar, blind in the E plane"
ground = true
[parameters]
wavelength = "c0 / 5.4 GHz"
thickness = "0.19 wavelength"
[band]
start = "5.3 GHz"
stop = "5.4 GHz"
points = 2
[lattice]
a = ["wavelength / 2", 0]
b = [0, "wavelength / 2"]
[[layer]]
name = "substrate"
thickness = "thickness"
permittivity = 2.55
[[conductor]]
kind = "strip"
name = "dipole"
start = ["-0.195 wavelength", 0, "thickness"]
end = ["0.195 wavelength", 0, "thickness"]
width = "0.02 wavelength"
[[port]]
name = "feed"
conductor = "dipole"
at = [0, 0, "thickness"]
width = "0.02 wavelength"
resistance = "77 ohm"
[scan]
cone = "55 deg"
planes = ["0 deg", "90 deg"]
step = "25 deg"
grid = 0
[mesh]
element_size = "4 mm"
[limits]
reflection = "-4.5 dB"
gain_drop = "6 dB"
"""


@pytest.fixture(scope="module")
def folder(tmp_path_factory) -> Path:
    out = tmp_path_factory.mktemp("survey")
    outcome = run_case(parse_case(CASE), out, refine=False)
    assert outcome.code == 1
    return out


@pytest.fixture(scope="module")
def result(folder):
    return load_result(folder / "result.nc")


def test_everything_survives_the_file(result, tmp_path):
    """CLOSED: written and read again, all is the same; the model answers the same."""
    save_result(tmp_path / "again.nc", result)
    again = load_result(tmp_path / "again.nc")
    same(again.survey, result.survey)
    same(again.certificate, result.certificate)
    scan = ScanPoints.from_cosines([0.3, 0.6], [0.1, -0.2])
    first, second = (ask(one, 5.37e9, scan) for one in (result, again))
    np.testing.assert_allclose(first.scattering, second.scattering, rtol=1e-12)
    assert result.survey is not None and len(result.survey.blindnesses) >= 2


def test_files_without_a_survey_are_read_as_before(result, tmp_path):
    save_result(tmp_path / "bare.nc", dataclasses.replace(result, survey=None, certificate=None, stored=None))
    bare = load_result(tmp_path / "bare.nc")
    assert bare.survey is None and bare.model is None and bare.certificate is None


def test_limits_are_judged_between_the_scan_points(result):
    """SECOND METHOD: no scan point of the case is as bad as the peak that the survey found, and the direct solver
    confirms the peak."""
    own = np.abs(result.response.reflection[..., 0]).max()
    first, drop = judge(result)
    bare, _ = judge(dataclasses.replace(result, survey=None))
    assert 20 * np.log10(own) == pytest.approx(bare.worst) and bare.worst < first.worst - 0.1
    assert first.worst > -0.01 and first.points > bare.points
    scan = ScanPoints.from_angles(np.array([first.theta]), np.array([first.phi]))
    true = solve_sweep(result.job.cell, first.frequency, scan).scattering
    assert abs(true[0, 0, 0, 0]) > 0.999
    assert drop.limit.quantity == "gain_drop" and drop.worst > 15


def test_a_limit_without_blindness_in_its_cone_takes_its_worst_from_the_map(result):
    limit = Limit("reflection", -3.0, np.radians(30))
    job = dataclasses.replace(result.job, limits=(limit, Limit("cross_polar", -10.0, np.radians(30))))
    found, cross = judge(dataclasses.replace(result, job=job))
    maps = result.survey.scan_map
    u, v = np.meshgrid(maps.axis, maps.axis, indexing="ij")
    inside = (np.hypot(u, v) <= np.sin(limit.cone)) & maps.solved
    worst = 20 * np.log10(np.abs(maps.reflection[..., 0])[inside].max())
    assert found.holds and found.worst >= worst - 1e-9 and np.degrees(found.theta) <= 30.001
    assert np.isfinite(cross.worst) and cross.points == found.points


def test_signed_figures_say_what_the_survey_holds(result):
    rows = dict(signed_rows(result))
    cone = result.survey.free_cone
    assert rows["Largest clear cone, all azimuths, whole band"] == f"theta {np.degrees(cone.cone):.1f} deg"
    assert rows["Judged at"].startswith("active reflection at most -4.5 dB")
    assert "none of the frequencies" in rows["Band usable in the cone of 55 deg"]
    assert "inside the scan cone" in rows["Blindness"] and "TM0" in rows["Blindness"]
    assert rows["Error of the active reflection against a full solution"].startswith("1.0e-04; estimated")


def test_advice_is_that_of_the_dispersion_relation(result):
    """CLOSED: with 10 % less permittivity TM0 and its meeting angle follow from the bare stack."""
    text = next(t for t in blindness_texts(result) if "(-1, 0)" in t.title or "(1, 0)" in t.title)
    assert text.inside and "Blindness inside the scan cone" in text.title
    peak = next(one for one in result.survey.blindnesses if one.cause.order in ((-1, 0), (1, 0))).worst
    k = 2 * np.pi * peak.frequency / 299792458.0
    stack = result.job.cell.stack
    layer = dataclasses.replace(stack.layers[0], permittivity=0.9 * 2.55)
    (wave,) = [w for w in guided_waves(dataclasses.replace(stack, layers=(layer,)), k) if w.name == "TM0"]
    met = np.degrees(np.arcsin(2 * np.pi / (k * result.job.cell.lattice.a[0]) - wave.beta.real))
    assert f"less permittivity TM0 runs at {wave.beta.real:.4f} k and is met at theta {met:.1f} deg" in text.advice
    assert "into the generator of port feed" in text.power
    assert "deg per per cent of frequency" in text.moves


def test_meeting_angle_of_a_square_lattice():
    """CLOSED: |sin(theta) - lambda/d| = beta/k in the plane of the lattice vector; never in the plane across."""
    lattice = Lattice(np.array([0.5, 0.0]), np.array([0.0, 0.5]))
    assert np.sin(meeting_angle(lattice, 2 * np.pi, (-1, 0), 1.3, 0.0)) == pytest.approx(2 - 1.3)
    assert np.sin(meeting_angle(lattice, 2 * np.pi, (1, 0), 1.3, np.pi)) == pytest.approx(2 - 1.3)
    assert np.isnan(meeting_angle(lattice, 2 * np.pi, (-1, 0), 1.3, np.pi / 2))


def test_no_blindness_is_said_with_what_was_searched(result):
    calm = dataclasses.replace(result, survey=dataclasses.replace(result.survey, blindnesses=()))
    assert blindness_summary(calm).startswith("none found") and "points of 2 frequencies" in blindness_summary(calm)
    assert "None found: no direction" in report_text(calm, ())


def test_report_tells_signs_and_warns(result):
    text = report_text(result, draw_all(result))
    assert text.index("What the survey certifies") < text.index("Evidence")
    assert "prove that the transmitters survive" in text
    assert "driven to its maximum" in text
    names = [drawing.name for drawing in draw_all(result)]
    assert {"reflection-maps", "angle-map", "clear-cone", "blindness-paths"} < set(names)
    assert "scan-maps" not in names


def test_figures_hold_their_sizes(result):
    for drawing in draw_all(result):
        assert len(drawing.data) < 450_000, drawing.name


def test_tables_hold_every_peak_and_ray(result, folder):
    survey = result.survey
    with (folder / "blindness.csv").open(encoding="utf-8") as stream:
        rows = list(csv.DictReader(stream))
    assert len(rows) == sum(len(one.peaks) + 1 for one in survey.blindnesses)
    assert sum(int(row["worst"]) for row in rows) == len(survey.blindnesses)
    assert float(rows[0]["gamma_db"]) == pytest.approx(0.0, abs=0.01)
    table = list(cone_rows(survey))
    assert len(table) == 1 + survey.free_cone.theta.size
    assert list(blindness_rows(result, survey))[1][0] == 1


def test_asking_is_solving(result):
    """SECOND METHOD: the direct solver at a place that no one asked for before, with gain and power."""
    (row,) = answers(result, [(5.345e9, np.radians(31.0), np.radians(17.0))])
    scan = ScanPoints.from_angles(np.radians([31.0]), np.radians([17.0]))
    true = solve_sweep(result.job.cell, 5.345e9, scan).scattering[0, 0, 0, 0]
    assert abs(row["reflection"] - true) < row["error"] == result.certificate.stated
    assert row["returned"] + row["radiated"] + row["lobes"] == pytest.approx(1.0, abs=1e-5)
    wavelength = 299792458.0 / 5.345e9
    ideal = 4 * np.pi * result.job.cell.lattice.area / wavelength**2 * np.cos(np.radians(31.0))
    gain = 10 ** (row["gain_co"] / 10) + 10 ** (row["gain_cross"] / 10)
    assert gain == pytest.approx(ideal * (1 - abs(true) ** 2), rel=1e-3)
    assert "active impedance" in answer_text(row)


def test_ask_command(folder, capsys, tmp_path):
    assert command.main(["ask", str(folder), "--at", "5.35 GHz, 20 deg, 0 deg", "--at", "5.4 GHz, 0 deg, 0 deg"]) == 0
    shown = capsys.readouterr().out
    assert shown.count("active reflection") == 2 and "theta 20 deg" in shown
    place = ["--at", "5.35 GHz, 20 deg, 0 deg"]
    assert command.main(["ask", str(folder / "result.nc"), *place, "--csv", "-"]) == 0
    (row,) = csv.DictReader(io.StringIO(capsys.readouterr().out))
    assert float(row["frequency_ghz"]) == 5.35 and float(row["error_gamma"]) == 1e-4
    table = tmp_path / "table.csv"
    assert command.main(["ask", str(folder), *place, "--csv", str(table)]) == 0
    assert "gamma_db" in table.read_text(encoding="utf-8")


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["--at", "5.5 GHz, 0 deg, 0 deg"], "5.3 to 5.4 GHz"),
        (["--at", "5.35 GHz, 95 deg, 0 deg"], "theta below 90 deg"),
        (["--at", "5.35 GHz, 10 deg"], "--at"),
        (["--at", "5.35 GHz, 10 deg, 0 deg", "--port", "fed"], "no driven port 'fed'"),
        (["--at", "5.35 mm, 10 deg, 0 deg"], "mm"),
    ],
)
def test_bad_questions_are_code_2(folder, capsys, arguments, words):
    assert command.main(["ask", str(folder), *arguments]) == 2
    fault = capsys.readouterr().err
    assert words in fault and fault.count("\n") <= 3 and "Traceback" not in fault


def test_a_direct_result_cannot_be_asked(result):
    bare = dataclasses.replace(result, stored=None)
    with pytest.raises(InputError, match="no reduced model"):
        scanward.ask(bare, 5.35e9, ScanPoints.from_cosines(0.0, 0.0))


def test_interrupted_survey_solves_nothing_in_full_again(tmp_path, monkeypatch):
    """Interrupted while looking for blindness, the run takes up all snapshots and frequencies: no further one."""
    from scanward.cases import scan_survey
    from scanward.solver import greedy

    taken = []
    original, search = greedy.take_snapshot, scan_survey.find_blindness
    monkeypatch.setattr(greedy, "take_snapshot", lambda *a: (taken.append(a[1:]), original(*a))[1])

    def stop(*_args, **_kwargs):
        raise KeyboardInterrupt

    monkeypatch.setattr(scan_survey, "find_blindness", stop)
    job = parse_case(CASE)
    assert run_case(job, tmp_path, refine=False).code == 130
    count = len(taken)
    assert count > 5
    monkeypatch.setattr(scan_survey, "find_blindness", search)
    assert run_case(job, tmp_path, refine=False).code == 1
    assert len(taken) == count
    assert not (tmp_path / "partial").exists()
