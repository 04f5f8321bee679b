"""Complete injections, held to the program's own fit of a synthetic arc."""

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from scipy.stats import binom

from ngbound.arc import Arc, ErrorModel
from ngbound.errors import LimitError
from ngbound.fit import compare_fits, fit_orbit
from ngbound.limits import ExactRefit, detection_threshold, inject_and_recover
from ngbound.limits.refit import _given_back
from ngbound.motion import Thrust
from tests.limits.arcs import CLASSES, ERRORS, fitted, simulated_arc
from tests.units import arcsec

COMET = replace(CLASSES["comet, 200 days through perihelion"], n_nights=16, per_night=4)


@pytest.fixture(scope="module")
def push():
    return fitted(COMET)


@pytest.fixture(scope="module")
def threshold(push):
    found = detection_threshold(push)
    return found.worst.value * found.worst_direction


def injected_arc(
    model: ExactRefit, A: np.ndarray, stream: np.random.SeedSequence, stated: bool = True
) -> Arc:
    """The arc that the model makes in its head, written down: real places moved by minus r_i."""
    y = model.y_null.copy()
    y[6:] += model._tail @ A
    frame = model.frame(y, 9)
    shift = model.draw(np.random.default_rng(stream)) - model.seen(y[None, :], frame.hood)[0]
    table = model.fit.used.table[model.fit.keep]
    dec = table["dec_rad"].to_numpy()
    places = pd.DataFrame(
        {
            "permID": "999999",
            "mode": "CCD",
            "stn": table["stn"].to_numpy(),
            "obsTime": table["obsTime"].to_numpy(),
            "ra": np.degrees(table["ra_rad"].to_numpy() + shift[0::2] / np.cos(dec)),
            "dec": np.degrees(dec + shift[1::2]),
            "astCat": "Gaia2",
        }
    )
    if stated:
        places["rmsRA"] = table["rmsRA"].to_numpy()
        places["rmsDec"] = table["rmsDec"].to_numpy()
    return Arc.from_frame(places, name="injected")


@pytest.mark.parametrize("reject", [False, True])
def test_an_injection_is_what_the_program_finds_in_that_arc(push, threshold, reject):
    model = ExactRefit(push, reject=reject)
    stream = np.random.SeedSequence(3)
    done = model.refit(threshold[None, :], [stream])
    arc = injected_arc(model, threshold, stream)
    thrust = push.thrust
    found = fit_orbit(arc, thrust, ERRORS, initial=push.orbit, reject=reject)
    sigma = np.sqrt(np.diag(found.theta_cov)[6:])
    np.testing.assert_allclose(done.A_hat[0] / sigma, found.theta[6:] / sigma, atol=0.01)
    np.testing.assert_allclose(np.sqrt(np.diag(done.covariance[0])), sigma, rtol=0.01)
    assert done.n_rejected[0] == found.n_rejected
    null = fit_orbit(arc, None, ERRORS, initial=push.orbit, reject=False, keep=found.keep)
    if not reject:
        assert done.delta_chi2[0] == pytest.approx(null.chi2 - found.chi2, abs=0.02)


@pytest.mark.parametrize("station_offset_arcsec", [0.0, 0.3])
def test_the_outlier_rule_in_the_loop_is_that_of_the_fit(station_offset_arcsec, monkeypatch):
    arc, orbit = simulated_arc(COMET)
    errors = replace(ERRORS, station_offset_arcsec=station_offset_arcsec)
    push = fit_orbit(arc, Thrust(COMET.law), errors, initial=orbit, reject=False)
    threshold = detection_threshold(push)
    A = threshold.worst.value * threshold.worst_direction
    model = ExactRefit(push, reject=True)
    assert (model.noise.shared is not None) == (station_offset_arcsec > 0.0)
    draw = model.draw

    def with_gross_errors(random):
        noise = draw(random)
        rows = random.choice(noise.size, 6, replace=False)
        noise[rows] += random.uniform(0.8, 4.0, 6) * arcsec
        return noise

    monkeypatch.setattr(model, "draw", with_gross_errors)
    streams = np.random.SeedSequence(11).spawn(4)
    both = model.fit_both(np.tile(A, (4, 1)), streams)
    done = model.refit(np.tile(A, (4, 1)), streams)
    assert done.n_rejected.sum() >= 8
    for i, stream in enumerate(streams):
        made = injected_arc(model, A, stream)
        found = fit_orbit(made, push.thrust, errors, initial=push.orbit)
        null = fit_orbit(made, None, errors, initial=push.orbit)
        assert np.array_equal(both.push.keep[i], found.keep)
        assert np.array_equal(both.null.keep[i], null.keep)
        sigma = found.A_sigma.value
        np.testing.assert_allclose(done.A_hat[i] / sigma, found.A.value / sigma, atol=0.01)
        expected = compare_fits(null, found).delta_chi2
        assert done.delta_chi2[i] == pytest.approx(expected, abs=0.02)


