"""Which thrust law does the arc prefer, and can it tell at all? May import arc, errors, fit, motion
and this room.

All laws are fitted to the same records, those that the outlier rule keeps with gravity alone or
with any of them, under the same errors: where a fit takes them from the scatter of its residuals,
those of the law that leaves least scatter. Each fit under its own would have a chi2 of about one a
degree of freedom, whatever it explains. BIC and evidence take these errors as known.

BIC: G. Schwarz 1978, Ann. Statist. 6, 461. Evidence: the integral of exact likelihood times prior
by importance sampling from linear theory, orbit flat, thrust isotropic in direction and uniform in
|A| (at the distance where the law is 1) up to one edge common to all laws; the edge is part of the
answer, an edge twice as far takes ln 2 off the evidence of every thrust.

Two laws differ on the sky by the separation D = |(1 - P_j) W_i A|, in sigma: the whitened
displacement by law i's thrust that no orbit and thrust of law j imitates (P_j projects on the
whitened design of j). Two hypotheses D apart are confused with probability Phi(-D / 2); the arc is
said to tell them apart where that is below 5 %, D > 3.29.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from scipy.special import gammaln

from ngbound.arc import Arc, ErrorModel
from ngbound.errors import LimitError
from ngbound.fit import Fit, fit_orbit, significance_sigma
from ngbound.limits.information import thrust_information
from ngbound.limits.linear_posterior import linear_posterior, log_sum_exp
from ngbound.limits.priors import thrust_prior
from ngbound.limits.threshold import noncentrality
from ngbound.motion import ForceModel, Orbit, Thrust

TOLD_APART = 3.29
"""Separation at which two laws are confused in 5 % of arcs."""
PROPOSAL_WIDTH = 1.2
"""The proposal is this much wider than linear theory."""


@dataclass(frozen=True, eq=False)
class LawComparison:
    """Thrust laws fitted to the same records.

    Attributes
    ----------
    null : Fit
        Gravity alone.
    fits : dict of str to Fit
    table : DataFrame, a row for each law, gravity alone first
        chi2, n_parameters, delta_chi2 and delta_bic (gravity alone less the law; above 0 favours
        the law), ln_evidence (relative to gravity alone) with ln_evidence_error, probability
        (equal prior odds for all rows), significance_sigma.
    separation : DataFrame
        D in sigma of the row's law, with its fitted thrust, from the column's law.
    separation_at_threshold : DataFrame
        The same for a thrust at the worst-direction threshold of the row's law (0.27 %, 95 %).
    upper_au_d2 : float
        Edge of the prior in |A|.
    seed : int
    """

    null: Fit
    fits: dict[str, Fit]
    table: pd.DataFrame
    separation: pd.DataFrame
    separation_at_threshold: pd.DataFrame
    upper_au_d2: float
    seed: int

    @property
    def preferred(self) -> str:
        """The row of the largest evidence."""
        return str(self.table["ln_evidence"].idxmax())

    @property
    def best_law(self) -> str:
        """The law of the largest evidence, gravity alone set aside."""
        return str(self.table["ln_evidence"].drop("gravity alone").idxmax())

    def _nearest(self) -> tuple[str, float, float]:
        """The law that imitates the best one best; the separation from it, fitted and at the
        threshold; "" where there is one law only."""
        best = self.best_law
        others = {
            str(name): float(np.asarray(self.separation.loc[best, name]))
            for name in self.separation.columns
            if name != best
        }
        if not others:
            return "", np.inf, np.inf
        near = min(others, key=lambda name: others[name])
        at = float(np.asarray(self.separation_at_threshold.loc[best, near]))
        return near, others[near], at

    @property
    def can_tell(self) -> bool:
        """Whether the fitted thrust of the best law could not be that of any other law."""
        near, distance, _ = self._nearest()
        return bool(near) and distance > TOLD_APART

    @property
    def sentence(self) -> str:
        """Whether the arc can tell the laws apart, in words."""
        near, distance, at_threshold = self._nearest()
        probability = float(np.asarray(self.table.loc[self.preferred, "probability"]))
        text = (
            f"The evidence prefers {self.preferred} (probability {probability:.3g} at equal odds)"
        )
        if not near:
            return text + "."
        if self.can_tell:
            return (
                f"{text}, and the arc can tell the laws apart: the thrust fitted with "
                f"{self.best_law} is {distance:.1f} sigma from anything that {near} could do."
            )
        return (
            f"{text}, but the arc cannot tell the laws apart: the thrust fitted with "
            f"{self.best_law} is only {distance:.2g} sigma from what {near} can do, and "
            f"{TOLD_APART:.2f} are needed; at its detection threshold it would be "
            f"{at_threshold:.2g} sigma."
        )

    def __str__(self) -> str:
        return (
            self.sentence + "\n" + self.table.to_string(float_format=lambda value: f"{value:.4g}")
        )

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record."""
        return {
            "sentence": self.sentence,
            "preferred": self.preferred,
            "can_tell": self.can_tell,
            "laws": self.table.to_dict(orient="index"),
            "separation_sigma": self.separation.to_dict(orient="index"),
            "separation_at_threshold_sigma": self.separation_at_threshold.to_dict(orient="index"),
            "upper_au_d2": self.upper_au_d2,
            "seed": self.seed,
        }


