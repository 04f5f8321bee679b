"""Elements and states of every conic: round trips, partials, degenerate cases."""

import json
import math

import numpy as np
import pytest

from ngbound.constants import GM_SUN_AU3_D2
from ngbound.errors import AnalysisError, InputError, PropagationError
from ngbound.motion.elements import (
    CENTRE_GM_AU3_D2,
    ECLIPTIC_TO_ICRF,
    CometaryElements,
    KeplerianElements,
    elements_jacobian,
)
from ngbound.motion.kepler import propagate_two_body

ECCENTRICITIES = [1e-3, 0.1, 0.5, 0.97, 1 - 1e-12, 1.0, 1 + 1e-12, 1.2, 5.0]
EPOCH = 8000.25


def some_elements(e, seed=0, n=20):
    rng = np.random.default_rng([seed, int(1e6 * e)])
    for _ in range(n):
        yield CometaryElements(
            EPOCH,
            10 ** rng.uniform(-1, 1),
            e,
            rng.uniform(0.05, 3.09),
            rng.uniform(0, 6.28),
            rng.uniform(0, 6.28),
            EPOCH + rng.choice([-1, 1]) * 10 ** rng.uniform(0, 3.2),
        )


@pytest.mark.parametrize("e", ECCENTRICITIES)
def test_round_trip_loses_nothing(e):
    for elements in some_elements(e):
        state = elements.state()
        again = CometaryElements.from_state(EPOCH, state)
        assert again.q_au == pytest.approx(elements.q_au, rel=1e-12)
        assert again.e == pytest.approx(elements.e, abs=1e-12 * (1 + e**2))
        assert again.i_rad == pytest.approx(elements.i_rad, abs=1e-13)
        back = again.state()
        for part in (slice(0, 3), slice(3, 6)):
            size = np.linalg.norm(state[part])
            assert np.linalg.norm((back - state)[part]) < 3e-13 * (1 + e) * size


@pytest.mark.parametrize("e", ECCENTRICITIES)
def test_partials_against_richardson_differences(e):
    names = ["q_au", "e", "i_rad", "node_rad", "argperi_rad", "tp_tdb_d"]
    for elements in some_elements(e, seed=1, n=6):
        values = np.array([getattr(elements, name) for name in names])
        steps = np.array([1e-4 * values[0], min(3e-4, 0.3 * e), 1e-3, 1e-3, 1e-3, 0.01])
        jacobian = elements.jacobian()
        for j in range(6):

            def slope(h, j=j, values=values, steps=steps):
                move = h * steps * (np.arange(6) == j)
                up = CometaryElements(EPOCH, *(values + move)).state()
                down = CometaryElements(EPOCH, *(values - move)).state()
                return (up - down) / (2 * h * steps[j])

            rough = [slope(0.5**k) for k in range(4)]
            for order in (4, 16, 64):
                rough = [
                    (order * b - a) / (order - 1) for a, b in zip(rough, rough[1:], strict=False)
                ]
            error = abs(rough[0] - jacobian[:, j])
            assert error[:3].max() < 2e-8 * abs(jacobian[:3]).max()
            assert error[3:].max() < 2e-8 * abs(jacobian[3:]).max()


def test_inverse_partials_and_covariance_both_ways():
    rng = np.random.default_rng(5)
    for e in ECCENTRICITIES:
        for elements in some_elements(e, seed=2, n=5):
            inverse = elements_jacobian(elements)
            product = inverse @ elements.jacobian()
            size = np.abs(inverse) @ np.abs(elements.jacobian())
            assert (np.abs(product - np.eye(6)) < 1e-9 * (1 + size)).all()
    elements = next(some_elements(0.5))
    root = rng.normal(size=(6, 6)) * 1e-8
    covariance = root @ root.T
    back = elements.state_covariance(elements.elements_covariance(covariance))
    np.testing.assert_allclose(back, covariance, rtol=1e-6, atol=1e-22)
    kepler = elements.to_keplerian()
    back = kepler.state_covariance(kepler.elements_covariance(covariance))
    np.testing.assert_allclose(back, covariance, rtol=1e-6, atol=1e-22)


def test_covariance_matches_a_cloud():
    rng = np.random.default_rng(6)
    elements = CometaryElements(EPOCH, 0.9, 0.6, 0.3, 1.0, 2.0, EPOCH - 120.0)
    sigma = np.array([1e-7, 1e-7, 1e-7, 1e-9, 1e-9, 1e-9])
    cloud = elements.state() + rng.normal(size=(1500, 6)) * sigma
    values = []
    for state in cloud:
        k = CometaryElements.from_state(EPOCH, state)
        values.append([k.q_au, k.e, k.i_rad, k.node_rad, k.argperi_rad, k.tp_tdb_d])
    spread = np.std(values, axis=0)
    predicted = np.sqrt(np.diag(elements.elements_covariance(np.diag(sigma**2))))
    np.testing.assert_allclose(spread, predicted, rtol=0.08)


