"""The mass bound: closed forms, Monte Carlo error, variance shares, thresholds, refusals."""

import json
import math
from types import SimpleNamespace

import astropy.units as u
import numpy as np
import pytest

from ngbound.constants import AU_D2_TO_M_S2
from ngbound.errors import CaseError, MassError, NgboundWarning
from ngbound.limits import DetectionThreshold, Posterior, UpperLimit
from ngbound.mass import (
    Fixed,
    MeasuredDiameter,
    Outgassing,
    Photometry,
    SpeedLaw,
    bounds_by_distance,
    mass_bound,
    momentum_mass,
)
from ngbound.report import Record, mass_figure, render_report, the_sentence
from ngbound.report.figures import style
from ngbound.rounding import length_text, mass_text, rounded

AU_D2 = u.au / u.day**2
WATER_KG = 2.99150e-26
NO_SPREAD = {"speed": "0.8 km/s", "collimation": 0.5}


def log_normal_budget(factors=(1.3, 1.2, 1.1), at=1.0):
    rate, speed, zeta = factors
    return Outgassing(
        {"value": 1e27, "factor": rate},
        {"value": 0.8, "factor": speed},
        {"value": 0.3, "factor": zeta, "distribution": "log-normal"},
        at=at,
    )


def test_fixed_numbers_give_the_momentum_balance():
    bound = mass_bound(1e-8, Outgassing("1e27 1/s", **NO_SPREAD, at=1.3), g_at=0.6, density=500.0)
    force_n = 0.5 * 1e27 * WATER_KG * 800
    mass_kg = force_n / (1e-8 * AU_D2_TO_M_S2 * 0.6)
    assert bound.mass.to_value(u.kg) == pytest.approx(mass_kg, rel=1e-5)
    assert bound.mass_error.value == pytest.approx(0.0, abs=1e-9 * mass_kg)
    assert bound.diameter.to_value(u.m) == pytest.approx(
        (6 * mass_kg / (math.pi * 500)) ** (1 / 3), rel=1e-5
    )
    assert bound.force.to_value(u.N) == pytest.approx(force_n / 0.6, rel=1e-5)
    assert bound.dominant == ""
    assert momentum_mass(force_n * u.N, 1e-8, 0.6).value == pytest.approx(mass_kg)


def test_units_of_the_acceleration_do_not_matter():
    budget = Outgassing("1e27 1/s", **NO_SPREAD, at=1.0)
    masses = [
        mass_bound(a, budget, g_at=1.0).mass.value
        for a in (1e-8, 1e-8 * u.au / u.day**2, 1e-8 * AU_D2_TO_M_S2 * u.m / u.s**2)
    ]
    assert masses == pytest.approx([masses[0]] * 3, rel=1e-6)


def test_log_normal_inputs_have_a_closed_form_quantile():
    # ln M is normal with the summed variance, so the 5 % quantile is exp(mean - 1.6449 sigma)
    n = 100_000
    bound = mass_bound(1e-8, log_normal_budget(), g_at=1.0, density=500.0, n_draws=n, seed=4)
    sigma = math.sqrt(sum(math.log(f) ** 2 for f in (1.3, 1.2, 1.1)))
    median = 0.3 * 1e27 * WATER_KG * 800 / (1e-8 * AU_D2_TO_M_S2)
    exact = median * math.exp(-1.644854 * sigma)
    assert bound.mass.value == pytest.approx(exact, abs=4 * bound.mass_error.value)
    # standard error of a quantile: sqrt(p (1-p) / n) over the density there
    density = math.exp(-0.5 * 1.644854**2) / math.sqrt(2 * math.pi) / (sigma * exact)
    assert bound.mass_error.value == pytest.approx(math.sqrt(0.05 * 0.95 / n) / density, rel=0.1)
    assert bound.mass_median.value == pytest.approx(median, rel=0.01)


