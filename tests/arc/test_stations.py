"""Stations."""

import math

import numpy as np
import pytest

from ngbound.arc import (
    Station,
    all_stations,
    geodetic_to_itrf_km,
    record_position_km,
    station,
    user_stations,
)
from ngbound.constants import AU_KM
from ngbound.errors import StationError

METRE = 1e-3


def test_kinds() -> None:
    assert station("F51").kind == "fixed"
    assert station("247").kind == station("270").kind == "roving"
    assert station("C51").kind == station("250").kind == station("275").kind == "space"
    assert station("500").kind == station("244").kind == "geocentre"
    assert len(all_stations()) > 2000


def test_parallax_constants_of_a_known_site() -> None:
    """Greenwich: latitude 51.4769 N, longitude 0 (from memory); parallax constants carry five
    decimals, 64 m."""
    expected = geodetic_to_itrf_km(0.0, 51.4769, 65.0)
    np.testing.assert_allclose(station("000").itrf_km, expected, atol=150 * METRE)


def test_geodetic_round_figures() -> None:
    np.testing.assert_allclose(geodetic_to_itrf_km(0.0, 0.0, 0.0), [6378.137, 0.0, 0.0], atol=1e-9)
    # polar radius of WGS84: NIMA TR8350.2, 6356752.3142 m
    np.testing.assert_allclose(
        geodetic_to_itrf_km(10.0, 90.0, 0.0)[2], 6356.7523142, atol=0.001 * METRE
    )
    np.testing.assert_allclose(
        geodetic_to_itrf_km([90.0], [0.0], [1000.0]), [[0.0, 6379.137, 0.0]], atol=1e-9
    )


@pytest.mark.parametrize("code", ["f51", "F5l", "ZZZ", "", "Kitt Peak"])
def test_unknown(code: str) -> None:
    with pytest.raises(StationError, match="Near matches") as caught:
        station(code)
    assert caught.value.data["near"]
    assert caught.value.exit_status == 2


def test_near_match_of_the_other_case_comes_first() -> None:
    with pytest.raises(StationError, match=r"Near matches: F51 \(Pan-STARRS"):
        station("f51")


def test_no_fixed_position() -> None:
    with pytest.raises(StationError, match="no fixed position"):
        _ = station("250").itrf_km
    assert station("250").to_dict()["longitude_deg"] is None
    assert "roving" in str(station("247"))
    assert "longitude 203.74409" in str(station("F51"))


def test_user_stations() -> None:
    own = user_stations(
        {"Q99": {"longitude_deg": 10.0, "latitude_deg": -30.0, "altitude_m": 500, "name": "Hut"}}
    )
    np.testing.assert_allclose(
        own["Q99"].itrf_km, geodetic_to_itrf_km(10.0, -30.0, 500.0), atol=1e-9
    )
    assert station("Q99", own).name == "Hut"
    assert user_stations(own) == own


@pytest.mark.parametrize(
    ("table", "words"),
    [
        ({"Q": {}}, "3 or 4"),
        ({"Q99": {"longitude_deg": 10.0, "latitude_deg": 0.0}}, "no altitude_m"),
        ({"Q99": {"longitude_deg": 1, "latitude_deg": 95.0, "altitude_m": 0}}, "from -90 to 90"),
        ({"Q99": {"longitude_deg": 1, "latitude_deg": "5", "altitude_m": 0}}, "must be a number"),
        (
            {"Q99": {"longitude_deg": 1, "latitude_deg": math.nan, "altitude_m": 0}},
            "must be a number",
        ),
        (
            {"Q99": {"longitude": 1, "longitude_deg": 1, "latitude_deg": 5, "altitude_m": 0}},
            "unknown key 'longitude'",
        ),
    ],
)
def test_user_stations_refused(table: dict, words: str) -> None:
    with pytest.raises(StationError, match=words):
        user_stations(table)


def test_positions_in_records() -> None:
    np.testing.assert_allclose(
        record_position_km("WGS84", [0.0], [0.0], [0.0]), [[6378.137, 0.0, 0.0]]
    )
    np.testing.assert_allclose(
        record_position_km("ITRF", [90.0], [5000.0], [10.0]), [[0.0, 5000.0, 10.0]], atol=1e-9
    )
    np.testing.assert_allclose(
        record_position_km("ICRF_KM", [1.0], [2.0], [3.0]), [[1.0, 2.0, 3.0]]
    )
    np.testing.assert_allclose(
        record_position_km("ICRF_AU", [1.0], [0.0], [0.0]), [[AU_KM, 0.0, 0.0]]
    )
    with pytest.raises(StationError, match="WGS84, ITRF"):
        record_position_km("IAU", [1.0], [0.0], [0.0])


def test_station_is_frozen() -> None:
    with pytest.raises(AttributeError):
        Station("A", "b", 0.0, 1.0, 0.0).code = "x"
