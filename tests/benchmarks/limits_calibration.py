"""Do thresholds and limits mean what they say? Counts over complete injections in five arc classes.

    python -m tests.benchmarks.limits_calibration [--n 2000] [--class near-Earth]
        [--part core|more|all] [--out FILE]

For each class: false alarms at 0.27 % and 5 %; power at the stated threshold (0.27 %, 95 %) for one
component alone, for two and for three, along the worst seen direction; the same with the outlier
rule; coverage of the unified interval of an outward radial thrust at zero, half and once the
threshold; coverage of the posterior limit on |A| at those truths and averaged over its prior. Every
injection is fitted again completely, with exact residuals, with and without thrust.
"""

import argparse
import json
import os
import time
import zlib
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
from scipy.stats import chi2

from ngbound.fit import Fit
from ngbound.limits import ExactRefit, Rate, Recovery, inject_and_recover, noncentrality
from tests.limits.arcs import CLASSES, fitted

FALSE_ALARM, POWER, CONFIDENCE = 0.0027, 0.95, 0.95


def rate_at(found: Recovery, false_alarm: float) -> Rate:
    """Share declared at another false-alarm rate."""
    delta = found.delta_chi2[np.isfinite(found.delta_chi2)]
    critical = chi2.isf(false_alarm, len(found.components))
    return Rate(int(np.sum(delta > critical)), len(delta))


def worst(model: ExactRefit) -> np.ndarray:
    """The threshold along the worst seen direction, au/d2."""
    info = model.information
    reach = noncentrality(FALSE_ALARM, POWER, info.k)
    return reach * info.eigenvalues[0] ** -0.5 * info.eigenvectors[:, 0]


def outward(model: ExactRefit, share: float) -> np.ndarray:
    """A share of the threshold of the radial component alone, outward, au/d2."""
    reach = noncentrality(FALSE_ALARM, POWER, 1)
    return np.array([share * reach * model.information.matrix[0, 0] ** -0.5])


def cells(fit: Fit, n: int, seed: int, part: str) -> Iterator[tuple[str, Recovery]]:
    """Every count of one class, one after the other."""

    def count(what: str, model: ExactRefit, A: np.ndarray, **choices: Any) -> tuple[str, Recovery]:
        own = int(np.random.SeedSequence([seed, zlib.crc32(what.encode())]).generate_state(1)[0])
        found = inject_and_recover(model, A, n=n, seed=own, false_alarm=FALSE_ALARM,
                                   confidence=CONFIDENCE, **choices)  # fmt: skip
        return what, found

    if part in ("core", "all"):
        for free in ("RTN", "RT", "R", "T", "N"):
            model = ExactRefit(fit, free=free)
            yield count(f"{free}: no thrust", model, np.zeros(len(free)))
            yield count(f"{free}: threshold, worst direction", model, worst(model))
        model = ExactRefit(fit, free="R")
        for share in (0.0, 0.5, 1.0):
            what = f"R outward: {share:g} of the threshold"
            yield count(what, model, outward(model, share), prior="outward-radial")
    if part in ("rule", "all"):
        for free in ("RTN", "RT", "R", "T", "N"):
            model = ExactRefit(fit, free=free, reject=True)
            yield count(f"{free}, outlier rule: no thrust", model, np.zeros(len(free)))
            what = f"{free}, outlier rule: threshold, worst direction"
            yield count(what, model, worst(model))
    if part in ("more", "all"):
        model = ExactRefit(fit)
        top = 2.0 * float(np.linalg.norm(worst(model)))
        posterior = {"prior": "isotropic-uniform", "upper_au_d2": top}
        for share in (0.0, 0.5, 1.0):
            what = f"RTN posterior limit: {share:g} of the worst threshold"
            yield count(what, model, share * worst(model), **posterior)
        random = np.random.default_rng(seed)
        direction = random.standard_normal((n, 3))
        direction /= np.linalg.norm(direction, axis=1)[:, None]
        truth = direction * random.uniform(0.0, top, n)[:, None]
        yield count("RTN posterior limit: truths drawn from the prior", model, truth, **posterior)
        model = ExactRefit(fit, noise="residuals")
        yield count("RTN, residual nights: no thrust", model, np.zeros(3))
        yield count("RTN, residual nights: threshold, worst direction", model, worst(model))


def share(rate: Rate | None) -> str:
    """A rate in per cent with its binomial interval."""
    if rate is None:
        return f"{'-':>22s}"
    low, high = rate.interval
    return f"{100 * rate.value:6.2f} ({100 * low:5.2f}-{100 * high:6.2f})"


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--n", type=int, default=2000)
    parser.add_argument("--seed", type=int, default=2026)
    parser.add_argument("--class", dest="name", default="")
    parser.add_argument("--part", choices=("core", "rule", "more", "all"), default="all")
    parser.add_argument("--out", type=Path)
    choice = parser.parse_args()
    record = []
    for number, (name, kind) in enumerate(CLASSES.items()):
        if choice.name not in name:
            continue
        fit = fitted(kind)
        print(f"\n{name}: {fit.n_obs} records, {choice.n} arcs in each row; per cent", flush=True)
        print(f"{'':52s} {'declared at 0.27 %':>22s} {'declared at 5 %':>22s} "
              f"{'unified interval':>22s} {'posterior limit':>22s} failed  s (CPU)")  # fmt: skip
        wall, cpu = time.perf_counter(), time.process_time()
        for what, found in cells(fit, choice.n, choice.seed + number, choice.part):
            spent = (time.perf_counter() - wall, time.process_time() - cpu)
            print(f"{what:52s} {share(found.declared)} {share(rate_at(found, 0.05))} "
                  f"{share(found.coverage_unified)} {share(found.coverage_bayes)} "
                  f"{found.n_failed:5d}  {spent[0]:.1f} ({spent[1]:.1f})", flush=True)  # fmt: skip
            record.append({"class": name, "what": what, "wall_s": spent[0], "cpu_s": spent[1],
                           "declared_5_percent": rate_at(found, 0.05).to_dict(),
                           **found.to_dict()})  # fmt: skip
            if choice.out is not None:
                beside = choice.out.with_name(choice.out.name + ".part")
                beside.write_text(json.dumps(record, indent=1))
                os.replace(beside, choice.out)
            wall, cpu = time.perf_counter(), time.process_time()


if __name__ == "__main__":
    main()
