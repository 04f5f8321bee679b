"""How large the thrust of this arc may be; may import errors, rounding and this room.

Definition of an upper limit as V. L. Kashyap et al. 2010, ApJ 719, 900, use the word: the edge of
what the data at hand allow, not a property of the test. Given side by side, because they answer
different questions:

- the posterior quantile of |A| (and of each |A_i|) under a named prior, and under a second one;
- for a thrust that can only push outward: the posterior quantile of A_R given A_R >= 0, and the
  unified interval of G. J. Feldman & R. D. Cousins 1998, Phys. Rev. D 57, 3873, from A_R and its
  sigma;
- the profile likelihood in linear theory (W. A. Rolke, A. M. Lopez & J. Conrad 2005, NIM A 551,
  493): the largest |A| whose chi2, all else free, exceeds the minimum by z_C^2. For |A| near zero
  with several components this one undercovers, since the profile of a length is not regular there.

Where the errors rest on few degrees of freedom (``noise_dof`` of the information), the likelihood
is that of Student, z_C its quantile, and the sigma of the unified interval grows in their ratio.
"""

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from astropy import units as u
from scipy.optimize import brentq
from scipy.special import ndtri
from scipy.stats import t

from ngbound.errors import LimitError
from ngbound.limits.convergence import quantile_with_error
from ngbound.limits.fit_protocol import ThrustFit
from ngbound.limits.information import AU_D2, ThrustInformation, thrust_information
from ngbound.limits.linear_posterior import linear_posterior, student_width
from ngbound.limits.posterior import Posterior
from ngbound.limits.priors import ThrustPrior, thrust_prior
from ngbound.limits.unified_interval import unified_interval
from ngbound.rounding import down, percent, rounded, up

LINEAR_DRAWS = 16384
PRIOR_CAVEAT = (
    "The isotropic-uniform prior gives most room to small thrusts: its limit holds as often as it "
    "says on average over that prior, but for one given thrust between zero and the threshold far "
    "less often (a 95 % limit, at a quarter of the threshold in the worst direction, in 20 to 66 % "
    "of the cases in four classes of arcs). Where the limit is to hold whatever the thrust, quote "
    "the flat-components or the profile limit beside it."
)
LINEAR_SEED = 20


