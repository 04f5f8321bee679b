"""Time scales: leap seconds, the old UTC, times before it, reading and writing."""

from datetime import UTC, datetime, timedelta, timezone

import erfa
import numpy as np
import pytest
from astropy.time import Time
from astropy.utils import iers

from ngbound.errors import InputError, NgboundWarning
from ngbound.sky import (
    delta_t_s,
    parse_time,
    tdb_d_to_iso,
    tdb_d_to_tt_d,
    tdb_d_to_utc,
    tdb_minus_tt_s,
    utc_to_tdb_d,
    utc_to_tt_d,
)
from tests.units import second

MICROSECOND = 1e-6 * second
DAY_2003_06_01, DAY_2008_01_17, DAY_2017_09_01 = 52791, 54482, 57997
DAY_2016_12_31 = 57753


def test_utc_to_tt_is_on_the_same_chain():
    direct_d = utc_to_tt_d([57753, 40000], [86400.5, 43200.0])
    over_tdb_d = tdb_d_to_tt_d(utc_to_tdb_d([57753, 40000], [86400.5, 43200.0]))
    assert np.abs(direct_d - over_tdb_d).max() < MICROSECOND


def tt_minus_utc_s(utc_day, utc_sec=0.0):
    tt_d = tdb_d_to_tt_d(utc_to_tdb_d(utc_day, utc_sec))
    return (tt_d - (utc_day - 51544.5)) * 86400.0 - utc_sec


@pytest.mark.parametrize(
    ("utc_day", "tai_minus_utc_s"),
    [
        # SOFA/ERFA validation program t_erfa_c.c, t_dat.
        (DAY_2003_06_01, 32.0),
        (DAY_2008_01_17, 33.0),
        (DAY_2017_09_01, 37.0),
        # Rate offsets of the old UTC, USNO file tai-utc.dat: 4.2131700 s + (MJD - 39126) x
        # 0.002592 s from 1968-02-01; 1.4178180 s + (MJD - 37300) x 0.001296 s in 1960.
        (40587, 8.000082),
        (36934, 1.4178180 - 366 * 0.001296),
    ],
)
def test_leap_seconds(utc_day, tai_minus_utc_s):
    assert tt_minus_utc_s(utc_day) == pytest.approx(32.184 + tai_minus_utc_s, abs=1e-6)


def test_old_utc_drifts_within_the_day():
    assert tt_minus_utc_s(40587, 43200.0) == pytest.approx(40.184082 + 0.001296, abs=1e-6)


def test_tdb_minus_tt_sofa_vector():
    # SOFA/ERFA validation program t_erfa_c.c, t_dtdb.
    full_s = erfa.dtdb(2448939.5, 0.123, 0.76543, 5.0123, 5525.242, 3190.0)
    assert full_s == pytest.approx(-0.1280368005936998991e-2, abs=1e-15)
    geocentric_s = tdb_minus_tt_s(2448939.5 - 2451545.0 + 0.123)
    assert abs(geocentric_s - full_s) < 2.1e-6


def test_leap_second_counts():
    before_d = utc_to_tdb_d(DAY_2016_12_31, 86399.0)
    within_d = utc_to_tdb_d(DAY_2016_12_31, 86400.5)
    after_d = utc_to_tdb_d(DAY_2016_12_31 + 1, 0.0)
    assert within_d - before_d == pytest.approx(1.5 * second, abs=MICROSECOND)
    assert after_d - before_d == pytest.approx(2.0 * second, abs=MICROSECOND)
    assert tdb_d_to_utc(within_d)[0] == DAY_2016_12_31
    assert tdb_d_to_utc(within_d)[1] == pytest.approx(86400.5, abs=1e-6)
    assert tdb_d_to_iso(within_d, "utc") == "2016-12-31T23:59:60.500Z"
    assert tdb_d_to_iso(after_d, "utc") == "2017-01-01T00:00:00.000Z"
    assert parse_time("2016-12-31T23:59:60.5Z") == within_d
    assert parse_time("2016-12-31T23:59:60.5", scale="utc") == within_d


def test_utc_there_and_back():
    rng = np.random.default_rng(7)
    day = rng.integers(36935, 60000, 3000)
    sec = rng.uniform(0.0, 86400.0, 3000)
    back_day, back_sec = tdb_d_to_utc(utc_to_tdb_d(day, sec))
    assert back_day.dtype == np.int64
    assert np.abs((back_day - day) * 86400.0 + back_sec - sec).max() < 1e-6


def test_two_part_arithmetic_keeps_the_microsecond():
    day = np.full(1000, 60000)
    sec = 43200.0 + np.arange(1000) * 1e-6
    steps_d = np.diff(utc_to_tdb_d(day, sec))
    assert np.abs(steps_d - MICROSECOND).max() < 0.3 * MICROSECOND


def test_before_utc_the_clock_shows_ut1():
    with pytest.warns(NgboundWarning, match="before 1960, when there was no UTC"):
        time_d = utc_to_tdb_d(20000, 43200.0)
    assert (tdb_d_to_tt_d(time_d) - (20000.5 - 51544.5)) / second == pytest.approx(
        float(delta_t_s(2000.0 + (20000.5 - 51544.5) / 365.25)), abs=1e-6
    )
    day, sec = tdb_d_to_utc(time_d)
    assert day == 20000 and sec == pytest.approx(43200.0, abs=2e-6)


def test_past_and_present_times_in_one_call():
    with pytest.warns(NgboundWarning, match="1 time lies before 1960"):
        both_d = utc_to_tdb_d([30000, 57754], [0.0, 0.0])
    assert both_d[1] == utc_to_tdb_d(57754, 0.0)


