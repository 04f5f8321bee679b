"""The posterior of orbit and thrust, by emcee on the exact model; may import errors, this room.

Sampler: D. Foreman-Mackey et al. 2013, PASP 125, 306. Walkers live in coordinates u = (v, w): v is
the orbit about its best value at the walker's own thrust, in units of its conditional sigma; w is
the thrust in the coordinates in which its prior is flat. In u the target is the likelihood alone,
and near enough round. The best orbit at a thrust is that of linear theory and a quadratic form of
the thrust, taken by differences of the exact chi2: a short arc bends there by many conditional
sigmas. Both shift the orbit by a function of the thrust alone, which leaves volumes as they are.

Moves, mixed:
- an independence move (W. K. Hastings 1970, Biometrika 57, 97) that proposes from the
  linear-theory posterior, one part of five from a wider one; on an arc that is nearly linear it
  makes nearly independent draws;
- differential evolution (B. Nelson, E. B. Ford & M. J. Payne 2014, ApJS 210, 11), which adapts to
  whatever shape the exact posterior has.
A pilot of independence moves, never kept, decides how often each is used. The chain runs until it
is 50 autocorrelation times long in every quantity, split R-hat is below 1.01 and the effective
samples asked for are there; or until ``max_steps``, and then says so.
"""

import os
from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, Literal

import emcee
import numpy as np
import pandas as pd
from astropy import units as u

from ngbound.blas import on_one_thread
from ngbound.errors import LimitError, SamplingError
from ngbound.limits.checkpoint import load_whole, mark_of, save_whole
from ngbound.limits.convergence import autocorrelation_time, split_r_hat
from ngbound.limits.fit_protocol import ThrustFit
from ngbound.limits.information import AU_D2, ThrustInformation, thrust_information
from ngbound.limits.likelihood import Deviance, about_its_mode, deviance_of
from ngbound.limits.linear_posterior import (
    LinearPosterior,
    linear_posterior,
    log_sum_exp,
    student_width,
)
from ngbound.limits.priors import ThrustPrior, thrust_prior

try:
    import arviz
except ImportError:
    arviz = None

LENGTH_IN_TAU = 50.0
R_HAT_LIMIT = 1.01
PILOT_STEPS = 12
BURN_SHARE = 0.1
INFLATIONS = (1.0, 1.5)
INFLATION_SHARES = (0.8, 0.2)
BEND_STEP_SIGMA = 2.0
"""Step of the differences that give the bend of the orbit with the thrust."""
BEND_REACH_SIGMA = 6.0
"""Thrusts further out than this bend the orbit less than in proportion to their square."""
CHUNK_STEPS = 50
CHUNK_SHARE = 0.1

Progress = Callable[[int, int, str], None]


