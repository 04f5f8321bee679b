"""Force over acceleration: the mass and size that a limit on the thrust demands.

May import: constants, errors, limits, and from its own room distributions, outgassing and size.

M = zeta Q m v / (A g(r_Q)), with A the thrust at 1 au and g the thrust law at the distance r_Q
where the rate was measured (see the room's docstring). Only a lower bound is quoted, because the
posterior of A reaches zero.
"""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import Any

import astropy.units as u
import numpy as np
from astropy.units import Quantity

from ngbound.constants import AU_D2_TO_M_S2
from ngbound.errors import MassError
from ngbound.limits import DetectionThreshold
from ngbound.rounding import length_text, mass_text, only_along, percent, rounded, up

from .distributions import AtMost, Distribution, DistributionSpec, Fixed
from .momentum_model import (
    ACCELERATION,
    AU_D2,
    GAt,
    LawCheck,
    MomentumModel,
    checked_confidence,
    g_values,
    in_au_d2,
    law_of,
    monte_carlo_size,
    quantile_and_error,
    read_acceleration,
)
from .notebook import as_columns, as_html
from .outgassing import Outgassing
from .size import (
    DEFAULT_DENSITY,
    DEFAULT_DENSITY_SOURCE,
    KnownSize,
    SizeCheck,
    bulk_density,
    size_check,
    sphere_diameter_m,
)

DENSITY = "bulk density"


