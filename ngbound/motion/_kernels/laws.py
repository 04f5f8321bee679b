"""Thrust laws g(r), their slopes, the lag, and the radial/transverse/normal axes with their
partials.

The form law is alpha (r/r0)^-m [1 + (r/r0)^n]^-k of B. G. Marsden, Z. Sekanina & D. K. Yeomans
1973, AJ 78, 211; a pure power law has k = 0. The lag takes g at t - DT (D. K. Yeomans & P. W.
Chodas 1989, AJ 98, 1083), with the distance then from two-body motion in universal variables (R. H.
Battin 1999, An Introduction to the Mathematics and Methods of Astrodynamics, ch. 4).
"""

import math

import numpy as np

from .bodies import LANES
from .compiled import kernel
from .layout import LAW_FORM

PAIR = 2 * LANES


@kernel()
def law_of_distance(push, r, out):
    """g, dg/dr and dg/dm at fixed g(1 au) into ``out``; r in au."""
    if push.law == LAW_FORM:
        alpha = push.par[0]
        u = r / push.par[1]
        m = push.par[2]
        k = push.par[4]
        log_u = math.log(u)
        slope = -m
        g = alpha * math.exp(-m * log_u)
        if k != 0.0:
            n = push.par[3]
            un = math.exp(n * log_u)
            g *= math.exp(-k * math.log1p(un))
            slope -= n * k * un / (1.0 + un)
        out[0] = g
        out[1] = slope * g / r
        # alpha moves with m so that g(1 au) stays what it is: d ln alpha / dm = -ln r0
        out[2] = -math.log(r) * g
    else:
        knots = push.table
        last = knots.shape[1] - 1
        x = math.log(r)
        if x <= knots[0, 0] or x >= knots[0, last]:
            end = 0 if x <= knots[0, 0] else last
            slope = knots[2, end]
            y = knots[1, end] + slope * (x - knots[0, end])
        else:
            i = 0
            high = last
            while high - i > 1:
                middle = (i + high) // 2
                if knots[0, middle] <= x:
                    i = middle
                else:
                    high = middle
            w = knots[0, i + 1] - knots[0, i]
            s = (x - knots[0, i]) / w
            dy = knots[1, i + 1] - knots[1, i]
            p = knots[2, i] * w
            q = knots[2, i + 1] * w
            c2 = 3.0 * dy - 2.0 * p - q
            c3 = p + q - 2.0 * dy
            y = knots[1, i] + s * (p + s * (c2 + s * c3))
            slope = (p + s * (2.0 * c2 + 3.0 * s * c3)) / w
        g = math.exp(y)
        out[0] = g
        out[1] = slope * g / r
        out[2] = 0.0


@kernel()
def stumpff(z, c):
    """Stumpff functions c0..c5 of z into ``c``; not a number where z is absurdly large."""
    if not abs(z) < 1e12:
        c[:] = math.nan
        return
    halvings = 0
    while abs(z) > 0.1:
        z *= 0.25
        halvings += 1
    # series for c4 and c5, the rest by c_n = 1/n! - z c_{n+2}
    c4 = 0.0
    c5 = 0.0
    for i in range(8, 0, -1):
        c5 = (1.0 - z * c5) / ((2 * i + 4) * (2 * i + 5))
        c4 = (1.0 - z * c4) / ((2 * i + 3) * (2 * i + 4))
    c5 = (1.0 - z * c5) / 120.0
    c4 = (1.0 - z * c4) / 24.0
    c[5] = c5
    c[4] = c4
    c[3] = 1.0 / 6.0 - z * c5
    c[2] = 0.5 - z * c4
    c[1] = 1.0 - z * c[3]
    c[0] = 1.0 - z * c[2]
    for _ in range(halvings):
        c5 = (c[5] + c[4] + c[3] * c[2]) / 16.0
        c4 = (c[3] * (1.0 + c[1])) / 8.0
        c[5] = c5
        c[4] = c4
        z *= 4.0
        c[3] = 1.0 / 6.0 - z * c5
        c[2] = 0.5 - z * c4
        c[1] = 1.0 - z * c[3]
        c[0] = 1.0 - z * c[2]


