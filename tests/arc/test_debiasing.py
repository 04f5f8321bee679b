"""The user's table of catalogue offsets: how it is read, what it does to an arc and its errors."""

import gzip

import numpy as np
import pandas as pd
import pytest

from ngbound.arc import Arc, ErrorModel, debiased, read_debiasing
from ngbound.arc.catalogue_offsets import (
    AS_PUBLISHED,
    CORRECTED,
    NO_OFFSET,
    NO_PRIOR,
    NOT_IN_TABLE,
    REMAINING,
)
from ngbound.arc.healpix import ring_tile
from ngbound.errors import CaseError, NgboundWarning

NSIDE = 2
CATALOGUES = "c q o"
"""USNO-A2.0, UCAC-4, USNO-B1.0."""


def offsets():
    values = np.random.default_rng(1).normal(0.0, 1.0, (12 * NSIDE**2, 3, 4))
    return np.round(values * [0.2, 0.2, 4.0, 4.0], 3)


def text_of(values, head="! Offsets of star catalogues\n! a line of prose\n! " + CATALOGUES):
    rows = [" ".join(f"{x:9.3f}" for x in row) for row in values.reshape(len(values), -1)]
    return "\n".join([head, *rows]) + "\n"


@pytest.fixture
def write(tmp_path):
    def write_text(text, name="bias.dat"):
        path = tmp_path / name
        path.write_text(text)
        return path

    return write_text


def arc_of(catalogues=("USNOA2", "UCAC4", "Gaia2", "2MASS"), utc="2011-03-04T05:06:07Z"):
    n = len(catalogues)
    return Arc.from_frame(
        pd.DataFrame(
            {
                "permID": "999999",
                "mode": "CCD",
                "stn": "568",
                "obsTime": [utc] * n,
                "ra": np.linspace(10.0, 300.0, n),
                "dec": np.linspace(-60.0, 65.0, n),
                "astCat": list(catalogues),
            }
        )
    )


def test_the_table_is_read(write):
    values = offsets()
    table = read_debiasing(write(text_of(values)))
    assert (table.nside, table.catalogues) == (NSIDE, ("USNOA2", "UCAC4", "USNOB1"))
    assert table.offsets == pytest.approx(values, abs=1e-6)


@pytest.mark.parametrize(
    "head",
    [
        "# catalogues: USNOA2, UCAC4, USNOB1",
        "c q o",
        "! " + " ".join(letter for letter in "cqo" for _ in range(4)),
        "! NSIDE = 2\n! c q\n! o",
    ],
)
def test_heads_of_several_kinds(write, head):
    table = read_debiasing(write(text_of(offsets(), head)))
    assert table.catalogues == ("USNOA2", "UCAC4", "USNOB1")


def test_a_compressed_table(tmp_path):
    path = tmp_path / "bias.dat.gz"
    path.write_bytes(gzip.compress(text_of(offsets()).encode()))
    assert read_debiasing(path).nside == NSIDE


def test_the_table_is_read_once_and_again_when_the_file_changes(write):
    path = write(text_of(offsets()))
    first = read_debiasing(path)
    assert read_debiasing(path) is first
    write(text_of(2.0 * offsets()) + "\n")
    assert read_debiasing(path) is not first


def test_the_old_letter_of_ucac5(write):
    with pytest.warns(NgboundWarning, match="UCAC5"):
        table = read_debiasing(write(text_of(offsets(), "! c q W")))
    assert table.catalogues[2] == "UCAC5"


def without_a_line(text):
    return text.replace(text.splitlines()[7] + "\n", "", 1)


def with_a_word(text):
    lines = text.splitlines()
    lines[9] = lines[9].replace(lines[9].split()[3], "what", 1)
    return "\n".join(lines)


def with_a_short_line(text):
    lines = text.splitlines()
    lines[20] = lines[20].rsplit(None, 1)[0]
    return "\n".join(lines)


