"""Time scales, UTC to TDB and back; imports numpy, erfa, astropy, constants and errors.

Inside ngbound a time is `tdb_d`: days of TDB past J2000.0 (JD 2451545.0 TDB) in one float64. Its
last bit is worth 0.2 microseconds within 40 years of J2000 and 1 microsecond 400 years away; all
conversions keep day and seconds apart until the last addition, so that nothing else is lost.

Chain: UTC -> TAI by the leap seconds (1960-1971 with the frequency offsets of the old UTC) from
ERFA, brought up to date from the list bundled with astropy-iers-data; TT = TAI + 32.184 s; TDB - TT
from L. Fairhead & P. Bretagnon 1990, A&A 229, 240 (erfa.dtdb) at the geocentre. The term that
depends on the station's place is below 2.1 microseconds and is left out.

Before 1960 there is no UTC: clock times are taken as UT1 and TT - UT1 ("Delta T") as the
polynomials of F. Espenak & J. Meeus 2006, NASA/TP-2006-214141 (from memory; tests hold them to
tabulated values and to each other at the joints). A warning says so.

Nothing is ever downloaded: importing this module sets ``astropy.utils.iers.conf.auto_download`` to
False.
"""

import re
import warnings
from collections.abc import Callable
from datetime import UTC, date, datetime
from functools import cache
from typing import Any

import erfa
import numpy as np
from astropy.time import Time
from astropy.utils import iers
from astropy_iers_data import IERS_LEAP_SECOND_FILE
from numpy.typing import ArrayLike, NDArray

from ngbound.constants import DAY_S, J2000_MJD
from ngbound.errors import InputError, NgboundWarning

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

TT_MINUS_TAI_S = 32.184
"""TT - TAI in seconds: IAU 1991 Recommendation IV, exact."""
UTC_START_MJD = 36934
"""1960-01-01, the first day for which TAI - UTC is defined."""

_MJD_ZERO_JD = 2400000.5
_MJD_OF_ORDINAL_ZERO = -678576
_SCALES = ("utc", "tt", "tdb")
_ISO = re.compile(
    r"(?P<year>\d{4})-(?P<month>\d{1,2})-(?P<day>\d{1,2}(?:\.\d*)?)"
    r"(?:[T ](?P<hour>\d{1,2}):(?P<minute>\d{2})(?::(?P<second>\d{2}(?:\.\d*)?))?)?(?P<zulu>Z)?"
)
_JULIAN = re.compile(r"(?P<kind>M?JD)\s*(?P<whole>\d+)(?P<fraction>\.\d*)?", re.IGNORECASE)

iers.conf.auto_download = False


@cache
def _leap_seconds_known_until_mjd() -> float:
    table = iers.LeapSeconds.open(IERS_LEAP_SECOND_FILE)
    erfa.leap_seconds.update(table)
    return float(table.expires.mjd)


def _tai_minus_utc_s(utc_day: IntArray, fraction: FloatArray) -> FloatArray:
    """TAI - UTC in s for days from 1960 on; `fraction` of the day in [0, 1] (matters to 1971)."""
    _leap_seconds_known_until_mjd()
    year, month, day, _ = erfa.jd2cal(_MJD_ZERO_JD, utc_day.astype(float))
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", erfa.ErfaWarning)
        return np.asarray(erfa.dat(year, month, day, np.clip(fraction, 0.0, 1.0)), dtype=float)


