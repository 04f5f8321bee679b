"""Intervals for a quantity that cannot be negative, in Gaussian noise; may import errors.

``unified_interval`` is the likelihood-ratio ordered interval of G. J. Feldman & R. D. Cousins
1998, Phys. Rev. D 57, 3873 (section IV B). For true value mu >= 0 in units of sigma, the
acceptance region of a measurement x is filled in descending order of R = P(x | mu) / P(x | max(0,
x)), which is exp(-(x - mu)^2 / 2) for x >= 0 and exp(x mu - mu^2 / 2) below. The two edges of that
region have equal R and hold the probability C between them. The belt is inverted here edge by
edge, by one root-finding each, instead of on a grid of mu.

``flat_prior_limit`` is the Bayesian limit with a flat prior on mu >= 0, which is also the CLs
limit of A. L. Read 2002, J. Phys. G 28, 2693: x + Phi^-1(1 - (1 - C) Phi(x)).
"""

import numpy as np
from scipy.optimize import brentq
from scipy.special import log_ndtr, ndtr, ndtri, ndtri_exp

from ngbound.errors import LimitError

_TOLERANCE = 1e-12


def _checked(x: float, sigma: float, confidence: float) -> float:
    if not np.isfinite(x) or not np.isfinite(sigma) or sigma <= 0.0:
        raise LimitError(
            f"An interval needs a finite measurement and a positive sigma; {x!r} and {sigma!r} "
            "were given.",
            x=x,
            sigma=sigma,
        )
    if not 0.0 < confidence < 1.0:
        raise LimitError(
            f"The confidence must lie between 0 and 1, for instance 0.95; {confidence!r} was "
            "given.",
            confidence=confidence,
        )
    return x / sigma


def unified_interval(x: float, sigma: float, confidence: float = 0.95) -> tuple[float, float]:
    """Feldman-Cousins interval (lower, upper) for mu >= 0 measured as ``x`` with Gaussian
    ``sigma``.

    Parameters
    ----------
    x, sigma : float
        Any one unit; the interval has the same.
    confidence : float
        Coverage, above 0.5 and below 1: at mu = 0 every x < 0 has R = 1, and these alone hold one
        half, so that a smaller coverage has no unique region.

    Raises
    ------
    LimitError
        If an argument is out of its range.
    """
    x0 = _checked(float(x), float(sigma), confidence)
    if confidence <= 0.5:
        raise LimitError(
            "The unified interval needs a confidence above 0.5, for instance 0.95; "
            f"{confidence!r} was given.",
            confidence=confidence,
        )
    half = float(ndtri(0.5 + 0.5 * confidence))

    def coverage_at_lower_edge(mu: float) -> float:
        # x0 is the lower edge, below zero, of the region of mu; the upper edge is at the same R
        return float(ndtr(np.sqrt(mu * (mu - 2.0 * x0))) - ndtr(x0 - mu)) - confidence

    def coverage_at_upper_edge(mu: float) -> float:
        d = x0 - mu
        return float(ndtr(d) - ndtr((mu * mu - d * d) / (2.0 * mu) - mu)) - confidence

    if x0 >= 0.0:
        upper = x0 + half
    else:
        upper = float(brentq(coverage_at_lower_edge, 0.0, half + 1.0, xtol=_TOLERANCE))
    if x0 >= 2.0 * half:
        lower = x0 - half
    elif x0 <= float(ndtri(confidence)):
        lower = 0.0
    else:
        lower = float(brentq(coverage_at_upper_edge, 1e-9, 0.5 * x0, xtol=_TOLERANCE))
    return lower * sigma, upper * sigma


def flat_prior_limit(x: float, sigma: float, confidence: float = 0.95) -> float:
    """Upper limit on mu >= 0 with a flat prior, equal to the CLs limit (Read 2002), in the unit of
    ``x``.

    Raises
    ------
    LimitError
        If an argument is out of its range.
    """
    x0 = _checked(float(x), float(sigma), confidence)
    # the upper tail (1 - C) Phi(x) is kept as a logarithm, so that x far below zero loses no digits
    return float(x0 - ndtri_exp(np.log1p(-confidence) + log_ndtr(x0))) * sigma
