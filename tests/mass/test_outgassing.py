"""Outgassing budgets: units, laws, shared assumptions, limits."""

import math

import astropy.units as u
import numpy as np
import pytest

from ngbound.errors import CaseError, NgboundWarning
from ngbound.mass import (
    DEFAULT_COLLIMATION,
    SPEED_LAWS,
    AtMost,
    Fixed,
    Outgassing,
    SpeedLaw,
    Triangular,
    Uniform,
    mass_loss_rate,
    thermal_speed,
)

WATER_KG = 2.99150e-26
"""18.01528 g/mol over Avogadro's number."""


def test_force_is_collimation_times_mass_rate_times_speed():
    budget = Outgassing("1e27 molecules/s", "0.8 km/s", 0.5, at=1.0)
    assert budget.force().unit == u.N
    assert budget.force().value == pytest.approx(0.5 * 1e27 * WATER_KG * 800, rel=1e-5)
    assert budget.mass_loss().to_value(u.kg / u.s) == pytest.approx(1e27 * WATER_KG, rel=1e-5)


@pytest.mark.parametrize(
    ("rate", "kg_s"),
    [
        (1e28, 299.15),  # molecules/s; Q = 1e28 of water is 299.15 kg/s (computed twice)
        ("1e28 molecules/s", 299.15),
        ("1e28 molec/s", 299.15),
        ("1e28 s-1", 299.15),
        (1e28 / u.s, 299.15),
        ("16605.39 mol/s", 299.15),
        ("299.15 kg/s", 299.15),
        (299.15e3 * u.g / u.s, 299.15),
        ("25846.6 t/d", 299.15),
        ({"value": 1e28, "sigma": 1e27, "unit": "molecules/s"}, 299.15),
    ],
)
def test_rate_units(rate, kg_s):
    budget = Outgassing(rate, "1 km/s", 0.5, at=1.0)
    assert budget.mass_loss().value == pytest.approx(kg_s, rel=1e-5)


def test_mass_loss_rate_and_thermal_speed_functions():
    # Q = 1e28 of water: 299.15 kg/s; sqrt(8kT/pi m) of water at 200 K: 484.8 m/s (kinetic theory)
    assert mass_loss_rate(1e28).value == pytest.approx(299.15, rel=1e-4)
    assert thermal_speed("H2O", 200.0).value == pytest.approx(484.8, abs=0.1)


def test_default_speed_law_is_085_over_root_r():
    # 0.85 km/s r^-0.5 at 1.2453 au is 0.7617 km/s (plain arithmetic)
    budget = Outgassing("1e27 molecules/s", at=1.2453)
    assert budget.emissions[0].median_speed_m_s == pytest.approx(761.7, abs=0.1)
    assert budget.emissions[0].collimation == DEFAULT_COLLIMATION
    text = " ".join(budget.assumptions())
    assert "Delsemme" in text and "from memory" in text


def test_every_named_law_gives_a_comet_like_speed_at_1_au():
    for law in SPEED_LAWS.values():
        assert 0.2 < law.speed_km_s(1.0) < 1.3
        assert law.source and law.status


def test_speed_can_be_a_law_by_name_an_own_law_or_a_measurement():
    named = Outgassing("1e27 1/s", "budzien", at=2.0).emissions[0]
    assert named.median_speed_m_s == pytest.approx(800 * 2**-0.6)
    own = SpeedLaw("mine", 0.5, 0.0, "this test", "invented", factor=1.0)
    assert Outgassing("1e27 1/s", own, at=2.0).emissions[0].median_speed_m_s == 500
    measured = Outgassing("1e27 1/s", "600 +- 50 m/s", at=2.0).emissions[0]
    assert measured.median_speed_m_s == pytest.approx(600)
    assert Outgassing("1e27 1/s", 0.6 * u.km / u.s, at=2.0).emissions[0].speed == Fixed(600.0)


def test_species_are_summed():
    both = Outgassing({"H2O": "1e27 1/s", "CO": "1e27 1/s"}, "0.5 km/s", 0.5, at=1.0)
    water, carbon = (
        Outgassing("1e27 1/s", "0.5 km/s", 0.5, at=1.0, species=s) for s in ("H2O", "CO")
    )
    assert both.force().value == pytest.approx(water.force().value + carbon.force().value)


def test_species_can_have_their_own_speed_collimation_and_distance():
    budget = Outgassing(
        {"H2O": "1e27 1/s", "dust": "50 +- 10 kg/s"},
        {"dust": "3 to 30 m/s"},
        {"H2O": 0.6, "dust": 0.4},
        {"H2O": 1.2, "dust": 1.5},
    )
    water, dust = budget.emissions
    assert (water.at_au, dust.at_au) == (1.2, 1.5)
    assert water.collimation == Fixed(0.6)
    assert dust.speed == Uniform(3.0, 30.0)
    assert dust.rate_in_kg
    assert budget.distances_au == (1.2, 1.5)
    assert len(budget.force()) == 2


def test_one_assumption_is_one_draw():
    budget = Outgassing({"H2O": "1e27 1/s", "CO": "1e27 1/s"}, at=1.0)
    assert set(budget.inputs()) == {
        "production rate (H2O)",
        "production rate (CO)",
        "outflow speed",
        "collimation",
    }
    draws = budget.draw(np.random.default_rng(1), 1000)
    ratio = draws.force_n[1] / draws.force_n[0]
    assert ratio == pytest.approx(np.full(1000, 28.0101 / 18.01528), rel=1e-5)


