"""Offsets of star catalogues with priors from published sizes; imports numpy, constants and this
room.

S. Eggl et al. 2020, Icarus 339, 113596 compared 26 catalogues with Gaia DR2 on tiles of the sky.
Where the user has their table (`ngbound.arc.debiasing`), positions are corrected by it, and a
fraction of the published size remains; it is too large to ship, so that without it the offsets
are of the published size. Each catalogue has, in RA and in Dec,

- one offset for the whole arc, its prior the published sky-averaged size, and
- one more for each season of observation, of the same size: the offset varies over zones of the
  sky, which the object leaves from one season to the next.

Zones smaller than that, and their change from night to night, belong to the common error of the
station-night. Sizes, epochs and sources stand in data/catalogue_priors.csv.
"""

import csv
from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache
from importlib.resources import files

import numpy as np
from numpy.typing import NDArray

from ngbound.arc.observations import BIAS_COLUMNS, Arc, iso_day
from ngbound.arc.shared_errors import SharedErrors
from ngbound.constants import ARCSEC_RAD

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

SEASON_GAP_D = 60.0
"""A gap of this many days in the whole arc ends a season."""
SEASON_LONGEST_D = 200.0
"""A season ends so many days after its first observation."""
MJD_2000 = 51544.5
YEAR_D = 365.25
AXES = ("RA", "Dec")
REMAINING = 0.2
"""What remains of an offset that was corrected tile by tile: the scatter inside a tile, and errors
of the corrections. No size was found published: a fifth is a choice of ours."""
CORRECTED = "corrected by the debiasing table"
AS_PUBLISHED = "not corrected, prior of the published size"
NOT_IN_TABLE = "not in the debiasing table or not in its tile, prior of the published size"
NO_OFFSET = "no offset: in the frame of Gaia"
NO_PRIOR = "not corrected, no offset allowed for"
NO_STARS = "not measured against stars"


@dataclass(frozen=True)
class CataloguePrior:
    """Prior standard deviation of the offset of a star catalogue, per axis."""

    catalogue: str
    position_arcsec: float
    motion_mas_yr: float
    epoch: float
    source: str
    status: str
    note: str

    def sigma_arcsec(self, mjd: FloatArray) -> FloatArray:
        """The standard deviation at some dates."""
        years = 2000.0 + (mjd - MJD_2000) / YEAR_D - self.epoch
        return np.hypot(self.position_arcsec, self.motion_mas_yr / 1000.0 * years)

    @property
    def expectation(self) -> str:
        """What is published, in a few words."""
        return f"{self.note} [{self.source}; {self.status}]"


@lru_cache(maxsize=1)
def catalogue_priors() -> dict[str, CataloguePrior]:
    """The priors by ADES catalogue name; "*" for all others."""
    text = files("ngbound").joinpath("data/catalogue_priors.csv").read_text(encoding="utf-8")
    lines = [line for line in text.splitlines() if not line.startswith("#")]
    return {
        row["astCat"]: CataloguePrior(
            row["astCat"],
            float(row["position_arcsec"]),
            float(row["motion_mas_yr"]),
            float(row["epoch"]),
            row["source"],
            row["status"],
            row["note"],
        )
        for row in csv.DictReader(lines)
    }


def prior_of(catalogue: str) -> CataloguePrior:
    """The prior of a catalogue, by its ADES name."""
    priors = catalogue_priors()
    return priors.get(catalogue or "UNK", priors["*"])


def arc_mjd(arc: Arc) -> FloatArray:
    """UTC of each observation as MJD, (n,)."""
    table = arc.table
    return table["utc_day"].to_numpy() + table["utc_sec"].to_numpy() / 86400.0


def seasons(arc: Arc) -> IntArray:
    """Season of observation (n,) of each record, counted from 0 in order of time."""
    mjd = arc_mjd(arc)
    season = np.zeros(len(mjd), dtype=np.int64)
    begun = last = -np.inf
    count = -1
    for row in np.argsort(mjd, kind="stable"):
        if mjd[row] - last > SEASON_GAP_D or mjd[row] - begun > SEASON_LONGEST_D:
            begun = mjd[row]
            count += 1
        last = mjd[row]
        season[row] = count
    return season


