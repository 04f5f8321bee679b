"""Errors of observations and whitening, against dense covariances and worked numbers."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ngbound.arc import Arc, ErrorModel, Noise, station_nights, weight_table
from ngbound.constants import ARCSEC_RAD
from ngbound.errors import ArcError, CaseError
from tests.arc.samples import frame


def arc(n: int = 6, **columns: object) -> Arc:
    return Arc.from_frame(frame(n, **columns)).used


def dense(noise: Noise) -> np.ndarray:
    return noise.covariance_rad2(np.arange(len(noise)))


def test_stated_errors_are_taken_as_they_are() -> None:
    noise = ErrorModel().apply(arc(rmsRA=0.2, rmsDec=0.3, rmsCorr=0.5))
    np.testing.assert_allclose(noise.sigma_ra_arcsec, 0.2)
    np.testing.assert_allclose(noise.sigma_dec_arcsec, 0.3)
    np.testing.assert_allclose(noise.corr, 0.5)
    np.testing.assert_array_equal(noise.night_common_arcsec, 0.0)
    assert set(noise.source) == {"stated"}


def test_table_errors_have_a_common_part() -> None:
    noise = ErrorModel().apply(arc())  # station G96: 0.5 arcsec in the table
    np.testing.assert_allclose(noise.sigma_ra_arcsec, 0.5)
    np.testing.assert_allclose(noise.night_common_arcsec, 0.25)
    assert set(noise.source) == {"table: station G96 (from memory)"}
    cov = dense(noise) / ARCSEC_RAD**2
    assert (
        cov[0, 0] == pytest.approx(0.25) and cov[0, 2] == pytest.approx(0.0625) and cov[0, 3] == 0.0
    )
    assert cov[0, 6] == 0.0  # the next night
    # the mean of a night of many observations keeps the common part, as sigma sqrt(N/4) / sqrt(N)
    # would
    many = (
        ErrorModel()
        .apply(Arc.from_frame(frame(3)).used)
        .covariance_rad2(np.zeros(400, dtype=np.int64))
    )
    assert np.sqrt(many[0::2, 0::2].mean()) == pytest.approx(0.25 * ARCSEC_RAD, rel=0.01)


@pytest.mark.parametrize(
    ("columns", "sigma"),
    [
        ({"stn": "703"}, 0.8),
        ({"stn": "703", "obsTime": "2013-12-31T23:59:59Z"}, 1.0),
        ({"stn": "703", "obsTime": "2014-01-01T00:00:00Z"}, 0.8),
        ({"stn": "691", "obsTime": "2002-06-01T00:00:00Z"}, 0.6),
        ({"stn": "568", "astCat": "Gaia3"}, 0.1),
        ({"stn": "568", "astCat": "USNOB1"}, 0.5),
        ({"stn": "568", "astCat": "UNK"}, 1.5),
        ({"stn": "G83", "prog": "02"}, 0.2),
        ({"stn": "G83"}, 1.0),
        ({"stn": "000"}, 1.0),
        ({"stn": "000", "astCat": "UNK"}, 1.5),
        ({"stn": "F51", "mode": "PHO"}, 2.5),
        ({"stn": "000", "mode": "PHO", "obsTime": "1930-01-01T00:00:00Z"}, 5.0),
        ({"stn": "000", "mode": "PHO", "obsTime": "1880-01-01T00:00:00Z"}, 10.0),
        ({"stn": "000", "mode": "MIC"}, 3.0),
        ({"stn": "000", "mode": "XYZ"}, 1.0),
        ({"stn": "248", "mode": "UNK"}, 0.2),
        ({"stn": "250", "sys": "ICRF_KM", "ctr": 399, "pos1": 1.0, "pos2": 2.0, "pos3": 3.0}, 1.5),
        ({"stn": "C51", "sys": "ICRF_KM", "ctr": 399, "pos1": 1.0, "pos2": 2.0, "pos3": 3.0}, 1.0),
    ],
)
def test_the_table(columns: dict, sigma: float) -> None:
    noise = ErrorModel(over_observing="none").apply(arc(1, **columns))
    np.testing.assert_allclose(noise.sigma_ra_arcsec, sigma)
    np.testing.assert_allclose(noise.sigma_dec_arcsec, sigma)


def test_the_table_says_how_sure_it_is() -> None:
    assert {row.status for row in weight_table()} == {"from memory"}
    assert all("Veres" in row.source for row in weight_table())


def test_one_coordinate_stated() -> None:
    noise = ErrorModel().apply(arc(rmsRA=0.2))
    np.testing.assert_allclose(noise.sigma_ra_arcsec, 0.2)
    np.testing.assert_allclose(noise.sigma_dec_arcsec, 0.5)
    assert noise.source[0].endswith("for Dec, RA stated")
    np.testing.assert_array_equal(noise.night_common_arcsec, 0.0)


def test_digits_floor_and_scale() -> None:
    a = arc(rmsRA=0.01, rmsDec=0.01, ra="120.12", dec="10.1234567")
    noise = ErrorModel().apply(a)
    np.testing.assert_allclose(
        noise.sigma_ra_arcsec, 36.0 * np.cos(np.radians(10.1234567)) / np.sqrt(12.0)
    )
    np.testing.assert_allclose(noise.sigma_dec_arcsec, 0.01)
    assert "raised" in noise.source[0]
    np.testing.assert_allclose(ErrorModel(floor_arcsec=0.05).apply(a).sigma_dec_arcsec, 0.05)
    np.testing.assert_allclose(
        ErrorModel(floor_arcsec=0.05, scale=2.0).apply(a).sigma_dec_arcsec, 0.1
    )


def test_uniform() -> None:
    a = arc(2, obsTime=["1995-12-31T23:59:59Z", "1996-01-01T00:00:00Z"], rmsRA=0.1, rmsDec=0.1)
    noise = ErrorModel(scheme="uniform", uniform_arcsec=0.6, uniform_before_1996_arcsec=1.0).apply(
        a
    )
    np.testing.assert_allclose(noise.sigma_ra_arcsec, [1.0, 0.6])
    np.testing.assert_array_equal(noise.night_common_arcsec, 0.0)


def test_common_error_that_the_user_gives_is_added() -> None:
    noise = ErrorModel(night_common_arcsec=0.4).apply(arc(rmsRA=0.3, rmsDec=0.3))
    np.testing.assert_allclose(noise.sigma_ra_arcsec, 0.5)
    np.testing.assert_allclose(noise.night_common_arcsec, 0.4)


def test_over_observing() -> None:
    a = arc(10, obsTime=[f"2024-03-01T03:{i:02d}:00Z" for i in range(9)] + ["2024-03-02T03:00:00Z"])
    noise = ErrorModel(over_observing="sqrt").apply(a)
    np.testing.assert_allclose(noise.sigma_ra_arcsec, [0.5 * 1.5] * 9 + [0.5])
    np.testing.assert_array_equal(noise.night_common_arcsec, 0.0)
    np.testing.assert_allclose(ErrorModel(over_observing="none").apply(a).sigma_ra_arcsec, 0.5)


def test_stated_uncertainty_of_the_clock_is_shared_by_the_station() -> None:
    a = arc(4, rmsRA=0.1, rmsDec=0.1, uncTime=[0.5, 2.0, np.nan, np.nan])
    motion = np.array([[3.0, 4.0], [0.3, 0.4], [1.0, 0.0], [0.0, 0.0]])
    plain = ErrorModel(catalogue_offsets=False, station_offset_arcsec=0.0)
    shared = plain.apply(a, motion).shared
    assert shared is not None and shared.names == ("clock of station G96",)
    assert shared.source == ("stated as uncTime",) and shared.unit == ("s",)
    shift = shared.matrix.reshape(4, 2) / ARCSEC_RAD
    np.testing.assert_allclose(shift, [[1.5, 2.0], [0.6, 0.8], [0.0, 0.0], [0.0, 0.0]])
    # where the observer states none, the user's prior stands
    shared = replace(plain, clock_s=0.2).apply(a, motion).shared
    assert shared is not None
    np.testing.assert_allclose(shared.matrix.reshape(4, 2)[2] / ARCSEC_RAD, [0.2, 0.0])
    assert plain.apply(a).shared is None and plain.apply(arc(4), motion).shared is None


def test_roving_observers_share_a_code_but_no_errors() -> None:
    a = arc(4, stn="247", sys="WGS84", ctr=399, pos1=[10.0, 10.0, 20.0, 20.0], pos2=5.0, pos3=0.0)
    shared = ErrorModel(catalogue_offsets=False, station_offset_arcsec=0.3).apply(a).shared
    assert shared is not None
    assert shared.names[::2] == ("station 247 at 10.00, 5.00, RA", "station 247 at 20.00, 5.00, RA")
    assert (shared.matrix.reshape(4, 2, 4)[:, 0, ::2] > 0.0).tolist() == [
        [True, False], [True, False], [False, True], [False, True]
    ]  # fmt: skip


def test_timing_error_lies_along_the_motion() -> None:
    a = arc(3, rmsRA=0.1, rmsDec=0.1, rmsTime=[0.5, np.nan, np.nan])
    motion = np.array([[3.0, 4.0], [0.3, 0.4], [0.0, 0.0]])
    noise = ErrorModel(timing_s=1.0).apply(a, motion)
    cov = dense(noise) / ARCSEC_RAD**2
    step2 = 1.0 / 12.0  # obsTime is written to the second
    for i, clock in enumerate((0.5, 1.0, 1.0)):
        expected = 0.01 * np.eye(2) + (clock**2 + step2) * np.outer(motion[i], motion[i])
        np.testing.assert_allclose(cov[2 * i : 2 * i + 2, 2 * i : 2 * i + 2], expected, rtol=1e-12)
    still = ErrorModel(timing_s=1.0).apply(a)
    np.testing.assert_allclose(still.sigma_ra_arcsec, 0.1)
    with pytest.raises(ValueError, match="shape"):
        ErrorModel().apply(a, motion[:2])


def test_nights() -> None:
    times = [
        "2024-03-01T20:00:00Z",
        "2024-03-02T07:59:59Z",
        "2024-03-02T19:59:59Z",
        "2024-03-02T20:00:00Z",
    ]
    assert station_nights(arc(4, obsTime=times)).tolist() == [0, 0, 1, 1]
    assert station_nights(arc(4, obsTime=times, stn=["G96", "703", "G96", "703"])).tolist() == [
        0,
        1,
        2,
        3,
    ]
    every = [f"2024-03-{1 + h // 24:02d}T{h % 24:02d}:00:00Z" for h in range(0, 72, 6)]
    assert station_nights(arc(12, obsTime=every)).tolist() == [0] * 4 + [1] * 4 + [2] * 4


def test_two_rovers_are_two_stations() -> None:
    columns = {
        "stn": "247",
        "sys": "WGS84",
        "ctr": 399,
        "pos1": [1.0, 2.0, 1.0],
        "pos2": 5.0,
        "pos3": 0.0,
    }
    assert station_nights(arc(3, **columns)).tolist() == [0, 1, 0]


def random_noise(n: int, nights: int, seed: int) -> Noise:
    rng = np.random.default_rng(seed)
    ra, dec = rng.uniform(0.1, 2.0, n), rng.uniform(0.1, 2.0, n)
    corr = rng.uniform(-0.5, 0.5, n)
    common = 0.6 * np.minimum(ra, dec) * rng.uniform(0.0, 1.0, n)
    return Noise(ra, dec, corr, common, rng.integers(0, nights, n), np.full(n, "x", dtype=object))


@settings(max_examples=30, deadline=None)
@given(st.integers(1, 25), st.integers(1, 8), st.integers(0, 10**6))
def test_whitening_against_the_dense_covariance(n: int, nights: int, seed: int) -> None:
    noise = random_noise(n, nights, seed)
    rng = np.random.default_rng(seed)
    m = rng.normal(size=(2 * n, 3)) * ARCSEC_RAD
    white = noise.whiten(m)
    expected = m.T @ np.linalg.solve(dense(noise), m)
    np.testing.assert_allclose(white.T @ white, expected, rtol=1e-9, atol=1e-9)
    np.testing.assert_allclose(noise.whiten(m[:, 0]), white[:, 0], rtol=1e-12, atol=1e-12)


def test_flat_factors_for_kernels() -> None:
    noise = random_noise(40, 7, 3)
    f = noise.factors()
    r = np.random.default_rng(4).normal(size=80) * ARCSEC_RAD
    assert sorted(f.order.tolist()) == list(range(40))
    chi2, white = 0.0, np.zeros(80)
    for b in range(len(f.start) - 1):
        members = f.order[f.start[b] : f.start[b + 1]]
        assert len(set(noise.night[members])) == 1
        m = len(members)
        inverse = f.flat[f.flat_start[b] : f.flat_start[b + 1]].reshape(2 * m, 2 * m)
        np.testing.assert_array_equal(np.triu(inverse, 1), 0.0)
        rows = np.column_stack([2 * members, 2 * members + 1]).ravel()
        lower = np.linalg.inv(inverse)
        np.testing.assert_allclose(
            lower @ lower.T, noise.covariance_rad2(members), rtol=1e-9, atol=1e-24
        )
        white[rows] = inverse @ r[rows]
        chi2 += float(white[rows] @ white[rows])
    np.testing.assert_allclose(white, noise.whiten(r), rtol=1e-12)
    assert chi2 == pytest.approx(float(r @ np.linalg.solve(dense(noise), r)), rel=1e-9)
    assert (f.start.dtype, f.flat.dtype, f.flat_start.dtype) == (np.int64, np.float64, np.int64)


def test_whitened_noise_is_white() -> None:
    noise = random_noise(30, 5, 8)
    rng = np.random.default_rng(9)
    draws = np.linalg.cholesky(dense(noise)) @ rng.normal(size=(60, 20000))
    white = noise.whiten(draws)
    np.testing.assert_allclose(np.cov(white), np.eye(60), atol=5.0 / np.sqrt(20000))


def test_mask_and_scale() -> None:
    noise = random_noise(20, 4, 5)
    keep = np.arange(20) % 3 != 0
    part = noise.mask(keep)
    np.testing.assert_allclose(dense(part), noise.covariance_rad2(np.flatnonzero(keep)))
    assert len(part) == keep.sum() and part.night.max() < 4
    np.testing.assert_allclose(dense(noise.scaled(2.0)), 4.0 * dense(noise))
    factors = np.linspace(1.0, 2.0, 20)
    np.testing.assert_allclose(
        noise.scaled(factors).sigma_ra_arcsec, noise.sigma_ra_arcsec * factors
    )
    for wrong in (0.0, -1.0, np.nan):
        with pytest.raises(ValueError, match="positive"):
            noise.scaled(wrong)
    with pytest.raises(ValueError, match="mask"):
        noise.mask(np.array([True]))
    with pytest.raises(ValueError, match="2 x 20 rows"):
        noise.whiten(np.zeros(20))


def test_impossible_covariance() -> None:
    ones = np.ones(2)
    noise = Noise(
        ones,
        ones,
        ones * 0.0,
        ones * 1.5,
        np.zeros(2, dtype=np.int64),
        np.full(2, "x", dtype=object),
    )
    with pytest.raises(ArcError, match="not positive definite"):
        noise.factors()


@pytest.mark.parametrize(
    ("choice", "words"),
    [
        ({"scheme": "guess"}, "stated-then-table"),
        ({"over_observing": "log"}, "common, sqrt, none"),
        ({"scale": 0.0}, "above 0"),
        ({"floor_arcsec": -1.0}, "at least 0"),
        ({"timing_s": float("nan")}, "finite"),
        ({"uniform_arcsec": "1"}, "finite number"),
        ({"night_common_arcsec": -0.1}, "at least 0"),
    ],
)
def test_wrong_choices(choice: dict, words: str) -> None:
    with pytest.raises(CaseError, match=words):
        ErrorModel(**choice)


def test_words() -> None:
    noise = ErrorModel().apply(arc())
    assert noise.to_dict()["n_nights"] == 2 and "station G96" in str(noise)
    assert ErrorModel().to_dict()["scheme"] == "stated-then-table" and "scale = 1" in str(
        ErrorModel()
    )
