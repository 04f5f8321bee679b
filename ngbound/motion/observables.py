"""What an observer sees of a trajectory: light time, direction, residuals in the tangent plane,
their partials; and of echoes among the records their delay and Doppler shift.

Imports numpy, constants, errors, sky, and propagate, partials, radar and echoes of this room.
Places are astrometric: light time is applied, stellar aberration is not (it is common to object and
comparison stars), nor is the deflection of light by the Sun, of which relative astrometry keeps
only the small difference between the object's and the stars' (below 1 mas further than 40 degrees
from the Sun for objects within a few au).
"""

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ngbound.constants import C_AU_D
from ngbound.errors import PropagationError
from ngbound.motion.echoes import Echoes
from ngbound.motion.partials import Partials
from ngbound.motion.propagate import Track
from ngbound.motion.radar import ECHO_MARGIN_D, EchoPath
from ngbound.sky import angles_to_direction, deflection_by_sun, load_ephemeris, sky_axes

Floats = NDArray[np.float64]
LIGHT_TIME_SWEEPS = 20
LIGHT_TIME_SETTLED_D = 1e-11


@dataclass(frozen=True, eq=False)
class Records:
    """Observed directions, and radar echoes among them.

    Attributes
    ----------
    tdb_d : (n,) days of TDB past J2000.0; of an echo, of its reception
    observer_au : (n, 3) barycentric ICRF; of an echo, the receiver
    basis : (n, 3, 3) rows: east, north, and the observed direction; without meaning for an echo
    echoes : Echoes or None
    """

    tdb_d: Floats
    observer_au: Floats = field(repr=False)
    basis: Floats = field(repr=False)
    echoes: Echoes | None = field(default=None, repr=False)

    @classmethod
    def from_angles(
        cls,
        tdb_d: ArrayLike,
        observer_au: ArrayLike,
        ra_rad: ArrayLike,
        dec_rad: ArrayLike,
        echoes: Echoes | None = None,
    ) -> "Records":
        """Records of observed right ascensions and declinations (radians, ICRF); those of
        ``echoes`` do not count.
        """
        if echoes is not None:
            ra_rad, dec_rad = np.array(ra_rad, dtype=float), np.array(dec_rad, dtype=float)
            ra_rad[echoes.rows] = dec_rad[echoes.rows] = 0.0
        toward = angles_to_direction(ra_rad, dec_rad)
        east, north = sky_axes(ra_rad, dec_rad)
        basis = np.ascontiguousarray(np.stack([east, north, toward], axis=1))
        return cls(
            np.ascontiguousarray(tdb_d, dtype=float),
            np.ascontiguousarray(observer_au, dtype=float),
            basis,
            echoes,
        )

    def __len__(self) -> int:
        return self.tdb_d.size

    @property
    def end_d(self) -> float:
        """Up to when a track must run for them, days of TDB past J2000.0."""
        last = float(self.tdb_d.max())
        return last if self.echoes is None else last + ECHO_MARGIN_D

    def subset(self, keep: NDArray[Any] | slice) -> "Records":
        """The records of a mask, an index array or a slice."""
        echoes = None if self.echoes is None else self.echoes.subset(keep, len(self))
        return Records(self.tdb_d[keep], self.observer_au[keep], self.basis[keep], echoes)


def light_margin_d(observer_au: Floats, position_au: Floats) -> float:
    """Days that a track should reach back before its first record for the light time.

    Three times what the observers (n, 3) and the object (3 or more, the first three used) are from
    the barycentre together, and a tenth of a day.
    """
    far = float(np.linalg.norm(observer_au, axis=1).max() + np.linalg.norm(position_au[:3]))
    return 3.0 * far / C_AU_D + 0.1


@dataclass(frozen=True, eq=False)
class Sight:
    """A trajectory as seen at the records.

    Attributes
    ----------
    rho_au : (n, 3) observer to object at the time the light left it
    speed_au_d : (n, 3) barycentric velocity of the object then
    tau_d : (n,) that time, days from the epoch
    path : EchoPath or None
        Both legs of the echoes among the records.
    """

    rho_au: Floats
    speed_au_d: Floats
    tau_d: Floats
    path: EchoPath | None = field(default=None, repr=False)


