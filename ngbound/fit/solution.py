"""Fit: an orbit with its covariance and residuals, and the comparison of two.

Imports numpy, pandas, scipy, astropy units, constants, errors, arc, sky, motion and this room.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import astropy.units as u
import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray

from ngbound.arc import Arc, ErrorModel, Noise, treatment_text
from ngbound.blas import on_one_thread
from ngbound.constants import ARCSEC_RAD
from ngbound.errors import FitError
from ngbound.fit.least_squares import Correction, parameter_names, thrust_of
from ngbound.fit.noise_scale import (
    StationScale,
    noise_excess,
    rescaled,
    student_dof,
    tail_probability,
)
from ngbound.fit.orbit_search import Converged, at_epoch, find_orbit, middle_epoch, settle
from ngbound.fit.outliers import chi2_of_records
from ngbound.fit.residuals import motion_rad_d, residual_table, sunward_per_au
from ngbound.fit.shared_estimates import (
    JointSolution,
    freed,
    shared_table,
    shared_text,
    solve_jointly,
)
from ngbound.fit.significance import significance_sigma
from ngbound.motion import Atlas, Echoes, ForceModel, Neighbourhood, Orbit, Records, Thrust
from ngbound.rounding import rounded, with_error
from ngbound.sky import Observers, load_ephemeris, observer_states, reduce_offsets

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
AU_PER_D2 = u.au / u.day**2
MIN_OBSERVATIONS = 3
WEAK_DISTANCE_ERROR = 0.1
"""Relative error of the distance above which a fit warns that it is only linear theory."""
HOPELESS_DISTANCE_ERROR = 2.0
MISFIT = 3.0
"""chi2 per degree of freedom above which a fit says that it explains nothing, with 4 sigma of its
own scatter on top."""
"""Relative error of the distance above which there is no orbit to speak of."""


@dataclass(frozen=True, eq=False)
class Fit:
    """An orbit fitted to an arc.

    Attributes
    ----------
    arc, used : Arc
        The whole arc, and its usable observations in order of time (n rows).
    error_model : ErrorModel
    noise : Noise
        Of the used observations, rejected ones included, as rescaled by ``scales``.
    stated_noise : Noise
        The same before it was rescaled.
    scales : tuple of StationScale
        Stations whose errors were rescaled.
    orbit : Orbit
        With the fitted thrust in it.
    components : str
        Fitted thrust components, "" for none.
    names : tuple of str, (p,)
    theta : (p,) array
        Barycentric state at the epoch (au, au/d), then thrust (au/d2).
    theta_cov, normal : (p, p) arrays
        Covariance and normal matrix, without priors and without rescaling of the noise.
    chi2 : float
        Of the kept observations.
    keep : (n,) bool
        False where the outlier rule rejected.
    design : (2n, p) array
        Partials of the computed place, radians per unit; rows RA cos(dec) and Dec by turns.
    seen : (n, 2) array
        Observed minus computed, radians.
    """

    arc: Arc = field(repr=False)
    used: Arc = field(repr=False)
    error_model: ErrorModel = field(repr=False)
    noise: Noise = field(repr=False)
    stated_noise: Noise = field(repr=False)
    orbit: Orbit
    components: str
    names: tuple[str, ...]
    theta: Floats
    theta_cov: Floats = field(repr=False)
    normal: Floats = field(repr=False)
    chi2: float
    keep: Bools = field(repr=False)
    design: Floats = field(repr=False)
    seen: Floats = field(repr=False)
    records: Records = field(repr=False)
    observers: Observers = field(repr=False)
    correction: Correction = field(repr=False)
    rounds: int
    scales: tuple[StationScale, ...] = ()

    n_state = 6

    @property
    def thrust(self) -> Thrust | None:
        """The fitted thrust, or None."""
        return self.orbit.thrust

    @property
    def n_obs(self) -> int:
        """Observations in the fit."""
        return int(self.keep.sum())

    @property
    def n_rejected(self) -> int:
        """Observations the outlier rule rejected."""
        return int((~self.keep).sum())

    @property
    def n_numbers(self) -> int:
        """Numbers in the fit: two of a direction, one of a radar echo."""
        return int(self.noise.count[self.keep].sum())

    @property
    def dof(self) -> int:
        """Degrees of freedom: numbers less parameters."""
        return self.n_numbers - self.theta.size

    @property
    def reduced_chi2(self) -> float:
        """chi2 over degrees of freedom; nan when there are none."""
        return self.chi2 / self.dof if self.dof > 0 else math.nan

    @property
    def rms_arcsec(self) -> float:
        """Root mean square of both coordinates of the kept directions' residuals, arcsec; nan
        without any."""
        kept = self.seen[self.keep & self.noise.optical]
        return float(np.sqrt(np.mean(kept**2)) / ARCSEC_RAD) if kept.size else math.nan

    @property
    def weighted_rms_arcsec(self) -> float:
        """Root of the mean of the directions' squared kept residuals, weighted by 1/sigma^2,
        arcsec; nan without any."""
        kept = self.keep & self.noise.optical
        if not kept.any():
            return math.nan
        sigma = np.stack([self.noise.sigma_ra_arcsec, self.noise.sigma_dec_arcsec], axis=1)[kept]
        weight = sigma**-2
        return float(np.sqrt(np.sum(weight * (self.seen[kept] / ARCSEC_RAD) ** 2) / weight.sum()))

    @cached_property
    def echo_summary(self) -> dict[str, Any]:
        """Of the kept radar echoes: n_delay, n_doppler, n_rejected, the root mean squares
        rms_delay_us and rms_doppler_hz (nan without any), and chi_delay, chi_doppler, the root mean
        squares over the stated errors. Empty without echoes."""
        echoes, path = self.records.echoes, self.correction.at.sight.path
        if echoes is None or path is None:
            return {}
        missed = echoes.missed(path) * [1e6, 1.0]
        kept = np.isfinite(missed) & self.keep[echoes.rows][:, None]
        chi = self.seen[echoes.rows] / ARCSEC_RAD
        out: dict[str, Any] = {"n_rejected": int((~self.keep[echoes.rows]).sum())}
        for i, (name, unit) in enumerate((("delay", "us"), ("doppler", "hz"))):
            mine = kept[:, i]
            some = bool(mine.any())
            out[f"n_{name}"] = int(mine.sum())
            for label, table in ((f"rms_{name}_{unit}", missed), (f"chi_{name}", chi)):
                value = float(np.sqrt(np.mean(table[mine, i] ** 2))) if some else math.nan
                out[label] = value
        return out

    @property
    def A(self) -> u.Quantity:
        """Fitted thrust components in the order of ``components``, au/d2, (k,)."""
        return self.theta[6:] * AU_PER_D2

    @property
    def A_cov(self) -> u.Quantity:
        """Their covariance, (k, k)."""
        return self.theta_cov[6:, 6:] * AU_PER_D2**2

    @property
    def A_sigma(self) -> u.Quantity:
        """Their standard deviations, (k,)."""
        return np.sqrt(np.diag(self.theta_cov)[6:]) * AU_PER_D2

    @property
    def wald(self) -> float:
        """A' C^-1 A of the fitted thrust; 0 without thrust."""
        if not self.components:
            return 0.0
        a = self.theta[6:]
        scale = np.sqrt(np.diag(self.theta_cov)[6:])
        c = self.theta_cov[6:, 6:] / np.outer(scale, scale)
        return float((a / scale) @ np.linalg.solve(c, a / scale))

    @property
    def p_value(self) -> float:
        """Chance of so large a Wald statistic without thrust; 1 for gravity alone."""
        if not self.components:
            return 1.0
        return tail_probability(self.wald, len(self.components), self.noise_dof)

    @property
    def significance(self) -> float:
        """The p-value as two-sided Gaussian sigma; 0 for gravity alone."""
        if not self.components:
            return 0.0
        return significance_sigma(self.wald, len(self.components), self.noise_dof)

    @cached_property
    def distance_error(self) -> float:
        """Standard error of the topocentric distance at the epoch over that distance."""
        rho = self.correction.at.sight.rho_au
        near = rho[int(np.argmin(np.abs(self.records.tdb_d - self.orbit.epoch_tdb_d)))]
        distance = float(np.linalg.norm(near))
        toward = near / distance
        return float(np.sqrt(toward @ self.theta_cov[:3, :3] @ toward)) / distance

    @property
    def weakness(self) -> str:
        """A sentence about an orbit that the arc hardly determines; "" for a good one."""
        if self.distance_error <= WEAK_DISTANCE_ERROR:
            return ""
        return (
            f"The arc hardly determines this orbit: its distance is uncertain by "
            f"{100.0 * self.distance_error:.0f} %, too much for linear error propagation; take "
            "limits from the exact posterior, or observe longer."
        )

    @property
    def misfit(self) -> str:
        """A sentence about an orbit that does not explain its arc; "" for one that does."""
        reduced = self.chi2 / max(self.dof, 1)
        if reduced <= MISFIT + 4.0 * np.sqrt(2.0 / max(self.dof, 1)):
            return ""
        causes = "the errors are larger than stated, many records are wrong or of another object"
        return (
            f"This orbit does not explain the arc: chi2 is {rounded(reduced)} times its degrees of "
            f"freedom; {causes}{'' if self.components else ', or a thrust is missing'}."
        )

    @cached_property
    def joint(self) -> JointSolution:
        """Parameters and shared errors solved together."""
        design = self.design.reshape(-1, 2, self.theta.size)
        return solve_jointly(self.seen, design, self.noise, self.keep)

    @cached_property
    def offsets(self) -> pd.DataFrame:
        """Estimates of the shared errors beside their priors and what is published:
        `ngbound.fit.shared_estimates.shared_table`."""
        return shared_table(self.noise, self.joint, self.theta.size)

    @cached_property
    def catalogue_treatments(self) -> dict[str, int]:
        """How many of the used observations got which treatment of their catalogue's offset."""
        return self.error_model.catalogue_treatments(self.used)

    @cached_property
    def noise_dof(self) -> int | None:
        """Degrees of freedom behind the standard errors of the thrust (without thrust, of the
        orbit) where they rest on the scatter of the residuals: tests are then those of Student and
        Fisher. None where errors are taken as known, or known as well as that."""
        if not self.scales or not self.error_model.student:
            return None
        return student_dof(self.scales, self.joint, *self._rescaled_part)

    @cached_property
    def noise_excess(self) -> float:
        """By how much the square of those standard errors is too large on average, because the
        part common to a night cannot be estimated below zero; 1 where errors are as known."""
        if self.noise_dof is None:
            return 1.0
        return noise_excess(self.scales, self.joint, *self._rescaled_part)

    @property
    def _rescaled_part(self) -> tuple[NDArray[np.object_], slice]:
        """Stations of the kept observations, "" where not rescaled; parameters that matter."""
        codes = self.used.table["stn"].to_numpy(dtype=object)
        codes = np.where(self.error_model.rescalable(self.noise), codes, "")[self.keep]
        return codes, slice(6 if self.components else 0, self.theta.size)

    @property
    def error_report(self) -> str:
        """In words: the sources of the errors, the scales of the stations before and after, and the
        shared errors beside what is published."""
        lines = [str(self.noise), treatment_text(self.catalogue_treatments)]
        if self.scales:
            lines.append("Rescaled by their own scatter:")
            lines += [f"  {scale}" for scale in self.scales]
        if self.noise_dof is not None:
            lines.append(
                f"Tests and limits are those of Student with {self.noise_dof} degrees of freedom."
            )
        lines.append(shared_text(self.offsets))
        return "\n".join(lines)

    @cached_property
    def residuals(self) -> pd.DataFrame:
        """The residual table; columns in `ngbound.fit.residuals.residual_table`."""
        design = self.design.reshape(-1, 2, self.theta.size)
        chi2 = chi2_of_records(self.seen[None], design, self.noise, self.keep[None])[0]
        free, _, _ = freed(self.seen, design, self.noise, self.keep)
        return residual_table(
            self.used,
            self.records,
            self.observers,
            self.correction.at.sight,
            self.seen,
            self.seen - free,
            self.noise,
            self.keep,
            chi2,
            self.orbit.epoch_tdb_d,
        )

    @cached_property
    def neighbourhood(self) -> Neighbourhood:
        """Tables for the exact chi2 of many nearby orbits, kept observations only."""
        return Neighbourhood.around(
            self.correction.at.track,
            self.records.subset(self.keep),
            self._kept_noise.factors(),
            self.thrust,
            self.components,
            self.orbit.forces,
            modes=self._kept_noise.mode_rows(),
        )

    @cached_property
    def atlas(self) -> Atlas:
        """The neighbourhood, with others about it where the uncertainty reaches further."""
        return Atlas.around(self.neighbourhood, self.theta_cov)

    @cached_property
    def _kept_noise(self) -> Noise:
        return self.noise.mask(self.keep)

    def chi2_many(self, thetas: ArrayLike) -> Floats:
        """Exact chi2 (m,) of parameter vectors (m, p); inf where an orbit cannot be integrated."""
        return self.atlas.chi2(thetas)

    def _echo_sentence(self) -> str:
        told = self.echo_summary
        parts = []
        if told["n_delay"]:
            parts.append(
                f"{told['n_delay']} delays, rms {told['rms_delay_us']:.3g} microseconds "
                f"({told['chi_delay']:.2f} sigma)"
            )
        if told["n_doppler"]:
            parts.append(
                f"{told['n_doppler']} Doppler shifts, rms {told['rms_doppler_hz']:.3g} Hz "
                f"({told['chi_doppler']:.2f} sigma)"
            )
        return f"radar: {'; '.join(parts) or 'none kept'}; {told['n_rejected']} rejected"

    @property
    def distance_range_au(self) -> tuple[float, float]:
        """Smallest and largest heliocentric distance at the used observations."""
        r = self.residuals["r_au"]
        return float(r.min()), float(r.max())

    def to_dict(self) -> dict[str, Any]:
        """Plain values for the record."""
        return {
            "orbit": self.orbit.to_dict(),
            "components": self.components,
            "names": list(self.names),
            "theta": self.theta.tolist(),
            "theta_cov": self.theta_cov.tolist(),
            "chi2": self.chi2,
            "dof": self.dof,
            "n_obs": self.n_obs,
            "n_rejected": self.n_rejected,
            "rms_arcsec": self.rms_arcsec,
            "weighted_rms_arcsec": self.weighted_rms_arcsec,
            "radar": self.echo_summary,
            "A_au_d2": self.theta[6:].tolist(),
            "A_sigma_au_d2": np.sqrt(np.diag(self.theta_cov)[6:]).tolist(),
            "wald": self.wald,
            "p_value": self.p_value,
            "significance_sigma": self.significance,
            "condition": self.correction.condition,
            "distance_error": self.distance_error,
            "weakness": self.weakness,
            "misfit": self.misfit,
            "catalogue_treatments": self.catalogue_treatments,
            "noise_dof": self.noise_dof,
            "noise_excess": self.noise_excess,
            "station_scales": [scale.to_dict() for scale in self.scales],
            "shared_errors": self.offsets.to_dict("records"),
        }

    def __str__(self) -> str:
        what = f"with {self.components} thrust" if self.components else "gravity only"
        lines = [
            f"Fit {what}: {self.n_obs} observations ({self.n_rejected} rejected), rms "
            f"{self.rms_arcsec:.3f} arcsec, weighted {self.weighted_rms_arcsec:.3f} arcsec, chi2 "
            f"{self.chi2:.2f} for {self.dof} degrees of freedom",
        ]
        if self.echo_summary:
            lines.append("  " + self._echo_sentence())
        for c, a, s in zip(
            self.components, self.theta[6:], np.sqrt(np.diag(self.theta_cov)[6:]), strict=True
        ):
            lines.append(
                f"  A_{c} (A{'RTN'.index(c) + 1}) = {with_error(a, s)} au/d2 ({a / s:+.1f} sigma)"
            )
        lines += [f"  {said}" for said in (self.weakness, self.misfit) if said]
        lines.append(str(self.orbit.elements()))
        return "\n".join(lines)


