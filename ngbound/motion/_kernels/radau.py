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
from numba import njit
from numpy.polynomial import polynomial
from scipy.special import roots_jacobi

from .bodies import all_positions
from .forces import acceleration
from .layout import INSIDE_BODY, NOT_CONVERGED, OK, RELATIVITY_ALL, STEP_UNDERFLOW, TOO_MANY_STEPS

N_NODES = 8
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
TO_POWERS = np.ascontiguousarray(_POWERS.T.astype(np.float64))
BINOMIAL = np.array(
    [[math.comb(j, k) for j in range(N_NODES)] for k in range(N_NODES)], dtype=np.float64
)


@njit(cache=True, error_model="numpy")
def local_time(gm, pos, x):
    """The shortest dynamical time sqrt(d^3 / GM) of the bodies around ``x``, days."""
    largest = 0.0
    for b in range(gm.size):
        d2 = 0.0
        for i in range(3):
            d2 += (x[i] - pos[b, i]) ** 2
        largest = max(largest, gm[b] / (d2 * math.sqrt(d2)))
    return 1.0 / math.sqrt(largest)


@njit(cache=True, error_model="numpy")
def inside_body(tab, pos, x):
    """Row of a body whose surface encloses ``x``, or -1."""
    for b in range(tab.gm.size):
        d2 = 0.0
        for i in range(3):
            d2 += (x[i] - pos[b, i]) ** 2
        if d2 < tab.radius[b] * tab.radius[b]:
            return b
    return -1


