"""The inverse question, which rate the arc would have revealed."""

import json
import math
import re
from types import SimpleNamespace

import astropy.units as u
import pytest

from ngbound.constants import AU_D2_TO_M_S2
from ngbound.errors import CaseError, MassError
from ngbound.limits import detection_threshold
from ngbound.mass import (
    MeasuredDiameter,
    Outgassing,
    largest_rate,
    mass_bound,
    reach,
    revealed_rate,
)
from tests.report.standins import demo_pair

MOLECULE_KG = {"H2O": 2.99150e-26, "CO": 4.65119e-26}
"""18.01528 and 28.0101 u: IUPAC, from memory."""


def test_fixed_numbers_give_the_momentum_balance():
    found = revealed_rate(
        1e-8, "2 km", at=1.3, g_at_r=0.6, density=500.0, speed="0.8 km/s", collimation=0.5
    )
    mass_kg = math.pi / 6 * 500 * 2000**3
    rate = mass_kg * 1e-8 * AU_D2_TO_M_S2 * 0.6 / (0.5 * 800 * 2.99150e-26)
    assert found.rate.value == pytest.approx(rate, rel=1e-5)
    assert found.mass_loss.value == pytest.approx(rate * 2.99150e-26, rel=1e-5)


def test_it_is_the_inverse_of_the_mass_bound():
    options = {"speed": "0.8 km/s", "collimation": 0.5}
    found = revealed_rate(1e-8, 1000.0, at=1.3, g_at_r=0.6, density=500.0, **options)
    budget = Outgassing(found.rate, at=1.3, **options)
    bound = mass_bound(1e-8, budget, g_at=0.6, density=500.0)
    assert bound.diameter.value == pytest.approx(1000.0, rel=1e-9)


def test_ranges_widen_the_interval_and_the_text_says_so():
    found = revealed_rate(1e-8, "1 to 2 km", at=1.3, g_at_r=0.6, seed=3)
    assert found.rate_low < found.rate < found.rate_high
    assert "would have shown a thrust" in str(found)
    json.dumps(found.to_dict())


def test_refusals():
    with pytest.raises(MassError, match="positive"):
        revealed_rate(0.0, 1000.0, at=1.0)
    with pytest.raises(CaseError, match="upper limit"):
        revealed_rate(1e-8, "< 1 km", at=1.0)
    with pytest.raises(CaseError, match="m, km"):
        revealed_rate(1e-8, "1 kg", at=1.0)


BODY = {"density": 500.0, "speed": "0.8 km/s", "collimation": 0.5}


def test_rates_over_diameters_grow_with_the_volume_and_meet_a_whole_surface():
    found = reach(1e-8, g_at=lambda r: r**-2, species=("H2O", "CO"), at=1.3, **BODY)
    for row in found.rows:
        assert row.g == pytest.approx(1.3**-2)
        for k, size in enumerate(row.diameter_m):
            mass_kg = math.pi / 6 * 500 * size**3
            one = mass_kg * 1e-8 * AU_D2_TO_M_S2 * row.g / (0.5 * 800 * MOLECULE_KG[row.species])
            assert row.rate[k] == pytest.approx(one, rel=1e-5)
            assert row.full_rate[k] == pytest.approx(largest_rate(row.species, 1.3, size * u.m))
        # at the largest diameter revealed the two are equal
        edge = reach(
            1e-8,
            g_at=lambda r: r**-2,
            at=1.3,
            species=(row.species,),
            diameters_m=[row.largest],
            **BODY,
        ).rows[0]
        assert edge.rate[0] == pytest.approx(edge.full_rate[0])
    assert found.rows[0].largest < found.rows[1].largest  # CO gives more than water


def test_the_rate_revealed_for_a_size_comes_back_from_the_table():
    common = {"g_at": lambda r: r**-2, "species": ("H2O",), "at": 1.3, **BODY}
    table = reach(1e-8, diameters_m=[2000.0], **common).rows[0]
    one = reach(1e-8, size=MeasuredDiameter("2 km"), **common).rows[0].revealed
    assert one.rate.value == pytest.approx(table.rate[0])
    assert one.share == pytest.approx(table.rate[0] / table.full_rate[0])
    assert "of what its whole surface could give" in one.sentence()
    hidden = reach(1e-8, size=MeasuredDiameter("300 km"), **common).rows[0].revealed
    assert hidden.share > 1
    assert "would have stayed unseen at any rate" in hidden.sentence()


def test_threshold_brings_its_power_and_its_radial_direction():
    threshold = detection_threshold(demo_pair()[1], false_alarm=0.01, power=0.9)
    found = reach(threshold, g_at=lambda r: r**-2, at=1.3, size=MeasuredDiameter("2 km"))
    assert found.threshold == threshold.worst
    assert found.radial_threshold == threshold.direction_free[0]
    assert found.rows[0].revealed.power == 0.9
    assert "with probability 90 % (false-alarm rate 1 %)" in found.sentence()
    assert "A radial thrust is seen better" in found.sentence()
    worst = reach(float(threshold.worst.value), g_at=lambda r: r**-2, at=1.3)
    assert worst.rows[0].rate == found.rows[0].rate


def test_the_reach_claims_no_direction_that_was_not_looked_for():
    threshold = detection_threshold(demo_pair()[1])
    radial = object.__new__(type(threshold))
    for name, value in vars(threshold).items():
        object.__setattr__(radial, name, value)
    object.__setattr__(radial, "information", SimpleNamespace(components="R"))
    common = {"g_at": lambda r: r**-2, "at": 1.3}
    for size in ({"size": MeasuredDiameter("2 km")}, {}):
        assert "whatever" in reach(threshold, **common, **size).sentence()
        said = reach(radial, **common, **size).sentence()
        assert "along R alone" in said and "whatever" not in said


def test_a_budget_asks_about_its_own_species_distances_and_speeds():
    budget = Outgassing(
        {"H2O": "(3.0 +- 0.8)e26 1/s", "dust": "< 5 kg/s"}, {"dust": "5 m/s"}, 0.5, at=1.25
    )
    found = reach(1e-8, g_at=lambda r: r**-2, outgassing=budget, density=500.0)
    water, dust = found.rows
    assert (water.unit, dust.unit) == ("molecules/s", "kg/s")
    assert water.measured == "(3 +- 0.8)e26 molecules/s" and water.measured_rate == pytest.approx(
        3e26, rel=1e-3
    )
    assert dust.measured == "< 5 kg/s" and dust.full_rate is None
    mass_kg = math.pi / 6 * 500 * 1000.0**3
    rate = mass_kg * 1e-8 * AU_D2_TO_M_S2 * 1.25**-2 / (0.5 * 5.0)
    assert dust.rate[dust.diameter_m.index(1000.0)] == pytest.approx(rate)
    assert "measured" in found.table().splitlines()[0]
    json.dumps(found.to_dict(), allow_nan=False)
    assert "<table>" in found._repr_html_() and "assumed:" in found._repr_html_()


def test_rates_are_printed_never_smaller_than_computed():
    found = reach(1.2345e-8, g_at=lambda r: r**-2, at=1.3, size=MeasuredDiameter("1 to 2 km"))
    one = found.rows[0].revealed
    printed = float(one.rate_words().split()[0])
    assert printed >= one.rate.value
    low, high = (float(x) for x in re.findall(r"[(]([\d.e]+) to ([\d.e]+)[)]", one.rate_words())[0])
    assert low <= one.rate_low.value and high >= one.rate_high.value
    assert one.rate_words() in found.sentence()
