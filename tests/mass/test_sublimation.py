"""Sublimation energy balance: energy closes, limits, active areas, computed g(r).

Comparison with published fluxes: tests/external/test_published_masses.py.
"""

import math
import warnings

import astropy.units as u
import numpy as np
import pytest

from ngbound.constants import STEFAN_BOLTZMANN_W_M2_K4
from ngbound.errors import CaseError, MassError, NgboundWarning
from ngbound.mass import (
    ICES,
    MeasuredDiameter,
    Outgassing,
    active_area,
    active_areas,
    largest_rate,
    law_departures,
    sublimation,
    sublimation_law,
)
from ngbound.motion import Thrust


@pytest.mark.parametrize("ice", ICES)
@pytest.mark.parametrize("r_au", [0.3, 1.0, 3.0, 10.0, 30.0])
def test_the_energy_balance_closes(ice, r_au):
    found = sublimation(ice, r_au, bond_albedo=0.1, emissivity=0.9)
    t = np.array([found.temperature.value])
    lost = (0.9 * STEFAN_BOLTZMANN_W_M2_K4 * t**4 + found.flux.value * ICES[ice].latent_heat_j(t))[
        0
    ]
    assert lost == pytest.approx(0.9 * 1361.0 / r_au**2, rel=1e-9)


@pytest.mark.parametrize("ice", ICES)
def test_latent_heat_of_the_curve_is_its_slope(ice):
    found = ICES[ice]
    t = np.linspace(found.range_k[0] * 1.3, found.range_k[1] * 0.95, 9)
    step = 1e-4
    slope = np.log(found.pressure_pa(t + step) / found.pressure_pa(t - step)) / (2 * step)
    clapeyron = 1.380649e-23 * t**2 * slope
    if found.latent_cal_mol is None:
        assert found.latent_heat_j(t) == pytest.approx(clapeyron, rel=1e-5)
    else:
        # measured heats against the ideal vapour: within 10 % where the ice sublimates at all
        middle = slice(4, None)
        assert found.latent_heat_j(t)[middle] == pytest.approx(clapeyron[middle], rel=0.1)


@pytest.mark.parametrize("ice", ["H2O", "CO2", "CO"])
def test_far_out_radiation_wins_and_close_in_all_heat_goes_into_vapour(ice):
    cold = sublimation(ice, 300.0)
    black = (0.96 * 1361.0 / 300**2 / (0.95 * STEFAN_BOLTZMANN_W_M2_K4)) ** 0.25
    assert cold.temperature.value <= black * (1 + 1e-12)
    near = sublimation(ice, 0.1)
    latent = ICES[ice].latent_heat_j(np.array([near.temperature.value]))[0]
    assert near.flux.value * latent == pytest.approx(0.96 * 1361.0 / 0.01, rel=0.04)


def test_more_volatile_ices_give_more():
    fluxes = [float(sublimation(ice, 3.0).flux.value) for ice in ("H2O", "CO2", "CO")]
    assert fluxes == sorted(fluxes)


def test_geometries_are_ordered():
    # a subsolar facet receives four times the mean of a sphere, and water responds more than in
    # proportion; for CO, energy-limited, a sphere gives a quarter
    for ice in ("H2O", "CO2", "CO"):
        one, whole, mixed = (
            float(sublimation(ice, 1.0, geometry=g).flux.value)
            for g in ("subsolar", "sphere", "isothermal")
        )
        assert one > whole >= mixed
        assert whole <= one / 4 * 1.001


def test_active_area_and_fraction():
    flux = float(sublimation("H2O", 1.5, geometry="sphere").flux.value)
    found = active_area(1e27, "H2O", 1.5, diameter=2 * u.km)
    assert found.area.to_value(u.m**2) == pytest.approx(1e27 / flux)
    assert found.fraction == pytest.approx(1e27 / flux / (math.pi * 2000.0**2))
    assert largest_rate("H2O", 1.5, 2 * u.km) == pytest.approx(1e27 / found.fraction)
    assert "more than the whole sphere" in str(active_area(1e30, "H2O", 1.5, diameter=1 * u.km))


def test_active_areas_of_a_budget():
    budget = Outgassing({"H2O": "1e27 1/s", "dust": "5 kg/s"}, {"dust": "5 m/s"}, at=1.2)
    found = active_areas(budget, diameter=1 * u.km)
    assert [a.ice for a in found] == ["H2O"]


