"""An orbit: a state at an epoch, a thrust and a force model; imports astropy, errors, sky and this
room.

`Orbit` is what fits return and predictions start from. `predict` gives an observer's table.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import astropy.units as u
import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray

from ngbound.arc import Station
from ngbound.constants import C_AU_D
from ngbound.errors import CaseError
from ngbound.motion.elements import CometaryElements, KeplerianElements
from ngbound.motion.gravity import ForceModel
from ngbound.motion.observables import Records, light_margin_d, see
from ngbound.motion.partials import Partials, partials_along
from ngbound.motion.propagate import Track, integrate_track
from ngbound.motion.thrust import Thrust
from ngbound.sky import (
    direction_to_angles,
    load_ephemeris,
    parse_time,
    station_states,
    tdb_d_to_iso,
)

Floats = NDArray[np.float64]
ELEMENT_NAMES = ("q", "e", "i", "node", "argperi", "tp")


@dataclass(frozen=True, eq=False)
class Trajectory:
    """Where an object is at many times.

    Attributes
    ----------
    tdb_d : (n,) days of TDB past J2000.0
    state : (n, 6) barycentric ICRF, au and au/d
    """

    tdb_d: Floats
    state: Floats = field(repr=False)

    def __len__(self) -> int:
        return self.tdb_d.size

    @property
    def position(self) -> u.Quantity:
        """Barycentric ICRF position, (n, 3) au."""
        return self.state[:, :3] * u.au

    @property
    def velocity(self) -> u.Quantity:
        """Barycentric ICRF velocity, (n, 3) au/d."""
        return self.state[:, 3:] * u.au / u.day

    @property
    def heliocentric_au(self) -> Floats:
        """Heliocentric ICRF position, (n, 3) au."""
        return self.state[:, :3] - load_ephemeris().position_au("sun", self.tdb_d)

    def to_frame(self) -> pd.DataFrame:
        """Table with the TDB date, the state and the heliocentric distance (au)."""
        frame = pd.DataFrame(
            self.state, columns=["x_au", "y_au", "z_au", "vx_au_d", "vy_au_d", "vz_au_d"]
        )
        frame.insert(0, "tdb", tdb_d_to_iso(self.tdb_d))
        frame["r_au"] = np.linalg.norm(self.heliocentric_au, axis=1)
        return frame

    def to_dict(self) -> dict[str, Any]:
        """Times and states as lists."""
        return {"tdb_d": self.tdb_d.tolist(), "state": self.state.tolist()}

    def __str__(self) -> str:
        return self.to_frame().to_string()


@dataclass(frozen=True, eq=False)
class Orbit:
    """A state at an epoch with its thrust and force model.

    Attributes
    ----------
    epoch_tdb_d : float
        TDB days past J2000.0.
    state_vector : (6,) array
        Barycentric ICRF position (au) and velocity (au/d).
    thrust : Thrust or None
    forces : ForceModel
    """

    epoch_tdb_d: float
    state_vector: Floats
    thrust: Thrust | None = None
    forces: ForceModel = field(default_factory=ForceModel)

    @classmethod
    def from_elements(
        cls,
        epoch: Any,
        q: float | u.Quantity,
        e: float,
        i: float | u.Quantity,
        node: float | u.Quantity,
        argperi: float | u.Quantity,
        tp: Any,
        thrust: Thrust | None = None,
        forces: ForceModel | None = None,
        centre: str = "heliocentric",
        scale: str = "tdb",
    ) -> "Orbit":
        """Orbit of cometary elements, ecliptic J2000.

        Parameters
        ----------
        epoch, tp : text, astropy Time or days of TDB past J2000.0
            Epoch of osculation and time of perihelion; ``scale`` applies to text.
        q : float (au) or Quantity
        e : float
        i, node, argperi : float (degrees) or Quantity
        """
        i_rad, node_rad, argperi_rad = (
            float(u.Quantity(value, u.deg).to_value(u.rad)) for value in (i, node, argperi)
        )
        elements = CometaryElements(
            float(parse_time(epoch, scale)),
            float(u.Quantity(q, u.au).value),
            float(e),
            i_rad,
            node_rad,
            argperi_rad,
            float(parse_time(tp, scale)),
            centre,
        )
        return cls.of(elements, thrust, forces)

    @classmethod
    def of(
        cls,
        elements: CometaryElements | KeplerianElements,
        thrust: Thrust | None = None,
        forces: ForceModel | None = None,
    ) -> "Orbit":
        """Orbit of an elements object."""
        state = elements.state().copy()
        if elements.centre == "heliocentric":
            state += np.concatenate(load_ephemeris().posvel("sun", elements.epoch_tdb_d))
        return cls(elements.epoch_tdb_d, state, thrust, forces or ForceModel())

    def elements(
        self, t: Any = None, centre: str = "heliocentric", scale: str = "tdb"
    ) -> CometaryElements:
        """Osculating cometary elements at the epoch or at another time, ecliptic J2000."""
        when = self.epoch_tdb_d if t is None else float(parse_time(t, scale))
        state = self.state_vector if t is None else self.track(when, when).at(when)[0]
        if centre == "heliocentric":
            state = state - np.concatenate(load_ephemeris().posvel("sun", when))
        elif centre != "barycentric":
            raise CaseError(f"Elements are heliocentric or barycentric, not '{centre}'.")
        return CometaryElements.from_state(when, state, centre)

    def track(self, start_d: float, end_d: float, eps: float | None = None) -> Track:
        """The integrated trajectory over a span of TDB days past J2000.0."""
        return integrate_track(
            self.epoch_tdb_d, self.state_vector, start_d, end_d, self.thrust, self.forces, eps
        )

    def propagate(self, times: Any, scale: str = "tdb") -> Trajectory:
        """Barycentric states at many times (text, astropy Time or TDB days past J2000.0)."""
        tdb_d = np.atleast_1d(np.asarray(parse_time(times, scale), dtype=float))
        if not tdb_d.size:
            raise CaseError("A propagation needs at least one time.")
        track = self.track(float(tdb_d.min()), float(tdb_d.max()))
        return Trajectory(tdb_d, track.at(tdb_d))

    def state(self, t: Any, scale: str = "tdb") -> tuple[u.Quantity, u.Quantity]:
        """Barycentric ICRF position (3,) au and velocity (3,) au/d at one time."""
        there = self.propagate(t, scale)
        return there.position[0], there.velocity[0]

    def partials(self, start_d: float, end_d: float, names: Sequence[str]) -> Partials:
        """Partials of the trajectory over a span with respect to named parameters."""
        return partials_along(self.track(start_d, end_d), names)

    def moved_to(self, t: Any, scale: str = "tdb") -> "Orbit":
        """The same orbit with another epoch."""
        when = float(parse_time(t, scale))
        return replace(self, epoch_tdb_d=when, state_vector=self.track(when, when).at(when)[0])

    def with_thrust(self, thrust: Thrust | None) -> "Orbit":
        """The same state under another thrust."""
        return replace(self, thrust=thrust)

    def to_dict(self) -> dict[str, Any]:
        """Epoch, state, elements, thrust and force model as plain values."""
        return {
            "epoch_tdb_d": self.epoch_tdb_d,
            "epoch_tdb": str(tdb_d_to_iso(self.epoch_tdb_d)),
            "state_barycentric_icrf_au_au_d": self.state_vector.tolist(),
            "elements_heliocentric": self.elements().to_dict(),
            "thrust": None if self.thrust is None else self.thrust.to_dict(),
            "forces": self.forces.to_dict(),
        }

    def __str__(self) -> str:
        lines = [str(self.elements())]
        if self.thrust is not None:
            lines.append(str(self.thrust))
        return "\n".join(lines)


def predict(
    orbit: Orbit,
    times: Any,
    station: str | tuple[float, float, float] = "500",
    scale: str = "utc",
    own_stations: Mapping[str, Station] | None = None,
    deflection: bool = False,
) -> pd.DataFrame:
    """What an observer sees.

    Parameters
    ----------
    orbit : Orbit
    times : text, astropy Time, TDB days past J2000.0, or a list of them
    station : str or (longitude deg, latitude deg, altitude m)
        Station code; "500" is the geocentre.
    deflection : bool
        Add the Sun's deflection of the object's light against that of the stars; see
        `ngbound.motion.observables.see` for why it is off.

    Returns
    -------
    pandas.DataFrame
        Columns tdb_d, utc, ra_deg, dec_deg (astrometric ICRF), range_au, r_au.
    """
    tdb_d = np.atleast_1d(np.asarray(parse_time(times, scale), dtype=float))
    observers = station_states(station, tdb_d, load_ephemeris(), own_stations)
    return predict_for(orbit, tdb_d, observers.position_au, deflection)


def predict_for(
    orbit: Orbit, tdb_d: ArrayLike, observer_au: ArrayLike, deflection: bool = False
) -> pd.DataFrame:
    """Astrometric places for observers at barycentric positions (n, 3) au; see `predict`."""
    tdb_d = np.atleast_1d(np.asarray(tdb_d, dtype=float))
    observer = np.atleast_2d(np.asarray(observer_au, dtype=float))
    if not tdb_d.size:
        raise CaseError("A prediction needs at least one time.")
    reach = light_margin_d(observer, orbit.state_vector)
    track = orbit.track(float(tdb_d.min()) - reach, float(tdb_d.max()))
    far = float(np.max(np.linalg.norm(track.at(tdb_d)[:, :3] - observer, axis=1)))
    if 1.1 * far / C_AU_D > reach:
        track = orbit.track(float(tdb_d.min()) - 1.5 * far / C_AU_D, float(tdb_d.max()))
    zeros = np.zeros(tdb_d.size)
    sight = see(track, Records.from_angles(tdb_d, observer, zeros, zeros), deflection)
    ra, dec = direction_to_angles(sight.rho_au)
    emitted = track.epoch_d + sight.tau_d
    sun = load_ephemeris().position_au("sun", emitted)
    return pd.DataFrame(
        {
            "tdb_d": tdb_d,
            "utc": np.atleast_1d(tdb_d_to_iso(tdb_d, scale="utc")),
            "ra_deg": np.degrees(ra) % 360.0,
            "dec_deg": np.degrees(dec),
            "range_au": np.linalg.norm(sight.rho_au, axis=1),
            "r_au": np.linalg.norm(sight.rho_au + observer - sun, axis=1),
        }
    )
