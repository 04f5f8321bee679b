"""Many neighbours of one reference orbit, sixteen at a time, on the shared grid.

Each lane integrates its offset from the reference (the method of J. F. Encke, Berliner Astron.
Jahrbuch für 1857) by the same collocation: the Sun's attraction exactly, the planets' to second
order in the offset, relativity and thrust to first order, thrust amounts exactly. A lane also sums
what these orders leave out; the caller sends lanes where that is not small to the adaptive
integrator.
"""

import math

import numpy as np

from .compiled import kernel
from .echoes import echo_residuals
from .grid import (
    GV,
    GX,
    SCALE,
    SECOND_PUSH,
    SECOND_RELATIVITY,
    SUN,
    THIRD,
    UNIT,
    UNIT_V,
    UNIT_X,
)
from .radau import N_NODES, NODES, V_WEIGHTS, X_WEIGHTS

LANES = 16
VECTOR = 3 * LANES
COLUMNS = 9
SWEEPS = 6
SETTLED_AU = 2e-15
_FAST = {"contract", "nsz", "nnan", "ninf", "arcp"}
_TIDE = np.array([[0, 3, 5, 1, 2, 4], [1, 6, 8, 3, 4, 7], [2, 7, 9, 4, 5, 8]])


@kernel(fastmath=_FAST)
def _offset_acceleration(gm_sun, row, d, w, da, amount, acc):
    """Second derivative of the offsets ``d`` (3 LANES,) with their velocities ``w``.

    ``da`` (3 LANES,): thrust of the lane less that of the reference; ``amount``: thrust of the
    lane. All arrays are flat, so that the compiler sees one run of lanes.
    """
    sx = row[SUN]
    sy = row[SUN + 1]
    sz = row[SUN + 2]
    r2 = sx * sx + sy * sy + sz * sz
    inv_r2 = 1.0 / r2
    f = gm_sun * inv_r2 / math.sqrt(r2)
    for lane in range(LANES):
        x = d[lane]
        y = d[LANES + lane]
        z = d[2 * LANES + lane]
        q = (x * (x + 2.0 * sx) + y * (y + 2.0 * sy) + z * (z + 2.0 * sz)) * inv_r2
        one = 1.0 + q
        root = one * math.sqrt(one)
        e = q * (3.0 + q * (3.0 + q)) / ((1.0 + root) * root)
        acc[lane] = f * (e * (sx + x) - x)
        acc[LANES + lane] = f * (e * (sy + y) - y)
        acc[2 * LANES + lane] = f * (e * (sz + z) - z)
    # rows of the tide's symmetric tensor, in the order xx, yy, zz, xy, xz, yz
    for i in range(3):
        txx = row[THIRD + _TIDE[i, 0]]
        tyy = row[THIRD + _TIDE[i, 1]]
        tzz = row[THIRD + _TIDE[i, 2]]
        txy = row[THIRD + _TIDE[i, 3]]
        txz = row[THIRD + _TIDE[i, 4]]
        tyz = row[THIRD + _TIDE[i, 5]]
        gx = row[GX + 3 * i]
        gy = row[GX + 3 * i + 1]
        gz = row[GX + 3 * i + 2]
        hx = row[GV + 3 * i]
        hy = row[GV + 3 * i + 1]
        hz = row[GV + 3 * i + 2]
        u1 = row[UNIT + i]
        u2 = row[UNIT + 3 + i]
        u3 = row[UNIT + 6 + i]
        for lane in range(LANES):
            x = d[lane]
            y = d[LANES + lane]
            z = d[2 * LANES + lane]
            acc[i * LANES + lane] += (
                (gx + 0.5 * txx * x + txy * y) * x
                + (gy + 0.5 * tyy * y + tyz * z) * y
                + (gz + 0.5 * tzz * z + txz * x) * z
                + hx * w[lane]
                + hy * w[LANES + lane]
                + hz * w[2 * LANES + lane]
                + u1 * da[lane]
                + u2 * da[LANES + lane]
                + u3 * da[2 * LANES + lane]
            )
        for c in range(3):
            at = UNIT_X + 9 * c + 3 * i
            px = row[at]
            py = row[at + 1]
            pz = row[at + 2]
            at = UNIT_V + 9 * c + 3 * i
            qx = row[at]
            qy = row[at + 1]
            qz = row[at + 2]
            for lane in range(LANES):
                acc[i * LANES + lane] += amount[c * LANES + lane] * (
                    px * d[lane]
                    + py * d[LANES + lane]
                    + pz * d[2 * LANES + lane]
                    + qx * w[lane]
                    + qy * w[LANES + lane]
                    + qz * w[2 * LANES + lane]
                )


