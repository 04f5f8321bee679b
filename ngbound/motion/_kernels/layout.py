"""Layout of the arrays the kernels read, and the numbers of a kernel's status.

``Perturbers`` mirrors ``ngbound.sky.ChebyshevTable``; ``Push`` holds a thrust law and its
parameters; ``Physics`` the switches of the force model. Times are days of TDB past J2000.0, lengths
au.
"""

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

OK = 0
INSIDE_BODY = 1
STEP_UNDERFLOW = 2
OUTSIDE_TABLE = 3
TOO_MANY_STEPS = 4
NOT_CONVERGED = 5

RELATIVITY_NONE = 0
RELATIVITY_SUN = 1
RELATIVITY_ALL = 2

LAW_FORM = 0
LAW_TABLE = 1

WINDOW_NONE = 0
WINDOW_DATE = 1
WINDOW_DISTANCE = 2

PARAMETERS = ("x", "y", "z", "vx", "vy", "vz", "A1", "A2", "A3", "lag", "exponent", "srp")
N_PARAMETERS = len(PARAMETERS)


class Perturbers(NamedTuple):
    """Chebyshev series of the Sun (row 0), planets, Moon and asteroids, and their GM."""

    coef: Floats
    offset: Ints
    n_coef: Ints
    n_interval: Ints
    first_d: Floats
    width_d: Floats
    parent: Ints
    gm: Floats
    radius: Floats


class Push(NamedTuple):
    """A thrust law with its amounts.

    ``par`` of the form law: alpha, r0, m, n, k. ``table`` of a tabulated law: rows ln r, ln g and
    the slope d ln g/d ln r at the knots (3, m). ``window`` is (kind, from, to) in days past J2000.0
    or in au.
    """

    law: int
    par: Floats
    table: Floats
    a: Floats
    lag_d: float
    window_kind: int
    window_from: float
    window_to: float
    srp: float


class Physics(NamedTuple):
    """Switches of the force model.

    ``sun_j2`` is J2 R^2 of the Sun in au^2 (0: off), ``sun_pole`` its rotation axis in ICRF,
    ``sun_spin`` the Sun's angular momentum per unit mass in au^2/d (0: off), ``earth_j2``
    J2 R^2 of the Earth in au^2.
    """

    relativity: int
    c_au_d: float
    sun_j2: float
    sun_pole: Floats
    sun_spin: float
    earth_j2: float
    earth_row: int
