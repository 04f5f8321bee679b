"""A preliminary orbit from angles alone; imports constants, errors and motion.

Nothing is assumed about the orbit. Sub-arcs of several lengths are picked from the arc; in each,
candidates come from

- Gauss's method (gauss.py), every positive root of it;
- a scan over the two distances at the ends of the sub-arc, joined by Lambert's problem (the
  two-point variation of P. Herget 1965, AJ 70, 1; Y. Väisälä 1939, Mitt. Sternw. Turku 1 for the
  idea to assume what short arcs do not tell), over 0.001 .. 100 au;

and are refined by two-body differential correction (Levenberg-Marquardt, light time, Huber weights)
in topocentric coordinates, which keep the weakly and the well determined directions apart. The
solution is then carried to ever longer sub-arcs as long as two bodies describe them.

Deviations from the literature: Lambert over a grid instead of Herget's iteration; a mild prior
against speeds far above the escape value (it moves no well-determined orbit) keeps arcs of hours
from running away to a hyperbola.
"""

import math
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ngbound.constants import ARCSEC_RAD, C_AU_D, GM_SUN_AU3_D2, J2000_JD, OBLIQUITY_J2000_RAD
from ngbound.errors import FirstOrbitError, PropagationError
from ngbound.fit.gauss import gauss_orbits
from ngbound.motion import (
    CometaryElements,
    propagate_two_body,
    two_body_sightlines,
    two_point_scan,
)

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

NEAREST_AU = 0.001
FARTHEST_AU = 100.0
"""Range of topocentric distances that the scan goes through."""

_NIGHT_GAP_D = 0.3
_WINDOWS_D = ((10.0, 40.0), (40.0, 120.0), (3.0, 10.0), (120.0, 400.0), (0.0, 3.0))
_LONGEST_D = 1000.0
_HOPELESS_RAD = 120.0 * ARCSEC_RAD
_ATTEMPTS = 5
_MOST_WINDOWS = 7
_MOST_ROWS = 150
_SCAN_ROWS = 12
_EXCESS_WEIGHT = 3.0
_HUBER = 2.5
_REJECT = 6.0


@dataclass(frozen=True)
class Preliminary:
    """A preliminary orbit.

    Attributes
    ----------
    epoch_tdb_d : float
        Epoch, TDB days past J2000.0: that of an observation in the middle of the sub-arc.
    state : (6,) array
        Heliocentric ICRF position (au) and velocity (au/d).
    rms_arcsec : float
        Root mean square, over both coordinates, of the residuals of the rows used.
    chi2 : float
        Their sum of squares over sigma.
    method : str
        "Gauss" or "two-point scan", and the span it was started from.
    indices : (k,) int array
        Rows of the input that were used (outliers of the sub-arc left out).
    span_d : float
        Time from the first to the last row used.
    """

    epoch_tdb_d: float
    state: FloatArray
    rms_arcsec: float
    chi2: float
    method: str
    indices: IntArray = field(repr=False)
    span_d: float

    def elements(self) -> CometaryElements:
        """Heliocentric elements, ecliptic J2000."""
        return CometaryElements.from_state(self.epoch_tdb_d, self.state)

    def to_dict(self) -> dict[str, Any]:
        """The fields, JSON-able."""
        return {
            "epoch_tdb_d": self.epoch_tdb_d,
            "state": self.state.tolist(),
            "rms_arcsec": self.rms_arcsec,
            "chi2": self.chi2,
            "method": self.method,
            "indices": self.indices.tolist(),
            "span_d": self.span_d,
        }

    def __str__(self) -> str:
        k = self.elements()
        return (
            f"Preliminary orbit by {self.method}: JD {J2000_JD + self.epoch_tdb_d:.5f} TDB, "
            f"q = {k.q_au:.5f} au, e = {k.e:.5f}, i = {math.degrees(k.i_rad):.3f} deg, "
            f"rms {self.rms_arcsec:.3f} arcsec over {len(self.indices)} observations in "
            f"{self.span_d:.2f} d"
        )


