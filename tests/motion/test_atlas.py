"""Several references along the axis of a short arc, against the adaptive integrator."""

from dataclasses import replace

import numpy as np
import pytest

from ngbound.motion import Atlas
from tests.limits.arcs import CLASSES, fitted

SHORT = replace(CLASSES["near-Earth, 60 days"], span_d=25.0, n_nights=12, per_night=4)


@pytest.fixture(scope="module")
def short():
    return fitted(SHORT)


def cloud(fit, m, seed=2):
    """Parameter vectors from the linear posterior."""
    scale = np.sqrt(np.diag(fit.theta_cov))
    root = np.linalg.cholesky(fit.theta_cov / np.outer(scale, scale))
    draws = np.random.default_rng(seed).standard_normal((m, fit.theta.size))
    return fit.theta + (draws @ root.T) * scale


def test_one_reference_is_not_enough_but_the_atlas_is(short):
    thetas = cloud(short, 200)
    assert short.neighbourhood.strays(thetas).mean() > 0.5
    assert short.atlas.strays(thetas).mean() < 0.02


def test_chi2_is_that_of_the_adaptive_integrator(short):
    thetas = cloud(short, 200)
    thetas = thetas[~short.atlas.strays(thetas)][:12]
    chi2, seen = short.atlas.chi2(thetas, want_residuals=True)
    assert chi2 == pytest.approx(short.atlas.chi2(thetas), abs=1e-9)
    sigma = np.hypot(short.noise.sigma_ra_arcsec, short.noise.sigma_dec_arcsec).min() / 206264.8
    for i, theta in enumerate(thetas):
        truth, places = short.neighbourhood.chi2_alone(theta)
        assert chi2[i] == pytest.approx(truth, abs=2e-3)
        assert np.abs(seen[i] - places).max() < 3e-4 * sigma


def test_two_references_agree_between_them(short):
    atlas = short.atlas
    places = np.array([-20.5, -3.5, 0.5, 7.5, 31.5])
    thetas = atlas.centre.theta + atlas.spacing * places[:, None] * atlas.axis
    for place, theta in zip(places, thetas, strict=True):
        low, high = (
            atlas.centre.moved_to(atlas.centre.theta + atlas.spacing * at * atlas.axis)
            for at in (place - 0.5, place + 0.5)
        )
        assert not low.strays(theta).any() and not high.strays(theta).any()
        assert low.chi2(theta) == pytest.approx(high.chi2(theta), abs=1e-3)


def test_results_do_not_depend_on_what_was_asked_before(short):
    thetas = cloud(short, 40)
    fresh = Atlas.around(short.neighbourhood, short.theta_cov)
    backwards = fresh.chi2(thetas[::-1])[::-1]
    assert np.array_equal(backwards, short.atlas.chi2(thetas))
    alone = np.array([fresh.chi2(theta)[0] for theta in thetas])
    assert alone == pytest.approx(backwards, abs=1e-9)


def test_a_long_arc_needs_one_reference_only():
    fit = fitted(CLASSES["main belt, 10 years"])
    assert np.isinf(fit.atlas.spacing)
    thetas = cloud(fit, 20)
    assert np.array_equal(fit.atlas.chi2(thetas), fit.neighbourhood.chi2(thetas))


def test_vectors_that_are_no_orbits_have_infinite_chi2(short):
    bad = np.tile(short.theta, (3, 1))
    bad[0, 0] = np.nan
    bad[1, :3] *= 1e-3
    chi2 = short.atlas.chi2(bad)
    assert np.isinf(chi2[:2]).all() and np.isfinite(chi2[2])
