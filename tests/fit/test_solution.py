import json

import astropy.units as u
import numpy as np
import pytest
from scipy import stats

from ngbound.errors import FitError
from ngbound.fit import compare_fits, fit_orbit
from ngbound.motion import Thrust
from tests.fit.simulated import BELT, MJD_2020, NEAR_EARTH, nights, orbit_of, simulate

PUSH = Thrust("inverse-square", A=(2e-9, -3e-10, 1e-9))
WHEN = nights(MJD_2020, 600, 20, 3)


@pytest.fixture(scope="module")
def pushed():
    truth = simulate(orbit_of(NEAR_EARTH, PUSH), WHEN, np.random.default_rng(1))
    null = fit_orbit(truth.arc)
    return truth, null, fit_orbit(truth.arc, Thrust("inverse-square"), initial=null)


def test_the_thrust_is_found_with_its_units(pushed):
    truth, _, push = pushed
    assert push.components == "RTN"
    assert push.names[6:] == ("A1", "A2", "A3")
    assert push.A.unit == u.au / u.day**2 and push.A_cov.unit == u.au**2 / u.day**4
    off = push.A.value - truth.orbit.thrust.amounts_au_d2
    assert off @ np.linalg.solve(push.A_cov.value, off) < stats.chi2.isf(1e-4, 3)
    assert push.significance > 5.0
    assert push.orbit.thrust.amounts_au_d2 == pytest.approx(push.A.value)


def test_gravity_alone_is_told_to_be_worse(pushed):
    _, null, push = pushed
    told = compare_fits(null, push)
    assert told.delta_dof == 3
    assert told.delta_chi2 > 100.0 and told.p_value < 1e-20 and told.delta_bic > 50.0
    assert told.sigma > 5.0
    assert "favours thrust" in str(told)
    json.dumps(told.to_dict())


def test_a_quiet_arc_shows_no_thrust():
    truth = simulate(orbit_of(NEAR_EARTH), WHEN, np.random.default_rng(2))
    null = fit_orbit(truth.arc, initial=truth.orbit)
    push = fit_orbit(truth.arc, Thrust("inverse-square"), initial=null)
    told = compare_fits(null, push)
    assert push.wald == pytest.approx(told.delta_chi2, rel=0.05, abs=0.3)
    assert told.p_value > 1e-3 and told.delta_bic < 0.0
    assert "favours gravity alone" in str(told)


def test_an_orbit_that_does_not_explain_the_arc_says_so():
    truth = simulate(orbit_of(NEAR_EARTH), WHEN, np.random.default_rng(4), outliers=0.3)
    whole = fit_orbit(truth.arc, initial=truth.orbit, reject=False)
    assert "does not explain the arc" in whole.misfit and whole.misfit in str(whole)
    assert whole.to_dict()["misfit"] == whole.misfit
    assert fit_orbit(truth.arc, initial=truth.orbit).misfit == ""


def test_some_components_only(pushed):
    truth, null, push = pushed
    fit = fit_orbit(truth.arc, Thrust("inverse-square", components="T"), initial=null)
    assert fit.names[6:] == ("A2",)
    assert fit.A_sigma.value[0] < push.A_sigma.value[1]


def test_the_fast_chi2_is_that_of_the_fit(pushed):
    _, _, push = pushed
    thetas = np.stack([push.theta, push.theta + 0.5 * np.sqrt(np.diag(push.theta_cov))])
    chi2 = push.chi2_many(thetas)
    assert chi2[0] == pytest.approx(push.chi2, abs=0.05)
    off = thetas[1] - push.theta
    assert chi2[1] - chi2[0] == pytest.approx(off @ push.normal @ off, rel=1e-2)


def test_the_epoch_can_be_chosen_and_does_not_matter(pushed):
    truth, null, _ = pushed
    other = fit_orbit(truth.arc, initial=null, epoch_tdb_d=7310.0)
    assert other.orbit.epoch_tdb_d == 7310.0
    assert other.chi2 == pytest.approx(null.chi2, abs=0.01)


def test_everything_can_be_written_down(pushed):
    _, null, push = pushed
    record = json.loads(json.dumps(push.to_dict()))
    assert record["names"] == list(push.names)
    assert record["n_obs"] + record["n_rejected"] == len(push.used)
    assert "A_N (A3)" in str(push) and "gravity only" in str(null)
    assert push.dof == 2 * push.n_obs - 9
    assert push.weighted_rms_arcsec == pytest.approx(push.rms_arcsec)
    low, high = push.distance_range_au
    assert 0.8 < low < high < 2.3


def test_fits_of_different_arcs_are_not_compared(pushed):
    _, null, push = pushed
    with pytest.raises(FitError, match="more parameters"):
        compare_fits(push, null)
    other = simulate(orbit_of(BELT), WHEN, np.random.default_rng(2))
    with pytest.raises(FitError, match="different arcs"):
        compare_fits(fit_orbit(other.arc, initial=other.orbit), push)
