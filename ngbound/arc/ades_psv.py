"""ADES in pipe-separated values (PSV): read and write; imports errors and this room.

Follows A Concise Description of ADES (version 2022, 2 May 2024), section 5. ``#`` is no comment
mark: it opens a header. There is no quoting. A second keyword row ends the block before it, and its
records then stand without a header.
"""

import csv
import difflib
import io
import warnings
from dataclasses import dataclass, field

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from ngbound.arc.ades_rules import (
    COLUMNS,
    CONTEXT_ELEMENTS,
    PREC_ANGLE,
    PREC_TIME,
    VERSIONS,
    kind_of_columns,
)
from ngbound.arc.fields import format_times, plain_number
from ngbound.arc.observations import Arc, Context, ObjectArray, Records, concatenate
from ngbound.arc.whole_file import PathLike, write_whole
from ngbound.errors import ArcError, NgboundWarning


@dataclass
class _Block:
    """Data rows under one keyword row."""

    names: list[str]
    names_line: int
    context: int
    rows: list[str] = field(default_factory=list)
    spans: list[tuple[int, int]] = field(default_factory=list)

    def add(self, rows: list[str], first_line: int) -> None:
        """Put consecutive lines of the file under the keyword row."""
        self.rows.extend(rows)
        self.spans.append((first_line, first_line + len(rows)))

    def lines(self) -> NDArray[np.int64]:
        """Line number of each row."""
        return np.concatenate([np.arange(a, b, dtype=np.int64) for a, b in self.spans])


def psv_records(text: str, source: str) -> Records:
    """Records of a PSV text.

    Parameters
    ----------
    text : str
        The whole file, decoded.
    source : str
        Name for messages.

    Raises
    ------
    ArcError
        For anything that breaks the form; the message names line and column.
    """
    version, contexts, blocks = _split(text, source)
    blocks = [b for b in blocks if b.rows]
    if not blocks:
        raise ArcError(
            f"{source}: there is no observation in it; an arc needs at least one.", file=source
        )
    parts, sizes, kinds, lines, numbers = [], [], [], [], []
    for block in blocks:
        kinds.append(np.full(len(block.rows), _kind(block, source), dtype=object))
        parts.append(_cells(block, source))
        sizes.append(len(block.rows))
        lines.append(block.lines())
        numbers.append(np.full(len(block.rows), block.context, dtype=np.int64))
    kind = np.concatenate(kinds)
    return Records(
        source=source,
        text=concatenate(parts, sizes),
        kind=kind,
        line=np.concatenate(lines),
        block=np.concatenate(numbers),
        set_aside=np.full(len(kind), "", dtype=object),
        contexts=contexts,
        strict=version == "2022",
    )


def _is_keyword_row(line: str) -> bool:
    first, *rest = line.split("|", 1)
    if not _begins_a_name(first):
        return False
    return all(_begins_a_name(token) for token in "".join(rest).split("|")) if rest else bool(first)


def _begins_a_name(token: str) -> bool:
    token = token.strip()
    return not token or token[0] == "_" or (token[0].isascii() and token[0].isalpha())


def _split(text: str, source: str) -> tuple[str, tuple[Context, ...], list[_Block]]:
    version = ""
    contexts: list[list[tuple[str, str, list[tuple[str, str]]]]] = []
    blocks: list[_Block] = []
    block: _Block | None = None
    in_header = False
    raw_lines = text.split("\n")
    special = [i for i, raw in enumerate(raw_lines) if not raw[:1].isdigit()]
    ends = [*special[1:], len(raw_lines)] if special else []
    if not special or special[0] > 0:
        version = _version(raw_lines[0].strip(), source, 1)
    for index, end in zip(special, ends, strict=True):
        number, line = index + 1, raw_lines[index].strip()
        rows = raw_lines[index + 1 : end]
        first = line[:1]
        if not line:
            pass
        elif not version:
            version = _version(line, source, number)
        elif first == "#":
            if not in_header:
                contexts.append([])
                in_header, block = True, None
            name, _, rest = line[1:].strip().partition(" ")
            _check_element(name, None, source, number)
            if rest.strip() and name != "fundingSource":
                raise ArcError(
                    f"{source}, line {number}: the header line {line[:60]!r} carries text after "
                    f"{name!r}; only fundingSource does. "
                    "Put the text on a line of its own, as in '! name text' (for a comment: '# "
                    "comment', then '! line text').",
                    file=source,
                    line=number,
                )
            contexts[-1].append((name, rest.strip(), []))
        elif first == "!":
            if not in_header:
                raise ArcError(
                    f"{source}, line {number}: a line that begins with '!' must follow a line that "
                    "begins with '#'. "
                    "Add the '#' line that it belongs to.",
                    file=source,
                    line=number,
                )
            name, _, rest = line[1:].strip().partition(" ")
            parent = contexts[-1][-1]
            _check_element(parent[0], name, source, number)
            parent[2].append((name, rest.strip()))
        elif (first.isalpha() or first in "_|") and _is_keyword_row(line):
            names = [token.strip() for token in line.split("|")]
            _check_names(names, source, number)
            if block is not None and not block.rows:
                raise ArcError(
                    f"{source}, line {number}: this is a second keyword row with no record after "
                    "the first one "
                    f"(line {block.names_line}). Remove one of them.",
                    file=source,
                    line=number,
                )
            block = _Block(names, number, len(contexts) - 1 if in_header else -1)
            blocks.append(block)
            in_header = False
        else:
            rows, number = [line, *rows], number - 1
        if rows and block is None:
            if not version:
                version = _version(rows[0].strip(), source, number + 1)
            raise ArcError(
                f"{source}, line {number + 1}: a record stands before any keyword row. "
                "Put the row of column names (permID|mode|stn|...) above it.",
                file=source,
                line=number + 1,
            )
        if rows and block is not None:
            block.add(rows, number + 1)
    frozen = tuple(tuple((n, t, tuple(c)) for n, t, c in context) for context in contexts)
    return version, frozen, blocks


