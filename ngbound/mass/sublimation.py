"""Sublimation energy balance: the largest flux an ice can give at a distance, and g(r) computed.

May import: constants, errors, rounding, and from its own room distributions, notebook, outgassing
and size.

A facet lit at zenith angle z satisfies

    (1 - A) S r^-2 cos z = eps sigma T^4 + Z(T) L(T),   Z = P(T) / sqrt(2 pi m k T)

with A the Bond albedo, Z the free-sublimation flux into vacuum (Hertz-Knudsen), P the vapour
pressure and L the latent heat of one molecule. Nothing is conducted inwards and there is no mantle,
so Z is the most an exposed, pure ice can give. Where no latent heat of its own is named, L is that
of the pressure curve itself: L = k T^2 dlnP/dT (Clausius-Clapeyron, ideal vapour).
Equation as in G. J. Fanale & J. R. Salvail 1984, Icarus 60, 476.
"""

import difflib
import math
import warnings
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any, Literal

import astropy.units as u
import numpy as np
from astropy.units import Quantity

from ngbound.constants import BOLTZMANN_J_K, SOLAR_CONSTANT_W_M2, STEFAN_BOLTZMANN_W_M2_K4
from ngbound.errors import CaseError, MassError, NgboundWarning
from ngbound.rounding import length_text, percent, rounded

from .distributions import AtMost
from .notebook import as_html
from .outgassing import AVOGADRO, Emission, Outgassing, SpeedLaw, molecule_mass_kg
from .size import KnownSize, MeasuredDiameter

Geometry = Literal["subsolar", "sphere", "isothermal"]
GEOMETRIES: tuple[str, ...] = ("subsolar", "sphere", "isothermal")

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(96)
_MU, _MU_WEIGHT = 0.5 * (_NODES + 1), 0.25 * _WEIGHTS
"""Cosines of the zenith angle and their weights: the mean over 4 pi R^2 is 1/2 int Z(mu) dmu."""

_BAR_PA = 1e5
_TORR_PA = 101325.0 / 760.0
_CAL_J = 4.1868
"""International-table calorie, the one that gives 6.953e-24 J per molecule and cal/mol."""


@dataclass(frozen=True)
class Ice:
    """Vapour pressure and latent heat of one ice.

    ln(P / unit) = sum_i c_i T^-i with the c_i of a branch; latent_cal_mol, if given, are the
    coefficients of L = sum_i c_i T^i in cal/mol, else L follows from the pressure curve.
    ``branches`` holds (upper temperature K, coefficients); range_k is where the curve is meant to
    hold: below it the pressure is taken as zero, above it no balance is sought.
    """

    name: str
    species: str
    unit_pa: float
    branches: tuple[tuple[float, tuple[float, ...]], ...]
    range_k: tuple[float, float]
    source: str
    status: str
    latent_cal_mol: tuple[float, ...] | None = None

    def _by_branch(self, temperature_k: np.ndarray, slope: bool) -> np.ndarray:
        """ln P, or its negative slope against 1/T, of the branch each temperature (n,) lies in."""
        inverse = 1.0 / temperature_k
        value = np.zeros_like(inverse)
        lower = 0.0
        for top, coefficients in self.branches:
            c = -np.polynomial.polynomial.polyder(coefficients) if slope else coefficients
            inside = (temperature_k > lower) & (temperature_k <= top)
            value = np.where(inside, np.polynomial.polynomial.polyval(inverse, c), value)
            lower = top
        return value

    def pressure_pa(self, temperature_k: np.ndarray) -> np.ndarray:
        """Saturation vapour pressure in Pa at temperatures (n,) K."""
        t = np.atleast_1d(np.asarray(temperature_k, dtype=float))
        warm = np.clip(t, *self.range_k)
        pressure = self.unit_pa * np.exp(self._by_branch(warm, slope=False))
        return np.where(t < self.range_k[0], 0.0, pressure)

    def latent_heat_j(self, temperature_k: np.ndarray) -> np.ndarray:
        """Latent heat of sublimation in J per molecule at temperatures (n,) K."""
        t = np.atleast_1d(np.asarray(temperature_k, dtype=float))
        if self.latent_cal_mol is not None:
            return np.polynomial.polynomial.polyval(t, self.latent_cal_mol) * _CAL_J / AVOGADRO
        return BOLTZMANN_J_K * self._by_branch(t, slope=True)

    def flux_per_m2_s(self, temperature_k: np.ndarray) -> np.ndarray:
        """Free-sublimation flux, molecules m^-2 s^-1, at temperatures (n,) K (Hertz-Knudsen)."""
        t = np.atleast_1d(np.asarray(temperature_k, dtype=float))
        mass_kg = molecule_mass_kg(self.species)
        return self.pressure_pa(t) / np.sqrt(2 * math.pi * mass_kg * BOLTZMANN_J_K * t)


