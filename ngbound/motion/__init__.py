"""HOW THE OBJECT MOVES; imports constants, errors, arc and sky.

Frame: barycentric ICRF, TDB, au and days. With the body massless,

    x'' = - sum_b GM_b (x - x_b) / |x - x_b|^3 + relativity + g(r) (A1 R + A2 T + A3 N),

b the Sun, the planets, the Moon, Pluto and 16 asteroids at their places in the ephemeris (never
integrated), R along the heliocentric position r, N along r x v (heliocentric), T = N x R.
Relativity is the Sun's first post-Newtonian term or the full equations of Einstein, Infeld &
Hoffmann. g is evaluated at t - DT where a lag DT is given (D. K. Yeomans & P. W. Chodas 1989, AJ
98, 1083).

One orbit is integrated adaptively (Gauss-Radau, order 15); its partials and its neighbours run on a
shared grid of the same nodes (`partials_along`, `Neighbourhood`; `Atlas` where the orbits that fit
reach further than one reference).
"""

from ngbound.motion._kernels.layout import PARAMETERS
from ngbound.motion.atlas import Atlas
from ngbound.motion.compilation import compile_notice
from ngbound.motion.echoes import Echoes
from ngbound.motion.elements import CometaryElements, KeplerianElements
from ngbound.motion.gravity import ForceModel
from ngbound.motion.kepler import propagate_two_body, two_body_sightlines, two_body_transition
from ngbound.motion.lambert import lambert, two_point_scan
from ngbound.motion.neighbours import Neighbourhood
from ngbound.motion.observables import (
    Records,
    Sight,
    design_matrix,
    light_margin_d,
    residuals,
    see,
)
from ngbound.motion.orbit import Orbit, Trajectory, predict, predict_for
from ngbound.motion.original import ReciprocalAxis, reciprocal_axis
from ngbound.motion.partials import Partials, partials_along
from ngbound.motion.propagate import Track, integrate_track
from ngbound.motion.radar import Echo, echo, echo_partials
from ngbound.motion.thrust import (
    LAWS,
    FormLaw,
    TableLaw,
    Thrust,
    Window,
    find_law,
    power_law,
    radiation_pressure_au_d2,
)

__all__ = [
    "LAWS",
    "PARAMETERS",
    "Atlas",
    "CometaryElements",
    "Echo",
    "Echoes",
    "ForceModel",
    "FormLaw",
    "KeplerianElements",
    "Neighbourhood",
    "Orbit",
    "Partials",
    "ReciprocalAxis",
    "Records",
    "Sight",
    "TableLaw",
    "Thrust",
    "Track",
    "Trajectory",
    "Window",
    "compile_notice",
    "design_matrix",
    "echo",
    "echo_partials",
    "find_law",
    "integrate_track",
    "lambert",
    "light_margin_d",
    "partials_along",
    "power_law",
    "predict",
    "predict_for",
    "propagate_two_body",
    "radiation_pressure_au_d2",
    "reciprocal_axis",
    "residuals",
    "see",
    "two_body_sightlines",
    "two_body_transition",
    "two_point_scan",
]
