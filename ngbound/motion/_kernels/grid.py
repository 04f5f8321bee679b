"""The shared grid: everything about a reference orbit that its neighbours and its partials need.

A grid is a list of steps along a reference trajectory, each with the eight Radau nodes. At every
node stand the gradient of the acceleration, the second-order tide of the planets and the thrust per
unit of each component with its gradient. The variational equations are solved on it by collocation,
all columns at once.
"""

import math

import numpy as np

from .bodies import bodies_at, bodies_of_lane, room_for_bodies
from .compiled import kernel
from .forces import (
    N_TIDES,
    add_pressure_partials,
    add_rare_partials,
    add_sun_relativity_partials,
    has_rare_terms,
    tides_at_nodes,
)
from .laws import PAIR, room_for_partials, thrust_partials
from .layout import RELATIVITY_ALL, RELATIVITY_SUN, WINDOW_DISTANCE
from .radau import (
    N_NODES,
    NODES,
    ONCE,
    TO_POWERS,
    TWICE,
    V_WEIGHTS,
    X_WEIGHTS,
    dense_many,
    find_step,
)

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

COLUMNS = 16
"""Places for the columns of the partials: more than there are parameters, and two whole vectors."""
WIDE = 3 * COLUMNS
_FAST = {"contract", "nsz", "nnan", "ninf", "arcp"}
_PATH_POWERS = np.hstack([TO_POWERS * TWICE[:, None], TO_POWERS * ONCE[:, None]])


@kernel()
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
    lane_pos, lane_vel, polynomial, rates, interval, gm = room_for_bodies(tab)
    taus = np.empty(N_NODES)
    times = np.empty(N_NODES)
    states = np.empty((N_NODES, 6))
    path = np.empty((3, PAIR))
    pair = np.empty(N_TIDES * PAIR)
    tide = np.empty((N_TIDES, N_NODES))
    gx = np.empty((3, 3))
    gv = np.empty((3, 3))
    h = np.empty(3)
    w = np.empty(3)
    pressure = np.empty(3)
    thrust = np.empty(SCALE - UNIT)
    room = room_for_partials()
    before = False
    for k in range(grid_tau.size):
        active = grid_on[k]
        for j in range(N_NODES):
            taus[j] = grid_tau[k] + grid_h[k] * NODES[j]
            times[j] = epoch_d + taus[j]
        dense_many(start, length, begin, power, n, forward, taus, states)
        bodies_at(tab, times, every, polynomial, rates, interval, lane_pos, lane_vel)
        for j in range(N_NODES):
            for i in range(3):
                path[i, j] = states[j, i]
                path[i, N_NODES + j] = states[j, i]
        tides_at_nodes(gm, lane_pos, path, pair, tide)
        rare = has_rare_terms(phys, lane_pos, path)
        for j in range(N_NODES):
            r2 = 0.0
            for i in range(3):
                h[i] = states[j, i] - lane_pos[i, j]
                w[i] = states[j, 3 + i] - lane_vel[i, j]
                r2 += h[i] * h[i]
                gx[i, i] = tide[i, j]
                for m in range(3):
                    gv[i, m] = 0.0
            gx[0, 1] = gx[1, 0] = tide[3, j]
            gx[0, 2] = gx[2, 0] = tide[4, j]
            gx[1, 2] = gx[2, 1] = tide[5, j]
            if phys.relativity == RELATIVITY_SUN:
                add_sun_relativity_partials(tab.gm[0], phys.c_au_d, h, w, gx, gv)
            if rare:
                bodies_of_lane(lane_pos, j, pos)
                bodies_of_lane(lane_vel, j, vel)
                add_rare_partials(tab, phys, pos, vel, states[j, :3], states[j, 3:], h, w, gx, gv)
            add_pressure_partials(push.srp, h, gx, pressure)
            thrust_partials(push, tab.gm[0], active, h, w, room, thrust)
            row = out[k, j]
            for i in range(3):
                row[SUN + i] = h[i]
                thrust[EXTRA - UNIT + 6 + i] = pressure[i]
                for m in range(3):
                    row[GX + 3 * i + m] = gx[i, m]
                    row[GV + 3 * i + m] = gv[i, m]
            for i in range(10):
                row[THIRD + i] = tide[6 + i, j]
            for i in range(SCALE - UNIT):
                row[UNIT + i] = thrust[i]
            row[SCALE] = tide[16, j]
            # sizes of the second-order terms that the neighbours leave out
            r = math.sqrt(r2)
            g = 0.0
            slope = 0.0
            for i in range(3):
                g += thrust[i] ** 2
                for m in range(3):
                    slope += (thrust[UNIT_X - UNIT + 3 * i + m] * r) ** 2
            row[SECOND_PUSH] = 0.0
            if g > 0.0:
                row[SECOND_PUSH] = 0.5 * math.sqrt(g) * (1.0 + math.sqrt(slope / g)) ** 2 / r2
            row[SECOND_RELATIVITY] = 30.0 * (tab.gm[0] / (phys.c_au_d * r2)) ** 2 / r
            for i in range(9):
                row[JUMP + i] = 0.0
            if j == 0 and k > 0 and active != before and push.window_kind == WINDOW_DISTANCE:
                # where the distance switches the thrust, a shifted path meets the switch at another
                # time
                radial_speed = (h[0] * w[0] + h[1] * w[1] + h[2] * w[2]) / r
                thrust_partials(push, tab.gm[0], active != before, h, w, room, thrust)
                sign = 1.0 if active else -1.0
                for i in range(9):
                    row[JUMP + i] = sign * thrust[i] / radial_speed
        before = active


