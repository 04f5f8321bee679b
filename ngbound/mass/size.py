"""Mass, bulk density, size and brightness of a sphere.

May import: constants, errors, rounding, and from its own room distributions and notebook.

Diameter from absolute magnitude and geometric albedo: D = 1329 km 10^(-H/5) / sqrt(p_V). The
constant is 2 au 10^(m_sun/5) with m_sun = -26.762 (E. Bowell et al. 1989, in Asteroids II, from
memory; the value 1329 as on NASA's NEO properties page, and 2 x 149.6e6 km x 10^(-26.762/5) =
1329.1 checked).
"""

import math
from dataclasses import dataclass, field
from typing import Any, TypeAlias

import astropy.units as u
import numpy as np
from astropy.units import Quantity

from ngbound.errors import CaseError
from ngbound.rounding import percent, rounded

from .distributions import (
    AtMost,
    Distribution,
    DistributionSpec,
    Fixed,
    SplitNormal,
    Triangular,
    Uniform,
    number_text,
    parse_distribution,
)
from .notebook import as_html

ASTEROID_DIAMETER_KM = 1329.0
"""Diameter in km of a white (p_V = 1) sphere of H = 0; see the module's docstring."""

DEFAULT_DENSITY = Triangular(200.0, 500.0, 800.0)
"""Default bulk density in kg/m3: most likely 500, range 200 to 800, common practice for nuclei."""
DEFAULT_DENSITY_SOURCE = (
    "common practice for comet nuclei: 67P 532 +- 7 (L. Jorda et al. 2016), ten nuclei below 800, "
    "mean 400 (A. Sosa & J. A. Fernandez 2009), 103P 200 to 400 (P. C. Thomas et al. 2013); read "
    "in abstracts"
)
DEFAULT_ALBEDO = Uniform(0.02, 0.06)
"""Default geometric albedo: P. L. Lamy et al. 2004, in Comets II (read in the abstract)."""
DEFAULT_ALBEDO_SOURCE = "P. L. Lamy et al. 2004, in Comets II (abstract)"


def sphere_diameter_m(mass_kg: Any, density_kg_m3: Any) -> Any:
    """Diameter in m of spheres of given mass (kg) and bulk density (kg/m3); floats or arrays."""
    return np.cbrt(6.0 * np.asarray(mass_kg) / (math.pi * np.asarray(density_kg_m3)))


def sphere_mass_kg(diameter_m: Any, density_kg_m3: Any) -> Any:
    """Mass in kg of spheres of given diameter (m) and bulk density (kg/m3); floats or arrays."""
    return math.pi / 6.0 * np.asarray(density_kg_m3) * np.asarray(diameter_m) ** 3


def photometric_diameter_m(absolute_magnitude: Any, albedo: Any) -> Any:
    """Diameter in m from absolute magnitude and geometric albedo; floats or arrays."""
    return (
        1e3
        * ASTEROID_DIAMETER_KM
        * 10.0 ** (-np.asarray(absolute_magnitude) / 5.0)
        / np.sqrt(np.asarray(albedo))
    )


def bulk_density(spec: DistributionSpec | None) -> Distribution:
    """Bulk density in kg/m3 from a spec (default unit kg/m3); None gives `DEFAULT_DENSITY`."""
    if spec is None:
        return DEFAULT_DENSITY
    found, unit = _known("density", spec, '"400 to 600 kg/m3"', lower=0.0)
    if unit:
        try:
            found = found.scaled(float(u.Unit(unit).to(u.kg / u.m**3)))
        except (ValueError, TypeError, u.UnitConversionError) as error:
            raise CaseError(f"density has the unit {unit!r}; allowed: kg/m3, g/cm3.") from error
    if not 1.0 <= found.median <= 2.5e4:
        raise CaseError(
            f"density = {found} kg/m3 is outside 1 to 25000 kg/m3; a bare number means "
            'kg/m3: write "0.5 g/cm3" or 500.',
            value=found.median,
        )
    return found