@on_one_thread
def fit_orbit(
    arc: Arc,
    thrust: Thrust | None = None,
    error_model: ErrorModel | None = None,
    initial: Orbit | Fit | None = None,
    forces: ForceModel | None = None,
    reject: bool = True,
    epoch_tdb_d: float | None = None,
    keep: ArrayLike | None = None,
    progress: Callable[[str], None] | None = None,
    noise: Noise | None = None,
) -> Fit:
    """Fit an orbit to an arc, by gravity alone or with thrust.

    Parameters
    ----------
    arc : Arc
    thrust : Thrust, optional
        Its law, lag and window are taken as they are, its ``components`` are estimated.
    error_model : ErrorModel, optional
    initial : Orbit or Fit, optional
        First guess; found from the angles when absent.
    forces : ForceModel, optional
    reject : bool
        Whether the outlier rule applies.
    epoch_tdb_d : float, optional
        Epoch of the fitted state; the middle of the arc by default.
    keep : (n,) bool, optional
        Observations to start with (with ``reject=False``: the ones to use).
    progress : callable, optional
        Is given a sentence now and then.
    noise : Noise, optional
        Of the used observations, instead of what the error model says; taken as it is.

    Raises
    ------
    FirstOrbitError, FitError, PropagationError
    """
    error_model = error_model or ErrorModel()
    if isinstance(initial, Fit):
        forces = forces or initial.orbit.forces
        keep = initial.keep if keep is None else keep
        initial = initial.orbit
    forces = forces or (initial.forces if initial is not None else ForceModel())
    ephemeris = load_ephemeris()
    used = error_model.corrected(reduce_offsets(error_model.usable(arc), ephemeris).used)
    if len(used) < MIN_OBSERVATIONS:
        aside = arc.told_set_aside()
        raise FitError(
            f"The arc of {arc.name} has {len(used)} usable observations, an orbit needs at least "
            f"{MIN_OBSERVATIONS}{aside}. Add observations{' or mend these' if aside else ''}.",
            arc=arc,
        )
    observers = observer_states(used, ephemeris)
    table = used.table
    records = Records.from_angles(
        observers.tdb_d,
        observers.position_au,
        table["ra_rad"].to_numpy(),
        table["dec_rad"].to_numpy(),
        Echoes.of(used),
    )
    given = noise
    noise = error_model.apply(used) if given is None else given
    components = "" if thrust is None else thrust.components
    mask = np.ones(len(used), dtype=bool) if keep is None else np.asarray(keep, dtype=bool).copy()
    epoch = middle_epoch(records) if epoch_tdb_d is None else float(epoch_tdb_d)
    if initial is None:
        if noise.optical.sum() < MIN_OBSERVATIONS:
            raise FitError(
                f"The arc of {arc.name} has {int(noise.optical.sum())} directions and "
                f"{len(used)} usable observations; radar echoes alone give no first orbit. Give an "
                "initial state or elements, or add directions.",
                arc=arc,
            )
        fallback = thrust if components else Thrust("inverse-square")
        start = find_orbit(records, noise, forces, progress, fallback, components or "RTN")
        theta = at_epoch(start.correction.at.theta, start.epoch_d, epoch, start.thrust, forces)
        mask = mask & start.keep
        guess = thrust
        if components and start.thrust is not None:
            guess = start.thrust
    else:
        theta = at_epoch(initial.state_vector, initial.epoch_tdb_d, epoch, initial.thrust, forces)
        guess = thrust
        if thrust is not None and initial.thrust is not None:
            guess = thrust.with_amounts(initial.thrust.amounts_au_d2)
    free = ["RTN".index(c) for c in components]
    amounts = np.zeros(3) if guess is None else guess.amounts_au_d2
    theta = np.concatenate([theta[:6], amounts[free]])
    found = settle(theta, epoch, records, noise, mask, guess, components, forces, reject)
    scales: tuple[StationScale, ...] = ()
    if given is None:
        # timing errors act along the motion, which is known only now
        sight = found.correction.at.sight
        motion = motion_rad_d(sight, records, observers) / ARCSEC_RAD / 86400.0
        sunward = sunward_per_au(sight, records, epoch)
        stated = error_model.apply(used, motion, sunward)
        found, noise, scales = _settle_with_scales(
            used, error_model, stated, found, records, guess, components, forces, reject
        )
    else:
        stated = noise
    fit = _as_fit(
        arc, used, error_model, noise, stated, records, observers, found, guess, components, forces,
        scales,
    )  # fmt: skip
    if fit.distance_error > HOPELESS_DISTANCE_ERROR:
        raise FitError(
            f"The {fit.n_obs} observations of {arc.name} over {arc.used.span_d:.3g} d do not "
            f"determine {'the orbit and the thrust' if components else 'the orbit'}: the distance "
            f"at the epoch is uncertain by {fit.distance_error:.2g} times itself, so that no limit "
            "on a thrust exists. Add observations over a longer time"
            f"{', or fit fewer thrust components' if components else ''}.",
            fit=fit,
        )
    return fit