@dataclass(frozen=True)
class InputShare:
    """How much one input matters.

    ``low``, ``high``: its 16th and 84th percentile, ``median`` between, in ``unit``;
    ``mass_at_low``, ``mass_at_high``: mass (kg) with only this input moved there, all others at
    their median; ``bound_if_known``: the lower mass bound (kg) if this input were exactly its
    median; ``first_order``, ``total``: share of the variance of ln M by this input alone, and with
    its interactions (NaN if ln M does not vary); ``of_diameter``: share (total) of the variance of
    ln D.
    """

    name: str
    unit: str
    low: float
    median: float
    high: float
    mass_at_low: float
    mass_at_high: float
    bound_if_known: float
    first_order: float
    total: float
    of_diameter: float

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description; NaN becomes None."""
        return {
            k: None if isinstance(v, float) and math.isnan(v) else v for k, v in vars(self).items()
        }


@dataclass(frozen=True, eq=False)
class MassBound:
    """Lower bound on mass and diameter, from a thrust limit and an outgassing budget.

    Attributes
    ----------
    mass, mass_error : Quantity, kg
        The bound: the (1 - confidence) quantile of M, and its Monte Carlo standard error.
    diameter, diameter_error : Quantity, m
        The same for the diameter of a sphere of the assumed bulk density.
    confidence : float
        Of the quantile. Where the acceleration is one quoted limit (``acceleration_kind`` "upper
        limit"), it is that of the budget alone; ``joint_confidence`` is what can be claimed
        together, None where the limit came without a confidence.
    mass_median : Quantity, kg
        Median of the draws, for orientation; no estimate (it depends on the prior of A).
    mass_detection, diameter_detection : Quantity or None
        From the detection threshold: a lighter body with this budget would have been detected.
    inputs : tuple of InputShare
        Largest share first. ``dominant`` is the name of the first ("" if nothing varies).
    size_check : SizeCheck or None
    law_checks : tuple of LawCheck
    components : str
        Letters of the thrust components that were looked for; "" where that is not known.
    mass_draws_kg : ndarray (n,)
    """

    mass: Quantity
    mass_error: Quantity
    diameter: Quantity
    diameter_error: Quantity
    confidence: float
    joint_confidence: float | None
    mass_median: Quantity
    mass_detection: Quantity | None
    diameter_detection: Quantity | None
    acceleration_kind: str
    acceleration_median: Quantity
    acceleration_upper: Quantity
    threshold: Quantity | None
    components: str
    force: Quantity
    density: Distribution
    outgassing: Outgassing
    inputs: tuple[InputShare, ...]
    size_check: SizeCheck | None
    law_checks: tuple[LawCheck, ...]
    assumptions: tuple[str, ...]
    n_draws: int
    n_effective: float
    seed: int | None
    mass_draws_kg: np.ndarray = field(repr=False)

    @property
    def dominant(self) -> str:
        """Name of the input with the largest total share of the variance of ln M; "" if none."""
        if not self.inputs or math.isnan(self.inputs[0].total):
            return ""
        return self.inputs[0].name

    def sentence(self) -> str:
        """The bound in words, with what it rests on."""
        sources = "; ".join(
            str(e) for e in self.outgassing.emissions if not isinstance(e.rate, AtMost)
        )
        joint = ""
        upper = up(float(self.acceleration_upper.value))
        if self.acceleration_kind == "upper limit":
            held = f"|A| held at its limit of {upper} au/d2"
            if self.joint_confidence is None:
                joint = " (of the budget; the limit came without one, so none holds for both)"
            elif self.joint_confidence < self.confidence:
                joint = (
                    f" (at least {percent(self.joint_confidence)} together with that of the limit)"
                )
        else:
            held = f"the posterior of |A| ({percent(self.confidence)} below {upper} au/d2)"
        along, direction = only_along(self.components), "whatever its direction"
        if along:
            held += f" of a thrust {along}"
            direction = f"if it acts {along}"
        text = (
            f"With {sources}, and {held}, the mass is above {mass_text(float(self.mass.value))} "
            f"(Monte Carlo error {rounded(float(self.mass_error.value), 1)} kg) at "
            f"{percent(self.confidence)} confidence{joint}; at a bulk density of {self.density} "
            f"kg/m3 the diameter is above {length_text(float(self.diameter.value))}."
        )
        if self.mass_detection is not None and self.diameter_detection is not None:
            text += (
                " Under the same budget a body lighter than "
                f"{mass_text(float(self.mass_detection.value))} "
                f"({length_text(float(self.diameter_detection.value))}) would have shown a thrust "
                f"above the detection threshold, {direction}."
            )
        if self.dominant:
            text += (
                f" What matters most is the {self.dominant}: "
                f"{100 * self.inputs[0].total:.0f} % of the variance of ln M."
            )
        if self.size_check is not None:
            text += f" {str(self.size_check)[0].upper()}{str(self.size_check)[1:]}."
        return text

    def table(self) -> str:
        """The one-at-a-time table and the variance decomposition as aligned text."""
        return as_columns(share_rows(self.inputs), left=(0, 7))

    def __str__(self) -> str:
        lines = [self.sentence(), "", self.table()]
        lines += [str(check) for check in self.law_checks]
        lines += [f"assumed: {text}" for text in self.assumptions]
        return "\n".join(lines)

    def _repr_html_(self) -> str:
        checks = [str(check) for check in self.law_checks]
        assumed = [f"assumed: {text}" for text in self.assumptions]
        return as_html([self.sentence()], share_rows(self.inputs), [*checks, *assumed])

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record (without the draws)."""

        def number(q: Quantity | None) -> float | None:
            return float(q.value) if q is not None and np.isfinite(q.value) else None

        return {
            "mass_kg": number(self.mass),
            "mass_error_kg": number(self.mass_error),
            "diameter_m": number(self.diameter),
            "diameter_error_m": number(self.diameter_error),
            "confidence": self.confidence,
            "joint_confidence": self.joint_confidence,
            "mass_median_kg": number(self.mass_median),
            "mass_detection_kg": number(self.mass_detection),
            "diameter_detection_m": number(self.diameter_detection),
            "acceleration_kind": self.acceleration_kind,
            "acceleration_median_au_d2": number(self.acceleration_median),
            "acceleration_upper_au_d2": number(self.acceleration_upper),
            "threshold_au_d2": number(self.threshold),
            "components": self.components,
            "force_over_g_n": number(self.force),
            "density_kg_m3": self.density.to_dict(),
            "outgassing": self.outgassing.to_dict(),
            "inputs": [s.to_dict() for s in self.inputs],
            "table": self.table(),
            "dominant": self.dominant,
            "size_check": None if self.size_check is None else self.size_check.to_dict(),
            "law_checks": [c.to_dict() for c in self.law_checks],
            "assumptions": list(self.assumptions),
            "n_draws": self.n_draws,
            "n_effective": self.n_effective,
            "seed": self.seed,
            "sentence": self.sentence(),
        }


def momentum_mass(force: Quantity, acceleration: Quantity | float, g: float = 1.0) -> Quantity:
    """Mass (kg) that ``force`` (N) accelerates by ``acceleration`` (Quantity, or au/d2) times
    ``g``."""
    per_m_s2 = in_au_d2(acceleration, "acceleration") * AU_D2_TO_M_S2 * g
    if np.any(per_m_s2 <= 0):
        raise MassError("The acceleration must be positive for a mass to follow from a force.")
    return force.to_value(u.N) / per_m_s2 * u.kg


def mass_bound(
    limit_or_samples: Any,
    outgassing: Outgassing,
    *,
    g_at: GAt | None = None,
    density: DistributionSpec | None = None,
    confidence: float = 0.95,
    threshold: DetectionThreshold | Quantity | float | None = None,
    seed: int | np.random.Generator = 1,
    photometry: KnownSize | None = None,
    n_draws: int | None = None,
    limit_confidence: float | None = None,
    n_effective: float | None = None,
) -> MassBound:
    """Lower bound on mass and diameter.

    Parameters
    ----------
    limit_or_samples : Posterior, UpperLimit, number, Quantity or array
        A posterior, or draws of |A| (n,) or of the components (n, k) in au/d2 or as a Quantity; or
        one upper limit, at which A is then held. A is the thrust at g = 1.
    outgassing : Outgassing
    g_at : callable or float
        Thrust law g(r) with r in au; or its value at the one distance of the measurement. Not
        needed where the limit or posterior carries the law of its fit.
    density : spec, optional
        Bulk density, kg/m3; default `DEFAULT_DENSITY`.
    confidence : float
        Of the lower bound.
    threshold : number, Quantity or detection threshold, optional
        A_det at g = 1 (au/d2 if bare); of several values the largest, and of an object with
        ``worst`` that one, so that "would have been detected" holds in every direction.
    seed : int or numpy Generator
    photometry : Photometry or MeasuredDiameter, optional
        What is known of the size, to be set beside the bound.
    n_draws : int, optional
        Monte Carlo draws; default the number of posterior draws, 20000 at least.
    limit_confidence : float, optional
        Confidence of a quoted limit, for ``joint_confidence`` (Bonferroni).
    n_effective : float, optional
        Independent draws in a correlated chain; default all. Enters the Monte Carlo error.

    Raises
    ------
    MassError
        No rate has a lower bound; the law is off at a measurement; the limit is zero.
    CaseError
        A value outside its range.
    """
    checked_confidence(confidence)
    g_at = law_of(g_at, limit_or_samples)
    rng = np.random.default_rng(seed)
    bulk = bulk_density(density)
    acceleration = read_acceleration(limit_or_samples, limit_confidence, n_effective)
    samples = acceleration.magnitudes
    n = monte_carlo_size(samples, n_draws)
    known = _with_measured_rates(outgassing)
    model = MomentumModel(known, g_values(g_at, known), samples)
    first, second = model.draw(rng, n), model.draw(rng, n)
    model.weigh(first)
    log_mass = model.log_mass(first)
    mass = np.exp(log_mass)
    independent = acceleration.n_effective or (n if len(samples) == 1 else len(samples))
    n_eff = float(min(n, independent))
    level = 1 - confidence
    rho = bulk.draw(rng, n)
    diameter = sphere_diameter_m(mass, rho)
    mass_low, mass_err = quantile_and_error(mass, level, n_eff)
    diameter_low, diameter_err = quantile_and_error(diameter, level, n_eff)
    single = len(samples) == 1
    joint: float | None = confidence
    if single:
        of_limit = acceleration.limit_confidence
        joint = None if of_limit is None else max(0.0, confidence + of_limit - 1)
    components = acceleration.components
    if isinstance(threshold, DetectionThreshold):
        components = components or threshold.components
    mass_detection = diameter_detection = a_det = None
    remarks = acceleration.remarks
    if threshold is not None:
        worst = threshold.worst if isinstance(threshold, DetectionThreshold) else threshold
        a_det = float(np.max(in_au_d2(worst, "threshold")))
        if not a_det > 0:
            raise MassError(f"The detection threshold {a_det!r} au/d2 must be positive.")
        if not math.isfinite(a_det):
            remarks += (
                "threshold: infinite in some direction, so no mass would surely have shown",
            )
    if a_det is not None and math.isfinite(a_det):
        revealed = np.exp(model.log_force(first)) / (a_det * AU_D2_TO_M_S2)
        mass_detection = float(np.quantile(revealed, level))
        diameter_detection = float(np.quantile(sphere_diameter_m(revealed, rho), level))
    check = None
    if photometry is not None:
        check = size_check(mass, photometry, bulk, confidence, rng)
    return MassBound(
        mass=mass_low * u.kg,
        mass_error=mass_err * u.kg,
        diameter=diameter_low * u.m,
        diameter_error=diameter_err * u.m,
        confidence=confidence,
        joint_confidence=joint,
        mass_median=float(np.median(mass)) * u.kg,
        mass_detection=None if mass_detection is None else mass_detection * u.kg,
        diameter_detection=None if diameter_detection is None else diameter_detection * u.m,
        acceleration_kind="upper limit" if single else "posterior",
        acceleration_median=float(np.median(samples)) * AU_D2,
        acceleration_upper=float(np.quantile(samples, confidence)) * AU_D2,
        threshold=None if a_det is None else a_det * AU_D2,
        components=components,
        force=float(np.exp(np.median(model.log_force(first)))) * u.N,
        density=bulk,
        outgassing=outgassing,
        inputs=_shares(model, first, second, bulk, rho, level),
        size_check=check,
        law_checks=model.law_checks(first),
        assumptions=(*_assumptions(outgassing, bulk, single), *remarks),
        n_draws=n,
        n_effective=n_eff,
        seed=seed if isinstance(seed, int) else None,
        mass_draws_kg=mass,
    )


def _with_measured_rates(outgassing: Outgassing) -> Outgassing:
    """The part of the budget that has a lower bound; MassError if there is none."""
    measured = [e for e in outgassing.emissions if not isinstance(e.rate, AtMost)]
    if not measured:
        raise MassError(
            "Every rate of the budget is an upper limit, so that no mass is excluded from below: a "
            "body of any mass could have given less gas. A measured rate of at least one species "
            "would give a lower bound; the reach of the arc tells which rate it would have "
            "revealed, and a thrust that was detected bounds the mass from above."
        )
    return Outgassing(measured)


def _shares(
    model: MomentumModel,
    first: dict[str, np.ndarray],
    second: dict[str, np.ndarray],
    bulk: Distribution,
    rho: np.ndarray,
    level: float,
) -> tuple[InputShare, ...]:
    """One-at-a-time table and Sobol indices of ln M.

    First-order and total indices by the estimators of M. J. W. Jansen 1999, Comput. Phys. Commun.
    117, 35 (in the form of A. Saltelli et al. 2010, ibid. 181, 259; both from memory): with f(A),
    f(B) two independent designs and f(A_B) design A with one input taken from B.
    """
    f_a, f_b = model.log_mass(first), model.log_mass(second)
    variance = float(np.concatenate([f_a, f_b]).var())
    varies = variance > 1e-12
    log_rho_variance = float(np.log(rho).var())
    whole = variance + log_rho_variance
    middle = model.medians()
    shares = []
    for name in model.names:
        swapped = model.log_mass({**first, name: second[name]})
        only = 1 - float(((f_b - swapped) ** 2).mean()) / (2 * variance) if varies else math.nan
        total = float(((f_a - swapped) ** 2).mean()) / (2 * variance) if varies else math.nan
        low, mid, high = (model.quantile(name, p) for p in (0.15866, 0.5, 0.84134))
        at_low, at_high = (
            float(np.exp(model.log_mass({**middle, name: np.array([x])}))[0]) for x in (low, high)
        )
        known = model.log_mass({**first, name: np.full(len(f_a), mid)})
        shares.append(
            InputShare(
                name,
                _unit_of(name, model.outgassing),
                low,
                mid,
                high,
                at_low,
                at_high,
                float(np.exp(np.quantile(known, level))),
                max(0.0, only) if varies else math.nan,
                total,
                total * variance / whole if varies else math.nan,
            )
        )
    shares.sort(key=lambda s: -s.total if varies else 0.0)
    if not isinstance(bulk, Fixed):
        low, mid, high = (float(bulk.ppf(np.asarray(p))) for p in (0.15866, 0.5, 0.84134))
        mass = float(np.exp(model.log_mass(middle))[0])
        shares.append(
            InputShare(
                DENSITY,
                "kg/m3",
                low,
                mid,
                high,
                mass,
                mass,
                float(np.exp(np.quantile(f_a, level))),
                0.0 if varies else math.nan,
                0.0 if varies else math.nan,
                log_rho_variance / whole,
            )
        )
    return tuple(shares)


def _unit_of(name: str, outgassing: Outgassing) -> str:
    if name == ACCELERATION:
        return "au/d2"
    emission, kind = outgassing.owner(name)
    if kind == "rate":
        return emission.rate_unit
    if kind == "speed":
        return "of the law" if emission.speed_is_law else "m/s"
    return "-"


def _assumptions(outgassing: Outgassing, bulk: Distribution, single: bool) -> tuple[str, ...]:
    lines = list(outgassing.assumptions())
    if bulk == DEFAULT_DENSITY:
        lines.append(f"bulk density: {bulk} kg/m3, {DEFAULT_DENSITY_SOURCE}")
    if single:
        lines.append(
            "acceleration: held at the quoted limit, so the confidence of the bound is that of the "
            "outgassing budget alone"
        )
    lines.append("the rate is taken to follow the thrust law g(r), and the body to be a sphere")
    return tuple(lines)


def share_rows(inputs: Sequence[InputShare]) -> list[list[str]]:
    """One-at-a-time table and variance decomposition as text, the head first.

    The masses are medians moved by one input (to the nearest digit); "M > if known" is a bound.
    """
    head = ["input", "16 %", "median", "84 %", "M at 16 %", "M at 84 %", "M > if known"]
    rows = [[*head, "unit", "of ln M", "of ln D"]]
    for s in inputs:
        numbers = (s.low, s.median, s.high, s.mass_at_low, s.mass_at_high)
        bound = rounded(s.bound_if_known, 2, outward="down")
        rows.append([s.name, *(rounded(x, 3) for x in numbers), bound, s.unit])
        rows[-1] += [_percent(s.total), _percent(s.of_diameter)]
    return rows


def _percent(share: float) -> str:
    return "-" if math.isnan(share) else f"{100 * share:.0f} %"


def bounds_by_distance(
    limit_or_samples: Any, outgassing: Outgassing, *, g_at: Callable[[float], float], **options: Any
) -> Sequence[tuple[float, MassBound]]:
    """`mass_bound` from the measurements of one heliocentric distance at a time: (r au, bound)."""
    return [
        (
            r,
            mass_bound(
                limit_or_samples,
                Outgassing([e for e in outgassing.emissions if e.at_au == r]),
                g_at=g_at,
                **options,
            ),
        )
        for r in outgassing.distances_au
    ]
