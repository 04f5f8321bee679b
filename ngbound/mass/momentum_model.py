"""ln M as a function of named uncertain inputs, the acceleration among them.

May import: constants, errors, limits, rounding, and from its own room distributions, notebook and
outgassing.

What `mass_bound` and `mass_ceiling` share: reading a posterior or a limit, the thrust law at the
distances of the measurements, and the force over g summed over species.
"""

import math
import warnings
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, TypeAlias

import astropy.units as u
import numpy as np
from astropy.units import Quantity

from ngbound.constants import AU_D2_TO_M_S2
from ngbound.errors import CaseError, MassError, NgboundWarning
from ngbound.limits import Posterior, UpperLimit
from ngbound.rounding import only_along

from .distributions import Fixed
from .notebook import as_html
from .outgassing import Emission, Outgassing

AU_D2 = u.au / u.day**2
ACCELERATION = "acceleration"
MIN_DRAWS = 20_000
MAX_POSTERIOR = 200_000

GAt: TypeAlias = Callable[[float], float] | float


@dataclass(frozen=True)
class Acceleration:
    """|A| in au/d2, (n,), and what is known about where it comes from."""

    magnitudes: np.ndarray
    limit_confidence: float | None = None
    n_effective: float | None = None
    remarks: tuple[str, ...] = ()
    components: str = ""


