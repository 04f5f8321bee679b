"""Put a known thrust in, fit again, count; may import errors, rounding, fit and
this room.

What is counted, over n arcs made with the same thrust (or each with its own): how often the test of
k components declares a thrust (delta chi2 above the chi2_k quantile: the false-alarm rate without
thrust, the power with it), the bias of the estimate, the scatter of the normalised errors, and how
often the limits hold the truth. Rates carry the exact binomial interval of C. J. Clopper & E. S.
Pearson 1934, Biometrika 26, 404. How an arc is made and fitted again is in ``refit``: exactly on
the records of a real fit, or in linear theory.

The arcs come in fixed lots, each arc with its own random stream, so that a seed gives the same
counts however the work is interrupted.
"""

from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from astropy import units as u
from scipy.stats import beta, chi2, f, ncf, ncx2, norm, t

from ngbound.blas import on_one_thread
from ngbound.errors import LimitError
from ngbound.fit import Fit
from ngbound.limits.checkpoint import load_whole, mark_of, save_whole
from ngbound.limits.information import AU_D2, ThrustInformation
from ngbound.limits.linear_posterior import linear_posterior, student_width
from ngbound.limits.priors import thrust_prior
from ngbound.limits.refit import ExactRefit, Refits, Refitter
from ngbound.limits.threshold import noncentrality
from ngbound.limits.unified_interval import unified_interval
from ngbound.limits.upper_limit import profile_limit
from ngbound.rounding import along, percent, rounded, up, with_error

LOT = 64
"""Arcs made and fitted together; a checkpoint is written after each lot."""
BAYES_DRAWS = 1024
STORED = ("A_hat", "covariance", "delta_chi2", "n_rejected", "failed")

Progress = Callable[[int, int, str], None]


