"""Room arc: what was observed. Imports constants and errors; everything to the right builds on its
`Arc`.

Mathematics of the room. Residuals of an observation are RA times cos dec and Dec; the covariance of
a station-night is the independent part of each observation plus a part common to the night
(`ErrorModel`, `Noise`), whitened by Cholesky per night.
"""

from ngbound.arc.ades_psv import write_psv
from ngbound.arc.ades_rules import COLUMNS as ADES_COLUMNS
from ngbound.arc.ades_xml import write_xml
from ngbound.arc.catalogue_offsets import (
    CataloguePrior,
    catalogue_priors,
    prior_of,
    seasons,
    treatment_text,
)
from ngbound.arc.checking import offset_arcsec
from ngbound.arc.debiasing import DebiasingTable, debiased, read_debiasing
from ngbound.arc.errors_model import ErrorModel, Factors, Noise, station_nights, weight_table
from ngbound.arc.observations import REASON_OFFSET, Arc
from ngbound.arc.reading import read_arc
from ngbound.arc.shared_errors import Modes, SharedErrors
from ngbound.arc.stations import (
    EARTH_EQUATORIAL_RADIUS_KM,
    Station,
    all_stations,
    geodetic_to_itrf_km,
    record_position_km,
    station,
    user_stations,
)
from ngbound.arc.survey import Gap, Range, Survey, survey
from ngbound.arc.vetting import Finding, vet

__all__ = [
    "ADES_COLUMNS",
    "Arc",
    "EARTH_EQUATORIAL_RADIUS_KM",
    "CataloguePrior",
    "DebiasingTable",
    "ErrorModel",
    "Factors",
    "Finding",
    "Gap",
    "Modes",
    "Noise",
    "REASON_OFFSET",
    "Range",
    "SharedErrors",
    "Station",
    "Survey",
    "all_stations",
    "geodetic_to_itrf_km",
    "catalogue_priors",
    "debiased",
    "prior_of",
    "offset_arcsec",
    "read_arc",
    "read_debiasing",
    "record_position_km",
    "seasons",
    "station",
    "station_nights",
    "survey",
    "treatment_text",
    "user_stations",
    "vet",
    "weight_table",
    "write_psv",
    "write_xml",
]
