"""The 80-column format. All records are invented; only the layout is the published one."""

import gzip
from pathlib import Path

import numpy as np
import pytest

from ngbound.arc import Arc, read_arc, write_psv, write_xml
from ngbound.errors import ArcError
from tests.arc.samples import line80, put
from tests.units import arcsec, mas


def read(folder: Path, *lines: str) -> Arc:
    return read_arc(put(folder, "a.txt", "\n".join(lines) + "\n"))


def test_a_ccd_record(tmp_path: Path) -> None:
    arc = read(tmp_path, line80(disc="*", note="k", ref="12345", stn="704"))
    row = arc.table.iloc[0]
    assert (row.object, row["mode"], row.stn, row.astCat, row.disc, row.notes, row.ref) == (
        "2024 AB1",
        "CCD",
        "704",
        "Gaia2",
        "*",
        "k",
        "12345",
    )
    assert (row.mag, row.band) == (20.1, "V")
    assert row.ra == pytest.approx(15 * (12 + 34 / 60 + 56.78 / 3600), abs=1e-12)
    assert row.dec == pytest.approx(-(1 + 23 / 60 + 45.6 / 3600), abs=1e-12)
    assert (row.utc_day, row.utc_sec) == (60370, pytest.approx(0.12345 * 86400, abs=1e-9))
    assert row.obsTime == "2024-03-01T02:57:46.080Z"
    assert (row.raText, row.decText) == ("12 34 56.78", "-01 23 45.6")
    assert row.use and row.site == "fixed" and row.kind == "optical" and row.line == 1


@pytest.mark.parametrize(
    ("ra", "dec", "date", "steps"),
    [
        ("12 34 56.789", "+01 23 45.67", "2024 03 01.123456", (0.015, 0.01, 0.0864)),
        ("12 34 56.7", "+01 23 45", "2024 03 01.1234", (1.5, 1.0, 8.64)),
        ("12 34.5", "+01 23.4", "2024 03 01.12", (90.0, 6.0, 864.0)),
        ("12 34", "+01 23", "2024 03 01", (900.0, 60.0, 86400.0)),
    ],
)
def test_digits_imply_a_resolution(
    tmp_path: Path, ra: str, dec: str, date: str, steps: tuple[float, float, float]
) -> None:
    row = read(tmp_path, line80(ra=ra, dec=dec, date=date)).table.iloc[0]
    found = (row.digits_ra_arcsec / np.cos(row.dec_rad), row.digits_dec_arcsec, row.digits_time_s)
    np.testing.assert_allclose(found, steps, rtol=1e-12)


def test_negative_zero_declination(tmp_path: Path) -> None:
    assert read(tmp_path, line80(dec="-00 00 30.0")).table.dec[0] == pytest.approx(-30 / 3600)


@pytest.mark.parametrize(
    ("kind", "mode"),
    [
        (" ", "PHO"),
        ("P", "PHO"),
        ("e", "ENC"),
        ("C", "CCD"),
        ("B", "CMO"),
        ("T", "MER"),
        ("M", "MIC"),
        ("c", "CCD"),
        ("E", "OCC"),
        ("n", "VID"),
        ("A", "PHO"),
    ],
)
def test_modes(tmp_path: Path, kind: str, mode: str) -> None:
    assert read(tmp_path, line80(kind=kind)).table["mode"][0] == mode


def test_programme_codes(tmp_path: Path) -> None:
    """Letters are programme codes where the station has such, notes elsewhere; digits where the
    station has none may be either and are kept as both."""
    given = [("G96", "2"), ("G96", "&"), ("G96", "Z"), ("G96", "z"), ("G96", " ")]
    given += [("500", "Z"), ("500", "2"), ("500", "&"), ("500", "é"), ("C49", "H")]
    arc = read(tmp_path, *(line80(note=c, stn=code) for code, c in given))
    t = arc.table
    assert t.prog.tolist() == ["02", "0F", "15", "1V", "", "", "02", "0F", "", "0n"]
    assert t.notes.tolist() == ["", "", "", "", "", "Z", "2", "", "", ""]
    assert t.remarks.tolist() == [""] * 8 + ["column 14: é", ""]
    for write in (write_psv, write_xml):
        write(arc, tmp_path / "again")
        again = read_arc(tmp_path / "again").table
        for name in ("prog", "notes", "remarks"):
            assert again[name].tolist() == t[name].tolist()


def test_catalogues(tmp_path: Path) -> None:
    arc = read(tmp_path, *(line80(cat=c) for c in " cqUW~"))
    assert arc.table.astCat.tolist() == ["UNK", "USNOA2", "UCAC4", "Gaia1", "Gaia3", "UNK"]


S1 = line80(kind="S", stn="250", date="2024 03 01.123456")
S2 = "     K24A01B  s2024 03 01.1234561 - 6490.4555 + 2183.2275 +  914.7962        250"


