"""Osculating elements of any conic, both ways, with covariance; imports constants and errors only.

States are ICRF (equatorial) positions in au and velocities in au/d relative to the centre (the Sun
or the barycentre of the solar system); elements are referred to the ecliptic and equinox J2000 in
the sense of the comet trade: the ICRF axes turned about x by the obliquity of IAU 1976.

Nothing is lost near e = 1: the perihelion time comes from the universal anomaly
(_kernels/kepler.py), never from 1 - e as a divisor.

Degenerate cases, by convention:

- i = 0 or 180 deg (the pole within 1e-15 of the ecliptic pole): node = 0, argperi from the x axis;
- e = 0 (below 1e-15): argperi = 0, so that tp is the passage through the node.

The elements are then still a faithful image of the state, but their partials do not exist, and
`elements_jacobian` says so.
"""

import math
from abc import ABC, abstractmethod
from dataclasses import asdict, dataclass
from typing import Any, Self

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ngbound.constants import (
    GM_KM3_S2,
    GM_SUN_AU3_D2,
    J2000_JD,
    KM3_S2_TO_AU3_D2,
    OBLIQUITY_J2000_RAD,
)
from ngbound.errors import AnalysisError, InputError, PropagationError
from ngbound.motion._kernels.kepler import solve_universal_kepler, universal_functions

FloatArray = NDArray[np.float64]

CENTRE_GM_AU3_D2: dict[str, float] = {
    "heliocentric": GM_SUN_AU3_D2,
    "barycentric": math.fsum(GM_KM3_S2.values()) * KM3_S2_TO_AU3_D2,
}
"""GM that belongs to elements about each centre: the Sun; the Sun, planets, Moon and Pluto."""

JULIAN_YEAR_D = 365.25
_TWO_PI = 2.0 * math.pi
_CIRCLE = 1e-15

_COS_EPS = math.cos(OBLIQUITY_J2000_RAD)
_SIN_EPS = math.sin(OBLIQUITY_J2000_RAD)
ECLIPTIC_TO_ICRF: FloatArray = np.array(
    [[1.0, 0.0, 0.0], [0.0, _COS_EPS, -_SIN_EPS], [0.0, _SIN_EPS, _COS_EPS]]
)
"""Matrix that turns ecliptic J2000 components into ICRF ones (obliquity IAU 1976)."""
ECLIPTIC_TO_ICRF.setflags(write=False)


def _gm(centre: str) -> float:
    if centre not in CENTRE_GM_AU3_D2:
        raise InputError(
            f"The centre of elements must be one of {sorted(CENTRE_GM_AU3_D2)}, not {centre!r}."
        )
    return CENTRE_GM_AU3_D2[centre]


def _check_finite(elements: "CometaryElements | KeplerianElements") -> None:
    for name, value in asdict(elements).items():
        if name == "centre":
            continue
        if not math.isfinite(value):
            raise InputError(f"The element {name} must be a finite number, not {value!r}.")
        object.__setattr__(elements, name, float(value))


def _table(title: str, rows: list[tuple[str, str, str]]) -> str:
    width = max(len(name) for name, _, _ in rows)
    lines = [title]
    lines += [f"  {name:<{width}}  {value:>24}  {unit}".rstrip() for name, value, unit in rows]
    return "\n".join(lines)


class _Elements(ABC):
    """What all elements do with covariances."""

    e: float
    i_rad: float

    @abstractmethod
    def jacobian(self) -> FloatArray:
        """d(state)/d(elements), (6, 6)."""

    def state_covariance(self, covariance: ArrayLike) -> FloatArray:
        """Covariance (6, 6) of the ICRF state from that of the elements in their order."""
        jacobian = self.jacobian()
        return jacobian @ np.asarray(covariance, dtype=float) @ jacobian.T

    def elements_covariance(self, state_covariance: ArrayLike) -> FloatArray:
        """Covariance (6, 6) of the elements in their order from that of the ICRF state.

        Raises
        ------
        AnalysisError
            The orbit is a circle or lies in the ecliptic, so that an element has no partials.
        """
        jacobian = elements_jacobian(self)
        return jacobian @ np.asarray(state_covariance, dtype=float) @ jacobian.T


