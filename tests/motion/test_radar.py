"""Radar echoes against a slow, plain solution of the two legs, and partials against differences."""

import numpy as np
import pytest

from ngbound.constants import C_KM_S, DAY_S
from ngbound.motion import Orbit, Thrust, partials_along
from ngbound.motion.radar import echo, echo_partials
from ngbound.sky import load_ephemeris, station_states
from tests.motion.orbits import at_perihelion
from tests.units import km

NEAR_EARTH = at_perihelion(1.1, 0.3, 0.1)
SITE = (-66.75, 18.34, 500.0)
OTHER = (-116.89, 35.43, 1000.0)
MEGAHERTZ = 2380.0


def test_delay_is_the_sum_of_both_legs() -> None:
    track = Orbit(0.0, NEAR_EARTH).track(-2.0, 60.0)
    times = np.array([5.0, 30.0, 55.0])
    got = echo(track, times, SITE, OTHER, MEGAHERTZ)
    ephemeris = load_ephemeris()
    light = C_KM_S * DAY_S * km
    for i, t in enumerate(times):
        end = station_states(OTHER, t, ephemeris).position_au[0]
        bounce = t
        for _ in range(10):
            bounce = t - np.linalg.norm(track.at(bounce)[0, :3] - end) / light
        sent = bounce
        for _ in range(10):
            start = station_states(SITE, sent, ephemeris).position_au[0]
            sent = bounce - np.linalg.norm(track.at(bounce)[0, :3] - start) / light
        # the plain legs lack the Sun's delay (some ten to a hundred microseconds) and the clocks'
        # drift
        extra = got.delay_s[i] - (t - sent) * DAY_S
        assert 5e-6 < extra < 3e-4


def test_doppler_is_minus_the_rate_of_the_delay() -> None:
    track = Orbit(0.0, NEAR_EARTH).track(-2.0, 60.0)
    t = np.array([20.0])
    h = 600.0 / DAY_S
    before, after = (echo(track, t + s * h, SITE, SITE).delay_s[0] for s in (-1, 1))
    got = echo(track, t, SITE, SITE, MEGAHERTZ)
    assert got.doppler_hz[0] == pytest.approx(
        -MEGAHERTZ * 1e6 * (after - before) / 1200.0, rel=1e-4
    )
    assert np.sign(got.doppler_hz[0]) == -np.sign(after - before)


def test_sun_delay_near_conjunction() -> None:
    # I. I. Shapiro 1964: some 200 microseconds for an echo that grazes the Sun at superior
    # conjunction
    ephemeris = load_ephemeris()
    t = 100.0
    sun = np.concatenate(ephemeris.posvel("sun", t))
    earth = ephemeris.position_au("earth", t)
    away = sun[:3] - earth
    away /= np.linalg.norm(away)
    aside = np.cross(away, [0.0, 0.0, 1.0])
    aside /= np.linalg.norm(aside)
    place = sun[:3] + 0.72 * away + aside * 0.0047 * 1.9
    state = np.concatenate([place, sun[3:] + 0.02 * aside])
    track = Orbit(t, state).track(t - 1.0, t + 1.0)
    got = echo(track, [t], "500", "500")
    bounce = track.at_offset(got.bounce_tau_d)[0, :3]
    legs = []
    for when in (t, t - got.delay_s[0] / DAY_S):
        legs.append(np.linalg.norm(bounce - ephemeris.position_au("earth", when)) / km / C_KM_S)
    assert got.delay_s[0] - sum(legs) == pytest.approx(220e-6, abs=40e-6)


def test_partials_against_differences() -> None:
    names = ("x", "y", "z", "vx", "vy", "vz", "A1", "A2", "A3")
    thrust = Thrust(A=(1e-8, 1e-9, 1e-9))
    track = Orbit(0.0, NEAR_EARTH, thrust).track(-2.0, 60.0)
    t = np.array([20.0, 50.0])
    delay, doppler = echo_partials(track, partials_along(track, names), t, SITE, OTHER, MEGAHERTZ)
    for c in range(9):
        step = 1e-6 if c < 3 else 1e-8 if c < 6 else 1e-9
        sides = []
        for sign in (1.0, -1.0):
            state = NEAR_EARTH.copy()
            amounts = np.array([1e-8, 1e-9, 1e-9])
            if c < 6:
                state[c] += sign * step
            else:
                amounts[c - 6] += sign * step
            moved = Orbit(0.0, state, Thrust(A=amounts)).track(-2.0, 60.0)
            sides.append(echo(moved, t, SITE, OTHER, MEGAHERTZ))
        slope = (sides[0].delay_s - sides[1].delay_s) / (2 * step)
        assert np.abs(slope - delay[:, c]).max() < 1e-7 * np.abs(delay[:, c]).max()
        slope = (sides[0].doppler_hz - sides[1].doppler_hz) / (2 * step)
        assert np.abs(slope - doppler[:, c]).max() < 1e-6 * np.abs(doppler[:, c]).max()
