"""What thrust would have shown: information, thresholds, posterior, limits, verdict.

May import constants, errors and the rooms arc, sky, motion and fit; of a fit it needs only what
``ThrustFit`` lists.

Mathematics
-----------
Residuals are whitened, so that chi2 is their sum of squares. theta = (x, A): orbit and k <= 3
thrust components (au/d2), F its normal matrix.

Information: F_A = F_AA - F_Ax F_xx^-1 F_xA, with sigma_held(n) = (n' F_A n)^-1/2 and
sigma_free(n) = (n' F_A^-1 n)^1/2 (``information``).

Detection threshold (V. L. Kashyap et al. 2010, ApJ 719, 900), a property of arc, noise and test:
for one component A_det = delta sigma with Phi(delta - z) + Phi(-delta - z) = 1 - beta, z = z_(1 -
alpha/2); for k together A_det(n) = sqrt(lambda / n' F_A n) with P[chi2_k(lambda) > chi2_k(1 -
alpha)] = 1 - beta (``threshold``).

Posterior: exp(-chi2(theta) / 2) times a named prior, sampled in coordinates where that prior is
flat (``posterior``, ``priors``). In linear theory a prior in |A| alone is a mixture of Gaussians,
which gives both the proposals of the sampler and limits without sampling (``linear_posterior``). A
free noise scale with prior ds / s is integrated out: exp(-chi2 / 2) becomes chi2^(-N/2), N
residual components.

Upper limits, what the data allow: posterior quantiles, the unified interval for a thrust that only
pushes outward (``unified_interval``; G. J. Feldman & R. D. Cousins 1998, Phys. Rev. D 57, 3873)
and the profile likelihood (``upper_limit``). With no signal and an isotropic F_A the 95 % radius
of |A| is 2.7955 sigma under a prior flat in three components, and 1.96 sigma under one uniform in
|A|.

Injection (``injection``, ``refit``): thrusts put into arcs that have the records and errors of the
real one, refitted with exact residuals with and without thrust; what is counted proves threshold
and limits on that very arc. ``growth`` cuts the arc, ``forecast`` lengthens it, ``degeneracy`` says
what in the orbit imitates a thrust, ``laws`` whether the arc can tell thrust laws apart.

Anchor: N observations uniform over T, constant acceleration across the sightline at distance D:
sigma_A -> sigma_theta D sqrt(720 / N) / T^2 (R. L. Gluckstern 1963, NIM 24, 381).
"""

from ngbound.limits.degeneracy import Degeneracy, orbit_degeneracy
from ngbound.limits.fit_protocol import GaussianFit, ThrustFit
from ngbound.limits.forecast import Forecast, PlannedNight, forecast
from ngbound.limits.growth import ThresholdGrowth, threshold_growth
from ngbound.limits.information import AU_D2, ThrustInformation, thrust_information
from ngbound.limits.injection import (
    PowerCurve,
    Rate,
    Recovery,
    inject_and_recover,
    power_curve,
)
from ngbound.limits.laws import LawComparison, compare_laws
from ngbound.limits.likelihood import LIKELIHOODS
from ngbound.limits.posterior import Posterior, sample_posterior
from ngbound.limits.priors import PRIOR_NAMES, ThrustPrior, thrust_prior
from ngbound.limits.refit import ExactRefit, LinearRefit, Refits, Refitter
from ngbound.limits.threshold import (
    DetectionThreshold,
    DirectionMap,
    detection_threshold,
    noncentrality,
)
from ngbound.limits.unified_interval import flat_prior_limit, unified_interval
from ngbound.limits.upper_limit import UpperLimit, profile_limit, upper_limit
from ngbound.limits.verdict import Verdict, verdict

__all__ = [
    "AU_D2",
    "LIKELIHOODS",
    "PRIOR_NAMES",
    "Degeneracy",
    "DetectionThreshold",
    "DirectionMap",
    "ExactRefit",
    "Forecast",
    "GaussianFit",
    "LawComparison",
    "LinearRefit",
    "PlannedNight",
    "Posterior",
    "PowerCurve",
    "Rate",
    "Recovery",
    "Refits",
    "Refitter",
    "ThresholdGrowth",
    "ThrustFit",
    "ThrustInformation",
    "ThrustPrior",
    "UpperLimit",
    "Verdict",
    "compare_laws",
    "detection_threshold",
    "flat_prior_limit",
    "forecast",
    "inject_and_recover",
    "noncentrality",
    "orbit_degeneracy",
    "power_curve",
    "profile_limit",
    "sample_posterior",
    "threshold_growth",
    "thrust_information",
    "thrust_prior",
    "unified_interval",
    "upper_limit",
    "verdict",
]
