"""Two-body motion against invariants, an integrator and differences."""

import math

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from ngbound.constants import GM_SUN_AU3_D2
from ngbound.errors import PropagationError
from ngbound.motion.kepler import (
    conic_anomaly,
    propagate_two_body,
    solve_kepler,
    two_body_sightlines,
    two_body_transition,
)
from ngbound.motion.lambert import lambert
from tests.units import km, mas, metre

MU = GM_SUN_AU3_D2
ECCENTRICITIES = [0.0, 1e-9, 0.3, 0.97, 1 - 1e-12, 1.0, 1 + 1e-12, 1.2, 6.0]


def perihelion_state(q, e):
    """At perihelion on x, moving along a tilted y."""
    speed = math.sqrt(MU * (1 + e) / q)
    return np.array([q, 0.0, 0.0, 0.0, speed * math.cos(0.4), speed * math.sin(0.4)])


def random_states(n, seed):
    rng = np.random.default_rng(seed)
    position = rng.normal(size=(n, 3)) * 10 ** rng.uniform(-1, 1.5, (n, 1))
    r = np.linalg.norm(position, axis=1, keepdims=True)
    share = rng.choice([0.3, 0.6, 0.8, 1.2], (n, 1))
    return np.hstack([position, rng.normal(size=(n, 3)) * np.sqrt(MU / r) * share]), rng


@pytest.mark.parametrize("e", ECCENTRICITIES)
def test_motion_meets_a_numerical_integration(e):
    start = perihelion_state(0.5, e)
    start = propagate_two_body(start, -40.0)

    def rate(_, y):
        return np.concatenate([y[3:], -MU * y[:3] / np.linalg.norm(y[:3]) ** 3])

    twin = solve_ivp(rate, (0, 150), start, method="DOP853", rtol=3e-14, atol=1e-16).y[:, -1]
    assert np.linalg.norm(propagate_two_body(start, 150.0)[:3] - twin[:3]) < 5 * metre


def test_there_and_back():
    states, rng = random_states(3000, 1)
    dt = rng.normal(size=3000) * 10 ** rng.uniform(-2, 3, 3000)
    there, phi = two_body_transition(states, dt)
    back = propagate_two_body(there, -dt)
    r = np.linalg.norm(states[:, :3], axis=1)
    # a rounding of the far end grows by the transition matrix
    growth = np.linalg.norm(np.linalg.inv(phi)[:, :3, :3], axis=(1, 2)) * np.linalg.norm(
        there[:, :3], axis=1
    ) + np.linalg.norm(np.linalg.inv(phi)[:, :3, 3:], axis=(1, 2)) * np.linalg.norm(
        there[:, 3:], axis=1
    )
    miss = np.linalg.norm((back - states)[:, :3], axis=1)
    assert (miss < 3e-13 * (growth + r)).all()


def test_many_revolutions_close():
    a = 1.3
    start = propagate_two_body(perihelion_state(a * 0.6, 0.4), 37.0)
    period = 2 * math.pi * math.sqrt(a**3 / MU)
    assert np.linalg.norm(propagate_two_body(start, 1000 * period)[:3] - start[:3]) < 5 * metre


def test_broadcasting_and_order():
    states, _ = random_states(5, 2)
    out = propagate_two_body(states[:, None, :], [0.0, 1.0, -3.0])
    assert out.shape == (5, 3, 6)
    np.testing.assert_array_equal(out[:, 0], states)
    np.testing.assert_array_equal(out[3, 2], propagate_two_body(states[3], -3.0))


def test_transition_is_symplectic_and_composes():
    states, rng = random_states(500, 3)
    dt = rng.normal(size=500) * 10 ** rng.uniform(-1, 3.5, 500)
    end, phi = two_body_transition(states, dt)
    np.testing.assert_array_equal(end, propagate_two_body(states, dt))
    unit = np.block([[np.zeros((3, 3)), np.eye(3)], [-np.eye(3), np.zeros((3, 3))]])
    defect = np.swapaxes(phi, 1, 2) @ unit @ phi - unit
    size = np.swapaxes(abs(phi), 1, 2) @ abs(unit) @ abs(phi)
    assert (abs(defect).max(axis=(1, 2)) < 1e-11 * size.max(axis=(1, 2))).all()
    middle, first = two_body_transition(states, 0.3 * dt)
    _, second = two_body_transition(middle, 0.7 * dt)
    both = second @ first
    size = (abs(second) @ abs(first)).max(axis=(1, 2))
    assert (abs(both - phi).max(axis=(1, 2)) < 1e-9 * size).all()


