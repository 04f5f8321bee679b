"""Speed of the propagator beside the plain twin, in one run.

    python -m tests.benchmarks.propagator_speed

Prints, for one main-belt year and for the hyperbola q = 0.25 au, e = 1.2 over 120 days and a year,
with 500 outputs and the 11 bodies of DE440: times, errors against eps = 1e-10 (steps two to five
times shorter), and ratios to the plain twin. The Jacobian (tables, nine columns, 500 outputs) is
set beside one trajectory on the same grid: the adaptive integrator at these steps, which solves the
same collocation on the same nodes, with its 500 outputs. Last, the whole likelihood of a 300-record
arc with 27 bodies, and the operations it takes.
"""

import time
from collections.abc import Callable

import numpy as np

from ngbound.motion import ForceModel, Neighbourhood, Thrust, integrate_track, partials_along
from ngbound.motion._kernels.radau import dense_many, integrate
from ngbound.motion.neighbours import LANES
from tests.benchmarks.plain_twin import plain_track
from tests.motion.orbits import BELT, HYPERBOLA, geocentric_records, neighbourhood, white_factors
from tests.units import arcsec, metre

AMOUNTS = np.array([1e-8, 1e-9, 1e-9])
THRUST = Thrust(A=AMOUNTS)
FORCES = ForceModel(asteroids=False)
METRE_EPS = 1e-3
NAMES = ("x", "y", "z", "vx", "vy", "vz", "A1", "A2", "A3")


def best_of(
    work: Callable[[], object],
    seconds: float = 2.0,
    clock: Callable[[], float] = time.process_time,
) -> float:
    """Shortest of the repeats that fit into some seconds, by default of processor time, which other
    programs on the machine disturb least.
    """
    work()
    shortest, spent = np.inf, 0.0
    while spent < seconds:
        start = clock()
        work()
        once = clock() - start
        shortest, spent = min(shortest, once), spent + once
    return shortest


def adaptive(
    state: np.ndarray, days: float, outputs: np.ndarray, eps: float
) -> tuple[float, float, int]:
    """Time, error and steps of the compiled adaptive integrator with its 500 outputs."""
    track = integrate_track(0.0, state, 0.0, days, THRUST, FORCES, eps)
    reference = integrate_track(0.0, state, 0.0, days, THRUST, FORCES, 1e-10).at(outputs)
    error = np.abs(track.at(outputs) - reference)[:, :3].max()
    out = np.empty((outputs.size, 6))
    none = np.zeros(0)

    def work() -> None:
        _, n, start, length, begin, power, _, _ = integrate(
            track.tab, track.push, track.physics, 0.0, state, days, eps, 40.0, none, True, 256
        )
        dense_many(start, length, begin, power, n, True, outputs, out)

    assert track.ahead is not None
    return best_of(work), error, track.ahead.n


def batch_of(
    state: np.ndarray, days: float, n: int, forces: ForceModel, lanes: int, threads: int
) -> tuple[Neighbourhood, float]:
    """A neighbourhood with ``n`` records and the time of one likelihood in it."""
    near, track = neighbourhood(state, days, 0.5 * days, n=n, forces=forces)
    near = Neighbourhood.around(
        track, near.records, near.whitening, near.thrust, "RTN", forces, threads=threads
    )
    rng = np.random.default_rng(3)
    thetas = near.theta + rng.standard_normal((lanes, 9)) * np.array(
        [1e-7] * 3 + [1e-9] * 3 + [1e-11] * 3
    )
    assert not near.strays(thetas).any()
    clock = time.process_time if threads == 1 else time.perf_counter
    return near, best_of(lambda: near.chi2(thetas), clock=clock) / lanes


def operations(near: Neighbourhood, sweeps: int = 3) -> float:
    """Floating-point operations of one likelihood, counted from the loops of the kernel."""
    legs = [leg for leg in (near.partials.back, near.partials.ahead) if leg is not None]
    steps = sum(leg.h_d.size for leg in legs)
    records = len(near.records)
    force = 2 * 3 * (3 + 3 + 3 + 18 + 6) + 60
    guess = 8 * 2 * 6 * 9
    sweep = 7 * (2 * 2 * 3 * 8 + force)
    step = guess + 8 * force + sweeps * sweep + 2 * 2 * 3 * 8
    record = 2 * 3 * 9 + 70 + 2 * 3
    return steps * step + records * record


def main() -> None:
    """Print the table."""
    for name, state, days in (
        ("main belt, 1 yr", BELT, 365.25),
        ("hyperbola, 120 d", HYPERBOLA, 120.0),
        ("hyperbola, 1 yr", HYPERBOLA, 365.25),
    ):
        outputs = np.linspace(0.0, days, 500)
        plain = plain_track(state, days, outputs, AMOUNTS, False)
        twin = best_of(
            lambda state=state, days=days, outputs=outputs: plain_track(
                state, days, outputs, AMOUNTS, False
            ),
            4.0,
        )
        best = integrate_track(0.0, state, 0.0, days, THRUST, FORCES, 1e-10).at(outputs)
        print(
            f"{name}: plain twin {twin * 1e3:.0f} ms, "
            f"{np.abs(plain - best)[:, :3].max() / metre:.2f} m"
        )
        single = {}
        for label, eps in (("metre", METRE_EPS), ("default", ForceModel().eps)):
            spent, error, steps = adaptive(state, days, outputs, eps)
            single[label] = spent
            print(
                f"  adaptive, {label:8s} {spent * 1e6:7.0f} us ({steps} steps, "
                f"{error / metre:.1e} m): "
                f"{twin / spent:,.0f} times"
            )
        track = integrate_track(0.0, state, 0.0, days, THRUST, FORCES)
        coarse = integrate_track(0.0, state, 0.0, days, THRUST, FORCES, METRE_EPS)

        def jacobian(track=track, coarse=coarse, outputs=outputs) -> None:
            partials_along(track, NAMES, coarse).at_offset(outputs)

        spent = best_of(jacobian)
        print(
            f"  9-parameter Jacobian at 500 outputs {spent * 1e6:.0f} us, "
            f"{spent / single['metre']:.2f} times one trajectory on the same grid"
        )
        records = geocentric_records(track, 0.0, days - 1.0, 500, 0.3 * arcsec)
        near = Neighbourhood.around(
            track, records, white_factors(500, 0.3 * arcsec), THRUST, "RTN", FORCES, threads=1
        )
        spread = np.array([1e-7] * 3 + [1e-9] * 3 + [1e-11] * 3)
        many = near.theta + np.random.default_rng(4).standard_normal((16 * LANES, 9)) * spread
        assert not near.strays(many).any()
        lane = best_of(lambda near=near, many=many: near.chi2(many)) / many.shape[0]
        print(
            f"  batch with 500 places and chi2, {lane * 1e6:.1f} us a trajectory: "
            f"{twin / lane:,.0f} times"
        )
    for name, state, days in (
        ("main belt, 1 yr", BELT, 365.0),
        ("hyperbola, 120 d", HYPERBOLA, 120.0),
    ):
        for threads in (1, 2):
            near, spent = batch_of(state, days, 300, ForceModel(), 64 * LANES, threads)
            work = operations(near)
            print(
                f"likelihood of 300 records, 27 bodies, {name}, {threads} thread(s): "
                f"{1 / spent:,.0f} a second, "
                f"{work / 1e3:.0f} thousand operations each, {work / spent / 1e9:.1f} Gflop/s"
            )


if __name__ == "__main__":
    main()
