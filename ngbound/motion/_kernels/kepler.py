"""Compiled two-body kernels: Stumpff functions, Kepler, state transition, Lambert, sightlines.

Floats and arrays only; the objects live in kepler.py, lambert.py and above. May import numba and
numpy only.

Notation: s is the universal anomaly of K. F. Sundman (ds = dt / r), beta = 2 mu / r - v^2, and
U_n(s) = s^n c_n(beta s^2) with the Stumpff functions c_n (K. Stumpff 1959, Himmelsmechanik I;
R. H. Battin 1999, An Introduction to the Mathematics and Methods of Astrodynamics, ch. 4 and 9).
Everything below is regular through beta = 0, so the parabola is no special case.
"""

import math

import numpy as np

from .compiled import kernel

_MAX_ITERATIONS = 120


@kernel()
def stumpff(psi):
    """c_0 .. c_5 of psi; a series for |psi| < 4, closed forms outside."""
    if abs(psi) < 4.0:
        c4 = 0.0
        c5 = 0.0
        for k in range(12, -1, -1):
            # c_n = sum_k (-psi)^k / (2k + n)!, Horner from the last term
            c4 = 1.0 - psi * c4 / ((2.0 * k + 5.0) * (2.0 * k + 6.0))
            c5 = 1.0 - psi * c5 / ((2.0 * k + 6.0) * (2.0 * k + 7.0))
        c4 /= 24.0
        c5 /= 120.0
        c3 = 1.0 / 6.0 - psi * c5
        c2 = 0.5 - psi * c4
        return 1.0 - psi * c2, 1.0 - psi * c3, c2, c3, c4, c5
    if psi > 0.0:
        x = math.sqrt(psi)
        half = math.sin(0.5 * x)
        c0 = math.cos(x)
        c1 = math.sin(x) / x
        c2 = 2.0 * half * half / psi
    else:
        x = math.sqrt(-psi)
        half = math.sinh(0.5 * x)
        c0 = math.cosh(x)
        c1 = math.sinh(x) / x
        c2 = -2.0 * half * half / psi
    c3 = (1.0 - c1) / psi
    c4 = (0.5 - c2) / psi
    c5 = (1.0 / 6.0 - c3) / psi
    return c0, c1, c2, c3, c4, c5


@kernel()
def universal_functions(beta, s):
    """U_0 .. U_5 of the universal anomaly s."""
    c0, c1, c2, c3, c4, c5 = stumpff(beta * s * s)
    s2 = s * s
    return c0, s * c1, s2 * c2, s2 * s * c3, s2 * s2 * c4, s2 * s2 * s * c5


@kernel()
def solve_universal_kepler(r0, sigma0, beta, mu, dt):
    """Universal anomaly after dt: (s within half a revolution, s of the whole revolutions).

    Laguerre's iteration (B. A. Conway 1986, Celest. Mech. 39, 199) inside a bracket that
    ds = dt / r with r >= q guarantees; the flight time grows strictly with s, so it cannot fail
    on finite input. Returns nan, nan otherwise.
    """
    s_whole = 0.0
    hi = math.inf
    if beta > 0.0:
        root = math.sqrt(beta)
        period = 2.0 * math.pi * mu / (beta * root)
        turns = np.rint(dt / period)
        dt = dt - turns * period
        s_whole = turns * 2.0 * math.pi / root
        hi = 2.0 * math.pi / root
    if dt == 0.0:
        return 0.0, s_whole
    sign = 1.0
    if dt < 0.0:
        sign = -1.0
        dt = -dt
        sigma0 = -sigma0
    h2 = r0 * (2.0 * mu - beta * r0) - sigma0 * sigma0
    e = math.sqrt(max(0.0, 1.0 - beta * h2 / (mu * mu)))
    if h2 > 0.0:
        hi = min(hi, 1.001 * dt * mu * (1.0 + e) / h2)
    if beta < 0.0:
        # at most: in to the perihelion, and out again for all of dt (e sinh x - x = m)
        root = math.sqrt(-beta)
        m = dt * root**3 / mu
        out = (6.0 * m / e) ** (1.0 / 3.0)
        if e > 1.0:
            out = min(out, math.asinh(m / (e - 1.0)))
        inward = math.acosh(max(1.0, (1.0 - beta * r0 / mu) / e))
        hi = min(hi, 1.001 * (inward + out) / root)
    if hi == math.inf:
        hi = 1e6 * (dt / r0 + (dt / mu) ** (1.0 / 3.0))
    lo = 0.0
    s = min(dt / r0, 0.5 * hi)
    for _ in range(_MAX_ITERATIONS):
        u0, u1, u2, u3, u4, u5 = universal_functions(beta, s)
        f = r0 * u1 + sigma0 * u2 + mu * u3 - dt
        r = r0 * u0 + sigma0 * u1 + mu * u2
        if f > 0.0:
            hi = s
        elif f < 0.0:
            lo = s
        else:
            return sign * s, s_whole
        slope = sigma0 * u0 + (mu - beta * r0) * u1
        step = -5.0 * f / (r + math.sqrt(abs(16.0 * r * r - 20.0 * f * slope)))
        new = s + step
        if abs(step) <= 1e-10 * abs(s):
            return sign * new, s_whole
        if not (lo < new < hi):
            new = 0.5 * (lo + hi)
            if new == lo or new == hi:
                return sign * new, s_whole
        s = new
    return math.nan, math.nan


