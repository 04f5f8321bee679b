"""Findings."""

import re
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from ngbound.arc import Arc, read_arc, vet
from ngbound.arc.time_stamps import time_shifts
from ngbound.sky import astrometric, load_ephemeris, station_states, utc_to_tdb_d
from tests.arc.samples import frame

DEMO = Path(__file__).parents[2] / "data_demo"


def kinds(table: pd.DataFrame) -> list[tuple[str, tuple[int, ...]]]:
    return [(f.kind, f.rows) for f in vet(Arc.from_frame(table))]


def two_stations(n: int = 6) -> pd.DataFrame:
    table = frame(n)
    table["stn"] = ["G96" if i < n // 2 else "703" for i in range(n)]
    return table


def test_nothing_to_say() -> None:
    assert kinds(two_stations()) == []


def test_duplicates() -> None:
    table = two_stations()
    again = table.iloc[[1]].assign(obsTime="2024-03-01T03:20:01.5Z")
    near = table.iloc[[4]].assign(ra=lambda t: t.ra + 1.0 / 3600)
    assert kinds(pd.concat([table, again, near])) == [
        ("exact-duplicate", (1, 6)),
        ("near-duplicate", (4, 7)),
    ]


def test_another_station_is_no_duplicate() -> None:
    table = two_stations()
    assert kinds(pd.concat([table, table.iloc[[1]].assign(stn="703")])) == []


def test_impossible_rate() -> None:
    table = frame(9)
    table["stn"] = ["G96"] * 6 + ["703"] * 3
    table.loc[4, "dec"] += 1.0
    found = [f for f in vet(Arc.from_frame(table)) if f.kind == "impossible-rate"]
    assert [f.rows for f in found] == [(3, 4), (4, 5)]
    assert "arcsec" in found[0].sentence and found[0].to_dict()["rows"] == [3, 4]


def test_fast_but_steady_motion_is_possible() -> None:
    table = two_stations()
    minutes = np.array([0, 20, 40, 1440, 1460, 1480])
    table["dec"] = 10.0 + 15.0 * minutes / 1440.0
    assert kinds(table) == []


def test_across_the_seam_of_right_ascension() -> None:
    table = two_stations(6)
    table["ra"] = [359.99, 359.995, 0.0, 0.3, 0.305, 0.31]
    assert kinds(table) == []


def test_few_and_single() -> None:
    assert [k for k, _ in kinds(frame(2))] == ["few-observations"]
    assert [k for k, _ in kinds(frame(6))] == ["single-station"]


@pytest.mark.parametrize(
    ("stn", "system", "good", "bad"),
    [
        ("247", "WGS84", (190.0, -45.0, 100.0), (-45.0, 190.0, 100.0)),
        ("247", "WGS84", (190.0, -45.0, 8000.0), (190.0, -45.0, 6.4e6)),
        ("247", "ITRF", (10.0, 4500.0, 4500.0), (10.0, 4.5e6, 4.5e6)),
        ("250", "ICRF_KM", (0.0, -7000.0, 0.0), (0.0, -7000.0 / 1.496e8, 0.0)),
        ("250", "ICRF_AU", (0.0, -0.01, 0.0), (0.0, -7000.0, 0.0)),
    ],
)
def test_positions_in_another_unit(
    stn: str, system: str, good: tuple[float, ...], bad: tuple[float, ...]
) -> None:
    table = two_stations().assign(sys="", ctr=np.nan, pos1=np.nan, pos2=np.nan, pos3=np.nan)
    table.loc[2:4, "stn"] = stn
    for rows, place in ((2, good), (3, bad), (4, bad)):
        table.loc[rows, ["pos1", "pos2", "pos3"]] = place
        table.loc[rows, ["sys", "ctr"]] = (system, 399)
    found = [f for f in vet(Arc.from_frame(table)) if f.kind == "impossible-position"]
    assert [f.rows for f in found] == [(3, 4)]
    assert str(found[0]).startswith(f"impossible-position: 2 records of station {stn}, the first")


def test_surplus_position() -> None:
    place = {"sys": "WGS84", "ctr": 399, "pos1": -110.789, "pos2": 32.443, "pos3": 2510.0}
    table = two_stations().assign(**place)
    found = vet(Arc.from_frame(table))
    assert [(f.kind, f.rows) for f in found] == [
        ("surplus-position", (0, 1, 2)),
        ("surplus-position", (3, 4, 5)),
    ]
    assert str(found[0]).startswith("surplus-position: 3 records of the fixed station G96")
    assert re.search(r" 0\.\d km apart, which no thrust feels\.$", found[0].sentence)
    assert re.search(r" \d\.\d km apart: if the record is right, the parallax", found[1].sentence)


def test_a_position_in_space_beside_the_code_of_a_fixed_station() -> None:
    place = {"sys": ["", "", "ICRF_KM", "", "", ""], "pos1": 7000.0, "pos2": 1.0, "pos3": 1.0}
    arc = Arc.from_frame(two_stations().assign(ctr=399, **place))
    assert arc.table.site.tolist() == ["fixed"] * 2 + ["space"] + ["fixed"] * 3
    found = vet(arc)
    assert [(f.kind, f.rows) for f in found] == [("surplus-position", (2,))]
    assert "used in place of the list" in found[0].sentence and "thrust" in found[0].sentence


def long_path(n_nights: int = 12) -> pd.DataFrame:
    """Three observations a night from two stations in turn, a night a week, 0.4 deg a day."""
    t0 = np.datetime64("2024-03-01T03:00:00")
    minutes = np.array([7 * 1440 * k + 20 * i for k in range(n_nights) for i in range(3)])
    days = minutes / 1440.0
    return pd.DataFrame(
        {
            "permID": "654321",
            "mode": "CCD",
            "stn": ["G96" if k % 2 else "703" for k in range(n_nights) for _ in range(3)],
            "obsTime": [str(t0 + np.timedelta64(int(m), "m")) + "Z" for m in minutes],
            "ra": 120.0 + 0.4 * days,
            "dec": 10.0 + 0.1 * days,
            "astCat": "Gaia2",
        }
    )


def found(table: pd.DataFrame, kind: str) -> list[tuple[int, ...]]:
    return [f.rows for f in vet(Arc.from_frame(table)) if f.kind == kind]


def test_nothing_is_misread_on_a_clean_path() -> None:
    assert kinds(long_path()) == []


def test_hours_for_degrees() -> None:
    table = long_path()
    table.loc[12:14, "ra"] /= 15.0
    assert found(table, "ra-in-hours") == [(12, 13, 14)]
    told = [f for f in vet(Arc.from_frame(table)) if f.kind == "ra-in-hours"][0]
    assert "taken as hours" in told.sentence and "thrust" in told.sentence
    table = long_path()
    table["ra"] = table["ra"] - 119.0  # near zero hours, where 15 times the value is in range
    table.loc[15:17, "ra"] *= 15.0
    assert found(table, "ra-in-degrees") == [(15, 16, 17)]


def test_a_lost_sign() -> None:
    table = long_path()
    table.loc[20, "dec"] *= -1.0
    assert found(table, "declination-sign") == [(20,)]
    table.loc[0:2, "dec"] *= -1.0
    assert found(table, "declination-sign") == [(0, 1, 2), (20,)]


def test_a_wild_position_is_not_called_misread() -> None:
    table = long_path()
    table.loc[12:14, "ra"] += 40.0
    assert not any(found(table, k) for k in ("ra-in-hours", "ra-in-degrees", "declination-sign"))


def test_two_objects_in_one_night() -> None:
    table = long_path()
    other = table.iloc[12:14].assign(dec=lambda t: t.dec + 0.3, ra=lambda t: t.ra - 0.2)
    both = pd.concat([table, other], ignore_index=True)
    assert found(both, "second-object") == [(36, 37)]
    # from another station it may be the parallax
    assert found(both.assign(stn=[*table["stn"], "W84", "W84"]), "second-object") == []


def test_roving_observers_under_one_code_are_several() -> None:
    """Two places are no single station, and see no duplicates of each other."""
    place = {"sys": "WGS84", "ctr": 399, "pos2": 45.0, "pos3": 100.0}
    table = frame(6, stn="247").assign(pos1=[10.0] * 3 + [30.0] * 3, **place)
    assert kinds(table) == []
    assert [k for k, _ in kinds(table.assign(pos1=10.0))] == ["single-station"]
    twice = pd.concat([table, table.iloc[[1]].assign(pos1=30.0)], ignore_index=True)
    assert kinds(twice) == []
    assert kinds(pd.concat([table, table.iloc[[1]]])) == [("exact-duplicate", (1, 6))]


def test_the_parallax_of_a_spacecraft_is_not_misread() -> None:
    """A craft sees the object 25 deg away from where the ground does; taken as hours its right
    ascension may happen to fall near the ground's."""
    table = long_path().assign(sys="", ctr=np.nan, pos1=np.nan, pos2=np.nan, pos3=np.nan)
    craft = (table["stn"] == "G96") & (table.index >= 15) & (table.index < 24)
    table.loc[craft, "stn"] = "LTN"
    table.loc[craft, "sys"] = "ICRF_KM"
    table.loc[craft, ["ctr", "pos1", "pos2", "pos3"]] = [399.0, 4e7, 1e7, 1e6]
    table.loc[craft, "ra"] += 25.0
    assert kinds(table) == []
    table["ra"] = np.where(craft, (table["ra"] - 25.0) / 15.0, table["ra"])
    assert not any(k.startswith("ra-in") for k, _ in kinds(table))


@pytest.mark.parametrize("path", ["quiet", "pushed"])
def test_every_fault_is_found_in_the_demo_and_nothing_else(path: str) -> None:
    """One fault after the other in an arc of 317 records from three sites and a spacecraft."""
    arc = read_arc(DEMO / f"{path}.psv")
    assert vet(arc) == []
    t = arc.table
    n, visit = len(t), [0, 1, 2]

    def moved(rows: list[int], **by: Callable[[float], float]) -> pd.DataFrame:
        made = t.copy()
        for axis, change in by.items():
            made.loc[rows, axis] = made.loc[rows, axis].map(change)
            made.loc[rows, f"{axis}_rad"] = np.radians(made.loc[rows, axis])
        return made

    def more(rows: list[int], dec_deg: float = 0.0, later_s: float = 0.0) -> pd.DataFrame:
        new = t.iloc[rows].assign(utc_sec=lambda x: x.utc_sec + later_s)
        new = new.assign(dec=new.dec + dec_deg, dec_rad=np.radians(new.dec + dec_deg))
        return pd.concat([t, new], ignore_index=True)

    cases: list[tuple[str, pd.DataFrame, set[int], set[str]]] = [
        ("exact-duplicate", more([5], later_s=1.0), {5, n}, set()),
        ("near-duplicate", more([5], dec_deg=0.5 / 3600.0), {5, n}, set()),
        ("impossible-rate", moved([1], dec=lambda d: d + 0.5), {0, 1, 2}, set()),
        ("ra-in-hours", moved(visit, ra=lambda a: a / 15.0), set(visit), set()),
        ("declination-sign", moved(visit, dec=lambda d: -d), set(visit), set()),
        (
            "second-object",
            more(visit, dec_deg=0.4, later_s=30.0),
            {n, n + 1, n + 2},
            {"impossible-rate"},
        ),
    ]
    for kind, table, rows, besides in cases:
        found = vet(replace(arc, table=table))
        assert {f.kind for f in found} - besides == {kind}
        assert set().union(*(f.rows for f in found if f.kind == kind)) == rows
        for finding in found:
            assert "thrust" in finding.sentence or "orbit" in finding.sentence


@pytest.mark.parametrize(("early", "fraction"), [(0.0, 0.0), (0.5, 0.5), (-0.5, -0.5)])
def test_instants_at_the_start_of_the_exposure(early: float, fraction: float) -> None:
    """A body 0.6 au from the Earth over five nights and three stations, one of which is early."""
    ephemeris = load_ephemeris()
    rng = np.random.default_rng(5)
    exposure_s, sigma = 180.0, 0.15
    place0 = np.array([-0.9, 1.1, 0.5])
    rate = np.array([-0.009, -0.006, 0.002])
    rows = []
    for night in range(5):
        for code, hours in (("703", (3, 4, 5)), ("H01", (4, 6, 8)), ("V37", (3.5, 5.5, 9))):
            for hour in hours:
                sec = hour * 3600.0 + 60.0 * rng.integers(0, 20)
                true_s = sec + (early * exposure_s if code == "H01" else 0.0)
                tdb_d = np.atleast_1d(utc_to_tdb_d(60370 + night, true_s))
                seen = astrometric(
                    lambda t: place0 + rate * (np.asarray(t)[:, None] - 8826.0),
                    tdb_d,
                    station_states(code, tdb_d, ephemeris).position_au,
                )
                noise = rng.normal(0.0, sigma / 3600.0, 2)
                dec = np.degrees(seen.dec_rad[0])
                rows.append(
                    {
                        "permID": "1",
                        "mode": "CCD",
                        "stn": code,
                        "obsTime": pd.Timestamp("2024-03-01")
                        + pd.Timedelta(days=night, seconds=sec),
                        "ra": np.degrees(seen.ra_rad[0]) + noise[0] / np.cos(np.radians(dec)),
                        "dec": dec + noise[1],
                        "astCat": "Gaia2",
                        "rmsRA": sigma,
                        "rmsDec": sigma,
                        "exp": exposure_s,
                    }
                )
    arc = Arc.from_frame(pd.DataFrame(rows))
    told = time_shifts(arc)
    if not fraction:
        assert told == []
        return
    assert [s.station for s in told] == ["H01"]
    assert abs(told[0].fraction - fraction) < 4.0 * told[0].sigma < 0.4
    finding = next(f for f in vet(arc) if f.kind == "time-stamps")
    assert len(finding.rows) == 15 and "station H01" in finding.sentence
    assert "transverse thrust" in finding.sentence