@pytest.mark.parametrize(
    ("spoil", "words"),
    [
        (without_a_line, "47 lines of numbers, from line 4 to line 50"),
        (with_a_word, "line 10: 'what' is no number"),
        (with_a_short_line, "line 21: 11 numbers"),
        (lambda text: text.replace("! c q o", "! c q"), "3 catalogues, but its head names 2"),
        (lambda text: text.replace("! c q o", "! x"), "names 1 on line 3"),
        (lambda text: "! c q o\n", "no line of numbers"),
        (lambda text: text_of(1000.0 * offsets()), "arcsec"),
        (lambda text: "! c\n1 2 3\n", "line 2: 3 numbers are not four"),
    ],
)
def test_faults_are_told_with_file_and_line(write, spoil, words):
    path = write(spoil(text_of(offsets())))
    with pytest.raises(CaseError) as caught:
        read_debiasing(path)
    assert words in str(caught.value) and str(path) in str(caught.value)
    assert "\n" not in str(caught.value)


def test_a_missing_table(tmp_path):
    with pytest.raises(CaseError, match="debiasing"):
        read_debiasing(tmp_path / "no.dat")
    with pytest.raises(CaseError, match="directory"):
        read_debiasing(tmp_path)


def test_positions_are_corrected_by_position_and_proper_motion(write):
    values = offsets()
    path = write(text_of(values))
    arc = arc_of()
    better = debiased(arc, path)
    ra, dec = arc.table["ra_rad"].to_numpy(), arc.table["dec_rad"].to_numpy()
    years = 11.0 + (31 + 28 + 3 + 5 / 24 + 6 / 1440 + 7 / 86400 - 0.5 - 0.25) / 365.25
    for row, column in ((0, 0), (1, 1)):
        four = values[ring_tile(NSIDE, ra[row], dec[row])[0], column]
        moved_ra = np.degrees(better.table["ra_rad"][row] - ra[row]) * 3600.0 * np.cos(dec[row])
        moved_dec = np.degrees(better.table["dec_rad"][row] - dec[row]) * 3600.0
        assert moved_ra == pytest.approx(-(four[0] + years * four[2] / 1000.0), abs=1e-5)
        assert moved_dec == pytest.approx(-(four[1] + years * four[3] / 1000.0), abs=1e-5)
    assert np.array_equal(better.table["ra_rad"][2:], ra[2:])
    assert better.table["bias_ra_arcsec"].notna().tolist() == [True, True, False, False]
    assert np.array_equal(better.table["ra"], arc.table["ra"])
    # not twice
    assert debiased(better, path) is better


def test_tiles_without_a_comparison_are_left_alone(write):
    values = offsets()
    arc = arc_of(("USNOA2", "USNOA2"))
    tile = ring_tile(NSIDE, arc.table["ra_rad"], arc.table["dec_rad"])
    assert tile[0] != tile[1]
    values[tile[0], 0] = 0.0
    better = debiased(arc, write(text_of(values)))
    assert better.table["bias_dec_arcsec"].notna().tolist() == [False, True]
    assert ErrorModel(debiasing="x").catalogue_treatments(better) == {CORRECTED: 1, NOT_IN_TABLE: 1}


def test_priors_shrink_where_positions_were_corrected(write):
    model = ErrorModel(debiasing=str(write(text_of(offsets()))))
    raw = ErrorModel().apply(arc_of()).shared
    better = model.apply(model.corrected(arc_of())).shared
    size = dict(zip(raw.names, raw.sigma.tolist(), strict=True))
    left = dict(zip(better.names, better.sigma.tolist(), strict=True))
    assert left["catalogue USNOA2 corrected, Dec"] == pytest.approx(
        REMAINING * size["catalogue USNOA2, Dec"]
    )
    assert left["catalogue 2MASS, RA"] == size["catalogue 2MASS, RA"]
    assert not any("Gaia" in name for name in left)
    # the choice alone, without corrected positions, shrinks nothing
    assert dict(zip((u := model.apply(arc_of()).shared).names, u.sigma, strict=True)) == size


def test_treatments_are_counted(write):
    model = ErrorModel(debiasing=str(write(text_of(offsets()))))
    arc = arc_of()
    assert model.catalogue_treatments(model.corrected(arc)) == {
        CORRECTED: 2,
        NO_OFFSET: 1,
        NOT_IN_TABLE: 1,
    }
    assert ErrorModel().catalogue_treatments(arc) == {AS_PUBLISHED: 3, NO_OFFSET: 1}
    assert ErrorModel(scheme="uniform").catalogue_treatments(arc) == {NO_PRIOR: 3, NO_OFFSET: 1}
