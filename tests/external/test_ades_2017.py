"""ADES of version 2017: every column, record and header gets the verdict of that version.

Source: the PyPI package iau-ades 0.1.3 (IAU working group on ADES) holds the schema of version 2022
alone. The one used here is that schema with the types and elements put back that
past_versions/v2017/adesmaster_v2017.xml of the IAU-ADES repository has otherwise (`schema_2017`).
One point is left open: whether an occultation may name its mode in 2017. The description of 2022
says that mode became compulsory there, the archived schema does not have it; both are read, and
what is written has none.
"""

import re
from pathlib import Path

import pytest
from ades import adesutility, xmlutility
from hypothesis import HealthCheck, Phase, given, settings
from lxml import etree

from ngbound.arc import ADES_COLUMNS, read_arc, write_psv, write_xml
from ngbound.arc.ades_rules import NEW_IN_2022
from ngbound.arc.checking import Checker
from ngbound.arc.reading import records_of
from ngbound.errors import ArcError
from tests.external import test_ades_toolkit as toolkit

TYPES = {
    **dict.fromkeys(("DecimalType", "DoubleType"), "xsd:decimal"),
    **dict.fromkeys(("StringTypeW25", "StringTypeW35", "StringTypeW100"), "StringType"),
    "PosDecimalType": "PosDecimalType",
    "PosIntegerType": "xsd:positiveInteger",
    "FrequencyType": "PosDecimalType",
    "CtrType": "xsd:integer",
    "MagType": "xsd:decimal",
}


@pytest.fixture(scope="module")
def schema_2017() -> etree.XMLSchema:
    """The general schema of version 2017."""
    tree = xmlutility.transformViaXSLT(
        adesutility.readXML(adesutility.adesmaster),
        adesutility.readXML(adesutility.schemaxslts["general"]),
    )
    xsd = "{http://www.w3.org/2001/XMLSchema}"
    root = etree.fromstring(etree.tostring(tree))
    for element in list(root.iter(f"{xsd}element")):
        parent = element.getparent()
        if element.get("ref") in NEW_IN_2022 or element.get("name") in NEW_IN_2022:
            parent.remove(element)
        elif element.get("type") in TYPES:
            element.set("type", TYPES[element.get("type")])
        elif element.get("type") and element.get("type").split("W")[0] in TYPES:
            element.set("type", TYPES[element.get("type").split("W")[0]])
        if element.get("ref") == "observers":
            element.attrib.pop("minOccurs")
        if element.get("ref") == "mode" and "Occultation" in parent.getparent().get("name", ""):
            element.set("minOccurs", "0")
    drop = {
        "PosDecimalType": ("maxExclusive", "pattern"),
        "RAType": ("pattern",),
        "DeclinationType": ("pattern",),
        "CorrDecimalType": ("pattern", "minExclusive", "maxExclusive"),
        "PermIDType": ("maxLength",),
    }
    for name, facets in drop.items():
        kind = root.find(f"{xsd}simpleType[@name='{name}']/{xsd}restriction")
        for facet in [f for f in kind if f.tag.removeprefix(xsd) in facets]:
            kind.remove(facet)
    kind = root.find(f"{xsd}simpleType[@name='PermIDType']/{xsd}restriction")
    kind.set("base", "StringType")
    kind = root.find(f"{xsd}simpleType[@name='CorrDecimalType']/{xsd}restriction")
    etree.SubElement(kind, f"{xsd}minInclusive", value="-1.0")
    etree.SubElement(kind, f"{xsd}maxInclusive", value="1.0")
    for name, facet, value in (
        ("TimeHelp", "pattern", r"\d{4}-\d{2}-\d{2}T\d{2}:\d{2}:\d{2}(\.\d+)?Z"),
        ("RefType", "maxLength", "16"),
        ("VersionType", "enumeration", "2017"),
    ):
        root.find(f"{xsd}simpleType[@name='{name}']/{xsd}restriction/{xsd}{facet}").set(
            "value", value
        )
    root.find(f"{xsd}group[@name='OpticalResiduals']/{xsd}sequence/{xsd}choice").set(
        "minOccurs", "0"
    )
    return etree.XMLSchema(root)


