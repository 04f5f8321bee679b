"""Work that can be interrupted: arrays in one file, always whole; may import errors.

A file is written beside its place, flushed to the disk and then moved there in one step, so that a
process killed at any instant leaves the last whole file. Each file carries the mark of the problem
it belongs to.
"""

import hashlib
import json
import os
import zipfile
from pathlib import Path
from typing import Any

import numpy as np

from ngbound.errors import SamplingError

FORMAT = 2


def mark_of(arrays: list[np.ndarray], facts: list[Any]) -> str:
    """Fingerprint of a problem: its arrays and its JSON-able choices."""
    digest = hashlib.sha256()
    for array in arrays:
        digest.update(np.ascontiguousarray(array, dtype=float).tobytes())
    digest.update(json.dumps([FORMAT, *facts]).encode())
    return digest.hexdigest()


def save_whole(path: Path, mark: str, arrays: dict[str, Any]) -> None:
    """Write arrays and the mark so that the file is never seen half-written."""
    beside = path.with_name(path.name + ".part")
    with open(beside, "wb") as stream:
        np.savez(stream, mark=np.array(mark), **arrays)
        stream.flush()
        os.fsync(stream.fileno())
    os.replace(beside, path)


def load_whole(path: Path, mark: str, what: str, names: tuple[str, ...]) -> dict[str, np.ndarray]:
    """The arrays ``names`` of a file that `save_whole` wrote for the same problem.

    Raises
    ------
    SamplingError
        If the file is no such file, or belongs to another problem.
    """
    remedy = "Remove that file, or name another one for this run."
    try:
        with np.load(path, allow_pickle=False) as stored:
            found = str(stored["mark"])
            data = {name: stored[name] for name in names}
    except (OSError, ValueError, KeyError, EOFError, zipfile.BadZipFile) as fault:
        raise SamplingError(
            f"The checkpoint {path} cannot be read as {what} of ngbound ({fault}). {remedy}",
            path=str(path),
        ) from fault
    if found != mark:
        raise SamplingError(
            f"The checkpoint {path} belongs to another problem: the fit, the seed or another "
            f"choice differs. {remedy}",
            path=str(path),
        )
    return data