@dataclass(frozen=True)
class CometaryElements(_Elements):
    """q, e, i, node, argument of perihelion and time of perihelion: fit for every conic.

    Attributes
    ----------
    epoch_tdb_d, tp_tdb_d : float
        Epoch of osculation and time of perihelion, TDB days past J2000.0.
    q_au, e : float
        Perihelion distance (> 0) and eccentricity (>= 0).
    i_rad, node_rad, argperi_rad : float
        Inclination, longitude of the ascending node, argument of perihelion; ecliptic J2000.
    centre : "heliocentric" or "barycentric"
    """

    epoch_tdb_d: float
    q_au: float
    e: float
    i_rad: float
    node_rad: float
    argperi_rad: float
    tp_tdb_d: float
    centre: str = "heliocentric"

    def __post_init__(self) -> None:
        _gm(self.centre)
        _check_finite(self)
        if not self.q_au > 0:
            raise InputError(f"The perihelion distance q_au must be above 0, not {self.q_au!r}.")
        if not self.e >= 0:
            raise InputError(f"The eccentricity e must be at least 0, not {self.e!r}.")

    @classmethod
    def from_state(cls, epoch_tdb_d: float, state: ArrayLike, centre: str = "heliocentric") -> Self:
        """Elements that osculate an ICRF state (6,), au and au/d, relative to the centre.

        The perihelion is the nearest one in time when the orbit is an ellipse.
        """
        q, e, i, node, argperi, since_d = _from_state(state, _gm(centre))
        return cls(float(epoch_tdb_d), q, e, i, node, argperi, float(epoch_tdb_d) - since_d, centre)

    def state(self) -> FloatArray:
        """ICRF position (au) and velocity (au/d) at the epoch relative to the centre, (6,)."""
        return _state_and_partials(self)[0]

    def jacobian(self) -> FloatArray:
        """d(state)/d(q, e, i, node, argperi, tp), (6, 6); au, au/d, rad, d. Analytic."""
        return _state_and_partials(self)[1]

    @property
    def gm_au3_d2(self) -> float:
        """GM that belongs to the centre."""
        return _gm(self.centre)

    @property
    def inverse_a_per_au(self) -> float:
        """Reciprocal semimajor axis 1/a = (1 - e)/q, 1/au; negative for a hyperbola."""
        return (1.0 - self.e) / self.q_au

    @property
    def a_au(self) -> float:
        """Semimajor axis, au: negative for a hyperbola, infinite for a parabola."""
        inverse = self.inverse_a_per_au
        return 1.0 / inverse if inverse != 0 else math.inf

    @property
    def period_d(self) -> float:
        """Period, d; infinite when the orbit is open."""
        inverse = self.inverse_a_per_au
        return _TWO_PI / math.sqrt(self.gm_au3_d2 * inverse**3) if inverse > 0 else math.inf

    @property
    def aphelion_au(self) -> float:
        """Aphelion distance, au; infinite when the orbit is open."""
        return self.q_au * (1.0 + self.e) / (1.0 - self.e) if self.e < 1 else math.inf

    def to_keplerian(self) -> "KeplerianElements":
        """The same orbit with semimajor axis and mean anomaly.

        Raises
        ------
        AnalysisError
            e = 1: a parabola has no semimajor axis.
        """
        inverse = self.inverse_a_per_au
        if inverse == 0:
            raise AnalysisError(
                "A parabola (e = 1) has no semimajor axis and no mean anomaly: "
                "use the cometary elements q, e, tp instead.",
                elements=self,
            )
        motion = math.sqrt(self.gm_au3_d2 * abs(inverse) ** 3)
        mean_anomaly = motion * (self.epoch_tdb_d - self.tp_tdb_d)
        if inverse > 0:
            mean_anomaly %= _TWO_PI
        return KeplerianElements(
            self.epoch_tdb_d,
            1.0 / inverse,
            self.e,
            self.i_rad,
            self.node_rad,
            self.argperi_rad,
            mean_anomaly,
            self.centre,
        )

    def to_dict(self) -> dict[str, Any]:
        """The fields, JSON-able, with 1/a beside them."""
        return {**asdict(self), "inverse_a_per_au": self.inverse_a_per_au}

    def __str__(self) -> str:
        rows = [
            ("epoch", f"{J2000_JD + self.epoch_tdb_d:.6f}", "JD TDB"),
            ("q", f"{self.q_au:.12f}", "au"),
            ("e", f"{self.e:.14f}", ""),
            ("i", f"{math.degrees(self.i_rad):.11f}", "deg"),
            ("node", f"{math.degrees(self.node_rad):.11f}", "deg"),
            ("argperi", f"{math.degrees(self.argperi_rad):.11f}", "deg"),
            ("tp", f"{J2000_JD + self.tp_tdb_d:.8f}", "JD TDB"),
            ("1/a", f"{self.inverse_a_per_au:.12f}", "1/au"),
        ]
        if self.e < 1:
            rows += [
                ("a", f"{self.a_au:.10g}", "au"),
                ("period", f"{self.period_d / JULIAN_YEAR_D:.8g}", "yr"),
            ]
        return _table(f"Cometary elements, {self.centre}, ecliptic J2000", rows)


