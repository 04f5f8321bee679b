"""Scale of the noise from the residuals of each station with enough records.

Imports numpy, scipy, arc and this room. Two numbers a station: one for the independent part of its
errors, one for the part common to a night, each the root of chi2 over its expectation in the part
of the whitened residuals that it governs: the means of the nights, and what is left when they are
taken out (variance components by iterated moments: C. R. Rao 1971, J. Multivar. Anal. 1, 257,
with the pivot moved to the solution). The expectations allow for what parameters and shared errors
have absorbed (`ngbound.fit.shared_estimates`). Few nights tell too little about the common part:
then both are scaled alike. Where no station has enough records, all are taken together, if their
nights leave enough degrees of freedom; else the errors stand as they are.

Errors that were estimated from nu degrees of freedom make the tests of a thrust those of Student
and Fisher (W. S. Gosset 1908, Biometrika 6, 1). Where the variance of an estimate is a sum over
stations, each a share of it known from its own nu, the whole has 1 / sum(share^2 / nu) degrees of
freedom (F. E. Satterthwaite 1946, Biometrics Bull. 2, 110).

The variance common to a night is never taken below zero, so that where there is little of it, it
is on average estimated too large (W. A. Thompson 1962, Ann. Math. Stat. 33,
273, from memory): false alarms are
then rarer than stated, and thresholds allow for it (`noise_excess`). In linear theory, 600 arcs
each with errors of 0.25 arcsec of which the table knew nothing, false alarms at 5 % were, with no
error common to a night, one of 0.1 and one of 0.25 arcsec: 3.5, 5.3 and 5.0 % for 24 nights of 4
records, two stations; 0.7, 4.7 and 8.2 % for 10 nights of which one station had 3. With so few
nights the ratio of the two parts is the table's, and so is the ratio of stations that are rescaled
together: where it is wrong, no degrees of freedom mend the test. For 20 nights of one record at two
stations that the table has at 0.1 and 0.5 arcsec while both have 0.25 they were 30 %.
"""

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from ngbound.arc import Noise
from ngbound.fit.shared_estimates import JointSolution, solve_jointly

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

SMALLEST, LARGEST = 0.1, 10.0
"""Factors of standard deviations are kept within this range."""
SETTLED = 0.01
MAX_TURNS = 30
ENOUGH_NIGHTS = 5
LEAST_WITHIN_DOF = 5.0
LEAST_TOGETHER_DOF = 4.0
"""Degrees of freedom of the night means from which on all stations together are rescaled."""
QUANTILES = 200
"""Points of each chi2 law over which an expectation is taken."""
MANY_DOF = 1000
"""From so many on the law of Student is the normal one."""
TOGETHER = "all stations"
ALL_RANDOM = 0.95
"""Share of the independent part in the variance of a night mean above which the common part cannot
be told."""


@dataclass(frozen=True)
class StationScale:
    """By how much the errors of a station were rescaled.

    Attributes
    ----------
    station : str
    n, nights : int
        Kept records, and station-nights with any.
    sigma_before_arcsec, sigma_arcsec : float
        Median standard deviation of its records, both axes, before and after.
    common_before_arcsec, common_arcsec : float
        Median of the part common to a night, before and after.
    scale, error : float
        Of the whole standard deviation.
    dof : float
        Degrees of freedom that the scale of an estimate rests on: those of the night means where
        errors are common to a night, else all.
    excess : float
        Expected variance of a night mean, as estimated, over the true one, if the errors are as
        they were found.
    """

    station: str
    n: int
    nights: int
    sigma_before_arcsec: float
    sigma_arcsec: float
    common_before_arcsec: float
    common_arcsec: float
    scale: float
    error: float
    dof: float
    excess: float = 1.0

    def to_dict(self) -> dict[str, Any]:
        """The fields."""
        return dict(vars(self))

    def __str__(self) -> str:
        what = self.station if self.station == TOGETHER else f"station {self.station}"
        return (
            f"{what}: {self.n} records in {self.nights} nights, sigma "
            f"{self.sigma_before_arcsec:.2f} -> {self.sigma_arcsec:.3f} arcsec (times "
            f"{self.scale:.2f} +- {self.error:.2f}), of it common to a night "
            f"{self.common_before_arcsec:.2f} -> {self.common_arcsec:.3f}"
        )


