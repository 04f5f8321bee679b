"""Radiation pressure as the origin of a radial thrust: bounds on area-to-mass and density.

May import: constants, errors, and from its own room distributions.

At 1 au A_1 = C_R (S/c) (area/mass), with C_R = 1 for a perfect absorber and for a specularly
reflecting sphere, up to 2 for a mirror that faces the Sun (elementary optics). For a sphere
area/mass = 3 / (2 rho D). The law is g = r^-2.
"""

from dataclasses import dataclass
from typing import Any

import astropy.units as u
from astropy.units import Quantity

from ngbound.constants import AU_D2_TO_M_S2, C_KM_S, SOLAR_CONSTANT_W_M2
from ngbound.errors import CaseError, MassError

PRESSURE_1AU_PA = SOLAR_CONSTANT_W_M2 / (C_KM_S * 1e3)
"""Solar radiation pressure on an absorber at 1 au, N/m2."""


@dataclass(frozen=True)
class AreaToMass:
    """What a radial inverse-square acceleration (or a limit on it) says if sunlight pushes.

    ``area_to_mass`` m2/kg (upper bound if the acceleration is a limit); ``density_times_diameter``
    kg/m2 of a sphere (then a lower bound).
    """

    acceleration: Quantity
    coefficient: float
    area_to_mass: Quantity
    density_times_diameter: Quantity

    def __str__(self) -> str:
        return (
            f"A1 = {self.acceleration.value:.3g} au/d2 by radiation pressure (C_R = "
            f"{self.coefficient:g}): area/mass = {self.area_to_mass.value:.3g} m2/kg, density "
            f"times diameter = {self.density_times_diameter.value:.3g} kg/m2"
        )

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description."""
        return {
            "acceleration_au_d2": float(self.acceleration.value),
            "coefficient": self.coefficient,
            "area_to_mass_m2_kg": float(self.area_to_mass.value),
            "density_times_diameter_kg_m2": float(self.density_times_diameter.value),
        }


def radiation_acceleration(area_to_mass_m2_kg: float, coefficient: float = 1.0) -> Quantity:
    """A_1 in au/d2 at 1 au of a body with this area-to-mass ratio (m2/kg)."""
    per_m_s2 = coefficient * PRESSURE_1AU_PA * area_to_mass_m2_kg
    return per_m_s2 / AU_D2_TO_M_S2 * u.au / u.day**2


def area_to_mass(acceleration: Quantity | float, coefficient: float = 1.0) -> AreaToMass:
    """Area-to-mass ratio behind a radial inverse-square acceleration at 1 au (Quantity, or
    au/d2)."""
    if not 0 < coefficient <= 2:
        raise CaseError(f"coefficient = {coefficient!r} must be above 0 and at most 2.")
    a_au_d2 = float(u.Quantity(acceleration, u.au / u.day**2).value)
    if not a_au_d2 > 0:
        raise MassError(
            f"A radial acceleration of {a_au_d2:g} au/d2 is not outward; radiation pressure can "
            "only push outward."
        )
    ratio = a_au_d2 * AU_D2_TO_M_S2 / (coefficient * PRESSURE_1AU_PA)
    return AreaToMass(
        a_au_d2 * u.au / u.day**2, coefficient, ratio * u.m**2 / u.kg, 1.5 / ratio * u.kg / u.m**2
    )
