"""Radiation pressure as the origin of a radial thrust: bounds on area-to-mass and density.

May import: constants, errors, rounding, limits, and from its own room distributions, notebook and
size.

At 1 au A_1 = C_R (S/c) (area/mass), with area the cross-section. For a sphere C_R = 1 if it absorbs
all light and gives the heat off evenly, or reflects like a mirror; 1 + 4/9 if it scatters all light
back by Lambert's law, or gives the heat off where it is absorbed (elementary optics: the recoil of
each facet is 2/3 along its normal, and the mean of cos z over the cross-section is 2/3). A plate
that mirrors the Sun has 2. For a sphere area/mass = 3 / (2 rho D). The law is g = r^-2, exactly.

Of an upper limit on A_1 follow an upper limit on area/mass and a lower one on rho D. C_R = 1 is the
safe choice for a sphere: any other makes both stronger.
"""

from dataclasses import dataclass
from typing import Any

import astropy.units as u
from astropy.units import Quantity

from ngbound.constants import AU_D2_TO_M_S2, C_KM_S, SOLAR_CONSTANT_W_M2
from ngbound.errors import CaseError, MassError
from ngbound.limits import UpperLimit
from ngbound.rounding import length_text, percent, rounded

from .distributions import Distribution, DistributionSpec
from .notebook import as_html
from .size import KnownSize, bulk_density

PRESSURE_1AU_PA = SOLAR_CONSTANT_W_M2 / (C_KM_S * 1e3)
"""Solar radiation pressure on an absorber at 1 au, N/m2."""
AU_D2 = u.au / u.day**2


