"""Whether the compiled kernels are at hand, so that a first run can say why it takes longer;
imports the kernels.

numba keeps compiled code beside the source, or, where that folder cannot be written, in the user's
cache folder (or where NUMBA_CACHE_DIR points), or, where neither can be, not at all; files appear
whole, so processes that start at once do not disturb each other.
"""

from pathlib import Path

from ngbound.motion._kernels.compiled import is_compiled, kept_in
from ngbound.motion._kernels.grid import tabulate, variations
from ngbound.motion._kernels.neighbours import batch
from ngbound.motion._kernels.radau import dense_many, integrate

KERNELS = (integrate, dense_many, tabulate, variations, batch)


def compiled_code_folder() -> Path | None:
    """The folder that holds, or will hold, the compiled code; None where no folder can be
    written."""
    folder = kept_in(integrate)
    return Path(folder) if folder else None


def missing_kernels() -> list[str]:
    """Names of the main kernels that have yet to be compiled from the present files."""
    missing = []
    for kernel in KERNELS:
        if not is_compiled(kernel):
            source = Path(kernel.py_func.__code__.co_filename).stem
            missing.append(f"{source}.{kernel.py_func.__qualname__}")
    return missing


def compile_notice() -> str:
    """A sentence for a first run, or an empty text when the kernels are at hand."""
    if not missing_kernels():
        return ""
    folder = compiled_code_folder()
    if folder is None:
        return (
            "The numerical kernels are being compiled, which takes about a minute in every run: no "
            "folder for compiled code can be written. Let NUMBA_CACHE_DIR name one that can."
        )
    return (
        "This is the first run here: the numerical kernels are being compiled, "
        f"which takes about a minute and is kept for later runs in {folder}."
    )
