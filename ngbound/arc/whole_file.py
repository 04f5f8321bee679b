"""Whole files: read any (gzip too) with a clear sentence when it cannot be, write in one step;
imports errors only."""

import difflib
import gzip
import os
import tempfile
import zlib
from pathlib import Path

from ngbound.errors import ArcError

PathLike = str | os.PathLike[str]
MAX_BYTES = 2_000_000_000
"""Largest text (bytes, after decompression) that is read unless a caller raises the limit."""


def read_whole(path: PathLike, *, max_bytes: int = MAX_BYTES) -> bytes:
    """Content of a file, decompressed when it is gzip.

    Raises ArcError for a missing path (with near names), a directory, an empty or too large file, a
    broken gzip.
    """
    place = Path(path)
    if place.is_dir():
        raise ArcError(
            f"{place}: this is a directory; give the file with the observations.", file=str(place)
        )
    if not place.exists():
        here = place.parent
        names = [p.name for p in here.iterdir()] if here.is_dir() else []
        near = difflib.get_close_matches(place.name, names, n=3, cutoff=0.5)
        hint = f" Did you mean {' or '.join(near)}?" if near else " Check the path."
        raise ArcError(f"{place}: there is no such file.{hint}", file=str(place), near=near)
    try:
        with place.open("rb") as stream:
            head = stream.read(2)
            stream.seek(0)
            if head == b"\x1f\x8b":
                with gzip.GzipFile(fileobj=stream) as unzipped:
                    content = unzipped.read(max_bytes + 1)
            else:
                content = stream.read(max_bytes + 1)
    except (gzip.BadGzipFile, EOFError, zlib.error) as error:
        raise ArcError(
            f"{place}: the gzip file is broken ({error}); get it again.", file=str(place)
        ) from error
    except OSError as error:
        raise ArcError(
            f"{place}: the file cannot be read ({error.strerror or error}); check its permissions.",
            file=str(place),
        ) from error
    if len(content) > max_bytes:
        raise ArcError(
            f"{place}: the file holds more than {max_bytes} bytes, the limit; raise max_bytes or "
            "split it.",
            file=str(place),
        )
    if not content[:1000].strip() and not content.strip():
        raise ArcError(
            f"{place}: the file is empty; give a file with observations.", file=str(place)
        )
    return content


def write_whole(path: PathLike, content: str | bytes) -> None:
    """Write a file in one step: a failure leaves the old file, or none. Text is UTF-8, gzip when
    the name ends in .gz."""
    place = Path(path)
    data = content.encode("utf-8") if isinstance(content, str) else content
    if place.suffix == ".gz":
        data = gzip.compress(data, mtime=0)
    try:
        handle, temporary = tempfile.mkstemp(dir=place.parent, prefix=f".{place.name}.")
    except OSError as error:
        raise ArcError(
            f"{place}: the file cannot be written ({error.strerror}); choose an existing folder.",
            file=str(place),
        ) from error
    try:
        with os.fdopen(handle, "wb") as stream:
            stream.write(data)
        os.chmod(temporary, 0o644)
        os.replace(temporary, place)
    except OSError as error:
        Path(temporary).unlink(missing_ok=True)
        raise ArcError(
            f"{place}: the file cannot be written ({error.strerror}).", file=str(place)
        ) from error
