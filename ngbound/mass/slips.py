"""The usual slips of unit and factor in quoted numbers.

May import: constants, and from its own room outgassing.
"""

import math
from collections.abc import Collection
from dataclasses import dataclass

from scipy.special import ndtri

from ngbound.constants import AU_D2_TO_M_S2, AU_KM, AU_M, DAY_S

from .outgassing import AVOGADRO, DUST, molecule_mass_kg

Slip = tuple[float, str]
"""Quoted over right, and what went wrong."""

YEAR_D = 365.25
"""Days of a Julian year, as in a velocity change per year."""
_VOLUME = (8.0, "radius and diameter exchanged in the volume (factor 8)")
_PHOTOMETRIC = "radius and diameter exchanged in the photometric size"
UNIT_SLIPS: dict[str, tuple[Slip, ...]] = {
    "acceleration": (
        (AU_D2_TO_M_S2, "au/d2 and m/s2 exchanged"),
        (YEAR_D**2, "au/d2 and au/yr2 exchanged"),
        (100.0, "cm/s2 and m/s2 exchanged"),
        (1000.0, "km and m exchanged (factor 1000)"),
        (100.0 * AU_D2_TO_M_S2, "au/d2 and cm/s2 exchanged"),
        (AU_M, "au and m exchanged"),
        (AU_KM, "au and km exchanged"),
        (DAY_S, "days and seconds exchanged once"),
        (DAY_S**2, "days and seconds exchanged (squared)"),
    ),
    "rate": (
        (AVOGADRO, "moles and molecules exchanged"),
        (1000.0, "factor 1000"),
        (DAY_S, "per day and per second exchanged"),
    ),
    "mass_loss": (
        (1000.0, "g/s and kg/s exchanged (factor 1000)"),
        (DAY_S, "per day and per second exchanged"),
        (DAY_S / 1000.0, "t/d and kg/s exchanged"),
    ),
    "speed": (
        (1000.0, "km/s and m/s exchanged (factor 1000)"),
        (100.0, "cm/s and m/s exchanged"),
    ),
    "collimation": ((2.0, "a full beam (1) and half a beam (0.5) exchanged"),),
    "mass": ((1000.0, "g, kg or t exchanged (factor 1000)"), _VOLUME),
    "density": ((1000.0, "g/cm3 and kg/m3 exchanged (factor 1000)"), _VOLUME),
    "diameter": ((2.0, "radius and diameter exchanged"), (1000.0, "km and m exchanged")),
    "radius": ((2.0, "radius and diameter exchanged"), (1000.0, "km and m exchanged")),
    "force": ((1e5, "dyn and N exchanged"), (1000.0, "factor 1000")),
    "velocity_change": (
        (DAY_S, "per day and per second exchanged"),
        (YEAR_D, "per day and per year exchanged"),
        (24.0, "per day and per hour exchanged"),
        (1000.0, "km/s and m/s exchanged (factor 1000)"),
        (100.0, "cm/s and m/s exchanged"),
    ),
    "albedo": ((100.0, "per cent and fraction exchanged"), (4.0, _PHOTOMETRIC)),
    "absolute_magnitude": ((2.0, _PHOTOMETRIC),),
    "gravity_fraction": ((100.0, "per cent and fraction exchanged"),),
}
_SAME = {"acceleration_sigma": "acceleration", "local_acceleration": "acceleration"}
_PUSH = ("acceleration", "acceleration_sigma", "local_acceleration")
_GAS = ("rate", "mass_loss", "force")
_SIZE = {"diameter": -0.5, "radius": -0.5, "absolute_magnitude": 0.5, "albedo": -1.0}
"""Power of the albedo that each is off by if its square root is forgotten."""
_ICES = ("H2O", "CO2", "CO")
_SIGMAS = (1.0, 2.0, 3.0, 5.0)
"""Multiples of sigma that limits are quoted at."""
MATERIAL = math.log(1.1)
"""Slips smaller than this in ln are not looked for: they would not matter."""


@dataclass(frozen=True)
class Setting:
    """What the slips of some numbers depend on besides: distance in au, g there, confidence of the
    limit, species, albedo."""

    r_au: float | None = None
    g: float | None = None
    confidence: float | None = None
    species: str = DUST
    albedo: float | None = None


def usual_slips(
    name: str, collimation: float | None, setting: Setting, connected: Collection[str]
) -> list[Slip]:
    """Usual slips of one quantity, those of an exchange both ways round; the structural ones first.

    ``collimation`` is the quoted one, if any; ``connected`` names the relations the quantity is
    tested by.
    """
    both: list[Slip] = []
    one_way: list[Slip] = []
    if setting.g and name in (*_PUSH, "velocity_change"):
        both.append((setting.g, "value at the distance of the rate and value at 1 au exchanged"))
    if setting.g and name in _GAS:
        both.append((setting.g, "rate at its distance and rate at 1 au exchanged (wrong distance)"))
    if setting.r_au and name == "at":
        both.append((setting.r_au, "the numbers are those at 1 au"))
    if setting.r_au and name == "gravity_fraction":
        both.append((setting.r_au**2, "solar gravity at 1 au and at the distance exchanged"))
    if collimation and name in ("collimation", "mass", "acceleration", *_GAS):
        both.append((collimation, "the collimation was left out or applied twice"))
    if setting.confidence and name in _PUSH[:2] and "limit and sigma" in connected:
        two = float(ndtri(0.5 + setting.confidence / 2))
        one = float(ndtri(setting.confidence))
        if one > 0:
            both.append((one / two, "one-sided and two-sided limits exchanged"))
        level, sign = 100 * setting.confidence, 1 if name == "acceleration" else -1
        one_way += [
            ((k / two) ** sign, f"{k:g} sigma quoted as a limit of {level:.6g} %") for k in _SIGMAS
        ]
    if setting.species != DUST and name in _GAS[:2] and "molecular mass" in connected:
        own = molecule_mass_kg(setting.species)
        one_way += [
            (own / molecule_mass_kg(ice), f"molecules of {setting.species} given the mass of {ice}")
            for ice in _ICES
            if ice != setting.species
        ]
    if setting.albedo and name in _SIZE and "photometric size" in connected:
        left_out = "the square root of the albedo was left out"
        one_way.append((setting.albedo ** _SIZE[name], left_out))
    units = UNIT_SLIPS.get(_SAME.get(name, name), ())
    both += [s for s in units if s is not _VOLUME or "sphere" in connected]
    found: dict[float, Slip] = {}
    turned = [(1.0 / factor, words) for factor, words in both]
    for factor, words in [*(s for pair in zip(both, turned, strict=True) for s in pair), *one_way]:
        if abs(math.log(factor)) > MATERIAL:
            found.setdefault(round(math.log(factor), 6), (factor, words))
    return list(found.values())


def powers_of_ten(known: list[Slip]) -> list[Slip]:
    """Slips of a power of ten that has no name among ``known``."""
    tens = [(10.0**k, f"a slip of 10^{k:+d}") for k in (-9, -6, -3, -2, -1, 1, 2, 3, 6, 9)]
    return [t for t in tens if all(abs(math.log(t[0] / f)) > 1e-6 for f, _ in known)]
