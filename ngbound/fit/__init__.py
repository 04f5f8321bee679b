"""WHICH ORBIT EXPLAINS THE ARC; imports constants, errors, arc, sky and motion.

With r the observed minus computed directions (RA times cos dec, and dec, in the tangent plane at
each observed place), C their covariance and D the partials of the computed directions, the
correction of the parameters is

    d = F^-1 D' C^-1 r,    F = D' C^-1 D,

repeated until nothing moves; F^-1 is the covariance of the parameters (C. F. Gauss 1809).
chi2 = r' C^-1 r. Errors that many observations share are part of C, so that they are marginalised
exactly. Hypotheses with and without thrust go through the same steps, the outlier rule and the
scales of the stations included.
"""

from ngbound.fit.diagnostics import Diagnostics, diagnose
from ngbound.fit.error_variants import ErrorVariant, Variation, error_variants, vary
from ngbound.fit.first_orbit import Preliminary, preliminary_orbits
from ngbound.fit.minima import MinimaScan, Minimum, scan_minima
from ngbound.fit.noise_scale import StationScale, rescaled, student_factor, tail_probability
from ngbound.fit.outliers import chi2_of_records, judge_in_turns
from ngbound.fit.significance import sigma_of_chance, significance_sigma
from ngbound.fit.solution import Comparison, Fit, compare_fits, fit_orbit

__all__ = [
    "Comparison",
    "Diagnostics",
    "ErrorVariant",
    "Fit",
    "MinimaScan",
    "Minimum",
    "Preliminary",
    "StationScale",
    "Variation",
    "chi2_of_records",
    "compare_fits",
    "diagnose",
    "error_variants",
    "fit_orbit",
    "judge_in_turns",
    "preliminary_orbits",
    "rescaled",
    "scan_minima",
    "sigma_of_chance",
    "significance_sigma",
    "student_factor",
    "tail_probability",
    "vary",
]