def delta_t_s(year: ArrayLike) -> FloatArray:
    """TT - UT1 in seconds after F. Espenak & J. Meeus 2006, NASA/TP-2006-214141 (from memory).

    Parameters
    ----------
    year : float or (n,) array
        Decimal year, 1500 to 2150 (the polynomials are defined there piece by piece).

    Returns
    -------
    float64 array of the same shape; good to about 1 s after 1800, some 20 s around 1600.
    """
    y = np.asarray(year, dtype=float)
    u = (y - 1000.0) / 100.0
    century = (y - 1820.0) / 100.0
    pieces: list[tuple[float, Any]] = [
        (
            1600.0,
            np.polyval(
                [
                    0.0083572073,
                    -0.005050998,
                    -0.8503463,
                    0.319781,
                    71.23472,
                    -556.01,
                    1574.2,
                ],
                u,
            ),
        ),
        (1700.0, np.polyval([1.0 / 7129.0, -0.01532, -0.9808, 120.0], y - 1600.0)),
        (
            1800.0,
            np.polyval([-1.0 / 1174000.0, 0.00013336, -0.0059285, 0.1603, 8.83], y - 1700.0),
        ),
        (
            1860.0,
            np.polyval(
                [
                    0.000000000875,
                    -0.0000001699,
                    0.0000121272,
                    -0.00037436,
                    0.0041116,
                    0.0068612,
                    -0.332447,
                    13.72,
                ],
                y - 1800.0,
            ),
        ),
        (
            1900.0,
            np.polyval(
                [1.0 / 233174.0, -0.0004473624, 0.01680668, -0.251754, 0.5737, 7.62], y - 1860.0
            ),
        ),
        (1920.0, np.polyval([-0.000197, 0.0061966, -0.0598939, 1.494119, -2.79], y - 1900.0)),
        (1941.0, np.polyval([0.0020936, -0.076100, 0.84493, 21.20], y - 1920.0)),
        (1961.0, np.polyval([1.0 / 2547.0, -1.0 / 233.0, 0.407, 29.07], y - 1950.0)),
        (1986.0, np.polyval([-1.0 / 718.0, -1.0 / 260.0, 1.067, 45.45], y - 1975.0)),
        (
            2005.0,
            np.polyval(
                [0.00002373599, 0.000651814, 0.0017275, -0.060374, 0.3345, 63.86], y - 2000.0
            ),
        ),
        (2050.0, np.polyval([0.005589, 0.32217, 62.92], y - 2000.0)),
    ]
    beyond = -20.0 + 32.0 * century**2 - 0.5628 * (2150.0 - np.minimum(y, 2150.0))
    return np.asarray(
        np.select([y < end for end, _ in pieces], [value for _, value in pieces], beyond)
    )


def _year_of_mjd(mjd: ArrayLike) -> FloatArray:
    return 2000.0 + (np.asarray(mjd, dtype=float) - J2000_MJD) / 365.25


def tdb_minus_tt_s(tdb_d: ArrayLike) -> FloatArray:
    """TDB - TT in seconds at the geocentre (erfa.dtdb); TT days past J2000 serve as well."""
    time_d = np.asarray(tdb_d, dtype=float)
    return np.asarray(erfa.dtdb(J2000_MJD + _MJD_ZERO_JD, time_d, 0.0, 0.0, 0.0, 0.0))


def _utc_to_tt(utc_day: IntArray, utc_sec: FloatArray) -> tuple[FloatArray, FloatArray]:
    """TT as (MJD day, seconds into it, which may pass the day's end)."""
    tt_minus_utc_s = np.empty(utc_sec.shape)
    has_utc = utc_day >= UTC_START_MJD
    if has_utc.any():
        tt_minus_utc_s[has_utc] = TT_MINUS_TAI_S + _tai_minus_utc_s(
            utc_day[has_utc], utc_sec[has_utc] / DAY_S
        )
        late = utc_day > _leap_seconds_known_until_mjd()
        if late.any():
            known = mjd_to_date(int(_leap_seconds_known_until_mjd()))
            warnings.warn(
                f"{_plural(late.sum(), 'UTC time')} past {known}, up to which leap seconds are "
                "announced: none are taken to follow. Each one that does shifts the time by 1 s, "
                "and with it an Earth-bound observer by 30 km.",
                NgboundWarning,
                stacklevel=3,
            )
    if not has_utc.all():
        early = ~has_utc
        tt_minus_utc_s[early] = delta_t_s(_year_of_mjd(utc_day[early] + utc_sec[early] / DAY_S))
        warnings.warn(
            f"{_plural(early.sum(), 'time')} before 1960, when there was no UTC: taken as UT1, "
            "with TT - UT1 from the polynomials of Espenak & Meeus 2006, good to about 1 s since "
            "1800 (a body at 1 arcsec/min then errs by 0.02 arcsec).",
            NgboundWarning,
            stacklevel=3,
        )
    return utc_day.astype(float), utc_sec + tt_minus_utc_s


