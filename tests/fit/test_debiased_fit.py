"""A fit whose star catalogue is off by a known table: with the table, and without."""

import numpy as np
import pytest

from ngbound.arc import ErrorModel, debiased
from ngbound.arc.catalogue_offsets import CORRECTED, NO_OFFSET
from ngbound.constants import ARCSEC_RAD
from ngbound.fit import error_variants, fit_orbit
from ngbound.motion import Thrust
from tests.fit.simulated import BELT, Truth, nights, orbit_of, simulate

NSIDE = 8


@pytest.fixture(scope="module")
def table(tmp_path_factory):
    """A table for USNO-A2.0 alone."""
    rng = np.random.default_rng(4)
    values = rng.normal([0.1, 0.25, 2.0, -3.0], [0.15, 0.15, 2.0, 2.0], (12 * NSIDE**2, 4))
    path = tmp_path_factory.mktemp("bias") / "bias.dat"
    path.write_text("! c\n" + "\n".join(" ".join(f"{x:.4f}" for x in row) for row in values))
    return str(path)


@pytest.fixture(scope="module")
def spoilt(table):
    """An arc whose old part was reduced with the spoilt catalogue."""
    mjd = nights(55000, 2400.0, 45, 3)
    catalogue = ["USNOA2" if day < 56500 else "Gaia2" for day in mjd]
    truth = simulate(orbit_of(BELT), mjd, np.random.default_rng(8), 0.2, 0.05, catalogue=catalogue)
    clean = truth.arc.table
    shift = debiased(truth.arc, table).table[["bias_ra_arcsec", "bias_dec_arcsec"]].fillna(0.0)
    cos = np.cos(clean["dec_rad"])
    frame = clean.assign(
        ra=clean["ra"] + shift["bias_ra_arcsec"] / 3600.0 / cos,
        dec=clean["dec"] + shift["bias_dec_arcsec"] / 3600.0,
    )
    return Truth(type(truth.arc).from_frame(frame), truth.orbit, truth.outlier)


@pytest.fixture(scope="module")
def fits(spoilt, table):
    model = ErrorModel(night_common_arcsec=0.05, debiasing=table)
    better = fit_orbit(spoilt.arc, Thrust("inverse-square"), model)
    return better, fit_orbit(
        spoilt.arc, Thrust("inverse-square"), ErrorModel(night_common_arcsec=0.05), initial=better
    )


def test_the_offsets_are_taken_out(fits, spoilt):
    better, _ = fits
    old = (better.used.table["astCat"] == "USNOA2").to_numpy()
    mean = np.mean(better.seen[old], axis=0) / ARCSEC_RAD
    assert np.abs(mean).max() < 0.05
    assert better.reduced_chi2 == pytest.approx(1.0, abs=0.25)
    assert (np.abs(better.A.value / better.A_sigma.value) < 3.5).all()
    assert better.offsets["pull"].abs().max() < 4.0


def test_the_thrust_is_known_better_than_without_the_table(fits):
    better, raw = fits
    assert (better.A_sigma.value < 0.8 * raw.A_sigma.value).any()
    assert (better.A_sigma.value < 1.01 * raw.A_sigma.value).all()


def test_what_was_done_is_on_record(fits):
    better, _ = fits
    told = better.to_dict()["catalogue_treatments"]
    old = int((better.used.table["astCat"] == "USNOA2").sum())
    assert told == {CORRECTED: old, NO_OFFSET: len(better.used) - old}
    assert f"{old:6d}  {CORRECTED}" in better.error_report
    assert "catalogue USNOA2 corrected, Dec" in better.error_report


def test_leaving_the_positions_as_they_are_is_a_variant(fits):
    better, raw = fits
    assert "not debiased" in [variant.name for variant in error_variants(better.error_model)]
    assert "not debiased" not in [variant.name for variant in error_variants(raw.error_model)]
