"""A real arc: asteroid 12893, 1401 records from 1983 to 2019, 14 of them from a spacecraft.

Source: the answer of the Minor Planet Center's observations database that the PyPI package
astroquery carries in its tests (astroquery/mpc/tests/data/mpc_obs.dat). With uniform weights the
arc shows an impossible normal thrust in a dead rock, at 15 sigma, because old star catalogues are
off in declination: two independent programs written for this purpose agree on
A3 = (2.63 +- 0.17)e-10 au/d2.
"""

import numpy as np
import pytest

from ngbound.arc import ErrorModel, read_arc
from ngbound.fit import compare_fits, diagnose, fit_orbit
from ngbound.motion import Thrust
from ngbound.report import catalogue_table, station_table
from tests.external.records_12893 import file_12893

pytestmark = pytest.mark.slow

UNIFORM = ErrorModel(scheme="uniform", uniform_arcsec=0.6, uniform_before_1996_arcsec=1.0)
USNO_A_FAMILY = ("USNOA1", "USNOSA1", "USNOA2", "USNOSA2")


@pytest.fixture(scope="module")
def arc():
    return read_arc(file_12893())


@pytest.fixture(scope="module")
def null(arc):
    return fit_orbit(arc)


@pytest.fixture(scope="module")
def uniform(arc, null):
    calm = fit_orbit(arc, error_model=UNIFORM, initial=null)
    return calm, fit_orbit(arc, Thrust("inverse-square"), UNIFORM, initial=calm)


@pytest.fixture(scope="module")
def push(arc, null):
    return fit_orbit(arc, Thrust("inverse-square"), initial=null)


def test_all_records_are_read(arc):
    assert len(arc) == 1401
    assert len(arc.used) == 1401
    assert (arc.table["site"] == "space").sum() == 14
    assert 35.0 < arc.span_d / 365.25 < 35.5


def test_gravity_alone_from_nothing_over_all_35_years(null):
    assert null.weighted_rms_arcsec < 0.6
    assert null.n_rejected < 0.03 * 1401
    seen = null.residuals
    first, last = seen["utc"].min(), seen["utc"].max()
    assert first < "1984" and last > "2018-12"
    kept = seen[seen["keep"]]
    assert kept["utc"].min() == first and kept["utc"].max() == last
    # the elements of a main-belt asteroid: those in its published ephemerides, from memory
    k = null.orbit.elements()
    assert k.q_au == pytest.approx(2.64, abs=0.02)
    assert np.degrees(k.i_rad) == pytest.approx(2.3, abs=0.05)


def test_uniform_weights_show_the_known_false_normal_thrust(uniform):
    calm, push = uniform
    a3, sigma = push.A.value[2], push.A_sigma.value[2]
    assert a3 == pytest.approx(2.6e-10, abs=0.2e-10)
    assert a3 / sigma == pytest.approx(15.0, abs=2.0)
    # nothing else is seen
    assert (np.abs(push.A.value / push.A_sigma.value)[:2] < 3.0).all()
    told = compare_fits(calm, push)
    assert told.delta_chi2 == pytest.approx(240.0, abs=60.0)
    assert told.delta_bic > 100.0


def test_the_catalogue_table_gives_the_cause_away(uniform):
    calm, _ = uniform
    table = catalogue_table(calm).frame.set_index("catalogue")
    north = table["mean_dec_arcsec"]
    family = [name for name in USNO_A_FAMILY if name in table.index and table.loc[name, "n"] >= 20]
    assert "USNOA2" in family and "USNOSA2" in family
    assert (north[family] > 0.05).all()
    assert (north[["USNOA2", "USNOSA2"]] > 0.2).all() and (north[family] < 0.6).all()
    assert table.loc["USNOA2", "flag_dec"] == "*"
    # modern catalogues are near zero
    assert (north[["UCAC2", "UCAC4", "Gaia1", "2MASS"]].abs() < 0.12).all()
    assert "*" in str(catalogue_table(calm))
    assert "*" in str(station_table(calm))


def test_the_default_error_model_explains_every_station(push):
    told = diagnose(push)
    assert push.reduced_chi2 == pytest.approx(1.0, abs=0.2)
    assert push.n_rejected < 0.03 * 1401
    stations = told.groups[(told.groups["kind"] == "station") & (told.groups["n"] >= 20)]
    assert len(stations) >= 10
    assert stations["chi2_per_dof"].between(0.8, 1.2).all()
    assert told.trusted, told.why


def test_the_default_error_model_shows_no_thrust_in_a_dead_rock(null, push, uniform):
    assert (np.abs(push.A.value / push.A_sigma.value) < 3.0).all()
    told = compare_fits(null, push)
    assert told.p_value > 0.0027 and told.delta_bic < 0.0
    # the price: the normal component is known less well than the naive weights make believe
    ratio = push.A_sigma.value[2] / uniform[1].A_sigma.value[2]
    assert 1.5 < ratio < 4.0


def test_the_offsets_of_the_catalogues_come_out_beside_what_is_published(push):
    table = push.offsets.set_index("name")
    row = table.loc["catalogue USNOA2, Dec"]
    assert row["unit"] == "arcsec" and "Eggl" in row["published"]
    assert 0.1 < row["estimate"] < 0.6
    assert row["sigma"] < 0.6 * row["prior_sigma"]
    for modern in ("UCAC2", "UCAC4", "2MASS"):
        assert abs(table.loc[f"catalogue {modern}, Dec", "estimate"]) < 0.1
    # priors hold: no offset further than 4 standard deviations from what is published
    assert table["pull"].abs().max() < 4.0


def test_the_naive_weights_are_found_out(uniform):
    told = diagnose(uniform[1])
    assert not told.trusted
    assert "USNOA2" in told.why or "704" in told.why
