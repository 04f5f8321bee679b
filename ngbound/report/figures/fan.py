"""The residual fan: what is left of the gravity-only fit, and what a thrust would have left.

May import constants, errors and the public names of the rooms to the left of report.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from astropy import units as u
from matplotlib.axes import Axes
from matplotlib.dates import AutoDateLocator, ConciseDateFormatter, num2date
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.ticker import FixedLocator, FuncFormatter, MaxNLocator, NullLocator
from scipy.interpolate import PchipInterpolator
from scipy.stats import chi2

from ngbound.constants import ARCSEC_RAD, J2000_MJD
from ngbound.errors import FitError
from ngbound.limits import (
    AU_D2,
    DetectionThreshold,
    ThrustInformation,
    detection_threshold,
    thrust_information,
)
from ngbound.report.departure import refit_departure
from ngbound.report.figures import style
from ngbound.report.rounding import percent, rounded

UNIX_EPOCH_MJD = 40587.0
"""1970-01-01, from which matplotlib counts its days."""

LADDER = (0.5, 1.0, 2.0, 4.0)
LONG_LADDER = (1.0, 3.0, 10.0, 30.0)
AXES = {"radial": "R", "transverse": "T", "normal": "N"}
SIGNIFICANT = 0.0027
"""The fitted thrust is drawn as well where chance gives one as significant less often than this."""
DWARFED = 5.0
"""A fan that reaches so many times further than the residuals is drawn on a symmetric-log scale."""
NOTE_POINTS = 6.4
MOST_STATIONS = 6
"""More stations than this share one colour and shape."""
GAP_FRACTION = 0.15
GAP_LEAST_D, GAP_MOST_D = 20.0, 60.0
"""Lines break in gaps longer than this share of the span, kept between these two."""
SEASON_GAP_D = 120.0
"""Gaps longer than this are cut out of the time axis where they would fill most of it."""
SEASON_LEAST_D = 25.0
"""A shorter season is given this much room all the same."""


@dataclass(frozen=True)
class _Clock:
    """Dates to places on the time axis: the date itself, or the seasons side by side.

    ``first``, ``last`` are the dates (days since 1970) where each season begins and ends,
    ``start`` the place of its beginning; a single season leaves the date as it is.
    """

    first: np.ndarray
    last: np.ndarray
    start: np.ndarray

    @property
    def cut(self) -> bool:
        return len(self.first) > 1

    @classmethod
    def of(cls, date: np.ndarray) -> "_Clock":
        """Seasons of these dates, if the gaps between them are most of the span."""
        when = np.sort(date)
        gap = np.diff(when)
        ends = np.flatnonzero(gap > SEASON_GAP_D)
        if gap[ends].sum() < 0.5 * (when[-1] - when[0]) or not len(ends):
            return cls(when[:1], when[-1:], when[:1])
        first = when[np.concatenate([[0], ends + 1])]
        last = when[np.concatenate([ends, [len(when) - 1]])]
        short = np.maximum(SEASON_LEAST_D - (last - first), 0.0)
        first, last = first - 0.5 * short, last + 0.5 * short
        length = last - first
        gutter = 0.35 * length.sum() / len(length)
        start = np.concatenate([[0.0], np.cumsum(length[:-1] + gutter)])
        return cls(first, last, start)

    def place(self, date: np.ndarray) -> np.ndarray:
        """Where these dates (any shape) stand on the axis."""
        if not self.cut:
            return np.asarray(date, dtype=float)
        season = np.clip(np.searchsorted(self.first, date, side="right") - 1, 0, None)
        return self.start[season] + (date - self.first[season])


@dataclass(frozen=True)
class _Panel:
    """One of the two coordinates: residuals, night means, departures per rung (night, rung)."""

    label: str
    value: np.ndarray
    sigma: np.ndarray
    night_value: np.ndarray
    night_sigma: np.ndarray
    fan: np.ndarray


def residual_fan(
    null: Any,
    push: Any | None = None,
    *,
    ladder: Sequence[float] | u.Quantity | None = None,
    component: str | None = None,
    threshold: Any = None,
    figsize: tuple[float, float] | None = None,
) -> Figure:
    """Residuals along and across the motion, with the departures a thrust would have left.

    Parameters
    ----------
    null : Fit
        The gravity-only fit whose residuals are drawn.
    push : Fit, optional
        The fit with thrust, for its partials; without it only the residuals are drawn.
    ladder : sequence of float or Quantity, optional
        Accelerations at 1 au (floats in au/d2). By default multiples 0.5, 1, 2 and 4 of the
        threshold, or 1, 3, 10 and 30 where 4 would still hide among the night means.
    component : {None, "best", "radial", "transverse", "normal"}
        Direction of the thrust; None and "best": the one this arc shows most readily.
    threshold : DetectionThreshold, Quantity or float (au/d2), optional
        What 1 on the ladder means. A DetectionThreshold (by default that of ``push`` at its
        defaults) gives the value of one component tested alone with the others held at zero, or,
        for "best", of all components tested together in that direction.
    figsize : (float, float), optional
        Inches; one page width by default.

    Returns
    -------
    matplotlib Figure
        Upper panel along, lower across; "across" is 90 degrees from the motion, turned from
        increasing right ascension towards increasing declination.
    """
    return _drawn(null, push, ladder, component, threshold, figsize)


@style.house_style
def _drawn(
    null: Any,
    push: Any | None,
    ladder: Sequence[float] | u.Quantity | None,
    component: str | None,
    threshold: Any,
    figsize: tuple[float, float] | None,
) -> Figure:
    table: pd.DataFrame = null.residuals
    fitted_to = np.asarray(table["keep"], dtype=bool)
    # radar echoes have no place on the sky
    drawn = np.isfinite(table["ra_arcsec"].to_numpy(dtype=float))
    if not (fitted_to & drawn).any():
        raise FitError("The fit keeps no direction, so there is no residual to draw.")
    table, keep = table[drawn], fitted_to[drawn]
    noise = null.noise if drawn.all() else null.noise.mask(drawn)
    date = np.asarray(table["tdb_d"], dtype=float) + J2000_MJD - UNIX_EPOCH_MJD
    turn = _turn(table)
    night = np.asarray(noise.night)
    blocks = np.unique(night[keep])
    clock = _Clock.of(date[keep])
    night_date = np.array([date[keep & (night == b)].mean() for b in blocks])
    night_stn = np.array([str(table["stn"].to_numpy()[keep & (night == b)][0]) for b in blocks])

    rungs, multiples, note = np.empty(0), np.empty(0), ""
    per_thrust = np.zeros((len(table), 2))
    fitted = None
    if push is not None:
        unit = refit_departure(push, fitted_to)[drawn]
        information = thrust_information(push)
        direction, single = _direction(information, component)
        per_thrust = np.einsum("nij,njk,k->ni", turn, unit, direction) / ARCSEC_RAD
        a_det, how = _threshold(threshold, push, direction, single)
        night_unit = np.array([per_thrust[keep & (night == b)].mean(axis=0) for b in blocks])
        rungs = _rungs(ladder, a_det, night_unit, _night_error(turn, noise, keep))
        multiples = rungs / a_det
        fitted = _fitted(information, unit, turn)
        note = _direction_note(direction, single, push) + how

    panels = _panels(table, turn, keep, noise, blocks, per_thrust, rungs)
    fig = style.HouseFigure(figsize=figsize or (style.PAGE_INCH, 4.7))
    width, height = fig.get_size_inches()
    lines = _wrapped(note, width)
    codes = _stations_by_count(table["stn"].to_numpy()[keep])
    entries = _key_entries(codes, keep, fitted is not None)
    rows = _key_rows(entries, width)
    right = 1.02 if len(rungs) else 0.12
    axes = fig.subplots(
        2,
        1,
        sharex=True,
        gridspec_kw={
            "left": 0.58 / width,
            "right": 1.0 - right / width,
            "bottom": 0.42 / height,
            "top": 1.0 - (0.42 + 0.115 * len(lines) + 0.14 * rows) / height,
            "hspace": 0.12,
        },
    )
    colours = _rung_colours(len(rungs))
    place, night_place = clock.place(date), clock.place(night_date)
    dwarfed = any(top > DWARFED * seen for seen, top in (_reach(p, keep) for p in panels))
    for ax, panel in zip(axes, panels, strict=True):
        _draw_fan(ax, night_date, clock, panel.fan, colours)
        if fitted is not None:
            index = 0 if panel is panels[0] else 1
            means = [fitted[keep & (night == b), index].mean() for b in blocks]
            _draw_fitted(ax, night_date, clock, np.array(means))
        _draw_points(ax, place, panel, keep, table["stn"].to_numpy(), codes)
        _draw_nights(ax, night_place, panel, night_stn, codes)
        _set_scale(ax, *_reach(panel, keep), dwarfed)
        _mark_beyond(ax, place, panel.value, keep)
        roomy = ax.get_window_extent().height / fig.dpi > 1.5
        ax.set_ylabel(f"{panel.label} the motion (arcsec)" if roomy else f"{panel.label} (arcsec)")
        style.tidy(ax)
    fig.align_ylabels(axes)
    _date_axis(axes, place, clock)
    peaks = [
        np.max(np.abs(p.fan), initial=0.0) / max(ax.get_ylim()[1], 1e-300)
        for ax, p in zip(axes, panels, strict=True)
    ]
    if len(rungs):
        told = int(np.argmax(peaks))
        _label_rungs(axes[told], night_place, panels[told].fan, rungs, multiples, colours)
    _title(fig, null, lines, width, height)
    _station_key(fig, entries, len(lines), rows, width, height)
    return fig


def _turn(table: pd.DataFrame) -> np.ndarray:
    """Rotations (n, 2, 2) from (RA cos(dec), Dec) to (along, across) the motion."""
    rate_ra = np.asarray(table["motion_ra_arcsec_h"], dtype=float)
    rate_dec = np.asarray(table["motion_dec_arcsec_h"], dtype=float)
    speed = np.hypot(rate_ra, rate_dec)
    still = ~(speed > 0)
    c = np.where(still, 1.0, rate_ra / np.where(still, 1.0, speed))
    s = np.where(still, 0.0, rate_dec / np.where(still, 1.0, speed))
    return np.stack([np.stack([c, s], axis=1), np.stack([-s, c], axis=1)], axis=1)


def _direction(information: ThrustInformation, component: str | None) -> tuple[np.ndarray, bool]:
    """Unit vector (k,), and whether it is one component alone rather than the best direction."""
    if component in (None, "best") and information.k > 1:
        return information.eigenvectors[:, -1], False
    if component in (None, "best"):
        return np.ones(1), True
    return information.direction(AXES.get(str(component), str(component))), True


def _threshold(given: Any, push: Any, direction: np.ndarray, single: bool) -> tuple[float, str]:
    """Threshold in au/d2 along the drawn direction and the words that define it."""
    if given is not None and not isinstance(given, DetectionThreshold):
        return float(u.Quantity(given, AU_D2).to_value(AU_D2)), "; 1×: the threshold given"
    found = detection_threshold(push) if given is None else given
    if single:
        value = found.delta_one * found.noise_scale * found.information.sigma_held(direction)
        test = "this component tested alone"
    else:
        value, test = found.along(direction), "all components tested together"
    return float(value.to_value(AU_D2)), (
        f"; 1×: found with probability {percent(found.power)} at a false-alarm rate of "
        f"{percent(found.false_alarm)}, {test}"
    )


def _direction_note(direction: np.ndarray, single: bool, push: Any) -> str:
    if single:
        letter = push.components[int(np.argmax(np.abs(direction)))]
        which = {letter: word for word, letter in AXES.items()}[letter]
    else:
        parts = ", ".join(f"{x:+.2f}" for x in np.round(direction, 2) + 0.0)
        which = f"in the direction this arc shows best, ({', '.join(push.components)}) = ({parts})"
    law = getattr(push.thrust, "law", None)
    law = getattr(law, "name", law)
    return f"thrust {which}" + (f", law {law}" if law else "")


def _weights(turn: np.ndarray, noise: Any) -> tuple[np.ndarray, np.ndarray]:
    """Independent sigma (n, 2) along and across, and the night's common part (n,), arcsec."""
    s_ra = np.asarray(noise.sigma_ra_arcsec, dtype=float)
    s_dec = np.asarray(noise.sigma_dec_arcsec, dtype=float)
    cross = np.asarray(noise.corr, dtype=float) * s_ra * s_dec
    cov = np.stack([np.stack([s_ra**2, cross], 1), np.stack([cross, s_dec**2], 1)], 1)
    turned = np.einsum("nij,njk,nlk->nil", turn, cov, turn)
    sigma = np.sqrt(np.stack([turned[:, 0, 0], turned[:, 1, 1]], axis=1))
    return sigma, np.nan_to_num(np.asarray(noise.night_common_arcsec, dtype=float))