MORE = {
    "decimal": ["+0.1", "007.50", "1" * 30, "0." + "1" * 20, ".5", "5.", "1e1", "1e-3", "-", "NaN"],
    "double": ["1.23456789012345", "1e-3", "+1", ".5", "-00.5"],
    "integer": ["10", "0", "1", "-5", "007", "12345678", "1.0", "1e3"],
    "text": ["x" * 17, "x" * 29, "x" * 101, "x" * 400, "ab"],
    "time": ["2024-03-01T05:06:07.123456789012Z", "2024-03-01T05:06:07.1234567Z"],
}
MORE_OF = {
    "mag": ["99", "-30", "35.000001", "-5.5"],
    "rmsCorr": ["1", "-1", "1.00", "1.0001", "-1.1"],
    "sigCorr": ["1", "-1", "1.00", "1.0001"],
    "ctr": ["10", "-399", "99999999999", "0"],
    "ra": ["+000.1", "359.9999999999999", "360.0", "-0.0", "-0.1"],
    "dec": ["+090.0", "-90.000", "90.0000000001"],
    "permID": ["1" * 26, "(" + "1" * 30 + ") 1"],
    "ref": ["x" * 16, "x" * 17],
    "nStars": ["1000000", "0"],
    "delay": ["12500000", "100000"],
    "precRA": ["60.0", "6.0", "1.0", "0.60"],
}
DIFFERENT = [
    # column, value, allowed in 2017, allowed in 2022
    *((c, "1", False, True) for c in ("vel1", "vel2", "vel3", "shapeOcc")),
    *((c, "x1", False, True) for c in ("obsSubID", "trkMPC", "fltr")),
    ("resRA", "1e-2", False, True),
    ("posCov12", "1E-4", False, True),
    ("ref", "x" * 20, False, True),
    ("ra", "+010.1234567890", True, False),
    ("dec", "-05.5", True, False),
    ("obsTime", "2024-03-01T05:06:07.1234567Z", True, False),
    ("rmsCorr", "1.00", True, False),
    ("rmsRA", "+0.123456789", True, False),
    ("mag", "99", True, False),
    ("ctr", "10", True, False),
    ("pos1", "008.4545", True, False),
    ("resRA", "0.123456", True, False),
    ("nStars", "1000000", True, False),
    ("orbID", "x" * 30, True, False),
    ("delay", "12500000", True, False),
    ("frq", "+2380", True, False),
]
TOO_LONG = re.compile(r"[-+.0-9]{81,}")


def allowed(content: bytes, name: str) -> bool:
    """Our verdict on a file."""
    try:
        Checker(records_of(content, name)).everything()
    except ArcError as error:
        assert name in str(error) and str(error)[-1] in ".?"
        return False
    return True


@pytest.mark.parametrize("column", sorted(ADES_COLUMNS))
def test_values_get_the_verdict_of_2017(
    tmp_path: Path, schema_2017: etree.XMLSchema, column: str
) -> None:
    good, bad = toolkit.VALUES[column]
    values = [*good, *bad, *MORE[ADES_COLUMNS[column].form], *MORE_OF.get(column, ())]
    verdicts = []
    for value in dict.fromkeys(values):
        kind, cells = toolkit.with_value(column, value)
        if value != value.strip():
            continue
        document = toolkit.xml_text([(kind, cells)], "2017")
        asked = schema_2017.validate(etree.fromstring(document))
        assert allowed(document, "x.xml") is asked, (value, schema_2017.error_log)
        path = tmp_path / "x.psv"
        path.write_text(toolkit.psv_text([(kind, cells)], "2017"), encoding="utf-8")
        assert toolkit.psv_verdict(schema_2017, path) is asked
        assert allowed(path.read_bytes(), "x.psv") is asked, value
        verdicts.append(asked)
    assert not all(verdicts) or column in ("artSat", "orbProd", "orbID", "photProd")
    assert any(verdicts) is (column not in NEW_IN_2022)


@pytest.mark.parametrize(("column", "value", "in_2017", "in_2022"), DIFFERENT)
def test_where_the_versions_differ(
    tmp_path: Path, column: str, value: str, in_2017: bool, in_2022: bool
) -> None:
    for version, verdict in (("2017", in_2017), ("2022", in_2022)):
        case = [toolkit.with_value(column, value)]
        assert allowed(toolkit.xml_text(case, version), "x.xml") is verdict
        assert allowed(toolkit.psv_text(case, version).encode(), "x.psv") is verdict