def utc_to_tdb_d(utc_day: ArrayLike, utc_sec: ArrayLike) -> Any:
    """TDB days past J2000.0 of UTC times.

    Parameters
    ----------
    utc_day : int or (n,) integers
        MJD of the UTC day.
    utc_sec : float or (n,) array
        UTC seconds elapsed in that day; up to 86401 on a day with a leap second. Values outside
        the day count on from its start.

    Returns
    -------
    float or (n,) float64 array

    Warns
    -----
    NgboundWarning
        Times before 1960 (taken as UT1), or past the announced leap seconds.
    """
    day, sec = np.broadcast_arrays(
        np.asarray(utc_day, dtype=np.int64), np.asarray(utc_sec, dtype=float)
    )
    tt_day, tt_sec = _utc_to_tt(np.atleast_1d(day), np.atleast_1d(sec))
    return _shaped(_tt_to_tdb_d(tt_day, tt_sec), day.shape)


def utc_to_tt_d(utc_day: ArrayLike, utc_sec: ArrayLike) -> Any:
    """TT days past J2000.0 of UTC times; arguments and warnings as of `utc_to_tdb_d`."""
    day, sec = np.broadcast_arrays(
        np.asarray(utc_day, dtype=np.int64), np.asarray(utc_sec, dtype=float)
    )
    tt_day, tt_sec = _utc_to_tt(np.atleast_1d(day), np.atleast_1d(sec))
    return _shaped((tt_day - J2000_MJD) + tt_sec / DAY_S, day.shape)


def _tt_to_tdb_d(tt_day: FloatArray, tt_sec: FloatArray) -> FloatArray:
    whole_d = tt_day - J2000_MJD
    return whole_d + (tt_sec + tdb_minus_tt_s(whole_d + tt_sec / DAY_S)) / DAY_S


def _tdb_d_to_tt(tdb_d: FloatArray) -> tuple[FloatArray, FloatArray]:
    """TT as (MJD day, seconds), the seconds within a millisecond or so of [0, 86400)."""
    mjd_day = np.floor(tdb_d + 0.5) + (J2000_MJD - 0.5)
    seconds = (tdb_d - (mjd_day - J2000_MJD)) * DAY_S
    return mjd_day, seconds - tdb_minus_tt_s(tdb_d)


def tdb_d_to_tt_d(tdb_d: ArrayLike) -> Any:
    """TT days past J2000.0 of TDB days past J2000.0."""
    time_d = np.asarray(tdb_d, dtype=float)
    return _shaped(time_d - tdb_minus_tt_s(time_d) / DAY_S, time_d.shape)


def tdb_d_to_utc(tdb_d: ArrayLike) -> tuple[Any, Any]:
    """UTC day (MJD, int64) and UTC seconds into it; the inverse of `utc_to_tdb_d`.

    Before 1960 the result is UT1. Within a leap second the seconds lie between 86400 and 86401.
    """
    time_d = np.asarray(tdb_d, dtype=float)
    tt_day, tt_sec = _tdb_d_to_tt(np.atleast_1d(time_d))
    day = tt_day.astype(np.int64)
    # UTC runs behind TT, so the UTC day is the TT day or the one before.
    sec = _utc_seconds(day, tt_sec)
    before = sec < 0.0
    day = day - before
    sec = np.where(before, _utc_seconds(day, tt_sec + np.where(before, DAY_S, 0.0)), sec)
    length_s = _utc_day_length_s(day)
    after = sec >= length_s
    day, sec = day + after, np.where(after, sec - length_s, sec)
    return _shaped(day, time_d.shape), _shaped(sec, time_d.shape)


