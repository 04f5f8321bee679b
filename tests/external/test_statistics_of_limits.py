"""Limits and thresholds against published tables and laws; the source stands beside each."""

import numpy as np
import pytest
from scipy.stats import chi2, f

from ngbound.limits import (
    detection_threshold,
    flat_prior_limit,
    noncentrality,
    sample_posterior,
    thrust_information,
    unified_interval,
    upper_limit,
)
from tests.limits.toy import ToyFit, isotropic
from tests.units import arcsec, mas

LEVELS = (0.6827, 0.90, 0.95, 0.99)

# G. J. Feldman & R. D. Cousins 1998, Phys. Rev. D 57, 3873, Table X (units of sigma)
TABLE_X = {
    -3.0: [(0.00, 0.04), (0.00, 0.26), (0.00, 0.42), (0.00, 0.80)],
    -2.0: [(0.00, 0.07), (0.00, 0.40), (0.00, 0.62), (0.00, 1.10)],
    -1.0: [(0.00, 0.27), (0.00, 0.81), (0.00, 1.10), (0.00, 1.68)],
    0.0: [(0.00, 1.00), (0.00, 1.64), (0.00, 1.96), (0.00, 2.58)],
    1.0: [(0.24, 2.00), (0.00, 2.64), (0.00, 2.96), (0.00, 3.58)],
    2.0: [(1.00, 3.00), (0.58, 3.64), (0.35, 3.96), (0.00, 4.58)],
    3.0: [(2.00, 4.00), (1.37, 4.64), (1.14, 4.96), (0.67, 5.58)],
}


@pytest.mark.parametrize("x", TABLE_X)
def test_feldman_cousins_table_x(x):
    for level, expected in zip(LEVELS, TABLE_X[x], strict=True):
        assert unified_interval(x, 1.0, level) == pytest.approx(expected, abs=0.01)


# flat prior on mu >= 0, equal to CLs (A. L. Read 2002, J. Phys. G 28, 2693): 90 and 95 % limits,
# x + Phi^-1(1 - (1 - C) Phi(x))
FLAT = {
    -3.0: (0.643, 0.817),
    -2.0: (0.837, 1.052),
    -1.0: (1.148, 1.412),
    0.0: (1.645, 1.960),
    1.0: (2.378, 2.727),
    2.0: (3.295, 3.656),
    3.0: (4.282, 4.645),
}


@pytest.mark.parametrize("x", FLAT)
def test_flat_prior_limits(x):
    for level, expected in zip((0.90, 0.95), FLAT[x], strict=True):
        assert flat_prior_limit(x, 1.0, level) == pytest.approx(expected, abs=0.001)


@pytest.mark.parametrize("x", [-3.0, 3.0])
def test_sampled_outward_radial_limit_is_the_flat_prior_limit(x):
    sigma = 1e-9
    post = sample_posterior(
        isotropic(k=1, sigma=sigma, A=x * sigma), seed=1, prior="outward-radial"
    )
    limit = upper_limit(post)
    assert abs(limit.magnitude.value / sigma - FLAT[x][1]) < (
        4.0 * limit.magnitude_error.value / sigma
    )


def test_radius_of_a_gaussian_without_signal():
    # sqrt of the chi2 quantiles of standard tables: 95 % radius in one, two, three dimensions
    for k, radius in [(1, 1.9600), (2, 2.4477), (3, 2.7955)]:
        limit = upper_limit(isotropic(k=k, sigma=1.0), prior="flat-components")
        assert abs(limit.magnitude.value - radius) < 4.0 * limit.magnitude_error.value
        assert limit.magnitude.value == pytest.approx(radius, rel=0.003)


def test_critical_values_behind_the_thresholds():
    # standard tables of chi2 (3 and 1 degrees of freedom) and F
    for level, value in [(0.6827, 3.527), (0.90, 6.251), (0.95, 7.815), (0.9973, 14.156)]:
        assert chi2.ppf(level, 3) == pytest.approx(value, abs=0.001)
    for k, dof, level, value in [
        (1, 10, 0.95, 4.965),
        (3, 60, 0.95, 2.758),
        (3, 60, 0.99, 4.126),
        (3, 120, 0.95, 2.680),
    ]:
        assert f.ppf(level, k, dof) == pytest.approx(value, abs=0.001)


def test_noncentrality_of_published_power_tables():
    # two-sided 5 %, power 0.8 and 0.9, one component: (1.95996 + 0.84162)^2 = 7.849,
    # (1.95996 + 1.28155)^2 = 10.507; three components: 10.903 and 14.171
    # (G. E. Haynam, Z. Govindarajulu & F. C. Leone 1962, tables of noncentral chi2; from memory)
    for k, power, value in [(1, 0.8, 7.849), (1, 0.9, 10.507), (3, 0.8, 10.903), (3, 0.9, 14.171)]:
        assert noncentrality(0.05, power, k) ** 2 == pytest.approx(value, abs=0.002)


def sagitta_fit(n: int, span_d: float, distance_au: float, sigma_rad: float) -> ToyFit:
    """Straight path at right angles to the sightline, constant acceleration across it."""
    t = np.linspace(0.0, span_d, n)
    design = np.stack([np.ones(n), t, 0.5 * t**2], axis=1) / (distance_au * sigma_rad)
    return ToyFit(
        components="T",
        names=("y", "vy", "A2"),
        theta=np.zeros(3),
        normal=design.T @ design,
        n_state=2,
        chi2=float(n - 3),
        dof=n - 3,
    )


@pytest.mark.parametrize("n", [300, 3000])
@pytest.mark.parametrize(
    "span_d, distance_au, sigma_rad", [(90.0, 1.5, 0.3 * arcsec), (3650.0, 3.0, 5 * mas)]
)
def test_sagitta_law(n, span_d, distance_au, sigma_rad):
    # R. L. Gluckstern 1963, NIM 24, 381: curvature error sqrt(720 / (N + 4)); the limit for many
    # points, sigma_A = sigma D sqrt(720 / N) / T^2, to 1 %
    info = thrust_information(sagitta_fit(n, span_d, distance_au, sigma_rad))
    law = sigma_rad * distance_au * np.sqrt(720.0 / n) / span_d**2
    assert info.sigma_held("T").value == pytest.approx(law, rel=0.01)
    exact = sigma_rad * distance_au * np.sqrt(720.0 / (n + 4)) / span_d**2
    assert info.sigma_held("T").value == pytest.approx(exact, rel=0.01)
    # freeing position and velocity costs a factor six in sigma: t^2 / 2 against 1 and t
    assert info.inflation_by_orbit[0] == pytest.approx(36.0, rel=0.02)


def test_sagitta_law_in_the_detection_threshold():
    fit = sagitta_fit(3000, 90.0, 1.5, 0.3 * arcsec)
    sigma = 0.3 * arcsec * 1.5 * np.sqrt(720.0 / 3000) / 90.0**2
    # 3 sigma and 95 %: 2.99998 + 1.64485 (quantiles of standard tables)
    threshold = detection_threshold(fit, false_alarm=0.0027, power=0.95)
    assert threshold.held[0].value / sigma == pytest.approx(4.6448, rel=0.01)
