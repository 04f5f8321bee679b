"""Observers: fixed, roving, in space, at the geocentre."""

import time
from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest

from ngbound.arc import Station, geodetic_to_itrf_km, station
from ngbound.constants import AU_KM, AU_M, DAY_S
from ngbound.errors import NgboundError, StationError
from ngbound.sky import (
    itrf_to_gcrs,
    load_ephemeris,
    observer_states,
    station_states,
    utc_to_tdb_d,
)
from tests.units import km, metre

EPHEMERIS = load_ephemeris()
BLANK = {
    "utc_day": 57000,
    "utc_sec": 1000.0,
    "stn": "568",
    "site": "fixed",
    "sys": "",
    "ctr": np.nan,
    "pos1": np.nan,
    "pos2": np.nan,
    "pos3": np.nan,
    "line": 7,
}


def arc_of(*rows, stations=None):
    """Only what observer_states reads of an Arc: its table and the user's own stations."""
    table = pd.DataFrame([{**BLANK, **row} for row in rows])
    return SimpleNamespace(table=table, stations=stations or {})


def test_geodetic_sofa_vector():
    # SOFA/ERFA validation program t_erfa_c.c, t_gd2gc, WGS84.
    itrf_m = 1e3 * geodetic_to_itrf_km(np.degrees(3.1), np.degrees(-0.5), 2500.0)
    expected_m = [-5599000.5577049947, 233011.67223479203, -3040909.4706983363]
    assert np.abs(itrf_m - expected_m).max() < 1e-6


def test_fixed_station_is_its_parallax_constants():
    states = observer_states(arc_of({}), EPHEMERIS)
    place = station("568")
    longitude_rad = np.radians(place.longitude_deg)
    itrf_m = 6378137.0 * np.array(
        [
            place.rho_cos_phi * np.cos(longitude_rad),
            place.rho_cos_phi * np.sin(longitude_rad),
            place.rho_sin_phi,
        ]
    )
    tdb_d = np.array([utc_to_tdb_d(57000, 1000.0)])
    gcrs_m, gcrs_m_s = itrf_to_gcrs(itrf_m[None], tdb_d)
    earth_au, earth_au_d = EPHEMERIS.posvel("earth", tdb_d)
    assert states.tdb_d == tdb_d
    assert np.abs(states.geocentric_au - gcrs_m / AU_M).max() < 1e-3 * metre
    assert np.abs(states.position_au - earth_au - gcrs_m / AU_M).max() < 1e-3 * metre
    velocity_au_d = earth_au_d + gcrs_m_s * DAY_S / AU_M
    assert np.abs(states.velocity_au_d - velocity_au_d).max() < 1e-15
    # Maunakea: 4.2 km above an ellipsoid of 6378 to 6357 km.
    assert 6376 * km < np.linalg.norm(states.geocentric_au) < 6381 * km


def test_station_states_agrees_with_observer_states():
    rows = [{"utc_day": 57000 + i, "stn": code} for i, code in enumerate(("568", "500", "309"))]
    rows[1]["site"] = "geocentre"
    states = observer_states(arc_of(*rows), EPHEMERIS)
    for i, code in enumerate(("568", "500", "309")):
        single = station_states(code, states.tdb_d[i], EPHEMERIS)
        assert np.array_equal(single.position_au[0], states.position_au[i])
    assert np.all(states.geocentric_au[1] == 0.0)


def test_roving_wgs84_and_itrf():
    site = {"stn": "247", "site": "roving"}
    wgs84 = {**site, "sys": "WGS84", "pos1": 20.81, "pos2": -32.38, "pos3": 1770.0}
    itrf_m = 1e3 * geodetic_to_itrf_km(20.81, -32.38, 1770.0)
    axis_km = np.hypot(itrf_m[0], itrf_m[1]) / 1e3
    itrf = {**site, "sys": "ITRF", "pos1": 20.81, "pos2": axis_km, "pos3": itrf_m[2] / 1e3}
    states = observer_states(arc_of(wgs84, itrf), EPHEMERIS)
    assert np.abs(states.position_au[0] - states.position_au[1]).max() < 1e-3 * metre
    direct = station_states((20.81, -32.38, 1770.0), states.tdb_d[:1], EPHEMERIS)
    assert np.array_equal(direct.position_au[0], states.position_au[0])