@dataclass(frozen=True)
class Rate:
    """A share counted in trials, with its 95 % binomial interval."""

    hits: int
    trials: int

    @property
    def value(self) -> float:
        """Hits over trials."""
        return self.hits / self.trials if self.trials else float("nan")

    @property
    def interval(self) -> tuple[float, float]:
        """Clopper-Pearson interval, 95 %."""
        h, n = self.hits, self.trials
        low = 0.0 if h == 0 else float(beta.ppf(0.025, h, n - h + 1))
        high = 1.0 if h == n else float(beta.ppf(0.975, h + 1, n - h))
        return low, high

    def __str__(self) -> str:
        low, high = self.interval
        return f"{self.value:.4f} ({low:.4f} to {high:.4f}, {self.hits} of {self.trials})"

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record."""
        return {
            "hits": self.hits,
            "trials": self.trials,
            "value": self.value if self.trials else None,
            "interval_95": list(self.interval) if self.trials else None,
        }


@dataclass(frozen=True)
class Recovery:
    """What became of an injected thrust.

    Attributes
    ----------
    components : str
    injected : (k,) or (n, k) Quantity
    false_alarm, confidence : float
        Of the test and of the limits that were counted.
    declared : Rate
        How often the test declared a thrust.
    expected : float
        The same in linear theory.
    coverage_magnitude : Rate
        How often the profile likelihood limit on |A| held the truth.
    coverage_unified : Rate or None
        How often the unified interval held A_R; only if R was fitted and every injected A_R >= 0.
    coverage_bayes : Rate or None
        How often the posterior quantile of |A| held the truth; only if a prior was named.
    prior : str
        That prior in words, "" without.
    bias, bias_error : (k,) Quantity
        Mean of estimate minus truth.
    scatter : (k,) float
        Standard deviation of (estimate - truth) / sigma; 1 if the sigmas are right.
    n_rejected : float
        Mean number of records that the outlier rule took out.
    n_failed : int
        Arcs that could not be fitted; they are in no rate.
    A_hat : (n, k) Quantity
        nan where no fit was found.
    delta_chi2 : (n,) float
    seed : int
    """

    components: str
    injected: u.Quantity
    false_alarm: float
    confidence: float
    declared: Rate
    expected: float
    coverage_magnitude: Rate
    coverage_unified: Rate | None
    coverage_bayes: Rate | None
    prior: str
    bias: u.Quantity
    bias_error: u.Quantity
    scatter: np.ndarray
    n_rejected: float
    n_failed: int
    A_hat: u.Quantity
    delta_chi2: np.ndarray
    seed: int

    def __str__(self) -> str:
        size = np.linalg.norm(np.atleast_2d(self.injected.value), axis=1)
        what = (
            f"Thrust of {rounded(size[0])} au/d2"
            if self.injected.ndim == 1
            else f"Thrusts of {rounded(size.min())} to {rounded(size.max())} au/d2"
        )
        lines = [
            f"{what} injected: declared at a false-alarm rate of {percent(self.false_alarm)} in a "
            f"share of {self.declared}; {self.expected:.4f} in linear theory",
            f"  |A| held by the {percent(self.confidence)} profile likelihood limit: "
            f"{self.coverage_magnitude}",
        ]
        if self.coverage_bayes is not None:
            lines.append(
                f"  |A| held by the posterior limit under {self.prior}: {self.coverage_bayes}"
            )
        if self.coverage_unified is not None:
            lines.append(f"  A_R held by the unified interval: {self.coverage_unified}")
        for i, letter in enumerate(self.components):
            lines.append(
                f"  A_{letter}: bias {with_error(self.bias[i].value, self.bias_error[i].value)} "
                f"au/d2, scatter {self.scatter[i]:.3f} sigma"
            )
        if self.n_rejected:
            lines.append(f"  the outlier rule took out {self.n_rejected:.2f} records on average")
        if self.n_failed:
            lines.append(f"  {self.n_failed} arcs could not be fitted and are left out")
        return "\n".join(lines)

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record, without the single estimates."""

        def plain(rate: Rate | None) -> dict[str, Any] | None:
            return None if rate is None else rate.to_dict()

        size = np.linalg.norm(np.atleast_2d(self.injected.value), axis=1)
        return {
            "components": self.components,
            "injected_au_d2": self.injected.value.tolist() if self.injected.ndim == 1 else None,
            "injected_size_au_d2": [float(size.min()), float(size.max())],
            "false_alarm": self.false_alarm,
            "confidence": self.confidence,
            "declared": self.declared.to_dict(),
            "expected": self.expected,
            "coverage_magnitude": self.coverage_magnitude.to_dict(),
            "coverage_unified": plain(self.coverage_unified),
            "coverage_bayes": plain(self.coverage_bayes),
            "prior": self.prior,
            "bias_au_d2": self.bias.value.tolist(),
            "bias_error_au_d2": self.bias_error.value.tolist(),
            "scatter": self.scatter.tolist(),
            "n_rejected": self.n_rejected,
            "n_failed": self.n_failed,
            "seed": self.seed,
        }


