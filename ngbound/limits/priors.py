"""What is believed of a thrust before the arc is looked at; may import errors,
rounding and this room.

Every prior comes with coordinates w in which it is flat, so that the sampler never meets a
singular density:

- "isotropic-uniform": all directions alike, |A| uniform up to an edge: p(A) ~ |A|^(1-k). With w =
  A / |A| times |A|^(1/k), d|A| dOmega = k dw: flat in w.
- "log-uniform": all directions alike, log |A| uniform between two edges: p(A) ~ |A|^-k. With |w|^k
  = ln(|A| / A_min): flat in w. The limit depends on the lower edge, which is therefore always
  recorded.
- "flat-components": flat in the components, without edge; its volume element favours large |A|.
- "outward-radial": flat in the components, with A_R >= 0 (ice that sublimes on the sunlit side
  cannot pull).
"""

from dataclasses import dataclass
from typing import Any, Literal, get_args

import numpy as np

from ngbound.errors import LimitError
from ngbound.limits.information import ThrustInformation
from ngbound.rounding import down, up

PriorName = Literal["isotropic-uniform", "flat-components", "outward-radial", "log-uniform"]
PRIOR_NAMES: tuple[str, ...] = get_args(PriorName)

DEFAULT_EDGE_SIGMAS = 50.0
"""Default upper edge of |A|: this many of the largest one-axis sigma, plus 5 times the estimate."""
DEFAULT_LOWER_EDGE = 1e-3
"""Default lower edge of |A| of the log-uniform prior, in units of the smallest one-axis sigma."""


@dataclass(frozen=True)
class ThrustPrior:
    """A prior on k thrust components and the coordinates w (k,) in which it is flat.

    Attributes
    ----------
    name : str
    components : str
    lower_au_d2, upper_au_d2 : float
        Edges of |A|; 0 and infinity where there is none.
    centre : (k,) float
        Origin of w for the priors that are flat in the components, au/d2.
    frame : (k, k) float
        One unit of w in au/d2: for those priors A = centre + frame w.
    scale_au_d2 : float
        One unit of |w|^k for "isotropic-uniform".
    """

    name: str
    components: str
    lower_au_d2: float
    upper_au_d2: float
    centre: np.ndarray
    frame: np.ndarray
    scale_au_d2: float

    @property
    def k(self) -> int:
        """Number of components."""
        return len(self.components)

    @property
    def radial_in_A(self) -> bool:
        """True for the priors that depend on |A| alone, with w radial too."""
        return self.name in ("isotropic-uniform", "log-uniform")

    def inside(self, A: np.ndarray) -> np.ndarray:
        """Whether A (m, k) lies where the prior is not zero."""
        size = np.linalg.norm(A, axis=1)
        if self.name == "outward-radial":
            return A[:, self.components.index("R")] >= 0.0
        return (size <= self.upper_au_d2) & (size >= self.lower_au_d2)

    def log_density(self, A: np.ndarray) -> np.ndarray:
        """Logarithm of the prior density in A (m, k), not normalised; -inf outside."""
        power = {"isotropic-uniform": 1 - self.k, "log-uniform": -self.k}.get(self.name, 0)
        size = np.maximum(np.linalg.norm(A, axis=1), np.finfo(float).tiny)
        return np.where(self.inside(A), power * np.log(size), -np.inf)

    def from_flat(self, w: np.ndarray) -> np.ndarray:
        """A (m, k) in au/d2 from w (m, k)."""
        if not self.radial_in_A:
            return self.centre + w @ self.frame.T
        length = np.maximum(np.linalg.norm(w, axis=1), np.finfo(float).tiny)
        if self.name == "isotropic-uniform":
            size = self.scale_au_d2 * length**self.k
        else:
            # beyond the upper edge the exponent is held: the point is outside anyway
            top = 2.0 * np.log(self.upper_au_d2 / self.lower_au_d2)
            size = self.lower_au_d2 * np.exp(np.minimum(length**self.k, top))
        return w * (size / length)[:, None]

    def to_flat(self, A: np.ndarray) -> np.ndarray:
        """w (m, k) from A (m, k); the inverse of ``from_flat`` inside the edges."""
        if not self.radial_in_A:
            return np.linalg.solve(self.frame, (A - self.centre).T).T
        size = np.maximum(np.linalg.norm(A, axis=1), np.finfo(float).tiny)
        if self.name == "isotropic-uniform":
            length = (size / self.scale_au_d2) ** (1.0 / self.k)
        else:
            length = np.maximum(np.log(size / self.lower_au_d2), 0.0) ** (1.0 / self.k)
        return A * (length / size)[:, None]

    def __str__(self) -> str:
        edges = {
            "isotropic-uniform": f", |A| below {up(self.upper_au_d2)} au/d2",
            "log-uniform": f", |A| from {down(self.lower_au_d2)} to {up(self.upper_au_d2)} au/d2",
        }.get(self.name, "")
        return f"{self.name} in {', '.join(self.components)}{edges}"

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record."""
        return {
            "name": self.name,
            "components": self.components,
            "lower_au_d2": self.lower_au_d2,
            "upper_au_d2": self.upper_au_d2 if np.isfinite(self.upper_au_d2) else None,
        }


def thrust_prior(
    information: ThrustInformation,
    name: str = "isotropic-uniform",
    *,
    lower_au_d2: float | None = None,
    upper_au_d2: float | None = None,
) -> ThrustPrior:
    """Prior ``name`` for the thrust components of ``information``.

    Parameters
    ----------
    lower_au_d2, upper_au_d2 : float, optional
        Edges of |A| ("log-uniform" has both, "isotropic-uniform" the upper one). Defaults: 1e-3 of
        the smallest one-axis sigma; 50 of the largest one-axis sigma plus 5 |A_hat|.

    Raises
    ------
    LimitError
        If the name is unknown, the edges are out of order, or "outward-radial" is asked for
        without R.
    """
    if name not in PRIOR_NAMES:
        raise LimitError(
            f"There is no prior called {name!r}; choose one of {', '.join(PRIOR_NAMES)}.",
            prior=name,
        )
    if name == "outward-radial" and "R" not in information.components:
        raise LimitError(
            "The prior outward-radial needs the radial component R in the fit; the fitted "
            "components are "
            f"{', '.join(information.components)}. Fit R too, or choose another prior.",
            prior=name,
        )
    sigma = information.eigenvalues**-0.5
    lower, upper = 0.0, np.inf
    if name in ("isotropic-uniform", "log-uniform"):
        size = float(np.linalg.norm(information.A_hat))
        upper = (
            DEFAULT_EDGE_SIGMAS * float(sigma[0]) + 5.0 * size
            if upper_au_d2 is None
            else float(upper_au_d2)
        )
    if name == "log-uniform":
        lower = DEFAULT_LOWER_EDGE * float(sigma[-1]) if lower_au_d2 is None else float(lower_au_d2)
    if not lower < upper or (name == "log-uniform" and not lower > 0.0):
        raise LimitError(
            f"The edges of the prior {name} on |A| must be positive and in order; {lower!r} and "
            f"{upper!r} au/d2 were "
            "given.",
            lower=lower,
            upper=upper,
        )
    return ThrustPrior(
        name=name,
        components=information.components,
        lower_au_d2=lower,
        upper_au_d2=upper,
        centre=information.A_hat.copy(),
        frame=information.eigenvectors * sigma,
        scale_au_d2=float(np.exp(np.mean(np.log(sigma)))),
    )
