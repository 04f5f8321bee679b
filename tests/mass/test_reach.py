"""The inverse question, which rate the arc would have revealed."""

import json
import math

import pytest

from ngbound.constants import AU_D2_TO_M_S2
from ngbound.errors import CaseError, MassError
from ngbound.mass import Outgassing, mass_bound, revealed_rate


def test_fixed_numbers_give_the_momentum_balance():
    found = revealed_rate(
        1e-8, "2 km", at=1.3, g_at_r=0.6, density=500.0, speed="0.8 km/s", collimation=0.5
    )
    mass_kg = math.pi / 6 * 500 * 2000**3
    rate = mass_kg * 1e-8 * AU_D2_TO_M_S2 * 0.6 / (0.5 * 800 * 2.99150e-26)
    assert found.rate.value == pytest.approx(rate, rel=1e-5)
    assert found.mass_loss.value == pytest.approx(rate * 2.99150e-26, rel=1e-5)


def test_it_is_the_inverse_of_the_mass_bound():
    options = {"speed": "0.8 km/s", "collimation": 0.5}
    found = revealed_rate(1e-8, 1000.0, at=1.3, g_at_r=0.6, density=500.0, **options)
    budget = Outgassing(found.rate, at=1.3, **options)
    bound = mass_bound(1e-8, budget, g_at=0.6, density=500.0)
    assert bound.diameter.value == pytest.approx(1000.0, rel=1e-9)


def test_ranges_widen_the_interval_and_the_text_says_so():
    found = revealed_rate(1e-8, "1 to 2 km", at=1.3, g_at_r=0.6, seed=3)
    assert found.rate_low < found.rate < found.rate_high
    assert "would have shown a thrust" in str(found)
    json.dumps(found.to_dict())


def test_refusals():
    with pytest.raises(MassError, match="positive"):
        revealed_rate(0.0, 1000.0, at=1.0)
    with pytest.raises(CaseError, match="upper limit"):
        revealed_rate(1e-8, "< 1 km", at=1.0)
    with pytest.raises(CaseError, match="m, km"):
        revealed_rate(1e-8, "1 kg", at=1.0)
