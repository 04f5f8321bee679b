"""How every figure of ngbound looks; imports matplotlib, never pyplot, and changes no global state;
of ngbound rounding only.

Colours: the eight of M. Okabe & K. Ito (2008, "Color Universal Design"), told apart by all common
kinds of colour vision; ramps from one light to one dark tone, so that they survive in grey.
"""

import io
from collections.abc import Callable, Sequence
from functools import wraps
from pathlib import Path
from typing import Any, ParamSpec

import matplotlib
import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import LinearSegmentedColormap
from matplotlib.figure import Figure
from matplotlib.font_manager import FontProperties
from matplotlib.textpath import TextToPath

from ngbound import __version__
from ngbound.rounding import rounded

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
    "ngbound_map", ["#FBF3DC", "#CFDCC2", "#86B5B5", "#3D7FA3", "#1B527E", "#0A2744"]
)

ACCELERATION_UNIT = "au d\u207b\u00b2"
SUPERSCRIPT = str.maketrans(
    "-0123456789",
    "\u207b\u2070\u00b9\u00b2\u00b3\u2074\u2075\u2076\u2077\u2078\u2079",
)
NOTE_INK = "#555555"
KEY: dict[str, Any] = {
    "handletextpad": 0.3,
    "handlelength": 1.5,
    "columnspacing": 1.0,
    "labelspacing": 0.25,
    "borderaxespad": 0.0,
}
"""How close a key is set, in font sizes."""

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
    """A Figure that is saved with embedded, editable fonts and shows itself in a notebook.

    ``title`` and ``note``, set by `head`, go into the metadata of the file.
    """

    title = ""
    note = ""

    def savefig(self, fname: Any, *, transparent: bool | None = None, **kwargs: Any) -> None:
        """As ``Figure.savefig``, with the house's fonts whatever the global settings are."""
        kwargs.setdefault("dpi", 200)
        ending = str(kwargs.get("format") or Path(str(fname)).suffix.lstrip(".") or "png").lower()
        kwargs.setdefault("metadata", self._metadata(ending))
        with matplotlib.rc_context(HOUSE_RC):
            super().savefig(fname, transparent=transparent, **kwargs)

    def _metadata(self, ending: str) -> dict[str, Any] | None:
        """Title, note and maker under the names that each format has for them; no date, so that
        the same figure is the same file."""
        maker = f"ngbound {__version__}"
        if ending == "png":
            return {"Title": self.title, "Description": self.note, "Software": maker}
        if ending == "pdf":
            told = {"Title": self.title, "Subject": self.note, "Creator": maker}
            return told | {"CreationDate": None}
        if ending == "svg":
            return {
                "Title": self.title,
                "Description": self.note,
                "Creator": maker,
                "Date": None,
            }
        return None

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


def wrapped(note: str, points: float, width: float) -> list[str]:
    """A note in lines that fit a width in inches."""
    lines = [""]
    for word in note.split(" "):
        longer = f"{lines[-1]} {word}".strip()
        if lines[-1] and text_inch(longer, points) > width:
            lines.append(word)
        else:
            lines[-1] = longer
    return lines if note else []


def key_rows(labels: Sequence[str], points: float, width: float) -> int:
    """Rows that a key of these labels needs within a width in inches."""
    beside = (KEY["handlelength"] + KEY["handletextpad"] + KEY["columnspacing"]) * points / 72.0
    wide = np.array([text_inch(label, points) + beside for label in labels])
    for rows in range(1, len(wide) + 1):
        columns = np.array_split(wide, -(-len(wide) // rows))
        if sum(column.max() for column in columns) <= width:
            return rows
    return max(len(wide), 1)


def head(
    fig: HouseFigure, title: str, lines: Sequence[str], left_inch: float, short: str = ""
) -> None:
    """Title and note above the axes; ``short`` instead of a title too long for the figure."""
    width, height = fig.get_size_inches()
    fig.title, fig.note = title, " ".join(lines)
    if short and text_inch(title, 8.5, "bold") > width - left_inch - 0.02:
        title = short
    fig.text(
        left_inch / width, 1.0 - 0.10 / height, title, va="top", fontsize=8.5, fontweight="bold"
    )
    for j, line in enumerate(lines):
        fig.text(
            left_inch / width,
            1.0 - (0.27 + 0.115 * j) / height,
            line,
            va="top",
            fontsize=6.4,
            color=NOTE_INK,
            gid="note",
        )


def tidy(axes: Axes) -> None:
    """Take away the frame's top and right sides."""
    axes.spines[["top", "right"]].set_visible(False)


def scientific(value: float | str, digits: int = 2) -> str:
    """A number as figures write it, "8.4e-10" as "8.4 x 10^-10".

    Parameters
    ----------
    value : float or str
        A bound comes as text, already rounded outward by `ngbound.rounding`.
    digits : int
        Significant digits of a float.
    """
    text = value if isinstance(value, str) else rounded(float(value), digits)
    mantissa, e, exponent = text.partition("e")
    if not e:
        return text
    if not isinstance(value, str):  # a tick, whose last zeros say nothing
        mantissa = mantissa.rstrip("0").rstrip(".") if "." in mantissa else mantissa
    power = f"10{exponent.translate(SUPERSCRIPT)}"
    return power if mantissa == "1" else f"{mantissa}\u2009\u00d7\u2009{power}"


def acceleration(value: float | str) -> str:
    """An acceleration with its unit, as figures write it."""
    return f"{scientific(value)} {ACCELERATION_UNIT}"


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
