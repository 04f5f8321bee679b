"""Original and future 1/a."""

import numpy as np
import pytest

from ngbound.errors import AnalysisError
from ngbound.motion import Orbit
from ngbound.motion.original import reciprocal_axis
from tests.motion.orbits import BELT

COMET = dict(epoch=0.0, q=2.5, e=1.0002, i=75.0, node=40.0, argperi=120.0, tp=-30.0)


def test_original_differs_from_osculating_by_the_planets() -> None:
    orbit = Orbit.from_elements(**COMET)
    before = reciprocal_axis(orbit, "original")
    after = reciprocal_axis(orbit, "future")
    osculating = orbit.elements().inverse_a_per_au
    assert before.reached_tdb < "1800" and after.reached_tdb > "2200"
    # the barycentric and the heliocentric value differ by some 1e-4 /au near perihelion
    assert 1e-6 < abs(before.value_per_au - osculating) < 3e-3
    assert before.value_per_au != after.value_per_au
    assert "1e-6 /au" in str(before)


def test_value_has_settled_by_then() -> None:
    orbit = Orbit.from_elements(**COMET)
    near = reciprocal_axis(orbit, "original", distance_au=200.0)
    far = reciprocal_axis(orbit, "original", distance_au=250.0)
    assert near.value_per_au == pytest.approx(far.value_per_au, abs=2e-7)


def test_sigma_follows_the_covariance() -> None:
    orbit = Orbit.from_elements(**COMET)
    cov = np.diag([1e-14] * 3 + [1e-18] * 3)
    got = reciprocal_axis(orbit, "original", cov)
    rng = np.random.default_rng(4)
    values = []
    for _ in range(12):
        moved = Orbit(0.0, orbit.state_vector + rng.standard_normal(6) * np.sqrt(np.diag(cov)))
        values.append(reciprocal_axis(moved, "original").value_per_au)
    assert got.sigma_per_au == pytest.approx(np.std(values), rel=0.6)


def test_orbit_that_stays_inside_is_refused() -> None:
    with pytest.raises(AnalysisError, match="does not reach 250 au"):
        reciprocal_axis(Orbit(0.0, BELT))
