"""Linear (or slightly curved) problems whose every answer is known, in place of a fitted arc."""

from dataclasses import dataclass, replace

import numpy as np

STATE = ("x", "y", "z", "vx", "vy", "vz")


@dataclass(frozen=True)
class ToyFit:
    """chi2 = chi2_min + |L'(theta - theta_hat + bend)|^2, F = L L'; the bend is quadratic."""

    components: str
    names: tuple[str, ...]
    theta: np.ndarray
    normal: np.ndarray
    n_state: int
    chi2: float
    dof: int
    curvature: float = 0.0
    fails_beyond: float = np.inf
    noise_dof: int | None = None

    def chi2_many(self, thetas: np.ndarray) -> np.ndarray:
        d = np.asarray(thetas) - self.theta
        z = d @ np.linalg.cholesky(self.normal)
        z = z + self.curvature * np.roll(z, 1, axis=1) ** 2
        square = np.sum(z * z, axis=1)
        return np.where(square > self.fails_beyond, np.nan, self.chi2 + square)

    def at(self, A: np.ndarray) -> "ToyFit":
        """The same problem with another estimate of the thrust."""
        theta = self.theta.copy()
        theta[self.n_state :] = A
        return replace(self, theta=theta)


def isotropic(
    k: int = 3, sigma: float = 1e-9, A: float | np.ndarray = 0.0, n_state: int = 6, dof: int = 400
) -> ToyFit:
    """Orbit and thrust uncorrelated, ``sigma`` on each thrust component."""
    scales = np.r_[[1e-7] * 3, [1e-9] * 3][:n_state]
    return ToyFit(
        components="RTN"[:k],
        names=(*STATE[:n_state], *[f"A{i + 1}" for i in range(k)]),
        theta=np.r_[np.ones(n_state), np.zeros(k) + A],
        normal=np.diag(np.r_[scales**-2.0, np.full(k, sigma**-2.0)]),
        n_state=n_state,
        chi2=float(dof),
        dof=dof,
    )


def correlated(
    seed: int = 1, k: int = 3, A_sigmas: float = 0.0, curvature: float = 0.0, n: int = 200
) -> ToyFit:
    """A random least-squares problem in 6 + k parameters of realistic scales, correlated."""
    random = np.random.default_rng(seed)
    p = 6 + k
    design = random.standard_normal((n, p)) + 3.0 * random.standard_normal((n, 1))
    design[:, 6:] += design[:, :k] * 2.0
    scales = np.r_[[1e-6] * 3, [1e-8] * 3, [1e-10, 3e-10, 2e-9][:k]]
    design = design / scales
    normal = design.T @ design
    covariance = np.linalg.inv(normal * np.outer(scales, scales)) * np.outer(scales, scales)
    A = A_sigmas * np.sqrt(np.diag(covariance))[6:]
    return ToyFit(
        components="RTN"[:k],
        names=(*STATE, *[f"A{i + 1}" for i in range(k)]),
        theta=np.r_[1.0, -2.0, 0.5, 0.01, 0.002, -0.003, A],
        normal=normal,
        n_state=6,
        chi2=float(n - p),
        dof=n - p,
        curvature=curvature,
    )