_LN10 = math.log(10.0)
_READ2 = "as given in public codes that cite it"

ICES = {
    ice.name: ice
    for ice in (
        Ice(
            "H2O",
            "H2O",
            1.0,
            ((math.inf, (math.log(3.56e12), -6141.667)),),
            (20.0, 273.16),
            "G. J. Fanale & J. R. Salvail 1984, Icarus 60, 476",
            _READ2,
        ),
        Ice(
            "CO2",
            "CO2",
            _BAR_PA,
            (
                (194.7, (14.76, -2571.0, -7.781e4, 4.325e6, -1.207e8, 1.350e9)),
                (math.inf, (18.61, -4154.0, 1.041e5)),
            ),
            (40.0, 216.58),
            "N. Fray & B. Schmitt 2009, Planet. Space Sci. 57, 2053",
            _READ2,
        ),
        Ice(
            "CO",
            "CO",
            _BAR_PA,
            (
                (61.55, (10.43, -721.3, -1.074e4, 2.341e5, -2.392e6, 9.478e6)),
                (math.inf, (10.25, -748.2, -5843.0, 3.939e4)),
            ),
            (14.0, 68.1),
            "N. Fray & B. Schmitt 2009, Planet. Space Sci. 57, 2053",
            _READ2,
        ),
        Ice(
            "H2O (Marti-Mauersberger)",
            "H2O",
            1.0,
            ((math.inf, (12.537 * _LN10, -2663.5 * _LN10)),),
            (20.0, 273.16),
            "J. Marti & K. Mauersberger 1993, GRL 20, 363; latent heat 12420 - 4.8 T cal/mol from "
            "the same public code",
            _READ2,
            (12420.0, -4.8),
        ),
        Ice(
            "CO2 (Brown-Ziegler)",
            "CO2",
            _TORR_PA,
            (
                (
                    math.inf,
                    (
                        21.3807649,
                        -2570.647,
                        -7.78129489e4,
                        4.32506256e6,
                        -1.20671368e8,
                        1.34966306e9,
                    ),
                ),
            ),
            (40.0, 194.7),
            "G. N. Brown & W. T. Ziegler 1980, Adv. Cryog. Eng. 25, 662; natural logarithm",
            _READ2,
            (6269.0, 9.877, -0.130997, 6.2735e-4, -1.2699e-6),
        ),
        Ice(
            "CO (Brown-Ziegler)",
            "CO",
            _TORR_PA,
            (
                (
                    math.inf,
                    (18.0741183, -769.842078, -12148.7759, 2.7350095e5, -2.9087467e6, 1.20319418e7),
                ),
            ),
            (14.0, 61.55),
            "G. N. Brown & W. T. Ziegler 1980, Adv. Cryog. Eng. 25, 662; natural logarithm",
            _READ2,
            (1893.0, 7.331, 0.01096, -0.0060658, 1.166e-4, -7.8957e-7),
        ),
    )
}
"""Ices by name; "H2O", "CO2" and "CO" are the defaults, the others are alternatives."""


