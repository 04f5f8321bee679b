"""Are orbits found without help, and do their ellipses cover the truth? A study, not a test.

    python -m tests.benchmarks.first_orbit_study --arcs 500 --seed 1

Five classes of orbits, arcs of 5 days to 30 years; independent errors, an error common to each
station-night, timing errors and 5 % gross errors. Every arc is fitted from nothing, gravity only,
with the right error model and again with the common error of the nights left out; arcs of at least
200 days also with thrust. A small version is in tests/fit/test_first_orbit_study.py.

Coverage is counted twice: by the ellipse of linear theory, and by chi2(truth) - chi2(best) of the
exact model, which no linear theory enters; and with the very good records kept, which no outlier
rule knows ("oracle"), so that a fault of the rule would show.

Found: the fit converges, and the truth lies within the 1e-6 region of its ellipse or of the exact
chi2. Refused: an
honest sentence says that the arc determines no orbit. Missed: anything else.
"""

import argparse
import time
from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np
from scipy import stats

from ngbound.arc import ErrorModel
from ngbound.errors import NgboundError
from ngbound.fit import Fit, fit_orbit
from ngbound.motion import Orbit, Thrust
from ngbound.sky import load_ephemeris
from tests.fit.simulated import Truth, orbit_of, simulate, state_error

SPANS_D = (5.0, 10.0, 20.0, 40.0, 90.0, 200.0, 500.0, 1500.0, 4000.0, 11000.0)
LEVELS = (0.683, 0.954, 0.997)
EPOCH = 7305.0
LAST_MJD = 61000.0
"""No arc goes on after this day, so that the rotation of the Earth is known."""
STATIONS = ("568", "G96", "W84")
SIGMA, COMMON, TIMING_S, OUTLIERS = 0.3, 0.2, 0.5, 0.05
RIGHT = ErrorModel(night_common_arcsec=COMMON, timing_s=TIMING_S, catalogue_offsets=False)
WRONG = ErrorModel(night_common_arcsec=0.0, timing_s=0.0, catalogue_offsets=False)
CLASSES = ("belt", "near-earth", "short-period", "long-period", "hyperbolic")


def random_elements(kind: str, rng: np.random.Generator, span_d: float) -> dict[str, float]:
    """Elements of one orbit of a class; it is near perihelion at some time of the arc where that
    decides whether it is seen."""
    out = {"node": rng.uniform(0, 360), "argperi": rng.uniform(0, 360)}
    if kind == "belt":
        a, e = rng.uniform(2.1, 3.3), rng.uniform(0.0, 0.3)
        out |= {"q": a * (1 - e), "e": e, "i": rng.uniform(0, 25)}
    elif kind == "near-earth":
        q, a = rng.uniform(0.5, 1.25), rng.uniform(1.0, 2.8)
        out |= {"q": min(q, 0.95 * a), "e": 1 - min(q, 0.95 * a) / a, "i": rng.uniform(0, 35)}
    elif kind == "short-period":
        q, a = rng.uniform(0.9, 2.5), rng.uniform(2.8, 4.2)
        out |= {"q": q, "e": 1 - q / a, "i": rng.uniform(0, 35)}
    elif kind == "long-period":
        out |= {"q": rng.uniform(0.5, 5.0), "e": 1 - 10 ** rng.uniform(-5, -2)}
        out |= {"i": np.degrees(np.arccos(rng.uniform(-1, 1)))}
    else:
        out |= {"q": rng.uniform(0.5, 4.0), "e": rng.uniform(1.02, 3.5)}
        out |= {"i": np.degrees(np.arccos(rng.uniform(-1, 1)))}
    half = min(span_d, 400.0)
    out["tp"] = EPOCH + (
        rng.uniform(-half, half)
        if kind in ("long-period", "hyperbolic")
        else rng.uniform(-800.0, 800.0)
    )
    return out


