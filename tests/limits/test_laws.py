import json
from dataclasses import replace

import numpy as np
import pytest

from ngbound.arc import ErrorModel
from ngbound.errors import LimitError
from ngbound.fit import compare_fits, fit_orbit
from ngbound.limits import compare_laws
from ngbound.limits.laws import _log_evidence
from ngbound.motion import Thrust
from tests.fit.simulated import BELT, MJD_2020, nights, orbit_of, simulate
from tests.limits.arcs import CLASSES, ERRORS, simulated_arc

# far enough inbound that water ice shuts down and the inverse square does not
WIDE = replace(
    CLASSES["comet, 200 days through perihelion"], first_mjd=58400, span_d=1300.0, n_nights=50
)
LAWS = ("inverse-square", "water-ice")


def test_laws_are_told_apart_where_they_differ():
    strong = Thrust("water-ice", A=(3e-8, 3e-9, 0.0))
    arc, orbit = simulated_arc(WIDE, thrust=strong)
    found = compare_laws(
        arc, LAWS, seed=1, initial=orbit, error_model=ERRORS, reject=False, n_draws=1024
    )
    assert found.preferred == "water-ice"
    assert found.can_tell
    assert "can tell the laws apart" in found.sentence
    assert (
        found.table.loc["water-ice", "delta_bic"] > found.table.loc["inverse-square", "delta_bic"]
    )
    # the noise-free difference of the fits is the square of the separation, within its 2 D sigma
    distance = found.separation.loc["water-ice", "inverse-square"]
    difference = found.table.loc["inverse-square", "chi2"] - found.table.loc["water-ice", "chi2"]
    assert abs(difference - distance**2) < 4.0 * 2.0 * distance
    json.dumps(found.to_dict())


def test_laws_are_compared_under_common_errors_where_these_come_from_the_scatter():
    thrust = Thrust("inverse-square", components="T", A=(0.0, 2.85e-9, 0.0))
    arc = simulate(
        orbit_of(BELT, thrust), nights(MJD_2020, 700, 50, 4), np.random.default_rng(5), stated=False
    )
    errors = ErrorModel(catalogue_offsets=False, station_offset_arcsec=0.0)
    start = {"error_model": errors, "initial": arc.orbit}
    found = compare_laws(arc.arc, LAWS, seed=1, components="T", n_draws=512, **start)
    null = fit_orbit(arc.arc, None, **start)
    push = fit_orbit(arc.arc, Thrust("inverse-square", components="T"), **start)
    assert push.scales and push.scales != null.scales
    two = compare_fits(null, push)
    row = found.table.loc["inverse-square"]
    assert row["delta_chi2"] == pytest.approx(two.delta_chi2, rel=0.01) and row["delta_chi2"] > 100
    assert row["significance_sigma"] == pytest.approx(two.sigma, abs=0.1)
    assert found.preferred == "inverse-square"


def test_an_arc_without_thrust_prefers_gravity_and_cannot_tell():
    kind = replace(CLASSES["comet, 200 days through perihelion"], n_nights=20)
    arc, orbit = simulated_arc(kind)
    found = compare_laws(
        arc, LAWS, seed=1, initial=orbit, error_model=ERRORS, components="R", reject=False,
        n_draws=1024,
    )  # fmt: skip
    assert found.preferred == "gravity alone"
    assert not found.can_tell
    assert "cannot tell" in str(found)
    assert found.table["probability"].sum() == pytest.approx(1.0)
    # one component, linear theory: ln[sqrt(2 pi) sigma exp(gain / 2) / (2 edge)]
    fit = found.fits["inverse-square"]
    gain = found.table.loc["inverse-square", "delta_chi2"]
    sigma = float(fit.A_sigma[0].value)
    linear = 0.5 * gain + np.log(np.sqrt(2.0 * np.pi) * sigma / (2.0 * found.upper_au_d2))
    assert found.table.loc["inverse-square", "ln_evidence"] == pytest.approx(linear, abs=0.15)


def test_evidence_of_gravity_alone_is_its_gaussian_volume():
    kind = replace(CLASSES["comet, 200 days through perihelion"], n_nights=20)
    arc, orbit = simulated_arc(kind)
    null = compare_laws(
        arc, LAWS[:1], seed=1, initial=orbit, error_model=ERRORS, reject=False, n_draws=64
    ).null
    value, error = _log_evidence(null, None, 2048, np.random.default_rng(1))
    scale = np.sqrt(np.diag(null.theta_cov))
    half = 0.5 * np.linalg.slogdet(null.theta_cov / np.outer(scale, scale))[1] + np.log(scale).sum()
    gaussian = 3.0 * np.log(2.0 * np.pi) + half - 0.5 * null.chi2
    assert abs(value - gaussian) < 5.0 * error


def test_laws_must_be_given_once():
    arc, orbit = simulated_arc(WIDE)
    for laws in ((), ("water-ice", "water-ice")):
        with pytest.raises(LimitError, match="each once"):
            compare_laws(arc, laws, seed=1, initial=orbit)
