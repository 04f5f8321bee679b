"""What radar adds to the knowledge of a thrust: information, exact posterior, injection."""

import numpy as np
import pytest

from ngbound.fit import Fit, fit_orbit
from ngbound.limits import (
    LIKELIHOODS,
    detection_threshold,
    inject_and_recover,
    sample_posterior,
    threshold_growth,
    thrust_information,
    upper_limit,
)
from ngbound.limits.likelihood import deviance_of, robust_deviance
from ngbound.motion import Thrust
from tests.radar_arcs import mixed_arc

RTN = Thrust("inverse-square", components="RTN")


@pytest.fixture(scope="module")
def push() -> Fit:
    arc, orbit = mixed_arc(seed=12)
    return fit_orbit(arc, RTN, initial=orbit, reject=False)


def test_information_of_echoes_adds_to_that_of_directions(push: Fit) -> None:
    arc = push.arc
    echoes = (arc.table["kind"] == "radar").to_numpy()
    alone = fit_orbit(arc.select(~echoes), RTN, initial=push.orbit, reject=False,
                      epoch_tdb_d=push.orbit.epoch_tdb_d)  # fmt: skip
    radar = ~push.noise.optical
    rows = push.design.reshape(len(radar), 2, 9)[radar].reshape(-1, 9)
    added = push.noise.mask(radar).whiten(rows)
    # both orbits lie within the errors of the other's, so that partials hardly differ
    scale = np.sqrt(np.diag(push.normal))
    whole = (alone.normal + added.T @ added) / np.outer(scale, scale)
    assert whole == pytest.approx(push.normal / np.outer(scale, scale), abs=2e-3)
    before, after = (np.sqrt(np.diag(f.theta_cov)[6:]) for f in (alone, push))
    assert (before / after > 4.0).all() and (before / after).max() > 100.0
    lower = detection_threshold(push).worst.value / detection_threshold(alone).worst.value
    assert lower < 0.2


def test_exact_posterior_meets_linear_theory(push: Fit) -> None:
    found = sample_posterior(push, seed=1, prior="flat-components", target_ess=4000.0)
    assert found.converged
    ratio = np.std(found.A_samples, axis=0) / np.sqrt(np.diag(push.theta_cov)[6:])
    assert ratio == pytest.approx(1.0, abs=0.06)
    miss = (found.A_samples.mean(axis=0) - push.theta[6:]) / np.sqrt(np.diag(push.theta_cov)[6:])
    assert np.abs(miss).max() < 0.1
    assert found.acceptance_independence > 0.5


def test_upper_limit_with_echoes(push: Fit) -> None:
    told = upper_limit(push)
    linear = np.sqrt(push.theta_cov[8, 8])
    assert linear < told.magnitude.value < 8.0 * linear
    grown = threshold_growth(push)
    assert grown.n_obs[-1] == 68 and grown.worst[-1] < 0.5 * grown.worst[-6]


@pytest.mark.parametrize("noise", ["model", "residuals"])
def test_injected_arcs_are_recovered(push: Fit, noise: str) -> None:
    size = 0.7 * float(detection_threshold(push).worst.value)
    info = thrust_information(push)
    told = inject_and_recover(push, size * info.eigenvectors[:, 0], n=200, seed=2, noise=noise)
    assert told.n_failed == 0
    assert np.abs(told.bias / told.bias_error).max() < 4.0
    if noise == "model":
        assert told.scatter == pytest.approx(1.0, abs=0.2)
        low, high = told.declared.interval
        assert low <= told.expected <= high


def test_rejection_in_injected_arcs(push: Fit) -> None:
    told = inject_and_recover(push, np.zeros(3), n=100, seed=3, reject=True)
    assert told.n_failed <= 1
    assert told.scatter == pytest.approx(1.0, abs=0.3)


@pytest.mark.parametrize("name", [n for n in LIKELIHOODS if n != "gaussian"])
def test_robust_likelihood_counts_one_number_of_an_echo(push: Fit, name: str) -> None:
    # near zero all fall off as half of s, whatever the number of residuals, and the share of
    # "contaminated" is that of the density of so many
    s = np.array([0.0, 1e-4])
    for count in (1, 2):
        slope = np.diff(robust_deviance(s, name, count))[0] / 1e-4
        expected = (5.0 + count) / 5.0 if name == "student" else 1.0
        assert slope == pytest.approx(expected, rel=0.06)
    deviance = deviance_of(push, name)
    thetas = np.array([push.theta, push.theta + np.sqrt(np.diag(push.theta_cov))])
    assert np.isfinite(deviance(thetas)).all()