@pytest.mark.parametrize(("kind", "change"), [case[:2] for case in toolkit.STRUCTURE])
def test_records_get_the_verdict_of_2017(
    tmp_path: Path, schema_2017: etree.XMLSchema, kind: str, change: dict[str, str]
) -> None:
    case = [(kind, toolkit.record(kind, **change))]
    document = toolkit.xml_text(case, "2017")
    asked = schema_2017.validate(etree.fromstring(document))
    assert allowed(document, "x.xml") is asked
    path = tmp_path / "x.psv"
    path.write_text(toolkit.psv_text(case, "2017"))
    if kind != "occultation" or "mode" not in change:  # which the converter wants in both versions
        assert toolkit.psv_verdict(schema_2017, path) is asked
    assert allowed(path.read_bytes(), "x.psv") is asked


@pytest.mark.parametrize(("old", "new"), [case[:2] for case in toolkit.HEADERS])
def test_headers_get_the_verdict_of_2017(
    tmp_path: Path, schema_2017: etree.XMLSchema, old: str, new: str
) -> None:
    path = tmp_path / "x.psv"
    path.write_text(
        toolkit.HEADER.replace(old, new, 1).replace("=2022", "=2017").replace("= 2022", "=2017")
    )
    asked = toolkit.psv_verdict(schema_2017, path)
    if new.endswith("astCat\n"):
        return  # an unfinished file, see the same test of 2022
    assert allowed(path.read_bytes(), "x.psv") is asked


def test_more_headers_of_2017(tmp_path: Path, schema_2017: etree.XMLSchema) -> None:
    for old, new in (
        ("! aperture 1.5", "! aperture +01.500000"),
        ("! aperture 1.5", "! aperture .5"),
        ("! aperture 1.5", "! aperture -1"),
        ("! aperture 1.5", "! aperture 1e1"),
        ("! design Reflector", "! design " + "x" * 200),
        ("! line made up", "! line " + "x" * 500),
        ("! fRatio 3.5", "! fRatio 100000"),
    ):
        path = tmp_path / "x.psv"
        path.write_text(toolkit.HEADER.replace(old, new, 1).replace("=2022", "=2017"))
        assert allowed(path.read_bytes(), "x.psv") is toolkit.psv_verdict(schema_2017, path)


def test_an_occultation_of_2017_needs_no_mode(tmp_path: Path, schema_2017: etree.XMLSchema) -> None:
    plain = toolkit.record("occultation")
    for cells in (plain, {c: v for c, v in plain.items() if c != "mode"}):
        path = tmp_path / "a.psv"
        path.write_text(toolkit.psv_text([("occultation", cells)], "2017"))
        arc = read_arc(path)
        assert arc.table["mode"].tolist() == ["OCC"]
        write_xml(arc, tmp_path / "b.xml", version="2017")
        document = etree.parse(str(tmp_path / "b.xml"))
        assert schema_2017.validate(document) and document.find(".//mode") is None
        toolkit.same(arc, read_arc(tmp_path / "b.xml"))
    path.write_text(toolkit.psv_text([("occultation", plain | {"mode": "VID"})], "2017"))
    arc = read_arc(path)
    assert arc.table["mode"].tolist() == ["VID"]
    with pytest.raises(ArcError, match=r"column mode.*'VID'.*version 2017.*version='2022'"):
        write_psv(arc, tmp_path / "b.psv", version="2017")


@settings(
    max_examples=15,
    phases=[Phase.explicit, Phase.reuse, Phase.generate],
    deadline=None,
    suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow],
)
@given(toolkit.drawn_file("2017"))
def test_what_we_write_in_2017_is_valid_and_reads_back_as_the_arc(
    tmp_path: Path, schema_2017: etree.XMLSchema, text: str
) -> None:
    source = tmp_path / "a.psv"
    source.write_text(text)
    assert toolkit.psv_verdict(schema_2017, source), schema_2017.error_log
    arc = read_arc(source)
    write_psv(arc, tmp_path / "b.psv", version="2017")
    write_xml(arc, tmp_path / "b.xml", version="2017")
    assert schema_2017.validate(etree.parse(str(tmp_path / "b.xml"))), schema_2017.error_log
    toolkit.same(arc, read_arc(tmp_path / "b.psv"))
    toolkit.same(arc, read_arc(tmp_path / "b.xml"))