@dataclass(frozen=True)
class UpperLimit:
    """Upper limits at one confidence; accelerations are au/d2 Quantities.

    Attributes
    ----------
    confidence : float
    components : str
    magnitude, magnitude_error : Quantity
        Quantile of |A| and its Monte Carlo error.
    component, component_error : (k,) Quantity
        Quantile of each |A_i|.
    outward_radial, outward_radial_error : Quantity or None
        Quantile of A_R given A_R >= 0; None without R or without samples there.
    unified_radial : (2,) Quantity or None
        Unified interval of A_R >= 0, other components free, linear theory; None without R or at a
        confidence of 0.5 and less.
    profile_magnitude : Quantity
    profile_component : (k,) Quantity
        Profile likelihood in linear theory.
    prior : str
        Prior of the quantiles, in words with its edges.
    alternative_prior : str
    alternative_magnitude, alternative_error : Quantity
        The limit on |A| under a second prior.
    alternative_source : str
        "posterior" or "linear theory".
    linear_magnitude : Quantity
        The limit on |A| under the first prior in linear theory; far from ``magnitude`` where the
        arc is not linear.
    source : str
        "posterior" or "linear theory".
    converged : bool
    message : str
    law_g : callable or None
        g(r) of the thrust law, r in au, where the fit carries its law.
    """

    confidence: float
    components: str
    magnitude: u.Quantity
    magnitude_error: u.Quantity
    component: u.Quantity
    component_error: u.Quantity
    outward_radial: u.Quantity | None
    outward_radial_error: u.Quantity | None
    unified_radial: u.Quantity | None
    profile_magnitude: u.Quantity
    profile_component: u.Quantity
    prior: str
    alternative_prior: str
    alternative_magnitude: u.Quantity
    alternative_error: u.Quantity
    alternative_source: str
    linear_magnitude: u.Quantity
    source: str
    converged: bool
    message: str
    law_g: Callable[[float], float] | None = field(default=None, repr=False, compare=False)

    @property
    def caveat(self) -> str:
        """What the prior of the limit on |A| does not promise; "" where there is nothing to say."""
        several = len(self.components) > 1
        return PRIOR_CAVEAT if several and self.prior.startswith("isotropic-uniform") else ""

    def __str__(self) -> str:
        c = percent(self.confidence)
        lines = [
            f"At {c} confidence |A| < {_pm(self.magnitude, self.magnitude_error)} au/d2 "
            f"({self.source}; prior {self.prior})",
            f"  {_pm(self.alternative_magnitude, self.alternative_error)} under the prior "
            f"{self.alternative_prior} ({self.alternative_source}); "
            f"{up(self.profile_magnitude.value)} by profile likelihood in linear theory",
        ]
        for i, letter in enumerate(self.components):
            lines.append(
                f"  |A_{letter}| < {_pm(self.component[i], self.component_error[i])}; "
                f"{up(self.profile_component[i].value)} by profile likelihood"
            )
        if self.outward_radial is not None and self.outward_radial_error is not None:
            lines.append(
                f"  outward only: A_R < {_pm(self.outward_radial, self.outward_radial_error)}"
            )
        if self.unified_radial is not None:
            low, high = self.unified_radial.value
            lines.append(f"  outward only, unified interval: A_R from {down(low)} to {up(high)}")
        if not self.converged:
            lines.append(f"  {self.message}")
        if self.caveat:
            lines.append(f"  {self.caveat}")
        return "\n".join(lines)

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record; accelerations in au/d2."""

        def plain(value: u.Quantity | None) -> Any:
            return None if value is None else np.asarray(value.value).tolist()

        return {
            "confidence": self.confidence,
            "components": self.components,
            "magnitude_au_d2": plain(self.magnitude),
            "magnitude_error_au_d2": plain(self.magnitude_error),
            "component_au_d2": plain(self.component),
            "component_error_au_d2": plain(self.component_error),
            "outward_radial_au_d2": plain(self.outward_radial),
            "outward_radial_error_au_d2": plain(self.outward_radial_error),
            "unified_radial_au_d2": plain(self.unified_radial),
            "profile_magnitude_au_d2": plain(self.profile_magnitude),
            "profile_component_au_d2": plain(self.profile_component),
            "prior": self.prior,
            "alternative_prior": self.alternative_prior,
            "alternative_magnitude_au_d2": plain(self.alternative_magnitude),
            "alternative_error_au_d2": plain(self.alternative_error),
            "alternative_source": self.alternative_source,
            "linear_magnitude_au_d2": plain(self.linear_magnitude),
            "source": self.source,
            "converged": self.converged,
            "message": self.message,
            "caveat": self.caveat,
        }


def _pm(value: u.Quantity, error: u.Quantity) -> str:
    return f"{up(value.value)} (+- {rounded(error.value, 1)})"


def upper_limit(
    posterior: Posterior | ThrustFit,
    *,
    confidence: float = 0.95,
    alternative: Posterior | None = None,
    prior: str = "isotropic-uniform",
) -> UpperLimit:
    """Upper limits from a posterior, or in linear theory straight from a fit.

    Parameters
    ----------
    posterior : Posterior or ThrustFit
        With a fit the exact model is replaced by its linear theory, without sampling.
    confidence : float
    alternative : Posterior, optional
        Sampled under another prior, to stand beside the first. Without it the second prior is
        flat-components (isotropic-uniform where the first is flat itself), in linear theory:
        weighting the samples with the ratio of the priors leaves too few of them in the tail.
    prior : str
        Used for a fit only; a posterior has its own.

    Raises
    ------
    LimitError
        If the confidence is out of range or the fit has no thrust.
    """
    if not 0.0 < confidence < 1.0:
        raise LimitError(
            f"The confidence must lie between 0 and 1, for instance 0.95; {confidence!r} was "
            "given.",
            confidence=confidence,
        )
    if isinstance(posterior, Posterior):
        information, belief = posterior.information, posterior.prior
        A = posterior.chain(posterior.A_samples)
        weights = None
        source, converged, message = "posterior", posterior.converged, posterior.message
    else:
        information = thrust_information(posterior)
        belief = thrust_prior(information, prior)
        flat, w = _linear_draws(information, belief)
        A, weights = flat[:, None, :], w[:, None]
        source, converged, message = "linear theory", True, "Linear theory needs no chain."

    size = np.linalg.norm(A, axis=2)
    magnitude, magnitude_error = quantile_with_error(size, confidence, weights)
    each = [
        quantile_with_error(np.abs(A[:, :, i]), confidence, weights) for i in range(information.k)
    ]

    other, other_error, other_name, other_source = _under_other_prior(
        information, belief, confidence, alternative
    )
    linear = magnitude
    if weights is None:
        linear, _ = _linear_magnitude(information, belief, confidence)
    outward, outward_error, unified = _outward(information, A, weights, confidence)
    z = _quantile(information, confidence)
    sigma_free = np.sqrt(np.diag(information.covariance))
    return UpperLimit(
        confidence=confidence,
        components=information.components,
        magnitude=magnitude * AU_D2,
        magnitude_error=magnitude_error * AU_D2,
        component=np.array([value for value, _ in each]) * AU_D2,
        component_error=np.array([error for _, error in each]) * AU_D2,
        outward_radial=outward,
        outward_radial_error=outward_error,
        unified_radial=unified,
        profile_magnitude=profile_limit(information, confidence) * AU_D2,
        profile_component=(np.abs(information.A_hat) + max(z, 0.0) * sigma_free) * AU_D2,
        prior=str(belief),
        alternative_prior=other_name,
        alternative_magnitude=other * AU_D2,
        alternative_error=other_error * AU_D2,
        alternative_source=other_source,
        linear_magnitude=linear * AU_D2,
        source=source,
        converged=converged,
        message=message,
        law_g=information.law_g,
    )


def _linear_draws(
    information: ThrustInformation, prior: ThrustPrior
) -> tuple[np.ndarray, np.ndarray]:
    dof = information.noise_dof
    proposal = linear_posterior(information, prior, student_width(dof))
    return proposal.weighted_draws(LINEAR_SEED, LINEAR_DRAWS, dof)


def _quantile(information: ThrustInformation, confidence: float) -> float:
    """Of the normal law, or of Student's."""
    dof = information.noise_dof
    return float(ndtri(confidence) if dof is None else t.ppf(confidence, dof))


