import json

import numpy as np
import pytest

from ngbound.limits import orbit_degeneracy, thrust_information
from ngbound.limits.degeneracy import _shortest_run
from tests.limits.arcs import CLASSES, fitted


@pytest.mark.parametrize("name", ["main belt, 10 years", "hyperbolic, 90 days"])
def test_correlations_are_those_of_sampled_elements(name):
    push = fitted(CLASSES[name])
    found = orbit_degeneracy(push)
    info = thrust_information(push)
    random = np.random.default_rng(1)
    A = (
        random.multivariate_normal(np.zeros(3), np.eye(3), 4000)
        @ np.linalg.cholesky(info.covariance).T
    )
    x = A @ info.orbit.gain.T + random.standard_normal((4000, 6)) @ info.orbit.spread.T
    elements = x @ np.linalg.inv(push.orbit.elements().jacobian()).T
    for j, column in enumerate(("q", "e", "i", "node", "argperi", "tp")):
        for i, letter in enumerate("RTN"):
            sampled = np.corrcoef(A[:, i], elements[:, j])[0, 1]
            assert found.correlation.loc[letter, column] == pytest.approx(sampled, abs=0.06)
    assert np.all(np.abs(found.correlation.to_numpy()) <= 1.0 + 1e-9)
    json.dumps(found.to_dict())


def test_a_transverse_thrust_goes_with_the_mean_motion_in_a_long_arc():
    found = orbit_degeneracy(fitted(CLASSES["main belt, 10 years"]))
    assert found.sentences[1].startswith("A transverse thrust")
    assert abs(found.correlation.loc["R", "1/a"]) > 0.5
    assert "% of the nights" in str(found)


def test_shortest_run():
    assert _shortest_run(np.array([0.1, 0.3, 0.3, 0.1, 0.2])) == (1, 2)
    assert _shortest_run(np.array([0.6, 0.1, 0.3])) == (0, 0)
    assert _shortest_run(np.full(4, 0.25)) == (0, 1)