def _night_error(turn: np.ndarray, noise: Any, keep: np.ndarray) -> np.ndarray:
    """Typical standard error (2,) of a night's mean, arcsec."""
    sigma, common = _weights(turn, noise)
    night = np.asarray(noise.night)
    errors = [
        np.sqrt(
            1.0 / np.sum(sigma[keep & (night == b)] ** -2, axis=0)
            + np.max(common[keep & (night == b)]) ** 2
        )
        for b in np.unique(night[keep])
    ]
    return np.median(errors, axis=0)


def _rungs(
    ladder: Sequence[float] | u.Quantity | None,
    a_det: float,
    night_unit: np.ndarray,
    night_error: np.ndarray,
) -> np.ndarray:
    if ladder is not None:
        given = np.atleast_1d(u.Quantity(ladder, AU_D2).to_value(AU_D2))
        return np.sort(np.abs(np.asarray(given, dtype=float)))
    size = np.quantile(np.abs(night_unit), 0.9, axis=0) * LADDER[-1] * a_det
    seen = np.any(size > 1.5 * np.maximum(night_error, 1e-12))
    return a_det * np.array(LADDER if seen else LONG_LADDER)


def _panels(
    table: pd.DataFrame,
    turn: np.ndarray,
    keep: np.ndarray,
    noise: Any,
    blocks: np.ndarray,
    per_thrust: np.ndarray,
    rungs: np.ndarray,
) -> list[_Panel]:
    both = np.einsum("nij,nj->ni", turn, table[["ra_arcsec", "dec_arcsec"]].to_numpy(float))
    sigma, common = _weights(turn, noise)
    night = np.asarray(noise.night)
    panels = []
    for axis, name in enumerate(("along", "across")):
        value, error, fan = [], [], []
        for b in blocks:
            rows = keep & (night == b)
            w = 1.0 / sigma[rows, axis] ** 2
            value.append(np.sum(w * both[rows, axis]) / w.sum())
            error.append(np.sqrt(1.0 / w.sum() + np.max(common[rows]) ** 2))
            fan.append(per_thrust[rows, axis].mean() * rungs)
        panels.append(
            _Panel(
                name,
                both[:, axis],
                np.hypot(sigma[:, axis], common),
                np.array(value),
                np.array(error),
                np.array(fan).reshape(len(blocks), len(rungs)),
            )
        )
    return panels


