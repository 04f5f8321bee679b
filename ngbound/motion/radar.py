"""Radar: two-way delay and Doppler shift of an echo, and their partials.

The model of D. K. Yeomans et al. 1992, AJ 103, 303: the echo received at t left the object's centre
one light time earlier and the transmitter one more before that; each leg carries the Sun's
relativistic delay (I. I. Shapiro 1964, Phys. Rev. Lett. 13, 789); both ends are clocked in UTC
seconds, so the small change of TDB - TT between them is taken out, the station's own term included.
The Doppler shift is -f times the rate of the delay. Left out: the troposphere (20 ns at the
zenith), the ionosphere and the solar corona. Imports numpy, constants, arc, sky and this room.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ngbound.arc import Station
from ngbound.constants import C_AU_D, DAY_S, GM_SUN_AU3_D2
from ngbound.errors import PropagationError
from ngbound.motion.partials import Partials
from ngbound.motion.propagate import Track
from ngbound.sky import load_ephemeris, station_states, tdb_minus_tt_s

Floats = NDArray[np.float64]
Place = str | tuple[float, float, float]

SWEEPS = 12
SETTLED_D = 1e-11
HALF_STEP_S = 60.0


@dataclass(frozen=True, eq=False)
class Echo:
    """Two-way echoes.

    Attributes
    ----------
    delay_s : (n,) UTC seconds from transmission to reception
    doppler_hz : (n,) received less transmitted frequency, positive for an object that comes nearer
    bounce_tau_d : (n,) time of the bounce, days of TDB from the epoch of the track
    """

    delay_s: Floats
    doppler_hz: Floats
    bounce_tau_d: Floats = field(repr=False)


@dataclass(frozen=True, eq=False)
class _Path:
    delay_s: Floats
    bounce_tau_d: Floats
    down: Floats
    up: Floats
    speed: Floats
    transmitter_velocity: Floats


def _sun_delay_d(a: Floats, b: Floats, sun: Floats) -> Floats:
    """Relativistic delay of the path between two barycentric points, days."""
    r1 = np.linalg.norm(a - sun, axis=1)
    r2 = np.linalg.norm(b - sun, axis=1)
    r12 = np.linalg.norm(a - b, axis=1)
    return 2.0 * GM_SUN_AU3_D2 / C_AU_D**3 * np.log((r1 + r2 + r12) / (r1 + r2 - r12))


def _path(
    track: Track,
    tdb_d: Floats,
    transmitter: Place,
    receiver: Place,
    own: Mapping[str, Station] | None,
) -> _Path:
    """Solve both legs for echoes received at ``tdb_d``; every length is a difference of positions,
    not of dates.
    """
    ephemeris = load_ephemeris()
    end = station_states(receiver, tdb_d, ephemeris, own)
    back = np.zeros_like(tdb_d)
    for _ in range(SWEEPS):
        bounce = tdb_d - track.epoch_d - back
        state = track.at_offset(bounce)
        sun = ephemeris.position_au("sun", track.epoch_d + bounce)
        down = state[:, :3] - end.position_au
        new = np.linalg.norm(down, axis=1) / C_AU_D + _sun_delay_d(
            state[:, :3], end.position_au, sun
        )
        moved = float(np.max(np.abs(new - back)))
        back = new
        if moved < SETTLED_D:
            break
    else:
        raise PropagationError("The light time of a radar echo does not settle; check the orbit.")
    out = back.copy()
    for _ in range(SWEEPS):
        start = station_states(transmitter, tdb_d - back - out, ephemeris, own)
        up = state[:, :3] - start.position_au
        new = np.linalg.norm(up, axis=1) / C_AU_D + _sun_delay_d(
            state[:, :3], start.position_au, sun
        )
        moved = float(np.max(np.abs(new - out)))
        out = new
        if moved < SETTLED_D:
            break
    else:
        raise PropagationError("The light time of a radar echo does not settle; check the orbit.")
    sent = tdb_d - back - out
    earth_end = ephemeris.posvel("earth", tdb_d)[1]
    earth_start = ephemeris.posvel("earth", sent)[1]
    station_s = (
        (
            np.einsum("ni,ni->n", earth_end, end.geocentric_au)
            - np.einsum("ni,ni->n", earth_start, start.geocentric_au)
        )
        / C_AU_D**2
        * DAY_S
    )
    clock_s = np.asarray(tdb_minus_tt_s(tdb_d)) - np.asarray(tdb_minus_tt_s(sent)) + station_s
    return _Path(
        (back + out) * DAY_S - clock_s, bounce, down, up, state[:, 3:], start.velocity_au_d
    )


def echo(
    track: Track,
    tdb_d: ArrayLike,
    transmitter: Place,
    receiver: Place,
    frequency_mhz: float = 0.0,
    own_stations: Mapping[str, Station] | None = None,
) -> Echo:
    """Delay and Doppler shift of echoes received at ``tdb_d`` (TDB days past J2000.0).

    Parameters
    ----------
    track : Track
        Must reach back by the light time before the first echo, and a minute beyond each.
    transmitter, receiver : station code or (longitude deg, latitude deg, altitude m)
    frequency_mhz : float
        Transmitted frequency.
    """
    times = np.atleast_1d(np.asarray(tdb_d, dtype=float))
    here = _path(track, times, transmitter, receiver, own_stations)
    rates = []
    for half_s in (HALF_STEP_S, 0.5 * HALF_STEP_S):
        sides = [
            _path(track, times + sign * half_s / DAY_S, transmitter, receiver, own_stations).delay_s
            for sign in (1, -1)
        ]
        rates.append((sides[0] - sides[1]) / (2.0 * half_s))
    # one step of L. F. Richardson's extrapolation takes off the third derivative
    rate = (4.0 * rates[1] - rates[0]) / 3.0
    return Echo(here.delay_s, -rate * frequency_mhz * 1e6, here.bounce_tau_d)


def _delay_partials(path: _Path, partials: Partials) -> Floats:
    columns = partials.at_offset(path.bounce_tau_d)[:, :3, :]
    down = path.down / np.linalg.norm(path.down, axis=1)[:, None]
    up = path.up / np.linalg.norm(path.up, axis=1)[:, None]
    slow = C_AU_D + np.einsum("ni,ni->n", down, path.speed)
    bounce = -np.einsum("ni,nip->np", down, columns) / slow[:, None]
    moved = columns + path.speed[:, :, None] * bounce[:, None, :]
    lost = 1.0 - np.einsum("ni,ni->n", up, path.transmitter_velocity) / C_AU_D
    sent = (bounce - np.einsum("ni,nip->np", up, moved) / C_AU_D) / lost[:, None]
    return -sent * DAY_S


def echo_partials(
    track: Track,
    partials: Partials,
    tdb_d: ArrayLike,
    transmitter: Place,
    receiver: Place,
    frequency_mhz: float = 0.0,
    own_stations: Mapping[str, Station] | None = None,
) -> tuple[Floats, Floats]:
    """Partials of delay (s) and Doppler shift (Hz) per unit of each parameter, two (n, p)."""
    times = np.atleast_1d(np.asarray(tdb_d, dtype=float))
    half = HALF_STEP_S / DAY_S
    delay = _delay_partials(_path(track, times, transmitter, receiver, own_stations), partials)
    sides = [
        _delay_partials(
            _path(track, times + sign * half, transmitter, receiver, own_stations), partials
        )
        for sign in (1, -1)
    ]
    rate = (sides[0] - sides[1]) / (2.0 * HALF_STEP_S)
    return delay, -rate * frequency_mhz * 1e6