@pytest.mark.parametrize("e", ECCENTRICITIES)
def test_transition_against_richardson_differences(e):
    start = propagate_two_body(perihelion_state(0.8, e), -60.0)
    _, phi = two_body_transition(start, 200.0)
    r = np.linalg.norm(start[:3])
    steps = np.array([1e-3 * r] * 3 + [1e-3 * np.linalg.norm(start[3:])] * 3)

    def slope(j, h):
        move = np.zeros(6)
        move[j] = h * steps[j]
        up, down = propagate_two_body(start + move, 200.0), propagate_two_body(start - move, 200.0)
        return (up - down) / (2 * move[j])

    for j in range(6):
        rough = [slope(j, 0.5**k) for k in range(4)]
        for order in (4, 16, 64):
            rough = [(order * b - a) / (order - 1) for a, b in zip(rough, rough[1:], strict=False)]
        error = abs(rough[0] - phi[:, j])
        assert error[:3].max() < 1e-8 * abs(phi[:3, j]).max()
        assert error[3:].max() < 1e-8 * abs(phi[3:, j]).max()


def test_secular_partials_after_many_revolutions():
    start = propagate_two_body(perihelion_state(0.9, 0.2), 11.0)
    a = 1 / (2 / np.linalg.norm(start[:3]) - start[3:] @ start[3:] / MU)
    dt = 25.3 * 2 * math.pi * math.sqrt(a**3 / MU)
    _, phi = two_body_transition(start, dt)
    move = np.zeros(6)
    move[4] = 1e-9
    slope = (propagate_two_body(start + move, dt) - propagate_two_body(start - move, dt)) / 2e-9
    assert abs(slope - phi[:, 4]).max() < 1e-6 * abs(phi[:, 4]).max()


@pytest.mark.parametrize("e", [0.0, 0.1, 0.9, 0.999999, 1.000001, 1.5, 40.0])
def test_kepler_equation_is_solved(e):
    anomaly = np.concatenate([-np.geomspace(1e-8, 3.0, 40), [0.0], np.geomspace(1e-8, 3.0, 40)])
    if e < 1:
        mean = anomaly - e * np.sin(anomaly)
        slope = 1 - e * np.cos(anomaly)
    else:
        mean = e * np.sinh(anomaly) - anomaly
        slope = e * np.cosh(anomaly) - 1
    # the mean anomaly here is itself rounded at e sin E, which the slope then enlarges
    tolerance = 4e-16 * (abs(anomaly) + (abs(anomaly) + abs(mean)) / slope)
    assert (abs(solve_kepler(mean, e) - anomaly) <= tolerance).all()


def test_kepler_keeps_turns_and_refuses_a_parabola():
    assert solve_kepler(0.3 + 20 * math.pi, 0.5) == pytest.approx(
        solve_kepler(0.3, 0.5) + 20 * math.pi, abs=1e-14
    )
    with pytest.raises(ValueError, match="parabola"):
        solve_kepler(0.1, 1.0)


def test_conic_anomaly_is_continuous_through_the_parabola():
    dt = np.array([-3000.0, -100.0, -0.01, 0.0, 10.0, 1000.0])
    nu, r = conic_anomaly(0.7, 1.0, dt)
    # Barker's equation is exact on the parabola
    half = np.tan(nu / 2)
    barker = (half + half**3 / 3) * math.sqrt(2 * 0.7**3 / MU)
    np.testing.assert_allclose(barker, dt, rtol=1e-13)
    np.testing.assert_allclose(r, 0.7 * (1 + half**2), rtol=1e-13)
    for e in (1 - 1e-12, 1 + 1e-12):
        nu_near, r_near = conic_anomaly(0.7, e, dt)
        assert abs(nu_near - nu).max() < 1e-10
        assert abs(r_near - r).max() < 1e-9


