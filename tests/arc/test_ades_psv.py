"""ADES PSV: what is read, what is refused, and that writing loses nothing."""

import gzip
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from ngbound.arc import Arc, read_arc, write_psv
from ngbound.errors import ArcError, NgboundWarning
from tests.arc.samples import PSV, ROVING, put

HEADER = (
    "# observatory\n! mpcCode G96\n# submitter\n! name A. Nobody\n# measurers\n! name A. Nobody\n"
    "# telescope\n! design Reflector\n! aperture 1.5\n! detector CCD\n"
)
HEAD = "# version=2022\npermID|mode|stn|obsTime|ra|dec|astCat\n"
ROW = "123|CCD|G96|2024-03-01T05:06:07Z|10.5|20.5|Gaia2"


def read(folder: Path, text: str | bytes, **more: Any) -> Arc:
    return read_arc(put(folder, "x.psv", text), **more)


def test_the_sample(tmp_path: Path) -> None:
    arc = read(tmp_path, PSV)
    t = arc.table
    assert len(arc) == 3 and t.use.all() and arc.name == "654321"
    assert t.line.tolist() == [14, 15, 16] and t.block.tolist() == [0, 0, 0]
    np.testing.assert_array_equal(t.ra, [123.4501, 123.4601, 123.9501])
    assert t.raText.tolist() == ["123.450100", "123.46010", "123.95010"]
    np.testing.assert_allclose(t.digits_dec_arcsec, [0.0036, 0.036, 0.036])
    np.testing.assert_allclose(t.digits_time_s, [0.1, 0.01, 1.0])
    np.testing.assert_array_equal(t.rmsDec, [0.25, 0.25, np.nan])
    assert t.trkSub.tolist() == ["", "abc12", ""]
    assert arc.contexts[0][0] == (
        "observatory",
        "",
        (("mpcCode", "G96"), ("name", "Invented Ridge")),
    )
    assert arc.used.table.utc_sec.iloc[0] == 5 * 3600 + 6 * 60 + 7.8


@pytest.mark.parametrize("ending", ["\n", "\r\n", "\r"])
@pytest.mark.parametrize("last", [True, False])
@pytest.mark.parametrize("mark", [b"", b"\xef\xbb\xbf"])
def test_line_ends_and_byte_order_mark(
    tmp_path: Path, ending: str, last: bool, mark: bytes
) -> None:
    text = (HEAD + ROW + ("\n" if last else "")).replace("\n", ending)
    arc = read(tmp_path, mark + text.encode())
    assert arc.table.astCat.tolist() == ["Gaia2"]


def test_gzip(tmp_path: Path) -> None:
    assert len(read(tmp_path, gzip.compress(PSV.encode()))) == 3


def test_no_quoting_and_no_comments(tmp_path: Path) -> None:
    head = HEAD.replace("astCat", "astCat|remarks")
    arc = read(tmp_path, head + ROW + '|a "b & <c> # d, e\n' + ROW + "|NaN\n")
    assert arc.table.remarks.tolist() == ['a "b & <c> # d, e', "NaN"]


def test_padding_and_tabs(tmp_path: Path) -> None:
    arc = read(
        tmp_path, HEAD.replace("|", "  |\t") + "\n  " + ROW.replace("|", " \t |   ") + "  \n\n"
    )
    assert arc.table.stn.tolist() == ["G96"] and arc.table.raText.tolist() == ["10.5"]


def test_several_blocks(tmp_path: Path) -> None:
    text = (
        PSV
        + "permID|mode|stn|obsTime|ra|dec|astCat\n"
        + "654321|CCD|G96|2024-03-03T05:06:07Z|10.5|20.5|Gaia2\n"
    )
    text += HEADER.replace("G96", "703") + "# fundingSource Nobody at all\n"
    text += "permID|mode|stn|obsTime|ra|dec|astCat\n"
    text += "654321|CCD|703|2024-03-04T05:06:07Z|10.5|20.5|Gaia2\n"
    arc = read(tmp_path, text)
    assert arc.table.block.tolist() == [0, 0, 0, -1, 1]
    assert arc.contexts[1][4] == ("fundingSource", "Nobody at all", ())
    write_psv(arc, tmp_path / "y.psv")
    again = read_arc(tmp_path / "y.psv")
    assert again.contexts == arc.contexts
    same(arc, again)