@dataclass(frozen=True)
class _Sights:
    """Sightlines with what is needed to weigh a miss."""

    t: FloatArray
    u: FloatArray
    east: FloatArray
    north: FloatArray
    observer: FloatArray
    sigma: FloatArray  # (n, 2) radians
    rows: IntArray

    def take(self, which: NDArray[Any]) -> "_Sights":
        return _Sights(
            self.t[which],
            self.u[which],
            self.east[which],
            self.north[which],
            self.observer[which],
            self.sigma[which],
            self.rows[which],
        )

    def __len__(self) -> int:
        return len(self.t)

    @property
    def span_d(self) -> float:
        return float(self.t[-1] - self.t[0])

    def nights(self) -> IntArray:
        """Number of the night of every row, nights parted by gaps."""
        return np.concatenate([[0], np.cumsum(np.diff(self.t) > _NIGHT_GAP_D)]).astype(np.int64)

    def thinned(self, most: int) -> "_Sights":
        """At most so many rows, ends kept, the nights treated alike."""
        if len(self) <= most:
            return self
        nights = self.nights()
        rank = np.zeros(len(self), dtype=np.int64)
        for night in np.unique(nights):
            rows = np.flatnonzero(nights == night)
            # the ends of a night come before its inside
            order = np.concatenate([rows[:1], rows[-1:], rows[1:-1]])[: len(rows)]
            rank[order] = np.arange(len(rows))
        rank[[0, -1]] = -1
        limit = np.sort(rank)[most - 1]
        sure = np.flatnonzero(rank < limit)
        open_rows = np.flatnonzero(rank == limit)
        spread = np.linspace(0, len(open_rows) - 1, most - len(sure)).round().astype(np.int64)
        return self.take(np.sort(np.concatenate([sure, open_rows[np.unique(spread)]])))


@dataclass(frozen=True)
class _Solution:
    """A refined orbit on a set of sightlines."""

    epoch: float
    state: FloatArray
    sights: _Sights
    keep: NDArray[np.bool_]
    chi2: float
    rms_rad: float
    penalty: float
    method: str

    @property
    def reduced(self) -> float:
        return self.chi2 / max(1.0, 2.0 * self.keep.sum() - 6.0)


def preliminary_orbits(
    tdb_d: ArrayLike,
    ra_rad: ArrayLike,
    dec_rad: ArrayLike,
    observer_au: ArrayLike,
    sigma_rad: ArrayLike | None = None,
    *,
    max_candidates: int = 8,
    rng_seed: int = 20240229,
) -> list[Preliminary]:
    """Heliocentric two-body orbits that explain a sub-arc, the best first.

    Parameters
    ----------
    tdb_d : (n,) array
        Times of observation, TDB days past J2000.0, any order.
    ra_rad, dec_rad : (n,) array
        Astrometric right ascension and declination, ICRF.
    observer_au : (n, 3) array
        Heliocentric ICRF position of the observer.
    sigma_rad : scalar, (n,) or (n, 2) array
        Standard deviations (right ascension times cos dec, declination); 1 arcsec when left out.
    max_candidates : int
        At most so many are returned.
    rng_seed : int
        Seed of the choice of rows when the first choice meets outliers.

    Returns
    -------
    list of Preliminary, distinct; those that explain the longest sub-arc first, among equals by
    chi2 and a mild preference for bound orbits.

    Raises
    ------
    FirstOrbitError
        Fewer than three observations or three dates, numbers not finite, or no orbit found.
    """
    sights = _sights(tdb_d, ra_rad, dec_rad, observer_au, sigma_rad)
    rng = np.random.default_rng(rng_seed)
    found: list[_Solution] = []
    tried = 0
    for window in _windows(sights):
        if tried == _MOST_WINDOWS and not any(_acceptable(s) for s in found):
            break
        tried += 1
        grown = [_grow(sights, s) for s in _solve(window, rng)]
        found += grown
        good = [s for s in grown if _acceptable(s)]
        if good and _enough(sights, window, good):
            break
    near = [s for s in found if s.rms_rad < max(_HOPELESS_RAD, 20.0 * float(sights.sigma.max()))]
    ranked = _distinct(sorted(near, key=_merit), max_candidates)
    if not ranked:
        raise FirstOrbitError(
            f"No heliocentric orbit passes near {len(sights)} observations over "
            f"{sights.span_d:.2f} d in any of {tried} sub-arcs tried. Check that all records "
            "belong to one object and that dates and stations are right, or give an initial state.",
            n_observations=len(sights),
            span_d=sights.span_d,
        )
    return [_preliminary(sights, s) for s in ranked]


