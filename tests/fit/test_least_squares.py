import numpy as np
import pytest
from scipy import stats

from ngbound.arc import ErrorModel
from ngbound.errors import FitError
from ngbound.fit.least_squares import (
    differential_correction,
    linearise,
    parameter_names,
    thrust_of,
)
from ngbound.motion import ForceModel, Records, Thrust
from ngbound.sky import load_ephemeris, observer_states
from tests.fit.simulated import BELT, MJD_2020, NEAR_EARTH, nights, orbit_of, simulate
from tests.units import arcsec, km, mas

FORCES = ForceModel()


def made(truth):
    used = truth.arc.used
    seen = observer_states(used, load_ephemeris())
    table = used.table
    records = Records.from_angles(
        seen.tdb_d, seen.position_au, table["ra_rad"].to_numpy(), table["dec_rad"].to_numpy()
    )
    return records, ErrorModel().apply(used)


@pytest.fixture(scope="module")
def belt():
    rng = np.random.default_rng(3)
    truth = simulate(orbit_of(BELT), nights(MJD_2020, 500, 12, 2), rng, sigma_arcsec=0.2)
    return truth, *made(truth)


def test_perfect_observations_give_back_the_orbit():
    truth = simulate(orbit_of(BELT), nights(MJD_2020, 500, 12, 2), np.random.default_rng(0), 1e-9)
    records, noise = made(truth)
    start = truth.orbit.state_vector * (1.0 + 1e-5)
    keep = np.ones(len(records), dtype=bool)
    noise = noise.scaled(1e6)
    found = differential_correction(
        start, truth.orbit.epoch_tdb_d, records, noise, keep, None, "", FORCES
    )
    miss = np.abs(found.at.theta - truth.orbit.state_vector)[:3].max()
    assert miss < 0.1 * km
    assert np.abs(found.at.seen).max() < 1e-3 * mas


def test_design_matrix_is_the_derivative_of_the_computed_place(belt):
    truth, records, noise = belt
    keep = np.ones(len(records), dtype=bool)
    push = Thrust("inverse-square", A=(1e-9, 2e-9, -1e-9))
    theta = np.concatenate([truth.orbit.state_vector, push.amounts_au_d2])
    args = (truth.orbit.epoch_tdb_d, records, noise, keep, push, "RTN", FORCES)
    here = linearise(theta, *args)
    for column, step in ((1, 1e-7), (4, 1e-9), (7, 1e-10)):
        nudge = np.zeros(9)
        nudge[column] = step
        slope = linearise(theta - nudge, *args).seen - linearise(theta + nudge, *args).seen
        scale = np.abs(here.design[:, :, column]).max()
        assert slope / (2.0 * step) == pytest.approx(here.design[:, :, column], abs=1e-5 * scale)


def test_converges_from_far_away(belt):
    truth, records, noise = belt
    keep = np.ones(len(records), dtype=bool)
    start = truth.orbit.state_vector * np.array([1.01, 0.99, 1.01, 0.995, 1.005, 1.0])
    found = differential_correction(
        start, truth.orbit.epoch_tdb_d, records, noise, keep, None, "", FORCES
    )
    off = found.at.theta - truth.orbit.state_vector
    assert off @ np.linalg.solve(found.cov, off) < stats.chi2.isf(1e-4, 6)
    assert found.cov @ found.normal == pytest.approx(np.eye(6), abs=1e-4)
    assert found.at.chi2 < stats.chi2.isf(1e-4, 2 * len(records) - 6)


def test_only_kept_records_count(belt):
    truth, records, noise = belt
    keep = np.ones(len(records), dtype=bool)
    keep[5] = False
    shifted = Records(records.tdb_d, records.observer_au, records.basis.copy())
    east, toward = records.basis[5, 0], records.basis[5, 2]
    shifted.basis[5, 2] = toward + 30 * arcsec * east
    shifted.basis[5, 0] = east - 30 * arcsec * toward
    args = (noise, keep, None, "", FORCES)
    theta, epoch = truth.orbit.state_vector, truth.orbit.epoch_tdb_d
    one = differential_correction(theta, epoch, records, *args)
    two = differential_correction(theta, epoch, shifted, *args)
    assert np.abs(one.at.theta - two.at.theta)[:3].max() < 1 * km
    assert two.at.seen[5, 0] - one.at.seen[5, 0] == pytest.approx(30 * arcsec, abs=mas)


def test_covariance_covers_the_truth():
    """Thirty arcs: the squared Mahalanobis distance of the truth follows chi2 with six degrees."""
    rng = np.random.default_rng(11)
    distance = []
    for _ in range(30):
        truth = simulate(orbit_of(NEAR_EARTH), nights(MJD_2020, 200, 8, 2), rng)
        records, noise = made(truth)
        keep = np.ones(len(records), dtype=bool)
        found = differential_correction(
            truth.orbit.state_vector, truth.orbit.epoch_tdb_d, records, noise, keep, None, "",
            FORCES,
        )  # fmt: skip
        off = found.at.theta - truth.orbit.state_vector
        distance.append(off @ np.linalg.solve(found.cov, off))
    assert stats.kstest(distance, stats.chi2(6).cdf).pvalue > 1e-3


def test_too_few_records_are_refused_in_a_sentence(belt):
    truth, records, noise = belt
    keep = np.zeros(len(records), dtype=bool)
    keep[:3] = True
    push = Thrust("inverse-square")
    theta = np.concatenate([truth.orbit.state_vector, np.zeros(3)])
    with pytest.raises(FitError, match="3 observations give 6 numbers, fewer than the 9"):
        differential_correction(
            theta, truth.orbit.epoch_tdb_d, records, noise, keep, push, "RTN", FORCES
        )


def test_a_guess_that_cannot_be_integrated_is_told(belt):
    truth, records, noise = belt
    keep = np.ones(len(records), dtype=bool)
    theta = -truth.orbit.state_vector
    with pytest.raises(FitError, match="first guess"):
        differential_correction(
            theta, truth.orbit.epoch_tdb_d, records, noise, keep, None, "", FORCES
        )


def test_thrust_of_fills_only_the_free_components():
    push = Thrust("inverse-square", components="RN", A=(1.0, 2.0, 3.0))
    theta = np.array([0, 0, 0, 0, 0, 0, 10.0, 30.0])
    assert thrust_of(theta, push, "RN").amounts_au_d2.tolist() == [10.0, 2.0, 30.0]
    assert thrust_of(theta[:6], None, "") is None
    assert parameter_names("RN") == ("x", "y", "z", "vx", "vy", "vz", "A1", "A3")
