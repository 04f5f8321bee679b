"""Other orbits that explain the same arc: a scan for several minima of chi2.

Imports numpy, errors, sky, motion and this room. Between apparitions far apart the number of
revolutions may be uncertain, with a thrust more so, because it changes the period. The apparitions
are therefore linked anew, from the one that tells most outwards, along lines of variations (A.
Milani et al. 2005, A&A 431, 729). Deviation: with C the covariance of what is linked so far and X
the partials of the next records, the direction of the line is

    C^(1/2) v,    v the first eigenvector of C^(1/2)' X' X C^(1/2),

along which the foretold places of these records are most uncertain. It is followed in steps that
move those places by a few degrees; each step is corrected across the line so that what is linked
stays explained, and the line ends where it is not. Wherever the places come near the observed ones
the orbit is corrected for good, and every orbit that explains what is linked goes on to the next
apparition. The thrust has a wide Gaussian prior until the whole arc is linked, and none in the end.
All steps are taken in direction, its rate, logarithm of distance and its rate at the epoch, in
which the orbits that explain a short arc lie on a nearly straight line.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ngbound.blas import on_one_thread
from ngbound.errors import PropagationError
from ngbound.fit.least_squares import (
    Linearised,
    linearise,
    parameter_names,
    thrust_of,
)
from ngbound.fit.orbit_search import at_epoch
from ngbound.fit.solution import Fit
from ngbound.motion import (
    Orbit,
    Records,
    design_matrix,
    integrate_track,
    light_margin_d,
    partials_along,
    see,
)
from ngbound.sky import direction_to_angles, load_ephemeris

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

APPARITION_GAP_D = 100.0
REACH_SIGMA = 4.0
STEP_RAD = 0.12
LINEAR_RAD = 0.03
"""Foretold places known better than this need no walk."""
MOST_STEPS = 150
MOST_OFF_RAD = 0.3
"""A dip whose places lie further off than this is none."""
MOST_SIGMA = 0.25
"""Longest step along a line, in its standard deviations."""
OPEN_RAD = 0.3
"""Where foretold places are this uncertain in a second direction too, one line is not enough."""
MOST_DIPS = 16
MOST_ORBITS = 12
WORTH = 400.0
"""Orbits whose chi2 exceeds the best one's by more are given up on the way."""
RIVAL = 25.0
"""Up to so much more chi2 another minimum is a rival: 5 sigma in one parameter."""
THRUST_AU_D2 = 5e-9
"""Standard deviation of the prior of each thrust component, or twice the fitted one where that is
more. Comets have up to some 1e-8 (from memory)."""
LOOSE = np.array([1.0, 1.0, 3.0, 0.1, 0.1, 0.03])
"""rad, rad, 1, rad/d, rad/d, au/d: only keeps the covariance of a lone night finite."""
SWEEPS = 60
SETTLED = 0.02
LATE, SLOW = 15, 2.0
"""An orbit that the last so many sweeps improved by less in chi2 counts as a minimum."""
SAME_SIGMA = 0.5
APART = 0.25
"""Revolutions over the arc by which minima differ; what is nearer is the slope of one valley."""


@dataclass(frozen=True, eq=False)
class Minimum:
    """One orbit that explains the arc.

    Attributes
    ----------
    theta : (p,) state at the epoch of the fit, then the thrust
    chi2 : of the records that the fit kept, with its errors; where the valley is narrow and bent,
        up to about 2 above its very floor
    period_d : osculating period at that epoch; nan for an open orbit
    distance_sigma : from the fit, in its own standard errors
    """

    theta: Floats = field(repr=False)
    chi2: float
    period_d: float
    distance_sigma: float

    def to_dict(self) -> dict[str, Any]:
        """Plain values."""
        return {**vars(self), "theta": self.theta.tolist()}


