import json
from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import chi2, norm

from ngbound.errors import LimitError
from ngbound.limits import detection_threshold, noncentrality, thrust_information
from tests.limits.toy import correlated, isotropic

TRIALS = 40000


def binomial(rate: float) -> float:
    """Four standard errors of a rate counted in TRIALS."""
    return 4.0 * np.sqrt(rate * (1.0 - rate) / TRIALS)


def estimates(info, A, seed):
    random = np.random.default_rng(seed)
    z = random.standard_normal((TRIALS, info.k))
    return A + (z / np.sqrt(info.eigenvalues)) @ info.eigenvectors.T


@pytest.mark.parametrize("k", [1, 2, 3])
@pytest.mark.parametrize("false_alarm", [0.0027, 0.05])
def test_direction_free_threshold_has_its_power_and_false_alarms(k, false_alarm):
    fit = correlated(k=k)
    info = thrust_information(fit)
    threshold = detection_threshold(fit, false_alarm=false_alarm, power=0.95)
    critical = chi2.isf(false_alarm, k)
    random = np.random.default_rng(7)
    direction = random.standard_normal(k)
    direction /= np.linalg.norm(direction)
    cases = [
        (np.zeros(k), false_alarm),
        (threshold.along(direction).value * direction, 0.95),
        (threshold.worst.value * threshold.worst_direction, 0.95),
        (threshold.best.value * threshold.best_direction, 0.95),
    ]
    for seed, (A, rate) in enumerate(cases):
        found = estimates(info, A, seed)
        statistic = np.einsum("ij,jk,ik->i", found, info.matrix, found)
        assert abs(np.mean(statistic > critical) - rate) < binomial(rate)


@pytest.mark.parametrize("sided", [1, 2])
def test_single_component_thresholds_have_their_power(sided):
    fit = correlated()
    info = thrust_information(fit)
    threshold = detection_threshold(fit, false_alarm=0.01, power=0.9, sided=sided)
    z = norm.isf(0.01 / sided)
    for i in range(3):
        axis = np.eye(3)[i]
        # others free: the marginal estimate; others held: the conditional one at zero
        free = estimates(info, threshold.free[i].value * axis, i)[:, i]
        free = free / info.covariance[i, i] ** 0.5
        drawn = estimates(info, threshold.held[i].value * axis, 10 + i)
        held = drawn @ info.matrix[:, i] / info.matrix[i, i] ** 0.5
        for t in (free, held):
            found = t > z if sided == 1 else np.abs(t) > z
            assert abs(np.mean(found) - 0.9) < binomial(0.9)


@pytest.mark.parametrize("dof", [5, 30])
def test_estimated_noise_scale_has_its_power(dof):
    random = np.random.default_rng(3)
    scale = np.sqrt(random.chisquare(dof, TRIALS) / dof)
    for k, sided in [(1, 1), (1, 2), (3, 2)]:
        delta = noncentrality(0.01, 0.9, k, sided=sided, noise_dof=dof)
        z = random.standard_normal((TRIALS, k))
        null = random.standard_normal((TRIALS, k)) / scale[:, None]
        z[:, 0] += delta
        z = z / scale[:, None]
        if sided == 1:
            statistic, without = z[:, 0], null[:, 0]
        else:
            statistic, without = np.sum(z**2, axis=1), np.sum(null**2, axis=1)
        other = random.permutation(TRIALS)
        critical = np.quantile(without[other], 0.99)
        assert abs(np.mean(statistic > critical) - 0.9) < 0.03


def test_estimated_scale_tends_to_the_known_one():
    for k in (1, 2, 3):
        known = noncentrality(0.0027, 0.95, k)
        assert noncentrality(0.0027, 0.95, k, noise_dof=10) > 1.1 * known
        assert noncentrality(0.0027, 0.95, k, noise_dof=1_000_000) == pytest.approx(known, rel=1e-4)


def test_one_sided_and_two_sided_sums_of_quantiles():
    assert noncentrality(0.01, 0.95, sided=1) == pytest.approx(norm.isf(0.01) + norm.ppf(0.95))
    assert noncentrality(0.0027, 0.95) == pytest.approx(
        norm.isf(0.0027 / 2) + norm.ppf(0.95), abs=1e-6
    )
    assert noncentrality(0.3, 0.5) < norm.isf(0.15)


@pytest.mark.parametrize("false_alarm", [1e-12, 1e-6, 0.3])
@pytest.mark.parametrize("power", [0.31, 0.5, 0.999999])
def test_noncentrality_is_found_at_the_ends_of_the_range(false_alarm, power):
    for k in (1, 2, 3):
        delta = noncentrality(false_alarm, power, k)
        assert np.isfinite(delta) and delta > 0.0