def _rung_colours(n: int) -> list[tuple[float, float, float, float]]:
    return (
        [style.FAN_RAMP(x) for x in np.linspace(0.0, 1.0, n)]
        if n > 1
        else [style.FAN_RAMP(0.5)] * n
    )


def _segments(night_date: np.ndarray) -> list[np.ndarray]:
    """Indices of the nights, sorted, cut where nothing was observed for long."""
    order = np.argsort(night_date, kind="stable")
    gap = np.diff(night_date[order])
    longest = float(np.clip(GAP_FRACTION * np.ptp(night_date), GAP_LEAST_D, GAP_MOST_D))
    return np.split(order, np.flatnonzero(gap > longest) + 1)


def _draw_fan(
    ax: Axes, night_date: np.ndarray, clock: _Clock, fan: np.ndarray, colours: Sequence[Any]
) -> None:
    x, y = _curves(night_date, clock, fan)
    for j in reversed(range(fan.shape[1])):
        ax.fill_between(
            x, -np.abs(y[:, j]), np.abs(y[:, j]), color=colours[j], alpha=0.10, lw=0, zorder=1
        )
        for sign in (1.0, -1.0):
            ax.plot(
                x,
                sign * y[:, j],
                color=colours[j],
                lw=0.9,
                zorder=3,
                solid_capstyle="butt",
                gid="fan",
            )