@kernel(fastmath=_FAST)
def _places(begin, t, wx, wv, acc, d, w):
    """Offsets and their velocities (3 LANES,) ``t`` days into a step, from the weighted
    accelerations (8, 3 LANES) of its nodes.
    """
    for lane in range(VECTOR):
        px = begin[lane] + t * begin[VECTOR + lane]
        pv = begin[VECTOR + lane]
        for m in range(N_NODES):
            px += wx[m] * acc[m, lane]
            pv += wv[m] * acc[m, lane]
        d[lane] = px
        w[lane] = pv


@kernel(fastmath=_FAST, nogil=True)
def offsets_to_records(
    gm_sun,
    c_au_d,
    a_ref,
    grid_h,
    nodes,
    columns,
    step_of,
    weight,
    fraction_h,
    first,
    last,
    theta,
    out,
    doubt,
):
    """Offsets from the reference at the records of one direction of time, for one block of lanes.

    ``theta`` (9, LANES): parameter offsets (state, then thrust); ``columns`` (steps, 8, 6, 9) the
    linear solution at the nodes, used as the first guess. Records ``first`` to ``last`` of the
    sorted list lie in this direction; ``out`` (records, 6, LANES) receives their offsets, ``doubt``
    (2, LANES) the estimated error of position (au) and the last change of a sweep (au).
    """
    steps = grid_h.size
    begin = theta[:6].copy().reshape(6 * LANES)
    acc = np.zeros((N_NODES, VECTOR))
    d = np.zeros(VECTOR)
    w = np.zeros(VECTOR)
    new = np.zeros(VECTOR)
    da = np.zeros(VECTOR)
    amount = np.zeros(VECTOR)
    wx = np.empty(N_NODES)
    wv = np.empty(N_NODES)
    flat_theta = theta.reshape(theta.size)
    flat_out = out.reshape(out.shape[0], 6 * LANES)
    drift = np.zeros(LANES)
    change = np.zeros(LANES)
    for i in range(3):
        for lane in range(LANES):
            da[i * LANES + lane] = theta[6 + i, lane]
            amount[i * LANES + lane] = a_ref[i] + theta[6 + i, lane]
    record = first
    for k in range(steps):
        h = grid_h[k]
        # first guess from the linear solution
        for j in range(N_NODES):
            for i in range(3):
                for lane in range(LANES):
                    px = 0.0
                    pv = 0.0
                    for c in range(COLUMNS):
                        px += columns[k, j, i, c] * flat_theta[c * LANES + lane]
                        pv += columns[k, j, 3 + i, c] * flat_theta[c * LANES + lane]
                    d[i * LANES + lane] = px
                    w[i * LANES + lane] = pv
            if j == 0:
                for lane in range(VECTOR):
                    d[lane] = begin[lane]
                    w[lane] = begin[VECTOR + lane]
            _offset_acceleration(gm_sun, nodes[k, j], d, w, da, amount, acc[j])
        for _ in range(SWEEPS):
            for lane in range(LANES):
                change[lane] = 0.0
            for j in range(1, N_NODES):
                for m in range(N_NODES):
                    wx[m] = h * h * X_WEIGHTS[j, m]
                    wv[m] = h * V_WEIGHTS[j, m]
                _places(begin, NODES[j] * h, wx, wv, acc, d, w)
                _offset_acceleration(gm_sun, nodes[k, j], d, w, da, amount, new)
                for lane in range(LANES):
                    change[lane] = max(
                        change[lane],
                        abs(new[lane] - acc[j, lane]),
                        abs(new[LANES + lane] - acc[j, LANES + lane]),
                        abs(new[2 * LANES + lane] - acc[j, 2 * LANES + lane]),
                    )
                for lane in range(VECTOR):
                    acc[j, lane] = new[lane]
            worst = 0.0
            for lane in range(LANES):
                worst = max(worst, change[lane])
            if worst * h * h < SETTLED_AU:
                break
        # what the orders left out, at the last node
        row = nodes[k, N_NODES - 1]
        here2 = row[SUN] ** 2 + row[SUN + 1] ** 2 + row[SUN + 2] ** 2
        for lane in range(LANES):
            size2 = d[lane] ** 2 + d[LANES + lane] ** 2 + d[2 * LANES + lane] ** 2
            size = math.sqrt(size2)
            push = abs(amount[lane]) + abs(amount[LANES + lane]) + abs(amount[2 * LANES + lane])
            missing = 10.0 * row[SCALE] * size2 * size + size2 * (
                push * row[SECOND_PUSH] + row[SECOND_RELATIVITY]
            )
            drift[lane] += abs(h) * missing
            # and what a bent path adds over the change of the light time
            bend = 0.5 * gm_sun * size2 / (c_au_d * c_au_d * here2)
            doubt[0, lane] = max(doubt[0, lane] + abs(h) * drift[lane], bend)
            doubt[1, lane] = max(doubt[1, lane], change[lane] * h * h)
        while record < last and step_of[record] == k:
            row = flat_out[record]
            _places(
                begin,
                fraction_h[record],
                weight[record, 0],
                weight[record, 1],
                acc,
                row[:VECTOR],
                row[VECTOR:],
            )
            record += 1
        for m in range(N_NODES):
            wx[m] = h * h * X_WEIGHTS[N_NODES, m]
            wv[m] = h * V_WEIGHTS[N_NODES, m]
        _places(begin, h, wx, wv, acc, d, w)
        for lane in range(VECTOR):
            begin[lane] = d[lane]
            begin[VECTOR + lane] = w[lane]


