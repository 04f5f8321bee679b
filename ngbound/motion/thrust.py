"""Thrust laws g(r), their components, lag and activity window; imports numpy, astropy.units,
constants, errors, kernels.

A law is a frozen dataclass with a name and the kernel arrays it stands for; `LAWS` lists the named
ones. Adding an analytic law is one entry there (or one small class), and, if it is not of the form
below, one branch in the kernel ``law_of_distance``. The form is

    g(r) = alpha (r / r0)^-m [1 + (r / r0)^n]^-k,   g(1 au) = 1.
"""

import difflib
import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import astropy.units as u
import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.interpolate import PchipInterpolator

from ngbound.constants import AU_M, C_KM_S, DAY_S, SOLAR_CONSTANT_W_M2
from ngbound.errors import CaseError
from ngbound.motion._kernels.laws import law_of_distance
from ngbound.motion._kernels.layout import (
    LAW_FORM,
    LAW_TABLE,
    WINDOW_DATE,
    WINDOW_DISTANCE,
    WINDOW_NONE,
    Push,
)
from ngbound.sky import parse_time

COMPONENTS = "RTN"
MAX_LAG_D = 1000.0
"""Lags of published comet orbits reach some hundred days; beyond this a case holds a slip."""
AU_PER_D2 = u.au / u.day**2


