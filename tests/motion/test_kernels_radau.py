"""The integrator against itself: convergence, round trips, breaks, failures."""

import time

import numpy as np
import pytest

from ngbound.constants import GM_SUN_AU3_D2
from ngbound.errors import EphemerisRangeError, PropagationError
from ngbound.motion import (
    ForceModel,
    Thrust,
    Track,
    Window,
    integrate_track,
    partials_along,
)
from ngbound.motion._kernels.radau import NODES, TO_POWERS, V_WEIGHTS, X_WEIGHTS
from ngbound.sky import load_ephemeris
from tests.benchmarks.plain_twin import plain_track
from tests.motion.orbits import BELT, HYPERBOLA, at_perihelion
from tests.units import km, metre

THRUST = Thrust(A=(1e-8, 1e-9, 1e-9))


def test_nodes_are_gauss_radau_points() -> None:
    # E. Everhart 1985: h_1 = 0.05626256053692215, h_7 = 0.97752061356128750 (from memory)
    assert NODES[0] == 0.0
    assert NODES[1] == pytest.approx(0.05626256053692215, abs=1e-15)
    assert NODES[7] == pytest.approx(0.97752061356128750, abs=1e-15)


@pytest.mark.parametrize("power", range(15))
def test_weights_integrate_polynomials_exactly(power: int) -> None:
    values = NODES**power
    assert V_WEIGHTS[8] @ values == pytest.approx(1.0 / (power + 1), abs=2e-15)
    if power < 14:
        assert X_WEIGHTS[8] @ values == pytest.approx(1.0 / ((power + 1) * (power + 2)), abs=1e-15)
    if power < 8:
        assert TO_POWERS @ values == pytest.approx(np.eye(8)[power], abs=1e-11)


@pytest.mark.parametrize(
    ("state", "days", "tolerance"),
    [(BELT, 365.25, 5e-3 * metre), (HYPERBOLA, 120.0, 2e-3 * metre), (BELT, 7305.0, 0.2 * metre)],
    ids=["main belt 1 yr", "hyperbola 120 d", "main belt 20 yr"],
)
def test_error_against_tighter_steps(state: np.ndarray, days: float, tolerance: float) -> None:
    times = np.linspace(0.0, days, 200)
    normal = integrate_track(0.0, state, 0.0, days, THRUST).at(times)
    tight = integrate_track(0.0, state, 0.0, days, THRUST, eps=1e-10).at(times)
    assert np.abs(normal - tight)[:, :3].max() < tolerance


def test_round_trip_of_twenty_years() -> None:
    days = 7305.0
    there = integrate_track(0.0, BELT, 0.0, days, THRUST, eps=1e-8).at(days)[0]
    back = integrate_track(days, there, 0.0, days, THRUST, eps=1e-8).at(0.0)[0]
    assert np.linalg.norm(back[:3] - BELT[:3]) < 0.5 * metre


def test_order_of_convergence() -> None:
    # the steps follow eps^(1/7); an error that falls at least with the 12th power of the step shows
    # the high order
    times = np.linspace(0.0, 120.0, 50)
    best = integrate_track(0.0, HYPERBOLA, 0.0, 120.0, THRUST, eps=1e-10).at(times)
    steps, errors = [], []
    for eps in (1e-2, 1e-3, 1e-4):
        track = integrate_track(0.0, HYPERBOLA, 0.0, 120.0, THRUST, eps=eps)
        assert track.ahead is not None
        steps.append(track.ahead.n)
        errors.append(np.abs(track.at(times) - best)[:, :3].max())
    slope = np.polyfit(np.log(steps), np.log(errors), 1)[0]
    assert slope < -10.0


def test_backward_and_forward_legs_meet_at_the_epoch() -> None:
    track = integrate_track(100.0, BELT, 0.0, 200.0)
    h = 1e-6
    before, after = track.at([100.0 - h, 100.0 + h])
    assert before[:3] + h * BELT[3:] == pytest.approx(BELT[:3], abs=1e-3 * metre)
    assert after[:3] - h * BELT[3:] == pytest.approx(BELT[:3], abs=1e-3 * metre)
    assert track.at(100.0)[0] == pytest.approx(BELT, abs=1e-15)


def test_velocity_is_the_derivative_of_position() -> None:
    track = integrate_track(0.0, HYPERBOLA, 0.0, 60.0)
    h = 1e-3
    t = np.linspace(1.0, 59.0, 25)
    slope = (track.at(t + h)[:, :3] - track.at(t - h)[:, :3]) / (2 * h)
    assert slope == pytest.approx(track.at(t)[:, 3:], rel=1e-6)