@dataclass(frozen=True)
class Sublimation:
    """Flux of one ice at one distance.

    ``flux`` (m^-2 s^-1) is per unit of lit facet for "subsolar", and per unit of the whole surface
    4 pi R^2 for "sphere" (non-rotating, each facet in its own balance) and "isothermal" (fast
    rotation and perfect mixing). ``temperature`` (K) is that of the hottest facet.
    """

    ice: str
    r_au: float
    geometry: str
    bond_albedo: float
    emissivity: float
    flux: Quantity
    temperature: Quantity

    def __str__(self) -> str:
        return (
            f"{self.ice} at {self.r_au:g} au, {self.geometry}: {self.flux.value:.4g} molecules "
            f"m^-2 s^-1, {self.temperature.value:.2f} K"
        )

    def _repr_html_(self) -> str:
        return as_html([f"{self}."])

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description."""
        return {
            "ice": self.ice,
            "r_au": self.r_au,
            "geometry": self.geometry,
            "bond_albedo": self.bond_albedo,
            "emissivity": self.emissivity,
            "flux_per_m2_s": float(self.flux.value),
            "temperature_k": float(self.temperature.value),
            "source": ICES[self.ice].source,
            "status": ICES[self.ice].status,
        }


def ice_named(name: str) -> Ice:
    """The `Ice` of that name; CaseError with a suggestion for an unknown one."""
    if name not in ICES:
        near = difflib.get_close_matches(name, ICES, 1, 0.3)
        hint = f" Did you mean {near[0]!r}?" if near else ""
        raise CaseError(f"Ice {name!r} is not known; known: {', '.join(ICES)}.{hint}", ice=name)
    return ICES[name]


def sublimation(
    ice: str,
    r_au: float,
    *,
    geometry: Geometry = "subsolar",
    bond_albedo: float = 0.04,
    emissivity: float = 0.95,
    solar_constant_w_m2: float = SOLAR_CONSTANT_W_M2,
) -> Sublimation:
    """Largest possible sublimation flux of a pure, exposed ice at a heliocentric distance.

    Parameters
    ----------
    ice : str
        A key of `ICES`.
    r_au : float
        Heliocentric distance, au; from 0.01 on (closer, the curves are not meant for the heat).
    geometry : "subsolar", "sphere" or "isothermal"
    bond_albedo, emissivity : float
        0 <= albedo < 1, 0 < emissivity <= 1.

    Raises
    ------
    CaseError
        An unknown ice or geometry, or a value outside its range.
    """
    found = ice_named(ice)
    if geometry not in GEOMETRIES:
        raise CaseError(f"geometry = {geometry!r} is not known; allowed: {', '.join(GEOMETRIES)}.")
    for name, value, ok, allowed in (
        ("r_au", r_au, math.isfinite(r_au) and r_au >= 0.01, "0.01 au or more"),
        ("bond_albedo", bond_albedo, 0 <= bond_albedo < 1, "from 0 to below 1"),
        ("emissivity", emissivity, 0 < emissivity <= 1, "above 0 and at most 1"),
    ):
        if not ok:
            raise CaseError(f"{name} = {value!r} must be {allowed}.", value=value)
    flux, hottest = _fluxes(
        found, np.array([r_au]), geometry, bond_albedo, emissivity, solar_constant_w_m2
    )
    return Sublimation(
        ice,
        r_au,
        geometry,
        bond_albedo,
        emissivity,
        float(flux[0]) / (u.m**2 * u.s),
        float(hottest[0]) * u.K,
    )


def _fluxes(
    ice: Ice,
    r_au: np.ndarray,
    geometry: str,
    bond_albedo: float,
    emissivity: float,
    solar_constant_w_m2: float,
) -> tuple[np.ndarray, np.ndarray]:
    """Fluxes (n,) m^-2 s^-1 and temperatures (n,) K of the hottest facet at distances (n,)."""
    absorbed = (1 - bond_albedo) * solar_constant_w_m2 / r_au**2
    if geometry == "isothermal":
        t = _temperature(ice, absorbed / 4, emissivity)
        return ice.flux_per_m2_s(t), t
    subsolar = _temperature(ice, absorbed, emissivity)
    if geometry == "subsolar":
        return ice.flux_per_m2_s(subsolar), subsolar
    t = _temperature(ice, np.outer(absorbed, _MU).ravel(), emissivity)
    flux = ice.flux_per_m2_s(t).reshape(len(r_au), len(_MU)) @ _MU_WEIGHT
    return flux, subsolar


def _temperature(ice: Ice, absorbed_w_m2: np.ndarray, emissivity: float) -> np.ndarray:
    """Facet temperatures (n,) K by bisection between nothing and the black-body value."""
    high = (absorbed_w_m2 / (emissivity * STEFAN_BOLTZMANN_W_M2_K4)) ** 0.25
    low = np.minimum(high, ice.range_k[0])
    top = np.full(1, ice.range_k[1])
    most = float(
        (
            emissivity * STEFAN_BOLTZMANN_W_M2_K4 * top**4
            + ice.flux_per_m2_s(top) * ice.latent_heat_j(top)
        )[0]
    )
    if most < absorbed_w_m2.max() and high.max() > ice.range_k[1]:
        raise MassError(
            f"{ice.name} ice would have to be hotter than {ice.range_k[1]:g} K, where its vapour "
            "pressure curve ends; take a larger distance from the Sun."
        )
    high = np.minimum(high, ice.range_k[1])
    for _ in range(60):
        middle = 0.5 * (low + high)
        lost = emissivity * STEFAN_BOLTZMANN_W_M2_K4 * middle**4 + ice.flux_per_m2_s(
            middle
        ) * ice.latent_heat_j(middle)
        too_hot = lost > absorbed_w_m2
        high = np.where(too_hot, middle, high)
        low = np.where(too_hot, low, middle)
    return 0.5 * (low + high)


@dataclass(frozen=True)
class ActiveArea:
    """Area of exposed ice that a rate needs at least, and the share of a sphere's surface.

    Attributes
    ----------
    ice : str
    r_au : float
    area : Quantity
        Median where the rate is uncertain.
    fraction : float or None
        Of 4 pi R^2, median; above 1 more than the whole sphere.
    diameter : Quantity or None
        Median.
    is_limit : bool
        The rate was an upper limit, so that area and fraction are.
    area_low, area_high, fraction_low, fraction_high : Quantity, float or None
        16th and 84th percentile, from the errors of rate and diameter; None where both are fixed.
    too_large : float or None
        Probability that the fraction is above 1; None where rate and diameter are fixed.
    geometry : str
        Of `sublimation`.
    bond_albedo, emissivity : float
    """

    ice: str
    r_au: float
    area: Quantity
    fraction: float | None
    diameter: Quantity | None
    is_limit: bool = False
    area_low: Quantity | None = None
    area_high: Quantity | None = None
    fraction_low: float | None = None
    fraction_high: float | None = None
    too_large: float | None = None
    geometry: Geometry = "sphere"
    bond_albedo: float = 0.04
    emissivity: float = 0.95
    size_name: str = ""

    @property
    def assumption(self) -> str:
        """What the flux rests on."""
        facing = sublimation(
            self.ice, self.r_au, bond_albedo=self.bond_albedo, emissivity=self.emissivity
        )
        whole = sublimation(
            self.ice,
            self.r_au,
            geometry=self.geometry,
            bond_albedo=self.bond_albedo,
            emissivity=self.emissivity,
        )
        spread = {
            "sphere": "spread evenly over a sphere that does not rotate",
            "isothermal": "spread evenly over a sphere of one temperature",
            "subsolar": "facing the Sun",
        }
        least = rounded(100 * float((whole.flux / facing.flux).value), 2)
        patch = f"; a patch that always faces the Sun needs {least} % of it"
        return (
            f"active surface: pure {self.ice} ice in its own energy balance (Bond albedo "
            f"{self.bond_albedo:g}, emissivity {self.emissivity:g}; vapour pressure "
            f"{ICES[self.ice].source}), {spread[self.geometry]}"
            f"{'' if self.geometry == 'subsolar' else patch}"
        )

    @property
    def flagged(self) -> bool:
        """Whether the whole sphere would not be enough."""
        return self.fraction is not None and self.fraction > 1 and not self.is_limit

    def sentence(self) -> str:
        """The active fraction in words."""
        least = "less than" if self.is_limit else "at least"
        way = "up" if self.is_limit else ""
        area = rounded(float(self.area.to_value(u.km**2)), 2, outward=way)
        text = f"{self.ice} at {self.r_au:g} au needs {least} {area} km2 of exposed ice"
        if self.area_low is not None and self.area_high is not None:
            edges = (float(q.to_value(u.km**2)) for q in (self.area_low, self.area_high))
            text += f" ({' to '.join(rounded(x, 2) for x in edges)})"
        if self.fraction is not None and self.diameter is not None:
            text += f", {rounded(100 * self.fraction, 2, outward=way)} %"
            if self.fraction_low is not None and self.fraction_high is not None:
                low, high = (rounded(100 * x, 2) for x in (self.fraction_low, self.fraction_high))
                text += f" ({low} to {high} %)"
            size = length_text(float(self.diameter.to_value(u.m)), outward="")
            name = f"the {self.size_name}, " if self.size_name else ""
            text += f" of the surface of a sphere of {name}{size}"
            if self.flagged:
                text += " (more than the whole sphere: the ice must also leave from grains)"
            elif self.too_large is not None and self.too_large > 0.05 and not self.is_limit:
                text += f" (above the whole sphere with probability {percent(self.too_large)})"
        return text + "."

    def __str__(self) -> str:
        return self.sentence()

    def _repr_html_(self) -> str:
        return as_html([self.sentence()], (), [f"assumed: {self.assumption}"])

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description."""

        def square_metres(area: Quantity | None) -> float | None:
            return None if area is None else float(area.to_value(u.m**2))

        return {
            "ice": self.ice,
            "r_au": self.r_au,
            "area_m2": square_metres(self.area),
            "area_low_m2": square_metres(self.area_low),
            "area_high_m2": square_metres(self.area_high),
            "active_fraction": self.fraction,
            "active_fraction_low": self.fraction_low,
            "active_fraction_high": self.fraction_high,
            "above_whole_sphere": self.too_large,
            "flagged": self.flagged,
            "is_limit": self.is_limit,
            "geometry": self.geometry,
            "diameter_m": None if self.diameter is None else float(self.diameter.to_value(u.m)),
            "source": ICES[self.ice].source,
            "assumption": self.assumption,
            "sentence": self.sentence(),
        }


