"""Accelerations of the massless body, their gradients, and the second-order tide.

Newtonian point masses; the Sun's first post-Newtonian term in its isotropic one-body form (T. D.
Moyer 2003, Formulation for Observed and Computed Values, eq. 4-26 reduced to one static mass); the
full point-mass equations of A. Einstein, L. Infeld & B. Hoffmann 1938, Ann. Math. 39, 65 in the
form of the same eq. 4-26; the quadrupoles of the Sun and, near it, of the Earth; the Sun's
Lense-Thirring term (IERS Conventions 2010, eq. 10.12).
"""

import math

import numpy as np

from .bodies import LANES, bodies_of_lane
from .compiled import kernel
from .laws import PAIR, add_thrust
from .layout import RELATIVITY_ALL, RELATIVITY_SUN

EARTH_ZONE_AU = 0.02
EARTH_POLE = np.array([0.0, 0.0, 1.0])
N_TIDES = 17
_FAST = {"contract", "nsz"}


@kernel(fastmath=_FAST)
def sun_at_nodes(gm_sun, pos, path, acc):
    """The Sun's Newtonian acceleration (au/d2) at the eight nodes of ``path``, written to ``acc``
    (3, 8).
    """
    for j in range(LANES):
        dx = path[0, j] - pos[0, j]
        dy = path[1, j] - pos[1, j]
        dz = path[2, j] - pos[2, j]
        d2 = dx * dx + dy * dy + dz * dz
        f = -gm_sun / (d2 * math.sqrt(d2))
        acc[0, j] = f * dx
        acc[1, j] = f * dy
        acc[2, j] = f * dz


@kernel(fastmath=_FAST)
def planets_at_nodes(gm, pos, path, pair, acc):
    """Newtonian acceleration of all bodies but the Sun at the eight nodes, written to ``acc``
    (3, 8).

    ``gm``, ``pos`` as of ``room_for_bodies``; ``path`` holds the nodes twice, as two bodies are
    taken at once; ``pair`` (3, 16) is scrap.
    """
    for i in range(3):
        for lane in range(PAIR):
            pair[i, lane] = 0.0
    for at in range(LANES, gm.size, PAIR):
        for lane in range(PAIR):
            dx = path[0, lane] - pos[0, at + lane]
            dy = path[1, lane] - pos[1, at + lane]
            dz = path[2, lane] - pos[2, at + lane]
            d2 = dx * dx + dy * dy + dz * dz
            f = gm[at + lane] / (d2 * math.sqrt(d2))
            pair[0, lane] -= f * dx
            pair[1, lane] -= f * dy
            pair[2, lane] -= f * dz
    for i in range(3):
        for j in range(LANES):
            acc[i, j] = pair[i, j] + pair[i, LANES + j]


@kernel(fastmath=_FAST)
def add_sun_relativity(gm, c, pos, vel, path, acc):
    """The Sun's first post-Newtonian acceleration at the eight nodes."""
    for j in range(LANES):
        x = path[0, j] - pos[0, j]
        y = path[1, j] - pos[1, j]
        z = path[2, j] - pos[2, j]
        vx = path[0, PAIR + j] - vel[0, j]
        vy = path[1, PAIR + j] - vel[1, j]
        vz = path[2, PAIR + j] - vel[2, j]
        r2 = x * x + y * y + z * z
        r = math.sqrt(r2)
        k = gm / (c * c * r2 * r)
        s = k * (4.0 * gm / r - (vx * vx + vy * vy + vz * vz))
        q = k * 4.0 * (x * vx + y * vy + z * vz)
        acc[0, j] += s * x + q * vx
        acc[1, j] += s * y + q * vy
        acc[2, j] += s * z + q * vz


