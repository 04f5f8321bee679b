"""Stand-ins for the objects of the rooms to the left: small, but with true physics in them.

An Earth on a circle, a Kepler orbit with a small thrust, integrated together with its neighbours
for finite-difference partials: enough for the figures to show what they will show on real arcs.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import lru_cache
from types import SimpleNamespace

import numpy as np
import pandas as pd
from astropy import units as u
from astropy.time import Time
from scipy.integrate import solve_ivp

from ngbound.constants import ARCSEC_RAD, GM_SUN_AU3_D2

AU_D2 = u.au / u.d**2


@dataclass(frozen=True)
class StandInNoise:
    """Independent part plus a common part of each station-night, whitened block by block."""

    sigma_ra_arcsec: np.ndarray
    sigma_dec_arcsec: np.ndarray
    corr: np.ndarray
    night_common_arcsec: np.ndarray
    night: np.ndarray

    def _blocks(self):
        for block in np.unique(self.night):
            yield np.flatnonzero(self.night == block)

    def whiten(self, m: np.ndarray) -> np.ndarray:
        out = np.empty(m.shape)
        for rows in self._blocks():
            n = len(rows)
            cov = np.zeros((2 * n, 2 * n))
            for j, row in enumerate(rows):
                sx, sy = self.sigma_ra_arcsec[row], self.sigma_dec_arcsec[row]
                cov[2 * j : 2 * j + 2, 2 * j : 2 * j + 2] = [
                    [sx**2, self.corr[row] * sx * sy],
                    [self.corr[row] * sx * sy, sy**2],
                ]
            common = self.night_common_arcsec[rows]
            cov += np.kron(np.outer(common, common), np.eye(2))
            where = np.stack([2 * rows, 2 * rows + 1], axis=1).ravel()
            out[where] = np.linalg.solve(np.linalg.cholesky(cov * ARCSEC_RAD**2), m[where])
        return out

    def mask(self, keep: np.ndarray) -> StandInNoise:
        names = ("sigma_ra_arcsec", "sigma_dec_arcsec", "corr", "night_common_arcsec", "night")
        return replace(self, **{name: getattr(self, name)[keep] for name in names})


@dataclass(frozen=True)
class StandInFit:
    """The attributes of a Fit that the report reads."""

    name: str
    residuals: pd.DataFrame
    noise: StandInNoise
    design: np.ndarray
    components: str
    keep: np.ndarray
    A: u.Quantity
    A_cov: u.Quantity
    chi2: float
    dof: int
    theta: np.ndarray
    normal: np.ndarray
    n_state: int = 6

    @property
    def names(self):
        return ("x", "y", "z", "vx", "vy", "vz", *(f"A_{c}" for c in self.components))

    def chi2_many(self, thetas: np.ndarray) -> np.ndarray:
        off = thetas - self.theta
        return self.chi2 + np.einsum("mi,ij,mj->m", off, self.normal, off)

    @property
    def arc(self):
        return SimpleNamespace(name=self.name)

    @property
    def thrust(self):
        return SimpleNamespace(law="inverse-square") if self.components else None

    @property
    def A_sigma(self) -> u.Quantity:
        return np.sqrt(np.diag(self.A_cov))

    @property
    def n_obs(self) -> int:
        return int(self.keep.sum())


def sky_at(tdb_d: np.ndarray, state: np.ndarray, thrusts: np.ndarray):
    """Directions (m, n) in radians, and r and delta (n,) of the first, of m orbits at n times."""
    m = len(state)

    def rate(_, y):
        s = y.reshape(m, 6)
        x, v = s[:, :3], s[:, 3:]
        r = np.linalg.norm(x, axis=1)[:, None]
        radial = x / r
        normal = np.cross(x, v)
        normal /= np.linalg.norm(normal, axis=1)[:, None]
        push = (
            thrusts[:, :1] * radial
            + thrusts[:, 1:2] * np.cross(normal, radial)
            + thrusts[:, 2:] * normal
        )
        return np.concatenate([v, -GM_SUN_AU3_D2 * x / r**3 + push / r**2], axis=1).ravel()

    found = solve_ivp(
        rate,
        (tdb_d[0] - 1, tdb_d[-1] + 1),
        state.ravel(),
        method="DOP853",
        t_eval=tdb_d,
        rtol=1e-10,
        atol=1e-12,
    )
    position = found.y.reshape(m, 6, -1)[:, :3]
    phase = 2 * np.pi * tdb_d / 365.25
    tilt = np.radians(23.4)
    earth = np.stack([np.cos(phase), np.sin(phase) * np.cos(tilt), np.sin(phase) * np.sin(tilt)])
    gap = position - earth
    delta = np.linalg.norm(gap, axis=1)
    ra = np.arctan2(gap[:, 1], gap[:, 0])
    dec = np.arcsin(gap[:, 2] / delta)
    return ra, dec, np.linalg.norm(position[0], axis=0), delta[0], gap[0]


def make_pair(
    tdb_d, stn, cat, sigma, common, state, truth=(0.0, 0.0, 0.0), offsets=None, seed=1, name="X"
):
    """(null, push) of one simulated arc; ``offsets`` maps a catalogue to its (RA, Dec) bias."""
    rng = np.random.default_rng(seed)
    order = np.argsort(tdb_d)
    tdb_d, stn, cat, sigma = tdb_d[order], stn[order], cat[order], sigma[order]
    n = len(tdb_d)
    steps = np.concatenate([np.full(6, 1e-6), np.full(3, 1e-8)])
    moved = np.zeros((20, 9))
    for j in range(9):
        moved[1 + 2 * j, j], moved[2 + 2 * j, j] = steps[j], -steps[j]
    moved[19, 6:] = truth
    at = np.concatenate([tdb_d, tdb_d + 0.02])
    order2 = np.argsort(at, kind="stable")
    back = np.argsort(order2)
    ra, dec, r_au, delta_au, gap = sky_at(
        at[order2], np.asarray(state) + moved[:, :6], moved[:, 6:]
    )
    ra, dec = np.unwrap(ra[:, back], axis=1), dec[:, back]
    cosd = np.cos(dec[0, :n])
    design = np.empty((2 * n, 9))
    for j in range(9):
        dra = (ra[1 + 2 * j, :n] - ra[2 + 2 * j, :n] + np.pi) % (2 * np.pi) - np.pi
        design[0::2, j] = dra * cosd / (2 * steps[j])
        design[1::2, j] = (dec[1 + 2 * j, :n] - dec[2 + 2 * j, :n]) / (2 * steps[j])
    _, night = np.unique(
        [f"{s}{int(t)}" for s, t in zip(stn, tdb_d, strict=True)], return_inverse=True
    )
    noise = StandInNoise(sigma, sigma * 1.1, np.full(n, 0.1), np.full(n, common), night)
    error = np.stack([sigma, sigma * 1.1], 1) * rng.standard_normal((n, 2))
    error += common * rng.standard_normal((night.max() + 1, 2))[night]
    wild = rng.random(n) < 0.02
    error[wild] *= 6.0
    for label, (bias_ra, bias_dec) in (offsets or {}).items():
        error[cat == label] += (bias_ra, bias_dec)
    observed = error.ravel() * ARCSEC_RAD + design[:, 6:] @ np.asarray(truth)
    keep = ~wild
    rows = np.repeat(keep, 2)
    white = noise.mask(keep).whiten(np.column_stack([design[rows], observed[rows]]))
    pair = []
    for columns, components in ((slice(0, 6), ""), (slice(0, 9), "RTN")):
        x = white[:, columns]
        scale = np.linalg.norm(x, axis=0)
        best, *_ = np.linalg.lstsq(x / scale, white[:, -1])
        cov = np.linalg.inv((x / scale).T @ (x / scale)) / np.outer(scale, scale)
        left = (observed - design[:, columns] @ (best / scale)) / ARCSEC_RAD
        turned = (ra[0, n:] - ra[0, :n] + np.pi) % (2 * np.pi) - np.pi
        rate_ra = turned * cosd / 0.48 / ARCSEC_RAD
        rate_dec = (dec[0, n:] - dec[0, :n]) / 0.48 / ARCSEC_RAD
        speed = np.hypot(rate_ra, rate_dec)
        total = np.hypot(sigma, common)
        table = pd.DataFrame(
            {
                "tdb_d": tdb_d,
                "utc": Time(tdb_d + 51544.5, format="mjd", scale="tdb").isot,
                "stn": stn,
                "site": np.where(stn == "SPC", "space", "fixed"),
                "astCat": cat,
                "ra_arcsec": left[0::2],
                "dec_arcsec": left[1::2],
                "sigma_ra_arcsec": total,
                "sigma_dec_arcsec": total * 1.1,
                "along_arcsec": (left[0::2] * rate_ra + left[1::2] * rate_dec) / speed,
                "across_arcsec": (left[1::2] * rate_ra - left[0::2] * rate_dec) / speed,
                "chi": np.hypot(left[0::2] / total, left[1::2] / total / 1.1),
                "keep": keep,
                "motion_ra_arcsec_h": rate_ra,
                "motion_dec_arcsec_h": rate_dec,
                "r_au": r_au[back][:n],
                "delta_au": delta_au[back][:n],
            }
        )
        chi2 = float(np.sum((white[:, -1] - x @ (best / scale)) ** 2))
        pair.append(
            StandInFit(
                name,
                table,
                noise,
                design[:, columns],
                components,
                keep,
                (best / scale)[6:] * AU_D2,
                cov[6:, 6:] * AU_D2**2,
                chi2,
                len(x) - x.shape[1],
                best / scale,
                x.T @ x,
            )
        )
    return tuple(pair)


def circular(radius_au: float, e: float, tilt_deg: float) -> np.ndarray:
    """Heliocentric state at the perihelion of an orbit with this semi-major axis."""
    q = radius_au * (1 - e)
    speed = np.sqrt(GM_SUN_AU3_D2 * (2 / q - 1 / radius_au))
    tilt = np.radians(tilt_deg)
    return np.array([0.0, q, 0.0, -speed * np.cos(tilt), 0.0, speed * np.sin(tilt)])


@lru_cache
def demo_pair(truth: float = 0.0, n_nights: int = 75, seed: int = 3):
    """About 300 observations in 8 months from four stations, one of them a spacecraft."""
    rng = np.random.default_rng(seed)
    nights = np.sort(rng.choice(240, n_nights, replace=False)) + 9500.0
    codes = np.array(["Q01", "Q02", "Q03", "SPC"])
    times, stations, sigma = [], [], []
    for night in nights:
        code = rng.choice(codes, p=[0.4, 0.3, 0.2, 0.1])
        for _ in range(4):
            times.append(night + 0.3 * rng.random())
            stations.append(code)
            sigma.append({"Q01": 0.15, "Q02": 0.3, "Q03": 0.5, "SPC": 0.1}[code])
    cat = np.full(len(times), "Gaia2")
    return make_pair(
        np.array(times),
        np.array(stations),
        cat,
        np.array(sigma),
        0.06,
        circular(2.9, 0.55, 8.0),
        (0.3 * truth, truth, 0.2 * truth),
        seed=seed,
        name="Demo one",
    )


@lru_cache
def archive_pair(biased: bool = True, seed: int = 5):
    """About 1400 observations over 35 years with seasons, sixty stations and old catalogues."""
    rng = np.random.default_rng(seed)
    times, stations, cats, sigma = [], [], [], []
    for season in np.concatenate([[0.0, 1480.0], np.arange(3300.0, 12900.0, 480.0)]):
        share = 4 if season < 3000 else int(rng.integers(10, 34))
        for _ in range(share):
            night = season + 60.0 * rng.standard_normal()
            code = f"{int(60 * rng.beta(0.5, 1.2)) + 600}"
            if season < 3000:
                cat, s = "USNOA1", 0.8
            elif season < 8500:
                cat, s = str(rng.choice(["USNOA2", "UCAC2", "USNOB1"])), 0.5
            else:
                cat, s = str(rng.choice(["UCAC4", "Gaia1", "Gaia2"])), 0.25
            for _ in range(int(rng.integers(2, 5))):
                times.append(night + 0.1 * rng.random())
                stations.append(code)
                cats.append(cat)
                sigma.append(s)
    offsets = {"USNOA1": (0.3, 0.45), "USNOA2": (0.05, 0.25), "USNOB1": (0.1, 0.2)}
    return make_pair(
        np.array(times) - 6100.0,
        np.array(stations),
        np.array(cats),
        np.array(sigma),
        0.12,
        circular(2.8, 0.15, 10.0),
        offsets=offsets if biased else None,
        seed=seed,
        name="Archive one",
    )


@lru_cache
def tiny_pair(seed: int = 7):
    """Ten observations in nine days from one station."""
    rng = np.random.default_rng(seed)
    times = np.repeat(np.array([0.2, 1.2, 3.2, 6.2, 9.2]), 2) + 0.02 * rng.random(10) + 8000.0
    null, push = make_pair(
        times,
        np.full(10, "Q01"),
        np.full(10, "Gaia2"),
        np.full(10, 0.2),
        0.05,
        circular(2.3, 0.4, 5.0),
        seed=seed,
        name="Tiny one",
    )
    return null, push
