"""Put a known thrust in, fit again, count; may import errors and this room.

What is counted, over n arcs made with the same thrust: how often the chi2 test of k components
declares a thrust (the false-alarm rate without thrust, the power with it), the bias of the
estimate, the scatter of the normalised errors, and how often the limits hold the truth. Rates
carry the exact binomial interval of C. J. Clopper & E. S. Pearson 1934, Biometrika 26, 404. How an
arc is made and fitted again is the caller's: ``refit`` may do the whole nonlinear job;
``linear_refit`` is the linear-theory one.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from astropy import units as u
from scipy.stats import beta, chi2

from ngbound.errors import AnalysisError, LimitError
from ngbound.limits.fit_protocol import ThrustFit
from ngbound.limits.information import AU_D2, ThrustInformation, thrust_information
from ngbound.limits.unified_interval import unified_interval
from ngbound.limits.upper_limit import profile_limit

Refit = Callable[[np.ndarray, np.random.Generator], ThrustInformation]
"""Makes an arc with the thrust A (k,) au/d2 and noise from the generator, fits it, returns the
information.
"""


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
    """What became of one injected thrust.

    Attributes
    ----------
    components : str
    injected : (k,) Quantity
    false_alarm, confidence : float
        Of the test and of the limits that were counted.
    declared : Rate
        How often the test declared a thrust.
    coverage_magnitude : Rate
        How often the profile likelihood limit on |A| held the truth.
    coverage_unified : Rate or None
        How often the unified interval held A_R; only if R was fitted and the injected A_R >= 0.
    bias, bias_error : (k,) Quantity
        Mean of estimate minus truth.
    scatter : (k,) float
        Standard deviation of (estimate - truth) / sigma; 1 if the sigmas are right.
    n_failed : int
        Arcs that could not be fitted; they are in no rate.
    A_hat : (n, k) Quantity
    seed : int
    """

    components: str
    injected: u.Quantity
    false_alarm: float
    confidence: float
    declared: Rate
    coverage_magnitude: Rate
    coverage_unified: Rate | None
    bias: u.Quantity
    bias_error: u.Quantity
    scatter: np.ndarray
    n_failed: int
    A_hat: u.Quantity
    seed: int

    def __str__(self) -> str:
        size = float(np.linalg.norm(self.injected.value))
        lines = [
            f"Thrust of {size:.3e} au/d2 injected: declared at the false-alarm rate "
            f"{self.false_alarm:g} in a share of "
            f"{self.declared}",
            f"  |A| held by the {100.0 * self.confidence:g} % profile likelihood limit: "
            f"{self.coverage_magnitude}",
        ]
        if self.coverage_unified is not None:
            lines.append(f"  A_R held by the unified interval: {self.coverage_unified}")
        for i, letter in enumerate(self.components):
            lines.append(
                f"  A_{letter}: bias {self.bias[i].value:+.2e} +- {self.bias_error[i].value:.1e} "
                "au/d2, scatter "
                f"{self.scatter[i]:.3f} sigma"
            )
        if self.n_failed:
            lines.append(f"  {self.n_failed} arcs could not be fitted and are left out")
        return "\n".join(lines)

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record, without the single estimates."""
        return {
            "components": self.components,
            "injected_au_d2": self.injected.value.tolist(),
            "false_alarm": self.false_alarm,
            "confidence": self.confidence,
            "declared": self.declared.to_dict(),
            "coverage_magnitude": self.coverage_magnitude.to_dict(),
            "coverage_unified": None
            if self.coverage_unified is None
            else self.coverage_unified.to_dict(),
            "bias_au_d2": self.bias.value.tolist(),
            "bias_error_au_d2": self.bias_error.value.tolist(),
            "scatter": self.scatter.tolist(),
            "n_failed": self.n_failed,
            "seed": self.seed,
        }


