"""Numbers as people read them."""

import math

import pytest

from ngbound.rounding import (
    along,
    counted,
    down,
    is_number,
    length_text,
    percent,
    rounded,
    up,
    with_asymmetric_error,
    with_error,
)


@pytest.mark.parametrize(
    ("value", "outward", "text"),
    [
        (8.31e-10, "up", "8.4e-10"),
        (8.39e-10, "down", "8.3e-10"),
        (8.4e-10, "up", "8.4e-10"),
        (9.96e-10, "up", "1.0e-9"),
        (0.0, "up", "0"),
        (305.4, "down", "300"),
        (7.79e9, "down", "7.7e9"),
        (0.0314, "", "0.031"),
        (math.nan, "", "not available"),
    ],
)
def test_rounded(value, outward, text):
    assert rounded(value, 2, outward=outward) == text


def test_a_limit_is_never_printed_stronger_than_computed():
    for value in [1.234e-13, 9.9999e-8, 3.0000001e-9, 123.456, 0.5]:
        assert float(rounded(value, 2, outward="up")) >= value * (1 - 1e-8)
        assert float(rounded(value, 2, outward="down")) <= value * (1 + 1e-8)


@pytest.mark.parametrize(
    ("value", "error", "text"),
    [
        (2.6e-10, 0.17e-10, "(2.60 +- 0.17)e-10"),
        (1.41e-10, 9.86e-10, "(0.1 +- 1.0)e-9"),
        (-2.8e-10, 3.24e-10, "(-2.8 +- 3.2)e-10"),
        (12.345, 0.5, "12.3 +- 0.5"),
        (1.5, math.nan, "1.50"),
        (0.0, 2e-9, "(0.0 +- 2.0)e-9"),
    ],
)
def test_with_error(value, error, text):
    assert with_error(value, error) == text


def test_words():
    assert percent(0.95) == "95 %"
    assert percent(0.0027) == "0.27 %"
    assert percent(0.9973) == "99.73 %"
    assert counted(1, "night") == "1 night"
    assert counted(14000, "record") == "14 000 records"
    assert length_text(1234.0) == "1.2 km"
    assert with_asymmetric_error(2.6, 0.2, 0.4) == "2.60 (+0.40, -0.20)"
    assert not is_number(None) and not is_number(math.inf) and not is_number(True)


def test_bounds_and_directions_are_written_alike_everywhere():
    assert up(1.601e-9) == "1.7e-9"
    assert down(1.99e11) == "1.9e11"
    assert along("RTN", [-0.0012, 0.4371, -0.139]) == "(+0.00 R, +0.44 T, -0.14 N)"
