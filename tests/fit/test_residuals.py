import numpy as np
import pytest

from ngbound.constants import ARCSEC_RAD
from ngbound.fit import fit_orbit
from ngbound.motion import predict
from tests.fit.simulated import BELT, MJD_2020, nights, orbit_of, simulate


@pytest.fixture(scope="module")
def fit():
    truth = simulate(orbit_of(BELT), nights(MJD_2020, 300, 8, 3), np.random.default_rng(9))
    return fit_orbit(truth.arc, initial=truth.orbit)


def test_one_row_an_observation_in_order_of_time(fit):
    table = fit.residuals
    assert len(table) == len(fit.used) == 24
    assert (np.diff(table["tdb_d"]) > 0).all()
    assert table["keep"].tolist() == fit.keep.tolist()
    assert table["ra_arcsec"].to_numpy() == pytest.approx(fit.seen[:, 0] / ARCSEC_RAD)


def test_along_and_across_are_a_rotation_of_ra_and_dec(fit):
    t = fit.residuals
    assert np.hypot(t["along_arcsec"], t["across_arcsec"]).to_numpy() == pytest.approx(
        np.hypot(t["ra_arcsec"], t["dec_arcsec"]).to_numpy()
    )
    speed = np.hypot(t["motion_ra_arcsec_h"], t["motion_dec_arcsec_h"])
    east, north = t["motion_ra_arcsec_h"] / speed, t["motion_dec_arcsec_h"] / speed
    again = t["along_arcsec"] * east - t["across_arcsec"] * north
    assert again.to_numpy() == pytest.approx(t["ra_arcsec"].to_numpy())


def test_motion_and_distances_are_those_of_the_prediction(fit):
    row = fit.residuals.iloc[5]
    hour = 1.0 / 24.0
    seen = predict(fit.orbit, row["tdb_d"] + np.array([-0.5, 0.0, 0.5]) * hour, "500")
    north = (seen["dec_deg"][2] - seen["dec_deg"][0]) * 3600.0
    east = (seen["ra_deg"][2] - seen["ra_deg"][0]) * 3600.0 * np.cos(np.radians(seen["dec_deg"][1]))
    assert row["motion_dec_arcsec_h"] == pytest.approx(north, abs=0.01)
    assert row["motion_ra_arcsec_h"] == pytest.approx(east, abs=0.01)
    assert row["delta_au"] == pytest.approx(seen["range_au"][1], abs=1e-8)
    assert row["r_au"] == pytest.approx(seen["r_au"][1], abs=1e-7)


def test_chi_is_the_size_of_the_residual_in_its_own_error(fit):
    t = fit.residuals
    rough = np.hypot(t["ra_arcsec"] / t["sigma_ra_arcsec"], t["dec_arcsec"] / t["sigma_dec_arcsec"])
    kept = t["keep"].to_numpy()
    # what the fit absorbed makes the expected residual smaller, so chi is the larger of the two
    assert (t["chi"][kept] >= rough[kept] - 1e-9).all()
    assert (t["chi"][kept] < 1.6 * rough[kept]).all()