@kernel(fastmath=_FAST, nogil=True)
def sight_residuals(c_au_d, rho, speed, basis, offset, out):
    """Observed minus computed direction of the lanes, radians in the tangent plane at the observed
    place.

    ``rho`` (n, 3) observer to object on the reference at its emission time, ``speed`` (n, 3) its
    velocity then, ``basis`` (n, 3, 3) rows east, north and the observed direction, ``offset`` (n,
    6, LANES) of position and velocity then; ``out`` (n, 2, LANES). A lane's own emission time
    follows from its longer or shorter path.
    """
    for k in range(rho.shape[0]):
        x = rho[k, 0]
        y = rho[k, 1]
        z = rho[k, 2]
        ref = math.sqrt(x * x + y * y + z * z)
        sx = speed[k, 0]
        sy = speed[k, 1]
        sz = speed[k, 2]
        ex = basis[k, 0, 0]
        ey = basis[k, 0, 1]
        ez = basis[k, 0, 2]
        nx = basis[k, 1, 0]
        ny = basis[k, 1, 1]
        nz = basis[k, 1, 2]
        ux = basis[k, 2, 0]
        uy = basis[k, 2, 1]
        uz = basis[k, 2, 2]
        row = offset[k].reshape(6 * LANES)
        seen = out[k].reshape(2 * LANES)
        for lane in range(LANES):
            dx = row[lane]
            dy = row[LANES + lane]
            dz = row[2 * LANES + lane]
            vx = sx + row[3 * LANES + lane]
            vy = sy + row[4 * LANES + lane]
            vz = sz + row[5 * LANES + lane]
            px = x + dx
            py = y + dy
            pz = z + dz
            far = math.sqrt(px * px + py * py + pz * pz)
            longer = dx * (px + x) + dy * (py + y) + dz * (pz + z)
            approach = c_au_d * far + px * vx + py * vy + pz * vz
            late = -longer * far / ((far + ref) * approach)
            px += vx * late
            py += vy * late
            pz += vz * late
            scale = -1.0 / (ux * px + uy * py + uz * pz)
            seen[lane] = (ex * px + ey * py + ez * pz) * scale
            seen[LANES + lane] = (nx * px + ny * py + nz * pz) * scale