def test_the_quantile_error_is_honest_over_many_seeds():
    runs = [
        mass_bound(1e-8, log_normal_budget(), g_at=1.0, n_draws=1000, seed=s) for s in range(50)
    ]
    values = np.array([b.mass.value for b in runs])
    claimed = np.mean([b.mass_error.value for b in runs])
    # the scatter of 50 values is itself known to 10 %
    assert values.std(ddof=1) == pytest.approx(claimed, rel=0.35)


def test_variance_shares_of_a_product_are_exact():
    bound = mass_bound(1e-8, log_normal_budget(), g_at=1.0, n_draws=100_000, seed=2)
    squares = {
        name: math.log(f) ** 2
        for name, f in zip(
            ("production rate", "outflow speed", "collimation"), (1.3, 1.2, 1.1), strict=True
        )
    }
    whole = sum(squares.values())
    shares = {s.name: s for s in bound.inputs}
    for name, square in squares.items():
        assert shares[name].total == pytest.approx(square / whole, abs=0.01)
        assert shares[name].first_order == pytest.approx(square / whole, abs=0.02)
    assert bound.dominant == "production rate"
    # the density adds its own variance to ln D and none to ln M
    assert shares["bulk density"].total == 0
    assert sum(s.of_diameter for s in bound.inputs) == pytest.approx(1.0, abs=0.02)


def test_one_at_a_time_table():
    bound = mass_bound(1e-8, log_normal_budget(), g_at=1.0, density=500.0, n_draws=50_000)
    rate = next(s for s in bound.inputs if s.name == "production rate")
    assert rate.median == pytest.approx(1e27)
    assert rate.high / rate.median == pytest.approx(1.3, rel=1e-4)
    assert rate.mass_at_high / rate.mass_at_low == pytest.approx(1.3**2, rel=1e-3)
    rest = math.sqrt(math.log(1.2) ** 2 + math.log(1.1) ** 2)
    median = 0.3 * 1e27 * WATER_KG * 800 / (1e-8 * AU_D2_TO_M_S2)
    assert rate.bound_if_known == pytest.approx(median * math.exp(-1.6449 * rest), rel=0.01)


def test_posterior_draws_of_the_acceleration():
    # |A| uniform on (0, A1): with a fixed force the 5 % quantile of M is F over the 95 % one of |A|
    draws = np.random.default_rng(0).uniform(0, 1e-8, 40_000)
    budget = Outgassing("1e27 1/s", **NO_SPREAD, at=1.0)
    bound = mass_bound(draws, budget, g_at=1.0)
    force_n = 0.5 * 1e27 * WATER_KG * 800
    exact = force_n / (0.95e-8 * AU_D2_TO_M_S2)
    assert bound.mass.value == pytest.approx(exact, abs=5 * bound.mass_error.value)
    assert bound.acceleration_kind == "posterior"
    assert bound.acceleration_upper.value == pytest.approx(0.95e-8, rel=0.01)
    assert bound.inputs[0].name == "acceleration"
    assert bound.inputs[0].total == pytest.approx(1.0, abs=0.02)


def test_component_draws_are_turned_into_magnitudes():
    components = np.random.default_rng(1).normal(0, 1e-8, (30_000, 3))
    budget = Outgassing("1e27 1/s", **NO_SPREAD, at=1.0)
    one = mass_bound(components, budget, g_at=1.0, seed=3)
    two = mass_bound(np.linalg.norm(components, axis=1), budget, g_at=1.0, seed=3)
    assert one.mass.value == two.mass.value


def test_few_independent_draws_widen_the_error():
    draws = np.random.default_rng(0).uniform(0, 1e-8, 20_000)
    budget = Outgassing("1e27 1/s", **NO_SPREAD, at=1.0)
    all_of_them = mass_bound(draws, budget, g_at=1.0)
    correlated = mass_bound(draws, budget, g_at=1.0, n_effective=200)
    assert correlated.mass_error.value == pytest.approx(10 * all_of_them.mass_error.value, rel=0.2)