def test_law_is_one_at_1_au_and_falls():
    r = np.array([0.8, 1.0, 2.0, 3.0, 4.0])
    for ice in ("H2O", "CO2", "CO"):
        g = sublimation_law(ice, r)
        assert g[1] == pytest.approx(1.0)
        assert np.all(np.diff(g) < 0)
    # CO is energy-limited at these distances: inverse square within 2 %
    assert sublimation_law("CO", r) == pytest.approx(r**-2, rel=0.02)


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (("CO3", 1.0), ["CO3", "Did you mean"]),
        (("H2O", -1.0), ["r_au", "-1"]),
        (("H2O", float("nan")), ["r_au"]),
    ],
)
def test_refusals(arguments, words):
    with pytest.raises(CaseError) as caught:
        sublimation(*arguments)
    for word in words:
        assert word in str(caught.value)


def test_other_refusals():
    with pytest.raises(CaseError, match="geometry"):
        sublimation("H2O", 1.0, geometry="flat")
    with pytest.raises(CaseError, match="emissivity"):
        sublimation("H2O", 1.0, emissivity=0.0)
    with pytest.raises(MassError, match="hotter than"):
        sublimation("H2O", 0.02)
    with pytest.raises(MassError, match="more volatile"):
        active_area(1e27, "H2O", 40.0)
    with pytest.raises(CaseError, match="facet"):
        largest_rate("H2O", 1.0, 1 * u.km, geometry="subsolar")


def test_the_active_fraction_carries_the_errors_of_rate_and_size():
    # log-normal rate and diameter: ln f has the variance of ln Q plus four times that of ln D
    budget = Outgassing({"value": 1e27, "factor": 1.3}, at=1.5)
    size = MeasuredDiameter("2 */ 1.2 km")
    (found,) = active_areas(budget, diameter=size, n_draws=100_000)
    middle = active_area(1e27, "H2O", 1.5, diameter=2 * u.km)
    width = math.sqrt(math.log(1.3) ** 2 + 4 * math.log(1.2) ** 2)
    assert found.fraction == pytest.approx(middle.fraction, rel=0.01)
    assert found.fraction_high / found.fraction_low == pytest.approx(math.exp(2 * width), rel=0.02)
    assert float(found.area_high / found.area_low) == pytest.approx(1.3**2, rel=0.01)
    over = 0.5 * math.erfc(-math.log(found.fraction) / width / math.sqrt(2))
    assert found.too_large == pytest.approx(over, abs=0.005)
    assert found.to_dict()["active_fraction_high"] == found.fraction_high


def test_a_fraction_above_one_is_flagged_and_a_limit_is_a_limit():
    small = MeasuredDiameter("(100 +- 10) m")
    (found,) = active_areas(Outgassing("(1.0 +- 0.1)e27 1/s", at=1.5), diameter=small)
    assert found.flagged and found.too_large > 0.99
    assert "more than the whole sphere" in found.sentence()
    (limit,) = active_areas(Outgassing("< 1e27 1/s", at=1.5), diameter=small)
    assert limit.is_limit and not limit.flagged
    assert "needs less than" in limit.sentence() and "more than" not in limit.sentence()
    (kilos,) = active_areas(Outgassing("29.915 kg/s", at=1.5))
    assert kilos.area.value == pytest.approx(
        float(active_area(1e27, "H2O", 1.5).area.value), rel=1e-4
    )


def test_a_law_computed_from_the_ice_does_not_depart_from_it():
    budget = Outgassing("1e27 1/s", speed="0.8 km/s", at=1.5)

    def g(r_au):
        return float(sublimation_law("H2O", np.array([r_au]))[0])

    (same,) = law_departures(budget, g, np.array([1.2, 3.5]))
    assert same.ratio == pytest.approx(1.0, abs=1e-9)


def test_a_law_that_departs_over_the_arc_is_warned_about():
    budget = Outgassing("1e27 1/s", speed="0.8 km/s", at=1.5)
    with pytest.warns(NgboundWarning, match="do not go together over this arc"):
        (found,) = law_departures(budget, lambda r: r**-2, np.array([1.2, 3.5]))
    assert found.r_au == pytest.approx(3.5)
    z = sublimation_law("H2O", np.array([1.5, 3.5]))
    assert found.ratio == pytest.approx((1.5 / 3.5) ** 2 / (z[1] / z[0]))
    assert "more force than H2O ice" in found.sentence()
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        (near,) = law_departures(budget, lambda r: r**-2, np.array([1.2, 1.8]))
    assert 1.0 < near.factor < 2.0
    # the published law of water ice lies between a warm and a cold sphere; beyond 4 au, where
    # neither gives any force, nothing is compared
    water_ice = Thrust("water-ice").g
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        law_departures(budget, water_ice, np.array([1.0, 30.0]))