def active_area(
    rate_per_s: float,
    ice: str,
    r_au: float,
    *,
    diameter: Quantity | None = None,
    geometry: Geometry = "sphere",
    bond_albedo: float = 0.04,
    emissivity: float = 0.95,
) -> ActiveArea:
    """Smallest area of exposed ice that gives ``rate_per_s`` molecules/s at ``r_au``.

    With "subsolar" the area faces the Sun; with "sphere" and "isothermal" it is spread over the
    whole surface. With a ``diameter`` (Quantity) the active fraction of 4 pi R^2 follows.
    """
    if not (math.isfinite(rate_per_s) and rate_per_s > 0):
        raise CaseError(f"rate_per_s = {rate_per_s!r} must be positive, in molecules/s.")
    found = sublimation(
        ice, r_au, geometry=geometry, bond_albedo=bond_albedo, emissivity=emissivity
    )
    per_m2 = float(found.flux.value)
    if per_m2 < 1e-3 * rate_per_s / 1e18:
        raise MassError(
            f"{ice} gives only {per_m2:.2g} molecules m^-2 s^-1 at {r_au:g} au: no body in the "
            f"Solar System has the surface for {rate_per_s:.3g} molecules/s; take a more volatile "
            "ice or another distance."
        )
    area = rate_per_s / per_m2
    fraction = None
    if diameter is not None:
        fraction = float(area / (math.pi * diameter.to_value(u.m) ** 2))
    return ActiveArea(
        ice,
        r_au,
        area * u.m**2,
        fraction,
        diameter,
        geometry=geometry,
        bond_albedo=bond_albedo,
        emissivity=emissivity,
    )