@dataclass(frozen=True, eq=False)
class MinimaScan:
    """The minima of chi2 that a scan found.

    Attributes
    ----------
    fit : Fit
        About which the scan was made.
    minima : tuple of Minimum
        By chi2; that of the fit is among them.
    n_apparitions, n_starts : int
        Starts are the corrections tried.
    complete : bool
        False where an apparition foretells the next one so badly that the walk is too coarse, or
        open in two directions.
    """

    fit: Fit = field(repr=False)
    minima: tuple[Minimum, ...]
    n_apparitions: int
    n_starts: int
    complete: bool

    @property
    def best(self) -> Minimum:
        """The lowest."""
        return self.minima[0]

    @property
    def fit_is_best(self) -> bool:
        """Whether none lies lower than the fit."""
        return self.best.distance_sigma == 0.0

    @property
    def rivals(self) -> tuple[Minimum, ...]:
        """Others whose chi2 exceeds the lowest by less than 25."""
        return tuple(m for m in self.minima[1:] if m.chi2 - self.best.chi2 < RIVAL)

    def orbit(self, minimum: Minimum) -> Orbit:
        """The orbit of one of the minima."""
        fit = self.fit
        return Orbit(
            fit.orbit.epoch_tdb_d,
            minimum.theta[:6].copy(),
            thrust_of(minimum.theta, fit.thrust, fit.components),
            fit.orbit.forces,
        )

    @property
    def warning(self) -> str:
        """A sentence where the orbit is not the only one; "" else."""
        if not self.rivals:
            return ""
        one = self.rivals[0]
        count = len(self.rivals)
        return (
            f"The arc allows {count} other orbit{'s' if count > 1 else ''} "
            f"{self._what()} with a chi2 higher by less than {RIVAL:g} (the next by "
            f"{one.chi2 - self.best.chi2:.1f}, period {one.period_d:.1f} d instead of "
            f"{self.best.period_d:.1f} d): estimate, threshold and limit are those of one of them. "
            "Observations between the apparitions would tell."
        )

    def _what(self) -> str:
        return "with thrust" if self.fit.components else "without thrust"

    def to_dict(self) -> dict[str, Any]:
        """Plain values."""
        return {
            "n_apparitions": self.n_apparitions,
            "n_starts": self.n_starts,
            "complete": self.complete,
            "fit_is_best": self.fit_is_best,
            "minima": [{**m.to_dict(), "delta_chi2": m.chi2 - self.best.chi2} for m in self.minima],
            "warning": self.warning,
        }

    def __str__(self) -> str:
        count = len(self.minima)
        lines = [
            f"Minima of chi2 {self._what()}: {count} found from {self.n_starts} starts over "
            f"{self.n_apparitions} apparition{'s' if self.n_apparitions > 1 else ''}"
            f"{'' if self.complete else ', the scan is not complete'}"
        ]
        for m in self.minima if count > 1 else ():
            thrust = ", ".join(
                f"{name} {a:+.3g}"
                for name, a in zip(self.fit.names[6:], m.theta[6:].tolist(), strict=True)
            )
            lines.append(
                f"  chi2 {m.chi2:.2f} (+{m.chi2 - self.best.chi2:.2f}), period {m.period_d:.2f} d"
                f"{', ' + thrust if thrust else ''}{', the fit' if m.distance_sigma == 0 else ''}"
            )
        return "\n".join([*lines, *([self.warning] if self.warning else [])])


def apparitions(fit: Fit) -> tuple[Bools, ...]:
    """Kept records (n,) of each apparition, in order of time."""
    day = fit.records.tdb_d
    label = np.concatenate([[0], np.cumsum(np.diff(day) > APPARITION_GAP_D)])
    masks = (fit.keep & (label == number) for number in range(int(label[-1]) + 1))
    return tuple(mask for mask in masks if mask.any())


