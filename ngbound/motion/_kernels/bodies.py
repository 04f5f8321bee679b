"""Where the perturbers are: Chebyshev series evaluated for all bodies at the eight times of a step.

The polynomials T_k and their slopes come from the three-term recurrence and serve all bodies that
share an interval (L. Fox & I. B. Parker 1968, Chebyshev Polynomials in Numerical Analysis). Results
lie with the times innermost, ``LANES`` a body, so that a whole step's forces are vector code.
"""

import numpy as np

from .compiled import kernel

LANES = 8
FAR_AU = 1e6


@kernel()
def room_for_bodies(tab):
    """Arrays for ``bodies_at``: position and velocity (3, lanes) and three scraps.

    The Sun's eight lanes come first, then those of the others, two bodies to a vector; a missing
    last one stays far away. Also the GM of every lane.
    """
    n = tab.gm.size
    lanes = LANES * (1 + 2 * (n // 2))
    gm = np.zeros(lanes)
    for body in range(n):
        gm[LANES * body : LANES * (body + 1)] = tab.gm[body]
    most = max(2, tab.n_coef.max())
    return (
        np.full((3, lanes), FAR_AU),
        np.zeros((3, lanes)),
        np.empty((most, LANES)),
        np.empty((most, LANES)),
        np.empty(LANES, dtype=np.int64),
        gm,
    )


@kernel(fastmath={"contract", "nsz"})
def _sums(tab, body, interval, polynomial, factor, out):
    """Sum of a body's series at the eight times, times ``factor``."""
    n = tab.n_coef[body]
    coef = tab.coef
    first = tab.offset[body]
    for j in range(LANES):
        at = first + interval[j] * 3 * n
        cx = coef[at : at + n]
        cy = coef[at + n : at + 2 * n]
        cz = coef[at + 2 * n : at + 3 * n]
        x = 0.0
        y = 0.0
        z = 0.0
        for k in range(1, n):
            t = polynomial[k, j]
            x += cx[k] * t
            y += cy[k] * t
            z += cz[k] * t
        # the largest term comes last, so that its rounding comes once
        t = polynomial[0, j]
        out[0, LANES * body + j] = (x + cx[0] * t) * factor
        out[1, LANES * body + j] = (y + cy[0] * t) * factor
        out[2, LANES * body + j] = (z + cz[0] * t) * factor


@kernel(fastmath={"contract", "nsz"})
def bodies_at(tab, times, all_velocities, polynomial, slope, interval, pos, vel):
    """Barycentric positions (au) of all bodies at eight ``times`` into ``pos``; velocity (au/d) of
    the Sun, or of all that do not move around it, into ``vel``.

    ``polynomial``, ``slope`` and ``interval`` are scrap of ``room_for_bodies``.
    """
    ready = 0
    for body in range(tab.gm.size):
        n = tab.n_coef[body]
        width = tab.width_d[body]
        parent = tab.parent[body]
        if (
            body == 0
            or tab.first_d[body] != tab.first_d[body - 1]
            or width != tab.width_d[body - 1]
        ):
            ready = 2
            last = tab.n_interval[body] - 1
            for j in range(LANES):
                u = (times[j] - tab.first_d[body]) / width
                i = min(max(int(u), 0), last)
                interval[j] = i
                polynomial[1, j] = 2.0 * (u - i) - 1.0
                polynomial[0, j] = 1.0
        for k in range(ready, n):
            for j in range(LANES):
                two_s = 2.0 * polynomial[1, j]
                polynomial[k, j] = two_s * polynomial[k - 1, j] - polynomial[k - 2, j]
        ready = max(ready, n)
        _sums(tab, body, interval, polynomial, 1.0, pos)
        if parent >= 0:
            for i in range(3):
                for j in range(LANES):
                    pos[i, LANES * body + j] += pos[i, LANES * parent + j]
        if body == 0 or (all_velocities and parent < 0):
            for j in range(LANES):
                slope[1, j] = 1.0
                slope[0, j] = 0.0
            for k in range(2, n):
                for j in range(LANES):
                    two_s = 2.0 * polynomial[1, j]
                    slope[k, j] = (
                        two_s * slope[k - 1, j] - slope[k - 2, j] + 2.0 * polynomial[k - 1, j]
                    )
            _sums(tab, body, interval, slope, 2.0 / width, vel)


@kernel()
def bodies_of_lane(lanes, j, out):
    """Positions or velocities of all bodies at the time ``j`` into ``out`` (bodies, 3)."""
    for body in range(out.shape[0]):
        for i in range(3):
            out[body, i] = lanes[i, LANES * body + j]


@kernel()
def inside_table(tab, t):
    """True if every series covers the time ``t`` (with a second of slack)."""
    slack = 1.2e-5
    for body in range(tab.gm.size):
        start = tab.first_d[body]
        if t < start - slack or t > start + tab.n_interval[body] * tab.width_d[body] + slack:
            return False
    return True
