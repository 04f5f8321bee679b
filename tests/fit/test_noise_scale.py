from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from ngbound.arc import ErrorModel
from ngbound.constants import ARCSEC_RAD
from ngbound.fit import compare_fits, fit_orbit, rescaled, student_factor, tail_probability
from ngbound.limits import detection_threshold, noncentrality
from ngbound.motion import Thrust
from tests.fit.simulated import BELT, MJD_2020, nights, orbit_of, simulate

WHEN = nights(MJD_2020, 1500, 80, 4)
SIMPLE = ErrorModel(catalogue_offsets=False, station_offset_arcsec=0.0)


@pytest.fixture(scope="module")
def quiet():
    """Errors of 0.2 arcsec and 0.15 common to a night, of which the table knows nothing."""
    truth = simulate(
        orbit_of(BELT), WHEN, np.random.default_rng(31), sigma_arcsec=0.2, common_arcsec=0.15,
        stations=("500", "568"), stated=False,
    )  # fmt: skip
    return truth, fit_orbit(truth.arc, error_model=SIMPLE, initial=truth.orbit)


def test_both_parts_of_the_errors_are_found(quiet):
    _, fit = quiet
    assert [s.n for s in fit.scales] == sorted((s.n for s in fit.scales), reverse=True)
    for scale in fit.scales:
        assert scale.sigma_before_arcsec > 0.4 or scale.station == "568"
        assert scale.sigma_arcsec == pytest.approx(0.25, abs=0.03)
        assert scale.common_arcsec == pytest.approx(0.15, abs=0.05)
        assert scale.error < 0.1 * scale.scale
        assert f"station {scale.station}" in str(scale)


def test_chi2_is_then_one_a_degree_of_freedom(quiet):
    _, fit = quiet
    assert fit.reduced_chi2 == pytest.approx(1.0, abs=0.1)
    assert fit.n_rejected <= 3


def test_switched_off_the_table_stands(quiet):
    truth, fit = quiet
    plain = fit_orbit(
        truth.arc, error_model=ErrorModel(rescale_stations=False), initial=truth.orbit
    )
    assert plain.scales == ()
    table = {s.station: s.sigma_before_arcsec for s in fit.scales}
    of_record = plain.used.table["stn"].map(table).to_numpy(dtype=float)
    np.testing.assert_allclose(plain.noise.sigma_ra_arcsec, of_record, rtol=0.01)
    few = fit_orbit(truth.arc, error_model=ErrorModel(rescale_least=1000), initial=truth.orbit)
    assert [scale.station for scale in few.scales] == ["all stations"]


def test_stated_errors_are_rescaled_only_when_asked_for():
    truth = simulate(orbit_of(BELT), WHEN, np.random.default_rng(32), sigma_arcsec=0.4)
    assert fit_orbit(truth.arc, error_model=SIMPLE, initial=truth.orbit).scales == ()
    asked = ErrorModel(
        catalogue_offsets=False, station_offset_arcsec=0.0, rescale_stations=True, scale=0.5
    )
    fit = fit_orbit(truth.arc, error_model=asked, initial=truth.orbit)
    assert fit.scales[0].scale == pytest.approx(2.0, abs=0.2)


def test_fits_with_different_scales_are_compared_under_common_errors(quiet):
    truth, null = quiet
    push = fit_orbit(truth.arc, Thrust("inverse-square"), SIMPLE, initial=null)
    told = compare_fits(null, push)
    assert told.refitted
    assert -0.1 < told.delta_chi2 < stats.chi2.isf(1e-4, 3)


SHORT = nights(MJD_2020, 300, 8, 1)
ALONG = Thrust("inverse-square", components="T")


def short_fit(seed, model=SIMPLE):
    """Eight nights of one record, whose errors the table takes three times too large."""
    rng = np.random.default_rng([78, seed])
    truth = simulate(orbit_of(BELT), SHORT, rng, sigma_arcsec=0.3, stated=False)
    return fit_orbit(truth.arc, ALONG, model, initial=truth.orbit)


def test_few_records_are_rescaled_together_and_say_on_how_little_it_rests():
    fit = short_fit(0)
    assert fit.dof == fit.noise_dof == 9
    assert fit.reduced_chi2 == pytest.approx(1.0, abs=0.01)
    assert fit.to_dict()["noise_dof"] == 9
    assert "Student with 9 degrees of freedom" in fit.error_report
    assert "all stations: 8 records in 8 nights" in fit.error_report
    plain = short_fit(0, ErrorModel(catalogue_offsets=False, rescale_stations=False))
    assert plain.scales == () and plain.noise_dof is None
    held = short_fit(0, replace(SIMPLE, student=False))
    assert held.scales == fit.scales and held.noise_dof is None