def test_a_quoted_limit_says_what_its_confidence_covers():
    bound = mass_bound(1e-8, log_normal_budget(), g_at=1.0, limit_confidence=0.95)
    assert bound.joint_confidence == pytest.approx(0.90)
    assert "at least 90 % together" in bound.sentence()
    bare = mass_bound(1e-8, log_normal_budget(), g_at=1.0)
    assert bare.joint_confidence is None and bare.to_dict()["joint_confidence"] is None
    assert "the limit came without one" in bare.sentence()
    assert any("held at the quoted limit" in a for a in bound.assumptions)


def blank(cls, **attributes):
    """An object of a class of the room limits with only the attributes a mass needs."""
    made = object.__new__(cls)
    for name, value in attributes.items():
        object.__setattr__(made, name, value)
    return made


def test_a_posterior_brings_its_draws_its_prior_and_its_effective_size():
    components = np.random.default_rng(1).normal(0, 1e-8, (30_000, 3))
    posterior = blank(
        Posterior,
        components="RTN",
        A_samples=components,
        ess={"|A|": 400.0},
        prior=SimpleNamespace(name="isotropic-uniform"),
        converged=True,
        message="",
    )
    budget = Outgassing("1e27 1/s", **NO_SPREAD, at=1.0)
    bound = mass_bound(posterior, budget, g_at=1.0, seed=3)
    assert bound.mass == mass_bound(components, budget, g_at=1.0, seed=3).mass
    assert bound.n_effective == 400
    assert any("isotropic-uniform" in a for a in bound.assumptions)


def test_a_limit_brings_its_confidence_and_a_warning_where_it_is_not_converged():
    limit = blank(
        UpperLimit,
        components="RTN",
        magnitude=1e-8 * AU_D2,
        confidence=0.9,
        prior="uniform in |A|",
        converged=False,
        message="too few steps.",
    )
    budget = Outgassing("1e27 1/s", **NO_SPREAD, at=1.0)
    with pytest.warns(NgboundWarning, match="too few steps"):
        bound = mass_bound(limit, budget, g_at=1.0)
    assert bound.joint_confidence == pytest.approx(0.85)
    assert bound.mass == mass_bound(1e-8, budget, g_at=1.0).mass


def test_threshold_gives_the_mass_that_would_have_been_revealed():
    threshold = blank(
        DetectionThreshold, worst=4e-8 * AU_D2, information=SimpleNamespace(components="RTN")
    )
    bound = mass_bound(1e-8, log_normal_budget(), g_at=1.0, threshold=threshold)
    assert bound.mass_detection is not None and bound.diameter_detection is not None
    assert bound.mass_detection.value == pytest.approx(bound.mass.value / 4, rel=1e-9)
    assert bound.diameter_detection.value == pytest.approx(bound.diameter.value / 4 ** (1 / 3))
    several = mass_bound(
        1e-8, log_normal_budget(), g_at=1.0, threshold=[1e-8, 4e-8] * u.au / u.day**2
    )
    assert several.threshold == bound.threshold
    assert "would have shown a thrust" in bound.sentence()


@pytest.mark.parametrize(
    ("components", "words"),
    [
        ("R", "a thrust along R alone"),
        ("RT", "a thrust in the plane of R and T alone"),
        ("RTN", "whatever its direction"),
    ],
)
def test_a_bound_claims_no_direction_that_was_not_looked_for(components, words):
    limit = blank(
        UpperLimit,
        components=components,
        magnitude=1e-8 * AU_D2,
        confidence=0.9,
        prior="uniform in |A|",
        converged=True,
        message="",
    )
    threshold = blank(
        DetectionThreshold,
        worst=4e-8 * AU_D2,
        information=SimpleNamespace(components=components),
    )
    bound = mass_bound(limit, log_normal_budget(), g_at=1.0, threshold=threshold)
    said, partial = bound.sentence(), components != "RTN"
    assert words in said and ("whatever" not in said) is partial
    assert any("direction of the thrust" in a for a in bound.assumptions) is partial
    assert bound.to_dict()["components"] == components
    # the threshold alone tells it too
    plain = mass_bound(1e-8, log_normal_budget(), g_at=1.0, threshold=threshold)
    assert words in plain.sentence()


