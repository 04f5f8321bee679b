"""Thrust columns by quadrature against the variational equations and complete refits."""

import numpy as np
import pytest

from ngbound.fit import fit_orbit
from ngbound.mass import ArcResponse, History, Misfit, law_history
from ngbound.motion import Thrust, Window

from .simulated import EARLY, ROUND, THRUST, fitted

FROM_MIDDLE = Window.between_dates("2021-01-15", "2031-01-01")


@pytest.fixture(scope="module")
def fit():
    return fitted(*EARLY, THRUST, 3, ROUND)


@pytest.fixture(scope="module")
def response(fit):
    return ArcResponse.of(fit)


def test_columns_are_those_of_the_variational_equations(fit, response):
    by_quadrature = response.columns(law_history(Thrust("inverse-square")))
    by_equations = fit.design[:, 6:]
    error = np.abs(by_quadrature - by_equations).max(axis=0)
    # the quadrature's own error, far below what any arc can tell
    assert np.all(error < 5e-5 * np.abs(by_equations).max(axis=0))


def test_own_law_gives_back_the_fit(fit, response):
    value, amounts = response.misfit(response.own).lowest()
    assert value == pytest.approx(0.0, abs=1e-6)
    assert amounts == pytest.approx(fit.theta[6:], rel=1e-3)


@pytest.mark.parametrize(
    ("thrust", "history"),
    [
        (Thrust("power", exponent=5.0), History("r^-5", lambda r: r**-5)),
        (Thrust("water-ice"), law_history(Thrust("water-ice"))),
        (
            Thrust("inverse-square", window=FROM_MIDDLE),
            History("late", lambda r: r**-2.0, from_d=FROM_MIDDLE.start),
        ),
    ],
    ids=["power", "water", "window"],
)
def test_other_histories_agree_with_a_complete_refit(fit, response, thrust, history):
    refit = fit_orbit(fit.arc, thrust, initial=fit.orbit, reject=False, keep=fit.keep)
    value, amounts = response.misfit(history).lowest()
    # chi2 to 0.02 or one per cent, amounts to a tenth of their error
    change = refit.chi2 - fit.chi2
    assert value == pytest.approx(change, abs=max(0.02, 0.01 * abs(change)))
    sigma = np.sqrt(np.diag(refit.theta_cov)[6:])
    assert np.all(np.abs(amounts - refit.theta[6:]) < 0.1 * sigma)


def test_a_direction_fixed_in_space_holds_the_same_information_at_one_instant(response):
    rtn = response.misfit(History("a", lambda r: np.ones_like(r)))
    fixed = response.misfit(History("b", lambda r: np.ones_like(r), frame="inertial"))
    # the axes turn by about 100 degrees in this arc, so the informations differ, but by no more
    # than a factor of a few in their sum
    assert np.trace(fixed.matrix) == pytest.approx(np.trace(rtn.matrix), rel=0.7)
    assert rtn.rank == fixed.rank == 3


@pytest.mark.parametrize("seed", range(4))
def test_lowest_on_a_sphere(seed):
    rng = np.random.default_rng(seed)
    half = rng.standard_normal((3, 3)) * np.array([1.0, 5.0, 30.0])
    found = Misfit(half.T @ half * 1e16, rng.standard_normal(3) * 1e9, 10.0)
    size = 1e-8 * (seed + 0.3)
    value, point = found.lowest_on_sphere(size)
    assert np.linalg.norm(point) == pytest.approx(size, rel=1e-9)
    directions = rng.standard_normal((200_000, 3))
    directions *= size / np.linalg.norm(directions, axis=1)[:, None]
    drawn = found(directions).min()
    assert value <= drawn + 1e-9
    assert value == pytest.approx(drawn, abs=0.02 * abs(drawn - found.lowest()[0]) + 0.05)


def test_lowest_on_a_sphere_without_gain_goes_along_the_unmeasured_axis():
    found = Misfit(np.diag([4.0, 1.0, 9.0]), np.zeros(3), 0.0)
    value, point = found.lowest_on_sphere(2.0)
    assert value == pytest.approx(4.0) and abs(point[1]) == pytest.approx(2.0)
