"""Drawings of what is solved: the lattice and its grating lobes, and the unit cell with its neighbours."""

from __future__ import annotations

from typing import Any

import numpy as np

from ..geometry.cell import UnitCell
from ..solver.pattern import LIGHT_SPEED
from .job import Job
from .plot import (
    ALARM,
    FAINT,
    HUES,
    INK,
    MUTED,
    WIDTH,
    Drawing,
    Floats,
    arc,
    canvas,
    gigahertz,
    render,
    style,
)
from .surface_waves import surface_waves

LAYER = "#c9b26b"  # interfaces between layers
SURFACE_WORDS = (
    " Where the beam lies on a dashed circle a Floquet wave runs along the named surface wave of the bare stack: "
    "candidates for scan blindness (thin where the circle stays out of visible space)."
)


def lattice_diagram(job: Job) -> Drawing:
    """Element positions, and the grating-lobe diagram in the u-v plane at the top frequency."""
    with style():
        figure = canvas(WIDTH, 3.7)
        left, right = figure.subplots(1, 2)
        _positions(left, job)
        _lobes(right, job)
        data = render(figure)
    return Drawing(
        "lattice",
        data,
        "image/svg+xml",
        f"Left: element positions. Right: grating-lobe diagram at {gigahertz(job.frequency[-1])}, the top of "
        "the band. The beam is at (u, v) inside the scan cone (blue); a lobe of order (p, q) is visible "
        "while the beam lies inside the circle of that order (red where the scan cone reaches into it)."
        + (SURFACE_WORDS if surface_waves(job) else ""),
        "Element positions beside a diagram of the unit circle, scan cone and grating-lobe circles.",
    )


def cell_drawing(cell: UnitCell) -> Drawing:
    """The cell in perspective and from above with its lattice neighbours, as a PNG picture."""
    with style():
        figure = canvas(WIDTH, 3.9)
        figure.set_layout_engine("none")
        _perspective(figure.add_axes((-0.02, 0.02, 0.50, 0.96), projection="3d"), cell)
        _from_above(figure.add_axes((0.63, 0.22, 0.36, 0.69)), cell)
        data = render(figure, "image/png")
    return Drawing(
        "cell",
        data,
        "image/png",
        "The unit cell: mesh, ports (red), loads (black diamonds); from above with its neighbours in pale."
        + ("" if cell.stack is None else " Pale faces: the upper faces of the layers."),
        f"Unit cell with conductors {', '.join(cell.mesh.names)}, {len(cell.ports)} port(s), in two views.",
    )


def _positions(axis: Any, job: Job) -> None:
    lattice = job.cell.lattice
    a, b = lattice.vectors * 1e3
    m = np.stack(np.meshgrid(range(-3, 4), range(-3, 4), indexing="ij"), -1).reshape(-1, 2)
    spots = lattice.positions(m) * 1e3
    corner = np.array([0 * a, a, a + b, b, 0 * a])
    axis.fill(*corner.T, color=HUES[0], alpha=0.12, linewidth=0)
    axis.plot(*corner.T, color=HUES[0], linewidth=0.8)
    axis.plot(*spots.T, "o", color=INK, markersize=3.5, linestyle="none")
    for name, vector in (("a", a), ("b", b)):
        axis.annotate("", vector, (0, 0), arrowprops={"arrowstyle": "-|>", "color": HUES[0], "linewidth": 1.6})
        axis.annotate(
            f"{name}: {np.linalg.norm(vector):.4g} mm",
            vector,
            xytext=(5, 5),
            textcoords="offset points",
            color=HUES[0],
            fontsize=8,
            bbox={"facecolor": "white", "edgecolor": "none", "pad": 0.5, "alpha": 0.8},
        )
    reach = 2.2 * max(np.linalg.norm(a), np.linalg.norm(b))
    wavelength = LIGHT_SPEED / job.frequency[-1]
    axis.set(xlim=(-reach, reach), ylim=(-reach, reach), aspect="equal", xlabel="x (mm)", ylabel="y (mm)")
    axis.set_title(f"Lattice: S = {lattice.area * 1e6:.4g} mm² = {lattice.area / wavelength**2:.3g} λ²")


