"""Room mass: what mass a limit on the thrust demands.

May import: constants, errors, and the rooms arc, sky, motion, fit, limits through what they export.

A nucleus of mass M that loses molecules of mass m at the rate Q, with outflow speed v and a
collimation zeta (net momentum over that of one perfect beam), is pushed with

    F = zeta Q m v,        M A g(r_Q) = F        =>        M = zeta Q m v / (A g(r_Q)),

where r_Q is the heliocentric distance of the measurement of Q and A the thrust at g = 1
(B. G. Marsden, Z. Sekanina & D. K. Yeomans 1973, AJ 78, 211, for A and g; F. L. Whipple 1950,
ApJ 111, 375, for the momentum balance; both references from memory). Species are summed; several
distances of one species are averaged in ln(F/g) with inverse-variance weights, and a warning says
where they disagree with g by more than two standard deviations.

Posterior draws of A times independent draws of Q, v and zeta give draws of M. The posterior of A
reaches zero, so M has no upper bound: the quoted number is the (1 - C) quantile of M, with the
binomial error of the order statistics. With a quoted limit A_up instead of draws, A is held there;
then P(M > M_low) >= C + C_A - 1 (Bonferroni). Rates that are upper limits count as zero. Where the
thrust was detected its posterior keeps away from zero, and with every rate at its limit M has an
upper bound too (`mass_ceiling`).

    D = (6 M / (pi rho))^(1/3)                      size of a sphere of bulk density rho
    D_phot = 1329 km 10^(-H/5) / sqrt(p_V)          size from brightness
    rho needed = M / (pi/6 D_phot^3)                what would make the two agree
    D_det, M_det = the same with A_det for A        what this budget would have revealed
    Q_det = M A_det g(r) / (zeta m v)               the rate this arc would have revealed
    Q_full = pi D^2 Z(r)                            the most a sphere of ice can give (below)
    D_max : Q_det = Q_full                          beyond it the arc says nothing of outgassing

Variance of ln M is shared out by Sobol's first-order and total indices (M. J. W. Jansen 1999). As
ln D = (ln M - ln rho + const)/3, the density adds exactly its own variance.

Results are set beside one another (`reconcile`) and quoted thresholds recomputed (`audit`) with the
thrust information of each arc. Any acceleration a(t) moves the object by Phi(t) int Phi^-1 (0, a),
so chi2 is a quadratic of the thrust under every law, window and direction:

    chi2_i(A) = c_i - 2 b_i' A + A' F_i A       one arc, orbit projected out, own best fit = 0
    min_A sum_i chi2_i(A) ~ chi2_(sum k_i - k)   tension under one and the same thrust

Radiation pressure instead of gas: A_1 = (S/c) C_R (area/mass), so a radial limit bounds
C_R area/mass from above and rho D from below (3 C_R / (2 area-to-mass) for a sphere).
Sublimation: (1 - A) S cos z / r^2 = eps sigma T^4 + Z(T) L(T), Z = P / sqrt(2 pi m k T).
"""

from .arc_geometry import GeometryAudit, audit_geometry, sagitta_sigma
from .arithmetic import Change, NumberAudit, RelationTest, audit_numbers
from .audit import Audit, audit
from .distributions import (
    AtMost,
    Distribution,
    Fixed,
    LogNormal,
    LogUniform,
    Normal,
    SplitNormal,
    Triangular,
    Uniform,
    parse_distribution,
)
from .explanations import Explanation
from .mass_bound import InputShare, MassBound, bounds_by_distance, mass_bound, momentum_mass
from .mass_ceiling import MassCeiling, mass_ceiling
from .momentum_model import LawCheck
from .outgassing import (
    DEFAULT_COLLIMATION,
    DEFAULT_SPEED_LAW,
    SPEED_LAWS,
    BudgetDraws,
    Emission,
    Outgassing,
    SpeedLaw,
    mass_loss_rate,
    thermal_speed,
)
from .quoted import Geometry, QuotedPaper, QuotedResult, QuotedThreshold
from .radiation import AreaToMass, area_to_mass, radiation_acceleration, radiation_bound
from .reach import (
    DEFAULT_DIAMETERS_M,
    DEFAULT_SPECIES,
    Reach,
    ReachRow,
    RevealedRate,
    reach,
    revealed_rate,
)
from .reconcile import Reconciliation, reconcile
from .results import ThrustResult
from .size import (
    DEFAULT_ALBEDO,
    DEFAULT_DENSITY,
    KnownSize,
    MeasuredDiameter,
    Photometry,
    SizeCheck,
    bulk_density,
    photometric_diameter_m,
    sphere_diameter_m,
    sphere_mass_kg,
)
from .sublimation import (
    ICES,
    ActiveArea,
    Ice,
    LawDeparture,
    Sublimation,
    active_area,
    active_areas,
    largest_rate,
    law_departures,
    sublimation,
    sublimation_law,
)
from .threshold_readings import Reading, ThresholdAudit, audit_threshold
from .thrust_history import ArcResponse, History, Misfit, QuotedResponse, law_history

__all__ = [
    "ActiveArea",
    "ArcResponse",
    "AreaToMass",
    "AtMost",
    "Audit",
    "BudgetDraws",
    "Change",
    "DEFAULT_ALBEDO",
    "DEFAULT_COLLIMATION",
    "DEFAULT_DENSITY",
    "DEFAULT_DIAMETERS_M",
    "DEFAULT_SPECIES",
    "DEFAULT_SPEED_LAW",
    "Distribution",
    "Emission",
    "Explanation",
    "Fixed",
    "Geometry",
    "GeometryAudit",
    "History",
    "ICES",
    "Ice",
    "InputShare",
    "KnownSize",
    "LawCheck",
    "LawDeparture",
    "LogNormal",
    "LogUniform",
    "MassBound",
    "MassCeiling",
    "MeasuredDiameter",
    "Misfit",
    "Normal",
    "NumberAudit",
    "Outgassing",
    "Photometry",
    "QuotedPaper",
    "QuotedResponse",
    "QuotedResult",
    "QuotedThreshold",
    "Reach",
    "ReachRow",
    "Reading",
    "Reconciliation",
    "RelationTest",
    "RevealedRate",
    "SPEED_LAWS",
    "SizeCheck",
    "SpeedLaw",
    "SplitNormal",
    "Sublimation",
    "ThresholdAudit",
    "ThrustResult",
    "Triangular",
    "Uniform",
    "active_area",
    "active_areas",
    "area_to_mass",
    "audit",
    "audit_geometry",
    "audit_numbers",
    "audit_threshold",
    "bounds_by_distance",
    "bulk_density",
    "largest_rate",
    "law_departures",
    "law_history",
    "mass_bound",
    "mass_ceiling",
    "mass_loss_rate",
    "momentum_mass",
    "parse_distribution",
    "photometric_diameter_m",
    "radiation_acceleration",
    "radiation_bound",
    "reach",
    "reconcile",
    "revealed_rate",
    "sagitta_sigma",
    "sphere_diameter_m",
    "sphere_mass_kg",
    "sublimation",
    "sublimation_law",
    "thermal_speed",
]