def _sights(
    tdb_d: ArrayLike, ra_rad: ArrayLike, dec_rad: ArrayLike,
    observer_au: ArrayLike, sigma_rad: ArrayLike | None,
) -> _Sights:  # fmt: skip
    t = np.atleast_1d(np.asarray(tdb_d, dtype=float))
    n = len(t)
    ra = np.asarray(ra_rad, dtype=float).reshape(-1)
    dec = np.asarray(dec_rad, dtype=float).reshape(-1)
    observer = np.asarray(observer_au, dtype=float).reshape(-1, 3)
    if not len(ra) == len(dec) == len(observer) == n:
        raise ValueError(
            f"Times ({n}), right ascensions ({len(ra)}), declinations ({len(dec)}) and observers "
            f"({len(observer)}) must be as many."
        )
    given = np.asarray(ARCSEC_RAD if sigma_rad is None else sigma_rad, dtype=float)
    if given.ndim == 1:
        given = given[:, None]
    sigma = np.broadcast_to(given, (n, 2)).copy()
    if n < 3:
        raise FirstOrbitError(
            f"An orbit from angles alone needs at least 3 observations, not {n}: "
            "add observations, or give an initial state.",
            n_observations=n,
        )
    finite = np.isfinite(t) & np.isfinite(ra) & np.isfinite(dec) & np.isfinite(observer).all(axis=1)
    finite &= np.isfinite(sigma).all(axis=1) & (sigma > 0).all(axis=1)
    if not finite.all():
        row = int(np.flatnonzero(~finite)[0])
        raise FirstOrbitError(
            f"Observation {row} has a time, angle, observer position or sigma that is not a finite "
            "number (or a sigma not above zero): leave it out or mend it.",
            row=row,
        )
    order = np.argsort(t, kind="stable")
    t, ra, dec, observer, sigma = t[order], ra[order], dec[order], observer[order], sigma[order]
    if len(np.unique(t)) < 3:
        raise FirstOrbitError(
            f"The {n} observations have only {len(np.unique(t))} different dates; an orbit needs "
            "at least 3: add observations, or give an initial state.",
            n_observations=n,
        )
    ca, sa, cd, sd = np.cos(ra), np.sin(ra), np.cos(dec), np.sin(dec)
    u = np.column_stack([cd * ca, cd * sa, sd])
    if float(np.linalg.norm(u - u[0], axis=1).max()) == 0:
        raise FirstOrbitError(
            f"All {n} observations show exactly the same direction: a body with no motion on the "
            "sky has no orbit. Check the right ascensions and declinations.",
            n_observations=n,
        )
    return _Sights(
        t,
        u,
        np.column_stack([-sa, ca, np.zeros(n)]),
        np.column_stack([-sd * ca, -sd * sa, cd]),
        observer,
        sigma,
        order.astype(np.int64),
    )


def _windows(sights: _Sights) -> Iterator[_Sights]:
    """Sub-arcs worth trying, the most promising first: well-filled windows of several lengths."""
    nights = sights.nights()
    t = sights.t
    n = len(t)
    seen: list[tuple[int, int]] = []
    if sights.span_d <= _WINDOWS_D[1][1]:
        seen.append((0, n))
        yield sights
    for shortest, longest in _WINDOWS_D:
        stop = np.searchsorted(t, t + longest, side="right")
        scored: list[tuple[float, int, int]] = []
        for i in np.flatnonzero(np.diff(nights, prepend=-1) > 0).tolist():
            j = int(stop[i])
            span = float(t[j - 1] - t[i])
            if len(np.unique(t[i:j])) < 3 or span < shortest:
                continue
            filled = min(len(np.unique(nights[i:j])), 8) + 0.5 * min(math.log2(j - i), 6.0)
            scored.append((-(filled + 4.0 * span / longest), i, j))
        taken = 0
        for _, i, j in sorted(scored):
            if any(_alike(t, (i, j), other) for other in seen):
                continue
            seen.append((i, j))
            yield sights.take(np.arange(i, j))
            taken += 1
            if taken == 2:
                break
    if (0, n) not in seen:
        yield sights


