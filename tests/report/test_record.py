"""The record: JSON's types, a round trip, and never half of it on the disk."""

import json
import os

import numpy as np
import pandas as pd
import pytest
from astropy import units as u
from astropy.time import Time
from matplotlib.figure import Figure

from ngbound.errors import InputError, NgboundError
from ngbound.report import Record, load_record, provenance
from ngbound.report.record import plain


def test_everything_becomes_json():
    class Known:
        def to_dict(self):
            return {"x": np.float32(0.5)}

    data = plain(
        {
            "q": [1.0, np.nan] * u.au,
            "n": np.int64(3),
            "b": np.bool_(True),
            "inf": np.inf,
            "t": Time(2451545.0, format="jd", scale="tdb"),
            "f": pd.DataFrame({"a": [1, 2], "b": [0.5, np.nan]}),
            "k": (Known(), {"z", "a"}),
        }
    )
    assert data["q"] == {"value": [1.0, None], "unit": "AU"}
    assert data["n"] == 3 and data["b"] is True and data["inf"] is None
    assert data["t"] == {"iso": "2000-01-01T12:00:00.000", "scale": "tdb"}
    assert data["f"] == {"a": [1, 2], "b": [0.5, None]}
    assert data["k"] == [{"x": 0.5}, ["a", "z"]]
    json.dumps(data, allow_nan=False)


def test_what_cannot_be_held_is_named_by_its_place():
    with pytest.raises(NgboundError, match=r"record\.fits\.null.* function"):
        Record({"fits": {"null": lambda: 0}})


def test_round_trip(tmp_path):
    figure = Figure(figsize=(1, 1))
    record = Record({"object": "X", "limit": {"a": 1e-9}, "provenance": provenance()})
    path = record.write(tmp_path / "deep" / "out", {"fan": figure}, {"report.txt": "µ\n"})
    assert {p.name for p in path.parent.iterdir()} == {
        "record.json",
        "report.txt",
        "fan.pdf",
        "fan.png",
    }
    assert not list(tmp_path.glob("deep/.*"))
    for back in (load_record(path), load_record(path.parent)):
        assert {k: v for k, v in back.data.items() if k != "files"} == record.data
        assert set(back["files"]) == {"report.txt", "fan.pdf", "fan.png"}


def test_figures_are_the_same_bytes_each_time(tmp_path):
    for name in "ab":
        Record({}).write(tmp_path / name, {"fan": Figure(figsize=(1, 1))})
    a, b = (load_record(tmp_path / name)["files"] for name in "ab")
    assert a == b


def test_a_second_run_leaves_other_files_alone(tmp_path):
    out = tmp_path / "out"
    Record({"run": 1}).write(out, texts={"report.txt": "one"})
    (out / "chain.npz").write_bytes(b"grows")
    Record({"run": 2}).write(out, texts={"report.txt": "two"})
    assert load_record(out)["run"] == 2
    assert (out / "report.txt").read_text() == "two" and (out / "chain.npz").exists()


class Stop(BaseException):
    """Stands for an interruption."""


def test_interrupted_while_drawing_nothing_is_touched(tmp_path):
    class Breaking(Figure):
        def savefig(self, *args, **kwargs):
            raise Stop

    out = tmp_path / "out"
    with pytest.raises(Stop):
        Record({"run": 1}).write(out, {"fan": Breaking()}, {"report.txt": "one"})
    assert list(tmp_path.iterdir()) == []
    Record({"run": 1}).write(out, texts={"report.txt": "one"})
    with pytest.raises(Stop):
        Record({"run": 2}).write(out, {"fan": Breaking()}, {"report.txt": "two"})
    assert load_record(out)["run"] == 1 and len(list(tmp_path.iterdir())) == 1


@pytest.mark.parametrize("moves", [0, 1, 2])
def test_interrupted_while_publishing_there_is_no_record(tmp_path, monkeypatch, moves):
    out = tmp_path / "out"
    Record({"run": 1}).write(out, texts={"a.txt": "one", "b.txt": "one"})
    move, done = os.replace, []

    def breaking(source, target):
        if len(done) == moves:
            raise Stop
        done.append(target)
        move(source, target)

    monkeypatch.setattr(os, "replace", breaking)
    with pytest.raises(Stop):
        Record({"run": 2}).write(out, texts={"a.txt": "two", "b.txt": "two"})
    monkeypatch.undo()
    with pytest.raises(InputError, match="interrupted"):
        load_record(out)
    Record({"run": 3}).write(out, texts={"a.txt": "3", "b.txt": "3"})
    assert load_record(out)["run"] == 3


def test_refusals(tmp_path):
    record = Record({})
    with pytest.raises(InputError, match="plain name"):
        record.write(tmp_path / "o", texts={"../x.txt": ""})
    with pytest.raises(InputError, match="plain name"):
        record.write(tmp_path / "o", texts={"record.json": ""})
    (tmp_path / "file").write_text("")
    with pytest.raises(InputError, match="a file of that name"):
        record.write(tmp_path / "file")
    with pytest.raises(InputError, match="cannot be read"):
        provenance({"case": tmp_path / "absent.toml"})


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("{", "not a record"),
        ("[]", "schema is None"),
        ('{"schema": "other"}', "schema is 'other'"),
        ('{"schema": "ngbound-record", "schema_version": 99}', "version 99"),
    ],
)
def test_foreign_files_are_refused(tmp_path, text, says):
    (tmp_path / "record.json").write_text(text)
    with pytest.raises(InputError, match=says):
        load_record(tmp_path)


def test_a_changed_file_is_noticed(tmp_path):
    out = Record({}).write(tmp_path / "o", texts={"a.txt": "one"}).parent
    (out / "a.txt").write_text("other")
    with pytest.raises(InputError, match="changed"):
        load_record(out)
    assert load_record(out, verify=False)["schema"] == "ngbound-record"


def test_provenance_names_no_place_on_the_disk(tmp_path):
    (tmp_path / "case.toml").write_bytes(b"abc")
    made = provenance({"case": tmp_path / "case.toml"})
    assert made["inputs"]["case"] == {
        "name": "case.toml",
        "bytes": 3,
        # SHA-256 of "abc": FIPS 180-2, appendix B.1
        "sha256": "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad",
    }
    assert str(tmp_path) not in json.dumps(made)
    assert made["packages"]["numpy"] == np.__version__