def _version(line: str, source: str, number: int) -> str:
    compact = "".join(line.split())
    if not compact.startswith("#version="):
        raise ArcError(
            f"{source}, line {number}: the first line of a PSV file must be '# version=2022' (or "
            f"2017), not {line[:40]!r}. "
            "Add it.",
            file=source,
            line=number,
        )
    version = compact.removeprefix("#version=")
    if version not in VERSIONS:
        raise ArcError(
            f"{source}, line {number}: the ADES version {version!r} is not known; it must be "
            f"{' or '.join(VERSIONS)}. Correct it.",
            file=source,
            line=number,
            value=version,
        )
    return version


def _check_element(name: str, child: str | None, source: str, number: int) -> None:
    allowed = tuple(CONTEXT_ELEMENTS) if child is None else CONTEXT_ELEMENTS[name]
    asked = name if child is None else child
    if asked not in allowed:
        where = "a header" if child is None else f"the header element {name}"
        near = difflib.get_close_matches(asked, allowed, n=1)
        hint = (
            f"Did you mean {near[0]}?"
            if near
            else f"Use one of {', '.join(allowed) or 'no child at all'}."
        )
        raise ArcError(
            f"{source}, line {number}: {asked!r} is not an element of {where}. {hint}",
            file=source,
            line=number,
            value=asked,
        )


def _check_names(names: list[str], source: str, number: int) -> None:
    if "" in names:
        raise ArcError(
            f"{source}, line {number}: column {names.index('') + 1} of the keyword row has no "
            "name. "
            "Name it, or remove the surplus '|'.",
            file=source,
            line=number,
        )
    for name in names:
        if name not in COLUMNS:
            near = difflib.get_close_matches(name, list(COLUMNS), n=3, cutoff=0.5)
            hint = f"did you mean {' or '.join(near)}?" if near else "see the list of ADES columns."
            raise ArcError(
                f"{source}, line {number}: the column {name!r} is not an ADES column; {hint}",
                file=source,
                line=number,
                column=name,
            )
    doubled = [name for i, name in enumerate(names) if name in names[:i]]
    if doubled:
        raise ArcError(
            f"{source}, line {number}: the column {doubled[0]} stands twice in the keyword row. "
            "Remove one.",
            file=source,
            line=number,
            column=doubled[0],
        )


def _kind(block: _Block, source: str) -> str:
    kind = kind_of_columns(set(block.names))
    if kind is None:
        missing = [
            c for c in ("stn", "mode", "obsTime", "ra", "dec", "astCat") if c not in block.names
        ]
        raise ArcError(
            f"{source}, line {block.names_line}: the column {missing[0] if missing else 'obsTime'} "
            "is missing from the keyword row; "
            "optical records need mode, stn, obsTime, ra, dec and astCat (other kinds: see the "
            "ADES description). Add it.",
            file=source,
            line=block.names_line,
            column=missing[0] if missing else "obsTime",
        )
    alien = [c for c in block.names if kind not in COLUMNS[c].kinds]
    if alien:
        raise ArcError(
            f"{source}, line {block.names_line}: the column {alien[0]} does not belong to records "
            f"of the kind {kind}. "
            "Remove it, or put the records of the other kind under a keyword row of their own.",
            file=source,
            line=block.names_line,
            column=alien[0],
        )
    return kind


