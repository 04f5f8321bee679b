"""From angles alone to a converged orbit over the whole arc.

Preliminary orbits of a sub-arc are corrected with all forces, then the sub-arc grows: each time by
as much as the orbit's own uncertainty allows to be called linear, with new records judged against
that uncertainty before they enter. Imports numpy, constants, errors, arc, sky, motion and this
room.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from ngbound.arc import Noise
from ngbound.constants import ARCSEC_RAD
from ngbound.errors import FirstOrbitError, NgboundError
from ngbound.fit.first_orbit import Preliminary, preliminary_orbits
from ngbound.fit.least_squares import (
    Correction,
    Linearised,
    differential_correction,
    linearise,
    thrust_of,
)
from ngbound.fit.outliers import FEW, chi2_of_records, judge_in_turns, residual_chi2
from ngbound.motion import ForceModel, Records, Thrust, integrate_track
from ngbound.sky import direction_to_angles, load_ephemeris

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
Progress = Callable[[str], None]

WIDEN = 1.8
LINEAR_RAD = 3e-3
LOOSE = 2.0
ENTRY_CHI2 = 200.0
"""Up to which a new record enters a growing arc."""
GOOD_REDUCED_CHI2 = 3.0
GOOD_LOST = 0.1
ROOM = 4
SHORTEST_FOR_THRUST_D = 20.0
LEAST_GAIN = 30.0
FEE = 25.0


@dataclass(frozen=True, eq=False)
class Converged:
    """A correction over all records with the mask of those kept."""

    epoch_d: float
    correction: Correction = field(repr=False)
    keep: Bools
    rounds: int
    thrust: Thrust | None = None
    components: str = ""

    @property
    def reduced_chi2(self) -> float:
        """chi2 per degree of freedom of the kept directions."""
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
    corrections: list[Correction] = []

    def correct(rows: NDArray[np.int64], keep: Bools) -> Floats:
        start = corrections[-1].at.theta if corrections else theta
        now = differential_correction(
            start, epoch_d, records, noise, keep[0], thrust, components, forces
        )
        corrections.append(now)
        return chi2_of_records(now.at.seen[None], now.at.design, noise, keep)

    rounds = 1
    if reject:
        masks, rounds = judge_in_turns(keep[None], theta.size, noise.count, correct, loose)
        keep = masks[0]
    else:
        correct(np.zeros(1, dtype=np.int64), keep[None])
    last = corrections[-1]
    return Converged(
        epoch_d, last, keep, rounds, thrust_of(last.at.theta, thrust, components), components
    )


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
    return np.sqrt(np.sum((design @ cov) * design, axis=(1, 2)))


def _next_window(
    records: Records, noise: Noise, low: int, high: int, found: Converged, forces: ForceModel
) -> tuple[int, int, Bools]:
    """The wider window, and which of its records to keep at first."""
    t = records.tdb_d
    half = 0.5 * (t[high - 1] - t[low]) * WIDEN + 0.5
    centre = 0.5 * (t[high - 1] + t[low])
    left = min(int(np.searchsorted(t, centre - half)), max(low - 1, 0))
    right = max(int(np.searchsorted(t, centre + half, side="right")), min(high + 1, t.size))
    local, there = _seen_over(records, noise, left, right, found, forces)
    vague = _spread_rad(there.design, found.correction.cov) > LINEAR_RAD
    if vague.any():
        # only as far as the orbit is known, and always one record further
        before, after = vague[: low - left], vague[high - left :]
        near = int(np.flatnonzero(before)[-1]) + 1 if before.any() else 0
        far = int(np.flatnonzero(after)[0]) if after.any() else after.size
        wider_left, wider_right = left + near, high + far
        if (wider_left, wider_right) == (low, high):
            gap_before = t[low] - t[low - 1] if low > left else np.inf
            gap_after = t[high] - t[high - 1] if high < right else np.inf
            wider_left, wider_right = (low - 1, high) if gap_before < gap_after else (low, high + 1)
        if (wider_left, wider_right) != (left, right):
            left, right = wider_left, wider_right
            local, there = _seen_over(records, noise, left, right, found, forces)
    inside = np.zeros(right - left, dtype=bool)
    inside[low - left : high - left] = found.keep
    old = np.zeros(right - left, dtype=bool)
    old[low - left : high - left] = True
    chi2 = residual_chi2(there.seen, there.design, found.correction.cov, local, inside)
    keep = np.where(old, inside, chi2 < ENTRY_CHI2)
    if not np.any(keep & ~old):
        # all new records disagree with the orbit: it is the orbit that must move
        keep = keep | ~old
    return left, right, keep


def _seen_over(
    records: Records, noise: Noise, left: int, right: int, found: Converged, forces: ForceModel
) -> tuple[Noise, Linearised]:
    """The noise of a window and the orbit linearised over it."""
    rows = np.arange(left, right)
    local = noise.mask(rows)
    there = linearise(
        found.correction.at.theta, found.epoch_d, records.subset(rows), local,
        np.ones(rows.size, dtype=bool), found.thrust, found.components, forces,
    )  # fmt: skip
    return local, there


def _room_for(components: str, keep: Bools, span_d: float) -> bool:
    enough = 2 * int(keep.sum()) >= 6 + len(components) + ROOM
    return bool(components) and enough and span_d > SHORTEST_FOR_THRUST_D


def _settle_leanest(
    wanted: tuple[str, ...],
    theta: Floats,
    epoch_d: float,
    records: Records,
    noise: Noise,
    keep: Bools,
    thrust: Thrust | None,
    forces: ForceModel,
) -> Converged:
    """Settle with the first set of components that explains the records, else with the best."""
    best: Converged | None = None
    refusal: NgboundError | None = None
    for letters in wanted:
        start = theta if len(theta) == 6 + len(letters) else np.pad(theta[:6], (0, len(letters)))
        try:
            found = settle(
                start, epoch_d, records, noise, keep, thrust if letters else None, letters, forces,
                keep.size > FEW, LOOSE,
            )  # fmt: skip
        except NgboundError as error:
            refusal = refusal or error
            continue
        if best is None or _merit(found) < _merit(best) - LEAST_GAIN:
            best = found
        if _explains(best):
            break
    if best is None:
        assert refusal is not None
        raise refusal
    return best


def grow(
    first: Preliminary,
    records: Records,
    noise: Noise,
    forces: ForceModel,
    say: Progress | None = None,
    thrust: Thrust | None = None,
    components: str = "",
) -> Converged:
    """Grow an orbit from a preliminary one over all records (sorted by time).

    Gravity alone is tried first; the thrust components are set free, once and for all, at the
    length of arc that gravity alone does not explain.

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
    free = ""
    while True:
        part = records.subset(slice(low, high))
        local = noise.mask(np.arange(low, high))
        span_d = float(part.tdb_d[-1] - part.tdb_d[0])
        wanted = (free,) if free or not _room_for(components, keep, span_d) else ("", components)
        found = _settle_leanest(wanted, theta, epoch, part, local, keep, thrust, forces)
        if found.components and not free and say is not None:
            say("gravity alone does not explain the arc any more: thrust is set free")
        free = found.components
        theta = found.correction.at.theta
        if say is not None:
            days = float(part.tdb_d[-1] - part.tdb_d[0])
            say(f"orbit over {int(found.keep.sum())} observations, {days:.1f} d")
        if low == 0 and high == len(records):
            return found
        low, high, keep = _next_window(records, noise, low, high, found, forces)