def _utc_seconds(day: IntArray, tt_sec: FloatArray) -> FloatArray:
    """UTC (or UT1) seconds since the start of `day` where TT is `tt_sec` past the day's start."""
    sec = np.empty(tt_sec.shape)
    has_utc = day >= UTC_START_MJD
    for use, offset_of in ((has_utc, _tt_minus_utc_of), (~has_utc, _tt_minus_ut1_of)):
        if not use.any():
            continue
        estimate = tt_sec[use] - offset_of(day[use], np.full(use.sum(), 0.5))
        for _ in range(3):
            estimate = tt_sec[use] - offset_of(day[use], estimate / DAY_S)
        sec[use] = estimate
    return sec


def _tt_minus_utc_of(day: IntArray, fraction: FloatArray) -> FloatArray:
    return TT_MINUS_TAI_S + _tai_minus_utc_s(day, fraction)


def _tt_minus_ut1_of(day: IntArray, fraction: FloatArray) -> FloatArray:
    return delta_t_s(_year_of_mjd(day + fraction))


def _utc_day_length_s(day: IntArray) -> FloatArray:
    length_s = np.full(day.shape, DAY_S)
    use = day >= UTC_START_MJD
    if use.any():
        end = np.ones(use.sum())
        jump_s = _tai_minus_utc_s(day[use] + 1, 0.0 * end) - _tai_minus_utc_s(day[use], end)
        # The rate offsets of the old UTC leave rounding dust where there is no step.
        length_s[use] += np.where(np.abs(jump_s) > 1e-6, jump_s, 0.0)
    return length_s


def parse_time(value: Any, scale: str | None = None) -> Any:
    """TDB days past J2000.0 of a time given in one of many ways.

    Parameters
    ----------
    value : float, str, astropy Time, datetime, numpy datetime64, or a sequence of these
        A number is TDB days past J2000.0 already. Text: "2031-05-01", "2031-05-01T06:30:00.5",
        "2031-05-01.25", "JD 2459000.5", "MJD 59000.25"; with a final Z it is UTC. An astropy Time
        and an aware datetime know their own scale.
    scale : {"utc", "tt", "tdb"}, optional
        Scale of text, naive datetimes and datetime64; "tdb" if not given.

    Returns
    -------
    float, or (n,) float64 array for a sequence

    Raises
    ------
    InputError
        Text, date, scale or number that cannot be read.
    """
    if scale is not None and scale not in _SCALES:
        raise InputError(
            f"The time scale {scale!r} is not known: use one of {', '.join(_SCALES)}.", scale=scale
        )
    if isinstance(value, Time):
        return _parse_astropy(value)
    if isinstance(value, np.datetime64):
        return _parse_text(str(value), scale)
    if isinstance(value, str):
        return _parse_text(value, scale)
    if isinstance(value, datetime):
        return _parse_datetime(value, scale)
    if isinstance(value, date):
        return _parse_text(value.isoformat(), scale)
    if isinstance(value, int | float | np.integer | np.floating):
        return _check_number(float(value))
    array = np.asarray(value)
    if array.dtype.kind == "M":
        return np.array([_parse_text(str(item), scale) for item in array])
    if array.dtype.kind in "iuf":
        return np.array([_check_number(float(item)) for item in array.ravel()]).reshape(array.shape)
    if array.ndim == 0:
        raise InputError(
            f"A time must be text, a number, a datetime or an astropy Time; got {value!r} "
            f"({type(value).__name__}).",
            value=value,
        )
    return np.array([parse_time(item, scale) for item in value], dtype=float)


def _check_number(tdb_d: float) -> float:
    if not abs(tdb_d) < 1e6:
        raise InputError(
            f"The number {tdb_d!r} is not a time: numbers are TDB days past J2000.0 and lie within "
            '1e6 of zero. Write Julian dates as text, such as "JD 2459000.5".',
            tdb_d=tdb_d,
        )
    return tdb_d


