"""Radar: two-way delay and Doppler shift of an echo, and their partials.

The model of D. K. Yeomans et al. 1992, AJ 103, 303: the echo received at t left the object's centre
one light time earlier and the transmitter one more before that; each leg carries the Sun's
relativistic delay (I. I. Shapiro 1964, Phys. Rev. Lett. 13, 789); both ends are clocked in UTC
seconds, so the small change of TDB - TT between them is taken out, the station's own term included.
The Doppler shift is -f times the rate of the delay, which follows from the same two legs: with n
and m the unit vectors from the receiver and from the transmitter to the object, V, R and W the
velocities of object, receiver and transmitter,

    down' = n.(V - R) / (c + n.V),    up' = (1 - down') m.(V - W) / (c - m.W),

and the rates of the Sun's delay and of the clocks besides. Left out: the troposphere (20 ns at the
zenith), the ionosphere and the solar corona. Imports numpy, constants, arc, sky and this room.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, fields

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ngbound.arc import Station
from ngbound.constants import C_AU_D, DAY_S, GM_SUN_AU3_D2
from ngbound.errors import PropagationError
from ngbound.motion.partials import Partials
from ngbound.motion.propagate import Track
from ngbound.sky import Ephemeris, Observers, load_ephemeris, station_states, tdb_minus_tt_s

Floats = NDArray[np.float64]
Place = str | tuple[float, float, float]

SWEEPS = 12
SETTLED_D = 1e-11
HALF_STEP_D = 30.0 / DAY_S
"""For the accelerations of object and stations, and the rate of the clocks."""
ECHO_MARGIN_D = 60.0 / DAY_S
"""By how much a track must go on beyond the last echo."""
SUN_DELAY_D = 2.0 * GM_SUN_AU3_D2 / C_AU_D**3


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
class EchoPath:
    """Both legs of echoes, and how they change.

    Attributes
    ----------
    delay_s : (n,) UTC seconds
    rate : (n,) of the delay, seconds a second
    bounce_tau_d : (n,) days from the epoch of the track
    down, up : (n, 3) receiver to object and transmitter to object, au
    speed, push : (n, 3) of the object at the bounce, au/d and au/d2
    receiver_speed, transmitter_speed, transmitter_push : (n, 3)
        At reception and at transmission, au/d and au/d2.
    sun_slope : (n, 3)
        Slope of the Sun's delay of both legs with the object's place, d/au.
    """

    delay_s: Floats
    rate: Floats
    bounce_tau_d: Floats
    down: Floats
    up: Floats
    speed: Floats
    push: Floats
    receiver_speed: Floats
    transmitter_speed: Floats
    transmitter_push: Floats
    sun_slope: Floats

    @property
    def plain_rate(self) -> Floats:
        """(n,) rate of the two lengths alone, without the Sun's delay and the clocks."""
        n = self.down / np.linalg.norm(self.down, axis=1)[:, None]
        m = self.up / np.linalg.norm(self.up, axis=1)[:, None]
        away, start = _dot(n, self.speed), _dot(m, self.transmitter_speed)
        down = (away - _dot(n, self.receiver_speed)) / (C_AU_D + away)
        return down + (1.0 - down) * (_dot(m, self.speed) - start) / (C_AU_D - start)

    @classmethod
    def merged(cls, parts: Sequence["EchoPath"], rows: Sequence[NDArray[np.int64]]) -> "EchoPath":
        """Several as one; ``rows`` say where each echo of each part belongs."""
        order = np.argsort(np.concatenate(rows))
        return cls(
            *(np.concatenate([getattr(p, f.name) for p in parts])[order] for f in fields(cls))
        )


def _sun_delay_d(a: Floats, b: Floats) -> Floats:
    """Relativistic delay of the path between two heliocentric points, days."""
    r1, r2 = np.linalg.norm(a, axis=1), np.linalg.norm(b, axis=1)
    r12 = np.linalg.norm(a - b, axis=1)
    return SUN_DELAY_D * np.log((r1 + r2 + r12) / (r1 + r2 - r12))


