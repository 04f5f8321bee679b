"""The sentence and the report."""

import re

import numpy as np
import pytest

from ngbound.errors import NgboundWarning
from ngbound.limits import detection_threshold, upper_limit, verdict
from ngbound.mass import (
    Outgassing,
    Photometry,
    active_areas,
    area_to_mass,
    law_departures,
    mass_bound,
    mass_ceiling,
    reach,
)
from ngbound.motion import Thrust
from ngbound.report import (
    Record,
    provenance,
    render_mass,
    render_report,
    residual_suspicions,
    station_table,
    the_sentence,
)
from ngbound.report.document import budget_words
from tests.report.standins import demo_pair

QUIET = {
    "name": "2031 QX7",
    "n_obs": 297,
    "span_d": 236.2,
    "r_min_au": 1.3049,
    "r_max_au": 2.5737,
    "law": "inverse-square",
    "significance_sigma": 2.99998,
    "false_alarm": 0.0027,
    "power": 0.95,
    "threshold_au_d2": 6.06e-9,
    "best_threshold_au_d2": 1.133e-9,
    "confidence": 0.95,
    "limit_au_d2": 1.731e-9,
}


def clean(text: str) -> None:
    """No gap, no NaN, no doubled word or mark in a sentence."""
    assert not re.search(r"nan|None|not available|\(\)|  |,,|;;|\.\.|inf\b", text), text
    assert text.endswith(".")


def test_a_non_detection():
    text = the_sentence(
        **QUIET,
        budget="a mass-loss rate of 1.0 +- 0.3 kg/s",
        mass_kg=7.79e9,
        diameter_m=1305.0,
        mass_confidence=0.95,
    )
    clean(text)
    assert text == (
        "The arc of 2031 QX7 (297 observations, 236 days, r from 1.30 to 2.57 au) is explained by "
        "gravity alone. A thrust following an inverse-square law would have been detected at 3.0 "
        "sigma (false-alarm rate 0.27 %) with probability 95 % if it had exceeded 6.1e-9 au/d2 in "
        "the direction this arc sees worst, 1.2e-9 au/d2 in the one it sees best; at 95 % "
        "confidence |A| < 1.8e-9 au/d2. With a mass-loss rate of 1.0 +- 0.3 kg/s this demands a "
        "mass above 7.7e9 kg, a diameter above 1.3 km."
    )


def test_the_sentence_claims_no_direction_that_was_not_looked_for():
    one = {**QUIET, "best_threshold_au_d2": QUIET["threshold_au_d2"]}
    assert "exceeded 6.1e-9 au/d2 in any direction;" in the_sentence(**one, components="RTN")
    radial = the_sentence(**one, components="R")
    assert "A thrust along R alone following an inverse-square law would have been" in radial
    assert "exceeded 6.1e-9 au/d2;" in radial and "any direction" not in radial
    plane = the_sentence(**QUIET, components="RT")
    assert "A thrust in the plane of R and T alone following" in plane and "sees worst" in plane
    clean(radial)
    clean(plane)


def test_a_detection_says_the_estimate_and_not_gravity_alone():
    text = the_sentence(
        **QUIET,
        verdict="detection",
        estimate_au_d2=1.68e-8,
        estimate_sigma_au_d2=7.6e-10,
        found_sigma=34.2,
    )
    clean(text)
    assert "is not explained by gravity alone" in text
    assert "is detected at 34 sigma, |A| = (1.68 +- 0.08)e-8 au/d2" in text
    assert "mass" not in text


def test_the_doubtful_verdicts_give_their_reasons():
    reasons = ("the noise is not as the error model says",)
    text = the_sentence(
        **QUIET,
        verdict="not trustworthy",
        reasons=reasons,
        estimate_au_d2=2.6e-10,
        estimate_sigma_au_d2=1.7e-11,
        found_sigma=15.0,
    )
    clean(text)
    assert "cannot be trusted as a detection: the noise is not" in text
    assert "is detected" not in text and "explained by gravity alone" not in text
    blind = the_sentence(**QUIET, verdict="arc cannot tell", reasons=reasons)
    clean(blind)
    assert "could not have told otherwise: the noise" in blind


@pytest.mark.parametrize("gone", [k for k in QUIET if k not in ("name", "n_obs", "span_d")])
@pytest.mark.parametrize("value", [None, float("nan")])
def test_no_gap_where_a_number_is_missing(gone, value):
    if gone == "law":
        value = ""
    clean(the_sentence(**{**QUIET, gone: value}))


def test_spans_in_fitting_units():
    for span, words in ((12784.0, "35.0 years"), (9.02, "9.0 days"), (0.2, "4.8 hours")):
        assert words in the_sentence(name="X", n_obs=10, span_d=span)


def test_budget_words():
    emission = {
        "species": "H2O",
        "rate": {"distribution": "normal", "value": 1.0, "sigma": 0.3, "unit": "kg/s"},
        "speed": {"law": "delsemme"},
        "median_speed_m_s": 517.3,
        "collimation": {"distribution": "triangular", "low": 0.2, "mode": 0.5, "high": 0.7},
        "at_au": 1.3,
    }
    assert budget_words({"outgassing": {"emissions": [emission]}}) == (
        "a production rate of 1.00 +- 0.30 kg/s (H2O) at 1.3 au, a speed of 520 m/s and a "
        "collimation of 0.5 (0.2 to 0.7)"
    )
    limit = {**emission, "species": "CO2", "rate": {"distribution": "upper-limit", "limit": 2.0}}
    three = {"outgassing": {"emissions": [emission, {**emission, "species": "CO"}, limit]}}
    told = budget_words(three)
    assert "(H2O)" in told and "; and a production rate of 1.00 +- 0.30 kg/s (CO)" in told
    assert "CO2" not in told  # a limit counts as zero in the bound
    assert budget_words({"budget": "as told"}) == "as told"
    assert budget_words({}) == ""


