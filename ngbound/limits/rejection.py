"""The outlier rule of the fit, for many arcs at once; imports numpy and constants.

M. Carpino, A. Milani & S. R. Chesley 2003, Icarus 166, 248, with the deviations of the fit room's
rule for one arc, to which a test holds this one: rejected above chi2 = 8, recovered below 7, with
the covariance the residual should have; never below a quarter of the largest; both bars multiplied
where the median says that the orbit or the sigmas are wrong.
"""

import numpy as np
from numpy.typing import NDArray

from ngbound.constants import ARCSEC_RAD

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

REJECT_CHI2 = 8.0
RECOVER_CHI2 = 7.0
BAR_FRACTION = 0.25
MEDIAN_CHI2 = 2.0 * float(np.log(2.0))
"""Median of chi2 with two degrees of freedom."""


def residual_chi2_many(
    seen: Floats, design: Floats, cov: Floats, error_arcsec2: Floats, keep: Bools
) -> Floats:
    """chi2 (m, n) of the two residuals of each record of each arc.

    Parameters
    ----------
    seen : (m, n, 2) observed minus computed, radians
    design : (n, 2, p) partials, radians per unit
    cov : (m, p, p) of the parameters of each fit
    error_arcsec2 : (n, 2, 2) covariance of each record, the part shared by its night included
    keep : (m, n) records in the fit
    """
    root = np.linalg.cholesky(cov)
    moved = np.einsum("nip,mpq->mniq", design, root, optimize=True)
    own = np.einsum("mniq,mnjq->mnij", moved, moved, optimize=True)
    error = error_arcsec2 * ARCSEC_RAD**2
    total = error + np.where(keep, -1.0, 1.0)[:, :, None, None] * own
    trace = np.trace(total, axis1=2, axis2=3)
    det = total[..., 0, 0] * total[..., 1, 1] - total[..., 0, 1] ** 2
    # a record that alone pins the orbit leaves no residual to judge: its noise then stands
    weak = (det <= 1e-4 * trace**2) | (trace <= 0.02 * np.trace(error, axis1=1, axis2=2))
    total = np.where(weak[:, :, None, None], error, total)
    det = total[..., 0, 0] * total[..., 1, 1] - total[..., 0, 1] ** 2
    x, y = seen[..., 0], seen[..., 1]
    chi2 = total[..., 1, 1] * x * x - 2.0 * total[..., 0, 1] * x * y + total[..., 0, 0] * y * y
    return chi2 / det


def judge_many(chi2: Floats, keep: Bools) -> Bools:
    """The records (m, n) to keep in the next round."""
    scale = np.maximum(1.0, np.median(chi2, axis=1) / MEDIAN_CHI2)
    reject, recover = REJECT_CHI2 * scale, RECOVER_CHI2 * scale
    largest = np.max(np.where(keep, chi2, 0.0), axis=1)
    bar = np.maximum(reject, BAR_FRACTION * largest)
    back = np.where(bar == reject, recover, np.minimum(recover, bar))
    return np.where(keep, chi2 <= bar[:, None], chi2 < back[:, None])
