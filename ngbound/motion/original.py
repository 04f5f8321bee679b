"""Original and future reciprocal semimajor axis, as the comet trade quotes it; imports numpy and
this room.

A comet on a nearly parabolic orbit is followed back (original) or ahead (future) under the planets
until it is 250 au from the barycentre, where 1/a about the barycentre of the whole system has
settled (B. G. Marsden, Z. Sekanina & E. Everhart 1978, AJ 83, 64, follow to 60 au; 250 au is
today's common practice).
"""

from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from ngbound.errors import AnalysisError
from ngbound.motion.elements import CENTRE_GM_AU3_D2
from ngbound.motion.gravity import ForceModel
from ngbound.motion.orbit import Orbit
from ngbound.motion.partials import partials_along
from ngbound.motion.propagate import integrate_track
from ngbound.sky import load_ephemeris, tdb_d_to_iso

FAR_AU = 250.0
STRIDE_D = 20000.0


@dataclass(frozen=True)
class ReciprocalAxis:
    """1/a far from the planets.

    Attributes
    ----------
    kind : "original" or "future"
    value_per_au, sigma_per_au : float
        1/a about the barycentre, positive for an ellipse; sigma is nan without a covariance.
    reached_tdb : str
        When the distance is reached.
    distance_au : float
    """

    kind: str
    value_per_au: float
    sigma_per_au: float
    reached_tdb: str
    distance_au: float

    def to_dict(self) -> dict[str, Any]:
        """Plain values."""
        return asdict(self)

    def __str__(self) -> str:
        spread = "" if np.isnan(self.sigma_per_au) else f" +- {self.sigma_per_au * 1e6:.2f}"
        return (
            f"{self.kind} 1/a = {self.value_per_au * 1e6:.2f}{spread} x 1e-6 /au (barycentric, "
            f"{self.distance_au:g} au, {self.reached_tdb} TDB)"
        )


def reciprocal_axis(
    orbit: Orbit,
    kind: str = "original",
    covariance: ArrayLike | None = None,
    distance_au: float = FAR_AU,
) -> ReciprocalAxis:
    """Follow an orbit outwards and give its 1/a there.

    Parameters
    ----------
    orbit : Orbit
    kind : {"original", "future"}
    covariance : (6, 6) array, optional
        Of the state at the orbit's epoch (au, au/d).
    distance_au : float

    Raises
    ------
    AnalysisError
        The orbit never reaches that distance, or not within the ephemeris (1550-2650).
    """
    if kind not in ("original", "future"):
        raise AnalysisError(f"The reciprocal axis is 'original' or 'future', not '{kind}'.")
    sign = -1.0 if kind == "original" else 1.0
    span = load_ephemeris().span_d
    edge = span[0] + 1.0 if sign < 0 else span[1] - 1.0
    # the 16 asteroids are in the ephemeris for two centuries only, and do not matter here
    choices = orbit.forces.to_dict() | {"asteroids": False, "exclude": orbit.forces.exclude}
    forces = ForceModel(**choices)
    end = orbit.epoch_tdb_d
    while True:
        end = max(end - STRIDE_D, edge) if sign < 0 else min(end + STRIDE_D, edge)
        track = integrate_track(
            orbit.epoch_tdb_d, orbit.state_vector, end, end, orbit.thrust, forces
        )
        times = np.linspace(orbit.epoch_tdb_d, end, 400)
        states = track.at(times)
        out = np.einsum("ni,ni->n", states[:, :3], states[:, 3:]) * sign > 0.0
        beyond = (np.linalg.norm(states[:, :3], axis=1) >= distance_au) & out
        if beyond.any() or end == edge:
            break
    if not beyond.any():
        raise AnalysisError(
            f"The orbit does not reach {distance_au:g} au from the barycentre within the "
            f"ephemeris (it gets to {np.linalg.norm(states[-1, :3]):.0f} au); ask for a "
            "smaller distance_au, or use its elements."
        )
    first = int(np.argmax(beyond))
    low, high = times[max(first - 1, 0)], times[first]
    for _ in range(60):
        middle = 0.5 * (low + high)
        if np.linalg.norm(track.at(middle)[0, :3]) < distance_au:
            low = middle
        else:
            high = middle
    state = track.at(high)[0]
    gm = CENTRE_GM_AU3_D2["barycentric"]
    r = float(np.linalg.norm(state[:3]))
    value = 2.0 / r - float(state[3:] @ state[3:]) / gm
    sigma = float("nan")
    if covariance is not None:
        names = ("x", "y", "z", "vx", "vy", "vz")
        columns = partials_along(track, names).at_offset(high - orbit.epoch_tdb_d)[0]
        slope = np.concatenate([-2.0 * state[:3] / r**3, -2.0 * state[3:] / gm]) @ columns
        sigma = float(np.sqrt(slope @ np.asarray(covariance, dtype=float) @ slope))
    return ReciprocalAxis(kind, value, sigma, str(tdb_d_to_iso(high)), distance_au)
