"""What an arc of which only the outline is known could have shown.

May import: constants, errors, motion, sky, limits, and from its own room distributions, frames,
notebook, quoted and threshold_readings.

Two brackets, each of an order of magnitude. The sagitta law (R. L. Gluckstern 1963, NIM 24, 381):
N points over T at the distance D, constant acceleration across a straight sightline, sigma_A =
sigma_theta D sqrt(720 / N) / T^2, over g at the object. And simulated arcs: orbits that run through
the quoted heliocentric distances in the quoted time, turned so that the quoted geocentric distances
are met, seen from the geocentre at an even cadence; the thrust information follows from their
partials, without a fit. The sagitta law takes distance and motion along the sightline as known, so
it is a floor: in arcs of a few months the orbit takes most of the rest.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from ngbound.constants import ARCSEC_RAD, C_AU_D, GM_SUN_AU3_D2
from ngbound.limits import ThrustInformation, thrust_information
from ngbound.motion import (
    ForceModel,
    Orbit,
    Records,
    Thrust,
    design_matrix,
    partials_along,
    propagate_two_body,
    see,
)
from ngbound.sky import direction_to_angles, load_ephemeris

from .distributions import number_text
from .frames import text_rows
from .notebook import as_html
from .quoted import Geometry, QuotedThreshold, read_table, size_au_d2
from .threshold_readings import acceleration_slips, claimed_level, readings

Floats = NDArray[np.float64]
FIRST_D = 7305.0
"""TDB days past J2000.0 at which simulated arcs begin (2020-01-01): any date would do."""
ECCENTRICITIES = (0.2, 0.6, 1.0)
"""Tried where none was quoted."""
ARCS_EACH = 4
"""Simulated arcs of each eccentricity."""
TURNS = 400
NEAR_SUN_DEG = 40.0
"""Nobody observes nearer to the Sun than this."""
PARAMETERS = ("x", "y", "z", "vx", "vy", "vz", "A1", "A2", "A3")
PLAUSIBLE_FACTOR = 3.0
"""The bracket is widened by so much: true arcs of six classes lay within it (tests)."""
DOUBTFUL_FACTOR = 10.0


@dataclass(frozen=True)
class LinearArc:
    """A fit in linear theory, as the room limits wants it: no data, only the information."""

    normal: Floats
    n_obs: int

    components = "RTN"
    names = PARAMETERS
    n_state = 6

    @property
    def theta(self) -> Floats:
        """Zero: there is nothing to estimate."""
        return np.zeros(9)

    @property
    def chi2(self) -> float:
        """Its expectation."""
        return float(self.dof)

    @property
    def dof(self) -> int:
        """Degrees of freedom."""
        return 2 * self.n_obs - 9

    def chi2_many(self, thetas: Floats, /) -> Floats:
        """chi2 in linear theory, (m,)."""
        return self.chi2 + np.einsum("mi,ij,mj->m", thetas, self.normal, thetas)


@dataclass(frozen=True)
class GeometryAudit:
    """A quoted threshold against the outline of its arc.

    Attributes
    ----------
    quoted_au_d2 : float
    sagitta_au_d2, simulated_au_d2 : (float, float)
        Brackets of the claimed threshold.
    median_au_d2 : float
        Of the simulated arcs.
    n_simulated : int
    verdict : str
        "plausible": inside the simulated bracket, widened by 3; "doubtful": within a factor 10 of
        it; else "implausible".
    slips : tuple of str
        Slips of the size of the disagreement; only hints, as the bracket is one of magnitude.
    level : str
    """

    quoted_au_d2: float
    sagitta_au_d2: tuple[float, float]
    simulated_au_d2: tuple[float, float]
    median_au_d2: float
    n_simulated: int
    verdict: str
    slips: tuple[str, ...]
    level: str

    @property
    def headline(self) -> str:
        """The verdict in a sentence."""
        return (
            f"The quoted threshold of {number_text(self.quoted_au_d2)} au/d2 ({self.level}) is "
            f"{self.verdict} for an arc of this outline."
        )

    def __str__(self) -> str:
        low, high = (number_text(x, 2) for x in self.simulated_au_d2)
        below, above = (number_text(x, 2) for x in self.sagitta_au_d2)
        text = (
            f"{self.headline}\n"
            f"  {self.n_simulated} simulated arcs of it give {low} to {high} au/d2, median "
            f'{number_text(self.median_au_d2, 2)}; "plausible" is what lies within a factor '
            f"{PLAUSIBLE_FACTOR:g} of that range.\n"
            f"  The sagitta law gives {below} to {above} au/d2: a floor, for thrust across a "
            "sightline whose direction and length are known."
        )
        if self.slips:
            text += f"\n  A slip of that size: {'; or '.join(self.slips)}."
        return text

    def to_frame(self) -> pd.DataFrame:
        """The quoted threshold and both brackets as a table, au/d2."""
        rows = (
            ("quoted", self.quoted_au_d2, self.quoted_au_d2),
            (f"{self.n_simulated} simulated arcs", *self.simulated_au_d2),
            ("median of the simulated arcs", self.median_au_d2, self.median_au_d2),
            ("sagitta law", *self.sagitta_au_d2),
        )
        return pd.DataFrame(rows, columns=["threshold", "lowest au/d2", "highest au/d2"])

    def _repr_html_(self) -> str:
        notes = [f"A slip of that size: {slip}." for slip in self.slips]
        return as_html([self.headline], text_rows(self.to_frame()), notes)

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record."""
        return {
            "quoted_au_d2": self.quoted_au_d2,
            "level": self.level,
            "sagitta_au_d2": list(self.sagitta_au_d2),
            "simulated_au_d2": list(self.simulated_au_d2),
            "median_au_d2": self.median_au_d2,
            "n_simulated": self.n_simulated,
            "verdict": self.verdict,
            "slips": list(self.slips),
        }


