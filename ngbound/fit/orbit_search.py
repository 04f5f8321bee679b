"""From angles alone to a converged orbit over the whole arc.

Preliminary orbits of a sub-arc are corrected with all forces, then the sub-arc grows: each time by as much as the orbit's
own uncertainty allows to be called linear, with new records judged against that uncertainty before they
enter. Imports numpy, errors, arc, sky, motion and this room.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from ngbound.arc import Noise
from ngbound.constants import ARCSEC_RAD
from ngbound.errors import FirstOrbitError, NgboundError
from ngbound.fit.first_orbit import Preliminary, preliminary_orbits
from ngbound.fit.least_squares import Correction, differential_correction, linearise
from ngbound.fit.outliers import RECOVER_CHI2, REJECT_CHI2, judge, residual_chi2
from ngbound.motion import ForceModel, Records, Thrust, integrate_track
from ngbound.sky import direction_to_angles, load_ephemeris

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
Progress = Callable[[str], None]

WIDEN = 1.8
LINEAR_RAD = 3e-3
LOOSE = 4.0
MAX_ROUNDS = 15
GOOD_REDUCED_CHI2 = 3.0
FEW = 5


@dataclass(frozen=True, eq=False)
class Converged:
    """A correction over all records with the mask of those kept."""

    epoch_d: float
    correction: Correction = field(repr=False)
    keep: Bools
    rounds: int

    @property
    def reduced_chi2(self) -> float:
        """chi2 per degree of freedom of the kept records."""
        dof = 2 * int(self.keep.sum()) - self.correction.at.theta.size
        return self.correction.at.chi2 / max(dof, 1)


def settle(
    theta: Floats,
    epoch_d: float,
    records: Records,
    noise: Noise,
    keep: Bools,
    thrust: Thrust | None,
    components: str,
    forces: ForceModel,
    reject: bool,
    loose: float = 1.0,
) -> Converged:
    """Correct and judge by turns until the kept records no longer change.

    ``loose`` multiplies the bars of rejection and recovery.
    """
    seen_before: list[bytes] = []
    for turn in range(1, MAX_ROUNDS + 1):
        correction = differential_correction(
            theta, epoch_d, records, noise, keep, thrust, components, forces
        )
        theta = correction.at.theta
        if not reject:
            break
        chi2 = residual_chi2(correction.at.seen, correction.at.design, correction.cov, noise, keep)
        new = judge(chi2, keep, REJECT_CHI2 * loose, RECOVER_CHI2 * loose)
        if 2 * int(new.sum()) < theta.size + 4 or new.sum() < FEW:
            break
        if np.array_equal(new, keep) or new.tobytes() in seen_before:
            break
        seen_before.append(keep.tobytes())
        keep = new
    return Converged(epoch_d, correction, keep, turn)


def middle_epoch(records: Records) -> float:
    """The middle of the arc at 0 h TDB."""
    return math.floor(0.5 * (records.tdb_d.min() + records.tdb_d.max())) + 0.5


def at_epoch(
    theta: Floats, epoch_d: float, new_epoch_d: float, thrust: Thrust | None, forces: ForceModel
) -> Floats:
    """A parameter vector moved to another epoch (its thrust is that of ``thrust``)."""
    if new_epoch_d == epoch_d:
        return theta.copy()
    track = integrate_track(epoch_d, theta[:6], new_epoch_d, new_epoch_d, thrust, forces)
    out = theta.copy()
    out[:6] = track.at(new_epoch_d)[0]
    return out


def _spread_rad(design: Floats, cov: Floats) -> Floats:
    """The orbit's own uncertainty on the sky, (n,) radians: root of the trace of its covariance."""
    return np.sqrt(np.einsum("nip,pq,niq->n", design, cov, design))


