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
ALIKE = 0.8
"""Stations whose significance is at least this share of the greatest are equally suspect."""
MOST_STATIONS = 5
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
    windows = []
    begin = 0
    for at in range(1, len(rows) + 1):
        if at < len(rows) and time_d[at] - time_d[begin] <= WINDOW_D:
            continue
        window = np.arange(begin, at)
        begin = at
        if len(window) >= FEWEST_ROWS and len(set(stn[window])) >= 2:
            windows.append(_Window(arc, rows[window], time_d[window], stn[window], exp_d[window]))
    found: list[TimeShift] = []
    while len(found) < MOST_STATIONS:
        known = [shift.station for shift in found]
        answers = {code: _average(windows, code, known) for code in sorted(set(stn) - set(known))}
        worst = _most_doubtful({code: a for code, a in answers.items() if a is not None})
        if worst is None:
            break
        code, (fraction, sigma, motion) = worst
        mine = rows[(stn == code) & np.isfinite(exp_d)]
        shifted = tuple(sorted(int(r) for r in mine))
        found.append(TimeShift(shifted, code, fraction, sigma, motion * abs(fraction)))
    return found


Answer = tuple[float, float, float]


def _average(windows: list["_Window"], code: str, known: list[str]) -> Answer | None:
    """Fraction, its standard deviation and motion per exposure (arcsec) of a station over all
    windows that can tell; the fractions of the stations in ``known`` are left free."""
    answers = [a for w in windows if (a := w.fraction(code, known)) is not None]
    if not answers:
        return None
    f, s, motion = np.array(answers).T
    weight = 1.0 / s**2
    mean, sigma = float((f * weight).sum() / weight.sum()), float(weight.sum() ** -0.5)
    scatter = float(((f - mean) ** 2 * weight).sum()) / max(len(f) - 1, 1)
    return mean, sigma * max(scatter, 1.0) ** 0.5, float(np.median(motion))


def _most_doubtful(answers: dict[str, Answer]) -> tuple[str, Answer] | None:
    """The station whose fraction is most significant, among those of a plausible size. Two
    stations alone accuse each other alike: the early one is taken, for instants are written at the
    start of an exposure far more often than at its end."""
    doubtful = {
        code: answer
        for code, answer in answers.items()
        if abs(answer[0]) > SIGNIFICANT * answer[1]
        and SMALLEST_FRACTION <= abs(answer[0]) <= LARGEST_FRACTION
    }
    if not doubtful:
        return None
    strength = {code: abs(f) / s for code, (f, s, _) in doubtful.items()}
    strongest = max(strength.values())
    alike = [code for code in doubtful if strength[code] > ALIKE * strongest]
    first = max(alike, key=lambda code: (doubtful[code][0] > 0.0, strength[code]))
    return first, doubtful[first]


class _Window:
    """The positions of one day on the plane that touches the sky at their middle, in arcsec."""

    def __init__(
        self,
        arc: Arc,
        rows: NDArray[np.int64],
        time_d: FloatArray,
        stn: NDArray[np.object_],
        exp_d: FloatArray,
    ) -> None:
        table = arc.table
        self.stn, self.exp_d = stn, exp_d
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

    def fraction(self, code: str, known: list[str]) -> Answer | None:
        """Fraction of the exposure for one station, its standard deviation, and motion times
        exposure (arcsec); None when the window cannot tell."""
        t = self.time_d
        mine = (self.stn == code) & np.isfinite(self.exp_d)
        others = ~np.isin(self.stn, [code, *known])
        if not mine.any() or others.sum() < 3 or np.ptp(t[others]) <= 0.0:
            return None
        rate = np.array([np.polyfit(t, axis, 1)[0] for axis in self.sky])
        power = np.stack([np.ones_like(t), t, t * t])
        shifts = [
            rate[:, None] * np.where((self.stn == c) & np.isfinite(self.exp_d), self.exp_d, 0.0)
            for c in (*[c for c in known if c in self.stn], code)
        ]
        nothing = np.zeros_like(power)
        along_ra = [power, nothing, self.parallax[:1], *(shift[:1] for shift in shifts)]
        along_dec = [nothing, power, self.parallax[1:], *(shift[1:] for shift in shifts)]
        design = np.concatenate([np.concatenate(along_ra), np.concatenate(along_dec)], axis=1).T
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
        along = float(np.hypot(*rate) * np.median(self.exp_d[mine]))
        return (f, s, along) if np.isfinite(f) and 0.0 < s < 10.0 else None
