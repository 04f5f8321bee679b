"""Files of all kinds: told by content, refused in one sentence."""

import gzip
import json
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from ngbound.arc import Arc, read_arc, write_psv, write_xml
from ngbound.errors import ArcError, NgboundError, NgboundWarning
from tests.arc.samples import PSV, ROVING, line80, put
from tests.arc.test_ades_psv import same


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (b"", "empty"),
        (b"  \n\n ", "empty"),
        (b"\x7fELF\x02\x01\x01\x00\x00", "binary"),
        (b"\x1f\x8b\x08\x00broken", "gzip file is broken"),
        (gzip.compress(PSV.encode())[:-12], "gzip file is broken"),
        ("# version=2022\n".encode("utf-16"), "UTF-16"),
        (b"# version=2022\n\xff\xe9\n", "line 2: byte 0xff is not UTF-8"),
        (b"hello world\n", "format is not recognised .the first line is 'hello world'"),
        (b"permID|mode\n1|CCD\n", "version=2022"),
        (b"# version=2022\n# comment\n! line a\x0eb\n", r"line 3: the control character '\\x0e'"),
        (b"{}", "no list of observations"),
        (b"[1, 2]", "no list of observations"),
        (b'[{"a": 1}, {"b": 2}]', "neither an 80-column string nor ADES"),
        (b"[{", "line 1, column 3: the JSON text is broken"),
    ],
)
def test_not_an_arc(tmp_path: Path, content: bytes, words: str) -> None:
    path = put(tmp_path, "a.bin", content)
    with pytest.raises(ArcError, match=words) as caught:
        read_arc(path)
    assert "a.bin" in str(caught.value) and "\n" not in str(caught.value)
    assert caught.value.exit_status == 2


def test_places_that_are_no_files(tmp_path: Path) -> None:
    put(tmp_path, "quiet.psv", PSV)
    with pytest.raises(ArcError, match="directory"):
        read_arc(tmp_path)
    with pytest.raises(ArcError, match="no such file. Did you mean quiet.psv"):
        read_arc(tmp_path / "quite.psv")
    with pytest.raises(ArcError, match="no such file. Check the path"):
        read_arc(tmp_path / "nowhere" / "x.psv")
    with pytest.raises(ArcError, match="more than 100 bytes"):
        read_arc(tmp_path / "quiet.psv", max_bytes=100)


def records() -> list[dict]:
    second = "     K24A01B  s2024 03 01.1234561 - 6490.4555 + 2183.2275 +  914.7962        250"
    first = line80(kind="S", stn="250", date="2024 03 01.123456")
    return [
        {"number": 1, "original_record": line80()},
        {"number": 2, "original_record": first + second},
    ]


@pytest.mark.parametrize("key", ["original_record", "obs80", "OBS80"])
@pytest.mark.parametrize("wrap", [False, True])
def test_json_with_80_columns(tmp_path: Path, key: str, wrap: bool) -> None:
    listed = [{key: r["original_record"]} for r in records()]
    arc = read_arc(
        put(tmp_path, "a.json", json.dumps({"data": listed, "n": 2} if wrap else listed))
    )
    assert arc.table.site.tolist() == ["fixed", "space"] and arc.table.line.tolist() == [1, 2]


def test_json_with_a_whole_text(tmp_path: Path) -> None:
    text = "\n".join(r["original_record"] for r in records()) + "\n"
    assert len(read_arc(put(tmp_path, "a.json", json.dumps([{"OBS80": text}])))) == 2


def test_json_with_ades_fields(tmp_path: Path) -> None:
    listed = [
        {
            "permid": "123",
            "stn": "G96",
            "mode": "CCD",
            "obstime": "2024-03-01T00:00:00.1Z",
            "ra": "010.50",
            "dec": 20.5,
            "astcat": "Gaia2",
            "rmsra": 0.2,
            "mag": None,
            "created": "x",
        },
        {
            "permid": "123",
            "stn": "G96",
            "mode": "CCD",
            "obstime": "2024-03-01T00:10:00Z",
            "ra": "10.51",
            "dec": "-20.5",
            "astcat": "Gaia2",
        },
    ]
    with pytest.warns(NgboundWarning, match="no ADES fields.*passed over: created"):
        arc = read_arc(put(tmp_path, "a.json", json.dumps([{"ADES_DF": listed}])))
    assert arc.table.dec.tolist() == [20.5, -20.5] and arc.table.use.all()
    # a number in JSON has lost its trailing zeros, a text has not
    assert arc.table.digits_dec_arcsec.tolist() == [0.0, pytest.approx(360.0)]
    cos = np.cos(np.radians(20.5))
    assert arc.table.digits_ra_arcsec.tolist() == pytest.approx([36.0 * cos] * 2)
    assert arc.table.rmsRA[0] == 0.2 and np.isnan(arc.table.rmsRA[1])
    listed[1]["dec"] = "95"
    with pytest.raises(ArcError, match="record 2, column dec: the value '95'"):
        read_arc(put(tmp_path, "a.json", json.dumps(listed)))


