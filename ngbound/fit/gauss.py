"""Gauss's method: an orbit through three sightlines; imports constants, errors and motion.

C. F. Gauss 1809, Theoria motus corporum coelestium; in the form with the eighth-degree polynomial
and the iteration by exact f and g of R. R. Bate, D. D. Mueller & J. E. White 1971, Fundamentals of
Astrodynamics, sect. 5.8, and H. D. Curtis 2014, Orbital Mechanics for Engineering Students, 3rd
ed., sect. 5.10. Deviations: all positive roots are followed; the light time is taken off the dates
within the iteration.
"""

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ngbound.constants import C_AU_D, GM_SUN_AU3_D2
from ngbound.errors import PropagationError
from ngbound.motion import propagate_two_body

FloatArray = NDArray[np.float64]


def gauss_orbits(
    tdb_d: ArrayLike,
    direction: ArrayLike,
    observer_au: ArrayLike,
    gm: float = GM_SUN_AU3_D2,
    *,
    light_speed: float = C_AU_D,
    iterations: int = 60,
) -> list[tuple[FloatArray, FloatArray]]:
    """Gauss's method: orbits through three sightlines.

    Parameters
    ----------
    tdb_d : (3,) array
        Times, rising.
    direction : (3, 3) array
        Unit vectors, one a row.
    observer_au : (3, 3) array
        Observer relative to the attracting centre.
    gm : float
        GM of the centre; any consistent units (then light_speed in the same, or infinite).
    iterations : int
        Limit of the iteration with exact f and g.

    Returns
    -------
    One (unrefined, iterated) pair of states (6,) at the middle time (of emission) for every
    positive root of the eighth-degree polynomial with a positive middle distance; iterated equals
    unrefined where the iteration does not converge. Empty when the three sightlines lie in a plane.
    """
    t = np.asarray(tdb_d, dtype=float)
    u = np.asarray(direction, dtype=float)
    stand = np.asarray(observer_au, dtype=float)
    tau1, tau3 = t[0] - t[1], t[2] - t[1]
    tau = tau3 - tau1
    cross = np.array([np.cross(u[1], u[2]), np.cross(u[0], u[2]), np.cross(u[0], u[1])])
    d0 = float(u[0] @ cross[0])
    if not (tau1 < 0 < tau3) or abs(d0) < 1e-16:
        return []
    d = stand @ cross.T  # d[i, j] = R_i . p_j
    a = (-d[0, 1] * tau3 / tau + d[1, 1] + d[2, 1] * tau1 / tau) / d0
    b = (
        (d[0, 1] * (tau3**2 - tau**2) * tau3 / tau + d[2, 1] * (tau**2 - tau1**2) * tau1 / tau)
        / 6.0
        / d0
    )
    along = float(stand[1] @ u[1])
    unit = float(np.linalg.norm(stand[1])) or 1.0
    # in units of the observer's distance, for the sake of the companion matrix
    polynomial = np.zeros(9)
    polynomial[0] = 1.0
    polynomial[2] = -(a**2 + 2 * a * along + unit**2) / unit**2
    polynomial[5] = -2 * gm * b * (a + along) / unit**5
    polynomial[8] = -(gm**2) * b**2 / unit**8
    roots = np.roots(polynomial) if np.isfinite(polynomial).all() else np.empty(0)
    orbits = []
    for root in roots:
        r2 = float(root.real) * unit
        if abs(root.imag) > 1e-6 * abs(root) or r2 <= 0 or a + gm * b / r2**3 <= 0:
            continue
        k = gm / r2**3
        f1, f3 = 1 - 0.5 * k * tau1**2, 1 - 0.5 * k * tau3**2
        g1, g3 = tau1 - k * tau1**3 / 6, tau3 - k * tau3**3 / 6
        # the weights of the outer positions that led to the polynomial
        c1 = tau3 / tau * (1 + k * (tau**2 - tau3**2) / 6)
        c3 = -tau1 / tau * (1 + k * (tau**2 - tau1**2) / 6)
        first = _gauss_state(u, stand, d, d0, c1, c3, f1, f3, f1 * g3 - f3 * g1)
        if first is None:
            continue
        orbits.append(
            (first[0], _gauss_iterate(t, u, stand, d, d0, first, gm, light_speed, iterations))
        )
    return orbits


def _gauss_state(
    u: FloatArray, stand: FloatArray, d: FloatArray, d0: float,
    c1: float, c3: float, f1: float, f3: float, det: float,
) -> tuple[FloatArray, FloatArray] | None:  # fmt: skip
    """Middle state (6,) and the three distances: r2 = c1 r1 + c3 r3, det = f1 g3 - f3 g1."""
    if det == 0 or c1 == 0 or c3 == 0:
        return None
    rho = np.array(
        [
            (-d[0, 0] + d[1, 0] / c1 - c3 / c1 * d[2, 0]) / d0,
            (-c1 * d[0, 1] + d[1, 1] - c3 * d[2, 1]) / d0,
            (-c1 / c3 * d[0, 2] + d[1, 2] / c3 - d[2, 2]) / d0,
        ]
    )
    r = stand + rho[:, None] * u
    v2 = (-f3 * r[0] + f1 * r[2]) / det
    state = np.concatenate([r[1], v2])
    return (state, rho) if np.isfinite(state).all() else None


def _gauss_iterate(
    t: FloatArray, u: FloatArray, stand: FloatArray, d: FloatArray, d0: float,
    first: tuple[FloatArray, FloatArray], gm: float, light_speed: float, iterations: int,
) -> FloatArray:  # fmt: skip
    """Repeat with exact f, g of the last orbit (averaged with the former ones, as Curtis does)."""
    state, rho = first
    change = math.inf
    old: tuple[float, ...] | None = None
    for _ in range(iterations):
        emission = t - rho / light_speed
        try:
            ends = propagate_two_body(
                state, [emission[0] - emission[1], emission[2] - emission[1]], gm
            )
        except PropagationError:
            return first[0]
        # r_i = f r2 + g v2 solved in the plane of r2 and v2
        pole = np.cross(state[:3], state[3:])
        h2 = float(pole @ pole)
        if h2 == 0:
            return first[0]
        fg = []
        for end in ends:
            fg.append(float(np.cross(end[:3], state[3:]) @ pole) / h2)
            fg.append(float(np.cross(state[:3], end[:3]) @ pole) / h2)
        if old is not None:
            fg = [0.5 * (new + former) for new, former in zip(fg, old, strict=True)]
        old = tuple(fg)
        f1, g1, f3, g3 = fg
        det = f1 * g3 - f3 * g1
        if det == 0:
            return first[0]
        renewed = _gauss_state(u, stand, d, d0, g3 / det, -g1 / det, f1, f3, det)
        if renewed is None:
            return first[0]
        change = float(np.linalg.norm(renewed[0][:3] - state[:3]) / np.linalg.norm(state[:3]))
        state, rho = renewed
        if change < 1e-11:
            return state
    return state if change < 1e-3 else first[0]