def sublimation_law(
    ice: str,
    r_au: np.ndarray,
    *,
    geometry: Geometry = "sphere",
    bond_albedo: float = 0.04,
    emissivity: float = 0.95,
) -> np.ndarray:
    """g(r) computed: flux at ``r_au`` (n,) over the flux at 1 au, for a tabulated thrust law.

    The outflow speed is taken as the same everywhere, as the published g(r) do.
    """
    r = np.atleast_1d(np.asarray(r_au, dtype=float))
    for edge in (r.min(), r.max()):
        sublimation(
            ice, float(edge), geometry=geometry, bond_albedo=bond_albedo, emissivity=emissivity
        )
    flux, _ = _fluxes(
        ICES[ice], np.append(r, 1.0), geometry, bond_albedo, emissivity, SOLAR_CONSTANT_W_M2
    )
    return flux[:-1] / flux[-1]


def largest_rate(
    ice: str,
    r_au: float,
    diameter: Quantity,
    *,
    geometry: Geometry = "sphere",
    bond_albedo: float = 0.04,
    emissivity: float = 0.95,
) -> float:
    """Most molecules/s that a sphere wholly covered with the ice can give at ``r_au``."""
    found = sublimation(
        ice, r_au, geometry=geometry, bond_albedo=bond_albedo, emissivity=emissivity
    )
    if geometry == "subsolar":
        raise CaseError(
            "geometry = 'subsolar' is the flux of one facet; for a whole sphere take 'sphere' or "
            "'isothermal'."
        )
    return float(found.flux.value) * math.pi * float(diameter.to_value(u.m)) ** 2