@kernel()
def distance_at_lag(gm, x, v, dt, out):
    """Two-body distance after ``dt`` days, and its partials.

    ``out[0]`` r' (au); ``out[1:4]`` dr'/dx, ``out[4:7]`` dr'/dv, ``out[7]`` dr'/d(dt).
    """
    root = math.sqrt(gm)
    r = math.sqrt(x[0] * x[0] + x[1] * x[1] + x[2] * x[2])
    sigma = (x[0] * v[0] + x[1] * v[1] + x[2] * v[2]) / root
    alpha = 2.0 / r - (v[0] * v[0] + v[1] * v[1] + v[2] * v[2]) / gm
    c = np.empty(6)
    target = root * dt
    chi = target / r
    r1 = r
    for _ in range(60):
        stumpff(alpha * chi * chi, c)
        u1 = chi * c[1]
        u2 = chi * chi * c[2]
        u3 = chi * chi * chi * c[3]
        miss = r * u1 + sigma * u2 + u3 - target
        r1 = r * c[0] + sigma * u1 + u2
        # Laguerre's method of degree 5 (B. A. Conway 1986, Celest. Mech. 39, 199)
        curve = sigma * c[0] + (1.0 - alpha * r) * u1
        disc = math.sqrt(abs(16.0 * r1 * r1 - 20.0 * miss * curve))
        step = 5.0 * miss / (r1 + disc)
        chi -= step
        if abs(step) <= 1e-14 * (1.0 + abs(chi)):
            break
    stumpff(alpha * chi * chi, c)
    chi2 = chi * chi
    u0 = c[0]
    u1 = chi * c[1]
    u2 = chi2 * c[2]
    u3 = chi2 * chi * c[3]
    u4 = chi2 * chi2 * c[4]
    u5 = chi2 * chi2 * chi * c[5]
    r1 = r * u0 + sigma * u1 + u2
    sigma1 = sigma * u0 + (1.0 - alpha * r) * u1
    # partials of the universal functions with respect to alpha at fixed chi
    u0a = -0.5 * chi * u1
    u1a = 0.5 * (u3 - chi * u2)
    u2a = 0.5 * (2.0 * u4 - chi * u3)
    u3a = 0.5 * (3.0 * u5 - chi * u4)
    by_r = u0 - sigma1 * u1 / r1
    by_sigma = u1 - sigma1 * u2 / r1
    by_alpha = r * u0a + sigma * u1a + u2a - sigma1 * (r * u1a + sigma * u2a + u3a) / r1
    out[0] = r1
    for i in range(3):
        out[1 + i] = by_r * x[i] / r + by_sigma * v[i] / root - by_alpha * 2.0 * x[i] / (r * r * r)
        out[4 + i] = by_sigma * x[i] / root - by_alpha * 2.0 * v[i] / gm
    out[7] = sigma1 * root / r1


@kernel()
def room_for_partials():
    """Scraps of ``thrust_partials``."""
    return np.empty((3, 3)), np.empty(8), np.empty(3)


@kernel()
def axes(x, v, e):
    """Rows R, T, N into ``e`` (3, 3); returns r and |x cross v|."""
    r = math.sqrt(x[0] * x[0] + x[1] * x[1] + x[2] * x[2])
    hx = x[1] * v[2] - x[2] * v[1]
    hy = x[2] * v[0] - x[0] * v[2]
    hz = x[0] * v[1] - x[1] * v[0]
    h = math.sqrt(hx * hx + hy * hy + hz * hz)
    for i in range(3):
        e[0, i] = x[i] / r
    e[2, 0] = hx / h
    e[2, 1] = hy / h
    e[2, 2] = hz / h
    e[1, 0] = e[2, 1] * e[0, 2] - e[2, 2] * e[0, 1]
    e[1, 1] = e[2, 2] * e[0, 0] - e[2, 0] * e[0, 2]
    e[1, 2] = e[2, 0] * e[0, 1] - e[2, 1] * e[0, 0]
    return r, h


@kernel()
def strength_at_nodes(push, gm_sun, pos, vel, path, strength):
    """g of the law at the eight nodes, at the distance of a lag ago where there is one."""
    x = np.empty(3)
    v = np.empty(3)
    back = np.empty(8)
    g = np.empty(3)
    for j in range(LANES):
        for i in range(3):
            x[i] = path[i, j] - pos[i, j]
            v[i] = path[i, PAIR + j] - vel[i, j]
        if push.lag_d != 0.0:
            distance_at_lag(gm_sun, x, v, -push.lag_d, back)
        else:
            back[0] = math.sqrt(x[0] * x[0] + x[1] * x[1] + x[2] * x[2])
        law_of_distance(push, back[0], g)
        strength[j] = g[0]