@kernel()
def add_sun_relativity_partials(gm, c, x, v, gx, gv):
    """Partials of the Sun's post-Newtonian term, added to ``gx``, ``gv`` (3, 3)."""
    r2 = x[0] * x[0] + x[1] * x[1] + x[2] * x[2]
    r = math.sqrt(r2)
    rv = x[0] * v[0] + x[1] * v[1] + x[2] * v[2]
    v2 = v[0] * v[0] + v[1] * v[1] + v[2] * v[2]
    k = gm / (c * c * r2 * r)
    s = 4.0 * gm / r - v2
    for i in range(3):
        w = s * x[i] + 4.0 * rv * v[i]
        for j in range(3):
            gx[i, j] += k * (
                -4.0 * gm * x[i] * x[j] / (r2 * r) + 4.0 * v[i] * v[j] - 3.0 * w * x[j] / r2
            )
            gv[i, j] += k * (-2.0 * x[i] * v[j] + 4.0 * v[i] * x[j])
        gx[i, i] += k * s
        gv[i, i] += 4.0 * k * rv


@kernel()
def planet_accelerations(gm, parent, pos, acc):
    """Newtonian acceleration of each body that is not heliocentric in its series, due to the
    others.
    """
    n = 0
    while n < gm.size and parent[n] < 0:
        n += 1
    for i in range(n):
        ax = 0.0
        ay = 0.0
        az = 0.0
        for j in range(n):
            if j != i:
                dx = pos[i, 0] - pos[j, 0]
                dy = pos[i, 1] - pos[j, 1]
                dz = pos[i, 2] - pos[j, 2]
                d2 = dx * dx + dy * dy + dz * dz
                f = gm[j] / (d2 * math.sqrt(d2))
                ax -= f * dx
                ay -= f * dy
                az -= f * dz
        acc[i, 0] = ax
        acc[i, 1] = ay
        acc[i, 2] = az
    return n


@kernel()
def full_relativity(gm, parent, c, pos, vel, x, v, out, gx, gv, with_partials):
    """Einstein-Infeld-Hoffmann terms of a massless body at barycentric ``x``, ``v``.

    ``out`` (3,) receives the acceleration beyond Newton's; with ``with_partials`` the partials are
    added to ``gx`` and ``gv``.
    """
    nb = gm.size
    body_acc = np.empty((nb, 3))
    n = planet_accelerations(gm, parent, pos, body_acc)
    c2 = c * c
    potential = 0.0
    d_pot = np.zeros(3)
    for j in range(n):
        d2 = 0.0
        for i in range(3):
            d2 += (x[i] - pos[j, i]) ** 2
        near = math.sqrt(d2)
        potential += gm[j] / near
        for i in range(3):
            d_pot[i] -= gm[j] * (x[i] - pos[j, i]) / (d2 * near)
    v2 = v[0] * v[0] + v[1] * v[1] + v[2] * v[2]
    out[:] = 0.0
    d = np.empty(3)
    w = np.empty(3)
    b_x = np.empty(3)
    b_v = np.empty(3)
    for j in range(n):
        d2 = 0.0
        vj2 = 0.0
        vvj = 0.0
        dvj = 0.0
        daj = 0.0
        for i in range(3):
            d[i] = x[i] - pos[j, i]
            d2 += d[i] * d[i]
            vj2 += vel[j, i] * vel[j, i]
            vvj += v[i] * vel[j, i]
            dvj += d[i] * vel[j, i]
            daj += d[i] * body_acc[j, i]
        dist = math.sqrt(d2)
        f = gm[j] / (d2 * dist)
        own = 0.0
        for k in range(n):
            if k != j:
                s2 = 0.0
                for i in range(3):
                    s2 += (pos[j, i] - pos[k, i]) ** 2
                own += gm[k] / math.sqrt(s2)
        bracket = (
            -4.0 * potential - own + v2 + 2.0 * vj2 - 4.0 * vvj - 1.5 * dvj * dvj / d2 - 0.5 * daj
        ) / c2
        drag = 0.0
        for i in range(3):
            drag += d[i] * (4.0 * v[i] - 3.0 * vel[j, i])
            w[i] = v[i] - vel[j, i]
        for i in range(3):
            out[i] += (
                -f * d[i] * bracket
                + f * drag * w[i] / c2
                + 3.5 * gm[j] * body_acc[j, i] / (c2 * dist)
            )
        if with_partials:
            for i in range(3):
                b_x[i] = (
                    -4.0 * d_pot[i]
                    - 3.0 * dvj * vel[j, i] / d2
                    + 3.0 * dvj * dvj * d[i] / (d2 * d2)
                    - 0.5 * body_acc[j, i]
                ) / c2
                b_v[i] = (2.0 * v[i] - 4.0 * vel[j, i]) / c2
            for i in range(3):
                for k in range(3):
                    radial = -3.0 * d[k] / d2
                    gx[i, k] += -f * d[i] * (b_x[k] + radial * bracket)
                    gx[i, k] += f * w[i] * (4.0 * v[k] - 3.0 * vel[j, k] + radial * drag) / c2
                    gx[i, k] -= 3.5 * gm[j] * body_acc[j, i] * d[k] / (c2 * d2 * dist)
                    gv[i, k] += -f * d[i] * b_v[k] + f * w[i] * 4.0 * d[k] / c2
                gx[i, i] -= f * bracket
                gv[i, i] += f * drag / c2