def test_future_leap_seconds_are_owned_up_to():
    with pytest.warns(NgboundWarning, match="leap seconds are announced"):
        assert tt_minus_utc_s(88000) == pytest.approx(32.184 + 37.0, abs=1e-5)


@pytest.mark.parametrize(
    ("year", "expected_s"),
    # Astronomical Almanac, section K, table of Delta T; from memory.
    [
        (1870.0, 1.61),
        (1890.0, -5.87),
        (1900.0, -2.72),
        (1910.0, 10.46),
        (1920.0, 21.16),
        (1930.0, 24.02),
        (1940.0, 24.33),
        (1950.0, 29.15),
        (1960.0, 33.15),
        (1970.0, 40.18),
        (1980.0, 50.54),
        (1990.0, 56.86),
        (2000.0, 63.83),
    ],
)
def test_delta_t_meets_the_tables(year, expected_s):
    assert float(delta_t_s(year)) == pytest.approx(expected_s, abs=0.8)


def test_delta_t_pieces_meet():
    joints = np.array([1700, 1800, 1860, 1900, 1920, 1941, 1961, 1986, 2005, 2050])
    assert np.abs(delta_t_s(joints + 1e-6) - delta_t_s(joints - 1e-6)).max() < 1.0


def test_parse_time_readings_agree():
    noon_d = parse_time("2000-01-01T12:00:00")
    assert noon_d == 0.0
    same = [
        "2031-05-01T06:00",
        "2031-05-01 06:00:00.000",
        "2031-05-01.25",
        "JD 2462987.75",
        "MJD 62987.25",
        datetime(2031, 5, 1, 6),
        np.datetime64("2031-05-01T06:00"),
        Time("2031-05-01T06:00:00", scale="tdb"),
        parse_time("2031-05-01T06:00:00"),
    ]
    values = [parse_time(item) for item in same]
    assert values == [62987.25 - 51544.5] * len(same)
    assert np.all(parse_time(same) == values)
    assert np.all(parse_time(np.array(["2031-05-01T06:00"], "datetime64[s]")) == values[:1])
    assert parse_time(datetime(2031, 5, 1).date()) == 62987.0 - 51544.5


def test_parse_time_scales():
    utc_d = parse_time("2020-03-04T05:06:07Z")
    assert utc_d == parse_time("2020-03-04T05:06:07", scale="utc")
    assert utc_d == parse_time(datetime(2020, 3, 4, 5, 6, 7, tzinfo=UTC))
    east = timezone(timedelta(hours=9))
    assert utc_d == parse_time(datetime(2020, 3, 4, 14, 6, 7, tzinfo=east))
    assert utc_d == pytest.approx(
        parse_time("2020-03-04T05:07:16.184", scale="tt"), abs=MICROSECOND
    )
    tt = Time("2020-03-04T05:07:16.184", scale="tt")
    assert parse_time(tt) == pytest.approx(utc_d, abs=MICROSECOND)
    many = Time(["2020-03-04T05:06:07", "2016-12-31T23:59:60.25"], scale="utc")
    assert parse_time(many)[0] == pytest.approx(utc_d, abs=MICROSECOND)
    assert parse_time(many)[1] == parse_time("2016-12-31T23:59:60.25Z")
    assert parse_time(many[0]) == pytest.approx(utc_d, abs=MICROSECOND)


@pytest.mark.parametrize(
    ("value", "scale", "message"),
    [
        ("yesterday", None, "cannot be read"),
        ("2031-05-01.5T06:00", None, "cannot be read"),
        ("2031-02-30", None, "not on the calendar"),
        ("2031-05-01T25:00", None, "does not exist"),
        ("2031-05-01T06:00:60", "utc", "61st second"),
        ("2016-12-31T23:59:60.5", "tdb", "61st second"),
        ("2031-05-01T06:00Z", "tdb", "drop one of them"),
        ("2031-05-01", "gps", "time scale 'gps' is not known"),
        (2459000.5, None, "Julian dates as text"),
        (float("nan"), None, "is not a time"),
        ("JD 99999999", None, "too far"),
        (None, None, "must be text, a number"),
        (Time("2020-01-01", scale="local"), None, "'local' cannot be tied"),
    ],
)
def test_parse_time_says_what_is_wrong(value, scale, message):
    with pytest.raises(InputError, match=message):
        parse_time(value, scale)


def test_iso_text():
    assert tdb_d_to_iso(0.0) == "2000-01-01T12:00:00.000"
    assert tdb_d_to_iso([0.0, 0.5], digits=0) == ["2000-01-01T12:00:00", "2000-01-02T00:00:00"]
    assert tdb_d_to_iso(0.5 - 0.0001 * second) == "2000-01-02T00:00:00.000"
    assert tdb_d_to_iso(0.0, "utc", digits=2) == "2000-01-01T11:58:55.82Z"
    # TT - UTC was 64.184 s at J2000.0 (32 leap seconds); TDB - TT then about -0.1 ms.
    assert tdb_d_to_iso(0.0, "tt", digits=4) == "2000-01-01T12:00:00.0001"
    rng = np.random.default_rng(3)
    for scale in ("tdb", "tt", "utc"):
        times_d = rng.uniform(-14000.0, 9000.0, 50)
        back_d = parse_time(tdb_d_to_iso(times_d, scale, digits=6), scale)
        assert np.abs(back_d - times_d).max() < 1.2 * MICROSECOND
    with pytest.raises(InputError, match="not known"):
        tdb_d_to_iso(0.0, "tai")
    with pytest.raises(InputError, match="0 to 6"):
        tdb_d_to_iso(0.0, digits=9)


def test_nothing_is_downloaded():
    assert iers.conf.auto_download is False
