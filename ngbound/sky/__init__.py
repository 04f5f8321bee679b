"""Where everything is, and when; imports the arc room, constants and errors.

Conventions
-----------
Frame: barycentric ICRF (IAU 2000 BCRS), units au and days of TDB. No aberration and no light
deflection anywhere: places are astrometric, as reduced against catalogue stars.

Time: every time to the right of this room is ``tdb_d``, days of TDB past J2000.0 (JD 2451545.0
TDB), in one float64. UTC goes over TAI and TT; TDB - TT after L. Fairhead & P. Bretagnon 1990,
A&A 229, 240, at the geocentre.

Bodies: DE440 (R. S. Park et al. 2021, AJ 161, 105) for Sun, planets, Moon and Pluto, read literally
segment by segment (Earth = Earth-Moon barycentre + segment 3->399); from Mars outwards "the planet"
is the barycentre of its system. Sixteen asteroids of sb441-n16 for 1900-2100.

Earth: IAU 2006/2000A precession-nutation, UT1 and pole from the bundled IERS tables; WGS84
ellipsoid; parallax constants in units of 6378.137 km.

Sightline: r(t - tau) - r_observer(t) with c tau its length; tangent-plane residuals are observed
minus computed, along RA (times cos Dec) and along Dec, in rad.
"""

from ngbound.sky.earth_orientation import earth_rotation, itrf_to_gcrs
from ngbound.sky.ephemeris import (
    ASTEROID_GM_AU3_D2,
    ASTEROID_NUMBERS,
    MAJOR_BODIES,
    ChebyshevTable,
    Ephemeris,
    body_name,
    load_ephemeris,
    naif_body_name,
)
from ngbound.sky.observers import Observers, observer_states, station_states
from ngbound.sky.offsets import reduce_offsets
from ngbound.sky.sightline import (
    Sightline,
    angles_to_direction,
    astrometric,
    deflection_by_sun,
    direction_to_angles,
    sky_axes,
    tangent_plane_residuals,
)
from ngbound.sky.timescales import (
    delta_t_s,
    parse_time,
    tdb_d_to_iso,
    tdb_d_to_tt_d,
    tdb_d_to_utc,
    tdb_minus_tt_s,
    utc_to_tdb_d,
    utc_to_tt_d,
)

__all__ = [
    "ASTEROID_GM_AU3_D2",
    "ASTEROID_NUMBERS",
    "MAJOR_BODIES",
    "ChebyshevTable",
    "Ephemeris",
    "Observers",
    "Sightline",
    "angles_to_direction",
    "astrometric",
    "body_name",
    "deflection_by_sun",
    "delta_t_s",
    "direction_to_angles",
    "earth_rotation",
    "itrf_to_gcrs",
    "load_ephemeris",
    "naif_body_name",
    "observer_states",
    "parse_time",
    "reduce_offsets",
    "sky_axes",
    "station_states",
    "tangent_plane_residuals",
    "tdb_d_to_iso",
    "tdb_d_to_tt_d",
    "tdb_d_to_utc",
    "tdb_minus_tt_s",
    "utc_to_tdb_d",
    "utc_to_tt_d",
]
