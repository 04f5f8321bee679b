"""What more observations would buy; may import arc, errors, rounding, fit,
motion, sky and this room.

Planned records are observed on the fitted orbit: their partials, whitened with their planned
errors, add to the normal matrix of the fit, and the threshold follows as for a real arc. Every
night is also tried alone, so that candidate nights can be compared. Errors that planned records
would share with those of the arc, or with one another beyond a night, are not foreseen.
"""

from collections.abc import Sequence
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
import pandas as pd
from astropy import units as u
from astropy.time import Time

from ngbound.arc import Noise
from ngbound.blas import on_one_thread
from ngbound.constants import ARCSEC_RAD, C_AU_D
from ngbound.errors import LimitError
from ngbound.fit import Fit
from ngbound.limits.fit_protocol import GaussianFit
from ngbound.limits.information import AU_D2
from ngbound.limits.threshold import DetectionThreshold, detection_threshold
from ngbound.motion import (
    Records,
    design_matrix,
    integrate_track,
    partials_along,
    see,
)
from ngbound.rounding import counted, rounded, up
from ngbound.sky import (
    direction_to_angles,
    load_ephemeris,
    parse_time,
    station_states,
    tdb_d_to_iso,
)


@dataclass(frozen=True)
class PlannedNight:
    """A night of observations to come.

    Attributes
    ----------
    utc : str or Time
        Middle of the night's records, UTC.
    station : str
        Observatory code.
    n : int
        Records.
    sigma_arcsec : float
        Independent error of each record in each coordinate.
    common_arcsec : float
        Error that the records of the night share.
    spacing_d : float
        Between records.
    """

    utc: str | Time
    station: str = "500"
    n: int = 4
    sigma_arcsec: float = 0.3
    common_arcsec: float = 0.1
    spacing_d: float = 0.02

    def __post_init__(self) -> None:
        sizes = (self.sigma_arcsec, self.common_arcsec + 1e-300, self.spacing_d)
        if self.n < 1 or not all(np.isfinite(s) and s > 0.0 for s in sizes):
            raise LimitError(
                "A planned night needs at least one record, a positive sigma_arcsec and spacing_d "
                f"and a common_arcsec that is not negative; {asdict(self)!r} was given."
            )


_WITH_UNIT = {name: f"{name}_au_d2" for name in ("worst", "best", "alone_worst")}