def test_blocks_of_many_shapes_are_one_table(tmp_path: Path) -> None:
    """Blocks of three kinds of keyword row in turn, read together and one by one."""
    names = (
        "obsTime|ra|dec|astCat",
        "remarks|obsTime|ra|dec|astCat|mag|band",
        "obsTime|ra|dec|astCat",
    )
    rng = np.random.default_rng(3)
    pieces = []
    for k in range(12):
        header = HEADER.replace("A. Nobody", f"N. {k % 4}") if k % 5 else ""
        rows = []
        for _ in range(int(rng.integers(1, 4))):
            when = f"2024-03-{k + 1:02d}T05:06:{rng.integers(60):02d}{'.125' * (k % 2)}Z"
            ra, dec = rng.uniform(0.0, 360.0), rng.uniform(-90.0, 90.0)
            cells = f"123|CCD|G96|{when}|{ra:.{k % 7 + 1}f}|{dec:.5f}|Gaia{k % 3 + 1}"
            if k % 3 == 1:
                cells = cells.replace("G96|", f"G96|é {k}|").removesuffix("|") + f"|{k}.5|V"
            rows.append(cells)
        pieces.append(header + f"permID|mode|stn|{names[k % 3]}\n" + "\n".join(rows) + "\n")
    arc = read(tmp_path, "# version=2022\n" + "".join(pieces))
    apart = [read(tmp_path, "# version=2022\n" + piece) for piece in pieces]
    assert len(arc) == sum(len(one) for one in apart) and len(arc.contexts) == 4
    for name in arc.table.columns:
        if name in ("line", "block"):
            continue
        for one, low in zip(apart, np.cumsum([0] + [len(a) for a in apart[:-1]]), strict=True):
            mine = arc.table[name].to_numpy()[low : low + len(one)]
            if name in one.table:
                np.testing.assert_array_equal(mine, one.table[name].to_numpy(), err_msg=name)
            else:
                assert pd.isna(mine).all() or (mine == "").all()
    contexts = [arc.contexts[b] if b >= 0 else () for b in arc.table.block]
    said = [one.contexts[0] if one.contexts else () for one in apart for _ in range(len(one))]
    assert contexts == said
    wrong = "".join(pieces[:8]) + "".join(pieces[8:]).replace("Gaia3\n", "Gaia3|\n", 1)
    with pytest.raises(ArcError, match=r"line \d+: the record has 8 cells, the keyword row \(line"):
        read(tmp_path, "# version=2022\n" + wrong)


def same(one: Arc, two: Arc) -> None:
    assert list(one.table.columns) == list(two.table.columns)
    for name in one.table.columns:
        if name != "line":
            np.testing.assert_array_equal(
                one.table[name].to_numpy(), two.table[name].to_numpy(), err_msg=name
            )


def test_round_trip(tmp_path: Path) -> None:
    for text in (PSV, ROVING):
        arc = read(tmp_path, text)
        write_psv(arc, tmp_path / "y.psv")
        same(arc, read_arc(tmp_path / "y.psv"))
    assert (tmp_path / "y.psv").read_text().endswith("\n")
    assert sorted(p.name for p in tmp_path.iterdir()) == ["x.psv", "y.psv"]


def test_old_spelling_of_2017_is_read_and_respelled(tmp_path: Path) -> None:
    text = (
        HEAD.replace("2022", "2017")
        + "123|CCD|G96|2024-03-01T05:06:07.12345678Z|+010.50000000000|+05.5|Gaia2\n"
    )
    arc = read(tmp_path, text)
    assert arc.table.utc_sec[0] == pytest.approx(5 * 3600 + 367.12345678, abs=1e-9)
    write_psv(arc, tmp_path / "y.psv")
    again = read_arc(tmp_path / "y.psv")
    assert again.table.obsTime[0] == "2024-03-01T05:06:07.123457Z"
    assert again.table.raText[0] == "10.500000000" and again.table.decText[0] == "5.5"


def test_roving_and_space(tmp_path: Path) -> None:
    arc = read(tmp_path, ROVING)
    assert arc.table.site.tolist() == ["roving", "roving", "space", "space"]
    assert arc.table.use.tolist() == [True, True, True, False]
    assert arc.table.why_not[3] == "the record gives no position of the space station"


