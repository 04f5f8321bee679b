"""The usual slips of unit and factor in quoted numbers.

May import: constants, and from its own room outgassing.
"""

import math
from collections.abc import Collection
from dataclasses import dataclass

from scipy.special import ndtri

from ngbound.constants import AU_D2_TO_M_S2, AU_KM, AU_M, DAY_S

from .outgassing import AVOGADRO

Slip = tuple[float, str]
"""Quoted over right, and what went wrong."""

_VOLUME = (8.0, "radius and diameter exchanged in the volume (factor 8)")
UNIT_SLIPS: dict[str, tuple[Slip, ...]] = {
    "acceleration": (
        (AU_D2_TO_M_S2, "au/d2 and m/s2 exchanged"),
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
        (365.25, "per day and per year exchanged"),
        (1000.0, "km/s and m/s exchanged (factor 1000)"),
        (100.0, "cm/s and m/s exchanged"),
    ),
    "albedo": ((100.0, "per cent and fraction exchanged"),),
    "gravity_fraction": ((100.0, "per cent and fraction exchanged"),),
}
_SAME = {"acceleration_sigma": "acceleration", "local_acceleration": "acceleration"}
_PUSH = ("acceleration", "acceleration_sigma", "local_acceleration")
_GAS = ("rate", "mass_loss", "force")
MATERIAL = math.log(1.1)
"""Slips smaller than this in ln are not looked for: they would not matter."""


@dataclass(frozen=True)
class Setting:
    """What the slips of some numbers depend on besides: distance in au, g there, confidence of the
    limit."""

    r_au: float | None = None
    g: float | None = None
    confidence: float | None = None


def usual_slips(
    name: str, collimation: float | None, setting: Setting, connected: Collection[str]
) -> list[Slip]:
    """Usual slips of one quantity, both ways round; the structural ones first.

    ``collimation`` is the quoted one, if any; ``connected`` names the relations the quantity is
    tested by.
    """
    both: list[Slip] = []
    if setting.g and name in _PUSH:
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
    units = UNIT_SLIPS.get(_SAME.get(name, name), ())
    both += [s for s in units if s is not _VOLUME or "sphere" in connected]
    found: dict[float, Slip] = {}
    for factor, words in both:
        if abs(math.log(factor)) > MATERIAL:
            for one in (factor, 1.0 / factor):
                found.setdefault(round(math.log(one), 6), (one, words))
    return list(found.values())


def powers_of_ten(known: list[Slip]) -> list[Slip]:
    """Slips of a power of ten that has no name among ``known``."""
    tens = [(10.0**k, f"a slip of 10^{k:+d}") for k in (-9, -6, -3, -2, -1, 1, 2, 3, 6, 9)]
    return [t for t in tens if all(abs(math.log(t[0] / f)) > 1e-6 for f, _ in known)]
