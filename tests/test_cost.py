"""Expected cost: growth laws and the choice of the cell that is timed."""

import dataclasses

import numpy as np
import pytest
from scanward.cases import cost
from scanward.cases.library import find_case
from scanward.cases.read import read_case
from scanward.cases.run import run_case
from scanward.geometry.stack import Layer, Stack
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


def test_a_reduced_run_counts_full_solutions_and_cheap_points():
    class Quick:
        unknowns, stored_bytes = 40, 1e5

        def __init__(self, *_):
            pass

        def solve(self, *_):
            pass

    job = dataclasses.replace(sheet_job(), reduced_error=1e-4)
    found, direct = cost.estimate_cost(job, Quick), cost.estimate_cost(sheet_job(), Quick)
    assert found.solutions == cost.FULL_SOLUTIONS and direct.cheap == 0
    assert found.cheap == direct.solutions + 3 * cost.SURVEY_POINTS
    assert found.seconds > found.cheap * cost.POINT_SECONDS["upright conductors"]
    assert found.memory - direct.memory == pytest.approx(cost.REDUCED_BYTES)
    assert direct.memory > cost.PROGRAM_BYTES and found.writing_seconds > direct.writing_seconds > 0


def test_maxima_are_sought_for_every_driven_port():
    job = dataclasses.replace(sheet_job(ports=3), reduced_error=1e-4)
    driven = tuple(dataclasses.replace(p, drive=d) for p, d in zip(job.cell.ports, (1, 1j, 0), strict=True))
    both = dataclasses.replace(job, cell=dataclasses.replace(job.cell, ports=driven))

    class Quick:
        unknowns, stored_bytes = 40, 1e5

        def __init__(self, *_):
            pass

        def solve(self, *_):
            pass

    more = cost.estimate_cost(both, Quick).cheap - cost.estimate_cost(job, Quick).cheap
    assert more == 3 * cost.SURVEY_POINTS


def test_expected_full_solutions_are_those_of_a_run(tmp_path):
    """Within the factor of 2 that `check` states; times are measured by tests/benchmarks/cost.py."""
    job = read_case(find_case("strip_dipole"))
    found = cost.estimate_cost(job)
    outcome = run_case(job, tmp_path, refine=False)
    assert outcome.result is not None and outcome.result.certificate is not None
    assert 0.5 < outcome.result.certificate.full_solutions / found.solutions < 2
    assert found.seconds > 0 and found.writing_seconds > 0


def test_kinds_of_cells():
    job = sheet_job()  # a strip and a post
    assert cost.cell_kind(job.cell) == "upright conductors"
    stack = Stack((Layer(14e-3, 2.55),), True)
    assert cost.cell_kind(dataclasses.replace(job.cell, stack=stack)) == "upright conductors in layers"
    mesh = dataclasses.replace(job.cell.mesh, segments=np.zeros((0, 2), dtype=int), segment_radius=np.zeros(0),
                               segment_conductor=np.zeros(0, dtype=int))  # fmt: skip
    flat = dataclasses.replace(job.cell, mesh=mesh)
    assert cost.cell_kind(flat) == "air"
    assert cost.cell_kind(dataclasses.replace(flat, stack=stack)) == "layers"
