"""Parquet: an arc comes back as it was, and a clear sentence when it cannot."""

import importlib.util
from pathlib import Path

import pandas as pd
import pytest

from ngbound.arc import Arc, read_arc
from ngbound.errors import ArcError
from tests.arc.samples import PSV, ROVING, frame, put

OWN = {"Q99": {"longitude_deg": 1.0, "latitude_deg": 2.0, "altitude_m": 3.0}}


@pytest.mark.parametrize("text", [PSV, ROVING])
def test_round_trip(tmp_path: Path, text: str) -> None:
    arc = read_arc(put(tmp_path, "a.psv", text))
    arc.to_parquet(tmp_path / "a.parquet")
    again = Arc.from_parquet(tmp_path / "a.parquet")
    pd.testing.assert_frame_equal(arc.table, again.table)
    assert (again.source, again.contexts, again.label) == (arc.source, arc.contexts, arc.label)


def test_own_stations_and_label_travel(tmp_path: Path) -> None:
    arc = Arc.from_frame(frame(3, stn="Q99"), name="Peter", stations=OWN)
    arc.to_parquet(tmp_path / "a.parquet")
    again = Arc.from_parquet(tmp_path / "a.parquet")
    assert again.name == "Peter" and again.station("Q99") == arc.station("Q99")
    pd.testing.assert_frame_equal(Arc.from_frame(again.table, stations=OWN).table, arc.table)


def test_what_is_no_arc(tmp_path: Path) -> None:
    with pytest.raises(ArcError, match=r"x: this is no Parquet file.*Write it again"):
        Arc.from_parquet(put(tmp_path, "x", "PAR1 nonsense PAR1"))
    frame(3).to_parquet(tmp_path / "f.parquet")
    with pytest.raises(ArcError, match=r"holds no arc of ngbound.*Arc\.from_frame"):
        Arc.from_parquet(tmp_path / "f.parquet")
    with pytest.raises(ArcError, match="no such file"):
        Arc.from_parquet(tmp_path / "g.parquet")


def test_without_pyarrow(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(importlib.util, "find_spec", lambda name: None)
    arc = Arc.from_frame(frame(3))
    with pytest.raises(ArcError, match=r"pip install 'ngbound\[parquet\]'"):
        arc.to_parquet(tmp_path / "a.parquet")
    with pytest.raises(ArcError, match="pyarrow"):
        Arc.from_parquet(tmp_path / "a.parquet")
    assert not list(tmp_path.iterdir())
