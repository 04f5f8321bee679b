"""Rejection of outliers, with recovery; imports numpy, constants, arc.

M. Carpino, A. Milani & S. R. Chesley 2003, Icarus 166, 248: a record is rejected where the chi2 of
its residual, with the covariance the residual should have (noise less what the fit absorbed for a
record in the fit, noise plus the orbit's own error for one outside it), exceeds 8, and comes back
below 7.

Deviations. While very large residuals are about, the bar is a quarter of the largest, so that a
gross error does not take its neighbours with it. Where more than half of the records miss by more
than they should, it is the orbit or the sigmas that are wrong, not the records: the bars are
multiplied by the median chi2 over its expectation, so that a gravity-only fit does not throw out
the very records that show a thrust.
"""

import numpy as np
from numpy.typing import NDArray

from ngbound.arc import Noise
from ngbound.constants import ARCSEC_RAD

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

REJECT_CHI2 = 8.0
RECOVER_CHI2 = 7.0
BAR_FRACTION = 0.25
MEDIAN_CHI2 = 1.3862943611198906
"""Median of chi2 with two degrees of freedom, 2 ln 2."""


def residual_chi2(seen: Floats, design: Floats, cov: Floats, noise: Noise, keep: Bools) -> Floats:
    """chi2 of each record's two residuals, (n,).

    Parameters
    ----------
    seen : (n, 2) observed minus computed, radians
    design : (n, 2, p) radians per unit
    cov : (p, p)
    noise : Noise of all n records
    keep : (n,) records in the fit
    """
    own = np.matmul(design @ cov, np.swapaxes(design, 1, 2))
    sign = np.where(keep, -1.0, 1.0)[:, None, None]
    error = np.zeros((seen.shape[0], 2, 2))
    error[:, 0, 0] = noise.sigma_ra_arcsec**2
    error[:, 1, 1] = noise.sigma_dec_arcsec**2
    error[:, 0, 1] = error[:, 1, 0] = noise.corr * noise.sigma_ra_arcsec * noise.sigma_dec_arcsec
    error *= ARCSEC_RAD**2
    total = error + sign * own
    # a record that alone pins the orbit leaves no residual to judge: its noise then stands
    trace = np.trace(total, axis1=1, axis2=2)
    det = total[:, 0, 0] * total[:, 1, 1] - total[:, 0, 1] ** 2
    weak = (det <= 1e-4 * trace**2) | (trace <= 0.02 * np.trace(error, axis1=1, axis2=2))
    total[weak] = error[weak]
    return np.einsum("ni,nij,nj->n", seen, np.linalg.inv(total), seen)


def judge(
    chi2: Floats, keep: Bools, reject: float = REJECT_CHI2, recover: float = RECOVER_CHI2
) -> Bools:
    """The records to keep in the next round."""
    scale = max(1.0, float(np.median(chi2)) / MEDIAN_CHI2) if chi2.size else 1.0
    reject, recover = reject * scale, recover * scale
    largest = float(np.max(chi2[keep], initial=0.0))
    bar = max(reject, BAR_FRACTION * largest)
    back = recover if bar == reject else min(recover, bar)
    return np.where(keep, chi2 <= bar, chi2 < back)