def test_a_position_tells_where_the_station_is_whatever_its_code(tmp_path: Path) -> None:
    head = "# version=2022\npermID|mode|stn|sys|ctr|pos1|pos2|pos3|obsTime|ra|dec|astCat\n"
    cases = [
        ("XYZ|ICRF_KM|399|6800.5|-45.25|120", "space", True),
        ("XYZ|ICRF_AU|399|0.1|0.2|-0.1", "space", True),
        ("XYZ|WGS84|399|12.5|-45.25|1200", "roving", True),
        ("x_Y2|ITRF|399|12.5|5000.5|3800.25", "roving", True),
        ("247|ICRF_KM|399|6800.5|-45.25|120", "space", True),
        ("275|WGS84|399|12.5|-45.25|1200", "roving", True),
        ("250|ITRF|399|12.5|5000.5|3800.25", "roving", True),
        ("XYZ|IAU|399|12.5|-45.25|1200", "roving", False),
        ("G96|WGS84|399|12.5|-45.25|1200", "fixed", True),
    ]
    rows = [
        f"1|CCD|{c}|2024-03-{i + 1:02d}T05:06:07Z|10.5|20.5|Gaia2"
        for i, (c, _, _) in enumerate(cases)
    ]
    table = read(tmp_path, head + "\n".join(rows) + "\n").table
    assert table.site.tolist() == [site for _, site, _ in cases]
    assert table.use.tolist() == [use for _, _, use in cases]
    with pytest.raises(ArcError, match=r"line 3, column stn: the station 'XYZ'.*with the record"):
        read(tmp_path, head + "1|CCD|XYZ||||||2024-03-01T05:06:07Z|10.5|20.5|Gaia2\n")


def test_occultation(tmp_path: Path) -> None:
    text = (
        "# "
        "version=2022\npermID|mode|stn|sys|ctr|pos1|pos2|pos3|obsTime|raStar|decStar|deltaRA|deltaDec|rmsRA|rmsDec|astCat\n"
        "123|OCC|275|ICRF_KM|399|1|2|3|2024-03-01T05:06:07.12Z|359.9999|60.0|1.8|-0.5|0.001|0.002|Gaia3\n"
    )
    arc = read(tmp_path, text)
    row = arc.table.iloc[0]
    assert row.kind == "occultation" and row.use
    assert row.ra == pytest.approx(359.9999 + 1.8 / 3600 / 0.5 - 360.0, abs=1e-12)
    assert row.dec == pytest.approx(60.0 - 0.5 / 3600, abs=1e-12)
    write_psv(arc, tmp_path / "y.psv")
    same(arc, read_arc(tmp_path / "y.psv"))


def test_occultation_in_distance_and_angle(tmp_path: Path) -> None:
    text = (
        "# version=2022\npermID|mode|stn|obsTime|raStar|decStar|dist|pa|rmsDist|rmsPA|astCat\n"
        "123|OCC|244|2024-03-01T05:06:07.12Z|10.0|0.0|10.0|90.0|0.2|1.0|Gaia3\n"
    )
    row = read(tmp_path, text).table.iloc[0]
    assert row.site == "geocentre" and row.use
    assert row.ra == pytest.approx(10.0 + 10.0 / 3600) and row.dec == pytest.approx(0.0, abs=1e-12)
    assert (row.rmsRA, row.rmsDec) == (pytest.approx(0.2), pytest.approx(10 * np.radians(1.0)))


def test_other_kinds_are_kept(tmp_path: Path) -> None:
    text = HEAD + ROW + "\n"
    text += "permID|trx|rcv|obsTime|frq|delay|rmsDelay|doppler|rmsDoppler\n"
    text += "123|251|251|2024-03-01T05:06:00Z|2380|12.5|2.0||\n"
    text += "123|251|251|2024-03-01T05:06:00Z|2380|||-15.5|0.2\n"
    text += "permID|mode|stn|obsTime|obsCenter|deltaRA|deltaDec\n"
    text += "123|CCD|G96|2024-03-01T05:06:00Z|Jupiter|1.5|-3\n"
    text += "permID|obsTime|orbProd|orbID|resRA|resDec|selAst|sigRA|sigDec\n"
    text += "123|2024-03-01T05:06:07Z|Me|1|1e-2|0.1|A|0.1|0.1\n"
    arc = read(tmp_path, text)
    assert arc.table.kind.tolist() == ["optical", "radar", "radar", "offset", "opticalResidual"]
    assert arc.table.use.tolist() == [True, True, True, False, False]
    assert all(arc.table.why_not[3:] != "") and len(arc.used) == 3
    write_psv(arc, tmp_path / "y.psv")
    same(arc, read_arc(tmp_path / "y.psv"))