def _sun_delay_slope(a: Floats, b: Floats) -> Floats:
    """Its slope (n, 3) with the first point, d/au."""
    r1, r2 = np.linalg.norm(a, axis=1)[:, None], np.linalg.norm(b, axis=1)[:, None]
    r12 = np.linalg.norm(a - b, axis=1)[:, None]
    outward, along = a / r1, (a - b) / r12
    longer = (outward + along) / (r1 + r2 + r12)
    return np.asarray(SUN_DELAY_D * (longer - (outward - along) / (r1 + r2 - r12)))


def _dot(a: Floats, b: Floats) -> Floats:
    return np.einsum("ni,ni->n", a, b)


def _clock(end: Observers, ephemeris: Ephemeris) -> tuple[Floats, Floats]:
    """TDB - TT (s) at a station and its rate (s/s)."""
    before, earth, after = (
        ephemeris.posvel("earth", end.tdb_d + step)[1] for step in (-HALF_STEP_D, 0.0, HALF_STEP_D)
    )
    earth_push = (after - before) / (2.0 * HALF_STEP_D)
    own_d = _dot(earth, end.geocentric_au) / C_AU_D**2
    own_rate = (
        _dot(earth_push, end.geocentric_au) + _dot(earth, end.velocity_au_d - earth)
    ) / C_AU_D**2
    # half a day: the geocentre's clock has no faster term that counts
    ahead, behind = (np.asarray(tdb_minus_tt_s(end.tdb_d + half)) for half in (0.5, -0.5))
    return (
        np.asarray(tdb_minus_tt_s(end.tdb_d)) + own_d * DAY_S,
        (ahead - behind) / DAY_S + own_rate,
    )


def echo_path(
    track: Track,
    tdb_d: Floats,
    transmitter: Place,
    receiver: Place,
    own: Mapping[str, Station] | None = None,
) -> EchoPath:
    """Solve both legs for echoes received at ``tdb_d``; every length is a difference of positions,
    not of dates.
    """
    ephemeris = load_ephemeris()
    end = station_states(receiver, tdb_d, ephemeris, own)
    back = np.zeros_like(tdb_d)
    for _ in range(SWEEPS):
        bounce = tdb_d - track.epoch_d - back
        state = track.at_offset(bounce)
        sun, sun_speed = ephemeris.posvel("sun", track.epoch_d + bounce)
        down = state[:, :3] - end.position_au
        new = np.linalg.norm(down, axis=1) / C_AU_D + _sun_delay_d(
            state[:, :3] - sun, end.position_au - sun
        )
        moved = float(np.max(np.abs(new - back), initial=0.0))
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
            state[:, :3] - sun, start.position_au - sun
        )
        moved = float(np.max(np.abs(new - out), initial=0.0))
        out = new
        if moved < SETTLED_D:
            break
    else:
        raise PropagationError("The light time of a radar echo does not settle; check the orbit.")
    sides = [
        (
            track.at_offset(bounce + step)[:, 3:],
            station_states(transmitter, start.tdb_d + step, ephemeris, own).velocity_au_d,
        )
        for step in (HALF_STEP_D, -HALF_STEP_D)
    ]
    push, start_push = (
        (ahead - behind) / (2.0 * HALF_STEP_D) for ahead, behind in zip(*sides, strict=True)
    )
    speed = state[:, 3:]
    n = down / np.linalg.norm(down, axis=1)[:, None]
    m = up / np.linalg.norm(up, axis=1)[:, None]
    slopes, sun_rates = [], []
    for station in (end, start):
        ends = state[:, :3] - sun, station.position_au - sun
        slopes.append(_sun_delay_slope(*ends))
        sun_rates.append(
            _dot(slopes[-1], speed - sun_speed)
            + _dot(_sun_delay_slope(*ends[::-1]), station.velocity_au_d - sun_speed)
        )
    down_rate = (_dot(n, speed - end.velocity_au_d) + C_AU_D * sun_rates[0]) / (
        C_AU_D + _dot(n, speed)
    )
    up_rate = ((1.0 - down_rate) * _dot(m, speed - start.velocity_au_d) + C_AU_D * sun_rates[1]) / (
        C_AU_D - _dot(m, start.velocity_au_d)
    )
    (end_s, end_rate), (start_s, start_rate) = _clock(end, ephemeris), _clock(start, ephemeris)
    slowing = down_rate + up_rate
    return EchoPath(
        (back + out) * DAY_S - (end_s - start_s),
        slowing - (end_rate - start_rate * (1.0 - slowing)),
        bounce,
        down,
        up,
        speed,
        push,
        end.velocity_au_d,
        start.velocity_au_d,
        start_push,
        slopes[0] + slopes[1],
    )