@kernel()
def propagate(x, y, z, vx, vy, vz, dt, mu):
    """State after dt by Lagrange's f and g: (x, y, z, vx, vy, vz); nan where nothing follows."""
    r0 = math.sqrt(x * x + y * y + z * z)
    sigma0 = x * vx + y * vy + z * vz
    beta = 2.0 * mu / r0 - (vx * vx + vy * vy + vz * vz)
    s, _ = solve_universal_kepler(r0, sigma0, beta, mu, dt)
    u0, u1, u2, u3, u4, u5 = universal_functions(beta, s)
    r = r0 * u0 + sigma0 * u1 + mu * u2
    f = 1.0 - mu * u2 / r0
    g = r0 * u1 + sigma0 * u2
    ft = -mu * u1 / (r * r0)
    gt = 1.0 - mu * u2 / r
    return (
        f * x + g * vx,
        f * y + g * vy,
        f * z + g * vz,
        ft * x + gt * vx,
        ft * y + gt * vy,
        ft * z + gt * vz,
    )


@kernel()
def propagate_many(states, dts, mus, out):
    """`propagate` row by row: states (n, 6), dts (n,), mus (n,) -> out (n, 6)."""
    for i in range(states.shape[0]):
        a = states[i]
        out[i, 0], out[i, 1], out[i, 2], out[i, 3], out[i, 4], out[i, 5] = propagate(
            a[0], a[1], a[2], a[3], a[4], a[5], dts[i], mus[i]
        )


