import numpy as np
import pytest
from scipy.integrate import quad
from scipy.special import i0e, ndtr

from ngbound.limits import PRIOR_NAMES, thrust_information, thrust_prior
from ngbound.limits.convergence import quantile_with_error
from ngbound.limits.linear_posterior import linear_posterior
from tests.limits.toy import correlated, isotropic

SIGMA = 1e-9


def radial_quantile(density, confidence: float, top: float) -> float:
    m = np.linspace(0.0, top, 20001)[1:]
    values = density(m)
    cumulated = np.cumsum(values)
    return float(np.interp(confidence, cumulated / cumulated[-1], m))


def size_density(A: float, k: int):
    """Density of |A| in sigma, isotropic-uniform prior, estimate A sigma along one axis."""
    if k == 3:
        return lambda m: (
            np.exp(-0.5 * (m - A) ** 2)
            * (-np.expm1(-2.0 * m * A) / (m * A) if A > 0 else 2.0 + 0.0 * m)
        )
    if k == 2:
        return lambda m: np.exp(-0.5 * (m - A) ** 2) * i0e(m * A)
    return lambda m: np.exp(-0.5 * (m - A) ** 2) + np.exp(-0.5 * (m + A) ** 2)


@pytest.mark.parametrize("k", [1, 2, 3])
@pytest.mark.parametrize("A", [0.0, 1.0, 4.0])
def test_isotropic_uniform_against_quadrature(k, A):
    fit = isotropic(k=k, sigma=SIGMA, A=np.eye(3)[0, :k] * A * SIGMA)
    info = thrust_information(fit)
    draws, w = linear_posterior(info, thrust_prior(info)).weighted_draws(1, 16384)
    size = np.linalg.norm(draws, axis=1)[:, None] / SIGMA
    value, error = quantile_with_error(size, 0.95, w[:, None])
    expected = radial_quantile(size_density(A, k), 0.95, A + 8.0)
    assert abs(value - expected) < 4.0 * error
    assert abs(value - expected) < 0.01
    assert error < 0.03


@pytest.mark.parametrize("name", PRIOR_NAMES)
@pytest.mark.parametrize("A_sigmas", [0.0, 1.5])
def test_draws_stand_for_the_target_with_little_waste(name, A_sigmas):
    info = thrust_information(correlated(A_sigmas=A_sigmas))
    _, w = linear_posterior(info, thrust_prior(info, name)).weighted_draws(2, 16384)
    assert np.sum(w) ** 2 / np.sum(w**2) > 0.8 * len(w)


@pytest.mark.parametrize("name", PRIOR_NAMES)
def test_density_integrates_to_one(name):
    info = thrust_information(correlated(k=1, A_sigmas=1.0))
    posterior = linear_posterior(info, thrust_prior(info, name))
    sigma = info.covariance[0, 0] ** 0.5
    total, _ = quad(
        lambda a: float(np.exp(posterior.log_density(np.array([[a * sigma]]))[0])) * sigma,
        -60.0,
        60.0,
        points=[-1.0, -0.1, -0.01, 0.0, 0.01, 0.1, 1.0],
        limit=400,
    )
    assert total == pytest.approx(1.0, abs=2e-4)


def test_outward_radial_draws_follow_the_truncated_gaussian():
    info = thrust_information(correlated(A_sigmas=-2.0))
    posterior = linear_posterior(info, thrust_prior(info, "outward-radial"))
    A = posterior.draw(np.random.default_rng(3), 40000)
    assert np.all(A[:, 0] >= 0.0)
    # P(A_R > a | A_R > 0) at one sigma
    sigma = info.covariance[0, 0] ** 0.5
    expected = ndtr(-3.0) / ndtr(-2.0)
    assert np.mean(A[:, 0] > sigma) == pytest.approx(expected, abs=0.005)
