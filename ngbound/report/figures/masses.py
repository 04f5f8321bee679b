"""The mass that a limit on the thrust demands, and the assumptions it hangs on.

May import constants, errors and the public names of the rooms to the left of report.
"""

from typing import Any

import numpy as np
from astropy import units as u
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter, NullFormatter

from ngbound.errors import MassError
from ngbound.report.figures import style
from ngbound.rounding import down, length_text, percent, up

MOST_INPUTS = 7


@style.house_style
def mass_figure(
    bound: Any,
    ceiling: Any = None,
    *,
    name: str = "",
    figsize: tuple[float, float] | None = None,
) -> Figure:
    """Distribution of the mass with its lower bound, and what moves it.

    Parameters
    ----------
    bound : MassBound
        ``mass_draws_kg``, ``mass``, ``diameter``, ``confidence`` and, where given, ``inputs``
        and ``mass_detection`` are read.
    ceiling : MassCeiling, optional
        ``mass`` and ``confidence`` are read, and the mass above is shaded too.
    name : str
        Of the object, for the title.
    figsize : (float, float), optional
        Inches; one page width by default.

    Returns
    -------
    matplotlib Figure
        Left: the draws; the mass below the bound is shaded. Right: mass when one input alone
        moves from its 16th to its 84th percentile, the others at their medians.
    """
    draws = np.asarray(bound.mass_draws_kg, dtype=float)
    draws = draws[np.isfinite(draws) & (draws > 0)]
    if len(draws) < 100:
        raise MassError(
            f"Only {len(draws)} positive masses were drawn; a figure needs at least 100. "
            "Give more draws."
        )
    inputs = [s for s in bound.inputs if s.mass_at_high != s.mass_at_low][:MOST_INPUTS]
    fig = style.HouseFigure(figsize=figsize or (style.PAGE_INCH, 2.75))
    width, height = fig.get_size_inches()
    bottom, top = 0.45 / height, 1.0 - 0.48 / height
    split = 0.50 if inputs else 1.0 - 0.15 / width
    ax = fig.add_axes((0.15 / width, bottom, split - 0.15 / width, top - bottom))
    _draw_mass(ax, draws, bound, ceiling)
    if inputs:
        start = split + 1.65 / width
        side = fig.add_axes((start, bottom, 1.0 - start - 0.15 / width, top - bottom))
        _draw_inputs(side, inputs)
    title = "mass that this arc and the outgassing budget demand"
    style.head(fig, f"{name}: {title}" if name else title.capitalize(), (), 0.15)
    return fig


def _draw_mass(ax: Axes, draws: np.ndarray, bound: Any, ceiling: Any) -> None:
    low_kg = float(bound.mass.to_value(u.kg))
    logs = np.log10(draws)
    left, right = np.quantile(logs, [0.0005, 0.98])
    left = min(left, np.log10(low_kg) - 0.15)
    high_kg = 10.0**right if ceiling is None else float(ceiling.mass.to_value(u.kg))
    right = max(right, np.log10(high_kg) + (0.0 if ceiling is None else 0.15))
    detection = getattr(bound, "mass_detection", None)
    if detection is not None:
        seen = np.log10(float(detection.to_value(u.kg)))
        if left < seen < np.log10(low_kg):  # room for its words on the left of its line
            left = min(left, seen - 0.22 * (right - seen))
    edges = np.linspace(left, right, 61)
    count, _ = np.histogram(logs, edges, density=True)
    middle = 0.5 * (edges[1:] + edges[:-1])
    ax.stairs(count, 10.0**edges, color=style.BLUE, lw=1.0, fill=False)
    allowed = np.where((middle >= np.log10(low_kg)) & (middle <= np.log10(high_kg)), count, 0.0)
    ax.stairs(allowed, 10.0**edges, color=style.SKY, alpha=0.25, lw=0, fill=True)
    ax.axvspan(10.0**left, low_kg, color="#f1e3dc", lw=0, zorder=0)
    ax.axvline(low_kg, color=style.VERMILION, lw=1.2)
    if ceiling is not None:
        ax.axvspan(high_kg, 10.0**right, color="#f1e3dc", lw=0, zorder=0)
        ax.axvline(high_kg, color=style.VERMILION, lw=1.2, ls=(0, (4, 2)))
        ax.annotate(
            rf"$M$ < {style.scientific(up(high_kg))} kg",
            (high_kg, 1.0),
            xycoords=("data", "axes fraction"),
            xytext=(4, -2),
            textcoords="offset points",
            rotation=90,
            va="top",
            fontsize=7.0,
            color=style.VERMILION,
        )
    ax.set_xscale("log")
    ax.set_xlim(10.0**left, 10.0**right)
    ax.set_ylim(0.0, 1.30 * count.max())
    diameter = length_text(float(bound.diameter.to_value(u.m)))
    near_right = (np.log10(low_kg) - left) > 0.55 * (right - left)
    ax.annotate(
        rf"$M$ > {style.scientific(down(low_kg))} kg" + f"\n$D$ > {diameter}\n"
        f"({percent(bound.confidence)} confidence)",
        (low_kg, 1.0),
        xycoords=("data", "axes fraction"),
        xytext=(-4 if near_right else 4, -2),
        textcoords="offset points",
        va="top",
        ha="right" if near_right else "left",
        fontsize=7.0,
        color=style.VERMILION,
    )
    if detection is not None:
        at = float(detection.to_value(u.kg))
        if 10.0**left < at < 10.0**right:
            ax.axvline(at, color=style.INK, lw=0.8, ls=(0, (3, 2)), ymax=0.62)
            # the words go to the side of the line that is free
            beside = 0.0 < np.log10(low_kg / at) < 0.3 * (right - left)
            ax.annotate(
                "lighter:\nthrust would\nbe detected",
                (at, 0.62),
                xycoords=("data", "axes fraction"),
                xytext=(-3 if beside else 3, -1),
                textcoords="offset points",
                va="top",
                ha="right" if beside else "left",
                fontsize=6.2,
            )
    ax.set_xlabel("mass (kg)")
    ax.set_xticks(_few_ticks(10.0**left, 10.0**right))
    ax.xaxis.set_major_formatter(FuncFormatter(lambda kg, _: style.scientific(kg, 2)))
    ax.xaxis.set_minor_formatter(NullFormatter())
    ax.set_yticks([])
    style.tidy(ax)
    ax.spines["left"].set_visible(False)