def linear_refit(fit: ThrustFit) -> Refit:
    """Linear theory of ``fit``: the estimate scatters about the injected thrust with the
    covariance of the fit.
    """
    information = thrust_information(fit)
    root = information.eigenvectors / np.sqrt(information.eigenvalues)

    def refit(A: np.ndarray, random: np.random.Generator) -> ThrustInformation:
        if np.shape(A) != (information.k,):
            raise LimitError(
                f"The injected thrust needs {information.k} numbers, for "
                f"{', '.join(information.components)}; {len(A)} were given."
            )
        return information.with_estimate(A + root @ random.standard_normal(information.k))

    return refit


def inject_and_recover(
    refit: Refit,
    A: "np.ndarray | u.Quantity | list[float]",
    *,
    n: int,
    seed: int,
    false_alarm: float = 0.0027,
    confidence: float = 0.95,
    progress: Callable[[int, int, str], None] | None = None,
) -> Recovery:
    """Inject the thrust ``A`` into ``n`` arcs, fit each again, count.

    Parameters
    ----------
    refit : callable(A (k,), Generator) -> ThrustInformation
        An ``AnalysisError`` it raises counts as an arc that could not be fitted.
    A : (k,) float au/d2 or Quantity
    n, seed : int
        Arc i has its own random stream, so that a seed gives the same counts in any order of work.
    false_alarm : float
        Rate of the chi2 test of the k components.
    confidence : float
        Of the limits; above 0.5 and below 1.

    Raises
    ------
    LimitError
        If a choice is out of its range, or no arc at all could be fitted.
    """
    injected = np.asarray(A.to_value(AU_D2) if isinstance(A, u.Quantity) else A, dtype=float)
    if n < 1 or not 0.0 < false_alarm < 1.0 or not 0.5 < confidence < 1.0:
        raise LimitError(
            "Injection needs at least 1 arc, a false-alarm rate between 0 and 1 and a confidence "
            "between 0.5 and 1; "
            f"{n!r}, {false_alarm!r} and {confidence!r} were given."
        )
    if injected.ndim != 1 or not np.all(np.isfinite(injected)):
        raise LimitError(f"The injected thrust must be a finite vector, au/d2; {A!r} was given.")
    found: list[ThrustInformation] = []
    fault: AnalysisError | None = None
    for i, child in enumerate(np.random.SeedSequence(seed).spawn(n)):
        try:
            found.append(refit(injected, np.random.default_rng(child)))
        except AnalysisError as reason:
            fault = reason
        if progress is not None:
            progress(i + 1, n, "injecting")
    if not found:
        raise LimitError(
            f"None of the {n} injected arcs could be fitted; the last said: {fault}"
        ) from fault
    components, k = found[0].components, found[0].k
    if injected.shape != (k,):
        raise LimitError(
            f"The injected thrust needs {k} numbers, for {', '.join(components)}; {len(injected)} "
            "were given."
        )
    A_hat = np.array([each.A_hat for each in found])
    sigma = np.array([np.sqrt(np.diag(each.covariance)) for each in found])
    critical = float(chi2.isf(false_alarm, k))
    size = float(np.linalg.norm(injected))
    held = sum(bool(profile_limit(each, confidence) >= size) for each in found)
    unified = None
    if "R" in components and injected[components.index("R")] >= 0.0:
        j = components.index("R")
        edges = [
            unified_interval(a, s, confidence)
            for a, s in zip(A_hat[:, j], sigma[:, j], strict=True)
        ]
        unified = Rate(sum(bool(low <= injected[j] <= high) for low, high in edges), len(found))
    return Recovery(
        components=components,
        injected=injected * AU_D2,
        false_alarm=false_alarm,
        confidence=confidence,
        declared=Rate(sum(bool(each.wald > critical) for each in found), len(found)),
        coverage_magnitude=Rate(held, len(found)),
        coverage_unified=unified,
        bias=np.mean(A_hat - injected, axis=0) * AU_D2,
        bias_error=np.std(A_hat, axis=0) / np.sqrt(len(found)) * AU_D2,
        scatter=np.std((A_hat - injected) / sigma, axis=0),
        n_failed=n - len(found),
        A_hat=A_hat * AU_D2,
        seed=seed,
    )
