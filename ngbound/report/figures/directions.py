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
from ngbound.rounding import percent, rounded, up

AXIS_NAMES = {"R": "radial", "T": "transverse", "N": "normal"}


@style.house_style
def direction_map(
    threshold: DetectionThreshold,
    *,
    name: str = "",
    figsize: tuple[float, float] | None = None,
) -> Figure:
    """Detection threshold (all components tested together) over the directions of the thrust.

    Parameters
    ----------
    threshold : DetectionThreshold
        Of two or three components; ``map()``, ``false_alarm``, ``power``, ``worst`` and ``best``
        are read.
    name : str
        Of the object, for the title.
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
        return _sphere(threshold, name, figsize or (style.PAGE_INCH * 0.72, 3.45))
    if len(components) == 2:
        return _circle(threshold, name, figsize or (style.COLUMN_INCH, 2.7))
    raise LimitError(
        f"A direction map needs two or three thrust components, but only {components!r} was "
        "fitted. Fit with components='RTN'."
    )


def _sphere(threshold: DetectionThreshold, name: str, figsize: tuple[float, float]) -> Figure:
    fig = style.HouseFigure(figsize=figsize)
    _, height = fig.get_size_inches()
    top = 0.42 + 0.115 * _head(fig, threshold, name)
    ax = fig.add_axes(
        (0.03, 0.72 / height, 0.94, 1.0 - (0.72 + top) / height), projection="mollweide"
    )
    grid = threshold.map(n_lat=121, n_lon=240)
    value = np.asarray(grid.threshold.to_value(AU_D2))
    lon, lat = np.radians(grid.longitude_deg), np.radians(grid.latitude_deg)
    turned = (lon + np.pi) % (2 * np.pi) - np.pi
    order = np.argsort(turned)
    lon = np.append(turned[order], np.pi)
    log_value = np.log10(np.column_stack([value[:, order], value[:, order[0]]]))
    level, ticks = _levels(float(log_value.min()), float(log_value.max()))
    norm = BoundaryNorm(level, style.MAP_RAMP.N)
    shade = ax.contourf(lon, lat, log_value, levels=level, cmap=style.MAP_RAMP, norm=norm)
    ax.contour(
        lon,
        lat,
        log_value,
        levels=level[1:-1],
        colors=style.INK,
        linewidths=0.25,
        linestyles="solid",
        alpha=0.5,
    )
    ax.set_xticks(np.radians(np.arange(-150, 180, 30)), [""] * 11)
    ax.set_yticks(np.radians(np.arange(-60, 90, 30)), [""] * 5)
    ax.grid(color=style.INK, lw=0.25, alpha=0.25)
    _mark_axes(ax)
    _mark_extremes(ax, threshold)
    bar_axes = fig.add_axes((0.17, 0.40 / height, 0.66, 0.09 / height))
    bar = fig.colorbar(shade, cax=bar_axes, orientation="horizontal", spacing="proportional")
    power = int(np.floor(ticks[0] + 1e-9))
    plain = level[-1] - level[0] < 2.5  # then one power of ten serves all ticks
    labels = [
        f"{10.0 ** (x - power):.3g}" if plain else style.scientific(rounded(10.0**x, 1))
        for x in ticks
    ]
    bar.set_ticks(list(ticks), labels=labels)
    bar.ax.xaxis.set_minor_locator(NullLocator())
    bar_axes.spines["outline"].set_linewidth(0.4)
    unit = style.acceleration(f"1e{power}") if plain else style.ACCELERATION_UNIT
    bar.set_label(rf"detection threshold $A_{{\mathrm{{det}}}}$ at 1 au ({unit})")
    return fig


def _levels(low: float, high: float) -> tuple[np.ndarray, np.ndarray]:
    """Contour levels in log10, finer where the range is small, and those of them with a tick."""
    if high - low < 1e-6:
        return np.array([low - 0.01, low + 0.01]), np.array([low - 0.01])
    span = high - low
    fine: tuple[float, ...]
    coarse: tuple[float, ...]
    if span > 2.5:
        fine, coarse = (1.0, 2.0, 3.0, 5.0), (1.0,)
    elif span > 1.0:
        fine, coarse = (1.0, 1.5, 2.0, 3.0, 4.0, 5.0, 6.0, 8.0), (1.0, 2.0, 3.0, 5.0)
    elif span > 0.3:
        fine = tuple(np.arange(1.0, 10.0, 0.5))
        coarse = (1.0, 1.5, 2.0, 3.0, 4.0, 5.0, 6.0, 8.0)
    else:
        fine = coarse = tuple(np.arange(1.0, 10.0, 0.25))
    powers = np.arange(np.floor(low), np.ceil(high) + 1)

    def between(mantissas: tuple[float, ...]) -> np.ndarray:
        return np.sort(np.array([p + np.log10(m) for p in powers for m in mantissas]))

    level = between(fine)
    inside = level[(level > low) & (level < high)]
    level = np.concatenate([level[level <= low][-1:], inside, level[level >= high][:1]])
    ticks = between(coarse)
    ticks = ticks[(ticks >= level[0] - 1e-9) & (ticks <= level[-1] + 1e-9)]
    return level, ticks[:: max(1, -(-len(ticks) // 9))]


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


def _head(fig: style.HouseFigure, threshold: DetectionThreshold, name: str) -> int:
    """Title and note; the number of lines of the note."""
    best, worst = (up(float(q.to_value(AU_D2))) for q in (threshold.best, threshold.worst))
    note = (
        f"found with probability {percent(threshold.power)} at a false-alarm rate of "
        f"{percent(threshold.false_alarm)}, all components tested together; \u2605 best "
        f"{style.scientific(best)}, \u2716 worst {style.scientific(worst)}"
    )
    title = "thrust this arc would have shown, by direction"
    lines = style.wrapped(note, 6.4, fig.get_figwidth() - 0.3)
    full = f"{name}: {title}" if name else title.capitalize()
    style.head(fig, full, lines, 0.15, name or "Thrust by direction")
    return len(lines)


def _circle(threshold: DetectionThreshold, name: str, figsize: tuple[float, float]) -> Figure:
    fig = style.HouseFigure(figsize=figsize)
    width, height = fig.get_size_inches()
    top = 0.42 + 0.115 * _head(fig, threshold, name)
    ax = fig.add_axes((0.62 / width, 0.45 / height, 1 - 0.76 / width, 1 - (0.45 + top) / height))
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
    ax.set_ylabel(rf"$A_{{\mathrm{{det}}}}$ at 1 au ({style.ACCELERATION_UNIT})")
    style.tidy(ax)
    return fig
