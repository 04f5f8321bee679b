"""Mean residuals by station and star catalogue, where a biased catalogue gives itself away.

May import constants, errors and the public names of the rooms to the left of report.
"""

from typing import Any

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator

from ngbound.report.figures import style
from ngbound.report.tables import SUSPICIOUS_LEAST_RECORDS, SUSPICIOUS_SIGMA, group_means
from ngbound.rounding import counted

MOST_ROWS = 24


@style.house_style
def residual_by_station(
    fit: Any, *, most: int = MOST_ROWS, figsize: tuple[float, float] | None = None
) -> Figure:
    """Mean residual with its error of each star catalogue (above) and station (below).

    Parameters
    ----------
    fit : Fit
    most : int
        Stations shown, those with most observations; the others are counted in a line of text.
    figsize : (float, float), optional
        Inches; by default a page wide and as high as the rows need.

    Returns
    -------
    matplotlib Figure
        RA cos(dec) left, Dec right; offsets beyond 3 sigma are filled diamonds.
    """
    table = fit.residuals
    catalogues = group_means(fit, table["astCat"].to_numpy())
    stations = group_means(fit, table["stn"].to_numpy())
    parts = [
        ("star catalogue", catalogues[catalogues["n"] > 0].head(most)),
        ("station", stations[stations["n"] > 0].head(most)),
    ]
    left_out = int((stations["n"] > 0).sum()) - len(parts[1][1])
    rows = sum(len(p) for _, p in parts)
    high = 1.15 + 0.145 * rows + 0.35
    fig = style.HouseFigure(figsize=figsize or (style.PAGE_INCH, high))
    names = [str(group) for _, means in parts for group in means["group"]]
    left = 0.15 + max((style.text_inch(name, 7.0) for name in names), default=0.5)
    width, height = fig.get_size_inches()
    grid = fig.subplots(
        2,
        2,
        sharey="row",
        sharex="col",
        gridspec_kw={
            "left": left / width,
            "right": 1.0 - 0.85 / width,
            "bottom": 0.45 / height,
            "top": 1.0 - 0.62 / height,
            "hspace": 0.45 / max((height - 1.07) / 2, 0.3),
            "wspace": 0.06,
            "height_ratios": [len(p) + 0.6 for _, p in parts],
        },
    )
    reach = {axis: _reach(parts, axis) for axis in ("ra", "dec")}
    for (noun, means), line in zip(parts, grid, strict=True):
        for ax, axis in zip(line, ("ra", "dec"), strict=True):
            _draw(ax, means, axis, reach[axis])
        line[0].set_yticks(np.arange(len(means)), [str(g) for g in means["group"]])
        line[0].set_ylim(len(means) - 0.4, -0.6)
        line[0].set_title(f"by {noun}", loc="left", fontsize=7.5, color="#555555", pad=3)
        for y, (n, chi2) in enumerate(zip(means["n"], means["chi2_per_n"], strict=True)):
            line[1].text(
                1.03, y, f"{n}", transform=line[1].get_yaxis_transform(), va="center", fontsize=6.2
            )
            line[1].text(
                1.14,
                y,
                f"{chi2:.2f}",
                transform=line[1].get_yaxis_transform(),
                va="center",
                fontsize=6.2,
            )
    for x, word in ((1.03, "n"), (1.14, r"$\chi^2/n$")):
        grid[0][1].text(
            x, 1.0, word, transform=grid[0][1].transAxes, va="bottom", fontsize=6.4, color="#555555"
        )
    for ax in grid[1]:
        ax.xaxis.set_major_locator(MaxNLocator(5, symmetric=True))
    grid[1][0].set_xlabel(r"mean residual in RA cos$\,\delta$ (arcsec)")
    grid[1][1].set_xlabel("mean residual in Dec (arcsec)")
    note = (
        f"\u25c6 beyond {SUSPICIOUS_SIGMA:g} sigma, common errors of a night allowed for; "
        "\u25b6 goes on beyond the scale"
    )
    if left_out > 0:
        note += f"; {counted(left_out, 'station')} with fewer observations not shown"
    free = getattr(fit, "components", "")
    model = f"with {free} thrust" if free else "by gravity alone"
    title = f"{fit.arc.name}: mean residuals of the fit {model}, observed \u2212 computed"
    style.head(fig, title, [note], 0.12, f"{fit.arc.name}: mean residuals")
    return fig


def _reach(parts: list[tuple[str, pd.DataFrame]], axis: str) -> float:
    """Half the width of a column, arcsec: error bars of all that is well known, within reason."""
    means = pd.concat([p for _, p in parts])
    mean = np.abs(means[f"mean_{axis}_arcsec"].to_numpy(float))
    end = mean + means[f"mean_{axis}_error_arcsec"].to_numpy(float)
    solid = means["n"].to_numpy() >= SUSPICIOUS_LEAST_RECORDS
    known = end[solid] if solid.any() else end
    return 1.08 * float(min(known.max(), 4.0 * np.median(known)))


def _draw(ax: Axes, means: pd.DataFrame, axis: str, reach: float) -> None:
    mean = means[f"mean_{axis}_arcsec"].to_numpy(float)
    error = means[f"mean_{axis}_error_arcsec"].to_numpy(float)
    far = np.abs(mean) > SUSPICIOUS_SIGMA * error
    y = np.arange(len(means))
    for row in range(0, len(means), 2):
        ax.axhspan(row - 0.5, row + 0.5, color="#f6f7f8", lw=0, zorder=0)
    ax.axvline(0.0, color=style.INK, lw=0.5, zorder=1)
    for which, colour, face in ((~far, style.BLUE, "white"), (far, style.VERMILION, None)):
        ax.errorbar(
            mean[which],
            y[which],
            xerr=error[which],
            fmt="D" if face is None else "o",
            ms=3.2,
            mfc=face or colour,
            mec=colour,
            mew=0.8,
            ecolor=colour,
            elinewidth=0.8,
            zorder=3,
        )
    ax.set_xlim(-reach, reach)
    # an arrowhead where a bar goes on beyond the edge, a larger one where its middle does
    for sign, edge, arrow in ((1.0, 1.0, ">"), (-1.0, 0.0, "<")):
        for out, size in (
            ((sign * mean + error > reach) & (sign * mean <= reach), 2.4),
            (sign * mean > reach, 4.2),
        ):
            ax.plot(
                np.full(out.sum(), edge),
                y[out],
                arrow,
                ms=size,
                mew=0,
                color=style.BLUE,
                transform=ax.get_yaxis_transform(),
                clip_on=False,
                zorder=4,
            )
    style.tidy(ax)
    ax.spines["left"].set_visible(False)
    ax.tick_params(axis="y", length=0)
