"""The time axis of an arc: dates, or seasons side by side where the gaps would fill it.

May import matplotlib and the public names of the rooms to the left of report.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from matplotlib.dates import AutoDateLocator, ConciseDateFormatter, num2date
from scipy.interpolate import PchipInterpolator

from ngbound.constants import J2000_MJD

UNIX_EPOCH_MJD = 40587.0
"""1970-01-01, from which matplotlib counts its days."""
GAP_FRACTION = 0.15
GAP_LEAST_D, GAP_MOST_D = 20.0, 60.0
"""Lines break in gaps longer than this share of the span, kept between these two."""
SEASON_GAP_D = 120.0
"""Gaps longer than this are cut out of the time axis where they would fill most of it."""
SEASON_LEAST_D = 25.0
"""A shorter season is given this much room all the same."""


def dates(tdb_d: np.ndarray) -> np.ndarray:
    """Days since 1970, as matplotlib counts, of days past J2000.0."""
    return np.asarray(tdb_d, dtype=float) + (J2000_MJD - UNIX_EPOCH_MJD)


@dataclass(frozen=True)
class Clock:
    """Dates to places on the time axis: the date itself, or the seasons side by side.

    ``first``, ``last`` are the dates (days since 1970) where each season begins and ends,
    ``start`` the place of its beginning; a single season leaves the date as it is.
    """

    first: np.ndarray
    last: np.ndarray
    start: np.ndarray

    @property
    def cut(self) -> bool:
        """Whether there is more than one season."""
        return len(self.first) > 1

    @classmethod
    def of(cls, date: np.ndarray) -> "Clock":
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

    def curves(self, date: np.ndarray, value: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Smooth curves (m,), (m, k) through values (n, k) at dates (n,), NaN where they break."""
        span = max(float(np.ptp(self.place(date))), 1e-6)
        xs, ys = [], []
        for segment in _segments(date):
            start, first = np.unique(date[segment], return_index=True)
            y = value[segment[first]]
            if np.ptp(start) > 0.004 * span:
                dense = np.linspace(start[0], start[-1], min(40 * len(start), 240))
                y = PchipInterpolator(start, y, axis=0)(dense)
                x = self.place(dense)
            else:  # an isolated night still shows how far the curve reaches
                x = np.array([-0.0025, 0.0025]) * span + self.place(start).mean()
                y = np.repeat(y[np.argmax(np.abs(y).max(axis=1))][None, :], 2, axis=0)
            xs += [x, np.array([np.nan])]
            ys += [y, np.full((1, value.shape[1]), np.nan)]
        return np.concatenate(xs), np.concatenate(ys)

    def label(self, axes: Sequence[Axes], place: np.ndarray) -> None:
        """Dates under the last of these axes; seasons with their years, each on a grey rail."""
        ax = axes[-1]
        span = max(float(np.ptp(place)), 0.5)
        ax.set_xlim(place.min() - 0.015 * span, place.max() + 0.015 * span)
        width = ax.get_window_extent().width / ax.figure.dpi
        if not self.cut:
            locator = AutoDateLocator(minticks=3, maxticks=int(np.clip(1.6 * width, 4, 10)))
            ax.xaxis_date()
            ax.xaxis.set_major_locator(locator)
            ax.xaxis.set_major_formatter(ConciseDateFormatter(locator))
            return
        length = self.last - self.first
        for each in axes:
            each.spines["bottom"].set_visible(False)
            each.tick_params(axis="x", length=0)
            for start, long in zip(self.start, length, strict=True):
                each.axvspan(start, start + long, color="#f6f7f8", lw=0, zorder=0)
        middle = self.start + 0.5 * length
        year = [num2date(d).strftime("%Y") for d in 0.5 * (self.first + self.last)]
        room = width * np.diff(middle).min() / (1.03 * span)
        if room < 0.11:  # too many seasons for a year under each
            keep = np.arange(0, len(middle), int(np.ceil(0.11 / room)))
            middle, year = middle[keep], [year[i] for i in keep]
        stand = room < 0.30
        ax.set_xticks(middle, year, rotation=90 if stand else 0, fontsize=6.2 if stand else 7.0)


def _segments(date: np.ndarray) -> list[np.ndarray]:
    """Indices of the dates, sorted, cut where nothing was observed for long."""
    order = np.argsort(date, kind="stable")
    gap = np.diff(date[order])
    longest = float(np.clip(GAP_FRACTION * np.ptp(date), GAP_LEAST_D, GAP_MOST_D))
    return np.split(order, np.flatnonzero(gap > longest) + 1)
