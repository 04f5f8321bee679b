"""A thrust that was detected, and all that can push: the mass that the body cannot exceed.

May import: constants, errors, rounding, limits, and from its own room distributions,
momentum_model, notebook, outgassing and size.

M = F / (A g) as in `mass_bound`, but read from above: F is the whole force the budget allows, so
that rates known only as upper limits stand at their limit, and A is a thrust whose posterior keeps
away from zero. Without a detection there is no such bound: a limit on F and a limit on A, both from
above, exclude no mass at all.
"""

from dataclasses import dataclass, replace
from typing import Any

import astropy.units as u
import numpy as np
from astropy.units import Quantity

from ngbound.errors import MassError
from ngbound.rounding import length_text, mass_text, percent, rounded

from .distributions import AtMost, Distribution, DistributionSpec, Fixed
from .momentum_model import (
    AU_D2,
    GAt,
    MomentumModel,
    checked_confidence,
    g_values,
    law_of,
    monte_carlo_size,
    quantile_and_error,
    read_acceleration,
)
from .notebook import as_html
from .outgassing import Outgassing
from .size import KnownSize, bulk_density, sphere_diameter_m, sphere_mass_kg


@dataclass(frozen=True)
class MassCeiling:
    """Upper bound on mass and diameter, from a detected thrust and all that can push.

    ``mass``, ``diameter``: the ``confidence`` quantile of M and D, with their Monte Carlo errors;
    ``joint_confidence``: what can be claimed together with the quoted confidence of rates that are
    upper limits (Bonferroni), None where one of these has no confidence;
    ``acceleration_lower``: the (1 - confidence) quantile of |A|, au/d2.
    ``density_allowed`` (kg/m3): the bulk density that a sphere of the known ``size`` cannot exceed;
    ``verdict`` on it: "clash" below the 2.5th percentile of the density assumed, "tension" below
    its 16th, else "agree".
    """

    mass: Quantity
    mass_error: Quantity
    diameter: Quantity
    diameter_error: Quantity
    confidence: float
    joint_confidence: float | None
    acceleration_lower: Quantity
    density: Distribution
    limits: tuple[str, ...]
    n_draws: int
    size: KnownSize | None = None
    density_allowed: Quantity | None = None
    verdict: str = ""

    def sentence(self) -> str:
        """The bound in words, with what it rests on."""
        held = f" (rates known only as limits held there: {', '.join(self.limits)})"
        joint = ""
        if self.joint_confidence is None:
            joint = " (a limit came without one, so none holds for all together)"
        elif self.joint_confidence < self.confidence:
            joint = f" (at least {percent(self.joint_confidence)} together with that of the limits)"
        text = (
            f"The thrust was detected (|A| > "
            f"{rounded(float(self.acceleration_lower.value), 2, outward='down')} au/d2 at "
            f"{percent(self.confidence)}), so that the same budget{held if self.limits else ''} "
            f"bounds the mass from above too: below "
            f"{mass_text(float(self.mass.value), outward='up')}, a diameter below "
            f"{length_text(float(self.diameter.value), outward='up')} at a bulk density of "
            f"{self.density} kg/m3, at {percent(self.confidence)} confidence{joint}, if nothing "
            "but the species named pushes."
        )
        if self.size is not None and self.density_allowed is not None:
            median_m = self.size.distribution.median
            allowed = rounded(float(self.density_allowed.value), 2, outward="up")
            text += (
                f" A sphere of the {self.size.name}, {length_text(median_m, outward='')}, must "
                f"then have a bulk density below {allowed} kg/m3: {self.verdict}."
            )
        return text

    def __str__(self) -> str:
        return self.sentence()

    def _repr_html_(self) -> str:
        return as_html([self.sentence()])

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record."""
        return {
            "mass_kg": float(self.mass.value),
            "mass_error_kg": float(self.mass_error.value),
            "diameter_m": float(self.diameter.value),
            "diameter_error_m": float(self.diameter_error.value),
            "confidence": self.confidence,
            "joint_confidence": self.joint_confidence,
            "acceleration_lower_au_d2": float(self.acceleration_lower.value),
            "density_kg_m3": self.density.to_dict(),
            "limits": list(self.limits),
            "n_draws": self.n_draws,
            "density_allowed_kg_m3": None
            if self.density_allowed is None
            else float(self.density_allowed.value),
            "verdict": self.verdict,
            "sentence": self.sentence(),
        }


def mass_ceiling(
    samples: Any,
    outgassing: Outgassing,
    *,
    g_at: GAt | None = None,
    density: DistributionSpec | None = None,
    confidence: float = 0.95,
    seed: int | np.random.Generator = 1,
    n_draws: int | None = None,
    n_effective: float | None = None,
    photometry: KnownSize | None = None,
) -> MassCeiling:
    """Upper bound on mass and diameter; only for a thrust that was detected.

    Parameters
    ----------
    samples : Posterior or array
        Posterior of a detected thrust, or draws of |A| (n,) or of its components (n, k), au/d2.
    outgassing : Outgassing
        All that can push; rates that are upper limits are held at their limit.
    g_at, density, confidence, seed, n_draws, n_effective, photometry
        As in `mass_bound`.

    Raises
    ------
    MassError
        One number instead of draws; the law is off at a measurement.
    CaseError
        A value outside its range.
    """
    checked_confidence(confidence)
    rng = np.random.default_rng(seed)
    bulk = bulk_density(density)
    acceleration = read_acceleration(samples, None, n_effective)
    if len(acceleration.magnitudes) == 1:
        raise MassError(
            "An upper mass needs the posterior of a detected thrust, not one number: an upper "
            "limit on the thrust bounds the mass from below only."
        )
    n = monte_carlo_size(acceleration.magnitudes, n_draws)
    whole = Outgassing([replace(e, rate=_at_limit(e.rate)) for e in outgassing.emissions])
    model = MomentumModel(whole, g_values(law_of(g_at, samples), whole), acceleration.magnitudes)
    drawn = model.draw(rng, n)
    model.weigh(drawn)
    mass = np.exp(model.log_mass(drawn))
    diameter = sphere_diameter_m(mass, bulk.draw(rng, n))
    n_eff = float(min(n, acceleration.n_effective or len(acceleration.magnitudes)))
    mass_high, mass_error = quantile_and_error(mass, confidence, n_eff)
    diameter_high, diameter_error = quantile_and_error(diameter, confidence, n_eff)
    allowed, verdict = None, ""
    if photometry is not None:
        volume = sphere_mass_kg(photometry.diameter_m(rng, n), 1.0)
        highest = float(np.quantile(mass / volume, confidence))
        low, bottom = (float(bulk.ppf(np.asarray(p))) for p in (0.15866, 0.025))
        verdict = "clash" if highest < bottom else "tension" if highest < low else "agree"
        allowed = highest * u.kg / u.m**3
    limits = [e for e in outgassing.emissions if isinstance(e.rate, AtMost)]
    joint: float | None = confidence
    for emission in limits:
        level = emission.rate.confidence if isinstance(emission.rate, AtMost) else None
        joint = None if joint is None or level is None else max(0.0, joint - (1.0 - level))
    return MassCeiling(
        mass_high * u.kg,
        mass_error * u.kg,
        diameter_high * u.m,
        diameter_error * u.m,
        confidence,
        joint,
        float(np.quantile(acceleration.magnitudes, 1 - confidence)) * AU_D2,
        bulk,
        tuple(f"{e.species} {e.rate_words} at {e.at_au:g} au" for e in limits),
        n,
        photometry,
        allowed,
        verdict,
    )


def _at_limit(rate: Distribution) -> Distribution:
    return Fixed(rate.limit) if isinstance(rate, AtMost) else rate