@kernel()
def add_quadrupole(gm, j2_r2, pole, d, acc):
    """Quadrupole acceleration of an oblate body at the vector ``d`` from its centre."""
    d2 = d[0] * d[0] + d[1] * d[1] + d[2] * d[2]
    dist = math.sqrt(d2)
    s = (d[0] * pole[0] + d[1] * pole[1] + d[2] * pole[2]) / dist
    f = 1.5 * gm * j2_r2 / (d2 * d2)
    for i in range(3):
        acc[i] += f * ((5.0 * s * s - 1.0) * d[i] / dist - 2.0 * s * pole[i])


@kernel()
def add_quadrupole_partials(gm, j2_r2, pole, d, gx):
    """Partials of the quadrupole acceleration, added to ``gx``."""
    d2 = d[0] * d[0] + d[1] * d[1] + d[2] * d[2]
    z = d[0] * pole[0] + d[1] * pole[1] + d[2] * pole[2]
    d5 = d2 * d2 * math.sqrt(d2)
    k = 1.5 * gm * j2_r2
    # acceleration = k [ (5 z^2/d^7 - 1/d^5) d - 2 z/d^5 pole ]
    p = 5.0 * z * z / (d5 * d2) - 1.0 / d5
    for j in range(3):
        dp = (
            10.0 * z * pole[j] / (d5 * d2)
            - 35.0 * z * z * d[j] / (d5 * d2 * d2)
            + 5.0 * d[j] / (d5 * d2)
        )
        for i in range(3):
            gx[i, j] += k * (
                dp * d[i] - 2.0 * pole[i] * (pole[j] / d5 - 5.0 * z * d[j] / (d5 * d2))
            )
        gx[j, j] += k * p


@kernel()
def add_frame_dragging(gm, c, spin, pole, x, v, acc, gx, gv, with_partials):
    """The Sun's Lense-Thirring acceleration at heliocentric ``x``, ``v``; ``spin`` in au2/d."""
    r2 = x[0] * x[0] + x[1] * x[1] + x[2] * x[2]
    r = math.sqrt(r2)
    k = 2.0 * gm * spin / (c * c * r2 * r)
    xj = x[0] * pole[0] + x[1] * pole[1] + x[2] * pole[2]
    f = 3.0 * xj / r2
    for i in range(3):
        p = (i + 1) % 3
        q = (i + 2) % 3
        h = x[p] * v[q] - x[q] * v[p]
        vj = v[p] * pole[q] - v[q] * pole[p]
        acc[i] += k * (f * h + vj)
        if with_partials:
            for j in range(3):
                df = 3.0 * pole[j] / r2 - 2.0 * f * x[j] / r2
                gx[i, j] += k * (df * h - 3.0 * x[j] / r2 * (f * h + vj))
            gx[i, p] += k * f * v[q]
            gx[i, q] -= k * f * v[p]
            gv[i, q] += k * (f * x[p] - pole[p])
            gv[i, p] += k * (pole[q] - f * x[q])


