"""What "significant" means, once for the whole package; imports noise_scale of this room.

The test statistic of k thrust components (likelihood ratio, or Wald's A' C^-1 A) is chi2 with k
degrees of freedom where there is no thrust (S. S. Wilks 1938, Ann. Math. Stat. 9, 60). Its *chance*
is the probability of a statistic at least so large without thrust; its *significance* is that
chance as a two-sided Gaussian sigma, so that 0.0027 is 3 sigma whatever k. A thrust is significant
where the chance lies below the false-alarm rate.
"""

import numpy as np
from scipy.stats import norm

from ngbound.fit.noise_scale import tail_probability


def sigma_of_chance(probability: float) -> float:
    """Two-sided Gaussian sigma of a chance above 1e-300."""
    return max(0.0, float(norm.isf(0.5 * probability)))


def significance_sigma(statistic: float, k: int, noise_dof: int | None = None) -> float:
    """The chance of a statistic as two-sided Gaussian sigma.

    Where the chance is beyond the smallest double, the leading terms of the tails of chi2 and
    Gaussian are equated.
    """
    probability = tail_probability(statistic, k, noise_dof)
    if probability > 1e-300:
        return sigma_of_chance(probability)
    log_p = 0.5 * (k - 2) * np.log(0.5 * statistic) - 0.5 * statistic
    x = np.sqrt(-2.0 * log_p)
    for _ in range(20):
        x = np.sqrt(max(1.0, -2.0 * (log_p + np.log(x) + 0.5 * np.log(0.5 * np.pi))))
    return float(x)
