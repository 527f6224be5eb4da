"""How every figure of this program looks: sizes, colours, direct labels, rendering without a display."""

from __future__ import annotations

import io
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from .result import Result

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

Floats = NDArray[np.float64]

WIDTH = 7.4
"""Width of a figure in inches: the text width of the report."""

INK, MUTED, FAINT, ALARM = "#1d2733", "#5c6875", "#c9d0d6", "#b3261e"
HUES = ("#0072b2", "#d55e00", "#009e73", "#cc79a7", "#56b4e9", "#e69f00")
"""Colours of categories, distinguishable by colour-blind readers (M. Okabe and K. Ito, 2008)."""
DASHES = ("-", "--", "-.", ":")
MAP = "cividis"
"""Perceptually uniform map, readable by colour-blind readers."""

STYLE: dict[str, Any] = {
    "font.size": 8.5,
    "axes.titlesize": 9,
    "axes.titleweight": "bold",
    "axes.titlelocation": "left",
    "axes.labelcolor": INK,
    "axes.edgecolor": MUTED,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.grid": True,
    "grid.color": "#e4e8eb",
    "grid.linewidth": 0.6,
    "axes.axisbelow": True,
    "lines.linewidth": 1.5,
    "text.color": INK,
    "xtick.color": MUTED,
    "ytick.color": MUTED,
    "svg.hashsalt": "scanward",
    "svg.fonttype": "path",
    "figure.dpi": 110,
    "savefig.dpi": 150,
}


@dataclass(frozen=True)
class Drawing:
    """A finished figure: its picture bytes, their media type, a caption, and words for those who cannot
    see it."""

    name: str
    data: bytes
    media: str
    caption: str
    words: str

    @property
    def suffix(self) -> str:
        return ".svg" if self.media == "image/svg+xml" else ".png"


@contextmanager
def style(raster: int = STYLE["savefig.dpi"]) -> Iterator[None]:
    """matplotlib settings of this program, for the time of one figure; `raster`: dots per inch of its maps."""
    import matplotlib

    with matplotlib.rc_context({**STYLE, "savefig.dpi": raster}):  # type: ignore[arg-type]
        yield


def canvas(width: float, height: float) -> Figure:
    """An empty figure in inches; never through pyplot, so that no display or global state is involved."""
    from matplotlib.figure import Figure
    from matplotlib.layout_engine import ConstrainedLayoutEngine

    return Figure(figsize=(width, height), layout=ConstrainedLayoutEngine(h_pad=0.09, w_pad=0.06))


def render(figure: Figure, media: str = "image/svg+xml") -> bytes:
    """Picture bytes, the same for the same figure on every run."""
    buffer = io.BytesIO()
    if media == "image/svg+xml":
        figure.savefig(buffer, format="svg", metadata={"Date": None})
    else:
        figure.savefig(buffer, format="png", metadata={"Software": None})
    return buffer.getvalue()


def shades(count: int) -> list[tuple[float, ...]]:
    """Ordered colours for rising frequency, dark to light, none too pale on white."""
    import matplotlib

    return [matplotlib.colormaps["viridis"](x) for x in np.linspace(0.0, 0.82, max(count, 2))[:count]]


def chosen_frequencies(result: Result, most: int = 5) -> NDArray[np.int64]:
    """Indices of about `most` frequencies spread over the band, both ends and the worst one among them."""
    count = len(result.job.frequency)
    if count <= most:
        return np.arange(count)
    level = np.nan_to_num(np.abs(result.response.reflection), nan=0.0).max(axis=(1, 2))
    even = np.round(np.linspace(0, count - 1, most)).astype(int)
    return np.unique([*even, int(np.argmax(level))])


def driven_ports(result: Result) -> list[int]:
    """Indices of the ports with a drive."""
    return [i for i, port in enumerate(result.job.cell.ports) if port.drive != 0]


def gigahertz(frequency: float) -> str:
    return f"{frequency / 1e9:.4g} GHz"


