"""How fast a large PSV file is read, beside the C reader of pandas on the same text.

    python -m tests.benchmarks.ingest_speed [rows] [blocks]

Prints both times, their ratio (the aim is at most 3, validation included) and the peak memory of
each, every reading in a process of its own; then the same records in so many blocks, each with its
header and keyword row. What pandas takes depends on whether pyarrow is installed, with which it
makes no Python object of a text. The records are invented.
"""

import csv
import importlib.util
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
BLOCKS = 10_000
HEADER = """\
# observatory
! mpcCode {code}
# submitter
! name A. Nobody
# measurers
! name A. Nobody
# telescope
! design Reflector
! aperture 1.5
! detector CCD
"""
AIM = 3.0


def write_sample(path: Path, rows: int, blocks: int = 0) -> None:
    """A file of invented records of one object, without a header or in blocks with one each."""
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
        stream.write("# version=2022\n" if blocks else f"# version=2022\n{NAMES}\n")
        for i, (code, when, ra, dec, (rms_ra, rms_dec), mag) in enumerate(
            zip(*columns, strict=True)
        ):
            if blocks and i % -(-rows // blocks) == 0:
                stream.write(f"{HEADER.format(code=code)}{NAMES}\n")
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
    blocks = int(sys.argv[2]) if len(sys.argv) > 2 else BLOCKS
    with tempfile.TemporaryDirectory() as folder:
        path, many = Path(folder) / "sample.psv", Path(folder) / "blocks.psv"
        write_sample(path, rows)
        write_sample(many, rows, blocks)
        size = path.stat().st_size / 2**20
        idle = measure("none", path)[2]
        runs = [
            (measure("pandas", path), measure("ngbound", path), measure("ngbound", many))
            for _ in range(3)
        ]
    arrow = "with" if importlib.util.find_spec("pyarrow") else "without"
    print(f"{rows} rows, {size:.0f} MB, {arrow} pyarrow")
    print(f"a process that reads nothing takes {idle:.0f} MB")
    best = [[min(run[who][k] for run in runs) for k in range(3)] for who in range(3)]
    readers = ("pandas", "ngbound", f"in {blocks} blocks")
    for reader, (wall, cpu, peak) in zip(readers, best, strict=True):
        print(
            f"{reader:16s} {wall:6.2f} s by the clock, {cpu:6.2f} s of the processor; "
            f"peak {peak:.0f} MB, {(peak - idle) / size:.1f} times the file"
        )
    print(
        f"ratio {best[1][0] / best[0][0]:.2f} by the clock, {best[1][1] / best[0][1]:.2f} of the "
        f"processor; the aim is {AIM:g} or less"
    )


if __name__ == "__main__":
    main()