def _settle_with_scales(
    used: Arc,
    error_model: ErrorModel,
    table_noise: Noise,
    found: Converged,
    records: Records,
    thrust: Thrust | None,
    components: str,
    forces: ForceModel,
    reject: bool,
) -> tuple[Converged, Noise, tuple[StationScale, ...]]:
    """Settle, and rescale the errors of stations with enough records.

    Outliers are judged by the errors of the table first, and once more after these have been
    replaced by the scatter of the very residuals.
    """
    stations = used.table["stn"].to_numpy(dtype=object)
    allowed = error_model.rescalable(table_noise)
    noise = table_noise
    scales: tuple[StationScale, ...] = ()
    for turn in range(3):
        found = settle(
            found.correction.at.theta, found.epoch_d, records, noise, found.keep, thrust,
            components, forces, reject and turn < 2,
        )  # fmt: skip
        at = found.correction.at
        if turn == 2 or not allowed.any():
            break
        noise, scales = rescaled(
            at.seen, at.design, table_noise, found.keep, stations, allowed,
            error_model.rescale_least,
        )  # fmt: skip
        if not scales:
            break
    return found, noise, scales


def _as_fit(
    arc: Arc,
    used: Arc,
    error_model: ErrorModel,
    noise: Noise,
    stated_noise: Noise,
    records: Records,
    observers: Observers,
    found: Converged,
    thrust: Thrust | None,
    components: str,
    forces: ForceModel,
    scales: tuple[StationScale, ...],
) -> Fit:
    at = found.correction.at
    orbit = Orbit(
        found.epoch_d, at.theta[:6].copy(), thrust_of(at.theta, thrust, components), forces
    )
    return Fit(
        arc=arc,
        used=used,
        error_model=error_model,
        noise=noise,
        stated_noise=stated_noise,
        orbit=orbit,
        components=components,
        names=parameter_names(components),
        theta=at.theta,
        theta_cov=found.correction.cov,
        normal=found.correction.normal,
        chi2=at.chi2,
        keep=found.keep,
        design=at.design.reshape(-1, at.theta.size),
        seen=at.seen,
        records=records,
        observers=observers,
        correction=found.correction,
        rounds=found.rounds,
        scales=scales,
    )


