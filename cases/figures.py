"""All figures of a run, in the order of the report."""

from __future__ import annotations

from .bench_charts import bench_figures
from .charts import reflection_chart, scan_maps
from .cuts import band, cross_polar_cuts, gain_cuts, power_cuts, reflection_cuts
from .drawing import cell_drawing, lattice_diagram
from .plot import Drawing
from .result import Result
from .stack_drawing import stack_drawing
from .survey_charts import angle_map, blindness_paths, clear_cone, reflection_maps


def draw_all(result: Result) -> tuple[Drawing, ...]:
    """Every figure the result has data for; figures that need cuts, a map or a band are left out without
    them."""
    drawn = (
        reflection_cuts(result),
        scan_maps(result) if result.survey is None else reflection_maps(result),
        angle_map(result),
        clear_cone(result),
        blindness_paths(result),
        band(result),
        reflection_chart(result),
        gain_cuts(result),
        cross_polar_cuts(result),
        power_cuts(result),
        *bench_figures(result),
        lattice_diagram(result.job),
        cell_drawing(result.job.cell),
        stack_drawing(result.job.cell),
    )
    return tuple(drawing for drawing in drawn if drawing is not None)