def _lobes(axis: Any, job: Job) -> None:
    lattice, k = job.cell.lattice, 2 * np.pi * job.frequency[-1] / LIGHT_SPEED
    turn = np.linspace(0, 2 * np.pi, 361)
    circle = np.stack([np.cos(turn), np.sin(turn)])
    rim = np.sin(min(job.scan.cone, np.pi / 2))
    axis.fill(*(rim * circle), color=HUES[0], alpha=0.25, linewidth=0)
    axis.plot(*circle, color=INK, linewidth=1.4)
    axis.annotate(
        "visible space",
        (0, 1),
        fontsize=7.5,
        ha="center",
        va="bottom",
        xytext=(0, 2),
        textcoords="offset points",
    )
    axis.annotate(
        f"scan cone\n{arc(job.scan.cone)}",
        (0, 0),
        fontsize=7.5,
        ha="center",
        va="bottom",
        color=HUES[0],
        xytext=(0, 3),
        textcoords="offset points",
    )
    axis.plot(0, 0, "o", color=HUES[0], markersize=3)
    reach = 2.3
    for order in lattice.orders_within(4.0 * k):
        g = -(order @ lattice.reciprocal) / k
        if not order.any() or np.abs(g).max() > reach + 1:
            continue
        hit = np.hypot(*g) < 1 + rim
        axis.plot(*(g[:, None] + circle), color=ALARM if hit else FAINT, linewidth=1, zorder=1)
        axis.plot(*g, "+", color=ALARM if hit else MUTED, markersize=5)
        if np.abs(g).max() < reach - 0.15:
            axis.annotate(
                f"({order[0]},{order[1]})",
                g,
                fontsize=7,
                color=MUTED,
                xytext=(3, 3),
                textcoords="offset points",
            )
    _surface_circles(axis, job, k, reach)
    free = lattice.grating_lobe_free_cone(k)
    axis.set(xlim=(-reach, reach), ylim=(-reach, reach), aspect="equal", xlabel="u", ylabel="v")
    axis.set_title(
        "No grating lobe at any scan angle" if free > np.pi / 2 - 1e-9 else f"Free of grating lobes to {arc(free)}"
    )


def _surface_circles(axis: Any, job: Job, k: float, reach: float) -> None:
    """Dashed circles on which the beam excites a surface wave of the bare stack through a Floquet wave."""
    waves = [item.wave for item in surface_waves(job) if item.frequency == float(job.frequency[-1])]
    turn = np.linspace(0, 2 * np.pi, 361)
    circle, lattice = np.stack([np.cos(turn), np.sin(turn)]), job.cell.lattice
    orders = lattice.orders_within(4.0 * k)
    for n, wave in enumerate(waves):
        beta, colour = wave.beta.real, HUES[(n + 2) % len(HUES)]
        for order in orders[orders.any(axis=1)]:
            g = -(order @ lattice.reciprocal) / k
            size = float(np.hypot(*g))
            spot = g * (1 - beta / size)  # the point of the circle nearest to broadside
            if np.abs(spot).max() > reach - 0.2:
                continue
            seen = abs(size - beta) <= 1
            width = 1.2 if seen else 0.6
            axis.plot(*(g[:, None] + beta * circle), "--", color=colour, linewidth=width, zorder=2)
            away = float(np.hypot(*spot))
            if away < 1.35:
                place = spot if away < 0.8 else spot * (1 + 0.24 / away)  # clear of the edge of visible space
                axis.annotate(
                    wave.name, place, fontsize=7, color=colour, ha="center", va="center", zorder=5,
                    bbox={"facecolor": "white", "edgecolor": "none", "pad": 0.6, "alpha": 0.85},
                )  # fmt: skip


def _perspective(axis: Any, cell: UnitCell) -> None:
    from mpl_toolkits.mplot3d.art3d import Line3DCollection, Poly3DCollection

    mesh, points = cell.mesh, cell.mesh.points * 1e3
    base = _base(cell) * 1e3
    outline = np.array([[*corner, base] for corner in _cell_corners(cell) * 1e3])
    face = "#dfe3e6" if cell.ground else "none"
    axis.add_collection3d(Poly3DCollection([outline], facecolor=face, edgecolor=MUTED, linewidth=0.8, alpha=0.6))
    for height in [] if cell.stack is None else cell.stack.interfaces[1:] * 1e3:
        face_of_layer = np.array([[*corner, height] for corner in _cell_corners(cell) * 1e3])
        axis.add_collection3d(
            Poly3DCollection([face_of_layer], facecolor=LAYER, edgecolor=MUTED, linewidth=0.5, alpha=0.18)
        )
    for c in range(len(mesh.names)):
        own = mesh.triangles[mesh.triangle_conductor == c]
        if len(own):
            axis.add_collection3d(
                Poly3DCollection(points[own], facecolor=HUES[c % 6], edgecolor=INK, linewidth=0.25, alpha=0.85)
            )
        wires = mesh.segments[mesh.segment_conductor == c]
        if len(wires):
            axis.add_collection3d(Line3DCollection(points[wires], color=HUES[c % 6], linewidth=2.2))
    for gaps, colour, marker in _markers(cell):
        if len(gaps):
            axis.scatter(*(gaps.T * 1e3), color=colour, marker=marker, s=26, depthshade=False, zorder=10)
    top = base if cell.stack is None else cell.stack.top * 1e3
    everything = np.vstack([outline, points, [[*points[0, :2], top]]])
    low, high = everything.min(axis=0), everything.max(axis=0)
    size = np.maximum(high - low, 0.12 * (high - low).max())
    middle = (low + high) / 2
    for letter, centre, extent in zip("xyz", middle, size, strict=True):
        getattr(axis, f"set_{letter}lim")(centre - extent / 2, centre + extent / 2)
        getattr(axis, f"set_{letter}label")(f"{letter} (mm)", fontsize=7.5)
    axis.set_box_aspect(size, zoom=0.82)
    axis.tick_params(labelsize=6.5, pad=0)
    axis.locator_params(nbins=4)
    axis.view_init(elev=28, azim=-58)
    for letter in "xyz":
        getattr(axis, f"{letter}axis").pane.set_visible(False)


