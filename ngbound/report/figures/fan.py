"""The residual fan: what is left of the gravity-only fit, and what a thrust would have left.

May import constants, errors and the public names of the rooms to the left of report.
"""

from collections.abc import Sequence
from typing import Any

import numpy as np
from astropy import units as u
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.ticker import FixedLocator, FuncFormatter, MaxNLocator, NullLocator

from ngbound.fit import Comparison
from ngbound.report.figures import style
from ngbound.report.figures.fan_contents import FanContents, Panel
from ngbound.report.figures.seasons import Clock

DWARFED = 5.0
"""A fan that reaches so many times further than the residuals is drawn on a symmetric-log scale."""
NOTE_POINTS = 6.4
KEY_POINTS = 7.0
MOST_STATIONS = 6
"""More stations than this share one colour and shape."""
WIDE_INCH = 5.0
"""A narrower figure writes the multiples beside the lines and the accelerations into the note."""
DASHED, DOTTED = (0, (4, 1.5)), (0, (1, 1.3))


def residual_fan(
    null: Any,
    push: Any | None = None,
    *,
    ladder: Sequence[float] | u.Quantity | None = None,
    component: str | None = None,
    threshold: Any = None,
    comparison: Comparison | None = None,
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
    component : {None, "best", "fitted", "radial", "transverse", "normal"}
        Direction of the thrust; None: that of the fitted thrust where it is significant, else the
        one this arc shows most readily ("best").
    threshold : DetectionThreshold, Quantity or float (au/d2), optional
        What 1 on the ladder means. A DetectionThreshold (by default that of ``push`` at its
        defaults) gives the value of one component tested alone with the others held at zero, or,
        for "best" and "fitted", of all components tested together in that direction.
    comparison : Comparison, optional
        Of the two fits, which then decides whether the fitted thrust is significant.
    figsize : (float, float), optional
        Inches; one page width by default. Narrower than 5 inches the accelerations go into the
        note.

    Returns
    -------
    matplotlib Figure
        Upper panel along, lower across; "across" is 90 degrees from the motion, turned from
        increasing right ascension towards increasing declination. What another platform (a
        spacecraft) would have seen of the ladder is dotted, because it sees the same thrust from
        elsewhere.
    """
    return _drawn(
        FanContents.of(null, push, ladder, component, threshold, comparison),
        figsize or (style.PAGE_INCH, 4.7),
    )


@style.house_style
def _drawn(shown: FanContents, figsize: tuple[float, float]) -> Figure:
    fig = style.HouseFigure(figsize=figsize)
    width, height = fig.get_size_inches()
    wide = width >= WIDE_INCH
    clock = Clock.of(shown.date[shown.keep])
    codes = _stations_by_count(shown.stn[shown.keep])
    dwarfed = any(top > DWARFED * seen for seen, top in (_reach(p, shown) for p in shown.panels))
    notes = list(shown.notes)
    if dwarfed:
        notes.append("linear between the dotted lines, logarithmic beyond")
    if shown.rungs and not wide:
        one = next((r for r in shown.rungs if r.multiple == "1×"), shown.rungs[0])
        notes.append(f"{one.multiple} = {style.acceleration(one.value)} at 1 au")
    lines = style.wrapped("; ".join(notes), NOTE_POINTS, width - 0.66)
    entries = _key_entries(shown, codes)
    rows = style.key_rows([label for _, label in entries], KEY_POINTS, width - 0.6)
    right = (1.02 if wide else 0.44) if shown.rungs else 0.12
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
    place, night_place = clock.place(shown.date), clock.place(shown.night_date)
    for ax, panel in zip(axes, shown.panels, strict=True):
        _draw_departures(ax, shown, panel, clock)
        _draw_points(ax, place, panel, shown, codes)
        _draw_nights(ax, night_place, panel, shown.night_stn, codes)
        _set_scale(ax, *_reach(panel, shown), dwarfed)
        _mark_beyond(ax, place, panel.value)
        roomy = ax.get_window_extent().height / fig.dpi > 1.5
        ax.set_ylabel(f"{panel.label} the motion (arcsec)" if roomy else f"{panel.label} (arcsec)")
        style.tidy(ax)
    fig.align_ylabels(axes)
    clock.label(axes, place)
    if shown.rungs:
        peaks = [
            np.max(np.abs(p.fan), initial=0.0) / max(ax.get_ylim()[1], 1e-300)
            for ax, p in zip(axes, shown.panels, strict=True)
        ]
        told = int(np.argmax(peaks))
        _label_rungs(axes[told], night_place, shown, shown.panels[told], wide)
    style.head(fig, f"{shown.name}: residuals of the gravity-only fit", lines, 0.58, shown.name)
    fig.legend(
        [handle for handle, _ in entries],
        [label for _, label in entries],
        loc="upper left",
        bbox_to_anchor=(0.50 / width, 1.0 - (0.29 + 0.115 * len(lines)) / height),
        ncols=-(-len(entries) // rows),
        **style.KEY,
    )
    return fig


def _draw_departures(ax: Axes, shown: FanContents, panel: Panel, clock: Clock) -> None:
    """The ladder, filled for the platform of most nights and dotted for others; the fit dashed."""
    colours = _rung_colours(len(shown.rungs))
    for platform in shown.platforms if colours else ():
        main = platform == shown.platforms[0]
        rows = shown.night_platform == platform
        x, y = clock.curves(shown.night_date[rows], panel.fan[rows])
        for j in reversed(range(len(colours))):
            if main:
                reach = np.abs(y[:, j])
                ax.fill_between(x, -reach, reach, color=colours[j], alpha=0.10, lw=0, zorder=1)
            for sign in (1.0, -1.0):
                ax.plot(
                    x,
                    sign * y[:, j],
                    color=colours[j],
                    lw=0.9,
                    ls="-" if main else DOTTED,
                    zorder=3,
                    dash_capstyle="butt",
                    solid_capstyle="butt",
                    gid="fan" if main else "fan from elsewhere",
                )
        if panel.fitted is not None:
            x, y = clock.curves(shown.night_date[rows], panel.fitted[rows][:, None])
            ax.plot(x, y[:, 0], color=style.INK, lw=1.1 if main else 0.7, ls=DASHED, zorder=5)


def _rung_colours(n: int) -> list[tuple[float, float, float, float]]:
    return [style.FAN_RAMP(x) for x in (np.linspace(0.0, 1.0, n) if n > 1 else [0.5] * n)]


def _stations_by_count(stn: np.ndarray) -> list[str]:
    """Stations, most observations first; empty when too many to tell apart."""
    codes, count = np.unique(stn, return_counts=True)
    if len(codes) > MOST_STATIONS:
        return []
    return [str(c) for c in codes[np.argsort(-count, kind="stable")]]


def _look(code: str, codes: Sequence[str]) -> tuple[str, str]:
    if code in codes:
        j = list(codes).index(code)
        return style.STATION_COLOURS[j], style.STATION_MARKERS[j]
    return style.BLUE, "o"


def _draw_points(
    ax: Axes, place: np.ndarray, panel: Panel, shown: FanContents, codes: Sequence[str]
) -> None:
    keep = shown.keep
    light = float(np.clip(40.0 / keep.sum(), 0.10, 0.5))
    raster = bool(keep.sum() > 4000)
    ax.axhline(0.0, color=style.INK, lw=0.5, zorder=2)
    ax.errorbar(
        place[keep],
        panel.value[keep],
        panel.sigma[keep],
        fmt="none",
        ecolor=style.FAINT,
        elinewidth=0.4,
        alpha=light,
        zorder=1.5,
        rasterized=raster,
    )
    for code in codes or [""]:
        rows = keep & (shown.stn == code) if codes else keep
        colour, marker = _look(code, codes)
        ax.plot(
            place[rows],
            panel.value[rows],
            marker,
            ms=1.6,
            mew=0,
            color=colour,
            alpha=min(2.5 * light, 0.6),
            zorder=2.5,
            rasterized=raster,
        )
    if not keep.all():
        out = ~keep
        ax.plot(place[out], panel.value[out], "x", ms=2.6, mew=0.5, color=style.FAINT, zorder=2.2)


def _draw_nights(
    ax: Axes, place: np.ndarray, panel: Panel, night_stn: np.ndarray, codes: Sequence[str]
) -> None:
    many = len(place) > 150
    for code in codes or [""]:
        rows = night_stn == code if codes else np.full(len(place), True)
        colour, marker = _look(code, codes)
        ax.errorbar(
            place[rows],
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


def _reach(panel: Panel, shown: FanContents) -> tuple[float, float]:
    """How far residuals and night means go, and how far the fan goes, arcsec."""
    means = np.abs(panel.night_value)
    seen = max(
        float(np.quantile(np.abs(panel.value[shown.keep]), 0.98)),
        1.05 * float(np.quantile(means, 0.98 if len(means) > 50 else 1.0)),
        2.0 * float(np.median(panel.sigma[shown.keep])),
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


def _mark_beyond(ax: Axes, place: np.ndarray, value: np.ndarray) -> None:
    """Small arrowheads at the edge for observations outside the panel."""
    reach = ax.get_ylim()[1]
    for sign, marker in ((1.0, "^"), (-1.0, "v")):
        out = sign * value > reach
        if out.any():
            ax.plot(
                place[out],
                np.full(out.sum(), 0.985 if sign > 0 else 0.015),
                marker,
                ms=2.6,
                mew=0,
                color=style.FAINT,
                transform=ax.get_xaxis_transform(),
                clip_on=False,
                zorder=5,
            )


def _label_rungs(
    ax: Axes, night_place: np.ndarray, shown: FanContents, panel: Panel, wide: bool
) -> None:
    """Write multiple and value of each rung at the right edge, with a leader to its line."""
    colours = _rung_colours(len(shown.rungs))
    main = np.flatnonzero(shown.night_platform == shown.platforms[0])
    last = int(main[np.argmax(night_place[main])])
    end = np.abs(panel.fan[last])
    spot = np.column_stack([np.full(len(end), night_place[last]), end])
    axes_spot = ax.transAxes.inverted().transform(ax.transData.transform(spot))
    box = ax.get_window_extent()
    gap = 0.135 / (box.height / ax.figure.dpi)
    inch = ax.figure.dpi / box.width
    placed = style.spread(axes_spot[:, 1], gap, 0.02, 1.0)
    for j, rung in enumerate(shown.rungs):
        ax.annotate(
            "",
            xy=(axes_spot[j, 0], axes_spot[j, 1]),
            xytext=(1.0 + 0.065 * inch, placed[j]),
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
            1.0 + 0.1 * inch,
            placed[j],
            f"{rung.multiple}  {style.scientific(rung.value)}" if wide else rung.multiple,
            transform=ax.transAxes,
            va="center",
            ha="left",
            color=colours[j],
            fontsize=6.8,
            gid="rung",
        )
    if wide:
        ax.text(
            1.0 + 0.1 * inch,
            min(placed.max() + 1.25 * gap, 1.0 + 1.3 * gap),
            f"|A| at 1 au ({style.ACCELERATION_UNIT})",
            transform=ax.transAxes,
            va="center",
            ha="left",
            fontsize=6.2,
            color=style.INK,
        )


def _key_entries(shown: FanContents, codes: Sequence[str]) -> list[tuple[Any, str]]:
    """What the key shows: stations, what means and singles look like, and the lines."""

    def mark(marker: str, size: float, colour: str, **more: Any) -> Line2D:
        return Line2D([], [], ls="none", marker=marker, ms=size, color=colour, **more)

    entries: list[tuple[Any, str]] = []
    for code in codes:
        colour, marker = _look(code, codes)
        entries.append((mark(marker, 3.6, colour, mec="white", mew=0.4), code))
    plain = style.BLUE if not codes else style.INK
    mean = Line2D([], [], marker="|", ms=9.0, mew=0.8, ls="none", color=plain)
    dot = mark("o", 3.4, plain, mec="white", mew=0.4)
    entries.append(((mean, dot), "night mean \u00b1 1\u03c3"))
    entries.append((mark("o", 1.6, plain, alpha=0.5, mew=0), "single record"))
    if any(panel.fitted is not None for panel in shown.panels):
        entries.append((Line2D([], [], color=style.INK, lw=1.1, ls=DASHED), "fitted thrust"))
    if shown.rungs and shown.platforms[1:]:
        dotted = Line2D([], [], color=style.FAN_RAMP(1.0), lw=0.9, ls=DOTTED)
        entries.append((dotted, f"fan seen from {' and '.join(shown.platforms[1:])}"))
    if not shown.keep.all():
        entries.append((mark("x", 2.6, style.FAINT, mew=0.5), "rejected"))
    return entries