def test_spacecraft_in_every_unit_and_centre():
    site = {"stn": "C51", "site": "space"}
    place_km = np.array([1234.5, -6543.25, 987.125])
    tdb_d = utc_to_tdb_d(57000, 1000.0)
    earth_au = EPHEMERIS.position_au("earth", tdb_d)

    def row(system, centre, place, velocity=None):
        numbers = dict(zip(("pos1", "pos2", "pos3"), place, strict=True))
        if velocity is not None:
            numbers |= dict(zip(("vel1", "vel2", "vel3"), velocity, strict=True))
        return {**site, "sys": system, "ctr": centre, **numbers}

    from_sun_au = earth_au + place_km / AU_KM - EPHEMERIS.position_au("sun", tdb_d)
    states = observer_states(
        arc_of(
            row("ICRF_KM", 399.0, place_km, (1.0, 2.0, -7.0)),
            row("ICRF_AU", "399", place_km / AU_KM),
            row("ICRF_KM", np.nan, place_km),
            row("ICRF_AU", 10, from_sun_au),
            row("ICRF_AU", "0", earth_au + place_km / AU_KM),
        ),
        EPHEMERIS,
    )
    assert np.abs(states.geocentric_au * AU_KM - place_km).max() * km < 0.1 * metre
    earth_au_d = EPHEMERIS.posvel("earth", tdb_d)[1]
    relative_km_s = (states.velocity_au_d - earth_au_d) * AU_KM / DAY_S
    assert np.abs(relative_km_s[0] - [1.0, 2.0, -7.0]).max() < 1e-9
    assert np.abs(relative_km_s[1:]).max() == 0.0


def test_users_own_station():
    own = {"Z99": Station("Z99", "garden", 0.0, 1.0, 0.0)}
    states = observer_states(arc_of({"stn": "Z99"}, stations=own), EPHEMERIS)
    other = station_states("Z99", states.tdb_d, EPHEMERIS, own_stations=own)
    assert np.array_equal(states.position_au, other.position_au)
    assert np.linalg.norm(states.geocentric_au) * AU_KM == pytest.approx(6378.137, abs=1e-6)


@pytest.mark.parametrize(
    ("row", "message"),
    [
        ({"site": "balloon"}, "site kind 'balloon' of line 7"),
        ({"stn": "C51"}, "C51.*has no fixed position"),
        ({"site": "roving", "stn": "247"}, "line 7 .station 247. has no complete place"),
        (
            {"site": "roving", "sys": "WGS84", "pos1": 0.0, "pos2": 95.0, "pos3": 0.0},
            "line 7.*latitude 95",
        ),
        (
            {"site": "roving", "sys": "WGS84", "pos1": 0.0, "pos2": 5.0, "pos3": 6378e3},
            "altitude 6378000.0 m",
        ),
        ({"site": "roving", "sys": "IAU", "pos1": 0, "pos2": 5, "pos3": 1}, "'IAU'.*not known"),
        ({"site": "space", "sys": "WGS84"}, "use ICRF_KM or ICRF_AU"),
        ({"site": "space", "sys": "ICRF_KM"}, "no complete place"),
        (
            {"site": "space", "sys": "ICRF_KM", "ctr": "-96", "pos1": 1, "pos2": 1, "pos3": 1},
            "centre '-96'",
        ),
        (
            {"site": "space", "sys": "ICRF_KM", "pos1": "x", "pos2": 1, "pos3": 1},
            "value 'x' of pos1",
        ),
    ],
)
def test_places_that_cannot_be_are_said(row, message):
    with pytest.raises(StationError, match=message):
        observer_states(arc_of(row), EPHEMERIS)


def test_station_states_refuses():
    with pytest.raises(StationError, match="no fixed position"):
        station_states("C51", 0.0, EPHEMERIS)
    with pytest.raises(StationError):
        station_states("ZZZ", 0.0, EPHEMERIS)
    with pytest.raises(StationError, match="neither a station code"):
        station_states((1.0, 2.0), 0.0, EPHEMERIS)
    with pytest.raises(NgboundError, match="outside the ephemeris"):
        station_states("500", 1e6, EPHEMERIS)


def test_empty_and_printing():
    empty = arc_of({})
    empty.table = empty.table.iloc[:0]
    assert len(observer_states(empty, EPHEMERIS)) == 0
    states = station_states("500", [0.0, 1.0], EPHEMERIS)
    assert str(states) == ("2 observer states from 2000-01-01T12:00:00 to 2000-01-02T12:00:00 TDB")
    assert states.to_dict()["tdb_d"] == [0.0, 1.0]
    assert "0 observer" in str(station_states("500", [], EPHEMERIS))


def test_many_observations_take_well_under_a_second():
    rng = np.random.default_rng(5)
    arc = arc_of(*({"utc_day": int(day)} for day in rng.integers(45000, 60000, 1401)))
    observer_states(arc_of({}), EPHEMERIS)
    start = time.process_time()
    states = observer_states(arc, EPHEMERIS)
    assert time.process_time() - start < 1.0
    assert np.all(np.isfinite(states.position_au))