@dataclass(frozen=True)
class KeplerianElements(_Elements):
    """a, e, i, node, argument of perihelion and mean anomaly: ellipses and hyperbolas.

    Attributes
    ----------
    epoch_tdb_d : float
        Epoch of osculation, TDB days past J2000.0.
    a_au : float
        Semimajor axis, positive for e < 1 and negative for e > 1.
    e : float
        Eccentricity, not 1.
    i_rad, node_rad, argperi_rad : float
        As in `CometaryElements`.
    mean_anomaly_rad : float
        sqrt(gm/|a|^3) times the time since perihelion.
    centre : "heliocentric" or "barycentric"
    """

    epoch_tdb_d: float
    a_au: float
    e: float
    i_rad: float
    node_rad: float
    argperi_rad: float
    mean_anomaly_rad: float
    centre: str = "heliocentric"

    def __post_init__(self) -> None:
        _gm(self.centre)
        _check_finite(self)
        if self.e < 0 or self.e == 1:
            raise InputError(
                f"The eccentricity e must be at least 0 and other than 1, not {self.e!r}; "
                "a parabola needs CometaryElements."
            )
        if not self.a_au * (1.0 - self.e) > 0:
            raise InputError(
                "The semimajor axis a_au must be positive for e < 1 and negative for e > 1, "
                f"not {self.a_au!r} with e = {self.e!r}."
            )

    @classmethod
    def from_state(cls, epoch_tdb_d: float, state: ArrayLike, centre: str = "heliocentric") -> Self:
        """Elements that osculate an ICRF state (6,), au and au/d, relative to the centre."""
        k = CometaryElements.from_state(epoch_tdb_d, state, centre).to_keplerian()
        return cls(
            k.epoch_tdb_d, k.a_au, k.e, k.i_rad, k.node_rad, k.argperi_rad, k.mean_anomaly_rad,
            centre,
        )  # fmt: skip

    @property
    def mean_motion_rad_d(self) -> float:
        """sqrt(gm/|a|^3), rad/d."""
        return math.sqrt(_gm(self.centre) / abs(self.a_au) ** 3)

    def to_cometary(self) -> CometaryElements:
        """The same orbit with perihelion distance and time, the nearest one for an ellipse."""
        mean_anomaly = self.mean_anomaly_rad
        if self.e < 1:
            mean_anomaly = math.remainder(mean_anomaly, _TWO_PI)
        return CometaryElements(
            self.epoch_tdb_d,
            self.a_au * (1.0 - self.e),
            self.e,
            self.i_rad,
            self.node_rad,
            self.argperi_rad,
            self.epoch_tdb_d - mean_anomaly / self.mean_motion_rad_d,
            self.centre,
        )

    def state(self) -> FloatArray:
        """ICRF position (au) and velocity (au/d) at the epoch relative to the centre, (6,)."""
        return self.to_cometary().state()

    def jacobian(self) -> FloatArray:
        """d(state)/d(a, e, i, node, argperi, M), (6, 6); au, au/d, rad. Analytic."""
        return self.to_cometary().jacobian() @ self._cometary_partials()

    def _cometary_partials(self) -> FloatArray:
        """d(q, e, i, node, argperi, tp)/d(a, e, i, node, argperi, M)."""
        cometary = self.to_cometary()
        since_d = cometary.epoch_tdb_d - cometary.tp_tdb_d
        out = np.eye(6)
        out[0, 0] = 1.0 - self.e
        out[0, 1] = -self.a_au
        out[5, 0] = -1.5 * since_d / self.a_au
        out[5, 5] = -1.0 / self.mean_motion_rad_d
        return out

    def to_dict(self) -> dict[str, Any]:
        """The fields, JSON-able."""
        return asdict(self)

    def __str__(self) -> str:
        rows = [
            ("epoch", f"{J2000_JD + self.epoch_tdb_d:.6f}", "JD TDB"),
            ("a", f"{self.a_au:.12f}", "au"),
            ("e", f"{self.e:.14f}", ""),
            ("i", f"{math.degrees(self.i_rad):.11f}", "deg"),
            ("node", f"{math.degrees(self.node_rad):.11f}", "deg"),
            ("argperi", f"{math.degrees(self.argperi_rad):.11f}", "deg"),
            ("M", f"{math.degrees(self.mean_anomaly_rad):.11f}", "deg"),
        ]
        return _table(f"Keplerian elements, {self.centre}, ecliptic J2000", rows)


