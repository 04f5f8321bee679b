"""What a fit says about the errors that many observations share, and what is left of the residuals.

Imports numpy, pandas, arc. The shared errors are marginalised in the fit
(`ngbound.arc.SharedErrors`); here the fit is solved jointly for parameters and shared errors, the
latter with their priors, which gives the same parameters, the estimates of the shared errors, and
residuals freed of them. With H the matrix that takes whitened residuals to what parameters and
shared errors explain of them, the rest e = (I - H) y has the covariance I - H, so that the sum of
e^2 over any group of rows is expected to be the sum of 1 - H_ii.
"""

from dataclasses import dataclass, field

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from ngbound.arc import Noise

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class JointSolution:
    """Parameters and shared errors together.

    Attributes
    ----------
    shared : (..., k) estimates of the shared errors, in prior standard deviations
    cov : (p + k, p + k) covariance of the parameters (in ``scale``) and the shared errors
    scale : (p,) by which the columns of the design were divided
    white : (2m, p + k) whitened patterns of both, kept observations
    rest : (..., 2m) whitened residuals of the kept observations, freed of the shared errors
    leverage : (2m,) H_ii
    """

    shared: Floats
    cov: Floats = field(repr=False)
    scale: Floats = field(repr=False)
    white: Floats = field(repr=False)
    rest: Floats = field(repr=False)
    leverage: Floats = field(repr=False)


def solve_jointly(seen: Floats, design: Floats, noise: Noise, keep: Bools) -> JointSolution:
    """Solve for parameters and shared errors at once.

    Parameters
    ----------
    seen : (n, 2), or (m, n, 2) for many arcs, observed minus computed, radians
    design : (n, 2, p) radians per unit
    noise : Noise of all n observations
    keep : (n,) bool
    """
    kept = noise.mask(keep)
    p = design.shape[2]
    x = kept.whiten_nights(design[keep].reshape(-1, p))
    y = kept.whiten_nights(seen[..., keep, :].reshape(*seen.shape[:-2], -1).T)
    scale = np.linalg.norm(x, axis=0)
    scale[scale == 0.0] = 1.0
    u = np.zeros((len(y), 0)) if kept.modes is None else kept.modes.whitened
    white = np.concatenate([x / scale, u], axis=1)
    prior = np.eye(white.shape[1])[p:]
    left, s, right = np.linalg.svd(np.concatenate([white, prior]), full_matrices=False)
    left = left[: len(y)]
    root = right.T / np.maximum(s, s[0] * 1e-15)
    both = root @ (left.T @ y)
    return JointSolution(
        both[p:].T, root @ root.T, scale, white, (y - white @ both).T, np.sum(left**2, axis=1)
    )


def freed(seen: Floats, design: Floats, noise: Noise, keep: Bools) -> tuple[Floats, Floats, Floats]:
    """Residuals freed of the shared errors, with the design and covariance that go with them.

    Returns
    -------
    seen : (n, 2) or (m, n, 2) radians
    design : (n, 2, p + k), the parameters in the scale of the solution, then the shared errors
    cov : (p + k, p + k)
    """
    joint = solve_jointly(seen, design, noise, keep)
    n = len(noise)
    pattern = np.zeros((n, 2, 0))
    if noise.shared is not None and joint.shared.shape[-1]:
        pattern = noise.shared.matrix.reshape(n, 2, -1)
    wide = np.concatenate([design / joint.scale, pattern], axis=2)
    moved = joint.shared @ pattern.reshape(2 * n, -1).T
    return seen - moved.reshape(seen.shape), wide, joint.cov


def shared_table(noise: Noise, joint: JointSolution, p: int) -> pd.DataFrame:
    """Estimates of the shared errors beside their priors.

    Returns
    -------
    pandas.DataFrame
        name, estimate, sigma, prior_sigma, unit, pull (estimate over the standard deviation it
        should have under its prior), published.
    """
    shared = noise.shared
    if shared is None or not joint.shared.size:
        columns = ["name", "estimate", "sigma", "prior_sigma", "unit", "pull", "published"]
        return pd.DataFrame({c: [] for c in columns})
    own = np.sqrt(np.diag(joint.cov)[p:])
    moved = np.sqrt(np.maximum(1.0 - own**2, 1e-12))
    return pd.DataFrame(
        {
            "name": shared.names,
            "estimate": joint.shared * shared.sigma,
            "sigma": own * shared.sigma,
            "prior_sigma": shared.sigma,
            "unit": shared.unit,
            "pull": np.where(own < 0.999, joint.shared / moved, 0.0),
            "published": shared.source,
        }
    )


def shared_text(table: pd.DataFrame, seasons: bool = False) -> str:
    """The table of shared errors in words: estimate, prior, and what is published about it.

    Parameters
    ----------
    table : DataFrame
        Of `shared_table`.
    seasons : bool
        Whether the offsets of single seasons are shown too.
    """
    if not len(table):
        return "No errors shared by many nights are allowed for."
    lines = ["Errors shared by many nights: estimate +- error (prior), beside what is published"]
    before = ""
    for row in table.to_dict("records"):
        if " season " in row["name"] and not seasons:
            continue
        published = "" if row["published"] == before else f"  {row['published']}"
        before = row["published"]
        lines.append(
            f"  {row['name']:34s} {row['estimate']:+.3f} +- {row['sigma']:.3f} "
            f"({row['prior_sigma']:.3f}) {row['unit']}{published}"
        )
    return "\n".join(lines)
