"""Currents of one solution as a VTK unstructured grid, for any viewer that reads it."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..geometry.mesh import Mesh

Complexes = NDArray[np.complex128]


def write_currents(path: Path, mesh: Mesh, surface: Complexes, along: Complexes) -> Path:
    """Write the surface current density (A/m) at triangle centres and the current (A) of wire segments.

    Parameters
    ----------
    path : file to write, ``.vtu``
    surface : (n_triangles, 3) complex, r.m.s.
    along : (n_segments,) complex, r.m.s., from the segment's first to its second point

    Cell data: ``current_re``, ``current_im`` and ``current_rms`` (A/m on triangles), ``wire_current_re``,
    ``wire_current_im`` and ``wire_current_rms`` (A on segments); zero on cells of the other kind;
    ``conductor``.
    """
    import meshio

    surface = np.asarray(surface, dtype=complex).reshape(-1, 3)
    along = np.asarray(along, dtype=complex).reshape(-1)
    if len(surface) != len(mesh.triangles) or len(along) != len(mesh.segments):
        raise ValueError(
            f"{len(surface)} surface and {len(along)} wire currents do not fit "
            f"{len(mesh.triangles)} triangles and {len(mesh.segments)} segments"
        )
    blocks: list[Any] = []
    data: dict[str, list[Any]] = {}
    zeros = np.zeros((len(along), 3)), np.zeros(len(surface))
    strength = np.sqrt(np.sum(np.abs(surface) ** 2, axis=1))
    kinds = (
        ("triangle", mesh.triangles, mesh.triangle_conductor, surface, strength, zeros[1] + 0j),
        ("line", mesh.segments, mesh.segment_conductor, zeros[0] + 0j, np.zeros(len(along)), along),
    )
    for kind, cells, owner, density, rms, current in kinds:
        if not len(cells):
            continue
        blocks.append((kind, cells))
        columns = {
            "current_re": density.real, "current_im": density.imag, "current_rms": rms,
            "wire_current_re": current.real, "wire_current_im": current.imag,
            "wire_current_rms": np.abs(current),
            "conductor": owner.astype(np.int64),
        }  # fmt: skip
        for name, column in columns.items():
            data.setdefault(name, []).append(np.ascontiguousarray(column))
    meshio.write(path, meshio.Mesh(mesh.points, blocks, cell_data=data), file_format="vtu")
    return Path(path)
