"""What the residual fan shows, as numbers: residuals along and across, night means, departures.

May import constants, errors and the public names of the rooms to the left of report.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from astropy import units as u

from ngbound.constants import ARCSEC_RAD
from ngbound.errors import FitError
from ngbound.fit import Comparison
from ngbound.limits import (
    AU_D2,
    DetectionThreshold,
    ThrustInformation,
    detection_threshold,
    thrust_information,
    verdict,
)
from ngbound.report.departure import refit_departure
from ngbound.report.figures.seasons import dates
from ngbound.rounding import along, percent, rounded, up

LADDER = (0.5, 1.0, 2.0, 4.0)
LONG_LADDER = (1.0, 3.0, 10.0, 30.0)
AXES = {"radial": "R", "transverse": "T", "normal": "N"}
GROUND = "the ground"


@dataclass(frozen=True)
class Rung:
    """One acceleration of the ladder: au/d2, its multiple of the threshold, and both in words."""

    au_d2: float
    multiple: str
    value: str


@dataclass(frozen=True)
class Panel:
    """One of the two coordinates, arcsec.

    ``value``, ``sigma`` (n,) are the records; ``night_value``, ``night_sigma`` (b,) the means of
    the station-nights; ``fan`` (b, rung) and ``fitted`` (b,) the departures there.
    """

    label: str
    value: np.ndarray
    sigma: np.ndarray
    night_value: np.ndarray
    night_sigma: np.ndarray
    fan: np.ndarray
    fitted: np.ndarray | None


@dataclass(frozen=True)
class FanContents:
    """Everything the fan shows.

    ``date``, ``stn``, ``keep`` (n,) belong to the records; ``night_date``, ``night_stn`` and
    ``night_platform`` (b,) to the station-nights. A platform is the ground or one spacecraft.
    """

    name: str
    date: np.ndarray
    stn: np.ndarray
    keep: np.ndarray
    night_date: np.ndarray
    night_stn: np.ndarray
    night_platform: np.ndarray
    panels: tuple[Panel, Panel]
    rungs: tuple[Rung, ...]
    notes: tuple[str, ...]

    @property
    def platforms(self) -> list[str]:
        """Platforms, most nights first."""
        names, count = np.unique(self.night_platform, return_counts=True)
        return [str(name) for name in names[np.argsort(-count, kind="stable")]]

    @classmethod
    def of(
        cls,
        null: Any,
        push: Any | None,
        ladder: Sequence[float] | u.Quantity | None,
        component: str | None,
        threshold: Any,
        comparison: Comparison | None,
    ) -> "FanContents":
        """Of two fits; the arguments are those of `residual_fan`."""
        table: pd.DataFrame = null.residuals
        fitted_to = np.asarray(table["keep"], dtype=bool)
        # radar echoes have no place on the sky
        drawn = np.isfinite(table["ra_arcsec"].to_numpy(dtype=float))
        if not (fitted_to & drawn).any():
            raise FitError("The fit keeps no direction, so there is no residual to draw.")
        table, keep = table[drawn], fitted_to[drawn]
        noise = null.noise if drawn.all() else null.noise.mask(drawn)
        date = dates(table["tdb_d"].to_numpy())
        stn = table["stn"].astype(str).to_numpy()
        turn = _turn(table)
        night = np.asarray(noise.night)
        members = [keep & (night == block) for block in np.unique(night[keep])]
        first = [int(np.flatnonzero(rows)[0]) for rows in members]
        site = table["site"].to_numpy() if "site" in table else np.full(len(table), "")
        platform = np.where(site[first] == "space", stn[first], GROUND)

        shared = _shared(table)
        seen = table[["ra_arcsec", "dec_arcsec"]].to_numpy(float) - shared
        both = np.einsum("nij,nj->ni", turn, seen)
        sigma, common = _errors(turn, noise)
        night_sigma = np.array(
            [np.sqrt(1 / (sigma[m] ** -2).sum(axis=0) + common[m].max() ** 2) for m in members]
        )
        weighted = [(both[m] * sigma[m] ** -2).sum(0) / (sigma[m] ** -2).sum(0) for m in members]
        night_value = np.array(weighted)

        rungs: tuple[Rung, ...] = ()
        notes: list[str] = []
        fan, fitted = np.zeros((len(members), 2, 0)), None
        if push is not None:
            left = refit_departure(push, fitted_to)[drawn]
            unit = np.einsum("nij,njk->nik", turn, left) / ARCSEC_RAD
            per_night = np.array([unit[m].mean(axis=0) for m in members])
            information = thrust_information(push)
            found = threshold if isinstance(threshold, DetectionThreshold) else None
            found = found or detection_threshold(push)
            judged = verdict(null, push, found, comparison=comparison)
            seen_at_all = judged.p_value < judged.false_alarm
            direction, which = _direction(information, component, seen_at_all)
            a_det, how = _threshold(threshold, found, direction, information, component)
            rungs = _rungs(ladder, a_det, np.abs(per_night @ direction), night_sigma)
            fan = (per_night @ direction)[:, :, None] * np.array([r.au_d2 for r in rungs])
            fitted = per_night @ information.A_hat if seen_at_all else None
            law = getattr(push.thrust, "law", None)
            law = getattr(law, "name", law)
            notes = [
                "shaded: what a thrust leaves in the best gravity-only refit",
                which + (f", law {law}" if law else ""),
                how,
            ]
        if np.any(shared != 0.0):
            notes.append("estimated offsets of stations and catalogues taken out")
        panels = [
            Panel(
                label,
                both[:, i],
                np.hypot(sigma[:, i], common),
                night_value[:, i],
                night_sigma[:, i],
                fan[:, i],
                None if fitted is None else fitted[:, i],
            )
            for i, label in enumerate(("along", "across"))
        ]
        return cls(
            str(null.arc.name),
            date,
            stn,
            keep,
            np.array([date[m].mean() for m in members]),
            stn[first],
            platform,
            (panels[0], panels[1]),
            rungs,
            tuple(notes),
        )


def _turn(table: pd.DataFrame) -> np.ndarray:
    """Rotations (n, 2, 2) from (RA cos(dec), Dec) to (along, across) the motion."""
    rate_ra = np.asarray(table["motion_ra_arcsec_h"], dtype=float)
    rate_dec = np.asarray(table["motion_dec_arcsec_h"], dtype=float)
    speed = np.hypot(rate_ra, rate_dec)
    still = ~(speed > 0)
    c = np.where(still, 1.0, rate_ra / np.where(still, 1.0, speed))
    s = np.where(still, 0.0, rate_dec / np.where(still, 1.0, speed))
    return np.stack([np.stack([c, s], axis=1), np.stack([-s, c], axis=1)], axis=1)


def _shared(table: pd.DataFrame) -> np.ndarray:
    """Estimated errors (n, 2) that each record shares with others of many nights, arcsec."""
    columns = ["shared_ra_arcsec", "shared_dec_arcsec"]
    if not set(columns) <= set(table):
        return np.zeros((len(table), 2))
    return np.asarray(table[columns].to_numpy(float))


def _errors(turn: np.ndarray, noise: Any) -> tuple[np.ndarray, np.ndarray]:
    """Independent sigma (n, 2) along and across, and the night's common part (n,), arcsec."""
    s_ra = np.asarray(noise.sigma_ra_arcsec, dtype=float)
    s_dec = np.asarray(noise.sigma_dec_arcsec, dtype=float)
    cross = np.asarray(noise.corr, dtype=float) * s_ra * s_dec
    cov = np.stack([np.stack([s_ra**2, cross], 1), np.stack([cross, s_dec**2], 1)], 1)
    turned = np.einsum("nij,njk,nlk->nil", turn, cov, turn)
    sigma = np.sqrt(np.stack([turned[:, 0, 0], turned[:, 1, 1]], axis=1))
    return sigma, np.nan_to_num(np.asarray(noise.night_common_arcsec, dtype=float))