def _known(name: str, spec: DistributionSpec, example: str, **edges: float) -> tuple[Any, str]:
    """A distribution with a middle; CaseError for a mere upper limit."""
    found, unit = parse_distribution(spec, name, **edges)
    if isinstance(found, AtMost):
        raise CaseError(
            f"{name} is only an upper limit; a value is needed, with its uncertainty or as a "
            f"range, such as {example}."
        )
    return found, unit


def size_words(diameter: Distribution) -> str:
    """A diameter (m) with its errors, these to two digits."""
    if not isinstance(diameter, SplitNormal):
        return f"{diameter} m"
    plus, minus = number_text(diameter.plus, 2), number_text(diameter.minus, 2)
    return f"{number_text(diameter.value)} +{plus} -{minus} m"


def diameter_m(spec: DistributionSpec) -> Distribution:
    """Diameter in m from a spec (default unit m)."""
    found, unit = _known("diameter", spec, '"1 to 2 km"', lower=0.0)
    try:
        scaled: Distribution = found.scaled(float(u.Unit(unit or "m").to(u.m)))
    except (ValueError, TypeError, u.UnitConversionError) as error:
        raise CaseError(f"diameter has the unit {unit!r}; allowed: m, km.") from error
    if not 0.01 <= scaled.median <= 1e7:
        raise CaseError(
            f"diameter = {scaled} m is outside 1 cm to 10000 km; a bare number means m: write "
            '"2 km" or 2000.',
            value=scaled.median,
        )
    return scaled


@dataclass(frozen=True, init=False)
class MeasuredDiameter:
    """A diameter that was measured some other way than by H and an albedo, m.

    Parameters
    ----------
    diameter : spec
        Default unit m, for instance "2.1 +- 0.3 km".
    """

    diameter: Distribution
    name = "given diameter"
    remark = ""

    @property
    def distribution(self) -> Distribution:
        """The diameter, m."""
        return self.diameter

    def __init__(self, diameter: DistributionSpec) -> None:
        object.__setattr__(self, "diameter", diameter_m(diameter))

    def diameter_m(self, rng: np.random.Generator, n: int) -> np.ndarray:
        """``n`` draws of the diameter in m."""
        return self.diameter.draw(rng, n)

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description."""
        return {"diameter_m": self.diameter.to_dict()}


@dataclass(frozen=True, init=False)
class Photometry:
    """Absolute magnitude and geometric albedo of the nucleus.

    Parameters
    ----------
    H : spec
        Absolute magnitude, for instance 18.2 or "18.2 +- 0.3". With a coma in the aperture the
        photometric diameter is an upper bound: say so with ``coma=True``.
    albedo : spec, optional
        Geometric albedo; default `DEFAULT_ALBEDO`.
    coma : bool
        The brightness may hold light of a coma.
    """

    absolute_magnitude: Distribution
    albedo: Distribution
    coma: bool = False
    name = "photometric diameter"

    @property
    def distribution(self) -> Distribution:
        """The photometric diameter, m, by its 16th, 50th and 84th percentile."""
        drawn = self.diameter_m(np.random.default_rng(1), 200_000)
        low, middle, high = (float(x) for x in np.quantile(drawn, [0.15866, 0.5, 0.84134]))
        if not high > middle > low:
            return Fixed(middle)
        return SplitNormal(middle, middle - low, high - middle, lower=0.0)

    @property
    def remark(self) -> str:
        """What to keep in mind with the size."""
        if not self.coma:
            return ""
        return "the magnitude may hold a coma, so the true size is smaller and the need greater"

    def __init__(
        self, H: DistributionSpec, albedo: DistributionSpec | None = None, coma: bool = False
    ) -> None:
        magnitude, unit = _known("H", H, '"18.2 +- 0.3"', lower=-5.0, upper=45.0)
        if unit not in ("", "mag"):
            raise CaseError(f"H has the unit {unit!r}; it is a magnitude.")
        found: Distribution = DEFAULT_ALBEDO
        if albedo is not None:
            found, unit = _known("albedo", albedo, '"0.02 to 0.06"', lower=0.0, upper=1.5)
            if unit:
                raise CaseError(f"albedo has no unit, but {unit!r} was given.")
        object.__setattr__(self, "absolute_magnitude", magnitude)
        object.__setattr__(self, "albedo", found)
        object.__setattr__(self, "coma", bool(coma))

    def diameter_m(self, rng: np.random.Generator, n: int) -> np.ndarray:
        """``n`` draws of the photometric diameter in m."""
        return photometric_diameter_m(
            self.absolute_magnitude.draw(rng, n), self.albedo.draw(rng, n)
        )

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description."""
        return {
            "H": self.absolute_magnitude.to_dict(),
            "albedo": self.albedo.to_dict(),
            "coma": self.coma,
        }