def _linear_magnitude(
    information: ThrustInformation, prior: ThrustPrior, confidence: float
) -> tuple[float, float]:
    draws, weights = _linear_draws(information, prior)
    return quantile_with_error(np.linalg.norm(draws, axis=1)[:, None], confidence, weights[:, None])


def _under_other_prior(
    information: ThrustInformation,
    belief: ThrustPrior,
    confidence: float,
    alternative: Posterior | None,
) -> tuple[float, float, str, str]:
    if alternative is not None:
        size = np.linalg.norm(alternative.chain(alternative.A_samples), axis=2)
        value, error = quantile_with_error(size, confidence)
        return value, error, str(alternative.prior), "posterior"
    name = "flat-components" if belief.radial_in_A else "isotropic-uniform"
    other = thrust_prior(information, name)
    value, error = _linear_magnitude(information, other, confidence)
    return value, error, str(other), "linear theory"


def _outward(
    information: ThrustInformation, A: np.ndarray, weights: np.ndarray | None, confidence: float
) -> tuple[u.Quantity | None, u.Quantity | None, u.Quantity | None]:
    if "R" not in information.components:
        return None, None, None
    i = information.components.index("R")
    sigma = float(information.covariance[i, i] ** 0.5)
    unified = None
    if confidence > 0.5:
        wide = sigma * _quantile(information, confidence) / float(ndtri(confidence))
        edges = unified_interval(float(information.A_hat[i]), wide, confidence)
        unified = np.array(edges) * AU_D2
    radial = A[:, :, i]
    share = (radial >= 0.0).astype(float)
    share = share if weights is None else share * weights
    if np.sum(share) ** 2 < 100.0 * np.sum(share**2):
        return None, None, unified
    value, error = quantile_with_error(radial, confidence, share)
    return value * AU_D2, error * AU_D2, unified


def profile_limit(information: ThrustInformation, confidence: float) -> float:
    """Largest |A| (au/d2) with min over directions of (A - A_hat)' F_A (A - A_hat) <= z_C^2.

    The farthest point from the origin of an ellipsoid: with the multiplier t > 1 / f_min,
    A = t F (t F - 1)^-1 A_hat, one root in t.
    """
    z = max(_quantile(information, confidence), 0.0)
    f = information.eigenvalues
    b = information.A_hat @ information.eigenvectors
    # in units of the largest sigma: g = f / f_min >= 1, multiplier s > 1, b_i s g_i / (s g_i - 1)
    g = f / f[0]
    q = z * z / f[0]
    if q == 0.0:
        return float(np.linalg.norm(b))

    def excess(s: float) -> float:
        d = b / (s * g - 1.0)
        return float(np.sum(g * d * d) / q - 1.0)

    low = 1.0 + 1e-10
    if excess(low) <= 0.0:
        # hardly any estimate along the worst axis: the end of the ellipsoid lies along it
        d = np.where(g > 1.0 + 1e-9, b / np.where(g > 1.0 + 1e-9, g - 1.0, 1.0), 0.0)
        worst = int(np.argmin(g))
        d[worst] = 0.0
        along = np.sqrt(max(q - float(np.sum(g * d * d)), 0.0))
        A = b + d
        A[worst] = np.abs(b[worst]) + along
        return float(np.linalg.norm(A))
    high = 2.0
    while excess(high) > 0.0:
        high *= 4.0
    s = float(brentq(excess, low, high, xtol=1e-15, rtol=1e-13))
    return float(np.linalg.norm(b * s * g / (s * g - 1.0)))
