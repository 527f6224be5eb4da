"""One measured Touchstone file, checked line by line and then read through scikit-rf."""

from __future__ import annotations

import io
import warnings
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from ..geometry.errors import InputError
from .touchstone_text import UNITS, TouchstoneText, read_text

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]


@dataclass(frozen=True)
class TouchstoneData:
    """Content of one file: frequency (n_freq,) Hz, scattering (n_freq, n, n), reference (n,) ohm."""

    path: Path
    frequency: Floats
    scattering: Complexes
    reference: Floats


def read_touchstone(path: Path) -> TouchstoneData:
    """Read a Touchstone file of version 1.0, 1.1, 2.0 or 2.1 with S-parameters of single-ended ports.

    Raises
    ------
    InputError
        With file and line; see `touchstone_text`. Also for frequencies that only make sense in another unit.
    """
    path = Path(path)
    text = read_text(path)
    assert text.option is not None and text.ports is not None
    _check_unit(path, text)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        from skrf.io.touchstone import Touchstone

        stream = io.StringIO(_plain(text))
        stream.name = f"data.s{text.ports}p" if text.version == "1.0" else "data.ts"
        read = Touchstone(stream)
    frequency = np.array([row[1][0] for row in text.rows]) * UNITS[text.option[0]]
    if read.s.shape != (len(frequency), text.ports, text.ports) or not np.allclose(read.f, frequency, rtol=1e-12):
        raise RuntimeError(f"scikit-rf read '{path}' as {read.s.shape} at {len(read.f)} frequencies")
    reference = np.asarray(text.reference or text.option[2], dtype=float)
    reference = np.broadcast_to(reference, (text.ports,)).copy()
    return TouchstoneData(path, frequency, np.asarray(read.s, dtype=complex), reference)


def _check_unit(path: Path, text: TouchstoneText) -> None:
    assert text.option is not None
    top = text.rows[-1][1][0] * UNITS[text.option[0]]
    if top > 1e13:
        raise InputError(
            f"the highest frequency is {top:.3g} Hz with the unit {text.option[0]} of the option line.",
            where=str(path),
            allowed="frequencies up to 1e13 Hz",
            hint="The numbers look like another unit: mend the option line.",
        )


def _plain(text: TouchstoneText) -> str:
    """The same data in the dialect that scikit-rf reads without mistake.

    Measured with scikit-rf 2.2.0: it stumbles over information blocks, takes falling frequencies of a two-port for
    noise parameters, checks neither frequency count nor [End], and reads a Lower two-port in the order 21_12 with
    zeros for its coupling. Comments, information and noise are left out here, and triangles of two-ports get the
    order 12_21, which means nothing for them.
    """
    assert text.option is not None
    unit, form, resistance = text.option
    listed = " ".join(f"{r!r}" for r in map(float, resistance))
    option = f"# {unit} s {form} r {listed}"
    lines: list[str] = []
    if text.version == "1.0":
        lines.append(option)
    else:
        order = text.keywords.get("two-port data order", "12_21") if text.matrix == "full" else "12_21"
        lines += [f"[Version] {text.version}", option, f"[Number of Ports] {text.ports}"]
        if text.ports == 2:
            lines.append(f"[Two-Port Data Order] {order}")
        lines.append(f"[Number of Frequencies] {len(text.rows)}")
        if text.reference:
            lines.append("[Reference] " + " ".join(f"{float(r)!r}" for r in text.reference))
        lines.append(f"[Matrix Format] {text.matrix.capitalize()}")
        if "mixed-mode order" in text.keywords:
            lines.append(f"[Mixed-Mode Order] {text.keywords['mixed-mode order']}")
        lines.append("[Network Data]")
    lines += [" ".join(f"{x!r}" for x in row) for _, row in text.rows]
    if text.version != "1.0":
        lines.append("[End]")
    return "\n".join(lines) + "\n"