def test_deprecated(tmp_path: Path) -> None:
    arc = read(tmp_path, HEAD.replace("astCat", "astCat|deprecated") + ROW + "|X\n" + ROW + "|\n")
    assert arc.table.use.tolist() == [False, True]


def test_precision_group(tmp_path: Path) -> None:
    arc = read(
        tmp_path,
        HEAD.replace("astCat", "astCat|precTime|precRA|precDec")
        + ROW.replace("20.5", "60.0")
        + "|10|0.01|0.1\n",
    )
    row = arc.table.iloc[0]
    assert (row.digits_time_s, row.digits_dec_arcsec) == (
        1.0,
        360.0,
    )  # what the digits say is coarser here
    arc = read(
        tmp_path,
        HEAD.replace("astCat", "astCat|precTime|precRA|precDec")
        + "123|CCD|G96|2024-03-01T05:06:07.123Z|10.500000|60.000000|Gaia2|100|0.1|1\n",
    )
    row = arc.table.iloc[0]
    assert row.digits_time_s == pytest.approx(8.64)
    assert (row.digits_ra_arcsec, row.digits_dec_arcsec) == (pytest.approx(0.75), 1.0)


def test_short_rows_are_reported(tmp_path: Path) -> None:
    with pytest.warns(NgboundWarning, match="line 3: the record has 7 cells, the keyword row 8"):
        arc = read(tmp_path, HEAD.replace("astCat", "astCat|remarks") + ROW + "\n")
    assert len(arc) == 1 and "remarks" not in arc.table


def test_own_station(tmp_path: Path) -> None:
    text = HEAD + ROW.replace("G96", "Q9x9") + "\n"
    arc = read(
        tmp_path,
        text,
        stations={"Q9x9": {"longitude_deg": 1.0, "latitude_deg": 2.0, "altitude_m": 3.0}},
    )
    assert arc.station("Q9x9").longitude_deg == 1.0 and arc.used.station("Q9x9").kind == "fixed"
    with pytest.raises(ArcError, match="station 'Q9x9'"):
        read(tmp_path, text)


def bad(column: str, value: str) -> str:
    names = HEAD.split("\n")[1].split("|")
    cells = ROW.split("|")
    if column in names:
        cells[names.index(column)] = value
        return HEAD + ROW + "\n" + "|".join(cells) + "\n"
    return HEAD.replace("astCat", f"astCat|{column}") + ROW + "|\n" + ROW + f"|{value}\n"


