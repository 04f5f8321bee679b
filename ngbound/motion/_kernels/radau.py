"""Adaptive Gauss-Radau collocation of order 15, with dense output.

E. Everhart 1985, in Dynamics of Comets (Reidel), p. 185; step control and predictor after H. Rein &
D. S. Spiegel 2015, MNRAS 446, 1424. The acceleration over a step is the polynomial of degree 7
through eight nodes (the start and seven Radau points); here its node values are iterated with
integrated Lagrange weights instead of divided differences, which has the same fixed point. The
state is summed with compensation (W. Kahan 1965, Commun. ACM 8, 40), time is counted from the
epoch.
"""

import math

import numpy as np
from numpy.polynomial import polynomial
from scipy.special import roots_jacobi

from .bodies import bodies_at, bodies_of_lane, room_for_bodies
from .compiled import kernel
from .forces import others_at_nodes, sun_at_nodes
from .laws import PAIR
from .layout import INSIDE_BODY, NOT_CONVERGED, OK, RELATIVITY_ALL, STEP_UNDERFLOW, TOO_MANY_STEPS

N_NODES = 8
PATH = PAIR + N_NODES
MOST_SWEEPS = 30
SWEEPS_A_STEP = 20
"""Sweeps allowed for the average step, refused ones included; an ordinary step takes three or four.
"""
SETTLED = 1e-10
"""The sweeps over a step end when the acceleration rests within this part of eps."""
STEP_CAP_D = 40.0
EPS_FLOOR = 1e-11
SAFETY = 0.9
SMOOTH = 0.01
"""Below this part of the local dynamical time the last coefficient of a step is rounding, and the
step stands.
"""


def node_positions() -> np.ndarray:
    """The eight Radau nodes on [0, 1], the first at 0."""
    x, _ = roots_jacobi(N_NODES - 1, 0.0, 1.0)
    return np.concatenate([[0.0], np.sort(0.5 * (1.0 + x))])


def lagrange_powers(nodes: np.ndarray) -> np.ndarray:
    """Row j: power coefficients of the Lagrange polynomial that is one at node j."""
    rows = []
    exact = nodes.astype(np.longdouble)
    for j in range(nodes.size):
        p = np.array([1.0], dtype=np.longdouble)
        for i in range(nodes.size):
            if i != j:
                p = polynomial.polymul(p, np.array([-exact[i], 1.0])) / (exact[j] - exact[i])
        rows.append(p)
    return np.array(rows)


def integrated(powers: np.ndarray, s: np.ndarray, times: int) -> np.ndarray:
    """Weights [point, node] of the ``times``-fold integral from 0 to each point of ``s``."""
    out = powers
    for _ in range(times):
        out = np.array([polynomial.polyint(row) for row in out])
    return np.array([[polynomial.polyval(x, row) for row in out] for x in s.astype(np.longdouble)])


NODES = node_positions()
_POWERS = lagrange_powers(NODES)
_POINTS = np.concatenate([NODES, [1.0]])
V_WEIGHTS = np.ascontiguousarray(integrated(_POWERS, _POINTS, 1).astype(np.float64))
X_WEIGHTS = np.ascontiguousarray(integrated(_POWERS, _POINTS, 2).astype(np.float64))
ONCE = 1.0 / np.arange(1.0, N_NODES + 1.0)
TWICE = ONCE / np.arange(2.0, N_NODES + 2.0)
"""Factors of the powers of the acceleration in those of the velocity and of the position."""
TO_POWERS = np.ascontiguousarray(_POWERS.T.astype(np.float64))


@kernel()
def surroundings(tab, pos, x):
    """The shortest dynamical time sqrt(d^3 / GM) of the bodies around ``x``, days, and the row of a
    body whose surface encloses ``x``, or -1.
    """
    largest = 0.0
    inside = -1
    for b in range(tab.gm.size):
        dx = x[0] - pos[b, 0]
        dy = x[1] - pos[b, 1]
        dz = x[2] - pos[b, 2]
        d2 = dx * dx + dy * dy + dz * dz
        largest = max(largest, tab.gm[b] / (d2 * math.sqrt(d2)))
        if d2 < tab.radius[b] * tab.radius[b]:
            inside = b
    return 1.0 / math.sqrt(largest), inside


