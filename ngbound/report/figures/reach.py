"""Which production rates an arc would have revealed, over the size of the body.

May import constants, errors and the public names of the rooms to the left of report.
"""

import re
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from ngbound.report.figures import style
from ngbound.rounding import only_along, percent

COLOURS = (style.BLUE, style.VERMILION, style.GREEN, style.PURPLE, style.ORANGE)


@style.house_style
def reach_figure(
    reach: Any, *, name: str = "", figsize: tuple[float, float] | None = None
) -> Figure:
    """Production rate revealed against diameter, beside what a whole surface of ice could give.

    Parameters
    ----------
    reach : Reach
    name : str
        Of the object, for the title.
    figsize : (float, float), optional
        Inches; a column wide for one species, a page for three by default.

    Returns
    -------
    matplotlib Figure
        One panel a species: above the full line a rate would have been revealed (shaded as far as a
        surface can give it), above the dashed line no surface gives so much. A rate measured is a
        dotted level, a known size a grey band.
    """
    rows = list(reach.rows)
    across = min(len(rows), 3)
    down = -(-len(rows) // across)
    size = figsize or (style.COLUMN_INCH if across == 1 else style.PAGE_INCH, 0.95 + 2.15 * down)
    fig = style.HouseFigure(figsize=size)
    panels = fig.subplots(down, across, squeeze=False, sharex=True)
    width, height = fig.get_size_inches()
    fig.subplots_adjust(
        left=0.62 / width,
        right=1.0 - 0.12 / width,
        bottom=0.42 / height,
        top=1.0 - 0.72 / height,
        wspace=0.28,
        hspace=0.30,
    )
    for ax in panels.ravel()[len(rows) :]:
        ax.set_visible(False)
    for number, (row, ax) in enumerate(zip(rows, panels.ravel(), strict=False)):
        _draw(ax, row, COLOURS[number % len(COLOURS)])
        if number % across == 0:
            ax.set_ylabel("rate (kg/s)" if row.unit == "kg/s" else "rate (molecules s\u207b\u00b9)")
        if number >= len(rows) - across:
            ax.set_xlabel("diameter (m)")
    chance = "" if reach.power is None else f" with probability {percent(reach.power)}"
    lines = (
        f"a thrust {only_along(reach.components) or 'in any direction'}{chance};",
        f"band: {percent(reach.confidence)} interval of density, speed and collimation",
    )
    title = "outgassing this arc would have revealed"
    style.head(fig, f"{name}: {title}" if name else title.capitalize(), lines, 0.10, name)
    return fig


def _draw(ax: Axes, row: Any, colour: str) -> None:
    x = np.array(row.diameter_m)
    grid = np.geomspace(x.min(), x.max(), 61) if len(x) > 1 else np.geomspace(0.5, 2.0, 61) * x[0]
    cube = (grid / x[0]) ** 3
    edge = row.rate[0] * cube
    ax.fill_between(grid, row.rate_low[0] * cube, row.rate_high[0] * cube, color=colour, alpha=0.25)
    ax.plot(grid, edge, color=colour, lw=1.2)
    low, high = row.rate_low[0] * cube[0], row.rate_high[0] * cube[-1]
    if row.full_rate is not None:
        full = row.full_rate[0] * (grid / x[0]) ** 2
        low, high = min(low, full[0]), max(high, full[-1])
        ax.plot(grid, full, color=style.INK, lw=0.9, ls=(0, (4, 2)))
        ax.fill_between(grid, edge, full, where=edge < full, color=colour, alpha=0.10, lw=0)
        _say(ax, "more than a whole\nsurface gives", (0.04, 0.97), style.INK)
        if edge[0] < 10.0**-2.6 * full[0]:  # room for the word left of the rising edge
            ax.annotate(
                "revealed", (grid[1], 0.6 * full[1]), va="center", fontsize=6.4, color=colour
            )
    _say(ax, "unseen", (0.96, 0.05), "#555555")
    if row.measured_rate is not None:
        ax.axhline(row.measured_rate, color=colour, lw=0.9, ls=":")
        low, high = min(low, row.measured_rate), max(high, row.measured_rate)
        ax.annotate(
            "upper limit" if row.measured.startswith("<") else "measured",
            (0.98, row.measured_rate),
            xycoords=("axes fraction", "data"),
            xytext=(0, 2),
            textcoords="offset points",
            ha="right",
            fontsize=6.2,
            color=colour,
        )
    if row.revealed is not None:
        known = row.revealed.diameter
        ax.axvspan(*known.ppf(np.array([0.15866, 0.84134])), color="#ececec", lw=0, zorder=-2)
        ax.axvline(known.median, color=style.FAINT, lw=0.7, zorder=-1)
    ax.set_xscale("log")
    ax.set_yscale("log")
    ax.set_xlim(grid[0], grid[-1])
    ax.set_ylim(low, high)
    formula = re.sub(r"(\d+)", r"$_{\1}$", row.species)
    ax.set_title(f"{formula} at {row.at_au:.3g} au", fontsize=7.5, loc="left", pad=4.0)
    style.tidy(ax)


def _say(ax: Axes, text: str, place: tuple[float, float], colour: str) -> None:
    """Words in a corner of a panel."""
    ax.text(
        *place,
        text,
        transform=ax.transAxes,
        ha="left" if place[0] < 0.5 else "right",
        va="top" if place[1] > 0.5 else "bottom",
        fontsize=6.2,
        color=colour,
    )


__all__ = ["reach_figure"]
