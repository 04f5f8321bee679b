"""The shared grid: everything about a reference orbit that its neighbours and its partials need.

A grid is a list of steps along a reference trajectory, each with the eight Radau nodes. At every
node stand the gradient of the acceleration, the second-order tide of the planets and the thrust per
unit of each component with its gradient. The variational equations are solved on it by collocation,
all columns at once.
"""

import math

import numpy as np
from numba import njit

from .bodies import bodies_at, bodies_of_lane, room_for_bodies
from .forces import other_partials, tides
from .laws import thrust_partials
from .layout import RELATIVITY_ALL, WINDOW_DISTANCE
from .radau import N_NODES, NODES, TO_POWERS, V_WEIGHTS, X_WEIGHTS, dense_many, find_step

# columns of a node's row
SUN = 0
GX = 3
THIRD = 12
GV = 22
UNIT = 31
UNIT_X = 40
UNIT_V = 67
EXTRA = 94
SCALE = 103
SECOND_PUSH = 104
SECOND_RELATIVITY = 105
JUMP = 106
ROW = 115


@njit(cache=True, error_model="numpy")
def tabulate(
    tab,
    push,
    phys,
    epoch_d,
    start,
    length,
    begin,
    power,
    n,
    forward,
    grid_tau,
    grid_h,
    grid_on,
    out,
):
    """Fill ``out`` (steps, 8, ROW) along a reference trajectory.

    ``grid_on`` (steps,): whether the thrust is on over each step.
    """
    every = phys.relativity == RELATIVITY_ALL
    nb = tab.gm.size
    pos = np.empty((nb, 3))
    vel = np.empty((nb, 3))
    lane_pos, lane_vel, polynomial, rates, interval, _ = room_for_bodies(tab)
    taus = np.empty(N_NODES)
    times = np.empty(N_NODES)
    states = np.empty((N_NODES, 6))
    gx = np.empty((3, 3))
    gv = np.empty((3, 3))
    third = np.empty(10)
    unit = np.empty((3, 3))
    unit_x = np.empty((3, 3, 3))
    unit_v = np.empty((3, 3, 3))
    extra = np.empty((3, 3))
    h = np.empty(3)
    w = np.empty(3)
    before = False
    for k in range(grid_tau.size):
        active = grid_on[k]
        for j in range(N_NODES):
            taus[j] = grid_tau[k] + grid_h[k] * NODES[j]
            times[j] = epoch_d + taus[j]
        dense_many(start, length, begin, power, n, forward, taus, states)
        bodies_at(tab, times, every, polynomial, rates, interval, lane_pos, lane_vel)
        for j in range(N_NODES):
            state = states[j]
            bodies_of_lane(lane_pos, j, pos)
            bodies_of_lane(lane_vel, j, vel)
            for i in range(3):
                for m in range(3):
                    gx[i, m] = 0.0
                    gv[i, m] = 0.0
            for i in range(10):
                third[i] = 0.0
            scale = tides(tab, pos, state[:3], 1, gx, third)
            other_partials(
                tab,
                push,
                phys,
                active,
                pos,
                vel,
                state[:3],
                state[3:],
                gx,
                gv,
                unit,
                unit_x,
                unit_v,
                extra,
            )
            row = out[k, j]
            r2 = 0.0
            for i in range(3):
                row[SUN + i] = state[i] - pos[0, i]
                r2 += row[SUN + i] * row[SUN + i]
            for i in range(10):
                row[THIRD + i] = third[i]
            for i in range(3):
                for m in range(3):
                    at = 3 * i + m
                    row[GX + at] = gx[i, m]
                    row[GV + at] = gv[i, m]
                    row[UNIT + at] = unit[i, m]
                    row[EXTRA + at] = extra[i, m]
                    row[JUMP + at] = 0.0
                    for n_axis in range(3):
                        row[UNIT_X + 3 * at + n_axis] = unit_x[i, m, n_axis]
                        row[UNIT_V + 3 * at + n_axis] = unit_v[i, m, n_axis]
            row[SCALE] = scale
            # sizes of the second-order terms that the neighbours leave out
            r = math.sqrt(r2)
            g = 0.0
            slope = 0.0
            for i in range(3):
                g += unit[0, i] ** 2
                for m in range(3):
                    slope += (unit_x[0, i, m] * r) ** 2
            if g > 0.0:
                row[SECOND_PUSH] = 0.5 * math.sqrt(g) * (1.0 + math.sqrt(slope / g)) ** 2 / r2
            else:
                row[SECOND_PUSH] = 0.0
            row[SECOND_RELATIVITY] = 30.0 * (tab.gm[0] / (phys.c_au_d * r2)) ** 2 / r
            if j == 0 and k > 0 and active != before and push.window_kind == WINDOW_DISTANCE:
                # where the distance switches the thrust, a shifted path meets the switch at another
                # time
                speed = 0.0
                for i in range(3):
                    h[i] = state[i] - pos[0, i]
                    w[i] = state[3 + i] - vel[0, i]
                    speed += h[i] * w[i] / math.sqrt(r2)
                thrust_partials(
                    push, tab.gm[0], active != before, h, w, unit, unit_x, unit_v, extra
                )
                sign = 1.0 if active else -1.0
                for i in range(3):
                    for m in range(3):
                        row[JUMP + 3 * i + m] = sign * unit[i, m] / speed
        before = active