def sagitta_sigma(
    n_obs: int, span_d: float, sigma_arcsec: float, distance_au: float, g: float = 1.0
) -> float:
    """One sigma of A (au/d2 at g = 1) across the sightline, after R. L. Gluckstern 1963."""
    local = sigma_arcsec * ARCSEC_RAD * distance_au * math.sqrt(720.0 / n_obs) / span_d**2
    return local / g


def audit_geometry(
    geometry: Geometry | Mapping[str, Any],
    quoted: QuotedThreshold | Mapping[str, Any],
    seed: int | np.random.Generator = 1,
) -> GeometryAudit:
    """Bracket a quoted threshold from the outline of its arc.

    Parameters
    ----------
    geometry : Geometry or mapping with its keys
    quoted : QuotedThreshold or mapping with its keys
    seed : int or Generator
        Of the turns of the simulated orbits.
    """
    outline = geometry
    if not isinstance(outline, Geometry):
        outline = read_table(outline, Geometry)[0]
    claim = quoted
    if not isinstance(claim, QuotedThreshold):
        claim = read_table(claim, QuotedThreshold)[0]
    thrust = claim.thrust()
    size = size_au_d2(claim.value, "threshold.value")
    if claim.at_au is not None:
        size /= float(thrust.g(claim.at_au))
    level = claimed_level(claim)
    g_ends = [float(thrust.g(r)) for r in outline.r_au]
    apart = outline.nights or outline.n_obs
    multiple = level.joint(3) if claim.component == "any" else level.one()
    sagitta = (
        multiple
        * sagitta_sigma(
            outline.n_obs, outline.span_d, outline.sigma_arcsec, min(outline.delta_au), max(g_ends)
        ),
        multiple
        * sagitta_sigma(
            apart, outline.span_d, outline.sigma_arcsec, max(outline.delta_au), min(g_ends)
        ),
    )
    values = [
        readings(found, claim, size)[0].value_au_d2
        for found in simulated_information(outline, thrust, np.random.default_rng(seed))
    ]
    low, high, middle = min(values), max(values), float(np.median(values))
    over = max(size / high, low / size)
    verdict = (
        "plausible"
        if over <= PLAUSIBLE_FACTOR
        else "doubtful"
        if over <= DOUBTFUL_FACTOR
        else "implausible"
    )
    slips: tuple[str, ...] = ()
    if verdict == "implausible":
        slips = acceleration_slips(size / middle, math.log(max(3.0, high / middle)), None)
    return GeometryAudit(
        size, sagitta, (low, high), middle, len(values), verdict, slips, level.words
    )


