"""May the residuals be trusted at the level of the threshold? Imports numpy, pandas, scipy, arc and
this room.

Everything here starts from e = (I - H) y, the whitened residuals freed of the shared errors, whose
covariance under the noise model is I - H (`ngbound.fit.shared_estimates`). A pattern w of the
residuals (the mean of a night, of a station) then has the standard normal value

    z = w' e / sqrt(w' (I - H) w).

The means of a group in RA and in Dec are, of radar echoes, those of delay and Doppler shift, over
their stated errors; a number that an echo does not have counts nowhere. Whiteness and the groups of
catalogues and seasons are of directions alone.

Whiteness of the night means in order of time: the runs of their signs (A. Wald & J. Wolfowitz 1940,
Ann. Math. Statist. 11, 147) and their autocorrelation (G. M. Ljung & G. E. P. Box 1978, Biometrika
65, 297). Normality: C. M. Jarque & A. K. Bera 1980, Econ. Lett. 6, 255. Leaving out the rows R of
whole nights changes the parameters by  - V W_R' (I - H_RR)^-1 e_R  and their covariance V by
V W_R' (I - H_RR)^-1 W_R V (R. D. Cook & S. Weisberg 1982, Residuals and Influence in Regression).
"""

import math
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import stats

from ngbound.arc import Noise, seasons
from ngbound.blas import on_one_thread
from ngbound.fit.shared_estimates import JointSolution
from ngbound.fit.solution import Fit

Floats = NDArray[np.float64]

MOST_LAGS = 10
RADAR_GROUP = "radar"
FALSE_ALARM = 1e-3
"""Chance of a false alarm of each kind of test, over all its members together."""
FEWEST = 20
"""Records from which on the chi2 of a station counts."""
CHI2_RANGE = (0.7, 1.4)
STATION_CHI2_RANGE = (0.5, 2.0)
MOST_REJECTED = 0.05
MOST_MOVED = 3.0
"""A station that moves A by more than so many standard deviations of the change is suspect."""
MOST_INFORMATION = 2.0
"""A night without which the threshold would be more than so many times larger decides alone."""


@dataclass(frozen=True, eq=False)
class Diagnostics:
    """What the residuals of a fit say about its noise model.

    Attributes
    ----------
    reduced_chi2 : float
    noise_scale, noise_scale_error : float
        Root of the reduced chi2, and its standard error.
    runs_z : (2,) of the signs of the night means, RA and Dec
    autocorrelation : (2, lags)
    ljung_box_p : (2,)
    skewness, excess_kurtosis, normal_p : float
        Of all whitened residuals.
    groups : DataFrame
        kind (station, catalogue, season), name, n, nights, chi2_per_dof, z_ra, z_dec of the mean.
    nights : DataFrame
        utc_day, stn, radar, n, chi2_per_dof, z_ra, z_dec; with thrust also moved_sigma (largest
        change of a component of A without the night, in its standard errors) and threshold_ratio
        (largest growth of a standard error).
    left_out : DataFrame
        One row a station: A and its errors without it, change_sigma (largest change over the
        standard deviation it should have), threshold_ratio; empty without thrust.
    trusted : bool
    why : str
        One line.
    reasons : tuple of str
        What speaks against trust.
    remarks : tuple of str
        What the reader should know though it speaks against nothing: a night that decides alone.
    """

    reduced_chi2: float
    noise_scale: float
    noise_scale_error: float
    runs_z: Floats
    autocorrelation: Floats = field(repr=False)
    ljung_box_p: Floats
    skewness: float
    excess_kurtosis: float
    normal_p: float
    groups: pd.DataFrame = field(repr=False)
    nights: pd.DataFrame = field(repr=False)
    left_out: pd.DataFrame = field(repr=False)
    trusted: bool
    why: str
    reasons: tuple[str, ...]
    remarks: tuple[str, ...]

    def to_dict(self) -> dict[str, Any]:
        """Plain values; of the nights the ten that move A most."""
        worst = self.nights
        if "moved_sigma" in worst:
            worst = worst.sort_values("moved_sigma", ascending=False).head(10)
        else:
            worst = worst.head(0)
        return {
            "reduced_chi2": self.reduced_chi2,
            "noise_scale": self.noise_scale,
            "noise_scale_error": self.noise_scale_error,
            "runs_z": self.runs_z.tolist(),
            "autocorrelation": self.autocorrelation.tolist(),
            "ljung_box_p": self.ljung_box_p.tolist(),
            "skewness": self.skewness,
            "excess_kurtosis": self.excess_kurtosis,
            "normal_p": self.normal_p,
            "groups": self.groups.to_dict("records"),
            "most_influential_nights": worst.to_dict("records"),
            "left_out": self.left_out.to_dict("records"),
            "trusted": self.trusted,
            "why": self.why,
            "reasons": list(self.reasons),
            "remarks": list(self.remarks),
        }

    def __str__(self) -> str:
        lines = [
            " ".join((self.why, *self.remarks)),
            f"  chi2 per degree of freedom {self.reduced_chi2:.3f}, noise scale "
            f"{self.noise_scale:.3f} +- {self.noise_scale_error:.3f}",
            f"  night means, RA and Dec: runs z {self.runs_z[0]:+.1f}, {self.runs_z[1]:+.1f}; "
            f"Ljung-Box p {self.ljung_box_p[0]:.2g}, {self.ljung_box_p[1]:.2g}",
            f"  whitened residuals: skewness {self.skewness:+.2f}, excess kurtosis "
            f"{self.excess_kurtosis:+.2f}, normal with p = {self.normal_p:.2g}",
        ]
        return "\n".join(lines)