def find_orbit(
    records: Records,
    noise: Noise,
    forces: ForceModel,
    say: Progress | None = None,
    thrust: Thrust | None = None,
    components: str = "",
) -> Converged:
    """An orbit over all records, from the angles alone; with thrust only where gravity alone fails.

    Echoes are only judged: those that the orbit cannot mean are not kept.

    Raises
    ------
    FirstOrbitError
        If no preliminary orbit exists or none grows over the arc.
    """
    if records.echoes is not None:
        angles = noise.optical
        found = find_orbit(
            records.subset(angles), noise.mask(angles), forces, say, thrust, components
        )
        return replace(found, keep=_with_echoes(records, noise, found, forces))
    # shared errors are small against what tells one orbit from another
    noise = replace(noise, shared=None)
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
            found = grow(candidate, records, noise, forces, say, thrust, components)
        except NgboundError as error:
            refusals.append(str(error))
            continue
        if best is None or _merit(found) < _merit(best):
            best = found
        if _explains(best):
            break
    if best is None:
        days = float(records.tdb_d[-1] - records.tdb_d[0])
        raise FirstOrbitError(
            f"None of {len(candidates)} preliminary orbits could be carried over all "
            f"{len(records)} observations in {days:.4g} d. Add observations over a longer time, "
            "look for records of another object, or give an initial state or elements. The last "
            f"refusal was: {refusals[-1]}",
            candidates=candidates,
        )
    return best


def _with_echoes(records: Records, noise: Noise, found: Converged, forces: ForceModel) -> Bools:
    """The records to keep: what an orbit from the angles kept, and the echoes near where it has
    them, its own uncertainty allowed for; all echoes where it has none of them.
    """
    keep = np.zeros(len(records), dtype=bool)
    keep[noise.optical] = found.keep
    there = linearise(
        found.correction.at.theta, found.epoch_d, records, noise, np.ones_like(keep), found.thrust,
        found.components, forces,
    )  # fmt: skip
    chi2 = residual_chi2(there.seen, there.design, found.correction.cov, noise, keep)
    near = ~noise.optical & (chi2 < ENTRY_CHI2)
    return keep | (near if near.any() else ~noise.optical)


def _explains(found: Converged) -> bool:
    """Whether nearly all records are kept with a sane chi2."""
    return found.reduced_chi2 < GOOD_REDUCED_CHI2 and found.keep.mean() > 1.0 - GOOD_LOST


def _merit(found: Converged) -> float:
    """Lower is better: chi2 of the kept records with a fee for each rejected one."""
    return found.correction.at.chi2 + FEE * int((~found.keep).sum())