@kernel()
def transition(state, dt, mu, out, phi):
    """State after dt into out (6,), its partials by the start into phi (6, 6).

    R. H. Battin 1999, sect. 9.7 (after W. H. Goodyear 1965, AJ 70, 189), in the universal anomaly s
    instead of his chi = sqrt(mu) s.
    """
    r0v = state[:3]
    v0v = state[3:]
    r0 = math.sqrt(r0v[0] ** 2 + r0v[1] ** 2 + r0v[2] ** 2)
    sigma0 = r0v[0] * v0v[0] + r0v[1] * v0v[1] + r0v[2] * v0v[2]
    beta = 2.0 * mu / r0 - (v0v[0] ** 2 + v0v[1] ** 2 + v0v[2] ** 2)
    s, s_whole = solve_universal_kepler(r0, sigma0, beta, mu, dt)
    u0, u1, u2, u3, u4, u5 = universal_functions(beta, s)
    r = r0 * u0 + sigma0 * u1 + mu * u2
    f = 1.0 - mu * u2 / r0
    g = r0 * u1 + sigma0 * u2
    ft = -mu * u1 / (r * r0)
    gt = 1.0 - mu * u2 / r
    for i in range(3):
        out[i] = f * r0v[i] + g * v0v[i]
        out[3 + i] = ft * r0v[i] + gt * v0v[i]
    if s_whole != 0.0:
        _, _, _, _, u4, u5 = universal_functions(beta, s + s_whole)
    c = mu * mu * (3.0 * u5 - (s + s_whole) * u4) - mu * dt * u2
    r2 = r * r
    r3 = r2 * r
    r03 = r0 * r0 * r0
    rv_dot = out[0] * out[3] + out[1] * out[4] + out[2] * out[5]
    w = r0 * (1.0 - f)
    for i in range(3):
        ri = out[i]
        vi = out[3 + i]
        di = vi - v0v[i]
        # (r v' - v r') r = r (v.r) - v r^2
        ki = (ri * rv_dot - vi * r2) / (mu * r)
        for j in range(3):
            dj = out[3 + j] - v0v[j]
            unit = 1.0 if i == j else 0.0
            phi[i, j] = r / mu * di * dj + (w * ri * r0v[j] + c * vi * r0v[j]) / r03 + f * unit
            phi[i, 3 + j] = (
                w / mu * ((ri - r0v[i]) * v0v[j] - di * r0v[j]) + c / mu * vi * v0v[j] + g * unit
            )
            phi[3 + i, j] = (
                -di * r0v[j] / (r0 * r0)
                - ri * dj / r2
                + ft * (unit - ri * out[j] / r2 + ki * dj)
                - mu * c * ri * r0v[j] / (r3 * r03)
            )
            phi[3 + i, 3 + j] = (
                r0 / mu * di * dj + (w * ri * r0v[j] - c * ri * v0v[j]) / r3 + gt * unit
            )


@kernel()
def transition_many(states, dts, mus, out, phi):
    """`transition` row by row: out (n, 6), phi (n, 6, 6)."""
    for i in range(states.shape[0]):
        transition(states[i], dts[i], mus[i], out[i], phi[i])


@kernel()
def kepler_elliptic(mean_anomaly, e):
    """Eccentric anomaly for 0 <= e < 1, on the same turn as the mean anomaly."""
    turns = np.rint(mean_anomaly / (2.0 * math.pi))
    m = mean_anomaly - turns * 2.0 * math.pi
    sign = 1.0
    if m < 0.0:
        sign = -1.0
        m = -m
    lo = m
    hi = min(m + e, math.pi)
    x = min(max(m + e * math.sin(m) / (1.0 - math.sin(m + e) + math.sin(m)), lo), hi)
    for _ in range(_MAX_ITERATIONS):
        c0, c1, c2, c3, _, _ = stumpff(x * x)
        # x - e sin x without cancellation
        f = (1.0 - e) * x + e * x * x * x * c3 - m
        if f > 0.0:
            hi = x
        elif f < 0.0:
            lo = x
        else:
            break
        step = -f / (1.0 - e + e * x * x * c2)
        new = x + step
        if abs(step) <= 1e-9 * abs(x):
            # the next step of a quadratic iteration would be below rounding
            x = new
            break
        if not (lo < new < hi):
            new = 0.5 * (lo + hi)
            if new == lo or new == hi:
                break
        x = new
    return sign * x + turns * 2.0 * math.pi


@kernel()
def kepler_hyperbolic(mean_anomaly, e):
    """Hyperbolic anomaly H for e > 1: e sinh H - H = M."""
    sign = 1.0
    m = mean_anomaly
    if m < 0.0:
        sign = -1.0
        m = -m
    if m == 0.0:
        return 0.0
    # e sinh H - H >= (e - 1) sinh H bounds H from above, e sinh H > M from below
    lo = math.asinh(m / e)
    hi = math.asinh(m / (e - 1.0))
    hi = min(hi, (6.0 * m / e) ** (1.0 / 3.0) + 1e-300)
    hi = max(hi, lo * (1.0 + 1e-12))
    x = lo
    for _ in range(_MAX_ITERATIONS):
        c0, c1, c2, c3, _, _ = stumpff(-x * x)
        f = (e - 1.0) * x + e * x * x * x * c3 - m
        if f > 0.0:
            hi = x
        elif f < 0.0:
            lo = x
        else:
            break
        step = -f / (e - 1.0 + e * x * x * c2)
        new = x + step
        if abs(step) <= 1e-9 * abs(x):
            x = new
            break
        if not (lo < new < hi):
            new = 0.5 * (lo + hi)
            if new == lo or new == hi:
                break
        x = new
    return sign * x


