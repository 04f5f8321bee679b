"""The likelihood's engine: chi2 of many orbits near one reference, each to a stated tolerance.

Imports numpy, constants, errors, the kernels, and the other modules of this room. The neighbours
run on the shared grid of the reference; those for which the grid's orders are not enough are
integrated one by one.
"""

import os
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from typing import Literal, overload

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ngbound.arc import Factors
from ngbound.constants import ARCSEC_RAD, C_AU_D, DAY_S
from ngbound.errors import PropagationError
from ngbound.motion._kernels.grid import weights_at
from ngbound.motion._kernels.neighbours import LANES, batch
from ngbound.motion._kernels.radau import N_NODES
from ngbound.motion.gravity import ForceModel
from ngbound.motion.observables import Records, Sight, residuals, see
from ngbound.motion.partials import GridLeg, Partials, partials_along
from ngbound.motion.propagate import Track, integrate_track
from ngbound.motion.thrust import Thrust

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

NEIGHBOUR_NAMES = ("x", "y", "z", "vx", "vy", "vz", "A1", "A2", "A3")
GRID_EPS = 1e-3
GRID_CAP_D = 100.0
TOLERANCE_AU = 3e-11
TOLERANCE_SIGMA = 3e-4
"""A neighbour is trusted while the estimate of what the batch leaves out stays below the larger of
the two: au, and a part of the smallest error of a record at the object's distance; with echoes
among the records, below that part of the smallest error of an echo."""
SETTLED_AU = 1e-12
STEADY_D = 1.0
"""An error of position is taken to come about in no less time."""


def _leg_arrays(
    leg: GridLeg | None, tau_d: Floats
) -> tuple[Floats, Floats, Floats, Ints, Floats, Floats]:
    n = tau_d.size
    if leg is None:
        return (
            np.zeros(0),
            np.zeros((0, N_NODES, 1)),
            np.zeros((0, N_NODES, 6, 1)),
            np.zeros(n, dtype=np.int64),
            np.zeros((n, 2, N_NODES)),
            np.zeros(n),
        )
    sign = 1.0 if leg.forward else -1.0
    step_of = np.searchsorted(sign * leg.tau_d, sign * tau_d, side="right") - 1
    step_of = np.clip(step_of, 0, leg.h_d.size - 1).astype(np.int64)
    h = leg.h_d[step_of]
    fraction_h = tau_d - leg.tau_d[step_of]
    weight = np.empty((n, 2, N_NODES))
    for i in range(n):
        weights_at(fraction_h[i] / h[i], h[i], weight[i].reshape(-1))
    return leg.h_d, leg.nodes, leg.node_columns(), step_of, weight, fraction_h


