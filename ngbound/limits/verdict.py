"""One line that cannot mislead; may import errors, rounding, fit and this room.

Four answers, decided in this order:

- "not trustworthy": the thrust is significant at the false-alarm rate of the threshold, but the
  noise is not as the error model says, or it vanishes under another defensible error model, or it
  is larger than anything plausible.
- "detection": it is significant, and none of that holds.
- "arc cannot tell": it is not significant, and the arc would not have shown a plausible thrust
  either (the threshold in the worst seen direction exceeds the largest plausible acceleration), or
  the noise is not as the error model says, so that the threshold means nothing.
- "non-detection": it is not significant, and a thrust above the threshold would have been seen.

The test is the likelihood ratio of the two fits, of their comparison where one is given; where the
two fits kept different observations and none is given it is the Wald statistic A_hat' F_A A_hat.
What significant means stands in `ngbound.fit`.

The size |A_hat| is the norm of a vector, which noise only makes longer (S. O. Rice 1945, Bell Syst.
Tech. J. 24, 46): without thrust it is about as large as its errors, never zero. A verdict that is
no detection therefore states the components with their errors instead.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from astropy import units as u

from ngbound.errors import LimitError
from ngbound.fit import Comparison, significance_sigma, tail_probability
from ngbound.limits.fit_protocol import ThrustFit
from ngbound.limits.information import AU_D2
from ngbound.limits.posterior import Posterior
from ngbound.limits.threshold import DetectionThreshold
from ngbound.limits.upper_limit import UpperLimit, upper_limit
from ngbound.rounding import only_along, percent, rounded, up, with_error

KINDS = ("detection", "non-detection", "arc cannot tell", "not trustworthy")


@dataclass(frozen=True)
class Verdict:
    """What the arc says about thrust.

    Attributes
    ----------
    kind : str
        "detection", "non-detection", "arc cannot tell" or "not trustworthy".
    sentence : str
    reasons : tuple of str
        Why a caveat was made; empty for a plain verdict.
    p_value : float
        Probability of so large a statistic without thrust.
    significance_sigma : float
        ``p_value`` as two-sided Gaussian sigma.
    statistic : float
        Of the test, chi2_k without thrust.
    test : str
        "likelihood ratio" or "Wald".
    false_alarm : float
        Rate at which the thrust is called significant.
    estimate, estimate_sigma : Quantity
        |A_hat| and its sigma along A_hat, others free; biased high where nothing is detected.
    threshold_here : Quantity
        Direction-free threshold along A_hat.
    threshold_best, threshold_worst : Quantity
    limit : Quantity or None
    confidence : float or None
    """

    kind: str
    sentence: str
    reasons: tuple[str, ...]
    p_value: float
    significance_sigma: float
    statistic: float
    test: str
    false_alarm: float
    estimate: u.Quantity
    estimate_sigma: u.Quantity
    threshold_here: u.Quantity
    threshold_best: u.Quantity
    threshold_worst: u.Quantity
    limit: u.Quantity | None
    confidence: float | None

    def __str__(self) -> str:
        return self.sentence

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record; accelerations in au/d2."""
        return {
            "kind": self.kind,
            "sentence": self.sentence,
            "reasons": list(self.reasons),
            "p_value": self.p_value,
            "significance_sigma": self.significance_sigma,
            "statistic": self.statistic,
            "test": self.test,
            "false_alarm": self.false_alarm,
            "estimate_au_d2": float(self.estimate.value),
            "estimate_sigma_au_d2": float(self.estimate_sigma.value),
            "threshold_here_au_d2": float(self.threshold_here.value),
            "threshold_best_au_d2": float(self.threshold_best.value),
            "threshold_worst_au_d2": float(self.threshold_worst.value),
            "limit_au_d2": None if self.limit is None else float(self.limit.value),
            "confidence": self.confidence,
        }


