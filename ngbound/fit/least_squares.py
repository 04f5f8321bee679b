"""Differential correction of an orbit, with or without thrust.

Imports numpy, constants, errors, arc, motion. The normal equations of C. F. Gauss 1809, Theoria
Motus, solved by a singular value decomposition of the whitened, column-scaled design matrix, damped
after K. Levenberg 1944, Q. Appl. Math. 2, 164 and D. W. Marquardt 1963, SIAM J. 11, 431.
"""

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from ngbound.arc import Noise
from ngbound.errors import FitError, PropagationError
from ngbound.motion import (
    ForceModel,
    Partials,
    Records,
    Sight,
    Thrust,
    Track,
    design_matrix,
    integrate_track,
    light_margin_d,
    partials_along,
    residuals,
    see,
)

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

STATE_NAMES = ("x", "y", "z", "vx", "vy", "vz")
MOVED_ENOUGH = 1e-2
"""A step that moves the whitened residuals by less, all taken together, is no step: it is a
hundredth of a standard deviation of the parameters."""
NOISE_FLOOR = 0.1
"""Up to this size of the undamped step, a chi2 that cannot be lowered any more is put down to the
step control of the integrator."""
MAX_SWEEPS = 60
MAX_DAMPING = 1e12
UNDETERMINED = 1e-12


@dataclass(frozen=True, eq=False)
class Linearised:
    """An orbit with everything that follows from it at the records.

    Attributes
    ----------
    theta : (p,) state at the epoch (au, au/d), then the free thrust components (au/d2)
    track, sight, partials
    seen : (n, 2) observed minus computed, radians, all records
    design : (n, 2, p) partials of the computed place, radians per unit
    chi2 : of the kept records
    """

    theta: Floats
    track: Track = field(repr=False)
    sight: Sight = field(repr=False)
    partials: Partials = field(repr=False)
    seen: Floats = field(repr=False)
    design: Floats = field(repr=False)
    chi2: float


@dataclass(frozen=True, eq=False)
class Correction:
    """A converged differential correction.

    Attributes
    ----------
    at : Linearised
    normal, cov : (p, p) normal matrix of the kept records and its inverse
    sweeps : int
    condition : float
        Largest over smallest singular value of the scaled design.
    """

    at: Linearised
    normal: Floats
    cov: Floats
    sweeps: int
    condition: float


def thrust_of(theta: Floats, thrust: Thrust | None, components: str) -> Thrust | None:
    """The thrust with the amounts of a parameter vector."""
    if thrust is None:
        return None
    amounts = thrust.amounts_au_d2.copy()
    for i, c in enumerate(components):
        amounts["RTN".index(c)] = theta[6 + i]
    return thrust.with_amounts(amounts)


def parameter_names(components: str) -> tuple[str, ...]:
    """Names of the parameters of a fit."""
    return STATE_NAMES + tuple(f"A{'RTN'.index(c) + 1}" for c in components)


def linearise(
    theta: Floats,
    epoch_d: float,
    records: Records,
    noise: Noise,
    keep: Bools,
    thrust: Thrust | None,
    components: str,
    forces: ForceModel,
) -> Linearised:
    """Integrate a parameter vector and take residuals and partials at every record."""
    push = thrust_of(theta, thrust, components)
    start = float(records.tdb_d.min()) - light_margin_d(records.observer_au, theta)
    track = integrate_track(epoch_d, theta[:6], start, records.end_d, push, forces)
    sight = see(track, records)
    seen = residuals(sight, records)
    partials = partials_along(track, parameter_names(components))
    design = design_matrix(sight, records, partials)
    chi2 = float(np.sum(noise.whiten(seen[keep].ravel()) ** 2))
    return Linearised(theta, track, sight, partials, seen, design, chi2)


@dataclass(frozen=True, eq=False)
class _Step:
    """A step of the damped linear problem.

    ``size``: its length in whitened residuals; ``expected``: by how much it should lower chi2;
    ``singular``: singular values of the scaled design.
    """

    step: Floats
    size: float
    expected: float
    singular: Floats

    @classmethod
    def of(cls, white: Floats, miss: Floats, damping: float) -> "_Step":
        scale = np.linalg.norm(white, axis=0)
        scale[scale == 0.0] = 1.0
        u, s, vt = np.linalg.svd(white / scale, full_matrices=False)
        if damping > 0.0:
            gain = s / (s**2 + damping * s[0] ** 2)
        else:
            gain = 1.0 / np.maximum(s, s[0] * 1e-15)
        step = (vt.T @ (gain * (u.T @ miss))) / scale
        moved = white @ step
        return cls(
            step,
            float(np.linalg.norm(moved)),
            float(miss @ miss - np.sum((miss - moved) ** 2)),
            s,
        )


