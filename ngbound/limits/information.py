"""What an arc knows of the thrust, the orbit left free; may import errors, rounding and this
room.

With F the normal matrix of (orbit x, thrust A), the information on A that is left when x is
marginalised is the Schur complement F_A = F_AA - F_Ax F_xx^-1 F_xA. It is read off the Cholesky
factor of F scaled to unit diagonal, with x first: the last k rows of that factor, times their own
transpose, are the Schur complement. No badly scaled matrix is ever inverted (N. J. Higham 2002,
Accuracy and Stability of Numerical Algorithms, 2nd ed., chapter 10).
"""

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from astropy import units as u
from scipy.linalg import LinAlgError, cholesky, solve_triangular

from ngbound.errors import LimitError
from ngbound.limits.fit_protocol import ThrustFit
from ngbound.rounding import along, rounded

AU_D2 = u.au / u.d**2
"""Unit of every acceleration of this room."""

SINGULAR_PIVOT = 1e-13
"""A parameter of which less than this fraction of the variance is its own cannot be told from the
others: some hundred times the rounding of a double.
"""

_REMEDY = (
    "Fit fewer thrust components, lengthen the arc, or give observations in another part of "
    "the orbit."
)


@dataclass(frozen=True)
class OrbitConditional:
    """The orbit given the thrust, in linear theory: x = x_hat + gain (A - A_hat) + spread v, v
    standard normal.

    Attributes
    ----------
    gain : (n, k) float
        -F_xx^-1 F_xA.
    spread : (n, n) float
        Square root of F_xx^-1: spread @ spread.T is the covariance of the orbit at a given thrust.
    """

    gain: np.ndarray
    spread: np.ndarray


