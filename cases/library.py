"""The ready-made cases that come with the program, found by their bare names."""

from __future__ import annotations

import tomllib
from importlib import resources
from pathlib import Path

from ..geometry.errors import InputError, nearest


def ready_made() -> dict[str, Path]:
    """Name to file of every packaged case, sorted."""
    folder = Path(str(resources.files(__package__ or "scanward.cases")))
    return {file.stem: file for file in sorted(folder.glob("*.toml"))}


def find_case(name: str) -> Path:
    """The case file called `name`: a path if such a file exists, else a ready-made case.

    Raises
    ------
    InputError
        If there is neither.
    """
    path = Path(name)
    if path.is_file():
        return path
    cases = ready_made()
    if name in cases:
        return cases[name]
    if path.exists():
        return path
    siblings = [file.name for file in path.parent.glob("*.toml")] if path.parent.is_dir() else []
    raise InputError(
        f"there is no file and no ready-made case '{name}'.",
        allowed="a case file (TOML), or a name that 'scanward cases' lists",
        hint=nearest(name, [*cases, *siblings, *(str(path.parent / file) for file in siblings)]),
    )


def case_title(path: Path) -> str:
    """The title of a case file, or an empty text when it cannot be read."""
    try:
        return str(tomllib.loads(path.read_text("utf-8")).get("title", ""))
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError):
        return ""