@dataclass(frozen=True)
class AreaToMass:
    """What a radial inverse-square acceleration (or a limit on it) says if sunlight pushes.

    Attributes
    ----------
    acceleration : Quantity, au/d2
    coefficient : float
        C_R of the module's docstring.
    area_to_mass : Quantity, m2/kg
        An upper limit where ``confidence`` is given.
    density_times_diameter : Quantity, kg/m2
        Of a sphere; a lower bound where ``confidence`` is given.
    confidence : float or None
        Of the upper limit on the acceleration; None where a value was given.
    density : Distribution or None
        Bulk density, kg/m3.
    diameter : Quantity or None
        Smallest sphere of the median density, m; likewise a bound where ``confidence`` is given.
    origin : str
        Where the acceleration comes from.
    size : KnownSize or None
        What is known of the size.
    """

    acceleration: Quantity
    coefficient: float
    area_to_mass: Quantity
    density_times_diameter: Quantity
    confidence: float | None = None
    density: Distribution | None = None
    diameter: Quantity | None = None
    origin: str = ""
    size: KnownSize | None = None

    @property
    def own_push(self) -> Quantity | None:
        """What sunlight does to a sphere of the known size and the median density, au/d2."""
        if self.size is None or self.density is None:
            return None
        diameter_m = self.size.distribution.median
        return radiation_acceleration(1.5 / (self.density.median * diameter_m), self.coefficient)

    @property
    def assumptions(self) -> tuple[str, ...]:
        """What the numbers rest on."""
        return (
            f"radiation pressure: C_R = {self.coefficient:g} (1: a sphere that absorbs all, or "
            "mirrors; up to 1.44 where it scatters or gives the heat off by Lambert's law, which "
            "would strengthen both numbers in proportion)",
            "radiation pressure: it falls as r^-2, it points away from the Sun, and no other "
            "radial thrust points towards the Sun",
        )

    def sentence(self) -> str:
        """The numbers in words; bounds rounded outward."""
        bound = self.confidence is not None
        up, down = ("up", "down") if bound else ("", "")
        a, per_kg, product = (
            rounded(float(q.value), 2, outward=way)
            for q, way in (
                (self.acceleration, up),
                (self.area_to_mass, up),
                (self.density_times_diameter, down),
            )
        )
        below, above = ("<", ">") if bound else ("=", "=")
        held = f" at {percent(self.confidence)} confidence" if self.confidence is not None else ""
        origin = f" ({self.origin})" if self.origin else ""
        text = (
            f"If sunlight pushes (C_R = {self.coefficient:g}), A_R {below} {a} au/d2{held}{origin} "
            f"means area/mass {below} {per_kg} m2/kg; of a sphere, bulk density times diameter "
            f"{above} {product} kg/m2"
        )
        if self.diameter is not None and self.density is not None:
            text += (
                f", a diameter {above} {length_text(float(self.diameter.value), outward=down)} "
                f"at {rounded(self.density.median, 3)} kg/m3"
            )
        text += "."
        push = self.own_push
        if push is not None and self.size is not None and self.density is not None:
            median = self.size.distribution.median
            text += (
                f" A sphere of the {self.size.name}, {length_text(median, outward='')}, and that "
                f"density is pushed by {rounded(float(push.value), 2)} au/d2, "
                f"{rounded(100 * float((push / self.acceleration).value), 2)} % of it."
            )
        return text

    def __str__(self) -> str:
        return self.sentence()

    def _repr_html_(self) -> str:
        return as_html([self.sentence()], (), [f"assumed: {text}" for text in self.assumptions])

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description."""
        return {
            "acceleration_au_d2": float(self.acceleration.value),
            "coefficient": self.coefficient,
            "area_to_mass_m2_kg": float(self.area_to_mass.value),
            "density_times_diameter_kg_m2": float(self.density_times_diameter.value),
            "confidence": self.confidence,
            "density_kg_m3": None if self.density is None else self.density.to_dict(),
            "diameter_m": None if self.diameter is None else float(self.diameter.value),
            "origin": self.origin,
            "own_push_au_d2": None if self.own_push is None else float(self.own_push.value),
            "assumptions": list(self.assumptions),
            "sentence": self.sentence(),
        }


def radiation_acceleration(area_to_mass_m2_kg: float, coefficient: float = 1.0) -> Quantity:
    """A_1 in au/d2 at 1 au of a body with this area-to-mass ratio (m2/kg)."""
    per_m_s2 = coefficient * PRESSURE_1AU_PA * area_to_mass_m2_kg
    return per_m_s2 / AU_D2_TO_M_S2 * AU_D2


def area_to_mass(
    acceleration: Quantity | float,
    coefficient: float = 1.0,
    *,
    confidence: float | None = None,
    density: DistributionSpec | None = None,
    origin: str = "",
    size: KnownSize | None = None,
) -> AreaToMass:
    """Area-to-mass ratio behind a radial inverse-square acceleration at 1 au.

    Parameters
    ----------
    acceleration : Quantity or float
        au/d2 if bare.
    coefficient : float
        C_R, above 0 and at most 2.
    confidence : float, optional
        Where the acceleration is an upper limit: of that limit.
    density : spec, optional
        Bulk density (kg/m3), for a diameter.
    origin : str
        Where the acceleration comes from, for the text.
    size : Photometry or MeasuredDiameter, optional
        What is known of the size.

    Raises
    ------
    CaseError
        A coefficient outside its range.
    MassError
        An acceleration that is not outward.
    """
    if isinstance(coefficient, bool) or not 0 < coefficient <= 2:
        raise CaseError(f"coefficient = {coefficient!r} must be above 0 and at most 2.")
    a_au_d2 = float(u.Quantity(acceleration, AU_D2).value)
    if not a_au_d2 > 0:
        raise MassError(
            f"A radial acceleration of {a_au_d2:g} au/d2 is not outward; radiation pressure can "
            "only push outward."
        )
    ratio = a_au_d2 * AU_D2_TO_M_S2 / (coefficient * PRESSURE_1AU_PA)
    bulk = None if density is None else bulk_density(density)
    return AreaToMass(
        a_au_d2 * AU_D2,
        coefficient,
        ratio * u.m**2 / u.kg,
        1.5 / ratio * u.kg / u.m**2,
        confidence,
        bulk,
        None if bulk is None else 1.5 / ratio / bulk.median * u.m,
        origin,
        size,
    )


def radiation_bound(
    limit: UpperLimit,
    *,
    coefficient: float = 1.0,
    density: DistributionSpec | None = None,
    origin: str = "",
    size: KnownSize | None = None,
) -> AreaToMass:
    """`area_to_mass` of an upper limit on an outward radial inverse-square thrust.

    Of the limit it takes the posterior quantile of A_R given A_R >= 0, or the upper edge of the
    unified interval where there is none; other components are as free as they were in the fit.

    Raises
    ------
    MassError
        The limit has no radial component.
    """
    radial, how = limit.outward_radial, f"{limit.source}, outward only"
    if radial is None and limit.unified_radial is not None:
        radial, how = limit.unified_radial[1], "unified interval"
    if radial is None:
        raise MassError(
            "The fit has no radial component, so it bounds no radiation pressure; free R among "
            "the components."
        )
    return area_to_mass(
        radial,
        coefficient,
        confidence=limit.confidence,
        density=density,
        origin=f"{how}; {origin}" if origin else how,
        size=size,
    )