@dataclass(frozen=True)
class ThrustInformation:
    """Information on k thrust components, the orbit marginalised.

    Attributes
    ----------
    components : str
        Letters of the components, in order.
    A_hat : (k,) float
        Estimate, au/d2.
    matrix : (k, k) float
        F_A, (au/d2)^-2.
    covariance : (k, k) float
        F_A^-1, (au/d2)^2.
    eigenvalues : (k,) float
        Of F_A, ascending, (au/d2)^-2; the first belongs to the direction the arc sees worst.
    eigenvectors : (k, k) float
        Column i belongs to eigenvalue i; its largest element is positive.
    orbit_names : tuple of str
    correlation : (k, n) float
        Correlation of each thrust component with each orbit parameter, everything free.
    inflation_by_orbit : (k,) float
        Variance with the orbit free over variance with the orbit held, other thrust components
        held.
    inflation_by_thrust : (k,) float
        Variance with the other thrust components free over variance with them held, orbit free.
    orbit : OrbitConditional
    law_g : callable or None
        g(r) of the thrust law, r in au, where the fit carries its law.
    noise_dof : int or None
        Degrees of freedom that the errors rest on, where they were estimated from the residuals.
    noise_excess : float
        Expected square of such an error over the true one.
    """

    components: str
    A_hat: np.ndarray
    matrix: np.ndarray
    covariance: np.ndarray
    eigenvalues: np.ndarray
    eigenvectors: np.ndarray
    orbit_names: tuple[str, ...]
    correlation: np.ndarray
    inflation_by_orbit: np.ndarray
    inflation_by_thrust: np.ndarray
    orbit: OrbitConditional
    law_g: Callable[[float], float] | None = None
    noise_dof: int | None = None
    noise_excess: float = 1.0

    @property
    def k(self) -> int:
        """Number of thrust components."""
        return len(self.components)

    @property
    def absorbed_by_orbit(self) -> np.ndarray:
        """Share (k,) of the information on each component that freeing the orbit takes away, 0 to
        1.
        """
        return 1.0 - 1.0 / self.inflation_by_orbit

    @property
    def wald(self) -> float:
        """A_hat' F_A A_hat: chi2 with k degrees of freedom if there is no thrust."""
        return float(self.A_hat @ self.matrix @ self.A_hat)

    def with_estimate(self, A: np.ndarray) -> "ThrustInformation":
        """The same information about another estimate A (k,), au/d2."""
        return replace(self, A_hat=np.asarray(A, dtype=float))

    def direction(
        self, direction: "str | np.ndarray | list[float] | tuple[float, ...]"
    ) -> np.ndarray:
        """Unit vector (k,) from a letter such as "R" or from k numbers.

        Raises
        ------
        LimitError
            If the letter was not fitted, or the vector has no length or the wrong number of
            elements.
        """
        if isinstance(direction, str):
            if direction not in self.components or len(direction) != 1:
                raise LimitError(
                    f"The direction {direction!r} is not one of the fitted thrust components "
                    f"({', '.join(self.components)}); name one of these or give {self.k} numbers.",
                    direction=direction,
                )
            return np.eye(self.k)[self.components.index(direction)]
        vector = np.asarray(direction, dtype=float)
        length = float(np.linalg.norm(vector))
        if vector.shape != (self.k,) or not np.isfinite(length) or length == 0.0:
            raise LimitError(
                f"A direction needs {self.k} finite numbers, not all zero, one for each of the "
                "components "
                f"{', '.join(self.components)}; {direction!r} was given.",
                direction=direction,
            )
        return vector / length

    def sigma_held(
        self, direction: "str | np.ndarray | list[float] | tuple[float, ...]"
    ) -> u.Quantity:
        """One sigma along ``direction``, the thrust across it held at zero: (n' F_A n)^-1/2,
        au/d2.
        """
        n = self.direction(direction)
        return (n @ self.matrix @ n) ** -0.5 * AU_D2

    def sigma_free(
        self, direction: "str | np.ndarray | list[float] | tuple[float, ...]"
    ) -> u.Quantity:
        """One sigma along ``direction``, the thrust across it free: (n' F_A^-1 n)^1/2, au/d2."""
        n = self.direction(direction)
        return (n @ self.covariance @ n) ** 0.5 * AU_D2

    @property
    def sentences(self) -> tuple[str, ...]:
        """For each component, in words, how much of it the orbit takes and which parameter goes
        with it.
        """
        told = []
        for i, letter in enumerate(self.components):
            text = (
                f"The orbit absorbs {_percent(self.absorbed_by_orbit[i])} of the information on "
                f"the {_WORDS[letter]} thrust (its sigma grows "
                f"{self.inflation_by_orbit[i] ** 0.5:.3g}-fold)"
            )
            if self.orbit_names:
                j = int(np.argmax(np.abs(self.correlation[i])))
                text += (
                    f"; it goes most with {self.orbit_names[j]} "
                    f"(correlation {self.correlation[i, j]:+.4f})"
                )
            told.append(text + ".")
        return tuple(told)

    def __str__(self) -> str:
        lines = []
        for letter in self.components:
            lines.append(
                f"A_{letter}: sigma {rounded(self.sigma_held(letter).value)} au/d2 (others held), "
                f"{rounded(self.sigma_free(letter).value)} (others free)"
            )
        for i in range(self.k):
            lines.append(
                f"axis {i + 1}: sigma {rounded(self.eigenvalues[i] ** -0.5)} au/d2 along "
                f"{along(self.components, self.eigenvectors[:, i])}"
            )
        return "\n".join([*lines, *self.sentences])

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record; accelerations in au/d2."""
        return {
            "components": self.components,
            "estimate_au_d2": self.A_hat.tolist(),
            "information_au_d2_-2": self.matrix.tolist(),
            "covariance_au2_d4": self.covariance.tolist(),
            "eigenvalues": self.eigenvalues.tolist(),
            "eigenvectors_columns": self.eigenvectors.tolist(),
            "sigma_held_au_d2": [float(self.sigma_held(c).value) for c in self.components],
            "sigma_free_au_d2": [float(self.sigma_free(c).value) for c in self.components],
            "orbit_names": list(self.orbit_names),
            "correlation_with_orbit": self.correlation.tolist(),
            "variance_inflation_by_orbit": self.inflation_by_orbit.tolist(),
            "variance_inflation_by_other_thrust": self.inflation_by_thrust.tolist(),
            "noise_dof": self.noise_dof,
            "noise_excess": self.noise_excess,
        }


_WORDS = {"R": "radial", "T": "transverse", "N": "normal"}


def _percent(share: float) -> str:
    if share > 0.999:
        return f"all but {1.0 - share:.1e}"
    return f"{100.0 * share:.1f} %"


def thrust_information(fit: ThrustFit) -> ThrustInformation:
    """Information on the thrust of ``fit``, the orbit and every other parameter marginalised.

    Raises
    ------
    LimitError
        If no thrust was fitted, if the normal matrix is not a finite symmetric one, or if it is
        singular to working precision: the message names the parameter that cannot be told from the
        others.
    """
    components, k = fit.components, len(fit.components)
    normal = np.asarray(fit.normal, dtype=float)
    names = [str(name) for name in fit.names]
    p = len(names)
    if k == 0:
        raise LimitError(
            "This fit has no thrust in it, so it says nothing about thrust; fit the arc again "
            "with a thrust law "
            'and its components, for instance "RTN".'
        )
    if normal.shape != (p, p) or not np.all(np.isfinite(normal)) or p < fit.n_state + k:
        raise LimitError(
            f"The normal matrix must be {p} by {p}, finite, and hold {fit.n_state} orbit and {k} "
            "thrust "
            f"parameters; it has the shape {normal.shape}. Fit the arc again.",
            normal=normal,
        )
    thrust = np.arange(fit.n_state, fit.n_state + k)
    others = np.setdiff1d(np.arange(p), thrust)
    order = np.concatenate([others, thrust])
    diagonal = np.diag(normal)[order]
    if np.any(diagonal <= 0.0):
        blind = names[order[int(np.argmin(diagonal))]]
        raise LimitError(
            f"The arc holds no information at all on the parameter {blind}. {_REMEDY}",
            parameter=blind,
        )
    scale = np.sqrt(diagonal)
    scaled = normal[np.ix_(order, order)] / np.outer(scale, scale)
    scaled = 0.5 * (scaled + scaled.T)
    try:
        factor = cholesky(scaled, lower=True)
    except LinAlgError as fault:
        raise _singular(scaled, [names[i] for i in order]) from fault
    if np.min(np.diag(factor)) ** 2 < SINGULAR_PIVOT:
        raise _singular(scaled, [names[i] for i in order])

    n = len(others)
    # rows of the inverse factor give the covariance of the scaled parameters: inverse' inverse
    inverse = solve_triangular(factor, np.eye(p), lower=True)
    covariance_scaled = inverse.T @ inverse
    sigma_scaled = np.sqrt(np.diag(covariance_scaled))
    correlation = (covariance_scaled / np.outer(sigma_scaled, sigma_scaled))[n:, :n]

    x_scale, a_scale = scale[:n], scale[n:]
    left = factor[n:, n:]
    matrix = (left @ left.T) * np.outer(a_scale, a_scale)
    covariance = covariance_scaled[n:, n:] / np.outer(a_scale, a_scale)
    eigenvalues, eigenvectors = np.linalg.eigh(matrix / np.max(np.diag(matrix)))
    eigenvalues = eigenvalues * np.max(np.diag(matrix))
    if eigenvalues[0] <= 0.0:
        raise _singular(scaled, [names[i] for i in order])
    signs = np.sign(eigenvectors[np.argmax(np.abs(eigenvectors), axis=0), np.arange(k)])
    orbit_factor = factor[:n, :n]
    gain_scaled = -solve_triangular(orbit_factor, factor[n:, :n].T, lower=True, trans="T")
    spread_scaled = solve_triangular(orbit_factor, np.eye(n), lower=True, trans="T")
    return ThrustInformation(
        components=components,
        A_hat=np.asarray(fit.theta, dtype=float)[thrust].copy(),
        matrix=matrix,
        covariance=covariance,
        eigenvalues=eigenvalues,
        eigenvectors=eigenvectors * signs,
        orbit_names=tuple(names[i] for i in others),
        correlation=correlation,
        inflation_by_orbit=a_scale**2 / np.diag(matrix),
        inflation_by_thrust=np.diag(covariance) * np.diag(matrix),
        orbit=OrbitConditional(
            gain=gain_scaled * a_scale[None, :] / x_scale[:, None],
            spread=spread_scaled / x_scale[:, None],
        ),
        law_g=getattr(getattr(fit, "thrust", None), "g", None),
        noise_dof=getattr(fit, "noise_dof", None),
        noise_excess=getattr(fit, "noise_excess", 1.0),
    )


def _singular(scaled: np.ndarray, names: list[str]) -> LimitError:
    values, vectors = np.linalg.eigh(scaled)
    mixture = vectors[:, 0]
    guilty = [names[i] for i in np.argsort(-np.abs(mixture))[:3] if abs(mixture[i]) > 0.1]
    return LimitError(
        "The arc cannot tell these parameters from one another: "
        f"{', '.join(guilty)} (smallest eigenvalue of the normal matrix scaled to unit diagonal "
        f"{values[0]:.1e}, while at least {SINGULAR_PIVOT:.0e} is needed). {_REMEDY}",
        smallest_eigenvalue=float(values[0]),
        combination={name: float(c) for name, c in zip(names, mixture, strict=True)},
    )
