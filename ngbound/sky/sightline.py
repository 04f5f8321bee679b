"""In which direction something is seen; imports numpy, erfa, constants and errors.

Astrometric place: the direction from the observer's barycentric position at the time t of reception
to the object's barycentric position at t - tau, tau being the light time between the two. This is
what astrometry reduced against catalogue stars measures: neither aberration (which the stars share)
nor the light deflection they share is applied, nor the Sun's delay of light (20 microseconds, below
1 m of motion).
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import erfa
import numpy as np
from numpy.typing import ArrayLike, NDArray

from ngbound.constants import C_AU_D
from ngbound.errors import AnalysisError

FloatArray = NDArray[np.float64]

_LIGHT_TIME_TOLERANCE_D = 1e-13
_MAX_ITERATIONS = 20


@dataclass(frozen=True, eq=False)
class Sightline:
    """Astrometric places.

    Attributes
    ----------
    ra_rad, dec_rad : (n,) arrays
        Astrometric ICRF right ascension in [0, 2 pi) and declination.
    range_au : (n,) array
        Distance from the observer at t to the object at t - tau.
    light_time_d : (n,) array
        tau.
    """

    ra_rad: FloatArray
    dec_rad: FloatArray
    range_au: FloatArray
    light_time_d: FloatArray

    def __len__(self) -> int:
        return self.ra_rad.size

    def __str__(self) -> str:
        lines = [
            f"{np.degrees(ra):14.8f} {np.degrees(dec):+14.8f} {distance:14.9f}"
            for ra, dec, distance in zip(self.ra_rad, self.dec_rad, self.range_au, strict=True)
        ]
        return "\n".join(["        RA deg        Dec deg       range au", *lines])

    def to_dict(self) -> dict[str, Any]:
        """All arrays as lists, ready for JSON."""
        return {
            "ra_rad": self.ra_rad.tolist(),
            "dec_rad": self.dec_rad.tolist(),
            "range_au": self.range_au.tolist(),
            "light_time_d": self.light_time_d.tolist(),
        }


def astrometric(
    position_function: Callable[[FloatArray], FloatArray],
    tdb_d: ArrayLike,
    observer_position_au: ArrayLike,
) -> Sightline:
    """Astrometric place of anything with a position; the slow twin of the kernels.

    Parameters
    ----------
    position_function : callable
        TDB days past J2000.0 (n,) -> barycentric ICRF positions (n, 3) in au.
    tdb_d : float or (n,) array
        Times of reception.
    observer_position_au : (3,) or (n, 3) array
        Barycentric ICRF positions of the observer at `tdb_d`.

    Raises
    ------
    AnalysisError
        The light time does not settle (the object would have to move near the speed of light).
    """
    times_d = np.atleast_1d(np.asarray(tdb_d, dtype=float))
    observer_au = np.broadcast_to(np.asarray(observer_position_au, dtype=float), (times_d.size, 3))
    light_time_d = np.zeros(times_d.size)
    for _ in range(_MAX_ITERATIONS):
        line_au = np.asarray(position_function(times_d - light_time_d)) - observer_au
        range_au = np.sqrt(np.sum(line_au**2, axis=1))
        change_d = range_au / C_AU_D - light_time_d
        light_time_d = light_time_d + change_d
        if np.all(np.abs(change_d) <= _LIGHT_TIME_TOLERANCE_D * (1.0 + light_time_d)):
            ra_rad, dec_rad = direction_to_angles(line_au)
            return Sightline(ra_rad, dec_rad, range_au, light_time_d)
    worst = int(np.argmax(np.nan_to_num(np.abs(change_d), nan=np.inf)))
    raise AnalysisError(
        f"The light time at {times_d[worst]} d past J2000 TDB does not settle: it still changes by "
        f"{change_d[worst]} d after {_MAX_ITERATIONS} iterations. Check the position function: it "
        "must return finite barycentric positions in au that move slower than light.",
        tdb_d=float(times_d[worst]),
    )


def direction_to_angles(direction: ArrayLike) -> tuple[FloatArray, FloatArray]:
    """Right ascension in [0, 2 pi) and declination (rad) of vectors (n, 3) of any length."""
    x, y, z = np.moveaxis(np.asarray(direction, dtype=float), -1, 0)
    ra_rad = np.mod(np.arctan2(y, x), 2.0 * np.pi)
    # A tiny negative angle is rounded up to 2 pi itself.
    ra_rad = np.where(ra_rad >= 2.0 * np.pi, 0.0, ra_rad)
    return ra_rad, np.arctan2(z, np.hypot(x, y))


def angles_to_direction(ra_rad: ArrayLike, dec_rad: ArrayLike) -> FloatArray:
    """Unit vectors (n, 3) of right ascension and declination in rad."""
    ra, dec = np.asarray(ra_rad, dtype=float), np.asarray(dec_rad, dtype=float)
    return np.stack([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)], axis=-1)


def sky_axes(ra_rad: ArrayLike, dec_rad: ArrayLike) -> tuple[FloatArray, FloatArray]:
    """Unit vectors (n, 3) towards growing right ascension and growing declination."""
    ra, dec = np.asarray(ra_rad, dtype=float), np.asarray(dec_rad, dtype=float)
    east = np.stack([-np.sin(ra), np.cos(ra), np.zeros(np.shape(ra))], axis=-1)
    north = np.stack([-np.sin(dec) * np.cos(ra), -np.sin(dec) * np.sin(ra), np.cos(dec)], axis=-1)
    return east, north


def tangent_plane_residuals(
    ra_rad: ArrayLike, dec_rad: ArrayLike, computed_ra_rad: ArrayLike, computed_dec_rad: ArrayLike
) -> FloatArray:
    """Observed minus computed, along RA (times cos Dec) and along Dec, in rad.

    The plane touches the sphere at the computed place. Lengths are those of the arc (azimuthal
    equidistant), so residuals keep their meaning over the pole, across 0 h, and for a place that is
    wrong by many degrees; for small ones this is (RA_o - RA_c) cos Dec and Dec_o - Dec_c.

    Returns
    -------
    (n, 2) array
    """
    ra, dec = np.asarray(ra_rad, dtype=float), np.asarray(dec_rad, dtype=float)
    ra_0 = np.asarray(computed_ra_rad, dtype=float)
    dec_0 = np.asarray(computed_dec_rad, dtype=float)
    half_sin2 = np.sin(0.5 * (ra - ra_0)) ** 2
    east = np.cos(dec) * np.sin(ra - ra_0)
    north = np.sin(dec - dec_0) + 2.0 * np.sin(dec_0) * np.cos(dec) * half_sin2
    towards = np.cos(dec - dec_0) - 2.0 * np.cos(dec_0) * np.cos(dec) * half_sin2
    sine = np.hypot(east, north)
    arc = np.arctan2(sine, towards)
    stretch = np.where(sine > 0.0, arc / np.where(sine > 0.0, sine, 1.0), 1.0)
    return np.stack([east * stretch, north * stretch], axis=-1)


def deflection_by_sun(
    direction: ArrayLike, object_from_sun_au: ArrayLike, observer_from_sun_au: ArrayLike
) -> FloatArray:
    """How the Sun's gravity shifts an object against the field stars, in rad of a unit vector.

    Off by default everywhere in ngbound: the reduction against catalogue stars already takes out
    the deflection of starlight, so that only the difference remains between a body at a finite
    distance and stars far behind it: for a body 2.5 au from the Sun 7 mas at 20 degrees from it,
    1.4 mas at 90 degrees, 0.03 mas at opposition. Astrometric places as published leave it out, so
    it must stay off where they are compared.

    Parameters
    ----------
    direction : (n, 3) array
        Unit vectors from the observer to the object.
    object_from_sun_au, observer_from_sun_au : (n, 3) arrays
        Heliocentric positions of the object (at t - tau) and of the observer.

    Returns
    -------
    (n, 3) array
        To be added to `direction`; the deflection limiter of ERFA's ``ldsun`` is used.
    """
    p = np.asarray(direction, dtype=float)
    object_au = np.asarray(object_from_sun_au, dtype=float)
    observer_au = np.asarray(observer_from_sun_au, dtype=float)
    object_distance = np.linalg.norm(object_au, axis=-1, keepdims=True)
    observer_distance = np.linalg.norm(observer_au, axis=-1)
    sun_to_observer = observer_au / observer_distance[..., None]
    limit = 1e-6 / np.maximum(observer_distance**2, 1.0)
    near = erfa.ld(1.0, p, object_au / object_distance, sun_to_observer, observer_distance, limit)
    stars = erfa.ldsun(p, sun_to_observer, observer_distance)
    return np.asarray(near - stars)