def test_counts_agree_with_linear_theory_and_do_not_depend_on_the_lot(push, threshold):
    found = inject_and_recover(push, threshold, n=150, seed=1)
    assert found.n_failed == 0
    low, high = found.declared.interval
    assert low - 0.02 < found.expected < high + 0.02
    assert np.all(np.abs(found.bias.value) < 4.5 * found.bias_error.value)
    np.testing.assert_allclose(found.scatter, 1.0, atol=0.25)
    streams = np.random.SeedSequence(1).spawn(150)
    alone = ExactRefit(push).refit(threshold[None, :], streams[70:71])
    np.testing.assert_allclose(alone.A_hat[0], found.A_hat.value[70], rtol=1e-6)


def test_one_component_with_the_others_held(push):
    model = ExactRefit(push, free="R")
    held = detection_threshold(push).held[0].value
    sigma = float(model.information.covariance[0, 0] ** 0.5)
    assert held / sigma == pytest.approx(detection_threshold(push).delta_one, rel=1e-9)
    found = inject_and_recover(push, [held], n=100, seed=2, free="R")
    assert found.components == "R"
    assert found.scatter[0] == pytest.approx(1.0, abs=0.25)
    assert found.coverage_unified is not None


def test_noise_of_the_model_has_its_covariance(push):
    model = ExactRefit(push)
    white = np.array([model.noise.whiten(model.draw(np.random.default_rng(i))) for i in range(400)])
    assert np.mean(white**2) == pytest.approx(1.0, abs=0.02)
    correlation = white.T @ white / len(white) - np.eye(white.shape[1])
    assert np.max(np.abs(correlation)) < 0.4
    assert np.sqrt(np.mean(correlation**2)) < 0.055


def test_noise_of_the_residuals_has_their_size(push):
    model = ExactRefit(push, noise="residuals")
    white = np.array([model.noise.whiten(model.draw(np.random.default_rng(i))) for i in range(400)])
    expected = np.mean([np.mean(np.concatenate(donors) ** 2) for donors in model._donors])
    assert expected == pytest.approx(push.chi2 / push.dof, rel=0.25)
    assert np.mean(white**2) == pytest.approx(expected, rel=0.03)
    assert abs(np.mean(white)) < 0.03


def test_a_night_is_given_back_what_the_fit_absorbed():
    random = np.random.default_rng(4)
    q = np.linalg.qr(random.standard_normal((24, 5)))[0]
    rest = np.eye(24) - q @ q.T
    night = slice(6, 12)
    drawn = random.standard_normal((20000, 24)) @ rest
    back = np.array([_given_back(each[night], q[night]) for each in drawn])
    np.testing.assert_allclose(back.T @ back / len(back), np.eye(6), atol=0.04)
    assert np.mean(drawn[:, night] ** 2) < 0.9


def test_choices_out_of_range_are_refused(push):
    with pytest.raises(LimitError, match="some of RTN"):
        ExactRefit(push, free="X")
    with pytest.raises(LimitError, match="model, residuals"):
        ExactRefit(push, noise="white")


