"""What the writers refuse, and what they respell."""

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from ngbound.arc import Arc, read_arc, write_psv, write_xml
from ngbound.errors import ArcError
from tests.arc.samples import PSV, frame, put


@pytest.mark.parametrize("write", [write_psv, write_xml])
@pytest.mark.parametrize(
    ("columns", "words"),
    [
        ({"mode": "CCDX"}, "row 0, column mode: the value 'CCDX'.*at most 3"),
        ({"permID": "(433)"}, "column permID.*unpacked"),
        ({"band": "V"}, "column mag: the value is missing although band"),
        ({"rmsMag": 0.1}, "column mag.*come together"),
        ({"sys": "WGS84"}, "column ctr"),
        ({"rmsRA": 1e-9}, "column rmsRA"),
    ],
)
def test_what_the_standard_does_not_allow_is_not_written(
    tmp_path: Path, write: Callable[..., None], columns: dict, words: str
) -> None:
    arc = Arc.from_frame(frame(3, **columns))
    with pytest.raises(ArcError, match=words):
        write(arc, tmp_path / "x")
    assert not list(tmp_path.iterdir())


def test_numbers_are_rounded_to_the_width_of_the_standard(tmp_path: Path) -> None:
    arc = Arc.from_frame(frame(3, rmsRA=0.123456789, exp=1.0 / 3.0, resRA=None))
    write_psv(arc, tmp_path / "x.psv")
    again = read_arc(tmp_path / "x.psv").table
    assert again.rmsRA.tolist() == [0.12346] * 3 and again.exp.tolist() == [0.3333] * 3
    np.testing.assert_allclose(again.ra, arc.table.ra, atol=1e-9)


def test_versions(tmp_path: Path) -> None:
    arc = Arc.from_frame(frame(3, mag=20.0, band="V", fltr="r"))
    with pytest.raises(ArcError, match=r"column fltr does not exist in version 2017.*drop"):
        write_psv(arc, tmp_path / "x", version="2017")
    with pytest.raises(ArcError, match="'2019' is not known"):
        write_xml(arc, tmp_path / "x", version="2019")


def test_a_header_that_2017_allowed(tmp_path: Path) -> None:
    text = PSV.replace("2022", "2017", 1).replace("CCD\nperm", "CCD made of three\nperm")
    text = text.replace("# measurers", "# observers\n! name A. Nobody\n# measurers")
    text = text.replace("three", "three chips of the old kind")
    arc = read_arc(put(tmp_path, "a.psv", text))
    with pytest.raises(ArcError, match=r"header of block 1.*telescope/detector.*'2017'"):
        write_psv(arc, tmp_path / "b.psv")
    write_psv(arc, tmp_path / "b.psv", version="2017")
    assert read_arc(tmp_path / "b.psv").contexts == arc.contexts


def test_a_header_that_2022_allowed(tmp_path: Path) -> None:
    arc = read_arc(put(tmp_path, "a.psv", PSV))
    with pytest.raises(ArcError, match=r"lacks it.*version 2017.*'2022'"):
        write_psv(arc, tmp_path / "b.psv", version="2017")
    with pytest.raises(ArcError, match=r"line 2, header element observers: .*version 2017"):
        read_arc(put(tmp_path, "c.psv", PSV.replace("2022", "2017", 1)))


def test_a_header_that_comes_again_is_the_same_header(tmp_path: Path) -> None:
    arc = read_arc(put(tmp_path, "a.psv", PSV))
    arc = replace(arc, table=arc.table.assign(block=[0, -1, 0]))
    write_psv(arc, tmp_path / "b.psv")
    write_xml(arc, tmp_path / "b.xml")
    for name in ("b.psv", "b.xml"):
        again = read_arc(tmp_path / name)
        assert again.contexts == arc.contexts and again.table.block.tolist() == [0, -1, 0]


def test_a_residual_record_under_a_header(tmp_path: Path) -> None:
    text = PSV + "permID|obsTime|orbProd|orbID|resRA|resDec|selAst|sigRA|sigDec\n"
    text += "654321|2024-03-01T05:06:07Z|Me|1|1e-2|0.1|A|0.1|0.1\n"
    arc = read_arc(put(tmp_path, "a.psv", text))
    assert arc.table.block.tolist() == [0, 0, 0, -1]
    wrong = replace(arc, table=arc.table.assign(block=0))
    with pytest.raises(ArcError, match="cannot stand under a header, but row 3 does"):
        write_psv(wrong, tmp_path / "b.psv")
