import json
from dataclasses import replace

import numpy as np
import pytest
from astropy import units as u
from scipy.stats import chi2

from ngbound.errors import LimitError
from ngbound.fit import Comparison
from ngbound.limits import detection_threshold, sample_posterior, upper_limit, verdict
from ngbound.rounding import up
from tests.limits.toy import ToyFit, isotropic

SIGMA = 1e-9


def pair(A: float) -> tuple[ToyFit, ToyFit]:
    """Gravity-only and thrust fit of one linear arc with the estimate A sigma along R."""
    push = isotropic(sigma=SIGMA, A=np.array([A, 0.0, 0.0]) * SIGMA, dof=400)
    null = isotropic(k=0, dof=403)
    return replace(null, chi2=push.chi2 + A**2), push


def judged(A: float, **choices):
    null, push = pair(A)
    return verdict(null, push, detection_threshold(push), **choices)


def test_quiet_arc_is_a_non_detection_with_threshold_and_limit_in_the_sentence():
    null, push = pair(1.0)
    limit = upper_limit(push)
    told = verdict(null, push, detection_threshold(push), limit)
    assert told.kind == "non-detection"
    assert told.test == "likelihood ratio"
    assert told.p_value == pytest.approx(chi2.sf(1.0, 3))
    assert f"|A| < {up(limit.magnitude.value)} au/d2" in told.sentence
    assert f"{up(told.threshold_worst.value)} on" in told.sentence
    assert "|A| =" not in told.sentence  # the norm is biased high where nothing is detected
    assert "A_R = (1.0 +- 1.0)e-9" in told.sentence
    json.dumps(told.to_dict())


def test_the_sentence_claims_no_direction_that_was_not_looked_for():
    assert "in any direction from" in judged(1.0).sentence
    push = isotropic(k=1, sigma=SIGMA, A=SIGMA, dof=400)
    null = replace(isotropic(k=0, dof=403), chi2=push.chi2 + 1.0)
    said = verdict(null, push, detection_threshold(push)).sentence
    axis = detection_threshold(push).components
    assert f"a thrust along {axis} alone is found" in said and "any direction" not in said


def test_strong_thrust_is_a_detection_and_only_above_the_false_alarm_rate():
    assert judged(8.0).kind == "detection"
    assert "|A| = (8.0 +- 1.0)e-9 au/d2 (A_R = " in judged(8.0).sentence
    edge = chi2.isf(0.0027, 3) ** 0.5
    assert judged(edge + 0.01).kind == "detection"
    assert judged(edge - 0.01).kind == "non-detection"


def test_significant_with_untrusted_noise_is_not_trustworthy():
    told = judged(15.0, noise_trusted=False, why="nights scatter 3 times more than they should")
    assert told.kind == "not trustworthy"
    assert "nights scatter 3 times more" in told.sentence
    assert not told.sentence.startswith("Detection")


def test_significant_under_one_error_model_only_is_not_trustworthy():
    told = judged(8.0, other_p_values={"catalogue offsets": 0.2, "uniform": 1e-9})
    assert told.kind == "not trustworthy"
    assert "vanishes under the error model catalogue offsets" in told.sentence
    assert "uniform" not in told.sentence
    assert judged(8.0, other_p_values={"uniform": 1e-9}).kind == "detection"


def test_implausibly_large_thrust_is_not_trustworthy():
    assert judged(50.0, largest_plausible=2e-8 * u.au / u.d**2).kind == "not trustworthy"


def test_blind_arc_cannot_tell():
    told = judged(1.0, largest_plausible=3e-9)
    assert told.kind == "arc cannot tell"
    assert "3.0e-9" in told.sentence
    assert judged(1.0, largest_plausible=3e-8).kind == "non-detection"
    assert judged(1.0, noise_trusted=False).kind == "arc cannot tell"


def test_fits_on_different_observations_use_the_wald_statistic():
    null, push = pair(2.0)
    threshold = detection_threshold(push)
    other = verdict(replace(null, dof=399), push, threshold)
    assert other.test == "Wald" and other.statistic == pytest.approx(4.0)
    assert verdict(None, push, threshold).test == "Wald"


def test_a_comparison_over_common_observations_is_the_test():
    null, push = pair(2.0)
    compared = Comparison(10.0, 3, 0.019, 0.0, 200, True)
    told = verdict(replace(null, dof=399), push, detection_threshold(push), comparison=compared)
    assert told.test == "likelihood ratio" and told.statistic == 10.0
    assert told.p_value == pytest.approx(chi2.sf(10.0, 3))


def test_noise_scale_of_the_threshold_enters_the_test():
    null, push = pair(6.0)
    told = verdict(null, push, detection_threshold(push, noise_scale=2.0, noise_dof=400))
    assert told.statistic == pytest.approx(9.0)
    assert told.p_value > chi2.sf(9.0, 3)
    assert told.kind == "non-detection"


@pytest.mark.parametrize("A", [36.0, 38.0, 40.0, 500.0])
def test_sigma_stays_finite_where_p_underflows(A):
    told = judged(A)
    assert told.significance_sigma == pytest.approx(A, rel=0.01)


def test_a_posterior_may_be_given_and_bad_choices_are_refused():
    null, push = pair(0.5)
    threshold = detection_threshold(push)
    post = sample_posterior(push, seed=1, target_ess=500)
    assert verdict(null, push, threshold, post).limit is not None
    with pytest.raises(LimitError, match="must be positive"):
        verdict(null, push, threshold, largest_plausible=-1.0)
    with pytest.raises(LimitError, match="same fit"):
        verdict(null, isotropic(k=2), threshold)
