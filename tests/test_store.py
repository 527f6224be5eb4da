"""The result file: complete or absent, the same after a round trip, and plain to a reader with only
xarray."""

import os
import subprocess
import sys
from dataclasses import fields, replace
from pathlib import Path

import numpy as np
import pytest
import xarray
from scanward.cases import store
from scanward.cases.judge import judge
from scanward.geometry.errors import InputError
from scanward.geometry.stack import Layer, SheetImpedance, Stack
from synthetic import sheet_result


@pytest.fixture
def saved(tmp_path):
    result = sheet_result(ports=2, loss=3.0)
    path = tmp_path / "result.nc"
    store.save_result(path, result)
    return path, result


def same(first, second):
    """Equality of nested dataclasses and arrays, NaN equal to NaN."""
    if isinstance(first, np.ndarray):
        np.testing.assert_array_equal(first, second)
    elif hasattr(first, "__dataclass_fields__"):
        for item in fields(first):
            if item.name not in ("remesh", "path"):
                same(getattr(first, item.name), getattr(second, item.name))
    elif isinstance(first, tuple):
        assert len(first) == len(second)
        for one, other in zip(first, second, strict=True):
            same(one, other)
    else:
        assert first == second or (first != first and second != second)


def test_round_trip_keeps_everything(saved):
    path, result = saved
    again = store.load_result(path)
    same(result, again)
    assert judge(again) == judge(result)


def test_round_trip_keeps_the_stack_and_the_expected_verdict(tmp_path):
    result = sheet_result()
    film = SheetImpedance(14e-3, 20 - 150j, "film")
    stack = Stack((Layer(14e-3, 2.55, 1e-3, name="base"), Layer(4e-3, 0.8, artificial=True)), True, (film,))
    job = replace(result.job, cell=replace(result.job.cell, stack=stack), expected_to_fail=True)
    store.save_result(tmp_path / "result.nc", replace(result, job=job))
    again = store.load_result(tmp_path / "result.nc").job
    assert again.cell.stack == stack
    assert again.expected_to_fail


def test_a_reader_with_only_xarray_understands_it(saved):
    path, result = saved
    with xarray.open_dataset(path, engine="h5netcdf") as data:
        assert data.impedance.dims == ("frequency", "scan", "port", "port_in", "part")
        assert data.part.values.tolist() == ["re", "im"]
        assert data.port.values.tolist() == ["east", "north"]
        assert data.frequency.attrs["units"] == "Hz" and data.impedance.attrs["units"] == "ohm"
        east = data.reflection.sel(port="east")
        level = 10 * np.log10((east**2).sum("part")).max().item()
        assert level == pytest.approx(judge(result)[0].worst, abs=1e-9)
        assert "exp(+j w t)" in data.attrs["time_convention"]
        assert data.attrs["case"].startswith("title")
        assert data.attrs["tolerance"] == 1e-6
        assert {"loss", "floquet_power", "gain_co", "gain_cross", "power_balance"} <= set(data.variables)


def test_both_netcdf_readers_agree(saved):
    pytest.importorskip("netCDF4")
    path, _ = saved
    script = (
        "import sys, xarray; d = xarray.load_dataset(sys.argv[1], engine='netcdf4');"
        "print(d.scattering.dtype, float(abs(d.scattering).sum()))"
    )
    out = subprocess.run(
        [sys.executable, "-c", script, str(path)], capture_output=True, text=True, check=True
    )
    kind, total = out.stdout.split()
    assert kind == "float64"
    with xarray.open_dataset(path, engine="h5netcdf") as data:
        assert float(total) == pytest.approx(float(abs(data.scattering).sum()), rel=1e-12)


def test_a_failed_write_leaves_the_old_file_and_no_debris(saved, monkeypatch):
    path, result = saved
    before = path.read_bytes()

    def broken(*_args, **_kwargs):
        raise OSError("no space left on device")

    monkeypatch.setattr(os, "replace", broken)
    with pytest.raises(OSError, match="no space"):
        store.save_result(path, result)
    assert path.read_bytes() == before
    assert [item.name for item in path.parent.iterdir()] == [path.name]


def test_a_kill_in_the_middle_leaves_no_half_file(tmp_path):
    """The process dies at the rename, with the temporary file fully on disk: the target must not exist."""
    script = (
        "import os, sys\n"
        "from pathlib import Path\n"
        f"sys.path.insert(0, {str(Path(__file__).parent)!r})\n"
        "from synthetic import sheet_result\n"
        "from scanward.cases import store\n"
        "os.replace = lambda *_: os.kill(os.getpid(), 9)\n"
        "store.save_result(Path(sys.argv[1]), sheet_result())\n"
    )
    target = tmp_path / "result.nc"
    done = subprocess.run([sys.executable, "-c", script, str(target)], capture_output=True)
    assert done.returncode == -9
    assert not target.exists()
    assert (
        len(list(tmp_path.iterdir())) == 1
    )  # the hidden temporary file; no *.nc to be mistaken for a result
    assert not list(tmp_path.glob("*.nc"))


@pytest.mark.parametrize("content", [b"", b"not a result", None])
def test_a_file_that_is_no_result_is_refused(tmp_path, content):
    path = tmp_path / "other.nc"
    if content is not None:
        path.write_bytes(content)
    with pytest.raises(InputError, match=r"other\.nc"):
        store.load_result(path)


def test_an_unknown_format_is_refused(saved, tmp_path):
    path, _ = saved
    data = xarray.load_dataset(path, engine="h5netcdf").assign_attrs(scanward_format=99)
    data.to_netcdf(tmp_path / "newer.nc", engine="h5netcdf")
    with pytest.raises(InputError, match="format 99"):
        store.load_result(tmp_path / "newer.nc")