def verdict(
    fit_null: ThrustFit | None,
    fit_push: ThrustFit,
    threshold: DetectionThreshold,
    limit: UpperLimit | Posterior | None = None,
    *,
    noise_trusted: bool = True,
    why: str = "",
    largest_plausible: u.Quantity | float | None = None,
    other_p_values: Mapping[str, float] | None = None,
    comparison: Comparison | None = None,
) -> Verdict:
    """Judge a pair of fits; see the module for the rules.

    Parameters
    ----------
    fit_null : ThrustFit or None
        The gravity-only fit of the same arc; without it the Wald statistic is used.
    fit_push : ThrustFit
        The fit with thrust, from which ``threshold`` was computed.
    limit : UpperLimit or Posterior, optional
        Quoted in a verdict that is not a detection.
    noise_trusted : bool
        False if the residuals say that the noise is not as the error model says.
    why : str
        What the residuals say, as a clause.
    largest_plausible : Quantity or float (au/d2), optional
        The largest acceleration that makes physical sense for such an object.
    other_p_values : mapping, optional
        p-value of the same test under other defensible error models, by name.
    comparison : Comparison, optional
        Of the two fits over observations common to both, whose likelihood ratio is then the test.

    Raises
    ------
    LimitError
        If the threshold belongs to other components, or ``largest_plausible`` is not positive.
    """
    information = threshold.information
    if information.components != fit_push.components:
        raise LimitError(
            f"The threshold is for the components {information.components}, the fit has "
            f"{fit_push.components}; compute "
            "the threshold from the same fit.",
        )
    plausible = _acceleration(largest_plausible)
    k = information.k
    if comparison is None:
        statistic, test = _statistic(fit_null, fit_push, information.wald)
    else:
        statistic, test = max(0.0, comparison.delta_chi2), "likelihood ratio"
    scaled = statistic / threshold.noise_scale**2
    p_value = tail_probability(scaled, k, threshold.noise_dof)
    sigma = significance_sigma(scaled, k, threshold.noise_dof)
    alpha = threshold.false_alarm_per_trial
    size = float(np.linalg.norm(information.A_hat))
    axis = information.A_hat if size > 0.0 else threshold.worst_direction
    along = threshold.along(axis)
    error = float(information.sigma_free(axis).value) * threshold.noise_scale
    if isinstance(limit, Posterior):
        limit = upper_limit(limit)

    reasons = []
    significant = p_value < alpha
    if not noise_trusted:
        reasons.append(f"the noise is not as the error model says{f' ({why})' if why else ''}")
    if significant:
        for name, p_other in (other_p_values or {}).items():
            if not p_other < alpha:
                reasons.append(f"it vanishes under the error model {name} (p = {p_other:.2g})")
        if plausible is not None and size > plausible:
            reasons.append(
                f"it is larger than the largest plausible acceleration, {rounded(plausible)} au/d2"
            )
        kind = "not trustworthy" if reasons else "detection"
    else:
        if plausible is not None and float(threshold.worst.value) > plausible:
            reasons.append(
                "a thrust in the worst seen direction would have to exceed "
                f"{up(threshold.worst.value)} au/d2 to be found, more than the largest plausible "
                f"acceleration, {rounded(plausible)} au/d2"
            )
        kind = "arc cannot tell" if reasons else "non-detection"

    errors = np.sqrt(np.diag(information.covariance)) * threshold.noise_scale
    estimate = ", ".join(
        f"A_{letter} = {with_error(value, each)}"
        for letter, value, each in zip(
            information.components, information.A_hat, errors, strict=True
        )
    )
    if significant and k > 1:
        estimate = f"|A| = {with_error(size, error)} au/d2 ({estimate})"
    else:
        estimate += " au/d2"
    numbers = (
        f"{estimate}, p = {p_value:.2g} ({sigma:.1f} sigma, {test} test of "
        f"{', '.join(information.components)})"
    )
    axes = only_along(information.components)
    chance = f"is found with probability {percent(threshold.power)} from"
    found = (
        f"a thrust {chance} {up(along.value)} au/d2 on in the direction of the estimate, in any "
        f"direction{axes and ' '}{axes} from {up(threshold.worst.value)} on"
        if k > 1
        else f"a thrust {axes} {chance} {up(threshold.worst.value)} au/d2 on"
    )
    found += f", at a false-alarm rate of {percent(alpha)}"
    bound = ""
    if isinstance(limit, UpperLimit):
        bound = (
            f"; |A| < {up(limit.magnitude.value)} au/d2 at {percent(limit.confidence)} confidence"
        )
        if not limit.converged:
            bound += " (from a chain that has not converged)"
    because = f", because {' and '.join(reasons)}" if reasons else ""
    sentence = {
        "detection": f"Detection: {numbers}; {found}.",
        "not trustworthy": f"Significant but not trustworthy{because}: {numbers}; {found}.",
        "non-detection": f"Non-detection: {numbers}; {found}{bound}.",
        "arc cannot tell": f"The arc cannot tell{because}: {numbers}; {found}{bound}.",
    }[kind]
    return Verdict(
        kind=kind,
        sentence=sentence,
        reasons=tuple(reasons),
        p_value=p_value,
        significance_sigma=sigma,
        statistic=scaled,
        test=test,
        false_alarm=alpha,
        estimate=size * AU_D2,
        estimate_sigma=error * AU_D2,
        threshold_here=along,
        threshold_best=threshold.best,
        threshold_worst=threshold.worst,
        limit=limit.magnitude if isinstance(limit, UpperLimit) else None,
        confidence=limit.confidence if isinstance(limit, UpperLimit) else None,
    )


def _acceleration(value: u.Quantity | float | None) -> float | None:
    if value is None:
        return None
    number = float(value.to_value(AU_D2)) if isinstance(value, u.Quantity) else float(value)
    if not number > 0.0:
        raise LimitError(
            f"The largest plausible acceleration must be positive, in au/d2; {value!r} was given.",
            value=value,
        )
    return number


def _statistic(fit_null: ThrustFit | None, fit_push: ThrustFit, wald: float) -> tuple[float, str]:
    """Likelihood ratio where both fits stand on the same observations, else Wald."""
    if fit_null is None:
        return wald, "Wald"
    kept_null, kept_push = getattr(fit_null, "keep", None), getattr(fit_push, "keep", None)
    same = fit_null.dof - fit_push.dof == len(fit_push.components) and (
        kept_null is None or kept_push is None or np.array_equal(kept_null, kept_push)
    )
    if not same:
        return wald, "Wald"
    return max(0.0, float(fit_null.chi2 - fit_push.chi2)), "likelihood ratio"
