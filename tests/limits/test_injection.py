import json

import numpy as np
import pytest
from scipy.stats import binom

from ngbound.errors import FitError, LimitError
from ngbound.limits import (
    Rate,
    detection_threshold,
    inject_and_recover,
    linear_refit,
    thrust_information,
)
from tests.limits.toy import correlated

N = 800


def agrees(rate: Rate, expected: float) -> bool:
    low, high = binom.interval(0.9999, rate.trials, expected)
    return low <= rate.hits <= high


def test_false_alarms_and_power_at_the_threshold():
    fit = correlated()
    threshold = detection_threshold(fit, false_alarm=0.05, power=0.9)
    nothing = inject_and_recover(linear_refit(fit), np.zeros(3), n=N, seed=1, false_alarm=0.05)
    worst = threshold.worst.value * threshold.worst_direction
    pushed = inject_and_recover(linear_refit(fit), worst, n=N, seed=2, false_alarm=0.05)
    assert agrees(nothing.declared, 0.05)
    assert agrees(pushed.declared, 0.9)
    np.testing.assert_allclose(pushed.scatter, 1.0, atol=0.08)
    assert np.all(np.abs(pushed.bias.value) < 4.5 * pushed.bias_error.value)


@pytest.mark.parametrize("share", [0.0, 0.5, 1.0])
def test_unified_interval_covers_at_zero_at_half_and_at_the_threshold(share):
    fit = correlated(k=1)
    A = share * detection_threshold(fit).held
    counted = inject_and_recover(linear_refit(fit), A, n=1000, seed=3, confidence=0.95)
    assert counted.coverage_unified is not None
    assert agrees(counted.coverage_unified, 0.95)


def test_profile_limit_covers_a_clear_thrust():
    fit = correlated()
    sigma = np.sqrt(np.diag(thrust_information(fit).covariance))
    clear = inject_and_recover(linear_refit(fit), 8.0 * sigma, n=N, seed=4)
    assert agrees(clear.coverage_magnitude, 0.95)


def test_same_seed_same_counts_and_failures_are_left_out_and_counted():
    fit = correlated()
    inner = linear_refit(fit)

    def fragile(A, random):
        if random.random() < 0.2:
            raise FitError("no orbit")
        return inner(A, random)

    one, two = (inject_and_recover(fragile, np.zeros(3), n=200, seed=5) for _ in range(2))
    assert one.to_dict() == two.to_dict()
    assert 10 < one.n_failed < 80
    assert one.declared.trials == 200 - one.n_failed
    json.dumps(one.to_dict())
    assert "could not be fitted" in str(one)


def test_nothing_fitted_or_bad_choices_are_refused():
    refit = linear_refit(correlated())

    def hopeless(A, random):
        raise FitError("no orbit")

    with pytest.raises(LimitError, match="no orbit"):
        inject_and_recover(hopeless, np.zeros(3), n=3, seed=1)
    with pytest.raises(LimitError, match="3 numbers"):
        inject_and_recover(refit, np.zeros(2), n=3, seed=1)
    for choice in ({"n": 0}, {"n": 1, "false_alarm": 0.0}, {"n": 1, "confidence": 0.5}):
        with pytest.raises(LimitError):
            inject_and_recover(refit, np.zeros(3), seed=1, **choice)


def test_binomial_interval_at_the_ends():
    # rule of three of the exact interval: 0 of 100 -> 0.0362 (Clopper & Pearson 1934)
    assert Rate(0, 100).interval == pytest.approx((0.0, 0.0362), abs=1e-4)
    assert Rate(100, 100).interval == pytest.approx((0.9638, 1.0), abs=1e-4)
