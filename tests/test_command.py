"""The command line: exit codes, words on the right stream, no traceback, fast help."""

import subprocess
import sys
import time

import numpy as np
import pytest
from scanward import __version__
from scanward.cases import command
from scanward.cases.store import load_result

CASE = """
title = "Pass road, wire element"
ground = true
[band]
frequency = "5.4 GHz"
[lattice]
a = ["27.759 mm", 0]
b = [0, "27.759 mm"]
[parameters]
arm = "13 mm"
[[conductor]]
kind = "wire"
name = "dipole"
points = [["-arm", 0, "13.88 mm"], ["arm", 0, "13.88 mm"]]
radius = "0.14 mm"
element_size = "3 mm"
[[port]]
name = "feed"
conductor = "dipole"
at = [0, 0, "13.88 mm"]
resistance = "130 ohm"
[scan]
planes = ["0 deg", "90 deg"]
grid = 5
step = "20 deg"
cone = "40 deg"
[limits]
reflection = "LIMIT dB"
"""


@pytest.fixture
def case(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    path = tmp_path / "pass.toml"
    path.write_text(CASE.replace("LIMIT", "-3"), encoding="utf-8")
    return path


def test_help_and_version(capsys):
    assert command.main(["--help"]) == 0
    assert "Exit codes: 0 all limits met" in " ".join(capsys.readouterr().out.split())
    assert command.main(["--version"]) == 0
    assert capsys.readouterr().out == f"scanward {__version__}\n"
    assert command.main(["--version", "--verbose"]) == 0
    assert f"numpy {np.__version__}" in capsys.readouterr().out


def test_the_installed_command_helps_without_loading_the_solver():
    script = (
        "import sys\n"
        "from scanward.cases.command import main\n"
        "main(['run', '--help'])\n"
        "print(sorted(sys.modules))\n"
    )
    begun = time.perf_counter()
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert time.perf_counter() - begun < 5
    for heavy in ("scipy", "xarray", "matplotlib", "gmsh", "skrf", "pandas", "rich.progress"):
        assert f"'{heavy}'" not in done.stdout


def test_run_report_and_exports(case, capsys):
    code = command.main(
        ["run", "pass.toml", "--out", "done", "--touchstone", "--currents", "5.4 GHz, 20 deg, 90 deg"]
    )
    shown = capsys.readouterr()
    assert code == 0, shown.err
    assert "limit is met" in shown.out and "report.html" in shown.out and "\x1b" not in shown.out
    folder = case.parent / "done"
    points = len(load_result(folder / "result.nc").sweep.scan)
    assert len(list((folder / "touchstone").glob("*.s1p"))) == points > 9
    assert len(list((folder / "currents").glob("*.vtu"))) == 1
    (folder / "report.html").unlink()
    assert command.main(["report", "done/result.nc"]) == 0
    assert (folder / "report.html").exists()


def test_a_missed_limit_is_code_1(case, capsys, monkeypatch):
    monkeypatch.setattr("scanward.cases.run.draw_all", lambda _result: ())
    case.write_text(CASE.replace("LIMIT", "-30"), encoding="utf-8")
    assert command.main(["run", "pass.toml", "--no-estimate", "--quiet"]) == 1
    assert "not met" in capsys.readouterr().out
    assert (case.parent / "pass-result" / "result.nc").exists()


def test_check_tells_and_draws(case, capsys):
    assert command.main(["check", "pass.toml", "--set", "arm=12 mm"]) == 0
    text = capsys.readouterr().out
    for words in ("27.759 mm", "unknowns", "feed", "130 ohm", "at most -3.00 dB", "about", "all"):
        assert words in text
    assert (case.parent / "pass-cell.png").read_bytes().startswith(b"\x89PNG")
    assert not (case.parent / "pass-result").exists()


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["run", "pas.toml"], "Did you mean 'pass.toml'?"),
        (["run", "no-such-case"], "no ready-made case 'no-such-case'"),
        (["run", "pass.toml", "--set", "arm"], "'arm' sets nothing"),
        (["run", "pass.toml", "--set", "leg=3 mm"], "leg"),
        (["run", "pass.toml", "--currents", "5.4 GHz, 20 deg"], "has 2 parts"),
        (["run", "pass.toml", "--currents", "5.4 GHz, 95 deg, 0 deg"], "theta below 90 deg"),
        (["run", "pass.toml", "--no-such-option"], "no-such-option"),
        (["fly"], "fly"),
        (["run"], "CASE"),
        (["report", "pass.toml"], "pass.toml"),
    ],
)
def test_bad_input_is_code_2_and_one_message(case, capsys, arguments, words):
    assert command.main(arguments) == 2
    shown = capsys.readouterr()
    assert words in shown.err and "Traceback" not in shown.err and not shown.out
    assert not (case.parent / "pass-result").exists()


def test_a_folder_that_cannot_be_made_is_bad_input(case, capsys):
    (case.parent / "taken").write_text("a file")
    assert command.main(["run", "pass.toml", "--out", "taken"]) == 2
    assert "taken" in capsys.readouterr().err


def test_a_fault_of_the_program_leaves_a_log_and_no_traceback(case, capsys, monkeypatch, tmp_path):
    def broken(*_args, **_kwargs):
        raise ZeroDivisionError("made for this test")

    monkeypatch.setattr("tempfile.tempdir", str(tmp_path))
    monkeypatch.setattr("scanward.cases.run.run_case", broken)
    assert command.main(["run", "pass.toml"]) == 70
    error = capsys.readouterr().err
    assert "fault of the program" in error and "Traceback" not in error
    logs = list(tmp_path.glob("scanward-fault-*.log"))
    assert len(logs) == 1 and str(logs[0]) in error and "made for this test" in logs[0].read_text("utf-8")


@pytest.mark.parametrize(("fault", "code"), [(KeyboardInterrupt, 130), (MemoryError, 3)])
def test_interruption_and_lack_of_memory(case, capsys, monkeypatch, fault, code):
    def stopped(*_args, **_kwargs):
        raise fault

    monkeypatch.setattr("scanward.cases.run.run_case", stopped)
    assert command.main(["run", "pass.toml"]) == code
    assert "Traceback" not in capsys.readouterr().err


def test_ready_made_cases_are_listed_and_found_by_name(capsys, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert command.main(["cases"]) == 0
    names = [line.split()[0] for line in capsys.readouterr().out.splitlines()]
    assert names
    assert command.main(["check", names[0]]) == 0
    assert (tmp_path / f"{names[0]}-cell.png").exists()