def test_json_takes_the_list_that_holds_observations(tmp_path: Path) -> None:
    content = {"notes": [{"by": "x"}], "observations": records()}
    assert len(read_arc(put(tmp_path, "a.json", json.dumps(content)))) == 2


@pytest.mark.parametrize("value", ["a|b", "a\nb", "a\ud800"])
def test_json_values_that_cannot_be_written(tmp_path: Path, value: str) -> None:
    row = {
        "trkSub": "a1",
        "stn": "G96",
        "mode": "CCD",
        "obsTime": "2024-03-01T00:00:00Z",
        "ra": "1",
    }
    row |= {"dec": "2", "astCat": "UNK", "remarks": value}
    with pytest.raises(ArcError, match="record 1, column remarks.*control characters"):
        read_arc(put(tmp_path, "a.json", json.dumps([row])))


def test_json_with_a_gap(tmp_path: Path) -> None:
    listed = [*records(), {"number": 3}]
    with pytest.raises(ArcError, match="record 3: it has no 80-column string"):
        read_arc(put(tmp_path, "a.json", json.dumps(listed)))


XML = """<?xml version="1.0" encoding="UTF-8"?>
<ades version="2022">
  <obsBlock>
    <obsContext>
      <observatory><mpcCode>G96</mpcCode></observatory><submitter><name>A. N.</name></submitter>
      <measurers><name>A. N.</name></measurers><telescope><design>R</design>
      <aperture>1.5</aperture><detector>CCD</detector></telescope>
      <comment><line>made up</line><line>twice</line></comment>
      <fundingSource>nobody</fundingSource>
    </obsContext>
    <obsData>
      <optical>
        <trkSub> ab12 </trkSub><mode>CCD</mode><stn>G96</stn>
        <obsTime>2024-03-01T05:06:07.8Z</obsTime><ra>123.4500</ra><dec>-12.34</dec>
        <astCat>Gaia2</astCat><remarks>a &lt; b &amp; c</remarks>
      </optical>
    </obsData>
  </obsBlock>
  <optical><trkSub>ab12</trkSub><mode>CCD</mode><stn>G96</stn><obsTime>2024-03-02T05:06:07Z</obsTime>
    <ra>123.5</ra><dec>-12.34</dec><astCat>UNK</astCat></optical>
</ades>
"""


def test_xml(tmp_path: Path) -> None:
    arc = read_arc(put(tmp_path, "a.xml", XML))
    assert arc.table.raText.tolist() == ["123.4500", "123.5"]
    assert arc.table.remarks.tolist() == ["a < b & c", ""]
    assert arc.table.block.tolist() == [0, -1] and arc.name == "ab12" and arc.table.line[0] == 12
    assert arc.contexts[0][4] == ("comment", "", (("line", "made up"), ("line", "twice")))
    write_xml(arc, tmp_path / "b.xml")
    again = read_arc(tmp_path / "b.xml")
    same(arc, again)
    assert again.contexts == arc.contexts
    write_psv(arc, tmp_path / "b.psv")
    same(arc, read_arc(tmp_path / "b.psv"))


@pytest.mark.parametrize("text", [PSV, ROVING])
def test_psv_through_xml(tmp_path: Path, text: str) -> None:
    arc = read_arc(put(tmp_path, "a.psv", text))
    write_xml(arc, tmp_path / "b.xml")
    same(arc, read_arc(tmp_path / "b.xml"))


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ('version="2022"', 'version="2021"', "attribute version"),
        ("<ades version", '<ades xmlns="x" version', "root element"),
        ("<ra>123.4500</ra>", "<ra>400</ra>", "column ra: the value '400'"),
        (
            "<ra>123.4500</ra>",
            "<RA>123</RA>",
            "line 14, element RA: it is not an element of optical",
        ),
        ("<ra>123.4500</ra>", "<ra>1</ra><ra>2</ra>", "twice"),
        ("<ra>123.4500</ra>", "<ra/>", "is empty"),
        ("<ra>123.4500</ra>", "<ra>1<b>2</b></ra>", "besides text"),
        ("<ra>123.4500</ra>", "", "line 12, column ra: the value is missing"),
        ("</ades>", "", "line .*the XML text is broken"),
        ("<ades", '<!DOCTYPE ades [<!ENTITY x "y">]><ades', "DOCTYPE"),
        ("<ades", '<!DOCTYPE ades SYSTEM "file:///etc/hostname"><ades', "DOCTYPE"),
        ("<obsData>", "<obsData><radar/>", "one kind only"),
        ("<obsData>", "<obsData><thing/>", "not a kind of record"),
        ("mpcCode>", "code>", "not an element of observatory"),
        ("<fundingSource>", "<x/><fundingSource>", "not an element of obsContext"),
        ("<obsBlock>", "<x/><obsBlock>", "not a child of ades"),
        ("<obsContext>", "<obsContext/><obsContext>", "obsContext and then obsData"),
        ('encoding="UTF-8"', 'encoding="nonsense"', "broken"),
    ],
)
def test_bad_xml(tmp_path: Path, old: str, new: str, words: str) -> None:
    assert old in XML
    with pytest.raises(ArcError, match=words) as caught:
        read_arc(put(tmp_path, "a.xml", XML.replace(old, new)))
    assert "a.xml" in str(caught.value)


