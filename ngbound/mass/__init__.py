"""Room mass: what mass a limit on the thrust demands.

May import: constants, errors, and the rooms arc, sky, motion, fit, limits through what they export
(it needs only limits; the thrust law comes in as a function g(r) or its value).

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
then P(M > M_low) >= C + C_A - 1 (Bonferroni). Rates that are upper limits count as zero.

    D = (6 M / (pi rho))^(1/3)                      size of a sphere of bulk density rho
    D_phot = 1329 km 10^(-H/5) / sqrt(p_V)          size from brightness
    rho needed = M / (pi/6 D_phot^3)                what would make the two agree
    D_det, M_det = the same with A_det for A        what this budget would have revealed
    Q_det = M A_det g(r) / (zeta m v)               the rate this arc would have revealed

Variance of ln M is shared out by Sobol's first-order and total indices (M. J. W. Jansen 1999). As
ln D = (ln M - ln rho + const)/3, the density adds exactly its own variance.

Radiation pressure instead of gas: A_1 = (S/c) C_R (area/mass), so a radial limit bounds
C_R area/mass from above and rho D from below (3 C_R / (2 area-to-mass) for a sphere).
Sublimation: (1 - A) S cos z / r^2 = eps sigma T^4 + Z(T) L(T), Z = P / sqrt(2 pi m k T).
"""

from .audit import Change, NumberAudit, RelationTest, audit_numbers
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
from .mass_bound import (
    InputShare,
    LawCheck,
    MassBound,
    bounds_by_distance,
    mass_bound,
    momentum_mass,
)
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
from .radiation import AreaToMass, area_to_mass, radiation_acceleration
from .reach import RevealedRate, revealed_rate
from .size import (
    DEFAULT_ALBEDO,
    DEFAULT_DENSITY,
    Photometry,
    SizeCheck,
    photometric_diameter_m,
    sphere_diameter_m,
    sphere_mass_kg,
)
from .sublimation import (
    ICES,
    ActiveArea,
    Ice,
    Sublimation,
    active_area,
    active_areas,
    largest_rate,
    sublimation,
    sublimation_law,
)

__all__ = [
    "DEFAULT_ALBEDO",
    "DEFAULT_COLLIMATION",
    "DEFAULT_DENSITY",
    "DEFAULT_SPEED_LAW",
    "ICES",
    "SPEED_LAWS",
    "ActiveArea",
    "AreaToMass",
    "BudgetDraws",
    "Change",
    "NumberAudit",
    "RelationTest",
    "audit_numbers",
    "Distribution",
    "Emission",
    "Fixed",
    "Ice",
    "InputShare",
    "LawCheck",
    "LogNormal",
    "LogUniform",
    "MassBound",
    "Normal",
    "Outgassing",
    "Photometry",
    "RevealedRate",
    "SizeCheck",
    "SpeedLaw",
    "SplitNormal",
    "Sublimation",
    "Triangular",
    "Uniform",
    "AtMost",
    "active_area",
    "active_areas",
    "area_to_mass",
    "bounds_by_distance",
    "largest_rate",
    "mass_bound",
    "mass_loss_rate",
    "momentum_mass",
    "parse_distribution",
    "photometric_diameter_m",
    "radiation_acceleration",
    "revealed_rate",
    "sphere_diameter_m",
    "sphere_mass_kg",
    "sublimation",
    "sublimation_law",
    "thermal_speed",
]
