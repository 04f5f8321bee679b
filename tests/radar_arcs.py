"""Invented radar arcs for tests: known orbits, invented antennas, known errors."""

import numpy as np
import pandas as pd

from ngbound.arc import Arc
from ngbound.motion import Orbit, Thrust
from ngbound.motion.radar import echo
from ngbound.sky import utc_to_tdb_d
from tests.fit.simulated import nights, orbit_of, simulate

ANTENNAS = {
    "RD1": {"longitude_deg": -66.0, "latitude_deg": 18.0, "altitude_m": 400.0},
    "RD2": {"longitude_deg": -117.0, "latitude_deg": 35.0, "altitude_m": 900.0},
}
MEGAHERTZ = 2400.0
SIGMA_DELAY_US = 0.5
SIGMA_DOPPLER_HZ = 0.1
FLYBY = {"q": 0.85, "e": 0.45, "i": 12.0, "node": 160.0, "argperi": 250.0, "tp": 7420.0}
FIRST_MJD = 58820


def radar_frame(
    orbit: Orbit,
    mjd_utc: np.ndarray,
    rng: np.random.Generator | None,
    sigma_delay_us: float = SIGMA_DELAY_US,
    sigma_doppler_hz: float = SIGMA_DOPPLER_HZ,
    receiver: str = "RD2",
) -> pd.DataFrame:
    """ADES columns of a delay and a Doppler record at every time; without errors for no ``rng``."""
    own = Arc.from_frame(
        pd.DataFrame(
            {"stn": ["RD1"], "mode": "CCD", "astCat": "UNK", "permID": "1", "ra": [1.0],
             "dec": [1.0], "obsTime": ["2020-01-01T00:00:00Z"]}
        ),
        stations=ANTENNAS,
    ).stations  # fmt: skip
    second = np.round(np.asarray(mjd_utc, dtype=float) * 86400.0)
    day = (second // 86400).astype(np.int64)
    tdb_d = utc_to_tdb_d(day, second - 86400.0 * day)
    track = orbit.track(float(np.min(tdb_d)) - 1.0, float(np.max(tdb_d)) + 1.0)
    got = echo(track, tdb_d, "RD1", receiver, MEGAHERTZ, own)
    n = second.size
    error = np.zeros((2, n)) if rng is None else rng.standard_normal((2, n))
    times = (day - 40587) * 86_400_000_000 + ((second - 86400.0 * day) * 1e6).astype(np.int64)
    common = {
        "permID": "999999",
        "trx": "RD1",
        "rcv": receiver,
        "obsTime": times.astype("datetime64[us]"),
        "frq": MEGAHERTZ,
        "kind": "radar",
    }
    delay = pd.DataFrame(
        common
        | {"delay": got.delay_s + error[0] * sigma_delay_us * 1e-6, "rmsDelay": sigma_delay_us}
    )
    doppler = pd.DataFrame(
        common | {"doppler": got.doppler_hz + error[1] * sigma_doppler_hz,
                  "rmsDoppler": sigma_doppler_hz}
    )  # fmt: skip
    return pd.concat([delay, doppler], ignore_index=True)


def mixed_arc(
    seed: int = 1,
    thrust: Thrust | None = None,
    span_d: float = 90.0,
    radar_days: tuple[float, ...] = (20.0, 21.0, 70.0, 71.0),
    sigma_arcsec: float = 0.3,
    elements: dict | None = None,
    with_radar: bool = True,
    n_nights: int = 20,
) -> tuple[Arc, Orbit]:
    """Directions of a near-Earth object over ``span_d`` days, and echoes on some of them."""
    rng = np.random.default_rng(seed)
    orbit = orbit_of(elements or FLYBY, thrust)
    truth = simulate(orbit, nights(FIRST_MJD, span_d, n_nights, 3), rng, sigma_arcsec)
    columns = ["permID", "mode", "stn", "obsTime", "ra", "dec", "astCat", "rmsRA", "rmsDec", "kind"]
    frame = truth.arc.table[columns]
    if with_radar:
        radar = radar_frame(orbit, FIRST_MJD + np.array(radar_days) + 0.6, rng)
        radar["obsTime"] = [f"{t:%Y-%m-%dT%H:%M:%S}Z" for t in radar["obsTime"]]
        frame = pd.concat([frame, radar], ignore_index=True)
    return Arc.from_frame(frame, stations=ANTENNAS), orbit