@dataclass(frozen=True, eq=False)
class _Rest:
    """The residuals freed of shared errors, with all that is needed to judge patterns of them."""

    noise: Noise
    joint: JointSolution

    def z(self, labels: NDArray[Any]) -> tuple[NDArray[Any], Floats]:
        """Names of the groups of kept observations and standard normal values (g, 2) of their
        means in RA and in Dec."""
        names, group = np.unique(labels, return_inverse=True)
        g, n = len(names), len(self.noise)
        ones = np.zeros((n, 2, g, 2))
        for axis in (0, 1):
            ones[np.arange(n), axis, group, axis] = self.noise.given[:, axis]
        w = self.noise.whiten_nights(ones.reshape(2 * n, 2 * g))
        seen = self.joint.white.T @ w
        length2 = np.sum(w**2, axis=0)
        variance = length2 - np.sum(seen * (self.joint.cov @ seen), axis=0)
        # a mean that the fit absorbs altogether cannot be judged
        sure = variance > np.maximum(1e-6 * length2, 1e-300)
        z = np.where(sure, self.joint.rest @ w / np.sqrt(np.where(sure, variance, 1.0)), 0.0)
        return names, z.reshape(g, 2)

    def chi2_per_dof(self, rows: NDArray[np.bool_]) -> float:
        both = np.repeat(rows, 2)
        dof = float(np.sum((self.noise.given.ravel() - self.joint.leverage)[both]))
        return float(np.sum(self.joint.rest[both] ** 2)) / dof if dof > 1e-6 else math.nan

    def without(self, rows: NDArray[np.bool_], p: int) -> tuple[Floats, Floats]:
        """Change of the parameters (scaled) and of their covariance when observations are left
        out."""
        both = np.repeat(rows, 2)
        w = self.joint.white[both]
        vw = self.joint.cov[:p] @ w.T
        hat = w @ self.joint.cov @ w.T
        values, vectors = np.linalg.eigh(np.eye(len(hat)) - hat)
        inverse = (vectors / np.maximum(values, 1e-9)) @ vectors.T
        return -vw @ (inverse @ self.joint.rest[both]), vw @ inverse @ vw.T


@on_one_thread
def diagnose(fit: Fit) -> Diagnostics:
    """Examine the residuals of a fit; with thrust also how far A rests on single nights."""
    kept = fit.noise.mask(fit.keep)
    rest = _Rest(kept, fit.joint)
    free = np.maximum(kept.given.ravel() - fit.joint.leverage, 1e-9)
    standard = (fit.joint.rest / np.sqrt(free))[free > 0.05]
    nights = _nights(fit, rest)
    means = nights.loc[~nights["radar"], ["z_ra", "z_dec"]].to_numpy()
    lags = _autocorrelation(means)
    groups = _groups(fit, rest)
    left_out = _stations_left_out(fit, rest)
    normal = stats.jarque_bera(standard) if standard.size > 3 else None
    reduced = fit.reduced_chi2
    scale = math.sqrt(reduced) if reduced > 0.0 else math.nan
    runs = np.array([_runs_z(column) for column in means.T])
    box = np.array([_ljung_box_p(row, len(means)) for row in lags])
    reasons = _reasons(fit, reduced, runs, box, groups, left_out)
    return Diagnostics(
        reduced_chi2=reduced,
        noise_scale=scale,
        noise_scale_error=scale / math.sqrt(2.0 * fit.dof) if fit.dof > 0 else math.nan,
        runs_z=runs,
        autocorrelation=lags,
        ljung_box_p=box,
        skewness=float(stats.skew(standard)),
        excess_kurtosis=float(stats.kurtosis(standard)),
        normal_p=float(normal.pvalue) if normal is not None else math.nan,
        groups=groups,
        nights=nights,
        left_out=left_out,
        trusted=not reasons,
        why=_verdict(fit, reduced, box, reasons),
        reasons=reasons,
        remarks=_remarks(nights),
    )


