"""Text fields to numbers, whole columns at a time, with what the written digits say; imports numpy
and erfa.

A column of a million fields is turned into one byte matrix and judged with array operations, so
that the lexical rules of the standards cost little. Nothing here raises for bad text: the caller
gets masks and words the sentence, because only the caller knows file, line and column.
"""

from dataclasses import dataclass

import erfa
import numpy as np
from numpy.typing import NDArray

MJD_1970 = 40587
"""Modified Julian Day number of 1970-01-01."""

BoolArray = NDArray[np.bool_]
FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


def byte_matrix(texts: NDArray[np.object_]) -> tuple[NDArray[np.uint8], IntArray]:
    """Texts (n,) as bytes (n, w), zero-padded, and their lengths (n,); a non-ASCII character
    becomes ``?``."""
    try:
        packed = np.array(texts, dtype="S") if len(texts) else np.zeros(0, dtype="S1")
    except UnicodeEncodeError:
        packed = np.array([t.encode("ascii", "replace") for t in texts], dtype="S")
    width = max(packed.dtype.itemsize, 1)
    if packed.dtype.itemsize == 0:
        packed = packed.astype("S1")
    matrix = packed.view(np.uint8).reshape(len(packed), width)
    return matrix, np.char.str_len(packed).astype(np.int64)


def is_digit(matrix: NDArray[np.uint8]) -> BoolArray:
    """Where a byte is one of 0-9."""
    return (matrix >= 48) & (matrix <= 57)


@dataclass(frozen=True)
class Decimals:
    """A parsed column of decimal numbers: value (NaN where not ok) and lexical facts.

    ``places`` counts the digits after the point, ``width`` the characters without the sign.
    """

    value: FloatArray
    places: IntArray
    width: IntArray
    ok: BoolArray
    leading_zero: BoolArray
    plus: BoolArray
    bare_point: BoolArray


EXACT_DIGITS = 15
"""Digits that an int64 mantissa and a power of ten hold exactly as floats: their ratio is then
the correctly rounded value."""


def parse_decimals(texts: NDArray[np.object_]) -> Decimals:
    """Decimal numbers without exponent (n,): optional sign, digits, optional point."""
    matrix, length = byte_matrix(texts)
    n, width = matrix.shape
    turned = np.ascontiguousarray(matrix.T)
    minus, plus = turned[0] == 45, turned[0] == 43
    signed = (minus | plus).astype(np.int64)
    mantissa = np.zeros(n, dtype=np.int64)
    digits = np.zeros(n, dtype=np.int64)
    places = np.zeros(n, dtype=np.int64)
    points = np.zeros(n, dtype=np.int64)
    leading = np.zeros(n, dtype=bool)
    for j in range(width):
        byte = turned[j]
        digit = (byte >= 48) & (byte <= 57)
        if j < 2:
            leading |= (byte == 48) & (signed == j)
        if j < EXACT_DIGITS + 2:
            mantissa = np.where(digit, mantissa * 10 + (byte.astype(np.int64) - 48), mantissa)
        digits += digit
        places += digit & (points > 0)
        points += byte == 46
    ok = (digits + points + signed == length) & (points <= 1) & (digits >= 1)
    value = np.full(n, np.nan)
    short = ok & (digits <= EXACT_DIGITS)
    ratio = mantissa[short] / 10.0 ** places[short]
    value[short] = np.where(minus[short], -ratio, ratio)
    long = ok & ~short
    if long.any():
        value[long] = np.ascontiguousarray(matrix[long]).view(f"S{width}").ravel().astype(float)
    integer_digits = digits - places
    return Decimals(
        value=value,
        places=places,
        width=length - signed,
        ok=ok,
        leading_zero=ok & leading & (integer_digits > 1),
        plus=ok & plus,
        bare_point=ok & (integer_digits == 0),
    )


def parse_doubles(texts: NDArray[np.object_]) -> tuple[FloatArray, BoolArray]:
    """Numbers with an optional exponent (n,), and where they were finite numbers."""
    value = np.full(len(texts), np.nan)
    for i, text in enumerate(texts):
        if set(text) <= set("+-.0123456789eE"):
            try:
                value[i] = float(text)
            except ValueError:
                continue
    return value, np.isfinite(value)


def leap_second_days() -> IntArray:
    """MJD of the UTC days that ended in a leap second, from the table that ships with erfa (1972
    on)."""
    table = erfa.leap_seconds.get()
    table = table[(table["year"] > 1972) | ((table["year"] == 1972) & (table["month"] > 1))]
    return month_start(table["year"].astype(np.int64), table["month"].astype(np.int64)) - 1


def month_start(year: IntArray, month: IntArray) -> IntArray:
    """MJD of the first day of a month of the (proleptic) Gregorian calendar."""
    months = ((year - 1970) * 12 + month - 1).astype("datetime64[M]")
    return months.astype("datetime64[D]").astype(np.int64) + MJD_1970


def civil_day(year: IntArray, month: IntArray, day: IntArray) -> tuple[IntArray, BoolArray]:
    """MJD of calendar dates (n,), and where the date exists."""
    ok = (month >= 1) & (month <= 12) & (year >= 1)
    safe_month, safe_year = np.where(ok, month, 1), np.where(ok, year, 2000)
    start = month_start(safe_year, safe_month)
    following = month_start(safe_year + (safe_month == 12), safe_month % 12 + 1)
    ok &= (day >= 1) & (day <= following - start)
    return start + day - 1, ok


