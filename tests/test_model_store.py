"""Groups of the result file beside the sweep: reduced model, certificate, survey; also with nothing in them."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
import xarray
from scanward.cases import store
from scanward.solver.greedy import Certificate
from scanward.solver.survey import Blindness, Cause, FreeCone, Peak, ScanMap, Survey
from synthetic import sheet_result
from test_store import same

AXIS = np.linspace(-1, 1, 9)
FREQUENCY = np.array([5.3e9, 5.4e9])
RESONANCE = Cause("resonance", "", (0, 0), np.nan, np.nan, 0.2, 33.0)
SURFACE_WAVE = Cause("surface wave", "TM0", (-1, 0), 1.2, 1.21, 0.9, np.nan)


def complexes(random: np.random.Generator, *shape: int) -> np.ndarray:
    return random.normal(size=shape) + 1j * random.normal(size=shape)


def made_up_map(random: np.random.Generator, ports: int) -> ScanMap:
    """NaN outside visible space and at the last of several ports, as at one that is not driven."""
    u, v = np.meshgrid(AXIS, AXIS, indexing="ij")
    reflection, field = complexes(random, 2, 9, 9, ports), complexes(random, 2, 9, 9, 2)
    reflection[:, np.hypot(u, v) > 1] = field[:, np.hypot(u, v) > 1] = np.nan
    if ports > 1:
        reflection[..., -1] = np.nan
    return ScanMap(FREQUENCY, AXIS, reflection, field, random.random((2, 9, 9)) > 0.5)


def made_up_survey(ports: int, absorbers: int) -> Survey:
    """Two blindnesses, the first of two peaks; every optional number absent somewhere."""
    random = np.random.default_rng(7)

    def peak(i: int) -> Peak:
        width = np.nan if i == 1 else 0.1
        return Peak(5.3e9 + i, 0.1 * i, -0.2, i % ports, complex(*random.normal(size=2)), width, random.random(ports),
                    0.3, 0.1, random.random(absorbers))  # fmt: skip

    found = (
        Blindness((peak(0), peak(1)), peak(2), RESONANCE, True),
        Blindness((peak(3),), peak(3), SURFACE_WAVE, False),
    )
    cone = FreeCone(0.1, FREQUENCY, np.linspace(0, 6, 7), random.random((2, 7)), 0.4, ((0.0, 0.5), (1.57, 0.6)), 0.9,
                    (5.3e9, 5.35e9), np.nan, 3.0)  # fmt: skip
    return Survey(made_up_map(random, ports), found, cone, 1e-4)


def made_up_model() -> dict[str, np.ndarray]:
    """One array of each kind that a model has: complex, real, whole numbers, text."""
    random = np.random.default_rng(11)
    return {
        "band": np.array([110.0, 120.0]),
        "loss_names": np.array(["arm", "substrate"]),
        "vectors": complexes(random, 40, 6),
        "ends": np.array([2, 6]),
        "near_cells": np.array([[0, 0], [1, -1]]),
        "rest_nodes": complexes(random, 3, 2, 6, 6),
    }


@pytest.mark.parametrize("ports", [1, 3])
def test_round_trip_with_ports_absorbers_and_absent_numbers(ports, tmp_path):
    """CLOSED: what is written is what is read, to the last bit."""
    result = sheet_result(ports=ports, loss=3.0)
    points = np.array([[5.3e9, 0.1, 0.2], [5.4e9, -0.3, 0.0]])
    certificate = Certificate(1e-4, 2e-5, 3e-5, points, np.array([3e-5, 1e-6]), 12, 18, 1e-7, True)
    survey, model = made_up_survey(ports, len(result.sweep.loss_names)), made_up_model()
    given = dataclasses.replace(result, survey=survey, certificate=certificate, stored=model)
    store.save_result(tmp_path / "result.nc", given)
    again = store.load_result(tmp_path / "result.nc")
    same(again.survey, survey)
    same(again.certificate, certificate)
    assert isinstance(again.stored, dict) and set(again.stored) == set(model)
    for name, array in model.items():
        assert again.stored[name].shape == array.shape
        assert again.stored[name].tolist() == array.tolist(), name


def test_round_trip_with_nothing_found(tmp_path):
    """No blindness, no clear cone, no usable band, no absorber, nothing confirmed: all that stays as it is."""
    result = sheet_result()
    sweep = dataclasses.replace(result.sweep, loss=result.sweep.loss[:, :, :0], loss_names=())
    full = made_up_survey(1, 0)
    cone = dataclasses.replace(full.free_cone, by_plane=(), usable=None, cone=0.0, wanted_drop=np.nan)
    survey = dataclasses.replace(full, blindnesses=(), free_cone=cone)
    certificate = Certificate(1e-8, 2e-5, np.inf, np.zeros((0, 3)), np.zeros(0), 8, 8, 1e-7, False)
    given = dataclasses.replace(result, sweep=sweep, survey=survey, certificate=certificate)
    store.save_result(tmp_path / "result.nc", given)
    again = store.load_result(tmp_path / "result.nc")
    same(again.survey, survey)
    same(again.certificate, certificate)
    assert again.stored is None and again.model is None and again.sweep.loss_names == ()


def test_a_reader_with_only_xarray_understands_the_groups(tmp_path):
    result = dataclasses.replace(sheet_result(loss=3.0), survey=made_up_survey(1, 1), stored=made_up_model())
    store.save_result(tmp_path / "result.nc", result)
    with xarray.open_dataset(tmp_path / "result.nc", engine="h5netcdf", group="map") as data:
        assert data.reflection.dims == ("frequency", "u", "v", "port", "part")
        assert data.frequency.attrs["units"] == "Hz"
    with xarray.open_dataset(tmp_path / "result.nc", engine="h5netcdf", group="reduced") as data:
        assert data.vectors.dims[-1] == "part" and data.vectors.shape == (40, 6, 2)


def test_a_group_that_cannot_be_written_leaves_the_old_file_and_no_debris(tmp_path, monkeypatch):
    path, result = tmp_path / "result.nc", dataclasses.replace(sheet_result(), stored=made_up_model())
    store.save_result(path, result)
    before, original, written = path.read_bytes(), xarray.Dataset.to_netcdf, []

    def fails_at_a_group(data, *args, **options):
        if "group" in options:
            raise OSError("no space left on device")
        written.append(args)
        return original(data, *args, **options)

    monkeypatch.setattr(xarray.Dataset, "to_netcdf", fails_at_a_group)
    with pytest.raises(OSError, match="no space"):
        store.save_result(path, result)
    assert written and path.read_bytes() == before
    assert [item.name for item in tmp_path.iterdir()] == [path.name]
