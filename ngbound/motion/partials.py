"""Variational equations: how the trajectory changes with the state and the thrust.

Imports numpy, the kernels, and propagate of this room. Every partial of the force model is
analytic, relativity, quadrupoles and thrust included; the columns are solved by collocation on a
grid of steps along the trajectory.
"""

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ngbound.errors import CaseError
from ngbound.motion._kernels.grid import ROW, WIDE, columns_at, node_columns, tabulate, variations
from ngbound.motion._kernels.layout import PARAMETERS
from ngbound.motion._kernels.radau import N_NODES
from ngbound.motion.propagate import Leg, Track

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class GridLeg:
    """The shared grid of one direction of time: steps, node tables and the columns of the partials.

    ``tau_d``, ``h_d`` (m,): steps, days from the epoch; ``nodes`` (m, 8, ROW): tables of the
    kernels; ``begin`` (m + 1, 2 WIDE) and ``accel`` (m, 8, WIDE): the ``p`` columns and their
    second derivatives as the kernels keep them.
    """

    tau_d: Floats = field(repr=False)
    h_d: Floats = field(repr=False)
    nodes: Floats = field(repr=False)
    begin: Floats = field(repr=False)
    accel: Floats = field(repr=False)
    p: int
    forward: bool

    def at(self, tau_d: Floats) -> Floats:
        """Columns (k, 6, p) at days from the epoch."""
        out = np.empty((tau_d.size, 6, self.p))
        columns_at(self.tau_d, self.h_d, self.begin, self.accel, self.forward, tau_d, out)
        return out

    def node_columns(self) -> Floats:
        """Columns at the nodes, (m, 8, 6, p)."""
        out = np.empty((self.h_d.size, N_NODES, 6, self.p))
        node_columns(self.h_d, self.begin, self.accel, out)
        return out


def parameter_numbers(names: Sequence[str]) -> NDArray[np.int64]:
    """Kernel numbers of parameter names (`PARAMETERS`)."""
    unknown = [name for name in names if name not in PARAMETERS]
    if unknown:
        raise CaseError(
            f"The parameters {', '.join(unknown)} are unknown; known are {', '.join(PARAMETERS)}."
        )
    return np.array([PARAMETERS.index(name) for name in names], dtype=np.int64)


def grid_leg(
    track: Track, leg: Leg, columns: NDArray[np.int64], steps: Leg | None = None
) -> GridLeg:
    """The grid of one leg; its steps are those of the leg itself or of a coarser one over the same
    span.
    """
    steps = steps or leg
    nodes = np.empty((steps.n, N_NODES, ROW))
    tabulate(
        track.tab,
        track.push,
        track.physics,
        track.epoch_d,
        leg.start_d,
        leg.length_d,
        leg.begin,
        leg.power,
        leg.n,
        leg.forward,
        steps.start_d,
        steps.length_d,
        steps.active,
        nodes,
    )
    begin = np.empty((steps.n + 1, 2 * WIDE))
    accel = np.empty((steps.n, N_NODES, WIDE))
    variations(track.tab.gm[0], track.push.a, columns, steps.length_d, nodes, begin, accel)
    return GridLeg(steps.start_d, steps.length_d, nodes, begin, accel, columns.size, leg.forward)


@dataclass(frozen=True, eq=False)
class Partials:
    """Partials of the barycentric state of a track with respect to the named parameters.

    Names are of `PARAMETERS`: the state at the epoch (au, au/d), A1, A2, A3 (au/d2), the lag (d),
    the exponent m of an analytic law at fixed g(1 au), and srp, radiation pressure at 1 au (au/d2).
    """

    track: Track
    names: tuple[str, ...]
    back: GridLeg | None
    ahead: GridLeg | None

    def at_offset(self, tau_d: ArrayLike) -> Floats:
        """Partials (m, 6, p) at days from the epoch."""
        tau = np.atleast_1d(np.asarray(tau_d, dtype=float))
        behind = tau < 0.0
        if self.ahead is not None and not behind.any():
            return self.ahead.at(tau)
        out = np.zeros((tau.size, 6, len(self.names)))
        for c, name in enumerate(self.names):
            if PARAMETERS.index(name) < 6:
                out[:, PARAMETERS.index(name), c] = 1.0
        if self.back is not None:
            out[behind] = self.back.at(tau[behind])
        if self.ahead is not None:
            out[~behind] = self.ahead.at(tau[~behind])
        return out


def partials_along(track: Track, names: Sequence[str], coarse: Track | None = None) -> Partials:
    """Solve the variational equations along a track.

    Parameters
    ----------
    track : Track
    names : sequence of str
        Parameters, of `PARAMETERS`.
    coarse : Track, optional
        A track over the same span with fewer steps, whose steps the grid takes.
    """
    columns = parameter_numbers(names)
    legs: list[GridLeg | None] = []
    for which in ("back", "ahead"):
        leg = getattr(track, which)
        steps = getattr(coarse, which) if coarse is not None else None
        legs.append(None if leg is None else grid_leg(track, leg, columns, steps))
    return Partials(track, tuple(names), legs[0], legs[1])