@dataclass(frozen=True)
class Posterior:
    """Samples of the posterior, kept part of the chain only.

    Rows are in the order of the chain: all walkers of one step, then of the next.

    Attributes
    ----------
    names : tuple of str
        The p parameters.
    components : str
        Letters of the thrust components.
    samples : (n, p) float
        au, au/d, au/d2.
    A_samples : (n, k) float
        Thrust, au/d2.
    log_likelihood : (n,) float
        Relative to the least-squares point.
    noise_scale : (n,) float or None
        Samples of the noise scale, if it was free or the errors rest on few degrees of freedom
        (``information.noise_dof``).
    prior : ThrustPrior
    information : ThrustInformation
        Linear theory about the least-squares point.
    n_steps, n_walkers, n_burn : int
        Kept steps, walkers, steps thrown away.
    tau : dict
        Integrated autocorrelation time in steps, of each parameter, of "|A|" (and of each thrust
        component).
    ess : dict
        Effective number of samples, likewise.
    r_hat : dict
        Split R-hat, likewise.
    acceptance : float
        Of all moves.
    acceptance_independence : float
        Of the pilot, which only makes proposals from linear theory: near 1 if the arc is nearly
        linear.
    evaluations : int
        Number of parameter vectors the exact model was computed for.
    converged : bool
    message : str
        One sentence on convergence.
    seed : int
    likelihood : str
        "gaussian", "student" or "contaminated".
    """

    names: tuple[str, ...]
    components: str
    samples: np.ndarray
    A_samples: np.ndarray
    log_likelihood: np.ndarray
    noise_scale: np.ndarray | None
    prior: ThrustPrior
    information: ThrustInformation
    n_steps: int
    n_walkers: int
    n_burn: int
    tau: dict[str, float]
    ess: dict[str, float]
    r_hat: dict[str, float]
    acceptance: float
    acceptance_independence: float
    evaluations: int
    converged: bool
    message: str
    seed: int
    likelihood: str = "gaussian"

    @property
    def A(self) -> u.Quantity:
        """Thrust (n, k)."""
        return self.A_samples * AU_D2

    @property
    def A_mag(self) -> u.Quantity:
        """Size of the thrust (n,)."""
        return np.linalg.norm(self.A_samples, axis=1) * AU_D2

    def chain(self, values: np.ndarray) -> np.ndarray:
        """Reshape values (n, ...) to (n_steps, n_walkers, ...)."""
        return values.reshape(self.n_steps, self.n_walkers, *values.shape[1:])

    def thinned(self, step: int) -> "Posterior":
        """Every ``step``-th step of the chain; the diagnostics remain those of the whole chain."""
        if step < 1 or step > self.n_steps:
            raise LimitError(
                f"A chain of {self.n_steps} steps can be thinned by 1 to {self.n_steps}; {step!r} "
                "was given."
            )
        keep = self.chain(np.arange(len(self.samples)))[::step].ravel()
        return replace(
            self,
            samples=self.samples[keep],
            A_samples=self.A_samples[keep],
            log_likelihood=self.log_likelihood[keep],
            noise_scale=None if self.noise_scale is None else self.noise_scale[keep],
            n_steps=len(keep) // self.n_walkers,
        )

    def summary(self) -> pd.DataFrame:
        """Median, sigma, 2.5 and 97.5 % quantiles, tau, ess and R-hat of each parameter and of
        |A|.
        """
        columns = {name: self.samples[:, i] for i, name in enumerate(self.names)}
        columns["|A|"] = self.A_mag.value
        if self.noise_scale is not None:
            columns["noise scale"] = self.noise_scale
        rows = []
        for name, values in columns.items():
            low, median, high = np.quantile(values, [0.025, 0.5, 0.975])
            rows.append(
                {
                    "parameter": name,
                    "median": median,
                    "sigma": np.std(values, ddof=1),
                    "low_2.5": low,
                    "high_97.5": high,
                    "tau": self.tau.get(name, np.nan),
                    "ess": self.ess.get(name, np.nan),
                    "r_hat": self.r_hat.get(name, np.nan),
                }
            )
        return pd.DataFrame(rows).set_index("parameter")

    def __str__(self) -> str:
        table = self.summary().to_string(float_format=lambda value: f"{value:.10g}")
        return f"Posterior under the prior {self.prior}\n{self.message}\n{table}"

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record, without the samples."""
        return {
            "prior": self.prior.to_dict(),
            "components": self.components,
            "likelihood": self.likelihood,
            "seed": self.seed,
            "n_steps": self.n_steps,
            "n_walkers": self.n_walkers,
            "n_burn": self.n_burn,
            "acceptance": self.acceptance,
            "acceptance_independence": self.acceptance_independence,
            "evaluations": self.evaluations,
            "converged": self.converged,
            "message": self.message,
            "noise_scale_free": self.noise_scale is not None,
            "summary": {
                str(name): {
                    str(key): float(value) if np.isfinite(value) else None
                    for key, value in row.items()
                }
                for name, row in self.summary().to_dict(orient="index").items()
            },
        }

    def to_arviz(self) -> Any:
        """The samples for ArviZ: an InferenceData (ArviZ 0.x) or a DataTree (1.x); one chain for
        each walker.

        Raises
        ------
        SamplingError
            If ArviZ is not installed.
        """
        if arviz is None:
            raise SamplingError(
                "ArviZ is not installed, so the samples cannot be handed over to it; install the "
                "extra with "
                "pip install 'ngbound[arviz]'."
            )
        by_walker = {
            name: self.chain(self.samples[:, i]).T.copy() for i, name in enumerate(self.names)
        }
        by_walker["A_mag"] = self.chain(self.A_mag.value).T.copy()
        if self.noise_scale is not None:
            by_walker["noise_scale"] = self.chain(self.noise_scale).T.copy()
        stats = {"lp": self.chain(self.log_likelihood).T.copy()}
        if int(str(arviz.__version__).split(".")[0]) >= 1:
            return arviz.from_dict({"posterior": by_walker, "sample_stats": stats})
        return arviz.from_dict(posterior=by_walker, sample_stats=stats)

    def to_netcdf(self, path: str | Path) -> Path:
        """Write the samples as netCDF, as ArviZ stores them; the file is never seen half-written.

        Raises
        ------
        SamplingError
            If ArviZ, or a package that writes netCDF for it, is not installed.
        """
        target = Path(path)
        groups = self.to_arviz()
        beside = target.with_name(f".{target.name}.part")
        try:
            groups.to_netcdf(str(beside))
            os.replace(beside, target)
        except (ImportError, ValueError) as fault:
            raise SamplingError(
                f"The samples cannot be written as netCDF ({fault}); install a writer with pip "
                "install h5netcdf.",
                path=str(target),
            ) from fault
        finally:
            beside.unlink(missing_ok=True)
        return target


class _Target:
    """Likelihood in the coordinates u in which the prior is flat."""

    def __init__(
        self,
        fit: ThrustFit,
        information: ThrustInformation,
        prior: ThrustPrior,
        noise_free: bool,
        likelihood: str,
        deviance: Deviance,
    ) -> None:
        self.fit, self.information, self.prior = fit, information, prior
        self.likelihood, self.deviance = likelihood, deviance
        if noise_free and likelihood != "gaussian":
            raise LimitError(
                f"A free noise scale needs the gaussian likelihood; {likelihood} has its own "
                "tails. Hold the noise scale, or take the gaussian likelihood.",
                likelihood=likelihood,
            )
        self.k = information.k
        self.p = len(fit.names)
        self.thrust = np.arange(fit.n_state, fit.n_state + self.k)
        self.others = np.setdiff1d(np.arange(self.p), self.thrust)
        self.theta_hat = np.asarray(fit.theta, dtype=float)
        noise_dof = information.noise_dof
        self.noise_free = noise_free or noise_dof is not None
        self.n_residuals = int(fit.dof if noise_dof is None else noise_dof) + self.p
        self.evaluations = 1
        self.chi2_hat = float(np.asarray(self.deviance(self.theta_hat[None, :]))[0])
        if not np.isfinite(self.chi2_hat) or (noise_free and self.chi2_hat <= 0.0):
            raise SamplingError(
                f"The exact model gives chi2 = {self.chi2_hat!r} at the least-squares solution "
                "itself, so there is "
                "nothing to sample about; fit the arc again.",
                theta=self.theta_hat,
            )
        # errors that were estimated have their scale about 1, else it is that of the residuals
        self.rest = self.chi2_hat if noise_dof is None else float(noise_dof)
        self.bend = np.zeros((self.k, self.k, self.p - self.k))
        self.bend = self._bend()

    def _bend(self) -> np.ndarray:
        """The quadratic form (k, k, p - k) of the thrust, in sigmas along the eigenvectors of its
        information, by which v moves.

        Along v chi2 is a parabola of unit width, so that its minimum is minus a quarter of the
        difference of chi2 at v = +1 and -1; the mean of it at two opposite thrusts is quadratic.
        """
        k, n = self.k, self.p - self.k
        i, j = np.triu_indices(k)
        ends = (np.eye(k)[i] + np.eye(k)[j]) / np.where(i == j, 2.0, np.sqrt(2.0))[:, None]
        sides = BEND_STEP_SIGMA * np.concatenate([ends, -ends])
        root = self.information.eigenvectors / np.sqrt(self.information.eigenvalues)
        A = np.repeat(self.information.A_hat + sides @ root.T, 2 * n, axis=0)
        v = np.tile(np.concatenate([np.eye(n), -np.eye(n)]), (len(sides), 1))
        chi2 = np.asarray(self.deviance(self._theta(v, A)), dtype=float).reshape(2, -1, 2, n)
        if not np.all(np.isfinite(chi2)):
            return np.zeros((k, k, n))
        form = -0.125 * np.sum(chi2[:, :, 0] - chi2[:, :, 1], axis=0) / BEND_STEP_SIGMA**2
        bend = np.zeros((k, k, n))
        alone = i == j
        bend[i[alone], j[alone]] = form[alone]
        own = np.einsum("iin->in", bend)
        mixed = form - 0.5 * (own[i] + own[j])
        bend[i[~alone], j[~alone]] = bend[j[~alone], i[~alone]] = mixed[~alone]
        return bend

    def split(self, coords: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """v (m, p - k) and A (m, k) of u (m, p)."""
        n = self.p - self.k
        return coords[:, :n], self.prior.from_flat(coords[:, n:])

    def join(self, v: np.ndarray, A: np.ndarray) -> np.ndarray:
        """u (m, p) of v and A."""
        return np.hstack([v, self.prior.to_flat(A)])

    def theta(self, coords: np.ndarray) -> np.ndarray:
        """Parameters (m, p) of u."""
        return self._theta(*self.split(coords))

    def _theta(self, v: np.ndarray, A: np.ndarray) -> np.ndarray:
        theta = np.empty((len(A), self.p))
        info = self.information
        orbit, off = info.orbit, A - info.A_hat
        a = off @ (info.eigenvectors * np.sqrt(info.eigenvalues))
        less = np.hypot(1.0, np.sum(a * a, axis=1, keepdims=True) / BEND_REACH_SIGMA**2)
        v = v + np.einsum("mi,mj,ijn->mn", a, a, self.bend) / less
        theta[:, self.thrust] = A
        theta[:, self.others] = (
            self.theta_hat[self.others] + off @ orbit.gain.T + v @ orbit.spread.T
        )
        return theta

    def log_prob(self, coords: np.ndarray) -> np.ndarray:
        """Log posterior density (m,) in u, relative to the least-squares point."""
        _, A = self.split(coords)
        inside = self.prior.inside(A)
        value = np.full(len(coords), -np.inf)
        if np.any(inside):
            chi2 = np.asarray(self.deviance(self.theta(coords[inside])), dtype=float)
            self.evaluations += len(chi2)
            # an orbit that cannot be computed explains nothing
            chi2 = np.where(np.isfinite(chi2), chi2, np.inf)
            value[inside] = self.log_likelihood_of(chi2)
        return value

    def log_likelihood_of(self, chi2: np.ndarray) -> np.ndarray:
        """Log likelihood; with a free noise scale and the prior ds / s, that scale integrated
        out.
        """
        if self.noise_free:
            return -0.5 * self.n_residuals * np.log1p((chi2 - self.chi2_hat) / self.rest)
        return -0.5 * (chi2 - self.chi2_hat)

    def square_about(self, log_likelihood: np.ndarray) -> np.ndarray:
        """With a free noise scale, the sum of squares that the scale has to account for."""
        return self.rest * np.exp(-2.0 * log_likelihood / self.n_residuals)


class _IndependenceProposal:
    """Proposes from the linear-theory posterior, whatever the walker's place."""

    def __init__(self, target: _Target, noise: float) -> None:
        self.target = target
        self.inflations = noise * np.asarray(INFLATIONS)
        self.parts: list[LinearPosterior] = [
            linear_posterior(target.information, target.prior, float(f)) for f in self.inflations
        ]

    def draw(self, random: "np.random.RandomState | np.random.Generator", m: int) -> np.ndarray:
        which = random.choice(len(self.parts), size=m, p=np.asarray(INFLATION_SHARES))
        v = random.standard_normal(size=(m, self.target.p - self.target.k))
        v = v * self.inflations[which][:, None]
        A = np.empty((m, self.target.k))
        for i, part in enumerate(self.parts):
            rows = np.flatnonzero(which == i)
            if len(rows):
                A[rows] = part.draw(random, len(rows))
        return self.target.join(v, A)

    def log_density(self, coords: np.ndarray) -> np.ndarray:
        """Log density (m,) of the proposal in u, up to a constant; -inf where the prior is zero."""
        v, A = self.target.split(coords)
        square, n = np.sum(v * v, axis=1), v.shape[1]
        terms = [
            np.log(share) + part.log_density(A) - 0.5 * square / f**2 - n * np.log(f)
            for share, part, f in zip(INFLATION_SHARES, self.parts, self.inflations, strict=True)
        ]
        prior = self.target.prior.log_density(A)
        inside = np.isfinite(prior)
        # the prior is flat in u, so that dA / dw is one over its density
        return np.where(
            inside, log_sum_exp(np.stack(terms, axis=1)) - np.where(inside, prior, 0.0), -np.inf
        )

    def __call__(
        self, coords: np.ndarray, random: np.random.RandomState
    ) -> tuple[np.ndarray, np.ndarray]:
        """A proposal for every walker and the Hastings factor, as emcee's MHMove wants them."""
        new = self.draw(random, len(coords))
        density = self.log_density(new)
        factor = self.log_density(coords) - np.where(np.isfinite(density), density, 0.0)
        return new, np.where(np.isfinite(density), factor, -np.inf)