def test_date_window_switches_the_thrust_on_and_off() -> None:
    window = Window.between_dates(30.0, 60.0)
    burst = Thrust(A=(1e-6, 0.0, 0.0), window=window)
    with_burst = integrate_track(0.0, BELT, 0.0, 90.0, burst)
    without = integrate_track(0.0, BELT, 0.0, 90.0)
    difference = with_burst.at([29.9, 45.0, 90.0]) - without.at([29.9, 45.0, 90.0])
    assert np.abs(difference[0]).max() < 1e-15
    r = 2.3
    assert np.linalg.norm(difference[1, 3:]) == pytest.approx(1e-6 / r**2 * 15.0, rel=0.02)
    assert np.linalg.norm(difference[2, 3:]) == pytest.approx(1e-6 / r**2 * 30.0, rel=0.06)
    tight = integrate_track(0.0, BELT, 0.0, 90.0, burst, eps=1e-9)
    assert np.abs(tight.at(90.0) - with_burst.at(90.0))[0, :3].max() < 1e-3 * metre


def test_distance_window_switches_where_the_distance_is_reached() -> None:
    inside = Thrust(A=(1e-6, 0.0, 0.0), window=Window.between_distances(0.0, 0.5))
    always = Thrust(A=(1e-6, 0.0, 0.0))
    a = integrate_track(0.0, HYPERBOLA, 0.0, 40.0, inside)
    b = integrate_track(0.0, HYPERBOLA, 0.0, 40.0, always)
    assert a.ahead is not None
    sun = np.linalg.norm(a.at(5.0)[0, :3])
    assert sun < 0.5
    assert np.abs(a.at(5.0) - b.at(5.0)).max() < 1e-14
    assert np.linalg.norm((a.at(40.0) - b.at(40.0))[0, :3]) > 1000 * metre
    tight = integrate_track(0.0, HYPERBOLA, 0.0, 40.0, inside, eps=1e-9)
    assert np.abs(tight.at(40.0) - a.at(40.0))[0, :3].max() < 1e-2 * metre


@pytest.mark.parametrize("q_au", [1.0, 2.7])
@pytest.mark.parametrize("e", [0.05, 0.3])
@pytest.mark.parametrize("beyond", [3e-5, 1e-3, 1e-2])
def test_distance_window_that_grazes_the_perihelion(q_au: float, e: float, beyond: float) -> None:
    # long steps near the turning point must neither miss the window nor misjudge it
    state = at_perihelion(q_au, e)
    window = Window.between_distances(0.0, q_au * (1.0 + beyond))
    thrust = Thrust(A=(1e-6, 0.0, 0.0), window=window)
    start = integrate_track(0.0, state, -200.0, 0.0).at(-200.0)[0]
    times = np.array([-100.0, 100.0, 250.0])
    normal = integrate_track(-200.0, start, -200.0, 250.0, thrust).at(times)
    fine = integrate_track(-200.0, start, -200.0, 250.0, thrust, cap_d=1.0).at(times)
    bare = integrate_track(-200.0, start, -200.0, 250.0).at(times)
    effect = np.abs(fine - bare)[:, :3].max()
    assert effect > 100.0 * metre
    assert np.abs(normal - fine)[:, :3].max() < 1e-4 * effect + 0.1 * metre


def test_window_that_is_never_left_is_no_window() -> None:
    state = at_perihelion(2.3, 0.15)
    far = 2.3 * 1.15 / 0.85 + 0.5
    thrust = Thrust(A=(1e-6, 0.0, 0.0), window=Window.between_distances(0.0, far))
    inside = integrate_track(0.0, state, -300.0, 1200.0, thrust).at([-300.0, 1200.0])
    always = integrate_track(0.0, state, -300.0, 1200.0, Thrust(A=(1e-6, 0.0, 0.0)))
    assert np.abs(inside - always.at([-300.0, 1200.0]))[:, :3].max() < 0.01 * metre