def _direction(
    information: ThrustInformation, component: str | None, seen_at_all: bool
) -> tuple[np.ndarray, str]:
    """Unit vector (k,) of the ladder, and what it is."""
    if component not in (None, "best", "fitted"):
        letter = AXES.get(str(component), str(component))
        unit = information.direction(letter)
        named = {short: word for word, short in AXES.items()}
        return unit, f"thrust {named.get(letter, letter)}"
    if information.k == 1:
        named = {short: word for word, short in AXES.items()}
        return np.ones(1), f"thrust {named[information.components]}"
    if component == "fitted" or (component is None and seen_at_all):
        unit = information.A_hat / np.linalg.norm(information.A_hat)
        words = "along the fitted thrust"
    else:
        unit = information.eigenvectors[:, -1]
        words = "in the direction this arc shows best"
    return unit, f"{words} {along(information.components, unit)}"


def _threshold(
    given: Any,
    found: DetectionThreshold,
    direction: np.ndarray,
    information: ThrustInformation,
    component: str | None,
) -> tuple[float, str]:
    """Threshold in au/d2 along the drawn direction and the words that define it."""
    if given is not None and not isinstance(given, DetectionThreshold):
        return float(u.Quantity(given, AU_D2).to_value(AU_D2)), "1×: the threshold given"
    if information.k == 1 or component not in (None, "best", "fitted"):
        value = found.delta_one * found.noise_scale * information.sigma_held(direction)
        test = "this component tested alone"
    else:
        value, test = found.along(direction), "all components tested together"
    return float(value.to_value(AU_D2)), (
        f"1×: found with probability {percent(found.power)} at a false-alarm rate of "
        f"{percent(found.false_alarm)}, {test}"
    )


def _rungs(
    ladder: Sequence[float] | u.Quantity | None,
    a_det: float,
    per_night: np.ndarray,
    night_sigma: np.ndarray,
) -> tuple[Rung, ...]:
    """The ladder given, or multiples of the threshold that stand out of the night means."""
    if ladder is not None:
        given = np.atleast_1d(u.Quantity(ladder, AU_D2).to_value(AU_D2))
        sizes = [float(x) for x in np.sort(np.abs(given))]
        return tuple(Rung(x, f"{float(rounded(x / a_det)):g}×", rounded(x)) for x in sizes)
    size = np.quantile(per_night, 0.9, axis=0) * LADDER[-1] * a_det
    seen = np.any(size > 1.5 * np.maximum(np.median(night_sigma, axis=0), 1e-12))
    return tuple(
        Rung(m * a_det, f"{m:g}×", up(m * a_det)) for m in (LADDER if seen else LONG_LADDER)
    )
