import numpy as np
import pytest

from ngbound.arc import Noise
from ngbound.constants import ARCSEC_RAD
from ngbound.fit import fit_orbit
from ngbound.fit.outliers import REJECT_CHI2, judge, residual_chi2
from tests.fit.simulated import BELT, MJD_2020, nights, orbit_of, simulate


def noise_of(sigma_arcsec, n, corr=0.0):
    return Noise(
        np.full(n, sigma_arcsec),
        np.full(n, sigma_arcsec),
        np.full(n, corr),
        np.zeros(n),
        np.arange(n),
        np.full(n, "stated", dtype=object),
    )


def test_chi2_of_a_record_outside_the_fit_adds_the_error_of_the_orbit():
    seen = np.array([[1.0, 0.0], [1.0, 0.0]]) * ARCSEC_RAD
    design = np.zeros((2, 2, 1))
    design[:, 0, 0] = ARCSEC_RAD
    cov = np.array([[0.19]])
    chi2 = residual_chi2(seen, design, cov, noise_of(1.0, 2), np.array([True, False]))
    assert chi2 == pytest.approx([1.0 / 0.81, 1.0 / 1.19])


def test_chi2_knows_the_correlation_inside_an_observation():
    seen = np.array([[1.0, 1.0]]) * ARCSEC_RAD
    none = residual_chi2(
        seen, np.zeros((1, 2, 1)), np.eye(1), noise_of(1.0, 1, 0.5), np.ones(1, bool)
    )
    assert none == pytest.approx([2.0 / 1.5])


def test_a_record_that_alone_pins_the_orbit_is_judged_by_its_noise():
    seen = np.array([[0.1, 0.1]]) * ARCSEC_RAD
    design = ARCSEC_RAD * np.eye(2)[None]
    chi2 = residual_chi2(seen, design, np.eye(2), noise_of(1.0, 1), np.ones(1, bool))
    assert chi2 == pytest.approx([0.02])


def test_rejection_and_recovery():
    keep = np.array([True, True, True, False, False])
    chi2 = np.array([1.0, 7.5, 8.5, 6.5, 7.5])
    chi2 = np.concatenate([chi2, np.ones(20)])
    keep = np.concatenate([keep, np.ones(20, dtype=bool)])
    assert judge(chi2, keep)[:5].tolist() == [True, True, False, True, False]


def test_a_gross_error_goes_first_and_alone():
    chi2 = np.concatenate([[4000.0, 30.0], np.ones(20)])
    keep = np.ones(22, dtype=bool)
    assert judge(chi2, keep)[:2].tolist() == [False, True]


def test_where_most_records_miss_the_orbit_is_blamed():
    chi2 = np.linspace(10.0, 200.0, 50)
    assert judge(chi2, np.ones(50, dtype=bool)).all()


def test_outliers_of_an_arc_are_found_and_good_records_recovered():
    truth = simulate(
        orbit_of(BELT), nights(MJD_2020, 700, 30, 4), np.random.default_rng(5), outliers=0.06
    )
    fit = fit_orbit(truth.arc, initial=truth.orbit)
    assert truth.outlier.sum() >= 4
    assert not fit.keep[truth.outlier].any()
    # good records beyond the bar: exp(-8/2) = 1.8 % of them
    assert (~fit.keep[~truth.outlier]).sum() <= 7
    assert REJECT_CHI2 == 8.0
    # a start that leaves half of the records out gets the good ones back
    half = np.arange(len(fit.keep)) % 2 == 0
    again = fit_orbit(truth.arc, initial=truth.orbit, keep=half)
    assert np.array_equal(again.keep, fit.keep)
    # all stay when nothing may be rejected
    assert fit_orbit(truth.arc, initial=truth.orbit, reject=False).n_rejected == 0