def _alike(t: FloatArray, one: tuple[int, int], two: tuple[int, int]) -> bool:
    """Whether two sub-arcs share more than two thirds of the time that either spans."""
    shared = t[min(one[1], two[1]) - 1] - t[max(one[0], two[0])]
    longer = max(t[one[1] - 1] - t[one[0]], t[two[1] - 1] - t[two[0]])
    return one == two or bool(shared > 0.67 * longer)


def _enough(sights: _Sights, window: _Sights, good: list[_Solution]) -> bool:
    """Whether the orbits found leave nothing to be gained from further sub-arcs."""
    whole = sights.span_d
    best = max(s.sights.span_d for s in good)
    return best >= min(0.999 * whole, 90.0) or (best >= 0.999 * window.span_d and best > 60.0)


def _acceptable(solution: _Solution) -> bool:
    """Whether two bodies describe the sub-arc at the level of its noise (or of two arcsec)."""
    kept = solution.keep.mean()
    return kept > 0.7 and (solution.reduced < 9.0 or solution.rms_rad < 1.5 * ARCSEC_RAD)


def _merit(solution: _Solution) -> tuple[float, ...]:
    """Sorting key: acceptable ones first, then by what they explain, then by chi2 and prior."""
    if not _acceptable(solution):
        return (1.0, 0.0, solution.rms_rad / float(solution.keep.mean()))
    explained = 2.0 * math.log2(max(solution.sights.span_d, 1e-3)) + math.log2(len(solution.keep))
    rejected = len(solution.keep) - int(solution.keep.sum())
    return (0.0, -round(explained), solution.chi2 + _REJECT**2 * rejected + solution.penalty)


def _distinct(solutions: list[_Solution], most: int) -> list[_Solution]:
    """The first of every group of orbits that are the same."""
    kept: list[_Solution] = []
    for s in solutions:
        if len(kept) == most:
            break
        same = False
        for k in kept:
            moved = propagate_two_body(s.state, k.epoch - s.epoch)
            scale_r = float(np.linalg.norm(k.state[:3]))
            scale_v = math.sqrt(GM_SUN_AU3_D2 / scale_r)
            same = bool(
                np.linalg.norm(moved[:3] - k.state[:3]) < 0.02 * scale_r
                and np.linalg.norm(moved[3:] - k.state[3:]) < 0.02 * scale_v
            )
            if same:
                break
        if not same:
            kept.append(s)
    return kept


def _preliminary(sights: _Sights, s: _Solution) -> Preliminary:
    """The public form, with every row of the span judged (the correction may have thinned them)."""
    lo, hi = s.sights.t[0], s.sights.t[-1]
    inside = sights.take((sights.t >= lo) & (sights.t <= hi))
    miss = _miss(inside, s.epoch, s.state)
    pulls = np.abs(miss / inside.sigma)
    keep = pulls.max(axis=1) < _REJECT * max(1.0, 1.4826 * float(np.median(pulls)))
    keep |= np.isin(inside.rows, s.sights.rows[s.keep])
    used = inside.take(keep)
    return Preliminary(
        epoch_tdb_d=s.epoch,
        state=s.state,
        rms_arcsec=math.sqrt(float((miss[keep] ** 2).mean())) / ARCSEC_RAD,
        chi2=float((pulls[keep] ** 2).sum()),
        method=s.method,
        indices=np.sort(used.rows),
        span_d=used.span_d,
    )


