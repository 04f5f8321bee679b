"""Errors that many observations share: offsets of star catalogues and stations, clocks, the
photocentre; imports numpy, constants.

A shared error is a number b with a Gaussian prior of mean 0 that moves many observations at once,
by a known pattern. With B the patterns times the prior standard deviations, U = L^-1 B (L L' = C,
the covariance of the station-nights), the covariance of all observations is

    C + B B',    whitened by  (I + U U')^(-1/2) L^-1,

so that a fit with it has the shared errors marginalised exactly, as if each had been a parameter
of the fit with its prior (for example A. Albert 1972, Regression and the Moore-Penrose
Pseudoinverse, ch. 8, for the equivalence; the low-rank inverse after M. A. Woodbury 1950). With
U = Z s V' the thin singular value decomposition, the symmetric square root is

    (I + U U')^(-1/2) = I - Z (1 - (1 + s^2)^(-1/2)) Z'.
"""

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]

WEAKEST = 1e-10
"""Modes with a squared singular value below this change no chi2 and are left out."""


@dataclass(frozen=True, eq=False)
class SharedErrors:
    """Patterns of errors that many observations share.

    Parameters
    ----------
    names : tuple of str, (k,)
        What each is, such as "catalogue USNOA2, Dec".
    matrix : ndarray (2n, k)
        Shift of each observed RA cos dec and Dec (by turns), in radians, for an error of one prior
        standard deviation.
    sigma : ndarray (k,)
        That standard deviation, in ``unit``.
    unit : tuple of str, (k,)
        "arcsec", "s", "arcsec au" or "km".
    source : tuple of str, (k,)
        Where the prior comes from.
    """

    names: tuple[str, ...]
    matrix: FloatArray = field(repr=False)
    sigma: FloatArray
    unit: tuple[str, ...]
    source: tuple[str, ...] = field(repr=False)

    def __post_init__(self) -> None:
        k = len(self.names)
        shapes = (self.matrix.shape[1], len(self.sigma), len(self.unit), len(self.source))
        if self.matrix.ndim != 2 or any(size != k for size in shapes):
            raise ValueError(f"{k} shared errors need as many columns, sigmas, units and sources")

    def __len__(self) -> int:
        return len(self.names)

    def rows(self, keep: ArrayLike) -> "SharedErrors":
        """Those of a subset of the observations (bool (n,) or positions)."""
        by_observation = self.matrix.reshape(-1, 2, len(self))[np.asarray(keep)]
        return SharedErrors(
            self.names, by_observation.reshape(-1, len(self)), self.sigma, self.unit, self.source
        )

    def to_dict(self) -> dict[str, Any]:
        """Names with prior standard deviations, JSON-able."""
        return {
            name: {"prior_sigma": float(s), "unit": u, "source": where}
            for name, s, u, where in zip(
                self.names, self.sigma, self.unit, self.source, strict=True
            )
        }

    def __str__(self) -> str:
        lines = [f"{len(self)} shared errors, prior standard deviations:"]
        lines += [
            f"  {s:.3g} {u:7s} {name}"
            for name, s, u in zip(self.names, self.sigma, self.unit, strict=True)
        ]
        return "\n".join(lines)


def joined(parts: list[SharedErrors]) -> SharedErrors | None:
    """Several sets over the same observations as one; None for nothing."""
    parts = [part for part in parts if len(part)]
    if not parts:
        return None
    return SharedErrors(
        tuple(name for part in parts for name in part.names),
        np.concatenate([part.matrix for part in parts], axis=1),
        np.concatenate([part.sigma for part in parts]),
        tuple(unit for part in parts for unit in part.unit),
        tuple(source for part in parts for source in part.source),
    )


@dataclass(frozen=True, eq=False)
class Modes:
    """The singular vectors of whitened shared errors.

    Parameters
    ----------
    axes : ndarray (2n, k)
        Z, orthonormal columns.
    strength : ndarray (k,)
        s, singular values.
    whitened : ndarray (2n, m)
        U itself, a column a shared error.
    """

    axes: FloatArray = field(repr=False)
    strength: FloatArray
    whitened: FloatArray = field(repr=False)

    @classmethod
    def of(cls, whitened: FloatArray) -> "Modes":
        """Those of U = L^-1 B."""
        squares, vectors = np.linalg.eigh(whitened.T @ whitened)
        strong = squares > WEAKEST
        strength = np.sqrt(squares[strong])
        axes = (whitened @ vectors[:, strong]) / strength
        return cls(axes, strength, whitened)

    def shrink(self, white: FloatArray) -> FloatArray:
        """(I + U U')^(-1/2) times block-whitened values (2n,) or (2n, c)."""
        less = 1.0 - 1.0 / np.sqrt(1.0 + self.strength**2)
        along = self.axes.T @ white
        return white - self.axes @ (less[:, None] * along if along.ndim == 2 else less * along)

    def rows(self) -> FloatArray:
        """(k, 2n) rows M with chi2 = |w|^2 - |M w|^2, w block-whitened residuals."""
        squares = self.strength**2
        return np.ascontiguousarray(np.sqrt(squares / (1.0 + squares))[:, None] * self.axes.T)