def _next_window(
    records: Records, noise: Noise, low: int, high: int, found: Converged, forces: ForceModel
) -> tuple[int, int, Bools]:
    """The wider window, and which of its records to keep at first."""
    t = records.tdb_d
    n = t.size
    half = 0.5 * (t[high - 1] - t[low]) * WIDEN + 0.5
    centre = 0.5 * (t[high - 1] + t[low])
    new_low = min(int(np.searchsorted(t, centre - half)), max(low - 1, 0))
    new_high = max(int(np.searchsorted(t, centre + half, side="right")), min(high + 1, n))
    theta = found.correction.at.theta
    while True:
        part = slice(new_low, new_high)
        subset = records.subset(part)
        mask = np.ones(new_high - new_low, dtype=bool)
        local = noise.mask(np.arange(new_low, new_high))
        there = linearise(theta, found.epoch_d, subset, local, mask, None, "", forces)
        spread = _spread_rad(there.design, found.correction.cov)
        fresh = np.ones(mask.size, dtype=bool)
        fresh[low - new_low : high - new_low] = False
        if not fresh.any() or spread[fresh].max() < LINEAR_RAD:
            break
        # only as far as the orbit is known: keep the nearest of the new records
        fine = np.flatnonzero(~fresh | (spread < LINEAR_RAD)) + new_low
        left = low
        while left - 1 >= new_low and (left - 1) in set(fine.tolist()):
            left -= 1
        right = high
        while right < new_high and right in set(fine.tolist()):
            right += 1
        if (left, right) == (low, high):
            # no record is near enough: take the one that is known best
            before = spread[low - 1 - new_low] if low > new_low else np.inf
            after = spread[high - new_low] if high < new_high else np.inf
            left, right = (low - 1, high) if before < after else (low, high + 1)
            new_low, new_high = left, right
            part = slice(new_low, new_high)
            subset = records.subset(part)
            mask = np.ones(new_high - new_low, dtype=bool)
            local = noise.mask(np.arange(new_low, new_high))
            there = linearise(theta, found.epoch_d, subset, local, mask, None, "", forces)
            break
        new_low, new_high = left, right
    inside = np.zeros(new_high - new_low, dtype=bool)
    inside[low - new_low : high - new_low] = found.keep
    old = np.zeros(new_high - new_low, dtype=bool)
    old[low - new_low : high - new_low] = True
    chi2 = residual_chi2(there.seen, there.design, found.correction.cov, local, inside)
    keep = np.where(old, inside, chi2 < 25.0 * REJECT_CHI2)
    if not np.any(keep & ~old):
        # all new records disagree with the orbit: it is the orbit that must move
        keep = keep | ~old
    return new_low, new_high, keep


def grow(
    first: Preliminary, records: Records, noise: Noise, forces: ForceModel, say: Progress | None = None
) -> Converged:
    """Grow a gravity-only orbit from a preliminary one over all records (sorted by time).

    Raises
    ------
    FitError, PropagationError
        If some step of the growth does not converge.
    """
    sun = np.concatenate(load_ephemeris().posvel("sun", first.epoch_tdb_d))
    theta = np.asarray(first.state, dtype=float) + sun
    low = int(first.indices.min())
    high = int(first.indices.max()) + 1
    keep = np.zeros(high - low, dtype=bool)
    keep[first.indices - low] = True
    epoch = first.epoch_tdb_d
    while True:
        part = records.subset(slice(low, high))
        local = noise.mask(np.arange(low, high))
        found = settle(theta, epoch, part, local, keep, None, "", forces, keep.size > FEW, LOOSE)
        theta = found.correction.at.theta
        if say is not None:
            days = float(part.tdb_d[-1] - part.tdb_d[0])
            say(f"orbit over {int(found.keep.sum())} observations, {days:.1f} d")
        if low == 0 and high == len(records):
            return found
        low, high, keep = _next_window(records, noise, low, high, found, forces)


def find_orbit(
    records: Records, noise: Noise, forces: ForceModel, say: Progress | None = None
) -> Converged:
    """A gravity-only orbit over all records, from the angles alone.

    Raises
    ------
    FirstOrbitError
        If no preliminary orbit exists or none grows over the arc.
    """
    sun = load_ephemeris().position_au("sun", records.tdb_d)
    ra, dec = direction_to_angles(records.basis[:, 2])
    sigma = np.stack([noise.sigma_ra_arcsec, noise.sigma_dec_arcsec], axis=1) * ARCSEC_RAD
    candidates = preliminary_orbits(records.tdb_d, ra, dec, records.observer_au - sun, sigma)
    best: Converged | None = None
    refusals = []
    for candidate in candidates:
        if say is not None:
            say(str(candidate))
        try:
            found = grow(candidate, records, noise, forces, say)
        except NgboundError as error:
            refusals.append(str(error))
            continue
        lost = 1.0 - float(found.keep.mean())
        if best is None or _merit(found) < _merit(best):
            best = found
        if found.reduced_chi2 < GOOD_REDUCED_CHI2 and lost < 0.1:
            break
    if best is None:
        raise FirstOrbitError(
            f"None of {len(candidates)} preliminary orbits could be carried over the whole arc; the last refusal was: "
            f"{refusals[-1]} Give an initial state or elements, or split the arc.",
            candidates=candidates,
        )
    return best


def _merit(found: Converged) -> float:
    """Lower is better: chi2 of the kept records with a fee for each rejected one."""
    lost = int((~found.keep).sum())
    return found.correction.at.chi2 + 25.0 * lost


