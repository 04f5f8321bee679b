"""Packed designations. The examples are those of the Minor Planet Center's published description of
packed forms, recalled
from memory, where marked "published"; the others follow from its rules."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ngbound.arc import designations as d


@pytest.mark.parametrize(
    ("packed", "number"),
    [
        ("00433", "433"),
        ("03202", "3202"),  # published
        ("50000", "50000"),  # published
        ("A0345", "100345"),  # published
        ("a0017", "360017"),  # published
        ("K3289", "203289"),  # published
        ("~0000", "620000"),  # published
        ("~000z", "620061"),  # published
        ("~AZaz", "3140113"),  # published
        ("~zzzz", "15396335"),  # published
        ("0073P", "73P"),
        ("0001I", "1I"),
        ("J013S", "Jupiter 13"),  # published
        ("N002S", "Neptune 2"),  # published
    ],
)
def test_permanent(packed: str, number: str) -> None:
    assert d.unpack_permanent(packed) == number


@pytest.mark.parametrize(
    ("packed", "name"),
    [
        ("J95X00A", "1995 XA"),  # published
        ("J95X01L", "1995 XL1"),  # published
        ("J95F13B", "1995 FB13"),  # published
        ("J98SA8Q", "1998 SQ108"),  # published
        ("J98SC7V", "1998 SV127"),  # published
        ("J98SG2S", "1998 SS162"),  # published
        ("K99AJ3Z", "2099 AZ193"),  # published
        ("K08Aa0A", "2008 AA360"),  # published
        ("K07Tf8A", "2007 TA418"),  # published
        ("PLS2040", "2040 P-L"),  # published
        ("T1S3138", "3138 T-1"),  # published
        ("T2S1010", "1010 T-2"),  # published
        ("T3S4101", "4101 T-3"),  # published
        ("_QC0000", "2026 CA620"),  # published
        ("_QC0aEM", "2026 CZ6190"),  # published
    ],
)
def test_provisional(packed: str, name: str) -> None:
    assert d.unpack_provisional(packed) == name
    assert d.pack_provisional(name) == packed


@pytest.mark.parametrize(
    ("columns", "found"),
    [
        ("12893J98Q55S", {"permID": "12893", "provID": "1998 QS55"}),
        ("     K24A01B", {"provID": "2024 AB1"}),
        ("     abc12  ", {"trkSub": "abc12"}),
        ("    CJ95O010", {"provID": "C/1995 O1"}),  # published
        ("    PJ94P01b", {"provID": "P/1994 P1-B"}),  # published
        ("    DJ93F02e", {"provID": "D/1993 F2-E"}),
        ("    CK13A010", {"provID": "C/2013 A1"}),
        ("    PK10A00A", {"provID": "P/2010 AA"}),
        ("    CK18Y04S", {"provID": "C/2018 YS4"}),
        ("    AK17U010", {"provID": "A/2017 U1"}),
        ("0001I       ", {"permID": "1I"}),
        ("0001IAK17U010"[:12], None),
        ("0073P      c", {"permID": "73P-C"}),
        ("0073P     ab", {"permID": "73P-AB"}),
        ("0002PK23A010", {"permID": "2P", "provID": "P/2023 A1"}),
        ("    SJ99U030", {"provID": "S/1999 U 3"}),
        ("J013S       ", {"permID": "Jupiter 13"}),
        ("            ", {}),
    ],
)
def test_columns(columns: str, found: dict[str, str] | None) -> None:
    if found is None:
        with pytest.raises(ValueError, match="packed"):
            d.unpack_columns(columns)
    else:
        assert d.unpack_columns(columns) == found


@pytest.mark.parametrize("packed", ["?0000", "1234", "~00-0", "12 45", "ABCDE", "0073Q"])
def test_permanent_refused(packed: str) -> None:
    with pytest.raises(ValueError):
        d.unpack_permanent(packed)


@pytest.mark.parametrize("packed", ["J95XA", "Z95X00A", "J95I00A", "J95X0AA", "J9XX00A", "_QI0000"])
def test_provisional_refused(packed: str) -> None:
    with pytest.raises(ValueError):
        d.unpack_provisional(packed)


@given(st.integers(1, 15_396_335))
def test_permanent_round_trip(number: int) -> None:
    assert d.unpack_permanent(d.pack_permanent(number)) == str(number)


@given(
    st.integers(2000, 2049),
    st.sampled_from("ABCDEFGHJKLMNOPQRSTUVWXY"),
    st.sampled_from("ABCDEFGHJKLMNOPQRSTUVWXYZ"),
    st.integers(0, 9000),
)
def test_provisional_round_trip(year: int, half: str, order: str, cycle: int) -> None:
    name = f"{year} {half}{order}{cycle or ''}"
    assert d.unpack_provisional(d.pack_provisional(name)) == name


@given(st.text(max_size=14))
def test_only_value_errors(text: str) -> None:
    try:
        d.unpack_columns(text)
    except ValueError:
        return
