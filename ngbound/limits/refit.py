"""Make arcs with a known thrust and fit each again, many at once; may import errors, arc, fit and
this room.

An injected arc has the records, observers and error model of a fitted one. Its object moves on the
fitted orbit that goes with the injected thrust, integrated exactly. With r(theta) the exact
residuals of the real records and e the drawn noise, the residuals of the injected arc are

    r_i(theta) = r(theta) - r(theta_true) + e,

which leaves out how the tangent plane turns when the observed place moves by a few arcsec: below
1e-10 rad, 0.02 mas, at declinations under 75 degrees.

Coordinates: theta = theta_ref + S y with S = R^-1, Q R = C^(-1/2) D the whitened design of the
reference fit, the orbit's columns first, then the free thrust, then the thrust held at zero. In y
the reference has unit information, a held thrust is a constant y, and the linear solution is Q' e.

Each arc is fitted with and without thrust by C. F. Gauss's method, with exact residuals and the
partials of its own orbit: J0 + H (y - y0), with J0 and the second derivatives H taken by
differences of exact residuals about the injected truth (about its best orbit without thrust, for
the fit without); where that changes a column by more than a tenth, by central differences at the
arc's own orbit. A step that raises chi2 is halved, and an arc is done when its step is below 1e-3
sigma. Where the fit took its errors from the scatter of its residuals, each injected arc can have
its own errors in the same way. A rejected record is one more pair of free parameters, a shift of
its own, which is the same as leaving it out and keeps the whitening of its station-night.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import qr, solve_triangular

from ngbound.arc import Noise
from ngbound.errors import LimitError
from ngbound.fit import Fit, chi2_of_records, judge_in_turns, rescaled
from ngbound.limits.fit_protocol import ThrustFit
from ngbound.limits.information import ThrustInformation, thrust_information
from ngbound.motion import Atlas

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
Ints = NDArray[np.int64]

SETTLED = 1e-3
"""Step below which a fit is done, in sigma."""
DIFFERENCE = 0.5
"""Half-width of the differences that give the partials, in sigma."""
BENT = 0.1
"""Change of a whitened column from which an arc's partials are taken at its own orbit."""
FRAMES_KEPT = 4
MAX_SWEEPS = 12
MAX_HALVINGS = 12
LEAST_LEFT = 0.05
"""A share of a night's variance below this is not scaled up further: the fit went through it."""
FEW_DONORS = 5
"""A station with fewer nights borrows residuals from all nights."""
NOISES = ("model", "residuals")


@dataclass(frozen=True, eq=False)
class Refits:
    """What became of m injected arcs.

    Attributes
    ----------
    A_hat : (m, k) estimates, au/d2; nan where no fit was found
    covariance : (m, k, k) of each at its own solution, (au/d2)^2
    delta_chi2 : (m,) chi2 without less chi2 with thrust
    n_rejected : (m,) records the outlier rule took out of the fit with thrust
    failed : (m,) bool
    """

    A_hat: Floats
    covariance: Floats
    delta_chi2: Floats
    n_rejected: Ints
    failed: Bools


class Refitter(Protocol):
    """Whatever can make arcs with a thrust and fit them again."""

    components: str
    information: ThrustInformation

    @property
    def noise_dof(self) -> int | None:
        """Degrees of freedom behind the errors of the arcs; None where they are known."""
        ...

    @property
    def noise_excess(self) -> float:
        """Expected square of the errors of the arcs, as estimated, over the true one."""
        ...

    @property
    def choices(self) -> dict[str, Any]:
        """What else decides the results, JSON-able: work may only be resumed with the same."""
        ...

    def refit(self, A: Floats, streams: Sequence[np.random.SeedSequence]) -> Refits:
        """Fit arcs with the thrusts A (m, k), each with noise of its own random stream."""
        ...