def _solve(window: _Sights, rng: np.random.Generator) -> list[_Solution]:
    """Orbits of one sub-arc, the best first."""
    rows = window.thinned(_MOST_ROWS)
    label = f"{window.span_d:.3g} d"
    solutions: list[_Solution] = []
    for attempt in range(_ATTEMPTS):
        starts: list[tuple[float, FloatArray, str]] = []
        for triple in _triples(rows, rng, attempt):
            picked = rows.take(triple)
            for pair in gauss_orbits(picked.t, picked.u, picked.observer):
                for state in pair:
                    distance = float(np.linalg.norm(state[:3] - picked.observer[1]))
                    starts.append((picked.t[1] - distance / C_AU_D, state, f"Gauss over {label}"))
        starts += [(t, s, f"two-point scan over {label}") for t, s in _scan(rows, rng, attempt)]
        for epoch, state, method in _best_starts(rows, starts, 8):
            fitted = _correct(rows, epoch, state, method)
            if fitted is not None:
                solutions.append(fitted)
        if any(_acceptable(s) for s in solutions) or len(rows) <= 3:
            break
        if attempt == 2 and not solutions:
            break
    solutions.sort(key=_merit)
    good = [s for s in solutions if _acceptable(s)]
    return _distinct(good or solutions, 4 if good else 2)