@kernel()
def map_kepler(mean_anomaly, e, out):
    """`kepler_elliptic` or `kepler_hyperbolic` row by row."""
    for i in range(out.shape[0]):
        if e[i] < 1.0:
            out[i] = kepler_elliptic(mean_anomaly[i], e[i])
        else:
            out[i] = kepler_hyperbolic(mean_anomaly[i], e[i])


@kernel()
def conic_from_perihelion(q, e, dt, mu):
    """(true anomaly, r) at dt from the perihelion of a conic of any e >= 0."""
    beta = mu * (1.0 - e) / q
    s, _ = solve_universal_kepler(q, 0.0, beta, mu, dt)
    _, u1, u2, _, _, _ = universal_functions(beta, s)
    x = q - mu * u2
    y = math.sqrt(mu * q * (1.0 + e)) * u1
    return math.atan2(y, x), q + mu * e * u2


@kernel()
def map_conic(q, e, dt, mu, nu, r):
    """`conic_from_perihelion` row by row."""
    for i in range(nu.shape[0]):
        nu[i], r[i] = conic_from_perihelion(q[i], e[i], dt[i], mu)


@kernel()
def _lambert_eta(x, lam, one_minus_lam2):
    """(y, y - lam x) of Izzo's curve, the difference without cancellation."""
    y = math.sqrt(one_minus_lam2 + lam * lam * x * x)
    if lam * x > 0.0:
        return y, one_minus_lam2 / (y + lam * x)
    return y, y - lam * x


@kernel()
def lambert_time(x, lam, one_minus_lam2):
    """Non-dimensional flight time T(x) without a full revolution."""
    y, eta = _lambert_eta(x, lam, one_minus_lam2)
    one_minus_lam = one_minus_lam2 / (1.0 + lam) if lam > 0.0 else 1.0 - lam
    s1 = 0.5 * (one_minus_lam - x * eta)
    if abs(s1) < 0.3:
        # Battin's form, hypergeometric 2F1(3, 1; 5/2; s1)
        term = 1.0
        total = 1.0
        for k in range(200):
            term *= (3.0 + k) / (2.5 + k) * s1
            total += term
            if abs(term) < 1e-17 * abs(total):
                break
        return 0.5 * (eta**3 * 4.0 / 3.0 * total + 4.0 * lam * eta)
    w = 1.0 - x * x
    if w > 0.0:
        psi = math.acos(max(-1.0, min(1.0, x * y + lam * w)))
        return (psi / math.sqrt(w) - x + lam * y) / w
    psi = math.asinh(eta * math.sqrt(-w))
    return (psi / math.sqrt(-w) - x + lam * y) / w


