"""Every broken measurement is refused with one clear line that says where and what, and exit code 2."""

import pytest
from bad_case_measured import BAD_MEASURED, CUT, HEADER, SOUND
from coupling_model import panel
from scanward.cases.command import cli, main
from scanward.cases.compare_command import compare
from scanward.cases.prediction_store import save_prediction


@pytest.fixture(scope="module")
def prediction(tmp_path_factory):
    path = tmp_path_factory.mktemp("prediction") / "panel.nc"
    save_prediction(path, panel(2, 2, points=5))
    return path


def arguments(prediction, folder, measured, patterns, options):
    given = ["compare", str(prediction), "--map", str(folder / "map.csv"), "--out", str(folder / "out")]
    for name in measured:
        given += ["--measured", str(folder / name)]
    for name in patterns:
        given += ["--pattern", str(folder / name)]
    if patterns and options.get("uncertainty") != "none":
        given += ["--pattern-uncertainty", "0.3 dB", "--stray-level", "-40 dB"]
    given += ["--magnitude-uncertainty", "0.1 dB", "--phase-uncertainty", options.get("phase", "1 deg")]
    given += ["--noise-floor", options.get("floor", "-60 dB")]
    return given + (["--fit", options["fit"]] if "fit" in options else [])


def run(given, monkeypatch):
    monkeypatch.setitem(cli.commands, "compare", compare)
    try:
        return main(given)
    except SystemExit as end:
        return end.code


def write(files, folder):
    for name, content in (SOUND | files).items():
        (folder / name).write_bytes(content if isinstance(content, bytes) else content.encode())


def test_the_names_are_distinct_and_many():
    assert len({case.name for case in BAD_MEASURED}) == len(BAD_MEASURED) >= 60
    assert all(case.says for case in BAD_MEASURED)


def test_the_files_are_sound_before_the_mistake(prediction, tmp_path, monkeypatch, capsys):
    write({"cut.csv": HEADER + CUT}, tmp_path)
    assert run(arguments(prediction, tmp_path, ["data.s4p"], ["cut.csv"], {}), monkeypatch) == 1
    assert "INVENTED" in capsys.readouterr().out
    assert (tmp_path / "out" / "comparison.html").stat().st_size > 10_000


@pytest.mark.parametrize("case", BAD_MEASURED, ids=[case.name for case in BAD_MEASURED])
def test_a_bad_measurement_is_refused_with_a_clear_line(case, prediction, tmp_path, monkeypatch, capsys):
    write(case.files, tmp_path)
    code = run(arguments(prediction, tmp_path, case.measured, case.patterns, case.options), monkeypatch)
    told = capsys.readouterr()
    assert code == 2
    assert "Traceback" not in told.err + told.out
    assert len(told.err.strip().splitlines()) == 1
    for fragment in case.says:
        assert fragment in told.err, told.err
