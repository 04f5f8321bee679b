"""How fast a large PSV file is read, beside the C reader of pandas on the same text.

    python -m tests.benchmarks.ingest_speed [rows]

Prints both times, their ratio (the aim is at most 3, validation included) and the peak memory of
each, every reading in a process of its own. The records are invented.
"""

import csv
import resource
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
import pandas as pd

from ngbound.arc import read_arc

NAMES = "permID|trkSub|mode|stn|obsTime|ra|dec|rmsRA|rmsDec|astCat|mag|band"
SEED = 20240301
STATIONS = ("G96", "703", "F51", "I41", "T05", "W84", "568", "309")
AIM = 3.0


def write_sample(path: Path, rows: int) -> None:
    """A file of invented records of one object."""
    rng = np.random.default_rng(SEED)
    micro = np.sort(rng.integers(0, 20 * 365 * 86400 * 1000, rows))
    stamps = np.datetime_as_string(
        np.datetime64("2004-01-01T00:00:00.000") + micro.astype("timedelta64[ms]"), unit="ms"
    )
    stn = np.array(STATIONS)[rng.integers(0, len(STATIONS), rows)]
    columns = (
        stn,
        stamps,
        rng.uniform(0.0, 360.0, rows),
        rng.uniform(-90.0, 90.0, rows),
        rng.uniform(0.05, 0.9, (rows, 2)),
        rng.uniform(15.0, 23.0, rows),
    )
    with path.open("w", encoding="utf-8", newline="\n") as stream:
        stream.write(f"# version=2022\n{NAMES}\n")
        for code, when, ra, dec, (rms_ra, rms_dec), mag in zip(*columns, strict=True):
            stream.write(
                f"654321||CCD|{code}|{when}Z|{ra:.6f}|{dec:.5f}|{rms_ra:.3f}|{rms_dec:.3f}"
                f"|Gaia2|{mag:.1f}|V\n"
            )


def timed(reader: str, path: Path) -> None:
    """One reading in this process; prints rows, wall and processor seconds, peak memory in MB."""
    wall, cpu = time.perf_counter(), time.process_time()
    rows = 0
    if reader == "pandas":
        rows = len(pd.read_csv(path, sep="|", skiprows=1, engine="c", quoting=csv.QUOTE_NONE))
    elif reader == "ngbound":
        rows = len(read_arc(path))
    wall, cpu = time.perf_counter() - wall, time.process_time() - cpu
    peak_mb = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(f"{rows} {wall:.3f} {cpu:.3f} {peak_mb:.0f}")


def measure(reader: str, path: Path) -> tuple[float, float, float]:
    """The same in a fresh process: wall seconds, processor seconds, peak memory in MB."""
    done = subprocess.run(
        [sys.executable, "-m", "tests.benchmarks.ingest_speed", "--child", reader, str(path)],
        check=True,
        capture_output=True,
        text=True,
    )
    _, wall, cpu, peak = (float(word) for word in done.stdout.split())
    return wall, cpu, peak


def main() -> None:
    """Measure both in turn, three times; the best of each counts."""
    if sys.argv[1:2] == ["--child"]:
        timed(sys.argv[2], Path(sys.argv[3]))
        return
    rows = int(sys.argv[1]) if len(sys.argv) > 1 else 1_000_000
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "sample.psv"
        write_sample(path, rows)
        size = path.stat().st_size / 2**20
        idle = measure("none", path)[2]
        runs = [(measure("pandas", path), measure("ngbound", path)) for _ in range(3)]
    print(f"{rows} rows, {size:.0f} MB; a process that reads nothing takes {idle:.0f} MB")
    best = [[min(run[who][k] for run in runs) for k in range(3)] for who in range(2)]
    for reader, (wall, cpu, peak) in zip(("pandas", "ngbound"), best, strict=True):
        print(
            f"{reader:8s} {wall:6.2f} s by the clock, {cpu:6.2f} s of the processor; "
            f"peak {peak:.0f} MB, {(peak - idle) / size:.1f} times the file"
        )
    print(
        f"ratio {best[1][0] / best[0][0]:.2f} by the clock, {best[1][1] / best[0][1]:.2f} of the "
        f"processor; the aim is {AIM:g} or less"
    )


if __name__ == "__main__":
    main()
