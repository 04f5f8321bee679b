"""The decorator of all kernels: compiled by numba, and kept until any file of this folder changes.

numba keeps compiled code with a mark of the kernel's own file, so that a change in a file it calls
would go unseen. Here the mark is a hash of all files of the folder. Imports numba alone.
"""

import hashlib
from collections.abc import Callable
from pathlib import Path
from typing import Any

from numba import njit


def folder_mark(folder: Path) -> str:
    """A hash of the contents of the Python files of a folder."""
    digest = hashlib.sha256()
    for path in sorted(folder.glob("*.py")):
        digest.update(path.name.encode() + b"\0" + path.read_bytes() + b"\0")
    return digest.hexdigest()


MARK = folder_mark(Path(__file__).parent)


def _kept(kernel: Any) -> Any:
    """numba's record of what is kept of a kernel, or None where there is none."""
    return getattr(getattr(kernel, "_cache", None), "_cache_file", None)


def kernel(
    fastmath: bool | set[str] = False, nogil: bool = False
) -> Callable[[Callable[..., Any]], Any]:
    """``numba.njit`` with NumPy's rules for division, kept until a file of this folder changes."""

    def compiled(function: Callable[..., Any]) -> Any:
        made = njit(cache=True, error_model="numpy", fastmath=fastmath, nogil=nogil)(function)
        kept = _kept(made)
        if kept is not None:
            kept._source_stamp = MARK
        return made

    return compiled


def is_compiled(made: Any) -> bool:
    """Whether a kernel has been compiled from the present files, now or by an earlier run."""
    kept = _kept(made)
    return bool(made.signatures) or (kept is not None and bool(kept._load_index()))