@dataclass(frozen=True)
class Comparison:
    """Two fits of the same observations, one with more parameters.

    Attributes
    ----------
    delta_chi2 : float
        How much the richer fit lowers chi2.
    delta_dof : int
    p_value : float
        Probability of at least this much under the simpler hypothesis: chi2 with delta_dof, or the
        law of F where the errors rest on few degrees of freedom.
    delta_bic : float
        BIC of the simpler less that of the richer: above 0 favours the richer
        (G. Schwarz 1978, Ann. Statist. 6, 461).
    n_obs : int
        Observations both were fitted to for this comparison.
    refitted : bool
        Whether outlier rule or station scales had come out differently, so that both were fitted
        anew to common observations with common errors.
    noise_dof : int or None
        Degrees of freedom the errors rest on, where they are few.
    """

    delta_chi2: float
    delta_dof: int
    p_value: float
    delta_bic: float
    n_obs: int
    refitted: bool
    noise_dof: int | None = None

    @property
    def sigma(self) -> float:
        """The p-value as two-sided Gaussian sigma."""
        return significance_sigma(max(self.delta_chi2, 0.0), self.delta_dof, self.noise_dof)

    def to_dict(self) -> dict[str, Any]:
        """Plain values."""
        return {
            "delta_chi2": self.delta_chi2,
            "delta_dof": self.delta_dof,
            "p_value": self.p_value,
            "significance_sigma": self.sigma,
            "delta_bic": self.delta_bic,
            "n_obs": self.n_obs,
            "refitted": self.refitted,
            "noise_dof": self.noise_dof,
        }

    def __str__(self) -> str:
        favoured = "thrust" if self.delta_bic > 0 else "gravity alone"
        return (
            f"Thrust lowers chi2 by {self.delta_chi2:.2f} for {self.delta_dof} parameters "
            f"(p = {self.p_value:.2g}, {self.sigma:.1f} sigma); the BIC favours {favoured} by "
            f"{abs(self.delta_bic):.1f}, over {self.n_obs} observations."
        )


