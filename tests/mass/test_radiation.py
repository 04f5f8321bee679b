"""Radiation pressure as an alternative origin of the thrust."""

import astropy.units as u
import pytest

from ngbound.errors import CaseError, MassError
from ngbound.mass import area_to_mass, radiation_acceleration


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