def active_areas(
    outgassing: Outgassing,
    *,
    diameter: Quantity | KnownSize | None = None,
    geometry: Geometry = "sphere",
    bond_albedo: float = 0.04,
    emissivity: float = 0.95,
    seed: int | np.random.Generator = 1,
    n_draws: int = 20_000,
) -> tuple[ActiveArea, ...]:
    """`active_area` of every emission of a budget whose species is an ice known here.

    Errors of the rate and of the diameter (a Quantity, or what is known of the size) are carried
    through; a rate that is an upper limit is taken at its limit.
    """
    rng = np.random.default_rng(seed)
    size = MeasuredDiameter(diameter) if isinstance(diameter, Quantity) else diameter
    diameters = None if size is None else size.diameter_m(rng, n_draws)
    found = []
    for emission in outgassing.emissions:
        if emission.species not in ICES:
            continue
        is_limit = isinstance(emission.rate, AtMost)
        rates = (
            np.full(n_draws, emission.rate.limit)
            if isinstance(emission.rate, AtMost)
            else emission.rate.draw(rng, n_draws)
        )
        if emission.rate_in_kg:
            rates = rates / molecule_mass_kg(emission.species)
        one = active_area(
            float(np.median(rates)),
            emission.species,
            emission.at_au,
            diameter=None if diameters is None else float(np.median(diameters)) * u.m,
            geometry=geometry,
            bond_albedo=bond_albedo,
            emissivity=emissivity,
        )
        areas = rates * (one.area / float(np.median(rates)))
        fractions = None if diameters is None else areas.value / (math.pi * diameters**2)
        if size is not None:
            one = replace(one, size_name=size.name)
        found.append(_with_spread(one, areas, fractions, is_limit))
    return tuple(found)


def _with_spread(
    one: ActiveArea, areas: Quantity, fractions: np.ndarray | None, is_limit: bool
) -> ActiveArea:
    """The same area with the spread of its draws, where they vary at all."""
    more: dict[str, Any] = {"is_limit": is_limit}
    if float(np.ptp(areas.value)) > 0:
        more["area_low"], more["area_high"] = np.quantile(areas, [0.15866, 0.84134])
    if fractions is not None and float(np.ptp(fractions)) > 0:
        low, middle, high = (float(x) for x in np.quantile(fractions, [0.15866, 0.5, 0.84134]))
        more |= {"fraction_low": low, "fraction": middle, "fraction_high": high}
        more["too_large"] = float(np.mean(fractions > 1))
    return replace(one, **more)


