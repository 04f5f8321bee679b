"""The smallest thrust an arc would have shown; may import errors, rounding,
fit and this room.

Definition after V. L. Kashyap et al. 2010, ApJ 719, 900: the detection threshold is a property of
the arc, its noise and the test, not of the estimate. A test of false-alarm rate alpha is fixed
first (P[declared | no thrust] = alpha); the threshold is the thrust that this test declares with
probability 1 - beta.

One component n, tested alone: the test statistic is normal with mean A / sigma and unit variance,
sigma = (n' F_A n)^-1/2 if the other components are held at zero, (n' F_A^-1 n)^1/2 if they are
free. Two-sided the non-centrality delta solves Phi(delta - z) + Phi(-delta - z) = 1 - beta with z
= z_(1 - alpha/2), of which delta = z_(1-alpha/2) + z_(1-beta) is the usual approximation (the
second term is the chance to declare the wrong sign); one-sided delta = z_(1-alpha) + z_(1-beta)
exactly.

k components tested together ("direction-free"): the statistic is chi2_k with non-centrality lambda
= A^2 n' F_A n; A_det(n) = sqrt(lambda / n' F_A n) where P[chi2_k(lambda) > chi2_k(1 - alpha)] = 1
- beta. Its mean over the sphere is sqrt(lambda) R_F(f1, f2, f3), with f the eigenvalues of F_A and
R_F Carlson's elliptic integral (B. C. Carlson 1979, Numer. Math. 33, 1); over the circle (2 / pi)
R_F(0, f1, f2).

Where the noise scale is itself estimated from nu degrees of freedom, normal and chi2 become
noncentral t and F; where the squared errors so estimated are too large on average, the thrust that
the test declares grows with the root of that excess.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from astropy import units as u
from scipy.optimize import brentq
from scipy.special import elliprf
from scipy.stats import chi2, f, ncf, nct, ncx2, norm, t

from ngbound.errors import LimitError
from ngbound.fit import sigma_of_chance
from ngbound.limits.fit_protocol import ThrustFit
from ngbound.limits.information import AU_D2, ThrustInformation, thrust_information
from ngbound.rounding import along, percent, up


def _solve(power_of: Callable[[float], float], power: float) -> float:
    """The delta >= 0 at which the rising function ``power_of`` reaches ``power``."""
    high = 1.0
    while power_of(high) < power:
        high *= 2.0
        if high > 1e4:
            raise LimitError(
                f"No thrust reaches the power {power!r} at this false-alarm rate; ask for a power "
                "further below 1 or "
                "a false-alarm rate further above 0.",
                power=power,
            )
    return float(brentq(lambda delta: power_of(delta) - power, 0.0, high, xtol=1e-12))


def noncentrality(
    false_alarm: float, power: float, k: int = 1, *, sided: int = 2, noise_dof: int | None = None
) -> float:
    """Non-centrality delta = sqrt(lambda), in sigma, at which a test of ``k`` components has the
    given power.

    Parameters
    ----------
    false_alarm, power : float
        0 < false_alarm < power < 1.
    k : int
        Number of components tested together.
    sided : int
        1 or 2; 1 only for k = 1 (the sign of the thrust is foreseen).
    noise_dof : int, optional
        Degrees of freedom from which the scale of the noise is estimated; None if it is known.

    Raises
    ------
    LimitError
        If an argument is out of its range.
    """
    if not 0.0 < false_alarm < power < 1.0:
        raise LimitError(
            "False-alarm rate and power must satisfy 0 < false_alarm < power < 1, for instance "
            "0.0027 and 0.95; "
            f"{false_alarm!r} and {power!r} were given.",
            false_alarm=false_alarm,
            power=power,
        )
    if sided not in (1, 2) or (sided == 1 and k != 1):
        raise LimitError(
            f"A test is one-sided (1, for a single component only) or two-sided (2); {sided!r} "
            "was given for "
            f"{k} component(s).",
            sided=sided,
        )
    if noise_dof is not None and noise_dof < 1:
        raise LimitError(
            f"The noise scale needs at least 1 degree of freedom; {noise_dof!r} was given.",
            dof=noise_dof,
        )
    if sided == 1:
        if noise_dof is None:
            return float(norm.isf(false_alarm) + norm.ppf(power))
        critical_t = float(t.isf(false_alarm, noise_dof))
        return _solve(lambda delta: float(nct.sf(critical_t, noise_dof, delta)), power)
    if noise_dof is None:
        critical = float(chi2.isf(false_alarm, k))
        return _solve(
            lambda delta: float(ncx2.sf(critical, k, delta**2)) if delta > 0.0 else false_alarm,
            power,
        )
    critical_f = float(f.isf(false_alarm, k, noise_dof))
    return _solve(
        lambda delta: (
            float(ncf.sf(critical_f, k, noise_dof, delta**2)) if delta > 0.0 else false_alarm
        ),
        power,
    )


@dataclass(frozen=True)
class DirectionMap:
    """Direction-free threshold over the directions of the thrust.

    Attributes
    ----------
    latitude_deg : (n_lat,) float
        From the plane of the first two components towards the third (R, T towards N).
    longitude_deg : (n_lon,) float
        From the first component towards the second (R towards T).
    threshold : (n_lat, n_lon) Quantity, au/d2
    """

    components: str
    latitude_deg: np.ndarray
    longitude_deg: np.ndarray
    threshold: u.Quantity

    def __str__(self) -> str:
        value = self.threshold.value
        return (
            f"Direction map over {', '.join(self.components)}: {value.shape[0]} x "
            f"{value.shape[1]} directions, "
            f"threshold {up(value.min())} to {up(value.max())} au/d2"
        )

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record."""
        return {
            "components": self.components,
            "latitude_deg": self.latitude_deg.tolist(),
            "longitude_deg": self.longitude_deg.tolist(),
            "threshold_au_d2": self.threshold.value.tolist(),
        }


