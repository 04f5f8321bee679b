"""What an arc says about any history of thrust: law, window in date or distance, direction.

May import: constants, errors, sky, motion, fit.

An acceleration a(t) moves the object by c(t) = Phi(t) z(t), z(t) = int_0^t Phi(s)^-1 (0, a(s)) ds,
with Phi the state transition from the epoch (variation of constants). The design of the state
columns is P Phi, so a thrust column of the design is (P Phi)(t_i) z(t_i): every law, window and
direction follows from one set of partials, without a new integration. With the residuals whitened
and the orbit projected out, an arc's chi2 is a quadratic of the amounts A (au/d2 at g = 1),

    chi2(A) - chi2(own best fit) = at_zero - 2 gain' A + A' matrix A.

A result known only by its quoted number gets the same form from the sagitta law: h'' = g(r(t)) on a
straight sightline, h without its mean and slope, scaled so that the quoted error is met.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq

from ngbound.errors import MassError
from ngbound.fit import Fit
from ngbound.motion import FormLaw, Thrust, partials_along
from ngbound.sky import load_ephemeris

Floats = NDArray[np.float64]
GRID = 1201
"""Nodes of the quadrature along an arc."""
UNSEEN = 1e-10
"""An axis with less than this share of the largest information counts as not measured."""
TABLE_AU = (0.01, 200.0)
TABLE_NODES = 4001
"""A law given as a table is looked up on so many nodes, evenly in ln r."""
SAGITTA_POINTS = 400
"""Points along an arc that is known only by its quoted numbers."""
CENSORED_ROUNDS = 40
"""Most rounds in which a censored estimate and the common thrust settle on one another."""
STATE_NAMES = ("x", "y", "z", "vx", "vy", "vz")


@dataclass(frozen=True)
class History:
    """How a thrust of constant amounts varies in time.

    Attributes
    ----------
    words : str
    g : callable
        Heliocentric distances in au (n,) -> g (n,).
    within_au : float
        Acts only nearer the Sun than this.
    from_d, until_d : float
        Acts only between these dates, TDB days past J2000.0.
    frame : {"RTN", "inertial"}
        What the three amounts count along: radial, transverse, normal (a jet that follows the
        Sun), or ICRF axes (a thrust along a spin axis fixed in space, all else averaged out).
    """

    words: str
    g: Callable[[Floats], Floats] = field(repr=False, compare=False)
    within_au: float = math.inf
    from_d: float = -math.inf
    until_d: float = math.inf
    frame: Literal["RTN", "inertial"] = "RTN"

    def weight(self, tdb_d: Floats, r_au: Floats) -> Floats:
        """g(r) inside the window, 0 outside, (n,)."""
        acts = (r_au < self.within_au) & (tdb_d >= self.from_d) & (tdb_d < self.until_d)
        return np.where(acts, self.g(r_au), 0.0)


def law_history(thrust: Thrust) -> History:
    """The history of a thrust law, its window left out."""
    law = thrust.law
    if isinstance(law, FormLaw):

        def form(r_au: Floats) -> Floats:
            ratio = r_au / law.r0_au
            return law.alpha * ratio**-law.m * (1.0 + ratio**law.n) ** -law.k

        return History(f"{law.name} thrust", form)
    nodes = np.geomspace(TABLE_AU[0], TABLE_AU[1], TABLE_NODES)
    values = np.log(thrust.g(nodes))

    def table(r_au: Floats) -> Floats:
        return np.exp(np.interp(np.log(r_au), np.log(nodes), values))

    return History(f"{law.name} thrust", table)


@dataclass(frozen=True, eq=False)
class Misfit:
    """Quadratic of three amounts: chi2 above an arc's own best fit.

    ``matrix`` (3, 3) in (au/d2)^-2, ``gain`` (3,) in (au/d2)^-1, ``at_zero`` without thrust.
    """

    matrix: Floats
    gain: Floats
    at_zero: float

    def __call__(self, amounts: Floats) -> Floats:
        """chi2 of amounts (..., 3) au/d2."""
        quadratic = np.einsum("...i,ij,...j->...", amounts, self.matrix, amounts)
        return self.at_zero - 2.0 * amounts @ self.gain + quadratic

    def __add__(self, other: "Misfit") -> "Misfit":
        return Misfit(
            self.matrix + other.matrix, self.gain + other.gain, self.at_zero + other.at_zero
        )

    def scaled(self, factor: float) -> "Misfit":
        """The same arc where the object is pushed by ``factor`` times the amounts."""
        return Misfit(factor**2 * self.matrix, factor * self.gain, self.at_zero)

    @property
    def rank(self) -> int:
        """Number of measured axes."""
        return int(np.count_nonzero(self._axes()[0]))

    def _axes(self) -> tuple[Floats, Floats]:
        values, axes = np.linalg.eigh(self.matrix)
        return np.where(values > UNSEEN * max(values[-1], 1e-300), values, 0.0), axes

    def lowest(self) -> tuple[float, Floats]:
        """The smallest value and the amounts there (3,), zero along axes not measured."""
        values, axes = self._axes()
        gain = axes.T @ self.gain
        seen = values > 0.0
        amounts = np.zeros(3)
        amounts[seen] = gain[seen] / values[seen]
        return self.at_zero - float(gain[seen] @ amounts[seen]), axes @ amounts

    def lowest_on_sphere(self, size: float) -> tuple[float, Floats]:
        """The smallest value among amounts of a given size, and where.

        The stationary points obey (matrix + mu) A = gain; the lowest has mu above minus the
        smallest eigenvalue (G. E. Forsythe & G. H. Golub 1965, SIAM J. 13, 1050, from memory).
        """
        values, axes = np.linalg.eigh(self.matrix)
        gain = axes.T @ self.gain
        low = -values[0] + 1e-14 * max(values[-1], 1e-300)
        point = gain / (values + low)
        if np.linalg.norm(point) < size:
            # gain has nothing along the least measured axis: go out along it
            point[0] += math.copysign(
                math.sqrt(size**2 - point[1:] @ point[1:]) - abs(point[0]), point[0] or 1.0
            )
        else:
            # 1 / |A(mu)| is nearly straight in mu
            def short_of(mu: float) -> float:
                return size / float(np.linalg.norm(gain / (values + mu))) - 1.0

            high = low + 2.0 * float(np.linalg.norm(gain)) / size
            point = gain / (values + float(brentq(short_of, low, high, rtol=1e-14)))
        point *= size / np.linalg.norm(point)
        amounts = axes @ point
        return float(self(amounts)), amounts


@dataclass(frozen=True, eq=False)
class ArcResponse:
    """A fitted arc, ready to be asked about any history.

    Attributes
    ----------
    own : History
        The law of the fit.
    first_d, last_d : float
        TDB days past J2000.0.
    r_au : (2,) smallest and largest heliocentric distance
    tdb_d, r_grid_au : (m,) nodes; basis (m, 3, 3) rows R, T, N; inverse (m, 6, 3) Phi^-1 columns
    """

    own: History
    first_d: float
    last_d: float
    r_au: tuple[float, float]
    epoch_d: float
    grid_d: Floats = field(repr=False)
    r_grid_au: Floats = field(repr=False)
    basis: Floats = field(repr=False)
    inverse: Floats = field(repr=False)
    record_tau_d: Floats = field(repr=False)
    state_design: Floats = field(repr=False)
    whiten: Callable[[Floats], Floats] = field(repr=False)
    orbit_axes: Floats = field(repr=False)
    data: Floats = field(repr=False)
    own_columns: Floats | None = field(repr=False)
    allowed_sigma: float = 0.0
    floor: float = field(repr=False, default=0.0)

    @classmethod
    def of(cls, fit: Fit) -> "ArcResponse":
        """The response of a fit (with or without thrust in it)."""
        keep = fit.keep
        tau = fit.correction.at.sight.tau_d[keep]
        epoch = fit.orbit.epoch_tdb_d
        low, high = min(float(tau.min()), -1e-3), max(float(tau.max()), 1e-3)
        span = fit.orbit.track(epoch + low - 1e-3, epoch + high + 1e-3)
        n_back = min(max(int(round(GRID * -low / (high - low))), 2), GRID - 2)
        grid = np.concatenate(
            [np.linspace(low, 0.0, n_back)[:-1], np.linspace(0.0, high, GRID - n_back)]
        )
        phi = partials_along(span, STATE_NAMES).at_offset(grid)
        inverse = np.asarray(np.linalg.inv(phi)[:, :, 3:], dtype=float)
        sun = np.concatenate(load_ephemeris().posvel("sun", epoch + grid), axis=-1)
        state = span.at_offset(grid) - sun
        radial = state[:, :3] / np.linalg.norm(state[:, :3], axis=1)[:, None]
        normal = np.cross(state[:, :3], state[:, 3:])
        normal /= np.linalg.norm(normal, axis=1)[:, None]
        basis = np.stack([radial, np.cross(normal, radial), normal], axis=1)
        rows = np.repeat(keep, 2)
        noise = fit.noise.mask(keep)
        design = fit.design[rows]
        white_state = noise.whiten(design[:, :6])
        axes: Floats = np.linalg.qr(white_state / np.linalg.norm(white_state, axis=0))[0]
        thrust_design = design[:, 6:]
        data = noise.whiten(fit.seen[keep].ravel() + thrust_design @ fit.theta[6:])
        data -= axes @ (axes.T @ data)
        law = fit.thrust or Thrust("inverse-square")
        r = np.linalg.norm(state[:, :3], axis=1)
        bare = cls(
            law_history(law),
            epoch + float(tau.min()),
            epoch + float(tau.max()),
            (float(r.min()), float(r.max())),
            epoch,
            grid,
            r,
            basis,
            inverse,
            tau,
            design[:, :6],
            noise.whiten,
            axes,
            data,
            thrust_design if fit.components == "RTN" else None,
        )
        return replace(bare, floor=bare.misfit(bare.own).lowest()[0])

    @cached_property
    def own_misfit(self) -> Misfit:
        """chi2 of the amounts under the law of the fit."""
        return self._misfit(self.own)

    @property
    def mean_g(self) -> float:
        """Mean of g over the time of the arc, under its own law."""
        return float(np.trapezoid(self.own.g(self.r_grid_au), self.grid_d) / np.ptp(self.grid_d))

    def columns(self, history: History) -> Floats:
        """Columns of the design (2n, 3) rad per au/d2 for a history."""
        if history is self.own and self.own_columns is not None:
            return self.own_columns
        weight = history.weight(self.epoch_d + self.grid_d, self.r_grid_au)
        push = weight[:, None] * (self._along_rtn if history.frame == "RTN" else self._along_axes)
        step, left, share = self._quadrature
        rising = np.zeros_like(push)
        np.cumsum(step * (push[1:] + push[:-1]), axis=0, out=rising[1:])
        rising -= rising[int(np.argmin(np.abs(self.grid_d)))]
        moved = rising[left] + share * (rising[left + 1] - rising[left])
        shaped = self.state_design.reshape(-1, 2, 6)
        return np.asarray(shaped @ moved.reshape(-1, 6, 3)).reshape(-1, 3)

    @cached_property
    def _along_rtn(self) -> Floats:
        """Phi^-1 (0, a) of unit accelerations along R, T, N at the nodes, (m, 18)."""
        return (self.inverse @ self.basis.transpose(0, 2, 1)).reshape(-1, 18)

    @cached_property
    def _along_axes(self) -> Floats:
        """The same along the axes of the frame."""
        return self.inverse.reshape(-1, 18)

    @cached_property
    def _quadrature(self) -> tuple[Floats, NDArray[np.int64], Floats]:
        """Half steps (m - 1, 1); of each record the node before it and the share of the step."""
        length = np.diff(self.grid_d)
        found = np.searchsorted(self.grid_d, self.record_tau_d)
        left = np.clip(found, 1, self.grid_d.size - 1) - 1
        share = (self.record_tau_d - self.grid_d[left]) / length[left]
        return 0.5 * length[:, None], left, share[:, None]

    def misfit(self, history: History, guess: Floats | None = None) -> Misfit:
        """chi2 of the amounts under a history; ``guess`` plays no part."""
        return self.own_misfit if history is self.own else self._misfit(history)

    def ask(self, history: History) -> Callable[[Floats | None], Misfit]:
        """`misfit` as a function of the guess, which plays no part for an arc."""
        found = self.misfit(history)
        return lambda guess: found

    def _misfit(self, history: History) -> Misfit:
        white = self.whiten(self.columns(history))
        white = white - self.orbit_axes @ (self.orbit_axes.T @ white)
        return Misfit(
            white.T @ white, white.T @ self.data, float(self.data @ self.data) - self.floor
        )


@dataclass(frozen=True, eq=False)
class QuotedResponse:
    """A result known by its quoted numbers.

    Attributes
    ----------
    own : History
        The law under which it was quoted.
    first_d, last_d : float
        nan where no dates were quoted.
    r_au : (2,) smallest and largest distance
    amounts : (3,) estimate, au/d2; zero for a limit
    matrix : (3, 3) information, (au/d2)^-2; zero along what was not quoted
    allowed_sigma : float
        For a detection threshold: any estimate within so many sigma of zero would have been called
        no detection. 0 for estimates and upper limits.
    """

    own: History
    first_d: float
    last_d: float
    r_au: tuple[float, float]
    r_along_au: tuple[float, ...]
    amounts: Floats
    matrix: Floats
    allowed_sigma: float = 0.0

    @property
    def mean_g(self) -> float:
        """Mean of g over the distances of the arc, under its own law."""
        n = len(self.r_along_au)
        r = np.interp(np.linspace(0, n - 1, 101), np.arange(n), np.array(self.r_along_au))
        return float(np.mean(self.own.g(r)))

    @cached_property
    def _along(self) -> tuple[Floats, Floats, Floats]:
        """Position in the arc -1..1, date (0..1 without dates) and distance of points of it."""
        x = np.linspace(-1.0, 1.0, SAGITTA_POINTS)
        first, last = (self.first_d, self.last_d) if self.dated else (0.0, 1.0)
        r = np.interp(x, np.linspace(-1.0, 1.0, len(self.r_along_au)), self.r_along_au)
        return x, first + 0.5 * (x + 1.0) * (last - first), r

    @property
    def dated(self) -> bool:
        """Whether dates were quoted."""
        return math.isfinite(self.first_d)

    @cached_property
    def _own_shape(self) -> Floats:
        return self._shape(self.own)

    def _shape(self, history: History) -> Floats:
        if not self.dated and (math.isfinite(history.from_d) or math.isfinite(history.until_d)):
            raise MassError("A result without dates cannot be asked about a date; give its dates.")
        x, t, r = self._along
        weight = history.weight(t, r)
        shape = np.cumsum(np.cumsum(weight) - 0.5 * weight)
        shape -= shape.mean()
        return shape - x * float(x @ shape) / float(x @ x)

    def ask(self, history: History) -> Callable[[Floats | None], Misfit]:
        """chi2 of the amounts under a history, given amounts (3,) that a censored estimate is taken
        as near to as it may be."""
        if history.frame != "RTN":
            raise MassError("Quoted numbers say nothing about directions fixed in space.")
        own = self._own_shape
        other = own if history is self.own else self._shape(history)
        square = float(own @ own)
        cross, full = float(own @ other) / square, float(other @ other) / square

        def near(guess: Floats | None) -> Misfit:
            amounts = self.amounts
            if self.allowed_sigma and guess is not None:
                wanted = cross * guess
                size = math.sqrt(max(float(wanted @ self.matrix @ wanted), 1e-300))
                amounts = wanted * min(1.0, self.allowed_sigma / size)
            return Misfit(
                full * self.matrix,
                cross * (self.matrix @ amounts),
                float(amounts @ self.matrix @ amounts),
            )

        return near

    def misfit(self, history: History, guess: Floats | None = None) -> Misfit:
        """`ask`, answered at once."""
        return self.ask(history)(guess)


Response = ArcResponse | QuotedResponse


Asked = Callable[[Floats | None], Misfit]


def joint(
    responses: list[Response],
    histories: list[History],
    scales: list[float] | None = None,
) -> tuple[float, Floats]:
    """Lowest chi2 of one set of amounts in several arcs, and the amounts (3,) au/d2.

    ``scales``: the thrust in arc i is this many times the amounts.
    """
    asked = [response.ask(history) for response, history in zip(responses, histories, strict=True)]
    return settle(asked, scales or [1.0] * len(responses), any(r.allowed_sigma for r in responses))


def settle(asked: list[Asked], scales: list[float], censored: bool) -> tuple[float, Floats]:
    """`joint` of arcs that were asked already; censored estimates are settled by turns."""
    guess = np.zeros(3)
    value = math.inf
    for _ in range(CENSORED_ROUNDS):
        previous = value
        parts = [near(s * guess).scaled(s) for near, s in zip(asked, scales, strict=True)]
        value, guess = sum(parts[1:], start=parts[0]).lowest()
        if abs(value - previous) < 1e-6 or not censored:
            break
    return value, guess


def freedom(responses: list[Response]) -> int:
    """Degrees of freedom of "one thrust in all": measured axes of all less those of the sum."""
    parts = [response.misfit(response.own) for response in responses]
    whole = sum(parts[1:], start=parts[0])
    return max(sum(part.rank for part in parts) - whole.rank, 0)