def elements_jacobian(elements: _Elements) -> FloatArray:
    """d(elements)/d(state), (6, 6): the inverse of the analytic d(state)/d(elements).

    Raises
    ------
    AnalysisError
        The orbit is a circle, lies in the ecliptic or is a straight line: an element that jumps
        has no partials. Use the covariance of the state.
    """
    forward = elements.jacobian()
    column = np.linalg.norm(forward, axis=0)
    row = np.linalg.norm(forward, axis=1)
    if elements.e < _CIRCLE or math.sin(elements.i_rad) < _CIRCLE or not (column > 0).all():
        raise AnalysisError(
            f"With e = {elements.e:.3g} and i = {math.degrees(elements.i_rad):.3g} deg the node or "
            "the perihelion has no direction, so the elements have no covariance: "
            "use that of the state.",
            elements=elements,
        )
    balanced = forward / row[:, None]
    column = np.linalg.norm(balanced, axis=0)
    inverse = np.linalg.inv(balanced / column)
    return inverse / column[:, None] / row[None, :]


def _from_state(state: ArrayLike, mu: float) -> tuple[float, float, float, float, float, float]:
    """(q, e, i, node, argperi, time since the nearest perihelion) of an ICRF state."""
    icrf = np.asarray(state, dtype=float)
    if icrf.shape != (6,) or not np.isfinite(icrf).all():
        raise PropagationError(
            f"A state is six finite numbers (au, au/d), not {icrf!r}: no elements follow.",
            state=icrf,
        )
    pos = ECLIPTIC_TO_ICRF.T @ icrf[:3]
    vel = ECLIPTIC_TO_ICRF.T @ icrf[3:]
    r = math.hypot(*pos)
    pole = np.cross(pos, vel)
    h = math.hypot(*pole)
    if not (r > 0 and h > 0):
        raise PropagationError(
            f"The state {icrf} moves straight through the centre (or rests), so it has no orbital "
            "plane and no elements. Give a state with a sideways velocity.",
            state=icrf,
        )
    pole = pole / h
    v2 = float(vel @ vel)
    sigma = float(pos @ vel)
    # eccentricity vector in components along r and across it, then in space
    p = h * h / mu
    radial = pos / r
    across = np.cross(pole, radial)
    e_cos = p / r - 1.0
    e_sin = h * sigma / (mu * r)
    e = math.hypot(e_cos, e_sin)
    i = math.atan2(math.hypot(pole[0], pole[1]), pole[2])
    if math.hypot(pole[0], pole[1]) < _CIRCLE:
        node = 0.0
    else:
        node = math.atan2(pole[0], -pole[1]) % _TWO_PI
    to_node = np.array([math.cos(node), math.sin(node), 0.0])
    to_top = np.cross(pole, to_node)
    latitude = math.atan2(float(radial @ to_top), float(radial @ to_node))
    if e < _CIRCLE:
        e_cos, e_sin = math.cos(latitude), math.sin(latitude)
        argperi = 0.0
    else:
        to_perihelion = (e_cos * radial - e_sin * across) / e
        argperi = math.atan2(float(to_perihelion @ to_top), float(to_perihelion @ to_node))
    nu = math.atan2(e_sin, e_cos)
    q = p / (1.0 + e)
    beta = 2.0 * mu / r - v2
    since_d = _time_from_perihelion(nu, q, e, beta, mu)
    return q, e, i, node, argperi % _TWO_PI, since_d


def _time_from_perihelion(nu: float, q: float, e: float, beta: float, mu: float) -> float:
    """Time since perihelion (d) at a true anomaly in -pi..pi, regular through e = 1."""
    # tan(nu/2) = w sqrt(mu (1 + e)/q) with w = U1/U0 at half the universal anomaly
    scale = math.sqrt(q / (mu * (1.0 + e)))
    sine = math.sin(0.5 * nu)
    cosine = math.cos(0.5 * nu)
    w = scale * sine / cosine if cosine != 0 else math.inf
    x = beta * w * w
    if abs(x) < 0.05:
        # atan(sqrt x)/sqrt x as a series
        total = 0.0
        for k in range(14, -1, -1):
            total = 1.0 / (2 * k + 1) - x * total
        s = 2.0 * w * total
    elif beta > 0:
        root = math.sqrt(beta)
        s = 2.0 * math.atan2(root * scale * sine, cosine) / root
    else:
        root = math.sqrt(-beta)
        s = 2.0 * math.atanh(max(-1.0 + 1e-16, min(1.0 - 1e-16, root * w))) / root
    u3 = universal_functions(beta, s)[3]
    return q * s + mu * e * u3


