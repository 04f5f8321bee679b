import numpy as np
import pytest
from scipy.special import ndtr, ndtri

from ngbound.errors import LimitError
from ngbound.limits import flat_prior_limit, unified_interval


def test_interval_scales_with_sigma():
    low, high = unified_interval(3.0, 2.0, 0.9)
    one = unified_interval(1.5, 1.0, 0.9)
    assert (low, high) == pytest.approx((2.0 * one[0], 2.0 * one[1]))


@pytest.mark.parametrize("confidence", [0.51, 0.6827, 0.9, 0.95, 0.99])
def test_edges_rise_with_the_measurement_and_join_smoothly(confidence):
    x = np.linspace(-6.0, 8.0, 1401)
    edges = np.array([unified_interval(v, 1.0, confidence) for v in x])
    assert np.all(edges[:, 0] >= 0.0) and np.all(edges[:, 1] > edges[:, 0])
    assert np.all(np.diff(edges, axis=0) >= -1e-9)
    assert np.max(np.diff(edges, axis=0)) < 0.05


@pytest.mark.parametrize("mu", [0.0, 0.1, 0.5, 1.0, 1.9, 3.0, 6.0])
def test_coverage_is_exact(mu):
    # the set of x whose interval holds mu is one interval; its probability is the coverage
    x = np.linspace(mu - 7.0, mu + 7.0, 14001)
    edges = np.array([unified_interval(v, 1.0, 0.95) for v in x[::20]])
    holds = (edges[:, 0] <= mu) & (mu <= edges[:, 1])
    inside = x[::20][holds]
    step = x[20] - x[0]
    low = 0.0 if inside[0] == x[0] else ndtr(inside[0] - 0.5 * step - mu)
    coverage = ndtr(inside[-1] + 0.5 * step - mu) - low
    assert coverage == pytest.approx(0.95, abs=0.002)


def test_far_from_the_boundary_it_is_the_central_interval():
    low, high = unified_interval(20.0, 1.0, 0.95)
    assert (low, high) == pytest.approx((20.0 - 1.959964, 20.0 + 1.959964), abs=1e-5)


def test_flat_prior_limit_far_below_zero_keeps_its_digits():
    # for x -> -inf the posterior is exponential with rate |x|
    assert flat_prior_limit(-40.0, 1.0, 0.95) == pytest.approx(-np.log(0.05) / 40.0, rel=0.01)
    assert flat_prior_limit(0.0, 1.0, 0.95) == pytest.approx(ndtri(0.975))
    assert flat_prior_limit(0.0, 3.0, 0.95) == pytest.approx(3.0 * ndtri(0.975))


def test_half_coverage_has_no_unique_region():
    with pytest.raises(LimitError, match="above 0.5"):
        unified_interval(-1.0, 1.0, 0.5)


@pytest.mark.parametrize("x, sigma, confidence", [(np.nan, 1, 0.9), (0, 0, 0.9), (0, 1, 1.0)])
def test_bad_arguments_are_refused(x, sigma, confidence):
    with pytest.raises(LimitError):
        unified_interval(x, sigma, confidence)
    with pytest.raises(LimitError):
        flat_prior_limit(x, sigma, confidence)