@njit(cache=True, error_model="numpy")
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
    pos = np.empty((N_NODES, nb, 3))
    vel = np.zeros((N_NODES, nb, 3))
    node = np.empty((N_NODES, 3))
    guess = np.zeros((N_NODES, 3))
    learnt = np.zeros((N_NODES, 3))
    coef = np.zeros((N_NODES, 3))
    x = np.empty(3)
    v = np.empty(3)
    acc = np.empty(3)
    x0 = state[:3].copy()
    v0 = state[3:].copy()
    lost = np.zeros(6)
    direction = 1.0 if tau_end >= 0.0 else -1.0
    every = phys.relativity == RELATIVITY_ALL
    eps = max(eps, EPS_FLOOR)
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
    fresh = True
    all_positions(tab, epoch_d, pos[0], vel[0], every)
    inside = inside_body(tab, pos[0], x0)
    if inside >= 0:
        met[0] = inside
        return INSIDE_BODY, 0, start, length, begin, power, on, met
    pace = local_time(tab.gm, pos[0], x0)
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
        for j in range(1, N_NODES):
            all_positions(tab, epoch_d + (tau + h * NODES[j]), pos[j], vel[j], every)
        for j in range(N_NODES):
            for i in range(3):
                node[j, i] = 0.0
        # sweep 0 takes the start alone and predicts the rest: the last step's polynomial continued,
        # plus what it missed by last time; then Gauss-Seidel sweeps over the nodes until nothing
        # moves
        previous = 1e300
        converged = False
        for sweep in range(15):
            change = 0.0
            largest = 0.0
            first = 0 if sweep == 0 else 1
            last = 1 if sweep == 0 else N_NODES
            for j in range(first, last):
                s = NODES[j]
                for i in range(3):
                    px = 0.0
                    pv = 0.0
                    for k in range(N_NODES):
                        px += X_WEIGHTS[j, k] * node[k, i]
                        pv += V_WEIGHTS[j, k] * node[k, i]
                    x[i] = x0[i] + h * (s * v0[i] + h * px)
                    v[i] = v0[i] + h * pv
                acceleration(tab, push, phys, active, pos[j], vel[j], x, v, acc)
                for i in range(3):
                    change = max(change, abs(acc[i] - node[j, i]))
                    largest = max(largest, abs(acc[i]))
                    node[j, i] = acc[i]
            if sweep == 0:
                q = 0.0 if fresh else h / last_h
                qk = 1.0
                for k in range(N_NODES):
                    for i in range(3):
                        total = 0.0
                        if not fresh:
                            for j in range(k, N_NODES):
                                total += BINOMIAL[k, j] * power[n - 1, j, i]
                        guess[k, i] = total * qk
                    qk *= q
                for j in range(1, N_NODES):
                    s = NODES[j]
                    for i in range(3):
                        total = 0.0
                        for k in range(N_NODES - 1, 0, -1):
                            total = (total + guess[k, i] + learnt[k, i]) * s
                        node[j, i] = node[0, i] + total
                continue
            # the next change is about this one times the last ratio
            if sweep > 1 and change * min(change / previous, 1.0) <= 1e-16 * largest:
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
                largest = max(largest, abs(node[j, i]))
            for k in range(N_NODES):
                total = 0.0
                for j in range(N_NODES):
                    total += TO_POWERS[k, j] * node[j, i]
                coef[k, i] = total
            tail = max(tail, abs(coef[N_NODES - 1, i]))
        ratio = tail / largest
        if not converged or not ratio < 1e300:
            factor = 0.25
        elif ratio > 0.0:
            factor = SAFETY * (eps / ratio) ** (1.0 / 7.0)
        else:
            factor = 4.0
        if (factor < 0.5 and abs(h) > SMOOTH * pace) or not converged:
            if abs(h) < 1e-9:
                met[1] = tau
                return NOT_CONVERGED, n, start, length, begin, power, on, met
            wanted = h * max(factor, 0.1)
            fresh = True
            for k in range(N_NODES):
                for i in range(3):
                    learnt[k, i] = 0.0
            continue
        if n >= n_max:
            met[1] = tau
            return TOO_MANY_STEPS, n, start, length, begin, power, on, met
        start[n] = tau
        length[n] = h
        on[n] = active
        for k in range(N_NODES):
            for i in range(3):
                power[n, k, i] = coef[k, i]
                learnt[k, i] = 0.0 if fresh else coef[k, i] - guess[k, i]
        for i in range(3):
            px = 0.0
            pv = 0.0
            for k in range(N_NODES):
                px += X_WEIGHTS[N_NODES, k] * node[k, i]
                pv += V_WEIGHTS[N_NODES, k] * node[k, i]
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
        all_positions(tab, epoch_d + tau, pos[0], vel[0], every)
        pace = local_time(tab.gm, pos[0], x0)
        inside = inside_body(tab, pos[0], x0)
        if inside >= 0:
            met[0] = inside
            met[1] = tau
            return INSIDE_BODY, n, start, length, begin, power, on, met
        if closing and limit == tau_end:
            return OK, n, start, length, begin, power, on, met
        if closing:
            fresh = True
            for k in range(N_NODES):
                for i in range(3):
                    learnt[k, i] = 0.0
            # a step cut short says little about the next
            wanted = direction * max(abs(wanted), abs(h) * min(factor, 4.0))
        else:
            wanted = h * min(factor, 4.0)
        wanted = direction * min(cap_d, max(abs(wanted), SMOOTH * pace))


@njit(cache=True, error_model="numpy")
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


@njit(cache=True, error_model="numpy")
def dense(start, length, begin, power, k, tau, out):
    """Barycentric state (6,) at ``tau`` from the polynomial of step ``k``."""
    h = length[k]
    s = (tau - start[k]) / h
    for i in range(3):
        px = 0.0
        pv = 0.0
        for j in range(N_NODES - 1, -1, -1):
            px = px * s + power[k, j, i] / ((j + 1.0) * (j + 2.0))
            pv = pv * s + power[k, j, i] / (j + 1.0)
        out[i] = begin[k, i] + h * s * (begin[k, 3 + i] + h * s * px)
        out[3 + i] = begin[k, 3 + i] + h * s * pv


@njit(cache=True, error_model="numpy")
def dense_many(start, length, begin, power, n, forward, taus, out):
    """Barycentric states (m, 6) at many ``taus``."""
    for i in range(taus.size):
        dense(start, length, begin, power, find_step(start, n, forward, taus[i]), taus[i], out[i])