@kernel()
def lambert(r1, r2, tof, mu, long_way, v1, v2):
    """Velocities at both ends of the arc from r1 to r2 in tof > 0; False when there is none.

    Variables of D. Izzo 2015, Celest. Mech. Dyn. Astron. 121, 1; the root is found by a bracketed
    secant in (log(1 + x), log T), where the curve is almost straight.
    """
    d1 = math.sqrt(r1[0] ** 2 + r1[1] ** 2 + r1[2] ** 2)
    d2 = math.sqrt(r2[0] ** 2 + r2[1] ** 2 + r2[2] ** 2)
    c = math.sqrt((r2[0] - r1[0]) ** 2 + (r2[1] - r1[1]) ** 2 + (r2[2] - r1[2]) ** 2)
    hx = r1[1] * r2[2] - r1[2] * r2[1]
    hy = r1[2] * r2[0] - r1[0] * r2[2]
    hz = r1[0] * r2[1] - r1[1] * r2[0]
    h = math.sqrt(hx * hx + hy * hy + hz * hz)
    if not (tof > 0.0) or not (h > 1e-14 * d1 * d2) or not (c > 0.0):
        return False
    hx /= h
    hy /= h
    hz /= h
    s = 0.5 * (d1 + d2 + c)
    one_minus_lam2 = c / s
    lam = math.sqrt(max(0.0, 1.0 - one_minus_lam2))
    if long_way:
        lam = -lam
        hx = -hx
        hy = -hy
        hz = -hz
    target = math.sqrt(2.0 * mu / s**3) * tof
    t_zero = math.acos(lam) + lam * math.sqrt(one_minus_lam2)
    t_one = lambert_time(1.0, lam, one_minus_lam2)
    if target >= t_zero:
        xi = 2.0 / 3.0 * math.log(t_zero / target)
    elif target > t_one:
        xi = math.log(2.0) * math.log(t_zero / target) / math.log(t_zero / t_one)
    else:
        xi = math.log(2.0 + 2.5 * t_one * (t_one - target) / (target * (1.0 - lam**5)))
    goal = math.log(target)
    lo = -36.0
    hi = 30.0
    xi = min(max(xi, lo), hi)
    slope = -1.5
    xi_old = 0.0
    f_old = 0.0
    for k in range(_MAX_ITERATIONS):
        f = math.log(lambert_time(math.exp(xi) - 1.0, lam, one_minus_lam2)) - goal
        if f == 0.0:
            break
        if f > 0.0:
            lo = xi
        else:
            hi = xi
        if k > 0 and f != f_old:
            slope = (f - f_old) / (xi - xi_old)
        new = xi - f / slope if slope != 0.0 else 0.5 * (lo + hi)
        xi_old = xi
        f_old = f
        if abs(new - xi) < 1e-13 * (1.0 + abs(xi)):
            xi = new
            break
        if not (lo < new < hi):
            new = 0.5 * (lo + hi)
            if new == lo or new == hi:
                break
        xi = new
    x = math.expm1(xi)
    y, _ = _lambert_eta(x, lam, one_minus_lam2)
    gamma = math.sqrt(0.5 * mu * s)
    rho = (d1 - d2) / c
    across = math.sqrt(max(0.0, (1.0 - rho) * (1.0 + rho)))
    if x > 0.0 and lam > 0.0:
        minus = -one_minus_lam2 * (x * x * (1.0 + lam * lam) - lam * lam) / (x + lam * y)
    else:
        minus = lam * y - x
    plus = lam * y + x
    vr1 = gamma * (minus - rho * plus) / d1
    vr2 = -gamma * (minus + rho * plus) / d2
    vt1 = gamma * across * (y + lam * x) / d1
    vt2 = gamma * across * (y + lam * x) / d2
    v1[0] = (vr1 * r1[0] + vt1 * (hy * r1[2] - hz * r1[1])) / d1
    v1[1] = (vr1 * r1[1] + vt1 * (hz * r1[0] - hx * r1[2])) / d1
    v1[2] = (vr1 * r1[2] + vt1 * (hx * r1[1] - hy * r1[0])) / d1
    v2[0] = (vr2 * r2[0] + vt2 * (hy * r2[2] - hz * r2[1])) / d2
    v2[1] = (vr2 * r2[1] + vt2 * (hz * r2[0] - hx * r2[2])) / d2
    v2[2] = (vr2 * r2[2] + vt2 * (hx * r2[1] - hy * r2[0])) / d2
    return True


@kernel()
def lambert_many(r1, r2, tof, mu, long_way, v1, v2, good):
    """`lambert` row by row."""
    for i in range(r1.shape[0]):
        good[i] = lambert(r1[i], r2[i], tof[i], mu, long_way[i], v1[i], v2[i])


@kernel()
def sightline(state, t0, t, ox, oy, oz, mu, light_speed):
    """Light-time solved (x, y, z of the target relative to the observer, time of emission).

    One Kepler solution near the emission time, the rest of the light time by a Taylor step.
    """
    rx = state[0] - ox
    ry = state[1] - oy
    rz = state[2] - oz
    tau = math.sqrt(rx * rx + ry * ry + rz * rz) / light_speed
    for _ in range(2):
        x, y, z, vx, vy, vz = propagate(
            state[0], state[1], state[2], state[3], state[4], state[5], t - tau - t0, mu
        )
        r3 = (x * x + y * y + z * z) ** 1.5
        dx = x - ox
        dy = y - oy
        dz = z - oz
        for _ in range(3):
            delta = math.sqrt(dx * dx + dy * dy + dz * dz) / light_speed - tau
            k = 0.5 * delta * delta * mu / r3
            dx = x - ox - vx * delta - k * x
            dy = y - oy - vy * delta - k * y
            dz = z - oz - vz * delta - k * z
        tau += delta
        if abs(delta) < 0.02:
            break
    return dx, dy, dz, t - tau


