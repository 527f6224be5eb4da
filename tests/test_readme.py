"""What the documents show really runs: the README's case and Python code; the case-file reference is the schema's."""

import re
import subprocess
import sys
from pathlib import Path

import pytest
import scanward
from scanward.cases.command import cli
from scanward.cases.reference import case_reference

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text("utf-8")
REFERENCE_HEAD = "# The case file\n\nWritten from the program's own schema; `DEVELOPERS.md` says how.\n\n"


def block(language: str) -> str:
    found = re.findall(rf"^```{language}\n(.*?)^```$", README, flags=re.MULTILINE | re.DOTALL)
    assert len(found) == 1, f"one block of {language} in README.md"
    return found[0]


def test_the_case_and_the_python_lines_run(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    Path("panel.toml").write_text(block("toml"), "utf-8")
    exec(compile(block("python"), "README.md", "exec"), {})
    shown = capsys.readouterr().out
    assert Path("panel-result/report.html").stat().st_size > 10_000
    assert "0 [('met', " in shown and "\n(3, 37, 1)\n" in shown


def test_the_two_commands_name_what_exists():
    install, tests = re.findall(r"^```sh\n(.*?)^```$", README, flags=re.MULTILINE | re.DOTALL)
    assert README.index(install) < README.index(tests)
    case = re.search(r"scanward run (\w+) --out", install)
    assert case and case.group(1) in scanward.ready_made()
    assert tests.split() == [".venv/bin/python", "-m", "pytest", "-m", '"not', 'slow"']
    assert set(re.findall(r"^ {4}scanward (\w+)", README, flags=re.MULTILINE)) == set(cli.commands)


def test_links_lead_to_files():
    for name in ("README.md", "DEVELOPERS.md", "CHANGELOG.md"):
        for target in re.findall(r"\]\(([^)#]+)\)", (ROOT / name).read_text("utf-8")):
            assert (ROOT / target).exists(), f"{name} links to {target}"


def test_the_case_reference_is_the_schema_s():
    """Renew it: python tests/test_readme.py"""
    assert (ROOT / "docs" / "case-file.md").read_text("utf-8") == REFERENCE_HEAD + case_reference()


def test_public_names_are_lazy_and_complete():
    script = "import sys, scanward; print([m for m in ('numpy', 'scipy', 'scanward.solver') if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
    for name in scanward.__all__:
        assert getattr(scanward, name) is not None and name in dir(scanward)
    with pytest.raises(AttributeError, match="no_such_name"):
        scanward.no_such_name  # noqa: B018


if __name__ == "__main__":
    (ROOT / "docs" / "case-file.md").write_text(REFERENCE_HEAD + case_reference(), "utf-8")
