import numpy as np
import pytest
from scipy import stats

from ngbound.arc import ErrorModel
from ngbound.fit import compare_fits, fit_orbit, student_factor
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
    assert few.scales == ()


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


def test_student_factor():
    assert student_factor(1.0, 10**6) == pytest.approx(1.0, abs=1e-4)
    # two-sided 95 % quantile of Student's t with 5 degrees of freedom: 2.571 (W. S. Gosset's table)
    assert student_factor(4.0, 5) == pytest.approx(2.0 * 2.571 / 1.960, abs=1e-3)
    assert student_factor(1.0, 0) == np.inf