@pytest.mark.parametrize("joined", [False, True])
def test_a_spacecraft(tmp_path: Path, joined: bool) -> None:
    arc = read(tmp_path, S1 + S2) if joined else read(tmp_path, S1, S2)
    row = arc.table.iloc[0]
    assert len(arc) == 1 and row.use
    assert (row.site, row.sys, row.ctr) == ("space", "ICRF_KM", 399)
    assert (row.pos1, row.pos2, row.pos3) == (-6490.4555, 2183.2275, 914.7962)


def test_a_spacecraft_in_au(tmp_path: Path) -> None:
    second = "     K24A01B  s2024 03 01.1234562 - 0.00123456+ 1.23456789- 0.50000000       C49"
    row = read(tmp_path, line80(kind="S", stn="C49", date="2024 03 01.123456"), second).table.iloc[
        0
    ]
    assert (row.sys, row.pos1, row.pos2, row.pos3) == ("ICRF_AU", -0.00123456, 1.23456789, -0.5)


def test_a_roving_observer(tmp_path: Path) -> None:
    second = "     K24A01B  v2024 03 01.12345 1 123.456789 -12.345678  1234                247"
    row = read(tmp_path, line80(kind="V", stn="247"), second).table.iloc[0]
    assert (row.site, row.sys, row.pos1, row.pos2, row.pos3) == (
        "roving",
        "WGS84",
        123.456789,
        -12.345678,
        1234.0,
    )


@pytest.mark.parametrize(
    ("kind", "stn", "position"),
    [
        # one column to the left: the sign of the latitude would be lost, or the thousand metres
        ("V", "247", "1  12.345678-12.345678   1234"),
        ("V", "247", "1  12.345678  12.34567812345"),
        ("V", "247", "1  12.345678  12.345678  12345"),
        ("S", "250", "1- 6490.4555 + 2183.2275 +  914.7962 "),
    ],
)
def test_positions_out_of_their_columns(tmp_path: Path, kind: str, stn: str, position: str) -> None:
    second = f"     K24A01B  {kind.lower()}2024 03 01.12345 {position:45s}{stn}"
    with pytest.raises(ArcError, match="line 2, columns 3.* of the second line"):
        read(tmp_path, line80(kind=kind, stn=stn), second)


def test_a_band_without_a_magnitude_goes_to_the_remarks(tmp_path: Path) -> None:
    arc = read(tmp_path, line80(mag=""), line80(note="\u00a7", mag="", stn="703"), line80(mag="20"))
    assert arc.table.band.tolist() == ["", "", "V"]
    assert arc.table.remarks.tolist() == ["column 71: V", "column 14: \u00a7; column 71: V", ""]
    write_psv(arc, tmp_path / "again.psv")
    assert read_arc(tmp_path / "again.psv").table.remarks.tolist() == arc.table.remarks.tolist()


def test_radar_record_becomes_delay_and_doppler(tmp_path: Path) -> None:
    desig = "12345       "
    first = f"{desig}  R2024 03 01.000000   123456789123 +   12345123 02380  251 JPLRS251"
    first = (
        f"{desig}  R2024 03 01.000000"
        + "  123456789"
        + "1234"
        + "+    12345"
        + "6"
        + "789 "
        + " 2380"
        + " "
        + "251"
        + " JPLR"
        + " "
        + "251"
    )
    second = (
        f"{desig}  r2024 03 01.000000"
        + "C        1"
        + " "
        + "25  "
        + "          0"
        + "5   "
        + "     "
        + " "
        + "251"
        + "     "
        + " "
        + "251"
    )
    assert len(first) == len(second) == 80
    arc = read(tmp_path, line80(desig=desig), first, second)
    radar = arc.table[arc.table.kind == "radar"]
    assert len(radar) == 2 and radar.use.all()
    assert radar.delay.iloc[0] == pytest.approx(123.4567891234, abs=1e-12)
    assert radar.doppler.iloc[1] == pytest.approx(123456.789, abs=1e-9)
    assert radar.frq.tolist() == [2380.0, 2380.0] and radar.trx.tolist() == ["251", "251"]
    assert radar.rmsDelay.iloc[0] == pytest.approx(1.25) and radar.rmsDoppler.iloc[
        1
    ] == pytest.approx(0.5)
    assert arc.used.table.stn.tolist().count("251") == 2
    # echoes are timed at whole seconds, of which six decimals tell no more than hundredths:
    # 0.236111 d are 20399.99 s
    assert radar.utc_sec.tolist() == [0.0, 0.0]
    dated = [text.replace("01.000000", "01.236111") for text in (first, second)]
    timed = read(tmp_path, line80(desig=desig), *dated).table
    assert timed.obsTime[timed.kind == "radar"].tolist() == ["2024-03-01T05:40:00Z"] * 2
    # an instant that no whole second can be stays as it is
    dated = [text.replace("01.000000", "01.236117") for text in (first, second)]
    timed = read(tmp_path, line80(desig=desig), *dated).table
    assert timed.utc_sec[timed.kind == "radar"].tolist() == pytest.approx([20400.5088] * 2)
    surface = second.replace("C        1", "S        1")
    on_surface = read(tmp_path, line80(desig=desig), first, surface).table
    why = on_surface.why_not[on_surface.kind == "radar"].tolist()
    assert "one radius nearer" in why[0] and why[1] == ""


