"""Posterior and injections on simulated arcs, against results that do not come from this package.

A linear problem has an analytic posterior (the least-squares Gaussian: C. F. Gauss 1809), and any
posterior can be had by importance sampling (H. Kahn & A. W. Marshall 1953, J. Oper. Res. Soc. Am.
1, 263), here from a proposal that knows nothing of priors, walkers or moves.
"""

from dataclasses import replace

import numpy as np
import pytest
from scipy.interpolate import CubicSpline
from scipy.stats import binom

from ngbound.limits import detection_threshold, inject_and_recover, sample_posterior
from ngbound.limits.convergence import quantile_with_error
from tests.limits.arcs import CLASSES, fitted


def deviations(fit, samples):
    """(samples - theta) in the coordinates in which the least-squares Gaussian is round."""
    scale = np.sqrt(np.diag(fit.theta_cov))
    root = np.linalg.cholesky(fit.theta_cov / np.outer(scale, scale))
    return np.linalg.solve(root, ((samples - fit.theta) / scale).T).T


@pytest.mark.slow
@pytest.mark.parametrize("name", ["main belt, 10 years", "comet, 200 days through perihelion"])
def test_posterior_of_a_nearly_linear_arc_is_the_analytic_gaussian_to_2_percent(name):
    fit = fitted(CLASSES[name])
    post = sample_posterior(fit, seed=1, prior="flat-components", target_ess=20000)
    z = deviations(fit, post.samples)
    np.testing.assert_allclose(post.A_samples.std(axis=0) / fit.A_sigma.value, 1.0, atol=0.02)
    np.testing.assert_allclose(z.std(axis=0), 1.0, atol=0.025)
    assert np.max(np.abs(z.mean(axis=0))) < 0.03
    np.testing.assert_allclose(np.corrcoef(z.T), np.eye(9), atol=0.035)


def weighted_quantile(values, weights, share):
    """Quantile of weighted values (weights of sum 1) and its Monte Carlo error."""
    order = np.argsort(values)
    values, weights = values[order], weights[order]
    steps = np.cumsum(weights)
    error = np.sqrt(np.sum(weights**2 * ((steps <= share) - share) ** 2))
    low, value, high = np.interp([share - error, share, share + error], steps, values)
    return value, 0.5 * (high - low)


class BentStudent:
    """Student's t about the ridge of chi2, drawn in whitened deviations z from the fit.

    Along the least certain direction of the distance e the ridge c(s) is found by going downhill in
    all other directions, and z = s e + c(s) + t with s and t of a Student law each: a shear, which
    leaves volumes as they are. A Student law about the fit alone misses the ends of such a ridge
    and does not know it: its weights look well.
    """

    def __init__(self, chi2_of, e):
        self.e, p = e, e.size
        self.rest = np.linalg.svd(np.eye(p) - np.outer(e, e))[0][:, : p - 1]
        places = np.arange(-6.0, 6.01, 0.5)
        ridge = np.zeros((places.size, p - 1))
        middle = places.size // 2
        for side in (1, -1):
            c = np.zeros(p - 1)
            for k in range(middle + side, middle + side * (middle + 1), side):
                for _ in range(12):
                    points = np.concatenate([c + 0.5 * np.eye(p - 1), c - 0.5 * np.eye(p - 1)])
                    value = chi2_of(places[k] * e + points @ self.rest.T)
                    slope = value[: p - 1] - value[p - 1 :]
                    c = c - 0.5 * slope
                    if np.linalg.norm(slope) < 1e-2:
                        break
                ridge[k] = c
        self.ridge = CubicSpline(places, ridge)

    def draw(self, random, n, nu=(6.0, 10.0), wide=(1.3, 1.1)):
        """Deviations (n, p) and the logarithm of their density, up to a constant."""
        s = random.standard_t(nu[0], n) * wide[0]
        t = random.standard_normal((n, self.e.size - 1)) * wide[1]
        t /= np.sqrt(random.chisquare(nu[1], n) / nu[1])[:, None]
        log_density = -0.5 * (nu[0] + 1.0) * np.log1p(s**2 / (nu[0] * wide[0] ** 2))
        log_density -= (
            0.5 * (nu[1] + t.shape[1]) * np.log1p(np.sum(t**2, axis=1) / (nu[1] * wide[1] ** 2))
        )
        held = np.clip(s, -6.0, 6.0)
        return s[:, None] * self.e + (self.ridge(held) + t) @ self.rest.T, log_density