@kernel(fastmath={"contract", "nsz"})
def follow(weight, base, acc, path):
    """Positions, twice, and velocities at the nodes (3, 24) from accelerations (3, 8)."""
    for i in range(3):
        for lane in range(PATH):
            total = base[i, lane]
            for m in range(N_NODES):
                total += weight[m, lane] * acc[i, m]
            path[i, lane] = total


@kernel(fastmath={"contract", "nsz", "reassoc"})
def gap(a, b):
    """Sum of the absolute differences of two (3, 8) arrays."""
    total = 0.0
    for i in range(3):
        for j in range(N_NODES):
            total += abs(a[i, j] - b[i, j])
    return total


@kernel(fastmath={"contract", "nsz"})
def continued(power, q, out):
    """A step's acceleration polynomial (8, 3) at the nodes of the next step, ``q`` times as long,
    into ``out`` (3, 8).
    """
    for i in range(3):
        for j in range(N_NODES):
            s = 1.0 + q * NODES[j]
            total = power[N_NODES - 1, i]
            for k in range(N_NODES - 2, -1, -1):
                total = total * s + power[k, i]
            out[i, j] = total


@kernel()
def integrate(tab, push, phys, epoch_d, state, tau_end, eps, cap_d, breaks, first_active, n_max):
    """Integrate a barycentric state from the epoch (tau = 0) to ``tau_end`` days.

    Returns status, number of steps, and per step: start (tau, d), length (d, signed), start state
    (6), the power coefficients of the acceleration (8, 3) and whether the thrust was on; last, what
    was met when status is not OK (body row, tau). ``breaks`` are tau at which a step must end and
    the thrust switches; ``first_active``: whether it is on just after the epoch.
    """
    on = np.empty(n_max, dtype=np.bool_)
    active = first_active
    start = np.empty(n_max + 1)
    length = np.empty(n_max)
    begin = np.empty((n_max + 1, 6))
    power = np.empty((n_max, N_NODES, 3))
    met = np.zeros(2)
    nb = tab.gm.size
    pos, vel, polynomial, slope, interval, gm = room_for_bodies(tab)
    here = np.empty((2, nb, 3))
    there = np.empty((2, nb, 3))
    times = np.full(N_NODES, epoch_d)
    weight = np.empty((N_NODES, PATH))
    base = np.empty((3, PATH))
    path = np.empty((3, PATH))
    pair = np.empty((3, PAIR))
    node = np.zeros((3, N_NODES))
    guess = np.zeros((3, N_NODES))
    learnt = np.zeros((3, N_NODES))
    new = np.empty((3, N_NODES))
    others = np.empty((3, N_NODES))
    fresh_others = np.empty((3, N_NODES))
    nothing = np.zeros((3, N_NODES))
    coef = np.empty((N_NODES, 3))
    x0 = state[:3].copy()
    v0 = state[3:].copy()
    lost = np.zeros(6)
    direction = 1.0 if tau_end >= 0.0 else -1.0
    every = phys.relativity == RELATIVITY_ALL
    eps = max(eps, EPS_FLOOR)
    settled = min(max(SETTLED * eps, 1e-16), 1e-13)
    tau = 0.0
    tau_lost = 0.0
    n = 0
    start[0] = 0.0
    for i in range(3):
        begin[0, i] = x0[i]
        begin[0, 3 + i] = v0[i]
    if tau_end == 0.0:
        return OK, 0, start, length, begin, power, on, met
    last_h = 0.0
    sweeps = 0
    fresh = True
    bodies_at(tab, times, every, polynomial, slope, interval, pos, vel)
    bodies_of_lane(pos, 0, here[0])
    bodies_of_lane(vel, 0, here[1])
    pace, inside = surroundings(tab, here[0], x0)
    if inside >= 0:
        met[0] = inside
        return INSIDE_BODY, 0, start, length, begin, power, on, met
    wanted = direction * min(cap_d, 0.2 * pace)
    while True:
        # the step ends at the end, or at a break, where one is near
        limit = tau_end
        for i in range(breaks.size):
            b = breaks[i]
            if direction * (b - tau) > 1e-9 and direction * (limit - b) > 0.0:
                limit = b
        closing = False
        h = wanted
        if direction * (tau + 1.01 * h - limit) >= 0.0:
            h = limit - tau
            closing = True
        elif direction * (tau + 2.0 * h - limit) > 0.0:
            h = 0.5 * (limit - tau)
        if abs(h) < 1e-9 and not closing:
            met[1] = tau
            return STEP_UNDERFLOW, n, start, length, begin, power, on, met
        # the bodies at the end of the step in the first lane; then they give way to those of its
        # start
        times[0] = epoch_d + (tau + h)
        for j in range(1, N_NODES):
            times[j] = epoch_d + (tau + h * NODES[j])
        bodies_at(tab, times, every, polynomial, slope, interval, pos, vel)
        bodies_of_lane(pos, 0, there[0])
        bodies_of_lane(vel, 0, there[1])
        for body in range(nb):
            for i in range(3):
                pos[i, N_NODES * body] = here[0, body, i]
                vel[i, N_NODES * body] = here[1, body, i]
        for j in range(N_NODES):
            for i in range(3):
                base[i, j] = x0[i] + h * NODES[j] * v0[i]
                base[i, N_NODES + j] = base[i, j]
                base[i, PAIR + j] = v0[i]
            for m in range(N_NODES):
                weight[m, j] = h * h * X_WEIGHTS[j, m]
                weight[m, N_NODES + j] = weight[m, j]
                weight[m, PAIR + j] = h * V_WEIGHTS[j, m]
        # the last step's polynomial continued, plus what it missed by last time; then sweeps over
        # all nodes until nothing moves. What comes from other than the Sun rests earlier.
        if fresh:
            node[:] = 0.0
        else:
            continued(power[n - 1], h / last_h, guess)
            for i in range(3):
                for j in range(N_NODES):
                    node[i, j] = guess[i, j] + learnt[i, j]
        previous = 1e300
        ratio = 1.0
        moved = 1e300
        converged = False
        for sweep in range(MOST_SWEEPS):
            sweeps += 1
            follow(weight, base, node, path)
            sun_at_nodes(gm[0], pos, path, new)
            largest = gap(new, nothing)
            if moved * ratio > settled * largest:
                others_at_nodes(tab, gm, push, phys, active, pos, vel, path, pair, fresh_others)
                if sweep > 0:
                    moved = gap(fresh_others, others)
                for i in range(3):
                    for j in range(N_NODES):
                        others[i, j] = fresh_others[i, j]
            for i in range(3):
                for j in range(N_NODES):
                    new[i, j] += others[i, j]
            change = gap(new, node)
            for i in range(3):
                for j in range(N_NODES):
                    node[i, j] = new[i, j]
            # the next change is about this one times the last ratio
            ratio = min(change / previous, 1.0)
            if sweep > 1 and change * ratio <= settled * largest:
                converged = True
                break
            if change >= 0.5 * previous and change < 1e-13 * largest:
                converged = True
                break
            if not change < 1e3 * previous:
                break
            previous = change
        # the last power coefficient against the acceleration measures the step
        largest = 0.0
        tail = 0.0
        for i in range(3):
            for j in range(N_NODES):
                largest = max(largest, abs(node[i, j]))
            for k in range(N_NODES):
                total = 0.0
                for j in range(N_NODES):
                    total += TO_POWERS[k, j] * node[i, j]
                coef[k, i] = total
            tail = max(tail, abs(coef[N_NODES - 1, i]))
        size = tail / largest
        if not converged or not size < 1e300:
            factor = 0.25
        elif size > 0.0:
            factor = SAFETY * (eps / size) ** (1.0 / 7.0)
        else:
            factor = 4.0
        if (factor < 0.5 and abs(h) > SMOOTH * pace) or not converged:
            if sweeps > SWEEPS_A_STEP * n_max:
                met[1] = tau
                return TOO_MANY_STEPS, n, start, length, begin, power, on, met
            if abs(h) < 1e-9:
                met[1] = tau
                return NOT_CONVERGED, n, start, length, begin, power, on, met
            wanted = h * max(factor, 0.1)
            fresh = True
            learnt[:] = 0.0
            continue
        if n >= n_max or sweeps > SWEEPS_A_STEP * n_max:
            met[1] = tau
            return TOO_MANY_STEPS, n, start, length, begin, power, on, met
        start[n] = tau
        length[n] = h
        on[n] = active
        for i in range(3):
            for k in range(N_NODES):
                power[n, k, i] = coef[k, i]
                learnt[i, k] = 0.0 if fresh else node[i, k] - guess[i, k]
            px = 0.0
            pv = 0.0
            for k in range(N_NODES):
                px += X_WEIGHTS[N_NODES, k] * node[i, k]
                pv += V_WEIGHTS[N_NODES, k] * node[i, k]
            y = h * (v0[i] + h * px) - lost[i]
            total = x0[i] + y
            lost[i] = (total - x0[i]) - y
            x0[i] = total
            y = h * pv - lost[3 + i]
            total = v0[i] + y
            lost[3 + i] = (total - v0[i]) - y
            v0[i] = total
        last_h = h
        fresh = False
        n += 1
        if closing:
            if limit != tau_end:
                active = not active
            tau = limit
            tau_lost = 0.0
        else:
            y = h - tau_lost
            total = tau + y
            tau_lost = (total - tau) - y
            tau = total
        start[n] = tau
        for i in range(3):
            begin[n, i] = x0[i]
            begin[n, 3 + i] = v0[i]
        here, there = there, here
        pace, inside = surroundings(tab, here[0], x0)
        if inside >= 0:
            met[0] = inside
            met[1] = tau
            return INSIDE_BODY, n, start, length, begin, power, on, met
        if closing and limit == tau_end:
            return OK, n, start, length, begin, power, on, met
        if closing:
            fresh = True
            learnt[:] = 0.0
            # a step cut short says little about the next
            wanted = direction * max(abs(wanted), abs(h) * min(factor, 4.0))
        else:
            wanted = h * min(factor, 4.0)
        wanted = direction * min(cap_d, max(abs(wanted), SMOOTH * pace))


