"""Rejection of outliers, with recovery, in one arc or in many; imports numpy, scipy, constants, arc
and this room.

M. Carpino, A. Milani & S. R. Chesley 2003, Icarus 166, 248: a record is rejected where the chi2 of
its residual, with the covariance the residual should have (noise less what the fit absorbed for a
record in the fit, noise plus the orbit's own error for one outside it), exceeds a bar, and comes
back below a lower one. Errors that many records share are solved for with the parameters and taken
out of the residuals first.

Deviations. The bars are 16 and 14, not 8 and 7. Where the noise is as the error model says, a bar c
leaves an estimate with the variance 1 / (1 - (1 + c/2) exp(-c/2)) of the one from all records (the
skipped mean: P. J. Huber 1964, Ann. Math. Stat. 35, 73, for two residuals a record): 1.10 for 8,
while the covariance that the fit states knows of the 1.8 % rejected only; 1.003 for 16, which one
good record in 3000 exceeds. What lies between 8 and 16 does little harm and is likely good: where
1 % of the records are off by anything up to 10 arcsec, a record with a sigma of 0.5 arcsec is more
likely one of them than a good one only above a chi2 of 20.

While very large residuals are about, the bar is a quarter of the largest, so that a gross error
does not take its neighbours with it. Where more than half of the records miss by more than they
should, it is the orbit or the sigmas that are wrong, not the records: the bars are multiplied by
the median chi2 over its expectation, so that a gravity-only fit does not throw out the very records
that show a thrust.

A radar echo has one number: its chi2 is exchanged for that of two numbers with the same
probability.
"""

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray
from scipy.special import log_ndtr

from ngbound.arc import Noise
from ngbound.constants import ARCSEC_RAD
from ngbound.fit.shared_estimates import freed

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
Ints = NDArray[np.int64]

REJECT_CHI2 = 16.0
RECOVER_CHI2 = 14.0
BAR_FRACTION = 0.25
MEDIAN_CHI2 = 2.0 * float(np.log(2.0))
"""Median of chi2 with two degrees of freedom."""
MAX_ROUNDS = 15
FEW = 5
"""So many records are never rejected from."""


def residual_chi2(seen: Floats, design: Floats, cov: Floats, noise: Noise, keep: Bools) -> Floats:
    """chi2 of each record's two residuals, (..., n); of an echo, of two residuals as improbable.

    Parameters
    ----------
    seen : (..., n, 2) observed minus computed, radians
    design : (n, 2, p) radians per unit
    cov : (p, p)
    noise : Noise of all n records
    keep : (n,) records in the fit
    """
    own = np.matmul(design @ cov, np.swapaxes(design, 1, 2))
    sign = np.where(keep, -1.0, 1.0)[:, None, None]
    error = np.zeros((len(noise), 2, 2))
    error[:, 0, 0] = noise.sigma_ra_arcsec**2
    error[:, 1, 1] = noise.sigma_dec_arcsec**2
    error[:, 0, 1] = error[:, 1, 0] = noise.corr * noise.sigma_ra_arcsec * noise.sigma_dec_arcsec
    error *= ARCSEC_RAD**2
    total = error + sign * own
    # the number that an echo does not have is given the error of the one it has
    echo = ~noise.optical
    one = np.where(noise.given[:, 0], total[:, 0, 0], total[:, 1, 1])
    total[echo] = one[echo, None, None] * np.eye(2)
    # a record that alone pins the orbit leaves no residual to judge: its noise then stands
    trace = np.trace(total, axis1=1, axis2=2)
    det = total[:, 0, 0] * total[:, 1, 1] - total[:, 0, 1] ** 2
    weak = (det <= 1e-4 * trace**2) | (trace <= 0.02 * np.trace(error, axis1=1, axis2=2))
    total[weak] = error[weak]
    chi2 = np.einsum("...ni,nij,...nj->...n", seen, np.linalg.inv(total), seen)
    return chi2 if noise.there is None else np.where(noise.optical, chi2, as_of_two(chi2))


def as_of_two(chi2: Floats) -> Floats:
    """chi2 with two degrees of freedom that is as improbable as ``chi2`` with one."""
    size = np.sqrt(np.maximum(chi2, 0.0))
    return np.asarray(-2.0 * (np.log(2.0) + log_ndtr(-size)))


def chi2_of_records(seen: Floats, design: Floats, noise: Noise, keep: Bools) -> Floats:
    """chi2 (m, n) of the residuals of each record of m arcs, freed of the errors they share.

    Parameters
    ----------
    seen : (m, n, 2) observed minus computed at the solution of each arc, radians
    design : (n, 2, p) partials there, near enough those of every arc, radians per unit
    noise : Noise of all n records
    keep : (m, n) records in the fit
    """
    chi2 = np.empty(keep.shape)
    masks, of_arc = np.unique(keep, axis=0, return_inverse=True)
    for i, mask in enumerate(masks):
        rows = np.flatnonzero(of_arc.ravel() == i)
        rest, wide, cov = freed(seen[rows], design, noise, mask)
        chi2[rows] = residual_chi2(rest, wide, cov, noise, mask)
    return chi2


def judge(chi2: Floats, keep: Bools, loose: float = 1.0) -> Bools:
    """The records (..., n) to keep in the next round; ``loose`` multiplies both bars."""
    largest = np.max(np.where(keep, chi2, 0.0), axis=-1, keepdims=True, initial=0.0)
    middle = np.median(chi2, axis=-1, keepdims=True) if chi2.size else np.zeros_like(largest)
    scale = loose * np.maximum(1.0, middle / MEDIAN_CHI2)
    reject, recover = REJECT_CHI2 * scale, RECOVER_CHI2 * scale
    bar = np.maximum(reject, BAR_FRACTION * largest)
    back = np.where(bar == reject, recover, np.minimum(recover, bar))
    return np.where(keep, chi2 <= bar, chi2 < back)


def judge_in_turns(
    keep: Bools,
    n_free: int,
    numbers: Ints,
    fit_again: Callable[[Ints, Bools], Floats],
    loose: float = 1.0,
) -> tuple[Bools, int]:
    """Fit and judge m arcs by turns until the kept records of each no longer change.

    Parameters
    ----------
    keep : (m, n) records to start with
    n_free : parameters of a fit
    numbers : (n,) that each record gives
    fit_again : callable(rows, keep[rows])
        Fits some of the arcs to those records and returns the chi2 (len(rows), n) of the residuals
        of all; nan for an arc that cannot be fitted, which then stays as it is.
    loose : float
        Multiplies both bars.

    Returns
    -------
    (m, n) records kept, those of the last fit of each arc; rounds made
    """
    keep = keep.copy()
    tried = [{mask.tobytes()} for mask in keep]
    rows = np.arange(len(keep))
    rounds = 0
    while rows.size:
        chi2 = fit_again(rows, keep[rows])
        rounds += 1
        if rounds == MAX_ROUNDS:
            break
        new = judge(chi2, keep[rows], loose)
        count = new.sum(axis=1)
        fresh = np.array(
            [mask.tobytes() not in tried[i] for i, mask in zip(rows, new, strict=True)]
        )
        go = fresh & (new @ numbers >= n_free + 4) & (count >= FEW) & np.isfinite(chi2).all(axis=1)
        rows, new = rows[go], new[go]
        keep[rows] = new
        for i, mask in zip(rows, new, strict=True):
            tried[i].add(mask.tobytes())
    return keep, rounds
