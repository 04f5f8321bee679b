"""From an orbit to where the object is: integrates and turns a kernel's status into a sentence.

Imports numpy, constants, errors, sky, the kernels, and gravity, thrust of this room.
"""

from collections.abc import Callable
from dataclasses import dataclass, field
from functools import partial

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ngbound.constants import C_AU_D
from ngbound.errors import PropagationError
from ngbound.motion._kernels.layout import (
    INSIDE_BODY,
    NOT_CONVERGED,
    OK,
    STEP_UNDERFLOW,
    TOO_MANY_STEPS,
    WINDOW_DATE,
    WINDOW_DISTANCE,
    WINDOW_NONE,
    Perturbers,
    Physics,
    Push,
)
from ngbound.motion._kernels.radau import STEP_CAP_D, dense_many, integrate
from ngbound.motion.gravity import ForceModel
from ngbound.motion.thrust import NO_PUSH, Thrust
from ngbound.sky import load_ephemeris, tdb_d_to_iso

Floats = NDArray[np.float64]
MAX_STEPS = 50_000
FIRST_GUESS_STEPS = 512
HOPELESS = 4.0
"""Beyond this many times MAX_STEPS, judged by how far a good part of them has come, an integration
is not carried on."""
SLACK_D = 1e-6
WINDOW_PASSES = 12


@dataclass(frozen=True, eq=False)
class Leg:
    """Integration from the epoch in one direction of time: steps and the polynomial of each.

    ``start_d``, ``length_d`` (n,) days from the epoch, signed; ``begin`` (n + 1, 6) barycentric au,
    au/d; ``power`` (n, 8, 3) coefficients of the acceleration in powers of the step fraction.
    ``active`` (n,): whether the thrust is on over each step.
    """

    start_d: Floats = field(repr=False)
    length_d: Floats = field(repr=False)
    begin: Floats = field(repr=False)
    power: Floats = field(repr=False)
    active: NDArray[np.bool_] = field(repr=False)
    forward: bool

    @property
    def n(self) -> int:
        """Number of steps."""
        return self.length_d.size

    def at(self, tau_d: Floats) -> Floats:
        """Barycentric states (m, 6) at days from the epoch."""
        out = np.empty((tau_d.size, 6))
        dense_many(
            self.start_d, self.length_d, self.begin, self.power, self.n, self.forward, tau_d, out
        )
        return out


@dataclass(frozen=True, eq=False)
class Track:
    """A trajectory that can be asked for any time of its span.

    Attributes
    ----------
    epoch_d : float
        TDB days past J2000.0.
    state : (6,) array
        Barycentric ICRF at the epoch, au and au/d.
    back, ahead : Leg or None
    tab, physics, push
        What the kernels integrated with.
    """

    epoch_d: float
    state: Floats
    back: Leg | None
    ahead: Leg | None
    tab: Perturbers = field(repr=False)
    physics: Physics = field(repr=False)
    push: Push = field(repr=False)

    @property
    def span_d(self) -> tuple[float, float]:
        """First and last time covered, days from the epoch."""
        low = 0.0 if self.back is None else float(self.back.start_d[-1] + self.back.length_d[-1])
        high = (
            0.0 if self.ahead is None else float(self.ahead.start_d[-1] + self.ahead.length_d[-1])
        )
        return low, high

    def at_offset(self, tau_d: ArrayLike) -> Floats:
        """Barycentric states (m, 6) at days from the epoch.

        Raises
        ------
        PropagationError
            A time outside the span.
        """
        tau = np.atleast_1d(np.asarray(tau_d, dtype=float))
        low, high = self.span_d
        if tau.size and not (tau.min() >= low - SLACK_D and tau.max() <= high + SLACK_D):
            raise PropagationError(
                f"The trajectory is asked for {tau.min():.6f} to {tau.max():.6f} d from its epoch, "
                f"but covers {low:.6f} to {high:.6f} d; integrate it over a longer span."
            )
        out = np.empty((tau.size, 6))
        out[:] = self.state
        behind = tau < 0.0
        if self.back is not None:
            out[behind] = self.back.at(tau[behind])
        if self.ahead is not None:
            out[~behind] = self.ahead.at(tau[~behind])
        return out

    def at(self, tdb_d: ArrayLike) -> Floats:
        """Barycentric states (m, 6) at TDB days past J2000.0."""
        return self.at_offset(np.atleast_1d(np.asarray(tdb_d, dtype=float)) - self.epoch_d)


