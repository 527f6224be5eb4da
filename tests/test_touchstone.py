"""Touchstone export read back by a strict parser of our own, written from the version 1 rules."""

import csv
import re
from dataclasses import replace

import numpy as np
import pytest
from scanward.cases.touchstone import renormalise, write_touchstone
from scanward.geometry.errors import InputError
from synthetic import sheet_result

UNIT = {"HZ": 1.0, "KHZ": 1e3, "MHZ": 1e6, "GHZ": 1e9}


def parse(path):
    """Frequencies (n,), scattering (n, p, p) and reference of a version 1 file; AssertionError if it
    breaks a rule."""
    ports = int(re.fullmatch(r".*\.s(\d+)p", path.name).group(1))
    text = path.read_bytes().decode("ascii")
    assert "\t" not in text
    lines = [line.split("!")[0] for line in text.splitlines()]
    options = [line for line in lines if line.startswith("#")]
    assert len(options) == 1
    words = options[0][1:].upper().split()
    assert words[1:4] == ["S", "RI", "R"]
    rows, blocks = [line for line in lines if line.strip() and not line.startswith("#")], []
    for row in rows:
        if row[0] != " ":
            blocks.append([])  # a line that starts in the first column begins a frequency
        blocks[-1].append([float(word) for word in row.split()])
    frequency, matrices = [], []
    for block in blocks:
        frequency.append(block[0][0] * UNIT[words[0]])
        block[0] = block[0][1:]
        assert all(len(row) <= 8 and len(row) % 2 == 0 for row in block)  # four pairs a line at most
        flat = np.array([value for row in block for value in row])
        values = (flat[0::2] + 1j * flat[1::2]).reshape(ports, ports)
        if ports == 2:
            assert len(block) == 1
            values = values.T  # 11 21 12 22
        elif ports > 2:
            per_row = -(-ports // 4)
            assert len(block) == ports * per_row  # every matrix row starts on a new line
        matrices.append(values)
    assert np.all(np.diff(frequency) > 0)
    return np.array(frequency), np.array(matrices), float(words[4])


def scrambled(ports, frequencies=3):
    """A result whose scattering is neither symmetric nor regular, so that any swap shows."""
    result = sheet_result(ports=ports, frequencies=frequencies)
    random = np.random.default_rng(20240611)
    s = random.normal(size=(2, *result.sweep.scattering.shape)) * 0.3
    return replace(result, sweep=replace(result.sweep, scattering=s[0] + 1j * s[1]))


@pytest.mark.parametrize("ports", [1, 2, 3, 5])
def test_files_hold_the_matrix_in_the_order_of_the_format(tmp_path, ports):
    result = scrambled(ports)
    files = write_touchstone(tmp_path, result, scans=[0, 4])
    assert [file.suffix for file in files] == [f".s{ports}p"] * 2 + [".csv"]
    for file, s in zip(files[:2], (0, 4), strict=True):
        frequency, matrix, reference = parse(file)
        np.testing.assert_allclose(frequency, result.sweep.frequency, rtol=1e-12)
        np.testing.assert_allclose(matrix, result.sweep.scattering[:, s], rtol=0, atol=1e-12)
        assert reference == 120.0


def test_single_frequency_and_index(tmp_path):
    result = scrambled(2, frequencies=1)
    *files, index = write_touchstone(tmp_path, result)
    assert len(files) == len(result.sweep.scan)
    assert len({file.name for file in files}) == len(files)
    with index.open(newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert [row["file"] for row in rows] == [file.name for file in files]
    theta = np.degrees(result.sweep.scan.theta)
    np.testing.assert_allclose([float(row["theta_deg"]) for row in rows], theta, atol=1e-6)
    head = files[4].read_text("ascii")
    assert "power waves" in head and "exp(+j w t)" in head and "1 = east, 2 = north" in head


def test_unequal_references_are_refused_unless_renormalised(tmp_path):
    result = sheet_result(ports=2)
    uneven = replace(result, sweep=replace(result.sweep, reference=np.array([120.0, 50.0])))
    with pytest.raises(InputError, match="east: 120 ohm, north: 50 ohm"):
        write_touchstone(tmp_path, uneven)
    files = write_touchstone(tmp_path, result, scans=[3], resistance=50.0)
    _, matrix, reference = parse(files[0])
    z = result.sweep.impedance[:, 3]
    identity = np.eye(2)
    expected = (z - 50 * identity) @ np.linalg.inv(z + 50 * identity)
    assert reference == 50.0
    np.testing.assert_allclose(matrix, expected, atol=1e-11)


def test_renormalising_from_unequal_references_gives_the_impedance_matrix_route():
    """CLOSED: S = F (Z - R) (Z + R)^-1 F^-1 with F = 1 / (2 sqrt R), for both references."""
    random = np.random.default_rng(5)
    z = random.normal(size=(3, 3)) + 1j * random.normal(size=(3, 3)) + 60 * np.eye(3)
    old = np.array([30.0, 75.0, 200.0])

    def scatter(r):
        f = np.diag(1 / np.sqrt(r))
        return f @ (z - np.diag(r)) @ np.linalg.inv(z + np.diag(r)) @ np.linalg.inv(f)

    np.testing.assert_allclose(renormalise(scatter(old), old, 50.0), scatter(np.full(3, 50.0)), atol=1e-13)


def test_what_is_not_finite_is_refused(tmp_path):
    result = scrambled(1)
    result.sweep.scattering[1, 0] = np.nan
    with pytest.raises(InputError, match="not finite"):
        write_touchstone(tmp_path, result, scans=[0])
    with pytest.raises(InputError, match="-3 ohm"):
        write_touchstone(tmp_path, result, scans=[1], resistance=-3)