def _downhill(
    here: Linearised,
    white: Floats,
    miss: Floats,
    full: _Step,
    damping: float,
    at: Callable[[Floats], Linearised],
) -> tuple[Linearised | None, _Step, float]:
    """The least damped step that lowers chi2, or None; with the damping it took."""
    while damping <= MAX_DAMPING:
        step = full if damping == 0.0 else _Step.of(white, miss, damping)
        if damping > 0.0 and step.size < 0.1 * MOVED_ENOUGH:
            break
        there = _try(at, here.theta + step.step)
        if there is not None and here.chi2 - there.chi2 < 0.5 * step.expected:
            # the valley is curved: go to the lowest point of the parabola along the step
            bend = there.chi2 - here.chi2 + 2.0 * step.expected
            fraction = min(1.0, max(0.1, step.expected / bend))
            short = _try(at, here.theta + fraction * step.step)
            there = min((there, short or there), key=lambda trial: trial.chi2)
        if there is not None and there.chi2 < here.chi2:
            return there, step, damping
        damping = max(damping * 10.0, 1e-9)
    return None, full, damping


def _try(at: Callable[[Floats], Linearised], theta: Floats) -> Linearised | None:
    """The orbit linearised at a vector; None where it cannot be integrated or seen."""
    try:
        return at(theta)
    except PropagationError:
        return None


def _settled(here: Linearised, white: Floats, full: _Step, sweep: int) -> Correction:
    if full.singular[-1] < UNDETERMINED * full.singular[0]:
        raise FitError(
            "These observations do not determine the orbit: some change of it moves no "
            "observation. Add observations over a longer time, or fit fewer thrust components.",
            theta=here.theta,
        )
    normal, cov, condition = _covariance(white)
    return Correction(here, normal, cov, sweep, condition)


def _covariance(white: Floats) -> tuple[Floats, Floats, float]:
    scale = np.linalg.norm(white, axis=0)
    scale[scale == 0.0] = 1.0
    _, s, vt = np.linalg.svd(white / scale, full_matrices=False)
    normal = white.T @ white
    half = vt.T / np.maximum(s, s[0] * 1e-15)
    cov = (half @ half.T) / np.outer(scale, scale)
    return normal, cov, float(s[0] / max(s[-1], 1e-300))


def differential_correction(
    theta: Floats,
    epoch_d: float,
    records: Records,
    noise: Noise,
    keep: Bools,
    thrust: Thrust | None,
    components: str,
    forces: ForceModel,
    max_sweeps: int = MAX_SWEEPS,
) -> Correction:
    """Correct a parameter vector until nothing moves.

    Parameters
    ----------
    theta : (p,) first guess
    noise : Noise of all records; only ``keep`` enters the fit

    Raises
    ------
    FitError
        No convergence, too few records, or an orbit that the records do not determine.
    """
    theta = np.array(theta, dtype=float)
    numbers = int(noise.count[keep].sum())
    if numbers < theta.size:
        raise FitError(
            f"{int(keep.sum())} observations give {numbers} numbers, fewer than the "
            f"{theta.size} parameters of the fit; observe longer or fit fewer thrust components.",
            theta=theta,
        )
    kept = noise.mask(keep)

    def at(vector: Floats) -> Linearised:
        return linearise(vector, epoch_d, records, kept, keep, thrust, components, forces)

    try:
        here = at(theta)
    except PropagationError as error:
        raise FitError(
            f"The first guess of the orbit cannot be used: {error}", theta=theta
        ) from error
    damping = 0.0
    for sweep in range(1, max_sweeps + 1):
        white = kept.whiten(here.design[keep].reshape(-1, theta.size))
        miss = kept.whiten(here.seen[keep].ravel())
        full = _Step.of(white, miss, 0.0)
        if full.size < MOVED_ENOUGH:
            return _settled(here, white, full, sweep)
        there, tried, damping = _downhill(here, white, miss, full, damping, at)
        if there is None:
            if full.size < NOISE_FLOOR:
                return _settled(here, white, full, sweep)
            raise FitError(
                "The differential correction found no step that lowers the residuals; give a "
                "better first orbit, or shorten the arc.",
                theta=here.theta,
                chi2=here.chi2,
            )
        gain = (here.chi2 - there.chi2) / tried.expected if tried.expected > 0.0 else 1.0
        if damping > 0.0:
            damping *= 0.01 if gain > 0.75 else 0.1 if gain > 0.25 else 1.0
            damping = damping if damping > 1e-10 else 0.0
        here = there
    raise FitError(
        f"The differential correction did not converge in {max_sweeps} steps "
        f"(chi2 = {here.chi2:.6g}); give a better first orbit, or look for records of another "
        "object.",
        theta=here.theta,
        chi2=here.chi2,
    )
