"""The Arc itself and data frames."""

import json

import numpy as np
import pandas as pd
import pytest

from ngbound.arc import Arc
from ngbound.errors import ArcError, StationError
from tests.arc.samples import frame


def test_from_frame() -> None:
    arc = Arc.from_frame(frame(6))
    assert len(arc) == 6 and arc.name == "654321" and arc.table.use.all()
    np.testing.assert_array_equal(arc.table.digits_ra_arcsec, 0.0)  # numbers state no precision
    np.testing.assert_array_equal(arc.table.digits_time_s, 1.0)  # the time was text
    assert arc.table.kind.tolist() == ["optical"] * 6
    told = arc.to_dict()
    assert json.loads(json.dumps(told))["n_usable"] == 6
    assert (told["first_day"], told["last_day"]) == ("2024-03-01", "2024-03-02")
    assert "6 observations from 1 station, 2024-03-01 to 2024-03-02 (1.0 d)" in str(arc)


def test_from_frame_texts_state_a_precision() -> None:
    arc = Arc.from_frame(frame(2, ra="120.12", dec="60.123"))
    np.testing.assert_allclose(arc.table.digits_ra_arcsec, 36.0 * np.cos(np.radians(60.123)))
    np.testing.assert_allclose(arc.table.digits_dec_arcsec, 3.6)


@pytest.mark.parametrize("zone", [None, "UTC", "Asia/Tokyo"])
def test_from_frame_timestamps(zone: str | None) -> None:
    stamps = pd.Series(pd.to_datetime(["2024-03-01T00:00:00.125", "2024-03-01T12:00:00.000"]))
    if zone:
        stamps = stamps.dt.tz_localize("UTC").dt.tz_convert(zone)
    arc = Arc.from_frame(frame(2, obsTime=stamps))
    assert arc.table.utc_sec.tolist() == [0.125, 43200.0] and arc.table.utc_day.tolist() == [
        60370,
        60370,
    ]
    np.testing.assert_array_equal(arc.table.digits_time_s, 0.0)


def test_an_arc_through_its_own_table() -> None:
    arc = Arc.from_frame(
        frame(4, rmsRA=0.25, mag=[19.0, np.nan, 20.0, 21.0], band=["V", None, "V", "V"])
    )
    again = Arc.from_frame(arc.table)
    pd.testing.assert_frame_equal(arc.table, again.table, check_like=True)


def test_names() -> None:
    assert Arc.from_frame(frame(2).drop(columns="permID")).name == "unnamed object"
    assert Arc.from_frame(frame(2), name="Peter").name == "Peter"
    mixed = frame(4, permID=["1", "1", "2", "2"])
    with pytest.raises(ArcError, match="2 objects in it: 1 .2., 2 .2."):
        Arc.from_frame(mixed)
    assert len(Arc.from_frame(mixed, object="(2)")) == 2


def test_used_is_sorted_and_select_keeps_rows() -> None:
    arc = Arc.from_frame(frame(4).iloc[::-1])
    used = arc.used
    assert np.all(np.diff(used.table.utc_day * 86400.0 + used.table.utc_sec) > 0)
    assert used.used.table.equals(used.table)
    part = arc.select(np.array([True, False, True, False]))
    assert part.table.line.tolist() == [0, 2]
    assert arc.select([3]).table.line.tolist() == [3]
    with pytest.raises(ArcError, match="2 entries, the arc 4 rows"):
        arc.select(np.array([True, False]))


def test_own_stations_travel_with_the_arc() -> None:
    own = {"Q99": {"longitude_deg": 1.0, "latitude_deg": 2.0, "altitude_m": 3.0}}
    with pytest.raises(ArcError, match="row 0, column stn: the station 'Q99'"):
        Arc.from_frame(frame(2, stn="Q99"))
    arc = Arc.from_frame(frame(2, stn="Q99"), stations=own)
    assert arc.used.select([0]).station("Q99").longitude_deg == 1.0
    with pytest.raises(StationError):
        Arc.from_frame(frame(2, stn="Q99"), stations={"Q99": {}})


@pytest.mark.parametrize(
    ("columns", "words"),
    [
        ({"ra": 360.0}, "row 0, column ra: the value '360'"),
        ({"ra": -0.1}, "from 0 to below 360 deg"),
        ({"dec": 90.1}, "column dec.*exchanged"),
        ({"dec": [1.0, np.nan]}, "row 1, column dec"),
        ({"ra": np.inf}, "column ra"),
        ({"obsTime": "yesterday"}, "column obsTime: the value 'yesterday'"),
        ({"obsTime": pd.NaT}, "column obsTime"),
        ({"stn": "99999"}, "column stn: the station '99999'"),
        ({"rmsRA": -1.0}, "column rmsRA: the value '-1'"),
        ({"RA": 1.0}, "'RA' is not an ADES column; near matches:.*rmsRA"),
        ({"kind": "optic"}, "kind 'optic' is not a kind"),
        ({"mode": ""}, "column mode: the value is missing"),
    ],
)
def test_bad_frames(columns: dict, words: str) -> None:
    with pytest.raises(ArcError, match=words):
        Arc.from_frame(frame(2, **columns))


def test_missing_and_empty() -> None:
    with pytest.raises(ArcError, match="column stn is missing.*Add the column"):
        Arc.from_frame(frame(2).drop(columns="stn"))
    with pytest.raises(ArcError, match="no rows"):
        Arc.from_frame(frame(2).iloc[:0])


def test_the_star_of_an_occultation_given_as_numbers_states_no_precision() -> None:
    table = frame(3).assign(raStar=10.0, decStar=20.0, deltaRA=1.0, deltaDec=0.0, mode="OCC")
    table = table.drop(columns=["ra", "dec"])
    arc = Arc.from_frame(table)
    assert arc.table.kind.tolist() == ["occultation"] * 3
    assert (arc.table.digits_ra_arcsec == 0.0).all() and (arc.table.digits_dec_arcsec == 0.0).all()
    np.testing.assert_allclose(arc.table.ra, 10.0 + 1.0 / 3600.0 / np.cos(np.radians(20.0)))
    as_text = Arc.from_frame(table.assign(raStar="10.00000", decStar="20.0000"))
    np.testing.assert_allclose(as_text.table.digits_dec_arcsec, 0.36)
