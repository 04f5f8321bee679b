"""Files made to harm: bombs, endless fields, limits."""

import gzip
import time
from pathlib import Path

import numpy as np
import pytest

from ngbound.arc import read_arc, vet
from ngbound.arc.fields import pack, parse_decimals, parse_times
from ngbound.errors import ArcError
from tests.arc.samples import PSV, put

LIMIT_S = 10.0
ROW = "433|CCD|G96|2024-03-01T05:06:07Z|10.5|20.5|Gaia2|"
HEAD = "# version=2022\npermID|mode|stn|obsTime|ra|dec|astCat|remarks\n"
OPTICAL = (
    "<optical><trkSub>ab</trkSub><mode>CCD</mode><stn>G96</stn><obsTime>2024-03-01T05:06:07Z"
    "</obsTime><ra>1</ra><dec>2</dec><astCat>UNK</astCat>{more}</optical>"
)


def test_the_limit_can_be_set(tmp_path: Path) -> None:
    path = put(tmp_path, "a.psv", PSV)
    with pytest.raises(ArcError, match=r"a\.psv: the file holds more than 100 bytes.*max_bytes"):
        read_arc(path, max_bytes=100)
    assert len(read_arc(path, max_bytes=len(PSV))) == 3


def test_a_gzip_bomb_stops_at_the_limit(tmp_path: Path) -> None:
    path = put(tmp_path, "bomb.gz", gzip.compress(b" " * 50_000_000, mtime=0))
    assert path.stat().st_size < 60_000
    with pytest.raises(ArcError, match="more than 1000000 bytes"):
        read_arc(path, max_bytes=1_000_000)
    twice = put(tmp_path, "twice.gz", gzip.compress(path.read_bytes(), mtime=0))
    with pytest.raises(ArcError):
        read_arc(twice)


@pytest.mark.parametrize(
    "bomb",
    [
        "<!DOCTYPE ades [<!ENTITY e0 'x'>"
        + "".join(f"<!ENTITY e{i} '{f'&e{i - 1};' * 10}'>" for i in range(1, 12))
        + "]><ades version='2022'>&e11;</ades>",
        "<!DOCTYPE ades [<!ENTITY a '"
        + "x" * 100_000
        + "'>]><ades version='2022'>"
        + "&a;" * 1000
        + "</ades>",
        "<!DOCTYPE ades [<!ENTITY a SYSTEM 'file:///etc/hostname'>]>"
        "<ades version='2022'>" + OPTICAL.format(more="<remarks>&a;</remarks>") + "</ades>",
        "<!DOCTYPE ades [<!ENTITY % p SYSTEM 'http://127.0.0.1:9/x'> %p;]><ades version='2022'/>",
        "<!DOCTYPE ades SYSTEM 'http://127.0.0.1:9/x'><ades version='2022'/>",
        "<ades version='2022'>" + "<a>" * 100_000,
        "<ades version='2022' xmlns:xi='http://www.w3.org/2001/XInclude'>"
        "<xi:include href='file:///etc/hostname' parse='text'/></ades>",
        "<ades version='2022'>"
        + OPTICAL.format(more="<remarks>" + "x" * 11_000_000 + "</remarks>"),
        "<?xml version='1.0'?><?xml-stylesheet href='file:///etc/hostname'?><ades version='2022'>",
    ],
    ids=["entities", "quadratic", "file", "parameter", "dtd", "deep", "include", "long", "style"],
)
def test_xml_that_expands_or_reaches_out_is_refused(tmp_path: Path, bomb: str) -> None:
    start = time.perf_counter()
    with pytest.raises(ArcError) as caught:
        read_arc(put(tmp_path, "a.xml", bomb))
    assert time.perf_counter() - start < LIMIT_S and len(str(caught.value)) < 1000
    hostname = Path("/etc/hostname")
    if hostname.exists():
        assert hostname.read_text().strip() not in str(caught.value)


@pytest.mark.parametrize(
    "text",
    [
        HEAD + ROW + " " * 3_000_000 + "\n",
        HEAD + " " * 3_000_000 + ROW + "\n",
        HEAD + "\n" * 1_000_000 + ROW + "\n",
        HEAD + (ROW + "\n") * 20_000 + ROW + "x" * 300 + "\n",
        HEAD + ROW.replace("|", " \t" * 100_000 + "|") + "\n",
        HEAD + "\u2003" * 500_000 + ROW + "\n",
        "\n" * 500_000 + HEAD + ROW + "\n",
    ],
    ids=["blanks", "blanks before", "lines", "one long", "mixed", "odd blanks", "late"],
)
def test_endless_padding_is_read_in_linear_time(tmp_path: Path, text: str) -> None:
    start = time.perf_counter()
    assert len(read_arc(put(tmp_path, "a.psv", text))) >= 1
    assert time.perf_counter() - start < LIMIT_S


@pytest.mark.parametrize("column", ["ra", "obsTime", "stn", "remarks", "mag"])
def test_an_endless_field_is_refused(tmp_path: Path, column: str) -> None:
    names = HEAD.split("\n")[1].split("|")
    cells = ROW.split("|")
    if column not in names:
        names.append(column)
        cells.append("")
    rows = ["|".join(cells)] * 3000
    cells[names.index(column)] = "1" * 2_000_000
    text = "# version=2022\n" + "|".join(names) + "\n" + "\n".join([*rows, "|".join(cells)]) + "\n"
    start = time.perf_counter()
    with pytest.raises(ArcError, match=rf"line 3003, column {column}: the value '1+\.\.\.'"):
        read_arc(put(tmp_path, "a.psv", text))
    assert time.perf_counter() - start < LIMIT_S


def test_one_long_text_costs_no_matrix() -> None:
    texts = np.array(["1.5"] * 10_000 + ["1" * 1_000_000], dtype=object)
    assert pack(texts).turned.nbytes < 10**6
    assert parse_decimals(texts).ok.sum() == 10_000
    assert not parse_times(texts).well_formed.any()


def test_many_records_at_one_instant_are_vetted_quickly(tmp_path: Path) -> None:
    start = time.perf_counter()
    found = vet(read_arc(put(tmp_path, "a.psv", HEAD + (ROW + "\n") * 3000)))
    assert found[1].kind == "exact-duplicate" and time.perf_counter() - start < LIMIT_S