def _cells(block: _Block, source: str) -> dict[str, ObjectArray]:
    width = len(block.names)
    counts = (
        np.fromiter((row.count("|") for row in block.rows), dtype=np.int64, count=len(block.rows))
        + 1
    )
    if (counts > width).any():
        row = int(np.argmax(counts > width))
        raise ArcError(
            f"{source}, line {block.lines()[row]}: the record has {counts[row]} cells, the keyword "
            f"row (line {block.names_line}) "
            f"{width} names. Remove the surplus '|', or name the column.",
            file=source,
            line=block.lines()[row],
        )
    if (counts < width).any():
        row = int(np.argmax(counts < width))
        warnings.warn(
            f"{source}, line {block.lines()[row]}: the record has {counts[row]} cells, the keyword "
            f"row {width} names; "
            f"the missing ones are taken as empty ({int((counts < width).sum())} such records).",
            NgboundWarning,
            stacklevel=2,
        )
    text = "\n".join(block.rows)
    simple = text.isascii() and not any(c in text for c in "\t\v\f\r\x1c\x1d\x1e\x1f")
    if simple:
        text = _without_padding(text)
    frame = pd.read_csv(
        io.StringIO(text),
        sep="|",
        header=None,
        names=range(width),
        dtype=object,
        quoting=csv.QUOTE_NONE,
        na_filter=False,
        skip_blank_lines=False,
        engine="c",
        encoding="utf-8",
        index_col=False,
    )
    out: dict[str, ObjectArray] = {}
    for i, name in enumerate(block.names):
        column = frame[i].to_numpy(dtype=object)
        if not simple or (counts < width).any():
            cleaned = [c.strip() if isinstance(c, str) else "" for c in column]
            column = np.array(cleaned, dtype=object)
        out[name] = column
    return out


def _without_padding(text: str) -> str:
    """The text without the blanks beside pipes and line ends."""
    for padded, bare in ((" |", "|"), ("| ", "|"), (" \n", "\n"), ("\n ", "\n")):
        for width in (16, 4, 1):
            longer = padded.replace(" ", " " * width)
            while longer in text:
                text = text.replace(longer, bare)
    return text.strip(" ")


# --------------------------------------------------------------------------- writing


def write_psv(arc: Arc, path: PathLike, *, version: str = "2022") -> None:
    """Write every record of an arc as PSV, headers included, in one step (a failure leaves no
    half-written file).

    Values that version 2022 does not allow in their old spelling (leading zeros, surplus decimals)
    are respelled. Positions
    that were reported in sexagesimal form are written in degrees, with their resolution in
    precTime, precRA and precDec.
    """
    if version not in VERSIONS:
        raise ArcError(
            f"The ADES version {version!r} is not known; it must be {' or '.join(VERSIONS)}.",
            value=version,
        )
    write_whole(path, psv_text(arc, version))


def psv_text(arc: Arc, version: str = "2022") -> str:
    """The PSV text of an arc."""
    pieces = [f"# version={version}"]
    for block, _, _, columns in grouped_cells(arc):
        if block >= 0:
            pieces.extend(_header_lines(arc.contexts[block]))
        names = [c for c in COLUMNS if c in columns]
        pieces.append("|".join(names))
        pieces.extend("|".join(cells) for cells in zip(*(columns[c] for c in names), strict=True))
    return "\n".join(pieces) + "\n"


def _header_lines(context: Context) -> list[str]:
    lines = []
    for name, text, children in context:
        lines.append(f"# {name} {text}".rstrip())
        lines.extend(f"! {child} {value}".rstrip() for child, value in children)
    return lines


def grouped_cells(arc: Arc) -> list[tuple[int, str, np.ndarray, dict[str, ObjectArray]]]:
    """Runs of records of one block and kind: (block, kind, row positions, filled ADES columns as
    texts)."""
    table = arc.table
    if len(table) == 0:
        raise ArcError("There is no observation to write; an arc needs at least one.")
    block, kind = table["block"].to_numpy(), table["kind"].to_numpy(dtype=object)
    change = np.flatnonzero((block[1:] != block[:-1]) | (kind[1:] != kind[:-1])) + 1
    cells = _ades_cells(arc)
    runs = []
    for rows in np.split(np.arange(len(table)), change):
        mine = {c: v[rows] for c, v in cells.items() if kind[rows[0]] in COLUMNS[c].kinds}
        runs.append(
            (
                int(block[rows[0]]),
                str(kind[rows[0]]),
                rows,
                {c: v for c, v in mine.items() if (v != "").any()},
            )
        )
    return runs


