"""Where the perturbers are: Chebyshev series evaluated for all bodies at one time.

Clenshaw's recurrence (C. W. Clenshaw 1955, Math. Comp. 9, 118) for position, and its derivative for
velocity.
"""

from numba import njit


@njit(cache=True, error_model="numpy", fastmath={"contract", "nsz"})
def series(tab, body, t, pos, vel, with_velocity):
    """Position (au) and, when asked for, velocity (au/d) of one body into rows of ``pos`` and
    ``vel``.
    """
    width = tab.width_d[body]
    u = (t - tab.first_d[body]) / width
    i = int(u)
    if u < 0.0:
        i = 0
    last = tab.n_interval[body] - 1
    if i > last:
        i = last
    s = 2.0 * (u - i) - 1.0
    n = tab.n_coef[body]
    at = tab.offset[body] + i * 3 * n
    two_s = 2.0 * s
    for axis in range(3):
        b1 = 0.0
        b2 = 0.0
        d1 = 0.0
        d2 = 0.0
        for k in range(n - 1, 0, -1):
            if with_velocity:
                d0 = two_s * d1 - d2 + 2.0 * b1
                d2 = d1
                d1 = d0
            b0 = two_s * b1 - b2 + tab.coef[at + k]
            b2 = b1
            b1 = b0
        pos[body, axis] = s * b1 - b2 + tab.coef[at]
        if with_velocity:
            vel[body, axis] = (s * d1 - d2 + b1) * 2.0 / width
        at += n


@njit(cache=True, error_model="numpy")
def all_positions(tab, t, pos, vel, all_velocities):
    """Barycentric positions of all bodies into ``pos`` (nb, 3); velocity of the Sun, or of all,
    into ``vel``.
    """
    for body in range(tab.gm.size):
        parent = tab.parent[body]
        fast = body == 0 or (all_velocities and parent < 0)
        series(tab, body, t, pos, vel, fast)
        if parent >= 0:
            pos[body, 0] += pos[parent, 0]
            pos[body, 1] += pos[parent, 1]
            pos[body, 2] += pos[parent, 2]


@njit(cache=True, error_model="numpy")
def inside_table(tab, t):
    """True if every series covers the time ``t`` (with a second of slack)."""
    slack = 1.2e-5
    for body in range(tab.gm.size):
        start = tab.first_d[body]
        if t < start - slack or t > start + tab.n_interval[body] * tab.width_d[body] + slack:
            return False
    return True
