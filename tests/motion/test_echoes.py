"""Echoes among the records: the rate of the delay, pairs of residuals, and the batch of neighbours
against the adaptive integrator."""

import numpy as np
import pytest

from ngbound.arc import Factors, user_stations
from ngbound.constants import ARCSEC_RAD, DAY_S
from ngbound.motion import (
    Echoes,
    ForceModel,
    Neighbourhood,
    Orbit,
    Records,
    Thrust,
    Track,
    design_matrix,
    integrate_track,
    residuals,
    see,
)
from ngbound.motion.radar import echo, echo_path
from ngbound.sky import load_ephemeris, station_states
from tests.motion.orbits import at_perihelion, white_factors
from tests.radar_arcs import ANTENNAS
from tests.units import mas

NEAR_EARTH = at_perihelion(1.1, 0.3, 0.1)
OWN = user_stations(ANTENNAS)
MEGAHERTZ = 8560.0
SIGMA_DELAY_S, SIGMA_DOPPLER_HZ = 1e-7, 0.05
nanosecond, millihertz = 1e-9, 1e-3


def test_rate_of_the_delay_is_its_slope() -> None:
    # the slope by differences, with one step of L. F. Richardson's extrapolation
    track = Orbit(0.0, NEAR_EARTH).track(-2.0, 60.0)
    t = np.linspace(1.0, 59.0, 40)
    rates = []
    for half in (600.0, 300.0):
        sides = [echo(track, t + s * half / DAY_S, "RD1", "RD2", 0.0, OWN) for s in (1, -1)]
        rates.append((sides[0].delay_s - sides[1].delay_s) / (2.0 * half))
    slope = (4.0 * rates[1] - rates[0]) / 3.0
    got = echo(track, t, "RD1", "RD2", MEGAHERTZ, OWN)
    # velocities of stations lack the precession of their axis, 0.05 mm/s
    assert np.abs(got.doppler_hz + slope * MEGAHERTZ * 1e6).max() < 3.0 * millihertz


def test_slope_of_the_sun_delay() -> None:
    track = Orbit(0.0, NEAR_EARTH).track(-2.0, 60.0)
    t = np.array([20.0])
    path = echo_path(track, t, "500", "500")
    end, start = (
        station_states("500", when, load_ephemeris()).position_au[0]
        for when in (20.0, 20.0 - path.delay_s[0] / DAY_S)
    )
    sun = load_ephemeris().position_au("sun", path.bounce_tau_d)[0]
    place = end + path.down[0]

    def sun_delay(x: np.ndarray) -> float:
        legs = [
            (np.linalg.norm(x - sun), np.linalg.norm(s - sun), np.linalg.norm(x - s))
            for s in (end, start)
        ]
        # twice GM of the Sun over c^3 is 9.851 microseconds (I. I. Shapiro 1964)
        return sum(9.8510 * np.log((a + b + c) / (a + b - c)) for a, b, c in legs)

    for axis in range(3):
        step = np.zeros(3)
        step[axis] = 1e-4
        slope = (sun_delay(place + step) - sun_delay(place - step)) / 2e-4
        assert path.sun_slope[0, axis] * DAY_S * 1e6 == pytest.approx(slope, rel=1e-4)


def observed(track: Track, times: np.ndarray, n_angles: int = 30) -> Records:
    """Directions from the geocentre, and a delay and a Doppler shift at each of some times, all as
    the track has them, at one moment both."""
    k = times.size
    own = np.full(k, np.nan)
    rows = n_angles + np.arange(2 * k)
    got = echo(track, times, "RD1", "RD2", MEGAHERTZ, OWN)
    echoes = Echoes(
        rows,
        np.full(2 * k, "RD1", dtype=object),
        np.full(2 * k, "RD2", dtype=object),
        np.full(2 * k, MEGAHERTZ),
        np.concatenate([got.delay_s, own]),
        np.concatenate([own, got.doppler_hz]),
        np.concatenate([np.full(k, SIGMA_DELAY_S), own]),
        np.concatenate([own, np.full(k, SIGMA_DOPPLER_HZ)]),
        OWN,
    )
    angle_times = np.linspace(times.min() - 5.0, times.max() + 5.0, n_angles)
    all_times = np.concatenate([angle_times, times, times])
    observer = load_ephemeris().position_au("earth", angle_times)
    receiver = station_states("RD2", times, load_ephemeris(), OWN).position_au
    observer = np.concatenate([observer, receiver, receiver])
    zero = np.zeros(all_times.size)
    line = see(track, Records.from_angles(all_times, observer, zero, zero)).rho_au
    ra, dec = np.arctan2(line[:, 1], line[:, 0]), np.arctan2(line[:, 2], np.hypot(*line.T[:2]))
    return Records.from_angles(all_times, observer, ra, dec, echoes)