def echo(
    track: Track,
    tdb_d: ArrayLike,
    transmitter: Place,
    receiver: Place,
    frequency_mhz: ArrayLike = 0.0,
    own_stations: Mapping[str, Station] | None = None,
) -> Echo:
    """Delay and Doppler shift of echoes received at ``tdb_d`` (TDB days past J2000.0).

    Parameters
    ----------
    track : Track
        Must reach back by the light time before the first echo, and a minute beyond each.
    transmitter, receiver : station code or (longitude deg, latitude deg, altitude m)
    frequency_mhz : float or (n,) array
        Transmitted frequency.
    """
    times = np.atleast_1d(np.asarray(tdb_d, dtype=float))
    path = echo_path(track, times, transmitter, receiver, own_stations)
    hertz = np.asarray(frequency_mhz, dtype=float) * 1e6
    return Echo(path.delay_s, -path.rate * hertz, path.bounce_tau_d)


def path_partials(path: EchoPath, partials: Partials) -> tuple[Floats, Floats]:
    """Partials of the delay (s) and of its rate (s/s), two (n, p); in the rate the parts of the
    Sun's delay and of the clocks are taken as fixed.
    """
    columns = partials.at_offset(path.bounce_tau_d)
    place, speed = columns[:, :3], columns[:, 3:]
    v, w = path.speed, path.transmitter_speed

    def along(direction: Floats, table: Floats) -> Floats:
        return np.einsum("ni,nip->np", direction, table)

    def of(table: Floats, shift: Floats) -> Floats:
        return table[:, :, None] * shift[:, None, :]

    def turned(unit: Floats, far: Floats, shift: Floats) -> Floats:
        """How the unit vector of a line of sight turns with the shift of its end."""
        return (shift - of(unit, along(unit, shift))) / far[:, None, None]

    down, up = np.linalg.norm(path.down, axis=1), np.linalg.norm(path.up, axis=1)
    n, m = path.down / down[:, None], path.up / up[:, None]
    # down: the bounce comes earlier where the path is longer
    slow = (C_AU_D + _dot(n, v))[:, None]
    bounce = -along(n, place) / slow
    moved = place + of(v, bounce)
    faster = speed + of(path.push, bounce)
    n_turn = turned(n, down, moved)
    nearing = v - path.receiver_speed
    down_rate = _dot(n, nearing)[:, None] / slow
    down_turn = (
        along(nearing, n_turn)
        + along(n, faster)
        - down_rate * (along(v, n_turn) + along(n, faster))
    ) / slow
    # up: and with it the transmission
    lost = (C_AU_D - _dot(m, w))[:, None]
    sent = (C_AU_D * bounce - along(m, moved)) / lost
    start_faster = of(path.transmitter_push, sent)
    m_turn = turned(m, up, moved - of(w, sent))
    leaving = v - w
    gain = _dot(m, leaving)[:, None] / lost
    gain_turn = (
        along(leaving, m_turn)
        + along(m, faster - start_faster)
        + gain * (along(w, m_turn) + along(m, start_faster))
    ) / lost
    rate = down_turn - down_turn * gain + (1.0 - down_rate) * gain_turn
    return (along(path.sun_slope, moved) - sent) * DAY_S, rate


def echo_partials(
    track: Track,
    partials: Partials,
    tdb_d: ArrayLike,
    transmitter: Place,
    receiver: Place,
    frequency_mhz: ArrayLike = 0.0,
    own_stations: Mapping[str, Station] | None = None,
) -> tuple[Floats, Floats]:
    """Partials of delay (s) and Doppler shift (Hz) per unit of each parameter, two (n, p)."""
    times = np.atleast_1d(np.asarray(tdb_d, dtype=float))
    path = echo_path(track, times, transmitter, receiver, own_stations)
    delay, rate = path_partials(path, partials)
    return delay, -rate * np.reshape(np.asarray(frequency_mhz, dtype=float), (-1, 1)) * 1e6