@on_one_thread
def scan_minima(fit: Fit, progress: Callable[[str], None] | None = None) -> MinimaScan:
    """Look for other orbits that explain the records a fit kept, with its errors.

    Parameters
    ----------
    fit : Fit
        With or without thrust.
    progress : callable, optional
        Is given a sentence now and then.
    """
    parts = apparitions(fit)
    walk = _Walk(fit)
    found = walk.link(parts, _most_telling(fit, parts), progress)
    minima = [_minimum(fit, fit.theta, fit.chi2)]
    for epoch_d, theta in found:
        other = walk.converge(epoch_d, theta)
        if other is not None and all(not _same(fit, other[1], m.theta) for m in minima):
            minima.append(_minimum(fit, other[1], other[0]))
    minima = _apart(minima, float(np.ptp(fit.records.tdb_d[fit.keep])))
    return MinimaScan(fit, tuple(minima), len(parts), walk.n_starts, walk.complete)


def _minimum(fit: Fit, theta: Floats, chi2: float) -> Minimum:
    off = theta - fit.theta
    orbit = Orbit(
        fit.orbit.epoch_tdb_d,
        theta[:6].copy(),
        thrust_of(theta, fit.thrust, fit.components),
        fit.orbit.forces,
    )
    period = orbit.elements().period_d
    return Minimum(theta, chi2, period, math.sqrt(max(float(off @ fit.normal @ off), 0.0)))


def _apart(minima: list[Minimum], span_d: float) -> list[Minimum]:
    """By chi2, each with a number of revolutions of its own; the fit itself stays."""
    out: list[Minimum] = []
    for m in sorted(minima, key=lambda m: m.chi2):
        turns = span_d / m.period_d
        alone = all(abs(turns - span_d / o.period_d) > APART for o in out)
        if m.distance_sigma == 0.0 or alone or not math.isfinite(turns):
            out.append(m)
    return out


def _same(fit: Fit, one: Floats, other: Floats) -> bool:
    off = one - other
    return float(off @ fit.normal @ off) < SAME_SIGMA**2


def _root(white: Floats) -> Floats:
    """A matrix R with R R' = (white' white)^-1, never squaring what is badly conditioned."""
    scale = np.linalg.norm(white, axis=0)
    _, s, vt = np.linalg.svd(white / scale, full_matrices=False)
    return (vt.T / np.maximum(s, s[0] * 1e-15)) / scale[:, None]


def _foretold(root: Floats, design: Floats) -> tuple[Floats, Floats]:
    """Uncertainty (p,) of foretold places, radians, largest first, and the steps (p, p) to it."""
    moved = design.reshape(-1, design.shape[-1]) @ root
    values, vectors = np.linalg.eigh(moved.T @ moved)
    size = np.sqrt(np.maximum(values[::-1], 0.0) / len(design))
    return size, root @ vectors[:, ::-1]


def _most_telling(fit: Fit, parts: tuple[Bools, ...]) -> int:
    """The apparition whose records alone tell most of the orbit: the bend of an arc is known as
    its length squared times the root of its number of records."""
    days = [float(np.ptp(fit.records.tdb_d[part])) for part in parts]
    told = [day**2 * math.sqrt(int(part.sum())) for day, part in zip(days, parts, strict=True)]
    return int(np.argmax(told))