def see(track: Track, records: Records, deflection: bool = False) -> Sight:
    """Solve the light time of every record.

    With ``deflection`` the line of sight is bent by what the Sun bends the object's light more or
    less than the stars'. It is off by default: astrometric places, as published and as reduced,
    leave it out.

    Raises
    ------
    PropagationError
        If the light time does not settle.
    """
    received = records.tdb_d - track.epoch_d
    tau = received.copy()
    for _ in range(LIGHT_TIME_SWEEPS):
        state = track.at_offset(tau)
        rho = state[:, :3] - records.observer_au
        new = received - np.linalg.norm(rho, axis=1) / C_AU_D
        moved = np.max(np.abs(new - tau), initial=0.0)
        tau = new
        if moved < LIGHT_TIME_SETTLED_D:
            break
    else:
        raise PropagationError("The light time of a record does not settle; check the orbit.")
    state = track.at_offset(tau)
    rho = state[:, :3] - records.observer_au
    if deflection:
        ephemeris = load_ephemeris()
        distance = np.linalg.norm(rho, axis=1)[:, None]
        bent = deflection_by_sun(
            rho / distance,
            state[:, :3] - ephemeris.position_au("sun", track.epoch_d + tau),
            records.observer_au - ephemeris.position_au("sun", records.tdb_d),
        )
        rho = rho + bent * distance
    if records.echoes is None:
        return Sight(rho, state[:, 3:], tau)
    rows, speed = records.echoes.rows, state[:, 3:]
    path = records.echoes.path(track, records.tdb_d[rows])
    rho[rows], speed[rows], tau[rows] = path.down, path.speed, path.bounce_tau_d
    return Sight(rho, speed, tau, path)


def residuals(sight: Sight, records: Records) -> Floats:
    """Observed minus computed, (n, 2) radians east and north in the tangent plane at the observed
    place; of an echo, the pair of `ngbound.motion.echoes`.
    """
    local = _local(sight, records)
    if np.any(local[:, 2] <= 0.0):
        raise PropagationError(
            "The orbit is seen more than 90 degrees from an observed place; "
            "it is not the orbit of this arc."
        )
    out = -local[:, :2] / local[:, 2:3]
    if records.echoes is not None and sight.path is not None:
        out[records.echoes.rows] = records.echoes.pairs(sight.path)
    return out


def _local(sight: Sight, records: Records) -> Floats:
    """East, north and depth of the object, (n, 3) au; depth 1 for an echo."""
    local = np.einsum("nij,nj->ni", records.basis, sight.rho_au)
    if records.echoes is not None:
        local[records.echoes.rows, 2] = 1.0
    return local


def design_matrix(sight: Sight, records: Records, partials: Partials) -> Floats:
    """Partials of the computed place or echo, (n, 2, p) radians per unit of each parameter."""
    columns = partials.at_offset(sight.tau_d)[:, :3, :]
    distance = np.linalg.norm(sight.rho_au, axis=1)
    toward = sight.rho_au / distance[:, None]
    slow = C_AU_D + np.einsum("ni,ni->n", toward, sight.speed_au_d)
    late = -np.einsum("ni,nip->np", toward, columns) / slow[:, None]
    moved = columns + sight.speed_au_d[:, :, None] * late[:, None, :]
    local = _local(sight, records)
    depth = local[:, 2]
    xi = local[:, :2] / depth[:, None]
    across = records.basis[:, :2, :] - xi[:, :, None] * records.basis[:, 2:3, :]
    out = np.einsum("naj,njp->nap", across, moved) / depth[:, None, None]
    if records.echoes is not None and sight.path is not None:
        out[records.echoes.rows] = records.echoes.design(sight.path, partials)
    return np.asarray(out)