def compare_fits(null: Fit, push: Fit) -> Comparison:
    """Compare a fit with another that has more thrust components.

    Where the outlier rule kept different observations, both are fitted anew to all that either
    kept: what one of the two orbits explains is no outlier, and a gravity-only fit must not win by
    having thrown out the records that speak against it.

    Raises
    ------
    FitError
        If the fits are of different arcs, or the second has no more parameters than the first.
    """
    if len(null.used) != len(push.used) or not (
        np.array_equal(null.records.tdb_d, push.records.tdb_d)
        and np.array_equal(null.records.basis, push.records.basis)
    ):
        raise FitError(
            "The two fits are of different arcs and cannot be compared; fit the same arc twice."
        )
    extra = push.theta.size - null.theta.size
    if extra <= 0:
        raise FitError(
            f"The second fit must have more parameters than the first; it has {push.theta.size} "
            f"and the first {null.theta.size}. Swap them?"
        )
    noise_dof = push.noise_dof
    refitted = not np.array_equal(null.keep, push.keep) or null.scales != push.scales
    if refitted:
        either = null.keep | push.keep
        null, push = (
            fit_orbit(
                f.arc,
                f.thrust,
                f.error_model,
                initial=f.orbit,
                forces=f.orbit.forces,
                reject=False,
                epoch_tdb_d=f.orbit.epoch_tdb_d,
                keep=either,
                noise=push.noise,
            )
            for f in (null, push)
        )
    delta = null.chi2 - push.chi2
    return Comparison(
        delta,
        extra,
        tail_probability(delta, extra, noise_dof),
        float(delta - extra * math.log(push.n_numbers)),
        push.n_obs,
        refitted,
        noise_dof,
    )