@pytest.mark.slow
def test_posterior_of_a_short_curved_arc_is_that_of_importance_sampling(capsys):
    kind = replace(CLASSES["near-Earth, 60 days"], span_d=25.0, n_nights=12, per_night=4)
    fit = fitted(kind)
    post = sample_posterior(fit, seed=1, prior="flat-components", target_ess=8000)
    assert post.converged
    scale = np.sqrt(np.diag(fit.theta_cov))
    root = np.linalg.cholesky(fit.theta_cov / np.outer(scale, scale))

    def theta_of(z):
        return fit.theta + (z @ root.T) * scale

    e = np.linalg.solve(root, fit.atlas.axis / scale)
    bent = BentStudent(lambda z: fit.chi2_many(theta_of(z)), e / np.linalg.norm(e))
    z, log_density = bent.draw(np.random.default_rng(2), 30000)
    thetas = theta_of(z)
    chi2 = fit.chi2_many(thetas)
    # by the adaptive integrator, which neither of the two methods uses
    some = np.flatnonzero(chi2 < fit.chi2 + 25.0)[:24]
    alone = [fit.neighbourhood.chi2_alone(theta)[0] for theta in thetas[some]]
    np.testing.assert_allclose(chi2[some], alone, atol=2e-3)
    # curvature must be there, or this would test nothing
    assert np.linalg.norm(bent.ridge(3.0)) > 5.0
    w = np.exp(-0.5 * (chi2 - fit.chi2) - log_density)
    w /= w.sum()
    effective = 1.0 / np.sum(w**2)
    with capsys.disabled():
        print(
            f"\n  importance sampling: {effective:.0f} effective of {len(w)} draws; chain: "
            f"{min(post.ess.values()):.0f} of {len(post.samples)}, autocorrelation "
            f"{max(post.tau.values()):.1f} steps"
        )
    assert effective > 10000.0
    mean = w @ z
    sigma = np.sqrt(w @ (z - mean) ** 2)
    sampled = deviations(fit, post.samples)
    # errors of mean and of sigma (from the fourth moment, the tails being long) of both methods
    per_draw = np.sum(w**2), 1.0 / min(post.ess.values())
    fourth = w @ ((z - mean) / sigma) ** 4
    error = np.sqrt(sum(per_draw))
    assert np.max(np.abs(sampled.mean(axis=0) - mean) / sigma) < 4.5 * error
    assert np.all(
        np.abs(sampled.std(axis=0) / sigma - 1.0) < 4.5 * 0.5 * np.sqrt(fourth - 1.0) * error
    )
    columns = [*thetas[:, 6:].T, np.linalg.norm(thetas[:, 6:], axis=1)]
    chains = [*post.A_samples.T, post.A_mag.value]
    for values, chain in zip(columns, chains, strict=True):
        for share in (0.05, 0.5, 0.95):
            value, error = weighted_quantile(values, w, share)
            found, own = quantile_with_error(post.chain(chain), share)
            assert abs(found - value) < 4.5 * np.hypot(error, own)


def agrees(rate, expected):
    """Whether a count lies where a right one lies in all but one case of ten thousand."""
    low, high = binom.interval(0.9999, rate.trials, expected)
    return low <= rate.hits <= high


@pytest.mark.parametrize("name", list(CLASSES))
def test_injections_in_every_class_keep_false_alarms_and_power(name):
    fit = fitted(CLASSES[name])
    threshold = detection_threshold(fit, false_alarm=0.05, power=0.9)
    nothing = inject_and_recover(fit, np.zeros(3), n=192, seed=1, false_alarm=0.05)
    worst = threshold.worst.value * threshold.worst_direction
    pushed = inject_and_recover(fit, worst, n=192, seed=2, false_alarm=0.05)
    assert nothing.n_failed == pushed.n_failed == 0
    assert agrees(nothing.declared, 0.05)
    assert agrees(pushed.declared, 0.9)
    assert nothing.coverage_unified is not None and agrees(nothing.coverage_unified, 0.95)
    assert np.all(np.abs(pushed.bias.value) < 4.5 * pushed.bias_error.value)
    np.testing.assert_allclose(pushed.scatter, 1.0, atol=0.22)


def test_outlier_rule_in_the_loop_loses_little():
    fit = fitted(CLASSES["comet, 200 days through perihelion"])
    threshold = detection_threshold(fit, false_alarm=0.05, power=0.9)
    worst = threshold.worst.value * threshold.worst_direction
    found = inject_and_recover(fit, worst, n=128, seed=3, false_alarm=0.05, reject=True)
    assert 0.0 < found.n_rejected < 0.4
    assert agrees(found.declared, 0.9)