@dataclass(frozen=True, eq=False)
class Forecast:
    """Thresholds after each planned night.

    Attributes
    ----------
    now : DetectionThreshold
        Of the arc as it is.
    after : tuple of DetectionThreshold
        With all planned nights up to each one, in order of time.
    alone : tuple of DetectionThreshold
        With that night only.
    nights : tuple of PlannedNight
        In order of time.
    table : DataFrame
        utc (middle of the night's records), station, n; of the middle record elongation_deg (from
        the Sun), delta_au, ra_deg, dec_deg, sky_sigma_arcsec (how well the arc predicts the place);
        worst and best (threshold by then, au/d2), mass_reach (how many times larger a mass the
        worst-direction threshold by then bounds, at the same outgassing), alone_worst and
        alone_gain (the same of that night alone).
    """

    now: DetectionThreshold
    after: tuple[DetectionThreshold, ...]
    alone: tuple[DetectionThreshold, ...]
    nights: tuple[PlannedNight, ...]
    table: pd.DataFrame

    @property
    def best_night(self) -> int:
        """The night that alone lowers the worst-direction threshold most."""
        return int(np.argmin([float(t.worst.value) for t in self.alone]))

    def detectable(
        self,
        acceleration: "u.Quantity | float",
        direction: "str | np.ndarray | list[float]" = "worst",
    ) -> str | None:
        """UTC from which a thrust of this size (au/d2) is above the threshold.

        "now" if it is already, None if it is not by the end of the plan. ``direction`` is "worst"
        (whatever its direction), a component or a vector.
        """
        size = float(
            acceleration.to_value(AU_D2) if isinstance(acceleration, u.Quantity) else acceleration
        )
        if not size > 0.0:
            raise LimitError(
                f"The acceleration must be positive, in au/d2; {acceleration!r} was given."
            )
        for when, each in zip(["now", *self.table["utc"]], [self.now, *self.after], strict=True):
            whatever = isinstance(direction, str) and direction == "worst"
            if size >= float((each.worst if whatever else each.along(direction)).value):
                return str(when)
        return None

    def detectable_sentence(self, acceleration: "u.Quantity | float") -> str:
        """In words: from when on a thrust of this size (au/d2) would be detected in any
        direction."""
        when = self.detectable(acceleration)
        size = rounded(float(u.Quantity(acceleration, AU_D2).value), 3)
        if when is None:
            return (
                f"A thrust of {size} au/d2 in the worst seen direction stays below the threshold "
                "to the end of the plan."
            )
        since = "already" if when == "now" else f"from {when} on"
        return f"A thrust of {size} au/d2 is above the threshold in any direction {since}."

    def __str__(self) -> str:
        last, best = self.after[-1], self.table.iloc[self.best_night]
        plan = counted(len(self.nights), "planned night")
        return (
            f"The threshold in the worst seen direction falls from {up(self.now.worst.value)} to "
            f"{up(last.worst.value)} au/d2 with {plan}; the mass it bounds grows "
            f"{self.table['mass_reach'].iloc[-1]:.3g}-fold. The night that buys most alone "
            f"is {best['utc']} at {best['station']} ({best['alone_gain']:.3g}-fold).\n"
            + self.table.to_string(
                index=False,
                float_format=lambda value: f"{value:.4g}",
                formatters=dict.fromkeys(("worst", "best", "alone_worst"), up),
            )
        )

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record."""
        return {
            "now": self.now.to_dict(),
            "best_night": self.best_night,
            "nights": self.table.rename(columns=_WITH_UNIT).to_dict(orient="records"),
        }


@on_one_thread
def forecast(
    fit: Fit,
    plan: Sequence[PlannedNight],
    *,
    false_alarm: float = 0.0027,
    power: float = 0.95,
) -> Forecast:
    """What planned nights would do to the detection threshold.

    Parameters
    ----------
    fit : Fit
        With thrust components.
    plan : sequence of PlannedNight
        Nights to come, or candidates for one night.
    false_alarm, power : float

    Raises
    ------
    LimitError
        If the plan is empty, or the fit has no thrust.
    StationError, EphemerisRangeError
    """
    if not plan:
        raise LimitError("The plan holds no night; give at least one PlannedNight.")
    now = detection_threshold(fit, false_alarm=false_alarm, power=power)
    middle = [float(np.ravel(parse_time(night.utc, scale="utc"))[0]) for night in plan]
    order = np.argsort(middle, kind="stable")
    nights = tuple(plan[i] for i in order)
    tdb_d = np.concatenate(
        [
            middle[i] + plan[i].spacing_d * (np.arange(plan[i].n) - 0.5 * (plan[i].n - 1))
            for i in order
        ]
    )
    night = np.repeat(np.arange(len(nights)), [each.n for each in nights])
    ephemeris = load_ephemeris()
    observer = np.concatenate(
        [
            station_states(each.station, tdb_d[night == i], ephemeris).position_au
            for i, each in enumerate(nights)
        ]
    )
    rho, design = _predicted(fit, tdb_d, observer)
    sigma = np.array([each.sigma_arcsec for each in nights])[night]
    common = np.array([each.common_arcsec for each in nights])[night]
    whole = np.hypot(sigma, common)
    noise = Noise(
        whole, whole, np.zeros(night.size), common, night.astype(np.int64),
        np.full(night.size, "planned", dtype=object),
    )  # fmt: skip
    white = noise.whiten(design.reshape(2 * night.size, -1))
    twice = np.repeat(night, 2)
    normal, numbers = np.asarray(fit.normal, dtype=float), fit.n_numbers
    grown, count = normal.copy(), numbers
    after, alone = [], []

    def threshold_of(total: np.ndarray, n: int) -> DetectionThreshold:
        grown_fit = GaussianFit.of(fit, total, n)
        return detection_threshold(grown_fit, false_alarm=false_alarm, power=power)

    for i, each in enumerate(nights):
        part = white[twice == i].T @ white[twice == i]
        grown, count = grown + part, count + 2 * each.n
        after.append(threshold_of(grown, count))
        alone.append(threshold_of(normal + part, numbers + 2 * each.n))
    table = _table(fit, nights, night, tdb_d, observer, rho, design)
    table.insert(0, "utc", np.atleast_1d(tdb_d_to_iso(np.array(middle)[order], scale="utc")))
    worst = np.array([float(t.worst.value) for t in after])
    single = np.array([float(t.worst.value) for t in alone])
    table["worst"] = worst
    table["best"] = [float(t.best.value) for t in after]
    table["mass_reach"] = float(now.worst.value) / worst
    table["alone_worst"] = single
    table["alone_gain"] = float(now.worst.value) / single
    return Forecast(now, tuple(after), tuple(alone), nights, table)


def _predicted(fit: Fit, tdb_d: np.ndarray, observer: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Observer to object (n, 3) au, and partials (n, 2, p) of the place, at times to come."""
    orbit = fit.orbit
    reach = (
        2.0 * float(np.max(np.linalg.norm(observer, axis=1)) + np.linalg.norm(fit.theta[:3]))
    ) / C_AU_D + 2.0
    track = integrate_track(
        orbit.epoch_tdb_d, fit.theta[:6], float(tdb_d.min()) - reach, float(tdb_d.max()),
        orbit.thrust, orbit.forces,
    )  # fmt: skip
    zeros = np.zeros(tdb_d.size)
    sight = see(track, Records.from_angles(tdb_d, observer, zeros, zeros))
    ra, dec = direction_to_angles(sight.rho_au)
    records = Records.from_angles(tdb_d, observer, ra, dec)
    partials = partials_along(track, fit.names)
    return sight.rho_au, design_matrix(sight, records, partials)


def _table(
    fit: Fit,
    nights: tuple[PlannedNight, ...],
    night: np.ndarray,
    tdb_d: np.ndarray,
    observer: np.ndarray,
    rho: np.ndarray,
    design: np.ndarray,
) -> pd.DataFrame:
    """Of the middle record of each night."""
    middle = np.searchsorted(night, np.arange(len(nights))) + np.array([x.n // 2 for x in nights])
    toward = rho / np.linalg.norm(rho, axis=1)[:, None]
    sun = load_ephemeris().position_au("sun", tdb_d) - observer
    cosine = np.sum(toward * sun, axis=1) / np.linalg.norm(sun, axis=1)
    spread = np.einsum("nip,pq,niq->n", design, fit.theta_cov, design) ** 0.5 / ARCSEC_RAD
    ra, dec = direction_to_angles(rho)
    return pd.DataFrame(
        {
            "station": [each.station for each in nights],
            "n": [each.n for each in nights],
            "elongation_deg": np.degrees(np.arccos(np.clip(cosine, -1.0, 1.0)))[middle],
            "delta_au": np.linalg.norm(rho, axis=1)[middle],
            "ra_deg": np.degrees(ra)[middle] % 360.0,
            "dec_deg": np.degrees(dec)[middle],
            "sky_sigma_arcsec": spread[middle],
        }
    )
