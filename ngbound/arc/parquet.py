"""Tables in Parquet with notes in their metadata, for arcs; imports errors and this room's files.

The file is an ordinary Parquet table in ADES column names; what is no column (source, label,
headers, stations) stands as JSON in its metadata under the key "ngbound". Needs the PyPI package
pyarrow (the extra "parquet").
"""

import importlib.util
import io
import json
from collections.abc import Iterable
from pathlib import Path
from typing import Any

import pandas as pd

from ngbound.arc.whole_file import PathLike, read_whole, write_whole
from ngbound.errors import ArcError

KEY = "ngbound"


def write_table(table: pd.DataFrame, notes: dict[str, Any], path: PathLike) -> None:
    """Write a table and its notes (JSON-able) in one step; ArcError without pyarrow."""
    _need_pyarrow()
    table = table.copy()
    table.attrs = {KEY: json.dumps(notes)}
    buffer = io.BytesIO()
    table.to_parquet(buffer, engine="pyarrow")
    write_whole(path, buffer.getvalue())


def read_table(
    path: PathLike, needed: Iterable[str], known: Iterable[str]
) -> tuple[pd.DataFrame, dict[str, Any], str]:
    """A table that `write_table` wrote, its notes, and the name of the file for messages.

    Raises ArcError without pyarrow, for a file that is no Parquet, and for a table that lacks the
    notes or one of the columns ``needed`` or has one that is not ``known``.
    """
    _need_pyarrow()
    content = read_whole(path)
    source = str(Path(path))
    try:
        table = pd.read_parquet(io.BytesIO(content), engine="pyarrow")
        notes = json.loads(table.attrs.get(KEY, "null"))
    except (OSError, ValueError, KeyError, TypeError) as error:
        raise ArcError(
            f"{source}: this is no Parquet file that can be read "
            f"({str(error).splitlines()[0] if str(error) else type(error).__name__}). Write it "
            "again with Arc.to_parquet.",
            file=source,
        ) from error
    missing = [c for c in needed if c not in table]
    if missing or not isinstance(notes, dict):
        raise ArcError(
            f"{source}: the Parquet file holds no arc of ngbound (it lacks "
            f"{missing[0] if missing else 'its metadata'}). Read it with pandas and give the "
            "table to Arc.from_frame.",
            file=source,
        )
    known = set(known)
    strange = [str(c) for c in table if c not in known]
    if strange:
        raise ArcError(
            f"{source}: the column {strange[0]!r} is not a column of an arc. Leave it out.",
            file=source,
            column=strange[0],
        )
    table.attrs = {}
    return table, notes, source


def _need_pyarrow() -> None:
    if importlib.util.find_spec("pyarrow") is None:
        raise ArcError(
            "Parquet needs the package pyarrow, which is not installed; install it with "
            "pip install 'ngbound[parquet]', or write PSV instead."
        )
