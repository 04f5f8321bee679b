"""Where the real records of asteroid 12893 lie: the PyPI package astroquery (extra "test") carries
them among its own test data."""

import importlib.util
from pathlib import Path


def file_12893() -> Path:
    """The file of 1401 records; a test without it fails, it is not passed over."""
    spec = importlib.util.find_spec("astroquery")
    assert spec is not None and spec.origin is not None, "astroquery is missing: see README, Set up"
    return Path(spec.origin).parent / "mpc" / "tests" / "data" / "mpc_obs.dat"
