"""Has a chain of walkers settled, what are its averages worth; imports nothing of ngbound.

Integrated autocorrelation time: the autocovariance is averaged over the walkers about the mean of
all of them, and summed up to the smallest window M >= 5 tau(M) (A. Sokal 1997, in Functional
Integration, eds. DeWitt-Morette et al., Plenum, p. 131; J. Goodman & J. Weare 2010, Comm. App.
Math. Comp. Sci. 5, 65). Because the common mean is used, a walker that is stuck shows as a long
time. Split R-hat: A. Gelman et al. 2013, Bayesian Data Analysis, 3rd ed., section 11.4. Error of a
quantile through the effective number of the indicator x <= q: A. Vehtari et al. 2021, Bayesian
Analysis 16, 667.
"""

import numpy as np
from scipy.fft import irfft, next_fast_len, rfft

WINDOW = 5.0


def autocorrelation_time(chain: np.ndarray) -> np.ndarray:
    """Integrated autocorrelation time of each quantity, in steps, at least 1.

    Parameters
    ----------
    chain : (n_steps, n_walkers) or (n_steps, n_walkers, d) float

    Returns
    -------
    (d,) float
        Infinite where a quantity never moved at all.
    """
    values = np.asarray(chain, dtype=float)
    if values.ndim == 2:
        values = values[:, :, None]
    n, _, d = values.shape
    length = next_fast_len(2 * n, real=True)
    taus = np.empty(d)
    for i in range(d):
        x = values[:, :, i] - np.mean(values[:, :, i])
        spectrum = rfft(x, n=length, axis=0)
        covariance = irfft(np.mean(np.abs(spectrum) ** 2, axis=1), n=length)[:n]
        if not covariance[0] > 0.0:
            taus[i] = np.inf
            continue
        running = 2.0 * np.cumsum(covariance / covariance[0]) - 1.0
        enough = np.flatnonzero(np.arange(n) >= WINDOW * np.maximum(running, 0.2))
        taus[i] = running[enough[0]] if len(enough) else running[-1]
    return np.maximum(taus, 1.0)


def split_r_hat(chain: np.ndarray, n_groups: int = 4) -> np.ndarray:
    """Split R-hat (d,): walkers in ``n_groups`` groups, each cut into a first and a second half in
    time.

    Parameters
    ----------
    chain : (n_steps, n_walkers, d) float
    """
    values = np.asarray(chain, dtype=float)
    n, walkers, d = values.shape
    half = n // 2
    groups = max(1, min(n_groups, walkers))
    pieces = [
        block.reshape(-1, d)
        for part in (values[:half], values[n - half :])
        for block in np.array_split(part, groups, axis=1)
    ]
    count = min(len(piece) for piece in pieces)
    means = np.array([piece.mean(axis=0) for piece in pieces])
    within = np.mean([piece.var(axis=0, ddof=1) for piece in pieces], axis=0)
    between = means.var(axis=0, ddof=1)
    still = within <= 0.0
    ratio = np.where(still, np.inf, between / np.where(still, 1.0, within))
    return np.sqrt((count - 1.0) / count + ratio)


def quantile_with_error(
    chain: np.ndarray, probability: float, weights: np.ndarray | None = None
) -> tuple[float, float]:
    """Quantile of a chain and its Monte Carlo error.

    Parameters
    ----------
    chain : (n_steps, n_walkers) float
    probability : float
    weights : same shape, optional
        Importance weights.

    Returns
    -------
    quantile, error : float
        The error is half the distance between the quantiles at p +- sqrt(p (1 - p) / n_eff).
    """
    flat = np.ravel(chain)
    order = np.argsort(flat)
    if weights is None:
        steps = (np.arange(len(flat)) + 0.5) / len(flat)
        kish = 1.0
    else:
        w = np.ravel(weights)
        cumulated = np.cumsum(w[order])
        steps = (cumulated - 0.5 * w[order]) / cumulated[-1]
        kish = float(np.sum(w) ** 2 / np.sum(w**2)) / len(w)
    ordered = flat[order]
    quantile = float(np.interp(probability, steps, ordered))
    indicator = (np.asarray(chain) <= quantile).astype(float)
    tau = float(autocorrelation_time(indicator)[0])
    tau = tau if np.isfinite(tau) else float(len(indicator))
    n_eff = max(1.0, kish * len(flat) / tau)
    step = float(np.sqrt(probability * (1.0 - probability) / n_eff))
    low, high = np.interp(
        np.clip([probability - step, probability + step], 0.0, 1.0), steps, ordered
    )
    return quantile, 0.5 * float(high - low)