def calendar_date(mjd: IntArray) -> tuple[IntArray, IntArray, IntArray]:
    """Year, month and day of MJD day numbers."""
    days = (np.asarray(mjd) - MJD_1970).astype("datetime64[D]")
    months = days.astype("datetime64[M]")
    count = months.astype(np.int64)
    return count // 12 + 1970, count % 12 + 1, (days - months).astype(np.int64) + 1


@dataclass(frozen=True)
class Times:
    """Parsed UTC instants: day (MJD), second of the day, decimals of the second written, and what
    was wrong."""

    utc_day: IntArray
    utc_sec: FloatArray
    places: IntArray
    well_formed: BoolArray
    on_calendar: BoolArray


def parse_times(texts: NDArray[np.object_]) -> Times:
    """``YYYY-MM-DDThh:mm:ss[.f]Z`` (n,), with 24:00:00 taken as 0 h of the next day and leap
    seconds as 86400.x.

    A second ``:60`` is accepted on days that did end in a leap second and, as the ADES schema does,
    at the end of any June or December from 2017 on.
    """
    matrix, length = byte_matrix(texts)
    n, width = matrix.shape
    if width < 20:
        matrix = np.pad(matrix, ((0, 0), (0, 20 - width)))
        width = 20
    rows = np.arange(n)
    ok = length >= 20
    layout = np.frombuffer(b"9999-99-99T99:99:99", dtype=np.uint8)
    wants_digit = layout == 57
    head = matrix[:, :19]
    ok &= is_digit(head[:, wants_digit]).all(axis=1)
    ok &= (head[:, ~wants_digit] == layout[~wants_digit]).all(axis=1)
    last = np.maximum(length - 1, 0)
    ok &= matrix[rows, last] == 90
    tail = matrix[:, 19:].copy()
    tail[rows[ok], last[ok] - 19] = 0
    fraction_length = np.maximum(length - 20, 0)
    has_fraction = fraction_length > 0
    ok &= np.where(has_fraction, (tail[:, 0] == 46) & (fraction_length > 1), True)
    ok &= is_digit(tail[:, 1:]).sum(axis=1) == np.maximum(fraction_length - 1, 0)
    fraction = np.zeros(n)
    read = ok & has_fraction
    if read.any():
        figures = np.zeros(n, dtype=np.int64)
        for j in range(1, min(tail.shape[1], EXACT_DIGITS + 1)):
            byte = tail[:, j].astype(np.int64)
            figures = np.where(byte >= 48, figures * 10 + (byte - 48), figures)
        kept = np.minimum(fraction_length - 1, EXACT_DIGITS)
        fraction = np.where(read, figures / 10.0 ** np.maximum(kept, 0), 0.0)

    value = np.where(is_digit(head), head.astype(np.int64) - 48, 0)
    year = value[:, 0] * 1000 + value[:, 1] * 100 + value[:, 2] * 10 + value[:, 3]
    month, day = value[:, 5] * 10 + value[:, 6], value[:, 8] * 10 + value[:, 9]
    hour, minute = value[:, 11] * 10 + value[:, 12], value[:, 14] * 10 + value[:, 15]
    second = value[:, 17] * 10 + value[:, 18]
    mjd, on_calendar = civil_day(year, month, day)
    places = np.where(has_fraction, fraction_length - 1, 0)
    ordinary = (hour <= 23) & (minute <= 59) & (second <= 59)
    midnight = (hour == 24) & (minute == 0) & (second == 0) & (fraction == 0.0)
    sixty = (hour == 23) & (minute == 59) & (second == 60)
    leap = sixty & (
        np.isin(mjd, leap_second_days())
        | ((year >= 2017) & (month == 6) & (day == 30))
        | ((year >= 2017) & (month == 12) & (day == 31))
    )
    on_calendar &= ordinary | midnight | leap
    whole = hour * 3600 + minute * 60 + second
    exact = (whole * 1_000_000 + np.round(fraction * 1e6).astype(np.int64)) / 1e6
    utc_sec = np.where(places <= 6, exact, whole + fraction)
    utc_sec = np.where(midnight, 0.0, utc_sec)
    mjd = mjd + midnight
    return Times(mjd, utc_sec, places, ok, on_calendar)


def format_times(utc_day: IntArray, utc_sec: FloatArray, places: IntArray) -> NDArray[np.object_]:
    """ISO texts (n,) with the given decimals of a second; a second of 86400 or more is written as
    ``:60``."""
    micro = np.round(np.asarray(utc_sec) * 1e6).astype(np.int64)
    year, month, day = calendar_date(utc_day)
    whole, rest = micro // 1_000_000, micro % 1_000_000
    leap = np.maximum(whole - 86399, 0)
    whole = whole - leap
    out = np.empty(len(micro), dtype=object)
    for i in range(len(micro)):
        w = int(whole[i])
        text = (
            f"{year[i]:04d}-{month[i]:02d}-{day[i]:02d}T"
            f"{w // 3600:02d}:{w // 60 % 60:02d}:{w % 60 + int(leap[i]):02d}"
        )
        p = min(int(places[i]), 6)
        if p > 0:
            text += "." + f"{rest[i]:06d}"[:p]
        out[i] = text + "Z"
    return out


def plain_number(value: float, places: int | None = None) -> str:
    """A finite float as a decimal without exponent: shortest exact form, or with fixed
    ``places``."""
    if places is not None:
        text = f"{value:.{places}f}"
        return text[1:] if text.startswith("-") and float(text) == 0.0 else text
    return np.format_float_positional(value, trim="-")