def test_integrator_meets_an_independent_one() -> None:
    # SciPy's DOP853 calling jplephem: E. Hairer, S. P. Norsett & G. Wanner 1993, Solving Ordinary
    # Differential Equations I; tests/benchmarks/plain_twin.py
    amounts = np.array([1e-7, 3e-8, -2e-8])
    times = np.array([20.0, 40.0])
    plain = plain_track(HYPERBOLA, 40.0, times, amounts, True)
    ours = integrate_track(0.0, HYPERBOLA, 0.0, 40.0, Thrust(A=amounts), ForceModel(earth_j2=False))
    assert np.abs(ours.at(times) - plain)[:, :3].max() < 5.0 * metre
    bare = integrate_track(0.0, HYPERBOLA, 0.0, 40.0, None, ForceModel(earth_j2=False))
    assert np.abs(bare.at(times) - plain)[:, :3].max() > 1e5 * metre


def test_lag_delays_the_thrust() -> None:
    # g is taken at t - DT (D. K. Yeomans & P. W. Chodas 1989, AJ 98, 1083): with a positive lag
    # there is less thrust on the way in and more on the way out
    state = at_perihelion(0.5, 0.9)
    speed = {}
    for lag in (0.0, 20.0):
        thrust = Thrust("water-ice", A=(1e-6, 0.0, 0.0), lag=lag)
        for name, end in (("in", -30.0), ("out", 30.0)):
            with_push = integrate_track(0.0, state, min(0.0, end), max(0.0, end), thrust).at(end)
            bare = integrate_track(0.0, state, min(0.0, end), max(0.0, end)).at(end)
            speed[name, lag] = np.linalg.norm((with_push - bare)[0, 3:])
    assert speed["in", 20.0] < speed["in", 0.0]
    assert speed["out", 20.0] > speed["out", 0.0]


def test_times_outside_the_span_are_refused() -> None:
    track = integrate_track(0.0, BELT, 0.0, 10.0)
    for t in (-1.0, 11.0):
        with pytest.raises(PropagationError, match="covers 0.000000 to 10.000000 d"):
            track.at(t)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (lambda s: (np.nan, s, 0.0, 1.0), "must be finite days"),
        (lambda s: (0.0, s * [1, 1, 1, 1e5, 1e5, 1e5], 0.0, 1.0), "not below that of light"),
        (lambda s: (0.0, s * [1e-4, 1e-4, 1e-4, 1, 1, 1], 0.0, 1.0), "runs into the sun"),
    ],
)
def test_input_that_makes_no_sense_is_refused(change, message: str) -> None:
    with pytest.raises(PropagationError, match=message):
        integrate_track(*change(BELT.copy()))


def amplification(track: Track, offset_d: np.ndarray) -> float:
    """Largest partial of a later position with respect to one of the start."""
    names = ("x", "y", "z")
    return float(np.abs(partials_along(track, names).at_offset(offset_d)[:, :3]).max())


def largest_gap(a: Track, b: Track, times: np.ndarray) -> float:
    """Largest difference of a coordinate of position, au."""
    return float(np.abs(a.at(times) - b.at(times))[:, :3].max())


def test_flyby_of_the_earth_at_40000_km() -> None:
    from_earth = 40000e3 * metre
    epoch = 50.0
    position, velocity = load_ephemeris().posvel("earth", epoch)
    state = np.concatenate([position + [from_earth, 0.0, 0.0], velocity + [0.0, 7.0e-3, 2e-3]])
    times = np.linspace(0.0, 100.0, 101)
    normal = integrate_track(epoch, state, 0.0, 100.0)
    tight = integrate_track(epoch, state, 0.0, 100.0, eps=1e-11, cap_d=10.0)
    # measured: 4.1 mm
    assert largest_gap(normal, tight, times) < 10e-3 * metre
    assert normal.ahead is not None and normal.ahead.n < 400
    # through the encounter, from before it: the Earth turns a shift before into one 270 times as
    # large after, and so it does with the rounding of each step's places (8 micrometres at 1 au);
    # measured: 6 to 32 mm between step controls of 1e-8 and 1e-11
    before = normal.at(0.0)[0]
    through = integrate_track(0.0, before, 0.0, 100.0)
    assert through.ahead is not None
    grows = amplification(through, times)
    assert 200.0 < grows < 400.0
    place = 0.5 * np.spacing(np.abs(before[:3]).max())
    rounding = 3.0 * np.sqrt(through.ahead.n) * place * grows
    assert rounding < 0.1 * metre
    for eps in (1e-10, 1e-11):
        finer = integrate_track(0.0, before, 0.0, 100.0, eps=eps)
        assert largest_gap(through, finer, times) < rounding
    # the way back to the start has its own millimetres, which grow as much; measured: 0.28 m
    start = largest_gap(normal, tight, times[:1])
    assert start < 10e-3 * metre
    assert largest_gap(through, normal, times) < np.sqrt(3.0) * grows * start + rounding


