"""A process that is killed again and again: run as ``python -m tests.limits.kill_and_resume``.

Makes a fit once, then for each job (sampling, injection) forks a child that works with a checkpoint
and kills it at a random instant, several times; the last run is let to its end and compared with an
uninterrupted one. Prints one JSON line.
"""

import argparse
import json
import os
import signal
import tempfile
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from ngbound.limits import inject_and_recover, sample_posterior
from tests.limits.arcs import CLASSES, fitted


def killed_after(job: Callable[[Path | None], Any], path: Path, seconds: float) -> bool:
    """Whether a forked child that does the work was still at it when it was killed."""
    child = os.fork()
    if child == 0:
        job(path)
        os._exit(0)
    time.sleep(seconds)
    os.kill(child, signal.SIGKILL)
    _, status = os.waitpid(child, 0)
    return os.WIFSIGNALED(status)


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--kills", type=int, default=10)
    parser.add_argument("--seed", type=int, default=1)
    choice = parser.parse_args()
    random = np.random.default_rng(choice.seed)
    kind = replace(CLASSES["comet, 200 days through perihelion"], n_nights=16, per_night=4)
    fit = fitted(kind)
    # one thread: a forked child has none of its parent's others
    object.__setattr__(fit.neighbourhood, "threads", 1)
    jobs: dict[str, Callable[[Path | None], Any]] = {
        "sampling": lambda path: sample_posterior(fit, seed=3, target_ess=20000, checkpoint=path),
        "injection": lambda path: inject_and_recover(
            fit, np.zeros(3), n=1500, seed=4, checkpoint=path
        ),
    }
    told: dict[str, Any] = {}
    with tempfile.TemporaryDirectory() as folder:
        for name, job in jobs.items():
            job(None)
            begin = time.perf_counter()
            whole = job(None)
            length = time.perf_counter() - begin
            path = Path(folder) / f"{name}.npz"
            kills, sizes = 0, []
            for _ in range(choice.kills):
                kills += killed_after(job, path, float(random.uniform(0.0, 0.6 * length)))
                if path.exists():
                    with np.load(path) as stored:
                        sizes.append(len(stored[stored.files[1]]))
            resumed = job(path)
            told[name] = {
                "kills": kills,
                "sizes": sizes,
                "same": whole.to_dict() == resumed.to_dict(),
                "files": sorted(each.name for each in Path(folder).iterdir()),
            }
            path.unlink()
    print(json.dumps(told))


if __name__ == "__main__":
    main()