def _runs_z(values: Floats) -> float:
    signs = values > 0.0
    up, down = int(signs.sum()), int((~signs).sum())
    n = up + down
    if up == 0 or down == 0 or n < 3:
        return 0.0
    runs = 1 + int(np.sum(signs[1:] != signs[:-1]))
    mean = 1.0 + 2.0 * up * down / n
    variance = (mean - 1.0) * (mean - 2.0) / (n - 1.0)
    return (runs - mean) / math.sqrt(variance) if variance > 0.0 else 0.0


def _autocorrelation(means: Floats) -> Floats:
    """Autocorrelation of standard normal night means, (2, lags); their true mean is zero."""
    n = len(means)
    lags = max(0, min(MOST_LAGS, n // 4))
    power = np.maximum(np.sum(means**2, axis=0), 1e-300)
    return np.array(
        [
            [float(np.sum(means[k:, a] * means[:-k, a]) / power[a]) for k in range(1, lags + 1)]
            for a in (0, 1)
        ]
    ).reshape(2, lags)


def _ljung_box_p(correlation: Floats, n: int) -> float:
    lags = len(correlation)
    if lags == 0:
        return 1.0
    k = np.arange(1, lags + 1)
    q = n * (n + 2.0) * float(np.sum(correlation**2 / (n - k)))
    return float(stats.chi2.sf(q, lags))


def _nights(fit: Fit, rest: _Rest) -> pd.DataFrame:
    """One row a station-night with kept observations, in order of time."""
    night = rest.noise.night
    table = fit.used.table[fit.keep]
    day, stn = table["utc_day"].to_numpy(), table["stn"].to_numpy(dtype=object)
    p = fit.theta.size
    free = slice(fit.n_state, p)
    old = np.diag(fit.joint.cov)[free]
    rows = []
    numbers, z = rest.z(night)
    for number in pd.unique(night):
        mine = night == number
        first = int(np.flatnonzero(mine)[0])
        z_ra, z_dec = z[int(np.searchsorted(numbers, number))].tolist()
        row = {
            "utc_day": int(day[first]),
            "stn": str(stn[first]),
            "radar": not rest.noise.optical[first],
            "n": int(mine.sum()),
            "chi2_per_dof": rest.chi2_per_dof(mine),
            "z_ra": z_ra,
            "z_dec": z_dec,
        }
        if fit.components:
            moved, grown = rest.without(mine, p)
            row["moved_sigma"] = float(np.max(np.abs(moved[free]) / np.sqrt(old)))
            row["threshold_ratio"] = float(np.sqrt(np.max(1.0 + np.diag(grown)[free] / old)))
        rows.append(row)
    return pd.DataFrame(rows)


def _groups(fit: Fit, rest: _Rest) -> pd.DataFrame:
    table = fit.used.table[fit.keep]
    season = seasons(fit.used)[fit.keep]
    utc = fit.residuals["utc"].astype(str).to_numpy(dtype=object)[fit.keep]
    # the observations are in order of time
    begin = {s: utc[int(np.flatnonzero(season == s)[0])][:7] for s in np.unique(season).tolist()}
    named = {
        "station": table["stn"].to_numpy(dtype=object),
        "catalogue": np.where(table["astCat"] == "", "UNK", table["astCat"]).astype(object),
        "season": np.array([begin[s] for s in season.tolist()], dtype=object),
    }
    rows = []
    for kind, labels in named.items():
        if kind != "station":
            labels = np.where(rest.noise.optical, labels, RADAR_GROUP)
        names, z = rest.z(labels.astype(str))
        for name, (z_ra, z_dec) in zip(names.tolist(), z.tolist(), strict=True):
            mine = labels == name
            if name == RADAR_GROUP:
                continue
            rows.append(
                {
                    "kind": kind,
                    "name": name,
                    "n": int(mine.sum()),
                    "nights": len(np.unique(rest.noise.night[mine])),
                    "chi2_per_dof": rest.chi2_per_dof(mine),
                    "z_ra": z_ra,
                    "z_dec": z_dec,
                }
            )
    return pd.DataFrame(rows)


def _stations_left_out(fit: Fit, rest: _Rest) -> pd.DataFrame:
    columns = [f"A{'RTN'.index(c) + 1}" for c in fit.components]
    names = ["stn", "n", *columns, *(f"{c}_sigma" for c in columns)]
    if not fit.components:
        return pd.DataFrame({c: [] for c in [*names, "change_sigma", "threshold_ratio"]})
    stn = fit.used.table["stn"].to_numpy(dtype=object)[fit.keep]
    p = fit.theta.size
    free = slice(fit.n_state, p)
    scale = fit.joint.scale[free]
    old = np.diag(fit.joint.cov)[free]
    rows = []
    for code in sorted(set(stn.tolist())):
        mine = stn == code
        moved, grown = rest.without(mine, p)
        more = np.maximum(np.diag(grown)[free], 1e-12 * old)
        sigma = np.sqrt(old + more)
        a = fit.theta[free] + moved[free] / scale
        rows.append(
            dict(
                zip(
                    names,
                    [code, int(mine.sum()), *a.tolist(), *(sigma / scale).tolist()],
                    strict=True,
                ),
                change_sigma=float(np.max(np.abs(moved[free]) / np.sqrt(more))),
                threshold_ratio=float(np.max(sigma / np.sqrt(old))),
            )
        )
    frame = pd.DataFrame(rows)
    return frame.sort_values("threshold_ratio", ascending=False).reset_index(drop=True)


def _bar(members: int) -> float:
    """Two-sided normal quantile of the false alarm over many members together."""
    return float(stats.norm.isf(-0.5 * math.expm1(math.log1p(-FALSE_ALARM) / max(members, 1))))


def _reasons(
    fit: Fit,
    reduced: float,
    runs: Floats,
    box: Floats,
    groups: pd.DataFrame,
    left_out: pd.DataFrame,
) -> tuple[str, ...]:
    out = []
    low, high = CHI2_RANGE
    slack = 4.0 * math.sqrt(2.0 / max(fit.dof, 1))
    if not low - slack < reduced < high + slack:
        out.append(f"chi2 per degree of freedom is {reduced:.2f}")
    many = groups[(groups["kind"] == "station") & (groups["n"] >= FEWEST)]
    odd = many[~many["chi2_per_dof"].between(*STATION_CHI2_RANGE)]
    for row in odd.head(3).to_dict("records"):
        out.append(
            f"chi2 per degree of freedom of station {row['name']} is {row['chi2_per_dof']:.2f}"
        )
    lost = fit.n_rejected / max(len(fit.used), 1)
    if lost > MOST_REJECTED:
        out.append(f"{100.0 * lost:.0f} % of the observations were rejected")
    bar = _bar(2 * len(groups))
    big = groups.assign(z=groups[["z_ra", "z_dec"]].abs().max(axis=1))
    big = big[big["z"] > bar].sort_values("z", ascending=False)
    for row in big.head(3).to_dict("records"):
        out.append(
            f"the mean residual of {row['kind']} {row['name']} is {row['z']:.1f} sigma from zero"
        )
    for axis, name in enumerate(("RA", "Dec")):
        if box[axis] < 0.5 * FALSE_ALARM or abs(runs[axis]) > _bar(2):
            out.append(f"the night means in {name} are correlated in time")
    if len(left_out) > 1:
        worst = left_out.sort_values("change_sigma", ascending=False).iloc[0]
        if worst["change_sigma"] > max(MOST_MOVED, _bar(len(left_out) * len(fit.components))):
            out.append(
                f"without station {worst['stn']} the thrust moves by {worst['change_sigma']:.1f} "
                "times what it should"
            )
    return tuple(out)


def _remarks(nights: pd.DataFrame) -> tuple[str, ...]:
    if "threshold_ratio" not in nights or len(nights) < 2:
        return ()
    worst = nights.sort_values("threshold_ratio", ascending=False).iloc[0]
    if worst["threshold_ratio"] <= MOST_INFORMATION:
        return ()
    return (
        f"The threshold rests on the night of {worst['stn']} on MJD {worst['utc_day']}: without "
        f"it, it would be {worst['threshold_ratio']:.1f} times larger, so that no other night can "
        "vouch for its errors.",
    )


def _verdict(fit: Fit, reduced: float, box: Floats, reasons: tuple[str, ...]) -> str:
    if reasons:
        return "The residuals should not be trusted at the level of the threshold: " + (
            "; ".join(reasons) + "."
        )
    scaled = (
        f" (errors of {len(fit.scales)} stations set from their own scatter)" if fit.scales else ""
    )
    return (
        "The residuals may be trusted at the level of the threshold: chi2 per degree of freedom "
        f"{reduced:.2f}{scaled}, night means white (Ljung-Box p {box.min():.2g}), no station or "
        "catalogue off."
    )
