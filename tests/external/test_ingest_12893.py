"""The 1401 records of asteroid 12893 through our 80-column reader, and through the 80-column to
ADES converter of the standard's toolkit followed by our XML reader: the same table, but for the
differences listed here.

Sources: the records stand in the PyPI package astroquery (astroquery/mpc/tests/data/mpc_obs.dat,
an answer of the Minor Planet Center's observations database); the converter is that of the PyPI
package iau-ades 0.1.3 (ades.mpc80coltoxml).
"""

import contextlib
import io
import json

import numpy as np
import pytest
from ades import mpc80coltoxml, packUtil

from ngbound.arc import Arc, read_arc
from ngbound.arc.designations import to_base62
from ngbound.arc.report80 import PROGRAM_CODES, PROGRAM_STATIONS
from tests.external.records_12893 import file_12893
from tests.units import arcsec, mas

N = 1401
EQUAL = (
    ("permID", "provID", "trkSub", "stn", "site", "kind", "object", "why_not", "use")
    + ("astCat", "band", "mag", "disc", "notes", "prog", "utc_day", "raStar")
    + ("sys", "ctr", "pos1", "pos2", "pos3", "vel1", "rmsRA", "rmsDec", "rmsTime", "block")
)
"""Columns that are the same to the last bit."""


@pytest.fixture(scope="module")
def both(tmp_path_factory: pytest.TempPathFactory) -> tuple[Arc, Arc]:
    source = file_12893()
    folder = tmp_path_factory.mktemp("a12893")
    texts = [r["original_record"] for r in json.loads(source.read_text())]
    lines = [t[i : i + 80].ljust(80) for t in texts for i in range(0, len(t), 80)]
    (folder / "a.obs80").write_text("\n".join(lines) + "\n")
    said = io.StringIO()
    with contextlib.redirect_stdout(said):
        mpc80coltoxml.mpc80coltoxml(str(folder / "a.obs80"), str(folder / "a.xml"))
    assert said.getvalue() == "", "the converter complains about a record"
    return read_arc(source), read_arc(folder / "a.xml")


def test_the_same_records_in_the_same_order(both: tuple[Arc, Arc]) -> None:
    ours, theirs = both
    assert len(ours) == len(theirs) == N
    for name in EQUAL:
        assert (name in ours.table) == (name in theirs.table), name
        if name in ours.table:
            np.testing.assert_array_equal(
                ours.table[name].to_numpy(), theirs.table[name].to_numpy(), err_msg=name
            )


def test_every_column_is_compared(both: tuple[Arc, Arc]) -> None:
    compared = {*EQUAL, "ra", "dec", "ra_rad", "dec_rad", "raText", "decText", "obsTime", "utc_sec"}
    compared |= {"digits_ra_arcsec", "digits_dec_arcsec", "digits_time_s", "mode", "ref", "line"}
    compared |= {"subFmt", "precTime", "precRA", "precDec"}
    unfilled = {"rmsCorr", "vel2", "vel3"}
    for arc in both:
        assert set(arc.table.columns) <= compared | unfilled
        assert arc.table[list(unfilled)].isna().all().all()


def test_angles_differ_by_the_rounding_of_the_converter(both: tuple[Arc, Arc]) -> None:
    """The converter turns sexagesimal digits into as many decimals of a degree as hold them, and
    rounds there (five decimals for 0.01 s of time or 0.1 arcsec); our reader does not round."""
    ours, theirs = (arc.table for arc in both)
    for name in ("ra", "dec"):
        places = theirs[f"{name}Text"].str.split(".").str[1].str.len().to_numpy()
        apart_deg = np.abs(ours[name].to_numpy() - theirs[name].to_numpy())
        assert (apart_deg <= 0.5000001 * 10.0**-places).all()
        assert 0.015 * arcsec < np.radians(apart_deg.max()) < 0.0181 * arcsec
    # the texts are the reported ones here, decimal degrees there
    assert ours["raText"].str.contains(" ").all() and not theirs["raText"].str.contains(" ").any()


def test_resolutions_agree(both: tuple[Arc, Arc]) -> None:
    """Ours come from the digits, theirs from precTime, precRA and precDec; only the last bits of
    a product and of cos dec at the rounded declination differ."""
    ours, theirs = (arc.table for arc in both)
    for name in ("digits_ra_arcsec", "digits_dec_arcsec"):
        apart = np.abs(ours[name].to_numpy() - theirs[name].to_numpy()) * arcsec
        assert apart.max() < 1e-4 * mas
    np.testing.assert_allclose(ours["digits_time_s"], theirs["digits_time_s"], rtol=1e-12)


def test_instants_differ_by_the_milliseconds_of_the_converter(both: tuple[Arc, Arc]) -> None:
    """The converter writes three decimals of a second, six decimals of a day need four. Where it
    rounds 47.9999... s up, it writes 48.1000 instead of 48.000: a tenth of a second too late."""
    ours, theirs = (arc.table for arc in both)
    apart_s = theirs["utc_sec"].to_numpy() - ours["utc_sec"].to_numpy()
    carried = theirs["obsTime"].str.endswith(".1000Z").to_numpy()
    assert np.abs(apart_s[~carried]).max() <= 0.00051
    np.testing.assert_allclose(apart_s[carried], 0.1, atol=1e-9)
    assert 1 <= carried.sum() <= 10 and (apart_s != 0.0).sum() == 38


def test_codes_that_the_converter_spells_otherwise(both: tuple[Arc, Arc]) -> None:
    """Column 15 'c' (corrected without republication, CCD) is 'ccd' there, which is not in the
    list of modes; the reference is unpacked there ('23077' -> 'MPC  23077'); subFmt names the
    80-column format; the line numbers are those of the two files."""
    ours, theirs = (arc.table for arc in both)
    differ = (ours["mode"] != theirs["mode"]).to_numpy()
    assert differ.sum() == 14
    assert set(ours["mode"][differ]) == {"CCD"} and set(theirs["mode"][differ]) == {"ccd"}
    packed = ours["ref"].str.fullmatch(r"\d{5}").to_numpy(dtype=bool)
    assert packed.sum() == 12
    np.testing.assert_array_equal(
        ours["ref"][packed].astype(int), theirs["ref"][packed].str.removeprefix("MPC").astype(int)
    )
    assert (theirs["subFmt"] == "M92").all()


def test_programme_codes_are_those_of_the_toolkit() -> None:
    """Its list of stations and its numbering; a digit at other stations is a note there, and both
    here, for it may be either."""
    assert PROGRAM_STATIONS == packUtil.programCodeSites
    assert PROGRAM_CODES == packUtil.programCodesArray
    numbered = [to_base62(PROGRAM_CODES.index(c), 2) for c in PROGRAM_CODES]
    assert numbered == [packUtil.packProgID(c) for c in PROGRAM_CODES]
