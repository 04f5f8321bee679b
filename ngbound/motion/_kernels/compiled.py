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
        rules: dict[str, Any] = {"error_model": "numpy", "fastmath": fastmath, "nogil": nogil}
        try:
            made = njit(cache=True, **rules)(function)
        except RuntimeError:  # numba finds no folder that it may write to
            return njit(**rules)(function)
        kept = _kept(made)
        if kept is not None:
            kept._source_stamp = MARK
        return made

    return compiled


def is_compiled(made: Any) -> bool:
    """Whether a kernel has been compiled from the present files, now or by an earlier run, or needs
    no compiling (NUMBA_DISABLE_JIT)."""
    if getattr(made, "signatures", True):
        return True
    index = getattr(_kept(made), "_load_index", dict)
    return bool(index())


def kept_in(made: Any) -> str:
    """The folder for the compiled code of a kernel; "" where it is not kept."""
    return str(getattr(getattr(made, "stats", None), "cache_path", None) or "")