@pytest.mark.parametrize(
    ("column", "value", "words"),
    [
        ("ra", "360.0", "'360.0'.*0, 360"),
        ("ra", "-1.0", "0, 360"),
        ("ra", "12 34 56", "decimal number"),
        ("ra", "010.5", "leading zeros"),
        ("ra", "1.0123456789", "9 decimals"),
        ("ra", "NaN", "decimal number"),
        ("ra", "1e1", "decimal number"),
        ("dec", "90.5", r"-90, 90.*exchanged"),
        ("dec", "-05.5", "leading zeros"),
        ("ra", "", "missing"),
        ("astCat", "", "UNK"),
        ("obsTime", "2024-03-01", "YYYY-MM-DD"),
        ("obsTime", "2024-02-30T00:00:00Z", "no such date"),
        ("obsTime", "2024-03-01T00:00:00.1234567Z", "6 decimals"),
        ("stn", "ZZZ", "station 'ZZZ'.*near"),
        ("stn", "g96", "G96"),
        ("permID", "(433)", "433, 73P"),
        ("permID", "A0345", "unpacked"),
        ("permID", "", "names no object"),
        ("mode", "CCDX", "at most 3"),
        ("rmsRA", "0", r"\(0, 100000\)"),
        ("rmsRA", "-1", "decimal"),
        ("rmsRA", "0.1234567", "at most 7 characters"),
        ("rmsCorr", "1.5", "-1, 1"),
        ("mag", "36", "-5, 35"),
        ("nStars", "1.5", "whole number"),
        ("disc", "x", r"\* or \+"),
        ("band", "toolong", "band"),
        ("rmsTime", "abc", "decimal number in s"),
        ("sys", "WGS", "WGS84"),
        ("pos1", "1.0", "come together"),
        ("precRA", "0.1", "come together"),
    ],
)
def test_bad_values(tmp_path: Path, column: str, value: str, words: str) -> None:
    with pytest.raises(ArcError, match=words) as caught:
        read(tmp_path, bad(column, value))
    message = str(caught.value)
    assert "x.psv, line 4, column " in message and caught.value.data["line"] == 4
    assert message.endswith(".") and "\n" not in message


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (HEAD.split("\n", 1)[1] + ROW, "line 1: the first line.*version=2022"),
        (HEAD.replace("2022", "2019") + ROW, "'2019' is not known"),
        (HEAD.replace("|stn", "") + ROW, "line 2: the column stn is missing"),
        (
            HEAD.replace("stn", "station") + ROW,
            "line 2: the column 'station' is not an ADES column",
        ),
        (HEAD.replace("astCat", "astCat|Remarks") + ROW + "|", "'Remarks'.*did you mean remarks"),
        (HEAD.replace("astCat", "astCat|mode") + ROW + "|CCD", "column mode stands twice"),
        (
            HEAD.replace("astCat", "astCat|") + ROW + "|",
            "line 2: column 8 of the keyword row has no name",
        ),
        (
            HEAD.replace("astCat", "astCat|delay") + ROW + "|1",
            "delay does not belong to records of the kind optical",
        ),
        (HEAD + ROW + "|", "line 3: the record has 8 cells, the keyword row .line 2. 7 names"),
        (HEAD, "no observation"),
        (HEAD + HEAD.split("\n")[1] + "\n" + ROW, "line 3: this is a second keyword row"),
        ("# version=2022\n" + ROW, "line 2: a record stands before any keyword row"),
        (HEAD + ROW + "\n# observatory\n! mpcCode G96\n" + ROW, "line 6: a record stands before"),
        ("# version=2022\n# observatry\n", "Did you mean observatory"),
        ("# version=2022\n# observatory\n! mpccode G96\n", "Did you mean mpcCode"),
        ("# version=2022\n! mpcCode G96\n", "must follow"),
        ("# version=2022\n# comment about it\n", "'# comment', then '! line text'"),
        (HEAD + "# free comment\n" + ROW, "line 3: 'free' is not an element of a header"),
        (HEAD + ROW + "\n124" + ROW[3:], "2 objects in it: 123 .1., 124 .1.*--object"),
    ],
)
def test_bad_files(tmp_path: Path, text: str, words: str) -> None:
    with pytest.raises(ArcError, match=words) as caught:
        read(tmp_path, text)
    assert "x.psv" in str(caught.value)


def test_writing_where_nothing_can_be_written(tmp_path: Path) -> None:
    arc = read(tmp_path, PSV)
    with pytest.raises(ArcError, match="cannot be written"):
        write_psv(arc, tmp_path / "no" / "folder.psv")
    with pytest.raises(ArcError, match="version '2023'"):
        write_psv(arc, tmp_path / "y.psv", version="2023")
    assert not (tmp_path / "y.psv").exists()


@pytest.mark.slow
def test_a_hundred_thousand_rows(tmp_path: Path) -> None:
    rng = np.random.default_rng(5)
    ra = rng.uniform(0.0, 360.0, 100_000)
    rows = [
        f"123|CCD|G96|2024-03-01T05:06:{i % 60:02d}.{i % 997:03d}Z|{a:.6f}|20.5|Gaia2"
        for i, a in enumerate(ra)
    ]
    arc = read(tmp_path, HEAD + "\n".join(rows) + "\n")
    np.testing.assert_array_equal(arc.table.ra, [float(f"{a:.6f}") for a in ra])