def compare_laws(
    arc: Arc,
    laws: Sequence[str | Thrust],
    *,
    seed: int,
    components: str = "RTN",
    error_model: ErrorModel | None = None,
    initial: Orbit | Fit | None = None,
    forces: ForceModel | None = None,
    reject: bool = True,
    upper_au_d2: float | None = None,
    n_draws: int = 4096,
) -> LawComparison:
    """Fit every law to the same records and compare them.

    Parameters
    ----------
    laws : sequence of str or Thrust
        Names of laws, or thrusts with their own lag, window and components.
    components : str
        For the laws given by name.
    initial, error_model, forces, reject
        As in ``fit_orbit``.
    upper_au_d2 : float, optional
        Common edge of the prior in |A|; the largest default edge of the laws.
    n_draws : int
        Exact orbits for each evidence.

    Raises
    ------
    LimitError
        If there are no laws, or two of the same name.
    """
    thrusts = {
        (law if isinstance(law, str) else str(law.law)): (
            Thrust(law, components=components) if isinstance(law, str) else law
        )
        for law in laws
    }
    if not thrusts or len(thrusts) < len(laws):
        raise LimitError(
            f"Give at least one law, each once; {[str(law) for law in laws]} were given."
        )
    null = fit_orbit(arc, None, error_model, initial=initial, forces=forces, reject=reject)
    found = {
        name: fit_orbit(arc, thrust, error_model, initial=null.orbit, forces=forces, reject=reject)
        for name, thrust in thrusts.items()
    }
    keep = np.any([null.keep, *[each.keep for each in found.values()]], axis=0)
    same: dict[str, Any] = {"forces": forces, "reject": False, "keep": keep}
    noise_dof = None
    if any(each.scales for each in [null, *found.values()]):
        own = [
            fit_orbit(arc, thrusts[name], error_model, initial=each.orbit, **same)
            for name, each in found.items()
        ]
        least = min(own, key=_log_errors)
        same["noise"], noise_dof = least.noise, least.noise_dof
    null = fit_orbit(arc, None, error_model, initial=null.orbit, **same)
    fits = {
        name: fit_orbit(arc, thrusts[name], error_model, initial=each.orbit, **same)
        for name, each in found.items()
    }
    infos = {name: thrust_information(each) for name, each in fits.items()}
    if upper_au_d2 is None:
        upper_au_d2 = max(thrust_prior(info).upper_au_d2 for info in infos.values())
    seeds = np.random.SeedSequence(seed).spawn(len(fits) + 1)
    base, base_error = _log_evidence(null, None, n_draws, np.random.default_rng(seeds[0]))
    n = null.n_numbers
    rows: dict[str, dict[str, float]] = {
        "gravity alone": {
            "chi2": null.chi2, "n_parameters": 6, "delta_chi2": 0.0, "delta_bic": 0.0,
            "ln_evidence": 0.0, "ln_evidence_error": 0.0, "significance_sigma": 0.0,
        }
    }  # fmt: skip
    for (name, each), child in zip(fits.items(), seeds[1:], strict=True):
        value, error = _log_evidence(each, upper_au_d2, n_draws, np.random.default_rng(child))
        delta = null.chi2 - each.chi2
        rows[name] = {
            "chi2": each.chi2, "n_parameters": each.theta.size, "delta_chi2": delta,
            "delta_bic": delta - (each.theta.size - 6) * float(np.log(n)),
            "ln_evidence": value - base, "ln_evidence_error": float(np.hypot(error, base_error)),
            "significance_sigma": significance_sigma(each.wald, infos[name].k, noise_dof),
        }  # fmt: skip
    table = pd.DataFrame.from_dict(rows, orient="index")
    log_z = table["ln_evidence"].to_numpy()
    table["probability"] = np.exp(log_z - log_sum_exp(log_z[None, :])[0])
    at_fit, at_threshold = _separations(fits)
    return LawComparison(null, fits, table, at_fit, at_threshold, float(upper_au_d2), seed)


