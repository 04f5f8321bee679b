"""The batch of neighbours against the adaptive integrator, its slow twin."""

import numpy as np
import pytest

from ngbound.motion import ForceModel, Neighbourhood, Thrust, Window, design_matrix, integrate_track
from tests.motion.orbits import (
    BELT,
    HYPERBOLA,
    geocentric_records,
    neighbourhood,
    white_factors,
)
from tests.units import arcsec, mas

CASES = {
    "belt": (BELT, 365.0, 180.0, "inverse-square"),
    "hyperbola through perihelion": (HYPERBOLA, 120.0, 60.0, "water-ice"),
    "hyperbola from the start": (HYPERBOLA, 120.0, 0.0, "co-5au"),
    "belt, ten years": (BELT, 3650.0, 1800.0, "inverse-square"),
}


def cloud(near: Neighbourhood, factor: float, m: int, seed: int = 2) -> np.ndarray:
    """Parameter vectors from the linear posterior, times a factor."""
    p = near.theta.size
    design = design_matrix(near.sight, near.records, near.partials).reshape(-1, p) / (0.3 * arcsec)
    scale = np.abs(design).max(axis=0)
    cov = np.linalg.inv((design / scale).T @ (design / scale)) / np.outer(scale, scale)
    draws = np.random.default_rng(seed).standard_normal((m, p))
    return near.theta + factor * draws @ np.linalg.cholesky(cov).T


@pytest.mark.parametrize("name", CASES)
@pytest.mark.parametrize("factor", [1.0, 3.0, 10.0])
def test_batch_meets_the_adaptive_twin(name: str, factor: float) -> None:
    state, days, epoch, law = CASES[name]
    near, _ = neighbourhood(state, days, epoch, law=law)
    thetas = cloud(near, factor, 64)
    # strays go to the twin itself and would prove nothing here
    thetas = thetas[~near.strays(thetas)][:5]
    assert len(thetas) == 5
    chi2, seen = near.chi2(thetas, want_residuals=True)
    for i, theta in enumerate(thetas):
        truth, places = near.chi2_alone(theta)
        assert np.abs(seen[i] - places).max() < 0.01 * mas
        assert chi2[i] == pytest.approx(truth, rel=1e-6, abs=1e-3)


@pytest.mark.parametrize("days", [3.0, 10.0, 30.0])
@pytest.mark.parametrize("size", [1e-4, 1e-3, 1e-2, 3e-2])
def test_short_arc_with_wide_offsets(days: float, size: float) -> None:
    # the light time of a lane differs by seconds, and so does the speed it moves with meanwhile
    near, _ = neighbourhood(BELT, days, 0.5 * days, n=12)
    rng = np.random.default_rng(5)
    scale = size * np.array([1.0, 1.0, 1.0, 1e-2, 1e-2, 1e-2, 0.0, 0.0, 0.0])
    thetas = near.theta + rng.standard_normal((48, 9)) * scale
    thetas = thetas[~near.strays(thetas)][:6]
    if size < 1e-2 or days < 10.0:
        assert len(thetas) > 0
    if len(thetas):
        _, seen = near.chi2(thetas, want_residuals=True)
        for i, theta in enumerate(thetas):
            assert np.abs(seen[i] - near.chi2_alone(theta)[1]).max() < 0.02 * mas


def test_wanderers_are_recognised() -> None:
    near, _ = neighbourhood(BELT, 365.0, 180.0)
    assert not near.strays(cloud(near, 1.0, 32)).any()
    far = cloud(near, 1.0, 32)
    far[:, 0] += 0.05
    assert near.strays(far).all()


def test_result_does_not_depend_on_threads_or_company() -> None:
    near, track = neighbourhood(BELT, 365.0, 180.0)
    thetas = cloud(near, 3.0, 40)
    one = Neighbourhood.around(
        track, near.records, near.whitening, near.thrust, "RTN", near.forces, threads=1
    )
    two = Neighbourhood.around(
        track, near.records, near.whitening, near.thrust, "RTN", near.forces, threads=2
    )
    assert np.array_equal(one.chi2(thetas), two.chi2(thetas))
    alone = np.array([one.chi2(theta[None])[0] for theta in thetas[:4]])
    assert one.chi2(thetas)[:4] == pytest.approx(alone, abs=1e-9)


def test_fewer_components_hold_the_others() -> None:
    near, track = neighbourhood(BELT, 365.0, 180.0)
    radial = Neighbourhood.around(
        track, near.records, near.whitening, near.thrust, "R", near.forces
    )
    full = near.theta.copy()
    full[6] += 1e-9
    assert radial.chi2(full[:7]) == pytest.approx(near.chi2(full), rel=1e-12)


def test_orbit_that_cannot_be_integrated_has_infinite_chi2() -> None:
    near, _ = neighbourhood(BELT, 365.0, 180.0, n=20)
    bad = np.array([near.theta, near.theta, near.theta])
    bad[1, :3] *= 0.02
    bad[1, 3:6] = 0.0
    bad[2, 0] = np.nan
    chi2 = near.chi2(bad)
    assert np.isfinite(chi2[0]) and np.isinf(chi2[1]) and np.isinf(chi2[2])


def test_shared_errors_are_taken_off() -> None:
    near, track = neighbourhood(BELT, 365.0, 180.0, n=30)
    n = 30
    sigma, common = 0.3 * arcsec, 0.2 * arcsec
    b = np.zeros((2 * n, 1))
    b[0:20:2, 0] = common
    u, s, _ = np.linalg.svd(b / sigma, full_matrices=False)
    modes = (np.sqrt(s**2 / (1 + s**2)) * u).T
    with_modes = Neighbourhood.around(
        track, near.records, white_factors(n, sigma), near.thrust, "RTN", near.forces, modes=modes
    )
    thetas = cloud(near, 2.0, 3)
    chi2, seen = with_modes.chi2(thetas, want_residuals=True)
    cov = sigma**2 * np.eye(2 * n) + b @ b.T
    for i in range(3):
        r = seen[i].ravel()
        assert chi2[i] == pytest.approx(r @ np.linalg.solve(cov, r), rel=1e-9)
        assert with_modes.chi2_alone(thetas[i])[0] == pytest.approx(chi2[i], rel=1e-6)


def test_distance_window_is_left_to_the_adaptive_integrator() -> None:
    window = Window.between_distances(0.0, 0.6)
    thrust = Thrust(A=(1e-7, 2e-8, 1e-8), window=window)
    forces = ForceModel()
    track = integrate_track(0.0, HYPERBOLA, -1.0, 61.0, thrust, forces)
    records = geocentric_records(track, 0.0, 60.0, 40, 0.3 * arcsec)
    near = Neighbourhood.around(
        track, records, white_factors(40, 0.3 * arcsec), thrust, "RTN", forces
    )
    thetas = cloud(near, 3.0, 4)
    assert near.strays(thetas).all()
    chi2 = near.chi2(thetas)
    assert chi2 == pytest.approx([near.chi2_alone(theta)[0] for theta in thetas])
    assert near.chi2(near.theta) == pytest.approx(near.chi2_alone(near.theta)[0])
