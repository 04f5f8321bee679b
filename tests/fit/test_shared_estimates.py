import json

import numpy as np
import pytest

from ngbound.arc import ErrorModel
from ngbound.fit import error_variants, fit_orbit, vary
from ngbound.fit.shared_estimates import solve_jointly
from ngbound.motion import Thrust
from tests.fit.simulated import BELT, MJD_2020, nights, orbit_of, simulate

WHEN = nights(MJD_2020, 1500, 60, 3)
OLD = (-0.1, 0.4)


@pytest.fixture(scope="module")
def biased():
    """Half of the nights reduced with a catalogue that is off, in an arc without thrust."""
    half = len(WHEN) // 2
    truth = simulate(
        orbit_of(BELT), WHEN, np.random.default_rng(41), stations=("500", "568"),
        catalogue=["USNOA2"] * half + ["Gaia2"] * (len(WHEN) - half),
        offsets_arcsec={"USNOA2": OLD},
    )  # fmt: skip
    push = fit_orbit(truth.arc, Thrust("inverse-square"), initial=truth.orbit)
    return truth, push


def test_the_offset_of_the_catalogue_is_estimated(biased):
    _, push = biased
    table = push.offsets.set_index("name")
    total = {}
    for axis, truth in zip(("RA", "Dec"), OLD, strict=True):
        row = table.loc[f"catalogue USNOA2, {axis}"]
        assert abs(row["estimate"] - truth) < 3.0 * row["sigma"]
        assert row["sigma"] < row["prior_sigma"]
        assert abs(row["pull"]) < 4.0 and "Eggl" in row["published"]
        total[axis] = row["estimate"]
    assert total["Dec"] > 0.15


def test_no_false_thrust_comes_of_it(biased):
    truth, push = biased
    assert push.significance < 4.0
    bare = ErrorModel(catalogue_offsets=False)
    naive = fit_orbit(truth.arc, Thrust("inverse-square"), bare, initial=truth.orbit)
    assert naive.significance > 5.0
    # the price of it
    assert (push.A_sigma > naive.A_sigma).all()
    assert push.chi2 < naive.chi2


def test_joint_solution_and_marginalised_fit_agree(biased):
    _, push = biased
    design = push.design.reshape(-1, 2, push.theta.size)
    joint = solve_jointly(push.seen, design, push.noise, push.keep)
    p = push.theta.size
    cov = joint.cov[:p, :p] / np.outer(joint.scale, joint.scale)
    assert np.sqrt(np.diag(cov)) == pytest.approx(np.sqrt(np.diag(push.theta_cov)), rel=1e-3)
    # at the solution: chi2 = |rest|^2 + |shared|^2, and the trace of I - H counts what is free
    chi2 = joint.rest @ joint.rest + joint.shared @ joint.shared
    assert chi2 == pytest.approx(push.chi2, abs=0.01)
    assert np.sum(1.0 - joint.leverage) < 2 * push.n_obs - p


def test_the_fast_chi2_knows_the_shared_errors(biased):
    _, push = biased
    thetas = np.stack([push.theta, push.theta + 0.3 * np.sqrt(np.diag(push.theta_cov))])
    chi2 = push.chi2_many(thetas)
    off = thetas[1] - push.theta
    assert chi2[0] == pytest.approx(push.chi2, abs=0.05)
    assert chi2[1] - chi2[0] == pytest.approx(off @ push.normal @ off, rel=1e-2)


def test_the_thrust_under_a_few_error_models(biased):
    _, push = biased
    chosen = [v for v in error_variants() if v.name in ("base", "large catalogue offsets", "naive")]
    told = vary(push, chosen)
    table = told.table.set_index("name")
    assert list(table.index) == ["base", "large catalogue offsets", "naive"]
    assert table.loc["naive", "A3_sigma"] < table.loc["base", "A3_sigma"]
    assert told.spread()["A3"] >= 1.0 and not told.failed
    assert "a warning" in str(told) and told.to_dict()["table"]
    names = [v.name for v in error_variants()]
    assert len(set(names)) == len(names) >= 8


def test_the_errors_are_told_in_words(biased):
    _, push = biased
    text = push.error_report
    assert "catalogue USNOA2, Dec" in text and "Eggl" in text and " season " not in text
    assert "Errors of" in text
    record = json.loads(json.dumps(push.to_dict()))
    assert {row["name"] for row in record["shared_errors"]} == set(push.offsets["name"])