def _few_ticks(low: float, high: float) -> list[float]:
    """At most four round numbers on a logarithmic axis, far enough apart to be read."""
    decades = np.arange(np.floor(np.log10(low)), np.ceil(np.log10(high)) + 1)
    fine = (1.0, 1.2, 1.6, 2.0, 2.5, 3.0, 4.0, 5.0, 6.0, 8.0)
    for steps in ((1.0,), (1.0, 3.0), (1.0, 2.0, 5.0), fine):
        every = [s * 10.0**d for d in decades for s in steps if low <= s * 10.0**d <= high]
        if len(every) >= 2:
            break
    stride = -(-len(every) // 4)
    return every[::stride] if every else [float(np.sqrt(low * high))]


def _draw_inputs(ax: Axes, inputs: list[Any]) -> None:
    for row, share in enumerate(inputs):
        ends = sorted((share.mass_at_low, share.mass_at_high))
        rises = share.mass_at_high > share.mass_at_low
        colour = style.BLUE if rises else style.ORANGE
        ax.plot(ends, [row, row], color=colour, lw=5.0, solid_capstyle="butt", alpha=0.85)
        if np.isfinite(share.total):
            ax.annotate(
                f"{100 * share.total:.0f} %",
                (ends[1], row),
                xytext=(4, 0),
                textcoords="offset points",
                va="center",
                fontsize=6.4,
            )
    middle = np.sqrt(inputs[0].mass_at_low * inputs[0].mass_at_high)
    ax.set_xscale("log")
    low = min(min(s.mass_at_low, s.mass_at_high) for s in inputs)
    high = max(max(s.mass_at_low, s.mass_at_high) for s in inputs)
    room = (high / low) ** 0.22
    ax.set_xlim(low / room**0.3, high * room)
    ax.axvline(middle, color=style.FAINT, lw=0.5, zorder=0)
    ax.set_yticks(range(len(inputs)), [s.name for s in inputs])
    ax.set_ylim(len(inputs) - 0.4, -0.6)
    ax.tick_params(axis="y", length=0)
    ax.set_xlabel("mass (kg)")
    ax.set_xticks(_few_ticks(low, high))
    ax.xaxis.set_major_formatter(FuncFormatter(lambda kg, _: style.scientific(kg, 2)))
    ax.xaxis.set_minor_formatter(NullFormatter())
    ax.tick_params(axis="x", labelsize=6.4)
    ax.set_title(
        "one input moved from its 16th to its 84th percentile\n"
        "per cent: share of the variance of ln M",
        fontsize=6.4,
        loc="right",
        color="#555555",
        linespacing=1.3,
    )
    style.tidy(ax)
    ax.spines["left"].set_visible(False)
