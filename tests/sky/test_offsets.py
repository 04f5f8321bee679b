"""Offset records: the centre's place plus the offset, and what is set aside instead."""

from pathlib import Path

import numpy as np
import pytest

from ngbound.arc import Arc, read_arc, write_psv
from ngbound.constants import C_AU_D
from ngbound.errors import NgboundWarning
from ngbound.sky import load_ephemeris, reduce_offsets, station_states, utc_to_tdb_d
from tests.units import mas

NAMES = "permID|mode|stn|sys|ctr|pos1|pos2|pos3|obsTime|obsCenter|deltaRA|deltaDec|dist|pa"
PLACE = "G96|||||"


def read(folder: Path, *rows: str) -> Arc:
    path = folder / "x.psv"
    path.write_text("# version=2022\n" + NAMES + "\n" + "\n".join(rows) + "\n")
    return read_arc(path)


def row(centre: str, offset: str, place: str = PLACE, when: str = "2024-03-01T05:06:00Z") -> str:
    return f"433|CCD|{place}|{when}|{centre}|{offset}"


def place_of(body: str) -> tuple[float, float]:
    """Astrometric RA and Dec (rad) seen from G96, by two passes of light time written out."""
    ephemeris = load_ephemeris()
    tdb_d = np.atleast_1d(utc_to_tdb_d(60370, 5 * 3600 + 360.0))
    here = station_states("G96", tdb_d, ephemeris).position_au[0]
    line = ephemeris.position_au(body, tdb_d)[0] - here
    for _ in range(5):
        line = ephemeris.position_au(body, tdb_d - np.linalg.norm(line) / C_AU_D)[0] - here
    return np.arctan2(line[1], line[0]) % (2 * np.pi), np.arcsin(line[2] / np.linalg.norm(line))


@pytest.mark.parametrize("body", ["Moon", "Mars", "Venus"])
def test_pair_and_distance(tmp_path: Path, body: str) -> None:
    arc = reduce_offsets(
        read(tmp_path, row(body, "3600|-60||"), row(body, "||120|90"), row(body, "||120|180")),
        load_ephemeris(),
    )
    ra, dec = place_of(body)
    got = arc.table[["ra_rad", "dec_rad"]].to_numpy()
    one = np.radians(1.0)
    # deltaRA is already times cos dec
    assert got[0, 0] == pytest.approx(ra + one / np.cos(dec), abs=0.01 * mas)
    assert got[0, 1] == pytest.approx(dec - one / 60.0, abs=0.01 * mas)
    assert got[1, 0] == pytest.approx(ra + one / 30.0 / np.cos(dec), abs=1.0 * mas)
    assert got[2] == pytest.approx((ra, dec - one / 30.0), abs=0.01 * mas)
    assert arc.table.use.all() and (arc.table.why_not == "").all() and len(arc.used) == 3
    np.testing.assert_allclose(np.radians(arc.table.ra), got[:, 0], atol=1e-15)


def test_the_planet_that_is_a_barycentre_is_told(tmp_path: Path) -> None:
    with pytest.warns(NgboundWarning, match=r"offsets from Jupiter \(2\) .*barycentre"):
        arc = reduce_offsets(read(tmp_path, *[row("Jupiter", "1.5|2||")] * 2), load_ephemeris())
    assert arc.table.use.all()


def test_set_aside_with_a_reason(tmp_path: Path) -> None:
    arc = read(
        tmp_path,
        row("433", "1|2||"),
        row("Earth", "1|2||"),
        row("Moon", "1|2||", place="247|||||"),
        row("Moon", "1|2||", place="247|WGS84|399|10|45|100"),
        row("Moon", "1|2||", when="1400-03-01T05:06:00Z"),
        row("4", "1|2||"),
    )
    assert not arc.table.use.any()
    arc = reduce_offsets(arc, load_ephemeris())
    assert arc.table.use.tolist() == [False, False, False, True, False, True]
    told = arc.table.why_not.tolist()
    assert "an offset from 433, which is not in the ephemeris" == told[0]
    assert "Earth" in told[1] and "without a known position" in told[2] and "outside" in told[4]


def test_other_records_stay_as_they_are(tmp_path: Path) -> None:
    path = tmp_path / "x.psv"
    path.write_text(
        "# version=2022\npermID|mode|stn|obsTime|ra|dec|astCat\n"
        "433|CCD|G96|2024-03-01T05:06:07Z|10.5|20.5|Gaia2\n"
        f"{NAMES}|deprecated\n{row('Moon', '1|2||')}|\n{row('Moon', '1|2||')}|X\n"
    )
    arc = read_arc(path)
    reduced = reduce_offsets(arc, load_ephemeris())
    assert reduced.table.ra[0] == 10.5 and reduced.table.use.tolist()[:2] == [True, True]
    assert reduce_offsets(reduced, load_ephemeris()) is reduced or len(reduced) == 3
    write_psv(reduced, tmp_path / "y.psv")
    assert (read_arc(tmp_path / "y.psv").table.kind == arc.table.kind).all()
    plain = reduced.select(reduced.table.kind.to_numpy() == "optical")
    assert reduce_offsets(plain, load_ephemeris()) is plain