def test_a_direction_the_arc_cannot_see_leaves_no_revealed_mass():
    bound = mass_bound(1e-8, log_normal_budget(), g_at=1.0, threshold=[1e-8, math.inf])
    assert bound.mass_detection is None
    assert any("infinite in some direction" in a for a in bound.assumptions)
    json.dumps(bound.to_dict(), allow_nan=False)


def test_an_upper_limit_among_the_rates_counts_as_zero():
    alone = mass_bound(1e-8, Outgassing("1e27 1/s", **NO_SPREAD, at=1.0), g_at=1.0)
    both = mass_bound(
        1e-8, Outgassing({"H2O": "1e27 1/s", "CO": "< 1e27 1/s"}, **NO_SPREAD, at=1.0), g_at=1.0
    )
    assert both.mass.value == pytest.approx(alone.mass.value)
    assert any("upper limit" in a for a in both.assumptions)


def test_two_species_at_different_distances_are_summed_through_the_law():
    law = SpeedLaw("flat", 0.8, 0.0, "this test", "invented", factor=1.0)
    budget = Outgassing({"H2O": "1e27 1/s", "CO": "1e27 1/s"}, law, 0.5, {"H2O": 1.0, "CO": 2.0})
    bound = mass_bound(1e-8, budget, g_at=lambda r: r**-2)
    force_n = 0.5 * 1e27 * 800 * (18.01528 + 4 * 28.0101) * 1.66053907e-27
    assert bound.mass.value == pytest.approx(force_n / (1e-8 * AU_D2_TO_M_S2), rel=1e-5)


def test_rates_that_follow_the_law_agree_and_others_are_warned_about():
    law = SpeedLaw("flat", 0.8, 0.0, "this test", "invented", factor=1.2)
    good = Outgassing(["(4 +- 0.4)e27 1/s", "(1 +- 0.1)e27 1/s"], law, 0.5, [1.0, 2.0])
    bound = mass_bound(1e-8, good, g_at=lambda r: r**-2)
    assert bound.law_checks[0].ratio == pytest.approx(1.0, abs=0.02)
    # two equal errors of 10 % in the logarithm: 14 % together, the shared law cancels
    assert bound.law_checks[0].sigma < 0.1
    bad = Outgassing(["(4 +- 0.4)e27 1/s", "(4 +- 0.4)e27 1/s"], law, 0.5, [1.0, 2.0])
    with pytest.warns(NgboundWarning, match="do not follow the thrust law"):
        bound = mass_bound(1e-8, bad, g_at=lambda r: r**-2)
    assert bound.law_checks[0].sigma == pytest.approx(math.log(4) / 0.1425, rel=0.05)
    parts = bounds_by_distance(1e-8, bad, g_at=lambda r: r**-2)
    assert [r for r, _ in parts] == [1.0, 2.0]
    assert parts[1][1].mass.value == pytest.approx(4 * parts[0][1].mass.value, rel=0.03)


@pytest.mark.parametrize(
    ("magnitude", "verdict"),
    [("12 +- 0.1", "agree"), ("20.54 +- 0.1", "tension"), ("22 +- 0.1", "clash")],
)
def test_photometric_size_verdicts(magnitude, verdict):
    # mass 6e10 kg: at 500 kg/m3 612 m; p = 0.04 gives 6645 km 10^(-H/5)
    bound = mass_bound(
        1e-8,
        Outgassing("1e27 1/s", **NO_SPREAD, at=1.0),
        g_at=1.0,
        photometry=Photometry(magnitude, 0.04),
        density="(500 +- 100) kg/m3",
    )
    check = bound.size_check
    assert check is not None
    needed = 5.97e10 / (math.pi / 6 * check.diameter.value**3)
    # at 95 % the photometric sphere may be 0.164 mag brighter: 10^(0.6 * 0.164) in volume
    assert check.density_needed.value == pytest.approx(needed * 10 ** (-0.6 * 0.1645), rel=0.05)
    assert check.verdict == verdict
    assert verdict in bound.sentence()