@dataclass(frozen=True)
class _Group:
    """Chi2 and its expectation in the two parts of a station's residuals."""

    rows: Bools
    n: int
    nights: int
    night_chi2: float
    night_dof: float
    chi2: float
    dof: float
    random_share: float

    @property
    def telling_dof(self) -> float:
        """Degrees of freedom of the night means, or of all where nights share next to nothing."""
        few = self.dof if self.random_share > ALL_RANDOM else min(self.dof, self.night_dof)
        return max(few, 1.0)

    @property
    def split(self) -> bool:
        """Whether the two parts are estimated apart."""
        return self.nights >= ENOUGH_NIGHTS and self.dof - self.night_dof >= LEAST_WITHIN_DOF

    def excess(self, least_common: float) -> float:
        """Expected estimate of the variance of a night mean over the truth.

        It is that of the night means, but not below what independent errors and the least common
        part leave (``least_common``, in units of the variance found for it); where that part is
        negligible, the independent errors are then those of all residuals.
        """
        if not self.split:
            return 1.0
        within_dof, share = self.dof - self.night_dof, self.random_share
        steps = (np.arange(QUANTILES) + 0.5) / QUANTILES
        means = stats.chi2.ppf(steps, self.night_dof)[:, None]
        within = stats.chi2.ppf(steps, within_dof)[None, :]
        apart, floor = means / self.night_dof, (1.0 - share) * least_common
        least = share * within / within_dof + floor
        pooled = (means + share * within) / self.dof
        instead = pooled if share > ALL_RANDOM * (share + floor) else least
        return float(np.mean(np.where(apart > least, apart, instead)))

    def factors(self) -> tuple[float, float]:
        """By which the variances of the independent and of the common part should grow."""
        whole = self.chi2 / self.dof
        within_dof = self.dof - self.night_dof
        if not self.split:
            return whole, whole
        within = max(self.chi2 - self.night_chi2, 1e-9) / within_dof
        of_nights = self.night_chi2 / self.night_dof
        if self.random_share > ALL_RANDOM:
            return whole, whole
        share = self.random_share
        return within, max((of_nights - within * share) / (1.0 - share), 1e-2)


def rescaled(
    seen: Floats,
    design: Floats,
    noise: Noise,
    keep: Bools,
    stations: NDArray[np.object_],
    allowed: Bools,
    least: int,
) -> tuple[Noise, tuple[StationScale, ...]]:
    """The noise with the errors of stations rescaled, and by how much.

    Parameters
    ----------
    seen, design, noise, keep
        As in `ngbound.fit.shared_estimates.solve_jointly`; the fit is taken to be linear.
    stations : (n,) station codes
    allowed : (n,) observations whose errors may be rescaled
    least : records that are enough
    """
    before = noise
    together = False
    codes = [
        code
        for code in sorted(set(stations[keep & allowed].tolist()))
        if ((stations == code) & keep & allowed).sum() >= least
    ]
    if not codes and (keep & allowed).any():
        together, codes = True, [TOGETHER]
        stations = np.full(len(keep), TOGETHER, dtype=object)
    random, common = np.ones(len(noise)), np.ones(len(noise))
    groups: dict[str, _Group] = {}
    for _ in range(MAX_TURNS):
        groups = _groups(seen, design, noise, keep, stations, allowed, codes)
        if together and groups[TOGETHER].telling_dof < LEAST_TOGETHER_DOF:
            return before, ()
        moved = 0.0
        for code, group in groups.items():
            mine = (stations == code) & allowed
            for part, variance in zip((random, common), group.factors(), strict=True):
                new = np.clip(part[mine] * math.sqrt(variance), SMALLEST, LARGEST)
                # a common part that fades away changes nothing any more
                weight = 1.0 if part is random else min(1.0, float(common[mine][0]) / 0.3)
                moved = max(moved, weight * float(np.max(np.abs(np.log(new / part[mine])))))
                part[mine] = new
        if moved < SETTLED:
            break
        noise = before.with_parts_scaled(random, common)
    return noise, tuple(
        sorted(
            (
                _scale_of(code, group, before, noise, float(common[group.rows][0]))
                for code, group in groups.items()
            ),
            key=lambda scale: -scale.n,
        )
    )


