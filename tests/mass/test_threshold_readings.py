"""Readings of a quoted threshold, each made from the fit by its own formula."""

import json

import pytest

from ngbound.arc import write_psv
from ngbound.errors import CaseError
from ngbound.limits import detection_threshold
from ngbound.mass import audit, audit_threshold

from .simulated import EARLY, ROUND, SIGMA_ARCSEC, THRUST, fitted


@pytest.fixture(scope="module")
def fit():
    return fitted(*EARLY, 0 * THRUST, 5, ROUND)


@pytest.fixture(scope="module")
def threshold(fit):
    return detection_threshold(fit, false_alarm=0.0027, power=0.95)


CLAIM = {"component": "R", "others": "free", "false_alarm": 0.0027, "power": 0.95}
QUOTED = {"arcsec": SIGMA_ARCSEC}


@pytest.mark.parametrize("treatment", ["held", "free"])
def test_the_claimed_reading_is_the_detection_threshold(fit, threshold, treatment):
    value = float(getattr(threshold, treatment)[0].value)
    found = audit_threshold(fit, {**CLAIM, "others": treatment, "value": value})
    assert found.verdict == "holds"
    assert found.claimed.ratio == pytest.approx(1.0, abs=1e-3)
    assert found.to_frame()["reading"][0] == found.claimed.words


@pytest.mark.parametrize(
    ("value", "change"),
    [
        (lambda t: t.held[0].value, "the other components held"),
        (lambda t: t.direction_free[0].value, "all components tested together (direction-free)"),
        (lambda t: t.worst.value, "worst direction of all"),
        (lambda t: 3.0 / t.delta_one * t.free[0].value, "without a chance of detection"),
        (lambda t: 1.0 / t.delta_one * t.free[0].value, "1 sigma instead of the claimed level"),
        (lambda t: t.free[1].value, "the transverse component instead of the radial"),
    ],
)
def test_another_reading_is_found(fit, threshold, value, change):
    found = audit_threshold(fit, {**CLAIM, "value": float(value(threshold))}, QUOTED)
    assert found.verdict == "another reading", str(found)
    near = [reading for reading in found.matching if len(reading.changes) == 1]
    assert any(change in reading.changes[0] for reading in near), str(found)


def test_errors_scaled_to_the_residuals_are_a_reading(fit, threshold):
    small = {"arcsec": 0.7 * SIGMA_ARCSEC}
    plain = audit_threshold(fit, {**CLAIM, "value": float(threshold.free[0].value)}, small)
    assert plain.noise_scale == pytest.approx(1 / 0.7, rel=0.1)
    value = plain.noise_scale * plain.claimed.value_au_d2
    found = audit_threshold(fit, {**CLAIM, "value": value}, small)
    assert found.verdict == "another reading"
    assert found.changes == ("errors scaled to the scatter of the residuals",)


@pytest.mark.parametrize(
    ("digits", "verdict"), [(".3e", "holds"), (".2e", "holds"), (".0e", "cannot tell")]
)
def test_few_digits_leave_a_doubt(fit, threshold, digits, verdict):
    # 2.36e-9 at three sigma; with "2e-9" one or two other readings come as close
    value = format(3.0 / threshold.delta_one * float(threshold.free[0].value), digits)
    claim = {"component": "R", "others": "free", "sigma": 3, "value": f"{value} au/d2"}
    found = audit_threshold(fit, claim, {"arcsec": f"{SIGMA_ARCSEC:.4f}"})
    assert found.verdict == verdict, str(found)
    assert (len(found.closest) > 1) == (verdict == "cannot tell")
    assert ("cannot be told apart" in str(found)) == (verdict == "cannot tell")


def test_two_readings_that_come_equally_close_are_both_named(fit, threshold):
    # one digit between the radial thresholds with the others held and free, at another level
    held, free = (float(getattr(threshold, k)[0].value) for k in ("held", "free"))
    claim = {"component": "T", "others": "free", "false_alarm": 0.0027, "power": 0.95}
    quoted = f"{free:.0e} au/d2"
    found = audit_threshold(fit, {**claim, "value": quoted}, {"arcsec": f"{SIGMA_ARCSEC:.4f}"})
    assert found.verdict != "holds" and held != free
    assert len(found.closest) > 1 and "cannot be told apart" in str(found)
    misses = [reading.miss for reading in found.closest]
    assert misses == sorted(misses)


