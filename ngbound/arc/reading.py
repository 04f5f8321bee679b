"""`read_arc`: an arc from a file whose format is told by its content; imports errors and this
room."""

import re
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from ngbound.arc.ades_psv import psv_records
from ngbound.arc.ades_xml import xml_records
from ngbound.arc.json_records import json_records
from ngbound.arc.observations import Arc, assemble
from ngbound.arc.records import Records
from ngbound.arc.report80 import HEADER_KEYS, looks_like_80, report80_records
from ngbound.arc.whole_file import MAX_BYTES, PathLike, read_whole
from ngbound.errors import ArcError

CONTROL = re.compile(r"[\x00-\x08\x0b\x0c\x0e-\x1f\x7f\ufffe\uffff]")
CONTROL_BYTES = bytes(b for b in (*range(32), 127) if b not in b"\t\n\r")
FORMATS = "ADES PSV, ADES XML, the 80-column format, or JSON with such records"


def read_arc(
    path: PathLike,
    *,
    object: str | None = None,
    stations: Mapping[str, Any] | None = None,
    max_bytes: int = MAX_BYTES,
) -> Arc:
    """Read the observations of one object.

    Parameters
    ----------
    path : str or path
        ADES PSV or XML (versions 2017 and 2022), 80-column records, or JSON as data services give
        it; gzip or not.
    object : str, optional
        Designation of the object to take when the file holds several.
    stations : mapping, optional
        Own stations ``{code: {longitude_deg, latitude_deg, altitude_m}}``.
    max_bytes : int
        Largest file that is read.

    Returns
    -------
    Arc

    Raises
    ------
    ArcError
        When the file cannot be read or a record breaks a rule; the message names file, line,
        column, value and remedy.
    """
    content = read_whole(path, max_bytes=max_bytes)
    records = records_of(content, str(Path(path)))
    return assemble(records, object=object, stations=stations)


def records_of(content: bytes, source: str) -> Records:
    """Records of a file's content, its format told by the content itself."""
    wide = content[:2] in (b"\xff\xfe", b"\xfe\xff")
    if not wide and b"\x00" in content:
        raise ArcError(f"{source}: this is a binary file; give {FORMATS}.", file=source)
    start = content[:50000].removeprefix(b"\xef\xbb\xbf").lstrip() or content.lstrip()[:1]
    if start[:1] == b"<":
        return xml_records(content.removeprefix(b"\xef\xbb\xbf").lstrip(), source)
    text = _decode(content, source)
    head = text[:50000].lstrip() or text.lstrip()[:50000]
    if head[:1] in "[{":
        return json_records(text, source)
    first_lines = [line for line in head[:20000].split("\n") if line.strip()]
    first = first_lines[0]
    if first.startswith(("#", "!")) or _is_keyword_like(first):
        return psv_records(text, source)
    bodies = [line for line in first_lines if line[:4].rstrip() not in HEADER_KEYS]
    raw_first = next(
        (
            line
            for line in text.split("\n")
            if line.strip() and line[:4].rstrip() not in HEADER_KEYS
        ),
        "",
    )
    if looks_like_80(raw_first) or any(looks_like_80(line) for line in bodies[:20]):
        return report80_records(list(enumerate(text.split("\n"), start=1)), source)
    raise ArcError(
        f"{source}: the format is not recognised (the first line is {first[:60]!r}); give "
        f"{FORMATS}.",
        file=source,
    )


def _is_keyword_like(line: str) -> bool:
    return "|" in line and all(
        token.strip().isalnum() for token in line.split("|") if token.strip()
    )


def _decode(content: bytes, source: str) -> str:
    if content[:2] in (b"\xff\xfe", b"\xfe\xff"):
        raise ArcError(f"{source}: the text is in UTF-16; save it as UTF-8.", file=source)
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = content.count(b"\n", 0, error.start) + 1
        raise ArcError(
            f"{source}, line {line}: byte {content[error.start]:#04x} is not UTF-8 text; save the "
            "file as UTF-8 "
            f"(or give {FORMATS}).",
            file=source,
            line=line,
        ) from error
    if "\r" in text:
        text = text.replace("\r\n", "\n").replace("\r", "\n")
    text = text.removesuffix("\x1a")
    suspect = len(content.translate(None, CONTROL_BYTES)) != len(content) or b"\xef\xbf" in content
    control = CONTROL.search(text) if suspect else None
    if control:
        line = text.count("\n", 0, control.start()) + 1
        raise ArcError(
            f"{source}, line {line}: the control character {control.group()!r} stands in the text; "
            "take it out.",
            file=source,
            line=line,
        )
    return text