def _groups(
    seen: Floats,
    design: Floats,
    noise: Noise,
    keep: Bools,
    stations: NDArray[np.object_],
    allowed: Bools,
    codes: list[str],
) -> dict[str, _Group]:
    joint = solve_jointly(seen, design, noise, keep)
    kept = noise.mask(keep)
    common2 = kept.night_common_arcsec**2
    random2 = 0.5 * (kept.sigma_ra_arcsec**2 + kept.sigma_dec_arcsec**2) - common2
    square = joint.rest.reshape(-1, 2) ** 2
    free = (1.0 - joint.leverage).reshape(-1, 2)
    order = np.argsort(kept.night, kind="stable")
    n_nights = int(kept.night.max()) + 1
    count = np.bincount(kept.night, minlength=n_nights)
    night_chi2, night_dof = np.zeros(n_nights), np.zeros(n_nights)
    for axis in (0, 1):
        ones = np.zeros((len(kept), 2))
        ones[:, axis] = 1.0
        along = kept.whiten_nights(ones.ravel())
        length2 = np.bincount(np.repeat(kept.night, 2), along**2, n_nights)
        along = along / np.sqrt(length2)[np.repeat(kept.night, 2)]
        mean = np.bincount(np.repeat(kept.night, 2), along * joint.rest, n_nights)
        starts = 2 * np.concatenate([[0], np.cumsum(count)[:-1]])
        rows = np.stack([2 * order, 2 * order + 1], axis=1).ravel()
        pattern = np.add.reduceat(along[rows][:, None] * joint.white[rows], starts, axis=0)
        night_chi2 += mean**2
        night_dof += 1.0 - np.sum((pattern @ joint.cov) * pattern, axis=1)
    share = (random2 / count[kept.night]) / (common2 + random2 / count[kept.night])
    groups = {}
    for code in codes:
        rows_here = (stations == code)[keep] & allowed[keep]
        nights = np.unique(kept.night[rows_here])
        groups[code] = _Group(
            (stations == code) & keep & allowed,
            int(rows_here.sum()),
            len(nights),
            float(night_chi2[nights].sum()),
            float(night_dof[nights].sum()),
            float(square[rows_here].sum()),
            float(free[rows_here].sum()),
            float(np.average(share[rows_here], weights=1.0 / count[kept.night][rows_here])),
        )
    return groups


def _scale_of(code: str, group: _Group, before: Noise, after: Noise, common: float) -> StationScale:
    mine = group.rows

    def sigma(noise: Noise) -> float:
        return float(np.median(np.hypot(noise.sigma_ra_arcsec, noise.sigma_dec_arcsec)[mine]))

    scale = sigma(after) / sigma(before)
    return StationScale(
        code,
        group.n,
        group.nights,
        sigma(before) / math.sqrt(2.0),
        sigma(after) / math.sqrt(2.0),
        float(np.median(before.night_common_arcsec[mine])),
        float(np.median(after.night_common_arcsec[mine])),
        scale,
        scale / math.sqrt(2.0 * group.dof),
        group.telling_dof,
        group.excess((SMALLEST / common) ** 2),
    )


def student_dof(
    scales: tuple[StationScale, ...],
    joint: JointSolution,
    stations: NDArray[np.object_],
    wanted: slice,
) -> int | None:
    """Degrees of freedom behind the standard errors of some parameters; None for very many.

    Parameters
    ----------
    scales : of the stations that were rescaled
    joint : JointSolution with p parameters
    stations : (m,) codes of the kept observations, "" where the errors were not rescaled
    wanted : parameters; the smallest degrees of freedom of any of them count
    """
    dof = np.array([scale.dof for scale in scales])
    inverse = _shares(scales, joint, stations, wanted) ** 2 @ (1.0 / dof)
    least = float(inverse.max(initial=0.0))
    return max(1, round(1.0 / least)) if least * MANY_DOF > 1.0 else None


def noise_excess(
    scales: tuple[StationScale, ...],
    joint: JointSolution,
    stations: NDArray[np.object_],
    wanted: slice,
) -> float:
    """Expected squared standard error of some parameters, as estimated, over the true one; the
    largest of any of them. Parameters as in `student_dof`."""
    more = np.array([scale.excess - 1.0 for scale in scales])
    return 1.0 + float((_shares(scales, joint, stations, wanted) @ more).max(initial=0.0))


def _shares(
    scales: tuple[StationScale, ...],
    joint: JointSolution,
    stations: NDArray[np.object_],
    wanted: slice,
) -> Floats:
    """Share (parameters, scales) of each rescaled station in the variance of each parameter."""
    moved = (joint.cov[wanted] @ joint.white.T) ** 2
    share = moved.reshape(len(moved), -1, 2).sum(axis=2) / np.diag(joint.cov)[wanted, None]
    mine = [(stations != "") if s.station == TOGETHER else stations == s.station for s in scales]
    return share @ np.array(mine, dtype=float).T


def tail_probability(statistic: float, k: int, noise_dof: int | None) -> float:
    """Chance of a chi2 of k degrees of freedom of at least this size; where the errors rest on
    ``noise_dof`` degrees of freedom, of F times k."""
    value = max(statistic, 0.0)
    if noise_dof is None:
        return float(stats.chi2.sf(value, k))
    return float(stats.f.sf(value / k, k, noise_dof))


def student_factor(reduced_chi2: float, dof: int, confidence: float = 0.95) -> float:
    """By which a normal interval grows when its noise scale was estimated from the same residuals.

    The scale sqrt(reduced chi2) times the quantile of Student's t over that of the normal law
    (W. S. Gosset 1908, Biometrika 6, 1); infinite without degrees of freedom.
    """
    if dof < 1:
        return math.inf
    p = 0.5 * (1.0 + confidence)
    return math.sqrt(reduced_chi2) * float(stats.t.ppf(p, dof) / stats.norm.ppf(p))
