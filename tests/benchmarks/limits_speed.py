"""Speed of posterior and injections beside the plain twin, in one run.

    python -m tests.benchmarks.limits_speed [--file data_demo/quiet.psv] [--no-twin]

Warm: the arc is fitted and everything compiled before the clock starts. The plain twin evaluates
the same likelihood with SciPy's DOP853 and jplephem (dense output, light time, tangent plane,
whitening); its time for the whole job is extrapolated from a few evaluations. An injection costs it
a Gauss-Newton fit with and without thrust: three sweeps each, a sweep being one evaluation and one
more for each parameter.
"""

import argparse
import time
from dataclasses import replace
from pathlib import Path

import numpy as np
from scipy.integrate import solve_ivp

from ngbound.arc import read_arc
from ngbound.constants import C_AU_D
from ngbound.fit import Fit, fit_orbit
from ngbound.limits import (
    detection_threshold,
    inject_and_recover,
    sample_posterior,
    upper_limit,
)
from ngbound.motion import Sight, Thrust, residuals
from tests.benchmarks.plain_twin import right_hand_side
from tests.limits.arcs import CLASSES, fitted

LIGHT_TIME_SWEEPS = 4


def twin_chi2(fit: Fit, theta: np.ndarray) -> float:
    """chi2 of one parameter vector, the plain way."""
    records, hood = fit.records.subset(fit.keep), fit.neighbourhood
    tau = records.tdb_d - hood.epoch_d
    reach = 2.0 * float(np.max(np.linalg.norm(hood.sight.rho_au, axis=1))) / C_AU_D
    derivative = right_hand_side(theta[6:], asteroids=True)
    legs = [
        solve_ivp(
            derivative, (hood.epoch_d, hood.epoch_d + end), theta[:6], method="DOP853",
            rtol=1e-12, atol=1e-14, dense_output=True,
        ).sol
        for end in (tau.min() - reach, max(tau.max(), 1.0))
    ]  # fmt: skip

    def state(at: np.ndarray) -> np.ndarray:
        back, ahead = legs[0](hood.epoch_d + at), legs[1](hood.epoch_d + at)
        return np.where(at < 0.0, back, ahead).T

    emitted = tau.copy()
    for _ in range(LIGHT_TIME_SWEEPS):
        rho = state(emitted)[:, :3] - records.observer_au
        emitted = tau - np.linalg.norm(rho, axis=1) / C_AU_D
    here = state(emitted)
    seen = residuals(Sight(here[:, :3] - records.observer_au, here[:, 3:], emitted), records)
    return float(np.sum(fit.noise.mask(fit.keep).whiten(seen.ravel()) ** 2))


def measure(name: str, fit: Fit, twin: bool) -> None:
    """Both jobs on one fit."""
    print(f"\n{name}: {fit.n_obs} records")
    fit.chi2_many(np.tile(fit.theta, (64, 1)))
    begin = time.perf_counter(), time.process_time()
    posterior = sample_posterior(fit, seed=1)
    upper_limit(posterior)
    spent = time.perf_counter() - begin[0], time.process_time() - begin[1]
    least = min(posterior.ess[c] for c in [*fit.names[6:], "|A|"])
    print(f"  posterior and limit: {least:.0f} effective samples from {posterior.evaluations} "
          f"exact orbits, {spent[0]:.2f} s wall, {spent[1]:.2f} s CPU")  # fmt: skip
    threshold = detection_threshold(fit)
    pushed = threshold.worst.value * threshold.worst_direction
    inject_and_recover(fit, pushed, n=64, seed=1)
    for words, choice in (("", {}), (", outlier rule included", {"reject": True})):
        begin = time.perf_counter(), time.process_time()
        found = inject_and_recover(fit, pushed, n=2000, seed=2, **choice)
        done = time.perf_counter() - begin[0], time.process_time() - begin[1]
        print(f"  2000 complete injections{words}: {done[0]:.2f} s wall, {done[1]:.2f} s CPU; "
              f"power {found.declared}")  # fmt: skip
    if not twin:
        return
    begin = time.perf_counter(), time.process_time()
    n = 3
    values = [twin_chi2(fit, fit.theta) for _ in range(n)]
    each = (time.process_time() - begin[1]) / n
    sweeps = 3 * (1 + 6 + 1 + fit.theta.size)
    print(f"  plain twin: {each:.2f} s CPU for one orbit (chi2 {values[0]:.3f}, here "
          f"{fit.chi2:.3f}); the posterior would take it "
          f"{each * posterior.evaluations / 3600:.1f} h "
          f"and the injections {each * 2000 * sweeps / 3600:.0f} h")  # fmt: skip


def measure_curved(span_d: float, n_nights: int, per_night: int) -> None:
    """The posterior of a short near-Earth arc with three components, which bends and strays."""
    kind = replace(
        CLASSES["near-Earth, 60 days"], span_d=span_d, n_nights=n_nights, per_night=per_night
    )
    fit = fitted(kind)
    begin = time.perf_counter(), time.process_time()
    posterior = sample_posterior(fit, seed=1, prior="flat-components")
    spent = time.perf_counter() - begin[0], time.process_time() - begin[1]
    some = posterior.samples[:: max(1, len(posterior.samples) // 512)]
    print(f"near-Earth, {span_d:g} days, {fit.n_obs} records: {min(posterior.ess.values()):.0f} "
          f"effective samples in {spent[0]:.1f} s wall, {spent[1]:.1f} s CPU; acceptance "
          f"{posterior.acceptance:.2f}, autocorrelation {max(posterior.tau.values()):.1f} steps, "
          f"strays {100.0 * fit.neighbourhood.strays(some).mean():.1f} % of one reference, "
          f"{100.0 * fit.atlas.strays(some).mean():.1f} % of the atlas")  # fmt: skip


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--file", type=Path, help="an arc of your own, such as the demo's")
    parser.add_argument("--no-twin", action="store_true")
    choice = parser.parse_args()
    if choice.file is not None:
        arc = read_arc(choice.file)
        push = fit_orbit(arc, Thrust("inverse-square"), initial=fit_orbit(arc))
        measure(arc.name, push, not choice.no_twin)
    for name in ("hyperbolic, 90 days", "main belt, 10 years"):
        measure(name, fitted(CLASSES[name]), not choice.no_twin)
    print()
    for span_d, n_nights, per_night in ((40.0, 20, 10), (30.0, 15, 10), (25.0, 12, 4)):
        measure_curved(span_d, n_nights, per_night)


if __name__ == "__main__":
    main()