KnownSize: TypeAlias = Photometry | MeasuredDiameter


@dataclass(frozen=True)
class SizeCheck:
    """A photometric or given diameter beside a mass bound.

    ``diameter`` (median), ``diameter_minus``, ``diameter_plus`` (to the 16th and 84th percentile)
    in m; ``density_needed``: bulk density (kg/m3) that a sphere of the photometric diameter must
    exceed, at the confidence of the bound, to hold the mass; ``verdict``: "agree", "tension" or
    "clash".
    """

    diameter: Quantity
    diameter_minus: Quantity
    diameter_plus: Quantity
    density_needed: Quantity
    confidence: float
    verdict: str
    reason: str = field(repr=False)
    name: str = "photometric diameter"

    def __str__(self) -> str:
        return (
            f"{self.name} {number_text(self.diameter.value)} "
            f"+{number_text(self.diameter_plus.value, 2)} "
            f"-{number_text(self.diameter_minus.value, 2)} m: {self.verdict}; {self.reason}"
        )

    def _repr_html_(self) -> str:
        return as_html([f"{str(self)[0].upper()}{str(self)[1:]}."])

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description."""
        return {
            "diameter_m": float(self.diameter.value),
            "diameter_minus_m": float(self.diameter_minus.value),
            "diameter_plus_m": float(self.diameter_plus.value),
            "density_needed_kg_m3": float(self.density_needed.value),
            "confidence": self.confidence,
            "verdict": self.verdict,
            "reason": self.reason,
            "name": self.name,
        }


def size_check(
    mass_draws_kg: np.ndarray,
    size: KnownSize,
    bulk: Distribution,
    confidence: float,
    rng: np.random.Generator,
) -> SizeCheck:
    """Compare mass draws (n,) kg with what is known of the size under a density prior (kg/m3).

    Verdict: "clash" if the density needed exceeds the 97.5th percentile of the prior, "tension"
    above its 84th, else "agree".
    """
    diameters = size.diameter_m(rng, len(mass_draws_kg))
    needed = float(np.quantile(mass_draws_kg / sphere_mass_kg(diameters, 1.0), 1 - confidence))
    high, top = (float(bulk.ppf(np.asarray(p))) for p in (0.84134, 0.975))
    verdict = "clash" if needed > top else "tension" if needed > high else "agree"
    reason = (
        f"a sphere of that size needs a bulk density above {rounded(needed, 2, outward='down')} "
        f"kg/m3 ({percent(confidence)}) to hold the mass, against an assumed {bulk} kg/m3"
    )
    if size.remark:
        reason += f"; {size.remark}"
    low_d, mid_d, high_d = size.distribution.ppf(np.array([0.15866, 0.5, 0.84134]))
    return SizeCheck(
        mid_d * u.m,
        (mid_d - low_d) * u.m,
        (high_d - mid_d) * u.m,
        needed * u.kg / u.m**3,
        confidence,
        verdict,
        reason,
        size.name,
    )