def _body_names(forces: ForceModel, start_d: float, end_d: float) -> tuple[str, ...]:
    return (
        load_ephemeris()
        .table(start_d, end_d, asteroids=forces.asteroids, exclude=forces.exclude)
        .names
    )


def _explain(
    status: int,
    met: Floats,
    epoch_d: float,
    steps: int,
    forces: ForceModel,
    span: tuple[float, float],
) -> PropagationError:
    when = tdb_d_to_iso(epoch_d + float(met[1]))
    if status == INSIDE_BODY:
        name = _body_names(forces, *span)[int(met[0])]
        return PropagationError(
            f"The orbit runs into the {name} at {when} TDB; check the state or elements, or "
            "shorten the span to end before it.",
            body=name,
            tau_d=float(met[1]),
        )
    if status in (STEP_UNDERFLOW, NOT_CONVERGED):
        return PropagationError(
            f"The integration stalls at {when} TDB: its step shrinks below 0.1 ms, as "
            "it does in the centre of a body; check the state or elements.",
            tau_d=float(met[1]),
        )
    if status == TOO_MANY_STEPS:
        limit = f"needed more than {MAX_STEPS} steps"
        if steps < MAX_STEPS:
            limit = (
                f"came {abs(float(met[1])):.4g} d far in {steps} steps and would need far more "
                f"than the {MAX_STEPS} allowed, or too many tries for each,"
            )
        return PropagationError(
            f"The integration {limit} and stopped at {when} TDB; shorten the span, or check "
            "whether the orbit circles a planet or grazes the Sun.",
            tau_d=float(met[1]),
        )
    return PropagationError(
        f"The integration failed at {when} TDB (status {status}).", status=status
    )


def _integrate_leg(
    tab: Perturbers,
    physics: Physics,
    push: Push,
    epoch_d: float,
    state: Floats,
    tau_d: float,
    forces: ForceModel,
    eps: float,
    cap_d: float,
    breaks: Floats,
    on: bool,
    span: tuple[float, float],
) -> Leg:
    n_max = FIRST_GUESS_STEPS
    while True:
        status, n, start, length, begin, power, active, met = integrate(
            tab, push, physics, epoch_d, state, tau_d, eps, cap_d, breaks, on, n_max
        )
        if status != TOO_MANY_STEPS or n_max >= MAX_STEPS:
            break
        hopeless = n_max * abs(tau_d) > HOPELESS * MAX_STEPS * abs(met[1])
        if n_max > FIRST_GUESS_STEPS and (hopeless or n < n_max):
            break
        n_max = min(MAX_STEPS, n_max * 8)
    if status != OK:
        raise _explain(int(status), met, epoch_d, int(n), forces, span)
    return Leg(
        start[:n].copy(),
        length[:n].copy(),
        begin[: n + 1].copy(),
        power[:n].copy(),
        active[:n].copy(),
        tau_d >= 0,
    )


def _beyond(sunward: Callable[[Floats], tuple[Floats, Floats]], edge: float, tau: Floats) -> Floats:
    """How far the heliocentric distance lies beyond an edge, au."""
    return sunward(tau)[0] - edge


def _switch_times(leg: Leg, epoch_d: float, window: tuple[float, float]) -> Floats:
    """Days from the epoch at which the heliocentric distance crosses an end of the window."""
    ephemeris = load_ephemeris()

    def sunward(tau: Floats) -> tuple[Floats, Floats]:
        position, velocity = ephemeris.posvel("sun", epoch_d + tau)
        state = leg.at(tau)
        r = np.linalg.norm(state[:, :3] - position, axis=1)
        rate = np.einsum("ni,ni->n", state[:, :3] - position, state[:, 3:] - velocity)
        return r, rate

    def root(
        low: Floats, high: Floats, rising: NDArray[np.bool_], of: Callable[[Floats], Floats]
    ) -> Floats:
        for _ in range(60):
            middle = 0.5 * (low + high)
            left = (of(middle) >= 0.0) != rising
            low, high = np.where(left, middle, low), np.where(left, high, middle)
        return 0.5 * (low + high)

    fractions = np.linspace(0.0, 1.0, 9)
    taus = np.unique((leg.start_d[:, None] + leg.length_d[:, None] * fractions).ravel())
    rate = sunward(taus)[1]
    # between its turning points the distance is monotonic, so that no double crossing is missed
    turns = np.flatnonzero((rate[:-1] >= 0.0) != (rate[1:] >= 0.0))
    if turns.size:
        found = root(taus[turns], taus[turns + 1], rate[turns + 1] >= 0.0, lambda t: sunward(t)[1])
        taus = np.unique(np.concatenate([taus, found]))
    r = sunward(taus)[0]
    crossings: list[float] = []
    for edge in window:
        if not np.isfinite(edge) or edge <= 0.0:
            continue
        beyond = r >= edge
        at = np.flatnonzero(beyond[:-1] != beyond[1:])
        if at.size:
            crossings += root(
                taus[at], taus[at + 1], beyond[at + 1], partial(_beyond, sunward, edge)
            ).tolist()
    return np.array(sorted(crossings))


