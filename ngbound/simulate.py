"""An invented arc from a checked-in recipe: a known orbit and thrust, observed with known errors.

A recipe is a TOML file validated like a case file.  It names an orbit, a thrust, roving sites and
spacecraft that nobody has, nights, weather and errors, and a seed; the same recipe gives the same
arc.  A site observes only when the object stands high enough and the Sun low enough, a spacecraft
only within its range of solar elongations.  Every record brings its own position, and invented
places carry a code that belongs to no observatory: 247 (roving observer) on the ground, one that
is in no list in space.

May import every room to its left and ngbound.case; never run or cli.
"""

from collections.abc import Callable
from dataclasses import dataclass, replace
from datetime import date, datetime, timedelta
from functools import cached_property
from pathlib import Path
from typing import Annotated, Any, Self

import astropy.units as u
import numpy as np
import pandas as pd
from numpy.typing import NDArray
from pydantic import Field, field_validator, model_validator

from ngbound.arc import Arc, all_stations, write_psv
from ngbound.case import NotNegative, OrbitTable, Positive, ThrustTable, Vector
from ngbound.constants import ARCSEC_RAD, AU_KM, DAY_S
from ngbound.errors import CaseError
from ngbound.motion import Orbit
from ngbound.sky import (
    Ephemeris,
    angles_to_direction,
    astrometric,
    load_ephemeris,
    observer_states,
    station_states,
    utc_to_tdb_d,
)
from ngbound.toml_file import Table, read_toml

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

PERSON = "N. Body"
"""Who reports invented observations."""
MJD_0 = datetime(1858, 11, 17)
MINUTE_S = 60.0
NIGHT_STEP_S = 600.0
"""Step of the search for the hours in which a site can observe."""
NIGHT_HALF_S = 8.0 * 3600.0
"""The search runs this far before and after local midnight."""
TIME_DIGITS = 1
"""Decimals of a second in the reported times."""
MAGNITUDE_ERROR = 0.15
"""Scatter of the reported magnitudes, which nothing in ngbound rests on."""


class SimulatedObject(Table):
    """``[object]`` of a recipe."""

    name: str = Field(pattern=r"^[A-Za-z0-9_-]{1,8}$", description="ADES trkSub, 1-8 characters.")
    H: float = Field(default=17.0, description="Absolute magnitude.")
    phase_mag_deg: NotNegative = Field(default=0.035, description="Fading with phase angle.")


class SimulatedThrust(ThrustTable):
    """``[thrust]`` of a recipe: the truth that an analysis should find."""

    A_au_d2: Vector = Field(default=(0.0, 0.0, 0.0), description="A1, A2, A3 at 1 au.")


class Schedule(Table):
    """``[schedule]``: the nights of the campaign and the seed of chance."""

    first: date
    last: date
    seed: int = Field(ge=0)

    @model_validator(mode="after")
    def _forwards(self) -> Self:
        if self.last < self.first:
            raise ValueError("last must not come before first")
        return self