def test_impossible_states_are_told():
    with pytest.raises(PropagationError, match="Mend the starting state"):
        propagate_two_body([0, 0, 0, 0.01, 0, 0], 1.0)
    with pytest.raises(PropagationError, match="finite"):
        propagate_two_body([1, 0, 0, 0.01, math.nan, 0], 1.0)
    with pytest.raises(ValueError, match="6 numbers"):
        propagate_two_body([1, 0, 0], 1.0)


def test_lambert_returns_the_velocities():
    states, rng = random_states(4000, 4)
    r = np.linalg.norm(states[:, :3], axis=1)
    inverse_a = 2 / r - (states[:, 3:] ** 2).sum(axis=1) / MU
    half = np.full(len(r), np.inf)
    half[inverse_a > 0] = math.pi / np.sqrt(MU * inverse_a[inverse_a > 0] ** 3)
    dt = 10 ** rng.uniform(-1, 4, len(r))
    dt = np.where(dt < half, dt, rng.uniform(0.05, 0.9, len(r)) * np.minimum(half, 1e9))
    end = propagate_two_body(states, dt)
    pole = np.cross(states[:, :3], states[:, 3:])
    long_way = (np.cross(states[:, :3], end[:, :3]) * pole).sum(axis=1) < 0
    v1, v2 = lambert(states[:, :3], end[:, :3], dt, long_way=long_way)
    turn = np.linalg.norm(np.cross(states[:, :3], end[:, :3]), axis=1) / (
        r * np.linalg.norm(end[:, :3], axis=1)
    )
    speed = np.linalg.norm(states[:, 3:], axis=1)
    # the plane of two nearly parallel positions is known no better than rounding / sin(turn)
    assert (np.linalg.norm(v1 - states[:, 3:], axis=1) / speed < 1e-11 + 1e-14 / turn).all()
    reached = propagate_two_body(np.hstack([states[:, :3], v1]), dt)
    assert np.isfinite(v2).all()
    far = np.linalg.norm(end[:, :3], axis=1)
    assert (np.linalg.norm((reached - end)[:, :3], axis=1) < far * (1e-10 + 1e-13 / turn)).all()


def test_lambert_says_nan_where_no_plane_is():
    v1, _ = lambert([1, 0, 0], [-1, 0, 0], 100.0)
    assert np.isnan(v1).all()
    v1, _ = lambert([1, 0, 0], [0, 1, 0], -100.0)
    assert np.isnan(v1).all()


def test_sightlines_solve_the_light_time_and_their_partials():
    state = np.array([1.1, 2.0, 0.4, -0.009, 0.006, 0.001])
    t = np.linspace(-50, 120, 9)
    observer = np.column_stack([np.cos(t / 58), np.sin(t / 58), 0.1 * np.ones_like(t)])
    u, partials = two_body_sightlines(5.0, state, t, observer, partials=True)
    for k in range(len(t)):
        tau = 0.0
        for _ in range(30):
            look = propagate_two_body(state, t[k] - tau - 5.0)[:3] - observer[k]
            tau = float(np.linalg.norm(look)) / 173.144632674
        assert np.linalg.norm(look / np.linalg.norm(look) - u[k]) < 1e-4 * mas
    for j in range(6):
        h = 1e-5 if j < 3 else 1e-7
        move = np.zeros(6)
        move[j] = h
        up, _ = two_body_sightlines(5.0, state + move, t, observer)
        down, _ = two_body_sightlines(5.0, state - move, t, observer)
        slope = (up - down) / (2 * h)
        assert abs(slope - partials[:, :, j]).max() < 1e-6 * abs(partials[:, :, j]).max()


def test_far_sightline_is_within_a_kilometre_of_the_iterated_one():
    state = np.array([90.0, 20.0, -10.0, 0.0005, 0.0015, 0.0002])
    u, _ = two_body_sightlines(0.0, state, [0.0, 900.0], [[1.0, 0, 0], [0, 1.0, 0]])
    tau = 0.0
    for _ in range(30):
        look = propagate_two_body(state, 900.0 - tau)[:3] - [0, 1.0, 0]
        tau = float(np.linalg.norm(look)) / 173.144632674
    assert np.linalg.norm(look) * np.linalg.norm(look / np.linalg.norm(look) - u[1]) < km