@pytest.mark.parametrize("e", [0.01, 0.6, 1.3])
def test_keplerian_partials(e):
    elements = next(some_elements(e, seed=3)).to_keplerian()
    names = ["a_au", "e", "i_rad", "node_rad", "argperi_rad", "mean_anomaly_rad"]
    values = np.array([getattr(elements, name) for name in names])
    steps = np.array([1e-5 * abs(values[0])] + [1e-5 * min(1, e)] + [1e-5] * 4)
    jacobian = elements.jacobian()
    for j in range(6):
        move = steps * (np.arange(6) == j)
        up = KeplerianElements(EPOCH, *(values + move)).state()
        down = KeplerianElements(EPOCH, *(values - move)).state()
        slope = (up - down) / (2 * steps[j])
        assert abs(slope - jacobian[:, j]).max() < 1e-6 * abs(jacobian[:, j]).max()


def test_keplerian_and_cometary_are_one_orbit():
    for e in (0.3, 1.7):
        for elements in some_elements(e, seed=4):
            kepler = elements.to_keplerian()
            state = elements.state()
            assert np.linalg.norm(kepler.state() - state) < 1e-11 * np.linalg.norm(state)
            same = KeplerianElements.from_state(EPOCH, state)
            assert same.a_au == pytest.approx(kepler.a_au, rel=1e-11)


def test_a_parabola_has_no_mean_anomaly():
    elements = CometaryElements(0.0, 1.0, 1.0, 0.1, 0.2, 0.3, 5.0)
    assert elements.inverse_a_per_au == 0
    assert math.isinf(elements.a_au) and math.isinf(elements.period_d)
    with pytest.raises(AnalysisError, match="cometary elements"):
        elements.to_keplerian()


def test_circle_and_ecliptic_orbit_follow_the_convention():
    r = 2.0
    speed = math.sqrt(GM_SUN_AU3_D2 / r)
    turn = 0.7
    flat = np.array([math.cos(turn), math.sin(turn), 0.0])
    along = np.array([-math.sin(turn), math.cos(turn), 0.0])
    state = np.concatenate([ECLIPTIC_TO_ICRF @ (r * flat), ECLIPTIC_TO_ICRF @ (speed * along)])
    elements = CometaryElements.from_state(0.0, state)
    assert elements.node_rad == 0 and elements.i_rad < 1e-15
    assert elements.e < 1e-14
    assert np.linalg.norm(elements.state() - state) < 1e-14
    circle = CometaryElements(0.0, 2.0, 0.0, 0.4, 1.0, 0.0, -50.0)
    again = CometaryElements.from_state(0.0, circle.state())
    assert np.linalg.norm(again.state() - circle.state()) < 1e-14
    with pytest.raises(AnalysisError, match="covariance"):
        elements_jacobian(circle)
    for flat_i in (0.0, math.pi):
        plane = CometaryElements(0.0, 1.0, 0.4, flat_i, 0.0, 2.0, -50.0)
        again = CometaryElements.from_state(0.0, plane.state())
        assert again.i_rad == pytest.approx(flat_i, abs=1e-15)
        assert np.linalg.norm(again.state() - plane.state()) < 3e-15


def test_elements_stay_while_the_body_moves():
    elements = CometaryElements(0.0, 0.34, 0.85, 0.2, 5.8, 3.2, 90.0)
    later = CometaryElements.from_state(700.0, propagate_two_body(elements.state(), 700.0))
    assert later.q_au == pytest.approx(0.34, rel=1e-13)
    assert later.tp_tdb_d == pytest.approx(90.0 + 0 * later.period_d, abs=1e-8)
    assert later.period_d == pytest.approx(2 * math.pi / math.sqrt(GM_SUN_AU3_D2) * later.a_au**1.5)
    assert later.aphelion_au == pytest.approx(2 * later.a_au - later.q_au)


def test_barycentric_gm_is_that_of_the_whole_system():
    assert CENTRE_GM_AU3_D2["barycentric"] / GM_SUN_AU3_D2 - 1 == pytest.approx(1.3418e-3, rel=1e-3)
    elements = CometaryElements(0.0, 1.0, 0.999, 1.0, 2.0, 3.0, 100.0, "barycentric")
    same = CometaryElements.from_state(0.0, elements.state(), "barycentric")
    assert same.e == pytest.approx(0.999, abs=1e-14)
    with pytest.raises(InputError, match="barycentric"):
        CometaryElements(0.0, 1.0, 0.5, 0.1, 0.2, 0.3, 5.0, centre="geocentric")


def test_wrong_values_are_named():
    with pytest.raises(InputError, match="q_au must be above 0"):
        CometaryElements(0.0, -1.0, 0.5, 0.1, 0.2, 0.3, 5.0)
    with pytest.raises(InputError, match="i_rad must be a finite"):
        CometaryElements(0.0, 1.0, 0.5, math.nan, 0.2, 0.3, 5.0)
    with pytest.raises(InputError, match="negative for e > 1"):
        KeplerianElements(0.0, 1.0, 1.5, 0.1, 0.2, 0.3, 5.0)
    with pytest.raises(PropagationError, match="sideways"):
        CometaryElements.from_state(0.0, [1.0, 0, 0, 0.01, 0, 0])
    with pytest.raises(PropagationError, match="six finite"):
        CometaryElements.from_state(0.0, [1.0, 0, 0, 0.01, 0, math.inf])


def test_printed_and_saved():
    elements = next(some_elements(0.5))
    text = str(elements)
    assert "JD TDB" in text and "argperi" in text and "period" in text
    assert json.loads(json.dumps(elements.to_dict()))["q_au"] == elements.q_au
    assert "M " in str(elements.to_keplerian())
    assert json.dumps(elements.to_keplerian().to_dict())
