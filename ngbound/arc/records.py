"""Records as text, the way every reader hands them to the checks; imports this room's rules and
fields."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from ngbound.arc.ades_rules import COLUMNS
from ngbound.arc.fields import Packed

ObjectArray = NDArray[np.object_]
FloatArray = NDArray[np.float64]

Context = tuple[tuple[str, str, tuple[tuple[str, str], ...]], ...]
"""One obsContext: (element, its own text, ((child, text), ...)) in the order of the file."""


@dataclass(frozen=True, eq=False)
class Coded:
    """A column of texts (n,) as ``codes`` (n,) into its distinct ``values``."""

    codes: NDArray[np.int64]
    values: ObjectArray

    def texts(self) -> ObjectArray:
        """The column itself."""
        return self.values[self.codes]

    def take(self, rows: Any) -> "Coded":
        """The column at some rows."""
        return Coded(self.codes[rows], self.values)


@dataclass(frozen=True)
class Angles:
    """Positions that a reader has parsed itself: degrees, reported text, resolution in arcsec (RA
    not times cos dec) and s (NaN: what the digits of obsTime say)."""

    ra_deg: FloatArray
    dec_deg: FloatArray
    ra_text: ObjectArray
    dec_text: ObjectArray
    ra_step_arcsec: FloatArray
    dec_step_arcsec: FloatArray
    time_step_s: FloatArray


@dataclass(frozen=True)
class Records:
    """Records as text, before any check.

    ``text`` holds an object array of strings per ADES column ("" where absent); ``kind``, ``line``
    and ``block`` (index into ``contexts``, -1 without) stand one per record; ``set_aside`` is a
    reason, or "". ``version`` is that of ADES whose rules the source declares to keep ("" when it
    declares none: then columns, ranges and what must be there are checked, not the spelling). A
    reader that has a column as codes or as bytes hands them over in ``coded`` and ``packed``, so
    that they need not be made again. ``unstated`` tells where the digits of a column state no
    precision, as those of a JSON number do, which is written without its trailing zeros.
    """

    source: str
    text: Mapping[str, ObjectArray]
    kind: ObjectArray
    line: NDArray[np.int64]
    block: NDArray[np.int64]
    set_aside: ObjectArray
    contexts: tuple[Context, ...] = ()
    angles: Angles | None = None
    version: str = ""
    unit_name: str = "line"
    coded: Mapping[str, Coded] = field(default_factory=dict)
    packed: Mapping[str, Packed] = field(default_factory=dict)
    unstated: Mapping[str, NDArray[np.bool_]] = field(default_factory=dict)


def concatenate(
    parts: Sequence[Mapping[str, ObjectArray]], sizes: Sequence[int]
) -> dict[str, ObjectArray]:
    """Text columns of several blocks under one another, "" where a block lacks a column."""
    names = list(dict.fromkeys(c for part in parts for c in part))
    ordered = [c for c in COLUMNS if c in names] + [c for c in names if c not in COLUMNS]
    return {
        name: np.concatenate(
            [
                part[name] if name in part else np.array([""] * size, dtype=object)
                for part, size in zip(parts, sizes, strict=True)
            ]
        )
        for name in ordered
    }


def join_coded(parts: Sequence[Coded | None], sizes: Sequence[int]) -> Coded:
    """Columns as codes under one another, "" where a part has none."""
    filled = [
        Coded(np.zeros(size, dtype=np.int64), np.array([""], dtype=object))
        if part is None
        else part
        for part, size in zip(parts, sizes, strict=True)
    ]
    place, values = pd.factorize(np.concatenate([part.values for part in filled]))
    first = np.cumsum([0, *(len(part.values) for part in filled[:-1])])
    codes = [place[part.codes + at] for part, at in zip(filled, first, strict=True)]
    return Coded(np.concatenate(codes), np.asarray(values, dtype=object))


def merge_contexts(contexts: Sequence[Context]) -> tuple[tuple[Context, ...], NDArray[np.int64]]:
    """The distinct headers in the order of the file, and where each of the given ones is found
    among them."""
    place: dict[Context, int] = {}
    found = [place.setdefault(context, len(place)) for context in contexts]
    return tuple(place), np.array(found, dtype=np.int64)