def simulated_information(
    outline: Geometry, thrust: Thrust, rng: np.random.Generator
) -> list[ThrustInformation]:
    """Thrust information of arcs that fit the outline."""
    eccentricities = (outline.e,) if outline.e is not None else ECCENTRICITIES
    nights = outline.nights or outline.n_obs
    found = []
    for e in eccentricities:
        start = _path(outline, e)
        for turn in _turns(outline, start, rng):
            state = np.concatenate([turn.apply(start[:3]), turn.apply(start[3:])])
            found.append(arc_information(state, outline, nights, thrust))
    return found


def _path(outline: Geometry, e: float) -> Floats:
    """Two-body state (6,) in its own plane from which the quoted distances are met best."""
    first, last = outline.r_au[0], outline.r_au[-1]
    near, far = min(first, last), max(first, last)
    inner = np.array([outline.q_au]) if outline.q_au else np.geomspace(0.2, 1.0, 41) * near
    if e < 1 and not outline.q_au:
        inner = np.unique(np.concatenate([inner, near * np.linspace(0.9, 1.1, 9)]))
    reach = 60.0 * far**1.5 + outline.span_d
    starts = np.linspace(-reach, 0.2 * reach if first > last else reach, 401)
    best: tuple[float, Floats] | None = None
    for q in inner:
        speed = math.sqrt(GM_SUN_AU3_D2 * (1.0 + e) / q)
        perihelion = np.array([q, 0.0, 0.0, 0.0, speed, 0.0])
        there = propagate_two_body(perihelion, starts)
        then = propagate_two_body(perihelion, starts + outline.span_d)
        miss = (
            np.log(np.linalg.norm(there[:, :3], axis=1) / first) ** 2
            + np.log(np.linalg.norm(then[:, :3], axis=1) / last) ** 2
        )
        i = int(np.argmin(miss))
        if best is None or miss[i] < best[0]:
            best = float(miss[i]), there[i]
    assert best is not None
    return best[1]


def _turns(outline: Geometry, start: Floats, rng: np.random.Generator) -> list[Rotation]:
    """Turns of the orbit that meet the quoted geocentric distances best, away from the Sun."""
    times = np.linspace(0.0, outline.span_d, 24)
    path = propagate_two_body(start, times)[:, :3]
    ephemeris = load_ephemeris()
    earth = ephemeris.position_au("earth", FIRST_D + times) - ephemeris.position_au(
        "sun", FIRST_D + times
    )
    turns = Rotation.random(TURNS, rng=rng)
    line = np.einsum("kij,tj->kti", turns.as_matrix(), path) - earth
    distance = np.linalg.norm(line, axis=2)
    cosine = -np.einsum("kti,ti->kt", line, earth) / distance / np.linalg.norm(earth, axis=1)
    hidden = np.mean(cosine > math.cos(math.radians(NEAR_SUN_DEG)), axis=1)
    miss = (
        np.log(distance.min(axis=1) / min(outline.delta_au)) ** 2
        + np.log(distance.max(axis=1) / max(outline.delta_au)) ** 2
        + hidden
    )
    return [turns[int(i)] for i in np.argsort(miss)[:ARCS_EACH]]


def arc_information(
    start: Floats, outline: Geometry, nights: int, thrust: Thrust
) -> ThrustInformation:
    """Thrust information of an orbit (heliocentric state at the start) seen from the geocentre."""
    ephemeris = load_ephemeris()
    middle = 0.5 * outline.span_d
    state = propagate_two_body(start, np.array([middle]))[0] + np.concatenate(
        ephemeris.posvel("sun", FIRST_D + middle)
    )
    orbit = Orbit(FIRST_D + middle, state, thrust, ForceModel(asteroids=False))
    times = FIRST_D + np.linspace(0.0, outline.span_d, nights)
    geocentre = ephemeris.position_au("earth", times)
    # light from twice the largest distance of the arc arrives within this time
    late = 1.0 + (2.0 + 2.0 * max(outline.r_au)) / C_AU_D
    track = orbit.track(float(times[0]) - late, float(times[-1]))
    nowhere = np.zeros(nights)
    sight = see(track, Records.from_angles(times, geocentre, nowhere, nowhere))
    records = Records.from_angles(times, geocentre, *direction_to_angles(sight.rho_au))
    design = design_matrix(sight, records, partials_along(track, PARAMETERS)).reshape(-1, 9)
    sigma = outline.sigma_arcsec * ARCSEC_RAD * math.sqrt(nights / outline.n_obs)
    white = design / sigma
    return thrust_information(LinearArc(white.T @ white, outline.n_obs))
