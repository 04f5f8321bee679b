"""Two-body motion: any eccentricity, with the state transition; imports constants and errors only.

Universal variables throughout (see _kernels/kepler.py), so ellipse, parabola and hyperbola share
one formula and nothing is lost near e = 1. The frame is whatever the caller's states are in; with
the default gm it is heliocentric, au and days.
"""

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ngbound.constants import C_AU_D, GM_SUN_AU3_D2
from ngbound.errors import PropagationError
from ngbound.motion._kernels.kepler import (
    map_conic,
    map_kepler,
    propagate_many,
    sightlines,
    transition_many,
)

FloatArray = NDArray[np.float64]


def _rows(
    state: ArrayLike, dt_d: ArrayLike, gm: ArrayLike
) -> tuple[FloatArray, FloatArray, FloatArray, tuple[int, ...]]:
    states = np.asarray(state, dtype=float)
    if states.shape[-1:] != (6,):
        raise ValueError(f"A two-body state has 6 numbers on its last axis, not {states.shape}.")
    dts = np.asarray(dt_d, dtype=float)
    mus = np.asarray(gm, dtype=float)
    shape = np.broadcast_shapes(states.shape[:-1], dts.shape, mus.shape)
    # copies, so that the kernels meet one array type and are compiled once
    return (
        np.array(np.broadcast_to(states, (*shape, 6)).reshape(-1, 6), order="C"),
        np.array(np.broadcast_to(dts, shape).ravel()),
        np.array(np.broadcast_to(mus, shape).ravel()),
        shape,
    )


def _check(rows: FloatArray, dts: FloatArray, out: FloatArray) -> None:
    bad = ~np.isfinite(out).all(axis=1)
    if bad.any():
        i = int(np.flatnonzero(bad)[0])
        raise PropagationError(
            f"Two-body motion over {dts[i]:g} d from position {rows[i, :3]} and velocity "
            f"{rows[i, 3:]} does not exist: every number must be finite, the distance above zero "
            f"and the path must not pass through the centre. Mend the starting state.",
            state=rows[i],
            dt_d=float(dts[i]),
        )


def propagate_two_body(
    state: ArrayLike, dt_d: ArrayLike, gm: ArrayLike = GM_SUN_AU3_D2
) -> FloatArray:
    """State after a time interval of two-body motion.

    Parameters
    ----------
    state : (..., 6) array
        Position (au) and velocity (au/d) relative to the attracting centre, any axes.
    dt_d : (...) array
        Interval in days; negative runs backwards.
    gm : (...) array
        Gravitational parameter, au3/d2 (or any consistent units).

    Returns
    -------
    (..., 6) array over the broadcast of the three inputs.

    Raises
    ------
    PropagationError
        A number is not finite or the distance is zero.
    """
    rows, dts, mus, shape = _rows(state, dt_d, gm)
    out = np.empty_like(rows)
    propagate_many(rows, dts, mus, out)
    _check(rows, dts, out)
    return out.reshape(*shape, 6)


def two_body_transition(
    state: ArrayLike, dt_d: ArrayLike, gm: ArrayLike = GM_SUN_AU3_D2
) -> tuple[FloatArray, FloatArray]:
    """State after an interval and its partials by the starting state.

    Parameters as for `propagate_two_body`.

    Returns
    -------
    (..., 6) state and (..., 6, 6) matrix d(end)/d(start).
    R. H. Battin 1999, An Introduction to the Mathematics and Methods of Astrodynamics, sect. 9.7.
    """
    rows, dts, mus, shape = _rows(state, dt_d, gm)
    out = np.empty_like(rows)
    phi = np.empty((len(rows), 6, 6))
    transition_many(rows, dts, mus, out, phi)
    _check(rows, dts, out)
    return out.reshape(*shape, 6), phi.reshape(*shape, 6, 6)


def solve_kepler(mean_anomaly_rad: ArrayLike, e: ArrayLike) -> FloatArray:
    """Eccentric (e < 1) or hyperbolic (e > 1) anomaly from the mean anomaly.

    Elliptic: E - e sin E = M; hyperbolic: e sinh H - H = M. Bracketed Newton; the small difference
    1 - e is kept apart, so that e = 1 +- 1e-12 loses nothing.

    Raises
    ------
    ValueError
        e is negative or exactly 1 (a parabola has no mean anomaly: use `conic_anomaly`).
    """
    m, ecc = np.broadcast_arrays(
        np.asarray(mean_anomaly_rad, dtype=float), np.asarray(e, dtype=float)
    )
    if not (np.isfinite(ecc).all() and (ecc >= 0).all() and (ecc != 1).all()):
        raise ValueError(
            "The eccentricity of Kepler's equation must be at least 0 and other than 1; "
            "for a parabola use conic_anomaly."
        )
    out = np.empty(m.size)
    map_kepler(np.ascontiguousarray(m.ravel()), np.ascontiguousarray(ecc.ravel()), out)
    return out.reshape(m.shape)


def conic_anomaly(
    q_au: ArrayLike, e: ArrayLike, dt_d: ArrayLike, gm: float = GM_SUN_AU3_D2
) -> tuple[FloatArray, FloatArray]:
    """True anomaly (rad, -pi..pi) and distance (au) at dt_d days from perihelion, any e >= 0."""
    q, ecc, dt = np.broadcast_arrays(
        np.asarray(q_au, dtype=float), np.asarray(e, dtype=float), np.asarray(dt_d, dtype=float)
    )
    if not ((q > 0).all() and (ecc >= 0).all()):
        raise ValueError("A conic needs q > 0 and e >= 0.")
    nu = np.empty(q.size)
    r = np.empty(q.size)
    map_conic(
        np.ascontiguousarray(q.ravel()),
        np.ascontiguousarray(ecc.ravel()),
        np.ascontiguousarray(dt.ravel()),
        float(gm),
        nu,
        r,
    )
    return nu.reshape(q.shape), r.reshape(q.shape)


def two_body_sightlines(
    epoch_tdb_d: float,
    state: ArrayLike,
    tdb_d: ArrayLike,
    observer_au: ArrayLike,
    gm: float = GM_SUN_AU3_D2,
    *,
    light_speed: float = C_AU_D,
    partials: bool = False,
) -> tuple[FloatArray, FloatArray]:
    """Astrometric unit vectors (light time solved) to a body in two-body motion.

    Parameters
    ----------
    epoch_tdb_d : float
        Epoch of the state.
    state : (6,) array
        Position (au), velocity (au/d) relative to the centre.
    tdb_d : (n,) array
        Times of observation.
    observer_au : (n, 3) array
        Observer relative to the same centre.
    light_speed : float
        au/d; infinite for an instantaneous direction.
    partials : bool
        Also the partials by the state.

    Returns
    -------
    (n, 3) unit vectors, (n, 3, 6) partials (empty first axis when not asked for).
    """
    start = np.array(state, dtype=float)
    times = np.array(tdb_d, dtype=float, ndmin=1)
    observers = np.array(observer_au, dtype=float).reshape(-1, 3)
    direction = np.empty((len(times), 3))
    derivative = np.empty((len(times) if partials else 0, 3, 6))
    sightlines(start, epoch_tdb_d, times, observers, gm, light_speed, direction, derivative)
    return direction, derivative