@kernel()
def add_rare_terms(tab, phys, pos, vel, path, acc):
    """Full relativity, quadrupoles and frame dragging, as chosen, at the eight nodes."""
    nb = tab.gm.size
    all_pos = np.empty((nb, 3))
    all_vel = np.empty((nb, 3))
    x = np.empty(3)
    v = np.empty(3)
    h = np.empty(3)
    w = np.empty(3)
    d = np.empty(3)
    extra = np.empty(3)
    none = np.empty((3, 3))
    for j in range(LANES):
        bodies_of_lane(pos, j, all_pos)
        bodies_of_lane(vel, j, all_vel)
        for i in range(3):
            x[i] = path[i, j]
            v[i] = path[i, PAIR + j]
            h[i] = x[i] - all_pos[0, i]
            w[i] = v[i] - all_vel[0, i]
            extra[i] = 0.0
        if phys.relativity == RELATIVITY_ALL:
            full_relativity(
                tab.gm, tab.parent, phys.c_au_d, all_pos, all_vel, x, v, extra, none, none, False
            )
        if phys.sun_j2 != 0.0:
            add_quadrupole(tab.gm[0], phys.sun_j2, phys.sun_pole, h, extra)
        if phys.sun_spin != 0.0:
            add_frame_dragging(
                tab.gm[0], phys.c_au_d, phys.sun_spin, phys.sun_pole, h, w, extra, none, none, False
            )
        if phys.earth_row >= 0 and phys.earth_j2 != 0.0:
            for i in range(3):
                d[i] = x[i] - all_pos[phys.earth_row, i]
            if d[0] * d[0] + d[1] * d[1] + d[2] * d[2] < EARTH_ZONE_AU * EARTH_ZONE_AU:
                add_quadrupole(tab.gm[phys.earth_row], phys.earth_j2, EARTH_POLE, d, extra)
        for i in range(3):
            acc[i, j] += extra[i]


@kernel(fastmath=_FAST)
def has_rare_terms(phys, pos, path):
    """Whether a term of ``add_rare_terms`` counts over this step: one is chosen, or a node lies
    where the Earth's flattening is felt.
    """
    if phys.relativity == RELATIVITY_ALL or phys.sun_j2 != 0.0 or phys.sun_spin != 0.0:
        return True
    if phys.earth_row < 0 or phys.earth_j2 == 0.0:
        return False
    at = LANES * phys.earth_row
    for j in range(LANES):
        dx = path[0, j] - pos[0, at + j]
        dy = path[1, j] - pos[1, at + j]
        dz = path[2, j] - pos[2, at + j]
        if dx * dx + dy * dy + dz * dz < EARTH_ZONE_AU * EARTH_ZONE_AU:
            return True
    return False


@kernel()
def others_at_nodes(tab, gm, push, phys, active, pos, vel, path, pair, acc):
    """Acceleration (au/d2) beyond the Sun's Newtonian one at the eight nodes, written to ``acc``.

    ``path`` (3, 24): barycentric positions, the same again, velocities. ``active``: whether the
    activity window is open over this step.
    """
    planets_at_nodes(gm, pos, path, pair, acc)
    if phys.relativity == RELATIVITY_SUN:
        add_sun_relativity(tab.gm[0], phys.c_au_d, pos, vel, path, acc)
    if has_rare_terms(phys, pos, path):
        add_rare_terms(tab, phys, pos, vel, path, acc)
    add_thrust(push, tab.gm[0], active, pos, vel, path, acc)


