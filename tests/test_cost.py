"""Expected cost: growth laws and the choice of the cell that is timed."""

import numpy as np
import pytest
from scanward.cases import cost
from synthetic import sheet_job


def test_growth_is_square_for_assembly_and_cube_for_factorisation():
    trial = cost.Trial(100, fill=2.0, assemble=0.1, factor=0.01, stored=1e6)
    assert trial.seconds(200, 5) == pytest.approx(4 * 2.0 + 5 * (4 * 0.1 + 8 * 0.01))
    assert trial.memory(200) > 4e6


def test_a_large_cell_is_timed_on_a_coarser_mesh(monkeypatch):
    job = sheet_job()
    monkeypatch.setattr(cost, "LARGEST_TRIAL", cost.count_unknowns(job.cell) - 1)
    smaller = cost._trial_cell(job, cost.count_unknowns(job.cell))
    assert cost.count_unknowns(smaller) <= cost.LARGEST_TRIAL


def test_estimate_counts_unknowns_and_solutions():
    class Quick:
        unknowns, stored_bytes = 40, 1e5

        def __init__(self, *_):
            pass

        def solve(self, _frequency, scan):
            assert len(scan) == 3 and np.hypot(scan.u, scan.v)[0] == pytest.approx(np.sin(np.pi / 3))

    job = sheet_job()
    found = cost.estimate_cost(job, Quick)
    assert found.unknowns == cost.count_unknowns(job.cell)
    assert found.solutions == 3 * len(job.scan.points) and found.trial == 40
    assert found.seconds > 0 and found.estimate_memory > found.memory > 0