def _state_and_partials(elements: CometaryElements) -> tuple[FloatArray, FloatArray]:
    """ICRF state (6,) and its partials by q, e, i, node, argperi, tp."""
    mu = elements.gm_au3_d2
    q, e = elements.q_au, elements.e
    dt = elements.epoch_tdb_d - elements.tp_tdb_d
    beta = mu * (1.0 - e) / q
    s, s_whole = solve_universal_kepler(q, 0.0, beta, mu, dt)
    if not math.isfinite(s):
        raise PropagationError(
            f"Kepler's equation has no solution for q = {q!r} au, e = {e!r}, {dt!r} d from "
            "perihelion. Mend the elements.",
            elements=elements,
        )
    u0, u1, u2, u3, u4, u5 = universal_functions(beta, s)
    if s_whole != 0:
        # secular parts need the whole anomaly; U0..U2 are periodic
        _, _, _, u3, u4, u5 = universal_functions(beta, s + s_whole)
    s += s_whole
    r = q + mu * e * u2
    speed = math.sqrt(mu * (1.0 + e) / q)
    x = q - mu * u2
    y = q * speed * u1
    vx = -mu * u1 / r
    vy = speed * (1.0 - mu * u2 / r)

    plane = np.array([x, y, vx, vy])
    partials = np.zeros((4, 6))
    # by the flight time at fixed q, e: velocity and acceleration
    rate = np.array([vx, vy, -mu * x / r**3, -mu * y / r**3])
    partials[:, 5] = -rate
    # dU_n/dbeta at fixed s = -(s U_{n+1} - n U_{n+2}) / 2
    b1 = -0.5 * (s * u2 - u3)
    b2 = -0.5 * (s * u3 - 2.0 * u4)
    b3 = -0.5 * (s * u4 - 3.0 * u5)
    for column, beta_k, q_k, e_k in ((0, -beta / q, 1.0, 0.0), (1, -mu / q, 0.0, 1.0)):
        # q s + mu e U3 = dt fixes ds
        ds = -(q_k * s + mu * e_k * u3 + mu * e * b3 * beta_k) / r
        d1 = u0 * ds + b1 * beta_k
        d2 = u1 * ds + b2 * beta_k
        dr = q_k + mu * e_k * u2 + mu * e * d2
        d_speed = 0.5 * speed * (e_k / (1.0 + e) - q_k / q)
        partials[0, column] = q_k - mu * d2
        partials[1, column] = q_k * speed * u1 + q * d_speed * u1 + q * speed * d1
        partials[2, column] = -mu * d1 / r + mu * u1 * dr / r**2
        partials[3, column] = d_speed * (1.0 - mu * u2 / r) - speed * mu * (d2 / r - u2 * dr / r**2)

    ci, si = math.cos(elements.i_rad), math.sin(elements.i_rad)
    cn, sn = math.cos(elements.node_rad), math.sin(elements.node_rad)
    cw, sw = math.cos(elements.argperi_rad), math.sin(elements.argperi_rad)
    pole = np.array([sn * si, -cn * si, ci])
    p_axis = np.array([cn * cw - sn * sw * ci, sn * cw + cn * sw * ci, sw * si])
    q_axis = np.array([-cn * sw - sn * cw * ci, -sn * sw + cn * cw * ci, cw * si])
    axes = np.column_stack([p_axis, q_axis])
    d_i = np.column_stack([sw * pole, cw * pole])
    d_node = np.array([[0.0, -1.0, 0.0], [1.0, 0.0, 0.0], [0.0, 0.0, 0.0]]) @ axes
    d_argperi = np.column_stack([q_axis, -p_axis])

    def place(turn: FloatArray, flat: FloatArray) -> FloatArray:
        return np.concatenate(
            [ECLIPTIC_TO_ICRF @ (turn @ flat[:2]), ECLIPTIC_TO_ICRF @ (turn @ flat[2:])]
        )

    jacobian = np.column_stack(
        [
            place(axes, partials[:, 0]),
            place(axes, partials[:, 1]),
            place(d_i, plane),
            place(d_node, plane),
            place(d_argperi, plane),
            place(axes, partials[:, 5]),
        ]
    )
    return place(axes, plane), jacobian
