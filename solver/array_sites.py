"""Which lattice sites carry an element, and what the ports of dummy elements end in."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ..geometry.errors import InputError, nearest

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]
Termination = complex | float | str

OPEN = 1e7  # resistance of an open port over its reference


def rectangle(rows: int, columns: int) -> Ints:
    """Sites (rows x columns, 2) of a rectangular array: row i, column j at cell (j, i), row by row.

    Raises
    ------
    InputError
        If either number is below 1.
    """
    if rows < 1 or columns < 1:
        raise InputError(f"an array of {rows} by {columns} elements.", where="finite array", allowed="1 or more each")
    row, column = np.divmod(np.arange(rows * columns), columns)
    return np.column_stack([column, row])


def checked_sites(sites: ArrayLike) -> Ints:
    """Sites (n, 2) as integers.

    Raises
    ------
    InputError
        If they are no list of integer cells, or one occurs twice.
    """
    found = np.asarray(sites)
    if found.ndim != 2 or found.shape[1] != 2 or not len(found) or not np.all(found == np.round(found)):
        raise InputError(
            f"sites of shape {found.shape} are not a list of integer cells.", where="finite array", allowed="(n, 2)"
        )
    distinct, count = np.unique(found, axis=0, return_counts=True)
    if len(distinct) < len(found):
        raise InputError(f"site {distinct[count > 1][0].tolist()} is listed twice.", where="finite array")
    return found.astype(np.int64)


def port_impedances(
    n_site: int, reference: Floats, terminations: Mapping[int | tuple[int, int], Termination]
) -> tuple[Complexes, NDArray[np.bool_]]:
    """Series impedance of every port (n_site, n_port), ohm, and which are live.

    Parameters
    ----------
    reference : (n_port,) ohm; terminations : as for `finite_array.FiniteArray`

    Raises
    ------
    InputError
        For a site or port that is not there, and for an unknown or active termination.
    """
    impedance = np.tile(reference.astype(complex), (n_site, 1))
    live = np.ones(impedance.shape, dtype=bool)
    for key, wanted in terminations.items():
        site, ports = (key[0], [key[1]]) if isinstance(key, tuple) else (key, range(len(reference)))
        if not 0 <= site < n_site or not all(0 <= p < len(reference) for p in ports):
            raise InputError(
                f"a termination is given for {key}, which is no site or port of the array.", where="terminations",
                allowed=f"sites 0 to {n_site - 1}, ports 0 to {len(reference) - 1}",
            )  # fmt: skip
        for p in ports:
            impedance[site, p], live[site, p] = _impedance_of(wanted, float(reference[p])), False
    return impedance, live


def _impedance_of(wanted: Termination, reference: float) -> complex:
    words = {"matched": reference, "open": OPEN * reference, "short": 0.0}
    if isinstance(wanted, str):
        if wanted not in words:
            raise InputError(
                f"termination '{wanted}'.", where="terminations", hint=nearest(wanted, words),
                allowed="'matched', 'open', 'short' or an impedance in ohm",
            )  # fmt: skip
        return complex(words[wanted])
    value = complex(wanted)
    if np.isinf(value):
        return complex(words["open"])
    if np.isnan(value) or value.real < 0:
        raise InputError(f"termination of {value} ohm.", where="terminations", allowed="a resistance of 0 or more")
    return value