def test_the_record_is_plain_json_and_the_same_seed_repeats():
    budget = Outgassing({"H2O": "1e27 +- 1e26 1/s", "CO": "< 1e26 1/s"}, at=1.2)
    one, two = (
        mass_bound(1e-8, budget, g_at=0.7, threshold=2e-8, photometry=Photometry(18.0), seed=11)
        for _ in range(2)
    )
    assert json.dumps(one.to_dict()) == json.dumps(two.to_dict())
    assert one.to_dict()["seed"] == 11
    json.dumps(one.to_dict(), allow_nan=False)
    assert "collimation" in str(one) and "assumed:" in str(one)


def test_the_default_density_is_named_in_the_record():
    bound = mass_bound(1e-8, log_normal_budget(), g_at=1.0)
    assert any("200 to 800" in a and "67P" in a for a in bound.assumptions)
    own = mass_bound(1e-8, log_normal_budget(), g_at=1.0, density="1.1 g/cm3")
    assert own.density == Fixed(1100.0)


def case(**changes):
    return {
        "limit_or_samples": 1e-8,
        "outgassing": Outgassing("1e27 1/s", at=1.0),
        "g_at": 1.0,
        **changes,
    }


@pytest.mark.parametrize(
    ("arguments", "error", "words"),
    [
        (case(outgassing=Outgassing("< 1e27 1/s", at=1.0)), MassError, ["upper limit"]),
        (case(g_at=0.0), MassError, ["g = 0", "1 au", "H2O"]),
        (case(g_at=lambda r: float("nan")), MassError, ["nan"]),
        (case(limit_or_samples=0.0), MassError, ["zero"]),
        (case(limit_or_samples=[]), MassError, ["empty"]),
        (case(limit_or_samples=float("inf")), MassError, ["not finite"]),
        (case(limit_or_samples=[1e-8] * 50), MassError, ["50", "at least 100"]),
        (case(limit_or_samples=5 * u.kg), CaseError, ["kg", "au/d2"]),
        (case(limit_or_samples="much"), CaseError, ["str", "au/d2"]),
        (case(confidence=95), CaseError, ["95", "0.95"]),
        (case(density=0.5), CaseError, ["0.5", "g/cm3"]),
        (case(density="5 km"), CaseError, ["km", "kg/m3"]),
        (case(threshold=-1.0), MassError, ["-1", "positive"]),
        (case(n_draws=10), CaseError, ["10", "1000"]),
        (
            case(outgassing=Outgassing(["1e27 1/s", "1e27 1/s"], at=[1, 2])),
            CaseError,
            ["2 distances", "function"],
        ),
    ],
)
def test_refusals_say_why(arguments, error, words):
    with pytest.raises(error) as caught:
        mass_bound(arguments.pop("limit_or_samples"), arguments.pop("outgassing"), **arguments)
    for word in words:
        assert word in str(caught.value)


