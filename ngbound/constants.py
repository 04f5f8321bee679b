"""One definition per constant, its source beside it, and unit conversions; imports only the
standard library.

Distances in au, times in days (86400 s) of TDB, angles in radians unless a name says otherwise.
"""

import math

AU_KM = 149597870.7
"""Astronomical unit in km: IAU 2012 Resolution B2, exact."""
AU_M = AU_KM * 1e3
C_KM_S = 299792.458
"""Speed of light in km/s: SI, exact."""
DAY_S = 86400.0
C_AU_D = C_KM_S * DAY_S / AU_KM
"""Speed of light in au/d, 173.144632674..."""
J2000_JD = 2451545.0
"""Julian date of the epoch J2000.0 (in TDB wherever ngbound counts days from it)."""
J2000_MJD = 51544.5

EPHEMERIS_MJD = (-112816.0, 288976.0)
"""First and last day of DE440, 1549-12-31 and 2650-01-25: JD 2287184.5 and 2688976.5 of its file;
R. S. Park et al. 2021, AJ 161, 105."""

KM3_S2_TO_AU3_D2 = DAY_S**2 / AU_KM**3

GM_KM3_S2 = {
    "sun": 132712440041.279419,
    "mercury": 22031.868551,
    "venus": 324858.592000,
    "earth": 398600.435507,
    "moon": 4902.800118,
    "mars": 42828.375816,
    "jupiter": 126712764.100000,
    "saturn": 37940584.841800,
    "uranus": 5794556.400000,
    "neptune": 6836527.100580,
    "pluto": 975.500000,
}
"""GM in km3/s2 of the Sun and the planetary systems (system barycentres from Mars outwards):
comment block of the DE440 file; R. S. Park et al. 2021, AJ 161, 105."""

GM_SUN_AU3_D2 = GM_KM3_S2["sun"] * KM3_S2_TO_AU3_D2

OBLIQUITY_J2000_ARCSEC = 84381.448
"""Obliquity of the ecliptic at J2000.0 that defines 'ecliptic J2000' elements:
J. H. Lieske et al. 1977, A&A 58, 1 (IAU 1976)."""
OBLIQUITY_J2000_RAD = math.radians(OBLIQUITY_J2000_ARCSEC / 3600.0)

ARCSEC_RAD = math.pi / (180.0 * 3600.0)
"""One arcsecond in radians."""
MAS_RAD = ARCSEC_RAD / 1e3

AU_D2_TO_M_S2 = AU_M / DAY_S**2
"""1 au/d2 in m/s2, 20.04001..."""

ATOMIC_MASS_KG = 1.66053906892e-27
"""Unified atomic mass unit in kg: CODATA 2022."""
BOLTZMANN_J_K = 1.380649e-23
"""Boltzmann constant: SI, exact."""
STEFAN_BOLTZMANN_W_M2_K4 = 5.670374419e-8
"""Stefan-Boltzmann constant: SI (derived from exact constants)."""
SOLAR_CONSTANT_W_M2 = 1361.0
"""Nominal total solar irradiance at 1 au: IAU 2015 Resolution B3."""
