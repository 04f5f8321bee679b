"""How the Earth stands, ITRF to GCRS; imports numpy, erfa, constants, errors and timescales.

IAU 2006/2000A precession-nutation, Earth rotation angle and polar motion, as in the IERS
Conventions (G. Petit & B. Luzum 2010, IERS Technical Note 36, chapter 5), computed by ERFA. UT1 and
the pole come from the IERS tables bundled with astropy-iers-data (series B from 1962, series A with
its predictions after that); nothing is downloaded. Interpolation is linear between days (2 cm). The
celestial pole offsets (below 1 mas, 3 cm on the ground) and the tides within a day (2 cm) are left
out.

Before 1962 UT1 follows from TT - UT1 of `timescales.delta_t_s`; past the table the last UT1 - TAI
is kept. Both come with a warning that says how many metres it can cost.
"""

import warnings
from dataclasses import dataclass
from functools import cache
from pathlib import Path

import erfa
import numpy as np
from astropy_iers_data import IERS_A_FILE, IERS_B_FILE
from numpy.typing import NDArray

from ngbound.constants import ARCSEC_RAD, DAY_S, J2000_JD, J2000_MJD
from ngbound.errors import NgboundWarning
from ngbound.sky.timescales import (
    delta_t_s,
    mjd_to_date,
    tdb_d_to_tt_d,
    utc_to_tt_d,
)

FloatArray = NDArray[np.float64]

EARTH_ROTATION_RAD_S = 1.00273781191135448 * 2.0 * np.pi / DAY_S
"""Rate of the Earth rotation angle: N. Capitaine et al. 2000, A&A 355, 398 (per UT1 second)."""
EQUATOR_SPEED_M_S = 465.1
"""Speed of a point on the equator in m/s, 6378.137 km x `EARTH_ROTATION_RAD_S`."""

_SERIES_B_COLUMNS = (4, 5, 6, 7)
_SERIES_A_COLUMNS = (slice(7, 15), slice(18, 27), slice(37, 46), slice(58, 68))
_DRIFT_S_PER_YEAR = 0.4
_EARLY_UT1_M = 50.0


@dataclass(frozen=True, eq=False)
class _EarthTable:
    """UT1 - TT (s) and pole (rad) at TT days past J2000, one row a UTC day."""

    tt_d: FloatArray
    ut1_minus_tt_s: FloatArray
    pole_x_rad: FloatArray
    pole_y_rad: FloatArray


@cache
def _earth_table() -> _EarthTable:
    series_b = np.loadtxt(IERS_B_FILE, usecols=_SERIES_B_COLUMNS)
    rows = np.concatenate([series_b, _series_a_after(series_b[-1, 0])])
    mjd, pole_x_arcsec, pole_y_arcsec, ut1_minus_utc_s = rows.T
    with warnings.catch_warnings():
        # The table's own predictions past the announced leap seconds are no concern of the user.
        warnings.simplefilter("ignore", NgboundWarning)
        tt_d = utc_to_tt_d(mjd.astype(np.int64), np.zeros(mjd.size))
    tt_minus_utc_s = (tt_d - (mjd - J2000_MJD)) * DAY_S
    return _EarthTable(
        tt_d,
        ut1_minus_utc_s - tt_minus_utc_s,
        pole_x_arcsec * ARCSEC_RAD,
        pole_y_arcsec * ARCSEC_RAD,
    )


def _series_a_after(last_mjd: float) -> FloatArray:
    """Rows (MJD, pole x, pole y in arcsec, UT1 - UTC in s) of series A past a day."""
    rows = []
    for line in Path(IERS_A_FILE).read_text(encoding="ascii").splitlines():
        cells = [line[columns].strip() for columns in _SERIES_A_COLUMNS]
        if all(cells) and float(cells[0]) > last_mjd:
            rows.append([float(cell) for cell in cells])
    return np.array(rows).reshape(-1, 4)


def _year(tt_d: FloatArray) -> FloatArray:
    return 2000.0 + tt_d / 365.25