class _Local:
    """Direction, rates and distance about a state, as an observer at the Earth's centre sees it."""

    def __init__(self, theta: Floats, epoch_d: float) -> None:
        self.theta = theta
        self.stand, self.drift = load_ephemeris().posvel("earth", epoch_d)
        rho, speed = theta[:3] - self.stand, theta[3:6] - self.drift
        self.far = float(np.linalg.norm(rho))
        self.toward = rho / self.far
        self.axes = np.linalg.svd(self.toward[None])[2][1:]
        self.radial = float(speed @ self.toward)
        self.turn = self.axes @ speed / self.far
        jacobian = np.eye(theta.size)
        jacobian[:6, :6] = 0.0
        jacobian[:3, :2] = jacobian[3:6, 3:5] = self.far * self.axes.T
        jacobian[:3, 2] = rho
        jacobian[3:6, 2] = self.far * (self.turn @ self.axes)
        jacobian[3:6, 5] = self.toward
        jacobian[3:6, :2] = self.radial * self.axes.T - self.far * np.outer(self.toward, self.turn)
        self.jacobian = jacobian

    def moved(self, step: Floats) -> Floats:
        """The parameters after a step in two directions, ln distance, their rates, and thrust."""
        out = self.theta + np.concatenate([np.zeros(6), step[6:]])
        line = self.toward + step[:2] @ self.axes
        length = float(np.linalg.norm(line))
        line = line / length
        far = self.far * np.exp(np.clip(step[2], -1.0, 1.0))
        turn = (self.turn + step[3:5]) @ self.axes
        turn = (turn - line * (line @ turn)) / length
        out[:3] = self.stand + far * line
        out[3:6] = self.drift + (self.radial + step[5]) * line + far * turn
        return out