@njit(cache=True, error_model="numpy")
def apply_jump(row, amounts, columns):
    """Change of the velocity columns (6, p) where a distance window switches the thrust.

    A path shifted by d meets the switch later by -(R . d) / r', and has the thrust that much longer
    or shorter.
    """
    r = math.sqrt(row[SUN] ** 2 + row[SUN + 1] ** 2 + row[SUN + 2] ** 2)
    for i in range(3):
        jump = (
            amounts[0] * row[JUMP + i]
            + amounts[1] * row[JUMP + 3 + i]
            + amounts[2] * row[JUMP + 6 + i]
        )
        if jump != 0.0:
            for c in range(columns.shape[1]):
                along = (
                    row[SUN] * columns[0, c]
                    + row[SUN + 1] * columns[1, c]
                    + row[SUN + 2] * columns[2, c]
                ) / r
                columns[3 + i, c] += jump * along


@njit(cache=True, error_model="numpy")
def variations(gm_sun, a_ref, columns, grid_h, nodes, begin, accel):
    """Solve the variational equations for the wanted parameters.

    ``columns`` (p,): parameter numbers as in ``layout.PARAMETERS``. ``begin`` (steps + 1, 6, p)
    receives the columns at the start of each step, ``accel`` (steps, 8, 3, p) their second
    derivatives at the nodes.
    """
    p = columns.size
    for i in range(6):
        for c in range(p):
            begin[0, i, c] = 0.0
    for c in range(p):
        if columns[c] < 6:
            begin[0, columns[c], c] = 1.0
    g = np.empty((N_NODES, 3, 3))
    gv = np.empty((N_NODES, 3, 3))
    force = np.zeros((N_NODES, 3, p))
    dx = np.empty((3, p))
    dv = np.empty((3, p))
    for k in range(grid_h.size):
        h = grid_h[k]
        apply_jump(nodes[k, 0], a_ref, begin[k])
        for j in range(N_NODES):
            row = nodes[k, j]
            r2 = row[SUN] ** 2 + row[SUN + 1] ** 2 + row[SUN + 2] ** 2
            f = gm_sun / (r2 * math.sqrt(r2))
            for i in range(3):
                for m in range(3):
                    at = 3 * i + m
                    g[j, i, m] = row[GX + at] + 3.0 * f * row[SUN + i] * row[SUN + m] / r2
                    gv[j, i, m] = row[GV + at]
                    for a in range(3):
                        g[j, i, m] += a_ref[a] * row[UNIT_X + 9 * a + at]
                        gv[j, i, m] += a_ref[a] * row[UNIT_V + 9 * a + at]
                g[j, i, i] -= f
            for c in range(p):
                which = columns[c]
                if which >= 6:
                    at = UNIT + 3 * (which - 6) if which < 9 else EXTRA + 3 * (which - 9)
                    for i in range(3):
                        force[j, i, c] = row[at + i]
        # start: the acceleration on a straight path
        for j in range(N_NODES):
            s = NODES[j]
            for i in range(3):
                for c in range(p):
                    total = force[j, i, c]
                    for m in range(3):
                        total += g[j, i, m] * (begin[k, m, c] + h * s * begin[k, 3 + m, c])
                        total += gv[j, i, m] * begin[k, 3 + m, c]
                    accel[k, j, i, c] = total
        previous = 1e300
        for _ in range(40):
            change = 0.0
            largest = 0.0
            for j in range(1, N_NODES):
                s = NODES[j]
                for i in range(3):
                    for c in range(p):
                        dx[i, c] = 0.0
                        dv[i, c] = 0.0
                    for m in range(N_NODES):
                        wx = X_WEIGHTS[j, m] * h * h
                        wv = V_WEIGHTS[j, m] * h
                        for c in range(p):
                            dx[i, c] += wx * accel[k, m, i, c]
                            dv[i, c] += wv * accel[k, m, i, c]
                    for c in range(p):
                        dx[i, c] += begin[k, i, c] + h * s * begin[k, 3 + i, c]
                        dv[i, c] += begin[k, 3 + i, c]
                for i in range(3):
                    for c in range(p):
                        total = force[j, i, c]
                        for m in range(3):
                            total += g[j, i, m] * dx[m, c] + gv[j, i, m] * dv[m, c]
                        change = max(change, abs(total - accel[k, j, i, c]))
                        largest = max(largest, abs(total))
                        accel[k, j, i, c] = total
            if change <= 1e-15 * largest or (change < 1e-12 * largest and change > 0.3 * previous):
                break
            previous = change
        for i in range(3):
            for c in range(p):
                px = 0.0
                pv = 0.0
                for m in range(N_NODES):
                    px += X_WEIGHTS[N_NODES, m] * accel[k, m, i, c]
                    pv += V_WEIGHTS[N_NODES, m] * accel[k, m, i, c]
                begin[k + 1, i, c] = begin[k, i, c] + h * (begin[k, 3 + i, c] + h * px)
                begin[k + 1, 3 + i, c] = begin[k, 3 + i, c] + h * pv