def test_pass_through_the_hill_sphere_of_jupiter() -> None:
    # 0.15 au from Jupiter and slower than a circular orbit there: bound to it at first
    epoch = 50.0
    position, velocity = load_ephemeris().posvel("jupiter", epoch)
    state = np.concatenate([position + [0.15, 0.0, 0.01], velocity + [0.0, 1.1e-3, 1e-4]])
    days = 2000.0
    times = np.linspace(epoch, epoch + days, 101)
    normal = integrate_track(epoch, state, epoch, epoch + days)
    tight = integrate_track(epoch, state, epoch, epoch + days, eps=1e-11, cap_d=10.0)
    assert normal.ahead is not None and normal.ahead.n < 600
    # a shift at the start grows 77 times on the way out and 193 times on the way back, and with it
    # the rounding of a place 5 au away (66 micrometres); measured: 1 to 9 mm, and 5 to 20 mm there
    # and back
    rounding = 0.5 * np.spacing(np.abs(normal.at(times)[:, :3]).max())
    out = amplification(normal, times - epoch)
    assert 50.0 < out < 100.0
    assert largest_gap(normal, tight, times) < 3.0 * rounding * out
    back = integrate_track(epoch + days, normal.at(epoch + days)[0], epoch, epoch + days)
    home = amplification(back, np.array([-days]))
    assert 100.0 < home < 300.0
    assert np.linalg.norm(back.at(epoch)[0, :3] - state[:3]) < 3.0 * rounding * home


def test_orbit_into_the_sun_is_refused_in_a_sentence() -> None:
    state = at_perihelion(1.0, 0.0)
    sun = state.copy()
    sun[3:] = 0.0
    with pytest.raises(PropagationError, match=r"runs into the sun at 2000-.* TDB"):
        integrate_track(0.0, sun, 0.0, 100.0)


@pytest.mark.parametrize(("share", "years"), [(1.0, 90.0), (0.5, 60.0)])
def test_too_many_revolutions_are_refused_early(share: float, years: float) -> None:
    # around the Sun at 0.05 au, on a circle and on an orbit that comes within 1.5 solar radii
    sun = np.concatenate(load_ephemeris().posvel("sun", 0.0))
    speed = share * np.sqrt(GM_SUN_AU3_D2 / 0.05)
    state = sun + [0.05, 0.0, 0.0, 0.0, speed, 0.0]
    integrate_track(0.0, state, 0.0, 10.0)
    started = time.process_time()
    with pytest.raises(PropagationError, match="far more than the 50000 allowed"):
        integrate_track(0.0, state, 0.0, 365.25 * years)
    assert time.process_time() - started < 0.5
    # a span that can be had is not refused
    track = integrate_track(0.0, state, 0.0, 365.25)
    assert track.ahead is not None and track.ahead.n > 1000


def test_satellite_of_the_earth_is_refused_early() -> None:
    position, velocity = load_ephemeris().posvel("earth", 0.0)
    height = 7000.0 * km
    speed = np.sqrt(load_ephemeris().gm_au3_d2("earth") / height)
    state = np.concatenate([position + [height, 0.0, 0.0], velocity + [0.0, speed, 0.0]])
    with pytest.raises(PropagationError, match="check whether the orbit circles a planet"):
        integrate_track(0.0, state, 0.0, 3652.0)


def test_lag_that_makes_no_sense_ends_in_a_sentence() -> None:
    # the thrust outweighs the Sun, so that two-body motion back by the lag grazes it time and again
    thrust = Thrust("water-ice", A=(1e-4, 0.0, 0.0), lag=20.0)
    integrate_track(0.0, HYPERBOLA, 0.0, 1.0, thrust)
    started = time.process_time()
    with pytest.raises(PropagationError, match="too many tries"):
        integrate_track(0.0, HYPERBOLA, 0.0, 120.0, thrust)
    assert time.process_time() - started < 5.0


def test_span_outside_the_ephemeris_is_refused() -> None:
    with pytest.raises(EphemerisRangeError, match="covers 1549-12-31 to 2650"):
        integrate_track(0.0, BELT, 0.0, 365.25 * 700, forces=ForceModel(asteroids=False))


def test_state_that_is_not_finite_is_refused() -> None:
    bad = BELT.copy()
    bad[0] = np.nan
    with pytest.raises(PropagationError, match="six finite numbers"):
        integrate_track(0.0, bad, 0.0, 10.0)
