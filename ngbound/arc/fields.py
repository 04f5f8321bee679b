"""Text fields to numbers, whole columns at a time, with what the written digits say; imports numpy
and erfa.

A column of a million fields is turned into one byte matrix and judged with array operations, so
that the lexical rules of the standards cost little. Nothing here raises for bad text: the caller
gets masks and words the sentence, because only the caller knows file, line and column.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from dataclasses import fields as dataclass_fields
from typing import Any

import erfa
import numpy as np
from numpy.typing import NDArray

MJD_1970 = 40587
"""Modified Julian Day number of 1970-01-01."""

BoolArray = NDArray[np.bool_]
FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


LONGEST = 80
"""Characters of a number or an instant beyond which it is not looked at: no form allows as many."""


@dataclass(frozen=True, eq=False)
class Packed:
    """A column of texts as bytes: ``turned`` (w, n), zero-padded, and ``length`` (n,)."""

    turned: NDArray[np.uint8]
    length: IntArray

    def __len__(self) -> int:
        return len(self.length)

    def take(self, rows: NDArray[Any]) -> "Packed":
        """The texts of some rows (positions or mask)."""
        return Packed(self.turned[:, rows], self.length[rows])

    def texts(self) -> NDArray[np.object_]:
        """The texts (n,) themselves."""
        width, n = self.turned.shape
        lines = np.full((n, width + 1), 10, dtype=np.uint8)
        lines[:, :width] = self.turned.T
        if n and int(self.length.min()) < width:
            lines = lines[lines != 0]
        flat = lines.tobytes().decode("utf-8")
        out = np.empty(n, dtype=object)
        out[:] = flat.split("\n")[:-1]
        return out


def join_packed(parts: Sequence[Packed | None], sizes: Sequence[int]) -> Packed:
    """Columns as bytes under one another, empty where a part has none."""
    width = max(len(part.turned) for part in parts if part is not None)
    turned = np.zeros((width, sum(sizes)), dtype=np.uint8)
    length = np.zeros(sum(sizes), dtype=np.int64)
    at = 0
    for part, size in zip(parts, sizes, strict=True):
        if part is not None:
            turned[: len(part.turned), at : at + size] = part.turned
            length[at : at + size] = part.length
        at += size
    return Packed(turned, length)


def pack(texts: NDArray[np.object_]) -> Packed:
    """Texts (n,) as bytes; a character that is not ASCII becomes ``?``, and so does a text of more
    than `LONGEST` characters."""
    cut = [t if len(t) <= LONGEST else "?" for t in texts]
    try:
        packed = np.array(cut, dtype="S") if cut else np.zeros(0, dtype="S1")
    except UnicodeEncodeError:
        packed = np.array([t.encode("ascii", "replace") for t in cut], dtype="S")
    if packed.dtype.itemsize == 0:
        packed = packed.astype("S1")
    width = packed.dtype.itemsize
    matrix = packed.view(np.uint8).reshape(len(packed), width)
    return Packed(np.ascontiguousarray(matrix.T), np.char.str_len(packed).astype(np.int64))


def is_digit(matrix: NDArray[np.uint8]) -> BoolArray:
    """Where a byte is one of 0-9."""
    return (matrix >= 48) & (matrix <= 57)


@dataclass(frozen=True)
class Decimals:
    """A parsed column of decimal numbers: value (NaN where not ok) and lexical facts.

    ``places`` counts the digits after the point, ``width`` the characters without the sign;
    ``point`` tells where a point stands, ``bare_point`` where no digit stands before it.
    """

    value: FloatArray
    places: IntArray
    width: IntArray
    ok: BoolArray
    leading_zero: BoolArray
    plus: BoolArray
    minus: BoolArray
    point: BoolArray
    bare_point: BoolArray

    def take(self, rows: NDArray[Any]) -> "Decimals":
        """The facts of some rows (positions, which may repeat)."""
        return Decimals(**{f.name: getattr(self, f.name)[rows] for f in dataclass_fields(self)})


EXACT_DIGITS = 15
"""Digits that an int64 mantissa and a power of ten hold exactly as floats: their ratio is then
the correctly rounded value."""
_POWERS = 10.0 ** np.arange(EXACT_DIGITS + 1)


def parse_decimals(texts: NDArray[np.object_] | Packed) -> Decimals:
    """Decimal numbers without exponent (n,): optional sign, digits, optional point."""
    packed = texts if isinstance(texts, Packed) else pack(texts)
    turned, length = packed.turned, packed.length
    n, width = len(packed), len(turned)
    minus, plus = turned[0] == 45, turned[0] == 43
    signed = minus | plus
    mantissa = np.zeros(n, dtype=np.int64)
    digits = np.zeros(n, dtype=np.uint8)
    places = np.zeros(n, dtype=np.uint8)
    points = np.zeros(n, dtype=np.uint8)
    leading = np.zeros(n, dtype=bool)
    for j in range(width):
        byte = turned[j] - np.uint8(48)
        digit = byte <= 9
        if j < 2:
            leading |= (byte == 0) & (signed == j)
        if j < EXACT_DIGITS + 2:
            np.multiply(mantissa, 10, out=mantissa, where=digit)
            np.add(mantissa, byte, out=mantissa, where=digit)
        digits += digit
        places += digit & (points > 0)
        points += turned[j] == 46
    ok = (digits + points + signed == length) & (points <= 1) & (digits >= 1)
    value = np.full(n, np.nan)
    short = ok & (digits <= EXACT_DIGITS)
    np.divide(mantissa, _POWERS[np.minimum(places, EXACT_DIGITS)], out=value, where=short)
    np.negative(value, out=value, where=short & minus)
    long = ok & ~short
    if long.any():
        some = np.ascontiguousarray(turned[:, long].T)
        value[long] = some.view(f"S{width}").ravel().astype(float)
    integer_digits = digits - places
    return Decimals(
        value=value,
        places=places.astype(np.int64),
        width=length - signed,
        ok=ok,
        leading_zero=ok & leading & (integer_digits > 1),
        plus=ok & plus,
        minus=ok & minus,
        point=points > 0,
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
    count = np.where(ok, year * 12 + month - 1, 24000)
    first = int(count.min()) if len(count) else 24000
    span = (int(count.max()) if len(count) else 24000) - first + 2
    if span <= 200_000:  # a table of month starts is quicker than the calendar of numpy
        months = np.arange(first, first + span)
        starts = month_start(months // 12, months % 12 + 1)
        start, following = starts[count - first], starts[count - first + 1]
    else:
        start = month_start(count // 12, count % 12 + 1)
        following = month_start((count + 1) // 12, (count + 1) % 12 + 1)
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
    leap: BoolArray


def parse_times(texts: NDArray[np.object_] | Packed) -> Times:
    """``YYYY-MM-DDThh:mm:ss[.f]Z`` (n,), with 24:00:00 taken as 0 h of the next day and leap
    seconds as 86400.x.

    A second ``:60`` is accepted on days that did end in a leap second and, as the ADES schema does,
    at the end of any June or December from 2017 on.
    """
    packed = texts if isinstance(texts, Packed) else pack(texts)
    turned, length = packed.turned, packed.length
    n = len(packed)
    if len(turned) < 20:
        turned = np.vstack([turned, np.zeros((20 - len(turned), n), dtype=np.uint8)])
    ok = length >= 20
    for j, wanted in enumerate(b"9999-99-99T99:99:99"):
        ok &= is_digit(turned[j]) if wanted == 57 else turned[j] == wanted
    figures = np.zeros(n, dtype=np.int64)
    inside = length - 1
    for j in range(20, len(turned)):
        digit = is_digit(turned[j])
        ok &= digit | (j >= inside)
        if j < 20 + EXACT_DIGITS:
            read = digit & (j < inside)
            np.multiply(figures, 10, out=figures, where=read)
            np.add(figures, turned[j] - np.uint8(48), out=figures, where=read)
    last = turned[np.clip(length - 1, 0, len(turned) - 1), np.arange(n)]
    ok &= last == 90
    has_fraction = length > 20
    ok &= ~has_fraction | ((turned[19] == 46) & (length > 21))
    places = np.where(has_fraction & ok, length - 21, 0)
    fraction = np.where(has_fraction & ok, figures / _POWERS[np.clip(places, 0, EXACT_DIGITS)], 0.0)

    def number(*at: int) -> IntArray:
        value = np.zeros(n, dtype=np.int64)
        for j in at:
            value = value * 10 + np.where(is_digit(turned[j]), turned[j] - np.uint8(48), 0)
        return value

    year, month, day = number(0, 1, 2, 3), number(5, 6), number(8, 9)
    hour, minute, second = number(11, 12), number(14, 15), number(17, 18)
    mjd, on_calendar = civil_day(year, month, day)
    ordinary = (hour <= 23) & (minute <= 59) & (second <= 59)
    if not ordinary.all():
        midnight = (hour == 24) & (minute == 0) & (second == 0) & (fraction == 0.0)
        leap = (hour == 23) & (minute == 59) & (second == 60)
        leap &= (
            np.isin(mjd, leap_second_days())
            | ((year >= 2017) & (month == 6) & (day == 30))
            | ((year >= 2017) & (month == 12) & (day == 31))
        )
        ordinary |= midnight | leap
    else:
        midnight = leap = np.zeros(n, dtype=bool)
    on_calendar &= ordinary
    whole = hour * 3600 + minute * 60 + second
    exact = (whole * 1_000_000 + np.round(fraction * 1e6).astype(np.int64)) / 1e6
    utc_sec = np.where(places <= 6, exact, whole + fraction)
    utc_sec[midnight] = 0.0
    mjd = mjd + midnight
    return Times(mjd, utc_sec, places, ok, on_calendar, leap)


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


def shortest_double(value: float, width: int) -> str:
    """The shortest decimal or exponential form of a finite float that reads back as the same
    number; rounded when it would take more than ``width`` characters without the sign."""
    for precision in range(17, 0, -1):
        rounded = float(f"{value:.{precision - 1}e}") if precision < 17 else value
        text = _shortest(abs(rounded))
        if len(text) <= width:
            return f"-{text}" if rounded < 0.0 else text
    return plain_number(value)


def _shortest(value: float) -> str:
    if value == 0.0:
        return "0"
    plain = plain_number(value)
    mantissa, _, power = np.format_float_scientific(value, trim="-").partition("e")
    digits = mantissa.replace(".", "")
    forms = [plain, plain.removeprefix("0") if "." in plain else plain]
    for before in range(len(digits) + 1):
        exponent = int(power) + 1 - before
        after = digits[before:]
        forms.append(f"{digits[:before]}{'.' if after else ''}{after}e{exponent}")
    return min(forms, key=len)


def fitted_decimal(value: float, places: int, width: int) -> str:
    """The shortest exact decimal of a finite float, rounded when it has more than ``places``
    decimals or more than ``width`` characters without the sign (0: no limit)."""
    text = plain_number(value)
    whole, point, after = text.lstrip("-").partition(".")
    room = places if not width else min(places, max(width - len(whole) - 1, 0))
    return plain_number(value, room) if point and len(after) > room else text