def test_entity_bomb_is_refused(tmp_path: Path) -> None:
    levels = "".join(f'<!ENTITY e{i} "{f"&e{i - 1};" * 10}">' for i in range(1, 12))
    bomb = f'<!DOCTYPE ades [<!ENTITY e0 "x">{levels}]><ades version="2022">&e11;</ades>'
    with pytest.raises(ArcError):
        read_arc(put(tmp_path, "a.xml", bomb))


SEEDS = [
    PSV.encode(),
    ROVING.encode(),
    XML.encode(),
    (line80() + "\n" + line80(date="2024 03 02.5")).encode(),
    json.dumps(records()).encode(),
]


@settings(
    max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(
    st.sampled_from(SEEDS),
    st.lists(
        st.tuples(st.integers(0, 10**4), st.binary(max_size=3), st.integers(0, 4)), max_size=6
    ),
)
def test_mutated_files_give_an_arc_or_our_error(
    tmp_path: Path, seed: bytes, edits: list[tuple[int, bytes, int]]
) -> None:
    content = bytearray(seed)
    for at, new, cut in edits:
        place = at % (len(content) + 1)
        content[place : place + cut] = new
    path = put(tmp_path, "m", bytes(content))
    try:
        arc = read_arc(path)
    except NgboundError as error:
        assert str(error).strip().endswith((".", "?"))
    except UserWarning:
        return
    else:
        assert isinstance(arc, Arc) and len(arc) >= 1


optical_rows = st.lists(
    st.fixed_dictionaries(
        {
            "mode": st.sampled_from(["CCD", "CMO", "PHO"]),
            "stn": st.sampled_from(["G96", "703", "F51"]),
            "day": st.integers(1, 28),
            "sec": st.decimals(0, 59, places=3, allow_nan=False),
            "ra": st.decimals(0, 359, places=6, allow_nan=False),
            "dec": st.decimals(-90, 90, places=5, allow_nan=False),
            "astCat": st.sampled_from(["Gaia2", "UNK", "UCAC4"]),
            "rmsRA": st.one_of(st.none(), st.decimals("0.001", 9, places=3, allow_nan=False)),
            "mag": st.one_of(st.none(), st.decimals(-5, 30, places=2, allow_nan=False)),
            "remarks": st.one_of(st.none(), st.text("abc é<&\"'#!", min_size=1, max_size=8)),
        }
    ),
    min_size=1,
    max_size=5,
)


def as_psv(rows: list[dict]) -> str:
    lines = ["# version=2022", "trkSub|mode|stn|obsTime|ra|dec|rmsRA|astCat|mag|band|remarks"]
    for r in rows:
        cells = [
            "ab-1",
            r["mode"],
            r["stn"],
            f"2024-03-{r['day']:02d}T01:02:{r['sec']:06.3f}Z",
            f"{r['ra']:f}",
            f"{r['dec']:f}",
            "" if r["rmsRA"] is None else f"{r['rmsRA']:f}",
            r["astCat"],
            "" if r["mag"] is None else f"{r['mag']:f}",
            "" if r["mag"] is None else "V",
            (r["remarks"] or "").strip(),
        ]
        lines.append("|".join(cells))
    return "\n".join(lines) + "\n"


@settings(
    max_examples=15, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(optical_rows)
def test_round_trip_of_drawn_arcs(tmp_path: Path, rows: list[dict]) -> None:
    arc = read_arc(put(tmp_path, "a.psv", as_psv(rows)))
    np.testing.assert_array_equal(arc.table.ra, [float(r["ra"]) for r in rows])
    write_psv(arc, tmp_path / "b.psv")
    write_xml(arc, tmp_path / "b.xml")
    same(arc, read_arc(tmp_path / "b.psv"))
    same(arc, read_arc(tmp_path / "b.xml"))