@pytest.mark.slow
def test_the_false_alarm_rate_is_right_where_the_scale_was_estimated_from_few_records():
    fits = [short_fit(seed) for seed in range(250)]
    significance = np.array([fit.significance for fit in fits])
    student = np.array([tail_probability(s**2, 1, 9) for s in significance])
    assert {fit.noise_dof for fit in fits} == {9}
    assert stats.kstest(student, "uniform").pvalue > 1e-3
    for alpha in (0.1, 0.05, 0.01):
        found = int((student < alpha).sum())
        assert stats.binomtest(found, len(fits), alpha).pvalue > 1e-3
    # as if the errors were known, 1 % becomes the 3 % that Student's law has beyond 2.58 sigma
    known = int((2.0 * stats.norm.sf(significance) < 0.01).sum())
    expected = 2.0 * stats.t.sf(stats.norm.isf(0.005), 9)
    assert known > int((student < 0.01).sum())
    assert stats.binomtest(known, len(fits), expected).pvalue > 1e-3
    # the threshold is that of the same test
    threshold = detection_threshold(fits[0], false_alarm=0.01, power=0.9)
    assert threshold.noise_dof == 9
    known_errors = detection_threshold(fits[0], false_alarm=0.01, power=0.9, noise_dof=None)
    assert threshold.free[0] > 1.2 * known_errors.free[0]


def test_long_arcs_have_so_many_degrees_of_freedom_that_little_changes(quiet):
    _, fit = quiet
    assert 50 < fit.noise_dof < 2 * len(fit.used)


def test_stations_whose_errors_are_known_take_away_from_the_doubt():
    truth = simulate(
        orbit_of(BELT), WHEN, np.random.default_rng(33), 0.2, stations=("500", "568"), stated=False
    )
    frame = truth.arc.table
    mine = frame["stn"] == "568"
    stated = frame.assign(rmsRA=frame["rmsRA"].where(~mine, 0.2))
    stated["rmsDec"] = stated["rmsRA"]
    both = fit_orbit(truth.arc, ALONG, SIMPLE, initial=truth.orbit)
    one = fit_orbit(type(truth.arc).from_frame(stated), ALONG, SIMPLE, initial=truth.orbit)
    assert [scale.station for scale in one.scales] == ["500"]
    assert one.noise_dof is None or one.noise_dof > both.noise_dof


def test_tail_probability():
    # quantiles of chi2 and of F: standard tables
    assert tail_probability(3.841, 1, None) == pytest.approx(0.05, abs=1e-4)
    assert tail_probability(2.0 * 4.459, 2, 8) == pytest.approx(0.05, abs=1e-4)
    assert tail_probability(-1e-9, 2, 8) == 1.0


def test_student_factor():
    assert student_factor(1.0, 10**6) == pytest.approx(1.0, abs=1e-4)
    # two-sided 95 % quantile of Student's t with 5 degrees of freedom: 2.571 (W. S. Gosset's table)
    assert student_factor(4.0, 5) == pytest.approx(2.0 * 2.571 / 1.960, abs=1e-3)
    assert student_factor(1.0, 0) == np.inf


NO_COMMON = nights(MJD_2020, 400, 16, 4)


def test_variances_that_cannot_be_negative_are_too_large_on_average_by_what_is_said():
    """Arcs whose errors are as the fit found them, each estimated from its own residuals."""
    truth = simulate(orbit_of(BELT), NO_COMMON, np.random.default_rng(39), 0.25, stated=False)
    fit = fit_orbit(truth.arc, ALONG, SIMPLE, initial=truth.orbit, reject=False)
    n, p = len(fit.noise), fit.theta.size
    design = np.asarray(fit.design).reshape(2 * n, p)
    length = np.linalg.norm(design, axis=0)

    def variance(noise):
        white = noise.whiten(design) / length
        return np.linalg.inv(white.T @ white)[-1, -1]

    common = fit.noise.night_common_arcsec
    own = np.sqrt(fit.noise.sigma_ra_arcsec**2 - common**2)
    stations, every = np.full(n, "500", dtype=object), np.ones(n, dtype=bool)
    random = np.random.default_rng(37)
    found = []
    for _ in range(400):
        shared = random.standard_normal((n, 2))[fit.noise.night] * common[:, None]
        seen = ARCSEC_RAD * (random.standard_normal((n, 2)) * own[:, None] + shared)
        noise, _ = rescaled(
            seen, design.reshape(n, 2, p), fit.stated_noise, every, stations, every, 20
        )
        found.append(variance(noise))
    ratio = np.array(found) / variance(fit.noise)
    error = ratio.std() / np.sqrt(len(ratio))
    assert 1.05 < fit.noise_excess < 1.3
    assert fit.noise_excess == pytest.approx(ratio.mean(), abs=4.0 * error)
    with_it, known_errors = detection_threshold(fit), detection_threshold(fit, noise_dof=None)
    plain = noncentrality(0.0027, 0.95, 1, noise_dof=fit.noise_dof)
    assert with_it.delta_one == pytest.approx(plain * fit.noise_excess**0.5, rel=1e-9)
    assert known_errors.delta_one == pytest.approx(noncentrality(0.0027, 0.95, 1), rel=1e-9)


def test_where_nights_share_errors_the_variance_is_right_on_average(quiet):
    _, fit = quiet
    assert 1.0 <= fit.noise_excess < 1.02
