"""Expected cost of a run against what it took, in time of the processor, for a few ready-made cases.

    python tests/benchmarks/cost.py [case ...]
"""

from __future__ import annotations

import sys
import tempfile
import time
from pathlib import Path

from scanward.cases.cost import estimate_cost
from scanward.cases.library import find_case
from scanward.cases.read import read_case
from scanward.cases.run import run_case


def measure(name: str) -> None:
    """Print one case's ratio."""
    job = read_case(find_case(name))
    found = estimate_cost(job)
    expected = found.seconds + found.estimate_seconds + found.writing_seconds
    with tempfile.TemporaryDirectory() as folder:
        begun = time.process_time()
        outcome = run_case(job, Path(folder))
        spent = time.process_time() - begun
    solved = outcome.result.certificate.full_solutions if outcome.result and outcome.result.certificate else 0
    print(f"{name}: expected {expected:.0f} s, took {spent:.0f} s of the processor, ratio {spent / expected:.2f}; "
          f"full solutions {found.solutions} expected, {solved} taken")  # fmt: skip


if __name__ == "__main__":
    for case in sys.argv[1:] or ["strip_dipole", "crossed_dipoles_circular", "printed_dipole_blind"]:
        measure(case)
