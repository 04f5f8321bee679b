"""Text columns to numbers."""

import datetime

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from ngbound.arc import fields


def column(*texts: str) -> np.ndarray:
    return np.array(texts, dtype=object)


def test_decimals() -> None:
    got = fields.parse_decimals(
        column("1.50", "-0.25", "+3", ".5", "5.", "05.5", "", "-", ".", "1.2.3", "1e5", "nan", "٣")
    )
    np.testing.assert_array_equal(got.ok, [True] * 6 + [False] * 7)
    np.testing.assert_array_equal(got.value[:6], [1.5, -0.25, 3.0, 0.5, 5.0, 5.5])
    np.testing.assert_array_equal(got.places[:6], [2, 2, 0, 1, 0, 1])
    np.testing.assert_array_equal(got.leading_zero[:6], [False] * 5 + [True])
    np.testing.assert_array_equal(got.bare_point[:6], [False, False, False, True, False, False])
    assert got.plus[2] and not got.plus[0]


@given(
    st.decimals(
        allow_nan=False, allow_infinity=False, min_value=-(10**6), max_value=10**6, places=9
    )
)
def test_decimals_are_read_to_the_last_bit(number: object) -> None:
    text = f"{number:f}"
    assert fields.parse_decimals(column(text, "0.1", "-123456789.1234567890123")).value[0] == float(
        text
    )


@given(st.datetimes(datetime.datetime(1800, 1, 1), datetime.datetime(2200, 1, 1)))
def test_times_against_datetime(when: datetime.datetime) -> None:
    text = when.strftime("%Y-%m-%dT%H:%M:%S.%f").rjust(26, "0") + "Z"
    got = fields.parse_times(column(text))
    assert got.well_formed[0] and got.on_calendar[0]
    day = (when.date() - datetime.date(1858, 11, 17)).days
    second = (when - datetime.datetime.combine(when.date(), datetime.time())).total_seconds()
    assert (got.utc_day[0], got.utc_sec[0]) == (day, second)
    assert fields.format_times(got.utc_day, got.utc_sec, got.places)[0] == text


@pytest.mark.parametrize(
    ("text", "day", "second"),
    [
        ("2016-12-31T23:59:60Z", 57753, 86400.0),
        ("2016-12-31T23:59:60.5Z", 57753, 86400.5),
        ("1972-06-30T23:59:60Z", 41498, 86400.0),
        ("2016-12-31T24:00:00Z", 57754, 0.0),
        ("2024-02-29T00:00:00Z", 60369, 0.0),
        ("2030-06-30T23:59:60Z", 62682, 86400.0),  # the standard accepts it
    ],
)
def test_leap_seconds_and_midnight(text: str, day: int, second: float) -> None:
    got = fields.parse_times(column(text))
    assert got.on_calendar[0]
    assert (got.utc_day[0], got.utc_sec[0]) == (day, second)


@pytest.mark.parametrize(
    "text",
    [
        "2023-02-29T00:00:00Z",
        "2024-13-01T00:00:00Z",
        "2024-01-01T25:00:00Z",
        "2024-01-01T00:60:00Z",
        "2024-03-31T23:59:60Z",
        "2016-12-31T24:00:01Z",
        "2015-12-31T23:59:60Z",
        "0000-01-01T00:00:00Z",
    ],
)
def test_not_on_the_calendar(text: str) -> None:
    got = fields.parse_times(column(text))
    assert got.well_formed[0] and not got.on_calendar[0]


@pytest.mark.parametrize(
    "text",
    [
        "2024-01-01T00:00:00",
        "2024-01-01 00:00:00Z",
        "2024-01-01T00:00:00.Z",
        "24-01-01T00:00:00Z",
        "",
        "2024-01-01T00:00Z",
        "2024-01-01T00:00:00z",
        "2024-01-01T00:00:00+00:00",
        "2024-01-01T00:00:00.1x2Z",
    ],
)
def test_not_a_time(text: str) -> None:
    assert not fields.parse_times(column(text, "2024-01-01T00:00:00Z")).well_formed[0]


def test_plain_numbers() -> None:
    assert fields.plain_number(1e-5) == "0.00001"
    assert fields.plain_number(-0.0, 3) == "0.000"
    assert fields.plain_number(1.25, 1) == "1.2"
    assert fields.plain_number(3.0) == "3"


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_doubles_come_back(value: float) -> None:
    assert float(fields.shortest_double(value, 400)) == value


@pytest.mark.parametrize(
    ("value", "width", "text"),
    [
        (1e-5, 6, "1e-5"),
        (1.23e-7, 6, "123e-9"),
        (-0.25, 6, "-.25"),
        (0.0, 6, "0"),
        (12345.678, 6, "12346"),
        (1.23456789, 6, "1.2346"),
        (1e22, 20, "1e22"),
    ],
)
def test_doubles_are_written_short(value: float, width: int, text: str) -> None:
    assert fields.shortest_double(value, width) == text


@pytest.mark.parametrize(
    ("value", "places", "width", "text"),
    [
        (0.1, 99, 7, "0.1"),
        (0.123456789, 99, 7, "0.12346"),
        (-0.123456789, 99, 7, "-0.12346"),
        (12.0, 9, 0, "12"),
        (1.0 / 3.0, 3, 0, "0.333"),
        (123456.7, 99, 6, "123457"),
    ],
)
def test_decimals_are_fitted(value: float, places: int, width: int, text: str) -> None:
    assert fields.fitted_decimal(value, places, width) == text
