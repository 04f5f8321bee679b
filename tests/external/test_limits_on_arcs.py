"""Posterior and injections on simulated arcs, against results that do not come from this package.

A linear problem has an analytic posterior (the least-squares Gaussian: C. F. Gauss 1809), and any
posterior can be had by importance sampling (H. Kahn & A. W. Marshall 1953, J. Oper. Res. Soc. Am.
1, 263), here from a wide Student proposal that knows nothing of priors, walkers or moves.
"""

from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import binom

from ngbound.limits import detection_threshold, inject_and_recover, sample_posterior
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


@pytest.mark.slow
def test_posterior_of_a_short_curved_arc_is_that_of_importance_sampling():
    kind = replace(CLASSES["near-Earth, 60 days"], n_nights=12, per_night=4)
    fit = fitted(kind)
    post = sample_posterior(fit, seed=1, prior="flat-components", target_ess=400, max_steps=300)
    random = np.random.default_rng(2)
    n, nu, p = 2000, 8.0, fit.theta.size
    z = random.standard_normal((n, p)) * 1.1
    z /= np.sqrt(random.chisquare(nu, n) / nu)[:, None]
    scale = np.sqrt(np.diag(fit.theta_cov))
    root = np.linalg.cholesky(fit.theta_cov / np.outer(scale, scale))
    chi2 = fit.chi2_many(fit.theta + (z @ root.T) * scale)
    # curvature must be there, or this would test nothing
    assert np.quantile(np.abs(chi2 - fit.chi2 - np.sum(z**2, axis=1)), 0.9) > 0.05
    log_w = -0.5 * (chi2 - fit.chi2) + 0.5 * (nu + p) * np.log1p(
        np.sum(z**2, axis=1) / (nu * 1.1**2)
    )
    w = np.exp(log_w - log_w.max())
    w /= w.sum()
    effective = 1.0 / np.sum(w**2)
    assert effective > 200.0
    mean = w @ z
    sigma = np.sqrt(w @ (z - mean) ** 2)
    sampled = deviations(fit, post.samples)
    error = np.sqrt(1.0 / effective + 1.0 / min(post.ess.values()))
    assert np.max(np.abs(sampled.mean(axis=0) - mean) / sigma) < 4.5 * error
    assert np.max(np.abs(sampled.std(axis=0) / sigma - 1.0)) < 4.5 * error


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
    assert 2.0 < found.n_rejected < 10.0
    assert agrees(found.declared, 0.9)