class Instrument(Table):
    """What sites and spacecraft have in common: cadence and errors."""

    code: str = Field(pattern=r"^[A-Za-z0-9_]{3,4}$")
    name: str
    every_nights: int = Field(default=3, ge=1, description="Nights from one visit to the next.")
    offset_nights: int = Field(default=0, ge=0)
    frames: int = Field(default=4, ge=1, description="Records of one visit.")
    spacing_min: Positive = Field(default=12.0, description="Between frames.")
    clear_fraction: Annotated[float, Field(gt=0.0, le=1.0)] = Field(
        default=1.0, description="Part of the visits that weather and schedule allow."
    )
    rms_arcsec: Positive = Field(description="Random error of one frame, each axis.")
    night_common_arcsec: NotNegative = Field(
        default=0.0, description="Error common to a night, each axis."
    )
    timing_s: NotNegative = Field(default=0.0, description="Random error of one time.")
    faintest_mag: float = 21.5
    catalogue: str = "Gaia3"
    aperture_m: Positive = 0.5

    @field_validator("code")
    @classmethod
    def _nobodys(cls, code: str) -> str:
        known = all_stations().get(code)
        if known is not None and known.kind != "roving":
            raise ValueError(
                f"must be the code of no observatory, but {code} is {known.name}; invented places "
                "carry 247 or a code that is in no list"
            )
        return code

    def context(self) -> tuple[tuple[str, str, tuple[tuple[str, str], ...]], ...]:
        """ADES header of the instrument's block, which says that all of it is invented."""
        return (
            ("observatory", "", (("mpcCode", self.code), ("name", self.name))),
            ("submitter", "", (("name", PERSON),)),
            ("measurers", "", (("name", PERSON),)),
            (
                "telescope",
                "",
                (
                    ("design", "Reflector"),
                    ("aperture", f"{self.aperture_m:g}"),
                    ("detector", "CMOS"),
                ),
            ),
            ("comment", "", (("line", "Invented: object, place and observations."),)),
        )


class Site(Instrument):
    """``[[site]]``: a roving site on the ground, WGS84."""

    longitude_deg: Annotated[float, Field(ge=-180.0, le=360.0)]
    latitude_deg: Annotated[float, Field(ge=-90.0, le=90.0)]
    altitude_m: float
    min_altitude_deg: Annotated[float, Field(ge=0.0, lt=90.0)] = 25.0
    sun_below_deg: Annotated[float, Field(ge=0.0, lt=90.0)] = 13.0


class Spacecraft(Instrument):
    """``[[spacecraft]]``: an observer on a heliocentric orbit of its own."""

    orbit: OrbitTable
    elongation_deg: tuple[float, float] = Field(default=(80.0, 180.0))


class Recipe(Table):
    """A whole simulated campaign."""

    object: SimulatedObject
    orbit: OrbitTable
    thrust: SimulatedThrust = SimulatedThrust()
    schedule: Schedule
    site: tuple[Site, ...] = ()
    spacecraft: tuple[Spacecraft, ...] = ()

    @model_validator(mode="after")
    def _somebody_observes(self) -> Self:
        if not self.site and not self.spacecraft:
            raise ValueError("a recipe needs at least one [[site]] or [[spacecraft]]")
        return self


@dataclass(frozen=True)
class Simulated:
    """A simulated arc and where it was written.

    Attributes
    ----------
    arc : Arc
    recipe : Recipe
        The truth behind it.
    path : Path or None
        The ADES PSV file, when one was written.
    """

    arc: Arc
    recipe: Recipe
    path: Path | None

    def __str__(self) -> str:
        told = ", ".join(f"{n} from {name}" for name, n in self.records_by_site.items())
        times = self.arc.table["obsTime"]
        written = f", written to {self.path}" if self.path else ""
        return (
            f"{len(self.arc)} invented records of {self.recipe.object.name} ({told}) from "
            f"{times.min()} to {times.max()}{written}."
        )

    @property
    def records_by_site(self) -> dict[str, int]:
        """Number of records of each site and spacecraft, by its invented name."""
        names = [dict(context[0][2])["name"] for context in self.arc.contexts]
        counts = self.arc.table["block"].value_counts(sort=False)
        return {name: int(counts[block]) for block, name in enumerate(names)}

    def to_dict(self) -> dict[str, object]:
        """Counts, the recipe and the path."""
        return {
            "records": len(self.arc.table),
            "records_by_site": self.records_by_site,
            "recipe": self.recipe.model_dump(mode="json"),
            "path": str(self.path) if self.path else None,
        }