def test_pairs_of_residuals() -> None:
    track = Orbit(0.0, NEAR_EARTH).track(-8.0, 70.0)
    records = observed(track, np.array([3.0, 30.0]))
    seen = residuals(see(track, records), records)
    assert np.abs(seen[:30]).max() < 1e-3 * mas
    assert np.abs(seen[30:]).max() < 1e-3 * ARCSEC_RAD
    echoes = records.echoes
    assert echoes is not None
    moved = Records(
        records.tdb_d, records.observer_au, records.basis,
        Echoes(
            echoes.rows, echoes.transmitter, echoes.receiver, echoes.frequency_mhz,
            echoes.delay_s + 3e-7, echoes.doppler_hz - 0.1, echoes.sigma_delay_s,
            echoes.sigma_doppler_hz, OWN,
        ),
    )  # fmt: skip
    seen = residuals(see(track, moved), moved)
    # three stated standard deviations of delay stand as three arcsec, two of Doppler as minus two
    assert seen[30:32] / ARCSEC_RAD == pytest.approx(np.array([[3.0, 0.0]] * 2), abs=1e-3)
    assert seen[32:] / ARCSEC_RAD == pytest.approx(np.array([[0.0, -2.0]] * 2), abs=1e-3)


@pytest.mark.parametrize("keep", [slice(20, 32), np.array([31, 5, 33]), np.arange(34) % 2 == 0])
def test_subset_of_records_keeps_their_echoes(keep: slice | np.ndarray) -> None:
    track = Orbit(0.0, NEAR_EARTH).track(-8.0, 70.0)
    records = observed(track, np.array([3.0, 30.0]))
    part = records.subset(keep)
    whole = residuals(see(track, records), records)
    assert residuals(see(track, part), part) == pytest.approx(whole[keep], abs=1e-15)
    assert records.subset(slice(0, 30)).echoes is None


def neighbourhood(state: np.ndarray, times: np.ndarray) -> Neighbourhood:
    thrust = Thrust(A=(1e-10, 2e-11, 1e-11))
    epoch = float(np.floor(times.mean()))
    track = integrate_track(
        epoch, state, float(times.min()) - 8.0, float(times.max()) + 8.0, thrust, ForceModel()
    )
    records = observed(track, times)
    n = len(records)
    white = white_factors(30, 0.3 * ARCSEC_RAD).flat
    flat = np.concatenate([white, white_factors(n - 30, ARCSEC_RAD).flat])
    factors = Factors(np.arange(n), np.arange(n + 1), flat, 4 * np.arange(n + 1))
    return Neighbourhood.around(track, records, factors, thrust, "RTN", ForceModel())


def cloud(near: Neighbourhood, factor: float, m: int) -> np.ndarray:
    """Parameter vectors from the linear posterior, times a factor."""
    p = near.theta.size
    design = design_matrix(near.sight, near.records, near.partials)
    white = np.array([near.whiten(design[:, :, c]) for c in range(p)]).T
    scale = np.linalg.norm(white, axis=0)
    half = np.linalg.inv(np.linalg.qr(white / scale)[1]) / scale[:, None]
    return near.theta + factor * np.random.default_rng(3).standard_normal((m, p)) @ half.T


def passing_earth(days: float, distance_au: float) -> np.ndarray:
    """A state at day ``days`` that passes the Earth nearby."""
    earth = np.concatenate(load_ephemeris().posvel("earth", days))
    off = np.array([0.6, 0.5, 0.62]) * distance_au
    return earth + np.concatenate([off, [0.004, -0.002, 0.003]])


CASES = {
    "0.7 au away": (NEAR_EARTH, np.array([-20.0, -19.0, 20.0, 21.0])),
    "over three years": (NEAR_EARTH, np.array([-600.0, -599.0, 500.0, 501.0])),
    "at 0.02 au": (passing_earth(0.0, 0.02), np.array([-3.0, -1.0, 1.0, 3.0])),
}


@pytest.mark.parametrize("name", CASES)
@pytest.mark.parametrize("factor", [0.0, 1.0, 10.0])
def test_batch_meets_the_adaptive_twin(name: str, factor: float) -> None:
    near = neighbourhood(*CASES[name])
    thetas = cloud(near, factor, 48)
    # strays go to the twin itself and would prove nothing here
    thetas = thetas[~near.strays(thetas)][:5]
    assert len(thetas) == 5
    chi2, seen = near.chi2(thetas, want_residuals=True)
    for i, theta in enumerate(thetas):
        truth, places = near.chi2_alone(theta)
        miss = np.abs(seen[i] - places)
        delay, doppler = miss[30:].max(axis=0) / ARCSEC_RAD * [SIGMA_DELAY_S, SIGMA_DOPPLER_HZ]
        assert delay < 0.02 * nanosecond
        assert doppler < 0.2 * millihertz
        assert miss[:30].max() < 0.01 * mas
        assert chi2[i] == pytest.approx(truth, rel=1e-6, abs=3e-3)


def test_echoes_narrow_what_the_batch_may_leave_out() -> None:
    state, times = CASES["0.7 au away"]
    near = neighbourhood(state, times)
    # 3e-4 of half of 0.1 microseconds of light
    assert near.tolerance_au == pytest.approx(3e-4 * 0.5e-7 * 173.1446 / DAY_S, rel=1e-3)
    far = cloud(near, 1.0, 16)
    far[:, 0] += 1e-3
    assert near.strays(far).all()
    chi2 = near.chi2(far[:1])
    assert chi2[0] == pytest.approx(near.chi2_alone(far[0])[0], rel=1e-9)