def test_isotropic_mean_is_the_mean_over_the_sphere():
    fit = correlated()
    threshold = detection_threshold(fit)
    random = np.random.default_rng(5)
    n = random.standard_normal((400_000, 3))
    n /= np.linalg.norm(n, axis=1)[:, None]
    seen = np.einsum("ij,jk,ik->i", n, threshold.information.matrix, n)
    mean = threshold.delta_all * np.mean(seen**-0.5)
    assert threshold.isotropic_mean.value == pytest.approx(mean, rel=0.01)
    flat = detection_threshold(correlated(k=2))
    m = flat.information.matrix
    angle = np.linspace(0.0, 2.0 * np.pi, 20001)[:-1]
    v = np.stack([np.cos(angle), np.sin(angle)], axis=1)
    mean = flat.delta_all * np.mean(np.einsum("ij,jk,ik->i", v, m, v) ** -0.5)
    assert flat.isotropic_mean.value == pytest.approx(mean, rel=1e-8)


def test_isotropic_information_gives_the_same_everywhere():
    threshold = detection_threshold(isotropic(sigma=2e-9))
    reach = 2e-9 * threshold.delta_all
    for value in (threshold.worst, threshold.best, threshold.isotropic_mean):
        assert value.to_value("au/d2") == pytest.approx(reach)
    np.testing.assert_allclose(threshold.direction_free.value, reach)
    assert threshold.significance_sigma == pytest.approx(3.0, abs=0.001)


def test_map_holds_the_axes_and_stays_between_best_and_worst():
    threshold = detection_threshold(correlated())
    drawn = threshold.map(37, 72)
    assert drawn.threshold.shape == (37, 72)
    equator = int(np.flatnonzero(drawn.latitude_deg == 0.0)[0])
    east = int(np.flatnonzero(drawn.longitude_deg == 90.0)[0])
    assert drawn.threshold[equator, 0].value == pytest.approx(threshold.direction_free[0].value)
    assert drawn.threshold[equator, east].value == pytest.approx(threshold.direction_free[1].value)
    assert drawn.threshold[-1, 0].value == pytest.approx(threshold.direction_free[2].value)
    assert np.all(drawn.threshold.value <= threshold.worst.value * (1.0 + 1e-9))
    assert np.all(drawn.threshold.value >= threshold.best.value * (1.0 - 1e-9))


@pytest.mark.parametrize("k, shape", [(1, (1, 2)), (2, (1, 12))])
def test_map_with_fewer_components(k, shape):
    threshold = detection_threshold(correlated(k=k))
    assert threshold.map(5, 12).threshold.shape == shape
    json.dumps(threshold.to_dict())
    assert "worst direction" in str(threshold)


def test_estimate_does_not_enter_and_noise_scale_does():
    quiet, loud = detection_threshold(correlated()), detection_threshold(correlated(A_sigmas=9.0))
    np.testing.assert_allclose(quiet.free.value, loud.free.value)
    scaled = detection_threshold(correlated(), noise_scale=1.5)
    np.testing.assert_allclose(scaled.free.value, 1.5 * quiet.free.value)
    assert scaled.worst.value == pytest.approx(1.5 * quiet.worst.value)


def test_errors_that_rest_on_few_degrees_of_freedom_raise_the_threshold_by_themselves():
    fit = replace(correlated(), noise_dof=8)
    by_itself, off = detection_threshold(fit), detection_threshold(fit, noise_dof=None)
    assert (by_itself.noise_dof, off.noise_dof) == (8, None)
    assert by_itself.delta_one == noncentrality(0.0027, 0.95, 1, noise_dof=8)
    assert by_itself.worst > 1.3 * off.worst
    assert off.worst == detection_threshold(correlated()).worst
    assert "8 degrees of freedom" in str(by_itself)
    assert by_itself.to_dict()["information"]["noise_dof"] == 8


def test_several_laws_tried_cost_threshold():
    one, five = detection_threshold(correlated()), detection_threshold(correlated(), trials=5)
    assert 1.0 - (1.0 - five.false_alarm_per_trial) ** 5 == pytest.approx(0.0027)
    assert five.worst > one.worst


@pytest.mark.parametrize(
    "choice",
    [
        {"false_alarm": 0.0},
        {"false_alarm": 0.96},
        {"power": 1.0},
        {"sided": 3},
        {"noise_scale": 0.0},
        {"noise_dof": 0},
        {"trials": 0},
    ],
)
def test_choices_out_of_range_are_refused(choice):
    with pytest.raises(LimitError):
        detection_threshold(correlated(), **choice)