def whole_record() -> dict:
    null, push = demo_pair()
    threshold, limit = detection_threshold(push), upper_limit(push)

    def told(fit):
        return {
            "chi2": fit.chi2,
            "dof": fit.dof,
            "rms_arcsec": 0.241,
            "n_obs": fit.n_obs,
            "n_rejected": 3,
            "components": fit.components,
            "A_au_d2": fit.A.value,
            "A_sigma_au_d2": fit.A_sigma.value,
        }

    return Record(
        {
            "object": "2031 QX7",
            "law": "inverse-square",
            "arc": {"n_obs": 297, "span_d": 236.2, "r_min_au": 1.3, "r_max_au": 2.6, "note": None},
            "fits": {"null": told(null), "push": told(push)},
            "comparison": {"delta_chi2": 1.6, "delta_dof": 3, "p_value": 0.66, "delta_bic": -15.5},
            "threshold": threshold,
            "limit": limit,
            "verdict": verdict(null, push, threshold, limit),
            "suspicions": residual_suspicions(null),
            "mass": {"mass_kg": 7.8e9, "diameter_m": 305.0, "confidence": 0.95},
            "choices": {"error_model": {"floor_arcsec": 0.05}, "reject": True},
            "seeds": {"sampler": 1},
            "provenance": provenance(),
        }
    ).data


def test_the_report_begins_with_the_sentence_and_holds_every_section():
    data = whole_record()
    text = render_report(data, [station_table(demo_pair()[0])], ["residual_fan.pdf"])
    flat = " ".join(text.split())
    assert flat.index("The arc of 2031 QX7 (297 observations") < flat.index("Verdict")
    titles = [
        "Verdict",
        "Arc",
        "Fits",
        "Detection thresholds",
        "Upper limits",
        "Mass and size",
        "Tables",
        "Choices",
        "Seeds",
        "Caveats",
        "Figures",
        "Provenance",
    ]
    lines = text.splitlines()
    places = [lines.index(title) for title in titles]
    assert places == sorted(places)
    assert "not an impact-hazard assessment" in flat
    assert "flat-components" in flat and "isotropic-uniform" in flat
    assert "error_model.floor_arcsec  0.05" in text
    assert not re.search(r"\bnan\b|\bNone\b", text)
    assert max(len(line) for line in lines if not line.startswith("    ")) <= 96


def test_an_empty_record_still_makes_a_report():
    text = render_report({})
    assert "The arc of the object was read, but no orbit was fitted to it." in text
    assert "Verdict" not in text


def test_suspicions_are_told_under_the_verdict():
    text = render_report({**whole_record(), "suspicions": ["The 99 records of station 500 lie."]})
    assert text.index("Verdict") < text.index("station 500 lie") < text.index("Fits")


def test_an_upper_mass_is_said_where_a_thrust_was_detected():
    told = the_sentence(**QUIET, mass_below_kg=3.91e12, diameter_below_m=2412.0)
    clean(told)
    assert told.endswith("the mass is below 4.0e12 kg, the diameter below 2.5 km.")


def test_the_mass_half_of_the_report_holds_all_that_was_found():
    budget = Outgassing(["(4 +- 0.4)e27 1/s", "(4 +- 0.4)e27 1/s"], None, 0.5, [1.0, 2.0])
    draws = 1e-8 * np.exp(0.1 * np.random.default_rng(0).standard_normal(4000))
    size = Photometry("17.4 +- 0.2", 0.04)
    g = Thrust("inverse-square").g
    with pytest.warns(NgboundWarning):
        bound = mass_bound(draws, budget, g_at=g, photometry=size)
        ceiling = mass_ceiling(draws, budget, g_at=g)
        departures = law_departures(budget, g, np.array([1.0, 3.0]))
    record = Record(
        {
            "mass": bound,
            "mass_ceiling": ceiling,
            "reach": reach(3e-9, g_at=g, outgassing=budget, size=size),
            "radiation": area_to_mass(1e-9, confidence=0.95, density=500.0),
            "active_areas": active_areas(budget, diameter=size),
            "law_departures": departures,
            "mass_remarks": ["This does not follow."],
        }
    ).data
    text = render_mass(record)
    flat = " ".join(text.split())
    for words in (
        bound.sentence(),
        ceiling.sentence(),
        "rates against the thrust law: H2O: force / g(r) at 2 au",
        "active surface: H2O at 1 au needs at least",
        "thrust law against sublimation: at 3 au",
        "This does not follow.",
        "If sunlight pushes",
        "A body of photometric diameter",
    ):
        assert words in flat
    # every input of the variance decomposition has its line, each assumption stands once
    for share in bound.inputs:
        assert any(line.strip().startswith(share.name) for line in text.splitlines())
    assert flat.count("A. H. Delsemme 1982") == 1
    titles = ["Mass and size", "Reach: the outgassing this arc would have revealed"]
    assert [line for line in text.splitlines() if line in titles] == titles


def test_several_tables_of_a_case_are_listed_key_by_key():
    choices = {"outgassing": [{"species": "H2O", "at": 1.2}, {"species": "CO", "at": 2.0}]}
    text = render_report({"choices": choices})
    assert "outgassing.1.species  H2O" in text and "outgassing.2.at       2" in text
    assert "{" not in text
