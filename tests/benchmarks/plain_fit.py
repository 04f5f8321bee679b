"""The gravity-only fit of asteroid 12893 beside a plain SciPy + jplephem fit of the same arc.

    python -m tests.benchmarks.plain_fit [--plain-steps 2]

The plain twin is what one writes first: SciPy's DOP853 calling jplephem for every body at every
evaluation, light time by iteration on its dense output, partials by differences. It has no
outlier rule and takes the records that the fast fit kept, and its errors.
"""

import argparse
import time
from collections.abc import Callable
from typing import Any

import numpy as np
from scipy.integrate import solve_ivp

from ngbound.arc import read_arc
from ngbound.constants import AU_KM, C_AU_D
from ngbound.fit import Fit, fit_orbit
from tests.benchmarks.plain_twin import right_hand_side
from tests.external.records_12893 import file_12893

STEPS = np.array([1e-7, 1e-7, 1e-7, 1e-9, 1e-9, 1e-9])
TOLERANCE = 1e-12
MARGIN_D = 1.0


def plain_residuals(fit: Fit, theta: np.ndarray) -> np.ndarray:
    """Observed minus computed (n, 2), radians, of the kept records of a fit."""
    rate = right_hand_side(np.zeros(3), asteroids=True)
    epoch = fit.orbit.epoch_tdb_d
    records = fit.records.subset(fit.keep)
    legs = {
        ahead: solve_ivp(
            rate,
            (epoch, end),
            theta,
            method="DOP853",
            rtol=TOLERANCE,
            atol=1e-14,
            dense_output=True,
        ).sol
        for ahead, end in ((False, records.tdb_d.min() - MARGIN_D), (True, records.tdb_d.max()))
    }
    sent = records.tdb_d.copy()
    for _ in range(4):
        place = np.array([legs[bool(t > epoch)](t)[:3] for t in sent])
        rho = place - records.observer_au
        sent = records.tdb_d - np.linalg.norm(rho, axis=1) / C_AU_D
    local = np.einsum("nij,nj->ni", records.basis, rho)
    return -local[:, :2] / local[:, 2:]


def plain_fit(fit: Fit, start: np.ndarray, steps: int) -> tuple[np.ndarray, list[float]]:
    """Gauss-Newton from a start; the state and the chi2 before each step."""
    kept = fit.noise.mask(fit.keep)
    theta, chi2 = start.copy(), []
    for _ in range(steps):
        seen = plain_residuals(fit, theta).ravel()
        design = np.stack(
            [
                -(plain_residuals(fit, theta + step * unit).ravel() - seen) / step
                for step, unit in zip(STEPS, np.eye(6), strict=True)
            ],
            axis=1,
        )
        white, miss = kept.whiten(design), kept.whiten(seen)
        chi2.append(float(miss @ miss))
        scale = np.linalg.norm(white, axis=0)
        theta = theta + np.linalg.lstsq(white / scale, miss, rcond=None)[0] / scale
    return theta, chi2


def timed(label: str, work: Callable[[], Any]) -> Any:
    """Do it and print how long it took."""
    begun, cpu = time.perf_counter(), time.process_time()
    result = work()
    wall, busy = time.perf_counter() - begun, time.process_time() - cpu
    print(f"{label}: {wall:.1f} s, of it CPU {busy:.1f} s", flush=True)
    return result


def main() -> None:
    """Time them."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--plain-steps", type=int, default=2)
    steps = parser.parse_args().plain_steps
    arc = read_arc(file_12893())
    fit_orbit(arc)
    fit = timed("ngbound from nothing", lambda: fit_orbit(arc))
    timed("ngbound from a known start", lambda: fit_orbit(arc, initial=fit.orbit))
    given = "ngbound, start, errors and records given"
    timed(given, lambda: fit_orbit(arc, initial=fit, noise=fit.noise, reject=False))
    start = fit.theta + np.array([1e-7, -1e-7, 1e-7, 1e-10, 1e-10, -1e-10])
    label = f"plain SciPy + jplephem, {steps} Gauss-Newton steps"
    theta, chi2 = timed(label, lambda: plain_fit(fit, start, steps))
    print(f"chi2 before each step of the plain fit {chi2}, of the fast fit {fit.chi2:.2f}")
    sigma = np.sqrt(np.diag(fit.theta_cov))
    print("plain less fast, in standard errors:", np.round((theta - fit.theta) / sigma, 3))
    print(f"and in km: {np.linalg.norm((theta - fit.theta)[:3]) * AU_KM:.1f}")


if __name__ == "__main__":
    main()