@kernel()
def sightlines(state, t0, times, observers, mu, light_speed, direction, partials):
    """Unit vectors (n, 3) and, when partials has n rows, their partials by the state (n, 3, 6)."""
    end = np.empty(6)
    phi = np.empty((6, 6))
    want = partials.shape[0] == times.shape[0]
    for i in range(times.shape[0]):
        dx, dy, dz, te = sightline(
            state, t0, times[i], observers[i, 0], observers[i, 1], observers[i, 2], mu, light_speed
        )
        rho = math.sqrt(dx * dx + dy * dy + dz * dz)
        direction[i, 0] = dx / rho
        direction[i, 1] = dy / rho
        direction[i, 2] = dz / rho
        if want:
            transition(state, te - t0, mu, end, phi)
            for j in range(6):
                along = (
                    direction[i, 0] * phi[0, j]
                    + direction[i, 1] * phi[1, j]
                    + direction[i, 2] * phi[2, j]
                )
                # moving the target moves the emission time: d(tau) = u.dr / (c + u.v)
                shift = -along / (
                    light_speed
                    + direction[i, 0] * end[3]
                    + direction[i, 1] * end[4]
                    + direction[i, 2] * end[5]
                )
                radial = along + shift * (
                    direction[i, 0] * end[3] + direction[i, 1] * end[4] + direction[i, 2] * end[5]
                )
                for k in range(3):
                    partials[i, k, j] = (
                        phi[k, j] + shift * end[3 + k] - direction[i, k] * radial
                    ) / rho


@kernel()
def two_point_scan(
    rho1, rho2, long_way, t1, t2, u1, u2, o1, o2, times, observers, seen, mu, light_speed,
    width, excess_weight, cost, states,
):  # fmt: skip
    """Robust misfit of the orbit through two sightlines at each pair of assumed distances.

    cost (m,) = sum over the sightlines of log(1 + (miss / width)^2) + the square of
    excess_weight times the share by which the squared speed passes the escape value;
    states (m, 6) at the emission time of the first sightline. inf where no orbit exists.
    """
    r1 = np.empty(3)
    r2 = np.empty(3)
    v1 = np.empty(3)
    v2 = np.empty(3)
    for m in range(rho1.shape[0]):
        cost[m] = math.inf
        for k in range(3):
            r1[k] = o1[k] + rho1[m] * u1[k]
            r2[k] = o2[k] + rho2[m] * u2[k]
        te = t1 - rho1[m] / light_speed
        tof = t2 - rho2[m] / light_speed - te
        if not lambert(r1, r2, tof, mu, long_way, v1, v2):
            continue
        for k in range(3):
            states[m, k] = r1[k]
            states[m, 3 + k] = v1[k]
        d1 = math.sqrt(r1[0] ** 2 + r1[1] ** 2 + r1[2] ** 2)
        excess = d1 * (v1[0] ** 2 + v1[1] ** 2 + v1[2] ** 2) / (2.0 * mu) - 1.0
        if excess > 50.0:
            continue
        total = 0.0
        if excess > 0.0:
            total = (excess_weight * excess) ** 2
        for i in range(times.shape[0]):
            dx, dy, dz, _ = sightline(
                states[m], te, times[i], observers[i, 0], observers[i, 1], observers[i, 2],
                mu, light_speed,
            )  # fmt: skip
            rho = math.sqrt(dx * dx + dy * dy + dz * dz)
            miss2 = (
                (dx / rho - seen[i, 0]) ** 2
                + (dy / rho - seen[i, 1]) ** 2
                + (dz / rho - seen[i, 2]) ** 2
            )
            total += math.log1p(miss2 / (width * width))
        if total == total:
            cost[m] = total