def _curves(
    night_date: np.ndarray, clock: _Clock, value: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Smooth curves (m,), (m, rung) through the values of the nights, NaN where they break."""
    span = max(float(np.ptp(clock.place(night_date))), 1e-6)
    xs, ys = [], []
    for segment in _segments(night_date):
        start, first = np.unique(night_date[segment], return_index=True)
        y = value[segment[first]]
        if np.ptp(start) > 0.004 * span:
            dense = np.linspace(start[0], start[-1], min(40 * len(start), 240))
            y = PchipInterpolator(start, y, axis=0)(dense)
            x = clock.place(dense)
        else:  # an isolated night still shows how far the rung reaches
            x = np.array([-0.0025, 0.0025]) * span + clock.place(start).mean()
            y = np.repeat(y[np.argmax(np.abs(y).max(axis=1))][None, :], 2, axis=0)
        xs += [x, np.array([np.nan])]
        ys += [y, np.full((1, value.shape[1]), np.nan)]
    return np.concatenate(xs), np.concatenate(ys)


def _fitted(
    information: ThrustInformation, unit: np.ndarray, turn: np.ndarray
) -> np.ndarray | None:
    """Departures (n, 2) the fitted thrust would leave, arcsec, if it is significant at all."""
    if chi2.sf(information.wald, information.k) > SIGNIFICANT:
        return None
    return np.einsum("nij,njk,k->ni", turn, unit, information.A_hat) / ARCSEC_RAD


def _draw_fitted(ax: Axes, night_date: np.ndarray, clock: _Clock, value: np.ndarray) -> None:
    x, y = _curves(night_date, clock, value[:, None])
    ax.plot(x, y[:, 0], color=style.INK, lw=1.1, ls=(0, (4, 1.5)), zorder=5)


def _stations_by_count(stn: np.ndarray) -> list[str]:
    """Stations, most observations first; empty when too many to tell apart."""
    codes, count = np.unique(stn.astype(str), return_counts=True)
    return (
        [str(c) for c in codes[np.argsort(-count, kind="stable")]]
        if (len(codes) <= MOST_STATIONS)
        else []
    )


def _look(code: str, codes: Sequence[str]) -> tuple[str, str]:
    if code in codes:
        j = list(codes).index(code)
        return style.STATION_COLOURS[j], style.STATION_MARKERS[j]
    return style.BLUE, "o"


def _draw_points(
    ax: Axes,
    date: np.ndarray,
    panel: _Panel,
    keep: np.ndarray,
    stn: np.ndarray,
    codes: Sequence[str],
) -> None:
    light = float(np.clip(40.0 / keep.sum(), 0.10, 0.5))
    ax.axhline(0.0, color=style.INK, lw=0.5, zorder=2)
    ax.errorbar(
        date[keep],
        panel.value[keep],
        panel.sigma[keep],
        fmt="none",
        ecolor=style.FAINT,
        elinewidth=0.4,
        alpha=light,
        zorder=1.5,
        rasterized=bool(keep.sum() > 4000),
    )
    names = stn.astype(str)
    for code in codes or [""]:
        rows = keep & (names == code) if codes else keep
        colour, marker = _look(code, codes)
        ax.plot(
            date[rows],
            panel.value[rows],
            marker,
            ms=1.6,
            mew=0,
            color=colour,
            alpha=min(2.5 * light, 0.6),
            zorder=2.5,
            rasterized=bool(keep.sum() > 4000),
        )
    if not keep.all():
        ax.plot(
            date[~keep], panel.value[~keep], "x", ms=2.6, mew=0.5, color=style.FAINT, zorder=2.2
        )


def _draw_nights(
    ax: Axes, night_date: np.ndarray, panel: _Panel, night_stn: np.ndarray, codes: Sequence[str]
) -> None:
    many = len(night_date) > 150
    for code in codes or [""]:
        rows = night_stn == code if codes else np.full(len(night_date), True)
        colour, marker = _look(code, codes)
        ax.errorbar(
            night_date[rows],
            panel.night_value[rows],
            panel.night_sigma[rows],
            fmt=marker,
            ms=2.4 if many else 3.6,
            mfc=colour,
            mec="white",
            mew=0.3 if many else 0.45,
            ecolor=colour,
            elinewidth=0.35 if many else 0.8,
            alpha=0.7 if many else 1.0,
            zorder=4,
        )


def _reach(panel: _Panel, keep: np.ndarray) -> tuple[float, float]:
    """How far residuals and night means go, and how far the fan goes, arcsec."""
    means = np.abs(panel.night_value)
    seen = max(
        float(np.quantile(np.abs(panel.value[keep]), 0.98)),
        1.05 * float(np.quantile(means, 0.98 if len(means) > 50 else 1.0)),
        2.0 * float(np.median(panel.sigma[keep])),
    )
    return seen, float(np.max(np.abs(panel.fan), initial=0.0))


def _set_scale(ax: Axes, seen: float, top: float, dwarfed: bool) -> None:
    """Linear where residuals and ladder are alike; symmetric-log where the ladder dwarfs them."""
    if dwarfed:
        top = max(top, 1.2 * seen)
        ax.set_yscale("symlog", linthresh=seen, linscale=1.2)
        ax.set_ylim(-1.5 * top, 1.5 * top)
        for edge in (-seen, seen):  # linear between these two
            ax.axhline(edge, color=style.FAINT, lw=0.4, ls=(0, (1, 2)), zorder=1.2)
        powers = 10.0 ** np.arange(np.ceil(np.log10(0.4 * seen)), np.log10(1.5 * top))
        ax.yaxis.set_major_locator(FixedLocator([*-powers[::-1], 0.0, *powers]))
        ax.yaxis.set_major_formatter(FuncFormatter(lambda y, _: f"{y:g}".replace("-", "\u2212")))
        ax.yaxis.set_minor_locator(NullLocator())
    else:
        reach = 1.12 * max(seen, top)
        ax.set_ylim(-reach, reach)
        ax.yaxis.set_major_locator(MaxNLocator(6, symmetric=True))


def _mark_beyond(ax: Axes, date: np.ndarray, value: np.ndarray, keep: np.ndarray) -> None:
    """Small arrowheads at the edge for observations outside the panel."""
    reach = ax.get_ylim()[1]
    for sign, marker in ((1.0, "^"), (-1.0, "v")):
        out = sign * value > reach
        if out.any():
            ax.plot(
                date[out],
                np.full(out.sum(), 0.985 if sign > 0 else 0.015),
                marker,
                ms=2.6,
                mew=0,
                color=style.FAINT,
                transform=ax.get_xaxis_transform(),
                clip_on=False,
                zorder=5,
            )


def _date_axis(axes: Sequence[Axes], place: np.ndarray, clock: _Clock) -> None:
    ax = axes[-1]
    span = max(float(np.ptp(place)), 0.5)
    ax.set_xlim(place.min() - 0.015 * span, place.max() + 0.015 * span)
    width = ax.get_window_extent().width / ax.figure.dpi
    if not clock.cut:
        locator = AutoDateLocator(minticks=3, maxticks=int(np.clip(1.6 * width, 4, 10)))
        ax.xaxis_date()
        ax.xaxis.set_major_locator(locator)
        ax.xaxis.set_major_formatter(ConciseDateFormatter(locator))
        return
    # Seasons side by side: a grey rail under each, its year beneath, nothing between them.
    length = clock.last - clock.first
    for each in axes:
        each.spines["bottom"].set_visible(False)
        each.tick_params(axis="x", length=0)
        for start, long in zip(clock.start, length, strict=True):
            each.axvspan(start, start + long, color="#f6f7f8", lw=0, zorder=0)
    middle = clock.start + 0.5 * length
    year = [num2date(d).strftime("%Y") for d in 0.5 * (clock.first + clock.last)]
    room = width * np.diff(middle).min() / (1.03 * span)
    stand = room < 0.30
    ax.set_xticks(middle, year, rotation=90 if stand else 0, fontsize=6.2 if stand else 7.0)


def _label_rungs(
    ax: Axes,
    night_date: np.ndarray,
    fan: np.ndarray,
    rungs: np.ndarray,
    multiples: np.ndarray,
    colours: Sequence[Any],
) -> None:
    """Write multiple and value of each rung at the right edge, with a leader to its line."""
    last = int(np.argmax(night_date))
    end = np.abs(fan[last])
    x_end = night_date[last]
    spot = np.column_stack([np.full(len(end), x_end), end])
    axes_spot = ax.transAxes.inverted().transform(ax.transData.transform(spot))
    high = ax.get_window_extent().height / ax.figure.dpi
    gap = 0.135 / high
    placed = style.spread(axes_spot[:, 1], gap, 0.02, 1.0)
    for j in range(len(rungs)):
        ax.annotate(
            "",
            xy=(axes_spot[j, 0], axes_spot[j, 1]),
            xytext=(1.012, placed[j]),
            xycoords="axes fraction",
            textcoords="axes fraction",
            arrowprops={
                "arrowstyle": "-",
                "lw": 0.6,
                "color": colours[j],
                "shrinkA": 0,
                "shrinkB": 0,
            },
            annotation_clip=False,
        )
        ax.text(
            1.018,
            placed[j],
            rf"{float(rounded(multiples[j], 2)):g}$\times$  {style.scientific(rungs[j])}",
            transform=ax.transAxes,
            va="center",
            ha="left",
            color=colours[j],
            fontsize=6.8,
            gid="rung",
        )
    ax.text(
        1.018,
        min(placed.max() + 1.25 * gap, 1.0 + 1.3 * gap),
        rf"|A| at 1 au ({style.ACCELERATION_UNIT})",
        transform=ax.transAxes,
        va="center",
        ha="left",
        fontsize=6.2,
        color=style.INK,
    )


def _wrapped(note: str, width: float) -> list[str]:
    """The note under the title in lines that fit the figure (width in inches)."""
    if not note:
        return []
    lines = [""]
    for word in f"shaded: departure of the best gravity-only refit, {note}".split():
        longer = f"{lines[-1]} {word}".strip()
        if style.text_inch(longer, NOTE_POINTS) > width - 0.66:
            lines.append(word)
        else:
            lines[-1] = longer
    return lines


def _title(fig: Figure, null: Any, lines: Sequence[str], width: float, height: float) -> None:
    title = f"{null.arc.name}: residuals of the gravity-only fit"
    if style.text_inch(title, 8.5, "bold") > width - 0.60:
        title = str(null.arc.name)
    fig.text(
        0.58 / width,
        1.0 - 0.10 / height,
        title,
        va="top",
        fontsize=8.5,
        fontweight="bold",
    )
    for j, line in enumerate(lines):
        fig.text(
            0.58 / width,
            1.0 - (0.27 + 0.115 * j) / height,
            line,
            va="top",
            fontsize=NOTE_POINTS,
            color="#555555",
            gid="note",
        )


def _key_entries(codes: Sequence[str], keep: np.ndarray, fitted: bool) -> list[tuple[Line2D, str]]:
    """What the key shows: stations, or means and singles where there are too many stations."""

    def mark(marker: str, size: float, colour: str, **more: Any) -> Line2D:
        return Line2D([], [], ls="none", marker=marker, ms=size, color=colour, **more)

    entries = []
    for code in codes:
        colour, marker = _look(code, codes)
        entries.append((mark(marker, 3.6, colour, mec="white", mew=0.4), code))
    if not codes:
        entries.append((mark("o", 3.0, style.BLUE, mec="white", mew=0.3), "station-night mean"))
        entries.append((mark("o", 1.6, style.BLUE, alpha=0.4, mew=0), "single"))
    if fitted:
        entries.append((Line2D([], [], color=style.INK, lw=1.1, ls=(0, (4, 1.5))), "fitted thrust"))
    if not keep.all():
        entries.append((mark("x", 2.6, style.FAINT, mew=0.5), "rejected"))
    return entries


def _key_rows(entries: Sequence[tuple[Line2D, str]], width: float) -> int:
    letters = sum(len(label) + 6 for _, label in entries)
    return math.ceil(letters * 7.0 * 0.56 / 72.0 / (width - 0.6))


def _station_key(
    fig: Figure,
    entries: Sequence[tuple[Line2D, str]],
    lines: int,
    rows: int,
    width: float,
    height: float,
) -> None:
    fig.legend(
        [handle for handle, _ in entries],
        [label for _, label in entries],
        loc="upper left",
        bbox_to_anchor=(0.50 / width, 1.0 - (0.29 + 0.115 * lines) / height),
        ncols=math.ceil(len(entries) / rows),
        handletextpad=0.3,
        handlelength=1.5,
        columnspacing=1.0,
        labelspacing=0.25,
        borderaxespad=0.0,
    )
