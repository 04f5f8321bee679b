import json
from dataclasses import replace

import numpy as np
import pytest
from scipy.optimize import minimize

from ngbound.errors import LimitError
from ngbound.limits import (
    LinearRefit,
    detection_threshold,
    flat_prior_limit,
    inject_and_recover,
    profile_limit,
    sample_posterior,
    thrust_information,
    unified_interval,
    upper_limit,
)
from tests.limits.toy import correlated, isotropic

SIGMA = 1e-9


@pytest.mark.parametrize("x", [-2.0, 0.0, 2.0])
def test_outward_radial_is_the_flat_prior_limit(x):
    fit = isotropic(k=1, sigma=SIGMA, A=x * SIGMA)
    post = sample_posterior(fit, seed=1, prior="outward-radial")
    limit = upper_limit(post)
    expected = flat_prior_limit(x, 1.0, 0.95)
    assert limit.outward_radial is not None and limit.outward_radial_error is not None
    for value, error in [
        (limit.outward_radial, limit.outward_radial_error),
        (limit.magnitude, limit.magnitude_error),
    ]:
        assert abs(value.value / SIGMA - expected) < 4.0 * error.value / SIGMA
    assert limit.unified_radial is not None
    np.testing.assert_allclose(
        limit.unified_radial.value / SIGMA, unified_interval(x, 1.0, 0.95), atol=1e-9
    )


def test_flat_components_half_beside_the_whole():
    post = sample_posterior(isotropic(sigma=SIGMA, A=SIGMA), seed=2, prior="flat-components")
    limit = upper_limit(post)
    # flat in the components, A_R given A_R >= 0 is the flat-prior limit of that component alone
    assert limit.outward_radial is not None and limit.outward_radial_error is not None
    assert abs(limit.outward_radial.value / SIGMA - flat_prior_limit(1.0, 1.0)) < (
        4.0 * limit.outward_radial_error.value / SIGMA
    )


def test_the_second_prior_stands_beside_and_costs():
    fit = isotropic(sigma=SIGMA)
    limit = upper_limit(sample_posterior(fit, seed=3, target_ess=2000))
    assert limit.alternative_prior.startswith("flat-components")
    assert limit.alternative_magnitude.value / SIGMA == pytest.approx(2.7955, abs=0.03)
    assert limit.linear_magnitude.value / SIGMA == pytest.approx(1.96, abs=0.03)
    flat = sample_posterior(fit, seed=3, prior="flat-components", target_ess=2000)
    given = upper_limit(flat, alternative=sample_posterior(fit, seed=4, target_ess=2000))
    assert given.alternative_source == "posterior"
    assert abs(given.alternative_magnitude.value / SIGMA - 1.96) < (
        4.0 * given.alternative_error.value / SIGMA
    )


def test_without_samples_linear_theory_is_used_and_said():
    limit = upper_limit(correlated())
    assert limit.source == "linear theory"
    json.dumps(limit.to_dict())
    assert "linear theory" in str(limit)


def test_median_has_no_unified_interval():
    limit = upper_limit(isotropic(), confidence=0.5)
    assert limit.unified_radial is None and limit.outward_radial is not None


def test_no_radial_component_no_outward_limit():
    fit = isotropic(k=1)
    limit = upper_limit(type(fit)(**{**vars(fit), "components": "N"}))
    assert limit.outward_radial is None and limit.unified_radial is None


@pytest.mark.parametrize("A_sigmas", [0.0, 0.3, 1.0, 6.0])
@pytest.mark.parametrize("k", [1, 2, 3])
def test_profile_limit_is_the_farthest_point_of_the_ellipsoid(k, A_sigmas):
    info = thrust_information(correlated(k=k, A_sigmas=A_sigmas))
    limit = profile_limit(info, 0.95)
    # the ellipsoid is searched directly, from many starts
    root = info.eigenvectors / np.sqrt(info.eigenvalues)
    unit = info.eigenvalues[0] ** -0.5

    def size(n: np.ndarray) -> float:
        n = n / np.linalg.norm(n)
        return -float(np.linalg.norm(info.A_hat + 1.6448536 * root @ n)) / unit

    random = np.random.default_rng(1)
    starts = [np.r_[1.0, 0.01 * np.ones(k - 1)], np.r_[-1.0, 0.01 * np.ones(k - 1)]]
    starts += list(random.standard_normal((6, k)))
    best = max(-minimize(size, start).fun for start in starts)
    assert limit / unit == pytest.approx(best, rel=1e-5)


def test_profile_limit_of_a_round_estimate_adds_sigmas():
    fit = isotropic(sigma=SIGMA, A=np.array([3.0, 0.0, 4.0]) * SIGMA)
    assert profile_limit(thrust_information(fit), 0.95) / SIGMA == pytest.approx(5.0 + 1.6448536)


def test_errors_that_rest_on_few_degrees_of_freedom_raise_the_limit_by_themselves():
    fit = replace(isotropic(k=1, sigma=SIGMA), noise_dof=8)
    limit = upper_limit(fit, confidence=0.95, prior="flat-components")
    # Student's t with 8 degrees of freedom, standard table: 2.306 two-sided, 1.860 one-sided
    assert limit.magnitude.value / SIGMA == pytest.approx(2.306, rel=0.01)
    assert limit.profile_magnitude.value / SIGMA == pytest.approx(1.860, abs=1e-3)
    known = upper_limit(isotropic(k=1, sigma=SIGMA), confidence=0.95, prior="flat-components")
    assert known.magnitude.value / SIGMA == pytest.approx(1.960, rel=0.01)
    assert limit.unified_radial[1] > 1.1 * known.unified_radial[1]
    several = upper_limit(replace(isotropic(sigma=SIGMA), noise_dof=4), prior="flat-components")
    # the size of a Student vector in 3 dimensions: sqrt(3 F), F(3, 4) at 95 % is 6.591
    assert several.magnitude.value / SIGMA == pytest.approx(np.sqrt(3.0 * 6.591), rel=0.02)


def test_the_limit_says_what_its_prior_does_not_promise():
    limit = upper_limit(isotropic(sigma=SIGMA))
    assert "holds as often" in limit.caveat and limit.caveat in str(limit)
    assert limit.to_dict()["caveat"] == limit.caveat
    assert upper_limit(isotropic(k=1, sigma=SIGMA)).caveat == ""
    assert upper_limit(isotropic(sigma=SIGMA), prior="flat-components").caveat == ""


@pytest.mark.parametrize("prior, low, high", [("isotropic-uniform", 0.1, 0.8),
                                              ("flat-components", 0.93, 1.0)])  # fmt: skip
@pytest.mark.parametrize("share", [0.25, 0.5, 1.0])
def test_coverage_at_fixed_truths_is_as_the_caveat_says(prior, low, high, share):
    fit = correlated()
    threshold = detection_threshold(fit)
    found = inject_and_recover(
        LinearRefit.of(fit), share * threshold.worst.value * threshold.worst_direction, n=600,
        seed=1, prior=prior, upper_au_d2=20.0 * threshold.worst.value,
    )  # fmt: skip
    assert found.coverage_bayes.interval[0] >= low - 0.02
    if share < 0.9:
        assert found.coverage_bayes.value <= high


@pytest.mark.parametrize("confidence", [0.0, 1.0, 1.5])
def test_bad_confidence_is_refused(confidence):
    with pytest.raises(LimitError):
        upper_limit(isotropic(), confidence=confidence)