def _starts_active(push: Push, epoch_d: float, state: Floats, direction: float) -> bool:
    """Whether the thrust is on just after (direction 1) or just before (-1) the epoch."""
    moment = 1e-6 * direction
    if push.window_kind == WINDOW_NONE:
        return True
    if push.window_kind == WINDOW_DATE:
        at = epoch_d + moment
    else:
        sun, velocity = load_ephemeris().posvel("sun", epoch_d)
        at = float(np.linalg.norm(state[:3] - sun + moment * (state[3:] - velocity)))
    return bool(push.window_from <= at <= push.window_to)


def integrate_track(
    epoch_d: float,
    state: ArrayLike,
    start_d: float,
    end_d: float,
    thrust: Thrust | None = None,
    forces: ForceModel | None = None,
    eps: float | None = None,
    cap_d: float = STEP_CAP_D,
) -> Track:
    """Integrate a state over a span.

    Parameters
    ----------
    epoch_d, start_d, end_d : float
        TDB days past J2000.0; the span is widened to hold the epoch.
    state : (6,) array
        Barycentric ICRF, au and au/d.
    thrust : Thrust, optional
    forces : ForceModel, optional
    eps : float, optional
        Step control, instead of that of ``forces``.
    cap_d : float
        Longest step, days; beyond 40 the terms of the Moon and Mercury are under-resolved.

    Raises
    ------
    PropagationError
        Collision, stalled steps, too long a span.
    EphemerisRangeError
        A time outside the ephemeris.
    """
    forces = forces or ForceModel()
    eps = forces.eps if eps is None else eps
    state = np.ascontiguousarray(state, dtype=float)
    if not np.all(np.isfinite([epoch_d, start_d, end_d])):
        raise PropagationError(
            f"Epoch and span must be finite days; got {epoch_d}, {start_d} to {end_d}."
        )
    if state.shape != (6,) or not np.all(np.isfinite(state)):
        raise PropagationError(
            f"A state has six finite numbers (au, au/d); got {state.tolist()}.", state=state
        )
    if not np.linalg.norm(state[3:]) < C_AU_D:
        raise PropagationError(
            f"The velocity {np.linalg.norm(state[3:]):.6g} au/d is not below that of light "
            f"({C_AU_D:.1f} au/d); velocities are in au per day.",
            state=state,
        )
    low = min(start_d, epoch_d)
    high = max(end_d, epoch_d)
    tab, physics = forces.perturbers(low, high)
    push = (thrust or NO_PUSH).push()
    legs: list[Leg | None] = []
    for tau in (low - epoch_d, high - epoch_d):
        if tau == 0.0:
            legs.append(None)
            continue
        breaks = np.zeros(0)
        if push.window_kind == WINDOW_DATE:
            ends = np.array([push.window_from, push.window_to]) - epoch_d
            breaks = ends[np.isfinite(ends) & (ends * tau > 0.0)]
        on = _starts_active(push, epoch_d, state, float(np.sign(tau)))
        args = (tab, physics, push, epoch_d, state, tau, forces, eps, cap_d)
        leg = _integrate_leg(*args, breaks, on, (low, high))
        if push.window_kind == WINDOW_DISTANCE:
            # the crossings move a little with the thrust they switch, so they are found again
            # until they rest
            for _ in range(WINDOW_PASSES):
                last = breaks
                breaks = _switch_times(leg, epoch_d, (push.window_from, push.window_to))
                if breaks.size == last.size and np.all(np.abs(breaks - last) < 1e-8):
                    break
                leg = _integrate_leg(*args, breaks, on, (low, high))
            else:
                raise PropagationError(
                    "The distances at which the thrust switches do not settle: the orbit grazes an "
                    f"end of the activity window {push.window_from:g} to {push.window_to:g} au; "
                    "move that end."
                )
        legs.append(leg)
    return Track(epoch_d, state, legs[0], legs[1], tab, physics, push)