def _parse_astropy(time: Time) -> Any:
    if time.scale in ("tdb", "tcb"):
        tdb = time.tdb
        return _shaped((tdb.jd1 - (J2000_MJD + _MJD_ZERO_JD)) + tdb.jd2, np.shape(tdb.jd1))
    if time.scale == "utc":
        text = Time(time, precision=9, copy=True).isot
        if isinstance(text, str):
            return _parse_text(text, "utc")
        parsed = [_parse_text(str(item), "utc") for item in np.ravel(text)]
        return np.array(parsed).reshape(np.shape(text))
    if time.scale == "local":
        raise InputError(
            "A Time with scale 'local' cannot be tied to TDB: give it as utc, tt or tdb.",
            time=str(time),
        )
    tt = time.tt
    jd1, jd2 = np.atleast_1d(tt.jd1), np.atleast_1d(tt.jd2)
    return _shaped(_tt_to_tdb_d(jd1 - _MJD_ZERO_JD, jd2 * DAY_S), np.shape(tt.jd1))


def _parse_datetime(value: datetime, scale: str | None) -> Any:
    if value.tzinfo is None:
        return _parse_text(value.isoformat(), scale)
    in_utc = value.astimezone(UTC).replace(tzinfo=None)
    return _parse_text(in_utc.isoformat() + "Z", scale)


def _parse_text(text: str, scale: str | None) -> float:
    stripped = text.strip()
    julian = _JULIAN.fullmatch(stripped)
    if julian:
        return _parse_julian(julian, scale or "tdb")
    match = _ISO.fullmatch(stripped)
    if match is None or ("." in match["day"] and match["hour"]):
        raise InputError(
            f"The time {text!r} cannot be read: write it as 2031-05-01, 2031-05-01T06:30:00.5, "
            "2031-05-01.25, JD 2459000.5 or MJD 59000.25 (a final Z means UTC).",
            text=text,
        )
    if match["zulu"] and scale not in (None, "utc"):
        raise InputError(
            f"The time {text!r} says UTC by its final Z, but the scale asked for is {scale!r}: "
            "drop one of them.",
            text=text,
            scale=scale,
        )
    used_scale = "utc" if match["zulu"] else scale or "tdb"
    whole_day, _, day_fraction = match["day"].partition(".")
    try:
        ordinal = date(int(match["year"]), int(match["month"]), int(whole_day)).toordinal()
    except ValueError as error:
        raise InputError(
            f"The time {text!r} is not on the calendar: {error} (Gregorian calendar, years 0001 "
            "to 9999).",
            text=text,
        ) from None
    mjd = ordinal + _MJD_OF_ORDINAL_ZERO
    seconds = float(f"0.{day_fraction or 0}") * DAY_S
    if match["hour"]:
        hour, minute = int(match["hour"]), int(match["minute"])
        second = float(match["second"] or 0.0)
        seconds = 3600.0 * hour + 60.0 * minute + second
        _check_clock(text, hour, minute, second, seconds, mjd, used_scale)
    return _from_day_seconds(mjd, seconds, used_scale)


def _check_clock(
    text: str, hour: int, minute: int, second: float, seconds: float, mjd: int, scale: str
) -> None:
    day_length_s = DAY_S
    if scale == "utc":
        day_length_s = float(_utc_day_length_s(np.array([mjd]))[0])
    ordinary = hour < 24 and minute < 60 and second < 60.0 and seconds < day_length_s
    leap = hour == 23 and minute == 59 and 60.0 <= second and seconds < day_length_s
    midnight = hour == 24 and seconds == DAY_S
    if not (ordinary or leap or midnight):
        hint = (
            "the 61st second exists only at the end of a UTC day with a leap second"
            if second >= 60.0
            else f"hours run to 23, minutes to 59, seconds to {59 if day_length_s >= DAY_S else 58}"
        )
        raise InputError(f"The clock time in {text!r} ({scale}) does not exist: {hint}.", text=text)


