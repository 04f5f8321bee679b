"""What people read: figures, tables, the report, and the machine-readable record.

May import constants, errors and the rooms arc, sky, motion, fit, limits and mass; of a fit it reads
``residuals``, ``noise``, ``keep``, ``arc.name`` and, for the fan, ``design`` and what the limits
room needs. The one calculation made here is what a thrust leaves in the residuals after the best
gravity-only refit (``departure``): d = (B - X (X'WX)^-1 X'WB) A, X and B the partials with respect
to orbit and thrust, W the inverse covariance of the observations.
"""

from ngbound.report.document import (
    budget_words,
    prior_name,
    render_mass,
    render_report,
    the_sentence,
)
from ngbound.report.figures import (
    direction_map,
    mass_figure,
    posterior_figure,
    reach_figure,
    residual_by_station,
    residual_fan,
)
from ngbound.report.record import Record, load_record, provenance
from ngbound.report.tables import (
    SmallTable,
    catalogue_table,
    echo_table,
    residual_suspicions,
    residuals_csv,
    station_table,
    threshold_table,
)

__all__ = [
    "Record",
    "SmallTable",
    "budget_words",
    "catalogue_table",
    "direction_map",
    "echo_table",
    "load_record",
    "mass_figure",
    "posterior_figure",
    "prior_name",
    "provenance",
    "reach_figure",
    "render_mass",
    "render_report",
    "residual_by_station",
    "residual_fan",
    "residual_suspicions",
    "residuals_csv",
    "station_table",
    "the_sentence",
    "threshold_table",
]