@dataclass(frozen=True)
class DetectionThreshold:
    """Thrust that would have been detected with probability ``power``; all accelerations are au/d2
    Quantities.

    Attributes
    ----------
    false_alarm, power : float
        As asked for, for the whole search.
    false_alarm_per_trial : float
        After the correction for ``trials`` laws tried (Sidak).
    sided : int
        Of the tests of a single component; the direction-free test has no sides.
    significance_sigma : float
        ``false_alarm_per_trial`` as two-sided Gaussian sigma.
    held, free : (k,) Quantity
        Each component tested alone, the others held at zero / free.
    direction_free : (k,) Quantity
        A thrust along each axis, all components tested together.
    worst, best : Quantity
        Direction-free threshold along the worst and best seen direction.
    worst_direction, best_direction : (k,) float
    isotropic_mean : Quantity
        Mean of the direction-free threshold over all directions.
    delta_one, delta_all : float
        Threshold in sigma of the one-component and of the direction-free test: the root of the
        non-centrality, times that of the excess of the errors where they were estimated.
    noise_scale : float
        Factor on every sigma.
    noise_dof : int or None
    information : ThrustInformation
    """

    false_alarm: float
    power: float
    false_alarm_per_trial: float
    trials: int
    sided: int
    significance_sigma: float
    held: u.Quantity
    free: u.Quantity
    direction_free: u.Quantity
    worst: u.Quantity
    best: u.Quantity
    worst_direction: np.ndarray
    best_direction: np.ndarray
    isotropic_mean: u.Quantity
    delta_one: float
    delta_all: float
    noise_scale: float
    noise_dof: int | None
    information: ThrustInformation

    @property
    def components(self) -> str:
        """Letters of the components."""
        return self.information.components

    def along(self, direction: "str | np.ndarray | list[float] | tuple[float, ...]") -> u.Quantity:
        """Direction-free threshold of a thrust along ``direction``, au/d2."""
        return self.delta_all * self.noise_scale * self.information.sigma_held(direction)

    def map(self, n_lat: int = 37, n_lon: int = 72) -> DirectionMap:
        """Direction-free threshold over the directions.

        With three components latitude runs from -90 to 90 degrees in ``n_lat`` steps and longitude
        round the circle in ``n_lon``; with two there is one latitude, with one component there are
        the two senses only.
        """
        k = self.information.k
        if n_lat < 1 or n_lon < 1:
            raise LimitError(
                f"A map needs at least one latitude and one longitude; {n_lat!r} and {n_lon!r} "
                "were given."
            )
        latitude = np.linspace(-90.0, 90.0, n_lat) if k == 3 else np.zeros(1)
        longitude = np.arange(n_lon) * 360.0 / n_lon if k > 1 else np.array([0.0, 180.0])
        lat, lon = np.radians(latitude)[:, None], np.radians(longitude)[None, :]
        zero = np.zeros((len(latitude), len(longitude)))
        vectors = np.stack(
            [
                np.cos(lat) * np.cos(lon) + zero,
                np.cos(lat) * np.sin(lon) + zero,
                np.sin(lat) + zero,
            ],
            axis=-1,
        )[..., :k]
        seen = np.einsum("...i,ij,...j->...", vectors, self.information.matrix, vectors)
        return DirectionMap(
            components=self.components,
            latitude_deg=latitude,
            longitude_deg=longitude,
            threshold=self.delta_all * self.noise_scale * seen**-0.5 * AU_D2,
        )

    def __str__(self) -> str:
        c = "  ".join(f"{letter:7s}" for letter in self.components).rstrip()
        lines = [
            f"Thrust that would have been detected at {self.significance_sigma:.1f} sigma "
            f"(false-alarm rate {percent(self.false_alarm_per_trial)}) with probability "
            f"{percent(self.power)}, au/d2:",
            f"  components          {c}",
            f"  alone, others held  {_row(self.held)}",
            f"  alone, others free  {_row(self.free)}",
            f"  direction-free      {_row(self.direction_free)}",
            f"  worst direction     {up(self.worst.value)} along "
            f"{along(self.components, self.worst_direction)}",
            f"  best direction      {up(self.best.value)} along "
            f"{along(self.components, self.best_direction)}",
            f"  isotropic mean      {up(self.isotropic_mean.value)}",
        ]
        if self.noise_scale != 1.0:
            lines.append(f"  every sigma multiplied by the noise scale {self.noise_scale:.4g}")
        if self.noise_dof is not None:
            lines.append(
                f"  noise scale estimated from {self.noise_dof} degrees of freedom (t and F tests)"
            )
        if self.trials > 1:
            lines.append(f"  corrected for {self.trials} laws tried")
        return "\n".join(lines)

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record; accelerations in au/d2."""
        return {
            "components": self.components,
            "false_alarm": self.false_alarm,
            "power": self.power,
            "false_alarm_per_trial": self.false_alarm_per_trial,
            "trials": self.trials,
            "sided": self.sided,
            "significance_sigma": self.significance_sigma,
            "held_au_d2": self.held.value.tolist(),
            "free_au_d2": self.free.value.tolist(),
            "direction_free_au_d2": self.direction_free.value.tolist(),
            "worst_au_d2": float(self.worst.value),
            "worst_direction": self.worst_direction.tolist(),
            "best_au_d2": float(self.best.value),
            "best_direction": self.best_direction.tolist(),
            "isotropic_mean_au_d2": float(self.isotropic_mean.value),
            "delta_one_sigma": self.delta_one,
            "delta_all_sigma": self.delta_all,
            "noise_scale": self.noise_scale,
            "noise_dof": self.noise_dof,
            "information": self.information.to_dict(),
        }


def _row(values: u.Quantity) -> str:
    return "  ".join(f"{up(v):7s}" for v in values.value).rstrip()


def detection_threshold(
    fit: ThrustFit,
    *,
    false_alarm: float = 0.0027,
    power: float = 0.95,
    sided: int = 2,
    noise_scale: float = 1.0,
    noise_dof: int | None | Literal["fit"] = "fit",
    trials: int = 1,
) -> DetectionThreshold:
    """Smallest thrust that a test on this arc would find; see the module for the definition.

    Parameters
    ----------
    fit : ThrustFit
        A fit with thrust components; the estimate in it is not used.
    false_alarm, power : float
        Probability to declare a thrust where there is none / where it is as large as the threshold.
    sided : int
        1 or 2, for the tests of one component.
    noise_scale : float
        Factor on every sigma, for instance sqrt(chi2 / dof).
    noise_dof : int or None, or "fit"
        Degrees of freedom that the errors rest on if they were estimated from the residuals: t and
        F tests. "fit": what the fit says of its own errors. None: they are known.
    trials : int
        Number of thrust laws tried; the false-alarm rate holds for all of them together.

    Raises
    ------
    LimitError
        If the fit has no thrust or cannot separate it, or an argument is out of range.
    """
    information = thrust_information(fit)
    if noise_dof == "fit":
        noise_dof = information.noise_dof
    if not (np.isfinite(noise_scale) and noise_scale > 0.0):
        raise LimitError(f"The noise scale must be positive and finite; {noise_scale!r} was given.")
    if trials < 1:
        raise LimitError(f"The number of laws tried must be at least 1; {trials!r} was given.")
    if not 0.0 < false_alarm < 1.0:
        raise LimitError(
            f"The false-alarm rate must lie between 0 and 1, for instance 0.0027; {false_alarm!r} "
            "was given."
        )
    each = float(-np.expm1(np.log1p(-false_alarm) / trials))
    k = information.k
    wide = 1.0 if noise_dof is None else information.noise_excess**0.5
    delta_one = wide * noncentrality(each, power, 1, sided=sided, noise_dof=noise_dof)
    delta_all = wide * noncentrality(each, power, k, noise_dof=noise_dof)
    held = np.diag(information.matrix) ** -0.5 * noise_scale
    free = np.diag(information.covariance) ** 0.5 * noise_scale
    values = information.eigenvalues
    reach = delta_all * noise_scale
    largest = float(values[-1])
    if k == 1:
        mean = largest**-0.5
    elif k == 2:
        mean = 2.0 / np.pi * float(elliprf(0.0, values[0] / largest, 1.0)) * largest**-0.5
    else:
        mean = float(elliprf(values[0] / largest, values[1] / largest, 1.0)) * largest**-0.5
    return DetectionThreshold(
        false_alarm=false_alarm,
        power=power,
        false_alarm_per_trial=each,
        trials=trials,
        sided=sided,
        significance_sigma=sigma_of_chance(each),
        held=delta_one * held * AU_D2,
        free=delta_one * free * AU_D2,
        direction_free=delta_all * held * AU_D2,
        worst=reach * float(values[0]) ** -0.5 * AU_D2,
        best=reach * largest**-0.5 * AU_D2,
        worst_direction=information.eigenvectors[:, 0].copy(),
        best_direction=information.eigenvectors[:, -1].copy(),
        isotropic_mean=reach * mean * AU_D2,
        delta_one=delta_one,
        delta_all=delta_all,
        noise_scale=float(noise_scale),
        noise_dof=noise_dof,
        information=information,
    )
