"""What this room needs to know of a fitted orbit; imports nothing of ngbound.

Any object with these attributes will do: the fit of a real arc, or a linear problem written down
by hand.
"""

from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np


class ThrustFit(Protocol):
    """A fitted orbit with ``k`` thrust components among its ``p`` parameters.

    Attributes
    ----------
    components : str
        Letters of the fitted thrust components, a subset of "RTN" in the order of ``theta``; "" if
        none.
    names : sequence of str, length p
    theta : (p,) float
        Orbit parameters (au, au/d), then the thrust (au/d2) from index ``n_state`` on.
    normal : (p, p) float
        Normal matrix (Fisher information) of ``theta`` for whitened residuals, without priors.
    n_state : int
        Number of orbit parameters that stand before the thrust.
    chi2 : float
        Weighted sum of squares at ``theta``.
    dof : int
        Number of residual components less ``p``.

    A fit may also carry ``noise_dof``, the degrees of freedom that its errors rest on where they
    were estimated from the residuals (None where they are known), ``noise_excess``, by
    which the squares of those errors are too large on average, and ``thrust`` with its law.
    """

    @property
    def components(self) -> str: ...

    @property
    def names(self) -> Any: ...

    @property
    def theta(self) -> np.ndarray: ...

    @property
    def normal(self) -> np.ndarray: ...

    @property
    def n_state(self) -> int: ...

    @property
    def chi2(self) -> float: ...

    @property
    def dof(self) -> int: ...

    def chi2_many(self, thetas: np.ndarray, /) -> np.ndarray:
        """Exact chi2 (m,) of many parameter vectors (m, p)."""
        ...


@dataclass(frozen=True, eq=False)
class GaussianFit:
    """A ``ThrustFit`` in linear theory, known by its normal matrix: an arc cut short or grown."""

    components: str
    names: tuple[str, ...]
    theta: np.ndarray
    normal: np.ndarray
    n_state: int
    chi2: float
    dof: int
    noise_dof: int | None = None
    noise_excess: float = 1.0

    def chi2_many(self, thetas: np.ndarray, /) -> np.ndarray:
        """chi2 (m,) of parameter vectors (m, p): a parabola."""
        off = np.asarray(thetas) - self.theta
        return self.chi2 + np.einsum("mi,ij,mj->m", off, self.normal, off)

    @classmethod
    def of(cls, fit: ThrustFit, normal: np.ndarray, n_numbers: int) -> "GaussianFit":
        """The solution of ``fit`` with another normal matrix, from so many numbers (two of a
        direction, one of a radar echo)."""
        theta = np.asarray(fit.theta, dtype=float)
        dof = max(0, n_numbers - theta.size)
        names = tuple(str(name) for name in fit.names)
        noise_dof = getattr(fit, "noise_dof", None)
        excess = getattr(fit, "noise_excess", 1.0)
        return cls(
            fit.components, names, theta, normal, fit.n_state, float(dof), dof, noise_dof, excess
        )