def test_errors_shared_by_many_nights_are_drawn_and_fitted_too():
    arc, orbit = simulated_arc(COMET)
    errors = replace(ERRORS, station_offset_arcsec=0.3)
    push = fit_orbit(arc, Thrust(COMET.law), errors, initial=orbit, reject=False)
    model = ExactRefit(push)
    assert model.noise.shared is not None
    draws = np.array([model.draw(np.random.default_rng(i)) for i in range(400)])
    white = model.whiten(draws)
    assert np.mean(white**2) == pytest.approx(1.0, abs=0.02)
    along = model.noise.modes.axes.T @ model.noise.whiten_nights(draws.T)
    expected = 1.0 + model.noise.modes.strength**2
    np.testing.assert_allclose(np.mean(along**2, axis=1) / expected, 1.0, atol=0.3)
    found = inject_and_recover(push, np.zeros(3), n=100, seed=5, false_alarm=0.05)
    np.testing.assert_allclose(found.scatter, 1.0, atol=0.25)


SMALL = replace(COMET, n_nights=10, per_night=4)


@pytest.fixture(scope="module")
def from_table():
    """A fit whose errors are those of the table, rescaled by the scatter of the residuals."""
    arc, orbit = simulated_arc(SMALL)
    frame = arc.table[["permID", "mode", "stn", "obsTime", "ra", "dec"]].copy()
    frame["astCat"] = "Gaia2"
    bare = Arc.from_frame(frame, name="bare")
    errors = ErrorModel(rescale_least=12)
    return fit_orbit(bare, Thrust(SMALL.law), errors, initial=orbit), errors, orbit


def test_errors_are_rescaled_in_each_arc_as_the_fit_does(from_table):
    push, errors, _ = from_table
    assert push.scales and push.noise_dof is not None
    model = ExactRefit(push, reject=True)
    assert model.rescale and model.noise_dof == push.noise_dof
    streams = np.random.SeedSequence(21).spawn(3)
    nothing = np.zeros((3, 3))
    both = model.fit_both(nothing, streams)
    done = model.refit(nothing, streams)
    known = ExactRefit(push, reject=True, rescale=False).refit(nothing, streams)
    for i, stream in enumerate(streams):
        made = injected_arc(model, nothing[i], stream, stated=False)
        found = fit_orbit(made, push.thrust, errors, initial=push.orbit)
        null = fit_orbit(made, None, errors, initial=push.orbit)
        assert np.array_equal(both.push.keep[i], found.keep)
        sigma = found.A_sigma.value
        own = np.sqrt(np.diag(done.covariance[i]))
        # the scales of the stations are settled to 1 %
        np.testing.assert_allclose(own, sigma, rtol=0.01)
        np.testing.assert_allclose(done.A_hat[i] / sigma, found.A.value / sigma, atol=0.02)
        expected = compare_fits(null, found).delta_chi2
        assert done.delta_chi2[i] == pytest.approx(expected, rel=0.02, abs=0.02)
    spread = np.sqrt(np.einsum("mii->mi", done.covariance) / np.einsum("mii->mi", known.covariance))
    assert np.ptp(spread[:, 0]) > 0.05


def test_the_test_of_fisher_keeps_its_false_alarms_where_errors_are_estimated(from_table):
    push, _, _ = from_table
    found = inject_and_recover(push, np.zeros(3), n=150, seed=8, false_alarm=0.05)
    low, high = found.declared.interval
    assert low < 0.05 < high
    assert found.expected == pytest.approx(0.05, abs=1e-6)


@pytest.mark.slow
def test_the_stated_threshold_has_its_power_where_errors_are_estimated(from_table):
    """The variance common to a night cannot be found below zero, so that there are fewer false
    alarms than stated; the threshold makes up for that."""
    push, _, _ = from_table
    assert push.noise_excess > 1.1
    threshold = detection_threshold(push)
    worst = threshold.worst.value * threshold.worst_direction
    found = inject_and_recover(push, worst, n=1000, seed=5, reject=True)
    low, high = binom.interval(0.9999, found.declared.trials, 0.95)
    assert low <= found.declared.hits <= high
    assert found.expected == pytest.approx(0.95, abs=0.001)