def simulate_arc(recipe: str | Path | Recipe, *, output: str | Path | None = None) -> Simulated:
    """Observe an invented object from invented places.

    Parameters
    ----------
    recipe : path of a TOML file, or Recipe
    output : path, optional
        ADES PSV file to write; for a recipe file its name with the ending .psv by default.

    Raises
    ------
    CaseError
        The recipe is wrong, or nobody could have observed the object under it.
    """
    if isinstance(recipe, Recipe):
        plan, target = recipe, Path(output) if output else None
    else:
        plan = read_toml(recipe, Recipe)
        target = Path(output) if output else Path(recipe).with_suffix(".psv")
    campaign = Campaign(plan, load_ephemeris(), np.random.default_rng(plan.schedule.seed))
    arc = campaign.observe()
    if target:
        write_psv(arc, target)
    return Simulated(arc, plan, target)


@dataclass(frozen=True)
class Campaign:
    """A recipe being carried out: who can see the object when, and what they report."""

    plan: Recipe
    ephemeris: Ephemeris
    rng: np.random.Generator

    def observe(self) -> Arc:
        """The arc that all sites and spacecraft report together, one block each."""
        instruments: tuple[Site | Spacecraft, ...] = (*self.plan.site, *self.plan.spacecraft)
        reports = [(one, frame) for one in instruments if len(frame := self._report(one))]
        if not reports:
            raise CaseError(
                f"Nobody could observe {self.plan.object.name} from {self.plan.schedule.first} to "
                f"{self.plan.schedule.last}: it was too low, too faint or too near the Sun "
                "everywhere; choose other dates, places or limits."
            )
        arc = Arc.from_frame(pd.concat([frame for _, frame in reports], ignore_index=True))
        block = np.repeat(np.arange(len(reports)), [len(frame) for _, frame in reports])
        return replace(
            arc,
            table=arc.table.assign(block=block),
            contexts=tuple(one.context() for one, _ in reports),
        )

    @cached_property
    def _orbit(self) -> Orbit:
        thrust = self.plan.thrust
        return self.plan.orbit.orbit(thrust.thrust(thrust.A_au_d2))

    def _report(self, instrument: Site | Spacecraft) -> pd.DataFrame:
        """All records of one instrument."""
        if isinstance(instrument, Site):
            utc_s, night = self._nights_on_ground(instrument)
        else:
            utc_s, night = self._nights_in_space(instrument)
        if not len(utc_s):
            return pd.DataFrame()
        utc_s = np.round(utc_s, TIME_DIGITS)
        frame = pd.DataFrame(
            {
                "trkSub": self.plan.object.name,
                "mode": "CMO",
                "stn": instrument.code,
                **self._place(instrument, utc_s),
                "obsTime": [_iso(second) for second in utc_s],
                "ra": "0.0",
                "dec": "0.0",
                "astCat": instrument.catalogue,
            }
        )
        observers = observer_states(Arc.from_frame(frame), self.ephemeris)
        late_s = instrument.timing_s * self.rng.standard_normal(len(frame))
        seen = astrometric(
            _positions(self._orbit),
            observers.tdb_d + late_s / DAY_S,
            observers.position_au + observers.velocity_au_d * (late_s / DAY_S)[:, None],
        )
        east, north = self._errors_arcsec(instrument, night)
        dec_rad = seen.dec_rad + north * ARCSEC_RAD
        ra_rad = seen.ra_rad + east * ARCSEC_RAD / np.cos(seen.dec_rad)
        digits = _decimals(instrument.rms_arcsec)
        magnitude = self._magnitude(observers.tdb_d, observers.position_au)
        magnitude += MAGNITUDE_ERROR * self.rng.standard_normal(len(frame))
        frame["ra"] = [f"{value:.{digits}f}" for value in np.degrees(ra_rad) % 360.0]
        frame["dec"] = [f"{value:.{digits}f}" for value in np.degrees(dec_rad)]
        frame["rmsRA"] = frame["rmsDec"] = f"{instrument.rms_arcsec:g}"
        if instrument.timing_s:
            frame["rmsTime"] = f"{instrument.timing_s:g}"
        frame["mag"] = [f"{value:.1f}" for value in magnitude]
        frame["band"] = "G"
        return frame

    def _errors_arcsec(
        self, instrument: Site | Spacecraft, night: NDArray[np.int64]
    ) -> tuple[Floats, Floats]:
        """Error of each record along RA and Dec: its own, and the one its night shares."""
        _, block = np.unique(night, return_inverse=True)
        own = instrument.rms_arcsec * self.rng.standard_normal((2, night.size))
        shared = instrument.night_common_arcsec * self.rng.standard_normal((2, block.max() + 1))
        east, north = own + shared[:, block]
        return east, north

    def _place(self, instrument: Site | Spacecraft, utc_s: Floats) -> dict[str, Any]:
        """ADES location columns."""
        if isinstance(instrument, Site):
            return {
                "sys": "WGS84",
                "ctr": "399",
                "pos1": f"{instrument.longitude_deg:.5f}",
                "pos2": f"{instrument.latitude_deg:.5f}",
                "pos3": f"{instrument.altitude_m:.1f}",
            }
        tdb_d = _tdb_d(utc_s)
        km = AU_KM * (
            _positions(instrument.orbit.orbit())(tdb_d) - self.ephemeris.position_au("earth", tdb_d)
        )
        return {"sys": "ICRF_KM", "ctr": "399"} | {
            f"pos{axis + 1}": [f"{value:.3f}" for value in km[:, axis]] for axis in range(3)
        }

    def _visits(self, instrument: Site | Spacecraft) -> list[date]:
        """Nights on which the instrument tries, weather permitting."""
        first, last = self.plan.schedule.first, self.plan.schedule.last
        days = range(instrument.offset_nights, (last - first).days + 1, instrument.every_nights)
        return [
            first + timedelta(days=day)
            for day in days
            if self.rng.random() < instrument.clear_fraction
        ]

    def _nights_on_ground(self, site: Site) -> tuple[Floats, NDArray[np.int64]]:
        """Seconds of UTC past MJD 0 of a site's frames, and the night of each."""
        midnight_s = np.array(
            [
                (_mjd(night) + 1.0 - site.longitude_deg / 360.0) * DAY_S
                for night in self._visits(site)
            ]
        )
        grid_s = np.arange(-NIGHT_HALF_S, NIGHT_HALF_S + 1.0, NIGHT_STEP_S)
        starts_s = midnight_s[:, None] + grid_s
        place = (site.longitude_deg, site.latitude_deg, site.altitude_m)
        good = self._visible_from_ground(site, place, starts_s.ravel()).reshape(starts_s.shape)
        return self._frames(site, starts_s, good)

    def _nights_in_space(self, craft: Spacecraft) -> tuple[Floats, NDArray[np.int64]]:
        """Seconds of UTC past MJD 0 of a spacecraft's frames, and the night of each."""
        day_s = np.array([_mjd(night) * DAY_S for night in self._visits(craft)])
        starts_s = day_s[:, None] + np.arange(0.0, DAY_S, NIGHT_STEP_S)
        flat = starts_s.ravel()
        tdb_d = _tdb_d(flat)
        position_au = _positions(craft.orbit.orbit())(tdb_d)
        low, high = craft.elongation_deg
        elongation = self._elongation_deg(tdb_d, position_au)
        good = (elongation >= low) & (elongation <= high)
        good &= self._magnitude(tdb_d, position_au) <= craft.faintest_mag
        return self._frames(craft, starts_s, good.reshape(starts_s.shape))

    def _frames(
        self, instrument: Site | Spacecraft, starts_s: Floats, good: Bools
    ) -> tuple[Floats, NDArray[np.int64]]:
        """A run of frames on each night in which first and last frame see the object."""
        length_s = (instrument.frames - 1) * instrument.spacing_min * MINUTE_S
        times, nights = [], []
        for number, (start_s, usable) in enumerate(zip(starts_s, good, strict=True)):
            chance = self.rng.random(2)
            later = np.interp(start_s + length_s, start_s, usable, right=0.0) == 1.0
            possible = start_s[usable & later]
            if possible.size:
                begin = possible[int(chance[0] * possible.size)]
                begin += (chance[1] - 0.5) * MINUTE_S
                frame_s = np.arange(instrument.frames) * instrument.spacing_min * MINUTE_S
                times.append(begin + frame_s)
                nights.append(np.full(instrument.frames, number))
        if not times:
            return np.zeros(0), np.zeros(0, dtype=np.int64)
        return np.concatenate(times), np.concatenate(nights)

    def _visible_from_ground(
        self, site: Site, place: tuple[float, float, float], utc_s: Floats
    ) -> Bools:
        """Where the object stands high, the Sun low, and the object is bright enough."""
        observers = station_states(place, _tdb_d(utc_s), self.ephemeris)
        up = observers.geocentric_au / np.linalg.norm(
            observers.geocentric_au, axis=1, keepdims=True
        )
        seen = astrometric(_positions(self._orbit), observers.tdb_d, observers.position_au)
        sun = self.ephemeris.position_au("sun", observers.tdb_d) - observers.position_au
        height = _angle_deg(up, angles_to_direction(seen.ra_rad, seen.dec_rad))
        sun_height = _angle_deg(up, sun)
        return (
            (90.0 - height >= site.min_altitude_deg)
            & (90.0 - sun_height <= -site.sun_below_deg)
            & (self._magnitude(observers.tdb_d, observers.position_au) <= site.faintest_mag)
        )

    def _elongation_deg(self, tdb_d: Floats, observer_au: Floats) -> Floats:
        line = _positions(self._orbit)(tdb_d) - observer_au
        return _angle_deg(line, self.ephemeris.position_au("sun", tdb_d) - observer_au)

    def _magnitude(self, tdb_d: Floats, observer_au: Floats) -> Floats:
        """Apparent magnitude: H, the two distances, and a linear fading with phase angle."""
        position_au = _positions(self._orbit)(tdb_d)
        line = position_au - observer_au
        from_sun = position_au - self.ephemeris.position_au("sun", tdb_d)
        distance = np.linalg.norm(line, axis=1) * np.linalg.norm(from_sun, axis=1)
        fading = self.plan.object.phase_mag_deg * _angle_deg(line, from_sun)
        return self.plan.object.H + 5.0 * np.log10(distance) + fading


