"""Where each observer stood; imports numpy, pandas, the arc room, constants and errors.

Barycentric ICRF position of an observer = Earth (DE440) + geocentric GCRS vector. The vector comes
from parallax constants (Minor Planet Center, in equatorial radii of 6378.137 km), from geodetic
WGS84 coordinates given with the record (roving observers), or from the record itself (spacecraft).
Not applied: the 3 cm of Lorentz contraction and the 10 cm between TCG and TDB units of length.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray

from ngbound.arc import Arc, Station, geodetic_to_itrf_km, record_position_km, station
from ngbound.constants import AU_KM, AU_M, DAY_S
from ngbound.errors import InputError, StationError
from ngbound.sky.earth_orientation import itrf_to_gcrs
from ngbound.sky.ephemeris import Ephemeris, naif_body_name
from ngbound.sky.timescales import tdb_d_to_iso, utc_to_tdb_d

FloatArray = NDArray[np.float64]

GEOCENTRE_CODE = "500"

_NAIF_EARTH = 399
_ALTITUDE_RANGE_M = (-12e3, 100e3)


@dataclass(frozen=True, eq=False)
class Observers:
    """Where observers stood at the times of their observations.

    Attributes
    ----------
    tdb_d : (n,) array
        TDB days past J2000.0.
    position_au, velocity_au_d : (n, 3) arrays
        Barycentric ICRF. A spacecraft whose record gives no velocity is given the Earth's.
    geocentric_au : (n, 3) array
        Position relative to the geocentre, ICRF axes.
    """

    tdb_d: FloatArray
    position_au: FloatArray
    velocity_au_d: FloatArray
    geocentric_au: FloatArray

    def __len__(self) -> int:
        return self.tdb_d.size

    def __str__(self) -> str:
        if not len(self):
            return "0 observer states"
        first, last = tdb_d_to_iso([self.tdb_d.min(), self.tdb_d.max()], digits=0)
        return f"{len(self)} observer states from {first} to {last} TDB"

    def to_dict(self) -> dict[str, Any]:
        """All four arrays as lists, ready for JSON."""
        return {
            "tdb_d": self.tdb_d.tolist(),
            "position_au": self.position_au.tolist(),
            "velocity_au_d": self.velocity_au_d.tolist(),
            "geocentric_au": self.geocentric_au.tolist(),
        }


def _site_to_itrf_m(longitude_deg: float, latitude_deg: float, altitude_m: float) -> FloatArray:
    """ITRF coordinates (3,) in m from WGS84 longitude (east), latitude and altitude."""
    if not (abs(latitude_deg) <= 90.0 and abs(longitude_deg) <= 360.0):
        raise StationError(
            f"The site at longitude {longitude_deg} deg, latitude {latitude_deg} deg is not on the "
            "Earth: longitudes (east) run from -360 to 360 deg, latitudes from -90 to 90 deg."
        )
    low_m, high_m = _ALTITUDE_RANGE_M
    if not low_m <= altitude_m <= high_m:
        raise StationError(
            f"The site altitude {altitude_m} m is outside {low_m:g} to {high_m:g} m: give metres "
            "above the WGS84 ellipsoid."
        )
    return 1e3 * geodetic_to_itrf_km(longitude_deg, latitude_deg, altitude_m)


def _code_to_itrf_m(code: str, own_stations: Mapping[str, Station]) -> FloatArray:
    """ITRF coordinates (3,) in m of a station code; zeros for the geocentre."""
    if code == GEOCENTRE_CODE and code not in own_stations:
        return np.zeros(3)
    return 1e3 * station(code, own_stations).itrf_km


def observer_states(arc_used: Arc, ephemeris: Ephemeris) -> Observers:
    """Observers of all rows of an arc.

    Parameters
    ----------
    arc_used : Arc
        Rows with utc_day, utc_sec, stn, site ("fixed", "roving", "space", "geocentre") and, for
        roving and space, sys, ctr, pos1, pos2, pos3 (and vel1, vel2, vel3 where known).
    ephemeris : Ephemeris

    Returns
    -------
    Observers

    Raises
    ------
    StationError
        A place that is missing, impossible or in a system not known here.
    EphemerisRangeError
        A time outside DE440.
    """
    table = arc_used.table
    tdb_d = np.asarray(
        utc_to_tdb_d(table["utc_day"].to_numpy(np.int64), table["utc_sec"].to_numpy(float))
    )
    n = len(table)
    itrf_m = np.zeros((n, 3))
    geocentric_au = np.zeros((n, 3))
    relative_velocity_au_d = np.zeros((n, 3))
    site = table["site"].astype(str).to_numpy()
    unknown = ~np.isin(site, ("fixed", "roving", "space", "geocentre"))
    if unknown.any():
        row = int(np.flatnonzero(unknown)[0])
        raise StationError(
            f"The site kind {site[row]!r} of {_where(table, row)} is not known: it must be fixed, "
            "roving, space or geocentre.",
            row=row,
        )
    fixed = site == "fixed"
    codes = table["stn"].astype(str).to_numpy()
    for code in np.unique(codes[fixed]):
        itrf_m[fixed & (codes == code)] = _code_to_itrf_m(str(code), arc_used.stations)
    for roving_row in np.flatnonzero(site == "roving").tolist():
        itrf_m[roving_row] = _roving_itrf_m(table, roving_row)
    on_earth = fixed | (site == "roving")
    if on_earth.any():
        position_m, velocity_m_s = itrf_to_gcrs(itrf_m[on_earth], tdb_d[on_earth])
        geocentric_au[on_earth] = position_m / AU_M
        relative_velocity_au_d[on_earth] = velocity_m_s * (DAY_S / AU_M)
    space = np.flatnonzero(site == "space")
    if space.size:
        geocentric_au[space], relative_velocity_au_d[space] = _space_states(
            table, space, tdb_d[space], ephemeris
        )
    return _with_earth(tdb_d, geocentric_au, relative_velocity_au_d, ephemeris)


def station_states(
    place: str | tuple[float, float, float],
    tdb_d: ArrayLike,
    ephemeris: Ephemeris,
    own_stations: Mapping[str, Station] | None = None,
) -> Observers:
    """Observers at one place on the Earth at any times.

    Parameters
    ----------
    place : str or (longitude_deg, latitude_deg, altitude_m)
        Station code, "500" for the geocentre, or WGS84 longitude (east), latitude, altitude.
    tdb_d : float or (n,) array
        TDB days past J2000.0.
    ephemeris : Ephemeris
    own_stations : mapping of code to Station, optional
        Stations of the user, which take precedence over the list.

    Raises
    ------
    StationError
        An unknown code, a code without a fixed place, or an impossible site.
    EphemerisRangeError
        A time outside DE440.
    """
    times_d = np.atleast_1d(np.asarray(tdb_d, dtype=float)).ravel()
    zero = np.zeros((times_d.size, 3))
    if isinstance(place, str) and place.strip() == GEOCENTRE_CODE:
        return _with_earth(times_d, zero, zero, ephemeris)
    if isinstance(place, str):
        itrf_m = _code_to_itrf_m(place.strip(), own_stations or {})
    elif isinstance(place, tuple | list) and len(place) == 3:
        itrf_m = _site_to_itrf_m(*(float(value) for value in place))
    else:
        raise StationError(
            f"The place {place!r} is neither a station code nor (longitude deg, latitude deg, "
            "altitude m)."
        )
    position_m, velocity_m_s = itrf_to_gcrs(np.tile(itrf_m, (times_d.size, 1)), times_d)
    return _with_earth(times_d, position_m / AU_M, velocity_m_s * (DAY_S / AU_M), ephemeris)


def _with_earth(
    tdb_d: FloatArray, geocentric_au: FloatArray, velocity_au_d: FloatArray, ephemeris: Ephemeris
) -> Observers:
    earth_au, earth_au_d = ephemeris.posvel("earth", tdb_d)
    return Observers(tdb_d, earth_au + geocentric_au, earth_au_d + velocity_au_d, geocentric_au)


def _roving_itrf_m(table: pd.DataFrame, row: int) -> FloatArray:
    system = _text(table, row, "sys").upper() or "WGS84"
    first, second, third = _numbers(table, row, ("pos1", "pos2", "pos3"))
    if not np.all(np.isfinite([first, second, third])):
        raise StationError(
            f"The roving observer of {_where(table, row)} has no complete place: pos1, pos2, pos3 "
            f"are {first}, {second}, {third}. Give longitude (deg east), latitude (deg) and "
            "altitude (m) with sys WGS84.",
            row=row,
        )
    if system == "WGS84":
        try:
            return _site_to_itrf_m(first, second, third)
        except StationError as error:
            raise StationError(f"In {_where(table, row)}: {error}", row=row) from None
    if system == "ITRF":
        return 1e3 * record_position_km(system, first, second, third)
    raise StationError(
        f"The system {system!r} of the roving observer of {_where(table, row)} is not known: use "
        "WGS84 (longitude deg, latitude deg, altitude m) or ITRF (longitude deg, Rxy km, Rz km).",
        row=row,
    )


def _space_states(
    table: pd.DataFrame, rows: NDArray[np.int64], tdb_d: FloatArray, ephemeris: Ephemeris
) -> tuple[FloatArray, FloatArray]:
    """Geocentric position (m, 3) au and velocity (m, 3) au/d of the spacecraft of some rows."""
    position_au = np.empty((rows.size, 3))
    velocity_au_d = np.empty((rows.size, 3))
    centres = np.empty(rows.size, dtype=np.int64)
    for i, row in enumerate(rows.tolist()):
        system = _text(table, row, "sys").upper()
        if system not in ("ICRF_KM", "ICRF_AU"):
            raise StationError(
                f"The system {system!r} of the spacecraft of {_where(table, row)} is not known: "
                "use ICRF_KM or ICRF_AU.",
                row=row,
            )
        unit_au, unit_au_d = (1.0 / AU_KM, DAY_S / AU_KM) if system == "ICRF_KM" else (1.0, 1.0)
        place = np.array(_numbers(table, row, ("pos1", "pos2", "pos3")))
        if not np.all(np.isfinite(place)):
            raise StationError(
                f"The spacecraft of {_where(table, row)} has no complete place: pos1, pos2, pos3 "
                f"are {place.tolist()}.",
                row=row,
            )
        position_au[i] = place * unit_au
        velocity = np.array(_numbers(table, row, ("vel1", "vel2", "vel3")))
        velocity_au_d[i] = velocity * unit_au_d
        centres[i] = _centre(table, row)
    unknown = ~np.isfinite(velocity_au_d).all(axis=1)
    for code in np.unique(centres[centres != _NAIF_EARTH]):
        here = centres == code
        body_au, body_au_d = ephemeris.posvel(naif_body_name(int(code)), tdb_d[here])
        earth_au, earth_au_d = ephemeris.posvel("earth", tdb_d[here])
        position_au[here] += body_au - earth_au
        velocity_au_d[here] += body_au_d - earth_au_d
    velocity_au_d[unknown] = 0.0
    return position_au, velocity_au_d


def _centre(table: pd.DataFrame, row: int) -> int:
    text = _text(table, row, "ctr") or str(_NAIF_EARTH)
    try:
        code = int(float(text))
        naif_body_name(code)
    except (ValueError, InputError):
        raise StationError(
            f"The centre {text!r} of the spacecraft of {_where(table, row)} is not known: ctr is a "
            "NAIF code, 399 for the geocentre, 10 for the Sun, 0 for the barycentre.",
            row=row,
        ) from None
    return code


def _text(table: pd.DataFrame, row: int, column: str) -> str:
    if column not in table.columns:
        return ""
    value = table[column].iloc[row]
    return "" if pd.isna(value) else str(value).strip()


def _numbers(table: pd.DataFrame, row: int, columns: tuple[str, ...]) -> list[float]:
    values = []
    for column in columns:
        text = _text(table, row, column)
        try:
            values.append(float(text) if text else float("nan"))
        except ValueError:
            raise StationError(
                f"The value {text!r} of {column} of {_where(table, row)} is not a number.", row=row
            ) from None
    return values


def _where(table: pd.DataFrame, row: int) -> str:
    line = _text(table, row, "line")
    place = f"line {line}" if line else f"row {row}"
    return f"{place} (station {_text(table, row, 'stn') or 'unknown'})"
