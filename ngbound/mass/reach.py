"""The inverse question: which production rate would this arc have revealed, for a given body?

May import: constants, errors, and from its own room distributions, outgassing, size.
"""

import math
from dataclasses import dataclass
from typing import Any

import astropy.units as u
import numpy as np
from astropy.units import Quantity

from ngbound.constants import AU_D2_TO_M_S2
from ngbound.errors import CaseError, MassError

from .distributions import (
    AtMost,
    Distribution,
    DistributionSpec,
    number_text,
    parse_distribution,
)
from .outgassing import DEFAULT_COLLIMATION, DEFAULT_SPEED_LAW, Outgassing, molecule_mass_kg
from .size import density as density_from
from .size import sphere_mass_kg


@dataclass(frozen=True)
class RevealedRate:
    """Production rate that would have lifted the thrust to the detection threshold.

    ``rate`` (s^-1) and ``mass_loss`` (kg/s): median; ``rate_low``, ``rate_high``: the central
    interval at ``confidence``.
    """

    species: str
    at_au: float
    rate: Quantity
    rate_low: Quantity
    rate_high: Quantity
    mass_loss: Quantity
    confidence: float
    diameter: Distribution
    density: Distribution
    threshold: Quantity

    def __str__(self) -> str:
        return (
            f"A body of diameter {self.diameter} m and bulk density {self.density} kg/m3 would "
            f"have shown a thrust if it lost more than about {number_text(self.rate.value, 2)} "
            f"molecules/s of {self.species} at {self.at_au:g} au ({100 * self.confidence:g} %: "
            f"{number_text(self.rate_low.value, 2)} to {number_text(self.rate_high.value, 2)}; "
            f"{number_text(self.mass_loss.value, 2)} kg/s)."
        )

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description."""
        return {
            "species": self.species,
            "at_au": self.at_au,
            "rate_per_s": float(self.rate.value),
            "rate_low_per_s": float(self.rate_low.value),
            "rate_high_per_s": float(self.rate_high.value),
            "mass_loss_kg_s": float(self.mass_loss.value),
            "confidence": self.confidence,
            "diameter_m": self.diameter.to_dict(),
            "density_kg_m3": self.density.to_dict(),
            "threshold_au_d2": float(self.threshold.value),
        }


def revealed_rate(
    threshold: Quantity | float,
    diameter: DistributionSpec,
    *,
    at: float,
    g_at_r: float = 1.0,
    density: DistributionSpec | None = None,
    species: str = "H2O",
    speed: Any = None,
    collimation: Any = None,
    confidence: float = 0.9,
    seed: int | np.random.Generator = 1,
    n_draws: int = 20_000,
) -> RevealedRate:
    """Q = M A_det g(r) / (zeta m v) for a body of given size and density.

    Parameters
    ----------
    threshold : Quantity or float
        Detection threshold A_det (au/d2 if bare) at g = 1.
    diameter : spec
        Default unit m.
    at : float
        Heliocentric distance in au at which the rate is wanted, with ``g_at_r`` the thrust law
        there.
    density, speed, collimation, species
        As in `mass_bound` and `Outgassing`.
    """
    a_det = float(u.Quantity(threshold, u.au / u.day**2).value)
    if not (a_det > 0 and g_at_r > 0):
        raise MassError(
            f"The threshold {a_det:g} au/d2 and g = {g_at_r:g} must both be positive for a rate to "
            "follow."
        )
    if not 0 < confidence < 1:
        raise CaseError(f"confidence = {confidence!r} must be between 0 and 1.")
    size, unit = parse_distribution(diameter, "diameter", lower=0.0)
    if isinstance(size, AtMost):
        raise CaseError("diameter is only an upper limit; the rate needs a size, such as a range.")
    try:
        size = size.scaled(float(u.Unit(unit or "m").to(u.m)))
    except (ValueError, TypeError, u.UnitConversionError) as error:
        raise CaseError(f"diameter has the unit {unit!r}; allowed: m, km.") from error
    bulk = density_from(density)
    rng = np.random.default_rng(seed)
    one = Outgassing(
        "1e26 molecules/s",
        speed or DEFAULT_SPEED_LAW,
        DEFAULT_COLLIMATION if collimation is None else collimation,
        at,
        species,
    )
    force_per_molecule = one.draw(rng, n_draws).force.value / 1e26
    mass = sphere_mass_kg(size.draw(rng, n_draws), bulk.draw(rng, n_draws))
    rates = mass * a_det * AU_D2_TO_M_S2 * g_at_r / force_per_molecule
    half = (1 - confidence) / 2
    low, middle, high = (float(x) for x in np.quantile(rates, [half, 0.5, 1 - half]))
    if not math.isfinite(middle):
        raise MassError(
            "The collimation or speed reaches zero, so no rate is large enough; give them a range "
            "that keeps away from zero."
        )
    per_s = 1 / u.s
    return RevealedRate(
        species,
        one.emissions[0].at_au,
        middle * per_s,
        low * per_s,
        high * per_s,
        middle * molecule_mass_kg(species) * u.kg / u.s,
        confidence,
        size,
        bulk,
        a_det * u.au / u.day**2,
    )
