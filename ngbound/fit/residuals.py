"""The residual table of a fit; imports numpy, pandas, constants, arc, sky, motion."""

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from ngbound.arc import Arc, Noise
from ngbound.constants import ARCSEC_RAD
from ngbound.motion import Records, Sight
from ngbound.sky import Observers, load_ephemeris, tdb_d_to_iso

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]


def motion_rad_d(sight: Sight, records: Records, observers: Observers) -> Floats:
    """Apparent motion east and north, (n, 2) radians per day."""
    relative = sight.speed_au_d - observers.velocity_au_d
    distance = np.linalg.norm(sight.rho_au, axis=1)
    return np.einsum("nij,nj->ni", records.basis[:, :2, :], relative) / distance[:, None]


def sunward_per_au(sight: Sight, records: Records, epoch_d: float) -> Floats:
    """Direction object to Sun projected east and north, over the distance to the observer, (n, 2)
    per au."""
    sun = load_ephemeris().position_au("sun", epoch_d + sight.tau_d)
    away = sun - (sight.rho_au + records.observer_au)
    toward = away / np.linalg.norm(away, axis=1)[:, None]
    flat = np.einsum("nij,nj->ni", records.basis[:, :2, :], toward)
    return flat / np.linalg.norm(sight.rho_au, axis=1)[:, None]


def station_labels(used: Arc) -> list[str]:
    """Station code of each record; for a roving observer with its place beside it."""
    table = used.table
    codes = table["stn"].astype(str).tolist()
    if "pos1" not in table or "pos2" not in table:
        return codes
    roving = (table["site"] == "roving").to_numpy(dtype=bool)
    places = zip(codes, roving, table["pos1"], table["pos2"], table["sys"], strict=True)
    return [
        f"{code} {_place(float(east), float(north))}" if moves and frame == "WGS84" else code
        for code, moves, east, north, frame in places
    ]


def _place(east_deg: float, north_deg: float) -> str:
    """A place on the Earth as "104.29 W 29.88 N"."""
    east = (east_deg + 180.0) % 360.0 - 180.0
    return (
        f"{abs(east):.2f} {'W' if east < 0 else 'E'} "
        f"{abs(north_deg):.2f} {'S' if north_deg < 0 else 'N'}"
    )


def residual_table(
    used: Arc,
    records: Records,
    observers: Observers,
    sight: Sight,
    seen: Floats,
    shared: Floats,
    noise: Noise,
    keep: Bools,
    chi2: Floats,
    epoch_d: float,
) -> pd.DataFrame:
    """One row per observation, in order of time.

    Returns
    -------
    pandas.DataFrame
        tdb_d, utc, stn (of a rover with longitude and latitude), site, mode, astCat, line;
        ra_arcsec (times cos dec) and dec_arcsec, observed minus computed; shared_ra_arcsec and
        shared_dec_arcsec, the part of them that is an estimated error shared with other nights
        (offsets of catalogues and stations); their sigmas; along_arcsec and across_arcsec, the
        residual along and 90 degrees (towards north from east, that is to the left) off the
        apparent motion; chi, the root of the record's chi2, freed of the errors it shares with
        others; keep; motion_ra_arcsec_h, motion_dec_arcsec_h; r_au and delta_au; kind; delay_us,
        doppler_hz (observed minus computed) and their sigmas. What an echo or a direction does not
        have is nan.
    """
    motion = motion_rad_d(sight, records, observers)
    speed = np.linalg.norm(motion, axis=1)
    ahead = motion / np.where(speed > 0.0, speed, 1.0)[:, None]
    arcsec = seen / ARCSEC_RAD
    emitted = epoch_d + sight.tau_d
    sun = load_ephemeris().position_au("sun", emitted)
    body = sight.rho_au + records.observer_au
    directions = noise.optical
    missed, error = _echoes_missed(records, sight, noise)

    def of_direction(values: Floats) -> Floats:
        return np.where(directions, values, np.nan)

    return pd.DataFrame(
        {
            "tdb_d": records.tdb_d,
            "utc": np.atleast_1d(tdb_d_to_iso(records.tdb_d, scale="utc")),
            "stn": station_labels(used),
            "site": used.table["site"].to_numpy(),
            "mode": used.table["mode"].to_numpy(),
            "astCat": used.table["astCat"].to_numpy(),
            "line": used.table["line"].to_numpy(),
            "ra_arcsec": of_direction(arcsec[:, 0]),
            "dec_arcsec": of_direction(arcsec[:, 1]),
            "shared_ra_arcsec": of_direction(shared[:, 0] / ARCSEC_RAD),
            "shared_dec_arcsec": of_direction(shared[:, 1] / ARCSEC_RAD),
            "sigma_ra_arcsec": of_direction(noise.sigma_ra_arcsec),
            "sigma_dec_arcsec": of_direction(noise.sigma_dec_arcsec),
            "along_arcsec": of_direction(np.einsum("ni,ni->n", arcsec, ahead)),
            "across_arcsec": of_direction(arcsec[:, 1] * ahead[:, 0] - arcsec[:, 0] * ahead[:, 1]),
            "chi": np.sqrt(np.maximum(chi2, 0.0)),
            "keep": keep,
            "motion_ra_arcsec_h": of_direction(motion[:, 0] / ARCSEC_RAD / 24.0),
            "motion_dec_arcsec_h": of_direction(motion[:, 1] / ARCSEC_RAD / 24.0),
            "r_au": np.linalg.norm(body - sun, axis=1),
            "delta_au": np.linalg.norm(sight.rho_au, axis=1),
            "kind": used.table["kind"].to_numpy(),
            "delay_us": missed[:, 0] * 1e6,
            "doppler_hz": missed[:, 1],
            "sigma_delay_us": error[:, 0] * 1e6,
            "sigma_doppler_hz": error[:, 1],
        }
    )


def _echoes_missed(records: Records, sight: Sight, noise: Noise) -> tuple[Floats, Floats]:
    """Observed minus computed delay (s) and Doppler shift (Hz) and their errors, (n, 2) each; nan
    where there is none."""
    missed = np.full((len(records), 2), np.nan)
    error = missed.copy()
    echoes = records.echoes
    if echoes is not None and sight.path is not None:
        missed[echoes.rows] = echoes.missed(sight.path)
        stated = np.stack([echoes.sigma_delay_s, echoes.sigma_doppler_hz], axis=1)
        error[echoes.rows] = stated * noise.sigma_ra_arcsec[echoes.rows, None]
    return missed, np.where(np.isfinite(missed), error, np.nan)