class _Walk:
    """The steps of a scan, and what they cost."""

    def __init__(self, fit: Fit) -> None:
        self.fit = fit
        self.n_starts = 0
        self.first = fit.keep
        self.echoes = np.zeros(len(fit.records), dtype=bool)
        if fit.records.echoes is not None:
            self.echoes[fit.records.echoes.rows] = True
        self.complete = True
        thrust = np.maximum(THRUST_AU_D2, 2.0 * np.abs(fit.theta[6:]))
        self.centre = np.concatenate([np.zeros(6), fit.theta[6:]])
        self.tight = np.diag(np.concatenate([np.zeros(6), 1.0 / thrust]))[6:]
        self.prior = np.concatenate([1.0 / LOOSE, 1.0 / thrust])

    def link(
        self,
        parts: tuple[Bools, ...],
        first: int,
        progress: Callable[[str], None] | None,
    ) -> list[tuple[float, Floats]]:
        """Epoch and parameters of every orbit that explains all apparitions."""
        fit = self.fit
        epoch_d = float(np.mean(fit.records.tdb_d[parts[first]]))
        start = at_epoch(fit.theta, fit.orbit.epoch_tdb_d, epoch_d, fit.thrust, fit.orbit.forces)
        self.first = parts[first]
        mask = parts[first].copy()
        rest = [i for i in range(len(parts)) if i != first]
        orbits = [start]
        while rest and orbits:
            middle = [float(np.mean(fit.records.tdb_d[parts[i]])) for i in rest]
            reach = fit.records.tdb_d[mask]
            away = [max(reach[0] - day, day - reach[-1], 0.0) for day in middle]
            near = rest.pop(int(np.argmin(away)))
            mask = mask | parts[near]
            orbits = self._linked(orbits, epoch_d, mask, parts[near])
            if progress is not None:
                progress(
                    f"{len(orbits)} orbits explain {len(parts) - len(rest)} of {len(parts)} "
                    "apparitions"
                )
        return [(epoch_d, theta) for theta in orbits] if len(parts) > 1 else []

    def _linked(
        self, orbits: list[Floats], epoch_d: float, mask: Bools, new: Bools
    ) -> list[Floats]:
        """Orbits over the wider set of records."""
        found: list[tuple[float, Floats, Floats]] = []  # value, parameters, whitened design
        for theta in orbits:
            for start in self._starts(theta, epoch_d, mask, new):
                self.n_starts += 1
                solved = self._correct(start, epoch_d, mask, mask & ~new, self.tight)
                if solved is None:
                    continue
                _, there, white = solved
                if all(np.linalg.norm(white @ (there - o)) > SAME_SIGMA for _, o, _ in found):
                    found.append(solved)
        found.sort(key=lambda solved: solved[0])
        if len(found) > MOST_ORBITS:
            self.complete = False
        return [theta for value, theta, _ in found[:MOST_ORBITS] if value < found[0][0] + WORTH]

    def _starts(self, theta: Floats, epoch_d: float, mask: Bools, new: Bools) -> list[Floats]:
        """The dips of the distance of foretold from observed places along the line of variations,
        the given orbit first."""
        starts = [theta]
        old, angles = mask & ~new, new & ~self.echoes
        for sense in (1.0, -1.0) if angles.any() else ():
            line, away = self._line(theta, epoch_d, old, angles, sense)
            if len(line) < 3:
                continue
            off = np.array(away)
            dips = 1 + np.flatnonzero((off[1:-1] <= off[:-2]) & (off[1:-1] < off[2:]))
            dips = dips[off[dips] < MOST_OFF_RAD]
            starts += [line[i] for i in dips[np.argsort(off[dips])][:MOST_DIPS]]
            if len(dips) > MOST_DIPS:
                self.complete = False
        return starts

    def _line(
        self, theta: Floats, epoch_d: float, old: Bools, new: Bools, sense: float
    ) -> tuple[list[Floats], list[float]]:
        """Orbits along one sense of the line of variations, and how far foretold places then lie
        from the observed ones, radians."""
        noise = self.fit.noise.mask(old)
        line: list[Floats] = []
        away: list[float] = []
        ahead, bar = np.zeros(0), np.inf
        while len(line) < MOST_STEPS:
            try:
                here = self._linearise(theta, epoch_d, old)
                design, off_rad = self._foresee(theta, epoch_d, new)
            except PropagationError:
                return line, away
            local = _Local(theta, epoch_d)
            white = noise.whiten(here.design.reshape(-1, theta.size) @ local.jacobian)
            miss = noise.whiten(here.seen.ravel())
            root = _root(np.concatenate([white, np.diag(self.prior)]))
            size, steps = _foretold(root, design @ local.jacobian)
            if not line:
                if size[0] < LINEAR_RAD:
                    return [], []
                bar = float(miss @ miss) + REACH_SIGMA**2
                self.complete = self.complete and bool(size[1] < OPEN_RAD)
            elif float(miss @ miss) > bar:
                return line, away
            line.append(theta)
            away.append(off_rad)
            first = steps[:, 0] * self.prior
            turned = -1.0 if ahead.size and first @ ahead < 0.0 else 1.0
            ahead = turned * first
            pace = turned * sense * min(STEP_RAD / size[0], MOST_SIGMA)
            right = white.T @ miss + self.tight.T @ (self.tight @ (self.centre - theta))
            theta = local.moved(pace * steps[:, 0] + steps[:, 1:] @ (steps[:, 1:].T @ right))
        self.complete = False
        return line, away

    def _linearise(self, theta: Floats, epoch_d: float, mask: Bools) -> Linearised:
        fit = self.fit
        count = int(mask.sum())
        return linearise(
            theta, epoch_d, fit.records.subset(mask), fit.noise.mask(mask),
            np.ones(count, dtype=bool), fit.thrust, fit.components, fit.orbit.forces,
        )  # fmt: skip

    def _foresee(self, theta: Floats, epoch_d: float, rows: Bools) -> tuple[Floats, float]:
        """Partials (m, 2, p) of foretold places, each in its own tangent plane, and their root mean
        square distance from the observed ones, radians."""
        fit = self.fit
        records = fit.records.subset(rows)
        start = float(records.tdb_d.min()) - light_margin_d(records.observer_au, theta)
        track = integrate_track(
            epoch_d, theta[:6], start, records.end_d,
            thrust_of(theta, fit.thrust, fit.components), fit.orbit.forces,
        )  # fmt: skip
        sight = see(track, records)
        ra, dec = direction_to_angles(sight.rho_au)
        there = Records.from_angles(records.tdb_d, records.observer_au, ra, dec)
        cosine = np.sum(there.basis[:, 2] * records.basis[:, 2], axis=1)
        partials = partials_along(track, parameter_names(fit.components))
        off_rad = float(np.sqrt(np.mean(np.arccos(np.clip(cosine, -1.0, 1.0)) ** 2)))
        return design_matrix(sight, there, partials), off_rad

    def _correct(
        self, theta: Floats, epoch_d: float, mask: Bools, old: Bools, tight: Floats
    ) -> tuple[float, Floats, Floats] | None:
        """chi2, parameters and whitened design with the prior of the thrust (j, p); None if it
        fails."""
        noise = self.fit.noise.mask(mask)
        damping, here, value = 0.0, None, np.inf
        values: list[float] = []
        trial = theta
        for _ in range(SWEEPS):
            try:
                there = self._linearise(trial, epoch_d, mask)
            except PropagationError:
                there = None
            cost = float(np.sum((tight @ (trial - self.centre)) ** 2))
            new = np.inf if there is None else there.chi2 + cost
            if there is not None and new <= value:
                here, value, theta, damping = there, new, trial, 0.1 * damping
                local = _Local(theta, epoch_d)
                plain = noise.whiten(here.design.reshape(-1, theta.size))
                miss = noise.whiten(here.seen.ravel())
                white = np.concatenate([plain @ local.jacobian, tight])
                miss = np.concatenate([miss, tight @ (self.centre - theta)])
            elif here is None:
                return None
            else:
                damping = max(10.0 * damping, 1e-6)
            if np.linalg.norm(white @ _solved(white, miss, 0.0)) < SETTLED:
                return value, theta, plain
            values.append(value)
            step = _solved(white, miss, damping)
            trial = local.moved(step)
            aim = here.seen[old[mask]] - here.design[old[mask]] @ (local.jacobian @ step)
            trial = self._bent(trial, epoch_d, old, aim)
        # the floor of a narrow, bent valley is a minimum for the purpose, however slow the last bit
        return (value, theta, plain) if values[-LATE] - value < SLOW else None

    def _bent(self, theta: Floats, epoch_d: float, old: Bools, aim: Floats) -> Floats:
        """The parameters moved so that the old records have the residuals (m, 2) that linear theory
        aimed at: without it steps would have to creep along a narrow, bent valley."""
        try:
            here = self._linearise(theta, epoch_d, old)
        except PropagationError:
            return theta
        local, noise = _Local(theta, epoch_d), self.fit.noise.mask(old)
        white = noise.whiten(here.design.reshape(-1, theta.size) @ local.jacobian) / self.prior
        u, s, vt = np.linalg.svd(white, full_matrices=False)
        firm = s > 1.0
        firm[-1:] = False
        gain = np.where(firm, 1.0 / np.where(firm, s, 1.0), 0.0)
        missed = noise.whiten((here.seen - aim).ravel())
        return local.moved((vt.T @ (gain * (u.T @ missed))) / self.prior)

    def converge(self, epoch_d: float, theta: Floats) -> tuple[float, Floats] | None:
        """The minimum over the whole arc without any prior: chi2, and parameters at the epoch of
        the fit."""
        fit = self.fit
        free = np.zeros((0, theta.size))
        solved = self._correct(theta, epoch_d, fit.keep, self.first, free)
        if solved is None:
            return None
        chi2, there, _ = solved
        push = thrust_of(there, fit.thrust, fit.components)
        try:
            moved = at_epoch(there, epoch_d, fit.orbit.epoch_tdb_d, push, fit.orbit.forces)
        except PropagationError:
            return None
        return chi2, moved


def _solved(white: Floats, miss: Floats, damping: float) -> Floats:
    scale = np.linalg.norm(white, axis=0)
    u, s, vt = np.linalg.svd(white / scale, full_matrices=False)
    s = np.maximum(s, s[0] * 1e-15)
    return (vt.T @ (s / (s**2 + damping * s[0] ** 2) * (u.T @ miss))) / scale
