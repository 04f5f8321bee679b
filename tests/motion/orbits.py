"""Orbits and records that the tests of the motion room share; all invented."""

import numpy as np

from ngbound.arc import Factors
from ngbound.constants import GM_SUN_AU3_D2
from ngbound.motion import ForceModel, Neighbourhood, Records, Thrust, Track, integrate_track, see
from ngbound.sky import direction_to_angles, load_ephemeris
from tests.units import arcsec


def at_perihelion(q_au: float, e: float, incl: float = 0.2, epoch_d: float = 0.0) -> np.ndarray:
    """Barycentric state of an orbit at its perihelion on the x axis."""
    speed = np.sqrt(GM_SUN_AU3_D2 * (1.0 + e) / q_au)
    helio = np.array([q_au, 0.0, 0.0, 0.0, speed * np.cos(incl), speed * np.sin(incl)])
    return helio + np.concatenate(load_ephemeris().posvel("sun", epoch_d))


BELT = at_perihelion(2.3, 0.15)
HYPERBOLA = at_perihelion(0.25, 1.2)


def geocentric_records(
    track: Track, start_d: float, end_d: float, n: int, sigma_rad: float, seed: int = 1
) -> Records:
    """Records from the geocentre with white noise."""
    rng = np.random.default_rng(seed)
    times = np.sort(rng.uniform(start_d, end_d, n))
    observer = load_ephemeris().position_au("earth", times)
    zero = np.zeros(n)
    rho = see(track, Records.from_angles(times, observer, zero, zero)).rho_au
    ra, dec = direction_to_angles(rho)
    ra = ra + rng.normal(0.0, sigma_rad, n) / np.cos(dec)
    dec = dec + rng.normal(0.0, sigma_rad, n)
    return Records.from_angles(times, observer, ra, dec)


def white_factors(n: int, sigma_rad: float) -> Factors:
    """Noise factors of independent records."""
    one = np.array([1.0, 0.0, 0.0, 1.0]) / sigma_rad
    return Factors(
        np.arange(n), np.arange(n + 1), np.tile(one, n), 4 * np.arange(n + 1, dtype=np.int64)
    )


def neighbourhood(
    state: np.ndarray,
    days: float,
    epoch_d: float,
    n: int = 60,
    sigma_rad: float = 0.3 * arcsec,
    forces: ForceModel | None = None,
    law: str = "inverse-square",
) -> tuple[Neighbourhood, Track]:
    """A neighbourhood around an orbit with a small thrust, observed from the geocentre."""
    forces = forces or ForceModel()
    thrust = Thrust(law, A=(1e-9, 2e-10, 1e-10))
    track = integrate_track(epoch_d, state, min(0.0, epoch_d) - 1.0, days + 1.0, thrust, forces)
    records = geocentric_records(track, 0.0, days, n, sigma_rad)
    return (
        Neighbourhood.around(track, records, white_factors(n, sigma_rad), thrust, "RTN", forces),
        track,
    )
