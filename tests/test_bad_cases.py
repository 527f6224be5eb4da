"""Every broken case is refused with one clear line that says where and what."""

import pytest
from bad_case_base import LINE, MESH, PLATE, STRIP, WIRE, BadCase, vtk
from bad_case_layers import PRINTED
from bad_cases import BAD_CASES
from scanward.cases.read import parse_case, read_case
from scanward.geometry.errors import InputError


def write(case: BadCase, folder):
    for name, content in case.files.items():
        (folder / name).write_text(content)
    path = folder / "case.toml"
    path.write_bytes(case.text if isinstance(case.text, bytes) else case.text.encode())
    return path


every_bad_case = pytest.mark.parametrize("case", BAD_CASES, ids=[case.name for case in BAD_CASES])


@pytest.mark.parametrize("text", [WIRE, STRIP, PLATE, PRINTED], ids=["wire", "strip", "plate", "printed"])
def test_the_cases_are_sound_before_the_mistake(text):
    assert parse_case(text).cell.ports


def test_the_mesh_case_and_the_gap_line_are_sound_before_the_mistake(tmp_path):
    assert read_case(write(BadCase("", MESH, (), {"sheet.vtk": vtk()}), tmp_path)).cell.ports
    assert parse_case(PLATE.replace('"probe"\nbase = true', LINE)).cell.ports


def test_the_names_are_distinct_and_many():
    assert len({case.name for case in BAD_CASES}) == len(BAD_CASES) >= 60
    assert all(case.says for case in BAD_CASES)


@every_bad_case
def test_a_bad_case_is_refused_with_a_clear_line(case, tmp_path):
    path = write(case, tmp_path)
    with pytest.raises(InputError) as caught:
        read_case(path)
    told = str(caught.value)
    assert told.startswith(f"{path}: ")
    assert "\n" not in told
    for fragment in case.says:
        assert fragment in told


def test_a_missing_file_names_its_neighbour(tmp_path):
    (tmp_path / "dipole.toml").write_text("")
    with pytest.raises(InputError, match=r"no such file.*Did you mean 'dipole\.toml'"):
        read_case(tmp_path / "dipol.toml")


def test_a_directory_is_no_case(tmp_path):
    with pytest.raises(InputError, match="this is a directory"):
        read_case(tmp_path)


def test_a_giant_file_is_not_read(tmp_path):
    path = tmp_path / "case.toml"
    path.write_bytes(b"#" * 5_000_001)
    with pytest.raises(InputError, match="5000001 bytes"):
        read_case(path)


@every_bad_case
def test_the_command_line_ends_with_two_and_one_line(case, tmp_path, capsys):
    from scanward.cases.command import main

    path = write(case, tmp_path)
    try:
        code = main(["check", str(path)])
    except SystemExit as end:
        code = end.code
    captured = capsys.readouterr()
    assert code == 2
    assert "Traceback" not in captured.err + captured.out
    # a terminal may fold the line, so compare without white space
    flat = "".join(captured.err.split())
    for fragment in case.says:
        assert "".join(fragment.split()) in flat
