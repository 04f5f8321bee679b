"""The posterior of a thrust in linear theory, without a chain; may import this room only.

With a linear model the likelihood of the thrust is a Gaussian of mean A_hat and information F_A. A
prior that depends on |A| alone is a mixture of isotropic Gaussians of all widths s, because
|A|^(1-k) ~ int N(A; 0, s^2 I) ds and |A|^-k ~ int N(A; 0, s^2 I) ds / s (D. F. Andrews & C. L.
Mallows 1974, J. R. Stat. Soc. B 36, 99). The posterior is then a mixture of Gaussians over s with
weights N(A_hat; 0, F_A^-1 + s^2 I), all diagonal in the eigenvectors of F_A. The integral is
replaced here by a sum over widths in geometric steps; the density of that sum is known exactly, so
what is left is put right by importance weights (or by the acceptance rule of a Markov chain that
uses it as its proposal).

Where the errors rest on nu degrees of freedom the Gaussian becomes Student's distribution in k
dimensions, exp(-q / 2) -> (1 + q / nu)^(-(nu + k) / 2), and the proposal is widened to its tails.
"""

from dataclasses import dataclass

import numpy as np
from scipy.special import log_ndtr, ndtri, ndtri_exp
from scipy.stats import norm, qmc, t

from ngbound.limits.information import ThrustInformation
from ngbound.limits.priors import ThrustPrior

WIDTHS = 48
FAR_OUT = 0.999
_LOG_2PI = float(np.log(2.0 * np.pi))


def log_sum_exp(terms: np.ndarray) -> np.ndarray:
    """Logarithm (m,) of the sum of the exponentials of each row (m, j); -inf for a row of -inf."""
    top = np.max(terms, axis=1)
    top = np.where(np.isfinite(top), top, 0.0)
    with np.errstate(divide="ignore"):
        return top + np.log(np.sum(np.exp(terms - top[:, None]), axis=1))


def student_width(noise_dof: int | None) -> float:
    """Quantile of Student's law far out over that of the normal one; 1 for known errors."""
    if noise_dof is None:
        return 1.0
    return float(t.ppf(FAR_OUT, noise_dof) / norm.ppf(FAR_OUT))