@kernel()
def find_step(start, n, forward, tau):
    """Row of the step that holds ``tau`` (clamped to the first and last)."""
    low = 0
    high = n - 1
    while low < high:
        mid = (low + high + 1) // 2
        before = start[mid] <= tau if forward else start[mid] >= tau
        if before:
            low = mid
        else:
            high = mid - 1
    return low


@kernel()
def path_powers(length, begin, power, k, out):
    """Power coefficients of position and velocity (9, 6) over step ``k``, in the step fraction."""
    h = length[k]
    for i in range(3):
        out[0, i] = begin[k, i]
        out[1, i] = h * begin[k, 3 + i]
        out[0, 3 + i] = begin[k, 3 + i]
        for j in range(N_NODES):
            out[j + 1, 3 + i] = power[k, j, i] * (h * ONCE[j])
            out[j + 2, i] = power[k, j, i] * (h * h * TWICE[j])
        out[N_NODES + 1, 3 + i] = 0.0


@kernel()
def dense_many(start, length, begin, power, n, forward, taus, out):
    """Barycentric states (m, 6) at many ``taus``; quickest where they are sorted."""
    c = np.empty((N_NODES + 2, 6))
    k = -1
    low = math.inf
    high = -math.inf
    for m in range(taus.size):
        tau = taus[m]
        if not low <= tau < high:
            k = find_step(start, n, forward, tau)
            low = min(start[k], start[k] + length[k])
            high = max(start[k], start[k] + length[k])
            path_powers(length, begin, power, k, c)
        s = (tau - start[k]) / length[k]
        x = c[N_NODES + 1, 0]
        y = c[N_NODES + 1, 1]
        z = c[N_NODES + 1, 2]
        vx = c[N_NODES, 3]
        vy = c[N_NODES, 4]
        vz = c[N_NODES, 5]
        for j in range(N_NODES, 0, -1):
            x = x * s + c[j, 0]
            y = y * s + c[j, 1]
            z = z * s + c[j, 2]
            vx = vx * s + c[j - 1, 3]
            vy = vy * s + c[j - 1, 4]
            vz = vz * s + c[j - 1, 5]
        out[m, 0] = x * s + c[0, 0]
        out[m, 1] = y * s + c[0, 1]
        out[m, 2] = z * s + c[0, 2]
        out[m, 3] = vx
        out[m, 4] = vy
        out[m, 5] = vz
