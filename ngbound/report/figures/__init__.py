"""The figures of ngbound; each function returns a matplotlib Figure and touches no global state."""

from ngbound.report.figures.directions import direction_map
from ngbound.report.figures.fan import residual_fan
from ngbound.report.figures.masses import mass_figure
from ngbound.report.figures.posteriors import posterior_figure
from ngbound.report.figures.reach import reach_figure
from ngbound.report.figures.stations import residual_by_station

__all__ = [
    "direction_map",
    "mass_figure",
    "posterior_figure",
    "reach_figure",
    "residual_by_station",
    "residual_fan",
]
