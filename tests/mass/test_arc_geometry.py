"""Brackets from the outline of an arc, held to arcs that were fitted."""

import numpy as np
import pytest

from ngbound.limits import detection_threshold
from ngbound.mass import Geometry, audit, audit_geometry, sagitta_sigma
from ngbound.mass.arc_geometry import FIRST_D, arc_information, simulated_information
from ngbound.motion import Orbit, Thrust, propagate_two_body
from ngbound.sky import load_ephemeris

from .simulated import EARLY, ROUND, SIGMA_ARCSEC, THRUST, fitted

CLAIM = {"component": "any", "false_alarm": 0.0027, "power": 0.95}


@pytest.fixture(scope="module")
def fit():
    return fitted(*EARLY, 0 * THRUST, 5, ROUND)


@pytest.fixture(scope="module")
def outline(fit):
    table = fit.residuals
    return {
        "n_obs": len(table),
        "nights": len(np.unique(np.floor(table["tdb_d"]))),
        "span_d": float(np.ptp(table["tdb_d"])),
        "sigma_arcsec": SIGMA_ARCSEC,
        "r_au": [float(table["r_au"].iloc[0]), float(table["r_au"].iloc[-1])],
        "delta_au": [float(table["delta_au"].min()), float(table["delta_au"].max())],
    }


def test_the_sagitta_law():
    # 500 points at 0.3 arcsec over 100 d at 1.5 au: 1.4544e-6 rad x 1.5 x sqrt(720/500) / 1e4
    assert sagitta_sigma(500, 100.0, 0.3, 1.5) == pytest.approx(2.618e-10, rel=1e-3)


def test_the_fitted_threshold_lies_in_the_bracket_of_its_outline(fit, outline):
    threshold = detection_threshold(fit, false_alarm=0.0027, power=0.95)
    found = audit_geometry(outline, {**CLAIM, "value": float(threshold.worst.value)})
    assert found.verdict == "plausible", str(found)
    claim = {**CLAIM, "component": "T", "value": float(threshold.free[1].value)}
    assert audit_geometry(outline, claim).verdict == "plausible"


@pytest.mark.parametrize(
    ("factor", "words"), [(1e3, "1000"), (1e-3, "1000"), (86400.0**2, "days and seconds")]
)
def test_gross_slips_are_implausible_and_named(fit, outline, factor, words):
    threshold = detection_threshold(fit, false_alarm=0.0027, power=0.95)
    value = f"{factor * float(threshold.worst.value):.2e} au/d2"
    found = audit({"threshold": {**CLAIM, "value": value}, "geometry": outline})
    assert not found.sound
    assert found.geometry.verdict == "implausible"
    assert any(words in slip for slip in found.slips), str(found)


def test_the_same_seed_gives_the_same_bracket(outline):
    claim = {**CLAIM, "value": 1e-8}
    one, two, other = (audit_geometry(outline, claim, seed) for seed in (3, 3, 4))
    assert one == two and one != other


def test_the_table_of_a_notebook(outline):
    shown = audit_geometry(outline, {**CLAIM, "value": 1e-8})._repr_html_()
    assert "<table>" in shown and "sagitta law" in shown


def test_a_given_orbit_is_used(outline):
    # round, as the object's own orbit: fewer arcs, a narrower bracket
    given = {**outline, "q_au": 1.9, "e": 0.04}
    claim = {**CLAIM, "value": 4e-9}
    found, free = audit_geometry(given, claim), audit_geometry(outline, claim)
    assert found.n_simulated < free.n_simulated
    spread = [np.ptp(np.log(x.simulated_au_d2)) for x in (found, free)]
    assert spread[0] < spread[1]


CLASSES = {
    "main belt, 5 yr": ({"q": 2.2, "e": 0.15, "tp": 7400.0}, 1800.0, 200, 60),
    "near Earth, 60 d": ({"q": 0.85, "e": 0.45, "tp": 7420.0}, 60.0, 80, 20),
    "hyperbolic, 90 d": ({"q": 0.9, "e": 1.4, "tp": 7250.0}, 90.0, 150, 40),
    "Centaur, 4 yr": ({"q": 8.0, "e": 0.3, "tp": 7400.0}, 1500.0, 120, 40),
    "parabolic, inbound": ({"q": 1.5, "e": 1.0, "tp": 7700.0}, 150.0, 100, 30),
}


@pytest.mark.parametrize("name", CLASSES)
def test_true_arcs_lie_in_the_bracket_of_their_outline(name):
    elements, span_d, n_obs, nights = CLASSES[name]
    orbit = Orbit.from_elements(epoch=FIRST_D, i=11.0, node=80.0, argperi=40.0, **elements)
    ephemeris, thrust = load_ephemeris(), Thrust("inverse-square")
    sun = np.concatenate(ephemeris.posvel("sun", FIRST_D))
    times = np.linspace(0.0, span_d, 60)
    path = propagate_two_body(orbit.state_vector - sun, times)[:, :3]
    earth = ephemeris.position_au("earth", FIRST_D + times) - ephemeris.position_au(
        "sun", FIRST_D + times
    )
    r, delta = np.linalg.norm(path, axis=1), np.linalg.norm(path - earth, axis=1)
    outline = Geometry(
        n_obs=n_obs,
        nights=nights,
        span_d=span_d,
        sigma_arcsec=0.4,
        r_au=(float(r[0]), float(r[-1])),
        delta_au=(float(delta.min()), float(delta.max())),
    )
    true = arc_information(orbit.state_vector - sun, outline, nights, thrust)
    like = simulated_information(outline, thrust, np.random.default_rng(1))
    readings = [lambda info: info.eigenvalues[0] ** -0.5]
    readings += [lambda info, c=c: float(info.sigma_free(c).value) for c in "RTN"]
    for reading in readings:
        values = [reading(info) for info in like]
        assert min(values) / 3.0 < reading(true) < 3.0 * max(values)