def _from_above(axis: Any, cell: UnitCell) -> None:
    from matplotlib.collections import LineCollection, PolyCollection

    mesh, points = cell.mesh, cell.mesh.points[:, :2] * 1e3
    corners = _cell_corners(cell) * 1e3
    for m in np.stack(np.meshgrid((-1, 0, 1), (-1, 0, 1), indexing="ij"), -1).reshape(-1, 2):
        shift = cell.lattice.positions(m[None])[0] * 1e3
        alpha = 0.9 if not m.any() else 0.22
        axis.plot(*(corners[[0, 1, 2, 3, 0]] + shift).T, color=FAINT if m.any() else MUTED, linewidth=0.8)
        for c in range(len(mesh.names)):
            own = mesh.triangles[mesh.triangle_conductor == c]
            colour = HUES[c % 6]
            if len(own):
                axis.add_collection(
                    PolyCollection(points[own] + shift, facecolor=colour, edgecolor=colour, linewidth=0.2, alpha=alpha)
                )
            wires = mesh.segments[mesh.segment_conductor == c]
            if len(wires):
                axis.add_collection(LineCollection(points[wires] + shift, color=colour, linewidth=2, alpha=alpha))
                ends = points[wires].reshape(-1, 2) + shift
                axis.plot(*ends.T, "o", color=colour, markersize=2.5, alpha=alpha, linestyle="none")
    for gaps, colour, marker in _markers(cell):
        axis.plot(*(gaps[:, :2].T * 1e3), marker=marker, color=colour, markersize=5, linestyle="none", zorder=10)
    spots: dict[tuple[float, ...], list[str]] = {}
    for port in cell.ports:
        spots.setdefault(tuple(np.round(port.gap.centre[:2] * 1e3, 3)), []).append(port.name)
    for spot, names in spots.items():
        axis.annotate(
            ", ".join(names), spot, color=ALARM, fontsize=8, xytext=(4, 5), textcoords="offset points", zorder=11,
            bbox={"facecolor": "white", "edgecolor": "none", "alpha": 0.75, "pad": 0.5},
        )  # fmt: skip
    reach = np.ptp(corners, axis=0).max() * 0.95
    middle = corners.mean(axis=0)
    axis.set(
        xlim=(middle[0] - reach, middle[0] + reach),
        ylim=(middle[1] - reach, middle[1] + reach),
        aspect="equal",
        xlabel="x (mm)",
        ylabel="y (mm)",
    )
    axis.set_title("From above, with neighbours")
    axis.grid(False)
    used = [
        c for c in range(len(mesh.names)) if (mesh.triangle_conductor == c).any() or (mesh.segment_conductor == c).any()
    ]
    handles = [axis.plot([], [], "s", color=HUES[c % 6], markersize=6, label=mesh.names[c])[0] for c in used[:8]]
    if handles:
        axis.legend(
            handles=handles,
            loc="upper center",
            bbox_to_anchor=(0.5, -0.16),
            ncols=3 if sum(len(mesh.names[c]) for c in used[:3]) < 24 else 2,
            frameon=False,
            fontsize=7.5,
        )


def _cell_corners(cell: UnitCell) -> Floats:
    """Corners of the cell's parallelogram (4, 2), m, centred on the mesh's bounding box."""
    a, b = cell.lattice.vectors
    points = cell.mesh.points[:, :2]
    middle = (points.min(axis=0) + points.max(axis=0)) / 2
    return np.array([-a - b, a - b, a + b, b - a]) / 2 + middle


def _base(cell: UnitCell) -> float:
    """Height (m) at which the cell's outline is drawn: the ground, else the lowest point."""
    return 0.0 if cell.ground else float(cell.mesh.points[:, 2].min())


def _markers(cell: UnitCell) -> list[tuple[Floats, str, str]]:
    ports = np.array([port.gap.centre for port in cell.ports]).reshape(-1, 3)
    loads = np.array([load.gap.centre for load in cell.loads]).reshape(-1, 3)
    return [(ports, ALARM, "o"), (loads, INK, "D")]
