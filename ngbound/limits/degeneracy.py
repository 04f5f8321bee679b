"""Which part of the orbit takes a thrust for itself, and what in the arc still separates the two;
may import errors, fit and this room.

The state is turned into orbital elements by their analytic partials; the correlation of a thrust
component with an element, everything free, says how well that element imitates it. What remains of
a component is the part of its whitened displacement that no change of the orbit imitates, (1 - P_x)
W_A; its square is the information on the component, and it is summed over the station-nights to say
when the arc earned it.
"""

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from ngbound.errors import LimitError
from ngbound.fit import Fit
from ngbound.limits.information import thrust_information
from ngbound.sky import tdb_d_to_iso

ELEMENTS = ("1/a", "q", "e", "i", "node", "argperi", "tp")
_WORDS = {
    "1/a": "the mean motion (1/a)",
    "q": "the perihelion distance",
    "e": "the eccentricity",
    "i": "the inclination",
    "node": "the node",
    "argperi": "the argument of perihelion",
    "tp": "the time of perihelion",
}
_THRUST = {"R": "radial", "T": "transverse", "N": "normal"}
CORE = 0.5
"""The nights named are the shortest run that holds this share of the information."""


@dataclass(frozen=True, eq=False)
class Degeneracy:
    """How the orbit and each thrust component imitate one another.

    Attributes
    ----------
    components : str
    correlation : DataFrame, components by elements
        Of the estimates, everything free.
    absorbed : (k,) float
        Share of the information on each component that freeing the orbit takes away.
    sigma_growth : (k,) float
        Factor by which freeing the orbit widens sigma.
    core_utc : tuple of (str, str)
        First and last day of the shortest run of nights that holds half of what remains.
    core_share_of_nights : (k,) float
    """

    components: str
    correlation: pd.DataFrame
    absorbed: np.ndarray
    sigma_growth: np.ndarray
    core_utc: tuple[tuple[str, str], ...]
    core_share_of_nights: np.ndarray

    @property
    def sentences(self) -> tuple[str, ...]:
        """One for each component."""
        told = []
        for i, letter in enumerate(self.components):
            row = np.abs(self.correlation.iloc[i].to_numpy())
            element = ELEMENTS[int(np.argmax(row))]
            value = float(self.correlation.iloc[i].to_numpy()[int(np.argmax(row))])
            digits = 1 + math.ceil(-math.log10(max(1.0 - abs(value), 1e-9)))
            strength = (
                "is absorbed by"
                if row.max() > 0.99
                else "goes with"
                if row.max() > 0.7
                else "is hardly confused with any element, most with"
            )
            first, last = self.core_utc[i]
            told.append(
                f"A {_THRUST[letter]} thrust {strength} {_WORDS[element]} (correlation "
                f"{value:+.{max(2, digits)}f}); leaving the orbit free widens its sigma "
                f"{self.sigma_growth[i]:.3g}-fold. Half of what separates them comes from "
                f"{first} to {last}, {100.0 * self.core_share_of_nights[i]:.0f} % of the nights."
            )
        return tuple(told)

    def __str__(self) -> str:
        table = self.correlation.to_string(float_format=lambda value: f"{value:+.4f}")
        return "\n".join(["Correlation of thrust and elements, everything free:", table,
                          *self.sentences])  # fmt: skip

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record."""
        return {
            "components": self.components,
            "correlation": self.correlation.to_dict(orient="index"),
            "absorbed": self.absorbed.tolist(),
            "sigma_growth": self.sigma_growth.tolist(),
            "core_utc": [list(each) for each in self.core_utc],
            "core_share_of_nights": self.core_share_of_nights.tolist(),
            "sentences": list(self.sentences),
        }


def orbit_degeneracy(push: Fit) -> Degeneracy:
    """How orbital elements and thrust imitate one another in the arc of ``push``.

    Raises
    ------
    LimitError
        If the fit has no thrust or cannot separate it.
    """
    information = thrust_information(push)
    elements = push.orbit.elements()
    to_elements = np.linalg.inv(elements.jacobian())
    inverse_a = -(1.0 - elements.e) / elements.q_au**2 * to_elements[0]
    inverse_a = inverse_a - to_elements[1] / elements.q_au
    turn = np.vstack([inverse_a, to_elements])
    orbit, gain = information.orbit.spread, information.orbit.gain
    # x = x_hat + gain (A - A_hat) + spread v
    root = np.linalg.cholesky(information.covariance)
    in_thrust, in_orbit = turn @ gain @ root, turn @ orbit
    sigma = np.sqrt(np.sum(in_thrust**2, axis=1) + np.sum(in_orbit**2, axis=1))
    sigma_a = np.sqrt(np.diag(information.covariance))
    correlation = pd.DataFrame(
        (root @ in_thrust.T) / np.outer(sigma_a, sigma),
        index=list(information.components),
        columns=list(ELEMENTS),
    )
    noise = push.noise.mask(push.keep)
    p = push.theta.size
    design = np.asarray(push.design).reshape(len(push.keep), 2, p)[push.keep].reshape(-1, p)
    white = noise.whiten(design)
    basis = np.linalg.qr(white[:, :6] / np.linalg.norm(white[:, :6], axis=0))[0]
    left = white[:, 6:] - basis @ (basis.T @ white[:, 6:])
    by_record = np.sum((left**2).reshape(-1, 2, information.k), axis=1)
    tdb_d = push.records.tdb_d[push.keep]
    if by_record.shape[0] != tdb_d.size:
        raise LimitError("The fit's design does not have a row pair for each record it kept.")
    night = np.floor(tdb_d).astype(int)
    days, place = np.unique(night, return_inverse=True)
    earned = np.zeros((days.size, information.k))
    np.add.at(earned, place, by_record)
    cores, shares = [], []
    for i in range(information.k):
        first, last = _shortest_run(earned[:, i] / earned[:, i].sum())
        ends = np.atleast_1d(tdb_d_to_iso(days[[first, last]] + 0.5, scale="utc"))
        cores.append((str(ends[0])[:10], str(ends[1])[:10]))
        shares.append((last - first + 1) / days.size)
    return Degeneracy(
        information.components, correlation, information.absorbed_by_orbit,
        np.sqrt(information.inflation_by_orbit), tuple(cores), np.array(shares),
    )  # fmt: skip


def _shortest_run(share: np.ndarray) -> tuple[int, int]:
    """First and last index of the shortest run that holds ``CORE``."""
    total = np.concatenate([[0.0], np.cumsum(share)])
    best = (0, len(share) - 1)
    for first in range(len(share)):
        last = int(np.searchsorted(total, total[first] + CORE - 1e-12)) - 1
        if last < len(share) and last - first < best[1] - best[0]:
            best = (first, max(first, last))
    return best
