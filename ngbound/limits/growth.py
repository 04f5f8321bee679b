"""How the detection threshold fell as the arc grew; may import errors, fit, sky and this room.

The arc is cut after each of a number of nights; the normal matrix of what is left, with the
partials of the whole arc's orbit, gives the threshold that the arc had by then. For a constant
thrust across a straight sightline it falls as T^-2 N^-1/2.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from astropy import units as u

from ngbound.blas import on_one_thread
from ngbound.errors import LimitError
from ngbound.fit import Fit
from ngbound.limits.fit_protocol import GaussianFit
from ngbound.limits.information import AU_D2
from ngbound.limits.threshold import DetectionThreshold, detection_threshold
from ngbound.sky import tdb_d_to_iso


@dataclass(frozen=True, eq=False)
class ThresholdGrowth:
    """The threshold of an arc as it grew.

    Attributes
    ----------
    components : str
    tdb_d : (m,) float
        Time of the last record, days past J2000.0.
    n_obs : (m,) int
    span_d : (m,) float
    thresholds : tuple of DetectionThreshold or None
        None while the arc could not yet tell the thrust from the orbit.
    """

    components: str
    tdb_d: np.ndarray
    n_obs: np.ndarray
    span_d: np.ndarray
    thresholds: tuple[DetectionThreshold | None, ...]

    def _each(self, name: str) -> u.Quantity:
        return (
            np.array([np.nan if t is None else getattr(t, name).value for t in self.thresholds])
            * AU_D2
        )

    @property
    def worst(self) -> u.Quantity:
        """Direction-free threshold in the worst seen direction (m,), nan where there was none."""
        return self._each("worst")

    @property
    def best(self) -> u.Quantity:
        """In the best seen direction (m,)."""
        return self._each("best")

    @property
    def table(self) -> pd.DataFrame:
        """One row for each cut; thresholds in au/d2."""
        table = pd.DataFrame(
            {
                "utc": np.atleast_1d(tdb_d_to_iso(self.tdb_d, scale="utc")),
                "span_d": self.span_d,
                "n_obs": self.n_obs,
                "worst": self.worst.value,
                "best": self.best.value,
                "isotropic_mean": self._each("isotropic_mean").value,
            }
        )
        for i, letter in enumerate(self.components):
            table[f"held_{letter}"] = [
                np.nan if t is None else float(t.held[i].value) for t in self.thresholds
            ]
        return table

    @property
    def exponent(self) -> float:
        """Slope of log worst threshold against log span over the last half of the span."""
        late = (self.span_d >= 0.5 * self.span_d[-1]) & np.isfinite(self.worst.value)
        if late.sum() < 3:
            return float("nan")
        return float(np.polyfit(np.log(self.span_d[late]), np.log(self.worst.value[late]), 1)[0])

    def __str__(self) -> str:
        head = f"Growth of the threshold over {self.span_d[-1]:.4g} d, au/d2"
        if np.isfinite(self.exponent):
            head += f"; of late it falls as the span to the power {self.exponent:.2f}"
        return head + "\n" + self.table.to_string(float_format=lambda value: f"{value:.4g}")

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record."""
        rows = self.table.to_dict(orient="records")
        return {
            "components": self.components,
            "exponent": self.exponent if np.isfinite(self.exponent) else None,
            "rows": [
                {str(k): None if v != v else v for k, v in row.items()}  # nan is not JSON
                for row in rows
            ],
        }


@on_one_thread
def threshold_growth(
    push: Fit, *, false_alarm: float = 0.0027, power: float = 0.95, n_cuts: int = 30
) -> ThresholdGrowth:
    """The detection threshold after each of up to ``n_cuts`` nights, the last one the whole arc.

    Parameters
    ----------
    push : Fit
        With thrust components.
    false_alarm, power : float
    n_cuts : int

    Raises
    ------
    LimitError
        If the fit has no thrust, or ``n_cuts`` is not positive.
    """
    if n_cuts < 1 or not push.components:
        raise LimitError(
            "The growth of a threshold needs a fit with thrust and at least one cut; "
            f"{push.components!r} and {n_cuts!r} were given."
        )
    kept = np.flatnonzero(push.keep)
    kept = kept[np.argsort(push.records.tdb_d[kept], kind="stable")]
    tdb_d = push.records.tdb_d[kept]
    ends = np.append(np.flatnonzero(np.diff(np.floor(tdb_d)) > 0), len(kept) - 1)
    numbers = np.cumsum(push.noise.count[kept])
    first = np.searchsorted(numbers[ends], push.theta.size, side="right")
    ends = ends[min(first, len(ends) - 1) :]
    ends = ends[np.unique(np.linspace(0, len(ends) - 1, n_cuts).round().astype(int))]
    design = np.asarray(push.design).reshape(len(push.keep), 2, -1)
    found: list[DetectionThreshold | None] = []
    for end in ends:
        rows = kept[: end + 1]
        white = push.noise.mask(rows).whiten(design[rows].reshape(2 * len(rows), -1))
        cut = GaussianFit.of(push, white.T @ white, int(numbers[end]))
        try:
            found.append(detection_threshold(cut, false_alarm=false_alarm, power=power))
        except LimitError:
            found.append(None)
    return ThresholdGrowth(push.components, tdb_d[ends], ends + 1, tdb_d[ends] - tdb_d[0],
                           tuple(found))  # fmt: skip