@kernel()
def apply_jump(row, amounts, columns):
    """Change of the velocity columns (6 COLUMNS,) where a distance window switches the thrust.

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
            for c in range(COLUMNS):
                along = (
                    row[SUN] * columns[c]
                    + row[SUN + 1] * columns[COLUMNS + c]
                    + row[SUN + 2] * columns[2 * COLUMNS + c]
                ) / r
                columns[(3 + i) * COLUMNS + c] += jump * along


@kernel(fastmath=_FAST)
def column_paths(begin, t, wx, wv, accel, dx, dv):
    """Columns of position and velocity (3 COLUMNS,) ``t`` days into a step, from the weighted
    accelerations (8, 3 COLUMNS) of its nodes.
    """
    for at in range(WIDE):
        px = begin[at] + t * begin[WIDE + at]
        pv = begin[WIDE + at]
        for m in range(N_NODES):
            px += wx[m] * accel[m, at]
            pv += wv[m] * accel[m, at]
        dx[at] = px
        dv[at] = pv


@kernel(fastmath=_FAST)
def column_forces(g, gv, force, dx, dv, out):
    """Second derivatives of the columns (3 COLUMNS,) at one node."""
    for i in range(3):
        gx = g[i, 0]
        gy = g[i, 1]
        gz = g[i, 2]
        hx = gv[i, 0]
        hy = gv[i, 1]
        hz = gv[i, 2]
        for c in range(COLUMNS):
            out[i * COLUMNS + c] = (
                force[i * COLUMNS + c]
                + gx * dx[c]
                + gy * dx[COLUMNS + c]
                + gz * dx[2 * COLUMNS + c]
                + hx * dv[c]
                + hy * dv[COLUMNS + c]
                + hz * dv[2 * COLUMNS + c]
            )


@kernel(fastmath=_FAST)
def settle(new, old, change, size):
    """``old`` becomes ``new``; adds what changed and the size of each column."""
    for c in range(COLUMNS):
        for i in range(3):
            at = i * COLUMNS + c
            change[c] += abs(new[at] - old[at])
            size[c] += abs(new[at])
            old[at] = new[at]


@kernel()
def node_partials(gm_sun, a_ref, row, columns, g, gv, force):
    """Partials of the acceleration at one node with respect to position and velocity (3, 3), and
    those with respect to the wanted parameters, ``force`` (3 COLUMNS,).
    """
    r2 = row[SUN] ** 2 + row[SUN + 1] ** 2 + row[SUN + 2] ** 2
    f = gm_sun / (r2 * math.sqrt(r2))
    for i in range(3):
        for m in range(3):
            at = 3 * i + m
            g[i, m] = row[GX + at] + 3.0 * f * row[SUN + i] * row[SUN + m] / r2
            gv[i, m] = row[GV + at]
            for a in range(3):
                g[i, m] += a_ref[a] * row[UNIT_X + 9 * a + at]
                gv[i, m] += a_ref[a] * row[UNIT_V + 9 * a + at]
        g[i, i] -= f
    for c in range(columns.size):
        which = columns[c]
        if which >= 6:
            at = UNIT + 3 * (which - 6) if which < 9 else EXTRA + 3 * (which - 9)
            for i in range(3):
                force[i * COLUMNS + c] = row[at + i]


@kernel()
def variations(gm_sun, a_ref, columns, grid_h, nodes, begin, accel):
    """Solve the variational equations for the wanted parameters.

    ``columns`` (p,): parameter numbers as in ``layout.PARAMETERS``. ``begin`` (steps + 1, 2 WIDE)
    receives the columns at the start of each step, position then velocity, ``accel`` (steps, 8,
    WIDE) their second derivatives at the nodes. Each axis has COLUMNS places, the last ones idle.
    """
    begin[0] = 0.0
    for c in range(columns.size):
        if columns[c] < 6:
            begin[0, columns[c] * COLUMNS + c] = 1.0
    g = np.empty((N_NODES, 3, 3))
    gv = np.empty((N_NODES, 3, 3))
    force = np.zeros((N_NODES, WIDE))
    wx = np.zeros(N_NODES)
    wv = np.zeros(N_NODES)
    dx = np.empty(WIDE)
    dv = np.empty(WIDE)
    new = np.empty(WIDE)
    change = np.empty(COLUMNS)
    size = np.empty(COLUMNS)
    for k in range(grid_h.size):
        h = grid_h[k]
        at_start = begin[k]
        values = accel[k]
        values[:] = 0.0
        apply_jump(nodes[k, 0], a_ref, at_start)
        for j in range(N_NODES):
            node_partials(gm_sun, a_ref, nodes[k, j], columns, g[j], gv[j], force[j])
            # start: the acceleration on a straight path, or the last step's polynomial continued
            if k == 0 or j == 0:
                wx[:] = 0.0
                wv[:] = 0.0
                column_paths(at_start, NODES[j] * h, wx, wv, values, dx, dv)
                column_forces(g[j], gv[j], force[j], dx, dv, values[j])
            else:
                s = 1.0 + NODES[j] * h / grid_h[k - 1]
                for m in range(N_NODES):
                    total = 0.0
                    for i in range(N_NODES - 1, -1, -1):
                        total = total * s + TO_POWERS[i, m]
                    wv[m] = total
                combine(wv, accel[k - 1], values[j])
        previous = 1e300
        for sweep in range(40):
            change[:] = 0.0
            size[:] = 0.0
            for j in range(1, N_NODES):
                for m in range(N_NODES):
                    wx[m] = h * h * X_WEIGHTS[j, m]
                    wv[m] = h * V_WEIGHTS[j, m]
                column_paths(at_start, NODES[j] * h, wx, wv, values, dx, dv)
                column_forces(g[j], gv[j], force[j], dx, dv, new)
                settle(new, values[j], change, size)
            worst = 0.0
            for c in range(columns.size):
                if change[c] > worst * size[c]:
                    worst = change[c] / size[c]
            # the next change is about this one times the last ratio
            if sweep > 0 and worst * min(worst / previous, 1.0) <= 1e-16:
                break
            if worst < 1e-12 and worst > 0.3 * previous:
                break
            previous = worst
        for m in range(N_NODES):
            wx[m] = h * h * X_WEIGHTS[N_NODES, m]
            wv[m] = h * V_WEIGHTS[N_NODES, m]
        column_paths(at_start, h, wx, wv, values, begin[k + 1, :WIDE], begin[k + 1, WIDE:])


@kernel(fastmath=_FAST)
def combine(weight, values, out):
    """Weighted sum of eight rows of columns (8, WIDE)."""
    for at in range(WIDE):
        total = 0.0
        for m in range(N_NODES):
            total += weight[m] * values[m, at]
        out[at] = total


@kernel()
def unpack(dx, dv, out):
    """Columns of position and velocity (3 COLUMNS,) as the first columns of ``out`` (6, p)."""
    for i in range(3):
        for c in range(out.shape[1]):
            out[i, c] = dx[i * COLUMNS + c]
            out[3 + i, c] = dv[i * COLUMNS + c]


@kernel()
def node_columns(grid_h, begin, accel, out):
    """Columns of position and velocity at every node, ``out`` (steps, 8, 6, p)."""
    wx = np.empty(N_NODES)
    wv = np.empty(N_NODES)
    dx = np.empty(WIDE)
    dv = np.empty(WIDE)
    for k in range(grid_h.size):
        h = grid_h[k]
        for j in range(N_NODES):
            for m in range(N_NODES):
                wx[m] = h * h * X_WEIGHTS[j, m]
                wv[m] = h * V_WEIGHTS[j, m]
            column_paths(begin[k], NODES[j] * h, wx, wv, accel[k], dx, dv)
            unpack(dx, dv, out[k, j])


@kernel(fastmath=_FAST)
def weights_at(s, h, out):
    """Weights (16,) of the node accelerations for position, then velocity, at the fraction ``s`` of
    a step of ``h`` days.
    """
    for at in range(2 * N_NODES):
        total = 0.0
        for k in range(N_NODES - 1, -1, -1):
            total = total * s + _PATH_POWERS[k, at]
        out[at] = total
    for j in range(N_NODES):
        out[j] *= h * h * s * s
        out[N_NODES + j] *= h * s


@kernel()
def columns_at(grid_tau, grid_h, begin, accel, forward, taus, out):
    """Columns of the state, ``out`` (m, 6, p), at many ``taus``; quickest where they are sorted."""
    weight = np.empty(2 * N_NODES)
    wx = weight[:N_NODES]
    wv = weight[N_NODES:]
    dx = np.empty(WIDE)
    dv = np.empty(WIDE)
    n = grid_h.size
    k = -1
    s = 2.0
    at_start = begin[0]
    values = accel[0]
    for t in range(taus.size):
        if k >= 0:
            s = (taus[t] - grid_tau[k]) / grid_h[k]
        if not 0.0 <= s < 1.0:
            k = find_step(grid_tau, n, forward, taus[t])
            s = (taus[t] - grid_tau[k]) / grid_h[k]
            at_start = begin[k]
            values = accel[k]
        h = grid_h[k]
        weights_at(s, h, weight)
        column_paths(at_start, s * h, wx, wv, values, dx, dv)
        unpack(dx, dv, out[t])