@dataclass(frozen=True)
class LinearPosterior:
    """Draws from, and the density of, (nearly) the linear-theory posterior of the thrust, noise
    times ``inflation``.

    Attributes
    ----------
    information : ThrustInformation
    prior : ThrustPrior
    inflation : float
        Factor on every sigma.
    log_weight, mean, sigma : (j,), (j, k), (j, k) float
        The Gaussians of the mixture in the eigenvectors of F_A, au/d2 (unused for
        "outward-radial").
    """

    information: ThrustInformation
    prior: ThrustPrior
    inflation: float
    log_weight: np.ndarray
    mean: np.ndarray
    sigma: np.ndarray

    def draw(self, random: "np.random.Generator | np.random.RandomState", n: int) -> np.ndarray:
        """``n`` draws A (n, k), au/d2."""
        return self.from_uniform(np.asarray(random.random(size=(n, self.information.k + 1))))

    def from_uniform(self, uniform: np.ndarray) -> np.ndarray:
        """Draws A (n, k) from points (n, k + 1) of the unit cube."""
        uniform = np.clip(uniform, 2.0**-54, 1.0 - 2.0**-53)
        if self.prior.name == "outward-radial":
            return self._outward_from_uniform(uniform)
        z = ndtri(uniform[:, 1:])
        if len(self.log_weight) == 1:
            b = self.mean + self.sigma * z
        else:
            steps = np.cumsum(np.exp(self.log_weight))
            which = np.searchsorted(steps / steps[-1], uniform[:, 0])
            b = self.mean[which] + self.sigma[which] * z
        return b @ self.information.eigenvectors.T

    def log_density(self, A: np.ndarray) -> np.ndarray:
        """Logarithm (m,) of the normalised density of the draws at A (m, k)."""
        if self.prior.name == "outward-radial":
            return self._log_density_outward(A)
        b = A @ self.information.eigenvectors
        z = (b[:, None, :] - self.mean) / self.sigma
        terms = -0.5 * np.sum(z * z + _LOG_2PI, axis=2) - np.sum(np.log(self.sigma), axis=1)
        return log_sum_exp(terms + self.log_weight)

    def log_target(self, A: np.ndarray, noise_dof: int | None = None) -> np.ndarray:
        """Logarithm (m,) of likelihood times prior at A (m, k), not normalised: with the noise
        times ``inflation``, or as it is where it rests on ``noise_dof`` degrees of freedom.
        """
        d = A - self.information.A_hat
        q = np.einsum("ij,jk,ik->i", d, self.information.matrix, d)
        if noise_dof is None:
            return -0.5 * q / self.inflation**2 + self.prior.log_density(A)
        power = -0.5 * (noise_dof + self.information.k)
        return power * np.log1p(q / noise_dof) + self.prior.log_density(A)

    def weighted_draws(
        self, seed: int, n: int, noise_dof: int | None = None
    ) -> tuple[np.ndarray, np.ndarray]:
        """Draws A (n, k) and importance weights (n,) that stand for the linear-theory posterior.

        The draws come from a scrambled Sobol sequence, so that their averages are better than
        those of n random draws; ``n`` is a power of two.
        """
        points = qmc.Sobol(self.information.k + 1, seed=np.random.default_rng(seed)).random(n)
        A = self.from_uniform(points)
        parts = np.array_split(A, max(1, n // 2048))
        log_w = np.concatenate(
            [self.log_target(part, noise_dof) - self.log_density(part) for part in parts]
        )
        return A, np.exp(log_w - np.max(log_w))

    def _outward(self) -> tuple[int, float, float, np.ndarray, np.ndarray]:
        i = self.information.components.index("R")
        covariance = self.information.covariance * self.inflation**2
        sigma_r = float(covariance[i, i] ** 0.5)
        others = np.delete(np.arange(self.information.k), i)
        slope = covariance[others, i] / sigma_r**2
        rest = covariance[np.ix_(others, others)] - np.outer(slope, slope) * sigma_r**2
        scale = np.sqrt(np.diag(rest))
        factor = (
            np.linalg.cholesky(rest / np.outer(scale, scale)) * scale[:, None]
            if len(others)
            else rest
        )
        return i, float(self.information.A_hat[i]), sigma_r, slope, factor

    def _outward_from_uniform(self, uniform: np.ndarray) -> np.ndarray:
        i, mean, sigma, slope, factor = self._outward()
        others = np.delete(np.arange(self.information.k), i)
        # the share of the upper tail beyond A_R is uniform; as a logarithm it keeps its digits
        log_tail = log_ndtr(mean / sigma) + np.log(uniform[:, 0])
        A = np.empty((len(uniform), self.information.k))
        A[:, i] = np.maximum(mean - sigma * ndtri_exp(log_tail), 0.0)
        A[:, others] = (
            self.information.A_hat[others]
            + np.outer(A[:, i] - mean, slope)
            + ndtri(uniform[:, 1 : 1 + len(others)]) @ factor.T
        )
        return A

    def _log_density_outward(self, A: np.ndarray) -> np.ndarray:
        i, mean, sigma, _, _ = self._outward()
        b = (A - self.information.A_hat) @ self.information.eigenvectors
        spread = self.information.eigenvalues**-0.5 * self.inflation
        z = b / spread
        value = (
            -0.5 * np.sum(z * z + _LOG_2PI, axis=1)
            - np.sum(np.log(spread))
            - log_ndtr(mean / sigma)
        )
        return np.where(A[:, i] >= 0.0, value, -np.inf)


def linear_posterior(
    information: ThrustInformation, prior: ThrustPrior, inflation: float = 1.0
) -> LinearPosterior:
    """The linear-theory posterior under ``prior``, every sigma times ``inflation``."""
    sigma = information.eigenvalues**-0.5 * inflation
    b_hat = information.A_hat @ information.eigenvectors
    single = not prior.radial_in_A or (prior.name == "isotropic-uniform" and prior.k == 1)
    if single:
        return LinearPosterior(
            information, prior, inflation, np.zeros(1), b_hat[None, :], sigma[None, :]
        )
    bottom = 0.3 * prior.lower_au_d2 if prior.lower_au_d2 > 0.0 else 1e-3 * float(sigma[-1])
    widths = np.geomspace(min(bottom, 0.1 * prior.upper_au_d2), prior.upper_au_d2, WIDTHS)
    total = sigma**2 + widths[:, None] ** 2
    log_weight = np.sum(-0.5 * np.log(total) - 0.5 * b_hat**2 / total, axis=1)
    if prior.name == "isotropic-uniform":
        log_weight = log_weight + np.log(widths)
    part = widths[:, None] ** 2 / total
    return LinearPosterior(
        information=information,
        prior=prior,
        inflation=inflation,
        log_weight=log_weight - log_sum_exp(log_weight[None, :])[0],
        mean=b_hat * part,
        sigma=sigma * np.sqrt(part),
    )