def test_the_tables_of_a_notebook(fit):
    found = audit_threshold(fit, {**CLAIM, "value": "3.7e-9"})
    assert "<table>" in found._repr_html_() and "direction-free" in found._repr_html_()


def test_worst_direction_is_what_any_direction_claims(fit, threshold):
    claim = {**CLAIM, "component": "any", "value": float(threshold.worst.value)}
    assert audit_threshold(fit, claim).verdict == "holds"
    mean = float(threshold.isotropic_mean.value)
    found = audit_threshold(fit, {**claim, "value": mean}, QUOTED)
    assert found.verdict == "another reading"
    assert "mean over directions of all" in found.changes


@pytest.mark.parametrize(
    ("factor", "words"),
    [(1e3, "factor 1000"), (20.04, "au/d2 and m/s2"), (1 / 86400, "days and seconds")],
)
def test_unit_slips_are_named(fit, threshold, factor, words):
    # the threshold is small: no reading reaches so far
    value = factor * float(threshold.free[0].value)
    found = audit_threshold(fit, {**CLAIM, "value": value}, QUOTED)
    assert found.verdict == "slip", str(found)
    assert any(words in slip for slip in found.slips)


def test_unlike_any_reading(fit, threshold):
    found = audit_threshold(fit, {**CLAIM, "value": 300.0 * float(threshold.free[0].value)}, QUOTED)
    assert found.verdict == "too large" and not found.slips
    json.dumps(found.to_dict(), allow_nan=False)


def test_quoted_errors_scale_the_threshold(fit, threshold):
    value = float(threshold.free[0].value)
    found = audit_threshold(fit, {**CLAIM, "value": value}, {"arcsec": 2 * SIGMA_ARCSEC})
    assert found.claimed.ratio == pytest.approx(0.5, rel=0.02)
    # the residuals themselves say that the errors are half as large
    assert found.verdict == "another reading" and "errors scaled" in found.changes[0]
    assert found.ratio_default_errors == pytest.approx(1.0, rel=0.03)
    assert found.noise_scale == pytest.approx(0.5, rel=0.15)


def test_acceleration_at_the_object(fit, threshold):
    value = float(threshold.free[0].value) / 1.9**2
    claim = {**CLAIM, "value": value}
    assert audit_threshold(fit, {**claim, "at_au": 1.9}).verdict == "holds"
    found = audit_threshold(fit, claim, QUOTED)
    assert any("1 au exchanged" in slip for slip in found.slips), str(found)


def test_file_with_the_arc(tmp_path, fit, threshold):
    write_psv(fit.arc, tmp_path / "wisp.psv")
    (tmp_path / "paper.toml").write_text(
        f"""
title = "a threshold and its arc"
arc.file = "wisp.psv"
errors.arcsec = "0.0600"

[threshold]
value = "{float(threshold.free[2].value):.3e} au/d2"
component = "N"
false_alarm = 0.0027
power = 0.95
""",
        encoding="utf-8",
    )
    found = audit(tmp_path / "paper.toml")
    assert found.sound, str(found)
    assert "sound" in str(found)
    json.dumps(found.to_dict(), allow_nan=False)


def test_refusals(fit):
    with pytest.raises(CaseError, match="give one of them"):
        audit_threshold(fit, {"value": 1e-9, "sigma": 3, "confidence": 0.95})
    with pytest.raises(CaseError, match="positive"):
        audit_threshold(fit, {"value": -1e-9})
    with pytest.raises(CaseError, match="numbers"):
        audit({"title": "nothing"})
    with pytest.raises(CaseError, match="no \\[threshold\\]"):
        audit({"numbers": {"mass": 1.0}, "arc": {"file": "x.psv"}})
    with pytest.raises(CaseError, match="did you mean 'arcsec'"):
        audit_threshold(fit, {"value": 1e-9}, {"arcsecs": 1.0})
