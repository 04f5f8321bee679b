"""Invented arcs of five classes with about 300 records each, and fits of them, for tests.

Nights are drawn where the object stands more than 60 degrees from the Sun; each night one of two
stations takes a few records, with an independent error of each record and one shared by the night.
"""

from dataclasses import dataclass

import numpy as np
import pandas as pd

from ngbound.arc import Arc, ErrorModel
from ngbound.fit import Fit, fit_orbit
from ngbound.motion import Orbit, Thrust, predict_for
from ngbound.sky import load_ephemeris, station_states, utc_to_tdb_d

STATIONS = ("568", "950")
SIGMA_ARCSEC = 0.3
COMMON_ARCSEC = 0.15
ERRORS = ErrorModel(night_common_arcsec=COMMON_ARCSEC)


@dataclass(frozen=True)
class ArcClass:
    """Elements (cometary; epoch, tp in TDB days past J2000.0), first day (MJD), span, nights."""

    name: str
    elements: dict[str, float]
    epoch_d: float
    first_mjd: int
    span_d: float
    n_nights: int
    per_night: int
    law: str = "inverse-square"


CLASSES = {
    each.name: each
    for each in (
        ArcClass(
            "main belt, 10 years",
            {"q": 2.2, "e": 0.15, "i": 8.0, "node": 80.0, "argperi": 40.0, "tp": 7400.0},
            7305.0, 57023, 3650.0, 60, 5,
        ),
        ArcClass(
            "near-Earth, 60 days",
            {"q": 0.85, "e": 0.45, "i": 12.0, "node": 320.0, "argperi": 250.0, "tp": 7420.0},
            7305.0, 58820, 60.0, 30, 10,
        ),
        ArcClass(
            "comet, 200 days through perihelion",
            {"q": 1.3, "e": 0.93, "i": 40.0, "node": 20.0, "argperi": 70.0, "tp": 7305.0},
            7305.0, 58749, 200.0, 60, 5, "water-ice",
        ),
        ArcClass(
            "hyperbolic, 90 days",
            {"q": 0.9, "e": 1.25, "i": 60.0, "node": 180.0, "argperi": 230.0, "tp": 7270.0},
            7305.0, 58830, 90.0, 45, 7,
        ),
        ArcClass(
            "Centaur, 5 years",
            {"q": 9.0, "e": 0.35, "i": 15.0, "node": 200.0, "argperi": 100.0, "tp": 8000.0},
            7305.0, 57936, 1826.0, 60, 5,
        ),
    )
}  # fmt: skip


def nights_of(kind: ArcClass, orbit: Orbit, random: np.random.Generator) -> np.ndarray:
    """UTC as MJD of the records: nights drawn away from the Sun."""
    ephemeris = load_ephemeris()
    days = kind.first_mjd + np.arange(int(kind.span_d) + 1)
    tdb_d = utc_to_tdb_d(days, np.full(days.size, 0.3 * 86400.0))
    earth, sun = ephemeris.position_au("earth", tdb_d), ephemeris.position_au("sun", tdb_d)
    toward = orbit.track(tdb_d[0], tdb_d[-1]).at(tdb_d)[:, :3] - earth
    away = sun - earth
    cosine = np.sum(toward * away, axis=1) / (
        np.linalg.norm(toward, axis=1) * np.linalg.norm(away, axis=1)
    )
    good = days[cosine < 0.5]
    inner = random.choice(good[1:-1], size=kind.n_nights - 2, replace=False)
    chosen = np.sort(np.r_[good[0], inner, good[-1]])
    return (chosen[:, None] + 0.3 + 0.02 * np.arange(kind.per_night)).ravel()


def simulated_arc(
    kind: ArcClass, seed: int = 1, thrust: Thrust | None = None, sigma_arcsec: float = SIGMA_ARCSEC
) -> tuple[Arc, Orbit]:
    """An arc of the class with noise, and the orbit it was made of."""
    random = np.random.default_rng(seed)
    orbit = Orbit.from_elements(epoch=kind.epoch_d, thrust=thrust, **kind.elements)
    mjd = nights_of(kind, orbit, random)
    day = np.floor(mjd).astype(np.int64)
    micro = np.round((mjd - day) * 86400e6).astype(np.int64)
    tdb_d = utc_to_tdb_d(day, micro / 1e6)
    stn = np.array([STATIONS[d % len(STATIONS)] for d in day], dtype=object)
    observer = np.empty((mjd.size, 3))
    for code in STATIONS:
        here = stn == code
        observer[here] = station_states(code, tdb_d[here], load_ephemeris()).position_au
    seen = predict_for(orbit, tdb_d, observer)
    night = np.unique(day, return_inverse=True)[1]
    noise = random.normal(0.0, sigma_arcsec, (mjd.size, 2))
    noise += random.normal(0.0, COMMON_ARCSEC, (night.max() + 1, 2))[night]
    dec = np.radians(seen["dec_deg"].to_numpy())
    frame = pd.DataFrame(
        {
            "permID": "999999",
            "mode": "CCD",
            "stn": stn,
            "obsTime": ((day - 40587) * 86_400_000_000 + micro).astype("datetime64[us]"),
            "ra": (seen["ra_deg"].to_numpy() + noise[:, 0] / 3600.0 / np.cos(dec)) % 360.0,
            "dec": seen["dec_deg"].to_numpy() + noise[:, 1] / 3600.0,
            "astCat": "Gaia2",
            "rmsRA": sigma_arcsec,
            "rmsDec": sigma_arcsec,
        }
    )
    return Arc.from_frame(frame, name=kind.name), orbit


def fitted(
    kind: ArcClass, components: str = "RTN", seed: int = 1, thrust: Thrust | None = None
) -> Fit:
    """A fit of an arc of the class, started at the truth."""
    arc, orbit = simulated_arc(kind, seed, thrust)
    return fit_orbit(
        arc, Thrust(kind.law, components=components), ERRORS, initial=orbit, reject=False
    )
