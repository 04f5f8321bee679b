"""The survey of an arc."""

import json
from pathlib import Path

import numpy as np

from ngbound.arc import Arc, read_arc, survey
from ngbound.constants import EPHEMERIS_MJD, J2000_MJD
from ngbound.sky import load_ephemeris
from tests.arc.samples import frame, put


def test_counts_spans_gaps_and_errors() -> None:
    table = frame(9, rmsRA=0.2, rmsDec=[0.1] * 8 + [0.4], mag=20.0, band="V")
    table["stn"] = ["G96"] * 6 + ["703"] * 3
    table.loc[6:, "obsTime"] = ["2024-06-01T03:00:00Z", "2024-06-01T03:20:00Z", "2024-06-01T03:40Z"]
    table.loc[8, "obsTime"] = "2024-06-01T03:40:00Z"
    told = survey(Arc.from_frame(table))
    assert (told.n_records, told.n_usable, told.n_nights) == (9, 9, 3)
    assert told.stations == {"G96": 6, "703": 3} and told.kinds == {"optical": 9}
    assert (told.first_day, told.last_day) == ("2024-03-01", "2024-06-01")
    gap = told.gaps[0]
    assert len(told.gaps) == told.n_gaps == 1 and (gap.after, gap.before) == (
        "2024-03-02",
        "2024-06-01",
    )
    np.testing.assert_allclose(gap.days, 91.0 - 40.0 / 1440.0)
    stated = told.errors["stated Dec"]
    assert (stated.n, stated.least, stated.median, stated.most) == (9, 0.1, 0.1, 0.4)
    assert stated.unit == "arcsec" and told.errors["digits time"].median == 1.0
    assert "assigned RA" in told.errors and "digits RA" not in told.errors
    assert told.magnitude is not None and told.magnitude.median == 20.0
    again = json.loads(json.dumps(told.to_dict()))
    assert again["gaps"][0]["before"] == "2024-06-01" and again["errors"]["stated RA"]["n"] == 9
    text = str(told)
    assert "654321: 9 records from data frame, 9 usable" in text and "91 d" in text
    assert "stations    G96 6, 703 3" in text


def test_findings_and_what_is_set_aside_are_told() -> None:
    table = frame(4).assign(deprecated=["X", "", "", ""])
    told = survey(Arc.from_frame(table))
    assert told.set_aside == {"marked as deprecated": 1} and told.n_usable == 3
    assert [f.kind for f in told.findings] == ["single-station"]
    assert told.set_aside_lines == {"marked as deprecated": (0,)}
    assert "  set aside   1 record (line 0): marked as deprecated\n" in str(told)
    assert "1 finding\n" in str(told) and told.to_dict()["findings"][0]["kind"] == "single-station"


def test_an_arc_without_usable_records() -> None:
    told = survey(Arc.from_frame(frame(2).assign(deprecated="X")))
    assert told.n_usable == 0 and told.n_nights == 0 and told.gaps == ()
    assert told.magnitude is None and json.dumps(told.to_dict())


def test_dates_outside_the_ephemeris_and_radar(tmp_path: Path) -> None:
    text = "# version=2022\npermID|mode|stn|obsTime|ra|dec|astCat\n"
    for year in (1400, 1551, 2024, 2649, 2651):
        text += f"433|CCD|G96|{year}-03-01T05:06:07Z|10.5|20.5|Gaia2\n"
    text += (
        "permID|trx|rcv|obsTime|delay|rmsDelay|frq\n433|253|251|2024-03-01T05:06:00Z|12|2|2380\n"
    )
    told = survey(read_arc(put(tmp_path, "a.psv", text)))
    reason = "the date lies outside the planetary ephemeris (1550 to 2650)"
    assert told.set_aside_lines[reason] == (3, 7) and told.set_aside[reason] == 2
    assert f"  set aside   2 records (lines 3, 7): {reason}\n" in str(told)
    assert told.stations == {"G96": 5, "251": 1}
    assert sum(told.set_aside.values()) + told.n_usable == told.n_records == 6


def test_the_bounds_of_the_ephemeris() -> None:
    span_d = load_ephemeris().span_d
    np.testing.assert_allclose(np.array(EPHEMERIS_MJD) - J2000_MJD, span_d, atol=1e-6)
