"""Lambert's problem: the orbit through two positions in a given time; imports constants only.

D. Izzo 2015, "Revisiting Lambert's problem", Celestial Mechanics and Dynamical Astronomy 121, 1, in
his variables (x, lambda, T). Deviations: less than one revolution only; a bracketed secant in
(log(1 + x), log T) instead of Householder's iteration, because it needs no derivatives, which are
singular at the parabola; differences of nearly equal numbers are rewritten, so that arcs of minutes
keep their digits.
"""

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ngbound.constants import C_AU_D, GM_SUN_AU3_D2
from ngbound.motion._kernels.kepler import lambert_many
from ngbound.motion._kernels.kepler import two_point_scan as _scan

FloatArray = NDArray[np.float64]


def lambert(
    r1_au: ArrayLike,
    r2_au: ArrayLike,
    tof_d: ArrayLike,
    gm: float = GM_SUN_AU3_D2,
    *,
    long_way: ArrayLike = False,
) -> tuple[FloatArray, FloatArray]:
    """Velocities at both ends of the conic from r1 to r2 in the time tof.

    Parameters
    ----------
    r1_au, r2_au : (..., 3) array
        Positions relative to the centre.
    tof_d : (...) array
        Time of flight, above zero.
    long_way : (...) bool array
        Turn by more than 180 degrees.

    Returns
    -------
    v1, v2 : (..., 3) arrays, au/d; nan where no such orbit exists (tof not above zero, or the
    positions in line with the centre, so that the plane is open).
    """
    r1 = np.asarray(r1_au, dtype=float)
    r2 = np.asarray(r2_au, dtype=float)
    tof = np.asarray(tof_d, dtype=float)
    way = np.asarray(long_way, dtype=bool)
    shape = np.broadcast_shapes(r1.shape[:-1], r2.shape[:-1], tof.shape, way.shape)
    first = np.array(np.broadcast_to(r1, (*shape, 3)).reshape(-1, 3), order="C")
    second = np.array(np.broadcast_to(r2, (*shape, 3)).reshape(-1, 3), order="C")
    v1 = np.full_like(first, np.nan)
    v2 = np.full_like(first, np.nan)
    good = np.zeros(len(first), dtype=bool)
    lambert_many(
        first,
        second,
        np.array(np.broadcast_to(tof, shape).ravel()),
        float(gm),
        np.array(np.broadcast_to(way, shape).ravel()),
        v1,
        v2,
        good,
    )
    v1[~good] = np.nan
    v2[~good] = np.nan
    return v1.reshape(*shape, 3), v2.reshape(*shape, 3)


def two_point_scan(
    rho1_au: ArrayLike,
    rho2_au: ArrayLike,
    ends_tdb_d: tuple[float, float],
    ends_direction: ArrayLike,
    ends_observer_au: ArrayLike,
    tdb_d: ArrayLike,
    direction: ArrayLike,
    observer_au: ArrayLike,
    *,
    long_way: bool = False,
    gm: float = GM_SUN_AU3_D2,
    light_speed: float = C_AU_D,
    width_rad: float = 5e-5,
    excess_weight: float = 3.0,
) -> tuple[FloatArray, FloatArray]:
    """Misfit of the orbit through two sightlines, for many pairs of assumed distances.

    The two-point variation of P. Herget 1965, AJ 70, 1, over a grid instead of an iteration.

    Parameters
    ----------
    rho1_au, rho2_au : (m,) array
        Assumed distances along the two sightlines.
    ends_tdb_d, ends_direction (2, 3), ends_observer_au (2, 3)
        The two sightlines.
    tdb_d (n,), direction (n, 3), observer_au (n, 3)
        The sightlines to be met.
    width_rad : float
        A miss counts log(1 + (miss / width)^2).
    excess_weight : float
        Adds (excess_weight (v^2 / v_escape^2 - 1))^2 above the escape speed.

    Returns
    -------
    cost (m,), inf where no orbit exists; state (m, 6) at the emission time ends_tdb_d[0] - rho1/c.
    """
    first = np.array(rho1_au, dtype=float)
    second = np.array(rho2_au, dtype=float)
    ends = np.array(ends_direction, dtype=float)
    stands = np.array(ends_observer_au, dtype=float)
    cost = np.full(len(first), np.inf)
    states = np.full((len(first), 6), np.nan)
    _scan(
        first,
        second,
        bool(long_way),
        float(ends_tdb_d[0]),
        float(ends_tdb_d[1]),
        ends[0],
        ends[1],
        stands[0],
        stands[1],
        np.array(tdb_d, dtype=float),
        np.array(observer_au, dtype=float),
        np.array(direction, dtype=float),
        float(gm),
        float(light_speed),
        float(width_rad),
        float(excess_weight),
        cost,
        states,
    )
    return cost, states