@dataclass(frozen=True)
class LinearRefit:
    """Linear theory of a fit: the estimate scatters about the injected thrust with its covariance.

    Parameters
    ----------
    information : ThrustInformation
    """

    information: ThrustInformation

    noise_dof = None
    noise_excess = 1.0

    @property
    def choices(self) -> dict[str, Any]:
        """See `Refitter`."""
        return {}

    @classmethod
    def of(cls, fit: ThrustFit) -> "LinearRefit":
        """Linear theory of ``fit``."""
        return cls(thrust_information(fit))

    @property
    def components(self) -> str:
        """Letters of the free components."""
        return self.information.components

    def refit(self, A: Floats, streams: Sequence[np.random.SeedSequence]) -> Refits:
        """See `Refitter`."""
        info = self.information
        root = info.eigenvectors / np.sqrt(info.eigenvalues)
        z = np.array([np.random.default_rng(s).standard_normal(info.k) for s in streams])
        A_hat = A + z @ root.T
        m = len(A_hat)
        return Refits(
            A_hat,
            np.broadcast_to(info.covariance, (m, info.k, info.k)),
            np.einsum("mi,ij,mj->m", A_hat, info.matrix, A_hat),
            np.zeros(m, dtype=np.int64),
            np.zeros(m, dtype=bool),
        )