@kernel(fastmath={"contract", "nsz"})
def add_thrust(push, gm_sun, active, pos, vel, path, acc):
    """Add thrust (while ``active``) and radiation pressure at the eight nodes to ``acc`` (3, 8)."""
    a1 = push.a[0]
    a2 = push.a[1]
    a3 = push.a[2]
    pushed = active and (a1 != 0.0 or a2 != 0.0 or a3 != 0.0)
    if not pushed and push.srp == 0.0:
        return
    strength = np.zeros(LANES)
    square = 0.0
    if pushed:
        if push.law == LAW_FORM and push.par[2] == 2.0 and push.par[4] == 0.0 and push.lag_d == 0.0:
            square = push.par[0] * push.par[1] * push.par[1]
        else:
            strength_at_nodes(push, gm_sun, pos, vel, path, strength)
    for j in range(LANES):
        x = path[0, j] - pos[0, j]
        y = path[1, j] - pos[1, j]
        z = path[2, j] - pos[2, j]
        vx = path[0, PAIR + j] - vel[0, j]
        vy = path[1, PAIR + j] - vel[1, j]
        vz = path[2, PAIR + j] - vel[2, j]
        r2 = x * x + y * y + z * z
        hx = y * vz - z * vy
        hy = z * vx - x * vz
        hz = x * vy - y * vx
        per_r = 1.0 / math.sqrt(r2)
        per_h = 1.0 / math.sqrt(hx * hx + hy * hy + hz * hz + 1e-300)
        g = strength[j] + square / r2
        along = (g * a1 + push.srp / r2) * per_r
        across = g * a2 * per_h * per_r
        normal = g * a3 * per_h
        acc[0, j] += along * x + across * (hy * z - hz * y) + normal * hx
        acc[1, j] += along * y + across * (hz * x - hx * z) + normal * hy
        acc[2, j] += along * z + across * (hx * y - hy * x) + normal * hz


@kernel()
def thrust_partials(push, gm_sun, active, x, v, room, out):
    """Thrust per unit A along R, T, N and its partials at heliocentric ``x``, ``v``.

    ``out`` (72,) receives g times the axes [component, axis] (9), the partials [component, axis,
    with respect to] with position (27) and velocity (27), and the partial of the thrust with the
    push's own A with respect to the lag (per day) and to the law's exponent m (3 each); the last
    three places are left alone. ``room`` is that of ``room_for_partials``.

    With h = |x cross v| and the radial speed u: dR = (T T + N N) dx / r, dT = -R (T dx) / r - N
    (N (u dx - r dv)) / h, dN = -R (N dx) / r + T (N (u dx - r dv)) / h.
    """
    e, back, g = room
    if not active:
        out[:69] = 0.0
        return
    r, h = axes(x, v, e)
    u = (x[0] * v[0] + x[1] * v[1] + x[2] * v[2]) / r
    if push.lag_d != 0.0:
        distance_at_lag(gm_sun, x, v, -push.lag_d, back)
        law_of_distance(push, back[0], g)
    else:
        for i in range(3):
            back[1 + i] = e[0, i]
            back[4 + i] = 0.0
        back[7] = u
        law_of_distance(push, r, g)
    turn = u / h
    swing = r / h
    for i in range(3):
        along = push.a[0] * e[0, i] + push.a[1] * e[1, i] + push.a[2] * e[2, i]
        out[63 + i] = -g[1] * back[7] * along
        out[66 + i] = g[2] * along
        out[i] = g[0] * e[0, i]
        out[3 + i] = g[0] * e[1, i]
        out[6 + i] = g[0] * e[2, i]
        for k in range(3):
            by_x = g[1] * back[1 + k]
            by_v = g[1] * back[4 + k]
            d_r = (e[1, i] * e[1, k] + e[2, i] * e[2, k]) / r
            d_t = -e[0, i] * e[1, k] / r - turn * e[2, i] * e[2, k]
            d_n = -e[0, i] * e[2, k] / r + turn * e[1, i] * e[2, k]
            at = 3 * i + k
            out[9 + at] = by_x * e[0, i] + g[0] * d_r
            out[18 + at] = by_x * e[1, i] + g[0] * d_t
            out[27 + at] = by_x * e[2, i] + g[0] * d_n
            out[36 + at] = by_v * e[0, i]
            out[45 + at] = by_v * e[1, i] + g[0] * swing * e[2, i] * e[2, k]
            out[54 + at] = by_v * e[2, i] - g[0] * swing * e[1, i] * e[2, k]