def _ades_cells(arc: Arc) -> dict[str, ObjectArray]:
    """All ADES columns of an arc as texts that the standard allows."""
    table, n = arc.table, len(arc.table)
    cells: dict[str, ObjectArray] = {}
    for name, rule in COLUMNS.items():
        if name not in table:
            continue
        column = table[name]
        if rule.form in ("text", "time"):
            cells[name] = np.array(
                [v if isinstance(v, str) else "" for v in column.to_numpy(dtype=object)],
                dtype=object,
            )
        else:
            values = column.to_numpy(dtype=float)
            cells[name] = np.array(
                ["" if v != v else _number(v, rule.places) for v in values], dtype=object
            )
    optical = (table["kind"] == "optical").to_numpy(dtype=bool)
    occultation = (table["kind"] == "occultation").to_numpy(dtype=bool)
    steps_dec = table["digits_dec_arcsec"].to_numpy(dtype=float)
    ra_text, dec_text = (
        table["raText"].to_numpy(dtype=object),
        table["decText"].to_numpy(dtype=object),
    )
    for name, texts in (
        ("ra", ra_text),
        ("dec", dec_text),
        ("raStar", ra_text),
        ("decStar", dec_text),
    ):
        if name in cells:
            mine = occultation if name.endswith("Star") else optical
            cells[name] = np.array(
                [
                    _angle(t, v) if m else ""
                    for t, v, m in zip(texts, table[name].to_numpy(dtype=float), mine, strict=True)
                ],
                dtype=object,
            )
    sexagesimal = optical & np.array([" " in t or ":" in t for t in ra_text], dtype=bool)
    if sexagesimal.any():
        cos = np.abs(np.cos(table["dec_rad"].to_numpy()))
        ra_step = table["digits_ra_arcsec"].to_numpy() / np.maximum(cos, 1e-9) / 15.0
        for name, values, steps in (
            ("precTime", table["digits_time_s"].to_numpy() / 0.0864, PREC_TIME),
            ("precRA", ra_step, PREC_ANGLE),
            ("precDec", steps_dec, PREC_ANGLE),
        ):
            had = cells.get(name, np.full(n, "", dtype=object))
            cells[name] = np.array(
                [
                    _step(v, steps) if s and not h else h
                    for v, s, h in zip(values, sexagesimal, had, strict=True)
                ],
                dtype=object,
            )
    cells["obsTime"] = _times(arc)
    if "mag" in cells:
        bare = (cells["mag"] != "") & (cells["band"] == "")
        cells["band"] = np.where(bare, "UNK", cells["band"])
    named = cells["permID"] != ""
    for name in ("provID", "artSat", "trkSub"):
        if name in cells:
            named |= cells[name] != ""
    if not named.all():
        label = "".join(c for c in arc.name if c.isalnum())[:8] or "object"
        cells["trkSub"] = np.where(named, cells["trkSub"], label)
    if "stn" in cells and "mode" in cells:
        cells["mode"] = np.where(optical & (cells["mode"] == ""), "UNK", cells["mode"])
    return cells


def _number(value: float, places: int) -> str:
    text = plain_number(value)
    if "." in text and len(text.split(".")[1]) > places:
        return plain_number(value, places)
    return text


def _angle(text: str, value: float) -> str:
    """The reported decimal text in the spelling of 2022; degrees with nine decimals when it was not
    decimal."""
    if text and set(text) <= set("+-.0123456789"):
        whole, point, places = text.lstrip("+-").partition(".")
        if len(places) <= 9:
            return ("-" if text[0] == "-" else "") + (whole.lstrip("0") or "0") + point + places
    rounded = plain_number(value, 9)
    return "0.000000000" if rounded.startswith("360.") else rounded


def _step(value: float, allowed: tuple[float, ...]) -> str:
    """The smallest allowed resolution that is not finer than the one found."""
    for step in allowed:
        if step >= value * (1.0 - 1e-9):
            return plain_number(step)
    return plain_number(allowed[-1])


def _times(arc: Arc) -> ObjectArray:
    table = arc.table
    texts = table["obsTime"].to_numpy(dtype=object).copy()
    long = np.array(["." in t and len(t) > 27 for t in texts], dtype=bool)
    if long.any():
        day, sec = table["utc_day"].to_numpy()[long], table["utc_sec"].to_numpy()[long]
        texts[long] = format_times(day, sec, np.full(int(long.sum()), 6))
    return texts
