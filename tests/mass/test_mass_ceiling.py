"""The mass that a detected thrust and all that can push allow at most."""

import json
import math

import numpy as np
import pytest

from ngbound.constants import AU_D2_TO_M_S2
from ngbound.errors import CaseError, MassError
from ngbound.mass import Outgassing, Photometry, mass_bound, mass_ceiling

WATER_KG = 2.99150e-26
NO_SPREAD = {"speed": "0.8 km/s", "collimation": 0.5}


def detected(n=40_000):
    """|A| log-normal about 1e-8 au/d2, 10 per cent."""
    return 1e-8 * np.exp(0.1 * np.random.default_rng(2).standard_normal(n))


def test_an_upper_limit_on_the_rate_and_a_detection_bound_the_mass_from_above():
    # F held at its limit, |A| at its 5 % quantile: exact for a log-normal
    budget = Outgassing("< 1e27 1/s", **NO_SPREAD, at=1.3)
    found = mass_ceiling(detected(), budget, g_at=0.6, density=500.0)
    force_n = 0.5 * 1e27 * WATER_KG * 800
    exact = force_n / (1e-8 * math.exp(-0.1 * 1.644854) * AU_D2_TO_M_S2 * 0.6)
    assert found.mass.value == pytest.approx(exact, abs=5 * found.mass_error.value)
    assert found.diameter.value == pytest.approx((6 * exact / (math.pi * 500)) ** (1 / 3), rel=0.01)
    assert found.confidence == 0.95
    assert found.joint_confidence is None and "without one" in found.sentence()
    assert "held there: H2O < 1e27 molecules/s at 1.3 au" in found.sentence()
    assert "below" in found.sentence() and "above too" in found.sentence()
    json.dumps(found.to_dict(), allow_nan=False)


def test_the_confidence_of_a_quoted_limit_is_shared():
    budget = Outgassing({"limit": 1e27, "confidence": 0.99}, **NO_SPREAD, at=1.0)
    found = mass_ceiling(detected(), budget, g_at=1.0)
    assert found.joint_confidence == pytest.approx(0.94)
    assert "at least 94 %" in found.sentence()


def test_it_lies_above_the_lower_bound_and_limits_count_in_it_alone():
    measured = Outgassing("(1.0 +- 0.1)e27 1/s", **NO_SPREAD, at=1.0)
    both = Outgassing({"H2O": "(1.0 +- 0.1)e27 1/s", "CO": "< 1e27 1/s"}, **NO_SPREAD, at=1.0)
    low = [mass_bound(detected(), b, g_at=1.0).mass.value for b in (measured, both)]
    high = [mass_ceiling(detected(), b, g_at=1.0).mass.value for b in (measured, both)]
    assert low[1] == pytest.approx(low[0])
    assert low[0] < high[0]
    assert high[1] / high[0] == pytest.approx(1 + 28.0101 / 18.01528, rel=0.1)


@pytest.mark.parametrize(("magnitude", "verdict"), [(20.5, "agree"), (19.0, "clash")])
def test_a_size_too_large_for_the_mass_clashes(magnitude, verdict):
    # 6e10 kg; p = 0.04: H = 20.5 is 0.53 km, which may have 770 kg/m3; H = 19 is 1.05 km and 98
    budget = Outgassing("(1.0 +- 0.1)e27 1/s", **NO_SPREAD, at=1.0)
    found = mass_ceiling(
        detected(),
        budget,
        g_at=1.0,
        density="(500 +- 100) kg/m3",
        photometry=Photometry(magnitude, 0.04),
    )
    assert found.verdict == verdict
    assert f": {verdict}." in found.sentence()


def test_refusals():
    budget = Outgassing("< 1e27 1/s", **NO_SPREAD, at=1.0)
    with pytest.raises(MassError, match="posterior of a detected thrust"):
        mass_ceiling(1e-8, budget, g_at=1.0)
    with pytest.raises(CaseError, match=r"0\.95"):
        mass_ceiling(detected(), budget, g_at=1.0, confidence=95)
    # with the thrust only limited too, nothing is excluded from below, and it is said
    with pytest.raises(MassError, match="no mass is excluded from below"):
        mass_bound(1e-8, budget, g_at=1.0)
