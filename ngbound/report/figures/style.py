"""How every figure of ngbound looks; imports matplotlib, never pyplot, and changes no global state.

Colours: the eight of M. Okabe & K. Ito (2008, "Color Universal Design"), told apart by all common
kinds of colour vision; ramps from one light to one dark tone, so that they survive in grey.
"""

import io
from collections.abc import Callable, Sequence
from functools import wraps
from typing import Any, ParamSpec

import matplotlib
import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import LinearSegmentedColormap
from matplotlib.figure import Figure
from matplotlib.font_manager import FontProperties
from matplotlib.textpath import TextToPath

COLUMN_INCH = 3.5
PAGE_INCH = 7.1

INK = "#222222"
FAINT = "#9a9a9a"
GRID = "#e4e4e4"
BLUE = "#0072B2"
SKY = "#56B4E9"
GREEN = "#009E73"
ORANGE = "#E69F00"
VERMILION = "#D55E00"
PURPLE = "#CC79A7"

STATION_COLOURS = (BLUE, GREEN, PURPLE, SKY, "#5a5a5a", ORANGE)
STATION_MARKERS = ("o", "s", "^", "D", "v", "P")

FAN_RAMP = LinearSegmentedColormap.from_list(
    "ngbound_fan", ["#E5A03A", "#DB7420", "#B23C10", "#651809"]
)
MAP_RAMP = LinearSegmentedColormap.from_list(
    "ngbound_map", ["#0B3C5D", "#2F78A5", "#8DBAD3", "#E8EEF0", "#F2C27B", "#C8641B"]
)

ACCELERATION_UNIT = r"au d$^{-2}$"

HOUSE_RC: Any = {
    "font.family": "sans-serif",
    "font.sans-serif": ["DejaVu Sans"],
    "font.size": 7.5,
    "mathtext.fontset": "dejavusans",
    "axes.titlesize": 8.0,
    "axes.titleweight": "regular",
    "axes.labelsize": 7.5,
    "axes.linewidth": 0.6,
    "axes.edgecolor": INK,
    "axes.labelcolor": INK,
    "axes.unicode_minus": True,
    "text.color": INK,
    "xtick.color": INK,
    "ytick.color": INK,
    "xtick.labelsize": 7.0,
    "ytick.labelsize": 7.0,
    "xtick.direction": "out",
    "ytick.direction": "out",
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "xtick.major.size": 3.0,
    "ytick.major.size": 3.0,
    "xtick.minor.size": 1.6,
    "ytick.minor.size": 1.6,
    "legend.fontsize": 7.0,
    "legend.frameon": False,
    "lines.linewidth": 1.0,
    "pdf.fonttype": 42,
    "ps.fonttype": 42,
    "svg.fonttype": "none",
    "text.usetex": False,
    "figure.facecolor": "white",
    "savefig.facecolor": "white",
    "savefig.bbox": None,
}

P = ParamSpec("P")


class HouseFigure(Figure):
    """A Figure that is saved with embedded, editable fonts and shows itself in a notebook."""

    def savefig(self, fname: Any, *, transparent: bool | None = None, **kwargs: Any) -> None:
        """As ``Figure.savefig``, with the house's fonts whatever the global settings are."""
        kwargs.setdefault("dpi", 200)
        with matplotlib.rc_context(HOUSE_RC):
            super().savefig(fname, transparent=transparent, **kwargs)

    def _repr_png_(self) -> bytes:
        picture = io.BytesIO()
        self.savefig(picture, format="png", dpi=144)
        return picture.getvalue()


def house_style(draw: Callable[P, Figure]) -> Callable[P, Figure]:
    """Draw with the house's settings and put the caller's back."""

    @wraps(draw)
    def drawn(*args: P.args, **kwargs: P.kwargs) -> Figure:
        with matplotlib.rc_context(HOUSE_RC):
            return draw(*args, **kwargs)

    return drawn


def text_inch(text: str, points: float, weight: str = "regular") -> float:
    """Width of a line of plain text, inches, with the 3 % that hinting adds on a screen."""
    face = FontProperties(family="DejaVu Sans", size=points, weight=weight)
    return TextToPath().get_text_width_height_descent(text, face, ismath=False)[0] * 1.03 / 72.0


def tidy(axes: Axes) -> None:
    """Take away the frame's top and right sides."""
    axes.spines[["top", "right"]].set_visible(False)


def scientific(value: float, digits: int = 2) -> str:
    """A number as mathtext, "8.4 x 10^-10"; plain between 0.01 and 9999."""
    if value == 0 or not np.isfinite(value):
        return f"{value:g}"
    if 1e-2 <= abs(value) < 1e4:
        return f"{float(f'{value:.{digits}g}'):g}"
    mantissa, exponent = f"{value:.{digits - 1}e}".split("e")
    return rf"${mantissa}\times10^{{{int(exponent)}}}$"


def acceleration(value: float, digits: int = 2) -> str:
    """An acceleration with its unit, as mathtext."""
    return f"{scientific(value, digits)} {ACCELERATION_UNIT}"


def spread(wanted: Sequence[float] | np.ndarray, gap: float, low: float, high: float) -> np.ndarray:
    """Positions near the wanted ones that stand at least ``gap`` apart within [low, high].

    Labels pushed together are centred on the mean of what they wanted (pool of neighbours).
    """
    order = np.argsort(wanted, kind="stable")
    pools = [[float(np.clip(wanted[i], low, high)), 1] for i in order]
    merged: list[list[float]] = []
    for centre, size in pools:
        merged.append([centre, size])
        while len(merged) > 1:
            (c0, n0), (c1, n1) = merged[-2:]
            if c1 - c0 >= 0.5 * gap * (n0 + n1):
                break
            merged[-2:] = [[(c0 * n0 + c1 * n1) / (n0 + n1), n0 + n1]]
    flat: list[float] = []
    for centre, size in merged:
        flat.extend(centre + gap * (j - 0.5 * (size - 1)) for j in range(int(size)))
    placed = np.array(flat)
    if len(placed):
        placed += max(low - placed[0], 0.0)
        placed -= max(placed[-1] - high, 0.0)
        for j in range(len(placed) - 1, 0, -1):
            placed[j - 1] = min(placed[j - 1], placed[j] - gap)
    out = np.empty(len(placed))
    out[order] = placed
    return out