def visible_nights(orbit: Orbit, span_d: float, rng: np.random.Generator) -> np.ndarray | None:
    """UTC (MJD) of records in nights with the object away from the Sun and not too far off."""
    start = min(51544 + EPOCH + rng.uniform(-0.5 * span_d, 0.0), LAST_MJD - span_d)
    days = np.arange(np.floor(start), np.floor(start) + span_d + 1.0)
    if len(days) > 3000:
        days = days[:: len(days) // 3000 + 1]
    tdb_d = days - 51544.5
    track = orbit.track(float(tdb_d.min()), float(tdb_d.max()))
    ephemeris = load_ephemeris()
    body, sun = track.at(tdb_d)[:, :3], ephemeris.position_au("sun", tdb_d)
    earth = ephemeris.position_au("earth", tdb_d)
    rho, to_sun = body - earth, sun - earth
    delta, r = np.linalg.norm(rho, axis=1), np.linalg.norm(body - sun, axis=1)
    cosine = np.sum(rho * to_sun, axis=1) / (delta * np.linalg.norm(to_sun, axis=1))
    good = np.flatnonzero((cosine < np.cos(np.radians(50.0))) & (r * delta < 60.0) & (delta > 0.02))
    if len(good) < 3 or days[good[-1]] - days[good[0]] < 0.6 * span_d:
        return None
    count = int(np.clip(rng.integers(4, 9) + np.sqrt(span_d), 4, 60))
    inner = rng.choice(good[1:-1], size=min(count - 2, len(good) - 2), replace=False)
    nights = np.sort(days[np.concatenate([[good[0], good[-1]], inner])])
    # discovered like a real object: one more night close to the first
    extra = days[good[good > good[0]][:2]]
    nights = np.unique(np.concatenate([nights, extra]))
    frames = rng.integers(2, 5, len(nights))
    return np.concatenate(
        [night + 0.15 + 0.012 * np.arange(k) for night, k in zip(nights, frames, strict=True)]
    )


def random_truth(kind: str, span_d: float, rng: np.random.Generator, push: Thrust | None) -> Truth:
    """An arc of a class and length that can be observed."""
    while True:
        try:
            orbit = orbit_of(random_elements(kind, rng, span_d), push, EPOCH)
            when = visible_nights(orbit, span_d, rng)
            if when is None or len(when) < 6:
                continue
            return simulate(
                orbit, when, rng, SIGMA, COMMON, OUTLIERS, rng.uniform(3.0, 30.0), STATIONS,
                timing_s=TIMING_S,
            )  # fmt: skip
        except NgboundError:
            # a collision or an orbit that leaves the ephemeris: another one
            continue


@dataclass
class Tally:
    """Counts of outcomes and squared distances of the truth."""

    outcomes: dict[str, dict[str, int]] = field(default_factory=dict)
    state: list[float] = field(default_factory=list)
    exact: list[float] = field(default_factory=list)
    oracle: list[float] = field(default_factory=list)
    length: list[float] = field(default_factory=list)
    together: list[float] = field(default_factory=list)
    weak: list[float] = field(default_factory=list)
    wrong: list[float] = field(default_factory=list)
    thrust: list[float] = field(default_factory=list)
    thrust_wrong: list[float] = field(default_factory=list)
    good_rejected: int = 0
    gross_kept: int = 0
    gross: int = 0
    records: int = 0
    notes: list[str] = field(default_factory=list)

    def count(self, kind: str, outcome: str) -> None:
        """One more outcome of a class."""
        row = self.outcomes.setdefault(kind, {"found": 0, "refused": 0, "missed": 0})
        row[outcome] += 1

    def total(self, outcome: str) -> int:
        """Outcomes over all classes."""
        return sum(row[outcome] for row in self.outcomes.values())


def distance2(fit: Fit, truth: Truth) -> float:
    """Squared Mahalanobis distance of the true state from the fitted one, of the state alone."""
    off = state_error(fit.theta[:6], truth.orbit, fit.orbit.epoch_tdb_d)
    if not fit.components:
        return float(off @ fit.normal @ off)
    return float(off @ np.linalg.solve(fit.theta_cov[:6, :6], off))


def thrust_distance2(fit: Fit, push: Thrust) -> float:
    """The same of the thrust."""
    off = fit.theta[6:] - push.amounts_au_d2
    return float(off @ np.linalg.solve(fit.theta_cov[6:, 6:], off))


def exact_distance2(fit: Fit, truth: Truth, push: Thrust | None) -> float:
    """chi2 of the true parameters less that of the fitted ones, exact model, kept records."""
    epoch = fit.orbit.epoch_tdb_d
    state = truth.orbit.track(epoch, epoch).at(epoch)[0]
    true = np.concatenate([state, np.zeros(0) if push is None else push.amounts_au_d2])
    return float(fit.chi2_many(true[None])[0]) - fit.chi2


def arcs(count: int, seed: int) -> Iterator[tuple[str, float, np.random.Generator]]:
    """Classes and lengths by turns, each arc with a generator of its own."""
    for number in range(count):
        kind = CLASSES[number % len(CLASSES)]
        span = SPANS_D[(number // len(CLASSES)) % len(SPANS_D)]
        if kind in ("long-period", "hyperbolic"):
            span = min(span, 1500.0)
        yield kind, span, np.random.default_rng([seed, number])


def study(count: int, seed: int, with_thrust: bool = True, say: bool = False) -> Tally:
    """Simulate and fit."""
    tally = Tally()
    for kind, span, rng in arcs(count, seed):
        push = None
        if with_thrust and span >= 200.0:
            push = Thrust("inverse-square", A=tuple(rng.normal(0.0, 3e-9, 3)))
        truth = random_truth(kind, span, rng, push)
        label = f"{kind}, {span:g} d, {len(truth.arc)} records"
        begun = time.perf_counter()
        try:
            fit = fit_orbit(truth.arc, push, RIGHT)
        except NgboundError as error:
            honest = "determine" in str(error)
            tally.count(kind, "refused" if honest else "missed")
            tally.notes.append(f"{label}: {error}")
            continue
        d2 = distance2(fit, truth)
        exact = exact_distance2(fit, truth, push)
        # linear theory may fail on a short arc that its distance error does not give away
        near = min(d2, exact) < stats.chi2.isf(1e-6, 6) or fit.weakness != ""
        tally.count(kind, "found" if near else "missed")
        if not near:
            tally.notes.append(
                f"{label}: distance {np.sqrt(d2):.1f}, chi2/dof {fit.reduced_chi2:.2f}, "
                f"{fit.n_rejected} rejected of {len(truth.arc)}"
            )
        order = np.argsort(
            truth.arc.table["utc_day"].to_numpy() + truth.arc.table["utc_sec"].to_numpy() / 86400.0
        )
        gross = truth.outlier[order]
        if fit.weakness:
            tally.weak.append(d2)
        else:
            tally.state.append(d2)
            tally.length.append(span)
            (tally.exact if push is None else tally.together).append(exact)
            best = fit_orbit(truth.arc, push, RIGHT, initial=fit, reject=False, keep=~gross)
            tally.oracle.append(distance2(best, truth))
        tally.records += len(gross)
        tally.gross += int(gross.sum())
        tally.gross_kept += int((gross & fit.keep).sum())
        tally.good_rejected += int((~gross & ~fit.keep).sum())
        if near and not fit.weakness:
            try:
                bad = fit_orbit(truth.arc, push, WRONG, initial=fit)
            except NgboundError as error:
                tally.notes.append(f"{label}, wrong errors: {error}")
            else:
                tally.wrong.append(distance2(bad, truth))
                if push is not None:
                    tally.thrust_wrong.append(thrust_distance2(bad, push))
        if push is not None and near:
            tally.thrust.append(thrust_distance2(fit, push))
        if say:
            seconds = time.perf_counter() - begun
            print(f"{label}: {np.sqrt(d2):.2f} in {seconds:.1f} s", flush=True)
    return tally


def within(tally: Tally, low: float, high: float) -> list[float]:
    """Squared distances of the true states of arcs of some lengths."""
    pairs = zip(tally.state, tally.length, strict=True)
    return [d2 for d2, length in pairs if low <= length <= high]


def coverage(distances: list[float], dof: int) -> list[tuple[float, float, float]]:
    """(nominal, found, binomial error) at the levels."""
    d2 = np.array(distances)
    out = []
    for level in LEVELS:
        error = np.sqrt(level * (1 - level) / max(len(d2), 1))
        found = float(np.mean(d2 < stats.chi2.ppf(level, dof))) if len(d2) else np.nan
        out.append((level, found, error))
    return out


def report(tally: Tally) -> str:
    """The tables."""
    lines = [f"{'class':14s} found refused missed"]
    for kind, row in tally.outcomes.items():
        lines.append(f"{kind:14s} {row['found']:5d} {row['refused']:7d} {row['missed']:6d}")
    for name, values, dof in (
        ("state, right errors", tally.state, 6),
        *(
            (f"  of arcs of {low:g} to {high:g} d", within(tally, low, high), 6)
            for low, high in ((5, 5), (10, 20), (40, 90), (200, 500), (1500, 11000))
        ),
        ("state, the good records known", tally.oracle, 6),
        ("state of the fits without thrust, exact chi2", tally.exact, 6),
        ("state and thrust together, exact chi2", tally.together, 9),
        ("state, nights' common error ignored", tally.wrong, 6),
        ("thrust, right errors", tally.thrust, 3),
        ("thrust, nights' common error ignored", tally.thrust_wrong, 3),
        ("state of weak orbits (distance known to no better than 10 %)", tally.weak, 6),
    ):
        parts = [
            f"{found:.3f} ({level} +- {error:.3f})" for level, found, error in coverage(values, dof)
        ]
        lines.append(f"{name}, {len(values)} fits: {', '.join(parts)}")
    lines.append(
        f"{tally.records} records: {tally.gross} gross errors, {tally.gross_kept} of them kept; "
        f"{tally.good_rejected} good ones rejected"
    )
    return "\n".join(lines + tally.notes)


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--arcs", type=int, default=500)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--quiet", action="store_true")
    given = parser.parse_args()
    print(report(study(given.arcs, given.seed, say=not given.quiet)))
