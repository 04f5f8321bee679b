"""Distributions: quantiles, truncation, reading from text and tables, and the sentences of
errors."""

import math

import astropy.units as u
import numpy as np
import pytest

from ngbound.errors import CaseError
from ngbound.mass import (
    AtMost,
    Fixed,
    LogNormal,
    LogUniform,
    Normal,
    SplitNormal,
    Triangular,
    Uniform,
    parse_distribution,
)

ALL = [
    Fixed(3.0),
    Normal(3.0, 0.5),
    Normal(1.0, 2.0, lower=0.0),
    SplitNormal(3.0, 1.0, 2.0),
    SplitNormal(1.0, 2.0, 0.5, lower=0.0, upper=1.5),
    Uniform(2.0, 4.0),
    LogUniform(0.1, 10.0),
    Triangular(0.2, 0.5, 0.7),
    LogNormal(3.0, 1.5),
    AtMost(2.0, 0.95),
]


@pytest.mark.parametrize("found", ALL, ids=str)
def test_to_dict_is_read_back_as_the_same_distribution(found):
    again, unit = parse_distribution({**found.to_dict(), "unit": "kg/s"}, "x")
    assert again == found
    assert unit == "kg/s"


@pytest.mark.parametrize("found", ALL, ids=str)
def test_scaling_scales_every_quantile(found):
    p = np.linspace(0.01, 0.99, 25)
    assert found.scaled(7.0).ppf(p) == pytest.approx(7.0 * found.ppf(p), rel=1e-12)


@pytest.mark.parametrize("found", ALL, ids=str)
def test_quantiles_rise(found):
    values = found.ppf(np.linspace(0.001, 0.999, 200))
    assert np.all(np.diff(values) >= 0)


def test_split_normal_meets_the_quoted_percentiles():
    found = SplitNormal(10.0, 3.0, 1.0)
    # 15.8655 and 84.1345 %: one sigma of a Gaussian
    assert found.ppf(np.array([0.158655254, 0.5, 0.841344746])) == pytest.approx([7, 10, 11])


def test_truncated_normal_never_leaves_its_range_and_keeps_its_shape():
    draws = Normal(1.0, 2.0, lower=0.0).draw(np.random.default_rng(1), 200_000)
    assert draws.min() >= 0
    # mean of a normal cut at alpha: mu + sigma phi(a) / (1 - Phi(a)), a = -1/2
    alpha = -0.5
    phi = math.exp(-0.5 * alpha**2) / math.sqrt(2 * math.pi)
    kept = 0.5 * (1 - math.erf(alpha / math.sqrt(2)))
    expected = 1.0 + 2.0 * phi / kept
    assert draws.mean() == pytest.approx(expected, abs=4 * draws.std() / math.sqrt(draws.size))


def test_triangular_mean_and_median():
    found = Triangular(0.2, 0.5, 0.7)
    draws = found.draw(np.random.default_rng(2), 200_000)
    assert draws.mean() == pytest.approx((0.2 + 0.5 + 0.7) / 3, abs=1e-3)
    # left of the mode lies (0.5 - 0.2) / (0.7 - 0.2) = 0.6 of the probability
    assert float(found.ppf(np.asarray(0.6))) == pytest.approx(0.5)


def test_the_same_seed_gives_the_same_draws():
    one, two = (Normal(0.0, 1.0).draw(np.random.default_rng(5), 10) for _ in range(2))
    assert np.array_equal(one, two)


@pytest.mark.parametrize(
    ("text", "expected", "unit"),
    [
        ("5", Fixed(5.0), ""),
        ("-5e-3", Fixed(-5e-3), ""),
        ("1e25 +- 2e24", Normal(1e25, 2e24), ""),
        ("1e25 +/- 2e24 molecules/s", Normal(1e25, 2e24), "molecules/s"),
        ("3.1±0.2 km/s", Normal(3.1, 0.2), "km/s"),
        ("(1.0 +- 0.2)e27 molecules/s", Normal(1e27, 2e26), "molecules/s"),
        ("1e25 +3e24 -2e24 1/s", SplitNormal(1e25, 2e24, 3e24), "1/s"),
        ("1e25 -2e24 +3e24", SplitNormal(1e25, 2e24, 3e24), ""),
        ("(5 +1/-2)e3 kg/s", SplitNormal(5e3, 2e3, 1e3), "kg/s"),
        ("2 */ 1.5", LogNormal(2.0, 1.5), ""),
        ("0.2 to 0.7", Uniform(0.2, 0.7), ""),
        ("0.2..0.7 g/cm3", Uniform(0.2, 0.7), "g/cm3"),
        ("< 4e23 molecules/s", AtMost(4e23), "molecules/s"),
        ("<=5 kg/s", AtMost(5.0), "kg/s"),
    ],
)
def test_text_forms(text, expected, unit):
    assert parse_distribution(text, "x") == (expected, unit)


@pytest.mark.parametrize(
    ("table", "expected"),
    [
        ({"value": 5}, Fixed(5.0)),
        ({"value": 5, "sigma": 1}, Normal(5.0, 1.0)),
        ({"value": 5, "minus": 1, "plus": 2}, SplitNormal(5.0, 1.0, 2.0)),
        ({"low": 1, "high": 2}, Uniform(1.0, 2.0)),
        ({"low": 1, "high": 2, "distribution": "log-uniform"}, LogUniform(1.0, 2.0)),
        ({"low": 1, "mode": 1.5, "high": 2}, Triangular(1.0, 1.5, 2.0)),
        ({"value": 5, "factor": 2}, LogNormal(5.0, 2.0)),
        ({"limit": 5, "confidence": 0.9}, AtMost(5.0, 0.9)),
    ],
)
def test_table_forms(table, expected):
    assert parse_distribution(table, "x")[0] == expected


def test_quantity_keeps_its_unit():
    assert parse_distribution(5 * u.kg / u.s, "x") == (Fixed(5.0), "kg / s")


def test_a_positive_quantity_has_its_tail_cut():
    found, _ = parse_distribution("1 +- 2", "rate", lower=0.0)
    assert found == Normal(1.0, 2.0, lower=0.0)


@pytest.mark.parametrize(
    ("spec", "words"),
    [
        ("five", ["rate", "'five'", "+-"]),
        ("1e25 + 2e24", ["1e25 + 2e24"]),
        ("0.2-0.7", ["0.2-0.7", "to"]),
        ({"valeu": 5}, ["valeu", "Did you mean 'value'"]),
        ({"value": 5, "plus": 1}, ["rate", "minus"]),
        ({"value": "5"}, ["rate.value", "number"]),
        ({"low": 2, "high": 1}, ["high", "1", "above low = 2"]),
        ({"value": 5, "sigma": -1}, ["sigma", "positive"]),
        ({"value": 5, "distribution": "gauss"}, ["gauss", "normal"]),
        ({"low": 1, "high": 2, "distribution": "normal"}, ["normal", "value"]),
        (-3.0, ["rate", "-3", "above 0"]),
        (float("nan"), ["rate", "nan"]),
        (True, ["True"]),
        ([1, 2] * u.kg, ["array"]),
    ],
)
def test_errors_say_what_and_how(spec, words):
    with pytest.raises(CaseError) as caught:
        parse_distribution(spec, "rate", lower=0.0)
    for word in words:
        assert word in str(caught.value)


def test_the_smallest_floats_are_told():
    for text in ("0 +- 1e-320", "5e-324 +- 5e-324", "(1 +- 1)e300", "5e-324 +1e-322 -1e-323"):
        assert str(parse_distribution(text, "a number")[0])