def plane_title(phi: float) -> str:
    return f"cut at φ = {arc(phi)}"


def arc(angle: float) -> str:
    """An angle in rad as degrees for a figure."""
    return f"{round(np.degrees(angle), 2) + 0.0:g}°"


def plane_grid(result: Result, rows: int, height: float = 2.5) -> tuple[Figure, NDArray[Any]]:
    """Axes (rows, planes) with common limits and scan angles along x; figures wrap at four planes."""
    planes = min(len(result.job.scan.planes), 4)
    figure = canvas(WIDTH, height * rows + 0.3)
    axes = figure.subplots(rows, planes, squeeze=False, sharey=True, sharex="col")
    for column in range(planes):
        axes[0, column].set_title(plane_title(result.job.scan.planes[column][0]))
        theta = np.degrees(result.job.scan.plane_theta[column])
        axes[-1, column].set_xlabel("scan angle θ (deg)")
        if len(theta) and theta.max() > theta.min():
            axes[-1, column].set_xlim(theta.min(), theta.max())
            axes[-1, column].set_xticks(angle_ticks(theta.min(), theta.max(), 6 if planes < 3 else 4))
    return figure, axes


def angle_ticks(low: float, high: float, most: int) -> Floats:
    """Round angles (deg) between `low` and `high`, at most about `most` of them."""
    step = next((s for s in (5, 10, 15, 30, 45, 60, 90) if (high - low) / s <= most), 90)
    return np.arange(np.ceil(low / step - 1e-9) * step, high + 1e-6, step)


def label_ends(axes: Axes, entries: Sequence[tuple[float, str, Any]], size: float = 8) -> None:
    """Write (y, text, colour) just right of the axes at the heights y, moved apart where they would overlap.

    Call after the limits are final.
    """
    if not entries:
        return
    low, high = axes.get_ylim()
    figure = axes.get_figure(root=True)
    assert figure is not None
    inches = axes.get_position().height * figure.get_size_inches()[1]
    step = (size * 1.25 / 72) / max(inches, 0.5)
    wanted = np.array([(np.clip(y, low, high) - low) / (high - low) if np.isfinite(y) else 0 for y, _, _ in entries])
    order = np.argsort(wanted)
    placed = spread(wanted[order], step)
    placed += max(0.0, -placed[0])
    for position, index in zip(placed, order, strict=True):
        _, text, colour = entries[index]
        axes.annotate(
            text, (1.0, position), xycoords="axes fraction", xytext=(4, 0), textcoords="offset points",
            color=colour, fontsize=size, va="center", ha="left", annotation_clip=False,
        )  # fmt: skip


def spread(wanted: Floats, step: float) -> Floats:
    """Positions as near as possible to rising `wanted` with at least `step` between neighbours."""
    groups: list[list[float]] = []  # sum of (wanted - rank * step), count
    for position in wanted:
        groups.append([position, 1.0])
        while len(groups) > 1 and _start(groups[-2]) + groups[-2][1] * step > _start(groups[-1]):
            total, count = groups.pop()
            groups[-1][0] += total - count * groups[-1][1] * step
            groups[-1][1] += count
    placed = [_start(group) + i * step for group in groups for i in range(int(group[1]))]
    return np.array(placed)


def _start(group: list[float]) -> float:
    return group[0] / group[1]


def limit_line(axes: Axes, value: float, text: str) -> None:
    """A horizontal limit with its words on the line; nothing when it lies outside the axes."""
    low, high = axes.get_ylim()
    if not low <= value <= high:
        return
    axes.axhline(value, color=ALARM, linewidth=1.0, linestyle=(0, (5, 2)), zorder=3)
    axes.annotate(
        text, (0.01, value), xycoords=("axes fraction", "data"), xytext=(0, 2), textcoords="offset points",
        color=ALARM, fontsize=7.5, va="bottom", ha="left",
        bbox={"facecolor": "white", "edgecolor": "none", "alpha": 0.75, "pad": 0.6},
    )  # fmt: skip