def _log_errors(fit: Fit) -> float:
    """Sum of the logarithms of the standard deviations of the kept records."""
    noise = fit.noise.mask(fit.keep)
    return float(np.sum(np.log(noise.sigma_ra_arcsec) + np.log(noise.sigma_dec_arcsec)))


def _log_evidence(
    fit: Fit, upper_au_d2: float | None, n: int, random: np.random.Generator
) -> tuple[float, float]:
    """ln of the integral of likelihood times prior, orbit flat per au^3 (au/d)^3, and its error."""
    theta, w = np.asarray(fit.theta, dtype=float), PROPOSAL_WIDTH
    v = w * random.standard_normal((n, 6))
    log_q = -0.5 * np.sum((v / w) ** 2, axis=1) - 6.0 * np.log(w * np.sqrt(2.0 * np.pi))
    if upper_au_d2 is None:
        scale = np.sqrt(np.diag(fit.theta_cov))
        spread = np.linalg.cholesky(fit.theta_cov / np.outer(scale, scale)) * scale[:, None]
        thetas, log_p = theta + v @ spread.T, np.zeros(n)
    else:
        info = thrust_information(fit)
        belief = thrust_prior(info, "isotropic-uniform", upper_au_d2=upper_au_d2)
        proposal = linear_posterior(info, belief, w)
        A = proposal.draw(random, n)
        spread = info.orbit.spread
        orbit = theta[:6] + (A - info.A_hat) @ info.orbit.gain.T + v @ spread.T
        thetas = np.hstack([orbit, A])
        k = info.k
        sphere = np.log(2.0) + 0.5 * k * np.log(np.pi) - gammaln(0.5 * k)
        log_p = belief.log_density(A) - sphere - np.log(upper_au_d2)
        log_q = log_q + proposal.log_density(A)
    inside = np.isfinite(log_p)
    log_w = np.full(n, -np.inf)
    log_w[inside] = -0.5 * fit.chi2_many(thetas[inside]) + log_p[inside] - log_q[inside]
    total = float(log_sum_exp(log_w[None, :])[0])
    share = np.exp(log_w - total)
    error = float(np.sqrt(max(0.0, np.sum(share**2) - 1.0 / n)))
    return total - float(np.log(n)) + float(np.linalg.slogdet(spread)[1]), error


def _separations(fits: dict[str, Fit]) -> tuple[pd.DataFrame, pd.DataFrame]:
    names = list(fits)
    white, basis = {}, {}
    for name, fit in fits.items():
        n = len(fit.keep)
        rows = np.asarray(fit.design).reshape(n, 2, -1)[fit.keep].reshape(2 * fit.n_obs, -1)
        white[name] = fit.noise.mask(fit.keep).whiten(rows)
        basis[name] = np.linalg.qr(white[name] / np.linalg.norm(white[name], axis=0))[0]
    at_fit = pd.DataFrame(0.0, index=names, columns=names)
    at_threshold = at_fit.copy()
    for one in names:
        info = thrust_information(fits[one])
        reach = noncentrality(0.0027, 0.95, info.k) * info.eigenvalues[0] ** -0.5
        for other in names:
            if one == other:
                continue
            for table, A in ((at_fit, info.A_hat), (at_threshold, reach * info.eigenvectors[:, 0])):
                moved = white[one][:, 6:] @ A
                left = moved - basis[other] @ (basis[other].T @ moved)
                table.loc[one, other] = float(np.linalg.norm(left))
    return at_fit, at_threshold
