import json

import numpy as np
import pytest
from scipy.stats import binom

from ngbound.errors import LimitError, SamplingError
from ngbound.limits import (
    LinearRefit,
    Rate,
    Refits,
    detection_threshold,
    inject_and_recover,
    power_curve,
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
    nothing = inject_and_recover(LinearRefit.of(fit), np.zeros(3), n=N, seed=1, false_alarm=0.05)
    worst = threshold.worst.value * threshold.worst_direction
    pushed = inject_and_recover(LinearRefit.of(fit), worst, n=N, seed=2, false_alarm=0.05)
    assert agrees(nothing.declared, 0.05)
    assert nothing.expected == pytest.approx(0.05, rel=1e-6)
    assert agrees(pushed.declared, 0.9)
    assert pushed.expected == pytest.approx(0.9, rel=1e-6)
    np.testing.assert_allclose(pushed.scatter, 1.0, atol=0.08)
    assert np.all(np.abs(pushed.bias.value) < 4.5 * pushed.bias_error.value)


@pytest.mark.parametrize("share", [0.0, 0.5, 1.0])
def test_unified_interval_covers_at_zero_at_half_and_at_the_threshold(share):
    fit = correlated(k=1)
    A = share * detection_threshold(fit).held
    counted = inject_and_recover(LinearRefit.of(fit), A, n=1000, seed=3, confidence=0.95)
    assert counted.coverage_unified is not None
    assert agrees(counted.coverage_unified, 0.95)


def test_profile_limit_covers_a_clear_thrust():
    fit = correlated()
    sigma = np.sqrt(np.diag(thrust_information(fit).covariance))
    clear = inject_and_recover(LinearRefit.of(fit), 8.0 * sigma, n=N, seed=4)
    assert agrees(clear.coverage_magnitude, 0.95)


def test_posterior_limit_covers_on_average_over_its_prior():
    fit = correlated()
    info = thrust_information(fit)
    random = np.random.default_rng(5)
    top = 6.0 * info.eigenvalues[0] ** -0.5
    direction = random.standard_normal((300, 3))
    direction /= np.linalg.norm(direction, axis=1)[:, None]
    truth = direction * random.uniform(0.0, top, 300)[:, None]
    counted = inject_and_recover(
        LinearRefit.of(fit), truth, n=300, seed=6, prior="isotropic-uniform", upper_au_d2=top
    )
    assert counted.coverage_bayes is not None
    assert agrees(counted.coverage_bayes, 0.95)
    assert "prior" in str(counted) or "posterior limit" in str(counted)


def test_power_curve_rises_through_the_stated_power():
    curve = power_curve(
        LinearRefit.of(correlated()), "worst", n=400, seed=7, shares=(0.0, 0.5, 1.0, 1.5)
    )
    rates = [rate.value for rate in curve.rates]
    assert rates == sorted(rates)
    for rate, each in zip(curve.rates, curve.recoveries, strict=True):
        assert agrees(rate, each.expected)
    assert curve.recoveries[2].expected == pytest.approx(0.95, rel=1e-6)
    assert curve.size[2].value == pytest.approx(curve.threshold.value)
    json.dumps(curve.to_dict())
    assert "worst" not in str(curve) and "linear theory" in str(curve)


class Fragile:
    """Loses every arc whose first random number is small; counts the arcs it is given."""

    def __init__(self, lose: float = 0.2) -> None:
        self.inner, self.lose, self.given = LinearRefit.of(correlated()), lose, 0
        self.components, self.information = self.inner.components, self.inner.information

    noise_dof, noise_excess = None, 1.0
    choices = {}

    def refit(self, A, streams):
        self.given += len(A)
        done = self.inner.refit(A, streams)
        failed = np.array([np.random.default_rng(s).random() < self.lose for s in streams])
        A_hat = np.where(failed[:, None], np.nan, done.A_hat)
        return Refits(A_hat, done.covariance, done.delta_chi2, done.n_rejected, failed)


def test_same_seed_same_counts_and_failures_are_left_out_and_counted():
    one, two = (inject_and_recover(Fragile(), np.zeros(3), n=200, seed=5) for _ in range(2))
    assert one.to_dict() == two.to_dict()
    assert 10 < one.n_failed < 80
    assert one.declared.trials == 200 - one.n_failed
    json.dumps(one.to_dict())
    assert "could not be fitted" in str(one)


class Interrupted(Exception):
    """Stands for the process being killed."""


@pytest.mark.parametrize("stop_at", [1, 3])
def test_interrupted_injection_resumes_to_the_same_numbers(tmp_path, stop_at):
    whole = inject_and_recover(Fragile(), np.zeros(3), n=300, seed=8)
    path = tmp_path / "injections.npz"
    calls = []

    def kill(step: int, total: int, message: str) -> None:
        calls.append((step, total, message))
        if len(calls) == stop_at:
            raise Interrupted

    with pytest.raises(Interrupted):
        inject_and_recover(Fragile(), np.zeros(3), n=300, seed=8, checkpoint=path, progress=kill)
    rest = Fragile()
    resumed = inject_and_recover(rest, np.zeros(3), n=300, seed=8, checkpoint=path)
    assert rest.given == 300 - 64 * stop_at
    assert whole.to_dict() == resumed.to_dict()
    assert np.array_equal(whole.A_hat, resumed.A_hat, equal_nan=True)
    with pytest.raises(SamplingError, match="another problem"):
        inject_and_recover(Fragile(), np.ones(3), n=300, seed=8, checkpoint=path)


def test_nothing_fitted_or_bad_choices_are_refused():
    refit = LinearRefit.of(correlated())
    with pytest.raises(LimitError, match="None of the 3"):
        inject_and_recover(Fragile(lose=2.0), np.zeros(3), n=3, seed=1)
    with pytest.raises(LimitError, match="3 finite numbers"):
        inject_and_recover(refit, np.zeros(2), n=3, seed=1)
    for choice in ({"n": 0}, {"n": 1, "false_alarm": 0.0}, {"n": 1, "confidence": 0.5}):
        with pytest.raises(LimitError):
            inject_and_recover(refit, np.zeros(3), seed=1, **choice)


def test_binomial_interval_at_the_ends():
    # rule of three of the exact interval: 0 of 100 -> 0.0362 (Clopper & Pearson 1934)
    assert Rate(0, 100).interval == pytest.approx((0.0, 0.0362), abs=1e-4)
    assert Rate(100, 100).interval == pytest.approx((0.9638, 1.0), abs=1e-4)


def test_counts_are_not_resumed_with_another_way_to_fit(tmp_path):
    class Other(Fragile):
        choices = {"reject": True}

    path = tmp_path / "counts"
    power_curve(Fragile(), n=20, seed=3, shares=(1.0,), checkpoint=path)
    with pytest.raises(SamplingError, match="another problem"):
        power_curve(Other(), n=20, seed=3, shares=(1.0,), checkpoint=path)


def test_errors_that_are_too_large_on_average_raise_the_threshold_of_the_power_curve():
    class Wide(Fragile):
        noise_excess = 1.21

    plain, wide = (power_curve(kind(), n=20, seed=3, shares=(1.0,)) for kind in (Fragile, Wide))
    assert wide.threshold.value == pytest.approx(1.1 * plain.threshold.value, rel=1e-9)
    assert wide.recoveries[0].expected == pytest.approx(0.95, abs=1e-6)
