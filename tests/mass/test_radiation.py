"""Radiation pressure as an alternative origin of the thrust."""

import math

import astropy.units as u
import numpy as np
import pytest

from ngbound.errors import CaseError, MassError
from ngbound.limits import UpperLimit
from ngbound.mass import MeasuredDiameter, area_to_mass, radiation_acceleration, radiation_bound


def test_forward_and_back():
    found = area_to_mass(radiation_acceleration(3e-4, 1.3), 1.3)
    assert found.area_to_mass.to_value(u.m**2 / u.kg) == pytest.approx(3e-4)
    # a sphere: area/mass = 3 / (2 rho D)
    assert found.density_times_diameter.value == pytest.approx(1.5 / 3e-4)
    assert found.to_dict()["coefficient"] == 1.3
    assert "m2/kg" in str(found)


def test_units_and_refusals():
    a = radiation_acceleration(1e-3)
    assert area_to_mass(a.to(u.m / u.s**2)).area_to_mass.value == pytest.approx(1e-3, rel=1e-6)
    with pytest.raises(MassError, match="only push outward"):
        area_to_mass(-1e-10)
    with pytest.raises(CaseError, match="coefficient"):
        area_to_mass(1e-10, 3.0)


def limit_on(radial, unified=None, confidence=0.95):
    """An UpperLimit with what a bound on sunlight reads of it."""
    made = object.__new__(UpperLimit)
    for name, value in {
        "outward_radial": radial,
        "unified_radial": unified,
        "source": "posterior",
        "confidence": confidence,
    }.items():
        object.__setattr__(made, name, value)
    return made


def test_a_radial_limit_bounds_density_times_size():
    limit = radiation_acceleration(1e-3)
    found = radiation_bound(limit_on(limit), density=500.0, size=MeasuredDiameter("(2 +- 0.1) km"))
    assert found.area_to_mass.value == pytest.approx(1e-3)
    assert found.density_times_diameter.value == pytest.approx(1500.0)
    assert found.diameter.value == pytest.approx(3.0)
    text = found.sentence()
    assert "at 95 % confidence (posterior, outward only)" in text
    # outward rounding: a limit up, bounds down
    assert "area/mass < 0.0010 m2/kg" in text and "diameter > 1500 kg/m2" in text
    assert "a diameter > 3.0 m at 500 kg/m3" in text
    # a sphere of 2 km at 500 kg/m3 has 1.5e-6 m2/kg
    assert found.own_push.value == pytest.approx(radiation_acceleration(1.5e-6).value)
    assert "0.15 % of it" in text
    assert any("C_R = 1" in a for a in found.assumptions)
    assert found.to_dict()["confidence"] == 0.95


def test_a_sphere_that_scatters_strengthens_the_bound_in_proportion():
    limit = limit_on(radiation_acceleration(1e-3))
    dark, bright = (radiation_bound(limit, coefficient=c) for c in (1.0, 13 / 9))
    ratio = bright.density_times_diameter / dark.density_times_diameter
    assert ratio.value == pytest.approx(13 / 9)


def test_recoil_of_a_sphere_that_scatters_by_lamberts_law():
    # each facet: cos z of the light arrives, 2/3 of it recoils along the normal; by quadrature
    mu, weight = np.polynomial.legendre.leggauss(40)
    mu, weight = 0.5 * (mu + 1), 0.5 * weight
    recoil = (weight * mu * (2 / 3) * mu * 2 * math.pi).sum() / math.pi
    assert 1 + recoil == pytest.approx(13 / 9, rel=1e-12)


def test_without_posterior_draws_outward_the_unified_interval_stands_in():
    unified = u.Quantity([0.0, 2e-10], u.au / u.day**2)
    found = radiation_bound(limit_on(None, unified))
    assert found.acceleration.value == 2e-10
    assert "unified interval" in found.sentence()
    with pytest.raises(MassError, match="no radial component"):
        radiation_bound(limit_on(None))
