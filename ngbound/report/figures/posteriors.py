"""The posterior of the thrust: each component, and its size with the limits under two priors.

May import constants, errors and the public names of the rooms to the left of report.
"""

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator
from scipy.stats import norm

from ngbound.limits import AU_D2, Posterior, UpperLimit
from ngbound.report.figures import style
from ngbound.rounding import percent, up

NAMES = {"R": "radial", "T": "transverse", "N": "normal"}
BINS = 50
SECOND_DRAWS, SECOND_SEED = 100_000, 20


@style.house_style
def posterior_figure(
    post: Posterior,
    limit: UpperLimit,
    *,
    alternative: Posterior | None = None,
    name: str = "",
    figsize: tuple[float, float] | None = None,
) -> Figure:
    """Marginal posteriors of the thrust components and of |A|, with the upper limits.

    Parameters
    ----------
    post : Posterior
    limit : UpperLimit
        Computed from ``post``.
    alternative : Posterior, optional
        Sampled under the second prior; without it flat components are drawn in linear theory.
    name : str
        Of the object, for the title.
    figsize : (float, float), optional
        Inches; one page width by default.

    Returns
    -------
    matplotlib Figure
        One panel a component (stepped: samples; thin: the Gaussian of linear theory), and a wider
        one for |A|, under the prior sampled (filled) and the second prior (dashed).
    """
    k = len(post.components)
    fig = style.HouseFigure(figsize=figsize or (style.PAGE_INCH, 2.6))
    width, height = fig.get_size_inches()
    grid = fig.subplots(
        1,
        k + 1,
        squeeze=False,
        gridspec_kw={
            "left": 0.15 / width,
            "right": 1.0 - 0.15 / width,
            "bottom": 0.46 / height,
            "top": 1.0 - 0.74 / height,
            "wspace": 0.14,
            "width_ratios": [1.0] * k + [1.9],
        },
    )[0]
    for i, letter in enumerate(post.components):
        _component(grid[i], post, limit, i, letter)
    _size(grid[-1], post, limit, alternative)
    note = (
        f"accelerations at 1 au; filled: posterior under {_prior_name(limit.prior)}; thin curves: "
        f"linear theory without prior; dotted lines: limits at {percent(limit.confidence)} "
        "confidence"
    )
    title = "posterior of the thrust, and upper limits"
    style.head(fig, f"{name}: {title}" if name else title.capitalize(), [note], 0.15)
    return fig


def _scale(largest: float) -> tuple[float, int]:
    power = int(np.floor(np.log10(largest)))
    return 10.0**power, power


def _component(ax: Axes, post: Posterior, limit: UpperLimit, i: int, letter: str) -> None:
    draws = np.asarray(post.A_samples[:, i])
    low, high = np.quantile(draws, [0.0005, 0.9995])
    bound = float(limit.component[i].to_value(AU_D2))
    scale, power = _scale(max(abs(low), abs(high), bound))
    edges = np.linspace(low, high, BINS + 1)
    count, _ = np.histogram(draws, edges, density=True)
    ax.stairs(count * scale, edges / scale, color=style.SKY, alpha=0.3, fill=True, lw=0)
    ax.stairs(count * scale, edges / scale, color=style.BLUE, lw=0.9)
    centre = float(post.information.A_hat[i])
    sigma = float(np.sqrt(post.information.covariance[i, i]))
    x = np.linspace(low, high, 200)
    ax.plot(x / scale, norm.pdf(x, centre, sigma) * scale, color=style.INK, lw=0.6)
    ax.axvline(0.0, color=style.FAINT, lw=0.6, zorder=0)
    for sign in (-1.0, 1.0):
        if low < sign * bound < high:
            ax.axvline(sign * bound / scale, color=style.VERMILION, lw=0.9, ls=(0, (1, 1.2)))
    ax.set_title(
        f"{NAMES[letter]}\n" rf"$|A_{letter}|$ < {style.scientific(up(bound))}",
        fontsize=7.0,
        loc="left",
        pad=4,
    )
    ax.set_ylim(0.0, 1.1 * max(count.max(), norm.pdf(0.0, 0.0, sigma)) * scale)
    ax.xaxis.set_major_locator(MaxNLocator(4))
    ax.set_xlabel(f"$A_{letter}$  ({style.acceleration(f'1e{power}')})")
    _bare(ax)


def _size(ax: Axes, post: Posterior, limit: UpperLimit, alternative: Posterior | None) -> None:
    size = np.asarray(post.A_mag.to_value(AU_D2))
    bounds = [float(q.to_value(AU_D2)) for q in (limit.magnitude, limit.alternative_magnitude)]
    high = max(float(np.quantile(size, 0.9995)), 1.15 * max(bounds))
    low = float(size.min())
    low = 0.0 if low < 0.2 * high else max(low - 0.05 * (high - low), 0.0)
    scale, power = _scale(high)
    edges = np.linspace(low, high, BINS + 1)
    count, _ = np.histogram(size, edges, density=True)
    ax.stairs(count * scale, edges / scale, color=style.SKY, alpha=0.3, fill=True, lw=0)
    ax.stairs(count * scale, edges / scale, color=style.BLUE, lw=0.9)
    top = count.max()
    second = _second(post, alternative)
    if second is not None:
        other, _ = np.histogram(second, edges, density=True)
        ax.stairs(other * scale, edges / scale, color=style.ORANGE, lw=1.0, ls=(0, (3, 1.5)))
        top = max(top, other.max())
    names = (_prior_name(limit.prior), _prior_name(limit.alternative_prior))
    ax.set_ylim(0.0, 1.12 * top * scale)
    for bound, colour in zip(bounds, (style.BLUE, style.ORANGE), strict=True):
        ax.axvline(bound / scale, color=colour, lw=1.1, ls=(0, (1, 1.2)))
    for row, (bound, colour, name) in enumerate(
        zip(bounds, (style.BLUE, "#B87B00"), names, strict=True)
    ):
        ax.text(
            0.0,
            1.03 + 0.095 * (1 - row),
            rf"$|A|$ < {style.scientific(up(bound))}   prior {name}",
            transform=ax.transAxes,
            fontsize=6.8,
            color=colour,
            va="bottom",
        )
    ax.set_xlim(low / scale, high / scale)
    ax.set_xlabel(f"$|A|$  ({style.acceleration(f'1e{power}')})")
    ax.xaxis.set_major_locator(MaxNLocator(6))
    _bare(ax)


def _second(post: Posterior, alternative: Posterior | None) -> np.ndarray | None:
    """Sizes |A| under the second prior, au/d2; flat components are Gaussian in linear theory."""
    if alternative is not None:
        return np.asarray(alternative.A_mag.to_value(AU_D2))
    if not post.prior.radial_in_A:
        return None
    about = post.information
    random = np.random.default_rng(SECOND_SEED)
    draws = random.multivariate_normal(about.A_hat, about.covariance, SECOND_DRAWS, method="eigh")
    return np.linalg.norm(draws, axis=1)


def _prior_name(words: str) -> str:
    """The name of a prior without its edges."""
    return words.split(" ")[0].rstrip(",:")


def _bare(ax: Axes) -> None:
    ax.set_yticks([])
    style.tidy(ax)
    ax.spines["left"].set_visible(False)