@on_one_thread
def inject_and_recover(
    push: "Fit | Refitter",
    A: "np.ndarray | u.Quantity | list[float]",
    *,
    n: int,
    seed: int,
    free: str | None = None,
    noise: str = "model",
    reject: bool = False,
    rescale: bool | None = None,
    false_alarm: float = 0.0027,
    confidence: float = 0.95,
    prior: str | None = None,
    upper_au_d2: float | None = None,
    progress: Progress | None = None,
    checkpoint: str | Path | None = None,
) -> Recovery:
    """Inject the thrust ``A`` into ``n`` arcs, fit each again with and without thrust, count.

    Parameters
    ----------
    push : Fit or Refitter
        A fit with thrust, whose records, errors and orbit are used; or another way to refit, such
        as ``LinearRefit``, to which ``free``, ``noise``, ``reject`` and ``rescale`` do not apply.
    A : (k,) or (n, k) float au/d2 or Quantity
        In the order of the free components; one thrust for all arcs, or one for each.
    n, seed : int
    free, noise, reject, rescale
        See ``ExactRefit``: which components are fitted (and injected), where the noise comes from,
        whether the outlier rule applies and whether stations are rescaled.
    false_alarm : float
        Rate of the chi2 test of the k components.
    confidence : float
        Of the limits; above 0.5 and below 1.
    prior : str, optional
        Count the coverage of the posterior limit (of each arc's estimate and covariance) under this
        prior too, with the upper edge ``upper_au_d2``.
    progress : callable(step, total, message), optional
    checkpoint : path, optional
        The results are written there lot by lot (always a whole file); a run that finds the file
        of the same problem goes on from it and ends with the same numbers.

    Raises
    ------
    LimitError
        If a choice is out of its range, or no arc at all could be fitted.
    SamplingError
        If the checkpoint belongs to another problem.
    """
    refitter: Refitter = (
        ExactRefit(push, free=free, noise=noise, reject=reject, rescale=rescale)
        if isinstance(push, Fit)
        else push
    )
    injected = _checked(A, n, refitter, false_alarm, confidence)
    facts = [n, seed, refitter.components, type(refitter).__name__, refitter.choices]
    facts.append(refitter.noise_dof)
    path = None if checkpoint is None else Path(checkpoint)
    done = _refit_all(refitter, injected, seed, facts, path, progress)
    return _counted(
        refitter, injected, done, seed, false_alarm, confidence, prior, upper_au_d2,
        np.ndim(A.value if isinstance(A, u.Quantity) else A) == 1,
    )  # fmt: skip


def _checked(
    A: "np.ndarray | u.Quantity | list[float]",
    n: int,
    refitter: Refitter,
    false_alarm: float,
    confidence: float,
) -> np.ndarray:
    if n < 1 or not 0.0 < false_alarm < 1.0 or not 0.5 < confidence < 1.0:
        raise LimitError(
            "Injection needs at least 1 arc, a false-alarm rate between 0 and 1 and a confidence "
            f"between 0.5 and 1; {n!r}, {false_alarm!r} and {confidence!r} were given."
        )
    values = np.asarray(A.to_value(AU_D2) if isinstance(A, u.Quantity) else A, dtype=float)
    k = len(refitter.components)
    if values.shape not in ((k,), (n, k)) or not np.all(np.isfinite(values)):
        raise LimitError(
            f"The injected thrust needs {k} finite numbers, for {', '.join(refitter.components)}, "
            f"once or for each of {n} arcs, au/d2; {A!r} was given."
        )
    return np.broadcast_to(values, (n, k))


def _refit_all(
    refitter: Refitter,
    A: np.ndarray,
    seed: int,
    facts: list[Any],
    path: Path | None,
    progress: Progress | None,
) -> Refits:
    n = len(A)
    streams = np.random.SeedSequence(seed).spawn(n)
    info = refitter.information
    mark = mark_of([np.ascontiguousarray(A), info.A_hat, info.matrix], facts)
    parts: list[Refits] = []
    if path is not None and path.exists():
        stored = load_whole(path, mark, "a set of injections", STORED)
        parts = [Refits(**stored)]
    count = sum(len(part.failed) for part in parts)
    while count < n:
        lot = slice(count, min(n, count + LOT))
        parts.append(refitter.refit(np.array(A[lot]), streams[lot]))
        count = lot.stop
        parts = [_joined(parts)]
        if path is not None:
            save_whole(path, mark, {name: getattr(parts[0], name) for name in STORED})
        if progress is not None:
            progress(count, n, "injecting")
    return parts[0]


def _joined(parts: list[Refits]) -> Refits:
    return Refits(**{name: np.concatenate([getattr(p, name) for p in parts]) for name in STORED})