@kernel(fastmath=_FAST, nogil=True)
def whitened_chi2(order, start, flat, flat_start, modes, residual, white, chi2):
    """chi2 (LANES,) of residuals (n, 2, LANES) whitened block by block.

    ``flat`` holds the lower-triangular factors;
    ``modes`` (k, 2n), columns in the order of the blocks: what the errors shared across blocks take
    off, |w|^2 - |modes w|^2. ``white`` (2n, LANES) is room for the whitened residuals.
    """
    for lane in range(LANES):
        chi2[lane] = 0.0
    row = 0
    for b in range(start.size - 1):
        first = start[b]
        m = 2 * (start[b + 1] - first)
        at = flat_start[b]
        for i in range(m):
            for lane in range(LANES):
                white[row, lane] = 0.0
            for j in range(i + 1):
                f = flat[at + i * m + j]
                k = order[first + j // 2]
                for lane in range(LANES):
                    white[row, lane] += f * residual[k, j % 2, lane]
            for lane in range(LANES):
                chi2[lane] += white[row, lane] * white[row, lane]
            row += 1
    if modes.shape[0] > 0:
        shared = np.dot(modes, white)
        for k in range(modes.shape[0]):
            for lane in range(LANES):
                chi2[lane] -= shared[k, lane] * shared[k, lane]


@kernel(nogil=True)
def batch(
    gm_sun,
    c_au_d,
    a_ref,
    back,
    ahead,
    rho,
    speed,
    basis,
    echoes,
    whiten,
    n_back,
    theta,
    want_residuals,
    chi2,
    doubt,
    residuals,
):
    """chi2 and doubt of many parameter offsets ``theta`` (m, p); m a multiple of LANES.

    ``back`` and ``ahead``: (grid_h, nodes, columns, step_of, weight, fraction_h) of the two
    directions of time; the records are sorted so that the first ``n_back`` lie before the epoch
    (latest first), the others after it. ``echoes``: what ``echo_residuals`` needs.
    """
    n = rho.shape[0]
    n_none = n - rho.shape[0]  # a variable: a literal would compile the kernel twice
    lanes = np.empty((COLUMNS, LANES))
    offset = np.zeros((n, 6, LANES))
    residual = np.zeros((n, 2, LANES))
    white = np.zeros((2 * n, LANES))
    unsure = np.empty((2, LANES))
    for block in range(theta.shape[0] // LANES):
        at = block * LANES
        for c in range(COLUMNS):
            for lane in range(LANES):
                lanes[c, lane] = theta[at + lane, c]
        unsure[:] = 0.0
        offsets_to_records(
            gm_sun,
            c_au_d,
            a_ref,
            back[0],
            back[1],
            back[2],
            back[3],
            back[4],
            back[5],
            n_none,
            n_back,
            lanes,
            offset,
            unsure,
        )
        offsets_to_records(
            gm_sun,
            c_au_d,
            a_ref,
            ahead[0],
            ahead[1],
            ahead[2],
            ahead[3],
            ahead[4],
            ahead[5],
            n_back,
            n,
            lanes,
            offset,
            unsure,
        )
        sight_residuals(c_au_d, rho, speed, basis, offset, residual)
        echo_residuals(
            c_au_d,
            echoes[0],
            echoes[1],
            echoes[2],
            echoes[3],
            echoes[4],
            echoes[5],
            speed,
            offset,
            residual,
        )
        whitened_chi2(
            whiten[0],
            whiten[1],
            whiten[2],
            whiten[3],
            whiten[4],
            residual,
            white,
            chi2[at : at + LANES],
        )
        for lane in range(LANES):
            doubt[at + lane, 0] = unsure[0, lane]
            doubt[at + lane, 1] = unsure[1, lane]
        if want_residuals:
            for k in range(n):
                for lane in range(LANES):
                    residuals[at + lane, k, 0] = residual[k, 0, lane]
                    residuals[at + lane, k, 1] = residual[k, 1, lane]