@dataclass
class _Run:
    """What a chain needs to go on exactly as if it had never stopped."""

    chain: np.ndarray
    log_prob: np.ndarray
    moved: int
    pilot_moved: int
    evaluations: int
    share: float
    goal: int
    random_state: tuple[Any, ...]
    start: np.ndarray
    start_log_prob: np.ndarray


@on_one_thread
def sample_posterior(
    fit: ThrustFit,
    *,
    seed: int,
    prior: str = "isotropic-uniform",
    n_walkers: int | None = None,
    max_steps: int = 5000,
    noise_scale: bool = False,
    noise_dof: int | None | Literal["fit"] = "fit",
    likelihood: str = "gaussian",
    target_ess: float = 5000.0,
    lower_au_d2: float | None = None,
    upper_au_d2: float | None = None,
    progress: Progress | None = None,
    checkpoint: str | Path | None = None,
) -> Posterior:
    """Sample orbit and thrust of ``fit`` from its exact likelihood.

    Parameters
    ----------
    fit : ThrustFit
        A fit with thrust components.
    seed : int
        The same seed gives the same numbers.
    prior : str
        "isotropic-uniform", "flat-components", "outward-radial" or "log-uniform"; flat in the
        orbit.
    n_walkers : int, optional
        Even, at least twice the number of parameters; default the larger of 64 and four times that
        number.
    max_steps : int
        The chain ends there even if it has not converged, and says so.
    noise_scale : bool
        Leave a common factor on the noise free, with prior ds / s; it is integrated out
        analytically.
    noise_dof : int or None, or "fit"
        Degrees of freedom that the errors rest on: their scale then is as free as that, and the
        likelihood that of Student. "fit": what the fit says of its own errors. None: known errors.
        Without effect on a likelihood with tails of its own or where ``noise_scale`` is set.
    likelihood : str
        "gaussian", "student" or "contaminated"; see `ngbound.limits.likelihood`.
    target_ess : float
        Effective samples wanted of each thrust component and of |A|.
    lower_au_d2, upper_au_d2 : float, optional
        Edges of the prior in |A|; see ``thrust_prior``.
    progress : callable(step, total, message), optional
    checkpoint : path, optional
        The chain is written there as it grows (always a whole file); a run that finds the file of
        the same problem goes on from it and ends with the same numbers as one that was never
        interrupted.

    Raises
    ------
    LimitError
        If the fit has no thrust, cannot separate it, or a choice is out of its range.
    SamplingError
        If the exact model fails about the solution, or the checkpoint belongs to another problem.
    """
    deviance = deviance_of(fit, likelihood)
    fit = about_its_mode(fit, likelihood)
    information = thrust_information(fit)
    if noise_scale or likelihood != "gaussian":
        noise_dof = None
    if noise_dof != "fit":
        information = replace(information, noise_dof=noise_dof)
    belief = thrust_prior(information, prior, lower_au_d2=lower_au_d2, upper_au_d2=upper_au_d2)
    target = _Target(fit, information, belief, noise_scale, likelihood, deviance)
    walkers = max(64, 4 * target.p) if n_walkers is None else n_walkers
    if walkers % 2 or walkers < 2 * target.p:
        raise LimitError(
            f"The number of walkers must be even and at least {2 * target.p} for {target.p} "
            "parameters; "
            f"{walkers!r} was given.",
            n_walkers=walkers,
        )
    if max_steps < 2 * PILOT_STEPS:
        raise LimitError(f"max_steps must be at least {2 * PILOT_STEPS}; {max_steps!r} was given.")
    noise = float(np.sqrt(target.chi2_hat / max(1, fit.dof))) if noise_scale else 1.0
    noise *= student_width(information.noise_dof)
    proposal = _IndependenceProposal(target, noise)
    start_seed, chain_seed, noise_seed = np.random.SeedSequence(seed).spawn(3)
    mark = _fingerprint(target, seed, walkers)
    path = None if checkpoint is None else Path(checkpoint)

    run = _load(path, mark) if path is not None and path.exists() else None
    if run is None:
        run = _start(target, proposal, walkers, start_seed, chain_seed)
    else:
        target.evaluations = run.evaluations
    while True:
        while len(run.chain) < run.goal:
            # ever longer, so that writing the whole chain each time costs little
            chunk = max(CHUNK_STEPS, int(CHUNK_SHARE * len(run.chain)))
            steps = min(chunk, run.goal - len(run.chain))
            _advance(target, proposal, run, steps, walkers)
            if path is not None:
                _save(path, run, mark)
            if progress is not None:
                progress(len(run.chain), run.goal, "sampling")
        done = len(run.chain)
        state = _diagnose(target, run)
        finished = _converged(state, walkers, target_ess)
        if progress is not None:
            progress(done, done, _progress_text(state))
        if finished or done >= max_steps:
            break
        more = _steps_needed(state, walkers, target_ess) - done
        run.goal = min(max_steps, done + int(np.clip(more, 10, max(60, done // 2))))

    return _posterior(
        target, run, state, finished, walkers, seed, noise_seed, target_ess, max_steps
    )


@dataclass(frozen=True)
class _State:
    n_burn: int
    labels: list[str]
    tau: np.ndarray
    r_hat: np.ndarray
    kept: int
    thrust_labels: list[str]


def _diagnose(target: _Target, run: _Run) -> _State:
    n = len(run.chain)
    n_burn = min(n - 2, max(PILOT_STEPS, int(BURN_SHARE * n))) if n > PILOT_STEPS else n // 2
    kept = run.chain[n_burn:]
    theta = target.theta(kept.reshape(-1, target.p))
    size = np.linalg.norm(theta[:, target.thrust], axis=1)
    # deviations from the solution keep their digits; tau and R-hat do not mind the scale
    values = np.hstack([theta - target.theta_hat, size[:, None]]).reshape(*kept.shape[:2], -1)
    values = values / np.maximum(np.std(values, axis=(0, 1)), np.finfo(float).tiny)
    names = [str(name) for name in target.fit.names]
    return _State(
        n_burn=n_burn,
        labels=[*names, "|A|"],
        tau=autocorrelation_time(values),
        r_hat=split_r_hat(values),
        kept=len(kept),
        thrust_labels=[*[names[i] for i in target.thrust], "|A|"],
    )


def _thrust_tau(state: _State) -> float:
    return float(max(state.tau[state.labels.index(name)] for name in state.thrust_labels))


def _steps_needed(state: _State, walkers: int, target_ess: float) -> int:
    tau = float(np.max(state.tau))
    if not np.isfinite(tau):
        return 10**9
    kept = max(LENGTH_IN_TAU * tau, target_ess * _thrust_tau(state) / walkers) * 1.05
    return int(np.ceil(max(kept + PILOT_STEPS, kept / (1.0 - BURN_SHARE))))


def _converged(state: _State, walkers: int, target_ess: float) -> bool:
    return bool(
        state.kept >= LENGTH_IN_TAU * np.max(state.tau)
        and state.kept * walkers >= target_ess * _thrust_tau(state)
        and np.max(state.r_hat) < R_HAT_LIMIT
    )


def _progress_text(state: _State) -> str:
    return (
        f"sampling: autocorrelation time {np.max(state.tau):.1f} steps, "
        f"R-hat {np.max(state.r_hat):.3f}"
    )


def _start(
    target: _Target,
    proposal: _IndependenceProposal,
    walkers: int,
    start_seed: np.random.SeedSequence,
    chain_seed: np.random.SeedSequence,
) -> _Run:
    """Walkers drawn from linear theory, only where the exact model can be computed."""
    random = np.random.default_rng(start_seed)
    coords, log_prob = np.empty((0, target.p)), np.empty(0)
    for _ in range(30):
        drawn = proposal.draw(random, walkers)
        value = target.log_prob(drawn)
        good = np.isfinite(value)
        coords = np.vstack([coords, drawn[good]])[:walkers]
        log_prob = np.append(log_prob, value[good])[:walkers]
        if len(coords) == walkers:
            bits = np.random.MT19937(chain_seed).state["state"]
            return _Run(
                chain=coords[None, :, :][:0],
                log_prob=log_prob[None, :][:0],
                moved=0,
                pilot_moved=0,
                evaluations=target.evaluations,
                share=1.0,
                goal=PILOT_STEPS,
                random_state=("MT19937", bits["key"], int(bits["pos"]), 0, 0.0),
                start=coords,
                start_log_prob=log_prob,
            )
    raise SamplingError(
        f"Of {30 * walkers} orbits drawn within the uncertainty of the solution only "
        f"{len(coords)} could be computed "
        f"inside the prior {target.prior}; the arc is too short for its thrust to be bounded this "
        "way. Use fewer "
        "thrust components, a wider prior or a longer arc.",
        n_good=len(coords),
    )


def _advance(
    target: _Target, proposal: _IndependenceProposal, run: _Run, steps: int, walkers: int
) -> None:
    """Make ``steps`` more steps, in place."""
    if len(run.chain) == 0:
        coords, log_prob = run.start, run.start_log_prob
    else:
        coords, log_prob = run.chain[-1], run.log_prob[-1]
    pilot = len(run.chain) < PILOT_STEPS
    independence = emcee.moves.MHMove(proposal)
    moves = [(independence, 1.0)]
    if not pilot:
        evolution = emcee.moves.DEMove(sigma=1e-2)
        leap = emcee.moves.DEMove(sigma=1e-2, gamma0=1.0)
        rest = 1.0 - run.share
        moves = [(independence, run.share), (evolution, 0.8 * rest), (leap, 0.2 * rest)]
    sampler = emcee.EnsembleSampler(walkers, target.p, target.log_prob, moves=moves, vectorize=True)
    state = emcee.State(coords, log_prob=log_prob, random_state=run.random_state)
    grown, values = np.empty((steps, walkers, target.p)), np.empty((steps, walkers))
    previous = coords
    for i, now in enumerate(
        sampler.sample(state, iterations=steps, store=False, skip_initial_state_check=True)
    ):
        grown[i], values[i] = now.coords, now.log_prob
        moved = int(np.sum(np.any(grown[i] != previous, axis=1)))
        run.moved += moved
        run.pilot_moved += moved if pilot else 0
        previous = grown[i]
    run.chain = np.concatenate([run.chain, grown])
    run.log_prob = np.concatenate([run.log_prob, values])
    run.random_state = sampler.random_state
    run.evaluations = target.evaluations
    if pilot:
        accepted = run.pilot_moved / (PILOT_STEPS * walkers)
        run.share = 0.9 if accepted > 0.3 else 0.5 if accepted > 0.05 else 0.15


def _posterior(
    target: _Target,
    run: _Run,
    state: _State,
    converged: bool,
    walkers: int,
    seed: int,
    noise_seed: np.random.SeedSequence,
    target_ess: float,
    max_steps: int,
) -> Posterior:
    kept = run.chain[state.n_burn :].reshape(-1, target.p)
    log_likelihood = run.log_prob[state.n_burn :].ravel()
    theta = target.theta(kept)
    scale = None
    if target.noise_free:
        draws = np.random.default_rng(noise_seed).chisquare(target.n_residuals, size=len(theta))
        scale = np.sqrt(target.square_about(log_likelihood) / draws)
    count = state.kept * walkers
    tau_max, least = float(np.max(state.tau)), count / _thrust_tau(state)
    facts = (
        f"{state.kept} steps of {walkers} walkers, {state.kept / tau_max:.0f} times the longest "
        "autocorrelation time "
        f"({tau_max:.1f} steps), at least {least:.0f} effective samples of the thrust, R-hat up to "
        f"{np.max(state.r_hat):.4f}"
    )
    if converged:
        message = f"The chain has converged: {facts}."
    else:
        message = (
            f"The chain has NOT converged within {max_steps} steps: {facts}; {LENGTH_IN_TAU:.0f} "
            "autocorrelation "
            f"times, {target_ess:.0f} effective samples and R-hat below {R_HAT_LIMIT} are wanted. "
            "Allow more steps, "
            "and do not quote its limits."
        )
    return Posterior(
        names=tuple(str(name) for name in target.fit.names),
        components=target.information.components,
        samples=theta,
        A_samples=theta[:, target.thrust].copy(),
        log_likelihood=log_likelihood,
        noise_scale=scale,
        prior=target.prior,
        information=target.information,
        n_steps=state.kept,
        n_walkers=walkers,
        n_burn=state.n_burn,
        tau=dict(zip(state.labels, map(float, state.tau), strict=True)),
        ess=dict(zip(state.labels, (float(count / t) for t in state.tau), strict=True)),
        r_hat=dict(zip(state.labels, map(float, state.r_hat), strict=True)),
        acceptance=run.moved / (len(run.chain) * walkers),
        acceptance_independence=run.pilot_moved / (PILOT_STEPS * walkers),
        evaluations=run.evaluations,
        converged=converged,
        message=message,
        seed=seed,
        likelihood=target.likelihood,
    )


def _fingerprint(target: _Target, seed: int, walkers: int) -> str:
    return mark_of(
        [target.theta_hat, target.fit.normal, target.bend],
        [
            target.chi2_hat,
            target.n_residuals,
            target.prior.to_dict(),
            target.noise_free,
            target.likelihood,
            seed,
            walkers,
        ],
    )


_STORED = ("chain", "log_prob", "counts", "share", "goal", "key", "position", "cached")


def _save(path: Path, run: _Run, mark: str) -> None:
    _, key, pos, has_gauss, cached = run.random_state
    counts = np.array([run.moved, run.pilot_moved, run.evaluations], dtype=np.int64)
    arrays = {
        "chain": run.chain,
        "log_prob": run.log_prob,
        "counts": counts,
        "share": np.array(run.share),
        "goal": np.array(run.goal),
        "key": key,
        "position": np.array([pos, has_gauss], dtype=np.int64),
        "cached": np.array(cached),
    }
    save_whole(path, mark, arrays)


def _load(path: Path, mark: str) -> _Run:
    data = load_whole(path, mark, "a chain", _STORED)
    return _Run(
        chain=data["chain"],
        log_prob=data["log_prob"],
        moved=int(data["counts"][0]),
        pilot_moved=int(data["counts"][1]),
        evaluations=int(data["counts"][2]),
        share=float(data["share"]),
        goal=int(data["goal"]),
        random_state=(
            "MT19937",
            data["key"],
            int(data["position"][0]),
            int(data["position"][1]),
            float(data["cached"]),
        ),
        start=data["chain"][0],
        start_log_prob=data["log_prob"][0],
    )
