import json

import numpy as np
import pytest

from ngbound.arc import ErrorModel
from ngbound.fit import diagnose, fit_orbit
from ngbound.motion import Thrust
from tests.fit.simulated import BELT, MJD_2020, nights, orbit_of, simulate

WHEN = nights(MJD_2020, 1200, 40, 4)
SIMPLE = ErrorModel(catalogue_offsets=False)


def pushed(truth, model=SIMPLE):
    return fit_orbit(truth.arc, Thrust("inverse-square"), model, initial=truth.orbit)


@pytest.fixture(scope="module")
def good():
    truth = simulate(orbit_of(BELT), WHEN, np.random.default_rng(21), stations=("500", "568"))
    fit = pushed(truth)
    return fit, diagnose(fit)


def test_honest_errors_are_trusted(good):
    fit, told = good
    assert told.trusted and told.reasons == () and told.remarks == ()
    assert told.why.startswith("The residuals may be trusted")
    assert told.noise_scale == pytest.approx(1.0, abs=5 * told.noise_scale_error)
    assert (np.abs(told.runs_z) < 4.0).all() and (told.ljung_box_p > 1e-3).all()
    assert told.normal_p > 1e-4
    assert len(told.nights) == 40
    assert set(told.groups["kind"]) == {"station", "catalogue", "season"}
    assert told.groups["z_dec"].abs().max() < 4.5
    json.dumps(told.to_dict())
    assert "chi2 per degree of freedom" in str(told)


def test_leaving_a_night_out_is_what_a_fit_without_it_gives(good):
    fit, told = good
    night = told.nights.iloc[7]
    day = fit.used.table["utc_day"].to_numpy()
    keep = fit.keep & (day != night["utc_day"])
    again = fit_orbit(
        fit.arc, fit.thrust, SIMPLE, initial=fit.orbit, reject=False, keep=keep,
        epoch_tdb_d=fit.orbit.epoch_tdb_d,
    )  # fmt: skip
    old = np.sqrt(np.diag(fit.theta_cov)[6:])
    moved = np.max(np.abs(again.theta[6:] - fit.theta[6:]) / old)
    ratio = np.max(np.sqrt(np.diag(again.theta_cov)[6:]) / old)
    assert night["moved_sigma"] == pytest.approx(moved, abs=0.02)
    assert night["threshold_ratio"] == pytest.approx(ratio, rel=2e-3)


def test_leaving_a_station_out_is_what_a_fit_without_it_gives(good):
    fit, told = good
    row = told.left_out.set_index("stn").loc["568"]
    keep = fit.keep & (fit.used.table["stn"].to_numpy() != "568")
    again = fit_orbit(
        fit.arc, fit.thrust, SIMPLE, initial=fit.orbit, reject=False, keep=keep,
        epoch_tdb_d=fit.orbit.epoch_tdb_d,
    )  # fmt: skip
    sigma = np.sqrt(np.diag(again.theta_cov)[6:])
    for i, name in enumerate(("A1", "A2", "A3")):
        assert row[name] == pytest.approx(again.theta[6 + i], abs=0.03 * sigma[i])
        assert row[f"{name}_sigma"] == pytest.approx(sigma[i], rel=5e-3)


def test_a_catalogue_that_is_off_is_named():
    rng = np.random.default_rng(22)
    cats = ["Gaia2" if i < 80 else "USNOA2" for i in range(len(WHEN))]
    truth = simulate(
        orbit_of(BELT), WHEN, rng, catalogue=cats, offsets_arcsec={"USNOA2": (0.0, 0.5)}
    )
    bad = diagnose(pushed(truth))
    assert not bad.trusted
    assert "USNOA2" in bad.why
    # with the published prior of its offset the same residuals are explained
    assert diagnose(pushed(truth, ErrorModel())).trusted


def test_nights_with_a_common_error_that_is_not_allowed_for():
    truth = simulate(orbit_of(BELT), WHEN, np.random.default_rng(23), common_arcsec=0.6)
    bad = diagnose(pushed(truth))
    assert not bad.trusted and "chi2 per degree of freedom" in bad.why
    better = pushed(truth, ErrorModel(night_common_arcsec=0.6))
    assert diagnose(better).trusted


def test_gravity_only_has_no_influence_on_thrust():
    truth = simulate(orbit_of(BELT), WHEN[:60], np.random.default_rng(24))
    told = diagnose(fit_orbit(truth.arc, error_model=SIMPLE, initial=truth.orbit))
    assert "moved_sigma" not in told.nights and told.left_out.empty


def test_a_night_that_decides_alone_is_a_remark_and_no_doubt_of_the_noise():
    # one night at the far end of an arc that is dense elsewhere
    when = np.concatenate([nights(MJD_2020, 300, 30, 4), [MJD_2020 + 1200.0]])
    truth = simulate(orbit_of(BELT), when, np.random.default_rng(22))
    told = diagnose(pushed(truth))
    assert told.trusted
    (remark,) = told.remarks
    assert "the night of 500" in remark and remark in str(told)
    assert told.nights["threshold_ratio"].max() > 2.0
