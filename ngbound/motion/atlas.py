"""Several neighbourhoods along the direction in which an orbit is known worst; imports numpy,
errors and the other modules of this room.

On a short arc the angles fix all but the distance: the orbits that fit lie along one direction, far
longer than the others, and most of them outside what one reference holds. The atlas strings further
references along that direction, each as wide apart as their neighbours bear, and gives every
parameter vector to the reference nearest to it in position. Which one that is depends on the vector
alone, and a reference is made when it is first needed, so that results depend neither on what was
computed before nor on the company; chi2 is the same whichever computes it, to their tolerance.
"""

from dataclasses import dataclass, field
from typing import Literal, overload

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ngbound.errors import PropagationError
from ngbound.motion.neighbours import Neighbourhood

Floats = NDArray[np.float64]

REACH_SIGMA = 4.0
"""Up to here along the axis every vector should be inside some neighbourhood."""
MAX_SHEETS = 64
MAX_HALVINGS = 12


@dataclass(frozen=True, eq=False)
class Atlas:
    """Neighbourhoods along one axis; build it with `Atlas.around`.

    Attributes
    ----------
    centre : Neighbourhood
    axis : (p,) change of the parameters along it, one standard deviation
    dual : (p,) the place of a vector along it is ``dual @ (theta - centre.theta)``
    spacing : float
        Between the references, in standard deviations; infinite where the centre is enough.
    """

    centre: Neighbourhood
    axis: Floats
    dual: Floats
    spacing: float
    _sheets: dict[int, Neighbourhood] = field(default_factory=dict, repr=False)

    @classmethod
    def around(cls, centre: Neighbourhood, covariance: Floats) -> "Atlas":
        """Place the references so that orbits within 4 sigma along the axis are near one.

        Parameters
        ----------
        centre : Neighbourhood
        covariance : (p, p) of its parameters, singular where some are held
        """
        axis, dual = _longest(centre, covariance)
        middle = cls(centre, axis, dual, np.inf)
        probes = np.linspace(-REACH_SIGMA, REACH_SIGMA, 16)
        if not np.any(axis) or not centre.strays(centre.theta + probes[:, None] * axis).any():
            return middle
        least = REACH_SIGMA / MAX_SHEETS
        spacing = np.inf
        for side in (-0.75, 0.75):
            there = middle._reference(side * REACH_SIGMA)
            steps = 0.5 * REACH_SIGMA * 0.5 ** np.arange(MAX_HALVINGS)
            near = there.theta + np.concatenate([steps, -steps])[:, None] * axis
            good = ~there.strays(near).reshape(2, -1).any(axis=0)
            inside = steps[good]
            spacing = min(spacing, float(inside[0]) if inside.size else least)
        return cls(centre, axis, dual, max(spacing, least))

    def _reference(self, place: float) -> Neighbourhood:
        """A neighbourhood about another place of the axis; the centre where there is no orbit."""
        try:
            return self.centre.moved_to(self.centre.theta + place * self.axis)
        except PropagationError:
            return self.centre

    def _sheet(self, number: int) -> Neighbourhood:
        if number == 0:
            return self.centre
        if number not in self._sheets:
            self._sheets[number] = self._reference(number * self.spacing)
        return self._sheets[number]

    def _numbers(self, thetas: Floats) -> NDArray[np.int64]:
        """Which reference (m,) each vector belongs to."""
        if not np.isfinite(self.spacing):
            return np.zeros(len(thetas), dtype=np.int64)
        place = (thetas - self.centre.theta) @ self.dual / self.spacing
        place = np.where(np.isfinite(place), place, 0.0)
        return np.rint(np.clip(place, -MAX_SHEETS, MAX_SHEETS)).astype(np.int64)

    @overload
    def chi2(self, thetas: ArrayLike, want_residuals: Literal[False] = False) -> Floats: ...

    @overload
    def chi2(self, thetas: ArrayLike, want_residuals: Literal[True]) -> tuple[Floats, Floats]: ...

    def chi2(
        self, thetas: ArrayLike, want_residuals: bool = False
    ) -> Floats | tuple[Floats, Floats]:
        """As `Neighbourhood.chi2`, each vector by the reference nearest to it."""
        thetas = np.atleast_2d(np.asarray(thetas, dtype=float))
        numbers = self._numbers(thetas)
        chi2 = np.empty(len(thetas))
        seen = np.empty((len(thetas) if want_residuals else 0, len(self.centre.records), 2))
        for number in np.unique(numbers):
            rows = np.flatnonzero(numbers == number)
            sheet = self._sheet(int(number))
            if want_residuals:
                chi2[rows], seen[rows] = sheet.chi2(thetas[rows], want_residuals=True)
            else:
                chi2[rows] = sheet.chi2(thetas[rows])
        return (chi2, seen) if want_residuals else chi2

    def strays(self, thetas: ArrayLike) -> NDArray[np.bool_]:
        """Which parameter vectors (m, p) even the nearest reference leaves to be integrated one by
        one."""
        thetas = np.atleast_2d(np.asarray(thetas, dtype=float))
        numbers = self._numbers(thetas)
        astray = np.zeros(len(thetas), dtype=bool)
        for number in np.unique(numbers):
            rows = numbers == number
            astray[rows] = self._sheet(int(number)).strays(thetas[rows])
        return astray


def _longest(centre: Neighbourhood, covariance: Floats) -> tuple[Floats, Floats]:
    """The direction (p,) along which positions are most uncertain over the arc, one standard
    deviation, and its dual: the nearest point of the axis, by the positions of the linear
    solution."""
    free = [*range(6), *(6 + "RTN".index(c) for c in centre.components)]
    legs = [leg for leg in (centre.partials.back, centre.partials.ahead) if leg is not None]
    moved = np.concatenate(
        [leg.node_columns()[:, :, :3, free].reshape(-1, len(free)) for leg in legs]
    )
    scale = np.sqrt(np.diag(covariance))
    unit = np.where(scale > 0.0, scale, 1.0)
    values, vectors = np.linalg.eigh(covariance / np.outer(unit, unit))
    root = unit[:, None] * vectors * np.sqrt(np.maximum(values, 0.0))
    _, _, right = np.linalg.svd(moved @ root, full_matrices=False)
    axis = root @ right[0]
    along = moved @ axis
    return axis, along @ moved / max(float(along @ along), np.finfo(float).tiny)