@dataclass(frozen=True)
class FormLaw:
    """A law of the form in the module's docstring.

    Attributes
    ----------
    name : str
    alpha, r0_au, m, n, k : float
        Constants; r0 in au.
    source : str
    """

    name: str
    alpha: float
    r0_au: float
    m: float
    n: float
    k: float
    source: str

    kind = LAW_FORM

    def arrays(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Kernel arrays (par, table)."""
        return np.array([self.alpha, self.r0_au, self.m, self.n, self.k]), np.zeros((3, 1))

    def to_dict(self) -> dict[str, Any]:
        """Name, constants and source."""
        return {
            "name": self.name,
            "alpha": self.alpha,
            "r0_au": self.r0_au,
            "m": self.m,
            "n": self.n,
            "k": self.k,
            "source": self.source,
        }


@dataclass(frozen=True)
class TableLaw:
    """A law given by the user as a table of r (au) and g, normalised by the user.

    Between the knots ln g is a monotone cubic of ln r (F. N. Fritsch & R. E. Carlson 1980, SIAM J.
    Numer. Anal. 17, 238); outside them the power law of the end slope continues it.
    """

    r_au: tuple[float, ...]
    g: tuple[float, ...]
    name: str = "table"
    source: str = "given by the user"

    kind = LAW_TABLE

    def __post_init__(self) -> None:
        r = np.asarray(self.r_au, dtype=float)
        g = np.asarray(self.g, dtype=float)
        if r.size < 2 or r.size != g.size:
            raise CaseError(
                f"A thrust table needs at least two pairs of r and g; it has "
                f"{r.size} r and {g.size} g.",
                r_au=self.r_au,
                g=self.g,
            )
        if not (np.all(np.isfinite(r)) and np.all(np.diff(r) > 0) and r[0] > 0):
            raise CaseError(
                "The r of a thrust table must be positive au in ascending order.", r_au=self.r_au
            )
        if not (np.all(np.isfinite(g)) and np.all(g > 0)):
            raise CaseError(
                "The g of a thrust table must be positive; end the thrust by a window.", g=self.g
            )

    def arrays(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Kernel arrays (par, table)."""
        x = np.log(np.asarray(self.r_au, dtype=float))
        y = np.log(np.asarray(self.g, dtype=float))
        slope = PchipInterpolator(x, y).derivative()(x)
        return np.zeros(5), np.ascontiguousarray([x, y, slope])

    def to_dict(self) -> dict[str, Any]:
        """Name and knots."""
        return {
            "name": self.name,
            "r_au": list(self.r_au),
            "g": list(self.g),
            "source": self.source,
        }


def _normalised(name: str, r0_au: float, m: float, n: float, k: float, source: str) -> FormLaw:
    """A form law with alpha such that g(1 au) = 1."""
    alpha = r0_au**-m * (1.0 + r0_au**-n) ** k
    return FormLaw(name, alpha, r0_au, m, n, k, source)


def power_law(exponent: float) -> FormLaw:
    """g = (r / 1 au)^-exponent."""
    if not np.isfinite(exponent):
        raise CaseError(f"The exponent of a power law must be a finite number; got {exponent!r}.")
    return FormLaw(f"power-{exponent:g}", 1.0, 1.0, float(exponent), 0.0, 0.0, "power law")


WATER_ICE = FormLaw(
    "water-ice",
    0.1112620426,
    2.808,
    2.15,
    5.093,
    4.6142,
    "B. G. Marsden, Z. Sekanina & D. K. Yeomans 1973, AJ 78, 211",
)
INVERSE_SQUARE = FormLaw("inverse-square", 1.0, 1.0, 2.0, 0.0, 0.0, "power law")
CO_5AU = _normalised(
    "co-5au",
    5.0,
    2.0,
    3.0,
    2.6,
    "form of Marsden et al. 1973 with r0 = 5 au, m = 2, n = 3, k = 2.6 (CO-driven)",
)
CO_10AU = _normalised(
    "co-10au",
    10.0,
    2.0,
    3.0,
    2.6,
    "M. Krolikowska 2004, A&A 427, 1117: r0 = 10 au, m = 2, n = 3, k = 2.6 (constants from memory)",
)

LAWS: dict[str, FormLaw] = {
    law.name: law
    for law in (
        INVERSE_SQUARE,
        WATER_ICE,
        CO_5AU,
        CO_10AU,
        power_law(0.0),
        power_law(1.0),
        power_law(3.0),
    )
}
"""The named laws."""


def find_law(law: "str | FormLaw | TableLaw", exponent: float | None = None) -> FormLaw | TableLaw:
    """The law of a name; "power" takes its exponent beside it."""
    if not isinstance(law, str):
        return law
    if law == "power":
        if exponent is None:
            raise CaseError('The law "power" needs an exponent, for instance exponent = 2.5.')
        return power_law(exponent)
    if law in LAWS:
        return LAWS[law]
    near = difflib.get_close_matches(law, [*LAWS, "power"], n=2, cutoff=0.4)
    hint = f" Did you mean {' or '.join(near)}?" if near else ""
    raise CaseError(
        f"The thrust law '{law}' is unknown.{hint} Known laws: {', '.join([*LAWS, 'power'])}; "
        "or give a table of r and g.",
        law=law,
    )


@dataclass(frozen=True)
class Window:
    """When a thrust acts: between two dates or two heliocentric distances.

    Attributes
    ----------
    by : {"date", "distance"}
    start, end : float
        Days of TDB past J2000.0, or au.
    """

    by: str
    start: float
    end: float

    def __post_init__(self) -> None:
        if self.by not in ("date", "distance"):
            raise CaseError(
                f"An activity window goes by 'date' or by 'distance', not by '{self.by}'."
            )
        if not self.start < self.end:
            raise CaseError(
                f"The activity window from {self.start} to {self.end} is empty; swap its ends."
            )

    @classmethod
    def between_dates(cls, start: Any, end: Any, scale: str = "tdb") -> "Window":
        """A window between two dates (text, astropy Time, or days past J2000.0)."""
        return cls("date", float(parse_time(start, scale)), float(parse_time(end, scale)))

    @classmethod
    def between_distances(cls, start_au: float, end_au: float) -> "Window":
        """A window between two heliocentric distances in au."""
        return cls("distance", start_au, end_au)

    def to_dict(self) -> dict[str, Any]:
        """by, start, end."""
        return {"by": self.by, "start": self.start, "end": self.end}


def _per_d2(value: Any) -> NDArray[np.float64]:
    if isinstance(value, u.Quantity):
        return np.atleast_1d(np.asarray(value.to_value(AU_PER_D2), dtype=float))
    parts = [
        v.to_value(AU_PER_D2) if isinstance(v, u.Quantity) else v for v in np.atleast_1d(value)
    ]
    return np.asarray(parts, dtype=float)


@dataclass(frozen=True, eq=False)
class Thrust:
    """A non-gravitational acceleration g(r) (A1 R + A2 T + A3 N).

    Parameters
    ----------
    law : str or FormLaw or TableLaw
        One of `LAWS`, "power" with an ``exponent``, or a law object.
    components : str
        Which of R (radial), T (transverse), N (normal) a fit may estimate, e.g. "RTN" or "R".
    A : sequence of 3, float au/d2 or Quantity
        Amounts A1, A2, A3 at 1 au.
    lag : float (d) or Quantity
        Delay DT: g is taken at t - DT.
    window : Window, optional
        When the thrust acts; always, by default.
    exponent : float, optional
        Exponent of the law "power".
    area_to_mass : float (m2/kg) or Quantity
        Solar radiation pressure on a perfect absorber, beside the thrust.

    Raises
    ------
    CaseError
        An unknown law or component.
    """

    law: FormLaw | TableLaw
    components: str = "RTN"
    A: u.Quantity = field(default_factory=lambda: np.zeros(3) * AU_PER_D2)
    lag: u.Quantity = 0.0 * u.day
    window: Window | None = None
    area_to_mass: u.Quantity = 0.0 * u.m**2 / u.kg

    def __init__(
        self,
        law: "str | FormLaw | TableLaw" = "inverse-square",
        components: str = "RTN",
        A: Sequence[float] | u.Quantity = (0.0, 0.0, 0.0),
        lag: float | u.Quantity = 0.0,
        window: Window | None = None,
        exponent: float | None = None,
        area_to_mass: float | u.Quantity = 0.0,
    ) -> None:
        wanted = "".join(c for c in COMPONENTS if c in str(components).upper())
        if not wanted or len(wanted) != len(str(components)):
            raise CaseError(
                f"The thrust components '{components}' are not a choice of R, T and N; "
                "write for instance "
                'components = "RTN" or "R".',
                components=components,
            )
        amounts = _per_d2(A)
        if amounts.shape != (3,) or not np.all(np.isfinite(amounts)):
            raise CaseError(f"A thrust has three amounts A1, A2, A3 in au/d2; got {A!r}.", A=A)
        lag_d = float(u.Quantity(lag, u.day).value)
        if not abs(lag_d) <= MAX_LAG_D:
            raise CaseError(
                f"The lag of a thrust must lie within {MAX_LAG_D:g} days of zero; got {lag!r}.",
                lag=lag,
            )
        per_mass = float(u.Quantity(area_to_mass, u.m**2 / u.kg).value)
        if not np.isfinite(per_mass):
            raise CaseError(
                f"The area to mass must be a finite number of m2/kg; got {area_to_mass!r}.",
                area_to_mass=area_to_mass,
            )
        object.__setattr__(self, "law", find_law(law, exponent))
        object.__setattr__(self, "components", wanted)
        object.__setattr__(self, "A", amounts * AU_PER_D2)
        object.__setattr__(self, "lag", u.Quantity(lag, u.day))
        object.__setattr__(self, "window", window)
        object.__setattr__(self, "area_to_mass", u.Quantity(area_to_mass, u.m**2 / u.kg))

    @property
    def amounts_au_d2(self) -> NDArray[np.float64]:
        """A1, A2, A3 in au/d2, (3,)."""
        return np.asarray(self.A.to_value(AU_PER_D2), dtype=float)

    def with_amounts(self, a_au_d2: ArrayLike) -> "Thrust":
        """The same law with other amounts (3,) in au/d2."""
        return Thrust(
            self.law,
            self.components,
            np.asarray(a_au_d2, dtype=float),
            self.lag,
            self.window,
            None,
            self.area_to_mass,
        )

    def with_components(self, components: str) -> "Thrust":
        """The same law with other components free."""
        return Thrust(self.law, components, self.A, self.lag, self.window, None, self.area_to_mass)

    def g(self, r_au: ArrayLike) -> NDArray[np.float64]:
        """g(r), dimensionless, for distances in au; the window is not applied."""
        push = self.push()
        r = np.atleast_1d(np.asarray(r_au, dtype=float))
        out = np.empty(3)
        values = np.empty(r.shape)
        for i, value in np.ndenumerate(r):
            law_of_distance(push, value, out)
            values[i] = out[0]
        return values if np.ndim(r_au) else values[0]

    def push(self) -> Push:
        """The kernel's form of this thrust."""
        par, table = self.law.arrays()
        kind, start, end = WINDOW_NONE, -math.inf, math.inf
        if self.window is not None:
            kind = WINDOW_DATE if self.window.by == "date" else WINDOW_DISTANCE
            start, end = self.window.start, self.window.end
        return Push(
            self.law.kind,
            par,
            table,
            self.amounts_au_d2.copy(),
            float(self.lag.to_value(u.day)),
            kind,
            start,
            end,
            radiation_pressure_au_d2(float(self.area_to_mass.to_value(u.m**2 / u.kg))),
        )

    def to_dict(self) -> dict[str, Any]:
        """Plain values: law, components, A in au/d2, lag in days, window, area to mass."""
        return {
            "law": self.law.to_dict(),
            "components": self.components,
            "A_au_d2": self.amounts_au_d2.tolist(),
            "lag_d": float(self.lag.to_value(u.day)),
            "window": None if self.window is None else self.window.to_dict(),
            "area_to_mass_m2_kg": float(self.area_to_mass.to_value(u.m**2 / u.kg)),
        }

    def __str__(self) -> str:
        a = ", ".join(f"A{i + 1} = {v:.4g}" for i, v in enumerate(self.amounts_au_d2))
        lag = float(self.lag.to_value(u.day))
        return f"{self.law.name} thrust ({self.components}): {a} au/d2" + (
            f", lag {lag:g} d" if lag else ""
        )


def radiation_pressure_au_d2(area_to_mass_m2_kg: float) -> float:
    """Acceleration at 1 au (au/d2) of a perfect absorber: S/c times area over mass."""
    pressure = SOLAR_CONSTANT_W_M2 / (C_KM_S * 1e3)
    return pressure * area_to_mass_m2_kg / (AU_M / DAY_S**2)


NO_PUSH = Thrust()
"""Gravity alone, in the kernels' form."""

__all__ = [
    "AU_PER_D2",
    "COMPONENTS",
    "LAWS",
    "NO_PUSH",
    "FormLaw",
    "TableLaw",
    "Thrust",
    "Window",
    "find_law",
    "power_law",
    "radiation_pressure_au_d2",
]
