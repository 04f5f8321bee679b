"""The scan for several minima: an arc with a rival orbit, and arcs with one orbit only."""

import json

import numpy as np
import pytest

from ngbound.arc import Arc, ErrorModel
from ngbound.fit import fit_orbit, scan_minima
from ngbound.fit.minima import _Local, apparitions
from ngbound.motion import Thrust
from tests.fit.simulated import BELT, MJD_2020, nights, orbit_of, simulate

EPOCH = MJD_2020 - 51544.5 - 9.0


def linked_arc():
    """Eight poor records in three nights, and a single one, off by a minute of arc or so, ten years
    before: nobody knows how often the object went round in between."""
    orbit = orbit_of(dict(BELT, i=0.2))
    when = np.concatenate([nights(MJD_2020 - 3600, 1, 1, 1), nights(MJD_2020 - 10, 2.5, 4, 2)])
    truth = simulate(orbit, when, np.random.default_rng(1), sigma_arcsec=3.0)
    frame = truth.arc.table.copy()
    off = 60.0 * np.random.default_rng(9).normal(size=2) / 3600.0
    frame.loc[0, "ra"] += off[0] / np.cos(frame["dec_rad"][0])
    frame.loc[0, "dec"] += off[1]
    frame.loc[0, ["rmsRA", "rmsDec"]] = 60.0
    return Arc.from_frame(frame), orbit


@pytest.fixture(scope="module")
def ambiguous():
    arc, orbit = linked_arc()
    return scan_minima(fit_orbit(arc, error_model=ErrorModel(), initial=orbit, epoch_tdb_d=EPOCH))


@pytest.mark.slow
def test_a_rival_orbit_with_another_number_of_revolutions_is_found(ambiguous):
    assert ambiguous.fit_is_best
    assert ambiguous.n_apparitions == 2
    (rival, *_) = ambiguous.rivals
    assert 0.5 < rival.chi2 - ambiguous.best.chi2 < 25.0
    turns = 3600.0 / ambiguous.best.period_d, 3600.0 / rival.period_d
    assert abs(turns[0] - turns[1]) == pytest.approx(1.0, abs=0.5)


@pytest.mark.slow
def test_the_user_is_told(ambiguous):
    assert "other orbit" in ambiguous.warning and "period" in ambiguous.warning
    assert ambiguous.warning in str(ambiguous)
    told = json.loads(json.dumps(ambiguous.to_dict()))
    assert told["minima"][0]["delta_chi2"] == 0.0
    assert told["minima"][1]["delta_chi2"] > 0.0


@pytest.mark.slow
def test_a_fit_settles_in_another_minimum_and_the_scan_leads_out_of_it(ambiguous):
    fit = ambiguous.fit
    short = min(ambiguous.minima[1:], key=lambda m: abs(m.period_d - 823.0))
    assert short.period_d == pytest.approx(823.0, abs=5.0)
    wrong = fit_orbit(
        fit.arc, error_model=fit.error_model, initial=ambiguous.orbit(short), reject=False,
        keep=fit.keep, epoch_tdb_d=fit.orbit.epoch_tdb_d,
    )  # fmt: skip
    # it is a minimum indeed: differential correction, which knows nothing of the scan, stays there
    assert wrong.chi2 == pytest.approx(short.chi2, abs=2.0)
    scan = scan_minima(wrong)
    assert not scan.fit_is_best
    assert scan.best.chi2 < wrong.chi2 - 10.0


def test_an_arc_of_one_apparition_has_one_minimum():
    truth = simulate(orbit_of(BELT), nights(MJD_2020, 60, 8, 3), np.random.default_rng(2))
    scan = scan_minima(fit_orbit(truth.arc, initial=truth.orbit))
    assert len(scan.minima) == scan.n_apparitions == 1
    assert scan.complete and scan.warning == "" and scan.rivals == ()


@pytest.mark.slow
def test_a_comet_of_three_apparitions_has_one_minimum_from_zero_and_from_the_neighbour():
    thrust = Thrust("inverse-square", components="RT", A=(2e-9, 8e-9, 0.0))
    elements = {"q": 1.3, "e": 0.6, "i": 12.0, "node": 80.0, "argperi": 40.0, "tp": 7320.0}
    when = np.concatenate([nights(MJD_2020 - back, 60, 8, 3) for back in (20, 2140, 4280)])
    truth = simulate(orbit_of(elements, thrust), when, np.random.default_rng(3), 0.5)
    free = Thrust("inverse-square", components="RT")
    null = fit_orbit(truth.arc)
    from_zero = fit_orbit(truth.arc, free, initial=null.orbit)
    neighbour = fit_orbit(truth.arc, Thrust("inverse-square", components="T"), initial=null.orbit)
    from_there = fit_orbit(truth.arc, free, initial=neighbour.orbit)
    off = from_zero.theta - from_there.theta
    assert off @ from_zero.normal @ off < 0.05**2
    assert (np.abs(from_zero.A.value - (2e-9, 8e-9)) < 4.0 * from_zero.A_sigma.value).all()
    scan = scan_minima(from_zero)
    assert scan.n_apparitions == 3 and scan.fit_is_best
    assert scan.rivals == () and scan.complete


def test_apparitions_are_parted_by_gaps():
    when = np.concatenate([nights(MJD_2020 - back, 30, 4, 2) for back in (0, 700, 1400)])
    truth = simulate(orbit_of(BELT), when, np.random.default_rng(4))
    parts = apparitions(fit_orbit(truth.arc, initial=truth.orbit))
    assert [int(part.sum()) for part in parts] == [8, 8, 8]


def test_partials_of_the_local_coordinates():
    theta = np.array([1.9, -1.2, 0.4, 0.006, 0.008, -0.002, 1e-9])
    local = _Local(theta, 7300.0)
    assert local.moved(np.zeros(7)) == pytest.approx(theta, abs=1e-14)
    for i, step in enumerate(np.eye(7) * 1e-6):
        slope = (local.moved(step) - local.moved(-step)) / 2e-6
        assert slope == pytest.approx(local.jacobian[:, i], abs=1e-8)
