"""The stack in section: layers, sheets and conductors over height, with names and materials."""

from __future__ import annotations

from itertools import pairwise
from typing import Any

import numpy as np

from ..geometry.cell import UnitCell
from ..geometry.stack import Stack
from .plot import ALARM, FAINT, HUES, INK, MUTED, WIDTH, Drawing, Floats, canvas, render, spread, style

LEAST = 0.055  # of the height drawn: thinner layers are drawn as thick as that
TEXT = 0.075  # of the height drawn: distance of lines of text
PALE = ("#efe6c8", "#dfeaf0")


def stack_drawing(cell: UnitCell) -> Drawing | None:
    """Layers and conductors seen from the side, x to the right, thin layers thickened; None in air."""
    if cell.stack is None:
        return None
    with style():
        figure = canvas(WIDTH, 2.6)
        axis = figure.subplots()
        scale = _Heights(cell.stack, cell.mesh.points[:, 2])
        _layers(axis, cell.stack, scale)
        _conductors(axis, cell, scale)
        axis.set(xlim=(0, 1), ylim=(scale.bottom, 1.0))
        axis.axis("off")
        data = render(figure)
    thick = " Thin layers are drawn thicker than to scale." if scale.is_bent else ""
    names = ", ".join(layer.name or f"layer {i}" for i, layer in enumerate(cell.stack.layers, start=1))
    return Drawing(
        "stack",
        data,
        "image/svg+xml",
        "The stack in section, conductors as seen along y over one lattice period; heights in mm on the left." + thick,
        f"Section through the layers from bottom to top: {names}.",
    )


class _Heights:
    """Height in m to a share of the drawing, linear within each layer, with a margin of air above and below."""

    def __init__(self, stack: Stack, z: Floats):
        planes = stack.interfaces
        low, high = min(0.0, float(z.min())), max(stack.top, float(z.max()))
        steps = np.diff(planes)
        room = high - low
        wanted = np.maximum(steps, LEAST * room)
        self.is_bent = bool(np.any(wanted > steps))
        drawn = np.concatenate([[0.0], np.cumsum(wanted)])
        margin = 0.16 * (drawn[-1] + room - stack.top)
        self.bottom = -0.08 if stack.ground else 0.0
        under = 0.0 if stack.ground else margin - low
        known = np.concatenate([[planes[0] - under], planes, [high + margin]])
        spots = np.concatenate([[-under], drawn, [drawn[-1] + high - stack.top + margin]])
        self.known, self.spots = known, (spots - spots[0]) / (spots[-1] - spots[0])

    def __call__(self, z: Any) -> Any:
        return np.interp(z, self.known, self.spots)


def _layers(axis: Any, stack: Stack, scale: _Heights) -> None:
    left, right = 0.08, 0.64
    planes = stack.interfaces
    for i, (low, high) in enumerate(pairwise(planes)):
        axis.fill_between([left, right], scale(low), scale(high), color=PALE[i % 2], linewidth=0)
    for z in planes:
        axis.plot([left, right], [scale(z)] * 2, color=MUTED, linewidth=0.7)
    if stack.ground:
        axis.fill_between([left, right], -0.05, 0.0, color=FAINT, linewidth=0, hatch="////", edgecolor=MUTED)
        axis.plot([left, right], [0, 0], color=INK, linewidth=1.6)
    for sheet in stack.sheets:
        axis.plot([left, right], [scale(sheet.height)] * 2, color=ALARM, linewidth=1.4, linestyle=(0, (4, 2)))
    _write(axis, right, _labels(stack, scale), "left")
    _write(axis, left, [(float(scale(z)), f"{z * 1e3:.4g}", MUTED) for z in planes], "right")


def _labels(stack: Stack, scale: _Heights) -> list[tuple[float, str, str]]:
    planes = stack.interfaces
    rows = [(float(scale(planes[:1] - 1).item()), "ground", MUTED)] if stack.ground else [(0.05, "air", MUTED)]
    for i, layer in enumerate(stack.layers):
        loss = f", tan δ {layer.loss_tangent:g}" if layer.loss_tangent else ""
        magnetic = f", µ {layer.permeability:g}" if layer.permeability != 1 else ""
        name, thickness = layer.name or f"layer {i + 1}", f"{layer.thickness * 1e3:.4g} mm"
        text = f"{name}: {thickness}, ε {layer.permittivity:g}{magnetic}{loss}"
        rows.append((float(scale((planes[i] + planes[i + 1]) / 2)), text, INK))
    for i, sheet in enumerate(stack.sheets, start=1):
        z = complex(sheet.impedance)
        text = f"{sheet.name or f'sheet {i}'}: {z.real:g} {'+' if z.imag >= 0 else '−'} j{abs(z.imag):g} Ω per square"
        rows.append((float(scale(sheet.height)), text, ALARM))
    rows.append(((float(scale(stack.top)) + 1) / 2, "air", MUTED))
    return sorted(rows)


def _write(axis: Any, x: float, rows: list[tuple[float, str, str]], side: str) -> None:
    """Lines of text beside the section, moved apart where they would overlap."""
    placed = spread(np.array([height for height, _, _ in rows]), TEXT)
    reach = 0.03 if side == "left" else -0.015
    for (height, text, colour), spot in zip(rows, placed, strict=True):
        if side == "left":
            axis.plot([x + 0.004, x + reach - 0.006], [height, spot], color=FAINT, linewidth=0.7)
        axis.text(x + reach, spot, text, color=colour, fontsize=8, va="center", ha=side)


def _conductors(axis: Any, cell: UnitCell, scale: _Heights) -> None:
    from matplotlib.collections import LineCollection

    mesh, points = cell.mesh, cell.mesh.points
    middle = (points[:, 0].min() + points[:, 0].max()) / 2
    width = max(float(np.abs(cell.lattice.vectors[:, 0]).max()), float(np.ptp(points[:, 0])), 1e-9)
    spots = np.column_stack([0.36 + 0.54 * (points[:, 0] - middle) / width, scale(points[:, 2])])
    handles = []
    for c, name in enumerate(mesh.names):
        own = mesh.triangles[mesh.triangle_conductor == c]
        edges = np.concatenate([own[:, [0, 1]], own[:, [1, 2]], mesh.segments[mesh.segment_conductor == c]])
        if not len(edges):
            continue
        colour = HUES[c % len(HUES)]
        axis.add_collection(LineCollection(list(spots[edges]), colors=colour, linewidths=2.2, capstyle="round"))
        handles.append(axis.plot([], [], color=colour, linewidth=2.2, label=name)[0])
    for port in cell.ports:
        x, _, z = port.gap.centre
        axis.plot(0.36 + 0.54 * (x - middle) / width, scale(z), "o", color=ALARM, markersize=4, zorder=10)
    place = {"loc": "upper left", "bbox_to_anchor": (0.07, 0.02)}
    axis.legend(handles=handles[:8], ncols=4, frameon=False, fontsize=7.5, **place)
