"""What the results of the room show in a notebook."""

import astropy.units as u
import numpy as np
import pytest

from ngbound.mass import (
    LawCheck,
    MeasuredDiameter,
    Outgassing,
    Photometry,
    active_area,
    area_to_mass,
    law_departures,
    mass_bound,
    mass_ceiling,
    reach,
    revealed_rate,
    sublimation,
)
from ngbound.mass.notebook import as_columns, as_html

BUDGET = Outgassing("(1.0 +- 0.2)e27 1/s", at=1.2)
DRAWS = 1e-8 * np.exp(0.1 * np.random.default_rng(0).standard_normal(2000))


def g(r_au):
    return r_au**-2


@pytest.mark.parametrize(
    ("made", "says"),
    [
        (mass_bound(DRAWS, BUDGET, g_at=g), "the mass is above"),
        (mass_bound(DRAWS, BUDGET, g_at=g, photometry=Photometry(18)).size_check, "Photometric"),
        (mass_ceiling(DRAWS, BUDGET, g_at=g), "below"),
        (reach(1e-8, g_at=g, at=1.2), "whole surface"),
        (revealed_rate(1e-8, "2 km", at=1.2), "would have shown a thrust"),
        (area_to_mass(1e-9, confidence=0.95), "area/mass"),
        (BUDGET, "H2O"),
        (BUDGET.emissions[0], "H2O"),
        (active_area(1e27, "H2O", 1.2, diameter=2 * u.km), "exposed ice"),
        (sublimation("CO", 2.0), "molecules"),
        (law_departures(BUDGET, g, np.array([1.2, 1.5]))[0], "thrust law"),
        (LawCheck("H2O", 1.0, 2.0, 1.1, 0.5), "0.5 sigma"),
    ],
    ids=lambda x: type(x).__name__ if not isinstance(x, str) else "",
)
def test_every_result_shows_its_sentence_or_table(made, says):
    page = made._repr_html_()
    assert says in page
    assert page.startswith("<") and page.endswith(">")
    assert "> kg" not in page.replace("</td>", "")  # text is escaped


def test_a_page_is_escaped_and_in_order():
    page = as_html(["a < b"], [["x", "y"], ["1", "<2"]], ["note"])
    assert page == (
        "<p>a &lt; b</p><table><tr><th>x</th><th>y</th></tr><tr><td>1</td><td>&lt;2</td></tr>"
        "</table><ul><li>note</li></ul>"
    )
    assert as_html([]) == ""


def test_columns_are_aligned():
    assert as_columns([["a", "b"], ["long", "1"]]) == "a     b\nlong  1"


def test_sizes_name_themselves():
    assert MeasuredDiameter(5.0).name == "given diameter"
    assert "coma" in Photometry(18, coma=True).remark
