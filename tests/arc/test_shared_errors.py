import numpy as np
import pytest

from ngbound.arc import Noise, SharedErrors
from ngbound.constants import ARCSEC_RAD


def noise_with(shared_count=3, n=9, seed=1):
    rng = np.random.default_rng(seed)
    sigma = rng.uniform(0.2, 0.6, n)
    shared = None
    if shared_count:
        shared = SharedErrors(
            tuple(f"offset {i}" for i in range(shared_count)),
            rng.normal(0.0, 0.4, (2 * n, shared_count)) * ARCSEC_RAD,
            np.full(shared_count, 0.4),
            ("arcsec",) * shared_count,
            ("invented",) * shared_count,
        )
    return Noise(
        sigma,
        sigma * 1.1,
        np.full(n, 0.2),
        np.full(n, 0.1),
        np.arange(n) // 3,
        np.full(n, "stated", dtype=object),
        shared,
    )


def dense(noise):
    shared = noise.shared.matrix
    return noise.covariance_rad2(np.arange(len(noise))) + shared @ shared.T


def test_whitening_is_a_square_root_of_the_inverse_covariance():
    noise = noise_with()
    root = noise.whiten(np.eye(2 * len(noise)))
    assert root.T @ root @ dense(noise) == pytest.approx(np.eye(18), abs=1e-10)


def test_whitening_a_matrix_whitens_its_columns():
    noise = noise_with()
    m = np.random.default_rng(2).normal(size=(18, 4))
    assert noise.whiten(m)[:, 2] == pytest.approx(noise.whiten(m[:, 2]))


def test_chi2_from_the_rows_of_the_modes():
    noise = noise_with()
    residual = np.random.default_rng(3).normal(size=18) * ARCSEC_RAD
    white = noise.whiten_nights(residual)
    rows = noise.mode_rows()
    chi2 = white @ white - np.sum((rows @ white) ** 2)
    assert chi2 == pytest.approx(residual @ np.linalg.solve(dense(noise), residual))
    assert chi2 == pytest.approx(np.sum(noise.whiten(residual) ** 2))
    assert rows.shape == (3, 18) and rows.flags["C_CONTIGUOUS"]


def test_a_mask_carries_the_shared_errors_along():
    noise = noise_with()
    keep = np.array([True, False] * 4 + [True])
    some = noise.mask(keep)
    rows = np.repeat(keep, 2)
    root = some.whiten(np.eye(2 * len(some)))
    assert root.T @ root @ dense(noise)[np.ix_(rows, rows)] == pytest.approx(np.eye(10), abs=1e-10)
    assert noise.mask(np.flatnonzero(keep)).shared.matrix == pytest.approx(some.shared.matrix)


def test_marginalising_equals_fitting_with_priors():
    noise = noise_with()
    rng = np.random.default_rng(4)
    design = rng.normal(size=(18, 2)) * ARCSEC_RAD
    y = rng.normal(size=18) * ARCSEC_RAD
    white = noise.whiten(np.column_stack([design, y]))
    normal = white[:, :2].T @ white[:, :2]
    theta = np.linalg.solve(normal, white[:, :2].T @ white[:, 2])
    wide = noise.whiten_nights(np.column_stack([design, noise.shared.matrix, y]))
    full = wide[:, :5].T @ wide[:, :5] + np.diag([0, 0, 1, 1, 1])
    both = np.linalg.solve(full, wide[:, :5].T @ wide[:, 5])
    assert theta == pytest.approx(both[:2])
    assert np.linalg.inv(normal) == pytest.approx(np.linalg.inv(full)[:2, :2])


def test_without_shared_errors_nothing_changes():
    noise = noise_with(0)
    assert noise.mode_rows() is None and noise.modes is None
    m = np.eye(18)
    assert noise.whiten(m) == pytest.approx(noise.whiten_nights(m))


def test_patterns_without_effect_are_left_out_of_the_modes():
    noise = noise_with(2)
    matrix = np.column_stack([noise.shared.matrix, np.zeros(18), noise.shared.matrix[:, 0]])
    more = SharedErrors(("a", "b", "c", "d"), matrix, np.ones(4), ("s",) * 4, ("x",) * 4)
    wide = Noise(
        noise.sigma_ra_arcsec, noise.sigma_dec_arcsec, noise.corr, noise.night_common_arcsec,
        noise.night, noise.source, more,
    )  # fmt: skip
    assert wide.mode_rows().shape == (2, 18)
    assert noise.scaled(2.0).shared is noise.shared


def test_shared_errors_must_fit_together():
    with pytest.raises(ValueError, match="2 shared errors"):
        SharedErrors(("a", "b"), np.zeros((4, 1)), np.ones(2), ("s", "s"), ("x", "x"))