def corrected(arc: Arc) -> NDArray[np.bool_]:
    """Observations (n,) whose positions were corrected by the debiasing table."""
    if BIAS_COLUMNS[0] not in arc.table:
        return np.zeros(len(arc), dtype=bool)
    return np.isfinite(arc.table[BIAS_COLUMNS[0]].to_numpy(dtype=float))


def catalogue_treatment(arc: Arc, with_prior: bool) -> NDArray[np.object_]:
    """In words (n,) how the offset of the star catalogue of each observation was dealt with.

    Parameters
    ----------
    with_prior : bool
        Whether offsets are marginalised.
    """
    named = arc.table["astCat"].to_numpy(dtype=object)
    rest = NOT_IN_TABLE if BIAS_COLUMNS[0] in arc.table else AS_PUBLISHED
    told = np.full(len(arc), rest if with_prior else NO_PRIOR, dtype=object)
    for name in set(named.tolist()):
        prior = prior_of(name)
        if max(prior.position_arcsec, prior.motion_mas_yr) <= 0.0:
            told[named == name] = NO_OFFSET
    told[corrected(arc)] = CORRECTED
    told[~np.isfinite(arc.table["ra_rad"].to_numpy(dtype=float))] = NO_STARS
    return told


def treatment_text(counts: Mapping[str, int]) -> str:
    """Counts of observations by treatment, a line each below a title."""
    rows = [f"  {n:6d}  {words}" for words, n in counts.items()]
    return "\n".join(["Offsets of star catalogues, observations:", *rows])


def catalogue_offsets(arc: Arc, scale: float = 1.0, by_season: bool = True) -> SharedErrors:
    """The offsets of the catalogues of an arc.

    Parameters
    ----------
    arc : Arc
        Usable observations, n rows.
    scale : float
        Factor on all priors.
    by_season : bool
        Whether each season has an offset of its own besides that of the whole arc.

    Returns
    -------
    SharedErrors
        Those of catalogues without a prior (Gaia) left out; corrected observations apart from the
        others.
    """
    mjd = arc_mjd(arc)
    season = seasons(arc)
    named = arc.table["astCat"].to_numpy(dtype=object)
    named = np.where(named == "", "UNK", named)
    names: list[str] = []
    columns: list[FloatArray] = []
    sigma: list[float] = []
    source: list[str] = []

    def add(name: str, size: FloatArray, rows: NDArray[np.bool_], where: str) -> None:
        for axis, letter in enumerate(AXES):
            column = np.zeros((len(mjd), 2))
            column[rows, axis] = size[rows] * ARCSEC_RAD
            names.append(f"{name}, {letter}")
            columns.append(column.ravel())
            sigma.append(float(np.median(size[rows])))
            source.append(where)

    better = corrected(arc)
    for catalogue, is_better in sorted(set(zip(named.tolist(), better.tolist(), strict=True))):
        prior = prior_of(catalogue)
        mine = (named == catalogue) & (better == is_better)
        size = scale * prior.sigma_arcsec(mjd) * (REMAINING if is_better else 1.0)
        if size[mine].max() <= 0.0:
            continue
        name, where = f"catalogue {catalogue}", prior.expectation
        if is_better:
            name, where = f"{name} corrected", f"{REMAINING:g} (a choice of ours) of: {where}"
        add(name, size, mine, where)
        present = np.unique(season[mine])
        if not by_season or len(present) < 2:
            continue
        for number in present.tolist():
            rows = mine & (season == number)
            begin = iso_day(int(mjd[rows].min()))[:7]
            add(f"{name} season {begin}", size, rows, where)
    matrix = np.stack(columns, axis=1) if columns else np.zeros((2 * len(mjd), 0))
    return SharedErrors(
        tuple(names), matrix, np.array(sigma), ("arcsec",) * len(names), tuple(source)
    )
