"""Map of the detection threshold over the directions of the thrust.

May import constants, errors and the public names of the rooms to the left of report.
"""

import numpy as np
from matplotlib import patheffects
from matplotlib.axes import Axes
from matplotlib.colors import BoundaryNorm
from matplotlib.figure import Figure
from matplotlib.ticker import NullLocator

from ngbound.errors import LimitError
from ngbound.limits import AU_D2, DetectionThreshold
from ngbound.report.figures import style
from ngbound.report.rounding import percent

AXIS_NAMES = {"R": "radial", "T": "transverse", "N": "normal"}


@style.house_style
def direction_map(
    threshold: DetectionThreshold, *, figsize: tuple[float, float] | None = None
) -> Figure:
    """Detection threshold (all components tested together) over the directions of the thrust.

    Parameters
    ----------
    threshold : DetectionThreshold
        Of two or three components; ``map()``, ``false_alarm``, ``power``, ``worst`` and ``best``
        are read.
    figsize : (float, float), optional
        Inches; by default half a page wide for two components, a full column for three.

    Returns
    -------
    matplotlib Figure
        Three components: Mollweide map, R (away from the Sun) in the centre, T to the right, N up.
        Two: the threshold against the angle between them.
    """
    components = threshold.components
    if len(components) == 3:
        return _sphere(threshold, figsize or (style.PAGE_INCH * 0.72, 3.45))
    if len(components) == 2:
        return _circle(threshold, figsize or (style.COLUMN_INCH, 2.6))
    raise LimitError(
        f"A direction map needs two or three thrust components, but only {components!r} was "
        "fitted. Fit with components='RTN'."
    )


def _sphere(threshold: DetectionThreshold, figsize: tuple[float, float]) -> Figure:
    fig = style.HouseFigure(figsize=figsize)
    width, height = fig.get_size_inches()
    ax = fig.add_axes((0.03, 0.72 / height, 0.94, 1.0 - 1.26 / height), projection="mollweide")
    grid = threshold.map(n_lat=121, n_lon=240)
    value = np.asarray(grid.threshold.to_value(AU_D2))
    lon, lat = np.radians(grid.longitude_deg), np.radians(grid.latitude_deg)
    turned = (lon + np.pi) % (2 * np.pi) - np.pi
    order = np.argsort(turned)
    lon = np.append(turned[order], np.pi)
    value = np.column_stack([value[:, order], value[:, order[0]]])
    log_value = np.log10(value)
    level = _levels(float(log_value.min()), float(log_value.max()))
    shade = ax.contourf(
        lon,
        lat,
        log_value,
        levels=level,
        cmap=style.MAP_RAMP,
        norm=BoundaryNorm(level, style.MAP_RAMP.N),
        extend="neither",
    )
    ax.contour(
        lon, lat, log_value, levels=level[1:-1], colors="white", linewidths=0.35, linestyles="solid"
    )
    ax.set_xticks(np.radians(np.arange(-150, 180, 30)), [""] * 11)
    ax.set_yticks(np.radians(np.arange(-60, 90, 30)), [""] * 5)
    ax.grid(color="white", lw=0.3, alpha=0.4)
    _mark_axes(ax)
    _mark_extremes(ax, threshold)
    bar_axes = fig.add_axes((0.17, 0.40 / height, 0.66, 0.09 / height))
    bar = fig.colorbar(shade, cax=bar_axes, orientation="horizontal", ticks=level)
    shown = level[:: max(1, int(np.ceil(len(level) / 6)))]
    bar.set_ticks(list(shown), labels=[style.scientific(10.0**x) for x in shown])
    bar.ax.xaxis.set_minor_locator(NullLocator())
    bar_axes.spines["outline"].set_linewidth(0.4)
    bar.set_label(rf"detection threshold $A_{{\mathrm{{det}}}}$ ({style.ACCELERATION_UNIT})")
    _head(fig, threshold, height)
    return fig


def _levels(low: float, high: float) -> np.ndarray:
    """Contour levels in log10, round in the value, finer where the range is small."""
    if high - low < 1e-6:
        return np.array([low - 0.01, low + 0.01])
    decades = high - low
    mantissas: tuple[float, ...]
    if decades > 2.5:
        mantissas = (1.0, 3.0)
    elif decades > 1.0:
        mantissas = (1.0, 1.5, 2.0, 3.0, 5.0, 7.0)
    else:
        mantissas = tuple(np.arange(1.0, 10.0, 0.5 if decades > 0.4 else 0.1))
    powers = np.arange(np.floor(low), np.ceil(high) + 1)
    level = np.sort(np.array([p + np.log10(m) for p in powers for m in mantissas]))
    inner = level[(level > low) & (level < high)]
    below = level[level <= low]
    above = level[level >= high]
    return np.concatenate([below[-1:], inner, above[:1]])