class ExactRefit:
    """Complete nonlinear injection and recovery on the records of a fit.

    Parameters
    ----------
    fit : Fit
        With thrust components; the records it kept are observed again.
    free : str, optional
        Components to fit; the others are held at zero. All that were fitted, by default.
    noise : str
        "model": drawn from the error model of the fit, errors shared by nights and by many nights
        included. "residuals": whole station-nights of the fit's own whitened residuals, drawn with
        replacement and random sign among the nights of the same station (of all stations where it
        has fewer than 5), in the order they were taken, each night given back what the fit
        absorbed of it (R. M. Bell & D. F. McCaffrey 2002, Survey Methodology 28, 169): most of that
        is in the means of the nights. Radar echoes are drawn from the error model.
    reject : bool
        Apply the outlier rule of the fit to each arc and hypothesis; the two are then compared
        over the records that either kept, as `ngbound.fit.compare_fits` does.

    rescale : bool, optional
        Rescale the errors of stations by the residuals of each arc, as the fit did. None: where
        few degrees of freedom are behind the errors of the fit, so that it matters; it takes ten
        times as long.

    Raises
    ------
    LimitError
        If the fit has no thrust, or a choice is out of its range.
    """

    def __init__(
        self,
        fit: Fit,
        *,
        free: str | None = None,
        noise: str = "model",
        reject: bool = False,
        rescale: bool | None = None,
    ) -> None:
        information = thrust_information(fit)
        free = fit.components if free is None else free
        if not free or any(c not in fit.components for c in free) or len(set(free)) < len(free):
            raise LimitError(
                f"The components to fit must be some of {fit.components}, each once; {free!r} was "
                "given.",
                free=free,
            )
        if noise not in NOISES:
            raise LimitError(
                f"The noise of an injection is one of {', '.join(NOISES)}; {noise!r} was given.",
                noise=noise,
            )
        self.fit, self.noise_kind, self.reject = fit, noise, reject
        self.rescale = fit.noise_dof is not None if rescale is None else rescale
        self.noise_dof = fit.noise_dof if self.rescale else None
        self.noise_excess = fit.noise_excess if self.rescale else 1.0
        self.components = "".join(c for c in fit.components if c in free)
        self.noise = fit.noise.mask(fit.keep)
        p, n_state = fit.theta.size, fit.n_state
        self.n = int(fit.keep.sum())
        self.design = np.asarray(fit.design).reshape(-1, 2, p)[fit.keep]
        held = [c for c in fit.components if c not in self.components]
        self.order = np.array(
            [*range(n_state)]
            + [n_state + fit.components.index(c) for c in [*self.components, *held]]
        )
        self.n_orbit, self.k = n_state, len(self.components)
        self.n_push = n_state + self.k
        white = self.noise.whiten(self.design.reshape(2 * self.n, p))[:, self.order]
        scale = np.linalg.norm(white, axis=0)
        self.q, r = qr(white / scale, mode="economic")
        self.to_y = r * scale
        self.to_theta = solve_triangular(r, np.eye(p)) / scale[:, None]
        self.design_y = self.design[:, :, self.order] @ self.to_theta
        self.theta_ref = np.asarray(fit.theta, dtype=float)[self.order]
        tail = self.to_y[n_state:, n_state:]
        self.y_null = np.zeros(p)
        self.y_null[n_state:] = -tail @ self.theta_ref[n_state:]
        self._tail = tail
        keep = [fit.components.index(c) for c in self.components]
        self.information = information
        if held:
            part = np.ix_(keep, keep)
            covariance = np.linalg.inv(information.matrix[part])
            values, vectors = np.linalg.eigh(information.matrix[part])
            self.information = ThrustInformation(
                self.components, information.A_hat[keep], information.matrix[part], covariance,
                values, vectors, information.orbit_names, information.correlation[keep],
                information.inflation_by_orbit[keep], np.ones(self.k), information.orbit,
            )  # fmt: skip
        self._frames: dict[bytes, _Frame] = {}
        self._blocks = self._block_roots()
        self._batches = self._same_size()
        self._donors = self._donor_nights() if noise == "residuals" else []
        self._there = self.noise.given.ravel()

    @property
    def choices(self) -> dict[str, Any]:
        """See `Refitter`."""
        return {"noise": self.noise_kind, "reject": self.reject, "rescale": self.rescale}

    # ------------------------------------------------------------------------------- noise

    def _block_roots(self) -> list[tuple[Ints, Floats]]:
        """Rows (2 m,) of each station-night and the Cholesky factor of its covariance, rad."""
        roots = []
        for b in range(int(self.noise.night.max()) + 1):
            rows = np.flatnonzero(self.noise.night == b)
            cov = self.noise.covariance_rad2(rows)
            size = np.sqrt(np.diag(cov))
            root = np.linalg.cholesky(cov / np.outer(size, size)) * size[:, None]
            roots.append((np.stack([2 * rows, 2 * rows + 1], axis=1).ravel(), root))
        return roots

    def _same_size(self) -> list[tuple[Ints, Floats]]:
        """The station-nights of each size together: rows (nb, 2 m) and factors (nb, 2 m, 2 m)."""
        sizes = sorted({rows.size for rows, _ in self._blocks})
        grouped = [[each for each in self._blocks if each[0].size == size] for size in sizes]
        return [
            (np.stack([rows for rows, _ in group]), np.stack([root for _, root in group]))
            for group in grouped
        ]

    def _donor_nights(self) -> list[list[Floats]]:
        """For each station-night the whitened residuals (2 m,) of the nights it may borrow."""
        white = self.noise.whiten(np.asarray(self.fit.seen)[self.fit.keep].ravel())
        station = self.fit.used.table["stn"].to_numpy()[self.fit.keep]
        of_block = [station[rows[0] // 2] for rows, _ in self._blocks]
        directions = [bool(self.noise.optical[rows[0] // 2]) for rows, _ in self._blocks]
        every = [_given_back(white[rows], self.q[rows]) for rows, _ in self._blocks]
        seen = [w for w, direct in zip(every, directions, strict=True) if direct]
        mine = {
            code: [
                w
                for w, c, direct in zip(every, of_block, directions, strict=True)
                if c == code and direct
            ]
            for code in set(of_block)
        }
        return [
            (mine[code] if len(mine[code]) >= FEW_DONORS else seen) if direct else []
            for code, direct in zip(of_block, directions, strict=True)
        ]

    def draw(self, random: np.random.Generator) -> Floats:
        """Noise (2n,) of one arc, radians."""
        noise = np.empty(2 * self.n)
        if self.noise_kind == "model":
            z = random.standard_normal(2 * self.n)
        else:
            z = np.empty(2 * self.n)
            for (rows, _), donors in zip(self._blocks, self._donors, strict=True):
                if not donors:
                    z[rows] = random.standard_normal(rows.size)
                    continue
                pieces: list[Floats] = []
                while sum(piece.size for piece in pieces) < rows.size:
                    pieces.append(
                        random.choice([-1.0, 1.0]) * donors[int(random.integers(len(donors)))]
                    )
                z[rows] = np.concatenate(pieces)[: rows.size]
        z = np.where(self._there, z, 0.0)
        for rows_of, roots in self._batches:
            noise[rows_of] = (roots @ z[rows_of][:, :, None])[:, :, 0]
        shared = self.noise.shared
        if shared is not None and self.noise_kind == "model":
            noise += shared.matrix @ random.standard_normal(len(shared))
        return noise

    # --------------------------------------------------------------------------------- fits

    def theta(self, y: Floats) -> Floats:
        """Parameters (m, p) in the order of the fit at y (m, p)."""
        thetas = np.empty_like(y)
        thetas[:, self.order] = self.theta_ref + y @ self.to_theta.T
        return thetas

    def frame(self, y: Floats, free: int) -> "_Frame":
        """Neighbourhood, partials and second derivatives about y (p,)."""
        key = y.tobytes() + bytes([free])
        if key not in self._frames:
            if len(self._frames) >= FRAMES_KEPT:
                self._frames.pop(next(iter(self._frames)))
            hood = self._hood_at(self.theta(y[None, :])[0], free)
            self._frames[key] = _Frame.about(self, hood, y, free)
        return self._frames[key]

    def _hood_at(self, theta: Floats, free: int) -> Atlas:
        """The fit's own neighbourhood moved to another orbit and thrust, and those about it."""
        own = self.fit.neighbourhood
        if not np.array_equal(theta, own.theta):
            own = own.moved_to(theta)
        root = np.zeros((theta.size, free))
        root[self.order] = self.to_theta[:, :free]
        return Atlas.around(own, root @ root.T)

    def seen(self, y: Floats, hood: Atlas) -> Floats:
        """Exact residuals (m, 2n) of the real records at y (m, p), radians."""
        _, seen = hood.chi2(self.theta(y), want_residuals=True)
        return np.asarray(seen).reshape(len(y), 2 * self.n)

    def whiten(self, rows: Floats) -> Floats:
        """Whitened residuals (m, 2n) of residuals (m, 2n)."""
        return np.ascontiguousarray(self.noise.whiten(np.ascontiguousarray(rows.T)).T)

    def refit(self, A: Floats, streams: Sequence[np.random.SeedSequence]) -> Refits:
        """See `Refitter`."""
        fitted = self.fit_both(A, streams)
        push, ok = fitted.push, fitted.push.ok
        at = slice(self.n_orbit, self.n_push)
        theta = self.theta_ref + push.y @ self.to_theta.T
        root = self.to_theta[at, at]
        covariance = np.full((len(A), self.k, self.k), np.nan)
        covariance[ok] = root @ np.linalg.inv(push.normal[ok])[:, at, at] @ root.T
        A_hat = theta[:, at]
        A_hat[~ok] = np.nan
        rejected = self.n - push.keep.sum(axis=1)
        return Refits(A_hat, covariance, np.where(ok, fitted.delta_chi2, np.nan), rejected, ~ok)

    def fit_both(self, A: Floats, streams: Sequence[np.random.SeedSequence]) -> "BothFits":
        """Fit arcs without and with thrust, and compare over the records that either kept."""
        m = len(A)
        y_true = np.tile(self.y_null, (m, 1))
        held = np.zeros((m, self.theta_ref.size - self.n_push))
        y_true[:, self.n_orbit :] += np.hstack([A, held]) @ self._tail.T
        same = bool(np.all(A == A[0]))
        centre = y_true[0].copy()
        if not same:
            centre[: self.n_push] = 0.0
        about = self.frame(centre, self.n_push)
        without = self.frame(self.y_null, self.n_orbit)
        noise = np.array([self.draw(np.random.default_rng(stream)) for stream in streams])
        if same:
            shift = noise - self.seen(y_true[:1], about.hood)
        else:
            shift = noise - self.seen(y_true, about.hood)
        white = self.whiten(noise)
        start_null = np.tile(self.y_null, (m, 1))
        start_null[:, : self.n_orbit] += white @ self.q[:, : self.n_orbit]
        start_push = y_true.copy()
        start_push[:, : self.n_push] += white @ self.q[:, : self.n_push]
        ok = np.all(np.isfinite(shift), axis=1)
        every = np.ones((m, self.n), dtype=bool)
        # as in the fit: judged by the stated errors first
        own = [self.fit.stated_noise.mask(self.fit.keep)] * m if self.rescale else None
        null = self._settle(start_null, without, shift, ok, every, self.reject, own)
        push = self._settle(start_push, about, shift, null.ok, every, self.reject, own)
        if self.rescale:
            null, _ = self._with_own_errors(null, without, shift)
            push, own = self._with_own_errors(push, about, shift)
        either = null.keep | push.keep
        differs = np.any(null.keep != either, axis=1) | self.rescale
        a = self._again(differs, either, null, without, shift, own)
        b = self._again(np.any(push.keep != either, axis=1), either, push, about, shift, own)
        push.ok &= a.ok & b.ok
        return BothFits(null, push, a.chi2 - b.chi2)

    def _settle(
        self,
        y: Floats,
        frame: "_Frame",
        shift: Floats,
        ok: Bools,
        keep: Bools,
        reject: bool,
        own: list[Noise] | None = None,
    ) -> "Minima":
        """Fit, and with the outlier rule judge by turns until the kept records no longer change."""
        found = self._minimise(y, frame, shift, ok, keep, own)
        if not reject:
            return found
        design = self.design_y[:, :, : frame.free]

        def fit_again(rows: Ints, kept: Bools) -> Floats:
            if not np.array_equal(kept, found.keep[rows]):
                part = self._minimise(
                    found.y[rows], frame, shift[rows], found.ok[rows], kept, _some(own, rows)
                )
                found.put(rows, part)
            seen = self.seen(found.y[rows], frame.hood) + shift[rows]
            seen = seen.reshape(len(rows), self.n, 2)
            if own is None:
                chi2 = chi2_of_records(seen, design, self.noise, kept)
            else:
                chi2 = np.concatenate(
                    [
                        chi2_of_records(seen[j : j + 1], design, own[i], kept[j : j + 1])
                        for j, i in enumerate(rows)
                    ]
                )
            chi2[~found.ok[rows]] = np.nan
            return chi2

        judge_in_turns(keep, frame.free, self.noise.count, fit_again)
        return found

    def _with_own_errors(
        self, found: "Minima", frame: "_Frame", shift: Floats
    ) -> tuple["Minima", list[Noise]]:
        """The fits with the errors of stations rescaled by the residuals of each arc: once before
        the records are judged for the last time, and once after."""
        fit = self.fit
        stations = fit.used.table["stn"].to_numpy(dtype=object)[fit.keep]
        stated = fit.stated_noise.mask(fit.keep)
        allowed = fit.error_model.rescalable(stated)
        design = self.design_y[:, :, : frame.free]
        own = [stated] * len(found.y)
        for reject in (self.reject, False):
            seen = (self.seen(found.y, frame.hood) + shift).reshape(-1, self.n, 2)
            own = [
                rescaled(
                    seen[i], design, stated, found.keep[i], stations, allowed,
                    fit.error_model.rescale_least,
                )[0]
                if found.ok[i] else stated
                for i in range(len(seen))
            ]  # fmt: skip
            found = self._settle(found.y, frame, shift, found.ok, found.keep, reject, own)
        return found, own

    def _again(
        self,
        which: Bools,
        keep: Bools,
        found: "Minima",
        frame: "_Frame",
        shift: Floats,
        own: list[Noise] | None,
    ) -> "Minima":
        """Some of the fits over other records or with other errors; the others as they are."""
        rows = np.flatnonzero(which)
        other = found.copy()
        if len(rows):
            part = self._minimise(
                found.y[rows], frame, shift[rows], found.ok[rows], keep[rows], _some(own, rows)
            )
            other.put(rows, part)
        return other

    def _minimise(
        self,
        y: Floats,
        frame: "_Frame",
        shift: Floats,
        ok: Bools,
        keep: Bools,
        own: list[Noise] | None = None,
    ) -> "Minima":
        """Least chi2 over the free coordinates of each row of y."""
        m, free = len(y), frame.free
        y, ok = y.copy(), ok.copy()
        errors = _CommonErrors(self, keep) if own is None else _OwnErrors(own, keep)
        chi2 = np.full(m, np.inf)
        normal = np.tile(np.eye(free), (m, 1, 1))
        white = np.zeros((m, 2 * self.n))

        def at(rows: Ints, points: Floats) -> Floats:
            return errors.whiten(self.seen(points, frame.hood) + shift[rows], rows)

        busy = np.flatnonzero(ok)
        if len(busy):
            white[busy] = at(busy, y[busy])
        chi2[busy] = np.sum(white[busy] ** 2, axis=1)
        ok &= np.isfinite(chi2)
        busy = busy[ok[busy]]
        for _ in range(MAX_SWEEPS):
            if not len(busy):
                break
            partials = frame.partials_at(y[busy], white=own is None)
            bent = np.flatnonzero(frame.bend(y[busy]) > BENT)
            for i in bent:
                partials[i] = self.partials(y[busy[i]], frame, white=own is None)
            partials = errors.columns(partials, busy)
            normal[busy] = partials @ partials.transpose(0, 2, 1)
            gradient = (partials @ white[busy][:, :, None])[:, :, 0]
            step = np.linalg.solve(normal[busy], gradient[:, :, None])[:, :, 0]
            finished = np.linalg.norm(step, axis=1) < SETTLED
            length = np.ones(len(busy))
            waiting = np.arange(len(busy))
            for _ in range(MAX_HALVINGS):
                rows = busy[waiting]
                trial = y[rows].copy()
                trial[:, :free] += length[waiting, None] * step[waiting]
                there = at(rows, trial)
                value = np.sum(there**2, axis=1)
                better = value <= chi2[rows] + 1e-6
                y[rows[better]], white[rows[better]] = trial[better], there[better]
                chi2[rows[better]] = value[better]
                waiting = waiting[~better]
                if not len(waiting):
                    break
                length[waiting] *= 0.5
            # without a step down only an arc that stands at its minimum is done
            ok[busy[waiting[~finished[waiting]]]] = False
            busy = busy[~finished & ok[busy]]
        ok[busy] = False
        return Minima(y, chi2, normal, keep.copy(), ok)

    def partials(self, y: Floats, frame: "_Frame", white: bool) -> Floats:
        """Central differences (free, 2n) of minus the residuals, whitened or not, at y (p,)."""
        free = frame.free
        points = np.tile(y, (2, free, 1))
        turn = np.arange(free)
        points[0, turn, turn] -= DIFFERENCE
        points[1, turn, turn] += DIFFERENCE
        seen = self.seen(points.reshape(2 * free, -1), frame.hood)
        seen = self.whiten(seen) if white else seen
        return (seen[:free] - seen[free:]) / (2.0 * DIFFERENCE)


def _given_back(white: Floats, q: Floats) -> Floats:
    """(I - H)^(-1/2) w of the whitened residuals w (2m,) of a night, whose covariance after the fit
    is I - H; q (2m, p) its rows of the orthonormal design."""
    values, vectors = np.linalg.eigh(np.eye(len(q)) - q @ q.T)
    return np.asarray(vectors @ ((vectors.T @ white) / np.sqrt(np.maximum(values, LEAST_LEFT))))


def _some(own: list[Noise] | None, rows: Ints) -> list[Noise] | None:
    return None if own is None else [own[i] for i in rows]


@dataclass(frozen=True, eq=False)
class _Frame:
    """Exact model about one orbit: minus the residuals to second order in y - centre, whitened and
    as they are."""

    hood: Atlas
    centre: Floats
    free: int
    first: Floats
    second: Floats
    raw_first: Floats
    raw_second: Floats

    @classmethod
    def about(cls, model: ExactRefit, hood: Atlas, centre: Floats, free: int) -> "_Frame":
        """Differences of the exact residuals: first (free, 2n), second (free, free, 2n)."""
        h = DIFFERENCE
        one = np.zeros((2 * free, centre.size))
        turn = np.arange(free)
        one[turn, turn], one[free + turn, turn] = h, -h
        i, j = np.triu_indices(free, 1)
        pair = np.zeros((2, i.size, centre.size))
        rows = np.arange(i.size)
        pair[0, rows, i], pair[0, rows, j] = h, h
        pair[1, rows, i], pair[1, rows, j] = -h, -h
        points = np.concatenate([np.zeros((1, centre.size)), one, pair.reshape(-1, centre.size)])
        raw = -model.seen(centre + points, hood)
        zero, up, down = raw[0], raw[1 : free + 1], raw[free + 1 : 2 * free + 1]
        both = raw[2 * free + 1 :].reshape(2, i.size, -1).sum(axis=0)
        second = np.zeros((free, free, zero.size))
        second[turn, turn] = (up + down - 2.0 * zero) / h**2
        ends = up + down
        second[i, j] = (both + 2.0 * zero - ends[i] - ends[j]) / (2.0 * h**2)
        second[j, i] = second[i, j]
        first = (up - down) / (2.0 * h)
        white = model.whiten(second.reshape(free * free, -1)).reshape(second.shape)
        return cls(hood, centre, free, model.whiten(first), white, first, second)

    def partials_at(self, y: Floats, white: bool = True) -> Floats:
        """Partials (m, free, 2n) at y (m, p)."""
        first, second = (self.first, self.second) if white else (self.raw_first, self.raw_second)
        off = y[:, : self.free] - self.centre[: self.free]
        f, n = first.shape
        return first + (off @ second.reshape(f, f * n)).reshape(-1, f, n)

    def bend(self, y: Floats) -> Floats:
        """Largest change (m,) of a column between the centre and y (m, p)."""
        moved = self.partials_at(y) - self.first
        return np.sqrt(np.max(np.sum(moved**2, axis=2), axis=1))


@dataclass(eq=False)
class Minima:
    """Least chi2 of m arcs.

    Attributes
    ----------
    y : (m, p) coordinates
    chi2 : (m,)
    normal : (m, free, free) normal matrices in the free coordinates
    keep : (m, n) records in the fit
    ok : (m,) whether the fit was found
    """

    y: Floats
    chi2: Floats
    normal: Floats
    keep: Bools
    ok: Bools

    def put(self, rows: Ints, part: "Minima") -> None:
        """Take the results of some of the arcs."""
        for name, values in vars(part).items():
            getattr(self, name)[rows] = values

    def copy(self) -> "Minima":
        """The same in arrays of its own."""
        return Minima(**{name: values.copy() for name, values in vars(self).items()})


@dataclass(frozen=True, eq=False)
class BothFits:
    """Injected arcs fitted without and with thrust, each over the records that it kept; and by
    how much thrust lowers chi2 over the records that either kept, (m,)."""

    null: Minima
    push: Minima
    delta_chi2: Floats


class _OwnErrors:
    """Whitens the kept residuals of each arc with errors of its own; zero for the others."""

    def __init__(self, own: list[Noise], keep: Bools) -> None:
        self.kept = [noise.mask(mask) for noise, mask in zip(own, keep, strict=True)]
        self.rows = np.repeat(keep, 2, axis=1)

    def whiten(self, raw: Floats, rows: Ints) -> Floats:
        return self.columns(raw[:, None, :], rows)[:, 0]

    def columns(self, raw: Floats, rows: Ints) -> Floats:
        """Whitened (len(rows), c, 2n) of residuals or partials (len(rows), c, 2n)."""
        white = np.zeros_like(raw)
        for place, i in enumerate(rows):
            mine = self.rows[i]
            if np.all(np.isfinite(raw[place])):
                white[place][:, mine] = self.kept[i].whiten(raw[place][:, mine].T).T
            else:
                white[place] = np.inf
        return white


class _CommonErrors:
    """Whitens residuals with the errors of the fit and takes the shifts of rejected records out."""

    def __init__(self, model: ExactRefit, keep: Bools) -> None:
        noise = model.noise
        self.model = model
        self.any = not bool(np.all(keep))
        self.bases: list[Floats | None] = [None] * len(keep)
        if not self.any:
            return
        needed = np.flatnonzero(~np.all(keep, axis=0))
        rows = np.stack([2 * needed, 2 * needed + 1], axis=1).ravel()
        unit = np.zeros((2 * keep.shape[1], rows.size))
        unit[rows, np.arange(rows.size)] = 1.0
        white = noise.whiten(unit)
        for i, mask in enumerate(keep):
            if not mask.all():
                columns = np.repeat(~mask[needed], 2)
                self.bases[i] = np.linalg.qr(white[:, columns])[0]

    def whiten(self, raw: Floats, rows: Ints) -> Floats:
        white = self.model.whiten(raw)
        if not self.any:
            return white
        for place, i in enumerate(rows):
            basis = self.bases[i]
            if basis is not None:
                white[place] -= basis @ (white[place] @ basis)
        return white

    def columns(self, partials: Floats, rows: Ints) -> Floats:
        """The same of partials (len(rows), free, 2n) that are whitened already."""
        if not self.any:
            return partials
        for place, i in enumerate(rows):
            basis = self.bases[i]
            if basis is not None:
                partials[place] -= (partials[place] @ basis) @ basis.T
        return partials