def _counted(
    refitter: Refitter,
    injected: np.ndarray,
    done: Refits,
    seed: int,
    false_alarm: float,
    confidence: float,
    prior: str | None,
    upper_au_d2: float | None,
    single: bool,
) -> Recovery:
    good = ~done.failed
    m = int(good.sum())
    if not m:
        raise LimitError(
            f"None of the {len(good)} injected arcs could be fitted; the arc is too short for its "
            "thrust to be found in it. Fit fewer thrust components, or a longer arc."
        )
    components = refitter.components
    k = len(components)
    truth, A_hat = injected[good], done.A_hat[good]
    sigma = np.sqrt(np.einsum("mii->mi", done.covariance[good]))
    infos = [
        _information(refitter, a, c) for a, c in zip(A_hat, done.covariance[good], strict=True)
    ]
    size = np.linalg.norm(truth, axis=1)
    dof = refitter.noise_dof
    wide = 1.0 if dof is None else float(t.ppf(confidence, dof) / norm.ppf(confidence))
    held = sum(
        bool(profile_limit(each, confidence) >= s) for each, s in zip(infos, size, strict=True)
    )
    unified = None
    if "R" in components and np.all(injected[:, components.index("R")] >= 0.0):
        j = components.index("R")
        edges = [
            unified_interval(a, s * wide, confidence)
            for a, s in zip(A_hat[:, j], sigma[:, j], strict=True)
        ]
        unified = Rate(
            sum(bool(lo <= x <= hi) for (lo, hi), x in zip(edges, truth[:, j], strict=True)), m
        )
    bayes, name = None, ""
    if prior is not None:
        bayes = Rate(
            sum(
                _posterior_share(each, s, prior, upper_au_d2) <= confidence
                for each, s in zip(infos, size, strict=True)
            ),
            m,
        )
        name = str(thrust_prior(refitter.information, prior, upper_au_d2=upper_au_d2))
    critical = float(chi2.isf(false_alarm, k) if dof is None else k * f.isf(false_alarm, k, dof))
    noncentral = np.einsum("mi,ij,mj->m", truth, refitter.information.matrix, truth)
    noncentral = np.maximum(noncentral / refitter.noise_excess, 1e-12)
    power = (
        ncx2.sf(critical, k, noncentral)
        if dof is None
        else ncf.sf(critical / k, k, dof, noncentral)
    )
    return Recovery(
        components=components,
        injected=(injected[0] if single else injected) * AU_D2,
        false_alarm=false_alarm,
        confidence=confidence,
        declared=Rate(int(np.sum(done.delta_chi2[good] > critical)), m),
        expected=float(np.mean(power)),
        coverage_magnitude=Rate(held, m),
        coverage_unified=unified,
        coverage_bayes=bayes,
        prior=name,
        bias=np.mean(A_hat - truth, axis=0) * AU_D2,
        bias_error=np.std(A_hat - truth, axis=0) / np.sqrt(m) * AU_D2,
        scatter=np.std((A_hat - truth) / sigma, axis=0),
        n_rejected=float(np.mean(done.n_rejected[good])),
        n_failed=len(good) - m,
        A_hat=done.A_hat * AU_D2,
        delta_chi2=done.delta_chi2,
        seed=seed,
    )


def _information(refitter: Refitter, A: np.ndarray, covariance: np.ndarray) -> ThrustInformation:
    """The information of one arc: its own estimate and covariance."""
    values, vectors = np.linalg.eigh(covariance)
    order = slice(None, None, -1)
    return replace(
        refitter.information,
        noise_dof=refitter.noise_dof,
        A_hat=A,
        covariance=covariance,
        matrix=(vectors / values) @ vectors.T,
        eigenvalues=1.0 / values[order],
        eigenvectors=vectors[:, order],
    )


def _posterior_share(
    info: ThrustInformation, size: float, prior: str, upper_au_d2: float | None
) -> float:
    """Posterior probability that |A| is below ``size``."""
    belief = thrust_prior(info, prior, upper_au_d2=upper_au_d2)
    proposal = linear_posterior(info, belief, student_width(info.noise_dof))
    draws, weights = proposal.weighted_draws(0, BAYES_DRAWS, info.noise_dof)
    return float(weights[np.linalg.norm(draws, axis=1) < size].sum() / weights.sum())


