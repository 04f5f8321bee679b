import numpy as np
import pytest
from scipy import stats

from ngbound.errors import FirstOrbitError, FitError
from ngbound.fit import fit_orbit
from ngbound.fit.orbit_search import at_epoch
from ngbound.motion import ForceModel, Thrust
from tests.fit.simulated import BELT, MJD_2020, NEAR_EARTH, nights, orbit_of, simulate, state_error
from tests.units import metre

CLASSES = {
    "belt": BELT,
    "near-earth": NEAR_EARTH,
    "short-period comet": {
        "q": 1.3, "e": 0.65, "i": 15.0, "node": 30.0, "argperi": 200.0, "tp": 7380.0,
    },
    "long-period comet": {
        "q": 1.5, "e": 0.9999, "i": 120.0, "node": 300.0, "argperi": 70.0, "tp": 7420.0,
    },
    "hyperbola": {"q": 1.8, "e": 1.8, "i": 60.0, "node": 250.0, "argperi": 150.0, "tp": 7400.0},
}  # fmt: skip


@pytest.mark.parametrize("name", CLASSES)
def test_from_nothing_to_the_orbit(name):
    truth = simulate(
        orbit_of(CLASSES[name]), nights(MJD_2020, 150, 10, 3), np.random.default_rng(8),
        outliers=0.04,
    )  # fmt: skip
    told = []
    fit = fit_orbit(truth.arc, progress=told.append)
    off = state_error(fit.theta, truth.orbit, fit.orbit.epoch_tdb_d)
    assert off @ np.linalg.solve(fit.theta_cov, off) < stats.chi2.isf(1e-4, 6)
    assert not fit.keep[truth.outlier].any()
    assert any("Preliminary orbit" in text for text in told)


def test_three_oppositions_are_linked():
    days = np.concatenate([nights(MJD_2020 + 470 * k, 40, 4, 2) for k in range(3)])
    truth = simulate(orbit_of(BELT), days, np.random.default_rng(2))
    fit = fit_orbit(truth.arc)
    assert fit.n_rejected <= 3
    off = state_error(fit.theta, truth.orbit, fit.orbit.epoch_tdb_d)
    assert off @ np.linalg.solve(fit.theta_cov, off) < stats.chi2.isf(1e-4, 6)


def test_thrust_is_set_free_where_gravity_fails():
    push = Thrust("inverse-square", A=(3e-7, -1e-7, 5e-8))
    truth = simulate(
        orbit_of(NEAR_EARTH, push), nights(MJD_2020, 800, 30, 2), np.random.default_rng(4)
    )
    told = []
    fit = fit_orbit(truth.arc, Thrust("inverse-square"), progress=told.append)
    assert any("thrust is set free" in text for text in told)
    assert fit.n_rejected <= 4
    off = fit.theta[6:] - push.amounts_au_d2
    assert off @ np.linalg.solve(fit.theta_cov[6:, 6:], off) < stats.chi2.isf(1e-4, 3)


def test_degenerate_arcs_are_refused_in_one_sentence():
    rng = np.random.default_rng(1)
    two = simulate(orbit_of(BELT), nights(MJD_2020, 3, 2, 1), rng).arc
    with pytest.raises(FitError, match="2 usable observations, an orbit needs at least 3"):
        fit_orbit(two)
    three = simulate(orbit_of(BELT), nights(MJD_2020, 0, 1, 3), rng).arc
    with pytest.raises((FitError, FirstOrbitError), match="determine|longer time"):
        fit_orbit(three)


def test_a_short_arc_says_how_little_it_knows():
    truth = simulate(orbit_of(BELT), nights(MJD_2020, 5, 4, 3), np.random.default_rng(1))
    fit = fit_orbit(truth.arc)
    assert 0.0 < fit.distance_error < 2.0
    assert ("hardly determines" in fit.weakness) == (fit.distance_error > 0.1)


def test_records_of_two_objects_are_not_mixed():
    """Ten records of a stranger among forty are rejected, not fitted."""
    rng = np.random.default_rng(6)
    mine = simulate(orbit_of(BELT), nights(MJD_2020, 120, 10, 4), rng)
    stranger = orbit_of(dict(BELT, tp=7401.0))
    theirs = simulate(stranger, nights(MJD_2020 + 20, 60, 5, 2), rng)
    frame = mine.arc.table
    both = frame.iloc[:0]
    both = type(frame)(
        {
            c: np.concatenate([frame[c].to_numpy(), theirs.arc.table[c].to_numpy()])
            for c in ("permID", "mode", "stn", "obsTime", "ra", "dec", "astCat", "rmsRA", "rmsDec")
        }
    )
    fit = fit_orbit(type(mine.arc).from_frame(both))
    off = state_error(fit.theta, mine.orbit, fit.orbit.epoch_tdb_d)
    assert off @ np.linalg.solve(fit.theta_cov, off) < stats.chi2.isf(1e-5, 6)
    assert 10 <= fit.n_rejected <= 13


def test_moving_the_epoch_there_and_back():
    truth = orbit_of(BELT)
    forces = ForceModel()
    there = at_epoch(truth.state_vector, truth.epoch_tdb_d, 7800.0, None, forces)
    back = at_epoch(there, 7800.0, truth.epoch_tdb_d, None, forces)
    assert np.abs(back - truth.state_vector)[:3].max() < 10 * metre
