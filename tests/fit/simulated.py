"""Invented arcs for the tests of the fit room: known orbits, places and errors."""

from dataclasses import dataclass

import numpy as np
import pandas as pd

from ngbound.arc import Arc
from ngbound.motion import Orbit, Thrust, predict_for
from ngbound.sky import load_ephemeris, station_states, utc_to_tdb_d

MJD_2020 = 58849
BELT = {"q": 2.2, "e": 0.15, "i": 8.0, "node": 80.0, "argperi": 40.0, "tp": 7400.0}
NEAR_EARTH = {"q": 0.85, "e": 0.45, "i": 12.0, "node": 160.0, "argperi": 250.0, "tp": 7420.0}


@dataclass(frozen=True)
class Truth:
    """An arc, the orbit it was made of, and which records were made outliers."""

    arc: Arc
    orbit: Orbit
    outlier: np.ndarray


def orbit_of(elements: dict, thrust: Thrust | None = None, epoch: float = 7305.0) -> Orbit:
    """An orbit of cometary elements; the epoch and tp in TDB days past J2000.0."""
    return Orbit.from_elements(epoch=epoch, thrust=thrust, **elements)


def nights(
    first_day: int, span_d: float, count: int, per_night: int, step_d: float = 0.02
) -> np.ndarray:
    """UTC as MJD: ``count`` nights spread over a span, ``per_night`` records each."""
    starts = first_day + np.linspace(0.0, span_d, count).round() + 0.2
    return (starts[:, None] + step_d * np.arange(per_night)).ravel()


def simulate(
    orbit: Orbit,
    mjd_utc: np.ndarray,
    rng: np.random.Generator,
    sigma_arcsec: float = 0.3,
    common_arcsec: float = 0.0,
    outliers: float = 0.0,
    outlier_arcsec: float = 10.0,
    stations: tuple[str, ...] = ("500",),
    catalogue: str | list[str] = "Gaia2",
    offsets_arcsec: dict[str, tuple[float, float]] | None = None,
    stated: bool = True,
    timing_s: float = 0.0,
) -> Truth:
    """Observe an orbit, with independent, nightly and gross errors and offsets of catalogues."""
    mjd = np.sort(np.asarray(mjd_utc, dtype=float))
    n = mjd.size
    micro = np.round((mjd % 1.0) * 86400e6).astype(np.int64)
    day = np.floor(mjd).astype(np.int64)
    tdb_d = utc_to_tdb_d(day, micro / 1e6)
    if timing_s > 0.0:
        tdb_d = tdb_d + rng.normal(0.0, timing_s, n) / 86400.0
    stn = np.array([stations[i % len(stations)] for i in range(n)], dtype=object)
    if len(stations) > 1:
        stn = np.array([stations[d % len(stations)] for d in day], dtype=object)
    observer = np.empty((n, 3))
    for code in set(stn.tolist()):
        here = stn == code
        observer[here] = station_states(code, tdb_d[here], load_ephemeris()).position_au
    seen = predict_for(orbit, tdb_d, observer)
    cat = np.array([catalogue] * n if isinstance(catalogue, str) else catalogue, dtype=object)
    noise = rng.normal(0.0, sigma_arcsec, (n, 2))
    night = np.unique(
        np.array([f"{d}{s}" for d, s in zip(day, stn, strict=True)]), return_inverse=True
    )[1]
    noise += rng.normal(0.0, 1.0, (night.max() + 1, 2))[night] * common_arcsec
    gross = rng.random(n) < outliers
    angle = rng.uniform(0.0, 2.0 * np.pi, n)
    noise[gross] += outlier_arcsec * np.stack([np.cos(angle), np.sin(angle)], axis=1)[gross]
    for name, offset in (offsets_arcsec or {}).items():
        noise[cat == name] += offset
    dec = np.radians(seen["dec_deg"].to_numpy())
    frame = pd.DataFrame(
        {
            "permID": "999999",
            "mode": "CCD",
            "stn": stn,
            "obsTime": (day - 40587) * 86_400_000_000 + micro,
            "ra": (seen["ra_deg"].to_numpy() + noise[:, 0] / 3600.0 / np.cos(dec)) % 360.0,
            "dec": seen["dec_deg"].to_numpy() + noise[:, 1] / 3600.0,
            "astCat": cat,
        }
    )
    frame["obsTime"] = frame["obsTime"].to_numpy().astype("datetime64[us]")
    if stated:
        frame["rmsRA"] = sigma_arcsec
        frame["rmsDec"] = sigma_arcsec
    return Truth(Arc.from_frame(frame), orbit, gross)


def state_error(fit_orbit_state: np.ndarray, truth: Orbit, epoch_d: float) -> np.ndarray:
    """Fitted less true barycentric state at an epoch."""
    return fit_orbit_state - truth.track(epoch_d, epoch_d).at(epoch_d)[0]
