"""Shared settings of the test session."""

from __future__ import annotations

import os
import sys
from pathlib import Path

import pytest

os.environ.setdefault("MPLCONFIGDIR", str(Path(os.environ.get("TMPDIR", "/tmp")) / "scanward-matplotlib"))
sys.path.insert(0, str(Path(__file__).parent))


def pytest_collection_modifyitems(items: list[pytest.Item]) -> None:
    """Skip the tests of the unstructured mesher where its system libraries are missing, except in CI."""
    marked = [item for item in items if item.get_closest_marker("gmsh")]
    if not marked or os.environ.get("SCANWARD_REQUIRE_GMSH"):
        return
    try:
        import gmsh  # noqa: F401
    except (ImportError, OSError) as fault:
        for item in marked:
            item.add_marker(pytest.mark.skip(reason=f"gmsh cannot be loaded: {fault}"))