@dataclass(frozen=True)
class LawCheck:
    """One species measured at two distances: do its rates follow the thrust law?

    ``ratio``: force over g at the second distance, divided by the same at the first; 1 if they
    agree. ``sigma``: its distance from 1 in standard deviations (logarithmic; common inputs
    cancel).
    """

    species: str
    r1_au: float
    r2_au: float
    ratio: float
    sigma: float

    def __str__(self) -> str:
        return (
            f"{self.species}: force / g(r) at {self.r2_au:g} au is {self.ratio:.3g} times that at "
            f"{self.r1_au:g} au ({self.sigma:.1f} sigma)"
        )

    def _repr_html_(self) -> str:
        return as_html([f"{self}."])

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description."""
        return {**vars(self), "sentence": str(self)}


def read_acceleration(
    limit_or_samples: Any, limit_confidence: float | None, n_effective: float | None
) -> Acceleration:
    """Read a posterior, a limit, or plain numbers; warn where a chain has not converged."""
    values: Any = limit_or_samples
    remarks: tuple[str, ...] = ()
    components = ""
    if isinstance(limit_or_samples, (Posterior, UpperLimit)):
        components = limit_or_samples.components
    if isinstance(limit_or_samples, Posterior):
        values = limit_or_samples.A_mag
        n_effective = n_effective or limit_or_samples.ess.get("|A|")
        remarks = (f"prior of the thrust: {limit_or_samples.prior.name}",)
    elif isinstance(limit_or_samples, UpperLimit):
        values = limit_or_samples.magnitude
        limit_confidence = limit_or_samples.confidence
        remarks = (f"prior of the thrust: {limit_or_samples.prior}",)
    if isinstance(limit_or_samples, (Posterior, UpperLimit)) and not limit_or_samples.converged:
        warnings.warn(
            f"The mass rests on a posterior that has not converged: {limit_or_samples.message}",
            NgboundWarning,
            stacklevel=3,
        )
    if along := only_along(components):
        remarks += (
            f"direction of the thrust: {along}, as the fit had no other component; one with "
            "another part could be larger and the body lighter",
        )
    return Acceleration(_magnitudes(values), limit_confidence, n_effective, remarks, components)


def _magnitudes(limit_or_samples: Any) -> np.ndarray:
    """|A| in au/d2, (n,), from a number, a Quantity, draws (n,) or components (n, k)."""
    values = in_au_d2(limit_or_samples, "acceleration")
    if values.ndim > 2:
        raise CaseError(
            f"Draws of the acceleration have the shape {values.shape}; allowed: (n,) magnitudes or "
            "(n, k) components."
        )
    values = np.linalg.norm(values, axis=1) if values.ndim == 2 else np.abs(np.atleast_1d(values))
    if not len(values) or not np.all(np.isfinite(values)):
        raise MassError("The acceleration is empty or not finite; no mass follows from it.")
    if not values.any():
        raise MassError("The acceleration is zero; no finite mass follows from it.")
    if 1 < len(values) < 100:
        raise MassError(
            f"{len(values)} posterior draws of the acceleration are too few for a quantile; at "
            "least 100 are needed."
        )
    return np.maximum(values, values[values > 0].min())


def in_au_d2(value: Any, name: str) -> np.ndarray:
    """Numbers (bare: au/d2) or a Quantity as floats in au/d2."""
    if isinstance(value, Quantity):
        try:
            return np.asarray(value.to_value(AU_D2), dtype=float)
        except u.UnitConversionError as error:
            raise CaseError(f"{name} has the unit {value.unit}; allowed: au/d2, m/s2.") from error
    try:
        return np.asarray(value, dtype=float)
    except (TypeError, ValueError) as error:
        raise CaseError(
            f"{name} of type {type(value).__name__} cannot be read as numbers in au/d2; give a "
            "number, an array or a Quantity."
        ) from error


def g_values(g_at: GAt, outgassing: Outgassing) -> tuple[float, ...]:
    """The thrust law at the distance of each emission; MassError where it is off."""
    if not callable(g_at) and len(outgassing.distances_au) > 1:
        raise CaseError(
            f"The rates were measured at {len(outgassing.distances_au)} distances, so g_at must be "
            "a function of the distance in au, not one number."
        )

    def value(emission: Emission) -> float:
        g = float(g_at(emission.at_au)) if callable(g_at) else float(g_at)
        if not (g > 0 and math.isfinite(g)):
            raise MassError(
                f"The thrust law gives g = {g:g} at {emission.at_au:g} au, where the "
                f"{emission.species} rate was measured: the rate says nothing about a thrust that "
                "is off there. Take a rate inside the window of the law, or another law."
            )
        return g

    return tuple(value(emission) for emission in outgassing.emissions)


class MomentumModel:
    """ln M as a function of named inputs; the acceleration is one of them."""

    def __init__(self, outgassing: Outgassing, g: tuple[float, ...], samples: np.ndarray) -> None:
        self.outgassing = outgassing
        self.g = np.array(g)[:, np.newaxis]
        self.samples = np.sort(samples)
        self.distributions = outgassing.inputs()
        emissions = outgassing.emissions
        self.groups = {
            name: np.array([k for k, e in enumerate(emissions) if e.species == name])
            for name in dict.fromkeys(e.species for e in emissions)
        }
        self.weights = {
            name: np.full(len(rows), 1.0 / len(rows)) for name, rows in self.groups.items()
        }

    @property
    def names(self) -> list[str]:
        """Inputs that vary."""
        varying = [
            name for name, found in self.distributions.items() if not isinstance(found, Fixed)
        ]
        return varying + ([ACCELERATION] if len(self.samples) > 1 else [])

    def draw(self, rng: np.random.Generator, n: int) -> dict[str, np.ndarray]:
        """``n`` draws of every input by name; posterior draws are shuffled, not thinned."""
        values = {name: found.draw(rng, n) for name, found in self.distributions.items()}
        turns = -(-n // len(self.samples))
        order = np.concatenate([rng.permutation(len(self.samples)) for _ in range(turns)])[:n]
        values[ACCELERATION] = self.samples[order]
        return values

    def quantile(self, name: str, p: float) -> float:
        """Quantile of one input."""
        if name == ACCELERATION:
            return float(np.quantile(self.samples, p))
        return float(self.distributions[name].ppf(np.asarray(p)))

    def medians(self) -> dict[str, np.ndarray]:
        """Every input at its median, arrays of one."""
        return {
            name: np.array([self.quantile(name, 0.5)])
            for name in [*self.distributions, ACCELERATION]
        }

    def log_over_g(self, values: dict[str, np.ndarray]) -> np.ndarray:
        """ln of force over g by emission, (m, n); -inf where the force is zero."""
        force, _ = self.outgassing.evaluate(values)
        with np.errstate(divide="ignore"):
            return np.log(force / self.g)

    def weigh(self, values: dict[str, np.ndarray]) -> None:
        """Weigh several distances of one species by the inverse variance of ln(force / g)."""
        logs = self.log_over_g(values)
        for name, rows in self.groups.items():
            if len(rows) > 1:
                weight = 1.0 / np.maximum(logs[rows].var(axis=1), 1e-6)
                self.weights[name] = weight / weight.sum()

    def log_force(self, values: dict[str, np.ndarray]) -> np.ndarray:
        """ln of the force at g = 1, (n,): a weighted mean over distances, a sum over species."""
        logs = self.log_over_g(values)
        by_species = [self.weights[name] @ logs[rows] for name, rows in self.groups.items()]
        return np.logaddexp.reduce(np.array(by_species), axis=0)

    def log_mass(self, values: dict[str, np.ndarray]) -> np.ndarray:
        """ln M (kg), (n,)."""
        return self.log_force(values) - np.log(values[ACCELERATION] * AU_D2_TO_M_S2)

    def law_checks(self, values: dict[str, np.ndarray]) -> tuple[LawCheck, ...]:
        """Neighbouring distances of each species against the law; a warning beyond 2 sigma."""
        logs = self.log_over_g(values)
        found = []
        for species, rows in self.groups.items():
            emissions = [self.outgassing.emissions[k] for k in rows]
            order = np.argsort([e.at_au for e in emissions], kind="stable")
            for i, j in zip(order[:-1], order[1:], strict=True):
                if emissions[i].at_au == emissions[j].at_au:
                    continue
                difference = logs[rows[j]] - logs[rows[i]]
                spread = float(difference.std())
                middle = float(np.median(difference))
                sigma = abs(middle) / spread if spread > 0 else (math.inf if middle else 0.0)
                found.append(
                    LawCheck(
                        species, emissions[i].at_au, emissions[j].at_au, math.exp(middle), sigma
                    )
                )
        for check in found:
            if check.sigma > 2:
                warnings.warn(
                    f"The measured rates do not follow the thrust law: {check}. The mass assumes "
                    "that they do; try another law, or one distance at a time.",
                    NgboundWarning,
                    stacklevel=3,
                )
        return tuple(found)


def monte_carlo_size(samples: np.ndarray, n_draws: int | None) -> int:
    """Draws to make: the number of posterior draws, within reason, unless told."""
    n = max(MIN_DRAWS, min(len(samples), MAX_POSTERIOR)) if n_draws is None else n_draws
    if n < 1000:
        raise CaseError(f"n_draws = {n} must be at least 1000.", value=n)
    return n


def quantile_and_error(values: np.ndarray, level: float, n_effective: float) -> tuple[float, float]:
    """Quantile and its standard error from the order statistics (binomial ranks)."""
    half = math.sqrt(level * (1 - level) / n_effective)
    low, mid, high = np.quantile(values, [max(level - half, 0.0), level, min(level + half, 1.0)])
    return float(mid), float(high - low) / 2


def checked_confidence(confidence: float) -> float:
    """The confidence of a bound; CaseError outside [0.5, 1)."""
    if not 0.5 <= confidence < 1:
        raise CaseError(
            f"confidence = {confidence!r} must be at least 0.5 and below 1, such as 0.95.",
            value=confidence,
        )
    return confidence


def law_of(g_at: GAt | None, carrier: Any) -> GAt:
    """``g_at``, or the law that a limit or a posterior carries; MassError where there is none."""
    if g_at is None:
        g_at = getattr(getattr(carrier, "information", carrier), "law_g", None)
    if g_at is None:
        raise MassError(
            "A mass needs the thrust law at the distance where the rate was measured, and these "
            "numbers do not carry it: give g_at, for instance g_at=thrust.g."
        )
    return g_at
