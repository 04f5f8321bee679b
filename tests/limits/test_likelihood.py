import numpy as np
import pytest
from scipy.stats import multivariate_t, norm

from ngbound.fit import fit_orbit
from ngbound.limits import sample_posterior
from ngbound.limits.likelihood import deviance_of, robust_deviance
from ngbound.motion import Thrust
from tests.limits.arcs import CLASSES, ERRORS, fitted, simulated_arc

COMET = CLASSES["comet, 200 days through perihelion"]


def test_densities_are_those_of_the_textbook():
    w = np.random.default_rng(1).normal(0.0, 2.0, (50, 2))
    s = np.sum(w**2, axis=1)
    student = -2.0 * multivariate_t(df=5.0, shape=np.eye(2)).logpdf(w)
    np.testing.assert_allclose(np.diff(robust_deviance(s, "student")), np.diff(student))
    mixed = 0.95 * np.prod(norm.pdf(w), axis=1) + 0.05 * np.prod(norm.pdf(w, scale=5.0), axis=1)
    expected = -2.0 * np.log(mixed)
    np.testing.assert_allclose(np.diff(robust_deviance(s, "contaminated")), np.diff(expected))


def test_gaussian_deviance_is_chi2():
    fit = fitted(COMET)
    assert deviance_of(fit, "gaussian") == fit.chi2_many


@pytest.mark.parametrize(
    ("name", "gross_arcsec"), [("gaussian", 40.0), ("student", 40.0), ("contaminated", 5.0)]
)
def test_gross_errors_move_the_gaussian_only(name, gross_arcsec):
    arc, orbit = simulated_arc(COMET)
    table = arc.table.copy()
    hit = np.flatnonzero(table["utc_day"].to_numpy() > 58900)[::6]
    frame = table[["permID", "mode", "stn", "obsTime", "ra", "dec", "astCat", "rmsRA", "rmsDec"]]
    frame = frame.copy()
    frame.loc[frame.index[hit], "dec"] += gross_arcsec / 3600.0
    spoilt = type(arc).from_frame(frame, name="spoilt")
    clean = fitted(COMET)
    fit = fit_orbit(spoilt, Thrust(COMET.law), ERRORS, initial=orbit, reject=False)
    post = sample_posterior(fit, seed=1, likelihood=name, prior="flat-components", target_ess=400)
    assert post.likelihood == name
    shift = (np.median(post.A_samples, axis=0) - clean.A.value) / clean.A_sigma.value
    if name == "gaussian":
        assert np.max(np.abs(shift)) > 3.0
    else:
        assert np.max(np.abs(shift)) < 2.0
