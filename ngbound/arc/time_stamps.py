"""Whether a station's instants stand at the start or the end of its exposures, before any orbit;
imports numpy and this room's table, stations and nights.

In a window of a day the geocentric motion of a small body is a quadratic in time, and stations see
it displaced by its parallax, one unknown for all of them. To these seven unknowns an eighth is
added for the station in question: the fraction f of the exposure by which its instants are early,
which moves it along its track by f times exposure times motion. The fractions of all windows are
averaged with their weights.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ngbound.arc.observations import Arc
from ngbound.errors import StationError

FloatArray = NDArray[np.float64]

WINDOW_D = 1.0
FEWEST_ROWS = 6
DEFAULT_ARCSEC = 0.5
SMALLEST_ARCSEC = 0.05
"""Sigma of an observation without a stated one, and the smallest that is believed here."""
SIGNIFICANT = 4.0
SMALLEST_FRACTION = 0.25
LARGEST_FRACTION = 1.5
J2000_MJD = 51544.5


@dataclass(frozen=True)
class TimeShift:
    """Rows of a station whose instants are early by ``fraction`` of the exposure (late when
    negative), its standard deviation, and the shift along the track in arcsec."""

    rows: tuple[int, ...]
    station: str
    fraction: float
    sigma: float
    shift_arcsec: float


def sidereal_rad(mjd_utc: FloatArray) -> FloatArray:
    """Greenwich mean sidereal angle, to about a second of time (UT1 taken as UTC).

    Source: the linear part of the IAU 1982 expression (S. Aoki et al. 1982, A&A 105, 359), from
    memory.
    """
    return np.radians((280.46061837 + 360.98564736629 * (mjd_utc - J2000_MJD)) % 360.0)


def time_shifts(arc: Arc) -> list[TimeShift]:
    """Stations whose instants are early or late by a good part of their exposures.

    Only fixed stations count; column ``exp`` and observations of other stations in the same day
    are needed. Rows are positions in ``arc.table``.
    """
    table = arc.table
    if "exp" not in table:
        return []
    usable = (table["use"] & (table["site"] == "fixed")).to_numpy(dtype=bool)
    rows = np.flatnonzero(usable)
    if len(rows) < FEWEST_ROWS:
        return []
    time_d = table["utc_day"].to_numpy() + table["utc_sec"].to_numpy() / 86400.0
    rows = rows[np.argsort(time_d[rows], kind="stable")]
    time_d = time_d[rows]
    stn = table["stn"].to_numpy(dtype=object)[rows]
    exp_d = table["exp"].to_numpy(dtype=float)[rows] / 86400.0
    told: dict[str, list[tuple[float, float, float]]] = {}
    begin = 0
    for at in range(1, len(rows) + 1):
        if at < len(rows) and time_d[at] - time_d[begin] <= WINDOW_D:
            continue
        window = np.arange(begin, at)
        begin = at
        codes = sorted(set(stn[window]))
        if len(window) < FEWEST_ROWS or len(codes) < 2:
            continue
        problem = _Window(arc, rows[window], time_d[window], stn[window])
        for code in codes:
            known = (stn[window] == code) & np.isfinite(exp_d[window])
            if known.any():
                answer = problem.fraction(known, exp_d[window])
                if answer is not None:
                    told.setdefault(code, []).append(answer)
    found = []
    for code, answers in told.items():
        f, s, shift = np.array(answers).T
        weight = 1.0 / s**2
        fraction, sigma = float((f * weight).sum() / weight.sum()), float(weight.sum() ** -0.5)
        spread = float(np.sqrt(max(((f - fraction) ** 2 * weight).sum() / max(len(f) - 1, 1), 1.0)))
        sigma *= spread
        if abs(fraction) > SIGNIFICANT * sigma and (
            SMALLEST_FRACTION <= abs(fraction) <= LARGEST_FRACTION
        ):
            mine = rows[(stn == code) & np.isfinite(exp_d)]
            found.append(
                TimeShift(
                    tuple(sorted(int(r) for r in mine)),
                    code,
                    fraction,
                    sigma,
                    float(np.median(shift)) * abs(fraction),
                )
            )
    return found


class _Window:
    """The positions of one day on the plane that touches the sky at their middle, in arcsec."""

    def __init__(
        self, arc: Arc, rows: NDArray[np.int64], time_d: FloatArray, stn: NDArray[np.object_]
    ) -> None:
        table = arc.table
        ra = table["ra_rad"].to_numpy(dtype=float)[rows]
        dec = table["dec_rad"].to_numpy(dtype=float)[rows]
        self.time_d = time_d - time_d.mean()
        middle = len(rows) // 2
        d_ra = (ra - ra[middle] + np.pi) % (2.0 * np.pi) - np.pi
        self.sky = np.degrees(np.stack([d_ra * np.cos(dec), dec - dec[middle]])) * 3600.0
        rms = np.stack([table[c].to_numpy(dtype=float)[rows] for c in ("rmsRA", "rmsDec")])
        self.sigma = np.maximum(np.where(np.isfinite(rms), rms, DEFAULT_ARCSEC), SMALLEST_ARCSEC)
        self.parallax = self._parallax(arc, time_d, stn, ra, dec)

    def _parallax(
        self,
        arc: Arc,
        time_d: FloatArray,
        stn: NDArray[np.object_],
        ra: FloatArray,
        dec: FloatArray,
    ) -> FloatArray:
        """Displacement (2, n) of each position per unit of parallax."""
        place = np.zeros((3, len(stn)))
        turn = sidereal_rad(time_d)
        for code in set(stn):
            try:
                where = arc.station(code)
            except StationError:
                continue
            mine = stn == code
            angle = turn[mine] + np.radians(where.longitude_deg)
            place[0, mine] = where.rho_cos_phi * np.cos(angle)
            place[1, mine] = where.rho_cos_phi * np.sin(angle)
            place[2, mine] = where.rho_sin_phi
        east = -place[0] * np.sin(ra) + place[1] * np.cos(ra)
        north = (
            -place[0] * np.sin(dec) * np.cos(ra)
            - place[1] * np.sin(dec) * np.sin(ra)
            + place[2] * np.cos(dec)
        )
        return -np.stack([east, north])

    def fraction(
        self, mine: NDArray[np.bool_], exp_d: FloatArray
    ) -> tuple[float, float, float] | None:
        """Fraction of the exposure, its standard deviation, and motion times exposure (arcsec);
        None when the window cannot tell."""
        t = self.time_d
        others = ~mine
        if others.sum() < 3 or np.ptp(t[others]) <= 0.0:
            return None
        rate = np.array([np.polyfit(t, axis, 1)[0] for axis in self.sky])
        power = np.stack([np.ones_like(t), t, t * t])
        shift = rate[:, None] * np.where(mine, exp_d, 0.0)
        nothing = np.zeros_like(power)
        design = np.concatenate(
            [
                np.concatenate([power, nothing, self.parallax[:1], shift[:1]]),
                np.concatenate([nothing, power, self.parallax[1:], shift[1:]]),
            ],
            axis=1,
        ).T
        sigma = self.sigma.ravel()
        weighted = design / sigma[:, None]
        scale = np.linalg.norm(weighted, axis=0)
        if not (scale > 0.0).all() or len(sigma) <= len(scale):
            return None
        answer, _, rank, _ = np.linalg.lstsq(
            weighted / scale, self.sky.ravel() / sigma, rcond=1e-10
        )
        if rank < len(scale):
            return None
        left = self.sky.ravel() / sigma - weighted / scale @ answer
        covariance = np.linalg.inv((weighted / scale).T @ (weighted / scale))
        spread = max(float(left @ left) / (len(sigma) - rank), 1.0)
        f = float(answer[-1] / scale[-1])
        s = float(np.sqrt(covariance[-1, -1] * spread) / scale[-1])
        along = float(np.hypot(*rate) * np.median(exp_d[mine]))
        return (f, s, along) if np.isfinite(f) and 0.0 < s < 10.0 else None