def test_set_aside_with_a_reason(tmp_path: Path) -> None:
    arc = read(tmp_path, line80(), line80(kind="X"), line80(kind="O", stn="G96"))
    assert arc.table.use.tolist() == [True, False, False]
    assert "supersedes" in arc.table.why_not[1] and "offsets" in arc.table.why_not[2]
    assert "2" not in arc.table.why_not[0]
    assert "set aside" in str(arc)


def test_header_lines_and_gzip(tmp_path: Path) -> None:
    text = "COD G96\nOBS A. Nobody\nNET Gaia-DR2\n\n" + line80() + "\n"
    path = put(tmp_path, "a.txt.gz", gzip.compress(text.encode()))
    arc = read_arc(path)
    assert len(arc) == 1 and arc.table.line[0] == 5


@pytest.mark.parametrize(
    ("lines", "words"),
    [
        ([line80(ra="25 00 00.0")], r"line 1, columns 33-44.*right ascension"),
        ([line80(ra="12 61 00.0")], r"columns 33-44"),
        ([line80(dec="+91 00 00.0")], r"columns 45-56.*beyond 90"),
        ([line80(dec=" 01 00 00.0")], r"columns 45-56"),
        ([line80(date="2024 13 01.12345")], r"columns 16-32.*calendar"),
        ([line80(), line80(date="2024 0x 01.12345")], r"line 2, columns 16-32.*not a date"),
        ([line80(mag="xx.x")], r"columns 66-70"),
        ([line80(stn="ZZ9")], r"column stn: the station 'ZZ9'.*near matches"),
        ([line80(desig="A?345       ")], r"columns 1-12"),
        ([line80(desig="")], r"names no object"),
        ([line80(), line80()[:-1]], r"line 2: the record has 79 columns"),
        ([line80(), "what is this"], r"line 2: the record has 12 columns"),
        ([line80(), line80().replace(" ", "\t", 1)], r"line 2: a tab"),
        ([S1], r"needs a second line"),
        ([S1, line80()], r"needs a second line"),
        ([S2], r"no first line"),
        ([S1, S2.replace("01.123456", "02.123456")], r"differ from the first"),
        ([S1, S2.replace("6490", "64x0")], r"columns 34-70 of the second line"),
        ([line80(), line80(desig="     K24B01C")], r"2 objects in it: .*object="),
    ],
)
def test_refusals(tmp_path: Path, lines: list[str], words: str) -> None:
    with pytest.raises(ArcError, match=words) as caught:
        read(tmp_path, *lines)
    assert "a.txt" in str(caught.value) and caught.value.exit_status == 2


def test_choice_of_an_object(tmp_path: Path) -> None:
    path = put(
        tmp_path,
        "a.txt",
        "\n".join([line80(), line80(desig="     K24B01C"), line80(desig="12345K24B01C"), line80()]),
    )
    assert len(read_arc(path, object="2024 AB1")) == 2
    assert (
        len(read_arc(path, object="12345")) == 2
    )  # the file links the provisional designation to the number
    with pytest.raises(ArcError, match="no object '2024 AB9'.*2024 AB1"):
        read_arc(path, object="2024 AB9")


def test_through_psv(tmp_path: Path) -> None:
    arc = read(tmp_path, line80(), S1, S2, line80(band=" ", kind=" "), line80(mag="", band=" "))
    write_psv(arc, tmp_path / "b.psv")
    again = read_arc(tmp_path / "b.psv")
    for name in ("ra_rad", "dec_rad"):
        np.testing.assert_allclose(again.table[name], arc.table[name], atol=0.01 * mas)
    np.testing.assert_array_equal(again.table.utc_sec, arc.table.utc_sec)
    for name in ("digits_ra_arcsec", "digits_dec_arcsec"):
        np.testing.assert_allclose(
            again.table[name] * arcsec, arc.table[name] * arcsec, atol=1e-6 * arcsec
        )
    np.testing.assert_allclose(again.table.digits_time_s, arc.table.digits_time_s)
    for name in ("mode", "stn", "astCat", "band", "object", "site", "sys"):
        assert again.table[name].tolist() == arc.table[name].tolist()
