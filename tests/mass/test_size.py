"""Sizes of spheres, and the photometric diameter."""

import math

import numpy as np
import pytest

from ngbound.errors import CaseError
from ngbound.mass import (
    DEFAULT_ALBEDO,
    MeasuredDiameter,
    Photometry,
    photometric_diameter_m,
    sphere_diameter_m,
    sphere_mass_kg,
)


def test_mass_and_diameter_are_inverse():
    rho = np.array([200.0, 500.0, 800.0])
    assert sphere_diameter_m(sphere_mass_kg(1234.0, rho), rho) == pytest.approx([1234.0] * 3)


def test_photometric_diameter_scales_as_it_must():
    # five magnitudes are a factor ten in diameter; a quarter of the albedo is twice the diameter
    assert photometric_diameter_m(0.0, 1.0) == pytest.approx(1.329e6)
    assert photometric_diameter_m(20.0, 0.04) == pytest.approx(1.329e6 * 1e-4 / 0.2)


def test_default_albedo_and_draws():
    found = Photometry(18.0)
    assert found.albedo == DEFAULT_ALBEDO
    draws = found.diameter_m(np.random.default_rng(1), 50_000)
    low, high = (1.329e6 * 10**-3.6 / math.sqrt(p) for p in (0.06, 0.02))
    assert low <= draws.min() and draws.max() <= high


@pytest.mark.parametrize(
    ("arguments", "word"),
    [
        ((18.0, 0.0), "albedo"),
        ((18.0, 2.0), "albedo"),
        (("18 km",), "magnitude"),
        ((18.0, "0.1 kg"), "no unit"),
    ],
)
def test_refusals(arguments, word):
    with pytest.raises(CaseError, match=word):
        Photometry(*arguments)


def test_a_diameter_given_in_metres_or_kilometres():
    assert MeasuredDiameter(2000).diameter == MeasuredDiameter("2 km").diameter
    assert MeasuredDiameter("(2.0 +- 0.3) km").distribution.median == pytest.approx(2000.0)
    for spec, words in (("< 2 km", "only an upper limit"), ("2 kg", "m, km"), (1e9, "10000 km")):
        with pytest.raises(CaseError, match=words):
            MeasuredDiameter(spec)


def test_the_photometric_diameter_as_a_distribution():
    fixed = Photometry(17.4, 0.04)
    assert fixed.distribution.median == pytest.approx(photometric_diameter_m(17.4, 0.04))
    # H normal: ln D has the width 0.2 ln(10) sigma_H
    spread = Photometry("17.4 +- 0.3", 0.04).distribution
    low, high = spread.ppf(np.array([0.15866, 0.84134]))
    assert math.log(high / low) == pytest.approx(2 * 0.2 * math.log(10) * 0.3, rel=0.01)


@pytest.mark.parametrize("make", [lambda: Photometry("< 18"), lambda: Photometry(18, "< 0.06")])
def test_a_limit_is_no_brightness(make):
    with pytest.raises(CaseError, match="only an upper limit"):
        make()