def _mark_axes(ax: Axes) -> None:
    spots = {
        "R": (0.0, 0.0, "radial\n(from the Sun)"),
        "T": (np.pi / 2, 0.0, "transverse"),
        "N": (0.0, np.pi / 2, "normal"),
        "-T": (-np.pi / 2, 0.0, ""),
        "-N": (0.0, -np.pi / 2, ""),
    }
    halo = [patheffects.withStroke(linewidth=1.6, foreground="white")]
    for name, (lon, lat, _) in spots.items():
        ax.plot(lon, lat, "+", ms=5, mew=0.9, color=style.INK, zorder=5, path_effects=halo)
        ax.annotate(
            name.replace("-", "\u2212"),
            (lon, lat),
            xytext=(4, 3) if abs(lat) < 1 else (5, 3 if lat > 0 else -9),
            textcoords="offset points",
            fontsize=7.5,
            fontweight="bold",
            path_effects=halo,
            zorder=6,
            annotation_clip=False,
        )
    for lon in (-np.pi, np.pi):
        ax.plot(lon, 0.0, "+", ms=5, mew=0.9, color=style.INK, zorder=5, clip_on=False)
    ax.annotate(
        "\u2212R",
        (np.pi, 0.0),
        xytext=(4, -2.5),
        textcoords="offset points",
        fontsize=7.5,
        fontweight="bold",
        annotation_clip=False,
    )


def _mark_extremes(ax: Axes, threshold: DetectionThreshold) -> None:
    halo = [patheffects.withStroke(linewidth=1.8, foreground="white")]
    for vector, marker, size in (
        (threshold.best_direction, "*", 8.0),
        (threshold.worst_direction, "X", 5.5),
    ):
        for sign in (1.0, -1.0):
            x, y, z = sign * np.asarray(vector)
            ax.plot(
                np.arctan2(y, x),
                np.arcsin(np.clip(z, -1.0, 1.0)),
                marker,
                ms=size,
                mfc=style.INK,
                mec="white",
                mew=0.6,
                zorder=7,
                path_effects=halo,
                clip_on=False,
            )


def _head(fig: Figure, threshold: DetectionThreshold, height: float) -> None:
    fig.text(
        0.5,
        1.0 - 0.08 / height,
        "Thrust this arc would have shown, by direction",
        ha="center",
        va="top",
        fontsize=8.5,
        fontweight="bold",
    )
    best = style.scientific(threshold.best.to_value(AU_D2))
    worst = style.scientific(threshold.worst.to_value(AU_D2))
    fig.text(
        0.5,
        1.0 - 0.25 / height,
        f"found with probability {percent(threshold.power)} at a false-alarm rate of "
        f"{percent(threshold.false_alarm)}  "
        rf"($\bigstar$ best {best}, $\mathbf{{\times}}$ worst {worst})",
        ha="center",
        va="top",
        fontsize=6.4,
        color="#555555",
    )


def _circle(threshold: DetectionThreshold, figsize: tuple[float, float]) -> Figure:
    fig = style.HouseFigure(figsize=figsize)
    width, height = fig.get_size_inches()
    ax = fig.add_axes((0.62 / width, 0.45 / height, 1 - 0.76 / width, 1 - 1.0 / height))
    grid = threshold.map(n_lat=1, n_lon=361)
    angle = np.asarray(grid.longitude_deg)
    value = np.asarray(grid.threshold.to_value(AU_D2))[0]
    half = angle <= 180.0
    ax.plot(angle[half], value[half], color=style.BLUE)
    ax.set_yscale("log")
    first, second = tuple(threshold.components)
    ax.set_xlim(0, 180)
    ax.set_xticks(
        [0, 45, 90, 135, 180],
        [f"+{first}", "45°", f"+{second}", "135°", f"\u2212{first}"],
    )
    ax.set_xlabel(f"direction, from {AXIS_NAMES[first]} towards {AXIS_NAMES[second]}")
    ax.set_ylabel(rf"$A_{{\mathrm{{det}}}}$ ({style.ACCELERATION_UNIT})")
    style.tidy(ax)
    _head(fig, threshold, height)
    return fig