def earth_rotation(tdb_d: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """UT1 - TT in seconds and the pole's x, y in radians.

    Parameters
    ----------
    tdb_d : (n,) array
        TDB days past J2000.0.

    Warns
    -----
    NgboundWarning
        Times before 1962 or past the IERS table.
    """
    table = _earth_table()
    tt_d = np.asarray(tdb_d_to_tt_d(tdb_d), dtype=float)
    ut1_minus_tt_s = np.interp(tt_d, table.tt_d, table.ut1_minus_tt_s)
    pole_x = np.interp(tt_d, table.tt_d, table.pole_x_rad)
    pole_y = np.interp(tt_d, table.tt_d, table.pole_y_rad)
    early = tt_d < table.tt_d[0]
    late = tt_d > table.tt_d[-1]
    if early.any():
        ut1_minus_tt_s[early] = -delta_t_s(_year(tt_d[early]))
        pole_x[early] = pole_y[early] = 0.0
        warnings.warn(
            f"{early.sum()} of {tt_d.size} times lie before 1962, where the tables of the Earth's "
            "rotation begin: UT1 is taken from the clock time and the pole at rest, which can cost "
            f"about {_EARLY_UT1_M:.0f} m in an observer's place.",
            NgboundWarning,
            stacklevel=2,
        )
    if late.any():
        years = float(tt_d.max() - table.tt_d[-1]) / 365.25
        cost_m = max(years * _DRIFT_S_PER_YEAR, 0.001) * EQUATOR_SPEED_M_S
        end = mjd_to_date(int(round(table.tt_d[-1] + J2000_MJD)))
        warnings.warn(
            f"{late.sum()} of {tt_d.size} times lie up to {years:.1f} years past the end of the "
            f"table of the Earth's rotation ({end}): its last UT1 and pole are kept, which can "
            f"cost up to {cost_m:.0f} m in an observer's place. A newer astropy-iers-data reaches "
            "further.",
            NgboundWarning,
            stacklevel=2,
        )
    return ut1_minus_tt_s, pole_x, pole_y


def itrf_to_gcrs(itrf_m: FloatArray, tdb_d: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Geocentric GCRS position and velocity of points fixed to the Earth.

    Parameters
    ----------
    itrf_m : (n, 3) array
        ITRF coordinates in m.
    tdb_d : (n,) array
        TDB days past J2000.0.

    Returns
    -------
    position_m, velocity_m_s : (n, 3) arrays
    """
    ut1_minus_tt_s, pole_x, pole_y = earth_rotation(tdb_d)
    tt_d = np.asarray(tdb_d_to_tt_d(tdb_d), dtype=float)
    whole_d = np.floor(tt_d)
    celestial = erfa.c2i06a(J2000_JD + whole_d, tt_d - whole_d)
    angle = erfa.era00(J2000_JD + whole_d, tt_d - whole_d + ut1_minus_tt_s / DAY_S)
    pole = erfa.pom00(pole_x, pole_y, erfa.sp00(J2000_JD, tt_d))
    intermediate_m, rate_m_s = _to_intermediate(itrf_m, angle, pole)
    position_m = np.einsum("nji,nj->ni", celestial, intermediate_m)
    velocity_m_s = np.einsum("nji,nj->ni", celestial, rate_m_s)
    return position_m, velocity_m_s


def _to_intermediate(
    itrf_m: FloatArray, angle_rad: FloatArray, pole: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """CIRS position (m) and velocity (m/s) from ITRF, Earth rotation angle and pole matrix."""
    terrestrial = np.einsum("nji,nj->ni", pole, itrf_m)
    cos, sin = np.cos(angle_rad), np.sin(angle_rad)
    x = cos * terrestrial[:, 0] - sin * terrestrial[:, 1]
    y = sin * terrestrial[:, 0] + cos * terrestrial[:, 1]
    position_m = np.stack([x, y, terrestrial[:, 2]], axis=1)
    velocity_m_s = EARTH_ROTATION_RAD_S * np.stack([-y, x, np.zeros(x.size)], axis=1)
    return position_m, velocity_m_s