@kernel(fastmath=_FAST)
def tides_at_nodes(gm, pos, path, pair, out):
    """Newtonian gradient of all bodies but the Sun at the eight nodes, and its slope.

    ``out`` (17, 8): the gradient's xx, yy, zz, xy, xz, yz; the third derivative's xxx, xxy, xxz,
    xyy, xyz, xzz, yyy, yyz, yzz, zzz, with acceleration to second order T_ijk d_j d_k / 2; and the
    sum of GM/d^5, the scale of the next order. ``gm``, ``pos`` as of ``room_for_bodies``; ``path``
    holds the nodes twice; ``pair`` (17 PAIR,) is scrap.
    """
    pair[:] = 0.0
    for at in range(LANES, gm.size, PAIR):
        for lane in range(PAIR):
            dx = path[0, lane] - pos[0, at + lane]
            dy = path[1, lane] - pos[1, at + lane]
            dz = path[2, lane] - pos[2, at + lane]
            d2 = dx * dx + dy * dy + dz * dz
            f = gm[at + lane] / (d2 * math.sqrt(d2))
            per = 1.0 / d2
            g = 3.0 * f * per
            q = 5.0 * g * per
            xx = dx * dx
            yy = dy * dy
            zz = dz * dz
            pair[lane] += g * xx - f
            pair[PAIR + lane] += g * yy - f
            pair[2 * PAIR + lane] += g * zz - f
            pair[3 * PAIR + lane] += g * dx * dy
            pair[4 * PAIR + lane] += g * dx * dz
            pair[5 * PAIR + lane] += g * dy * dz
            pair[6 * PAIR + lane] += (3.0 * g - q * xx) * dx
            pair[7 * PAIR + lane] += (g - q * xx) * dy
            pair[8 * PAIR + lane] += (g - q * xx) * dz
            pair[9 * PAIR + lane] += (g - q * yy) * dx
            pair[10 * PAIR + lane] -= q * dx * dy * dz
            pair[11 * PAIR + lane] += (g - q * zz) * dx
            pair[12 * PAIR + lane] += (3.0 * g - q * yy) * dy
            pair[13 * PAIR + lane] += (g - q * yy) * dz
            pair[14 * PAIR + lane] += (g - q * zz) * dy
            pair[15 * PAIR + lane] += (3.0 * g - q * zz) * dz
            pair[16 * PAIR + lane] += f * per
    for row in range(N_TIDES):
        for j in range(LANES):
            out[row, j] = pair[row * PAIR + j] + pair[row * PAIR + LANES + j]


@kernel()
def add_rare_partials(tab, phys, pos, vel, x, v, h, w, gx, gv):
    """Partials of the terms of ``add_rare_terms`` at one node, added to ``gx``, ``gv``."""
    scrap = np.zeros(3)
    if phys.relativity == RELATIVITY_ALL:
        full_relativity(tab.gm, tab.parent, phys.c_au_d, pos, vel, x, v, scrap, gx, gv, True)
    if phys.sun_j2 != 0.0:
        add_quadrupole_partials(tab.gm[0], phys.sun_j2, phys.sun_pole, h, gx)
    if phys.sun_spin != 0.0:
        add_frame_dragging(
            tab.gm[0], phys.c_au_d, phys.sun_spin, phys.sun_pole, h, w, scrap, gx, gv, True
        )
    if phys.earth_row >= 0 and phys.earth_j2 != 0.0:
        d = np.empty(3)
        for i in range(3):
            d[i] = x[i] - pos[phys.earth_row, i]
        if d[0] * d[0] + d[1] * d[1] + d[2] * d[2] < EARTH_ZONE_AU * EARTH_ZONE_AU:
            add_quadrupole_partials(tab.gm[phys.earth_row], phys.earth_j2, EARTH_POLE, d, gx)


@kernel()
def add_pressure_partials(srp, h, gx, out):
    """Radiation pressure per unit at heliocentric ``h`` into ``out`` (3,), its gradient to
    ``gx``.
    """
    r2 = h[0] * h[0] + h[1] * h[1] + h[2] * h[2]
    f = 1.0 / (r2 * math.sqrt(r2))
    for i in range(3):
        out[i] = f * h[i]
        gx[i, i] += srp * f
        for j in range(3):
            gx[i, j] -= 3.0 * srp * f * h[i] * h[j] / r2