def test_variance_shares_with_a_posterior_that_is_log_normal_too():
    # ln M = ln zeta + ln Q + ln v - ln A: every share is its own squared width over the sum
    draws = 1e-8 * np.exp(0.25 * np.random.default_rng(5).standard_normal(60_000))
    bound = mass_bound(draws, log_normal_budget(), g_at=1.0, density="500 */ 1.4", seed=6)
    squares = {"acceleration": 0.25**2} | {
        name: math.log(f) ** 2
        for name, f in zip(
            ("production rate", "outflow speed", "collimation"), (1.3, 1.2, 1.1), strict=True
        )
    }
    whole = sum(squares.values())
    shares = {s.name: s for s in bound.inputs}
    for name, square in squares.items():
        assert shares[name].total == pytest.approx(square / whole, abs=0.015)
        assert shares[name].first_order == pytest.approx(square / whole, abs=0.025)
        # one at a time: one sigma either way moves ln M by that sigma
        step = math.log(shares[name].mass_at_high / shares[name].mass_at_low)
        assert abs(step) == pytest.approx(2 * math.sqrt(square), rel=0.02)
    assert shares["acceleration"].mass_at_high < shares["acceleration"].mass_at_low
    with_density = whole + math.log(1.4) ** 2
    assert shares["bulk density"].of_diameter == pytest.approx(
        math.log(1.4) ** 2 / with_density, abs=0.015
    )
    assert bound.dominant == "production rate"
    # a rate known exactly leaves the rest of the variance
    rest = math.sqrt(whole - squares["production rate"])
    assert shares["production rate"].bound_if_known / bound.mass_median.value == pytest.approx(
        math.exp(-1.644854 * rest), rel=0.02
    )


def test_the_two_species_of_a_sum_interact_in_the_total_index():
    # ln(Q1 + Q2) is not additive: totals exceed first orders, and all stay within [0, 1]
    budget = Outgassing(
        {"H2O": {"value": 1e27, "factor": 3.0}, "CO": {"value": 6.4e26, "factor": 3.0}},
        **NO_SPREAD,
        at=1.0,
    )
    bound = mass_bound(1e-8, budget, g_at=1.0, n_draws=100_000)
    first, second = bound.inputs[:2]
    assert first.total + second.total > 1.0 > first.first_order + second.first_order
    assert first.total == pytest.approx(second.total, abs=0.03)


def test_every_printing_of_the_bound_is_rounded_alike_and_outward():
    draws = np.random.default_rng(0).uniform(0, 1e-8, 40_000)
    bound = mass_bound(draws, log_normal_budget(), g_at=1.0, density=500.0, threshold=3e-8)
    mass, diameter = mass_text(bound.mass.value), length_text(bound.diameter.value)
    assert float(mass.split()[0]) <= bound.mass.value < 1.1 * float(mass.split()[0])
    headline = the_sentence(
        name="X", n_obs=9, span_d=9.0, mass_kg=bound.mass.value, diameter_m=bound.diameter.value
    )
    record = Record({"mass": bound, "object": "X"}).data
    report = " ".join(render_report({**record, "sentence": headline}).split())
    figure = mass_figure(bound)
    words = " ".join(t.get_text() for ax in figure.axes for t in ax.texts)
    assert f"a mass above {mass}, a diameter above {diameter}." in headline
    for text in (bound.sentence(), bound._repr_html_().replace("&gt;", ">"), report):
        assert f"the mass is above {mass} (" in text
        assert f"the diameter is above {diameter}." in text
    assert f"> {style.scientific(mass.split()[0])} kg" in words and f"> {diameter}" in words
    # the posterior's edge is an upper limit and goes up, the mass revealed goes down
    upper = rounded(float(bound.acceleration_upper.value), 2, outward="up")
    assert f"95 % below {upper} au/d2" in bound.sentence()
    assert f"lighter than {mass_text(bound.mass_detection.value)} (" in bound.sentence()


def test_a_given_diameter_is_set_beside_the_bound_as_a_photometric_one_is():
    bound = mass_bound(
        1e-8,
        Outgassing("1e27 1/s", **NO_SPREAD, at=1.0),
        g_at=1.0,
        photometry=MeasuredDiameter("(300 +- 10) m"),
        density="(500 +- 100) kg/m3",
    )
    assert bound.size_check.verdict == "clash"
    assert "Given diameter 300" in bound.sentence()
