from dataclasses import replace

import numpy as np
import pytest

from ngbound.arc import Noise, SharedErrors
from ngbound.constants import ARCSEC_RAD
from ngbound.fit import fit_orbit
from ngbound.fit.outliers import chi2_of_records, judge, judge_in_turns, residual_chi2
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
    chi2 = np.array([1.0, 15.0, 17.0, 13.0, 15.0])
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


def test_many_arcs_are_judged_as_each_alone():
    random = np.random.default_rng(1)
    m, n = 20, 60
    chi2 = random.chisquare(2, (m, n)) * random.choice([1.0, 1.0, 6.0, 200.0], (m, n))
    keep = random.random((m, n)) < 0.9
    together = judge(chi2, keep)
    assert 0 < (together != keep).sum() < m * n
    for i in range(m):
        assert np.array_equal(together[i], judge(chi2[i], keep[i]))


@pytest.mark.parametrize("correlated", [False, True])
def test_chi2_of_the_records_is_that_of_a_fit_without_them(correlated):
    random = np.random.default_rng(2)
    n, p = 30, 4
    noise = noise_of(0.5, n)
    if correlated:
        shared = SharedErrors(
            ("offset",), np.full((2 * n, 1), 0.3 * ARCSEC_RAD), np.ones(1), ("arcsec",), ("",)
        )
        noise = replace(noise, shared=shared)
    design = random.standard_normal((n, 2, p)) * ARCSEC_RAD
    seen = random.standard_normal((2, n, 2)) * 0.5 * ARCSEC_RAD + 0.4 * ARCSEC_RAD
    keep = random.random((2, n)) < 0.8
    # at the solution of each arc the linear model leaves nothing to explain
    for i in range(2):
        kept = noise.mask(keep[i])
        white = kept.whiten(design[keep[i]].reshape(-1, p))
        miss = kept.whiten(seen[i, keep[i]].ravel())
        scale = np.linalg.norm(white, axis=0)
        seen[i] -= design @ (np.linalg.lstsq(white / scale, miss, rcond=None)[0] / scale)
    chi2 = chi2_of_records(seen, design, noise, keep)
    # a record left out and predicted from the others, whether or not it was kept
    cov = noise.covariance_rad2(np.arange(n))
    if noise.shared is not None:
        cov = cov + noise.shared.matrix @ noise.shared.matrix.T
    for i in range(2):
        for record in range(n):
            rest = keep[i] & (np.arange(n) != record)
            known = np.flatnonzero(np.repeat(rest, 2))
            mine = np.array([2 * record, 2 * record + 1])
            x = design.reshape(2 * n, p) / ARCSEC_RAD
            weight = np.linalg.inv(cov[np.ix_(known, known)])
            normal = x[known].T @ weight @ x[known]
            gain = cov[np.ix_(mine, known)] @ weight
            y = seen[i].ravel()
            step = np.linalg.solve(normal, x[known].T @ weight @ y[known])
            miss = y[mine] - x[mine] @ step - gain @ (y[known] - x[known] @ step)
            lever = x[mine] - gain @ x[known]
            spread = (
                cov[np.ix_(mine, mine)]
                - gain @ cov[np.ix_(known, mine)]
                + lever @ np.linalg.solve(normal, lever.T)
            )
            alone = miss @ np.linalg.solve(spread, miss)
            assert chi2[i, record] == pytest.approx(alone, rel=1e-6)


def test_turns_end_where_the_records_no_longer_change():
    n = 40
    chi2 = np.tile(np.linspace(0.1, 3.0, n), (3, 1))
    asked = []

    def fit_again(rows, keep):
        asked.append(rows.tolist())
        now = chi2[rows].copy()
        now[rows == 1, 7] = 30.0
        # one that comes and goes
        now[rows == 2, 9] = np.where(keep[rows == 2, 9], 30.0, 2.0)
        return now

    keep, rounds = judge_in_turns(np.ones((3, n), dtype=bool), 6, np.full(n, 2), fit_again)
    assert asked == [[0, 1, 2], [1, 2]] and rounds == 2
    assert keep[0].all() and np.flatnonzero(~keep[1]).tolist() == [7]
    assert np.flatnonzero(~keep[2]).tolist() == [9]


def test_outliers_of_an_arc_are_found_and_good_records_recovered():
    truth = simulate(
        orbit_of(BELT), nights(MJD_2020, 700, 30, 4), np.random.default_rng(5), outliers=0.06
    )
    fit = fit_orbit(truth.arc, initial=truth.orbit)
    assert truth.outlier.sum() >= 4
    assert not fit.keep[truth.outlier].any()
    # good records beyond the bar: exp(-16/2) = 0.03 % of them
    assert (~fit.keep[~truth.outlier]).sum() <= 1
    # a start that leaves half of the records out gets the good ones back
    half = np.arange(len(fit.keep)) % 2 == 0
    again = fit_orbit(truth.arc, initial=truth.orbit, keep=half)
    assert np.array_equal(again.keep, fit.keep)
    # all stay when nothing may be rejected
    assert fit_orbit(truth.arc, initial=truth.orbit, reject=False).n_rejected == 0