@dataclass(frozen=True)
class PowerCurve:
    """Share of declared arcs against the size of the injected thrust.

    Attributes
    ----------
    direction : (k,) float
    threshold : Quantity
        Direction-free threshold along it, in linear theory.
    false_alarm, power : float
        At which the threshold is stated.
    recoveries : tuple of Recovery, one for each size
    """

    components: str
    direction: np.ndarray
    threshold: u.Quantity
    false_alarm: float
    power: float
    recoveries: tuple[Recovery, ...]

    @property
    def size(self) -> u.Quantity:
        """Sizes of the injected thrust."""
        return np.array([np.linalg.norm(r.injected.value) for r in self.recoveries]) * AU_D2

    @property
    def rates(self) -> tuple[Rate, ...]:
        """Shares declared."""
        return tuple(r.declared for r in self.recoveries)

    def __str__(self) -> str:
        lines = [
            f"Power of the test of {', '.join(self.components)} along "
            f"{along(self.components, self.direction)} at a false-alarm rate of "
            f"{percent(self.false_alarm)}; threshold {up(self.threshold.value)} au/d2 at a power "
            f"of {percent(self.power)}",
            "  size (au/d2)  of threshold  declared (95 % binomial)  linear theory",
        ]
        for size, each in zip(self.size.value, self.recoveries, strict=True):
            lines.append(
                f"  {rounded(size, 3):12s}  {size / self.threshold.value:12.2f}  {each.declared}  "
                f"{each.expected:.4f}"
            )
        return "\n".join(lines)

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record."""
        return {
            "components": self.components,
            "direction": self.direction.tolist(),
            "threshold_au_d2": float(self.threshold.value),
            "false_alarm": self.false_alarm,
            "power": self.power,
            "recoveries": [each.to_dict() for each in self.recoveries],
        }


@on_one_thread
def power_curve(
    push: "Fit | Refitter",
    direction: "str | np.ndarray | list[float]" = "worst",
    *,
    n: int,
    seed: int,
    shares: "tuple[float, ...]" = (0.0, 0.25, 0.5, 0.75, 1.0, 1.25),
    free: str | None = None,
    noise: str = "model",
    reject: bool = False,
    rescale: bool | None = None,
    false_alarm: float = 0.0027,
    power: float = 0.95,
    progress: Progress | None = None,
    checkpoint: str | Path | None = None,
) -> PowerCurve:
    """Inject thrusts of several sizes along one direction; ``n`` arcs for each size.

    Parameters
    ----------
    direction : str or (k,) float
        "worst", "best", the letter of a component, or a vector.
    shares : tuple of float
        Sizes as shares of the threshold along the direction.
    checkpoint : path, optional
        Each size has a file of its own beside it, with its number in the ending.
    other parameters
        As in ``inject_and_recover``.
    """
    refitter: Refitter = (
        ExactRefit(push, free=free, noise=noise, reject=reject, rescale=rescale)
        if isinstance(push, Fit)
        else push
    )
    info = refitter.information
    if isinstance(direction, str) and direction in ("worst", "best"):
        axis = info.eigenvectors[:, 0 if direction == "worst" else -1].copy()
    else:
        axis = info.direction(direction)
    delta = noncentrality(false_alarm, power, info.k, noise_dof=refitter.noise_dof)
    reach = delta * float(np.sqrt(refitter.noise_excess / (axis @ info.matrix @ axis)))
    found = []
    for i, (share, child) in enumerate(
        zip(shares, np.random.SeedSequence(seed).generate_state(len(shares)), strict=True)
    ):
        path = None if checkpoint is None else Path(f"{checkpoint}.{i}")

        def report(step: int, total: int, message: str, i: int = i) -> None:
            if progress is not None:
                progress(i * n + step, len(shares) * n, message)

        found.append(
            inject_and_recover(
                refitter, share * reach * axis, n=n, seed=int(child), false_alarm=false_alarm,
                progress=report, checkpoint=path,
            )
        )  # fmt: skip
    return PowerCurve(refitter.components, axis, reach * AU_D2, false_alarm, power, tuple(found))