def _triples(rows: _Sights, rng: np.random.Generator, attempt: int) -> list[IntArray]:
    n = len(rows)
    middle = int(np.argmin(np.abs(rows.t - 0.5 * (rows.t[0] + rows.t[-1]))))
    middle = min(max(middle, 1), n - 2)
    if attempt == 0:
        out = [np.array([0, middle, n - 1])]
    else:
        out = []
    for _ in range(2 if n > 3 else 0):
        i = int(rng.integers(0, max(1, n // 3)))
        k = int(rng.integers(n - max(1, n // 3), n))
        if k - i > 1:
            out.append(np.array([i, int(rng.integers(i + 1, k)), k]))
    return out


def _best_starts(
    rows: _Sights, starts: list[tuple[float, FloatArray, str]], most: int
) -> list[tuple[float, FloatArray, str]]:
    """The starts with the smallest robust misfit."""
    few = rows.thinned(24)
    costs = []
    for epoch, state, _ in starts:
        miss = _miss(few, epoch, state)
        r = float(np.linalg.norm(state[:3]))
        excess = max(0.0, r * float(state[3:] @ state[3:]) / (2 * GM_SUN_AU3_D2) - 1.0)
        cost = float(np.log1p((miss / (3.0 * few.sigma)) ** 2).sum())
        costs.append(cost + (_EXCESS_WEIGHT * excess) ** 2 if math.isfinite(cost) else math.inf)
    order = np.argsort(costs, kind="stable")
    return [starts[k] for k in order[:most] if math.isfinite(costs[k])]


def _miss(sights: _Sights, epoch: float, state: FloatArray) -> FloatArray:
    """Observed minus computed (n, 2), radians on the tangent plane; far side counts as 2."""
    u, _ = two_body_sightlines(epoch, state, sights.t, sights.observer)
    off = sights.u - u
    return (
        np.column_stack(
            [np.einsum("ij,ij->i", off, sights.east), np.einsum("ij,ij->i", off, sights.north)]
        )
        + np.where(np.einsum("ij,ij->i", u, sights.u) < 0, 2.0, 0.0)[:, None]
    )


def _scan(rows: _Sights, rng: np.random.Generator, attempt: int) -> list[tuple[float, FloatArray]]:
    """Starts from the scan over the distances at two ends."""
    n = len(rows)
    if attempt == 0:
        first, last = 0, n - 1
    else:
        first = int(rng.integers(0, max(1, n // 4)))
        last = int(rng.integers(n - max(1, n // 4), n))
    if last <= first or rows.t[last] <= rows.t[first]:
        return []
    ends = rows.take(np.array([first, last]))
    few = rows.thinned(_SCAN_ROWS)
    dt = float(ends.t[1] - ends.t[0])
    rho1 = np.geomspace(NEAREST_AU, FARTHEST_AU, 64)
    r1 = np.linalg.norm(ends.observer[0] + rho1[:, None] * ends.u[0], axis=1)
    fastest = 1.2 * np.sqrt(2 * GM_SUN_AU3_D2 / r1) + 0.02
    linear = rho1[:, None] + np.linspace(-1, 1, 31) * (fastest * dt)[:, None]
    logs = np.broadcast_to(np.geomspace(NEAREST_AU, FARTHEST_AU, 40), (64, 40))
    rho2 = np.concatenate([linear, logs], axis=1)
    inside = (rho2 > 0.5 * NEAREST_AU) & (np.abs(rho2 - rho1[:, None]) <= (fastest * dt)[:, None])
    first_grid = np.broadcast_to(rho1[:, None], rho2.shape)[inside]
    second_grid = rho2[inside]
    width = 10.0 * ARCSEC_RAD

    def evaluate(one: FloatArray, two: FloatArray, long_way: bool) -> tuple[FloatArray, FloatArray]:
        return two_point_scan(
            one, two, (float(ends.t[0]), float(ends.t[1])), ends.u, ends.observer,
            few.t, few.u, few.observer, long_way=long_way, width_rad=width,
            excess_weight=_EXCESS_WEIGHT,
        )  # fmt: skip

    starts: list[tuple[float, FloatArray]] = []
    for long_way in (False, True) if dt > 40.0 else (False,):
        cost, _ = evaluate(first_grid, second_grid, long_way)
        taken: list[tuple[float, float]] = []
        speed = (second_grid - first_grid) / dt
        for k in np.argsort(cost, kind="stable"):
            if len(taken) == 6 or not math.isfinite(cost[k]):
                break
            place = (math.log(first_grid[k]), float(speed[k]))
            if any(abs(place[0] - a) < 0.4 and abs(place[1] - b) < 0.008 for a, b in taken):
                continue
            taken.append(place)
            start = _zoom(evaluate, float(first_grid[k]), float(speed[k]), dt, long_way)
            if start is not None:
                starts.append((float(ends.t[0]) - start[0] / C_AU_D, start[1]))
    return starts


def _zoom(
    evaluate: Any, rho: float, speed: float, dt: float, long_way: bool
) -> tuple[float, FloatArray] | None:
    """Close in on the minimum of the misfit in (log rho1, range rate) by shrinking grids."""
    half_log, half_speed = 0.15, 0.004
    steps = np.linspace(-1, 1, 7)
    best: tuple[float, FloatArray] | None = None
    for _ in range(9):
        one = (rho * np.exp(half_log * steps))[:, None] + np.zeros(7)
        two = one + dt * (speed + half_speed * steps)
        ok = (two > 0.2 * NEAREST_AU).ravel()
        one, two = one.ravel()[ok], two.ravel()[ok]
        if len(one) == 0:
            return best
        cost, states = evaluate(one, two, long_way)
        k = int(np.argmin(cost))
        if not math.isfinite(cost[k]):
            return best
        rho, speed = float(one[k]), float(two[k] - one[k]) / dt
        best = (rho, states[k])
        half_log *= 0.5
        half_speed *= 0.5
    return best


def _correct(
    sights: _Sights, epoch: float, state: FloatArray, method: str, rounds: int = 8
) -> _Solution | None:
    """Two-body differential correction with Huber weights, then rejection of what stands out."""
    middle = int(np.argmin(np.abs(sights.t - 0.5 * (sights.t[0] + sights.t[-1]))))
    new_epoch = float(sights.t[middle])
    try:
        state = propagate_two_body(state, new_epoch - epoch)
    except PropagationError:
        return None
    stand = sights.observer[middle]
    weight = np.ones((len(sights), 2))
    scale = 1.0
    keep = np.ones(len(sights), dtype=bool)
    for _ in range(rounds):
        stepped = _marquardt(sights, new_epoch, state, stand, weight)
        if stepped is None:
            return None
        state = stepped
        miss = _miss(sights, new_epoch, state)
        pulls = np.abs(miss / sights.sigma)
        size = pulls.max(axis=1)
        middling = float(np.median(pulls))
        if middling > 50.0 and float(np.median(np.abs(miss))) > _HOPELESS_RAD:
            return None
        if len(sights) > 4:
            # two-body misfit and optimistic sigmas both widen the scale
            scale = max(1.0, 1.4826 * middling)
        before = keep
        keep = size < _REJECT * scale
        if keep.sum() < max(3, 0.5 * len(sights)):
            keep = size <= np.quantile(size, 0.9)
        old_weight = weight
        weight = np.minimum(1.0, _HUBER * scale / np.maximum(pulls, 1e-12))
        weight[~keep] = 0.0
        settled = bool((keep == before).all()) and float(np.abs(weight - old_weight).max()) < 0.1
        if len(sights) <= 4 or settled:
            break
    miss = _miss(sights, new_epoch, state)
    if not np.isfinite(miss).all() or keep.sum() < 3:
        return None
    chi2 = float(((miss / sights.sigma)[keep] ** 2).sum())
    return _Solution(
        new_epoch,
        state,
        sights,
        keep,
        chi2,
        math.sqrt(float((miss[keep] ** 2).mean())),
        _penalty(state, stand),
        method,
    )


def _penalty(state: FloatArray, stand: FloatArray) -> float:
    """Chi2 equivalent of the preference for bound orbits that keep off the Sun and the observer."""
    r = float(np.linalg.norm(state[:3]))
    ratio = r * float(state[3:] @ state[3:]) / (2 * GM_SUN_AU3_D2)
    pole = np.cross(state[:3], state[3:])
    p = float(pole @ pole) / GM_SUN_AU3_D2
    rho = float(np.linalg.norm(state[:3] - stand))
    out = (_EXCESS_WEIGHT * max(0.0, ratio - 1.0)) ** 2
    if ratio > 1.02:
        out += 2.0
    if 0.5 * p < 0.02:
        out += 4.0
    if rho < 0.01:
        out += 4.0
    if rho > 60.0:
        out += 4.0
    return out


def _frame(direction: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Two unit vectors across a direction."""
    axis = np.zeros(3)
    axis[int(np.argmin(np.abs(direction)))] = 1.0
    one = np.cross(axis, direction)
    one /= np.linalg.norm(one)
    return one, np.cross(direction, one)


def _drift(stand: FloatArray) -> FloatArray:
    """Velocity (au/d) of an observer on a circular ecliptic orbit: only scales coordinates."""
    north = np.array([0.0, -math.sin(OBLIQUITY_J2000_RAD), math.cos(OBLIQUITY_J2000_RAD)])
    r = float(np.linalg.norm(stand))
    along = np.cross(north, stand)
    size = float(np.linalg.norm(along))
    return along / size * math.sqrt(GM_SUN_AU3_D2 / r) if size > 0 else np.zeros(3)


def _marquardt(
    sights: _Sights,
    epoch: float,
    state: FloatArray,
    stand: FloatArray,
    weight: FloatArray,
    most: int = 40,
) -> FloatArray | None:
    """Levenberg-Marquardt in (two angles, log distance, two angular rates, range rate)."""
    drift = _drift(stand)
    root = np.sqrt(weight) / sights.sigma

    def measure(trial: FloatArray) -> tuple[float, FloatArray, float]:
        r = float(np.linalg.norm(trial[:3]))
        excess = max(0.0, r * float(trial[3:] @ trial[3:]) / (2 * GM_SUN_AU3_D2) - 1.0)
        weighted = _miss(sights, epoch, trial) * root
        value = float((weighted**2).sum()) + (_EXCESS_WEIGHT * excess) ** 2
        return (value if math.isfinite(value) else math.inf), weighted, excess

    value, weighted, excess = measure(state)
    if not math.isfinite(value):
        return None
    damping = 1e-3
    for _ in range(most):
        _, partial = two_body_sightlines(epoch, state, sights.t, sights.observer, partials=True)
        look = state[:3] - stand
        rho = float(np.linalg.norm(look))
        look = look / rho
        a, d = _frame(look)
        relative = state[3:] - drift
        rate_a, rate_d = float(relative @ a) / rho, float(relative @ d) / rho
        rate_r = float(relative @ look)
        change = np.zeros((6, 6))
        change[:3, 0], change[:3, 1], change[:3, 2] = rho * a, rho * d, rho * look
        change[3:, 2] = rho * (rate_a * a + rate_d * d)
        change[3:, 3], change[3:, 4], change[3:, 5] = rho * a, rho * d, look
        by_state = np.stack(
            [
                np.einsum("ijk,ij->ik", partial, sights.east) * root[:, :1],
                np.einsum("ijk,ij->ik", partial, sights.north) * root[:, 1:],
            ],
            axis=1,
        ).reshape(-1, 6)
        design = by_state @ change
        right = weighted.reshape(-1)
        if excess > 0:
            r = float(np.linalg.norm(state[:3]))
            v = state[3:]
            slope = np.concatenate([float(v @ v) / r * state[:3], 2.0 * r * v])
            slope *= _EXCESS_WEIGHT / (2 * GM_SUN_AU3_D2)
            design = np.vstack([design, slope @ change])
            right = np.append(right, -_EXCESS_WEIGHT * excess)
        if not np.isfinite(design).all():
            return None
        size = np.linalg.norm(design, axis=0)
        size[size == 0] = 1.0
        u, s, vt = np.linalg.svd(design / size, full_matrices=False)
        projected = u.T @ right
        improved = False
        for _ in range(12):
            step = (vt.T @ (s / (s * s + damping) * projected)) / size
            # a step may at most double the distance
            step *= min(1.0, 0.7 / max(abs(step[2]), 1e-300))
            away = look + step[0] * a + step[1] * d
            away /= np.linalg.norm(away)
            far = rho * math.exp(step[2])
            trial = np.concatenate(
                [
                    stand + far * away,
                    drift
                    + far * ((rate_a + step[3]) * a + (rate_d + step[4]) * d)
                    + (rate_r + step[5]) * away,
                ]
            )
            new_value, new_weighted, new_excess = measure(trial)
            if new_value < value:
                improved = True
                break
            damping *= 6.0
        if not improved:
            break
        gain = value - new_value
        state, value, weighted, excess = trial, new_value, new_weighted, new_excess
        damping = max(damping * 0.1, 1e-14)
        if gain < 1e-4 * (1.0 + 0.01 * value) and damping < 1e-6 or gain < 1e-10 * (1 + value):
            break
    return state


def _grow(sights: _Sights, solution: _Solution) -> _Solution:
    """Carry a solution to longer and longer sub-arcs around its own, as long as two bodies do."""
    if not _acceptable(solution):
        return solution
    t = sights.t
    while True:
        lo, hi = solution.sights.t[0], solution.sights.t[-1]
        span = max(hi - lo, 0.02)
        reach = 0.6 * span
        inside = (t >= lo - reach) & (t <= hi + reach)
        if t[inside][-1] - t[inside][0] <= 1.001 * (hi - lo):
            # a gap: jump to the nearest observation outside, if it is not too far for the orbit
            gaps = [lo - t[t < lo][-1]] if (t < lo).any() else []
            gaps += [t[t > hi][0] - hi] if (t > hi).any() else []
            if not gaps or min(gaps) > 3.0 * span:
                return solution
            reach = 1.2 * min(gaps)
            inside = (t >= lo - reach) & (t <= hi + reach)
        wider = sights.take(inside)
        if wider.span_d > _LONGEST_D:
            return solution
        longer = _correct(
            wider.thinned(_MOST_ROWS), solution.epoch, solution.state, solution.method
        )
        if longer is None or not _acceptable(longer):
            return solution
        if longer.rms_rad > 1.3 * solution.rms_rad + 0.05 * ARCSEC_RAD and longer.reduced > 1.5:
            # the perturbations that two bodies lack begin to show
            return solution
        solution = longer
