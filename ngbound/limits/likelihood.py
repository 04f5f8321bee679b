"""Likelihoods that gross errors do not govern; may import errors, fit and this room.

Each record has two whitened residuals w; whitening inside a station-night follows the order of its
records, so that every pair stands for what its record adds to those before it; a radar echo has
d = 1 residual. With s = |w|^2 and d = 2:

- "gaussian": -2 ln L = s, summed; the exact chi2 of the fit.
- "student": d-dimensional Student t with nu = 5, -2 ln L = (nu + d) ln(1 + s / nu) (K. L. Lange,
  R. J. A. Little & J. M. G. Taylor 1989, J. Am. Stat. Assoc. 84, 881).
- "contaminated": a share of 5 % of the records has errors 5 times as large, -2 ln L = -2 ln[(1 -
  share) exp(-s / 2) + share / 5^d exp(-s / 50)] (J. W. Tukey 1960, in Contributions to Probability
  and Statistics, Stanford, p. 448). Its tails still pull: it is for errors of some ten sigma,
  where the Student t lets go of any.

The records are those the fit kept; for a robust likelihood fit without the outlier rule.
"""

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
from scipy.special import expit

from ngbound.errors import LimitError
from ngbound.fit import Fit
from ngbound.limits.fit_protocol import GaussianFit, ThrustFit

LIKELIHOODS = ("gaussian", "student", "contaminated")
STUDENT_NU = 5.0
CONTAMINATED_SHARE = 0.05
CONTAMINATED_FACTOR = 5.0
MAX_REWEIGHTS = 60
LOT = 256
"""Parameter vectors whose residuals are held in memory at once."""

Deviance = Callable[[np.ndarray], np.ndarray]


def robust_deviance(square: np.ndarray, name: str, count: "np.ndarray | float" = 2.0) -> np.ndarray:
    """-2 ln L, up to a constant, of squared whitened residuals s of each record, which has
    ``count`` of them."""
    if name == "student":
        return (STUDENT_NU + count) * np.log1p(square / STUDENT_NU)
    wide = CONTAMINATED_FACTOR**2
    good = np.log1p(-CONTAMINATED_SHARE) - 0.5 * square
    bad = np.log(CONTAMINATED_SHARE / CONTAMINATED_FACTOR**count) - 0.5 * square / wide
    return -2.0 * np.logaddexp(good, bad)


def robust_weight(square: np.ndarray, name: str, count: "np.ndarray | float" = 2.0) -> np.ndarray:
    """Derivative of -2 ln L with respect to s: the weight of a record in the next least squares."""
    if name == "student":
        return (STUDENT_NU + count) / (STUDENT_NU + square)
    wide = CONTAMINATED_FACTOR**2
    bad = np.log(CONTAMINATED_SHARE / CONTAMINATED_FACTOR**count / (1.0 - CONTAMINATED_SHARE))
    share = expit(bad + 0.5 * square * (1.0 - 1.0 / wide))
    return (1.0 - share) + share / wide


def about_its_mode(fit: ThrustFit, name: str) -> ThrustFit:
    """The fit moved to the mode of a robust likelihood, by reweighted least squares.

    A. E. Beaton & J. W. Tukey 1974, Technometrics 16, 147, with the partials of the fit.
    """
    if name == "gaussian" or not isinstance(fit, Fit):
        return fit
    hood, noise = fit.atlas, fit.noise.mask(fit.keep)
    p = fit.theta.size
    design = np.asarray(fit.design).reshape(len(fit.keep), 2, p)[fit.keep].reshape(-1, p)
    white = noise.whiten(design)
    scale = np.linalg.norm(white, axis=0)
    theta, weight = np.array(fit.theta, dtype=float), np.ones(len(white))
    for _ in range(MAX_REWEIGHTS):
        chi2, seen = hood.chi2(theta[None, :], want_residuals=True)
        if not np.isfinite(chi2[0]):
            break
        miss = noise.whiten(np.asarray(seen).ravel())
        square = np.sum(miss.reshape(-1, 2) ** 2, axis=1)
        weight = np.repeat(robust_weight(square, name, noise.count), 2)
        root = np.sqrt(weight)
        step = np.linalg.lstsq(root[:, None] * white / scale, root * miss, rcond=None)[0] / scale
        theta = theta + step
        if np.linalg.norm(root * (white @ step)) < 1e-3:
            break
    moved = GaussianFit.of(fit, (white.T * weight) @ white, fit.n_numbers)
    return replace(moved, theta=theta)


def deviance_of(fit: ThrustFit, name: str) -> Deviance:
    """-2 ln L (m,) of parameter vectors (m, p) under the likelihood ``name``.

    Raises
    ------
    LimitError
        If the name is unknown, or a robust likelihood is asked of something without residuals.
    """
    if name not in LIKELIHOODS:
        raise LimitError(
            f"There is no likelihood called {name!r}; choose one of {', '.join(LIKELIHOODS)}.",
            likelihood=name,
        )
    if name == "gaussian":
        return fit.chi2_many
    if not isinstance(fit, Fit):
        raise LimitError(
            f"The likelihood {name} needs the residuals of a fitted arc; use gaussian here.",
            likelihood=name,
        )
    hood, noise = fit.atlas, fit.noise.mask(fit.keep)

    def deviance(thetas: np.ndarray) -> np.ndarray:
        found: list[Any] = []
        for part in np.array_split(thetas, max(1, -(-len(thetas) // LOT))):
            chi2, seen = hood.chi2(part, want_residuals=True)
            white = noise.whiten(np.asarray(seen).reshape(len(part), -1).T)
            square = np.sum(white.T.reshape(len(part), -1, 2) ** 2, axis=2)
            total = np.sum(robust_deviance(square, name, noise.count), axis=1)
            found.append(np.where(np.isfinite(chi2), total, np.inf))
        return np.concatenate(found)

    return deviance