@njit(cache=True, error_model="numpy")
def node_columns(grid_h, begin, accel, out):
    """Columns of position and velocity at every node, ``out`` (steps, 8, 6, p)."""
    p = begin.shape[2]
    for k in range(grid_h.size):
        h = grid_h[k]
        for j in range(N_NODES):
            for i in range(3):
                for c in range(p):
                    px = 0.0
                    pv = 0.0
                    for m in range(N_NODES):
                        px += X_WEIGHTS[j, m] * accel[k, m, i, c]
                        pv += V_WEIGHTS[j, m] * accel[k, m, i, c]
                    out[k, j, i, c] = begin[k, i, c] + h * (NODES[j] * begin[k, 3 + i, c] + h * px)
                    out[k, j, 3 + i, c] = begin[k, 3 + i, c] + h * pv


@njit(cache=True, error_model="numpy")
def weights_at(s, wx, wv):
    """Weights (8,) of the node accelerations for position and velocity at the fraction ``s`` of a
    step.
    """
    for j in range(N_NODES):
        px = 0.0
        pv = 0.0
        for k in range(N_NODES - 1, -1, -1):
            px = px * s + TO_POWERS[k, j] / ((k + 1.0) * (k + 2.0))
            pv = pv * s + TO_POWERS[k, j] / (k + 1.0)
        wx[j] = px * s * s
        wv[j] = pv * s


@njit(cache=True, error_model="numpy")
def columns_at(grid_tau, grid_h, begin, accel, forward, taus, out):
    """Columns of the state, ``out`` (m, 6, p), at many ``taus``."""
    p = begin.shape[2]
    wx = np.empty(N_NODES)
    wv = np.empty(N_NODES)
    n = grid_h.size
    for t in range(taus.size):
        k = find_step(grid_tau, n, forward, taus[t])
        h = grid_h[k]
        s = (taus[t] - grid_tau[k]) / h
        weights_at(s, wx, wv)
        for i in range(3):
            for c in range(p):
                px = 0.0
                pv = 0.0
                for m in range(N_NODES):
                    px += wx[m] * accel[k, m, i, c]
                    pv += wv[m] * accel[k, m, i, c]
                out[t, i, c] = begin[k, i, c] + h * (s * begin[k, 3 + i, c] + h * px)
                out[t, 3 + i, c] = begin[k, 3 + i, c] + h * pv
