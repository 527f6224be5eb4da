"""Shared settings of the test session."""

from __future__ import annotations

import os
import sys
from pathlib import Path

os.environ.setdefault("MPLCONFIGDIR", str(Path(os.environ.get("TMPDIR", "/tmp")) / "scanward-matplotlib"))
sys.path.insert(0, str(Path(__file__).parent))