@dataclass(frozen=True, eq=False)
class Neighbourhood:
    """A reference orbit, the records, their noise, and all tables a batch of neighbours needs.

    Build it with `Neighbourhood.around`. A parameter vector is the state at the epoch (au, au/d)
    followed by the amounts of the free thrust components (au/d2).
    """

    epoch_d: float
    theta: Floats
    thrust: Thrust | None
    components: str
    forces: ForceModel
    records: Records
    whitening: Factors
    modes: Floats = field(repr=False)
    sight: Sight = field(repr=False)
    partials: Partials = field(repr=False)
    tables: tuple = field(repr=False)
    tolerance_au: float = TOLERANCE_AU
    threads: int = 1

    @classmethod
    def around(
        cls,
        track: Track,
        records: Records,
        whitening: Factors,
        thrust: Thrust | None,
        components: str,
        forces: ForceModel,
        threads: int | None = None,
        modes: Floats | None = None,
    ) -> "Neighbourhood":
        """Tabulate the surroundings of a track that covers the records.

        ``modes`` (k, 2n): errors shared across station-nights, whose squared products with the
        whitened residuals are taken off chi2; columns RA, Dec by turns in the order of the records.
        """
        shared = (
            np.zeros((0, 2 * len(records))) if modes is None else np.asarray(modes, dtype=float)
        )
        span = (float(records.tdb_d.min()), float(records.tdb_d.max()))
        low = min(_lower(track), span[0])
        high = max(_upper(track), records.end_d)
        by_distance = (
            thrust is not None and thrust.window is not None and thrust.window.by == "distance"
        )
        # the steps of a distance window end where this very track meets its ends
        coarse = (
            None
            if by_distance
            else integrate_track(
                track.epoch_d, track.state, low, high, thrust, forces, GRID_EPS, GRID_CAP_D
            )
        )
        partials = partials_along(track, NEIGHBOUR_NAMES, coarse)
        sight = see(track, records)
        behind = np.flatnonzero(sight.tau_d < 0.0)
        ahead = np.flatnonzero(sight.tau_d >= 0.0)
        back_order = behind[np.argsort(-sight.tau_d[behind], kind="stable")]
        ahead_order = ahead[np.argsort(sight.tau_d[ahead], kind="stable")]
        order = np.concatenate([back_order, ahead_order])
        place = np.empty_like(order)
        place[order] = np.arange(order.size)
        tau = sight.tau_d[order]
        n_back = back_order.size
        back = _leg_arrays(partials.back, tau)
        front = _leg_arrays(partials.ahead, tau)
        columns = np.stack([2 * whitening.order, 2 * whitening.order + 1], axis=1).ravel()
        white = (
            place[whitening.order],
            whitening.start,
            whitening.flat,
            whitening.flat_start,
            np.ascontiguousarray(shared[:, columns]),
        )
        amounts = np.zeros(3) if thrust is None else thrust.amounts_au_d2
        tables = (
            float(track.tab.gm[0]),
            C_AU_D,
            amounts.copy(),
            back,
            front,
            np.ascontiguousarray(sight.rho_au[order]),
            np.ascontiguousarray(sight.speed_au_d[order]),
            np.ascontiguousarray(records.basis[order]),
            _echo_tables(records, sight, place),
            white,
            int(n_back),
            order,
        )
        free = ["RTN".index(c) for c in components]
        theta = np.concatenate([track.state, amounts[free]])
        return cls(
            track.epoch_d,
            theta,
            thrust,
            components,
            forces,
            records,
            whitening,
            shared,
            sight,
            partials,
            tables,
            _tolerance_au(whitening, sight, records),
            threads or os.cpu_count() or 1,
        )

    def moved_to(self, theta: Floats) -> "Neighbourhood":
        """The same records and noise about another parameter vector (p,).

        Raises
        ------
        PropagationError
            If that orbit cannot be integrated.
        """
        track = integrate_track(
            self.epoch_d,
            theta[:6],
            float(self.records.tdb_d.min()) - _light_margin(self.sight) - 0.5,
            self.records.end_d,
            self._push(theta),
            self.forces,
        )
        return Neighbourhood.around(
            track, self.records, self.whitening, self._push(theta), self.components, self.forces,
            self.threads, self.modes,
        )  # fmt: skip

    def _push(self, theta: Floats) -> Thrust | None:
        """The thrust of a parameter vector."""
        if self.thrust is None:
            return None
        amounts = self.thrust.amounts_au_d2.copy()
        for i, c in enumerate(self.components):
            amounts["RTN".index(c)] = theta[6 + i]
        return self.thrust.with_amounts(amounts)

    def _lanes(self, thetas: Floats) -> Floats:
        """Offsets from the reference, all nine parameters, padded to whole blocks of lanes."""
        m = thetas.shape[0]
        full = np.zeros((-(-m // LANES) * LANES, 9))
        full[:m, :6] = thetas[:, :6] - self.theta[:6]
        for i, c in enumerate(self.components):
            full[:m, 6 + "RTN".index(c)] = thetas[:, 6 + i] - self.theta[6 + i]
        return full

    @overload
    def chi2(self, thetas: ArrayLike, want_residuals: Literal[False] = False) -> Floats: ...

    @overload
    def chi2(self, thetas: ArrayLike, want_residuals: Literal[True]) -> tuple[Floats, Floats]: ...

    def chi2(
        self, thetas: ArrayLike, want_residuals: bool = False
    ) -> Floats | tuple[Floats, Floats]:
        """chi2 of parameter vectors (m, p); with ``want_residuals`` also O-C (m, n, 2) in radians.

        A vector whose orbit cannot be integrated, or is seen on the other side of the sky, has chi2
        = inf.
        """
        thetas = np.atleast_2d(np.asarray(thetas, dtype=float))
        chi2, seen, astray = self._together(thetas, want_residuals)
        for i in np.flatnonzero(astray):
            chi2[i], one = self.chi2_alone(thetas[i])
            if want_residuals:
                seen[i] = one
        return (chi2, seen) if want_residuals else chi2

    def strays(self, thetas: ArrayLike) -> NDArray[np.bool_]:
        """Which parameter vectors (m, p) leave the neighbourhood and are integrated one by one."""
        return self._together(np.atleast_2d(np.asarray(thetas, dtype=float)), False)[2]

    def _together(
        self, thetas: Floats, want_residuals: bool
    ) -> tuple[Floats, Floats, NDArray[np.bool_]]:
        """chi2, O-C and strays of the batch; a vector that is not finite has chi2 = inf."""
        m, n = thetas.shape[0], len(self.records)
        full = self._lanes(thetas)
        bad = ~np.all(np.isfinite(full[:m]), axis=1)
        full[:m][bad] = 0.0
        chi2 = np.empty(full.shape[0])
        doubt = np.empty((full.shape[0], 2))
        keep = np.empty((full.shape[0] if want_residuals else 1, n if want_residuals else 1, 2))
        gm, c, amounts, back, front, rho, speed, basis, echoes, white, n_back, order = self.tables
        blocks = full.shape[0] // LANES
        parts = min(self.threads, blocks)
        edges = np.linspace(0, blocks, parts + 1).astype(int) * LANES

        def work(part: int) -> None:
            low, high = edges[part], edges[part + 1]
            batch(
                gm,
                c,
                amounts,
                back,
                front,
                rho,
                speed,
                basis,
                echoes,
                white,
                n_back,
                full[low:high],
                want_residuals,
                chi2[low:high],
                doubt[low:high],
                keep[low:high] if want_residuals else keep,
            )

        _run(work, parts)
        chi2 = chi2[:m]
        trusted = (
            (doubt[:m, 0] <= self.tolerance_au)
            & (doubt[:m, 1] <= min(SETTLED_AU, self.tolerance_au))
            & np.isfinite(chi2)
        )
        if self.thrust is not None and self.thrust.window is not None:
            # a neighbour may meet a switch by distance that the reference does not
            trusted &= self.thrust.window.by == "date"
        seen = np.empty((m if want_residuals else 0, n, 2))
        if want_residuals:
            seen[:, order, :] = keep[:m]
        chi2[bad] = np.inf
        return chi2, seen, ~trusted & ~bad

    def chi2_alone(self, theta: ArrayLike) -> tuple[float, Floats]:
        """chi2 and O-C (n, 2) of one parameter vector by the adaptive integrator: the slow twin."""
        theta = np.asarray(theta, dtype=float)
        low = float(self.records.tdb_d.min()) - 0.2
        high = self.records.end_d
        try:
            span = _light_margin(self.sight)
            track = integrate_track(
                self.epoch_d, theta[:6], low - span, high, self._push(theta), self.forces
            )
            seen = residuals(see(track, self.records), self.records)
        except PropagationError:
            return np.inf, np.full((len(self.records), 2), np.nan)
        white = self.whiten(seen)
        return float(np.sum(white**2) - np.sum((self.modes @ white) ** 2)), seen

    def whiten(self, seen: Floats) -> Floats:
        """Block-whitened residuals (2 n,) of residuals (n, 2), in the order of the records."""
        w = self.whitening
        out = np.empty(2 * len(self.records))
        for b in range(w.start.size - 1):
            rows = w.order[w.start[b] : w.start[b + 1]]
            m = 2 * rows.size
            factor = w.flat[w.flat_start[b] : w.flat_start[b] + m * m].reshape(m, m)
            white = np.tril(factor) @ seen[rows].ravel()
            out[2 * rows] = white[0::2]
            out[2 * rows + 1] = white[1::2]
        return out


def _run(work: Callable[[int], None], parts: int) -> None:
    if parts <= 1:
        for part in range(parts):
            work(part)
        return
    with ThreadPoolExecutor(parts) as pool:
        for done in [pool.submit(work, part) for part in range(parts)]:
            done.result()


def _echo_tables(records: Records, sight: Sight, place: Ints) -> tuple:
    """What the kernel of the echoes needs; ``place`` (n,) of each record in the sorted list."""
    echoes, path = records.echoes, sight.path
    if echoes is None or path is None:
        return (
            np.zeros(0, dtype=np.int64),
            np.zeros((0, 7, 3)),
            np.zeros(0),
            np.zeros((0, 2)),
            np.zeros(0),
            np.zeros(0),
        )
    legs = [
        path.down,
        path.up,
        path.receiver_speed,
        path.transmitter_speed,
        path.transmitter_push,
        path.push,
        path.sun_slope,
    ]
    per_unit = echoes.per_unit
    return (
        place[echoes.rows].astype(np.int64),
        np.ascontiguousarray(np.stack(legs, axis=1)),
        path.plain_rate,
        echoes.pairs(path),
        per_unit[:, 0] * DAY_S,
        per_unit[:, 1] * echoes.frequency_mhz * 1e6,
    )


def _tolerance_au(whitening: Factors, sight: Sight, records: Records) -> float:
    """What the batch may leave out of a position, au."""
    error = _errors_au(whitening, sight)
    if records.echoes is None or sight.path is None:
        return max(TOLERANCE_AU, TOLERANCE_SIGMA * float(np.min(error)))
    seen = np.ones(error.size, dtype=bool)
    seen[records.echoes.rows] = False
    angles = max(TOLERANCE_AU, TOLERANCE_SIGMA * float(np.min(error[seen], initial=np.inf)))
    # as if stated: an echo shares no error with another record
    of_pair = records.echoes.per_unit / ARCSEC_RAD
    of_pair[:, 1] *= records.echoes.frequency_mhz * 1e6
    with np.errstate(divide="ignore"):
        delay = 0.5 * C_AU_D / (of_pair[:, 0] * DAY_S)
        speed = 0.5 * C_AU_D / of_pair[:, 1]
    past = np.linalg.norm(sight.path.speed - sight.path.receiver_speed, axis=1)
    time = np.minimum(STEADY_D, np.linalg.norm(sight.path.down, axis=1) / past)
    return min(angles, TOLERANCE_SIGMA * float(np.min([delay, speed * time])))


def _errors_au(whitening: Factors, sight: Sight) -> Floats:
    """The error (n,) of each record, what the others say of it allowed for, at the distance."""
    distance = np.linalg.norm(sight.rho_au, axis=1)
    error = np.empty(distance.size)
    for b in range(whitening.start.size - 1):
        rows = whitening.order[whitening.start[b] : whitening.start[b + 1]]
        side = 2 * rows.size
        at = whitening.flat_start[b]
        weight = whitening.flat[at : at + side * side : side + 1].reshape(-1, 2).max(axis=1)
        error[rows] = distance[rows] / weight
    return error


def _lower(track: Track) -> float:
    if track.back is None:
        return track.epoch_d
    return track.epoch_d + float(track.back.start_d[-1] + track.back.length_d[-1])


def _upper(track: Track) -> float:
    if track.ahead is None:
        return track.epoch_d
    return track.epoch_d + float(track.ahead.start_d[-1] + track.ahead.length_d[-1])


def _light_margin(sight: Sight) -> float:
    return 2.0 * float(np.max(np.linalg.norm(sight.rho_au, axis=1))) / C_AU_D
