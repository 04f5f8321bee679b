"""Observations as JSON, the way data services give them: read; imports errors and this room.

Either a list of records, or an object that holds one. A record has an 80-column string under
``original_record`` or ``obs80`` (both lines of a two-line record may be joined in it), or ADES
fields by name in any case. The 80-column text of a whole arc, under one of those keys, is taken
too. Of an angle given as a number and not as a text the digits state no precision.
"""

import json
import warnings
from typing import Any

import numpy as np

from ngbound.arc.ades_rules import COLUMNS, OPTICAL, kind_of_columns
from ngbound.arc.fields import plain_number
from ngbound.arc.records import ObjectArray, Records, concatenate
from ngbound.arc.report80 import report80_records
from ngbound.errors import ArcError, NgboundWarning

KEYS_80 = ("original_record", "obs80", "obs_80")
ANGLES = ("ra", "dec", "raStar", "decStar")
MOST_KEYS = 12
_ADES = {name.lower(): name for name in COLUMNS}


def json_records(text: str, source: str) -> Records:
    """Records of a JSON text; ArcError names the record (counted from 1) and the key."""
    try:
        content = json.loads(text)
    except json.JSONDecodeError as error:
        raise ArcError(
            f"{source}, line {error.lineno}, column {error.colno}: the JSON text is broken "
            f"({error.msg}). Get the file again.",
            file=source,
            line=error.lineno,
        ) from error
    except RecursionError as error:
        raise ArcError(
            f"{source}: the JSON text is nested too deeply to be a list of observations.",
            file=source,
        ) from error
    listed = _find_records(content)
    if isinstance(listed, str):
        return report80_records(list(enumerate(listed.splitlines(), start=1)), source)
    if not listed:
        raise ArcError(
            f"{source}: the JSON text holds no list of observations. Give a list of records with "
            "an 80-column string under "
            f"'{KEYS_80[0]}' or '{KEYS_80[1]}', or with ADES fields.",
            file=source,
        )
    lines: list[tuple[int, str]] = []
    for number, record in enumerate(listed, start=1):
        lowered = {str(k).lower(): v for k, v in record.items()}
        found = next((lowered[k] for k in KEYS_80 if isinstance(lowered.get(k), str)), None)
        if found is not None:
            lines.extend((number, line) for line in found.splitlines())
    if lines:
        if len({n for n, _ in lines}) < len(listed):
            missing = sorted(set(range(1, len(listed) + 1)) - {n for n, _ in lines})[0]
            raise ArcError(
                f"{source}, record {missing}: it has no 80-column string while others have one. "
                "Add it, or take it out.",
                file=source,
                line=missing,
            )
        return report80_records(lines, source, unit_name="record")
    return _ades_records(listed, source)


def _find_records(content: Any) -> list[dict[str, Any]] | str:
    if isinstance(content, list):
        if content and all(isinstance(item, dict) for item in content):
            keys = {str(k).lower() for k in content[0]}
            if (
                len(content) > 1
                or keys & set(KEYS_80)
                and not _whole_text(content[0])
                or "obstime" in keys
            ):
                return content
            return _find_records(content[0])
        return []
    if isinstance(content, dict):
        whole = _whole_text(content)
        lists = [
            value
            for value in content.values()
            if isinstance(value, list) and value and all(isinstance(item, dict) for item in value)
        ]
        observed = {*KEYS_80, "obstime"}
        for value in lists:
            if observed & {str(k).lower() for k in value[0]}:
                return value
        if lists or whole:
            return lists[0] if lists else whole
    return []


def _whole_text(record: dict[str, Any]) -> str:
    """An 80-column text of several lines, "" when there is none."""
    for key, value in record.items():
        if str(key).lower() in KEYS_80 and isinstance(value, str) and "\n" in value.strip():
            return value
    return ""


def _ades_records(listed: list[dict[str, Any]], source: str) -> Records:
    parts: list[dict[str, ObjectArray]] = []
    kinds = np.full(len(listed), OPTICAL, dtype=object)
    unstated = {name: np.zeros(len(listed), dtype=bool) for name in ANGLES}
    strange: dict[str, None] = {}
    for row, record in enumerate(listed):
        cells: dict[str, ObjectArray] = {}
        for key, value in record.items():
            name = _ADES.get(str(key).lower())
            if name is None or isinstance(value, list | dict):
                if value is not None:
                    strange[str(key)] = None
                continue
            if value is None:
                continue
            if name in unstated:
                unstated[name][row] = not isinstance(value, str)
            if isinstance(value, bool):
                text = str(int(value))
            elif isinstance(value, float):
                text = plain_number(value) if np.isfinite(value) else str(value)
            else:
                text = str(value).strip()
            if text:
                cells[name] = np.array([text], dtype=object)
        parts.append(cells)
        kinds[row] = kind_of_columns(set(cells)) or OPTICAL
    if not any(parts):
        raise ArcError(
            f"{source}: the records hold neither an 80-column string nor ADES fields. Give one of "
            "the two.",
            file=source,
        )
    if strange:
        more = f" and {len(strange) - MOST_KEYS} more" if len(strange) > MOST_KEYS else ""
        warnings.warn(
            f"{source}: the records hold keys that are no ADES fields, which were passed over: "
            f"{', '.join(list(strange)[:MOST_KEYS])}{more}.",
            NgboundWarning,
            stacklevel=2,
        )
    n = len(listed)
    return Records(
        source=source,
        text=concatenate(parts, [1] * n),
        kind=kinds,
        line=np.arange(1, n + 1, dtype=np.int64),
        block=np.full(n, -1, dtype=np.int64),
        set_aside=np.full(n, "", dtype=object),
        unit_name="record",
        unstated=unstated,
    )