def test_several_distances_of_one_species():
    budget = Outgassing(["1e27 1/s", "2e27 1/s"], "1 km/s", 0.5, [2.0, 1.5])
    assert budget.distances_au == (1.5, 2.0)
    # ascending distance, so the larger rate comes first
    assert budget.mass_loss().value == pytest.approx([2e27 * WATER_KG, 1e27 * WATER_KG], rel=1e-5)
    with pytest.raises(CaseError, match=r"several distances \(1.5, 2 au\)"):
        _ = budget.draw(np.random.default_rng(1), 10).force


def test_draws_have_the_right_mean_and_spread_and_repeat():
    budget = Outgassing("(1.0 +- 0.1)e27 1/s", "0.8 +- 0.04 km/s", 0.5, at=1.0)
    n = 100_000
    force = budget.draw(np.random.default_rng(7), n).force
    again = budget.draw(np.random.default_rng(7), n).force
    assert np.array_equal(force.value, again.value)
    expected = 0.5 * 1e27 * WATER_KG * 800
    spread = expected * math.sqrt((1 + 0.1**2) * (1 + 0.05**2) - 1)  # product of two normals
    assert force.value.mean() == pytest.approx(expected, abs=5 * spread / math.sqrt(n))
    assert force.value.std() == pytest.approx(spread, rel=0.02)


def test_upper_limits_count_as_asked():
    budget = Outgassing("< 1e27 1/s", "1 km/s", 0.5, at=1.0)
    assert budget.emissions[0].rate == AtMost(1e27)
    assert budget.force().value == 0
    assert budget.force("limit").value == pytest.approx(0.5 * 1e27 * WATER_KG * 1e3, rel=1e-5)
    rng = np.random.default_rng(1)
    assert np.all(budget.draw(rng, 10).force.value == 0)
    uniform = budget.draw(rng, 10_000, "uniform").force.value
    assert uniform.mean() == pytest.approx(budget.force("limit").value / 2, rel=0.03)
    assert any("upper limit" in line for line in budget.assumptions())


def test_from_a_case_table():
    budget = Outgassing.from_dict(
        {
            "rate": "(1.0 +- 0.2)e27 molecules/s",
            "at": "1.2 au",
            "collimation": {"low": 0.3, "mode": 0.5, "high": 0.6},
            "more": [{"rate": "40 kg/s", "species": "dust", "speed": "5 m/s", "at": 1.2}],
        }
    )
    assert [e.species for e in budget.emissions] == ["H2O", "dust"]
    assert budget.emissions[0].collimation == Triangular(0.3, 0.5, 0.6)
    assert budget.to_dict()["emissions"][1]["rate"]["unit"] == "kg/s"


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ({"rate": "1e27 1/s"}, ["at", "au"]),
        ({"rate": "1e27 1/s", "at": -1.0}, ["at", "-1"]),
        ({"rate": "1e27 1/s", "at": "3 +- 1"}, ["at", "one heliocentric distance"]),
        ({"rate": "1e27 parsec", "at": 1}, ["parsec", "molecules/s"]),
        ({"rate": "1e27 blob/s", "at": 1}, ["blob", "molecules/s"]),
        ({"rate": "1e27 1/s", "at": 1, "species": "H20"}, ["H20", "Did you mean"]),
        ({"rate": "1e27 1/s", "at": 1, "species": "dust", "speed": "5 m/s"}, ["dust", "kg/s"]),
        ({"rate": "5 kg/s", "at": 1, "species": "dust"}, ["Dust", "speed"]),
        ({"rate": "1e27 1/s", "at": 1, "speed": "delseme"}, ["Did you mean 'delsemme'"]),
        ({"rate": "1e27 1/s", "at": 1, "speed": 850}, ["10 km/s", "m/s"]),
        ({"rate": "1e27 1/s", "at": 1, "speed": "3 kg"}, ["kg", "km/s"]),
        ({"rate": "1e27 1/s", "at": 1, "collimation": 1.2}, ["collimation", "1.2", "0 and 1"]),
        ({"rate": "1e27 1/s", "at": 1, "collimation": "0.5 km"}, ["no unit"]),
        ({"rate": ["1e27 1/s"], "at": 1}, ["as many distances"]),
        ({"rate": {"H2O": "1e27 1/s"}, "at": {"CO": 1}}, ["'H2O'", "CO"]),
        ({"rate": {}, "at": 1}, ["species"]),
        ({"rate": {"valeu": 5}, "at": 1}, ["valeu"]),
    ],
)
def test_errors_say_what_and_how(arguments, words):
    with pytest.raises(CaseError) as caught:
        Outgassing(**arguments)
    for word in words:
        assert word in str(caught.value)


def test_misspelt_key_of_a_case_table():
    with pytest.raises(CaseError, match="Did you mean 'collimation'"):
        Outgassing.from_dict({"rate": "1e27 1/s", "at": 1, "colimation": 0.5})


def test_suspicious_numbers_are_warned_about():
    with pytest.warns(NgboundWarning, match="kg/s"):
        Outgassing(300.0, at=1.0)
    with pytest.warns(NgboundWarning, match="OH"):
        Outgassing("1e27 1/s", at=1.0, species="OH")
