"""Sublimation energy balance: the largest flux an ice can give at a distance, and g(r) computed.

May import: constants, errors, and from its own room outgassing.

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
from dataclasses import dataclass
from typing import Any, Literal

import astropy.units as u
import numpy as np
from astropy.units import Quantity

from ngbound.constants import BOLTZMANN_J_K, SOLAR_CONSTANT_W_M2, STEFAN_BOLTZMANN_W_M2_K4
from ngbound.errors import CaseError, MassError

from .outgassing import AVOGADRO, Outgassing, molecule_mass_kg

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
    """Area of exposed ice that a rate needs at least, and the share of a sphere's surface."""

    ice: str
    r_au: float
    area: Quantity
    fraction: float | None
    diameter: Quantity | None

    def __str__(self) -> str:
        text = f"{self.ice} at {self.r_au:g} au: at least {self.area.to_value(u.km**2):.3g} km2 lit"
        if self.fraction is not None and self.diameter is not None:
            text += (
                f", {100 * self.fraction:.3g} % of the surface of a sphere of "
                f"{self.diameter.to_value(u.km):.3g} km"
            )
            if self.fraction > 1:
                text += " (more than the whole sphere: the ice must also leave from grains)"
        return text

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description."""
        return {
            "ice": self.ice,
            "r_au": self.r_au,
            "area_m2": float(self.area.to_value(u.m**2)),
            "active_fraction": self.fraction,
            "diameter_m": None if self.diameter is None else float(self.diameter.to_value(u.m)),
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
    return ActiveArea(ice, r_au, area * u.m**2, fraction, diameter)


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
    outgassing: Outgassing, *, diameter: Quantity | None = None, geometry: Geometry = "sphere"
) -> tuple[ActiveArea, ...]:
    """`active_area` of every emission of a budget whose species is an ice known here."""
    return tuple(
        active_area(
            e.rate.median / (molecule_mass_kg(e.species) if e.rate_in_kg else 1.0),
            e.species,
            e.at_au,
            diameter=diameter,
            geometry=geometry,
        )
        for e in outgassing.emissions
        if e.species in ICES
    )