@dataclass(frozen=True)
class LawDeparture:
    """How a thrust law falls over the arc, beside an exposed ice in its energy balance.

    ``ratio``: the force by the law over that of the ice at ``r_au``, both the same at ``at_au``,
    where the rate was measured. The ice is a sphere between two extremes, every facet in its own
    balance and all at one temperature; the ratio is 1 between them and counts from the nearer one
    outside. The distance is the one on the arc at which they differ most, among those where either
    gives a tenth of its greatest force.
    """

    species: str
    at_au: float
    r_au: float
    ratio: float

    @property
    def factor(self) -> float:
        """By how much they differ, at least 1."""
        return max(self.ratio, 1.0 / self.ratio) if self.ratio > 0 else math.inf

    def sentence(self) -> str:
        """The departure in words."""
        if self.factor < 1.05:
            return (
                f"Over the arc the thrust law falls as {self.species} ice exposed to the Sun would"
            )
        side = "more" if self.ratio > 1 else "less"
        return (
            f"At {self.r_au:.3g} au the thrust law gives {self.factor:.2g} times {side} force than "
            f"{self.species} ice exposed to the Sun would, both set equal at {self.at_au:g} au, "
            "where the rate was measured"
        )

    def __str__(self) -> str:
        return f"{self.sentence()}."

    def _repr_html_(self) -> str:
        return as_html([str(self)])

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description."""
        return {**vars(self), "factor": self.factor, "sentence": str(self)}


SUSPICIOUS_FACTOR = 2.0
"""Beyond this factor a thrust law and the sublimation of the species are said to disagree."""


def law_departures(
    outgassing: Outgassing, g_at: Callable[[float], float], r_au: np.ndarray
) -> tuple[LawDeparture, ...]:
    """Does the thrust law fall over the arc as the species measured sublimate?

    Parameters
    ----------
    outgassing : Outgassing
        Species that are no ice known here are passed over.
    g_at : callable
        Thrust law g(r), r in au.
    r_au : (n,) array
        Heliocentric distances of the arc.

    Returns
    -------
    tuple of LawDeparture
        One a species and distance; a warning for each beyond a factor of 2.

    Notes
    -----
    The force of the ice is its mean flux over the sphere times the outflow speed, which falls as
    r^-0.5 by the default law and is constant where a speed was measured.
    """
    r = np.geomspace(float(np.min(r_au)), float(np.max(r_au)), 25)
    found = []
    for e in outgassing.emissions:
        if e.species in ICES:
            found.append(_departure(e, np.array([float(g_at(float(x))) for x in r]), g_at, r))
    unlike = [one for one in found if one.factor > SUSPICIOUS_FACTOR]
    for one in dict.fromkeys(unlike):
        warnings.warn(
            f"{one.sentence()}: the rate and the thrust law do not go together over this arc. "
            "Take a law that fits the species, or a rate near the distances that decide.",
            NgboundWarning,
            stacklevel=2,
        )
    return tuple(found)


def _departure(
    e: Emission, g: np.ndarray, g_at: Callable[[float], float], r: np.ndarray
) -> LawDeparture:
    exponent = e.speed.exponent if isinstance(e.speed, SpeedLaw) else 0.0
    all_r, own = np.append(r, e.at_au), float(g_at(e.at_au))
    if not own > 0:
        raise MassError(
            f"The thrust law is off at {e.at_au:g} au, where the {e.species} rate was measured."
        )
    geometries: tuple[Geometry, ...] = ("sphere", "isothermal")
    curves = []
    for geometry in geometries:
        force = sublimation_law(e.species, all_r, geometry=geometry) * all_r**-exponent
        curves.append(force[:-1] / force[-1])
    low, high = np.min(curves, axis=0), np.max(curves, axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        law = g / own
        ratio = np.where(law > high, law / high, np.where(law < low, law / low, 1.0))
        size = np.abs(np.log(ratio))
    matters = (law >= 0.1 * law.max()) | (high >= 0.1 * high.max())
    worst = int(np.nanargmax(np.where(matters, size, -1.0)))
    return LawDeparture(e.species, e.at_au, float(r[worst]), float(ratio[worst]))
