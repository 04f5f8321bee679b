"""The force model: which bodies pull, and which relativity; imports numpy, constants, errors, sky
and the kernels.

The equation of motion stands in the room's docstring. `ForceModel` holds the choices,
`ForceModel.perturbers` cuts the ephemeris tables that the kernels read.
"""

import math
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np

from ngbound.constants import AU_KM, C_AU_D, DAY_S
from ngbound.errors import CaseError
from ngbound.motion._kernels.layout import (
    RELATIVITY_ALL,
    RELATIVITY_NONE,
    RELATIVITY_SUN,
    Perturbers,
    Physics,
)
from ngbound.sky import load_ephemeris

RELATIVITY = {"none": RELATIVITY_NONE, "sun": RELATIVITY_SUN, "all": RELATIVITY_ALL}

BODY_RADIUS_KM = {
    "sun": 695700.0,
    "mercury": 2439.7,
    "venus": 6051.8,
    "earth": 6371.0,
    "moon": 1737.4,
    "mars": 3389.5,
    "jupiter": 69911.0,
    "saturn": 58232.0,
    "uranus": 25362.0,
    "neptune": 24622.0,
    "pluto": 1188.3,
}
"""Mean radii in km below which an orbit counts as a collision: nominal solar radius of IAU 2015
Resolution B3;
planets from B. A. Archinal et al. 2018, Celest. Mech. Dyn. Astr. 130, 22 (values from memory)."""

SUN_J2 = 2.1961391516529825e-07
"""Dynamical flattening of the Sun: comment block of DE440 (J2SUN)."""
SUN_RADIUS_KM = 696000.0
"""Radius that goes with the Sun's J2: comment block of DE440 (ASUN)."""
SUN_POLE_RA_DEG = 286.13
SUN_POLE_DEC_DEG = 63.87
"""Rotation axis of the Sun in ICRF: B. A. Archinal et al. 2018, Celest. Mech. Dyn. Astr. 130, 22.
"""
SUN_SPIN_KG_M2_S = 1.90e41
"""Angular momentum of the Sun: F. P. Pijpers 1998, MNRAS 297, L76 (190.0e39 kg m2/s)."""
SUN_MASS_KG = 1.98841e30
"""Nominal GM over CODATA 2018 G."""
EARTH_J2 = 1.08262539e-3
EARTH_RADIUS_KM = 6378.1366
"""Earth's J2: comment block of DE440 (J2E); its radius: IERS Conventions 2010, table 1.1. The pole
is taken along the ICRF z axis (precession moves it by 0.004 rad in 40 years)."""


@dataclass(frozen=True)
class ForceModel:
    """Choices of the force model.

    Parameters
    ----------
    asteroids : bool
        Whether the 16 massive asteroids of sb441-n16 pull (1900-2100 only).
    exclude : tuple of str
        Names of perturbers left out, for instance because the object is one of them.
    relativity : {"sun", "all", "none"}
        The Sun's first post-Newtonian term (default), the full point-mass equations, or Newton.
    sun_j2, frame_dragging : bool
        The Sun's quadrupole and Lense-Thirring terms.
    earth_j2 : bool
        The Earth's quadrupole within 0.02 au of it.
    eps : float
        Step control: size of the last term of the acceleration's polynomial over the acceleration.
        1e-8 keeps a main-belt year to a millimetre and twenty years to two centimetres; 5e-6 keeps
        a year to some centimetres.
    """

    asteroids: bool = True
    exclude: tuple[str, ...] = ()
    relativity: str = "sun"
    sun_j2: bool = False
    frame_dragging: bool = False
    earth_j2: bool = True
    eps: float = 1e-8

    def __post_init__(self) -> None:
        if isinstance(self.exclude, str):
            object.__setattr__(self, "exclude", (self.exclude,))
        if self.relativity not in RELATIVITY:
            raise CaseError(
                f"The relativity model '{self.relativity}' is unknown; choose one of "
                f"{', '.join(RELATIVITY)}.",
                value=self.relativity,
            )
        if not 0.0 < self.eps < 1.0:
            raise CaseError(f"The step control eps = {self.eps} must lie between 0 and 1.")

    def perturbers(self, start_d: float, end_d: float) -> tuple[Perturbers, Physics]:
        """Kernel tables that cover the span (days of TDB past J2000.0), and the switches."""
        table = load_ephemeris().table(
            start_d, end_d, asteroids=self.asteroids, exclude=self.exclude
        )
        names = table.names
        radius = np.array([BODY_RADIUS_KM.get(name, 0.0) / AU_KM for name in names])
        tab = Perturbers(
            table.coef,
            table.offset,
            table.n_coef,
            table.n_interval,
            table.first_d,
            table.width_d,
            table.parent,
            table.gm_au3_d2,
            radius,
        )
        earth = names.index("earth") if "earth" in names else -1
        pole_ra = math.radians(SUN_POLE_RA_DEG)
        pole_dec = math.radians(SUN_POLE_DEC_DEG)
        pole = np.array(
            [
                math.cos(pole_dec) * math.cos(pole_ra),
                math.cos(pole_dec) * math.sin(pole_ra),
                math.sin(pole_dec),
            ]
        )
        spin = SUN_SPIN_KG_M2_S / SUN_MASS_KG * 1e-6 / AU_KM**2 * DAY_S
        physics = Physics(
            RELATIVITY[self.relativity],
            C_AU_D,
            SUN_J2 * (SUN_RADIUS_KM / AU_KM) ** 2 if self.sun_j2 else 0.0,
            pole,
            spin if self.frame_dragging else 0.0,
            EARTH_J2 * (EARTH_RADIUS_KM / AU_KM) ** 2 if self.earth_j2 else 0.0,
            earth,
        )
        return tab, physics

    def to_dict(self) -> dict[str, Any]:
        """The choices as plain values."""
        return asdict(self)
