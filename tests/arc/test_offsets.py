import numpy as np
import pandas as pd
import pytest

from ngbound.arc import Arc, ErrorModel, catalogue_priors, prior_of, seasons
from ngbound.arc.catalogue_offsets import catalogue_offsets
from ngbound.arc.instrument_offsets import photocentre_offset, station_clocks, station_offsets
from ngbound.constants import ARCSEC_RAD
from ngbound.errors import CaseError


def arc_of(days, catalogues, stations=None, stated=None):
    n = len(days)
    frame = pd.DataFrame(
        {
            "permID": "999999",
            "mode": "CCD",
            "stn": stations or ["568"] * n,
            "obsTime": [f"{d}T05:00:00Z" for d in days],
            "ra": np.linspace(100.0, 101.0, n),
            "dec": np.linspace(10.0, 10.5, n),
            "astCat": catalogues,
        }
    )
    if stated:
        frame["rmsRA"] = frame["rmsDec"] = stated
    return Arc.from_frame(frame).used


DAYS = ["2004-01-10", "2004-02-10", "2005-04-01", "2005-04-20", "2006-07-01"]
CATS = ["USNOA2", "USNOA2", "USNOA2", "Gaia2", "UCAC4"]


def test_every_catalogue_of_the_exchange_format_has_a_prior_with_its_source():
    priors = catalogue_priors()
    assert len(priors) > 55
    for prior in priors.values():
        assert prior.source and prior.status
        assert 0.0 <= prior.position_arcsec <= 0.3 and 0.0 <= prior.motion_mas_yr <= 4.0


def test_sizes_grow_from_the_epoch_of_the_catalogue():
    prior = prior_of("USNOA2")
    mjd = 51544.5 + 365.25 * np.array([-45.0, 5.0])
    assert prior.sigma_arcsec(mjd) == pytest.approx([0.26, np.hypot(0.26, 0.2)])
    assert prior_of("Gaia3").sigma_arcsec(mjd).max() == 0.0
    assert prior_of("no such catalogue") is catalogue_priors()["*"]
    assert prior_of("") is catalogue_priors()["UNK"]


def test_seasons_are_parted_by_gaps():
    assert seasons(arc_of(DAYS, CATS)).tolist() == [0, 0, 1, 1, 2]


def test_one_offset_for_the_arc_and_one_a_season():
    shared = catalogue_offsets(arc_of(DAYS, CATS))
    assert shared.names == (
        "catalogue UCAC4, RA",
        "catalogue UCAC4, Dec",
        "catalogue USNOA2, RA",
        "catalogue USNOA2, Dec",
        "catalogue USNOA2 season 2004-01, RA",
        "catalogue USNOA2 season 2004-01, Dec",
        "catalogue USNOA2 season 2005-04, RA",
        "catalogue USNOA2 season 2005-04, Dec",
    )
    matrix = shared.matrix.reshape(5, 2, 8)
    assert matrix[3].max() == 0.0
    assert (matrix[:3, 1, 3] > 0.3 * ARCSEC_RAD).all() and matrix[:, 0, 3].max() == 0.0
    assert np.flatnonzero(matrix[:, 1, 5]).tolist() == [0, 1]
    assert np.flatnonzero(matrix[:, 1, 7]).tolist() == [2]
    half = catalogue_offsets(arc_of(DAYS, CATS), scale=0.5, by_season=False)
    assert len(half) == 4
    assert half.matrix == pytest.approx(0.5 * shared.matrix[:, :4])


def test_station_clock_and_photocentre_patterns():
    arc = arc_of(DAYS, CATS, ["568", "G96", "568", "G96", "568"])
    offsets = station_offsets(arc, np.array([0.1, 0.0, 0.1, 0.0, 0.2]))
    assert offsets.names == ("station 568, RA", "station 568, Dec")
    assert offsets.matrix[:, 0] / ARCSEC_RAD == pytest.approx([0.1, 0, 0, 0, 0.1, 0, 0, 0, 0.2, 0])
    motion = np.arange(10.0).reshape(5, 2)
    clocks = station_clocks(arc, 2.0, motion)
    assert clocks.matrix[:, 1] / ARCSEC_RAD == pytest.approx([0, 0, 4, 6, 0, 0, 12, 14, 0, 0])
    light = photocentre_offset(3.0, motion)
    assert light.matrix[:, 0] / ARCSEC_RAD == pytest.approx(3.0 * motion.ravel())


def test_the_default_model_gives_offsets_where_errors_are_implied():
    named = ErrorModel().apply(arc_of(DAYS, CATS)).shared.names
    assert any(n.startswith("catalogue USNOA2") for n in named)
    assert any(n.startswith("station 568") for n in named)
    # stated errors keep the catalogues, but not the stations
    named = ErrorModel().apply(arc_of(DAYS, CATS, stated=0.2)).shared.names
    assert not any(n.startswith("station") for n in named)
    assert ErrorModel().apply(arc_of(DAYS, ["Gaia3"] * 5, stated=0.2)).shared is None
    assert ErrorModel(scheme="uniform").apply(arc_of(DAYS, CATS)).shared is None


def test_offsets_can_be_asked_for_and_switched_off():
    arc = arc_of(DAYS, CATS)
    none = ErrorModel(catalogue_offsets=False, station_offset_arcsec=0.0)
    assert none.apply(arc).shared is None
    motion = np.ones((5, 2))
    more = ErrorModel(
        scheme="uniform", catalogue_offsets=True, station_offset_arcsec=0.1, clock_s=1.0,
        photocentre_arcsec_au=0.5,
    ).apply(arc, motion, motion)  # fmt: skip
    assert "photocentre sunward" in more.shared.names
    assert "clock of station 568" in more.shared.names
    assert more.shared.to_dict()["station 568, RA"]["prior_sigma"] == 0.1
    with pytest.raises(CaseError, match="clock_s"):
        ErrorModel(clock_s=-1.0)


def test_parts_of_the_noise_are_scaled_apart():
    noise = ErrorModel().apply(arc_of(["2004-01-10"] * 2 + DAYS[2:], CATS))
    wide = noise.with_parts_scaled(2.0, 0.5)
    assert wide.night_common_arcsec == pytest.approx(0.5 * noise.night_common_arcsec)
    own = noise.sigma_ra_arcsec**2 - noise.night_common_arcsec**2
    assert wide.sigma_ra_arcsec**2 - wide.night_common_arcsec**2 == pytest.approx(4.0 * own)
    rows = np.array([0, 1])
    assert wide.covariance_rad2(rows)[0, 2] == pytest.approx(
        0.25 * noise.covariance_rad2(rows)[0, 2]
    )