def _parse_julian(match: re.Match[str], scale: str) -> float:
    whole, fraction = int(match["whole"]), float(match["fraction"] or 0.0)
    if match["kind"].upper() == "JD":
        fraction -= 0.5
        whole -= 2400000
    if fraction < 0.0:
        whole, fraction = whole - 1, fraction + 1.0
    if abs(whole) > 1e6:
        raise InputError(
            f"The time {match[0]!r} lies too far from today: a JD is near 2460000, an MJD near "
            "60000.",
            text=match[0],
        )
    return _from_day_seconds(whole, fraction * DAY_S, scale)


def _from_day_seconds(mjd: int, seconds: float, scale: str) -> float:
    if scale == "utc":
        return float(utc_to_tdb_d(mjd, seconds))
    if scale == "tt":
        return float(_tt_to_tdb_d(np.array([float(mjd)]), np.array([seconds]))[0])
    return (mjd - J2000_MJD) + seconds / DAY_S


def mjd_to_date(mjd: int) -> str:
    """Calendar date (Gregorian, "2017-01-01") of a whole MJD."""
    return date.fromordinal(int(mjd) - _MJD_OF_ORDINAL_ZERO).isoformat()


def tdb_d_to_iso(tdb_d: ArrayLike, scale: str = "tdb", digits: int = 3) -> Any:
    """ISO text of times.

    Parameters
    ----------
    tdb_d : float or (n,) array
        TDB days past J2000.0.
    scale : {"tdb", "tt", "utc"}
        Scale of the text; UTC ends in Z and shows a leap second as second 60.
    digits : int
        Decimals of the seconds, 0 to 6.

    Returns
    -------
    str, or list of str for an array
    """
    splitters: dict[str, Callable[[FloatArray], tuple[Any, Any]]] = {
        "tdb": _tdb_day_seconds,
        "tt": _tdb_d_to_tt,
        "utc": tdb_d_to_utc,
    }
    if scale not in splitters:
        raise InputError(
            f"The time scale {scale!r} is not known: use one of {', '.join(_SCALES)}.", scale=scale
        )
    if not 0 <= digits <= 6:
        raise InputError(f"The decimals of a second must be 0 to 6; got {digits}.", digits=digits)
    time_d = np.asarray(tdb_d, dtype=float)
    days, seconds = splitters[scale](np.atleast_1d(time_d).ravel())
    texts = [
        _iso_text(int(day), float(second), scale, digits)
        for day, second in zip(days, seconds, strict=True)
    ]
    return texts if time_d.ndim else texts[0]


def _tdb_day_seconds(tdb_d: FloatArray) -> tuple[FloatArray, FloatArray]:
    mjd_day = np.floor(tdb_d + 0.5) + (J2000_MJD - 0.5)
    return mjd_day, (tdb_d - (mjd_day - J2000_MJD)) * DAY_S


def _iso_text(mjd: int, seconds: float, scale: str, digits: int) -> str:
    length_s = DAY_S
    if scale == "utc":
        length_s = float(_utc_day_length_s(np.array([mjd]))[0])
    unit = 10**digits
    ticks = round(seconds * unit)
    if ticks < 0:
        mjd, ticks = mjd - 1, ticks + round(DAY_S) * unit
    elif ticks >= round(length_s * unit):
        mjd, ticks = mjd + 1, ticks - round(length_s * unit)
    whole, part = divmod(ticks, unit)
    minutes = min(whole // 60, 24 * 60 - 1)
    clock = f"{minutes // 60:02d}:{minutes % 60:02d}:{whole - 60 * minutes:02d}"
    decimals = f".{part:0{digits}d}" if digits else ""
    return f"{mjd_to_date(mjd)}T{clock}{decimals}{'Z' if scale == 'utc' else ''}"


def _shaped(values: ArrayLike, shape: tuple[int, ...]) -> Any:
    array = np.asarray(values)
    return array.reshape(shape) if shape else array.item()


def _plural(count: int, noun: str) -> str:
    return f"{count} {noun} lies" if count == 1 else f"{count} {noun}s lie"
