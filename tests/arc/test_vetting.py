"""Findings."""

import numpy as np
import pandas as pd

from ngbound.arc import Arc, vet
from tests.arc.samples import frame


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


def test_surplus_position() -> None:
    table = two_stations().assign(sys="WGS84", ctr=399, pos1=1.0, pos2=2.0, pos3=3.0)
    found = vet(Arc.from_frame(table))
    assert [f.kind for f in found] == ["surplus-position"] and len(found[0].rows) == 6
    assert str(found[0]).startswith("surplus-position: 6 records")
