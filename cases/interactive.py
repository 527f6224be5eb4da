"""The interactive map of the report: an HTML fragment that needs nothing from a network.

The plot is bokeh's; controls are the browser's own, so that keyboard, touch and screen readers work and bokeh's
widgets need not be carried along. What reacts to them is `interactive.js`.
"""

from __future__ import annotations

import json
import re
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..solver.survey import Blindness, ScanMap
from .job import Job
from .map_payload import LOBE, map_payload
from .plot import ALARM, INK, MUTED

if TYPE_CHECKING:
    from bokeh.plotting import figure as Figure

HERE = Path(__file__).parent
FONT = '"Source Sans 3", "Segoe UI", "Helvetica Neue", Arial, sans-serif'
REACH = 1.04  # of the axes, direction cosines
LOW, HIGH = -30.0, 0.0  # dB, colours of the active reflection
NO_POINTS: dict[str, list[float]] = {"x": [], "y": []}


def interactive_map(job: Job, scan_map: ScanMap, blindnesses: Sequence[Blindness] = ()) -> str:
    """Map of active reflection and gain over direction cosines with a choice of frequency, quantity and port.

    Parameters
    ----------
    job : the case, for its ports, polarisation, limits, cone and layers
    scan_map : what is shown; large ones are thinned, see `map_payload.thinned`
    blindnesses : their peaks are marked, because they may be narrower than the grid

    Returns
    -------
    One HTML `section` with its own style, data and scripts; hidden in print, one sentence where scripts are off.
    """
    from bokeh.resources import Resources
    from jinja2 import Environment, FileSystemLoader, StrictUndefined
    from markupsafe import Markup

    payload = map_payload(job, scan_map, blindnesses)
    environment = Environment(
        loader=FileSystemLoader(HERE), autoescape=True, undefined=StrictUndefined, trim_blocks=True, lstrip_blocks=True
    )
    return environment.get_template("interactive.html").render(
        style=Markup((HERE / "interactive.css").read_text(encoding="utf-8")),
        script=Markup((HERE / "interactive.js").read_text(encoding="utf-8")),
        library=Markup(Resources(mode="inline", components=["bokeh"], log_level="warn").render_js()),
        data=Markup(_json(payload)),
        plot=Markup(_json(plot_item())),
        ports=[port["name"] for port in payload["ports"]],
        frequencies=len(payload["frequency"]),
        limits=any(port["limit"] is not None for port in payload["ports"]),
        surfaces=any(circle[3] != LOBE for circles in payload["circles"] for circle in circles),
        lobes=any(circle[3] == LOBE for circles in payload["circles"] for circle in circles),
        peaks=any(payload["peaks"]),
    )


def plot_item() -> dict[str, Any]:
    """The empty plot as bokeh's JSON, the same on every call: bokeh counts its names on over a whole process."""
    from bokeh.embed import json_item

    text = json.dumps(json_item(_plot()))
    names: dict[str, str] = {}
    return json.loads(re.sub(r'"p\d+"', lambda m: names.setdefault(m[0], f'"p{1000 + len(names)}"'), text))


def _plot() -> Figure:
    """Image, lines and markers by name, to be filled by the script."""
    from bokeh.models import ColorBar, ColumnDataSource, LinearColorMapper, Range1d
    from bokeh.palettes import Cividis256
    from bokeh.plotting import figure

    plot = figure(
        name="plot", x_range=Range1d(start=-REACH, end=REACH), y_range=Range1d(start=-REACH, end=REACH),
        frame_width=440, frame_height=440, toolbar_location=None, tools="", outline_line_color=None,
        background_fill_color="#ffffff", border_fill_color="#ffffff", min_border=4,
        x_axis_label="u = sin θ cos φ", y_axis_label="v = sin θ sin φ",
    )  # fmt: skip
    plot.grid.visible = False
    for one in (*plot.xaxis, *plot.yaxis):
        one.update(
            axis_label_text_font=FONT, axis_label_text_font_style="normal", axis_label_text_font_size="14px",
            axis_label_text_color=INK, major_label_text_font=FONT, major_label_text_font_size="13px",
            major_label_text_color=MUTED, axis_line_color=MUTED, major_tick_line_color=MUTED,
            minor_tick_line_color=None, major_tick_in=0,
        )  # fmt: skip
    mapper = LinearColorMapper(palette=Cividis256, low=LOW, high=HIGH, nan_color="#ffffff", name="mapper")
    blank = {"image": [np.zeros((1, 1), dtype=np.float32)], "corner": [-1.0], "side": [2.0]}
    image = ColumnDataSource(blank, name="image")
    plot.image("image", source=image, x="corner", y="corner", dw="side", dh="side",
               color_mapper=mapper)  # pyright: ignore[reportCallIssue]  # fmt: skip
    _lines(plot, "rim", MUTED, 1.0, "solid", under=None)
    _lines(plot, "cone", "#ffffff", 1.4, "solid", under=INK)
    _lines(plot, "lobes", "#ffffff", 1.8, [9, 5], under=INK)
    _lines(plot, "waves", "#ffffff", 2.2, [2, 4], under=INK)
    _lines(plot, "contour", ALARM, 2.4, "solid", under="#ffffff")
    for name, marker, size in (("peaks", "triangle", 11), ("pin", "circle", 14), ("pointer", "cross", 20)):
        for colour, width in (("#ffffff", 4.5), (ALARM if name == "peaks" else INK, 2.0)):
            plot.scatter("x", "y", source=_source(plot, name), marker=marker, size=size, fill_alpha=0,
                         line_color=colour, line_width=width)  # fmt: skip
    bar = ColorBar(
        color_mapper=mapper, name="bar", title="active reflection (dB)", height=12, padding=0, margin=8,
        title_text_font=FONT, title_text_font_style="normal", title_text_font_size="14px", title_text_color=INK,
        major_label_text_font=FONT, major_label_text_font_size="13px", major_label_text_color=MUTED,
        major_tick_line_color=None, bar_line_color=None, title_standoff=4, label_standoff=4,
    )  # fmt: skip
    plot.add_layout(bar, "below")
    return plot


def _lines(plot: Figure, name: str, colour: str, width: float, dash: Any, under: str | None) -> None:
    """A line with a thin edge of another colour under it, to be seen on light and dark."""
    source = _source(plot, name)
    if under is not None:
        plot.line("x", "y", source=source, line_color=under, line_width=width + 1.6, line_dash=dash, line_alpha=0.55)
    plot.line("x", "y", source=source, line_color=colour, line_width=width, line_dash=dash)


def _source(plot: Figure, name: str) -> Any:
    """The one source of points called `name`."""
    from bokeh.models import ColumnDataSource

    return plot.select_one({"type": ColumnDataSource, "name": name}) or ColumnDataSource(dict(NO_POINTS), name=name)


def _json(value: Any) -> str:
    """JSON that may stand inside a script element."""
    return json.dumps(value, allow_nan=False, separators=(",", ":")).replace("<", "\\u003c")