def _positions(orbit: Orbit) -> Callable[[Floats], Floats]:
    """Barycentric positions (n, 3) in au of an orbit at days of TDB past J2000.0 (n,)."""
    return lambda tdb_d: orbit.propagate(tdb_d).position.to_value(u.au)


def _angle_deg(a: Floats, b: Floats) -> Floats:
    """Angle between vectors (n, 3), in degrees."""
    cosine = np.sum(a * b, axis=1) / np.linalg.norm(a, axis=1) / np.linalg.norm(b, axis=1)
    return np.degrees(np.arccos(np.clip(cosine, -1.0, 1.0)))


def _mjd(night: date) -> float:
    return float((datetime(night.year, night.month, night.day) - MJD_0).days)


def _tdb_d(utc_s: Floats) -> Floats:
    """Days of TDB past J2000.0 of seconds of UTC past MJD 0 (no leap second in between)."""
    day = np.floor(utc_s / DAY_S)
    return np.asarray(utc_to_tdb_d(day.astype(np.int64), utc_s - day * DAY_S))


def _iso(utc_s: float) -> str:
    """ADES time of a rounded count of seconds of UTC past MJD 0."""
    tenths = round(float(utc_s) * 10**TIME_DIGITS)
    moment = MJD_0 + timedelta(seconds=tenths // 10**TIME_DIGITS)
    return f"{moment:%Y-%m-%dT%H:%M:%S}.{tenths % 10**TIME_DIGITS:0{TIME_DIGITS}d}Z"


def _decimals(rms_arcsec: float) -> int:
    """Decimals of a degree that an error deserves: ceil(1 - log10 sigma), as ADES asks for."""
    return int(np.ceil(1.0 - np.log10(rms_arcsec / 3600.0)))
