import numpy as np
import pytest
from scipy.signal import lfilter

from ngbound.limits.convergence import autocorrelation_time, quantile_with_error, split_r_hat


def autoregressive(rho: float, steps: int, walkers: int, seed: int) -> np.ndarray:
    random = np.random.default_rng(seed)
    start = random.standard_normal((1, walkers))
    noise = random.standard_normal((steps, walkers)) * np.sqrt(1.0 - rho**2)
    return lfilter([1.0], [1.0, -rho], noise, axis=0, zi=rho * start)[0]


@pytest.mark.parametrize("rho", [0.0, 0.5, 0.9])
def test_autocorrelation_time_of_an_autoregressive_chain(rho):
    tau = autocorrelation_time(autoregressive(rho, 4000, 32, 1))[0]
    assert tau == pytest.approx((1.0 + rho) / (1.0 - rho), rel=0.05)


def test_a_stuck_walker_and_a_dead_quantity_show():
    chain = autoregressive(0.0, 1000, 16, 2)
    chain[:, 0] = 4.0
    assert autocorrelation_time(chain)[0] > 50.0
    assert np.isinf(autocorrelation_time(np.zeros((100, 4)))[0])


def test_r_hat_near_one_only_when_groups_agree():
    chain = autoregressive(0.0, 500, 16, 3)[:, :, None]
    assert split_r_hat(chain)[0] == pytest.approx(1.0, abs=0.002)
    chain[:, :4] += 1.0
    assert split_r_hat(chain)[0] > 1.05


@pytest.mark.parametrize("rho", [0.0, 0.8])
def test_quantile_error_is_the_scatter_of_repeated_chains(rho):
    found = [quantile_with_error(autoregressive(rho, 300, 16, s), 0.95) for s in range(200)]
    values, errors = np.array(found).T
    assert np.mean(values) == pytest.approx(1.6449, abs=0.02)
    assert np.mean(errors) == pytest.approx(np.std(values), rel=0.25)


def test_weighted_quantile():
    random = np.random.default_rng(4)
    x = random.uniform(0.0, 1.0, (4000, 8))
    value, error = quantile_with_error(x, 0.95, 2.0 * x)
    assert abs(value - np.sqrt(0.95)) < 4.0 * error
    assert error < 0.002
